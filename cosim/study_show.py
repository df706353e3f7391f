"""Results of the studies as what is printed, for people and for machines."""

from typing import Any

from rich.console import RenderableType

from cosim.budget.result import BudgetResult, budget_numbers
from cosim.budget_terminal import budget_parts
from cosim.calibration.result import CalibrationResult, calibration_numbers
from cosim.calibration_terminal import calibration_table
from cosim.drift.result import DriftResult
from cosim.drift_terminal import drift_table
from cosim.result import as_plain
from cosim.sensitivity.result import SensitivityResult
from cosim.sensitivity_terminal import sensitivity_table
from cosim.specification.result import GateSpecification
from cosim.specification_terminal import readout_specification_table, specification_table
from cosim.study_archive import StudyResult
from cosim.train.result import TrainResult, train_numbers
from cosim.train_terminal import train_table


def study_numbers(result: StudyResult) -> Any:
    """Turn the result of a study into plain numbers for machines.

    Parameters
    ----------
    result : BudgetResult or that of another study

    Returns
    -------
    dict
        A number that does not exist is None.
    """
    if isinstance(result, BudgetResult):
        return budget_numbers(result)
    if isinstance(result, CalibrationResult):
        return calibration_numbers(result)
    if isinstance(result, TrainResult):
        return train_numbers(result)
    return as_plain(result)


def study_table(result: StudyResult) -> RenderableType:
    """Lay out the result of a study for a terminal.

    Parameters
    ----------
    result : BudgetResult or that of another study

    Returns
    -------
    rich.console.RenderableType
    """
    if isinstance(result, BudgetResult):
        return budget_parts(result)
    if isinstance(result, CalibrationResult):
        return calibration_table(result)
    if isinstance(result, DriftResult):
        return drift_table(result)
    if isinstance(result, SensitivityResult):
        return sensitivity_table(result)
    if isinstance(result, TrainResult):
        return train_table(result)
    if isinstance(result, GateSpecification):
        return specification_table(result)
    return readout_specification_table(result)
