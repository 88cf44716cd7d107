"""Mode shapes: assurance with a wanted shape, stillness of a body, share of the energy."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from objectives.base import Objective, Pursuit, Target, nothing, scaled
from objectives.state import (
    Array,
    Displacement,
    Eigenvalues,
    Energy,
    Gradient,
    IntArray,
    Like,
    MassBlock,
    Measured,
    ModeReference,
    State,
)


def at_mode(values: Array, index: IntArray) -> Array:
    """Values (B, r) at one position each, NaN where it is −1."""
    return np.where(index >= 0, values[np.arange(len(values)), np.maximum(index, 0)], np.nan)


def in_place(state: State, index: IntArray, slope: Array) -> Array:
    """Slopes (B,) as a gradient (B, 1, r) at one position each."""
    gradient = np.zeros((state.builds, 1, state[Eigenvalues()].shape[1]))
    gradient[np.arange(state.builds), 0, np.maximum(index, 0)] = np.where(index >= 0, np.nan_to_num(slope), 0.0)
    return gradient


@dataclass(frozen=True, slots=True, kw_only=True)
class Shape(Objective):
    """Mass-weighted modal assurance of a mode with a shape, 0 to 1."""

    kind: ClassVar[str] = "shape"
    unit: ClassVar[str] = "1"

    mode: ModeReference
    like: Like

    @property
    def modes(self) -> tuple[ModeReference, ...]:
        """The mode it names."""
        return (self.mode,)

    def measure(self, state: State) -> Measured:
        """``(aᵀWu)²/(aᵀWa uᵀWu)`` with ``W`` the mass matrix of the components."""
        index, names = state.index(self.mode), self.like.components
        a = np.array([value for _, value in self.like.pattern])
        W = state[MassBlock(names)]
        u = np.stack([at_mode(state[Displacement(c)], index) for c in names], axis=1)
        Wa, Wu = W @ a, np.einsum("bst,bt->bs", W, u)
        along, aa, uu = Wu @ a, (Wa @ a)[:, None], np.einsum("bs,bs->b", u, Wu)[:, None]
        value = along[:, None] ** 2 / (aa * uu)
        by_u = 2 * along[:, None] * Wa / (aa * uu) - 2 * value * Wu / uu
        outer = np.einsum("s,bt->bst", a, u)
        by_W = (along[:, None, None] * (outer + np.swapaxes(outer, 1, 2))) / (aa * uu)[:, :, None]
        by_W -= value[:, :, None] * (np.outer(a, a) / aa[:, :, None] + np.einsum("bs,bt->bst", u, u) / uu[:, :, None])
        gradient: Gradient = {Displacement(c): in_place(state, index, by_u[:, i]) for i, c in enumerate(names)}
        gradient[MassBlock(names)] = np.nan_to_num(by_W)[:, None]
        return Measured(value, gradient)


@dataclass(frozen=True, slots=True, kw_only=True)
class NodalPoint(Objective):
    """Displacement of a body over the greatest of any body in the mode, 0 to 1.

    `own` are the components of the body that count, `bodies` the translations of every body.
    """

    kind: ClassVar[str] = "nodal point"
    unit: ClassVar[str] = "1"

    mode: ModeReference
    own: tuple[str, ...]
    bodies: Mapping[str, tuple[str, ...]]

    @property
    def modes(self) -> tuple[ModeReference, ...]:
        """The mode it names."""
        return (self.mode,)

    def measure(self, state: State) -> Measured:
        """The ratio of lengths; its gradient is that of the body that moves most."""
        index = state.index(self.mode)
        parts = [self.own, *self.bodies.values()]
        lengths = np.stack([_length(state, part, index) for part in parts], axis=1)
        greatest = lengths[:, 1:].argmax(axis=1)
        top = lengths[np.arange(state.builds), 1 + greatest]
        value = lengths[:, 0] / top
        gradient: Gradient = {}
        for i, part in enumerate(parts):
            active = np.ones(state.builds) / top if i == 0 else -value / top * (greatest == i - 1)
            for component in part:
                u = at_mode(state[Displacement(component)], index)
                slope = active * u / np.where(lengths[:, i] > 0, lengths[:, i], 1.0)
                gradient[Displacement(component)] = gradient.get(Displacement(component), 0.0) + in_place(
                    state, index, slope
                )
        return Measured(value[:, None], gradient)

    def pursue(self, state: State, choice: IntArray | None = None) -> Pursuit:
        """A target on one axis is pursued with its sign, for the size has a kink where it is zero."""
        if not isinstance(self.requirement, Target) or len(self.own) > 1:
            return Objective.pursue(self, state)
        m = self.measure(state)
        sign = np.sign(at_mode(state[Displacement(self.own[0])], state.index(self.mode)))
        signed = Measured(m.values * sign[:, None], {q: g * sign[:, None, None] for q, g in m.gradient.items()})
        return Pursuit(scaled(signed, 1 / self.requirement.within, self.requirement.value), nothing(state.builds))


def _length(state: State, components: tuple[str, ...], index: IntArray) -> Array:
    return np.asarray(np.linalg.norm([at_mode(state[Displacement(c)], index) for c in components], axis=0))


@dataclass(frozen=True, slots=True, kw_only=True)
class EnergyShare(Objective):
    """``φᵀM_bφ/φᵀMφ`` for the mass terms of a body, or of one of its axes."""

    kind: ClassVar[str] = "energy share"
    unit: ClassVar[str] = "1"

    mode: ModeReference
    owner: str

    @property
    def modes(self) -> tuple[ModeReference, ...]:
        """The mode it names."""
        return (self.mode,)

    def measure(self, state: State) -> Measured:
        """The share of the mass-normalised mode."""
        index, quantity = state.index(self.mode), Energy(self.owner)
        value = at_mode(state[quantity], index)
        return Measured(value[:, None], {quantity: in_place(state, index, np.ones(state.builds))})
