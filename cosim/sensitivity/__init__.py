"""What each number of a testbench and its deck does to the metric, one at a time.

`table` reads [sensitivity] and chooses the numbers, `changed_gates` and `changed_readouts` run a
testbench with some of its numbers changed, `response` turns what came out into derivatives and
costs, `result` declares what comes out, and `study` puts all of it together.
"""
