"""Frequencies, periods, splittings, beat periods and frequency ratios."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from objectives.base import AtLeast, AtMost, Objective, Pursuit, Requirement, Target, nothing, pursue_measure, scaled
from objectives.state import Array, Eigenvalues, IntArray, Measured, ModeReference, State

TURN = 2 * np.pi

NEIGHBOURS = 4
"""Modes that a limit on one mode is pursued on: it and the next ones on the side it implies."""


@dataclass(frozen=True, slots=True)
class Tone:
    """One frequency of each build: ``f`` and ``df/dλ`` (B,), and the mode it belongs to; NaN where there is none."""

    f: Array
    slope: Array
    index: IntArray


def tone(state: State, index: IntArray) -> Tone:
    """The frequencies of the modes at some positions."""
    values = state[Eigenvalues()]
    there = (index >= 0) & (index < values.shape[1])
    place = np.where(there, index, 0)
    lam = values[np.arange(len(values)), place]
    lam = np.where(there & (lam > 0), lam, np.nan)
    f = np.sqrt(lam) / TURN
    return Tone(f, f / (2 * lam), place)


def measured(state: State, value: Array, *slopes: tuple[Tone, Array | float]) -> Measured:
    """One column whose slope by each tone's frequency is given."""
    gradient = np.zeros((state.builds, 1, state[Eigenvalues()].shape[1]))
    rows = np.arange(state.builds)
    for one, slope in slopes:
        gradient[rows, 0, one.index] += slope * one.slope
    return Measured(value[:, None], {Eigenvalues(): gradient})


def logarithm(m: Measured, against: float) -> Measured:
    """``log(value/against)``."""
    with np.errstate(divide="ignore", invalid="ignore"):
        values = np.log(m.values / against)
        gradient = {q: g / m.values[:, :, None] for q, g in m.gradient.items()}
    return Measured(values, gradient)


def pursue_logarithm(requirement: Requirement, m: Measured) -> Pursuit:
    """Residuals in the logarithm of a positive measure: starts may be far off, and near the target it is linear."""
    none = nothing(len(m.values))
    match requirement:
        case Target(value, within) if value > 0:
            return Pursuit(scaled(logarithm(m, value), value / within), none)
        case AtLeast(value) if value > 0:
            return Pursuit(none, logarithm(m, value))
        case AtMost(value) if value > 0:
            return Pursuit(none, scaled(logarithm(m, value), -1.0))
        case _:
            return pursue_measure(requirement, m)


def side_by_side(parts: list[Measured]) -> Measured:
    """Several columns of one quantity's functions."""
    quantity = Eigenvalues()
    return Measured(
        np.concatenate([m.values for m in parts], axis=1),
        {quantity: np.concatenate([m.gradient[quantity] for m in parts], axis=1)},
    )


def one_mode(state: State, mode: ModeReference) -> Measured:
    """The frequency of a mode."""
    one = tone(state, state.index(mode))
    return measured(state, one.f, (one, 1.0))


def implied(mode: ModeReference, upward: bool, state: State) -> list[Measured]:
    """Frequencies of the modes on which a limit on one mode puts the same limit, at most `NEIGHBOURS` with it.

    Mode j at or above a limit says it of all that follow, at or below it of all before. Where two of them meet,
    sorted frequencies have a kink, and a solver that sees only one runs into it; with the neighbours it sees every
    active piece, and no design is excluded that was not before. Their number depends on the assembly alone.
    """
    if not isinstance(mode, int):
        return []
    count, step = state[Eigenvalues()].shape[1] - state.rigid, 1 if upward else -1
    following = range(mode + step, mode + step * NEIGHBOURS, step)
    return [one_mode(state, other) for other in following if 0 < other <= count]


def modes_below(mode: ModeReference, upward: bool) -> int | None:
    """Oscillating modes from the lowest that a limit on a mode looks at."""
    if not isinstance(mode, int):
        return None
    return mode + NEIGHBOURS - 1 if upward else mode


@dataclass(frozen=True, slots=True, kw_only=True)
class Frequency(Objective):
    """``f_j = ω_j/2π``."""

    kind: ClassVar[str] = "frequency"
    unit: ClassVar[str] = "Hz"

    mode: ModeReference

    @property
    def modes(self) -> tuple[ModeReference, ...]:
        """The mode it names."""
        return (self.mode,)

    @property
    def modes_needed(self) -> int | None:
        """Up to the mode, for a lower limit a few more."""
        return modes_below(self.mode, isinstance(self.requirement, AtLeast))

    def measure(self, state: State) -> Measured:
        """The frequency of the mode."""
        return one_mode(state, self.mode)

    def pursue(self, state: State, choice: IntArray | None = None) -> Pursuit:
        """In the logarithm; a limit is also put on the neighbours for which it is `implied`."""
        tones = [self.measure(state)]
        if isinstance(self.requirement, AtLeast | AtMost):
            tones += implied(self.mode, isinstance(self.requirement, AtLeast), state)
        return pursue_logarithm(self.requirement, side_by_side(tones))


@dataclass(frozen=True, slots=True, kw_only=True)
class Period(Objective):
    """``1/f_j``."""

    kind: ClassVar[str] = "period"
    unit: ClassVar[str] = "s"

    mode: ModeReference

    @property
    def modes(self) -> tuple[ModeReference, ...]:
        """The mode it names."""
        return (self.mode,)

    @property
    def modes_needed(self) -> int | None:
        """Up to the mode, for an upper limit a few more."""
        return modes_below(self.mode, isinstance(self.requirement, AtMost))

    def measure(self, state: State) -> Measured:
        """The period of the mode."""
        return _inverse(one_mode(state, self.mode))

    def pursue(self, state: State, choice: IntArray | None = None) -> Pursuit:
        """In the logarithm; a limit is also put on the neighbours for which it is `implied`."""
        tones = [one_mode(state, self.mode)]
        if isinstance(self.requirement, AtLeast | AtMost):
            tones += implied(self.mode, isinstance(self.requirement, AtMost), state)
        return pursue_logarithm(self.requirement, _inverse(side_by_side(tones)))


def _inverse(m: Measured) -> Measured:
    """``1/value``, of positive values."""
    return Measured(1 / m.values, {q: -g / m.values[:, :, None] ** 2 for q, g in m.gradient.items()})


def splitting(state: State, between: tuple[ModeReference, ModeReference]) -> tuple[Array, Tone, Tone]:
    """``f_j − f_i = (λ_j − λ_i)/(ω_i + ω_j)/2π``: no digits are lost where they are close."""
    first, second = (tone(state, state.index(mode)) for mode in between)
    values, rows = state[Eigenvalues()], np.arange(state.builds)
    gap = values[rows, second.index] - values[rows, first.index]
    return gap / (TURN**2 * (first.f + second.f)), first, second


@dataclass(frozen=True, slots=True, kw_only=True)
class Splitting(Objective):
    """``f_j − f_i``, signed for modes named by shape."""

    kind: ClassVar[str] = "splitting"
    unit: ClassVar[str] = "Hz"

    between: tuple[ModeReference, ModeReference]

    @property
    def modes(self) -> tuple[ModeReference, ...]:
        """Both modes."""
        return self.between

    def measure(self, state: State) -> Measured:
        """The second frequency less the first."""
        value, first, second = splitting(state, self.between)
        return measured(state, value, (first, -1.0), (second, 1.0))


@dataclass(frozen=True, slots=True, kw_only=True)
class BeatPeriod(Objective):
    """``1/(f_j − f_i)``, there and back once."""

    kind: ClassVar[str] = "beat period"
    unit: ClassVar[str] = "s"

    between: tuple[ModeReference, ModeReference]

    @property
    def modes(self) -> tuple[ModeReference, ...]:
        """Both modes."""
        return self.between

    def measure(self, state: State) -> Measured:
        """The beat period; infinite where both frequencies agree."""
        value, first, second = splitting(state, self.between)
        with np.errstate(divide="ignore"):
            T = 1 / value
        slope = np.where(np.isfinite(T), T, 0.0) ** 2
        return measured(state, T, (first, slope), (second, -slope))

    def pursue(self, state: State, choice: IntArray | None = None) -> Pursuit:
        """In the splitting, which passes smoothly through zero where the period runs away."""
        value, first, second = splitting(state, self.between)
        m, none = measured(state, value, (first, -1.0), (second, 1.0)), nothing(state.builds)
        match self.requirement:
            case Target(T, within):
                return Pursuit(scaled(m, T**2 / within, 1 / T), none)
            case AtLeast(T):
                # Of modes named by shape the second may be the lower one: that is no longer beat, but none.
                return Pursuit(none, side_by_side([scaled(m, -T, 1 / T), scaled(m, T)]))
            case AtMost(T):
                return Pursuit(none, scaled(m, T, 1 / T))
            case requirement:
                return pursue_measure(requirement, m)


@dataclass(frozen=True, slots=True, kw_only=True)
class FrequencyRatio(Objective):
    """``f_j/f_i``."""

    kind: ClassVar[str] = "frequency ratio"
    unit: ClassVar[str] = "1"

    between: tuple[ModeReference, ModeReference]

    @property
    def modes(self) -> tuple[ModeReference, ...]:
        """Both modes."""
        return self.between

    def measure(self, state: State) -> Measured:
        """The second frequency over the first."""
        first, second = (tone(state, state.index(mode)) for mode in self.between)
        ratio = second.f / first.f
        return measured(state, ratio, (first, -ratio / first.f), (second, 1 / first.f))

    def pursue(self, state: State, choice: IntArray | None = None) -> Pursuit:
        """In the logarithm."""
        return pursue_logarithm(self.requirement, self.measure(state))
