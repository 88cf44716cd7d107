"""What can be reached, with proof: branch and bound over boxes of the free variables.

Symbols: boxes ``[low, high]`` (B, p) of the free variables themselves; ``lower``, ``upper`` (B, m) bounds on every
measure over them, from `inverse.matrices.enclosure`; ``v`` measured values.

A box in which some objective certainly misses its window holds no acceptable design. Boxes are split, the most
promising first, until none is left, which is proof, or the budget is spent, which decides nothing. What is
certain comes from bounds alone; what is found comes from designs evaluated on the way. The work grows quickly with
the number of free variables: up to about six is what it is for.
"""

from __future__ import annotations

import itertools
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from inverse.assembly.terms import Array, IntArray
from inverse.design.problem import Problem
from inverse.matrices.enclosure import Contributions, Enclosure, EnclosureError, Family, over_variables, power_ranges
from inverse.units import Kind, format_quantity
from objectives.base import EDGE_SLACK, AtLeast, AtMost, Maximise, Minimise, Objective, Requirement, Target
from objectives.frequency import BeatPeriod, Frequency, FrequencyRatio, Period, Splitting
from objectives.keep_out import KeepOut
from objectives.parts import Cost, LeastChange, TotalMass
from objectives.state import Like, ModeReference

BATCH = 128
"""Boxes split at a time."""

TRIED = 32
"""Designs evaluated for every batch."""

CLOSED = 1e-6
"""A bracket is closed when it is narrower than this share of its values."""

SUBSET = 20
"""Fewer objectives are tried with as many times the boxes that all of them took."""

SMALLEST = 1e-10
"""Relative width of a box that is not split any further."""

UNSTABLE = 2e-9
"""Beyond what `inverse.modal.solution` takes for rounding, a negative λ certainly is none."""

ROUNDING = 16 * float(np.finfo(float).eps)
"""Relative rounding of a few operations on a bound."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Certificate:
    """A claim with its proof: the rule used, the gap left (SI, of the objective judged), and the reason in words."""

    claim: str
    rule: str
    gap: float
    reason: str


@dataclass(slots=True)
class Budget:
    """Boxes to look at, and seconds at most; `used` boxes so far.

    With `seconds` left out a run is the same on every machine.
    """

    boxes: int = 20_000
    seconds: float = np.inf
    used: int = 0
    began: float = field(default_factory=time.perf_counter)

    @property
    def spent(self) -> bool:
        """Whether to stop."""
        return self.used >= self.boxes or time.perf_counter() - self.began >= self.seconds

    def renewed(self) -> Budget:
        """The same amount again, for another question within the same time."""
        return Budget(self.boxes, self.seconds, 0, self.began)

    def limited(self, boxes: int) -> Budget:
        """At most some boxes, within the same time."""
        return Budget(min(boxes, self.boxes), self.seconds, 0, self.began)


@dataclass(frozen=True, slots=True, kw_only=True)
class Range:
    """What a measure can be: nothing outside [certain_low, certain_high], and the ends found at designs (P,).

    `unbounded_because` says why nothing is certain; nothing is looked for then.
    """

    label: str
    unit: str
    certain_low: float
    certain_high: float
    found_low: float | None
    found_high: float | None
    low_at: Array | None
    high_at: Array | None
    boxes: int
    unbounded_because: str = ""

    @property
    def closed(self) -> bool:
        """Whether both ends are known to within `CLOSED`."""
        ends = ((self.certain_low, self.found_low), (self.certain_high, self.found_high))
        return all(f is not None and abs(c - f) <= 2 * CLOSED * abs(f) for c, f in ends)


@dataclass(frozen=True, slots=True, kw_only=True)
class Optimum:
    """The best value: none is better than `certain`, and `found` is that of a design `at` (P,)."""

    label: str
    unit: str
    certain: float
    found: float | None
    at: Array | None
    boxes: int

    @property
    def gap(self) -> float:
        """What is left between them."""
        return np.inf if self.found is None else abs(self.found - self.certain)


@dataclass(frozen=True, slots=True, kw_only=True)
class Verdict:
    """Whether all objectives can be met: a certificate that they cannot, or a design (P,) that does, or neither.

    `closest` (P,) is the design that comes closest, `message` says in a sentence what is known.
    """

    certificate: Certificate | None
    met_at: Array | None
    closest: Array | None
    boxes: int
    message: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Regions:
    """The ranges of the free variables cut into boxes (k, 2, p), low and high ends.

    In `inside` every design meets every objective, in `outside` none does; `undecided` holds the rest.
    """

    names: tuple[str, ...]
    inside: Array
    outside: Array
    undecided: Array


def reachable_range(problem: Problem, objective: int, given: Sequence[int] = (), budget: Budget | None = None) -> Range:
    """The range of one objective's measure within the ranges of the variables.

    Parameters
    ----------
    problem : Problem
    objective : int
        Place of the objective.
    given : sequence of int
        Places of others that have to be met at the same time.
    budget : Budget, optional
        For each end.
    """
    asked, total = problem.evaluator.objectives[objective], budget or Budget()
    try:
        search = _Search(problem, (objective, *given))
        search.refuse(objective)
    except EnclosureError as error:
        return _range(asked, _UNKNOWN, _UNKNOWN, str(error))
    windows = {i: search.windows[i] for i in given}
    ends = [search.least(_Value(objective, sign), windows, total.renewed()) for sign in (1.0, -1.0)]
    return _range(asked, ends[0], ends[1])


def _range(asked: Objective, low: _End, high: _End, because: str = "") -> Range:
    return Range(
        label=asked.label,
        unit=asked.unit,
        certain_low=low.certain,
        certain_high=-high.certain,
        found_low=low.found,
        found_high=None if high.found is None else -high.found,
        low_at=low.at,
        high_at=high.at,
        boxes=low.boxes + high.boxes,
        unbounded_because=because,
    )


def best(problem: Problem, wish: int, budget: Budget | None = None) -> Optimum:
    """The best that an objective to minimise or maximise can be while all others are met.

    Raises
    ------
    EnclosureError
        If nothing can be guaranteed for this assembly or this objective.
    """
    asked = problem.evaluator.objectives[wish]
    others = [i for i in range(len(problem.evaluator.objectives)) if i != wish]
    search = _Search(problem, (wish, *others))
    search.refuse(wish)
    sign = 1.0 if isinstance(asked.requirement, Minimise) else -1.0
    end = search.least(_Value(wish, sign), {i: search.windows[i] for i in others}, budget or Budget())
    return Optimum(
        label=asked.label,
        unit=asked.unit,
        certain=sign * end.certain,
        found=None if end.found is None else sign * end.found,
        at=end.at,
        boxes=end.boxes,
    )


def prove_impossible(problem: Problem, budget: Budget | None = None) -> Verdict:
    """Whether some design meets all objectives: a design, a proof that there is none, or neither.

    A proof is given for the fewest objectives it was found for: one, two that cannot hold together, or all.
    """
    total = budget or Budget()
    everything = tuple(i for i, o in enumerate(problem.evaluator.objectives) if _window(o.requirement) != EVERYTHING)
    try:
        search = _Search(problem, everything)
    except EnclosureError as error:
        return _open(_Outcome(False, None, None, 0), f"Not decided: {error}.")
    bounded = tuple(i for i in everything if i in search.measures)
    outcome = search.exclude(bounded, total.renewed())
    if outcome.excluded:
        return _certified(search, bounded, outcome, total)
    if outcome.met_at is not None:
        return _open(outcome, f"A design that meets every objective was found in {outcome.boxes} boxes.")
    unbounded = f" Without bounds: {'; '.join(search.reasons.values())}." if search.reasons else ""
    return _open(outcome, f"Not decided within {outcome.boxes} boxes: neither a design nor a proof.{unbounded}")


def _open(outcome: _Outcome, message: str) -> Verdict:
    return Verdict(
        certificate=None, met_at=outcome.met_at, closest=outcome.closest, boxes=outcome.boxes, message=message
    )


def acceptable_boxes(problem: Problem, budget: Budget | None = None) -> Regions:
    """Where acceptable designs are, and where there certainly are none; for two or three free variables.

    Raises
    ------
    EnclosureError
        If nothing can be guaranteed for this assembly.
    """
    total = budget or Budget(boxes=4_000)
    asked = tuple(i for i, o in enumerate(problem.evaluator.objectives) if _window(o.requirement) != EVERYTHING)
    search = _Search(problem, asked)
    inside: list[Array] = []
    outside: list[Array] = []
    kept = []
    left = _Boxes.whole(search.family)
    while len(left.low):
        bounds = search.bounds(left.low, left.high)
        total.used += len(left.low)
        failing, holding = bounds.misses(search.windows, asked), bounds.holds(search.inner_windows, asked)
        outside.append(left.only(failing).stacked)
        inside.append(left.only(holding & ~failing).stacked)
        left = left.only(~failing & ~holding)
        if total.used + 2 * len(left.low) > total.boxes or total.spent:
            break
        tiny = left.widths(search.positive).max(axis=1) < SMALLEST if len(left.low) else np.zeros(0, bool)
        kept.append(left.only(tiny).stacked)
        left = left.only(~tiny)
        left = left.halved(left.longest(search.family, search.positive), search.positive)
    return Regions(
        names=search.family.names,
        inside=np.concatenate(inside),
        outside=np.concatenate(outside),
        undecided=np.concatenate([*kept, left.stacked]),
    )


def _certified(search: _Search, everything: tuple[int, ...], outcome: _Outcome, total: Budget) -> Verdict:
    """The claim for the fewest objectives that cannot hold together."""
    boxes = outcome.boxes
    asked = everything
    for few in itertools.chain([()], ((i,) for i in everything), itertools.combinations(everything, 2)):
        if len(few) >= len(everything):
            break
        tried = search.exclude(few, total.limited(SUBSET * outcome.boxes), find=False)
        boxes += tried.boxes
        if tried.excluded:
            asked, outcome = few, tried
            break
    sentence, gap, nearest, more = _reason(search, asked, total)
    boxes += more
    claim = "impossible: " + " and ".join(f"`{search.objectives[i].label}`" for i in asked)
    if not asked:
        claim = "impossible: no stable rest position"
    rule = f"branch and bound on eigenvalue enclosures, {outcome.boxes} boxes"
    return Verdict(
        certificate=Certificate(claim=claim, rule=rule, gap=gap, reason=sentence),
        met_at=None,
        closest=nearest,
        boxes=boxes,
        message=f"Impossible: {sentence}.",
    )


def _reason(search: _Search, asked: tuple[int, ...], total: Budget) -> tuple[str, float, Array | None, int]:
    """A sentence, the gap, the design that comes nearest, and the boxes it took."""
    if not asked:
        return "no design within the ranges rests in stable equilibrium", 0.0, None, 0
    ends: dict[int, _End] = {}
    for i in asked:
        windows = {k: search.windows[k] for k in asked if k != i}
        ends[i] = search.least(_Distance(i, search.windows[i]), windows, total.renewed())
    boxes = sum(end.boxes for end in ends.values())
    proved = [i for i in asked if 0 < ends[i].certain < np.inf]
    if not proved:
        together = " and ".join(f"`{search.objectives[i].label}`" for i in asked)
        return f"no design within the ranges meets {together}", 0.0, ends[asked[0]].at, boxes
    # What would have to be given up least comes first.
    proved.sort(key=lambda i: ends[i].certain / search.scale(i))
    sentences = [_missed(search, i, [k for k in asked if k != i], ends[i]) for i in proved]
    return "; ".join(sentences), ends[proved[0]].certain, ends[proved[0]].at, boxes


def _missed(search: _Search, i: int, others: Sequence[int], end: _End) -> str:
    objective, unit = search.objectives[i], _kind(search.objectives[i].unit)
    place = " and ".join(f"`{search.objectives[k].label}`" for k in others)
    place = f"wherever {place} can be met" if others else "within the ranges"
    nearest = ""
    if end.at is not None:
        value = float(search.measured(end.at[None])[0, i])
        nearest = f", nearest found: {format_quantity(value, unit)}"
    missed = format_quantity(_rounded_down(end.certain), unit)
    return f"{place}, `{objective.label}` is missed by {missed} or more (asked: {_asked(objective)}{nearest})"


def _rounded_down(value: float) -> float:
    """To four digits, so that the words claim no more than was proved."""
    unit = 10.0 ** (np.floor(np.log10(value)) - 3)
    return float(np.floor(value / unit) * unit)


def _asked(objective: Objective) -> str:
    unit = _kind(objective.unit)
    if isinstance(objective, KeepOut):
        bands = (f"{format_quantity(low, unit)} to {format_quantity(high, unit)}" for low, high in objective.bands)
        return f"no mode in {', '.join(bands)}"
    match objective.requirement:
        case Target(value, within):
            return f"{format_quantity(value, unit)} ± {format_quantity(within, unit)}"
        case AtLeast(value):
            return f"at least {format_quantity(value, unit)}"
        case AtMost(value):
            return f"at most {format_quantity(value, unit)}"
        case _:
            return "the best"


def _kind(unit: str) -> Kind:
    return next(kind for kind in Kind if kind.unit == unit)


Window = tuple[float, float]
"""Values that count as met."""

EVERYTHING: Window = (-np.inf, np.inf)


def _window(requirement: Requirement, slacks: float = 2.0) -> Window:
    """Met values, widened by some slacks of rounding on the edge: a proof needs more than the judgement allows."""
    match requirement:
        case Target(value, within):
            slack = slacks * requirement.slack()
            return value - within - slack, value + within + slack
        case AtLeast(value):
            return value - slacks * requirement.slack(), np.inf
        case AtMost(value):
            return -np.inf, value + slacks * requirement.slack()
        case _:
            return EVERYTHING


@dataclass(frozen=True)
class _Boxes:
    """Boxes (B, p)."""

    low: Array
    high: Array

    @classmethod
    def whole(cls, family: Family) -> _Boxes:
        """The ranges themselves."""
        return cls(family.low[None].copy(), family.high[None].copy())

    @property
    def stacked(self) -> Array:
        """Both ends, shape (B, 2, p)."""
        return np.stack([self.low, self.high], axis=1)

    def only(self, which: NDArray[np.bool_] | IntArray) -> _Boxes:
        """Some of them."""
        return _Boxes(self.low[which], self.high[which])

    def joined(self, other: _Boxes) -> _Boxes:
        """These and others."""
        return _Boxes(np.vstack([self.low, other.low]), np.vstack([self.high, other.high]))

    def widths(self, positive: NDArray[np.bool_]) -> Array:
        """Relative widths of positive variables, widths of others."""
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray(np.where(positive, np.log(self.high / self.low), self.high - self.low))

    def middle(self, positive: NDArray[np.bool_]) -> Array:
        """Middles, geometric ones for positive variables."""
        with np.errstate(invalid="ignore"):
            m = np.where(positive, np.sqrt(self.low * self.high), (self.low + self.high) / 2)
        return np.asarray(np.clip(m, self.low, self.high))

    def longest(self, family: Family, positive: NDArray[np.bool_]) -> IntArray:
        """The edge of each box that is the greatest share of the range."""
        return np.asarray(np.argmax(self.widths(positive) / _Boxes.whole(family).widths(positive), axis=1), np.intp)

    def halved(self, edge: IntArray, positive: NDArray[np.bool_]) -> _Boxes:
        """Both halves of each; they share the very number at which they meet."""
        rows = np.arange(len(self.low))
        cut = self.middle(positive)[rows, edge]
        high, low = self.high.copy(), self.low.copy()
        high[rows, edge] = cut
        low[rows, edge] = cut
        return _Boxes(np.vstack([self.low, low]), np.vstack([high, self.high]))


@dataclass(frozen=True)
class _Bounds:
    """Bounds (B, m) on every measure; boxes that hold no stable design, and those that hold nothing else."""

    lower: Array
    upper: Array
    topples: NDArray[np.bool_]
    rests: NDArray[np.bool_]

    def misses(self, windows: Sequence[Window], asked: Sequence[int]) -> NDArray[np.bool_]:
        """Where some objective is certainly not met."""
        out = self.topples.copy()
        for i in asked:
            out |= (self.upper[:, i] < windows[i][0]) | (self.lower[:, i] > windows[i][1])
        return out

    def holds(self, windows: Sequence[Window], asked: Sequence[int]) -> NDArray[np.bool_]:
        """Where every objective is certainly met."""
        out = self.rests.copy()
        for i in asked:
            out &= (self.lower[:, i] >= windows[i][0]) & (self.upper[:, i] <= windows[i][1])
        return out


@dataclass(frozen=True, slots=True)
class _Value:
    """A measure to make small, or with sign −1 great."""

    objective: int
    sign: float

    def least(self, bounds: _Bounds) -> Array:
        """What it is at least in each box."""
        return bounds.lower[:, self.objective] if self.sign > 0 else -bounds.upper[:, self.objective]

    def of(self, v: Array) -> Array:
        """Its values."""
        return np.asarray(self.sign * v[:, self.objective])

    def down(self, v: Array) -> Array:
        """Which way the measure has to go."""
        return np.full(len(v), -self.sign)


@dataclass(frozen=True, slots=True)
class _Distance:
    """The distance of a measure from its window, negative inside."""

    objective: int
    window: Window

    def least(self, bounds: _Bounds) -> Array:
        """What it is at least in each box."""
        i = self.objective
        return np.maximum(self.window[0] - bounds.upper[:, i], bounds.lower[:, i] - self.window[1])

    def of(self, v: Array) -> Array:
        """Its values."""
        one = v[:, self.objective]
        return np.maximum(self.window[0] - one, one - self.window[1])

    def down(self, v: Array) -> Array:
        """Which way the measure has to go."""
        one = v[:, self.objective]
        return np.where(self.window[0] - one >= one - self.window[1], 1.0, -1.0)


@dataclass(frozen=True, slots=True)
class _End:
    """The least value of something: not below `certain`, and `found` at a design."""

    certain: float
    found: float | None
    at: Array | None
    boxes: int


_UNKNOWN = _End(-np.inf, None, None, 0)


@dataclass(frozen=True, slots=True)
class _Outcome:
    """What came of trying to exclude all boxes."""

    excluded: bool
    met_at: Array | None
    closest: Array | None
    boxes: int


class _Search:
    """Bounds and values of a problem's objectives, and branch and bound on them."""

    def __init__(self, problem: Problem, looked_at: Sequence[int]) -> None:
        """Find out what can be bounded."""
        self.problem = problem
        self.family = over_variables(problem.evaluator.model)
        self.objectives = problem.evaluator.objectives
        self.positive = self.family.positive
        self.windows = [_window(o.requirement) for o in self.objectives]
        self.inner_windows = [_window(o.requirement, 0.0) for o in self.objectives]
        self.reasons: dict[int, str] = {}
        self.measures: dict[int, _Measure] = {}
        for i in looked_at:
            try:
                self.measures[i] = _measure(self.objectives[i], problem, self.family)
            except EnclosureError as error:
                self.reasons[i] = f"`{self.objectives[i].label}`: {error}"

    def refuse(self, i: int) -> None:
        """Raise if nothing certain can be said of an objective."""
        if i in self.reasons:
            raise EnclosureError(self.reasons[i])

    @cached_property
    def _modes(self) -> tuple[int, ...]:
        return tuple(sorted({j for m in self.measures.values() for j in m.modes}))

    @cached_property
    def _pairs(self) -> tuple[tuple[int, int], ...]:
        return tuple(sorted({pair for m in self.measures.values() for pair in m.pairs}))

    def bounds(self, low: Array, high: Array) -> _Bounds:
        """Over boxes (B, p)."""
        enclosure = self.family.enclose(low, high, modes=self._modes, pairs=self._pairs)
        rigid = self.problem.evaluator.rigid
        m = len(self.objectives)
        lower, upper = np.full((len(low), m), -np.inf), np.full((len(low), m), np.inf)
        view = _View(low, high, enclosure, self._pairs)
        with np.errstate(all="ignore"):
            for i, measure in self.measures.items():
                a, b = measure.between(view)
                lower[:, i], upper[:, i] = _outward(a, -1.0), _outward(b, 1.0)
            first = enclosure.high[:, min(rigid, self.family.size - 1)]
            margin = UNSTABLE * np.maximum(first, 0.0) + UNSTABLE * 1e-4 * np.abs(enclosure.high[:, -1])
            topples = enclosure.high[:, 0] < -margin
        rests = enclosure.sound & (enclosure.low[:, rigid:] > 0).all(axis=1)
        return _Bounds(lower, upper, topples & np.isfinite(margin), rests)

    def designs(self, x: Array) -> Array:
        """All variables (B, P) from the free ones (B, p)."""
        variables = self.problem.variables
        out = np.tile(np.array([v.low for v in variables], float), (len(x), 1))
        out[:, self.problem.free] = x
        return out

    def measured(self, designs: Array) -> Array:
        """Values (B, m)."""
        return self.problem.evaluator.at(designs).values()

    def least(self, wanted: _Value | _Distance, given: dict[int, Window], budget: Budget) -> _End:
        """The least value of something over designs that meet what is given."""
        boxes = _Boxes.whole(self.family)
        asked = tuple(given)
        bounds = self.bounds(boxes.low, boxes.high)
        budget.used += 1
        key = wanted.least(bounds)[~bounds.misses(self.windows, asked)]
        boxes = boxes.only(~bounds.misses(self.windows, asked))
        finished = np.inf
        found, at = np.inf, None
        edge, found, at = self._look(boxes, wanted, asked, found, at)
        while len(key) and not budget.spent and (at is None or key.min() < found - CLOSED * abs(found)):
            chosen = np.argsort(key, kind="stable")[:BATCH]
            rest = np.setdiff1d(np.arange(len(key)), chosen)
            some, parents = boxes.only(chosen), key[chosen]
            small = some.widths(self.positive).max(axis=1) <= SMALLEST
            finished = min(finished, parents[small].min(initial=np.inf))
            edges = edge[chosen][~small]
            halves = some.only(~small).halved(edges, self.positive)
            bounds = self.bounds(halves.low, halves.high)
            budget.used += len(halves.low)
            mine = np.maximum(wanted.least(bounds), np.tile(parents[~small], 2))
            live = ~bounds.misses(self.windows, asked) & (mine < found)
            halves, mine = halves.only(live), mine[live]
            new, found, at = self._look(halves, wanted, asked, found, at, mine)
            boxes = boxes.only(rest).joined(halves)
            key, edge = np.concatenate([key[rest], mine]), np.concatenate([edge[rest], new])
            below = key < found
            boxes, key, edge = boxes.only(below), key[below], edge[below]
        certain = min(float(key.min(initial=np.inf)), finished, found)
        return _End(certain, None if at is None else float(found), at, budget.used)

    def _look(
        self,
        boxes: _Boxes,
        wanted: _Value | _Distance,
        asked: tuple[int, ...],
        found: float,
        at: Array | None,
        key: Array | None = None,
    ) -> tuple[IntArray, float, Array | None]:
        """Evaluate the middles of the most promising boxes and the corners they point at; edges to split next."""
        edge = boxes.longest(self.family, self.positive)
        if not len(edge):
            return edge, found, at
        shown = np.arange(len(edge)) if key is None else np.argsort(key, kind="stable")[:TRIED]
        some = boxes.only(shown)
        middles = self.designs(some.middle(self.positive))
        v, slopes = self._slopes(middles)
        own = slopes[:, wanted.objective] * wanted.down(v)[:, None]
        corners = self.designs(np.where(own > 0, some.high, some.low))
        edge[shown] = self._edges(some, slopes, (wanted.objective, *asked))
        tried = np.vstack([middles, corners])
        values = np.vstack([v, self.measured(corners)])
        score = np.where(self._meets(values, asked), wanted.of(values), np.inf)
        score = np.where(np.isnan(score), np.inf, score)
        k = int(np.argmin(score))
        return (edge, float(score[k]), tried[k]) if score[k] < found else (edge, found, at)

    def _slopes(self, designs: Array) -> tuple[Array, Array]:
        """Values (B, m) and their derivatives over local coordinates of the free variables (B, m, p)."""
        evaluation = self.problem.evaluator.at(designs)
        return evaluation.values(), np.nan_to_num(evaluation.jacobian()[:, :, self.problem.free])

    def _meets(self, values: Array, asked: Sequence[int]) -> NDArray[np.bool_]:
        good = np.ones(len(values), bool)
        for i in asked:
            good &= (values[:, i] >= self.inner_windows[i][0]) & (values[:, i] <= self.inner_windows[i][1])
        return good

    def _edges(self, boxes: _Boxes, slopes: Array, asked: Sequence[int]) -> IntArray:
        """The edge along which what is asked changes most; a share of its length lets none be forgotten."""
        widths = boxes.widths(self.positive)
        change = np.abs(slopes[:, list(asked)]) * widths[:, None]
        with np.errstate(invalid="ignore", divide="ignore"):
            share = np.nan_to_num(change / change.sum(axis=2, keepdims=True))
        relative = widths / _Boxes.whole(self.family).widths(self.positive)
        score = share.max(axis=1) + 0.2 * relative / relative.max(axis=1, keepdims=True)
        return np.asarray(np.argmax(np.where(widths > SMALLEST, score, -1.0), axis=1), np.intp)

    def exclude(self, asked: tuple[int, ...], budget: Budget, *, find: bool = True) -> _Outcome:
        """Drop boxes in which an objective is certainly missed until none is left, or a design is found."""
        boxes, edge = _Boxes.whole(self.family), np.zeros(1, np.intp)
        closest, nearest = None, np.inf
        fresh = boxes
        boxes = boxes.only(np.zeros(0, np.intp))
        hope, edge = np.empty(0), np.empty(0, np.intp)
        while True:
            bounds = self.bounds(fresh.low, fresh.high)
            budget.used += len(fresh.low)
            live = ~bounds.misses(self.windows, asked)
            fresh, room = fresh.only(live), self._room(bounds, asked)[live]
            new = fresh.longest(self.family, self.positive)
            if len(new):
                shown = np.argsort(room, kind="stable")[:TRIED]
                designs = self.designs(fresh.only(shown).middle(self.positive))
                values, slopes = self._slopes(designs)
                new[shown] = self._edges(fresh.only(shown), slopes, asked) if asked else new[shown]
                miss = self._miss(values, asked)
                k = int(np.argmin(miss))
                if miss[k] < nearest:
                    closest, nearest = designs[k], float(miss[k])
                good = np.flatnonzero(self.problem.all_met(values))
                if find and len(good):
                    return _Outcome(False, designs[good[0]], designs[good[0]], budget.used)
            boxes = boxes.joined(fresh)
            hope, edge = np.concatenate([hope, room]), np.concatenate([edge, new])
            if not len(hope):
                return _Outcome(True, None, closest, budget.used)
            if budget.spent:
                return _Outcome(False, None, closest, budget.used)
            chosen = np.argsort(hope, kind="stable")[:BATCH]
            some = boxes.only(chosen)
            if (some.widths(self.positive).max(axis=1) <= SMALLEST).any() or (not find and nearest <= 0):
                return _Outcome(False, None, closest, budget.used)
            rest = np.setdiff1d(np.arange(len(hope)), chosen)
            fresh = some.halved(edge[chosen], self.positive)
            boxes, hope, edge = boxes.only(rest), hope[rest], edge[rest]

    def _room(self, bounds: _Bounds, asked: Sequence[int]) -> Array:
        """By how much the worst objective must miss at most: the least is the most promising."""
        worst = np.full(len(bounds.lower), -np.inf)
        for i in asked:
            a, b = self.windows[i]
            with np.errstate(invalid="ignore"):
                middle = (np.clip(bounds.lower[:, i], -1e300, 1e300) + np.clip(bounds.upper[:, i], -1e300, 1e300)) / 2
            worst = np.maximum(worst, np.maximum(a - middle, middle - b) / self.scale(i))
        return worst

    def _miss(self, values: Array, asked: Sequence[int]) -> Array:
        """By how much the worst objective is missed, relative; infinite where it has no value."""
        worst = np.where(np.isnan(values).any(axis=1), np.inf, -np.inf)
        for i in asked:
            a, b = self.inner_windows[i]
            worst = np.fmax(worst, np.maximum(a - values[:, i], values[:, i] - b) / self.scale(i))
        return worst

    def scale(self, i: int) -> float:
        """What a miss is compared with: the value asked for."""
        requirement = self.objectives[i].requirement
        if isinstance(requirement, Minimise | Maximise):
            return 1.0
        return requirement.slack() / EDGE_SLACK or 1.0


def _outward(bound: Array, side: float) -> Array:
    """A bound with room for rounding; what is no number bounds nothing."""
    moved = np.where(np.isinf(bound), bound, bound + side * ROUNDING * np.abs(bound))
    return np.where(np.isnan(bound), side * np.inf, moved)


@dataclass(frozen=True)
class _View:
    """Boxes and what encloses their eigenvalues; `pairs` are the columns of its differences."""

    low: Array
    high: Array
    enclosure: Enclosure
    pairs: tuple[tuple[int, int], ...]

    def frequency(self, j: int) -> tuple[Array, Array]:
        """Of the mode at a position [Hz]; an unstable design has none, so that zero is a bound."""
        turn = 2 * np.pi
        low, high = self.enclosure.low[:, j], self.enclosure.high[:, j]
        return np.sqrt(np.maximum(low, 0.0)) / turn, np.sqrt(np.maximum(high, 0.0)) / turn

    def frequencies(self, first: int, last: int) -> tuple[Array, Array]:
        """Of any of some modes."""
        return self.frequency(first)[0], self.frequency(last)[1]

    def splitting(self, i: int, j: int) -> tuple[Array, Array]:
        """``(λ_j − λ_i)/(2π (ω_i + ω_j))`` for i < j, with ``ω_j² = λ_i + (λ_j − λ_i)`` where that is the tighter."""
        k = self.pairs.index((i, j))
        d_low, d_high = self.enclosure.difference_low[:, k], self.enclosure.difference_high[:, k]
        (f_low, f_high), (g_low, g_high) = self.frequency(i), self.frequency(j)
        turn = 4 * np.pi**2
        fewest = f_low + np.maximum(g_low, np.sqrt(f_low**2 + d_high / turn))
        most = f_high + np.minimum(g_high, np.sqrt(f_high**2 + np.maximum(d_low, 0.0) / turn))
        low = np.where(most > 0, np.maximum(d_low, 0.0) / (turn * most), 0.0)
        return low, np.where((fewest > 0) & np.isfinite(d_high), d_high / (turn * fewest), np.inf)

    def ratio(self, i: int, j: int) -> tuple[Array, Array]:
        """``f_j/f_i`` for i < j, by itself and as ``√(1 + (λ_j − λ_i)/λ_i)``."""
        k = self.pairs.index((i, j))
        (f_low, f_high), (g_low, g_high) = self.frequency(i), self.frequency(j)
        turn = 4 * np.pi**2
        low = np.fmax(g_low / f_high, np.sqrt(1 + self.enclosure.difference_low[:, k] / (turn * f_high**2)))
        high = np.fmin(g_high / f_low, np.sqrt(1 + self.enclosure.difference_high[:, k] / (turn * f_low**2)))
        return low, high


@dataclass(frozen=True)
class _Measure:
    """What a measure is made of, and its bounds (B,) below and above over boxes."""

    modes: tuple[int, ...]
    pairs: tuple[tuple[int, int], ...]
    between: Callable[[_View], tuple[Array, Array]]


def _measure(objective: Objective, problem: Problem, family: Family) -> _Measure:
    """How to bound an objective's measure.

    Raises
    ------
    EnclosureError
        If it is no function of eigenvalues or totals alone.
    """
    place = _Places(problem.evaluator.rigid, family.size)
    match objective:
        case Frequency():
            first, last = place.range(objective.mode)
            return _Measure((first, last), (), lambda view: view.frequencies(first, last))
        case Period():
            first, last = place.range(objective.mode)
            return _Measure((first, last), (), lambda view: _inverse(view.frequencies(first, last)))
        case Splitting() | BeatPeriod() | FrequencyRatio():
            return _of_pair(objective, place(objective.between[0]), place(objective.between[1]))
        case KeepOut():
            modes = tuple(range(problem.evaluator.rigid, family.size))
            return _Measure(modes, (), lambda view: _distance(objective, modes, view))
        case TotalMass():
            return _total(family, _chosen(family.part_mass, objective.parts, problem))
        case Cost():
            return _total(family, _chosen(family.part_cost, objective.parts, problem))
        case LeastChange():
            return _Measure((), (), lambda view: _change(problem, view))
    raise EnclosureError(f"a {objective.kind} is not a function of the frequencies alone, and has no bounds")


@dataclass(frozen=True, slots=True)
class _Places:
    """Positions of modes among all."""

    rigid: int
    size: int

    def range(self, mode: ModeReference) -> tuple[int, int]:
        """First and last that a mode can be: of one named by its shape all that oscillate."""
        return (self.rigid, self.size - 1) if isinstance(mode, Like) else (self(mode), self(mode))

    def __call__(self, mode: ModeReference) -> int:
        """Of one named by its number."""
        if not isinstance(mode, int):
            raise EnclosureError("modes named by their shapes have no bounds on what is between them")
        if not 0 < mode <= self.size - self.rigid:
            raise EnclosureError(f"there is no mode {mode}")
        return self.rigid + mode - 1


def _inverse(between: tuple[Array, Array]) -> tuple[Array, Array]:
    """``1/value`` of what is positive, or of a splitting that has one sign."""
    low, high = between
    one_sign = (low >= 0) | (high <= 0)
    least, most = 1 / _signed_zero(high, low), 1 / _signed_zero(low, high)
    return np.where(one_sign, least, -np.inf), np.where(one_sign, most, np.inf)


def _signed_zero(value: Array, other: Array) -> Array:
    """Zero that stands for what is beside it."""
    return np.where(value == 0, np.copysign(0.0, other), value)


def _of_pair(objective: Splitting | BeatPeriod | FrequencyRatio, i: int, j: int) -> _Measure:
    if i == j:
        raise EnclosureError("a mode has no splitting from itself")
    pair, turned = (min(i, j), max(i, j)), i > j

    def between(view: _View) -> tuple[Array, Array]:
        if isinstance(objective, FrequencyRatio):
            low, high = view.ratio(*pair)
            return (1 / high, 1 / low) if turned else (low, high)
        low, high = view.splitting(*pair)
        if isinstance(objective, BeatPeriod):
            low, high = _inverse((low, high))
        return (-high, -low) if turned else (low, high)

    return _Measure(pair, (pair,), between)


def _distance(objective: KeepOut, modes: tuple[int, ...], view: _View) -> tuple[Array, Array]:
    """Least distance of any mode from any band; which modes a body drives is left open, they can only be fewer."""
    lower, upper = np.full(len(view.low), np.inf), np.full(len(view.low), np.inf)
    for j in modes:
        f_low, f_high = view.frequency(j)
        for low, high in objective.bands:
            edge = low if low > 0 else -np.inf
            ends = [np.maximum(edge - f, f - high) for f in (f_low, f_high)]
            middle = (low + high) / 2
            deepest = np.where((f_low <= middle) & (middle <= f_high), (low - high) / 2, np.minimum(*ends))
            lower = np.minimum(lower, deepest if low > 0 else ends[0])
            upper = np.minimum(upper, np.maximum(*ends))
    return lower, np.full(len(upper), np.inf) if objective.driven_by else upper


def _chosen(known: Sequence[Contributions | None], parts: Sequence[str], problem: Problem) -> tuple[Contributions, ...]:
    chosen = [(part, known[problem.evaluator.model.parts.index(part)]) for part in parts]
    for part, own in chosen:
        if own is None:
            raise EnclosureError(f"what `{part}` adds depends on what is found at rest, and has no bounds")
    return tuple(own for _, own in chosen if own is not None)


def _total(family: Family, parts: tuple[Contributions, ...]) -> _Measure:
    """A sum of monomials, like ones collected."""
    powers = np.concatenate([part.powers for part in parts])
    kinds, group = np.unique(powers, axis=0, return_inverse=True)
    coefficient = np.bincount(group.ravel(), np.concatenate([part.coefficient for part in parts]), len(kinds))

    def between(view: _View) -> tuple[Array, Array]:
        low, high = power_ranges(kinds, family.positive, view.low, view.high)
        up, down = np.maximum(coefficient, 0.0), np.maximum(-coefficient, 0.0)
        slack = ROUNDING * len(coefficient) * (np.maximum(np.abs(low), np.abs(high)) @ (up + down))
        return low @ up - high @ down - slack, high @ up - low @ down + slack

    return _Measure((), (), between)


def _change(problem: Problem, view: _View) -> tuple[Array, Array]:
    """Root of the sum of squared changes of the free variables that have a start."""
    least, most = np.zeros(len(view.low)), np.zeros(len(view.low))
    for p, i in enumerate(problem.free):
        v = problem.variables[i]
        if v.start is None:
            continue
        ends = [
            np.log(x / v.start) if v.positive else (x - v.start) / (v.high - v.low)
            for x in (view.low[:, p], view.high[:, p])
        ]
        inside = (ends[0] <= 0) & (ends[1] >= 0)
        sizes = [np.abs(end) for end in ends]
        least += np.where(inside, 0.0, np.minimum(*sizes)) ** 2
        most += np.maximum(*sizes) ** 2
    return np.sqrt(least), np.sqrt(most)
