"""How many eigenvalues of a pencil lie below a limit, for a whole batch of builds, without solving for any.

Symbols
-------
K, M, σ  stiffness, mass and a shift [rad²/s²]
L, D     ``K − σM = L D Lᵀ`` with ``D`` diagonal
D, U     in the code: diagonal (n, B), and entries above it (s, B) in the order they are eliminated

As many eigenvalues of ``K φ = λ M φ`` lie below σ as ``D`` has negative entries (Sylvester's law of inertia) [1]_.
All builds of a model share one pattern, so the order of elimination (minimum degree) is found once, and
every step of the elimination is one operation on a row of builds.

No pivot is ever moved. On a pattern without circles that does no harm: leaves first, the count is that of a
pencil whose entries differ by a few roundings [2]_, however small a pivot gets. Elsewhere the computed
factors are those of a pencil that differs by roundings of the entries *grown* under elimination,
``|L||D||Lᵀ|`` [3]_; its diagonal is recorded, and a build in which it comes to more than `CERTAIN` of the
shift is handed back.

References
----------
.. [1] B. N. Parlett, "The Symmetric Eigenvalue Problem", SIAM, 1998, section 3.3.
.. [2] J. W. Demmel and W. Gragg, "On computing accurate singular values and eigenvalues of matrices with
   acyclic graphs", Linear Algebra and its Applications 185, 1993, pp. 203-217.
.. [3] N. J. Higham, "Accuracy and Stability of Numerical Algorithms", SIAM, 2002, theorem 9.3.
"""

from __future__ import annotations

import heapq
import itertools
import threading
from collections import Counter
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray

from inverse.assembly.assembly import Model
from inverse.assembly.terms import Array, IntArray, Monomials, Point, Squares
from inverse.matrices.stack import Matrices
from inverse.modal.solution import solve_modes

CERTAIN = 5e-10
"""A count stands if it is exact for a shift within this share of the one asked: half the slack on edges of windows."""

WORKSPACE = 2_000_000
"""Numbers worked on at a time: some megabytes, which stay near the processor."""

LARGEST_CHUNK = 16_384
"""Builds worked on at a time at most."""

SMALLEST_CHUNK = 512
"""And at least, where a row of builds still outweighs the call that works on it."""

LARGEST_DENSE = 4_096
"""Builds solved dense at a time at most."""

LARGEST_PRODUCT = 4
"""Whole powers up to this one are multiplied out."""


class Scratch(threading.local):
    """Arrays used again and again, by name, for each thread: fresh memory costs more than the arithmetic on it."""

    def __init__(self) -> None:
        """Start with none."""
        self.known: dict[str, Array] = {}

    def take(self, name: str, rows: int, builds: int) -> Array:
        """An array (rows, builds) of anything, valid until the name is taken again."""
        size = rows * builds
        if name not in self.known or len(self.known[name]) < size:
            self.known[name] = np.empty(size)
        return self.known[name][:size].reshape(rows, builds)


@dataclass(frozen=True, slots=True)
class Level:
    """Pivots ``first`` to ``last`` that do not touch each other, each with `width` entries above the diagonal.

    `diagonal` lists (pivot, slot) to take off the diagonal, `runs` lists (slot of L, source, target, length) of
    slots to take off above it.
    """

    first: int
    last: int
    width: int
    diagonal: tuple[tuple[int, int], ...]
    runs: tuple[tuple[int, int, int, int], ...]


@dataclass(frozen=True)
class Elimination:
    """The order in which coordinates are eliminated, and what each step touches.

    Attributes
    ----------
    order : ndarray of int, shape (n,)
        Which coordinate is the k-th pivot. All else counts in this order.
    later : tuple of tuple of int
        For every pivot the later ones it is joined to when its turn comes, ascending.
    first : ndarray of int, shape (n + 1,)
        Pivot k owns the slots ``first[k]`` to ``first[k + 1]`` above the diagonal.
    levels : tuple of Level
    acyclic : bool
        Whether the pattern has no circle.
    """

    order: IntArray
    later: tuple[tuple[int, ...], ...]
    first: IntArray
    levels: tuple[Level, ...]
    acyclic: bool
    scratch: Scratch = field(default_factory=Scratch, repr=False, compare=False)

    @classmethod
    def of(cls, size: int, joined: Iterable[tuple[int, int]], *, backward: bool = False) -> Elimination:
        """Minimum-degree elimination of a pattern given by its pairs of joined coordinates.

        Of several coordinates joined to equally few the first is taken, or with `backward` the last.
        """
        neighbours: list[set[int]] = [set() for _ in range(size)]
        for i, j in joined:
            neighbours[i].add(j)
            neighbours[j].add(i)
        edges = sum(map(len, neighbours)) // 2
        order, met = _minimum_degree(neighbours, -1 if backward else 1)
        height = _heights(order, met)
        # Pivots of one height are independent: any order that keeps heights ascending has the same fill.
        order.sort(key=lambda i: (height[i], len(met[i])))
        place = {i: k for k, i in enumerate(order)}
        later = tuple(tuple(sorted(place[j] for j in met[i])) for i in order)
        first = np.concatenate([[0], np.cumsum([len(own) for own in later])]).astype(np.intp)
        levels = tuple(_levels([(height[i], len(met[i])) for i in order], later, first))
        return cls(np.array(order, np.intp), later, first, levels, int(first[-1]) == edges and _is_forest(later))

    @property
    def size(self) -> int:
        """Number of coordinates ``n``."""
        return len(self.order)

    @property
    def slots(self) -> int:
        """Entries above the diagonal ``s``."""
        return int(self.first[-1])

    @cached_property
    def roots(self) -> tuple[int, ...]:
        """Pivots that are taken from nothing: what is not a number anywhere arrives there."""
        return tuple(k for k, own in enumerate(self.later) if not own)

    @cached_property
    def busiest(self) -> int:
        """The most subtractions any entry undergoes."""
        return int(np.bincount([i for own in self.later for i in own], minlength=1).max())

    @cached_property
    def columns(self) -> IntArray:
        """The later pivot of every slot, shape (s,)."""
        return np.array([i for own in self.later for i in own], np.intp)

    def place(self) -> dict[tuple[int, int], int]:
        """Where the entry of two coordinates stands: the diagonal first, then the slots above it."""
        n, order = self.size, self.order.tolist()
        table = {(i, i): k for k, i in enumerate(order)}
        for k, own in enumerate(self.later):
            for slot, i in enumerate(own, start=n + int(self.first[k])):
                table[order[k], order[i]] = table[order[i], order[k]] = slot
        return table

    def factor(self, D: Array, U: Array, L: Array | None = None, weight: Array | None = None) -> Array:
        """``L D Lᵀ`` of a row of builds, in place.

        Parameters
        ----------
        D : ndarray, shape (n, B)
            Diagonal; becomes the pivots.
        U : ndarray, shape (s, B)
            Entries above it; overwritten where there is fill.
        L : ndarray, shape (s, B), optional
            Receives the columns of ``L`` below its unit diagonal, as rows.
        weight : ndarray, shape (n,), optional
            With it the growth is recorded.

        Returns
        -------
        ndarray, shape (B,)
            `weight` times what was taken off the diagonal, in size; zero without `weight`.
        """
        builds, growth = D.shape[1], np.zeros(D.shape[1])
        most = max((int(self.first[level.last] - self.first[level.first]) for level in self.levels), default=0)
        take = self.scratch.take
        taken, spare = take("taken", most, builds), take("spare", max(map(len, self.later), default=0), builds)
        lower = take("lower", most, builds) if L is None else L
        pivots = list(D)
        for level in self.levels:
            a, b = int(self.first[level.first]), int(self.first[level.last])
            above, below = U[a:b], lower[: b - a] if L is None else L[a:b]
            _divide(above, D[level.first : level.last], below)
            off = np.multiply(above, below, taken[: b - a])
            for (i, _), row in zip(level.diagonal, off, strict=True):
                np.subtract(pivots[i], row, pivots[i])
            for slot, source, target, length in level.runs:
                block = np.multiply(U[source : source + length], below[slot - a], spare[:length])
                aim = U[target : target + length]
                np.subtract(aim, block, aim)
            if weight is not None:
                growth += weight[self.columns[a:b]] @ np.abs(off, off)
        return growth

    def solve(self, D: Array, L: Array, right: Array) -> None:
        """``(L D Lᵀ)⁻¹`` times right-hand sides (n, r, B) in the order of elimination, in place."""
        spare = np.empty(right.shape[1:])
        rows, lower = list(right), list(L)
        steps = [(k, i, slot) for k, own in enumerate(self.later) for slot, i in enumerate(own, int(self.first[k]))]
        for k, i, slot in steps:
            np.subtract(rows[i], np.multiply(rows[k], lower[slot], spare), rows[i])
        np.divide(right, D[:, None, :], right)
        for k, i, slot in reversed(steps):
            np.subtract(rows[k], np.multiply(rows[i], lower[slot], spare), rows[k])


def _divide(above: Array, pivots: Array, out: Array) -> None:
    """Entries (p · width, B) over their pivots (p, B)."""
    groups = (len(pivots), len(above) // len(pivots), above.shape[1])
    if groups[1] == 1:
        np.divide(above, pivots, out)
    else:
        # One division serves all entries of a pivot.
        np.multiply(above.reshape(groups), np.divide(1.0, pivots)[:, None], out.reshape(groups))


def _minimum_degree(neighbours: list[set[int]], sign: int) -> tuple[list[int], list[set[int]]]:
    """Order of elimination, and whom each coordinate is joined to at its turn; `neighbours` is used up."""
    met = [set[int]() for _ in neighbours]
    queue = [(len(own), sign * i) for i, own in enumerate(neighbours)]
    heapq.heapify(queue)
    order: list[int] = []
    done = [False] * len(neighbours)
    while queue:
        degree, signed = heapq.heappop(queue)
        i = abs(signed)
        if done[i] or degree != len(neighbours[i]):
            continue
        order.append(i)
        done[i], met[i] = True, neighbours[i]
        for j in met[i]:
            neighbours[j] |= met[i]
            neighbours[j] -= {i, j}
            heapq.heappush(queue, (len(neighbours[j]), sign * j))
    return order, met


def _heights(order: Sequence[int], met: Sequence[set[int]]) -> list[int]:
    """How many steps must come before each coordinate's own."""
    height = [0] * len(met)
    for i in order:
        for j in met[i]:
            height[j] = max(height[j], height[i] + 1)
    return height


def _is_forest(later: Sequence[Sequence[int]]) -> bool:
    """Without fill, a pattern has no circle exactly if every pivot is joined to one later one at most."""
    return all(len(own) <= 1 for own in later)


def _levels(keys: Sequence[tuple[int, int]], later: Sequence[tuple[int, ...]], first: IntArray) -> Iterator[Level]:
    """Consecutive pivots of one height and width, those without entries left out."""
    slot = {(k, j): int(first[k]) + s for k, own in enumerate(later) for s, j in enumerate(own)}
    for (_, width), pivots in itertools.groupby(range(len(keys)), key=lambda k: keys[k]):
        group = list(pivots)
        if width:
            diagonal = tuple((i, slot[k, i]) for k in group for i in later[k])
            runs = tuple(
                (slot[k, i], *run)
                for k in group
                for i in later[k]
                for run in _runs([(slot[k, j], slot[i, j]) for j in later[k] if j > i])
            )
            yield Level(group[0], group[-1] + 1, width, diagonal, runs)


def _runs(pairs: Sequence[tuple[int, int]]) -> list[tuple[int, int, int]]:
    """Consecutive pairs of slots joined into (source, target, length)."""
    runs: list[tuple[int, int, int]] = []
    for source, target in pairs:
        if runs and source - runs[-1][0] == target - runs[-1][1] == runs[-1][2]:
            runs[-1] = (*runs[-1][:2], runs[-1][2] + 1)
        else:
            runs.append((source, target, 1))
    return runs


Term = tuple[float, tuple[int, ...]]
"""A number times rows of builds."""


@dataclass(slots=True)
class Rows:
    """Rows of builds: the dimensions, then everything else that entries are linear in.

    A later row is a product ``Π row^e`` of earlier ones or a sum of terms; `steps` makes them in order.
    `monomials` gives every monomial of the model as a number times at most one row.
    """

    dimensions: int
    steps: list[Step] = field(default_factory=list)
    monomials: list[Term] = field(default_factory=list)
    known: dict[Step, int] = field(default_factory=dict)

    @classmethod
    def of(cls, dimensions: int, monomials: Monomials) -> Rows:
        """Rows for all monomials; those that differ by a number share theirs."""
        rows = cls(dimensions)
        factors: list[list[tuple[int, float]]] = [[] for _ in range(len(monomials))]
        for i, j in zip(*monomials.exponents.nonzero(), strict=True):
            factors[i].append((int(j), float(monomials.exponents[i, j])))
        for i, own, powers in zip(monomials.mixed, monomials.signed_dimension, monomials.signed_power, strict=True):
            factors[i] += [(int(j), float(e)) for j, e in zip(own, powers, strict=True) if e]
        rows.monomials = [(float(c), rows.product(own)) for c, own in zip(monomials.coefficients, factors, strict=True)]
        return rows

    def __len__(self) -> int:
        """How many."""
        return self.dimensions + len(self.steps)

    def product(self, factors: Iterable[tuple[int, float]]) -> tuple[int, ...]:
        """The row of a product, none for an empty one."""
        known = sorted(factors)
        match known:
            case []:
                return ()
            case [(j, 1)]:
                return (j,)
        return (self._place(Product.of(known)),)

    def sum(self, monomials: Sequence[int]) -> Term:
        """Monomials that add up, as a number times at most one row."""
        terms = tuple(self.monomials[i] for i in monomials)
        if len(terms) == 1:
            return terms[0]
        if not any(rows for _, rows in terms):
            return sum(c for c, _ in terms), ()
        return 1.0, (self._place(Sum(terms)),)

    def _place(self, step: Step) -> int:
        if step not in self.known:
            self.known[step] = len(self)
            self.steps.append(step)
        return self.known[step]

    def values(self, d: Array, scratch: Scratch) -> Array:
        """All rows for dimensions ``d`` (D, B); `d` itself where nothing is to be added."""
        if not self.steps and d.strides[1] == d.itemsize:
            return d
        rows, spare = scratch.take("rows", len(self), d.shape[1]), np.empty(d.shape[1])
        rows[: self.dimensions] = d
        for out, step in zip(rows[self.dimensions :], self.steps, strict=True):
            step.write(rows, out, spare)
        return rows


@dataclass(frozen=True, slots=True)
class Product:
    """``Π row^e``: rows to multiply by, to divide by, and to raise to a power."""

    up: tuple[int, ...]
    down: tuple[int, ...]
    powers: tuple[tuple[int, float], ...]

    @classmethod
    def of(cls, factors: Sequence[tuple[int, float]]) -> Product:
        """Small whole powers are multiplied out."""
        whole = [(j, int(e)) for j, e in factors if e == int(e) and abs(e) <= LARGEST_PRODUCT]
        up = tuple(j for j, e in whole for _ in range(e))
        down = tuple(j for j, e in whole for _ in range(-e))
        return cls(up, down, tuple((j, e) for j, e in factors if e != int(e) or abs(e) > LARGEST_PRODUCT))

    @property
    def rows(self) -> tuple[int, ...]:
        """All its factors."""
        return (*self.up, *self.down, *(j for j, _ in self.powers))

    def write(self, rows: Array, out: Array, spare: Array) -> None:
        """Values from earlier rows."""
        value: Array | float = 1.0
        if self.up:
            value = rows[self.up[0]]
        for j in self.up[1:]:
            value = np.multiply(value, rows[j], out)
        for j, e in self.powers:
            value = np.multiply(value, np.power(rows[j], e, out=spare), out)
        for j in self.down:
            value = np.divide(value, rows[j], out)


@dataclass(frozen=True, slots=True)
class Sum:
    """Terms of at most one row each, added up."""

    terms: tuple[Term, ...]

    def write(self, rows: Array, out: Array, spare: Array) -> None:
        """Values from earlier rows."""
        out.fill(sum(c for c, own in self.terms if not own))
        for c, own in self.terms:
            if own:
                np.add(out, np.multiply(rows[own[0]], c, spare), out)


Step = Product | Sum


@dataclass(frozen=True)
class Recipe:
    """The entries of ``K`` or ``M``: `start` + `by_row` @ rows; the diagonal first (n), then the slots above it (s).

    `by_row` is (n + s, rows) and `start` (n + s,). `weights` lists the terms that weigh the squares.
    """

    start: Array
    by_row: sp.csr_array
    weights: tuple[Term, ...]

    @classmethod
    def of(cls, squares: Squares, place: dict[tuple[int, int], int], size: int, rows: Rows) -> Recipe:
        """Every square multiplied out over its pairs of columns."""
        start = np.zeros(size)
        shares: list[tuple[float, int, int]] = []
        for weight, columns in zip(squares.weight.tolist(), _columns(squares), strict=True):
            row = [(column, rows.sum(monomials)) for column, monomials in columns.items()]
            for p, (i, at_i) in enumerate(row):
                for j, at_j in row[p:]:
                    terms = (rows.monomials[weight], at_i, at_j)
                    number = float(np.prod([c for c, _ in terms]))
                    powers = Counter(r for _, own in terms for r in own)
                    product = rows.product([(r, float(e)) for r, e in powers.items()])
                    if product:
                        shares.append((number, place[i, j], product[0]))
                    else:
                        start[place[i, j]] += number
        numbers, entries, sources = np.array(shares, float).reshape(-1, 3).T
        at = entries.astype(np.intp), sources.astype(np.intp)
        table = sp.coo_array((numbers, at), shape=(size, len(rows)))
        return cls(start, sp.csr_array(table), tuple(rows.monomials[i] for i in squares.weight.tolist()))

    def widened(self, rows: int) -> Recipe:
        """The same over more rows."""
        table = sp.csr_array((self.by_row.data, self.by_row.indices, self.by_row.indptr), shape=(len(self.start), rows))
        return Recipe(self.start, table, self.weights)

    def head(self, entries: int) -> Recipe:
        """The first entries alone."""
        return Recipe(self.start[:entries], sp.csr_array(self.by_row[:entries]), self.weights)

    @cached_property
    def steps(self) -> tuple[tuple[float, tuple[tuple[float, int], ...], tuple[int, ...], tuple[int, ...]], ...]:
        """For every entry its start, scaled rows, rows to add, and rows to subtract."""
        table = self.by_row
        entries = [slice(a, b) for a, b in itertools.pairwise(table.indptr.tolist())]
        terms = [list(zip(table.data[own].tolist(), table.indices[own].tolist(), strict=True)) for own in entries]
        return tuple(
            (
                float(start),
                tuple((c, r) for c, r in own if abs(c) != 1),
                tuple(r for c, r in own if c == 1),
                tuple(r for c, r in own if c == -1),
            )
            for start, own in zip(self.start, terms, strict=True)
        )

    def write(self, rows: Array, entries: Array) -> None:
        """Entries (n + s, B) of rows of builds."""
        spare, known = np.empty(rows.shape[1]), list(rows)
        for out, (start, scaled, plus, minus) in zip(entries, self.steps, strict=True):
            # A number until the row is written for the first time: filling it first would be one more pass.
            value = np.asarray(start)
            for c, r in scaled:
                value = np.add(value, np.multiply(known[r], c, spare), out)
            for r in plus:
                value = np.add(known[r], value, out)
            for r in minus:
                value = np.subtract(value, known[r], out)
            if value is not out:
                out.fill(start)

    @cached_property
    def longest(self) -> int:
        """The most terms of any entry."""
        return int(np.diff(self.by_row.indptr).max(initial=0))

    @cached_property
    def sizes(self) -> sp.csr_array:
        """Sizes of the numbers in `by_row`."""
        return sp.csr_array(abs(self.by_row))

    def bounds(self, low: Array, high: Array) -> tuple[Array, Array]:
        """Least value of each entry, and greatest size of all that adds up in it, for rows within bounds."""
        middle, half, size = (low + high) / 2, (high - low) / 2, np.maximum(-low, high)
        least = self.start + self.by_row @ middle - self.sizes @ half
        return np.asarray(least), np.asarray(np.abs(self.start) + self.sizes @ size)


def _columns(squares: Squares) -> list[dict[int, list[int]]]:
    """For every square its columns, and the monomials that add up in each."""
    table: list[dict[int, list[int]]] = [{} for _ in range(len(squares))]
    for monomial, t, column in zip(squares.entry, squares.entry_row, squares.entry_column, strict=True):
        table[t].setdefault(int(column), []).append(int(monomial))
    return table


def _joined(squares: Squares) -> set[tuple[int, int]]:
    """Pairs of coordinates that stand in one square."""
    return {(i, j) for columns in _columns(squares) for i in columns for j in columns if i < j}


@dataclass(frozen=True, slots=True)
class Chunk:
    """Entries of ``K`` and ``M`` of some builds, and what bounds them.

    Attributes
    ----------
    stiffness : ndarray, shape (n + s, B)
    mass : ndarray, shape (n + s, B), or (n, B) where ``M`` is diagonal
    stiffness_top, mass_top : ndarray, shape (n,)
        Bounds of the diagonals of ``Σ |w| r rᵀ``.
    mass_low : ndarray, shape (n,)
        ``M ≥ diag(mass_low)`` in every build.
    """

    stiffness: Array
    mass: Array
    stiffness_top: Array
    mass_top: Array
    mass_low: Array

    @property
    def builds(self) -> int:
        """How many."""
        return int(self.stiffness.shape[1])


@dataclass(frozen=True)
class Pencil:
    """The pattern of ``K − σM`` of a model, its elimination, and the recipes of its entries."""

    model: Model
    elimination: Elimination
    rows: Rows
    stiffness: Recipe
    mass: Recipe

    @classmethod
    def of(cls, model: Model, *, backward: bool = False) -> Pencil:
        """Compile; nothing here depends on a build."""
        joined = _joined(model.stiffness) | _joined(model.mass)
        elimination = Elimination.of(model.size, joined, backward=backward)
        rows, place = Rows.of(len(model.names), model.monomials), elimination.place()
        size = elimination.size + elimination.slots
        stiffness, mass = (Recipe.of(s, place, size, rows) for s in (model.stiffness, model.mass))
        diagonal = not mass.start[elimination.size :].any() and not mass.by_row[elimination.size :].nnz
        mass = mass.head(elimination.size) if diagonal else mass
        return cls(model, elimination, rows, stiffness.widened(len(rows)), mass)

    @cached_property
    def semidefinite(self) -> bool:
        """Whether no square of ``K`` can have a negative weight, so that every build is stable."""
        positive = self.model.positive.tolist()
        for step in self.rows.steps:
            positive.append(isinstance(step, Product) and all(positive[r] for r in step.rows))
        return all(c >= 0 and all(positive[r] for r in own) for c, own in self.stiffness.weights)

    def chunk(self, vectors: int = 0) -> int:
        """How many builds are worked on at a time, `vectors` of length n beside the entries of each.

        Memory is bounded so, and stays near the processor.
        """
        rows = len(self.rows) + (3 + vectors) * self.elimination.size + 2 * self.elimination.slots
        return int(np.clip(WORKSPACE // rows // SMALLEST_CHUNK * SMALLEST_CHUNK, SMALLEST_CHUNK, LARGEST_CHUNK))

    @cached_property
    def backward(self) -> Pencil:
        """The same eliminated in another order, which meets other pivots."""
        return Pencil.of(self.model, backward=True)

    def load(self, d: Array) -> Chunk:
        """Entries for all dimensions ``d`` (D, B) of some builds, which must be finite; valid until the next."""
        n, scratch, builds = self.elimination.size, self.elimination.scratch, d.shape[1]
        rows = self.rows.values(d, scratch)
        low, high = rows.min(axis=1), rows.max(axis=1)
        stiffness = scratch.take("stiffness", len(self.stiffness.start), builds)
        mass = scratch.take("mass", len(self.mass.start), builds)
        self.stiffness.write(rows, stiffness)
        self.mass.write(rows, mass)
        least, mass_top = self.mass.bounds(low, high)
        mass_low = np.maximum(least[:n], 0.0) * self._definiteness(mass)
        return Chunk(stiffness, mass, self.stiffness.bounds(low, high)[1][:n], mass_top[:n], mass_low)

    def shifted(self, chunk: Chunk, shift: float) -> tuple[Array, Array]:
        """Diagonal (n, B) and entries above it (s, B) of ``K − σM``, ready to be eliminated; valid until the next."""
        n, take = self.elimination.size, self.elimination.scratch.take
        entries = np.multiply(chunk.mass, -shift, out=take("shifted", *chunk.mass.shape))
        entries += chunk.stiffness[: len(entries)]
        if len(entries) > n:
            return entries[:n], entries[n:]
        above = chunk.stiffness[n:]
        if not self.elimination.acyclic:
            above, kept = take("above", *above.shape), above
            np.copyto(above, kept)
        return entries, above

    def _definiteness(self, mass: Array) -> float:
        """``μ`` such that ``M ≥ μ diag(M)``: one where ``M`` is diagonal, else half of what a few builds show.

        The factor hardly varies within tolerances.
        """
        if len(mass) == self.elimination.size:
            return 1.0
        shown = np.unique(np.linspace(0, mass.shape[1] - 1, 5).astype(np.intp))
        M = self.full(mass[:, shown])
        if not (np.isfinite(M).all() and (np.einsum("bii->bi", M) > 0).all()):
            return 0.0
        scale = 1 / np.sqrt(np.einsum("bii->bi", M))
        share = np.linalg.eigvalsh(M * scale[:, :, None] * scale[:, None, :])[:, 0].min()
        return max(float(share) / 2, 0.0)

    def full(self, entries: Array) -> Array:
        """Entries (n + s, B) as matrices (B, n, n) in the order of elimination."""
        n, columns = self.elimination.size, self.elimination.columns
        matrices = np.zeros((entries.shape[1], n, n))
        matrices[:, range(n), range(n)] = entries[:n].T
        pivots = np.repeat(np.arange(n), np.diff(self.elimination.first))
        matrices[:, pivots, columns] = matrices[:, columns, pivots] = entries[n:].T
        return matrices

    def rounding(self, chunk: Chunk, shift: float) -> tuple[float, Array]:
        """By which share of the shift an eigenvalue near it may be misjudged, and by how much more for growth.

        A perturbation of at most ``√(e_i e_j)`` in every entry moves an eigenvalue by at most ``Σ e_i/μ_i`` where
        ``M ≥ diag(μ)``. The second value, (n,), weighs what elimination takes off the diagonal.
        """
        terms = self.stiffness.longest + self.mass.longest + self.elimination.busiest + 3
        weight = terms * np.finfo(float).eps / 2 / (abs(shift) * chunk.mass_low)
        return float(weight @ (chunk.stiffness_top + abs(shift) * chunk.mass_top)), np.asarray(weight)


def count_below(pencil: Pencil, point: Point, shifts: Sequence[float], rigid: int | None = None) -> NDArray[np.int32]:
    """Number of eigenvalues below some limits for a batch of builds at rest.

    Where the first elimination leaves a count uncertain another order is tried, and where that fails too
    all eigenvalues are computed.

    Parameters
    ----------
    pencil : Pencil
        Compiled from the model.
    point : Point
        All dimensions, shape (B, D); fastest where every column is contiguous.
    shifts : sequence of float
        Limits of ``λ = (2πf)²`` [rad²/s²], none of them zero.
    rigid : int, optional
        Number of rigid modes where it is known.

    Returns
    -------
    ndarray of int, shape (S, B)
        Exact for a limit within `CERTAIN` of the one asked, or to the accuracy of `solve_modes` where that is
        coarser. Rigid modes count, and so do negative eigenvalues; −1 for a build without modes.
    """
    if not at_rest_everywhere(pencil.model, point):
        below = np.full((len(shifts), point.builds), -1, np.int32)
        sound = np.flatnonzero(np.isfinite(point.values).all(axis=1))
        below[:, sound] = count_below(pencil, chosen(point, sound), shifts, rigid) if len(sound) else -1
        return below
    below, certain = count_pivots(pencil, point, shifts)
    left = np.flatnonzero(~certain.all(axis=0))
    if len(left) and not pencil.elimination.acyclic:
        below[:, left], certain = count_pivots(pencil.backward, chosen(point, left), shifts)
        left = left[~certain.all(axis=0)]
    for builds in parts(left, dense_chunk(pencil.model)):
        values = solve_modes(Matrices(pencil.model, chosen(point, builds)), rigid=rigid).eigenvalues
        found = (values[None] < np.asarray(shifts)[:, None, None]).sum(axis=2)
        below[:, builds] = np.where(np.isnan(values).any(axis=1), -1, found)
    return below


def at_rest_everywhere(model: Model, point: Point) -> bool:
    """Whether every build has a rest position; only dependent dimensions can lack one."""
    first = len(model.names) - len(model.dependents)
    return bool(np.isfinite(point.values[:, first:]).all())


def chosen(point: Point, builds: IntArray) -> Point:
    """Some builds in order, every column contiguous."""
    if len(builds) == point.builds:
        return point
    return Point(point.values.T[:, builds].T, point.positive)


def parts(builds: IntArray, size: int) -> list[IntArray]:
    """Builds in groups of at most so many."""
    return [builds[first : first + size] for first in range(0, len(builds), size)]


def dense_chunk(model: Model) -> int:
    """How many builds may be solved dense at a time, so that memory stays bounded."""
    tallest = max(len(model.stiffness), len(model.mass), model.size)
    return int(np.clip(WORKSPACE // (model.size * tallest), 1, LARGEST_DENSE))


def _chosen(point: Point, builds: IntArray) -> Point:
    """Some builds in order, every column contiguous."""
    if len(builds) == point.builds:
        return point
    return point if len(builds) == point.builds else Point(point.values.T[:, builds].T, point.positive)


def count_pivots(pencil: Pencil, point: Point, shifts: Sequence[float]) -> tuple[NDArray[np.int32], NDArray[np.bool_]]:
    """Negative pivots alone: how many, and which of these counts are certain, shape (S, B) each."""
    below = np.zeros((len(shifts), point.builds), np.int32)
    certain = np.zeros((len(shifts), point.builds), bool)
    d, size = point.values.T, pencil.chunk()
    for first in range(0, point.builds, size):
        builds = slice(first, first + size)
        with np.errstate(all="ignore"):
            chunk = pencil.load(d[:, builds])
            for i, shift in enumerate(shifts):
                below[i, builds], certain[i, builds] = count_chunk(pencil, chunk, shift)
    return below, certain


def count_chunk(pencil: Pencil, chunk: Chunk, shift: float) -> tuple[NDArray[np.uint16], NDArray[np.bool_]]:
    """The same for one chunk and one shift, shape (B,) each."""
    elimination = pencil.elimination
    rounding, weight = pencil.rounding(chunk, shift)
    if not rounding <= CERTAIN:
        return np.zeros(chunk.builds, np.uint16), np.zeros(chunk.builds, bool)
    D, U = pencil.shifted(chunk, shift)
    growth = elimination.factor(D, U, weight=None if elimination.acyclic else weight)
    # An infinite pivot is a right one (after a zero); 0/0 anywhere arrives at a root.
    certain = ~np.isnan(D[list(elimination.roots)]).any(axis=0)
    if not elimination.acyclic:
        certain &= rounding + growth <= CERTAIN
    return np.signbit(D).sum(axis=0, dtype=np.uint16), np.asarray(certain)
