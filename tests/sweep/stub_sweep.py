"""A worker's part of a sweep that takes no simulator: rows of the usual size after a sleep."""

import time

import numpy as np

from cosim.archive import Row, RunInfo, Series
from cosim.sweep.batches import DONE, Batch, Outcome

LENGTH = 0.1  # s of a run
CELLS = 60  # columns of a gate's row and its plan
SAMPLES = 1613  # of the envelope of a run of 130 ns at 6.2 GHz

_UNITS = {f"number_{k}": "Hz" for k in range(CELLS)}


def stub_batch(batch: Batch) -> tuple[Outcome, ...]:
    """Sleep for each run, then give its row with an envelope."""
    outcomes = []
    for task in batch.tasks:
        time.sleep(LENGTH)
        random = np.random.default_rng(task.number)
        values = random.normal(size=2 * SAMPLES).view(np.complex128).astype(np.complex64)
        envelope = Series(0.0, 8e-11, values, "V", 6.2e9)
        numbers = random.normal(size=CELLS).tolist()
        cells = {f"number_{k}": number for k, number in enumerate(numbers)}
        cells["free_frame.average_gate_fidelity"] = 1.0 - abs(numbers[0])
        row = Row(
            task.number, "Stub", RunInfo(DONE, "", LENGTH), cells, _UNITS, {"envelope": envelope}
        )
        outcomes.append(Outcome(task.number, DONE, row, wall_time=LENGTH))
    return tuple(outcomes)
