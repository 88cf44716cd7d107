"""Smooth constrained minimisation from one point: one evaluation serves value, constraints and slopes."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from inverse.assembly.terms import Array

MOST_STEPS = 300

Evaluated = tuple[float, Array, Array, Array]
"""Value, its slope (p,), room (c,) that must stay ≥ 0, its slopes (c, p)."""


def constrained_minimum(at: Callable[[Array], Evaluated], start: Array, lower: Array, upper: Array) -> Array:
    """Point of least value with all room kept, by SLSQP; NaN rooms count as violated.

    Parameters
    ----------
    at : callable
        From a point (p,) to `Evaluated`.
    start, lower, upper : ndarray, shape (p,)

    Returns
    -------
    ndarray, shape (p,)
        Where it stopped; whether that is feasible is for the caller to check.
    """
    # Imported here because it takes longer to load than most studies take to solve.
    from scipy.optimize import Bounds, OptimizeResult, minimize

    latest: dict[bytes, Evaluated] = {}

    def known(t: Array) -> Evaluated:
        key = t.tobytes()
        if key not in latest:
            value, slope, room, slopes = at(np.clip(t, lower, upper))
            latest.clear()
            latest[key] = (
                value if np.isfinite(value) else 1e30,
                np.nan_to_num(slope),
                np.nan_to_num(room, nan=-1e30),
                np.nan_to_num(slopes),
            )
        return latest[key]

    found: OptimizeResult = minimize(  # type: ignore[call-overload]  # the stubs know no dictionary of constraints
        lambda t: known(t)[0],
        start,
        jac=lambda t: known(t)[1],
        bounds=Bounds(lower, upper),
        constraints={"type": "ineq", "fun": lambda t: known(t)[2], "jac": lambda t: known(t)[3]},
        method="SLSQP",
        options={"maxiter": MOST_STEPS, "ftol": 1e-12},
    )
    return np.asarray(np.clip(found.x, lower, upper))
