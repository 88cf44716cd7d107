"""Neighbouring modes of a whole batch of builds, refined from those of a few, with proof of which modes they are.

Symbols
-------
K, M, s  stiffness, mass and a shift [rad²/s²] near the wanted modes; ``A = K − sM``
X, Y, W  a basis of ``r`` vectors (n, r, B), the next one ``Y = A⁻¹W``, and ``W = MX``
G, H, P  ``YᵀAY = YᵀW``, ``YᵀMY`` and ``XᵀMX``, (r, r, B)
c, μ     Ritz vectors and values: ``G c = μ H c``, ``cᵀHc = 1``; ``λ ≈ s + μ``
R        residual ``A Yc − μ M Yc = Wc − μ MYc``, so that ``RᵀM⁻¹R = cᵀPc − μ²``
a, b     limits between which the wanted modes lie and no others
δ        distance of the Ritz values from the nearer of a and b

One step of inverse iteration on a block [1]_ is a solve with factors that all steps share, and a
Rayleigh-Ritz step by plane rotations; within a block frequencies may coincide, for only the plane it spans
matters. The block has the modes it should have if the inertia of ``K − aM`` and ``K − bM`` says so, and then every
Ritz value is within ``|R|²/(δ − |R|)`` of its eigenvalue [2]_. What elimination may have lost to rounding is
added to that bound.

References
----------
.. [1] B. N. Parlett, "The Symmetric Eigenvalue Problem", SIAM, 1998, chapters 4, 11 and 15.
.. [2] R. Mathias, "Quadratic residual bounds for the Hermitian eigenvalue problem", SIAM J. Matrix Anal.
   Appl. 19(2), 1998, pp. 541-550.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.assembly.terms import Array, Point
from inverse.matrices.stack import Matrices
from inverse.modal.inertia import (
    Chunk,
    Pencil,
    chosen,
    count_chunk,
    dense_chunk,
    parts,
)
from inverse.modal.solution import solve_modes

PILOTS = 64
"""Builds solved in full to see where modes lie and how far they spread."""

LARGEST_BLOCK = 6
"""A block grows to at most this many modes while its neighbours are near."""

SLOWEST = 0.5
"""A block grows while one step of inverse iteration would shrink what does not belong to it by less than this."""

STEPS = (1, 3)
"""Steps of inverse iteration, and steps on those builds that need more."""

TOGETHER = 0.1
"""Modes asked for together form one block if one step shrinks the others at least to this."""

SWEEPS = 6
"""Sweeps of plane rotations for three and more vectors; they converge quadratically."""


@dataclass(frozen=True, slots=True)
class Block:
    """Neighbouring modes at positions `first` to `last` among all, rigid ones included.

    They lie between `low` and `high` (infinite where there is no mode beyond); `start` (n, r) spans about the
    plane of their shapes, in the order of elimination.
    """

    first: int
    last: int
    shift: float
    low: float
    high: float
    start: Array


@dataclass(frozen=True, slots=True)
class Neighbours:
    """Eigenvalues of some modes of ``B`` builds as ``shift + offsets``, offsets (p, B), within `bounds` (B,).

    Differences are taken of the offsets, which keeps their digits. NaN for a build without modes.
    """

    shift: float
    offsets: Array
    bounds: Array


Enough = Callable[[Neighbours], NDArray[np.bool_]]
"""Which builds are known well enough, shape (B,)."""


def choose_blocks(
    pencil: Pencil, point: Point, positions: Sequence[int], rigid: int | None = None
) -> tuple[Block, ...]:
    """Blocks that hold some modes for builds like these: each mode alone, or with the neighbours it is near to.

    Parameters
    ----------
    pencil : Pencil
    point : Point
        Builds of which a few are looked at.
    positions : sequence of int
        Positions of the modes among all, rigid ones included.
    rigid : int, optional
        Number of rigid modes where it is known.

    Returns
    -------
    tuple of Block
        Empty where no build looked at has a stable rest position.
    """
    shown = np.unique(np.linspace(0, point.builds - 1, PILOTS).astype(np.intp))
    pilots = chosen(point, shown[np.isfinite(point.values[shown]).all(axis=1)])
    modes = solve_modes(Matrices(pencil.model, pilots), rigid=rigid)
    if not modes.stable.any():
        return ()
    values = modes.eigenvalues[modes.stable]
    distance = np.abs(np.log(np.maximum(values, 1e-300) / np.maximum(np.median(values, axis=0), 1e-300)))
    shapes = modes.shapes[modes.stable][np.argmin(distance.sum(axis=1))][pencil.elimination.order]
    low, high = values.min(axis=0), values.max(axis=0)
    return tuple(_block(low, high, shapes, first, last) for first, last in _ranges(low, high, positions))


def _ranges(low: Array, high: Array, positions: Sequence[int]) -> list[tuple[int, int]]:
    """First and last mode of each block, for modes that spread from `low` to `high`."""
    ends = min(positions), max(positions)
    if ends[1] - ends[0] < LARGEST_BLOCK and max(_shrinking(low, high, *ends)) <= TOGETHER:
        return [ends]
    ranges: list[tuple[int, int]] = []
    for position in sorted(set(positions)):
        first = last = position
        while last - first + 1 < LARGEST_BLOCK:
            below, above = _shrinking(low, high, first, last)
            if max(below, above) <= SLOWEST:
                break
            first, last = (first - 1, last) if below > above else (first, last + 1)
        if ranges and first <= ranges[-1][1]:
            first, last = min(first, ranges[-1][0]), max(last, ranges[-1][1])
            ranges.pop()
        ranges.append((first, last))
    return ranges


def _shrinking(low: Array, high: Array, first: int, last: int) -> tuple[float, float]:
    """What one step leaves of the modes below and above a block; one where they overlap with it."""
    shift, half = (low[first] + high[last]) / 2, (high[last] - low[first]) / 2
    below = half / max(shift - high[first - 1], half) if first and half else 0.0
    above = half / max(low[last + 1] - shift, half) if last + 1 < len(low) and half else 0.0
    return float(below), float(above)


def _block(low: Array, high: Array, shapes: Array, first: int, last: int) -> Block:
    return Block(
        first,
        last,
        float(low[first] + high[last]) / 2,
        float(high[first - 1] + low[first]) / 2 if first else -np.inf,
        float(high[last] + low[last + 1]) / 2 if last + 1 < len(low) else np.inf,
        shapes[:, first : last + 1],
    )


def refine_modes(
    pencil: Pencil,
    point: Point,
    blocks: Sequence[Block],
    positions: Sequence[int],
    enough: Enough,
    rigid: int | None = None,
) -> Neighbours:
    """Eigenvalues of some modes, each build refined as far as it needs.

    Parameters
    ----------
    pencil : Pencil
    point : Point
        All dimensions, shape (B, D).
    blocks : sequence of Block
        From `choose_blocks`; every build is solved in full where there are none.
    positions : sequence of int
        Positions of the wanted modes among all, each within a block.
    enough : callable
        Says which eigenvalues will do.
    rigid : int, optional
        Number of rigid modes where it is known.

    Returns
    -------
    Neighbours
        Builds that never were enough, or that inertia does not confirm, come from all their modes, with bound zero.
    """
    shift = blocks[0].shift if blocks else 0.0
    found = Neighbours(shift, np.full((len(positions), point.builds), np.nan), np.zeros(point.builds))
    left = np.flatnonzero(np.isfinite(point.values).all(axis=1))
    for steps in STEPS if blocks else ():
        if len(left):
            some = point if len(left) == point.builds else chosen(point, left)
            tried = _tried(pencil, some, blocks, positions, steps)
            found.offsets[:, left], found.bounds[left] = tried.offsets, tried.bounds
            left = left[~(np.isfinite(tried.bounds) & enough(tried))]
    for builds in parts(left, dense_chunk(pencil.model)):
        modes = solve_modes(Matrices(pencil.model, chosen(point, builds)), rigid=rigid)
        values = np.where(modes.stable[:, None], modes.eigenvalues[:, list(positions)], np.nan)
        found.offsets[:, builds], found.bounds[builds] = values.T - shift, 0.0
    return found


def _tried(pencil: Pencil, point: Point, blocks: Sequence[Block], positions: Sequence[int], steps: int) -> Neighbours:
    """Offsets from the shift of the first block."""
    shift = blocks[0].shift
    offsets, bounds = np.empty((len(positions), point.builds)), np.zeros(point.builds)
    for block in blocks:
        found = iterate(pencil, point, block, steps)
        np.maximum(bounds, found.bounds, out=bounds)
        for k, position in enumerate(positions):
            if block.first <= position <= block.last:
                offsets[k] = found.offsets[position - block.first] + (block.shift - shift)
    return Neighbours(shift, offsets, bounds)


def iterate(pencil: Pencil, point: Point, block: Block, steps: int) -> Neighbours:
    """All modes of a block after some steps; the bound is infinite where inertia does not confirm them."""
    size = block.last - block.first + 1
    offsets, bounds = np.empty((size, point.builds)), np.empty(point.builds)
    d, chunk = point.values.T, pencil.chunk(4 * size)
    for first in range(0, point.builds, chunk):
        builds = slice(first, first + chunk)
        with np.errstate(all="ignore"):
            loaded = pencil.load(d[:, builds])
            offsets[:, builds], bounds[builds] = _iterate(pencil, loaded, block, steps)
    return Neighbours(block.shift, offsets, bounds)


def _iterate(pencil: Pencil, chunk: Chunk, block: Block, steps: int) -> tuple[Array, Array]:
    elimination, mass, n = pencil.elimination, chunk.mass, pencil.elimination.size
    rounding, weight = pencil.rounding(chunk, block.shift)
    D, U = pencil.shifted(chunk, block.shift)
    L = np.empty_like(U)
    growth = elimination.factor(D, U, L, weight)
    W = _times(pencil, mass, block.start[:, :, None])
    P = np.stack([np.tensordot(column, W, (0, 0)) for column in block.start.T])
    slack: Array | float = 0.0
    for step in range(steps):
        Y = W.copy()
        elimination.solve(D, L, Y)
        MY = _times(pencil, mass, Y)
        mu, C, loss = rayleigh_ritz(_gram(Y, W), _gram(Y, MY))
        square = (mu**2).sum(axis=0)
        residual = np.maximum(_form(C, P) - square, 0.0) + slack * square
        if step + 1 < steps:
            W = _combined(MY, C)
            P = np.broadcast_to(np.eye(len(mu))[:, :, None], P.shape)
            # The new basis is orthonormal but for the digits that nearly parallel vectors have lost.
            slack = n * np.finfo(float).eps * loss
    lost = n * np.finfo(float).eps * loss * np.abs(mu).max(axis=0) + 3 * (rounding + growth) * block.shift
    mu, confirmed = _sorted(mu), _confirmed(pencil, chunk, block)
    return mu, np.where(confirmed, _bound(mu, residual, block) + lost, np.inf)


def _times(pencil: Pencil, mass: Array, X: Array) -> Array:
    """``MX`` from the entries of ``M``."""
    n = pencil.elimination.size
    product = mass[:n, None] * X
    if len(mass) == n:
        return np.asarray(product)
    for k, own in enumerate(pencil.elimination.later):
        for slot, i in enumerate(own, start=n + int(pencil.elimination.first[k])):
            product[k] += mass[slot] * X[i]
            product[i] += mass[slot] * X[k]
    return np.asarray(product)


def _gram(X: Array, Z: Array) -> Array:
    """``XᵀZ``, known to be symmetric, shape (r, r, B)."""
    r = X.shape[1]
    gram = np.empty((r, r, X.shape[2]))
    for i in range(r):
        for j in range(i, r):
            gram[i, j] = gram[j, i] = np.einsum("nb,nb->b", X[:, i], Z[:, j])
    return gram


def _combined(X: Array, C: Array) -> Array:
    """``XC``, each column of the result a combination of those of X."""
    combined = X[:, 0, None] * C[0]
    for j in range(1, X.shape[1]):
        combined += X[:, j, None] * C[j]
    return np.asarray(combined)


def _form(C: Array, P: Array) -> Array:
    """``Σ_k c_kᵀ P c_k``, shape (B,)."""
    return np.asarray((C * _combined(P, C)).sum(axis=(0, 1)))


def rayleigh_ritz(G: Array, H: Array) -> tuple[Array, Array, Array]:
    """``G c = μ H c`` for a batch of small symmetric pairs, ``H`` positive definite.

    Parameters
    ----------
    G, H : ndarray, shape (r, r, B)

    Returns
    -------
    mu : ndarray, shape (r, B)
        In no order.
    C : ndarray, shape (r, r, B)
        Columns with ``CᵀHC = I``.
    loss : ndarray, shape (B,)
        By which factor vectors being nearly parallel has enlarged the rounding of ``CᵀHC``.
    """
    r = len(G)
    F, loss = _cholesky(H)
    A, C = G.copy(), np.repeat(np.eye(r)[:, :, None], G.shape[2], axis=2)
    for axis in (0, 1):
        A = np.swapaxes(A, 0, 1) if axis else A
        for i in range(r):
            for j in range(i):
                A[i] -= F[i, j] * A[j]
            A[i] /= F[i, i]
    _rotate(A, C)
    for i in reversed(range(r)):
        for j in range(i + 1, r):
            C[i] -= F[j, i] * C[j]
        C[i] /= F[i, i]
    return A[range(r), range(r)], C, loss


def _cholesky(H: Array) -> tuple[Array, Array]:
    """Lower triangular ``F`` with ``FFᵀ = H``, and the greatest ``H_ii/F_ii²``."""
    r = len(H)
    F, loss = np.zeros_like(H), np.ones(H.shape[2])
    for i in range(r):
        for j in range(i + 1):
            rest = H[i, j] - sum(F[i, k] * F[j, k] for k in range(j)) if j else H[i, j]
            F[i, j] = np.sqrt(rest) if i == j else rest / F[j, j]
        np.maximum(loss, H[i, i] / F[i, i] ** 2, out=loss)
    return F, loss


def _rotate(A: Array, V: Array) -> None:
    """Jacobi's plane rotations: ``A`` becomes diagonal and ``V`` is turned along, in place."""
    r = len(A)
    for _ in range(SWEEPS if r > 2 else 1):
        for p in range(r - 1):
            for q in range(p + 1, r):
                _turn(A, V, p, q)


def _turn(A: Array, V: Array, p: int, q: int) -> None:
    off, half = A[p, q].copy(), (A[q, q] - A[p, p]) / 2
    t = np.where(off == 0, 0.0, off / (half + np.copysign(np.hypot(half, off), half)))
    cosine = 1 / np.sqrt(1 + t**2)
    sine = t * cosine
    A[p, p] -= t * off
    A[q, q] += t * off
    A[p, q] = A[q, p] = 0.0
    for k in range(len(A)):
        if k not in (p, q):
            A[k, p], A[k, q] = cosine * A[k, p] - sine * A[k, q], sine * A[k, p] + cosine * A[k, q]
            A[p, k], A[q, k] = A[k, p], A[k, q]
    V[:, p], V[:, q] = cosine * V[:, p] - sine * V[:, q], sine * V[:, p] + cosine * V[:, q]


def _sorted(mu: Array) -> Array:
    """Every build's values in ascending order."""
    for last in range(len(mu) - 1, 0, -1):
        for i in range(last):
            mu[i], mu[i + 1] = np.minimum(mu[i], mu[i + 1]), np.maximum(mu[i], mu[i + 1])
    return mu


def _bound(mu: Array, residual: Array, block: Block) -> Array:
    """``|R|²/(δ − |R|)``, infinite where that is negative."""
    distance = np.minimum(mu[0] - (block.low - block.shift), (block.high - block.shift) - mu[-1])
    free = distance - np.sqrt(residual)
    return np.where(free > 0, residual / free, np.inf)


def _confirmed(pencil: Pencil, chunk: Chunk, block: Block) -> NDArray[np.bool_]:
    """Whether as many eigenvalues lie below both limits as there should."""
    confirmed = np.ones(chunk.builds, bool)
    for limit, below in ((block.low, block.first), (block.high, block.last + 1)):
        if np.isfinite(limit):
            counted, certain = count_chunk(pencil, chunk, limit)
            confirmed &= certain & (counted == below)
    return confirmed
