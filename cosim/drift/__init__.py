"""What the time since the last trim does to a gate, and how long a trim lasts.

`table` reads [drift] and its sources, `reading` their texts, `structure` has how far each process
has moved after a time, `response` what its moves do to the gate, `outlook` the mean and the spread
of the infidelity, `interval` how long it keeps a limit, `result` declares what comes out, and
`study` puts all of it together.
"""
