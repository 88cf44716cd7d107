"""Move the nominal design within its ranges so that more builds pass.

The smallest margin of all windows and limits, each in standard deviations of its objective, is made as great as it
gets. Deviations follow from exact slopes over all unit errors; how they change with the design (wide flexures mind an
etch bias less) enters by small differences. Whether the move raised the yield is for fresh builds to say:
it is kept only if it did.

Symbols: ``t`` free variables as in `inverse.design.problem`, ``σ`` standard deviation of an objective over builds.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from inverse.assembly.terms import Array
from inverse.design.constrained import Evaluated, constrained_minimum
from inverse.design.problem import Problem
from inverse.tolerance.distributions import LIMIT_SIGMA, Errors
from inverse.tolerance.yields import Yield, measure_yield
from objectives.base import AtLeast, AtMost, Target

ENOUGH = 6.0
"""Standard deviations of margin beyond which more is no gain."""

STEP = 1e-5
"""Step in ``t`` over which deviations are differenced: they come from exact slopes and carry 1e-10 of noise."""

DEVIATION = {"normal": 1 / LIMIT_SIGMA, "uniform": 1 / np.sqrt(3), "triangular": 1 / np.sqrt(6)}
"""Standard deviations of unit errors; the truncation of the normal one at three is left out."""

SURE = 1e-9
"""Relative deviation below which an objective does not vary."""

ErrorsAt = Callable[[Array], Errors]
"""Unit errors at nominal base dimensions (D,)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Recentred:
    """Where the nominal design went, and the yield before and after on the same fresh builds."""

    x: Array
    before: Yield
    after: Yield
    moved: bool


def recentre(problem: Problem, x: Array, errors_at: ErrorsAt, *, seed: int) -> Recentred:
    """Move a design ``x`` (P,) towards the middle of what its builds need."""
    t = _widest_margin(problem, problem.points(x[None])[0], errors_at)
    moved = problem.designs(t)[0]
    before, after = (_yield(problem, one, errors_at, seed) for one in (x, moved))
    if after.share > before.share:
        return Recentred(x=moved, before=before, after=after, moved=True)
    return Recentred(x=x, before=before, after=before, moved=False)


def _yield(problem: Problem, x: Array, errors_at: ErrorsAt, seed: int) -> Yield:
    evaluator = problem.evaluator
    return measure_yield(evaluator, x, errors_at(evaluator.nominal(x[None])[0]), seed=seed)


def _widest_margin(problem: Problem, t: Array, errors_at: ErrorsAt) -> Array:
    """Greatest ``s`` with every margin at least ``s σ``; the point itself if there is no better one."""

    def at(t_and_s: Array) -> Evaluated:
        margins, slopes = _margins(problem, t_and_s[:-1], errors_at)
        s = float(t_and_s[-1])
        room = np.hstack([slopes, -np.ones((len(margins), 1))])
        return -s, np.append(np.zeros(len(t_and_s) - 1), -1.0), margins - s, room

    margins, _ = _margins(problem, t, errors_at)
    if not len(margins) or not np.isfinite(margins).all():
        return t
    least = min(float(margins.min()), ENOUGH)
    lower = np.append(problem.lower, min(least, 0.0) - 1.0)
    found = constrained_minimum(at, np.append(t, least), lower, np.append(problem.upper, ENOUGH))
    reached, _ = _margins(problem, found[:-1], errors_at)
    return found[:-1] if np.isfinite(reached).all() and reached.min() > least else t


def _deviations(problem: Problem, t: Array, errors_at: ErrorsAt) -> tuple[Array, Array]:
    """Standard deviation of every objective, (m,), and its slopes over ``t``, (m, p)."""
    points = np.vstack([t[None], t + STEP * np.eye(len(t))])
    evaluation = problem.evaluate(points)
    nominal = problem.evaluator.nominal(evaluation.x)
    jacobian = evaluation.dimension_jacobian()
    spread = np.array([_spread(slopes, errors_at(base), base) for slopes, base in zip(jacobian, nominal, strict=True)])
    # A point at the upper end of its range cannot step beyond it: its deviation then counts as constant.
    return spread[0], (spread[1:] - spread[0]).T / STEP


def _spread(jacobian: Array, errors: Errors, base: Array) -> Array:
    unit = np.array([DEVIATION[name] for name in errors.distribution])
    return np.asarray(np.linalg.norm(jacobian @ errors.slopes(base).toarray() * unit, axis=1))


def _margins(problem: Problem, t: Array, errors_at: ErrorsAt) -> tuple[Array, Array]:
    """Distances to every edge in standard deviations, (c,), and their slopes over ``t``, (c, p)."""
    evaluation = problem.evaluate(t[None])
    values, slopes = evaluation.values()[0], problem.slopes(evaluation.jacobian())[0]
    deviations, bends = _deviations(problem, t, errors_at)
    margins: list[float] = []
    rows: list[Array] = []

    def edge(distance: float, slope: Array, i: int) -> None:
        # An objective that no error moves keeps its place with plenty of margin.
        scale = float(deviations[i]) + SURE * (abs(float(values[i])) or 1.0)
        margins.append(distance / scale)
        rows.append(slope / scale - distance / scale**2 * bends[i])

    for i, objective in enumerate(problem.evaluator.objectives):
        match objective.requirement:
            case Target(target, within):
                edge(within - (values[i] - target), -slopes[i], i)
                edge(within + (values[i] - target), slopes[i], i)
            case AtLeast(limit):
                edge(values[i] - limit, slopes[i], i)
            case AtMost(limit):
                edge(limit - values[i], -slopes[i], i)
            case _:
                continue
    return np.array(margins), np.array(rows).reshape(len(margins), len(t))
