"""A real Dask scheduler and its workers, each in a process of its own, over TCP."""

import os
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

ROOT = Path(__file__).parents[2]
PATIENCE = 60.0  # s for the scheduler to print its address


def _python(module: str, *words: str, log: Path) -> "subprocess.Popen[bytes]":
    with log.open("wb") as file:
        return subprocess.Popen(
            [sys.executable, "-m", module, *words],
            stdout=file,
            stderr=subprocess.STDOUT,
            env=os.environ
            | {
                "PYTHONPATH": str(ROOT),
                "TMPDIR": str(log.parent),
                "DASK_DISTRIBUTED__SCHEDULER__ALLOWED_FAILURES": "1",
            },
        )


@contextmanager
def scheduler(folder: Path, *, workers: int, threads: int = 1) -> Iterator[str]:
    """Start a scheduler with workers under nannies; gives the path of its scheduler file."""
    file = folder / "scheduler.json"
    address = ("--host", "127.0.0.1", "--port", "0", "--no-dashboard")
    processes = [
        _python(
            "distributed.cli.dask_scheduler",
            *address,
            "--scheduler-file",
            str(file),
            log=folder / "scheduler.log",
        )
    ]
    try:
        for number in range(workers):
            processes.append(
                _python(
                    "distributed.cli.dask_worker",
                    *("--scheduler-file", str(file), "--nthreads", str(threads)),
                    *("--no-dashboard", "--local-directory", str(folder)),
                    log=folder / f"worker{number}.log",
                )
            )
        end = time.monotonic() + PATIENCE
        while not file.exists() or not file.read_text():
            assert time.monotonic() < end, (folder / "scheduler.log").read_text()
            time.sleep(0.02)
        yield str(file)
    finally:
        # A nanny ends its worker in turn, but waits long where the scheduler has gone before.
        for process in processes[1:]:
            process.terminate()
        for process in processes[1:]:
            process.wait(PATIENCE)
        processes[0].terminate()
        processes[0].wait(PATIENCE)
