"""A sweep on the nodes of a cluster: Slurm starts the workers, this script feeds them.

Prints the job script; with --submit it asks for the jobs, runs the sweep and cancels them at the
end. Started again after an interruption it goes on where it was. What must hold: the files of
the testbench stand at the same path on all nodes, the package is installed there, and the nodes
reach this computer over the network. Put your own queue, account and modules below.
"""

import argparse
from pathlib import Path

from cosim.sweep.cluster import JobRequest, job_script, queue_engine
from cosim.sweep.run import SweepState, run_sweep

HERE = Path(__file__).parent
REQUEST = JobRequest(
    cores=4,
    memory="8GB",
    time_limit="02:00:00",
    queue="",  # your partition
    account="",  # your account
    directives=(),  # further lines of the header, such as "--exclusive"
    prologue=(),  # shell lines before the workers start, such as "module load ngspice"
)


def main() -> None:
    """Print the job script, or submit and sweep."""
    words = argparse.ArgumentParser(description=__doc__)
    words.add_argument("--testbench", type=Path, default=HERE / "sweep_corners.toml")
    words.add_argument("--archive", type=Path, default=Path("sweep.h5"))
    words.add_argument("--jobs", type=int, default=4)
    words.add_argument("--submit", action="store_true")
    given = words.parse_args()
    if not given.submit:
        print(job_script("slurm", REQUEST))
        return
    engine = queue_engine("slurm", REQUEST, given.jobs)
    state = run_sweep(given.testbench, given.archive, engine=engine, resume=True, on_progress=tell)
    print(f"{state.finished} of {state.planned} runs in {given.archive}, failed: {state.failed}")


def tell(state: SweepState) -> None:
    """Print a line when something has been written."""
    if state.made:
        print(f"\r{state.planned - state.missing} of {state.planned} runs", end="", flush=True)


if __name__ == "__main__":
    main()
