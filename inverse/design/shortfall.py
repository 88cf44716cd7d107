"""Why a design stops short: what misses, what holds it, what pulls against what, and what would help.

A relaxation is found by solving for it: the least common widening of windows and limits within the ranges,
and for each variable on an end of its range the least opening of that end with which everything is met.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from inverse.assembly.parameters import Variable
from inverse.assembly.terms import Array
from inverse.design.constrained import Evaluated, constrained_minimum
from inverse.design.gradient import room
from inverse.design.population import solve_population
from inverse.design.problem import Problem
from inverse.evaluation.evaluator import Evaluator
from inverse.units import Kind, format_quantity, quantity_dimension
from objectives.base import AtLeast, AtMost, Objective, Target, met

OPPOSED = -0.1
"""Two pulls with a cosine below this act against each other."""

WIDEST = 10.0
"""A range is opened by at most this factor when a relaxation is looked for."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Shortfall:
    """Why a run stopped short, in the order a reader would look.

    `held` names variables on an end of their range, `opposed` pairs of objectives that pull against each
    other, `relaxations` sentences that each name a change that would do, the smallest found.
    """

    missed: tuple[str, ...]
    held: dict[str, str]
    opposed: tuple[tuple[str, str], ...]
    relaxations: tuple[str, ...]


def explain(problem: Problem, point: Array, seed: int) -> Shortfall:
    """Look at the point (p,) that comes closest."""
    values = problem.evaluate(point[None]).values()[0]
    objectives = problem.evaluator.objectives
    missed = [o.label for o, value in zip(objectives, values, strict=True) if _misses(o, value)]
    held = problem.held(point)
    return Shortfall(
        missed=tuple(missed),
        held=held,
        opposed=_opposed(problem, point),
        relaxations=(*_wider_windows(problem, point), *_wider_ranges(problem, point, held, seed)),
    )


def _misses(objective: Objective, value: float) -> bool:
    verdict = met(objective.requirement, np.array([value]))
    return verdict is not None and not verdict[0]


def _opposed(problem: Problem, point: Array) -> tuple[tuple[str, str], ...]:
    """Pairs of objectives of which one is missed and the other would be left by following its pull.

    An objective pulls along minus the gradient of its squared residual, projected on the ranges.
    """
    evaluation = problem.evaluate(point[None])
    slopes = problem.slopes(evaluation.jacobian())[0]
    values = evaluation.values()[0]
    pulls: dict[str, Array] = {}
    for objective, value, slope in zip(problem.evaluator.objectives, values, slopes, strict=True):
        match objective.requirement:
            case Target(target, _):
                pull = np.sign(target - value) * slope
            case AtLeast():
                pull = slope
            case AtMost():
                pull = -slope
            case _:
                continue
        if np.isfinite(pull).all() and np.linalg.norm(pull) > 0:
            pulls[objective.label] = pull / np.linalg.norm(pull)
    labels = [o.label for o, v in zip(problem.evaluator.objectives, values, strict=True) if _misses(o, float(v))]
    pairs = {
        frozenset((one, other)): float(pulls[one] @ pulls[other])
        for one in labels
        for other in pulls
        if one in pulls and one != other
    }
    order = [label for label in pulls]
    ranked = sorted(pairs, key=lambda pair: pairs[pair])
    return tuple(
        (first, second) for pair in ranked if pairs[pair] < OPPOSED for first, second in [sorted(pair, key=order.index)]
    )


def _wider_windows(problem: Problem, point: Array) -> tuple[str, ...]:
    """The least common widening of windows and limits, as one sentence for what then still had missed."""

    def at(t_and_s: Array) -> Evaluated:
        evaluation = problem.evaluate(t_and_s[None, :-1])
        left, slopes = room(problem, evaluation)
        ahead = np.append(np.zeros(len(t_and_s) - 1), 1.0)
        return float(t_and_s[-1]), ahead, left + t_and_s[-1], np.hstack([slopes, np.ones((len(left), 1))])

    left, _ = room(problem, problem.evaluate(point[None]))
    if not np.isfinite(left).all():
        return ()
    worst = max(-float(left.min()), 0.0)
    start = np.append(point, worst)
    found = constrained_minimum(at, start, np.append(problem.lower, 0.0), np.append(problem.upper, 2 * worst + 1e-9))
    nearest = point if at(found)[2].min() < -1e-6 else found[:-1]
    values = problem.evaluate(nearest[None]).values()[0]
    changes = [
        _window_change(objective, float(value))
        for objective, value in zip(problem.evaluator.objectives, values, strict=True)
        if _misses(objective, float(value))
    ]
    return ("within the ranges: " + " and ".join(changes),) if changes else ()


def _window_change(objective: Objective, value: float) -> str:
    unit = _kind(objective.unit)
    match objective.requirement:
        case Target(target, within):
            needed = abs(value - target)
            return (
                f"widen `{objective.label}` from ± {format_quantity(within, unit)} to ± {format_quantity(needed, unit)}"
            )
        case AtLeast(limit) | AtMost(limit):
            moved = f"from {format_quantity(limit, unit)} to {format_quantity(value, unit)}"
            return f"move the limit of `{objective.label}` {moved}"
        case _:
            return objective.label


def _kind(unit: str) -> Kind:
    return next(kind for kind in Kind if kind.unit == unit)


def _wider_ranges(problem: Problem, point: Array, held: dict[str, str], seed: int) -> tuple[str, ...]:
    """For each variable on an end of its range, how far that end must open."""
    sentences = []
    for name, end in held.items():
        opened = _opened(problem, name, end)
        k = [problem.variables[i].name for i in problem.free].index(name)
        found = solve_population(
            lambda t, opened=opened: opened.windows(t, 0.9),
            opened.lower,
            opened.upper,
            rng=np.random.default_rng(seed),
            starts=4,
            first=point[None],
            wanted=1,
            tolerance=1e-8,
        )
        if not len(found.solutions):
            continue
        t = _least_opening(opened, found.solutions[0], k, end)
        value = float(opened.designs(t)[0][problem.free[k]])
        dimension = quantity_dimension(f"1 {problem.variables[problem.free[k]].unit}")[1]
        sentences.append(
            f"open the range of `{name}` {'down' if end == 'low' else 'up'} to {format_quantity(value, dimension)}"
        )
    return tuple(sentences)


def _opened(problem: Problem, name: str, end: str) -> Problem:
    """The same problem with one end of one range moved outward."""

    def wider(v: Variable) -> Variable:
        if v.name != name:
            return v
        if v.positive:
            return replace(v, low=v.low / WIDEST) if end == "low" else replace(v, high=v.high * WIDEST)
        span = v.high - v.low
        return replace(v, low=v.low - span) if end == "low" else replace(v, high=v.high + span)

    model = problem.evaluator.model
    parameters = replace(model.parameters, variables=tuple(map(wider, problem.variables)))
    return Problem(Evaluator(replace(model, parameters=parameters), problem.evaluator.objectives))


def _least_opening(problem: Problem, start: Array, k: int, end: str) -> Array:
    """From a design in the opened range, the one that opens it least."""
    sign = -1.0 if end == "low" else 1.0
    ahead = np.zeros(len(start))
    ahead[k] = sign

    def at(t: Array) -> Evaluated:
        return sign * float(t[k]), ahead, *room(problem, problem.evaluate(t[None]))

    t = constrained_minimum(at, start, problem.lower, problem.upper)
    good = problem.all_met(problem.evaluate(t[None]).values())[0] and sign * t[k] <= sign * start[k]
    return t if good else start
