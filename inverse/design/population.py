"""Zeros of a bounded nonlinear system from many starts that are advanced together.

The difficult case is a square system of eigenvalue equations whose bounds bind: of the local
searches that start at random points nearly all end in a local minimum, and the share that does
not falls exponentially with size. The points where local searches get stuck are informative
though, so the search is one of local searches over local searches:

1. *Random starts*, first one, then `EARLY_LANES`, then `LANES` together, each a complete
   Levenberg-Marquardt search: all that an easy problem ever sees. It ends here when the stationary
   points met so often repeat that others are unlikely (Boender and Rinnooy Kan [1]_).
2. *Lineages*. The best end points form an archive. Each new search starts near one of them:
   a few variables drawn anew, or all shifted a little, or some taken over from another end point.
   It is given up as soon as progress flags; its place is taken by the next at once.
3. When the archive has not improved for long it is emptied, and the search begins again with
   random starts. When `GENERATIONS` of them have ended at the least cost known, it is given up.

Everything is drawn from the given generator, and nothing depends on time: the same arguments give
the same result.

References
----------
.. [1] C. G. E. Boender and A. H. G. Rinnooy Kan, "Bayesian stopping rules for multistart global
   optimization methods", Mathematical Programming 37, 1987, pp. 59-80.
"""

import enum
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from inverse.design.levenberg_marquardt import Array, Runs, advance, begin

# Chosen by the evaluations it took to solve chains, trees and rings of 30 and 40 bodies
# (tests/benchmarks/problems.py). The largest effect is that of `LITTLE`: runs that are left early.
EARLY_LANES = 8  # runs advanced together after the first has failed, until so many have ended
LANES = 32  # after that
ARCHIVE = 48  # end points kept
LITTLE = 0.1  # a lineage's step that gains less than this share of the cost is slow
LITTLE_WHEN_THOROUGH = 1e-5
SLOW_STEPS = 2  # so many in a row end a run
TRIAL = 10  # steps after which a lineage must be within the archive's costs
LIFE = 100  # steps after which any run ends
PATIENCE = 50  # runs without improvement before a new generation, times the number of variables
BATCH_BYTES = 256e6  # of the Jacobian matrices of a batch; a step holds about five times that
GENERATIONS = 3  # that must end at the least cost for it to be believed
SAME_POINT = 1e-2  # archive points are at least so far apart, in shares of the ranges
SAME_COST = 1e-3  # relative, between costs of what counts as one stationary point
DRAWS = 1000  # infeasible draws in a row before the feasible set is taken to be empty


class Residuals(Protocol):
    """The system of equations to be solved."""

    def __call__(self, points: Array, /) -> tuple[Array, Array]:
        """Return residuals (B, m) and their derivatives (B, m, p) at points (B, p).

        Rows with NaN mark points outside the feasible set. An inequality ``g >= 0`` is the row
        ``min(0, g)``, with derivatives of zero while it is satisfied.
        """
        ...


class Stop(enum.Enum):
    """Why the search ended; the value is the sentence for the report."""

    SOLVED = "As many distinct solutions as wanted were found."
    EXHAUSTED = "Further starts only led to points already known."
    BUDGET = "The budget of evaluations was used up."
    INFEASIBLE = "No start lay inside the feasible set."


@dataclass(frozen=True, slots=True, kw_only=True)
class Budget:
    """What a search may cost."""

    evaluations: int = 400_000
    """Points at which residuals are asked for; passed by one batch at most."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PopulationResult:
    """Solutions and the best point; ``best`` and what belongs to it are NaN if none was feasible."""

    solutions: Array  # (k, p), in the order found
    best: Array  # (p,), of least sum of squares
    residuals: Array  # (m,), at `best`
    jacobian: Array  # (m, p), at `best`
    evaluations: int
    rounds: int  # calls of the residuals
    stopped_because: Stop


def solve_population(
    residuals: Residuals,
    lower: Array,
    upper: Array,
    *,
    rng: np.random.Generator,
    starts: int = 24,
    first: Array | None = None,
    wanted: int = 1,
    tolerance: float = 1e-10,
    budget: Budget | None = None,
    distinct: float = 1e-2,
) -> PopulationResult:
    """Find points inside a box at which all residuals vanish.

    Parameters
    ----------
    residuals : Residuals
        Any number of equations, fewer or more than variables. The scale of the residuals as a
        whole does not matter, except to `tolerance`.
    lower, upper : ndarray, shape (p,)
        Finite; where they are equal the variable is fixed.
    rng : numpy.random.Generator
        The only source of randomness.
    starts : int
        Fewest complete searches from random points before a problem is given up.
    first : ndarray, shape (k, p), optional
        Points to begin with, brought into the box.
    wanted : int
        Number of distinct solutions to look for.
    tolerance : float
        Greatest magnitude of a residual at a solution.
    budget : Budget, optional
    distinct : float
        Two solutions are distinct if a variable differs by more than this share of its range.

    Returns
    -------
    PopulationResult
        Not reaching a solution is a result: see `PopulationResult.stopped_because`.

    Raises
    ------
    ValueError
        If the bounds are not finite, cross or differ in shape.
    """
    _check_bounds(lower, upper)
    box = _Box(residuals, lower, upper)
    search = _Search(box, rng, starts, wanted, tolerance, budget or Budget(), distinct)
    return search.result(search.run(box.to_unit(first) if first is not None else None))


def _check_bounds(lower: Array, upper: Array) -> None:
    if lower.ndim != 1 or lower.shape != upper.shape:
        raise ValueError(f"expected bounds of one shape (p,), found {lower.shape} and {upper.shape}")
    wrong = np.flatnonzero(~(np.isfinite(lower) & np.isfinite(upper) & (lower <= upper)))
    if wrong.size:
        i = wrong[0]
        raise ValueError(f"expected finite bounds, lower <= upper, found {lower[i]} and {upper[i]} for variable {i}")


class _Box:
    """The unit box instead of the given one, and a count of evaluations."""

    def __init__(self, residuals: Residuals, lower: Array, upper: Array) -> None:
        self._residuals, self._lower, self._upper = residuals, lower, upper
        self._width = upper - lower
        self.free = self._width > 0.0
        self.evaluations = 0
        self.rounds = 0

    def __call__(self, points: Array) -> tuple[Array, Array]:
        residuals, jacobian = self.unscaled(points)
        return residuals, jacobian * self._width

    def unscaled(self, points: Array) -> tuple[Array, Array]:
        """Residuals and their derivatives with respect to the variables as given."""
        self.evaluations += len(points)
        self.rounds += 1
        return self._residuals(self.from_unit(points))

    def from_unit(self, points: Array) -> Array:
        return np.clip(self._lower + self._width * points, self._lower, self._upper)

    def to_unit(self, points: Array) -> Array:
        width = np.where(self.free, self._width, 1.0)
        return np.clip((points - self._lower) / width, 0.0, 1.0) * self.free


class _Archive:
    """The best end points of runs (a, p), by ascending cost, no two at the same place."""

    def __init__(self, variables: int) -> None:
        self.points = np.zeros((0, variables))
        self.costs = np.zeros(0)

    @property
    def threshold(self) -> float:
        """Cost below which a point is taken in."""
        return float(self.costs[-1]) if len(self.costs) == ARCHIVE else np.inf

    def add(self, point: Array, cost: float) -> None:
        near = np.abs(self.points - point).max(axis=1, initial=0.0) < SAME_POINT
        if cost >= self.threshold or (cost >= self.costs[near]).any():
            return
        points, costs = self.points[~near], self.costs[~near]
        place = int(np.searchsorted(costs, cost))
        self.points = np.insert(points, place, point, axis=0)[:ARCHIVE]
        self.costs = np.insert(costs, place, cost)[:ARCHIVE]

    def offspring(self, count: int, rng: np.random.Generator) -> Array:
        """Draw starts near archived points.

        Of three kinds in equal shares: one or two variables drawn anew; all variables shifted,
        by 2 to 40 % of their ranges; up to 30 % of the variables taken from another point, and
        all shifted a little. Together they were never worse than one kind alone on the families tried.
        """
        shape = (count, self.points.shape[1])
        parents = self.points[rng.integers(len(self.costs), size=count)]
        others = self.points[rng.integers(len(self.costs), size=count)]
        noise = rng.normal(size=shape)
        kind = rng.integers(3, size=(count, 1))
        few = rng.random(shape) < rng.integers(1, 3, size=(count, 1)) / shape[1]
        few[np.arange(count), rng.integers(shape[1], size=count)] = True
        redrawn = np.where(few, rng.random(shape), parents)
        shifted = parents + 0.02 * 20.0 ** rng.random((count, 1)) * noise
        crossed = np.where(rng.random(shape) < rng.uniform(0, 0.3, (count, 1)), others, parents)
        drawn = np.select([kind == 0, kind == 1], [redrawn, shifted], crossed + 0.06 * noise)
        return np.asarray(np.clip(drawn, 0.0, 1.0))


class _Search:
    """One call of `solve_population`, in the unit box."""

    def __init__(
        self,
        box: _Box,
        rng: np.random.Generator,
        starts: int,
        wanted: int,
        tolerance: float,
        budget: Budget,
        distinct: float,
    ) -> None:
        self.box, self.rng = box, rng
        self.starts, self.wanted, self.distinct = starts, wanted, distinct
        self.tolerance, self.budget = tolerance, budget
        self.variables = len(box.free)
        self.solutions = np.zeros((0, self.variables))
        self.best, self.best_cost = np.full(self.variables, np.nan), np.inf
        self.finished = 0  # runs, over all generations
        self.complete_ends: list[float] = []  # costs at the ends of complete searches
        self.generations: list[float] = []  # least cost of each generation but this one
        self.begin_generation()

    def begin_generation(self) -> None:
        self.archive = _Archive(self.variables)
        self.least_cost = np.inf
        self.begun = 0
        self.unimproved = 0  # runs finished since the least cost fell

    def run(self, first: Array | None) -> Stop:
        """Search until there is a reason to stop."""
        runs = self.begin_runs(self.random(1) if first is None else first)
        while True:
            runs = self.fill(runs)
            if not len(runs):
                return Stop.INFEASIBLE
            advance(runs, self.box, np.where(runs.thorough, LITTLE_WHEN_THOROUGH, LITTLE))
            runs = self.collect(runs)
            if (stop := self.reason_to_stop()) is not None:
                return stop
            if self.stagnant:
                self.generations.append(self.least_cost)
                self.begin_generation()
                runs = runs.take(np.zeros(len(runs), dtype=bool))

    # Opening runs --------------------------------------------------------------------------

    def fill(self, runs: Runs) -> Runs:
        """Open runs until all lanes are taken, or the feasible set is too hard to hit."""
        for _ in range(DRAWS):
            room = self.lanes(runs) - len(runs)
            if room <= 0:
                break
            runs = runs.join(self.begin_runs(self.draw(room)))
        return runs

    def lanes(self, runs: Runs) -> int:
        """How many runs to have open: an easy problem shall cost no more than one good start."""
        if self.finished < EARLY_LANES:
            return EARLY_LANES if self.finished else 1
        return int(np.clip(BATCH_BYTES // max(1, runs.jacobian[:1].nbytes), 1, LANES))

    def draw(self, count: int) -> Array:
        if self.at_random_starts or not len(self.archive.costs):
            return self.random(count)
        return self.archive.offspring(count, self.rng) * self.box.free

    def random(self, count: int) -> Array:
        return self.rng.random((count, self.variables)) * self.box.free

    @property
    def at_random_starts(self) -> bool:
        return self.begun < max(self.starts, ARCHIVE)

    def begin_runs(self, points: Array) -> Runs:
        thorough = self.at_random_starts and not self.generations
        runs = begin(points, self.box, thorough)
        self.begun += len(runs)
        return runs

    # Closing runs --------------------------------------------------------------------------

    def collect(self, runs: Runs) -> Runs:
        """Take note of the runs that have ended and return the others."""
        self.note_best(runs)
        solved = np.abs(runs.residuals).max(axis=1) <= self.tolerance
        hopeless = (runs.age == TRIAL) & (runs.cost > self.archive.threshold) & ~runs.thorough
        ended = solved | hopeless | (runs.slow >= SLOW_STEPS) | (runs.age >= LIFE)
        for i in np.flatnonzero(ended):
            self.close(runs.points[i], runs.cost[i], solved[i], runs.thorough[i])
        return runs.take(~ended) if ended.any() else runs

    def note_best(self, runs: Runs) -> None:
        i = int(runs.cost.argmin())
        if runs.cost[i] < self.best_cost:
            self.best, self.best_cost = runs.points[i].copy(), float(runs.cost[i])

    def close(self, point: Array, cost: float, solved: bool, thorough: bool) -> None:
        self.finished += 1
        self.unimproved += 1
        known = self.nearest_solution(point) <= self.distinct
        if solved and not known:
            self.solutions = np.append(self.solutions, point[None], axis=0)
            self.unimproved = 0
        elif not known:
            self.archive.add(point, cost)
            if cost < (1.0 - SAME_COST) * self.least_cost:
                self.least_cost, self.unimproved = cost, 0
        if thorough:
            self.complete_ends.append(self.label(point, cost, solved))

    def nearest_solution(self, point: Array) -> float:
        """Greatest difference in a variable from the closest of the known solutions."""
        return float(np.abs(self.solutions - point).max(axis=1, initial=0.0).min(initial=np.inf))

    def label(self, point: Array, cost: float, solved: bool) -> float:
        """What tells one end point of a complete search from another: solutions by number."""
        if not solved:
            return cost
        return -1.0 - float(np.abs(self.solutions - point).max(axis=1).argmin())

    # Stopping ------------------------------------------------------------------------------

    @property
    def stagnant(self) -> bool:
        return self.unimproved > PATIENCE * self.variables

    def reason_to_stop(self) -> Stop | None:
        if len(self.solutions) >= self.wanted:
            return Stop.SOLVED
        if self.box.evaluations >= self.budget.evaluations:
            return Stop.BUDGET
        if self.all_points_known() or (self.stagnant and self.same_as_before()):
            return Stop.EXHAUSTED
        return None

    def all_points_known(self) -> bool:
        """Whether hardly more stationary points are expected than seen, by Boender and Rinnooy Kan."""
        searches = len(self.complete_ends)
        if searches < self.starts or not self.at_random_starts:
            return False
        seen = _count_distinct(np.sort(self.complete_ends))
        if searches <= seen + 2:
            return False
        expected = seen * (searches - 1) / (searches - seen - 2)
        return expected < seen + 0.5

    def same_as_before(self) -> bool:
        """Whether generations keep ending at the least cost known, or there are solutions."""
        costs = np.array([*self.generations, self.least_cost])
        confirmed = (costs * (1.0 - SAME_COST) <= costs.min()).sum() >= GENERATIONS
        return len(self.solutions) > 0 or bool(confirmed)

    # The end -------------------------------------------------------------------------------

    def result(self, stop: Stop) -> PopulationResult:
        """Put the outcome into the variables as given."""
        if stop in (Stop.EXHAUSTED, Stop.BUDGET):
            self.refine_best()
        residuals, jacobian = self.box.unscaled(self.best[None])
        return PopulationResult(
            solutions=self.box.from_unit(self.solutions),
            best=self.box.from_unit(self.best),
            residuals=residuals[0],
            jacobian=jacobian[0],
            evaluations=self.box.evaluations,
            rounds=self.box.rounds,
            stopped_because=stop,
        )

    def refine_best(self) -> None:
        """Let the best point converge: as a member of a lineage it was left early."""
        runs = begin(self.best[None], self.box, thorough=True)
        while len(runs) and runs.slow[0] < SLOW_STEPS and runs.age[0] < LIFE:
            advance(runs, self.box, np.array([LITTLE_WHEN_THOROUGH]))
        self.note_best(runs)


def _count_distinct(costs: Array) -> int:
    """How many values of an ascending list differ by more than `SAME_COST`, relatively."""
    return 1 + int((np.diff(costs) > SAME_COST * np.abs(costs[1:])).sum())
