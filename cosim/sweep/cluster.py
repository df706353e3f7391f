"""The engines of a cluster: a Dask scheduler by its address, or one whose workers a batch system
starts. Both need the extra `cluster`, which is loaded when an engine is made.
"""

import shutil
import time
from collections.abc import Callable, Iterator
from concurrent.futures import Executor
from contextlib import AbstractContextManager, contextmanager, nullcontext, suppress
from dataclasses import dataclass
from importlib import import_module
from types import ModuleType
from typing import Any

from cosim.errors import InputError, MissingDependencyError, SimulationError, near_names
from cosim.sweep.engine import Engine

# Classes of dask-jobqueue by the name of the batch system, and its command that takes a job.
SYSTEMS = {"slurm": "SLURMCluster", "pbs": "PBSCluster", "lsf": "LSFCluster"}
SUBMIT = {"slurm": "sbatch", "pbs": "qsub", "lsf": "bsub"}

CONNECT_LIMIT = 30.0  # s for the scheduler to answer
COUNT_INTERVAL = 2.0  # s after which the workers are counted again

# Dask keeps the last thousand messages of every connection, decks included, for its developers.
QUIET = {"distributed.admin.low-level-log-length": 0}

# A run whose worker dies is repeated once by the scheduler, which then gives it up. Dask's own
# default ends four workers before that.
ALLOWED_FAILURES = 1


@dataclass(frozen=True, slots=True)
class JobRequest:
    """What to ask of a batch system for each job; the Dask configuration fills in the rest.

    Parameters
    ----------
    cores : int
        Processors of one job. It runs as many workers, of one thread each: a process holds one
        host of ngspice, so that threads would wait for one another.
    memory : str
        Memory of one job, "16GB".
    time_limit : str
        Longest time of one job as the batch system writes it, "02:00:00", of LSF "02:00"; empty
        for half an hour.
    queue : str
        Partition or queue; empty for the system's default.
    account : str
        Account or project that pays; empty for none.
    directives : tuple of str
        Further lines of the job's header, without their prefix.
    prologue : tuple of str
        Shell lines before the worker starts, such as "module load ngspice".
    interface : str
        Network interface by which jobs and this computer reach one another, such as "ib0"; empty
        for that of the default route.

    Raises
    ------
    InputError
        If the number of cores is below 1.
    """

    cores: int
    memory: str
    time_limit: str = ""
    queue: str = ""
    account: str = ""
    directives: tuple[str, ...] = ()
    prologue: tuple[str, ...] = ()
    interface: str = ""

    def __post_init__(self) -> None:
        if self.cores < 1:
            raise InputError(f"a job needs at least 1 core, got {self.cores}")


def scheduler_engine(address: str) -> Engine:
    """Make the engine that runs batches on the workers of a Dask scheduler.

    A run that kills its worker is repeated by the scheduler as often as its setting
    `distributed.scheduler.allowed-failures` says; start the scheduler with 1, for Dask's own
    default costs four workers. Workers should have one thread each.

    Parameters
    ----------
    address : str
        "tcp://host:8786", or the path of a scheduler file.

    Returns
    -------
    Engine
        For `run_batches`.

    Raises
    ------
    MissingDependencyError
        If Dask is not installed.
    """
    where = {"scheduler_file": address} if address.endswith(".json") else {"address": address}
    return _engine(lambda: nullcontext(where), f"the scheduler {address}")


def queue_engine(system: str, request: JobRequest, jobs: int) -> Engine:
    """Make the engine whose workers are jobs of a batch system.

    A scheduler starts in this process. The jobs are submitted when the engine is opened, and
    cancelled when it is left. They must reach this computer over the network.

    Parameters
    ----------
    system : str
        "slurm", "pbs" or "lsf".
    request : JobRequest
        What to ask for each job.
    jobs : int
        How many jobs to submit.

    Returns
    -------
    Engine
        For `run_batches`.

    Raises
    ------
    InputError
        If there is no such batch system, or no job is asked for.
    MissingDependencyError
        If dask-jobqueue is not installed, or the batch system's command is not there.
    """
    if jobs < 1:
        raise InputError(f"a sweep in a queue needs at least 1 job, got {jobs}")
    cluster_class = _cluster_class(system)
    if shutil.which(SUBMIT[system]) is None:
        raise MissingDependencyError(
            f"the command {SUBMIT[system]} of {system} is not on this computer's PATH",
            hint="sweep from a computer that submits jobs, or with --workers on this one",
        )
    options = _job_options(system, request)
    # A free port for its pages, which need a further package and are not served.
    scheduler = {
        "dashboard": False,
        "dashboard_address": ":0",
        "allowed_failures": ALLOWED_FAILURES,
    }

    @contextmanager
    def open_cluster() -> Iterator[dict[str, Any]]:
        with cluster_class(**options, scheduler_options=scheduler) as cluster:
            cluster.scale(jobs=jobs)
            yield {"address": cluster}

    return _engine(open_cluster, f"the scheduler for {system}")


def job_script(system: str, request: JobRequest) -> str:
    """Give the script that `queue_engine` would submit, but for names that are known only then.

    Parameters
    ----------
    system, request
        As in `queue_engine`.

    Returns
    -------
    str
        A shell script with the header of the batch system.

    Raises
    ------
    InputError
        If there is no such batch system.
    MissingDependencyError
        If dask-jobqueue is not installed.
    """
    job = _cluster_class(system).job_cls
    options = _job_options(system, request)
    return str(job(scheduler="tcp://SCHEDULER:PORT", name="WORKER", **options).job_script())


def _cluster_class(system: str) -> Any:
    if system not in SYSTEMS:
        raise InputError(f"no batch system {system!r}", hint=near_names(system, SYSTEMS))
    return getattr(_load("dask_jobqueue"), SYSTEMS[system])


def _job_options(system: str, request: JobRequest) -> dict[str, Any]:
    """Give what was asked for by its names in dask-jobqueue; the rest is its configuration's."""
    asked = {
        "walltime": request.time_limit,
        "queue": request.queue,
        "project" if system == "lsf" else "account": request.account,
        "job_extra_directives": list(request.directives),
        "job_script_prologue": list(request.prologue),
        "interface": request.interface,
    }
    return {
        "cores": request.cores,
        "processes": request.cores,
        "memory": request.memory,
        "job_name": "qcosim-sweep",
        **{name: value for name, value in asked.items() if value},
    }


def _load(module: str) -> ModuleType:
    try:
        return import_module(module)
    except ImportError as error:
        raise MissingDependencyError(
            f"a sweep on a cluster needs {module}, which is not installed",
            hint='type: pip install "qcosim[cluster]"',
        ) from error


def _engine(where: Callable[[], AbstractContextManager[dict[str, Any]]], name: str) -> Engine:
    distributed = _load("distributed")
    settings = _load("dask.config")
    killed = _load("distributed.scheduler").KilledWorker
    slots = _Slots()

    @contextmanager
    def open_client() -> Iterator[Executor]:
        with settings.set(QUIET), where() as place:
            try:
                client = distributed.Client(**place, timeout=CONNECT_LIMIT, set_as_default=False)
            except (OSError, ValueError) as error:
                raise SimulationError(
                    f"{name} does not answer: {error}",
                    hint="give its address as it prints it at its start, tcp://host:8786",
                ) from error
            with client:
                slots.client = client
                executor = client.get_executor(pure=False)
                try:
                    yield executor
                except BaseException:
                    executor.shutdown(wait=False)
                    raise

    return Engine(open_client, slots.count, lambda error: isinstance(error, killed), retries=0)


class _Slots:
    """How many batches a cluster's workers can run; asked of the scheduler now and then."""

    def __init__(self) -> None:
        self.client: Any = None
        self.known = 0
        self.due = 0.0

    def count(self) -> int:
        if time.monotonic() >= self.due:
            # When the scheduler is gone, the runs on their way tell it.
            with suppress(OSError):
                self.known = sum(self.client.nthreads().values())
            self.due = time.monotonic() + COUNT_INTERVAL
        return self.known
