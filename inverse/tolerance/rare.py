"""Small failure probabilities: most probable failure points, and importance sampling around them.

Symbols
-------
y        independent standard normal variables, (B, n)
g        limit states, (B, m): a build has failed where any of them is zero or less, or has no value
β        distance of a failure point from the origin of ``y``
w        importance weight, the standard normal density over that of the sampling mixture

Failure points are local minima of ``|y|`` on ``g = 0``, found by the improved method of Hasofer, Lind, Rackwitz and
Fiessler [1]_ from several starts at once. The first-order estimate is ``Σ Φ(−β)``. Sampling is from a mixture of
standard normals shifted to the points, with the density of the whole mixture in every weight [2]_; scrambled Sobol'
points whose first coordinate runs along ``y*`` spend their evenness where failure is decided. Failed builds that
carry more weight than any near the points should start the search anew, so that a region no start has led to is seen.

References
----------
.. [1] Y. Zhang and A. Der Kiureghian, "Two improved algorithms for reliability analysis", in: Reliability and
   Optimization of Structural Systems, 1995, pp. 297-304 (from memory).
.. [2] A. Owen and Y. Zhou, "Safe and effective importance sampling", J. Am. Stat. Assoc. 95, 2000, pp. 135-143.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Literal, Protocol

import numpy as np
from numpy.typing import NDArray

from inverse.assembly.terms import Array, IntArray
from inverse.evaluation.evaluator import Evaluator
from inverse.modal.inertia import parts
from inverse.tolerance.distributions import LIMIT_SIGMA, Cube, Errors, Shape, quantiles
from inverse.tolerance.sensitivities import OverErrors
from objectives.base import AtLeast, AtMost, Requirement, Target

STARTS = 8
"""Random starts of the search beside the origin, in opposite pairs."""

START_RADIUS = 3.0

STEPS = 40
"""Iterations of the search at most."""

DAMPED = 0.2
"""Least curvature learned, in parts of that assumed before."""

WORKSPACE = 2**22
"""Numbers that searches going side by side may hold."""

HALVINGS = 8
"""Of a step, before a search is given up."""

CONVERGED = 1e-3
"""Distance from ``g = 0``, and angle between ``y`` and the slope: the sampling makes good what is left."""

FARTHEST = 9.0
"""No point is looked for beyond this β: ``Φ(−9)`` is 1e-19."""

BISECTIONS = 12
"""Towards the origin, for points of failure that no search has led to a minimum."""

SAME = 0.2
"""Failure points of one limit state closer than this are one."""

RELEVANT = 1e-4
"""Share of the most probable point's ``Φ(−β)`` that another must have to be sampled at."""

MOST_POINTS = 24
"""Points sampled at."""

LEAST_SHARE = 0.05
"""Of the sample for every point, before all shares are made to sum to one."""

SURPRISE = 8.0
"""A failed build whose weight is this many times that at the most probable point stands for a region not seen."""

SEARCHES = 3
"""How often a surprise may start the search anew."""

SCRAMBLINGS = 16
"""Independent Sobol' sequences; the relative error is taken from their scatter."""

ROUND = 64
"""Builds of one scrambling in the first round; every round doubles all."""

NEVER = 2.0**-31
"""Sobol' points are multiples of 2⁻³⁰, zero among them."""


class LimitStates(Protocol):
    """Several limit states over standard normal variables, vectorised over builds."""

    def values(self, y: Array) -> Array:
        """``g``, shape (B, m)."""
        ...

    def slopes(self, y: Array) -> tuple[Array, Array]:
        """``g``, shape (B, m), and ``∂g/∂y``, shape (B, m, n)."""
        ...


@dataclass(frozen=True, slots=True, kw_only=True)
class FailurePoint:
    """A most probable point of failure.

    Attributes
    ----------
    limit : int
        Which limit state fails there.
    beta : float
        Distance from the origin; negative where the origin has failed itself, −∞ where then nothing else was found.
    y : ndarray, shape (n,)
    probability : float
        ``Φ(−β)``.
    minimum : bool
        Whether it is a minimum of ``|y|``; otherwise a point of failure on the way to one that was not reached.
    """

    limit: int
    beta: float
    y: Array
    probability: float
    minimum: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Failure:
    """Probability of failure.

    Attributes
    ----------
    probability : float
        Zero where no failure was found.
    relative_error : float
        Standard error over the probability; infinite where that is zero.
    first_order : float
        ``Σ Φ(−β)`` over the minima: regions that overlap count twice.
    points : tuple of FailurePoint
        The most probable first.
    builds : int
        At which limit states were evaluated, those of the search included.
    seed : int
    """

    probability: float
    relative_error: float
    first_order: float
    points: tuple[FailurePoint, ...]
    builds: int
    seed: int


def failure_probability(
    limits: LimitStates, variables: int, *, seed: int, relative_error: float = 0.03, budget: int = 10_000
) -> Failure:
    """Probability that any limit state fails.

    Parameters
    ----------
    limits : LimitStates
    variables : int
        ``n``.
    seed : int
        Of the starts and of the Sobol' points.
    relative_error : float
        Standard error over the probability at which sampling stops.
    budget : int
        Builds after which it stops in any case.

    Raises
    ------
    ValueError
        If nothing varies: then the nominal design alone decides.
    """
    if variables < 1:
        raise ValueError("expected at least one variable, found none: without errors the nominal design decides")
    counted = _Counted(limits)
    rng = np.random.default_rng(seed)
    half = rng.standard_normal((STARTS // 2, variables))
    half *= START_RADIUS / np.linalg.norm(half, axis=1, keepdims=True)
    points = _merged(_search(counted, np.concatenate([np.zeros((1, variables)), half, -half])))
    probability, error = 0.0, np.inf
    for anew in range(SEARCHES):
        if not points:
            break
        sample = _Sample.of(counted, points, np.random.SeedSequence([seed, anew]))
        surprises, known = sample.round(), set(map(id, points))
        if len(surprises) and anew + 1 < SEARCHES:
            points = _merged([*points, *_search(counted, surprises)])
        if known.issuperset(map(id, points)):
            probability, error = sample.until(relative_error, budget)
            break
    return Failure(
        probability=probability,
        relative_error=error,
        first_order=sum(point.probability for point in points if point.minimum),
        points=tuple(points),
        builds=counted.builds,
        seed=seed,
    )


class _Counted:
    """Limit states with a count of builds."""

    def __init__(self, limits: LimitStates) -> None:
        self.limits, self.builds = limits, 0

    def values(self, y: Array) -> Array:
        self.builds += len(y)
        return self.limits.values(y)

    def slopes(self, y: Array) -> tuple[Array, Array]:
        self.builds += len(y)
        return self.limits.slopes(y)


def _search(limits: _Counted, starts: Array) -> list[FailurePoint]:
    """Failure points of every limit state from every start."""
    g, slopes = limits.slopes(np.concatenate([np.zeros((1, starts.shape[1])), starts]))
    nominal, m = g[0], g.shape[1]
    one = np.repeat(np.arange(m), len(starts))
    run = np.tile(np.arange(len(starts)), m)
    found: list[FailurePoint] = []
    for some in parts(np.arange(len(one)), max(1, WORKSPACE // starts.shape[1] ** 2)):
        start = run[some] + 1
        own = _Descent(limits, one[some], starts[run[some]], g[start, one[some]], slopes[start, one[some]])
        own.run()
        found += [_point(int(own.one[i]), own.y[i], nominal, minimum=True) for i in np.flatnonzero(own.done)]
        left = np.flatnonzero(~own.done & own.lost & (nominal[own.one] > 0))
        ends = _bisected(limits, own.failed[left], own.one[left])
        found += [_point(int(i), end, nominal, minimum=False) for i, end in zip(own.one[left], ends, strict=True)]
    near = {point.limit for point in found}
    origin = np.zeros(starts.shape[1])
    for limit in set(np.flatnonzero(~(nominal > 0)).tolist()) - near:
        found.append(FailurePoint(limit=limit, beta=-np.inf, y=origin, probability=1.0, minimum=True))
    return found


class _Descent:
    """Searches that go side by side, each for a minimum of ``|y|`` on ``g = 0`` of one limit state.

    The direction ``d`` solves ``min ½ dᵀHd + y·d`` on ``g + a·d = 0``: with ``H = I`` that of Hasofer, Lind, Rackwitz
    and Fiessler. ``B = H⁻¹`` learns the curvature of the surface, without which strongly curved ones are
    approached in a slow zigzag. The length is that of the improved iteration: halved until ``½|y|² + c|g|`` falls.
    """

    def __init__(self, limits: _Counted, one: IntArray, y: Array, g: Array, a: Array) -> None:
        self.limits, self.one, self.y, self.g, self.a = limits, one, y, g, a
        self.B = np.tile(np.eye(y.shape[1]), (len(y), 1, 1))
        self.done = np.zeros(len(y), bool)
        self.failed, self.lost = y.copy(), np.zeros(len(y), bool)
        self._note(np.arange(len(y)), y, g)

    def run(self) -> None:
        """Until all have converged or given up."""
        active = np.arange(len(self.y))
        for _ in range(STEPS):
            active = active[np.isfinite(self.g[active]) & self.a[active].any(axis=1)]
            reached = self._converged(active)
            self.done[active[reached]] = True
            active = active[~reached]
            if not len(active):
                return
            active = self._step(active)

    def _converged(self, of: IntArray) -> NDArray[np.bool_]:
        size = np.linalg.norm(self.a[of], axis=1)
        unit = self.a[of] / size[:, None]
        along = np.sum(unit * self.y[of], axis=1)
        aside = np.linalg.norm(self.y[of] - along[:, None] * unit, axis=1)
        near = np.abs(self.g[of]) < CONVERGED * size
        return np.asarray(near & (aside < CONVERGED * np.maximum(np.abs(along), 1.0)))

    def _step(self, of: IntArray) -> IntArray:
        """One step of each; which could take it."""
        y, g, a, B = self.y[of], self.g[of], self.a[of], self.B[of]
        Ba, By = (np.einsum("bij,bj->bi", B, v) for v in (a, y))
        mu = (np.sum(a * By, axis=1) - g) / np.sum(a * Ba, axis=1)
        ahead = y + mu[:, None] * Ba - By
        ahead *= np.minimum(1.0, FARTHEST / np.maximum(np.linalg.norm(ahead, axis=1), 1.0))[:, None]
        d = ahead - y
        c = 2 * np.maximum(np.abs(mu), np.linalg.norm(y, axis=1) / np.linalg.norm(a, axis=1))
        merit = 0.5 * np.sum(y**2, axis=1) + c * np.abs(g)
        descent = np.minimum(np.sum(y * d, axis=1) - c * np.abs(g), 0.0)
        waiting = np.arange(len(of))
        for halving in range(HALVINGS):
            share = 0.5**halving
            trial = y[waiting] + share * d[waiting]
            values, slopes = self.limits.slopes(trial)
            rows = np.arange(len(waiting)), self.one[of[waiting]]
            self._note(of[waiting], trial, values[rows])
            with np.errstate(invalid="ignore"):
                reached = 0.5 * np.sum(trial**2, axis=1) + c[waiting] * np.abs(values[rows])
                good = reached <= merit[waiting] + 1e-4 * share * descent[waiting]
            self._accept(of[waiting[good]], mu[waiting[good]], trial[good], values[rows][good], slopes[rows][good])
            waiting = waiting[~good]
            if not len(waiting):
                break
        return np.delete(of, waiting)

    def _note(self, at: IntArray, y: Array, g: Array) -> None:
        """Keep points of failure, for searches that end nowhere."""
        lost = ~(g > 0)
        self.failed[at[lost]] = y[lost]
        self.lost[at[lost]] = True

    def _accept(self, at: IntArray, mu: Array, y: Array, g: Array, a: Array) -> None:
        """Move, and learn the curvature of ``½|y|² − μ g`` (BFGS, damped so that ``B`` stays positive definite)."""
        s = y - self.y[at]
        q = s - mu[:, None] * (a - self.a[at])
        Bq = np.einsum("bij,bj->bi", self.B[at], q)
        sq, qBq = np.sum(s * q, axis=1), np.sum(q * Bq, axis=1)
        short = sq < DAMPED * qBq
        with np.errstate(invalid="ignore", divide="ignore"):
            theta = np.where(short, (1 - DAMPED) * qBq / (qBq - sq), 1.0)[:, None]
            s = theta * s + (1 - theta) * Bq
            rho = 1 / np.sum(s * q, axis=1)
            # (I − ρ s qᵀ) B (I − ρ q sᵀ) + ρ s sᵀ
            sBq = s[:, :, None] * Bq[:, None, :]
            change = (rho * (1 + rho * qBq))[:, None, None] * (s[:, :, None] * s[:, None, :])
            change -= rho[:, None, None] * (sBq + np.swapaxes(sBq, 1, 2))
        sound = np.isfinite(change).all(axis=(1, 2))
        self.B[at[sound]] += change[sound]
        self.y[at], self.g[at], self.a[at] = y, g, a


def _bisected(limits: _Counted, failed: Array, one: IntArray) -> Array:
    """From failed points towards the origin, to where failure begins."""
    low, high = np.zeros(len(failed)), np.ones(len(failed))
    for _ in range(BISECTIONS if len(failed) else 0):
        middle = (low + high) / 2
        sound = limits.values(middle[:, None] * failed)[np.arange(len(failed)), one] > 0
        low, high = np.where(sound, middle, low), np.where(sound, high, middle)
    return np.asarray(high[:, None] * failed)


def _point(limit: int, y: Array, nominal: Array, *, minimum: bool) -> FailurePoint:
    from scipy.special import ndtr

    beta = float(np.copysign(np.linalg.norm(y), 1.0 if nominal[limit] > 0 else -1.0))
    return FailurePoint(limit=limit, beta=beta, y=y, probability=float(ndtr(-beta)), minimum=minimum)


def _merged(points: list[FailurePoint]) -> list[FailurePoint]:
    """Without doubles and what cannot matter, the most probable first, minima before others."""
    kept: list[FailurePoint] = []
    for point in sorted(points, key=lambda p: (not p.minimum, p.beta)):
        if any(other.limit == point.limit and np.linalg.norm(other.y - point.y) < SAME for other in kept):
            continue
        kept.append(point)
    kept.sort(key=lambda p: p.beta)
    return [p for p in kept[:MOST_POINTS] if p.probability >= RELEVANT * kept[0].probability]


@dataclass
class _Sample:
    """An importance sample that grows: per scrambling and point a stream of Sobol' points.

    `sums` are those of the weights of failed builds, one per scrambling, over `drawn` builds each.
    """

    limits: _Counted
    centres: Array
    sizes: list[int]
    streams: list[list[Iterator[Array]]]
    sums: Array
    drawn: int = 0
    surprising: float = np.inf

    @classmethod
    def of(cls, limits: _Counted, points: list[FailurePoint], seeds: np.random.SeedSequence) -> _Sample:
        """Nothing drawn yet."""
        share = np.array([point.probability for point in points])
        share = np.maximum(share / share.sum(), LEAST_SHARE)
        sizes = [max(4, 2 ** round(np.log2(ROUND * s))) for s in share / share.sum()]
        centres = np.array([point.y if point.beta > 0 else 0 * point.y for point in points])
        n = centres.shape[1]
        streams = [
            [
                Cube(n, int(seed.generate_state(1)[0])).chunks(2**40, size)
                for seed, size in zip(own.spawn(len(points)), sizes, strict=True)
            ]
            for own in seeds.spawn(SCRAMBLINGS)
        ]
        nearest = float(_log_weights(centres[:1], centres, sizes)[0])
        return cls(limits, centres, sizes, streams, np.zeros(SCRAMBLINGS), surprising=nearest + np.log(SURPRISE))

    def round(self) -> Array:
        """Draw once from every stream; failed builds of surprising weight, the heaviest first."""
        y = np.array(
            [
                np.concatenate([_shifted(next(stream), c) for stream, c in zip(own, self.centres, strict=True)])
                for own in self.streams
            ]
        )
        flat = y.reshape(-1, y.shape[2])
        failed = ~(self.limits.values(flat) > 0).all(axis=1)
        logs = np.where(failed, _log_weights(flat, self.centres, self.sizes), -np.inf)
        self.sums += np.exp(logs).reshape(len(self.streams), -1).sum(axis=1)
        self.drawn += y.shape[1]
        heaviest = np.argsort(-logs)[: STARTS // 2]
        return np.asarray(flat[heaviest[logs[heaviest] > self.surprising]])

    def until(self, relative_error: float, budget: int) -> tuple[float, float]:
        """Double the sample until it is as good as asked or nothing is left to spend; probability and its error."""
        rounds = 1
        while (found := self.result())[1] > relative_error:
            left = (budget - self.limits.builds) // (len(self.streams) * sum(self.sizes))
            if left <= 0:
                break
            for _ in range(min(rounds, left)):
                self.round()
            rounds *= 2
        return found

    def result(self) -> tuple[float, float]:
        """Probability and relative standard error so far."""
        each = self.sums / self.drawn
        mean = float(each.mean())
        return mean, float(each.std(ddof=1) / np.sqrt(len(each)) / mean) if mean > 0 else np.inf


def _shifted(points: Array, centre: Array) -> Array:
    """Standard normals around a centre, the first coordinate along it."""
    from scipy.special import ndtri

    z = ndtri(np.clip(points, NEVER, 1 - NEVER))
    size = np.linalg.norm(centre)
    if size == 0:
        return np.asarray(z)
    # The reflection that takes the first axis to the direction of the centre.
    mirror = -centre / size
    mirror[0] += 1.0
    square = mirror @ mirror
    if square > 0:
        z -= 2 / square * np.outer(z @ mirror, mirror)
    return np.asarray(z + centre)


def _log_weights(y: Array, centres: Array, sizes: Sequence[int]) -> Array:
    """Logarithms of the standard normal density over that of the mixture."""
    from scipy.special import logsumexp

    share = np.log(np.array(sizes) / sum(sizes))
    # |y|² − |y − c|² = 2 y·c − |c|².
    exponent = y @ centres.T - np.sum(centres**2, axis=1) / 2
    return np.asarray(-logsumexp(exponent + share, axis=1))


def standard_to_unit(distribution: Shape, y: Array) -> tuple[Array, Array]:
    """Unit errors ``u`` with the probability of standard normal ``y``, and ``du/dy``; exact in both tails."""
    from scipy.special import ndtr

    u = -np.sign(y) * quantiles(distribution, ndtr(-np.abs(y)))
    density = np.exp(-(y**2) / 2) / np.sqrt(2 * np.pi)
    match distribution:
        case "normal":
            inside = ndtr(LIMIT_SIGMA) - ndtr(-LIMIT_SIGMA)
            s = LIMIT_SIGMA
            return u, np.asarray(inside / s * np.exp(((s * u) ** 2 - y**2) / 2))
        case "uniform":
            return u, 2 * density
        case "triangular":
            # Near the limit the density of u vanishes, and 1 − |u| = √(2 Φ(−|y|)) keeps its digits.
            return u, density / np.sqrt(2 * ndtr(-np.abs(y)))


@dataclass(frozen=True)
class ErrorLimits:
    """The requirements of the objectives as limit states over the standard normal variables behind unit errors."""

    over: OverErrors

    @cached_property
    def sides(self) -> tuple[tuple[int, float, float, float], ...]:
        """Per limit state the objective's place, ``sign``, ``edge`` and ``scale`` of ``sign (v − edge)/scale``."""
        objectives = self.over.evaluator.objectives
        return tuple((i, *side) for i, o in enumerate(objectives) for side in _sides(o.requirement))

    def values(self, y: Array) -> Array:
        """``g``, shape (B, m)."""
        return self._limits(self.over.values(self.errors_at(y)[0]))

    def slopes(self, y: Array) -> tuple[Array, Array]:
        """``g``, shape (B, m), and ``∂g/∂y``, shape (B, m, U)."""
        u, by_y = self.errors_at(y)
        values, slopes = self.over.slopes(u)
        place, sign, _, scale = self._columns
        return self._limits(values), slopes[:, place] * (sign / scale)[:, None] * by_y[:, None, :]

    @property
    def _columns(self) -> tuple[IntArray, Array, Array, Array]:
        place, sign, edge, scale = np.array(self.sides, float).reshape(-1, 4).T
        return place.astype(np.intp), sign, edge, scale

    def _limits(self, values: Array) -> Array:
        place, sign, edge, scale = self._columns
        return np.asarray(sign * (values[:, place] - edge) / scale)

    def errors_at(self, y: Array) -> tuple[Array, Array]:
        """Unit errors ``u`` and ``du/dy``, both (B, U)."""
        distributions = self.over.errors.distribution
        pairs = [standard_to_unit(name, column) for name, column in zip(distributions, y.T, strict=True)]
        u, slope = np.array(pairs, float).reshape(-1, 2, len(y)).transpose(1, 2, 0)
        return u, slope


def _sides(requirement: Requirement) -> list[tuple[float, float, float]]:
    """(sign, edge, scale) of what must stay positive, slack on the edge included."""
    match requirement:
        case Target(value, within):
            room = within + requirement.slack()
            return [(1.0, value - room, within), (-1.0, value + room, within)]
        case AtLeast(value):
            return [(1.0, value - requirement.slack(), abs(value) or 1.0)]
        case AtMost(value):
            return [(-1.0, value + requirement.slack(), abs(value) or 1.0)]
    return []


@dataclass(frozen=True, slots=True, kw_only=True)
class FailingBuild:
    """A most probable build that fails: which objective, on which side, and its dimensions.

    Attributes
    ----------
    label : str
        Of the objective.
    side : str
        ``low`` where its value falls below the edge, ``high`` where it rises above it.
    beta : float
    dimensions : ndarray, shape (D,)
        Base dimensions, SI.
    """

    label: str
    side: Literal["low", "high"]
    beta: float
    dimensions: Array


@dataclass(frozen=True, slots=True, kw_only=True)
class RareFailures:
    """Share of builds that miss any objective, and the builds that do so soonest."""

    failure: Failure
    builds: tuple[FailingBuild, ...]


def rare_failures(
    evaluator: Evaluator, x: Array, errors: Errors, *, seed: int, relative_error: float = 0.03, budget: int = 10_000
) -> RareFailures:
    """Share of builds that miss any objective, where plain sampling would hardly meet one.

    Parameters
    ----------
    evaluator : Evaluator
        The model and its objectives; those to be minimised or maximised do not count.
    x : ndarray, shape (P,)
        Variables of the design.
    errors : Errors
    seed, relative_error, budget
        See `failure_probability`.

    Raises
    ------
    ValueError
        If there are no errors, or no objective has an edge.
    """
    limits = ErrorLimits(OverErrors(evaluator, x, errors))
    if not limits.sides:
        raise ValueError("expected an objective with a target or a limit, found none: nothing can be missed")
    found = failure_probability(limits, errors.units, seed=seed, relative_error=relative_error, budget=budget)
    builds = []
    for point in found.points:
        place, sign, _, _ = limits.sides[point.limit]
        u, _ = limits.errors_at(point.y[None])
        builds.append(
            FailingBuild(
                label=evaluator.objectives[place].label,
                side="low" if sign > 0 else "high",
                beta=point.beta,
                dimensions=limits.over.builds(u)[0],
            )
        )
    return RareFailures(failure=found, builds=tuple(builds))
