"""Derivatives proved by the order of their error, not by one lucky step."""

from collections.abc import Callable

import numpy as np

STEPS = np.logspace(-1.5, -5, 15)
"""Central differences err by c h² until rounding takes over near 1e-5; the steps span three and a half decades."""


def errors_by_step(value: Callable[[float], np.ndarray], slope: np.ndarray) -> np.ndarray:
    """Relative errors of central differences of `value` at 0, one per step."""
    slope = np.asarray(slope, float)
    size = np.linalg.norm(slope) or 1.0
    return np.array([np.linalg.norm((value(h) - value(-h)) / (2 * h) - slope) / size for h in STEPS])


def order_of_error(value: Callable[[float], np.ndarray], slope: np.ndarray) -> tuple[float, float]:
    """Order of the error of central differences, and the smallest relative error.

    The order is the median slope, in logarithms, over the steps at which the error still is a hundred times what
    rounding leaves. A function so straight that there are none has no order: then the smallest error speaks
    alone and the order is given as 2.
    """
    errors = errors_by_step(value, slope)
    before_rounding = errors[: int(np.argmin(errors))]
    falling = np.flatnonzero(before_rounding > 100 * errors.min())
    if len(falling) < 4:
        return 2.0, float(errors.min())
    slopes = np.diff(np.log(errors[falling])) / np.diff(np.log(STEPS[falling]))
    return float(np.median(slopes)), float(errors.min())


def decades(value: Callable[[float], np.ndarray], slope: np.ndarray) -> float:
    """Decades of step over which the error keeps falling."""
    errors = errors_by_step(value, slope)
    return float(np.log10(STEPS[0] / STEPS[int(np.argmin(errors))]))
