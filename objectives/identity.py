"""Modes named by shape: the best assignment of modes to the shapes that were asked for.

Symbols: ``a`` the shape asked for, ``W`` the mass matrix of its components, ``U`` (s, r) their modal displacements.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from objectives.state import Array, Displacement, Eigenvalues, IntArray, Like, MassBlock, State

AMBIGUOUS = 0.05
"""A runner-up whose assurance is this close makes an identification doubtful."""

CLUSTER = 1e-9
"""Relative gap below which circular frequencies count as one: single shapes are then arbitrary."""

EQUAL = 1e-9
"""Assurances this close do not decide between modes of one frequency; their single shapes do."""


@dataclass(frozen=True, slots=True)
class Identification:
    """Per shape: the position of its mode, its assurance and that of the next best frequency, (B,) each.

    Where modes run out the position is −1 and the assurance NaN.
    """

    index: dict[Like, IntArray]
    assurance: dict[Like, Array]
    runner_up: dict[Like, Array]

    def ambiguous(self, like: Like) -> NDArray[np.bool_]:
        """Where a mode of another frequency is as good as the one chosen."""
        return np.asarray(self.assurance[like] - self.runner_up[like] < AMBIGUOUS)


def displacements(like: Like, state: State) -> Array:
    """Modal displacements of the components of a shape, shape (B, s, r)."""
    return np.stack([state[Displacement(c)] for c in like.components], axis=1)


def assurance(like: Like, state: State) -> Array:
    """Mass-weighted modal assurance of every mode with a shape, (aᵀWφ)²/(aᵀWa φᵀWφ), shape (B, r).

    ``W`` is the mass matrix of the components named, so that the number is the same in any units. A mode
    that does not move them has none of it.
    """
    a = np.array([value for _, value in like.pattern])
    W, U = state[MassBlock(like.components)], displacements(like, state)
    Wa = W @ a
    along = np.einsum("bs,bsj->bj", Wa, U)
    size = np.einsum("bsj,bst,btj->bj", U, W, U)
    return _ratio(along**2, (Wa @ a)[:, None] * size)


def subspace_assurance(like: Like, state: State) -> Array:
    """`assurance`, for modes of one frequency that of the best shape they span together, shape (B, r).

    That is the share of ``aᵀWa`` left when ``a`` is projected, in ``W``, on what the cluster spans.
    """
    table = assurance(like, state)
    same = one_frequency(state)
    a = np.array([value for _, value in like.pattern])
    for b in np.flatnonzero(same.sum(axis=(1, 2)) > same.shape[1]):
        W, U = state[MassBlock(like.components)][b], displacements(like, state)[b]
        # A factor of W, which may be singular to rounding, from its spectrum.
        weights, axes = np.linalg.eigh(W)
        root = np.sqrt(np.maximum(weights, 0.0))[:, None] * axes.T
        for members in np.unique(same[b], axis=0):
            if members.sum() > 1:
                basis, size, _ = np.linalg.svd(root @ U[:, members], full_matrices=False)
                spanned = basis[:, size > CLUSTER * size.max(initial=0.0)]
                table[b, members] = np.sum((spanned.T @ root @ a) ** 2) / (a @ W @ a)
    return table


def clusters(omega: Array) -> IntArray:
    """Number of the frequency that each mode belongs to, ascending, shape (B, r).

    Neighbours that agree to `CLUSTER` belong together, and so do all that neighbours lead to.
    """
    together = np.diff(omega, axis=1) <= CLUSTER * omega[:, 1:]
    return np.concatenate([np.zeros((len(omega), 1), np.intp), np.cumsum(~together, axis=1)], axis=1)


def one_frequency(state: State) -> NDArray[np.bool_]:
    """Which pairs of modes count as one frequency, shape (B, r, r)."""
    with np.errstate(invalid="ignore"):
        cluster = clusters(np.sqrt(state[Eigenvalues()]))
    return np.asarray(cluster[:, :, None] == cluster[:, None, :])


def identify(likes: Sequence[Like], state: State) -> Identification:
    """Give each shape the oscillating mode it resembles most, no mode twice, best pairs first.

    Shapes that differ only by a factor, or in the order of their components, are one shape and get one mode.
    Among modes of one frequency, whose assurance is that of all of them together, the single shapes decide: the
    state turns them towards what was asked for.
    """
    first: dict[tuple[tuple[str, float], ...], int] = {}
    place = {like: first.setdefault(_direction(like), len(first)) for like in likes}
    distinct = {position: like for like, position in reversed(place.items())}
    shapes = [distinct[position] for position in range(len(distinct))]
    builds, count = state[Eigenvalues()].shape
    table = np.stack([subspace_assurance(like, state) for like in shapes], axis=1)
    single = np.stack([assurance(like, state) for like in shapes], axis=1)
    index = _assigned(np.where(np.arange(count) < state.rigid, -np.inf, table), single)
    there, rows = index >= 0, np.arange(builds)[:, None]
    chosen = np.where(there, table[rows, np.arange(len(shapes)), np.maximum(index, 0)], np.nan)
    own = one_frequency(state)[rows, np.maximum(index, 0)]
    own[:, :, : state.rigid] = True
    others = np.where(own, 0.0, table).max(axis=2, initial=0.0)
    return Identification(
        {like: index[:, i] for like, i in place.items()},
        {like: chosen[:, i] for like, i in place.items()},
        {like: others[:, i] for like, i in place.items()},
    )


def _assigned(table: Array, single: Array) -> IntArray:
    """Positions (B, likes) of the best pairs of a table (B, likes, r), the rest following; −1 where none is left."""
    builds, likes, count = table.shape
    index, rows, left = np.full((builds, likes), -1, np.intp), np.arange(builds), table.copy()
    for _ in range(likes):
        best = left.max(axis=(1, 2), initial=-np.inf)[:, None, None]
        level = np.where(left >= best - EQUAL, single, -np.inf).reshape(builds, -1)
        like, mode = np.divmod(level.argmax(axis=1), count)
        some = np.isfinite(left[rows, like, mode])
        index[rows[some], like[some]] = mode[some]
        left[rows, like, :], left[rows, :, mode] = -np.inf, -np.inf
    return index


def _direction(like: Like) -> tuple[tuple[str, float], ...]:
    """A shape without its size and sign, components in order; equal factors may round differently."""
    pattern = sorted(like.pattern)
    sign = next(1.0 if value > 0 else -1.0 for _, value in pattern if value)
    largest = sign * max(abs(value) for _, value in pattern)
    return tuple((component, round(value / largest, 12) + 0.0) for component, value in pattern)


def _ratio(part: Array, whole: Array) -> Array:
    """``part/whole``, zero where the whole is."""
    return np.divide(part, whole, out=np.zeros_like(part), where=whole > 0)
