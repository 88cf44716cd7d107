"""Objectives over variables: values, exact Jacobians, and the residuals a solver pursues.

Symbols: ``x`` variables (B, P); derivatives are with respect to their local coordinates, ``log x`` for positive
variables and ``x`` itself for signed ones.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np

from inverse.assembly.assembly import Model
from inverse.assembly.terms import Array, IntArray
from inverse.evaluation.state import BuildState, Slopes
from inverse.matrices.equilibrium import at_rest
from inverse.matrices.stack import Matrices
from inverse.modal.rigid import count_rigid
from objectives.base import Objective
from objectives.state import Like, Measured

Choices = Mapping[int, IntArray]
"""Which way each build goes, for objectives (by place) that can be met in several ways."""


@dataclass
class Evaluator:
    """The objectives of a study as functions of its variables.

    `modal_solves` counts builds whose modes were computed.
    """

    model: Model
    objectives: tuple[Objective, ...]
    modal_solves: int = field(default=0, init=False)

    def at(self, x: Array) -> Evaluation:
        """A batch of designs, shape (B, P) or (P,)."""
        return self.of_dimensions(self.nominal(np.atleast_2d(x)), np.atleast_2d(x))

    def of_dimensions(self, base: Array, x: Array) -> Evaluation:
        """Builds whose base dimensions (B, D) are not, or not exactly, those their variables ask for."""
        matrices = Matrices(self.model, at_rest(self.model, base))
        self.modal_solves += len(base)
        state = BuildState(matrices, self._likes, self.modes_needed, self.rigid, self._changes(x))
        return Evaluation(self, x, state)

    def nominal(self, x: Array) -> Array:
        """Base dimensions (B, D) that variables (B, P) ask for."""
        parameters = self.model.parameters
        return parameters.nominal.values(parameters.variable_point(x))

    @cached_property
    def modes_needed(self) -> int | None:
        """Oscillating modes that any objective looks at; None for all."""
        needed = [objective.modes_needed for objective in self.objectives]
        return None if None in needed else max((n for n in needed if n is not None), default=0)

    @cached_property
    def _likes(self) -> tuple[Like, ...]:
        return tuple(dict.fromkeys(like for objective in self.objectives for like in objective.likes))

    @cached_property
    def rigid(self) -> int:
        """Rigid modes at a generic point; a design where the count differs is recounted when reported."""
        x = np.array([[_generic(v.low, v.high, k) for k, v in enumerate(self.model.parameters.variables)]])
        matrices = Matrices(self.model, at_rest(self.model, self.nominal(x)))
        if not np.isfinite(matrices.a).all():
            return 0
        return count_rigid(matrices.stiffness.sparse_rows(), matrices.stiffness.weights[0])

    def _changes(self, x: Array) -> Array:
        """``log(x/start)`` or, for signed variables, ``(x − start)/(high − low)``; zero without a start."""
        changes = np.zeros_like(x)
        for i, v in enumerate(self.model.parameters.variables):
            if v.free and v.start is not None:
                changes[:, i] = np.log(x[:, i] / v.start) if v.positive else (x[:, i] - v.start) / (v.high - v.low)
        return changes

    def change_slopes(self) -> Array:
        """Derivatives of the changes over local coordinates, shape (P,)."""
        return np.array(
            [
                0.0 if not v.free or v.start is None else 1.0 if v.positive else 1.0 / (v.high - v.low)
                for v in self.model.parameters.variables
            ]
        )


def _generic(low: float, high: float, k: int) -> float:
    """A point inside a range at which nothing is equal by accident."""
    share = 0.3 + 0.4 * ((k + 1) * 0.6180339887498949 % 1.0)
    return float(low ** (1 - share) * high**share) if low > 0 else low + share * (high - low)


@dataclass
class Evaluation:
    """One batch of designs: what the objectives measure and what a solver should pursue."""

    evaluator: Evaluator
    x: Array
    state: BuildState

    @cached_property
    def measured(self) -> list[Measured]:
        """Each objective's measure, in order."""
        return [objective.measure(self.state) for objective in self.evaluator.objectives]

    def values(self) -> Array:
        """Measured values, shape (B, m); NaN where a build has none or is not in stable equilibrium."""
        columns = [measured.values[:, 0] for measured in self.measured]
        values = np.stack(columns, axis=1) if columns else np.empty((self.state.builds, 0))
        values[~self.state.modes.stable] = np.nan
        return values

    def jacobian(self) -> Array:
        """Derivatives of the measured values over local coordinates of the variables, shape (B, m, P)."""
        return self._over_variables(self.measured)

    def pursued(self, choices: Choices | None = None) -> tuple[Array, Array, Array, Array]:
        """Residuals to bring to zero and residuals to keep positive, with their Jacobians.

        Returns
        -------
        equal, equal_jacobian, positive, positive_jacobian : ndarray
            Shapes (B, k), (B, k, P), (B, l), (B, l, P), columns weighted by the objectives' weights.
        """
        chosen = choices or {}
        objectives = self.evaluator.objectives
        pursuits = [objective.pursue(self.state, chosen.get(i)) for i, objective in enumerate(objectives)]
        equal, positive = [p.equal for p in pursuits], [p.positive for p in pursuits]
        weights = np.array([o.weight for part in (equal, positive) for o, m in zip(objectives, part, strict=True)
                            for _ in range(m.values.shape[1])])  # fmt: skip
        none = np.empty((self.state.builds, 0))
        values = weights * np.concatenate([none, *(m.values for m in (*equal, *positive))], axis=1)
        values[~self.state.modes.stable] = np.nan
        slopes = weights[:, None] * self._over_variables([*equal, *positive])
        k = sum(m.values.shape[1] for m in equal)
        return values[:, :k], slopes[:, :k], values[:, k:], slopes[:, k:]

    def dimension_jacobian(self) -> Array:
        """Derivatives of the measured values over the base dimensions themselves, shape (B, m, D)."""
        parameters = self.evaluator.model.parameters
        base = self.state.matrices.point.values[:, : len(parameters.dimensions)]
        scale = np.where(parameters.positive, base, 1.0)
        return np.asarray(self._collected(self.measured).over_dimensions() / scale[:, None, :])

    def _collected(self, parts: Sequence[Measured]) -> Slopes:
        slopes, first = Slopes(self.state, sum(part.values.shape[1] for part in parts)), 0
        for part in parts:
            slopes.add(part.gradient, first)
            first += part.values.shape[1]
        return slopes

    def _over_variables(self, parts: Sequence[Measured]) -> Array:
        parameters, d = self.evaluator.model.parameters, self.state.matrices.point.values
        slopes = self._collected(parts)
        if slopes.k == 0:
            return np.zeros((self.state.builds, 0, len(parameters.variables)))
        base = d[:, : len(parameters.dimensions)]
        over = parameters.pull(parameters.variable_point(self.x), base, slopes.over_dimensions())
        if slopes.by_change is not None:
            over = over + slopes.by_change * self.evaluator.change_slopes()
        return np.asarray(over)
