"""What an objective may look at: a few named quantities of an assembly, for a batch of builds.

An objective is a function of *quantities*. It reads their values from a `State` and returns its own
value with the partial derivatives with respect to them; whoever owns the state turns those into
derivatives with respect to parts. Nothing here knows how modes are computed.

Symbols: ``B`` builds, ``r`` modes, ``K φ_j = λ_j M φ_j`` with ``φ_iᵀ M φ_j = δ_ij``. Modes stand in
ascending order with the rigid ones first, their ``λ`` exactly zero. SI units throughout.

Two kinds of derivative meet here. `Eigenvalues`, `Displacement` and `Energy` follow the modes as the
parts change. The *forms* and `ReleasedAmplitudes` are taken in the shapes ``Φ`` of the state, held still
while ``K`` and ``M`` change: a function of the motion is smooth in them even where frequencies coincide
and single shapes have no derivative.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
IntArray = NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class Eigenvalues:
    """``λ``, shape (B, r) [rad²/s²]."""


@dataclass(frozen=True, slots=True)
class Displacement:
    """Modal displacement of one component (``east``, ``stage.ry``), shape (B, r)."""

    component: str


@dataclass(frozen=True, slots=True)
class FrozenDisplacement:
    """`Displacement` with ``Φ`` held: only what reads it off the shapes changes, shape (B, r)."""

    component: str


@dataclass(frozen=True, slots=True)
class Energy:
    """``φ_jᵀ M_b φ_j`` for the mass terms of one owner (``east``, or ``stage.ry``), shape (B, r)."""

    owner: str


@dataclass(frozen=True, slots=True)
class MassBlock:
    """Mass terms owned by the bodies of some components, over these components, shape (B, s, s)."""

    components: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class StiffnessForm:
    """``Φᵀ K Φ`` with ``Φ`` held, shape (B, r, r); its value is ``diag(λ)``."""


@dataclass(frozen=True, slots=True)
class MassForm:
    """``Φᵀ M Φ`` with ``Φ`` held, shape (B, r, r); its value is the identity."""


@dataclass(frozen=True, slots=True)
class OwnerForm:
    """``Φᵀ M_b Φ`` with ``Φ`` held, shape (B, r, r). Needs all modes."""

    owner: str


@dataclass(frozen=True, slots=True)
class ReleasedAmplitudes:
    """``Φ⁻¹ q_0`` with ``Φ`` held, shape (B, r). Needs all modes.

    ``q_0`` has one unit on the component and every other component at rest; the amplitudes equal
    ``φ_jᵀ M q_0``.
    """

    component: str


@dataclass(frozen=True, slots=True)
class Sag:
    """Static deflection, shape (B,), downward positive for a body.

    Of the component (a vertical one) under the assembly's own weight, or under a `force` [N] acting on
    that component alone; of a link the change of its length.
    """

    of: str
    force: float | None = None


@dataclass(frozen=True, slots=True)
class PartMass:
    """Mass of one body or link, all its pieces together, shape (B,) [kg]."""

    part: str


@dataclass(frozen=True, slots=True)
class PartCost:
    """Price of one body or link, all its pieces together, shape (B,)."""

    part: str


@dataclass(frozen=True, slots=True)
class Changes:
    """Relative change of each free variable from its start value, shape (B, p)."""


Quantity = (
    Eigenvalues
    | Displacement
    | FrozenDisplacement
    | Energy
    | MassBlock
    | StiffnessForm
    | MassForm
    | OwnerForm
    | ReleasedAmplitudes
    | Sag
    | PartMass
    | PartCost
    | Changes
)


@dataclass(frozen=True, slots=True)
class Like:
    """A mode named by its shape: components (at least two) and the displacement wanted of each."""

    pattern: tuple[tuple[str, float], ...]

    def __post_init__(self) -> None:
        """Refuse what names no shape."""
        if len(self.pattern) < 2 or not any(value for _, value in self.pattern):
            raise ValueError("a shape needs at least two components, not all of them zero")

    @property
    def components(self) -> tuple[str, ...]:
        """The components in the order of the pattern."""
        return tuple(component for component, _ in self.pattern)


ModeReference = int | Like
"""A number, from 1 over the oscillating modes, or a shape."""


class State(Protocol):
    """A batch of builds, seen through its quantities."""

    @property
    def builds(self) -> int:
        """Number of builds ``B``."""
        ...

    @property
    def rigid(self) -> int:
        """Number of rigid modes; they come first."""
        ...

    def __getitem__(self, quantity: Quantity) -> Array:
        """Value of a quantity, builds along the first axis."""
        ...

    def index(self, mode: ModeReference) -> IntArray:
        """Position of a mode among all modes, shape (B,); -1 where there is none."""
        ...


Gradient = dict[Quantity, NDArray[Any]]
"""Partial derivatives: for values of shape (B, k) an array (B, k, ...) per quantity; NaN counts as zero."""


@dataclass(frozen=True, slots=True)
class Measured:
    """Values of shape (B, k) and their partial derivatives; NaN where a build has no such value."""

    values: Array
    gradient: Gradient
