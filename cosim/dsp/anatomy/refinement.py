"""Least squares for the numbers of a model, by the method of Levenberg and Marquardt."""

from collections.abc import Callable, Mapping, Sequence

import numpy as np

from cosim.waveform import ComplexArray, FloatArray

# A round that gains less than this part of the sum of squares is the last.
_ENOUGH = 1e-6
_ROUNDS = 20
# A change of the difference quotient, as a part of the number's own scale.
_STEP = 1e-6

Model = Callable[[Mapping[str, float]], ComplexArray]


def refine(
    model: Model,
    wanted: ComplexArray,
    numbers: Mapping[str, float],
    scales: Mapping[str, float],
    *,
    weights: FloatArray | float = 1.0,
    positive: Sequence[str] = (),
) -> dict[str, float]:
    """Fit numbers of a model to samples.

    Parameters
    ----------
    model : callable
        Numbers -> samples, shape (n,).
    wanted : ndarray of complex, shape (n,)
        Samples.
    numbers : mapping of float
        Where to begin; all that the model needs.
    scales : mapping of float
        Those that are free, with a change of each that matters.
    weights : ndarray, shape (n,)
        Of the samples; one for all by default.
    positive : sequence of str
        Those that stay above a thousandth of their scale.

    Returns
    -------
    dict of float
        All numbers.

    Notes
    -----
    D. W. Marquardt, "An algorithm for least-squares estimation of nonlinear parameters", J. Soc.
    Ind. Appl. Math. 11, 431 (1963).
    """
    names = list(scales)
    width: FloatArray = np.array([scales[name] for name in names], dtype=np.float64)
    found = dict(numbers)
    made = model(found)
    left = _stacked(weights * (wanted - made))
    loss = float(left @ left)
    damping = 1e-6
    for _ in range(_ROUNDS):
        columns = []
        for name in names:
            moved = found | {name: found[name] + _STEP * scales[name]}
            columns.append(_stacked(weights * (model(moved) - made)) / _STEP)
        slopes = np.column_stack(columns)
        # In units of the scales; a column that does nothing does not move.
        normal, pull = slopes.T @ slopes, slopes.T @ left
        size = np.diag(normal).copy()
        size[size <= 1e-30 * size.max(initial=0.0)] = 1.0
        for _ in range(8):
            root = np.sqrt(size)
            matrix = normal / np.outer(root, root) + damping * np.eye(len(names))
            move = np.linalg.lstsq(matrix, pull / root, rcond=1e-13)[0] / root
            trial = dict(found)
            for name, change, scale in zip(names, move * width, width, strict=True):
                trial[name] = found[name] + float(change)
                if name in positive:
                    trial[name] = max(abs(trial[name]), 1e-3 * float(scale))
            again = model(trial)
            rest = _stacked(weights * (wanted - again))
            if float(rest @ rest) < loss:
                break
            damping = max(10.0 * damping, 1e-9)
        else:
            return found
        gained = loss - float(rest @ rest)
        found, made, left, loss = trial, again, rest, loss - gained
        damping *= 0.1
        if gained <= _ENOUGH * loss:
            break
    return found


def _stacked(values: ComplexArray) -> FloatArray:
    return np.ascontiguousarray(values).view(np.float64)
