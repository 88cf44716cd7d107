"""What an error of one part does to each objective: first and second order, and what the stated limit comes to.

Symbols
-------
d, d₀    base dimensions of a build and their nominal values, SI
v        measured values of the objectives, with ``v(d₀ + Δ) ≈ v + gᵀΔ + ½ Δᵀ H Δ``
f, λ     frequencies [Hz] and eigenvalues [rad²/s²], ``f = √λ/2π``
t        limit of an error

Gradients are exact. Curvatures of frequencies and of what is made of them are exact too (`inverse.modal.curvature`);
those of all else are central differences of exact gradients, extrapolated as in [1]_, with the error that
extrapolation sees. Where no derivative exists (the modes of an objective coincide, the judged mode changes) slope
and curvature are those of the parabola through the values at both limits. The difference of two equal parts has
a slope of exactly zero, so that parts are ranked by ``|g| t + ½ |H| t²``.

References
----------
.. [1] C. J. F. Ridders, "Accurate computation of F'(x) and F'(x) F''(x)", Adv. Eng. Softw. 4(2), 1982, pp. 75-76.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Literal

import numpy as np

from inverse.assembly.assembly import Model
from inverse.assembly.terms import Array, IntArray
from inverse.evaluation.evaluator import Evaluation, Evaluator
from inverse.evaluation.state import BuildState
from inverse.modal.curvature import second_derivatives
from inverse.modal.inertia import dense_chunk, parts
from inverse.modal.sensitivity import clustered
from inverse.tolerance.distributions import Errors
from inverse.units import Kind, format_quantity
from objectives.base import Objective
from objectives.frequency import BeatPeriod, Frequency, FrequencyRatio, Period, Splitting

FIRST_STEP = 2.0**-6
"""Widest step of the differences, as a share of the dimension (of its limit where it may be zero)."""

NARROWER = 4.0
"""Each step over the next."""

LEVELS = 5
"""Steps."""

DOUBT = 0.1
"""Share of the effect that the error of the differences may have before the parabola through the limits is used."""

REACH = 0.2
"""Share of the change at a limit by which second order may miss it and still be said to describe it."""

UNMOVED = 1e-9
"""Changes below this share of the value are rounding."""

Method = Literal["exact", "differences", "limits"]
"""Where a curvature comes from; ``limits``: no derivative exists, both are of the parabola through the limits."""


@dataclass(frozen=True)
class OverErrors:
    """Objectives of one design as functions of its unit errors ``u`` (B, U); a build without a value has NaN."""

    evaluator: Evaluator
    x: Array
    errors: Errors

    @cached_property
    def nominal(self) -> Array:
        """Nominal base dimensions (D,)."""
        return np.asarray(self.evaluator.nominal(self.x[None])[0])

    def builds(self, u: Array) -> Array:
        """Base dimensions (B, D)."""
        return np.asarray(self.nominal + (self.errors.slopes(self.nominal) @ u.T).T)

    def values(self, u: Array) -> Array:
        """Measured values (B, m)."""
        return measure_builds(self.evaluator, self.x, self.builds(u))

    def slopes(self, u: Array) -> tuple[Array, Array]:
        """Measured values (B, m) and their derivatives over unit errors (B, m, U)."""
        values, jacobian = slopes_of_builds(self.evaluator, self.x, self.builds(u))
        B, m, D = jacobian.shape
        return values, np.asarray(jacobian.reshape(-1, D) @ self.errors.slopes(self.nominal)).reshape(B, m, -1)


def measure_builds(evaluator: Evaluator, x: Array, base: Array) -> Array:
    """Measured values (B, m) of builds (B, D) of one design; NaN where a part has no substance."""
    values = np.full((len(base), len(evaluator.objectives)), np.nan)
    for builds in parts(_possible(evaluator, base), dense_chunk(evaluator.model)):
        values[builds] = _evaluated(evaluator, x, base[builds]).values()
    return values


def slopes_of_builds(evaluator: Evaluator, x: Array, base: Array) -> tuple[Array, Array]:
    """As `measure_builds`, and the derivatives over base dimensions (B, m, D), zero where there is no value."""
    values = np.full((len(base), len(evaluator.objectives)), np.nan)
    jacobian = np.zeros((*values.shape, base.shape[1]))
    for builds in parts(_possible(evaluator, base), dense_chunk(evaluator.model)):
        evaluation = _evaluated(evaluator, x, base[builds])
        values[builds], jacobian[builds] = evaluation.values(), evaluation.dimension_jacobian()
    return values, jacobian


def _possible(evaluator: Evaluator, base: Array) -> IntArray:
    """Builds whose positive dimensions are."""
    return np.flatnonzero((base[:, evaluator.model.parameters.positive] > 0).all(axis=1))


def _evaluated(evaluator: Evaluator, x: Array, base: Array) -> Evaluation:
    return evaluator.of_dimensions(base, np.broadcast_to(x, (len(base), len(x))))


@dataclass(frozen=True, slots=True, kw_only=True)
class Expansion:
    """Measured values of one design to second order over its base dimensions, SI.

    Attributes
    ----------
    value : ndarray, shape (m,)
    first : ndarray, shape (m, D)
    second : ndarray, shape (m, D, D)
        Zero outside the `places` that were asked for.
    error : ndarray, shape (m, D, D)
        Of the curvatures taken by differences, as extrapolation sees it; zero where they are exact.
    method : tuple of str
        One per objective. ``limits`` says that there is no derivative: what stands here must not be used.
    """

    value: Array
    first: Array
    second: Array
    error: Array
    method: tuple[Method, ...]


def expand(evaluator: Evaluator, x: Array, places: Sequence[int], scale: Array | None = None) -> Expansion:
    """Expand the objectives of one design.

    Parameters
    ----------
    evaluator : Evaluator
    x : ndarray, shape (P,)
        Variables of the design.
    places : sequence of int
        Base dimensions between which curvatures are wanted.
    scale : ndarray, shape (D,), optional
        What a step is a share of; by default the size of each dimension, one for those that are zero.
    """
    nominal = evaluator.nominal(x[None])
    evaluation = _evaluated(evaluator, x, nominal)
    m, D = len(evaluator.objectives), nominal.shape[1]
    at, first = np.asarray(places, np.intp), evaluation.dimension_jacobian()[0]
    second, error = np.zeros((m, D, D)), np.zeros((m, D, D))
    methods = [_method(objective, evaluation.state) for objective in evaluator.objectives]
    bends: dict[int, tuple[Array, Array]] = {}
    for i, objective in enumerate(evaluator.objectives):
        if methods[i] == "exact":
            second[i][np.ix_(at, at)] = _exact(objective, evaluation.state, bends)[np.ix_(at, at)]
    rest = [i for i, method in enumerate(methods) if method == "differences"]
    if rest and len(at):
        size = np.where(nominal[0] == 0, 1.0, np.abs(nominal[0])) if scale is None else scale
        found = _differences(evaluator, x, nominal[0], rest, at, size)
        for i, own, doubt in zip(rest, *found, strict=True):
            second[i][np.ix_(at, at)], error[i][np.ix_(at, at)] = own, doubt
    return Expansion(value=evaluation.values()[0], first=first, second=second, error=error, method=tuple(methods))


def _method(objective: Objective, state: BuildState) -> Method:
    """Curvatures of single modes are exact; those of a mode that shares its frequency do not exist."""
    if not isinstance(objective, Frequency | Period | Splitting | BeatPeriod | FrequencyRatio):
        return "differences"
    places = [int(state.index(mode)[0]) for mode in objective.modes]
    if min(places) < 0 or not state.modes.stable[0]:
        return "limits"
    if clustered(state.modes.eigenvalues[0])[places].sum() > len(places):
        return "limits"
    return "exact" if state.modes.complete else "differences"


def _exact(objective: Objective, state: BuildState, bends: dict[int, tuple[Array, Array]]) -> Array:
    """Curvature (D, D) of a function of one or two frequencies; `bends` keeps those of the eigenvalues."""
    places = [int(state.index(mode)[0]) for mode in objective.modes]
    for j in places:
        if j not in bends:
            bends[j] = second_derivatives(state.matrices, state.modes, j)
    lam = state.modes.eigenvalues[0, places]
    f = np.sqrt(lam) / (2 * np.pi)
    by_local = np.array([bends[j][0] for j in places])
    slopes = (f / (2 * lam))[:, None] * by_local
    own = [
        f_j / (2 * lam_j) * bends[j][1] - f_j / (4 * lam_j**2) * np.outer(g, g)
        for f_j, lam_j, j, g in zip(f, lam, places, by_local, strict=True)
    ]
    gradient, hessian = _over_frequencies(objective, f)
    local = np.tensordot(gradient, own, 1) + slopes.T @ hessian @ slopes
    parameters = state.matrices.model.parameters
    d = np.where(parameters.positive, state.matrices.point.values[0, : len(local)], 1.0)
    # Over d itself: with z = log d, d² ∂²v/∂d² = ∂²v/∂z² − ∂v/∂z.
    local -= np.diag(np.where(parameters.positive, gradient @ slopes, 0.0))
    return np.asarray(local / np.outer(d, d))


def _over_frequencies(objective: Objective, f: Array) -> tuple[Array, Array]:
    """Gradient and Hessian of the measure over the frequencies it is made of."""
    match objective:
        case Frequency():
            return np.ones(1), np.zeros((1, 1))
        case Period():
            return -1 / f**2, np.array([2 / f**3])
        case Splitting():
            return np.array([-1.0, 1.0]), np.zeros((2, 2))
        case BeatPeriod():
            T = 1 / (f[1] - f[0])
            return T**2 * np.array([1.0, -1.0]), 2 * T**3 * np.array([[1.0, -1.0], [-1.0, 1.0]])
        case _:
            ratio = f[1] / f[0]
            cross = -1 / f[0] ** 2
            return np.array([-ratio, 1.0]) / f[0], np.array([[2 * ratio / f[0] ** 2, cross], [cross, 0.0]])


def _differences(
    evaluator: Evaluator, x: Array, nominal: Array, chosen: list[int], at: IntArray, scale: Array
) -> tuple[Array, Array]:
    """Curvatures (k, p, p) of some objectives by differences of their gradients, and their errors."""
    some = Evaluator(evaluator.model, tuple(evaluator.objectives[i] for i in chosen))
    steps = FIRST_STEP * NARROWER ** -np.arange(LEVELS)
    moves = np.zeros((len(at), len(nominal)))
    moves[np.arange(len(at)), at] = scale[at]
    sides = np.array([1.0, -1.0])
    builds = nominal + steps[:, None, None, None] * sides[:, None, None] * moves
    values, jacobian = slopes_of_builds(some, x, builds.reshape(-1, len(nominal)))
    evaluator.modal_solves += some.modal_solves
    jacobian[~np.isfinite(values)] = np.nan
    slopes = jacobian[:, :, at].reshape(LEVELS, 2, len(at), len(chosen), len(at))
    quotients = (slopes[:, 0] - slopes[:, 1]) / (2 * steps[:, None, None, None] * scale[at][:, None, None])
    second, error = _extrapolated(np.moveaxis(quotients, 1, 2))
    turned = np.swapaxes(second, 1, 2)
    return (second + turned) / 2, (error + np.swapaxes(error, 1, 2)) / 2 + np.abs(second - turned) / 2


def _extrapolated(levels: Array) -> tuple[Array, Array]:
    """Limits of central differences (L, ...) whose steps shrink, and what their last corrections were."""
    best, error = levels[0].copy(), np.full(levels[0].shape, np.inf)
    above = [levels[0]]
    for level in levels[1:]:
        row = [level]
        for k, known in enumerate(above, start=1):
            # The k-th correction removes the error of order h^(2k).
            gain = NARROWER ** (2 * k)
            row.append((gain * row[-1] - known) / (gain - 1))
            doubt = np.maximum(np.abs(row[-1] - row[-2]), np.abs(row[-1] - known))
            better = doubt < error
            best, error = np.where(better, row[-1], best), np.where(better, doubt, error)
        above = row
    return best, error


@dataclass(frozen=True, slots=True, kw_only=True)
class Sensitivity:
    """What an error of one dimension, or one common to several, does to one objective.

    Attributes
    ----------
    label, unit : str
        Of the objective.
    value : float
        Its nominal value.
    moves : tuple of str
        The dimensions that the error moves.
    per : str
        SI unit of the error; "1" for a share of each one's nominal value.
    nominal : float
        Nominal value of what is moved, one for a share; NaN where an absolute error is common to unequal dimensions.
    limit : float
        Stated limit of the error, in `per`.
    first, second : float
        Derivatives of the value over the error.
    error : float
        Of `second`; zero where it is exact.
    method : str
        Where `second` comes from.
    down, up : float
        By how much the value really changes at −limit and at +limit; NaN where it has none.
    """

    label: str
    unit: str
    value: float
    moves: tuple[str, ...]
    per: str
    nominal: float
    limit: float
    first: float
    second: float
    error: float
    method: Method
    down: float
    up: float

    @property
    def first_effect(self) -> float:
        """``|g| t``."""
        return abs(self.first) * self.limit

    @property
    def second_effect(self) -> float:
        """``½ |H| t²``."""
        return abs(self.second) * self.limit**2 / 2

    @property
    def effect(self) -> float:
        """What sensitivities are ranked by."""
        return self.first_effect + self.second_effect

    @property
    def percent(self) -> float:
        """First order in percent of the value per percent of the dimension."""
        return self.first * self.nominal / self.value

    @property
    def percent_second(self) -> float:
        """Second order in percent of the value per squared percent of the dimension."""
        return self.second * self.nominal**2 / self.value / 200

    @property
    def described(self) -> bool:
        """Whether first and second order describe what really happens at both limits."""
        return all(
            abs(self.first * t + self.second * t**2 / 2 - change)
            <= REACH * max(abs(self.down), abs(self.up)) + UNMOVED * abs(self.value)
            for t, change in ((-self.limit, self.down), (self.limit, self.up))
        )


def sensitivities(evaluator: Evaluator, x: Array, errors: Errors) -> tuple[Sensitivity, ...]:
    """Sensitivities of every objective to every dimension with a tolerance and every error common to several.

    Parameters
    ----------
    evaluator : Evaluator
    x : ndarray, shape (P,)
        Variables of the design.
    errors : Errors

    Returns
    -------
    tuple of Sensitivity
        Objectives in order, within each the greatest effect first.
    """
    nominal = evaluator.nominal(x[None])[0]
    limits = errors.limits(nominal)
    places = np.flatnonzero(limits)
    scale = np.where(evaluator.model.parameters.positive, nominal, np.maximum(np.abs(nominal), limits))
    expansion = expand(evaluator, x, places.tolist(), np.where(scale == 0, 1.0, scale))
    directions = _directions(evaluator.model, nominal, errors)
    moved = np.array([d.limit * d.vector for d in directions]).reshape(-1, len(nominal))
    changes = measure_builds(evaluator, x, np.concatenate([nominal - moved, nominal + moved])) - expansion.value
    down, up = changes.reshape(2, len(directions), -1)
    rows = []
    for i, objective in enumerate(evaluator.objectives):
        own = [_along(d, objective, expansion, i, down[k, i], up[k, i]) for k, d in enumerate(directions)]
        rows += sorted(own, key=lambda row: -np.nan_to_num(row.effect, nan=np.inf))
    return tuple(rows)


@dataclass(frozen=True, slots=True)
class _Direction:
    """``d = d₀ + s · vector`` for an error ``s`` up to `limit`."""

    vector: Array
    limit: float
    moves: tuple[str, ...]
    per: str
    nominal: float


def _directions(model: Model, nominal: Array, errors: Errors) -> list[_Direction]:
    """One per dimension, whatever its errors, then one per unit error that moves several."""
    dimensions = model.parameters.dimensions
    shown = shown_values(model, nominal)
    found = []
    for place in np.flatnonzero(errors.limits(nominal)):
        vector = np.zeros(len(nominal))
        # A product stands in its own place as a share of what it comes to: per unit of what is shown.
        vector[place] = nominal[place] / shown[place] if shown[place] else 1.0
        limit = float(errors.limits(nominal)[place] / abs(vector[place]))
        dimension = dimensions[place]
        found.append(_Direction(vector, limit, (dimension.name,), dimension.unit, float(shown[place])))
    for unit in range(errors.units):
        entries = np.flatnonzero(errors.unit == unit)
        if len(entries) > 1:
            found.append(_shared(model, nominal, errors, entries))
    return found


def _shared(model: Model, nominal: Array, errors: Errors, entries: IntArray) -> _Direction:
    """An error common to several dimensions, all with the same limit."""
    places = errors.dimension[entries]
    share = bool(errors.relative[entries[0]])
    vector = np.zeros(len(nominal))
    vector[places] = nominal[places] if share else 1.0
    equal = bool((nominal[places] == nominal[places[0]]).all())
    common = float(nominal[places[0]]) if equal else np.nan
    dimensions = [model.parameters.dimensions[place] for place in places]
    return _Direction(
        vector,
        float(errors.size[entries[0]]),
        tuple(dimension.name for dimension in dimensions),
        "1" if share else dimensions[0].unit,
        1.0 if share else common,
    )


def shown_values(model: Model, base: Array) -> Array:
    """Dimensions (D,) as a person reads them: a product is multiplied out."""
    place = {dimension.name: i for i, dimension in enumerate(model.parameters.dimensions)}
    return np.array(
        [
            d.shown.coefficient * np.prod([base[place[name]] ** power for name, power in d.shown.powers])
            for d in model.parameters.dimensions
        ]
    )


def _along(d: _Direction, objective: Objective, expansion: Expansion, i: int, down: float, up: float) -> Sensitivity:
    size = np.abs(d.vector)
    row = Sensitivity(
        label=objective.label,
        unit=objective.unit,
        value=float(expansion.value[i]),
        moves=d.moves,
        per=d.per,
        nominal=d.nominal,
        limit=d.limit,
        first=float(expansion.first[i] @ d.vector),
        second=float(d.vector @ expansion.second[i] @ d.vector),
        error=float(size @ expansion.error[i] @ size),
        method=expansion.method[i],
        down=float(down),
        up=float(up),
    )
    doubtful = row.error * d.limit**2 / 2 > DOUBT * row.effect + UNMOVED * abs(row.value)
    if row.method != "limits" and not doubtful:
        return row
    return replace(
        row, first=(row.up - row.down) / (2 * d.limit), second=(row.up + row.down) / d.limit**2, method="limits"
    )


def sentence(row: Sensitivity) -> str:
    """What a sensitivity means for the shop, in one line."""
    amount = f"{100 * row.limit:.3g} %" if _is_share(row) else quantity(row.limit, row.per)
    names = " and ".join((", ".join(row.moves[:-1]), row.moves[-1])) if len(row.moves) > 1 else row.moves[0]
    who = f"{amount} on {names}" + " together" * (len(row.moves) > 1)
    low, high = sorted((row.down, row.up))
    if not np.isfinite(row.value):
        return f"{row.label} has no value at the nominal design"
    if not np.isfinite(low + high):
        return f"{who} leaves {row.label} without a value"
    if max(abs(low), abs(high)) <= UNMOVED * abs(row.value):
        return f"{who} does not move {row.label}"
    if low * high > 0 and min(abs(low), abs(high)) > max(abs(low), abs(high)) / 2:
        typical = quantity(max(abs(low), abs(high)), row.unit)
        way = "up" if low > 0 else "down"
        return f"{who}, either way, moves {row.label} {way} by {typical}: half the error, a quarter of that"
    if abs(low + high) <= REACH * (high - low):
        return f"{who} moves {row.label} by {quantity((high - low) / 2, row.unit)}"
    return (
        f"{who} moves {row.label} by {_signed(row.down, row.unit)} below and {_signed(row.up, row.unit)} above nominal"
    )


def _is_share(row: Sensitivity) -> bool:
    return row.per == "1" and len(row.moves) > 1


def _signed(value: float, unit: str) -> str:
    return ("+" if value > 0 else "−") + quantity(abs(value), unit)


_KINDS: dict[str, Kind] = {kind.unit: kind for kind in reversed(Kind)}


def quantity(value: float, unit: str) -> str:
    """Three digits in the unit that fits the size."""
    return format_quantity(value, _KINDS[unit], 3) if unit in _KINDS else f"{value:.3g} {unit}"
