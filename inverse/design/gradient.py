"""The gradient route: many starts, exact Jacobians, then what is to be least.

Targets are residuals over their windows and limits are hinges; a population of starts drives them to zero. Where
that cannot be, it drives them inside the windows. Wishes (minimise, maximise) are improved by sequential quadratic
programming [1]_ once everything else holds, windows and limits as constraints.

References
----------
.. [1] D. Kraft, "A software package for sequential quadratic programming", DFVLR-FB 88-28, 1988 (SLSQP).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np

from inverse.assembly.terms import Array, IntArray
from inverse.design.constrained import Evaluated, constrained_minimum
from inverse.design.population import Budget, PopulationResult, Stop, solve_population
from inverse.design.problem import Problem
from inverse.evaluation.evaluator import Choices, Evaluation
from objectives.base import Maximise
from objectives.keep_out import KeepOut

EXACT = 1e-8
"""Residuals, in windows, at which a target counts as hit."""

INSIDE = 0.9
"""Where targets cannot all be hit, the share of each window to aim for."""

EDGE = 1 - 1e-7
"""Share of each window that stays usable while a wish is pursued."""

DISTINCT = 1e-4
"""Designs closer than this share of the ranges, in every variable, are one design."""

SAMPLES = 64
"""Random designs looked at to see on which sides of a band the modes can lie."""

LATER = Budget(evaluations=60_000)
"""What each attempt after the first may cost."""

MOST_CHOICES = 12
"""Ways of passing keep-out bands that are tried one by one after the nearest."""

NOWHERE_STABLE = "every design tried topples: none rests in stable equilibrium"

Progress = Callable[[str], None]


@dataclass(frozen=True)
class Outcome:
    """Designs found by the route.

    Attributes
    ----------
    designs : ndarray, shape (k, p)
        Distinct points at which everything is met, the best first.
    closest : ndarray, shape (p,)
        The first of them, or the point that comes closest.
    stopped : str
        Why the search ended, in words.
    """

    designs: Array
    closest: Array
    stopped: str


def solve_by_gradient(
    problem: Problem, *, seed: int, starts: int, alternatives: int, progress: Progress = lambda _: None
) -> Outcome:
    """Find up to ``1 + alternatives`` distinct designs that meet everything, improved towards the wishes."""
    if not len(problem.free):
        return Outcome(np.empty((0, 0)), np.empty(0), "there is nothing to choose")
    rng = np.random.default_rng(seed)
    closest: tuple[float, Array] | None = None
    stopped = ""
    for attempt in _attempts(problem, rng):
        progress(attempt.words)
        found = attempt.run(problem, rng, starts, 1 + alternatives)
        stopped = found.stopped_because.value.rstrip(".").lower()
        if found.stopped_because is Stop.INFEASIBLE:
            middle = (problem.lower + problem.upper) / 2
            return Outcome(np.empty((0, len(middle))), middle, NOWHERE_STABLE)
        designs = _met(problem, np.vstack([found.solutions, found.best[None]]))
        if len(designs):
            designs = _improved(problem, designs, progress) if problem.wishes else designs
            return Outcome(distinct(problem, designs)[: 1 + alternatives], designs[0], stopped)
        miss = _miss(problem, found.best)
        if closest is None or miss < closest[0]:
            closest = miss, found.best
    assert closest is not None
    return Outcome(np.empty((0, len(problem.free))), closest[1], stopped)


@dataclass(frozen=True)
class _Attempt:
    """One way of asking: targets hit or windows entered, and which way past each band."""

    words: str
    share: float | None
    choices: dict[int, IntArray] | None
    budget: Budget

    def run(self, problem: Problem, rng: np.random.Generator, starts: int, wanted: int) -> PopulationResult:
        def residuals(t: Array) -> tuple[Array, Array]:
            choices = None if self.choices is None else {i: np.tile(c, (len(t), 1)) for i, c in self.choices.items()}
            return problem.residuals(t, choices) if self.share is None else problem.windows(t, self.share, choices)

        first = None if problem.start is None else problem.start[None]
        return solve_population(
            residuals,
            problem.lower,
            problem.upper,
            rng=rng,
            starts=starts,
            first=first,
            wanted=wanted,
            tolerance=EXACT,
            budget=self.budget,
        )


def _attempts(problem: Problem, rng: np.random.Generator) -> Iterator[_Attempt]:
    """From what is most wanted to what is more lenient; the ways past bands in the order they occur."""
    yield _Attempt("hitting every target", None, None, Budget())
    choices = list(_choices(problem, rng))
    for choice in choices:
        yield _Attempt("hitting every target, modes on other sides of the bands", None, choice, LATER)
    yield _Attempt("entering every window", INSIDE, None, LATER)
    for choice in choices:
        yield _Attempt("entering every window, modes on other sides of the bands", INSIDE, choice, LATER)


def _choices(problem: Problem, rng: np.random.Generator) -> Iterator[dict[int, IntArray]]:
    """Ways past the bands that random designs are nearest to, most frequent first."""
    bands = [(i, o) for i, o in enumerate(problem.evaluator.objectives) if isinstance(o, KeepOut)]
    if not bands:
        return
    t = rng.uniform(problem.lower, problem.upper, (SAMPLES, len(problem.lower)))
    state = problem.evaluate(t).state
    sound = np.flatnonzero(state.modes.stable)
    if not len(sound):
        return
    ways = np.hstack([objective.nearest_choice(state)[sound] for _, objective in bands])
    widths = np.cumsum([0] + [objective.nearest_choice(state).shape[1] for _, objective in bands])
    known, counts = np.unique(ways, axis=0, return_counts=True)
    for way in known[np.argsort(-counts, kind="stable")][:MOST_CHOICES]:
        yield {i: way[widths[k] : widths[k + 1]] for k, (i, _) in enumerate(bands)}


def _met(problem: Problem, points: Array) -> Array:
    """The points at which every objective is met."""
    return points[problem.all_met(problem.evaluate(points).values())]


def _miss(problem: Problem, point: Array) -> float:
    """How far a point is from meeting everything, in windows and relative limits."""
    equal, _, positive, _ = problem.evaluate(point[None]).pursued()
    worst = np.concatenate([np.maximum(np.abs(equal[0]) - 1, 0), np.maximum(-positive[0], 0), [0.0]]).max()
    return float(worst) if np.isfinite(worst) else np.inf


def distinct(problem: Problem, points: Array) -> Array:
    """Points without those that repeat an earlier one."""
    span = problem.upper - problem.lower
    kept: list[Array] = []
    for point in points:
        if all(np.max(np.abs(point - other) / span) > DISTINCT for other in kept):
            kept.append(point)
    return np.array(kept).reshape(-1, points.shape[1])


def _improved(problem: Problem, points: Array, progress: Progress) -> Array:
    """Each point improved towards the wishes; the best first."""
    reference = np.abs(problem.evaluate(points[:1]).values()[0])
    scored = []
    for number, point in enumerate(points):
        progress(f"improving design {number + 1} of {len(points)}")
        better = improve(problem, point, reference)
        scored.append((_wish(problem, problem.evaluate(better[None]), reference)[0], better))
    scored.sort(key=lambda pair: pair[0])
    return np.array([point for _, point in scored])


def _wish(problem: Problem, evaluation: Evaluation, reference: Array) -> tuple[float, Array]:
    """Weighted sum of what is to be least, each in units of its first value; with its slope over ``t``."""
    values, slopes = evaluation.values()[0], problem.slopes(evaluation.jacobian())[0]
    total, slope = 0.0, np.zeros(slopes.shape[1])
    for i in problem.wishes:
        objective = problem.evaluator.objectives[i]
        sign = -1.0 if isinstance(objective.requirement, Maximise) else 1.0
        factor = sign * objective.weight / (reference[i] or 1.0)
        total, slope = total + factor * values[i], slope + factor * slopes[i]
    return total, slope


def improve(problem: Problem, point: Array, reference: Array) -> Array:
    """Least weighted sum of the wishes from one point, everything else kept; the point itself if none is better."""
    ways = _ways_at(problem, point)

    def at(t: Array) -> Evaluated:
        evaluation = problem.evaluate(t[None])
        return *_wish(problem, evaluation, reference), *room(problem, evaluation, ways)

    t = constrained_minimum(at, point, problem.lower, problem.upper)
    better = bool(problem.all_met(problem.evaluate(t[None]).values())[0]) and at(t)[0] <= at(point)[0]
    return t if better else point


def room(problem: Problem, evaluation: Evaluation, ways: Choices | None = None) -> tuple[Array, Array]:
    """What is left of every window and limit, (c,), with slopes over ``t``, (c, p); one build."""
    equal, equal_slope, positive, positive_slope = evaluation.pursued(ways)
    left = np.concatenate([EDGE - equal[0], EDGE + equal[0], positive[0]])
    slopes = np.concatenate([-equal_slope[0], equal_slope[0], positive_slope[0]])
    return left, problem.slopes(slopes[None])[0]


def _ways_at(problem: Problem, point: Array) -> Choices:
    """The way past each band that a design already takes."""
    state = problem.evaluate(point[None]).state
    return {
        i: objective.nearest_choice(state)
        for i, objective in enumerate(problem.evaluator.objectives)
        if isinstance(objective, KeepOut)
    }
