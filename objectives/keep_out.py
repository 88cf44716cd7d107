"""Bands in which no mode may lie."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import comb
from typing import ClassVar

import numpy as np
from numpy.typing import NDArray

from objectives.base import EDGE_SLACK, AtLeast, Objective, Pursuit, Requirement, nothing
from objectives.frequency import NEIGHBOURS, Tone, measured, side_by_side, tone
from objectives.state import Array, Eigenvalues, Energy, IntArray, Measured, State

TAKES_PART = 1e-6
"""Share of a mode's energy from which a body takes part in it."""

OUTSIDE = AtLeast(0.0)
"""What is required of every distance."""

Band = tuple[float, float]


def bands_from_orders(orders: Sequence[float], low: float, high: float) -> tuple[Band, ...]:
    """Bands that orders sweep while the speed runs from `low` to `high` [Hz]; overlapping ones joined."""
    return merged([(order * low, order * high) for order in orders])


def merged(bands: Sequence[Band]) -> tuple[Band, ...]:
    """Bands in ascending order, overlapping ones joined; the edges of each may stand in either order.

    Raises
    ------
    ValueError
        If a band has no frequency above zero.
    """
    joined: list[Band] = []
    for low, high in sorted((min(band), max(band)) for band in bands):
        if not high > 0:
            raise ValueError(f"expected a band that reaches above 0 Hz, found {low:g} Hz to {high:g} Hz")
        if joined and low <= joined[-1][1]:
            joined[-1] = joined[-1][0], max(joined[-1][1], high)
        else:
            joined.append((low, high))
    return tuple(joined)


def number_of_choices(modes: int, bands: int) -> int:
    """Ways in which modes can pass bands: whole numbers below each, never fewer below a higher one, C(n + b, b)."""
    return comb(modes + bands, bands)


@dataclass(frozen=True, slots=True, kw_only=True)
class KeepOut(Objective):
    """No oscillating mode inside any band [Hz]; margins are already in the bands, and overlapping ones are joined.

    With `driven_by`, only modes in which one of these bodies or components takes part count: those in which it
    has more than `TAKES_PART` of the energy. A band that begins at zero or below has no lower side.
    """

    kind: ClassVar[str] = "keep out"
    unit: ClassVar[str] = "Hz"

    requirement: Requirement = OUTSIDE
    bands: tuple[Band, ...]
    driven_by: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        """Join overlapping bands; what is required is a distance, on whose edge rounding counts by the frequency."""
        object.__setattr__(self, "bands", merged(self.bands))
        object.__setattr__(self, "requirement", AtLeast(0.0, scale=min(edge for _, edge in self.bands)))

    @property
    def modes_needed(self) -> int | None:
        """All: how many lie below a band is not known beforehand."""
        return None

    def measure(self, state: State) -> Measured:
        """Distance of the nearest mode from the nearest band, negative inside; infinite if no mode counts."""
        counted, f = self._counted(state), self._frequencies(state)
        low, high = self._edges()
        distance = np.maximum(low - f[:, :, None], f[:, :, None] - high)
        flat = np.where(counted[:, :, None], distance, np.inf).reshape(state.builds, -1)
        # A build without modes has NaN everywhere, and argmin points at it.
        worst = flat.argmin(axis=1)
        mode, band = np.divmod(worst, len(self.bands))
        value = flat[np.arange(state.builds), worst]
        one = tone(state, np.where(np.isfinite(value), mode + state.rigid, -1))
        sign = np.where(low[band] - one.f >= one.f - high[band], -1.0, 1.0)
        return measured(state, value, (one, sign))

    def pursue(self, state: State, choice: IntArray | None = None) -> Pursuit:
        """The last modes below each band below it, the next ones above it.

        The last and the next imply it for all others; a few of their neighbours stand beside them because
        sorted frequencies have a kink where they meet. The room is relative to the edge, and asks for as much
        beyond it as rounding may cost, so that a solver that comes to rest there is inside what is allowed.

        Parameters
        ----------
        state : State
            The builds.
        choice : ndarray of int, shape (B, bands), optional
            How many of the modes that count lie below each band, never fewer below a higher band. Without it
            each build keeps the sides that its modes are nearest to.
        """
        below = self.nearest_choice(state) if choice is None else choice
        counted = self._counted(state)
        rank = np.where(counted, np.cumsum(counted, axis=1), 0)
        columns = []
        for k, (low, high) in enumerate(self.bands):
            for step in range(min(NEIGHBOURS, counted.shape[1])):
                if low > 0:
                    columns.append(_room(state, _ranked(state, rank, below[:, k] - step), low, -1.0))
                columns.append(_room(state, _ranked(state, rank, below[:, k] + 1 + step), high, 1.0))
        return Pursuit(nothing(state.builds), side_by_side(columns))

    def nearest_choice(self, state: State) -> IntArray:
        """Counted modes below the middle of each band, shape (B, bands): every mode on its nearer side."""
        counted, f = self._counted(state), self._frequencies(state)
        low, high = self._edges()
        return np.asarray(np.sum(counted[:, :, None] & (f[:, :, None] < (low + high) / 2), axis=1, dtype=np.intp))

    def choices_near(self, state: State, offsets: Sequence[Sequence[int]]) -> IntArray:
        """The nearest choice of each build and those that differ from it, shape (1 + offsets, B, bands).

        Each of `offsets` moves as many modes below each band; what is no choice (a negative count, more modes
        than there are, fewer below a higher band) is brought to the next that is one.
        """
        nearest, count = self.nearest_choice(state), self._counted(state).sum(axis=1)[:, None]
        moved = (
            nearest + np.concatenate([np.zeros((1, len(self.bands)), np.intp), np.asarray(offsets, np.intp)])[:, None]
        )
        low, _ = self._edges()
        sided = np.where(np.isfinite(low), np.clip(moved, 0, count), 0)
        return np.asarray(np.maximum.accumulate(sided, axis=2))

    def _edges(self) -> tuple[Array, Array]:
        """Lower and upper edges; −∞ for a band with no lower side."""
        low, high = np.array(self.bands).T
        return np.where(low > 0, low, -np.inf), high

    def _frequencies(self, state: State) -> Array:
        """Frequencies of the oscillating modes, shape (B, r)."""
        with np.errstate(invalid="ignore"):
            return np.asarray(np.sqrt(state[Eigenvalues()][:, state.rigid :]) / (2 * np.pi))

    def _counted(self, state: State) -> NDArray[np.bool_]:
        """Which oscillating modes count, shape (B, r)."""
        count = state[Eigenvalues()].shape[1] - state.rigid
        if not self.driven_by:
            return np.ones((state.builds, count), bool)
        shares = [state[Energy(owner)][:, state.rigid :] > TAKES_PART for owner in self.driven_by]
        return np.asarray(np.any(shares, axis=0))


def _ranked(state: State, ranks: IntArray, rank: IntArray) -> Tone:
    """The tone of the mode with a rank (from 1) among those that count; NaN for no such rank."""
    match = (ranks == rank[:, None]) & (rank[:, None] > 0)
    return tone(state, np.where(match.any(axis=1), match.argmax(axis=1) + state.rigid, -1))


def _room(state: State, one: Tone, edge: float, side: float) -> Measured:
    """Relative distance on the right side of an edge; plenty where there is no mode."""
    value = np.where(np.isfinite(one.f), side * (one.f / edge - 1) - 2 * EDGE_SLACK, 1.0)
    return measured(state, value, (one, side / edge))
