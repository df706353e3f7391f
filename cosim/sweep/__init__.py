"""Sweeps of a testbench: what is to be run, the engines that run it, the archive, what it tells.

table.py        the table [sweep] as it stands in the file
axes.py         what its corners, grids, samples and perturbations move
samples.py      Monte Carlo draws and the mismatch of transistors
identity.py     hashes of all that determines a run
trimming.py     what is trimmed before the runs, and where
planned_run.py  one run of a plan
plan.py         the product of trims, corners, grids and samples, run by run
planning.py     making the plan, with all that can be found wrong before anything runs
estimate.py     what it will take
batches.py      what an engine carries
engine.py       sending batches to any executor
local.py        processes of this machine
cluster.py      a Dask scheduler, or the jobs of a batch system
trims.py        trims being found, and put into the runs
simulated.py    what runs share, and what is made of it for each
work.py         what a worker does with a batch
record.py       what is archived besides the table of runs
keeping.py      which runs are kept whole
run.py          a sweep from its plan to its archive, and resuming it
shares.py       the archives of jobs that divide a sweep among themselves
repetition.py   runs of an archived sweep made again
goal.py         what the runs are judged by
intervals.py    yields with confidence intervals
statistics.py   the summary: yield, quantiles, worst runs, corners
trim_comparison.py  yields with and without trims, and what a trim leaves
sensitivity.py  swings of runs that move one number at a time
correlation.py  influences from samples
columns.py      names of the table's columns
csv_export.py   the table for spreadsheets
"""
