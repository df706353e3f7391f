"""The figure of a study of any kind."""

import os

from cosim.budget.result import BudgetResult
from cosim.budget_figures import plot_budget
from cosim.calibration.result import CalibrationResult
from cosim.calibration_figures import plot_calibration
from cosim.drift.result import DriftResult
from cosim.drift_figures import plot_drift
from cosim.sensitivity.result import SensitivityResult
from cosim.sensitivity_figures import plot_sensitivity
from cosim.specification.result import GateSpecification
from cosim.specification_figures import plot_readout_specification, plot_specification
from cosim.study_archive import StudyResult
from cosim.train.result import TrainResult
from cosim.train_figures import plot_train


def plot_study(result: StudyResult, path: str | os.PathLike[str]) -> None:
    """Draw the result of a study.

    Parameters
    ----------
    result : BudgetResult or that of another study
    path : path
        File to write; its ending says the format: png, pdf, svg.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    if isinstance(result, BudgetResult):
        plot_budget(result, path)
    elif isinstance(result, CalibrationResult):
        plot_calibration(result, path)
    elif isinstance(result, DriftResult):
        plot_drift(result, path)
    elif isinstance(result, SensitivityResult):
        plot_sensitivity(result, path)
    elif isinstance(result, TrainResult):
        plot_train(result, path)
    elif isinstance(result, GateSpecification):
        plot_specification(result, path)
    else:
        plot_readout_specification(result, path)
