"""Errors of parts as independent unit errors, and builds drawn from them.

Symbols
-------
d, d₀    base dimensions of a build and their nominal values, SI
u        unit errors, independent, each within [−1, 1]
T        slopes: ``d = d₀ + T(d₀) u``, an entry of T being a limit, or a limit times d₀ for a relative one
p        points of the unit cube, one coordinate per unit error

Every part has an error of its own, whichever variable its nominal value follows; what a delivered batch has in
common, or a set of parts sorted to agree, is a unit error that several dimensions share.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray

from inverse.assembly.terms import Array, IntArray

Shape = Literal["normal", "uniform", "triangular"]
"""Normal: the limit is at three standard deviations, and nothing lies beyond it."""

LIMIT_SIGMA = 3.0
"""Standard deviations from the middle to the limit of a normal error."""


@dataclass(frozen=True, slots=True)
class Limit:
    """The greatest error: SI, or a share of the nominal value."""

    size: float = 0.0
    relative: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Tolerance:
    """Errors of some dimensions that are stated together, which makes them one batch.

    Attributes
    ----------
    dimensions : tuple of int
        Places among the base dimensions.
    each : Limit
        Of every piece for itself.
    batch : Limit
        Of what all of them have in common.
    matched : Limit, optional
        Pieces sorted so that they agree: they share their `each` but for a remainder of at most this.
    distribution : str
        Of all these errors; each is drawn on its own.
    pieces : tuple of int, optional
        How many identical pieces in parallel stand behind each dimension; their errors average out. One by default.
    """

    dimensions: tuple[int, ...]
    each: Limit = Limit()
    batch: Limit = Limit()
    matched: Limit | None = None
    distribution: Shape = "normal"
    pieces: tuple[int, ...] | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Errors:
    """``U`` independent unit errors and how they move ``D`` dimensions.

    Entry ``e`` says that dimension ``dimension[e]`` moves by ``size[e]`` (times its nominal value where
    ``relative[e]``) per unit of error ``unit[e]``; all have shape (E,). `distribution` has one name per unit error.
    """

    dimensions: int
    dimension: IntArray
    unit: IntArray
    size: Array
    relative: NDArray[np.bool_]
    distribution: tuple[Shape, ...]

    @classmethod
    def of(cls, tables: Sequence[Tolerance], dimensions: int) -> Errors:
        """Unit errors of some tables over so many base dimensions; limits of zero need none."""
        groups = [(table.distribution, group) for table in tables for group in _groups(table)]
        entries = [
            (place, unit, size, limit.relative)
            for unit, (_, group) in enumerate(groups)
            for place, size, limit in group
        ]
        columns = list(zip(*entries, strict=True)) or [(), (), (), ()]
        return cls(
            dimensions=dimensions,
            dimension=np.array(columns[0], np.intp),
            unit=np.array(columns[1], np.intp),
            size=np.array(columns[2], float),
            relative=np.array(columns[3], bool),
            distribution=tuple(name for name, _ in groups),
        )

    @property
    def units(self) -> int:
        """Number of unit errors ``U``."""
        return len(self.distribution)

    def slopes(self, nominal: Array) -> sp.csr_array:
        """``T`` at nominal dimensions (D,), shape (D, U)."""
        size = np.where(self.relative, self.size * nominal[self.dimension], self.size)
        return sp.csr_array((size, (self.dimension, self.unit)), shape=(self.dimensions, self.units))

    def limits(self, nominal: Array) -> Array:
        """Greatest deviation of each dimension, shape (D,)."""
        return np.asarray(abs(self.slopes(nominal)) @ np.ones(self.units))


def _groups(table: Tolerance) -> Iterator[list[tuple[int, float, Limit]]]:
    """What each unit error of a table moves: (place, size, limit)."""
    if table.batch.size:
        yield [(place, table.batch.size, table.batch) for place in table.dimensions]
    own = table.each if table.matched is None else table.matched
    if table.matched is not None and table.each.size:
        yield from _common(table, table.matched)
    pieces = table.pieces or (1,) * len(table.dimensions)
    for place, count in zip(table.dimensions, pieces, strict=True):
        for _ in range(count if own.size else 0):
            yield [(place, own.size / count, own)]


def _common(table: Tolerance, remainder: Limit) -> Iterator[list[tuple[int, float, Limit]]]:
    """What matched parts share: the rest of their limit."""
    shared = table.each.size - remainder.size
    if table.each.relative != remainder.relative or shared < 0:
        raise ValueError("matched parts must agree within less than their own limit, given the same way")
    if shared:
        yield [(place, shared, table.each) for place in table.dimensions]


def quantiles(distribution: Shape, p: Array, out: Array | None = None) -> Array:
    """Unit errors within [−1, 1] from probabilities within [0, 1]."""
    from scipy.special import ndtr, ndtri

    if distribution == "normal":
        tail = float(ndtr(-LIMIT_SIGMA))
        inner = np.add(np.multiply(p, 1 - 2 * tail, out=out), tail, out=out)
        return np.asarray(np.divide(ndtri(inner, out=out), LIMIT_SIGMA, out=out))
    centred = np.subtract(np.multiply(p, 2.0, out=out), 1.0, out=out)
    if distribution == "uniform":
        return centred
    # The triangle's tails hold (1 − |u|)²/2 each.
    return np.asarray(np.copysign(1 - np.sqrt(1 - np.abs(centred)), centred))


def unit_errors(errors: Errors, points: Array) -> Array:
    """``u`` from points of the unit cube (B, U), shape (U, B) and contiguous."""
    u = np.ascontiguousarray(points.T)
    for row, distribution in zip(u, errors.distribution, strict=True):
        row[:] = quantiles(distribution, row, out=row)
    return u


def draw_builds(errors: Errors, nominal: Array, points: Array) -> Array:
    """Base dimensions of builds.

    Parameters
    ----------
    errors : Errors
    nominal : ndarray, shape (D,)
        Nominal base dimensions, SI.
    points : ndarray, shape (B, U)
        Points of the unit cube, one row per build.

    Returns
    -------
    ndarray, shape (B, D)
        Every column contiguous.
    """
    d = np.asarray(errors.slopes(nominal) @ unit_errors(errors, points))
    d += nominal[:, None]
    return d.T


@dataclass(frozen=True, slots=True)
class Cube:
    """Scrambled Sobol' points in chunks, the same for the same seed.

    Sobol' points in base 2 are balanced for counts that are powers of two, so chunks are such.
    """

    units: int
    seed: int

    def chunks(self, builds: int, size: int) -> Iterator[Array]:
        """Points (b, U), `builds` in all, at most `size` (a power of two) at a time."""
        from scipy.stats import qmc

        sobol = qmc.Sobol(max(self.units, 1), scramble=True, rng=self.seed)
        for b in range(0, builds, size):
            rest = builds - b
            yield sobol.random(min(size, 1 << (rest - 1).bit_length()))[:rest, : self.units]
