"""Levenberg-Marquardt steps inside the unit box, many independent runs in one batch.

======  ==========================================================  ============
symbol  meaning                                                     shape
======  ==========================================================  ============
u       points, every variable scaled to [0, 1] by its range        (B, p)
r       residuals                                                   (B, m)
J       ∂r/∂u                                                       (B, m, p)
c       rᵀr                                                         (B,)
μ       damping, relative to the greatest diagonal element of the   (B,)
        normal matrix
======  ==========================================================  ============

The step solves ``min |r + J s|² + μ |s|²`` over the variables that no bound holds. With fewer
residuals than variables the dual form ``s = -Jᵀ (J Jᵀ + μ)⁻¹ r`` costs the smaller matrix and
tends, for μ -> 0, to the step of least norm; otherwise ``s = -(Jᵀ J + μ)⁻¹ Jᵀ r``.
Bounds: J. J. Moré, "The Levenberg-Marquardt algorithm", Lecture Notes in Mathematics 630, 1978,
with the projected step and the active set of D. P. Bertsekas, "Projected Newton methods",
SIAM Journal on Control and Optimization 20(2), 1982.
"""

from collections.abc import Callable
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Evaluate = Callable[[Array], tuple[Array, Array]]
"""Points in the unit box (B, p) to residuals (B, m) and their derivatives (B, m, p)."""

FIRST_DAMPING = 1e-3
LEAST_DAMPING = 1e-12  # keeps the normal matrix regular when rows of J vanish or depend
GREATEST_DAMPING = 1e2  # a step refused at this damping is too short to be worth another


@dataclass(slots=True)
class Runs:
    """The state of ``B`` runs; every field has the runs along its first axis."""

    points: Array
    residuals: Array
    jacobian: Array
    cost: Array
    damping: Array
    age: NDArray[np.int64]  # steps tried
    slow: NDArray[np.int64]  # how many of the latest steps in a row gained little
    thorough: Mask  # whether to converge fully, or to leave as soon as progress flags

    def __len__(self) -> int:
        return len(self.cost)

    def take(self, which: Mask) -> "Runs":
        """Return the runs that `which` marks."""
        return Runs(*(getattr(self, field.name)[which] for field in fields(self)))

    def join(self, other: "Runs") -> "Runs":
        """Return these runs followed by those of `other`."""
        return Runs(
            *(np.concatenate([getattr(self, field.name), getattr(other, field.name)]) for field in fields(self))
        )


def begin(points: Array, evaluate: Evaluate, thorough: bool) -> Runs:
    """Open a run at every point (B, p) that is feasible; the others are left out."""
    residuals, jacobian = evaluate(points)
    inside = _finite(residuals, jacobian)
    count = int(inside.sum())
    residuals = residuals[inside]
    return Runs(
        points=points[inside],
        residuals=residuals,
        jacobian=jacobian[inside],
        cost=(residuals**2).sum(axis=1),
        damping=np.full(count, FIRST_DAMPING),
        age=np.zeros(count, dtype=np.int64),
        slow=np.zeros(count, dtype=np.int64),
        thorough=np.full(count, thorough),
    )


def advance(runs: Runs, evaluate: Evaluate, little: Array) -> None:
    """Try one step of every run, in place.

    Parameters
    ----------
    runs : Runs
    evaluate : callable
        Called once, with one point for each run.
    little : ndarray, shape (B,)
        A step that lowers the cost by less than this share of it counts as slow.
    """
    tried = np.clip(runs.points + _step(runs), 0.0, 1.0)
    step = tried - runs.points
    residuals, jacobian = evaluate(tried)
    inside = _finite(residuals, jacobian)
    cost = np.where(inside, (residuals**2).sum(axis=1), np.inf)
    linear = runs.residuals + (runs.jacobian @ step[:, :, None])[:, :, 0]
    predicted = runs.cost - (linear**2).sum(axis=1)
    gain = np.where(inside, runs.cost - np.where(inside, cost, 0.0), -1.0)
    better = gain > 0.0
    _adapt_damping(runs, better, gain, predicted)
    runs.age += 1
    # A refused step counts only if no more was promised, or if shorter ones are hardly worth trying.
    promised = np.where(runs.damping > GREATEST_DAMPING, 0.0, predicted)
    crawling = np.where(better, gain, promised) < little * runs.cost
    runs.slow = np.where(crawling, runs.slow + 1, np.where(better, 0, runs.slow))
    runs.points[better] = tried[better]
    runs.residuals[better] = residuals[better]
    runs.jacobian[better] = jacobian[better]
    runs.cost[better] = cost[better]


def _finite(residuals: Array, jacobian: Array) -> Mask:
    return np.asarray(np.isfinite(residuals).all(axis=1) & np.isfinite(jacobian).all(axis=(1, 2)))


def _step(runs: Runs) -> Array:
    """Damped Gauss-Newton step (B, p) of the variables that are not held by a bound."""
    gradient = (runs.residuals[:, None, :] @ runs.jacobian)[:, 0, :]
    held = ((runs.points <= 0.0) & (gradient > 0.0)) | ((runs.points >= 1.0) & (gradient < 0.0))
    jacobian = np.where(held[:, None, :], 0.0, runs.jacobian)
    transposed = np.swapaxes(jacobian, 1, 2)
    if jacobian.shape[1] <= jacobian.shape[2]:
        normal = _damped(jacobian @ transposed, runs.damping)
        step = transposed @ np.linalg.solve(normal, runs.residuals[:, :, None])
    else:
        normal = _damped(transposed @ jacobian, runs.damping)
        step = np.linalg.solve(normal, transposed @ runs.residuals[:, :, None])
    return np.asarray(-step[:, :, 0])


def _damped(normal: Array, damping: Array) -> Array:
    diagonal = np.einsum("bii->bi", normal)  # a view
    greatest = diagonal.max(axis=1)
    diagonal += (damping * np.where(greatest > 0.0, greatest, 1.0))[:, None]
    return normal


def _adapt_damping(runs: Runs, better: Mask, gain: Array, predicted: Array) -> None:
    """Relax where the linear model foretold the gain, tighten where it did not."""
    factor = np.where(gain > 0.75 * predicted, 0.2, np.where(gain < 0.25 * predicted, 2.0, 1.0))
    damping = runs.damping * np.where(better, factor, 5.0)
    runs.damping = np.maximum(damping, LEAST_DAMPING)
