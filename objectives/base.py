"""What every objective has: a measure, what is required of it, and what a solver should pursue.

`Objective.measure` is the number a person judges. `Objective.pursue` is what a solver drives: the same
wish as smooth dimensionless residuals, because a judged number may jump (a transfer time moves from one
maximum to the next) or run away (a beat period at equal frequencies).
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import NDArray

from objectives.state import Array, Gradient, Like, Measured, ModeReference, State

EDGE_SLACK = 1e-9
"""Relative slack with which a value on the edge of what is allowed still counts as met."""


@dataclass(frozen=True, slots=True)
class Target:
    """Met within ± `within` of `value`."""

    value: float
    within: float

    def margin(self, measured: Array) -> Array:
        """Distance to the nearest edge, negative outside."""
        return self.within - np.abs(measured - self.value)

    def slack(self) -> float:
        """What rounding may cost on the edge."""
        return EDGE_SLACK * abs(self.value)


@dataclass(frozen=True, slots=True)
class AtLeast:
    """Met from `value` upward; rounding on the edge is measured by `scale`, by default the value itself."""

    value: float
    scale: float | None = None

    def margin(self, measured: Array) -> Array:
        """Distance above the limit."""
        return measured - self.value

    def slack(self) -> float:
        """What rounding may cost on the edge."""
        return EDGE_SLACK * abs(self.value if self.scale is None else self.scale)


@dataclass(frozen=True, slots=True)
class AtMost:
    """Met up to `value`."""

    value: float

    def margin(self, measured: Array) -> Array:
        """Distance below the limit."""
        return self.value - measured

    def slack(self) -> float:
        """What rounding may cost on the edge."""
        return EDGE_SLACK * abs(self.value)


@dataclass(frozen=True, slots=True)
class Minimise:
    """The less the better; neither met nor missed."""


@dataclass(frozen=True, slots=True)
class Maximise:
    """The more the better; neither met nor missed."""


Requirement = Target | AtLeast | AtMost | Minimise | Maximise


def met(requirement: Requirement, measured: Array) -> NDArray[np.bool_] | None:
    """Whether each build meets the requirement; None for a wish without an edge. NaN is a miss."""
    if isinstance(requirement, Minimise | Maximise):
        return None
    return np.asarray(requirement.margin(measured) >= -requirement.slack())


@dataclass(frozen=True, slots=True)
class Pursuit:
    """One wish as a solver sees it, dimensionless.

    `equal` is to become zero and is about ±1 on the edge of the window; `positive` is to become
    zero or more. Either may have no columns.
    """

    equal: Measured
    positive: Measured


@dataclass(frozen=True, slots=True, kw_only=True)
class Objective(ABC):
    """One row of what is asked. Concrete kinds are frozen and never subclassed."""

    kind: ClassVar[str]
    """The name in the study file."""
    unit: ClassVar[str]
    """SI unit of the measure."""

    requirement: Requirement
    label: str
    weight: float = 1.0
    conditions: tuple[str, ...] = ()

    @property
    def modes(self) -> tuple[ModeReference, ...]:
        """The modes it names."""
        return ()

    @property
    def likes(self) -> tuple[Like, ...]:
        """Those of its modes that are named by shape."""
        return tuple(mode for mode in self.modes if isinstance(mode, Like))

    @property
    def modes_needed(self) -> int | None:
        """How many oscillating modes from the lowest it looks at; None for all of them."""
        return None if self.likes else max((m for m in self.modes if isinstance(m, int)), default=0)

    @abstractmethod
    def measure(self, state: State) -> Measured:
        """The judged number, values (B, 1)."""

    def pursue(self, state: State, choice: NDArray[np.intp] | None = None) -> Pursuit:
        """Residuals for a solver.

        Parameters
        ----------
        state : State
            The builds.
        choice : ndarray of int, optional
            For wishes that can be met in several ways, which way each build goes for; None lets each
            build go the way it is nearest to. Only `KeepOut` has such ways: shape (B, bands), how many
            modes lie below each band.
        """
        return pursue_measure(self.requirement, self.measure(state))


def scaled(measured: Measured, factor: float, shift: float = 0.0) -> Measured:
    """``factor * (measured - shift)``."""
    gradient: Gradient = {q: factor * g for q, g in measured.gradient.items()}
    return Measured(factor * (measured.values - shift), gradient)


def nothing(builds: int) -> Measured:
    """No columns."""
    return Measured(np.empty((builds, 0)), {})


def pursue_measure(requirement: Requirement, measured: Measured) -> Pursuit:
    """Residuals linear in the measure, in units of the window or of the limit."""
    none = nothing(len(measured.values))
    match requirement:
        case Target(value, within):
            return Pursuit(scaled(measured, 1 / within, value), none)
        case AtLeast(value):
            return Pursuit(none, scaled(measured, 1 / (abs(value) or 1.0), value))
        case AtMost(value):
            return Pursuit(none, scaled(measured, -1 / (abs(value) or 1.0), value))
        case Minimise() | Maximise():
            return Pursuit(none, none)
