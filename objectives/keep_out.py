"""Bands in which no mode may lie."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import NDArray

from objectives.base import Objective, Pursuit, nothing
from objectives.frequency import Tone, measured, side_by_side, tone
from objectives.state import Array, Eigenvalues, Energy, IntArray, Measured, State

TAKES_PART = 1e-6
"""Share of a mode's energy from which a body takes part in it."""

Band = tuple[float, float]


def bands_from_orders(orders: Sequence[float], low: float, high: float) -> tuple[Band, ...]:
    """Bands that orders sweep while the speed runs from `low` to `high` [Hz]."""
    return tuple((order * low, order * high) for order in orders)


def merged(bands: Sequence[Band]) -> tuple[Band, ...]:
    """Bands in ascending order, overlapping ones joined."""
    joined: list[Band] = []
    for low, high in sorted(bands):
        if joined and low <= joined[-1][1]:
            joined[-1] = joined[-1][0], max(joined[-1][1], high)
        else:
            joined.append((low, high))
    return tuple(joined)


@dataclass(frozen=True, slots=True, kw_only=True)
class KeepOut(Objective):
    """No oscillating mode inside any band [Hz]; margins are already in the bands, which do not overlap.

    With `driven_by`, only modes in which one of these bodies or components takes part count.
    """

    kind: ClassVar[str] = "keep out"
    unit: ClassVar[str] = "Hz"

    bands: tuple[Band, ...]
    driven_by: tuple[str, ...] = ()

    @property
    def modes_needed(self) -> int | None:
        """All: how many lie below a band is not known beforehand."""
        return None

    def measure(self, state: State) -> Measured:
        """Distance of the nearest mode from the nearest band, negative inside."""
        f = self._frequencies(state)
        low, high = np.array(self.bands).T
        distance = np.maximum(low - f[:, :, None], f[:, :, None] - high)
        flat = np.where(np.isnan(distance), np.inf, distance).reshape(state.builds, -1)
        worst = flat.argmin(axis=1)
        mode, band = np.divmod(worst, len(self.bands))
        value = flat[np.arange(state.builds), worst]
        one = tone(state, mode + state.rigid)
        sign = np.where(low[band] - one.f >= one.f - high[band], -1.0, 1.0)
        return measured(state, np.where(np.isfinite(one.f), value, np.nan), (one, sign))

    def pursue(self, state: State, choice: IntArray | None = None) -> Pursuit:
        """The last mode below each band below it, the next above; `choice` (B, bands) counts the modes below.

        These two imply it for all others. Without a choice each build keeps the sides that its modes are
        nearest to.
        """
        below = self.nearest_choice(state) if choice is None else choice
        counted = self._counted(state)
        columns = []
        for k, (low, high) in enumerate(self.bands):
            under = self._ranked(state, counted, below[:, k])
            over = self._ranked(state, counted, below[:, k] + 1)
            columns.append(_room(state, under, low, -1.0))
            columns.append(_room(state, over, high, 1.0))
        return Pursuit(nothing(state.builds), side_by_side(columns))

    def nearest_choice(self, state: State) -> IntArray:
        """Modes below the middle of each band, shape (B, bands)."""
        middles = np.array([(low + high) / 2 for low, high in self.bands])
        f = self._frequencies(state)
        with np.errstate(invalid="ignore"):
            return np.asarray(np.sum(f[:, :, None] < middles, axis=1, dtype=np.intp))

    def _frequencies(self, state: State) -> Array:
        """Frequencies of the oscillating modes that count, others NaN, shape (B, r)."""
        with np.errstate(invalid="ignore"):
            f = np.sqrt(state[Eigenvalues()][:, state.rigid :]) / (2 * np.pi)
        return np.where(self._counted(state), f, np.nan)

    def _counted(self, state: State) -> NDArray[np.bool_]:
        count = state[Eigenvalues()].shape[1] - state.rigid
        if not self.driven_by:
            return np.ones((state.builds, count), bool)
        shares = [state[Energy(owner)][:, state.rigid :] > TAKES_PART for owner in self.driven_by]
        return np.asarray(np.any(shares, axis=0))

    def _ranked(self, state: State, counted: NDArray[np.bool_], rank: IntArray) -> Tone:
        """The tone of the mode with a rank (from 1) among those that count; NaN for no such rank."""
        match = counted & (np.cumsum(counted, axis=1) == rank[:, None])
        index = np.where(match.any(axis=1), match.argmax(axis=1) + state.rigid, -1)
        return tone(state, index)


def _room(state: State, one: Tone, edge: float, side: float) -> Measured:
    """Relative distance on the right side of an edge; plenty where there is no mode."""
    value = np.where(np.isfinite(one.f), side * (one.f / edge - 1), 1.0)
    return measured(state, value, (one, side / edge))
