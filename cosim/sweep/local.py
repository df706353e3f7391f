"""The engine of one computer: a pool of processes that ends with its parent, however that ends."""

import multiprocessing
import os
import signal
import threading
from collections.abc import Iterator
from concurrent.futures import BrokenExecutor, Executor, ProcessPoolExecutor
from contextlib import contextmanager
from functools import partial
from multiprocessing import connection
from multiprocessing.context import SpawnContext, SpawnProcess

from cosim.errors import InputError, SimulationError
from cosim.sweep.engine import Engine

# Read by the libraries when they are loaded, so that a worker has to be born with them.
THREAD_VARIABLES = (
    "OMP_NUM_THREADS",
    "OPENBLAS_NUM_THREADS",
    "MKL_NUM_THREADS",
    "NUMBA_NUM_THREADS",
)


def local_engine(workers: int | None = None) -> Engine:
    """Make the engine that runs batches in processes of this computer.

    Each has one thread for linear algebra and a host of ngspice of its own. They start as fresh
    interpreters, so that a script that sweeps needs `if __name__ == "__main__":`.

    Parameters
    ----------
    workers : int or None
        How many processes; None for one per processor that this process may use.

    Returns
    -------
    Engine
        For `run_batches`.

    Raises
    ------
    InputError
        If the number is below 1.
    """
    count = len(os.sched_getaffinity(0)) if workers is None else workers
    if count < 1:
        raise InputError(f"a sweep needs at least 1 worker, got {count}")
    return Engine(open=partial(_open_pool, count), slots=lambda: count)


@contextmanager
def _open_pool(workers: int) -> Iterator[Executor]:
    pool = ProcessPoolExecutor(workers, mp_context=_Context(), initializer=_prepare_worker)
    try:
        _check_start(pool)
        yield pool
    except BaseException:
        # The pool itself has no way to end a run. A host of ngspice sees that its worker is gone
        # and ends with it.
        for process in list((pool._processes or {}).values()):
            process.kill()
        raise
    finally:
        pool.shutdown(cancel_futures=True)


def _check_start(pool: ProcessPoolExecutor) -> None:
    """Let one worker start before any run is sent, lest a fault at its start be blamed on runs."""
    try:
        pool.submit(os.getpid).result()
    except BrokenExecutor as error:
        raise SimulationError(
            "the worker processes of the sweep end before their first run",
            hint='in a script, sweep below the line `if __name__ == "__main__":`, since each '
            "worker reads the script again; the worker's own words stand above",
        ) from error


class _Worker(SpawnProcess):
    """A worker, born with one thread for linear algebra and deaf to Ctrl-C."""

    def start(self) -> None:
        before = {name: os.environ.get(name) for name in THREAD_VARIABLES}
        os.environ.update(dict.fromkeys(THREAD_VARIABLES, "1"))
        # A terminal sends Ctrl-C to workers too, also to one that has just begun to start.
        mask = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
        try:
            super().start()
        finally:
            signal.pthread_sigmask(signal.SIG_SETMASK, mask)
            for name, text in before.items():
                if text is None:
                    del os.environ[name]
                else:
                    os.environ[name] = text


class _Context(SpawnContext):
    """Multiprocessing's way to start processes, with workers of the kind above."""

    Process = _Worker


def _prepare_worker() -> None:
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    signal.pthread_sigmask(signal.SIG_UNBLOCK, {signal.SIGINT})
    threading.Thread(target=_end_with_parent, name="parent's watch", daemon=True).start()


def _end_with_parent() -> None:
    """Wait until the parent is gone. A pool's idle workers would outlive one that was killed."""
    parent = multiprocessing.parent_process()
    if parent is not None:
        connection.wait([parent.sentinel])
        os._exit(1)
