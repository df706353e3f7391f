"""Oracle: the operating system: processes in /proc and folders left behind, whoever called."""

import os
import signal
import subprocess
import sys
import textwrap
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

pytestmark = pytest.mark.ngspice

ROOT = Path(__file__).parents[2]
PATIENCE = 60.0  # s to wait for an event of the system before the test fails

# Starts each script: a divider with a settable input, and a deck that runs for minutes.
PREAMBLE = """
import os, sys
from cosim.circuit.analysis import TransientRequest
from cosim.circuit.deck import PreparedDeck
from cosim.circuit.simulator import simulate_prepared

def send(lines, stop, step, progress=None):
    deck = PreparedDeck(
        lines=tuple(lines), origins=(("", 0),) * len(lines), keys={"v(out)": "out"},
        commands=(), data={}, notices=(),
    )
    return simulate_prepared(deck, TransientRequest(stop=stop, step=step), progress=progress)

def divide(volts):
    lines = ["* t", f"v1 in 0 {volts!r}", "r1 in out 1k", "r2 out 0 1k", ".save v(out)",
             ".tran 1e-11 1e-9 0 1e-11", ".end"]
    return round(float(send(lines, 1e-9, 1e-11).vectors["v(out)"][-1]), 6)

def endless(progress):
    lines = ["* t", "v1 in 0 sin(0 1 5g)", "r1 in out 50", "c1 out 0 1p", ".save v(out)",
             ".tran 1e-12 1e-4 0 1e-12", ".end"]
    return send(lines, 1e-4, 1e-12, progress)

def say(*words):
    print(*words, flush=True)
"""

Starter = Callable[..., "subprocess.Popen[str]"]


def script(body: str) -> str:
    return PREAMBLE + textwrap.dedent(body)


@pytest.fixture
def start(tmp_path: Path) -> Iterator[Starter]:
    """Start a script whose scratch folders lie under tmp_path."""
    running: list[subprocess.Popen[str]] = []
    environment = os.environ | {"PYTHONPATH": str(ROOT), "TMPDIR": str(tmp_path)}

    def begin(body: str, *, from_stdin: bool = False) -> "subprocess.Popen[str]":
        file = tmp_path / "job.py"
        file.write_text(script(body), encoding="utf-8")
        command = [sys.executable, "-" if from_stdin else str(file)]
        with file.open(encoding="utf-8") as text:
            process = subprocess.Popen(
                command,
                stdin=text if from_stdin else subprocess.DEVNULL,
                stdout=subprocess.PIPE,
                stderr=subprocess.PIPE,
                text=True,
                cwd=tmp_path,
                env=environment,
            )
        running.append(process)
        return process

    yield begin
    for process in running:
        process.kill()
        process.communicate()


def output(process: "subprocess.Popen[str]") -> str:
    out, err = process.communicate(timeout=PATIENCE)
    assert process.returncode == 0, err
    assert "Traceback" not in err
    return out.strip()


def scratch_folders(tmp_path: Path) -> list[Path]:
    return list(tmp_path.glob("qcosim-*"))


def simulators(tmp_path: Path) -> list[int]:
    """Processes that work in a folder under tmp_path: hosts and their children."""
    found = []
    for entry in Path("/proc").iterdir():
        if entry.name.isdigit():
            try:
                folder, words = os.readlink(entry / "cwd"), (entry / "cmdline").read_bytes()
            except OSError:
                continue
            if folder.startswith(str(tmp_path / "qcosim-")) and b"host.py" in words:
                found.append(int(entry.name))
    return found


def wait_until(condition: Callable[[], bool]) -> bool:
    end = time.monotonic() + PATIENCE
    while not condition():
        if time.monotonic() > end:
            return False
        time.sleep(0.02)
    return True


def assert_nothing_left(tmp_path: Path) -> None:
    assert wait_until(lambda: not simulators(tmp_path)), "a simulator process was left"
    assert wait_until(lambda: not scratch_folders(tmp_path)), "a scratch folder was left"


@pytest.mark.parametrize("from_stdin", [False, True], ids=["file", "standard input"])
def test_an_unguarded_script_runs_decks(start: Starter, tmp_path: Path, from_stdin: bool) -> None:
    assert output(start("say(divide(3.0), divide(5.0))", from_stdin=from_stdin)) == "1.5 2.5"
    assert_nothing_left(tmp_path)


def test_the_simulator_module_loads_no_pyspice(start: Starter) -> None:
    body = "say('PySpice' in sys.modules, divide(3.0), 'PySpice' in sys.modules)"
    assert output(start(body)) == "False 1.5 False"


@pytest.mark.full
def test_a_pool_of_forked_processes_runs_decks(start: Starter, tmp_path: Path) -> None:
    body = """
        import multiprocessing
        first = divide(1.0)  # The parent has a host already, which the workers must not use.
        with multiprocessing.get_context("fork").Pool(2) as pool:
            say(first, pool.map(divide, [2.0, 3.0, 4.0, 5.0]))
        say(divide(6.0))
    """
    assert output(start(body)) == "0.5 [1.0, 1.5, 2.0, 2.5]\n3.0"
    assert_nothing_left(tmp_path)


@pytest.mark.full
@pytest.mark.parametrize("method", ["fork", "spawn"])
def test_an_executor_of_processes_runs_decks(start: Starter, tmp_path: Path, method: str) -> None:
    body = f"""
        import multiprocessing
        from concurrent.futures import ProcessPoolExecutor
        if __name__ == "__main__":
            context = multiprocessing.get_context("{method}")
            with ProcessPoolExecutor(2, mp_context=context) as pool:
                say(list(pool.map(divide, [2.0, 3.0, 4.0])))
    """
    assert output(start(body)) == "[1.0, 1.5, 2.0]"
    assert_nothing_left(tmp_path)


@pytest.mark.full
def test_a_daemonic_process_runs_decks(start: Starter, tmp_path: Path) -> None:
    # A cluster's worker under its nanny is such a process and may have no children of its own
    # made by multiprocessing.
    body = """
        import multiprocessing
        context = multiprocessing.get_context("fork")
        queue = context.SimpleQueue()
        worker = context.Process(target=lambda: queue.put(divide(3.0)), daemon=True)
        worker.start()
        say(queue.get())
        worker.join()
    """
    assert output(start(body)) == "1.5"
    assert_nothing_left(tmp_path)


@pytest.mark.full
def test_busy_blas_threads_and_ignored_signals_do_no_harm(start: Starter, tmp_path: Path) -> None:
    body = """
        import signal, threading
        import numpy as np
        signal.signal(signal.SIGCHLD, signal.SIG_IGN)
        stop = threading.Event()
        def work():
            matrix = np.ones((300, 300))
            while not stop.is_set():
                matrix @ matrix
        threads = [threading.Thread(target=work) for _ in range(3)]
        for thread in threads: thread.start()
        say([divide(float(n)) for n in range(1, 6)])
        stop.set()
        for thread in threads: thread.join()
    """
    assert output(start(body)) == "[0.5, 1.0, 1.5, 2.0, 2.5]"
    assert_nothing_left(tmp_path)


@pytest.mark.full
def test_a_plain_fork_leaves_the_parents_host_alone(start: Starter, tmp_path: Path) -> None:
    body = """
        divide(1.0)
        child = os.fork()
        if child == 0:
            say(divide(2.0))
            sys.exit(0)  # Runs the exit handlers that the child inherited.
        os.waitpid(child, 0)
        say(divide(3.0))
    """
    assert output(start(body)) == "1.0\n1.5"
    assert_nothing_left(tmp_path)


@pytest.mark.full
def test_a_fork_in_the_middle_of_another_threads_run_works(start: Starter, tmp_path: Path) -> None:
    # The child inherits the lock in the locked state, and no thread that would open it.
    body = """
        import threading
        started = threading.Event()
        thread = threading.Thread(target=endless, args=(lambda t: started.set(),), daemon=True)
        thread.start()
        started.wait()
        child = os.fork()
        if child == 0:
            say(divide(3.0))
            os._exit(0)
        os.waitpid(child, 0)
        say("done")
        os._exit(0)
    """
    assert output(start(body)) == "1.5\ndone"
    assert_nothing_left(tmp_path)


@pytest.mark.parametrize("sent", [signal.SIGKILL, signal.SIGTERM])
def test_the_end_of_the_caller_ends_everything(
    start: Starter, tmp_path: Path, sent: signal.Signals
) -> None:
    process = start("endless(lambda t: say('running'))")
    assert process.stdout is not None
    assert process.stdout.readline() == "running\n"
    both = simulators(tmp_path)
    assert len(both) == 2
    if sent is signal.SIGTERM:
        # A batch system sends it to every process of the job, and the host still has to tidy up.
        for simulator in both:
            os.kill(simulator, sent)
    process.send_signal(sent)
    process.wait(PATIENCE)
    assert_nothing_left(tmp_path)


@pytest.mark.full
def test_the_end_of_the_caller_is_seen_past_a_worker_that_holds_its_pipes(
    start: Starter, tmp_path: Path
) -> None:
    # A forked worker inherits the pipe to the parent's host, so that no end of file comes.
    process = start("""
        import time
        divide(1.0)
        if os.fork() == 0:
            time.sleep(600)
        endless(lambda t: say("running"))
    """)
    assert process.stdout is not None
    assert process.stdout.readline() == "running\n"
    workers = [
        int(child)
        for child in Path(f"/proc/{process.pid}/task/{process.pid}/children").read_text().split()
        if int(child) not in simulators(tmp_path)
    ]
    assert len(workers) == 1
    try:
        process.kill()
        process.wait(PATIENCE)
        assert_nothing_left(tmp_path)
        assert Path(f"/proc/{workers[0]}").exists()
    finally:
        os.kill(workers[0], signal.SIGKILL)


def test_an_interrupt_comes_out_and_the_next_run_works(start: Starter, tmp_path: Path) -> None:
    process = start("""
        import glob
        try:
            endless(lambda t: say("running"))
        except KeyboardInterrupt:
            say("interrupted", len(glob.glob("qcosim-*")), divide(3.0))
    """)
    assert process.stdout is not None
    assert process.stdout.readline() == "running\n"
    process.send_signal(signal.SIGINT)
    assert output(process).splitlines()[-1] == "interrupted 0 1.5"
    assert_nothing_left(tmp_path)


@pytest.mark.full
def test_an_error_in_the_progress_callback_comes_out(start: Starter, tmp_path: Path) -> None:
    body = """
        try:
            endless(lambda t: 1 / 0)
        except ZeroDivisionError:
            say("came out", divide(3.0))
    """
    assert output(start(body)) == "came out 1.5"
    assert_nothing_left(tmp_path)


@pytest.mark.full
def test_the_death_of_an_idle_host_is_made_good(start: Starter, tmp_path: Path) -> None:
    body = """
        import signal
        from cosim.circuit.client import client_of_this_process
        divide(1.0)
        process = client_of_this_process()._process
        os.kill(process.pid, signal.SIGKILL)
        process.wait()
        say(divide(3.0))
    """
    assert output(start(body)) == "1.5"
    assert_nothing_left(tmp_path)


@pytest.mark.full
def test_the_death_of_a_busy_host_is_an_error_and_made_good(start: Starter, tmp_path: Path) -> None:
    body = """
        import signal
        from cosim.circuit.client import client_of_this_process
        from cosim.errors import SimulatorCrashError
        try:
            endless(lambda t: os.kill(client_of_this_process()._process.pid, signal.SIGKILL))
        except SimulatorCrashError as error:
            say(error.message)
        say(divide(3.0))
    """
    first, second = output(start(body)).splitlines()
    assert first == "the simulator's host process ended unexpectedly with code -9"
    assert second == "1.5"
    assert_nothing_left(tmp_path)


def test_start_files_and_environment_of_the_user_do_not_reach_the_simulator(
    start: Starter, tmp_path: Path
) -> None:
    mark = tmp_path / "touched"
    (tmp_path / ".spiceinit").write_text(f"* start file\nshell touch {mark}\n")
    (tmp_path / "scripts").mkdir()
    (tmp_path / "scripts" / "spinit").write_text(f"* start file\nshell touch {mark}\n")
    body = """
        os.environ |= {"HOME": os.getcwd(), "SPICE_SCRIPTS": os.getcwd() + "/scripts"}
        os.environ |= {"SPICE_LIB_DIR": os.getcwd(), "NGSPICE_INPUT_DIR": os.getcwd()}
        from cosim.circuit.client import client_of_this_process
        value = divide(3.0)
        environment = open(f"/proc/{client_of_this_process()._process.pid}/environ").read()
        names = sorted(entry.partition("=")[0] for entry in environment.split(chr(0)) if entry)
        say(value, os.path.exists("touched"), *names)
    """
    value, touched, *names = output(start(body)).split()
    assert (value, touched) == ("1.5", "False")
    allowed = {"PATH", "HOME", "LC_ALL", "TMPDIR", "LD_LIBRARY_PATH", "NGSPICE_LIBRARY_PATH"}
    allowed |= {"OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "PYTHONPATH"}
    assert set(names) <= allowed


def test_the_host_removes_no_folder_but_a_scratch_folder(tmp_path: Path) -> None:
    program = ROOT / "cosim" / "circuit" / "host.py"
    command = [sys.executable, "-P", str(program), "1", str(tmp_path)]
    done = subprocess.run(command, capture_output=True, text=True, timeout=PATIENCE)
    assert done.returncode != 0
    assert "not a scratch folder" in done.stderr
    assert tmp_path.exists()


def test_a_missing_library_says_what_to_type(start: Starter, tmp_path: Path) -> None:
    body = """
        from cosim.errors import MissingDependencyError
        (name := os.path.join(os.getcwd(), "libngspice.so.0"))
        for create in (False, True):
            if create:
                open(name, "w").close()
            os.environ["NGSPICE_LIBRARY_PATH"] = name
            try:
                divide(3.0)
            except MissingDependencyError as error:
                say(str(error).replace(chr(10), " "))
        del os.environ["NGSPICE_LIBRARY_PATH"]
        say(divide(3.0))
    """
    absent, broken, value = output(start(body)).splitlines()
    assert "is not a file" in absent
    assert "does not load" in broken
    for text in (absent, broken):
        assert "apt-get install ngspice libngspice0" in text
    assert value == "1.5"
    assert_nothing_left(tmp_path)


@pytest.mark.full
@pytest.mark.parametrize(("kind", "limit"), [("RLIMIT_AS", 2**32), ("RLIMIT_FSIZE", 2**20)])
def test_a_hard_limit_of_the_system_is_kept_below(start: Starter, kind: str, limit: int) -> None:
    process = start(
        f"""
        import resource
        resource.setrlimit(resource.{kind}, ({limit}, {limit}))
        say(divide(2.0))
        """
    )
    assert output(process) == "1.0"
