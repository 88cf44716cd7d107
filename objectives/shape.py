"""Mode shapes: assurance with a wanted shape, stillness of a body, share of the energy."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from objectives.base import AtMost, Objective, Pursuit, Target, nothing, scaled
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

    `own` are the components of the body that count; `bodies` those of every body that are compared with it,
    translations or, where a rotation is asked about, that rotation. A mode in which none of them moves has no
    such ratio.
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
        """The ratio of lengths; compared with the body that moves most; no slope where the body stands still."""
        return self._ratio(state, *_length(state, self.own, state.index(self.mode)))

    def pursue(self, state: State, choice: IntArray | None = None) -> Pursuit:
        """Along one axis a still body and an upper limit are pursued with the sign, for the size has a kink at zero.

        The sign is that of the mode, which is arbitrary; a limit is put on both sides.
        """
        if len(self.own) > 1:
            return Objective.pursue(self, state)
        index, none = state.index(self.mode), nothing(state.builds)
        signed = self._ratio(state, at_mode(state[Displacement(self.own[0])], index), np.ones((state.builds, 1)))
        match self.requirement:
            case Target(0.0, within):
                return Pursuit(scaled(signed, 1 / within), none)
            case AtMost(value) if value > 0:
                sides = [scaled(signed, side / value) for side in (-1.0, 1.0)]
                return Pursuit(
                    none,
                    Measured(
                        1 + np.concatenate([m.values for m in sides], axis=1),
                        {q: np.concatenate([m.gradient[q] for m in sides], axis=1) for q in signed.gradient},
                    ),
                )
            case _:
                return Objective.pursue(self, state)

    def _ratio(self, state: State, size: Array, slope: Array) -> Measured:
        """A size of the body (B,), with its slope (B, own) over its components, over the length of what moves most."""
        index, rows = state.index(self.mode), np.arange(state.builds)
        lengths, slopes = zip(*(_length(state, part, index) for part in self.bodies.values()), strict=True)
        greatest = np.argmax(lengths, axis=0)
        top = np.asarray(lengths)[greatest, rows]
        with np.errstate(divide="ignore", invalid="ignore"):
            value = size / top
        gradient: Gradient = {}

        def add(components: tuple[str, ...], slope: Array) -> None:
            for i, component in enumerate(components):
                quantity = Displacement(component)
                gradient[quantity] = gradient.get(quantity, 0.0) + in_place(state, index, slope[:, i] / top)

        with np.errstate(divide="ignore", invalid="ignore"):
            add(self.own, slope)
            for body, part in enumerate(self.bodies.values()):
                add(part, -(value * (greatest == body))[:, None] * slopes[body])
        return Measured(value[:, None], gradient)


def _length(state: State, components: tuple[str, ...], index: IntArray) -> tuple[Array, Array]:
    """Length of a displacement (B,), and its slope over each component (B, s); zero where it is still."""
    u = np.stack([at_mode(state[Displacement(c)], index) for c in components], axis=1)
    length = np.linalg.norm(u, axis=1)
    return length, u / np.where(length > 0, length, 1.0)[:, None]


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
