"""Which errors spend the scatter of an objective: variance shares, and the linear budget beside them.

Symbols
-------
p          points of the unit cube, (B, U); ``A`` and ``B`` independent ones, ``A_i`` is ``A`` with input i from ``B``
f, V       a value and its variance
S_i, T_i   first-order and total Sobol' index: what of V goes when input i is known, what is left when all others are
σ_u        standard deviation of a unit error

``S_i`` by the estimator of Saltelli et al. [1]_ (their table 2, b), ``V S_i = E[f(B)(f(A_i) − f(A))]``, ``T_i``
by that of Jansen [2]_, ``V T_i = ½ E[(f(A) − f(A_i))²]``, from scrambled Sobol' points. Errors are those of the mean
over independent scramblings.

The linear budget is ``(∂v/∂u)² σ_u²``, from the slopes at the nominal design.

References
----------
.. [1] A. Saltelli, P. Annoni, I. Azzini, F. Campolongo, M. Ratto and S. Tarantola, "Variance based sensitivity
   analysis of model output. Design and estimator for the total sensitivity index", Comput. Phys. Commun. 181(2),
   2010, pp. 259-270.
.. [2] M. J. W. Jansen, "Analysis of variance designs for model output", Comput. Phys. Commun. 117, 1999, pp. 35-43.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from math import erf

import numpy as np

from inverse.assembly.terms import Array, IntArray
from inverse.evaluation.evaluator import Evaluator
from inverse.tolerance.distributions import LIMIT_SIGMA, Cube, Errors, Shape, unit_errors
from inverse.tolerance.sensitivities import OverErrors

POINTS = 2**12
"""Points of ``A`` by default, over all scramblings."""

SCRAMBLINGS = 8
"""Independent ones, from whose differences the errors are taken."""

CHUNK = 2**14
"""Values computed at a time at most."""

LARGEST_DRAW = 2**12
"""Points drawn at a time at most; a power of two."""

PILOT = 2**6
"""Values from which a typical one is taken."""

FLAT = 1e-24
"""Variance below this share of a typical value squared is rounding."""

DISAGREE = 0.1
"""Difference of a share, or of the standard deviation in parts of itself, that is worth a remark."""

Function = Callable[[Array], Array]
"""Points of the unit cube (B, U) to values (B, m); NaN where there is none."""


@dataclass(frozen=True, slots=True, kw_only=True)
class SobolIndices:
    """Variance shares of ``m`` values by ``k`` groups of inputs.

    Attributes
    ----------
    first, total : ndarray, shape (m, k)
        Zero where nothing varies.
    first_error, total_error : ndarray, shape (m, k)
        Standard errors.
    mean, variance : ndarray, shape (m,)
    undefined : ndarray, shape (m,)
        Share of points left out because a value was missing.
    evaluations : int
    """

    first: Array
    total: Array
    first_error: Array
    total_error: Array
    mean: Array
    variance: Array
    undefined: Array
    evaluations: int


def sobol_indices(
    function: Function,
    inputs: int,
    *,
    seed: int,
    groups: Sequence[Sequence[int]] | None = None,
    points: int = POINTS,
    scramblings: int = SCRAMBLINGS,
) -> SobolIndices:
    """Sobol' indices of any vectorised function of the unit cube.

    Parameters
    ----------
    function : callable
        Points (B, U) to values (B, m).
    inputs : int
        ``U``.
    seed : int
        Of the scramblings.
    groups : sequence of sequences of int, optional
        Inputs that count as one; by default each for itself.
    points : int
        Over all scramblings; a power of two times their number is balanced best. The function is evaluated at
        ``points · (k + 2)``.
    scramblings : int
        At least two.
    """
    sets = [np.asarray(group, np.intp) for group in ([[i] for i in range(inputs)] if groups is None else groups)]
    each = max(points // scramblings, 1)
    seeds = np.random.SeedSequence(seed).generate_state(scramblings)
    origin = _origin(function(next(Cube(inputs, int(seeds[0])).chunks(PILOT, PILOT))))
    sums = [_one_scrambling(function, inputs, sets, int(one), each, origin) for one in seeds]
    shares = [_shares(one, origin) for one in sums]
    first, total, mean, variance = _shares(np.sum(sums, axis=0), origin)
    counted = np.sum([one[0] for one in sums], axis=0).mean(axis=1)
    asked = each * scramblings
    return SobolIndices(
        first=first,
        total=total,
        first_error=_standard_error([one[0] for one in shares]),
        total_error=_standard_error([one[1] for one in shares]),
        mean=origin + mean,
        variance=variance,
        undefined=1 - counted / asked,
        evaluations=asked * (len(sets) + 2) + PILOT,
    )


def _origin(values: Array) -> Array:
    """A typical value: taken from f it changes no index, but keeps the mean out of the scatter of estimators."""
    return np.array([np.mean(v[np.isfinite(v)]) if np.isfinite(v).any() else 0.0 for v in values.T])


def _one_scrambling(
    function: Function, inputs: int, groups: list[IntArray], seed: int, points: int, origin: Array
) -> Array:
    """Sums (5, m, k) over the points: how many, and those of the products that `_shares` needs."""
    size = 2 ** int(np.log2(np.clip(CHUNK // (len(groups) + 2), 2, LARGEST_DRAW)))
    sums = np.zeros((5, len(origin), len(groups)))
    for drawn in Cube(2 * inputs, seed).chunks(points, size):
        A, B = drawn[:, :inputs], drawn[:, inputs:]
        mixed = np.repeat(A[None], len(groups), axis=0)
        for own, group in zip(mixed, groups, strict=True):
            own[:, group] = B[:, group]
        values = function(np.concatenate([A, B, *mixed])).reshape(len(groups) + 2, len(drawn), -1)
        sums += _sums(values - origin)
    return sums


def _sums(values: Array) -> Array:
    """From values (k + 2, b, m) at ``A``, ``B`` and ``A_i``."""
    sound = np.isfinite(values).all(axis=0)
    values = np.where(sound, values, 0.0)
    a, b, mixed = values[0], values[1], values[2:]
    first = (b * (mixed - a)).sum(axis=1).T
    total = ((a - mixed) ** 2).sum(axis=1).T / 2
    common = [sound.sum(axis=0), (a + b).sum(axis=0) / 2, (a**2 + b**2).sum(axis=0) / 2]
    return np.stack([*(np.broadcast_to(one[:, None], first.shape) for one in common), first, total])


def _shares(sums: Array, origin: Array) -> tuple[Array, Array, Array, Array]:
    """First-order and total indices (m, k), mean and variance (m,)."""
    with np.errstate(invalid="ignore", divide="ignore"):
        mean, square, first, total = sums[1:] / sums[0]
        variance = square - mean**2
        varies = variance > FLAT * origin[:, None] ** 2
        first, total = (np.where(varies, one / variance, 0.0) for one in (first, total))
    return first, total, mean.mean(axis=1), np.where(varies, variance, 0.0).mean(axis=1)


def _standard_error(replicates: list[Array]) -> Array:
    return np.asarray(np.std(replicates, axis=0, ddof=1) / np.sqrt(len(replicates)))


def unit_deviation(distribution: Shape) -> float:
    """Standard deviation of a unit error (closed forms)."""
    match distribution:
        case "normal":
            cut = LIMIT_SIGMA
            density = np.exp(-(cut**2) / 2) / np.sqrt(2 * np.pi)
            inside = erf(cut / np.sqrt(2))
            return float(np.sqrt(1 - 2 * cut * density / inside) / cut)
        case "uniform":
            return 3**-0.5
        case "triangular":
            return 6**-0.5


@dataclass(frozen=True, slots=True, kw_only=True)
class Contribution:
    """What one error, or several that move the same dimensions, adds to the variance of one objective.

    Attributes
    ----------
    label : str
        Of the objective.
    moves : tuple of str
        The dimensions that the errors move: one for errors of its own, several for what parts have in common.
    first_order, total : float
        Sobol' indices, as estimated: from sampling they may fall a little outside [0, 1].
    first_error, total_error : float
        Standard errors.
    linear : float
        Share in the linear budget.
    """

    label: str
    moves: tuple[str, ...]
    first_order: float
    total: float
    first_error: float
    total_error: float
    linear: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Scatter:
    """Scatter of one objective over all builds.

    `deviation` is its standard deviation, `linear_deviation` what the linear budget says, `undefined` the
    share of builds left out because a value was missing; `remark` is None where both agree.
    """

    label: str
    unit: str
    mean: float
    deviation: float
    linear_deviation: float
    undefined: float
    remark: str | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Contributions:
    """Per objective its scatter, and all shares: objectives in order, within each the greatest total first.

    Empty where there are no errors.
    """

    scatter: tuple[Scatter, ...]
    shares: tuple[Contribution, ...]
    builds: int
    seed: int


def contributions(evaluator: Evaluator, x: Array, errors: Errors, *, seed: int, points: int = POINTS) -> Contributions:
    """Variance shares of every objective of one design by the errors of its parts.

    Parameters
    ----------
    evaluator : Evaluator
    x : ndarray, shape (P,)
        Variables of the design.
    errors : Errors
    seed : int
    points : int
        See `sobol_indices`; errors that move the same dimensions count as one input.
    """
    if not errors.units:
        return Contributions(scatter=(), shares=(), builds=0, seed=seed)
    over = OverErrors(evaluator, x, errors)
    groups = _groups(errors)
    found = sobol_indices(
        lambda p: over.values(unit_errors(errors, p).T),
        errors.units,
        seed=seed,
        groups=list(groups.values()),
        points=points,
    )
    budget = _linear_budget(over, list(groups.values()))
    names = [dimension.name for dimension in evaluator.model.parameters.dimensions]
    moves = [tuple(names[place] for place in places) for places in groups]
    scatter, shares = [], []
    for i, objective in enumerate(evaluator.objectives):
        own = [
            Contribution(
                label=objective.label,
                moves=moved,
                first_order=float(found.first[i, k]),
                total=float(found.total[i, k]),
                first_error=float(found.first_error[i, k]),
                total_error=float(found.total_error[i, k]),
                linear=float(budget[i, k] / (budget[i].sum() or 1.0)),
            )
            for k, moved in enumerate(moves)
        ]
        shares += sorted(own, key=lambda one: -one.total)
        deviation, linear = float(np.sqrt(found.variance[i])), float(np.sqrt(budget[i].sum()))
        scatter.append(
            Scatter(
                label=objective.label,
                unit=objective.unit,
                mean=float(found.mean[i]),
                deviation=deviation,
                linear_deviation=linear,
                undefined=float(found.undefined[i]),
                remark=_remark(objective.label, deviation, linear, own),
            )
        )
    return Contributions(scatter=tuple(scatter), shares=tuple(shares), builds=found.evaluations, seed=seed)


def _groups(errors: Errors) -> dict[tuple[int, ...], list[int]]:
    """Unit errors by the dimensions they move."""
    groups: dict[tuple[int, ...], list[int]] = {}
    for unit in range(errors.units):
        places = tuple(sorted(errors.dimension[errors.unit == unit].tolist()))
        groups.setdefault(places, []).append(unit)
    return groups


def _linear_budget(over: OverErrors, groups: list[list[int]]) -> Array:
    """``Σ (∂v/∂u)² σ_u²`` of each group, shape (m, k)."""
    _, slopes = over.slopes(np.zeros((1, over.errors.units)))
    deviation = np.array([unit_deviation(distribution) for distribution in over.errors.distribution])
    variance = (slopes[0] * deviation) ** 2
    return np.array([variance[:, group].sum(axis=1) for group in groups]).reshape(len(groups), -1).T


def _remark(label: str, deviation: float, linear: float, own: list[Contribution]) -> str | None:
    """Where the linear budget misleads."""
    if deviation == 0:
        return None
    if linear < (1 - DISAGREE) * deviation:
        share = 100 * (linear / deviation) ** 2
        return (
            f"the linear budget holds {share:.0f} % of the variance of {label}: the rest is of second order, or from "
            "errors that only act together, and falls faster than in proportion when tolerances are tightened"
        )
    if linear > (1 + DISAGREE) * deviation:
        return f"the linear budget says {linear / deviation:.3g} times the true scatter of {label}: use the shares"
    off = [one for one in own if abs(one.linear - one.total) > DISAGREE + 3 * one.total_error]
    if off:
        names = ", ".join(" and ".join(one.moves) for one in off)
        return f"the linear budget of {label} misjudges {names}: use the shares"
    return None
