"""Modes named by shape: the best assignment of modes to the shapes that were asked for."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from objectives.state import Array, Displacement, Eigenvalues, IntArray, Like, MassBlock, State

AMBIGUOUS = 0.05
"""A runner-up whose assurance is this close makes an identification doubtful."""

CLUSTER = 1e-9


@dataclass(frozen=True, slots=True)
class Identification:
    """Per shape: the position of its mode, its assurance and that of the next best mode, (B,) each."""

    index: dict[Like, IntArray]
    assurance: dict[Like, Array]
    runner_up: dict[Like, Array]

    def ambiguous(self, like: Like) -> NDArray[np.bool_]:
        """Where the next best mode is as good as the one chosen."""
        return np.asarray(self.assurance[like] - self.runner_up[like] < AMBIGUOUS)


def assurance(like: Like, state: State) -> Array:
    """Mass-weighted modal assurance of every mode with a shape, (aᵀWφ)²/(aᵀWa φᵀWφ), shape (B, r).

    ``W`` is the mass matrix of the components named, so that the number is the same in any units.
    """
    a = np.array([value for _, value in like.pattern])
    W = state[MassBlock(like.components)]
    U = np.stack([state[Displacement(c)] for c in like.components], axis=1)
    Wa = W @ a
    along = np.einsum("bs,bsj->bj", Wa, U)
    size = np.einsum("bsj,bst,btj->bj", U, W, U)
    with np.errstate(divide="ignore", invalid="ignore"):
        value = along**2 / ((Wa @ a)[:, None] * size)
    return np.asarray(np.nan_to_num(value))


def identify(likes: Sequence[Like], state: State) -> Identification:
    """Give each shape the oscillating mode it resembles most, no mode twice, best pairs first."""
    builds, count = state[Eigenvalues()].shape
    table = np.stack([assurance(like, state) for like in likes], axis=1)
    table[:, :, : state.rigid] = -1.0
    left = table.copy()
    index = np.full((builds, len(likes)), -1, np.intp)
    rows = np.arange(builds)
    for _ in range(min(len(likes), count - state.rigid)):
        best = left.reshape(builds, -1).argmax(axis=1)
        like, mode = np.divmod(best, count)
        index[rows, like] = mode
        left[rows, like, :], left[rows, :, mode] = -2.0, -2.0
    chosen = np.take_along_axis(table, np.maximum(index, 0)[:, :, None], axis=2)[:, :, 0]
    others = table.copy()
    np.put_along_axis(others, np.maximum(index, 0)[:, :, None], -1.0, axis=2)
    return Identification(
        {like: index[:, i] for i, like in enumerate(likes)},
        {like: chosen[:, i] for i, like in enumerate(likes)},
        {like: others[:, i].max(axis=1) for i, like in enumerate(likes)},
    )
