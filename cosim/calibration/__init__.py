"""Calibration through the netlist: a deck's own knobs, solved for by running it again.

`table` reads [calibrate] and finds its knobs in the testbench, `gate_runs` and `readout_runs` run
it at given values, `model` is what is known around the best of them, `vector_search` (gates) and
`surrogate_search` (readouts) look for the best, `judgement` says what limits it, `result` declares
what comes out, and `trim` puts all of it together.
"""
