"""Results of studies in archives, beside the runs of gates and readouts."""

import os
from pathlib import Path

from cosim import archive
from cosim.budget.result import BUDGET_KINDS, BudgetResult
from cosim.calibration.result import CALIBRATION_KINDS, CalibrationResult
from cosim.drift.result import DRIFT_KINDS, DriftResult
from cosim.errors import ArchiveError
from cosim.sensitivity.result import SENSITIVITY_KINDS, SensitivityResult
from cosim.specification.readout_result import (
    READOUT_SPECIFICATION_KINDS,
    ReadoutSpecification,
)
from cosim.specification.result import SPECIFICATION_KINDS, GateSpecification
from cosim.train.result import TRAIN_KINDS, TrainResult

# Classes by the tag that the archive keeps, of each study.
STUDY_KINDS: dict[str, type] = {
    **BUDGET_KINDS,
    **CALIBRATION_KINDS,
    **SPECIFICATION_KINDS,
    **READOUT_SPECIFICATION_KINDS,
    **SENSITIVITY_KINDS,
    **DRIFT_KINDS,
    **TRAIN_KINDS,
}

StudyResult = (
    BudgetResult
    | CalibrationResult
    | GateSpecification
    | ReadoutSpecification
    | SensitivityResult
    | DriftResult
    | TrainResult
)


def save_study(result: StudyResult, path: str | os.PathLike[str]) -> int:
    """Add the result of a study to an archive, which is made if it does not exist.

    Parameters
    ----------
    result : BudgetResult or that of another study
    path : path
        The HDF5 file; it may hold runs of gates, too.

    Returns
    -------
    int
        Number of the run in the archive, from 1.

    Raises
    ------
    ArchiveError
        If the file is something else, holds a sweep, or cannot be written.
    """
    if Path(path).exists() and archive.read_plan(path, {}) is not None:
        raise ArchiveError(
            f"{os.fspath(path)} holds a sweep, whose runs are those of its plan",
            hint="save the result in another archive",
        )
    started = result.run.started if isinstance(result, BudgetResult) else result.started
    info = archive.RunInfo(status="done", start_time=started, wall_time=result.wall_time)
    return archive.append(path, result, info=info)


def load_study(path: str | os.PathLike[str], run: int | None = None) -> StudyResult | None:
    """Read the result of a study from an archive.

    Parameters
    ----------
    path : path
        The HDF5 file.
    run : int or None
        Number of the run; default: the last.

    Returns
    -------
    BudgetResult, that of another study, or None
        None where the run is no study.

    Raises
    ------
    ArchiveError
        If the file cannot be read.
    """
    table = archive.read_table(path, columns=("id", "kind"))
    kinds = dict(zip(table["id"].tolist(), table["kind"].tolist(), strict=True))
    number = run if run is not None else max(kinds, default=None)
    name = kinds.get(number) if number is not None else None
    name = name.decode() if isinstance(name, bytes) else name
    if name not in {cls.__name__ for cls in StudyResult.__args__}:
        return None
    result = archive.read(path, STUDY_KINDS, run=number)
    assert isinstance(result, StudyResult)
    return result
