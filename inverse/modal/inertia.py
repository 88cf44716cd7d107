"""How many eigenvalues of a pencil lie below a limit, for a whole batch of builds, without solving for any.

Symbols
-------
K, M, σ  stiffness, mass and a shift [rad²/s²]
L, D     ``K − σM = L D Lᵀ`` with ``D`` diagonal
D, U     in the code: diagonal (n, B), and entries above it (s, B) in the order they are eliminated

As many eigenvalues of ``K φ = λ M φ`` lie below σ as ``D`` has negative entries (Sylvester's law of inertia) [1]_.
All builds of a model share one pattern, so the order of elimination (minimum degree) is found once, and
every step of the elimination is one operation on a row of builds.

No pivot is ever moved. On a pattern without circles that does no harm: leaves first, the count is that of a pencil whose
entries differ by a few roundings [2]_, however small a pivot gets. Elsewhere the computed factors are those of a
pencil that differs by roundings of the entries *grown* under elimination, ``|L||D||Lᵀ|``; its diagonal is recorded, and a
build in which it comes to more than `CERTAIN` of the shift is handed back.

References
----------
.. [1] B. N. Parlett, "The Symmetric Eigenvalue Problem", SIAM, 1998, section 3.3.
.. [2] J. W. Demmel and W. Gragg, "On computing accurate singular values and eigenvalues of matrices with
   acyclic graphs", Linear Algebra and its Applications 185, 1993, pp. 203-217.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from inverse.assembly.assembly import Model
from inverse.assembly.terms import Array, IntArray, Monomials, Point, Squares
from inverse.matrices.stack import Matrices
from inverse.modal.solution import solve_modes

CERTAIN = 1e-10
"""A count stands if it is exact for a shift within this share of the one asked: a tenth of the slack on edges."""

WORKSPACE = 100_000
"""Numbers worked on at a time: what stays in a processor's second-level cache."""

LARGEST_CHUNK = 16_384
"""Builds worked on at a time at most."""

SMALLEST_CHUNK = 512
"""And at least, where a row of builds still outweighs the call that works on it."""


@dataclass(frozen=True, slots=True)
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
    runs : tuple
        For every pivot and every one of its `later`: runs (source, target, length) of slots to take off.
    acyclic : bool
        Whether the pattern has no circle.
    fill : bool
        Whether elimination writes above the diagonal.
    """

    order: IntArray
    later: tuple[tuple[int, ...], ...]
    first: IntArray
    runs: tuple[tuple[tuple[tuple[int, int, int], ...], ...], ...]
    acyclic: bool
    fill: bool

    @classmethod
    def of(cls, size: int, joined: Iterable[tuple[int, int]]) -> Elimination:
        """Minimum-degree elimination of a pattern given by its pairs of joined coordinates."""
        neighbours: list[set[int]] = [set() for _ in range(size)]
        for i, j in joined:
            neighbours[i].add(j)
            neighbours[j].add(i)
        edges = sum(map(len, neighbours)) // 2
        order, met = _minimum_degree(neighbours)
        place = np.empty(size, np.intp)
        place[order] = np.arange(size)
        later = tuple(tuple(sorted(int(place[j]) for j in met[i])) for i in order)
        first = np.concatenate([[0], np.cumsum([len(own) for own in later])]).astype(np.intp)
        slot = {(k, j): int(first[k]) + s for k, own in enumerate(later) for s, j in enumerate(own)}
        runs = tuple(
            tuple(_runs([(s, slot[i, j]) for s, j in enumerate(own) if j > i]) for i in own) for own in later
        )
        fill = any(run for step in runs for run in step)
        return cls(np.array(order, np.intp), later, first, runs, not fill and int(first[-1]) == edges, fill)

    @property
    def slots(self) -> int:
        """Entries above the diagonal."""
        return int(self.first[-1])

    @property
    def widest(self) -> int:
        """The most entries any pivot has above the diagonal."""
        return max(map(len, self.later), default=0)

    def factor(self, D: Array, U: Array, L: Array, growth: Array | None = None) -> None:
        """``L D Lᵀ`` of a row of builds, in place.

        Parameters
        ----------
        D : ndarray, shape (n, B)
            Diagonal; becomes the pivots.
        U : ndarray, shape (s, B)
            Entries above it; overwritten where there is fill.
        L : ndarray, shape (s, B), or (widest, B) where the factor is not kept
            Columns of ``L`` below its unit diagonal, as rows.
        growth : ndarray, shape (n, B), optional
            The diagonal of ``|L||D||Lᵀ|`` without the pivots, added to.
        """
        kept, spare = len(L) == self.slots, np.empty((max(self.widest, 1), D.shape[1]))
        for k, own in enumerate(self.later):
            if not own:
                continue
            first, last = int(self.first[k]), int(self.first[k + 1])
            above, below = U[first:last], L[first:last] if kept else L[: len(own)]
            np.divide(above, D[k], out=below)
            for s, (i, runs) in enumerate(zip(own, self.runs[k], strict=True)):
                taken = np.multiply(above[s], below[s], out=spare[0])
                np.subtract(D[i], taken, out=D[i])
                if growth is not None:
                    np.add(growth[i], np.abs(taken, out=taken), out=growth[i])
                for source, target, length in runs:
                    block = np.multiply(above[source : source + length], below[s], out=spare[:length])
                    np.subtract(U[target : target + length], block, out=U[target : target + length])

    def solve(self, D: Array, L: Array, right: Array) -> None:
        """``(L D Lᵀ)⁻¹`` times right-hand sides (n, r, B) in the order of elimination, in place."""
        spare = np.empty((max(self.widest, 1), *right.shape[1:]))
        for k, own in enumerate(self.later):
            for s, i in enumerate(own):
                np.subtract(right[i], np.multiply(L[self.first[k] + s], right[k], out=spare[0]), out=right[i])
        right /= D[:, None, :]
        for k in range(len(self.later) - 1, -1, -1):
            for s, i in enumerate(self.later[k]):
                np.subtract(right[k], np.multiply(L[self.first[k] + s], right[i], out=spare[0]), out=right[k])


def _minimum_degree(neighbours: list[set[int]]) -> tuple[list[int], list[set[int]]]:
    """Order of elimination, and whom each coordinate is joined to at its turn; `neighbours` is used up."""
    import heapq

    met = [set[int]() for _ in neighbours]
    queue = [(len(own), i) for i, own in enumerate(neighbours)]
    heapq.heapify(queue)
    order: list[int] = []
    done = [False] * len(neighbours)
    while queue:
        degree, i = heapq.heappop(queue)
        if done[i] or degree != len(neighbours[i]):
            continue
        order.append(i)
        done[i], met[i] = True, neighbours[i]
        for j in met[i]:
            neighbours[j] |= met[i]
            neighbours[j] -= {i, j}
            heapq.heappush(queue, (len(neighbours[j]), j))
    return order, met


def _runs(pairs: Sequence[tuple[int, int]]) -> tuple[tuple[int, int, int], ...]:
    """Consecutive pairs of slots joined into (source, target, length)."""
    runs: list[list[int]] = []
    for source, target in pairs:
        if runs and source - runs[-1][0] == target - runs[-1][1] == runs[-1][2]:
            runs[-1][2] += 1
        else:
            runs.append([source, target, 1])
    return tuple((s, t, length) for s, t, length in runs)


@dataclass(frozen=True, slots=True)
class Product:
    """One monomial as steps over rows of builds: factors to multiply by, to divide by, and to raise to a power."""

    coefficient: float
    up: tuple[int, ...]
    down: tuple[int, ...]
    powers: tuple[tuple[int, float], ...]

    @classmethod
    def table(cls, monomials: Monomials) -> tuple[Product, ...]:
        """All monomials; small whole powers are multiplied out, which takes signed dimensions as they come."""
        factors: list[list[tuple[int, float]]] = [[] for _ in range(len(monomials))]
        for i, j in zip(*(np.asarray(place) for place in monomials.exponents.nonzero()), strict=True):
            factors[i].append((int(j), float(monomials.exponents[i, j])))
        for i, dimensions, powers in zip(
            monomials.mixed, monomials.signed_dimension, monomials.signed_power, strict=True
        ):
            factors[i] += [(int(j), float(e)) for j, e in zip(dimensions, powers, strict=True) if e]
        return tuple(cls._of(float(c), own) for c, own in zip(monomials.coefficients, factors, strict=True))

    @classmethod
    def _of(cls, coefficient: float, factors: Sequence[tuple[int, float]]) -> Product:
        whole = [(j, int(e)) for j, e in factors if e == int(e) and abs(e) <= 4]
        up = tuple(j for j, e in whole for _ in range(e))
        down = tuple(j for j, e in whole for _ in range(-e))
        return cls(coefficient, up, down, tuple((j, e) for j, e in factors if e != int(e) or abs(e) > 4))

    @property
    def constant(self) -> bool:
        """Whether it is a plain number."""
        return not (self.up or self.down or self.powers)

    @property
    def alone(self) -> int | None:
        """The dimension it is equal to, if it is one."""
        return self.up[0] if self.coefficient == 1 and len(self.up) == 1 and not (self.down or self.powers) else None

    def write(self, d: Array, out: Array, spare: Array) -> None:
        """Values for dimensions ``d`` (D, B)."""
        up, down = self.up, self.down
        if up:
            np.multiply(d[up[0]], self.coefficient, out=out)
        elif down:
            np.divide(self.coefficient, d[down[0]], out=out)
            down = down[1:]
        else:
            out.fill(self.coefficient)
        for j in up[1:]:
            np.multiply(out, d[j], out=out)
        for j in down:
            np.divide(out, d[j], out=out)
        for j, e in self.powers:
            np.multiply(out, np.power(d[j], e, out=spare), out=out)


@dataclass(frozen=True, slots=True)
class Share:
    """What one square adds to one entry: a number times rows of builds."""

    entry: int
    coefficient: float
    vectors: tuple[int, ...]
    signed: bool


@dataclass(frozen=True, slots=True)
class Recipe:
    """How the entries of ``K`` or ``M`` are put together from rows of builds.

    Entries count the diagonal first, (n,), then the slots above it. `start` (n + s,) holds what is the same
    in every build; `used` lists the entries above the diagonal that occur at all.
    """

    start: Array
    shares: tuple[Share, ...]
    used: tuple[int, ...]


@dataclass(frozen=True, slots=True)
class Chunk:
    """Entries of ``K`` and ``M``, diagonal (n, B) and above it (s, B), and what bounds their rounding.

    `stiffness_top` and `mass_top` (n,) bound the diagonals of ``Σ |w| r rᵀ`` over the chunk, and ``M ≥ diag(mass_low)``.
    """

    stiffness: Array
    stiffness_above: Array
    mass: Array
    mass_above: Array
    stiffness_top: Array
    mass_top: Array
    mass_low: Array


@dataclass(frozen=True)
class Pencil:
    """The pattern of ``K − σM`` of a model, its elimination, and the recipe of its entries."""

    model: Model
    elimination: Elimination
    products: tuple[Product, ...]
    sums: tuple[tuple[int, ...], ...]
    stiffness: Recipe
    mass: Recipe

    @classmethod
    def of(cls, model: Model) -> Pencil:
        """Compile; nothing here depends on a build."""
        products = Product.table(model.monomials)
        elimination = Elimination.of(model.size, {*_pairs(model.stiffness), *_pairs(model.mass)})
        sums: dict[tuple[int, ...], int] = {}
        recipes = [_recipe(s, elimination, products, sums) for s in (model.stiffness, model.mass)]
        return cls(model, elimination, products, tuple(sums), recipes[0], recipes[1])

    @cached_property
    def chunk(self) -> int:
        """How many builds are worked on at a time, so that memory is bounded and stays near the processor."""
        rows = len(self.products) + len(self.sums) + 4 * self.model.size + 3 * self.elimination.slots
        return int(np.clip(2 ** round(np.log2(8 * WORKSPACE / rows)), SMALLEST_CHUNK, LARGEST_CHUNK))

    def chunks(self, builds: int) -> list[slice]:
        """The builds in order."""
        return [slice(b, min(b + self.chunk, builds)) for b in range(0, builds, self.chunk)]

    def assemble(self, d: Array) -> Chunk:
        """Entries for dimensions ``d`` (D, B), all of them, contiguous along the builds."""
        vectors = self._vectors(d)
        K, K_above, spare = self._entries(self.stiffness, vectors, d.shape[1])
        M, M_above, _ = self._entries(self.mass, vectors, d.shape[1])
        return Chunk(K, K_above, M, M_above, K.max(axis=1) + spare, M.max(axis=1), self._mass_low(M, M_above))

    def _vectors(self, d: Array) -> list[Array]:
        """Monomials, then sums of monomials; plain numbers are never looked at."""
        spare = np.empty(d.shape[1])
        table = np.empty((len(self.products) + len(self.sums), d.shape[1]))
        vectors = []
        for i, product in enumerate(self.products):
            alone = product.alone
            if alone is None and not product.constant:
                product.write(d, table[i], spare)
            vectors.append(table[i] if alone is None else d[alone])
        for i, terms in enumerate(self.sums, start=len(self.products)):
            self._sum(terms, vectors, table[i])
            vectors.append(table[i])
        return vectors

    def _sum(self, terms: tuple[int, ...], vectors: list[Array], out: Array) -> None:
        out.fill(sum(self.products[t].coefficient for t in terms if self.products[t].constant))
        for t in terms:
            if not self.products[t].constant:
                np.add(out, vectors[t], out=out)

    def _entries(self, recipe: Recipe, vectors: list[Array], builds: int) -> tuple[Array, Array, Array]:
        """Diagonal, entries above it, and twice what squares of negative weight took off the diagonal at most."""
        n, spare = self.model.size, np.empty(builds)
        diagonal, above = np.empty((n, builds)), np.empty((self.elimination.slots, builds))
        taken, written = np.zeros(n), np.zeros(len(recipe.start), bool)
        for share in recipe.shares:
            e = share.entry
            target = diagonal[e] if e < n else above[e - n]
            value = _product_into(share, vectors, spare if written[e] or share.signed else target)
            if share.signed and e < n:
                taken[e] += 2 * max(-float(value.min()), 0.0)
            if not written[e]:
                np.add(value, recipe.start[e], out=target) if recipe.start[e] or value is not target else None
            else:
                np.add(target, value, out=target)
            written[e] = True
        for e in np.flatnonzero(~written):
            (diagonal[e] if e < n else above[e - n]).fill(recipe.start[e])
        return diagonal, above, taken
