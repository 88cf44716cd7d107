"""The builds at which an objective is farthest off, looked for among the corners of the tolerance box.

What is found is attained: it is a bound from inside. A guarantee from outside is for enclosures to give.

Symbols: ``u`` unit errors in [−1, 1]^U, ``d = d₀ + T u``. From many corners at once, ``u ← sign(∂v/∂u)`` is repeated
while it improves, and then single errors are turned over. Differences of equal parts have no slope at the
nominal design, so that the corners to start from are drawn at random too.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from inverse.assembly.terms import Array
from inverse.evaluation.evaluator import Evaluator
from inverse.tolerance.distributions import Errors
from inverse.tolerance.sensitivities import OverErrors

STARTS = 32
"""Random corners beside the nominal design."""

STEPS = 12


@dataclass(frozen=True, slots=True, kw_only=True)
class Extreme:
    """The lowest and highest value found, and the unit errors (U,) there; None where an objective has no value."""

    low: float | None
    high: float | None
    low_at: Array
    high_at: Array


def extremes(evaluator: Evaluator, x: Array, errors: Errors, *, seed: int) -> tuple[Extreme, ...]:
    """Per objective, the extremes found over all builds within the limits.

    Parameters
    ----------
    evaluator : Evaluator
    x : ndarray, shape (P,)
        Variables of the nominal design.
    errors : Errors
    seed : int
        Of the random corners.
    """
    search = _Search(evaluator, x, errors, np.random.default_rng(seed))
    return tuple(search.extreme(i) for i in range(len(evaluator.objectives)))


class _Search:
    """Corners of unit errors, looked at side by side."""

    def __init__(self, evaluator: Evaluator, x: Array, errors: Errors, rng: np.random.Generator) -> None:
        self.over, self.units, self.rng = OverErrors(evaluator, x, errors), errors.units, rng

    def extreme(self, i: int) -> Extreme:
        """Both ends of one objective."""
        low, low_at = self._end(i, -1.0)
        high, high_at = self._end(i, 1.0)
        return Extreme(low=low, high=high, low_at=low_at, high_at=high_at)

    def _end(self, i: int, sign: float) -> tuple[float | None, Array]:
        corners = np.where(self.rng.random((STARTS, self.units)) < 0.5, -1.0, 1.0)
        u = np.vstack([np.zeros((1, self.units)), corners])
        best = np.full(len(u), -np.inf)
        kept = u.copy()
        for _ in range(STEPS):
            values, slopes = self.over.slopes(u)
            if np.isnan(values[:, i]).any():
                return None, u[int(np.argmax(np.isnan(values[:, i])))]
            value = sign * values[:, i]
            better = value > best
            best[better], kept[better] = value[better], u[better]
            following = np.where(slopes[:, i] == 0, u, np.sign(sign * slopes[:, i]))
            if not better.any() or np.array_equal(following, u):
                break
            u = np.where(better[:, None], following, u)
        return self._turned(i, sign, kept[int(np.argmax(best))], float(best.max()))

    def _turned(self, i: int, sign: float, u: Array, best: float) -> tuple[float | None, Array]:
        """Turn single errors over while that helps."""
        for _ in range(STEPS):
            others = np.repeat(u[None], len(u), axis=0)
            np.fill_diagonal(others, np.where(u == 0, 1.0, -u))
            values = sign * self.over.values(others)[:, i]
            if np.isnan(values).any():
                return None, others[int(np.argmax(np.isnan(values)))]
            if not len(values) or values.max() <= best:
                return sign * best, u
            u, best = others[int(np.argmax(values))], float(values.max())
        return sign * best, u
