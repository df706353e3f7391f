"""Sweeps of a testbench: what is to be run, and the engines that run it.

table.py      the table [sweep] as it stands in the file
keys.py       numbers and settings of a testbench by dotted keys
samples.py    Monte Carlo draws and the mismatch of transistors
identity.py   hashes of all that determines a run
plan.py       the product of corners, grids and samples
batches.py    what an engine carries
engine.py     sending batches to any executor
local.py      processes of this machine
cluster.py    a Dask scheduler, or the jobs of a batch system
"""
