"""What the parts weigh, cost, sink by and differ by from the design as it stands."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from objectives.base import Objective
from objectives.state import Changes, Measured, PartCost, PartMass, Quantity, Sag, State


def total(state: State, quantities: tuple[Quantity, ...]) -> Measured:
    """Sum of quantities of shape (B,)."""
    value = np.sum([state[q] for q in quantities], axis=0) if quantities else np.zeros(state.builds)
    return Measured(value[:, None], {q: np.ones((state.builds, 1)) for q in quantities})


@dataclass(frozen=True, slots=True, kw_only=True)
class TotalMass(Objective):
    """Mass of some parts together [kg]."""

    kind: ClassVar[str] = "total mass"
    unit: ClassVar[str] = "kg"

    parts: tuple[str, ...]

    def measure(self, state: State) -> Measured:
        """Sum over the parts."""
        return total(state, tuple(PartMass(part) for part in self.parts))


@dataclass(frozen=True, slots=True, kw_only=True)
class Cost(Objective):
    """Price of some parts together."""

    kind: ClassVar[str] = "cost"
    unit: ClassVar[str] = "1"

    parts: tuple[str, ...]

    def measure(self, state: State) -> Measured:
        """Sum over the parts."""
        return total(state, tuple(PartCost(part) for part in self.parts))


@dataclass(frozen=True, slots=True, kw_only=True)
class LeastChange(Objective):
    """How far the variables moved from their start values: root of the sum of squared relative changes."""

    kind: ClassVar[str] = "least change"
    unit: ClassVar[str] = "1"

    def measure(self, state: State) -> Measured:
        """The root; its slope at the start itself is taken as zero."""
        changes = state[Changes()]
        size = np.linalg.norm(changes, axis=1)
        slope = changes / np.where(size > 0, size, 1.0)[:, None]
        return Measured(size[:, None], {Changes(): slope[:, None]})


@dataclass(frozen=True, slots=True, kw_only=True)
class StaticSag(Objective):
    """Static deflection [m]: of a component, or of a link the change of its length."""

    kind: ClassVar[str] = "sag"
    unit: ClassVar[str] = "m"

    sag: Sag

    def measure(self, state: State) -> Measured:
        """The deflection, downward positive."""
        return Measured(state[self.sag][:, None], {self.sag: np.ones((state.builds, 1))})
