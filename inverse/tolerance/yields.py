"""The share of builds that meet every objective, each judged by the cheapest test that is sure.

A limit on a frequency asks how many modes lie below it, which inertia counts; differences and ratios of two numbered
modes are refined from the modes of a few builds until the window decides; everything else takes all modes
of the builds that have passed so far. A build that has no value (it topples, a mode vanishes) has failed.

Symbols: ``B`` builds, ``D`` base dimensions, ``U`` unit errors; frequencies in Hz.

References
----------
C. J. Clopper and E. S. Pearson, "The use of confidence or fiducial limits illustrated in the case of the
binomial", Biometrika 26(4), 1934, pp. 404-413.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from inverse.assembly.assembly import Model
from inverse.assembly.terms import Array, Point
from inverse.evaluation.evaluator import Evaluator
from inverse.matrices.equilibrium import at_rest
from inverse.matrices.stack import Matrices
from inverse.modal.inertia import Pencil, chosen, count_below, dense_chunk, parts
from inverse.modal.refinement import Block, Neighbours, choose_blocks, refine_modes
from inverse.modal.solution import solve_modes
from inverse.tolerance.distributions import Cube, Errors, draw_builds
from objectives.base import AtLeast, AtMost, Maximise, Minimise, Objective, Requirement, Target, met
from objectives.frequency import BeatPeriod, Frequency, FrequencyRatio, Period, Splitting
from objectives.keep_out import KeepOut

BUILDS = 2**17
"""Builds drawn by default."""

DRAWN = 4_000_000
"""Numbers drawn at a time at most."""

LARGEST_DRAW = 2**16
"""Builds drawn at a time at most."""

STABLE_SHARE = 0.1
"""A build with nothing below this share of the lowest nominal eigenvalue is stable; any other is looked at."""

Verdicts = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, kw_only=True)
class Yield:
    """Share of builds that meet every objective, with its confidence interval."""

    share: float
    low: float
    high: float
    confidence: float
    builds: int
    passed: int
    seed: int


def measure_yield(
    evaluator: Evaluator,
    x: Array,
    errors: Errors,
    *,
    seed: int,
    builds: int = BUILDS,
    confidence: float = 0.95,
) -> Yield:
    """Draw builds of one design and judge each.

    Parameters
    ----------
    evaluator : Evaluator
        The model and its objectives; those to be minimised or maximised do not count.
    x : ndarray, shape (P,)
        The variables of the design.
    errors : Errors
    seed : int
        Of the scrambled Sobol' points.
    builds : int
        How many; powers of two are balanced best.
    confidence : float
        Of the Clopper-Pearson interval.
    """
    judge = Judge.of(evaluator, x)
    size = 2 ** int(np.log2(np.clip(DRAWN // (errors.units + errors.dimensions), 2, LARGEST_DRAW)))
    passed = sum(
        int(judge.passes(draw_builds(errors, judge.nominal, points)).sum())
        for points in Cube(errors.units, seed).chunks(builds, size)
    )
    low, high = clopper_pearson(passed, builds, confidence)
    return Yield(
        share=passed / builds,
        low=low,
        high=high,
        confidence=confidence,
        builds=builds,
        passed=passed,
        seed=seed,
    )


def clopper_pearson(passed: int, builds: int, confidence: float = 0.95) -> tuple[float, float]:
    """Exact interval of a binomial share; its ends are 0 or 1 where none or all passed."""
    from scipy.special import betaincinv

    tail = (1 - confidence) / 2
    low = betaincinv(passed, builds - passed + 1, tail) if passed else 0.0
    high = betaincinv(passed + 1, builds - passed, 1 - tail) if passed < builds else 1.0
    return float(low), float(high)


@dataclass(frozen=True, slots=True)
class Window:
    """One numbered mode between two frequencies; zero or less, and infinity, are no limits."""

    mode: int
    low: float
    high: float


@dataclass(frozen=True, slots=True)
class Band:
    """No oscillating mode between two frequencies."""

    low: float
    high: float


@dataclass(frozen=True, slots=True)
class Pair:
    """Difference or ratio of two numbered modes, the first below the second, within limits."""

    modes: tuple[int, int]
    measure: Literal["splitting", "ratio"]
    low: float
    high: float

    def judged(self, found: Neighbours) -> tuple[Verdicts, Verdicts]:
        """Whether each build meets it, and whether that is certain."""
        first, second = found.shift + found.offsets
        gap, sum_ = found.offsets[1] - found.offsets[0], np.sqrt(first) + np.sqrt(second)
        # An eigenvalue off by e moves its ω by at most e/ω taken at the lower end.
        omega = np.sqrt(first - found.bounds)
        if self.measure == "splitting":
            value, doubt = gap / sum_ / (2 * np.pi), found.bounds / omega / (2 * np.pi)
        else:
            value = np.sqrt(second / first)
            doubt = value * 2 * found.bounds / omega**2
        certain = (np.abs(value - self.low) > doubt) & (np.abs(value - self.high) > doubt)
        return (value >= self.low) & (value <= self.high), certain


Test = Window | Band | Pair


def sure_tests(objective: Objective) -> tuple[Test, ...] | None:
    """Tests that together decide an objective without shapes; None where it needs all modes."""
    limits = _limits(objective.requirement)
    if limits is None or objective.likes:
        return None
    low, high = limits
    match objective:
        case Frequency(mode=int(mode)):
            return (Window(mode, low, high),)
        case Period(mode=int(mode)):
            return (Window(mode, _inverse(high), _inverse(low)),)
        case KeepOut(driven_by=()) if high == np.inf:
            return tuple(Band(first - low, last + low) for first, last in objective.bands)
        case Splitting(between=(int(i), int(j))) if i < j:
            return (Pair((i, j), "splitting", low, high),)
        case BeatPeriod(between=(int(i), int(j))) if i < j:
            return (Pair((i, j), "splitting", _inverse(high), _inverse(low)),)
        case FrequencyRatio(between=(int(i), int(j))) if i < j:
            return (Pair((i, j), "ratio", low, high),)
    return None


def _limits(requirement: Requirement) -> tuple[float, float] | None:
    """Edges between which a value is met, slack included."""
    match requirement:
        case Target(value, within):
            return value - within - requirement.slack(), value + within + requirement.slack()
        case AtLeast(value):
            return value - requirement.slack(), np.inf
        case AtMost(value):
            return -np.inf, value + requirement.slack()
    return None


def _inverse(value: float) -> float:
    """Frequency of a period; a period of zero or less sets no limit."""
    return 1 / value if value > 0 else np.inf


@dataclass
class Judge:
    """Says of builds of one design whether they meet every objective.

    Attributes
    ----------
    x : ndarray, shape (P,)
        Variables.
    nominal : ndarray, shape (D,)
        Nominal base dimensions.
    rigid : int
        Number of rigid modes.
    stable_below : float or None
        A limit [rad²/s²] below which a stable build has no oscillating mode, where stability is in question.
    counted, pairs
        Objectives decided by inertia and by refinement.
    rest : Evaluator
        The others.
    """

    x: Array
    nominal: Array
    pencil: Pencil
    rigid: int
    stable_below: float | None
    counted: tuple[Window | Band, ...]
    pairs: tuple[Pair, ...]
    rest: Evaluator
    _blocks: dict[Pair, tuple[Block, ...]] = field(default_factory=dict)

    @classmethod
    def of(cls, evaluator: Evaluator, x: Array) -> Judge:
        """Sort the objectives by the test that decides them."""
        model, parameters = evaluator.model, evaluator.model.parameters
        judged = [o for o in evaluator.objectives if not isinstance(o.requirement, Minimise | Maximise)]
        found = [(objective, sure_tests(objective)) for objective in judged]
        tests = [test for _, own in found for test in own or ()]
        nominal = parameters.nominal.values(parameters.variable_point(x))[0]
        pencil = Pencil.of(model)
        modes = solve_modes(Matrices(model, at_rest(model, nominal[None])))
        lowest = modes.eigenvalues[0, modes.rigid] if modes.eigenvalues.shape[1] > modes.rigid else 1.0
        return cls(
            x=np.asarray(x, float),
            nominal=nominal,
            pencil=pencil,
            rigid=modes.rigid,
            stable_below=None if pencil.semidefinite else STABLE_SHARE * abs(float(np.nan_to_num(lowest))) or 1.0,
            counted=tuple(test for test in tests if not isinstance(test, Pair)),
            pairs=tuple(test for test in tests if isinstance(test, Pair)),
            rest=Evaluator(model, tuple(objective for objective, own in found if own is None)),
        )

    def passes(self, base: Array) -> Verdicts:
        """Which builds meet every objective.

        Parameters
        ----------
        base : ndarray, shape (B, D)
            Base dimensions; fastest where every column is contiguous.
        """
        model, positive = self.pencil.model, self.pencil.model.parameters.positive
        left, verdicts = np.arange(len(base)), np.zeros(len(base), bool)
        if not (base.T.min(axis=1)[positive] > 0).all():
            left = np.flatnonzero((base[:, positive] > 0).all(axis=1))
            base = base.T[:, left].T
        point = _rest(model, base)
        if len(model.dependents):
            sound = np.flatnonzero(np.isfinite(point.values).all(axis=1))
            left, point = left[sound], chosen(point, sound)
        kept = np.arange(len(left))
        for decide in self._tests():
            point = chosen(point, kept)
            kept = np.flatnonzero(decide(point)) if len(kept) else kept
            left = left[kept]
        verdicts[left] = True
        return verdicts

    def _tests(self) -> Iterator[Callable[[Point], Verdicts]]:
        """Cheapest first."""
        if self.counted or self.stable_below is not None:
            yield self._by_inertia
        yield from (self._by_pair(pair) for pair in self.pairs)
        if self.rest.objectives:
            yield self._by_all_modes

    def _by_inertia(self, point: Point) -> Verdicts:
        shifts = sorted({_shift(f) for test in self.counted for f in (test.low, test.high) if 0 < f < np.inf})
        if self.stable_below is not None:
            shifts.append(self.stable_below)
        below = dict(zip(shifts, count_below(self.pencil, point, shifts, self.rigid), strict=True))
        verdicts = np.ones(point.builds, bool)
        for test in self.counted:
            verdicts &= self._meets(test, below)
        if self.stable_below is not None:
            verdicts &= self._stable(point, below[self.stable_below] == self.rigid)
        return verdicts

    def _meets(self, test: Window | Band, below: dict[float, NDArray[np.int32]]) -> Verdicts | bool:
        """Whether the counts below its edges are those of a build that meets it; −1 is none."""
        low, high = (below[_shift(f)] if 0 < f < np.inf else None for f in (test.low, test.high))
        if isinstance(test, Band):
            under = self.rigid if low is None else low
            return (under >= 0) & ((self.pencil.model.size if high is None else high) <= under)
        if test.mode > self.pencil.model.size - self.rigid or test.low == np.inf:
            return False
        meets: Verdicts | bool = True
        if low is not None:
            meets = meets & (low >= 0) & (low < self.rigid + test.mode)
        if high is not None:
            meets = meets & (high >= self.rigid + test.mode)
        return meets

    def _stable(self, point: Point, sure: Verdicts) -> Verdicts:
        """Stability of each build, all modes computed where a count leaves it open."""
        stable = sure.copy()
        for builds in parts(np.flatnonzero(~sure), dense_chunk(self.pencil.model)):
            stable[builds] = solve_modes(Matrices(self.pencil.model, chosen(point, builds)), rigid=self.rigid).stable
        return stable

    def _by_pair(self, pair: Pair) -> Callable[[Point], Verdicts]:
        positions = [self.rigid + mode - 1 for mode in pair.modes]

        def decide(point: Point) -> Verdicts:
            if positions[1] >= self.pencil.model.size:
                return np.zeros(point.builds, bool)
            if pair not in self._blocks:
                self._blocks[pair] = choose_blocks(self.pencil, point, positions, self.rigid)
            with np.errstate(invalid="ignore", divide="ignore"):
                found = refine_modes(
                    self.pencil,
                    point,
                    self._blocks[pair],
                    positions,
                    lambda found: pair.judged(found)[1],
                    self.rigid,
                )
                return pair.judged(found)[0]

        return decide

    def _by_all_modes(self, point: Point) -> Verdicts:
        verdicts = np.ones(point.builds, bool)
        base = point.values[:, : len(self.nominal)]
        for builds in parts(np.arange(point.builds), dense_chunk(self.pencil.model)):
            x = np.broadcast_to(self.x, (len(builds), len(self.x)))
            values = self.rest.of_dimensions(base[builds], x).values()
            for objective, column in zip(self.rest.objectives, values.T, strict=True):
                verdicts[builds] &= np.asarray(met(objective.requirement, column), bool)
        return verdicts


def _rest(model: Model, base: Array) -> Point:
    """Builds at rest, every column contiguous."""
    if not len(model.dependents):
        return Point(base, model.positive)
    return Point(np.asfortranarray(at_rest(model, base).values), model.positive)


def _shift(frequency: float) -> float:
    return float((2 * np.pi * frequency) ** 2)
