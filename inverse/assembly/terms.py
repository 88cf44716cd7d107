"""The compiled tables of terms: arrays in, arrays out, a batch of builds along the first axis.

Symbols
-------
d        dimensions of the parts, shape (B, D), SI
z        their local coordinates: ``log d`` for positive dimensions, ``d`` itself for signed ones
a        values of the monomials ``a_i = c_i Π_j d_j^(e_ij)``, shape (B, N)
w, r     weight and row of a square: a matrix is ``Σ_t w_t r_t r_tᵀ`` with ``w`` and the entries of ``r`` monomials

A square with a constant row is the pattern ``b bᵀ``; one whose row depends on dimensions (a mount off the
centre, a hung pendulum) still is one square, so that nothing about semidefiniteness or rank is lost.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray

from inverse.assembly.algebra import Monomial, Polynomial, Square
from inverse.errors import ModelError

Array = NDArray[np.float64]
IntArray = NDArray[np.intp]

DENSE_EXPONENTS = 200_000
"""Up to this many entries a dense table of exponents is faster than a sparse one."""


def add_at(out: Array, places: IntArray, values: Array) -> None:
    """``out[..., places] += values``, counting places as often as they occur."""
    if np.bincount(places, minlength=1).max() <= 1:
        out[..., places] += values
        return
    # Counting with weights is several times faster than numpy.add.at.
    rows, n = out.size // out.shape[-1], out.shape[-1]
    flat = (np.arange(rows)[:, None] * n + places).ravel()
    out += np.bincount(flat, np.broadcast_to(values, (*out.shape[:-1], len(places))).ravel(), rows * n).reshape(
        out.shape
    )


@dataclass(frozen=True)
class Point:
    """A batch of builds in the space of dimensions: ``d`` of shape (B, D), and which are positive."""

    values: Array
    positive: NDArray[np.bool_]

    @cached_property
    def logarithms(self) -> Array:
        """``log d``, zero for signed dimensions, shape (B, D)."""
        return np.log(np.where(self.positive, self.values, 1.0))

    @property
    def builds(self) -> int:
        """Number of builds."""
        return len(self.values)


@dataclass(frozen=True)
class Monomials:
    """``N`` monomials over ``D`` dimensions.

    Positive dimensions enter through `exponents`, (N, D), by logarithms. The monomials `mixed` (S,) have
    signed factors too, with whole powers only: `signed_dimension` and `signed_power`, (S, s), padded
    with power zero.
    """

    coefficients: Array
    exponents: Array | sp.csr_array
    mixed: IntArray
    signed_dimension: IntArray
    signed_power: IntArray

    @classmethod
    def compile(cls, monomials: Sequence[Monomial], index: Mapping[str, int], positive: NDArray[np.bool_]) -> Monomials:
        """Arrays from names.

        Raises
        ------
        ModelError
            If a dimension that may be zero or negative has a power that is not a whole number ≥ 0.
        """
        rows, columns, powers = [], [], []
        signed: dict[int, list[tuple[int, int]]] = {}
        for i, monomial in enumerate(monomials):
            for name, power in monomial.powers:
                if positive[index[name]]:
                    rows.append(i)
                    columns.append(index[name])
                    powers.append(power)
                elif power < 0 or power != int(power):
                    raise ModelError(f"`{name}` may be zero or negative and cannot have the power {power:g}")
                else:
                    signed.setdefault(i, []).append((index[name], int(power)))
        shape = (len(monomials), len(positive))
        table = sp.csr_array((np.array(powers, float), (rows, columns)), shape=shape)
        width = max(map(len, signed.values()), default=0)
        padded = [factors + [(0, 0)] * (width - len(factors)) for factors in signed.values()]
        factors = np.array(padded, np.intp).reshape(len(signed), width, 2)
        return cls(
            np.array([m.coefficient for m in monomials], float),
            table.toarray() if shape[0] * shape[1] <= DENSE_EXPONENTS else table,
            np.array(list(signed), np.intp),
            factors[:, :, 0],
            factors[:, :, 1],
        )

    def __len__(self) -> int:
        """Number of monomials."""
        return len(self.coefficients)

    @cached_property
    def constant(self) -> NDArray[np.bool_]:
        """Which are plain numbers, shape (N,)."""
        named = sp.csr_array(self.exponents)
        constant = np.diff(named.indptr) == 0
        constant[self.mixed] = False
        return np.asarray(constant)

    def values(self, point: Point) -> Array:
        """``a``, shape (B, N)."""
        a: Array = np.exp(point.logarithms @ self.exponents.T) * self.coefficients
        if len(self.mixed):
            a[:, self.mixed] *= np.prod(self._signed_factors(point), axis=2)
        return a

    def _signed_factors(self, point: Point) -> Array:
        """``d^e`` of every signed factor, shape (B, S, s)."""
        return np.asarray(point.values[:, self.signed_dimension] ** self.signed_power)

    def _signed_slopes(self, point: Point) -> list[Array]:
        """``∂a/∂d`` for each column of signed factors, (B, S) each; no division, for ``d`` may be zero."""
        positive_part = np.exp(point.logarithms @ self.exponents[self.mixed].T) * self.coefficients[self.mixed]
        factors = self._signed_factors(point)
        slopes = []
        for k in range(self.signed_power.shape[1]):
            power = self.signed_power[:, k]
            own = power * point.values[:, self.signed_dimension[:, k]] ** np.maximum(power - 1, 0)
            others = np.prod(np.delete(factors, k, axis=2), axis=2)
            slopes.append(np.asarray(positive_part * own * others))
        return slopes

    def pull(self, point: Point, a: Array, cotangent: Array) -> Array:
        """From derivatives with respect to ``a`` to those with respect to ``z``.

        `a` are the `values` at `point`; `cotangent` has shape (B, k, N), the result (B, k, D).
        """
        builds, k, n = cotangent.shape
        out = ((cotangent * a[:, None, :]).reshape(-1, n) @ self.exponents).reshape(builds, k, self.exponents.shape[1])
        for column, slope in enumerate(self._signed_slopes(point) if len(self.mixed) else ()):
            add_at(out, self.signed_dimension[:, column], cotangent[:, :, self.mixed] * slope[:, None])
        return np.asarray(out)

    def jacobian(self, point: Point, a: Array) -> sp.csr_array:
        """``∂a/∂z`` of a single build, shape (N, D)."""
        table = sp.csr_array(sp.diags_array(a[0]) @ sp.csr_array(self.exponents))
        for column, slope in enumerate(self._signed_slopes(point) if len(self.mixed) else ()):
            place = (self.mixed, self.signed_dimension[:, column])
            table = table + sp.csr_array((slope[0], place), shape=table.shape)
        return sp.csr_array(table)

    def second(self, point: Point, weights: Array) -> sp.csr_array:
        """``Σ_i weights_i ∂²a_i/∂z∂z`` of a single build, shape (D, D)."""
        factors: dict[int, list[tuple[int, float, bool]]] = {}
        table = sp.coo_array(sp.csr_array(self.exponents))
        for i, j, e in zip(*table.coords, table.data, strict=True):
            factors.setdefault(int(i), []).append((int(j), float(e), True))
        for i, dimensions, powers in zip(self.mixed, self.signed_dimension, self.signed_power, strict=True):
            known = factors.setdefault(int(i), [])
            known += [(int(j), float(e), False) for j, e in zip(dimensions, powers, strict=True) if e]
        d = point.values[0]
        triplets = [
            (j, k, weights[i] * self.coefficients[i] * _second(own, p, q, d))
            for i, own in factors.items()
            if weights[i]
            for p, (j, _, _) in enumerate(own)
            for q, (k, _, _) in enumerate(own)
        ]
        size = self.exponents.shape[1]
        j, k, value = np.array(triplets, float).reshape(-1, 3).T
        return sp.csr_array((value, (j.astype(np.intp), k.astype(np.intp))), shape=(size, size))


def _second(factors: list[tuple[int, float, bool]], p: int, q: int, d: Array) -> float:
    """``∂²(Π d^e)/∂z_p∂z_q``: each factor differentiated as often as it is named."""
    value = 1.0
    for k, (j, e, positive) in enumerate(factors):
        times = (k == p) + (k == q)
        if positive:
            value *= e**times * d[j] ** e
        else:
            falling = (1.0, e, e * (e - 1))[times]
            value *= falling * d[j] ** max(e - times, 0)
    return float(value)


@dataclass(frozen=True)
class Squares:
    """A matrix ``Σ_t w_t r_t r_tᵀ``: ``T`` squares over ``n`` coordinates.

    `weight` (T,) and `entry` (E,) point into a table of monomials; entry ``e`` stands in row
    ``entry_row[e]`` and column ``entry_column[e]``, entries at one place add up. `owner` names the part
    of each square and `axis` the direction it belongs to ("" where the part has only one).
    """

    size: int
    weight: IntArray
    entry: IntArray
    entry_row: IntArray
    entry_column: IntArray
    owner: tuple[str, ...]
    axis: tuple[str, ...]

    def __len__(self) -> int:
        """Number of squares."""
        return len(self.weight)

    @cached_property
    def uncoupled(self) -> bool:
        """Whether every row has one entry at most, so that the matrix is diagonal."""
        return bool(np.bincount(self.entry_row, minlength=1).max() <= 1)

    def owned(self, name: str) -> IntArray:
        """Squares of a part, or of one of its axes (``stage.ry``)."""
        return np.array(
            [t for t, (o, a) in enumerate(zip(self.owner, self.axis, strict=True)) if name in (o, f"{o}.{a}")],
            np.intp,
        )


@dataclass(frozen=True)
class Sums:
    """``S`` sums of monomials: sum ``s`` collects the `term`s (T,) whose `place` (T,) is ``s``."""

    size: int
    term: IntArray
    place: IntArray

    def values(self, a: Array) -> Array:
        """The sums, shape (B, S)."""
        out = np.zeros((len(a), self.size))
        add_at(out, self.place, a[:, self.term])
        return out


class Compiler:
    """Collects monomials, each only once, and hands out their places."""

    def __init__(self) -> None:
        """Start empty."""
        self.places: dict[Monomial, int] = {}

    def place(self, monomial: Monomial) -> int:
        """Where a monomial stands in the table."""
        return self.places.setdefault(monomial, len(self.places))

    def sums(self, polynomials: Sequence[Polynomial]) -> Sums:
        """One sum per polynomial."""
        pairs = [(self.place(m), s) for s, polynomial in enumerate(polynomials) for m in polynomial]
        table = np.array(pairs, np.intp).reshape(-1, 2)
        return Sums(len(polynomials), table[:, 0], table[:, 1])

    def squares(self, squares: Sequence[Square], columns: Mapping[str, int]) -> Squares:
        """Squares over the coordinates that `columns` counts."""
        entries = [
            (self.place(monomial), t, columns[coordinate])
            for t, square in enumerate(squares)
            for coordinate, polynomial in square.row.items()
            for monomial in polynomial
        ]
        table = np.array(entries, np.intp).reshape(-1, 3)
        return Squares(
            len(columns),
            np.array([self.place(square.weight) for square in squares], np.intp),
            table[:, 0],
            table[:, 1],
            table[:, 2],
            tuple(square.owner for square in squares),
            tuple(square.axis for square in squares),
        )

    def table(self, index: Mapping[str, int], positive: NDArray[np.bool_]) -> Monomials:
        """The compiled monomials."""
        return Monomials.compile(list(self.places), index, positive)
