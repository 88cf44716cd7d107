"""The question, stated once for all routes: objectives over free variables within their ranges.

Routes work in ``t``: the logarithm of a positive variable, the share of its range for a signed one. Variables
that are fixed never appear there. `Problem.designs` is the way back.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from inverse.assembly.parameters import Variable
from inverse.assembly.terms import Array, IntArray
from inverse.evaluation.evaluator import Choices, Evaluation, Evaluator
from objectives.base import Maximise, Minimise, met

AT_RANGE = 1e-9
"""A variable within this share of its range from an end sits on it."""


@dataclass(frozen=True)
class Problem:
    """Objectives, free variables and their ranges."""

    evaluator: Evaluator

    @property
    def variables(self) -> tuple[Variable, ...]:
        """All variables, in the order of ``x``."""
        return self.evaluator.model.parameters.variables

    @cached_property
    def free(self) -> IntArray:
        """Places of the free variables."""
        return np.array([i for i, v in enumerate(self.variables) if v.free], np.intp)

    @cached_property
    def _positive(self) -> NDArray[np.bool_]:
        return np.array([self.variables[i].positive for i in self.free], bool)

    @cached_property
    def _scale(self) -> Array:
        return np.array([self.variables[i].high - self.variables[i].low for i in self.free], float)

    @cached_property
    def lower(self) -> Array:
        """Lower ends in ``t``, shape (p,)."""
        return self._inward(np.array([self.variables[i].low for i in self.free], float))

    @cached_property
    def upper(self) -> Array:
        """Upper ends in ``t``, shape (p,)."""
        return self._inward(np.array([self.variables[i].high for i in self.free], float))

    def _inward(self, x: Array) -> Array:
        return np.where(self._positive, np.log(np.where(self._positive, x, 1.0)), x / self._scale)

    @cached_property
    def start(self) -> Array | None:
        """The design as it stands, where every free variable has a start value; shape (p,)."""
        given = [self.variables[i].start for i in self.free]
        if any(value is None for value in given):
            return None
        return self._inward(np.array(given, float))

    def designs(self, t: Array) -> Array:
        """Variables ``x``, shape (B, P), of points (B, p); ends of ranges are met exactly."""
        t = np.clip(np.atleast_2d(t), self.lower, self.upper)
        low = np.array([v.low for v in self.variables])
        high = np.array([v.high for v in self.variables])
        x = np.tile(low, (len(t), 1))
        with np.errstate(over="ignore"):
            x[:, self.free] = np.where(self._positive, np.exp(t), t * self._scale)
        return np.asarray(np.clip(x, low, high))

    def points(self, x: Array) -> Array:
        """The inverse of `designs`."""
        return self._inward(np.atleast_2d(x)[:, self.free])

    def slopes(self, jacobian: Array) -> Array:
        """From derivatives over local coordinates of ``x``, (B, k, P), to those over ``t``, (B, k, p)."""
        return np.asarray(jacobian[:, :, self.free] * np.where(self._positive, 1.0, self._scale))

    def evaluate(self, t: Array) -> Evaluation:
        """Evaluate a batch of points."""
        return self.evaluator.at(self.designs(t))

    def residuals(self, t: Array, choices: Choices | None = None) -> tuple[Array, Array]:
        """What must vanish: equalities, and what limits are violated by; with the Jacobian over ``t``."""
        equal, equal_slopes, positive, positive_slopes = self.evaluate(t).pursued(choices)
        violated = positive < 0
        hinge = np.where(np.isnan(positive), np.nan, np.where(violated, positive, 0.0))
        values = np.concatenate([equal, hinge], axis=1)
        slopes = np.concatenate([equal_slopes, positive_slopes * violated[:, :, None]], axis=1)
        return values, self.slopes(slopes)

    def windows(self, t: Array, share: float, choices: Choices | None = None) -> tuple[Array, Array]:
        """As `residuals`, but an equality counts only beyond `share` of its window."""
        equal, equal_slopes, positive, positive_slopes = self.evaluate(t).pursued(choices)
        with np.errstate(invalid="ignore"):
            beyond = np.sign(equal) * np.maximum(np.abs(equal) - share, 0.0)
            hinge = np.minimum(positive, 0.0)
        values = np.concatenate([beyond, hinge], axis=1)
        active = np.concatenate([beyond != 0, hinge < 0], axis=1)
        slopes = np.concatenate([equal_slopes, positive_slopes], axis=1) * active[:, :, None]
        return values, self.slopes(slopes)

    @property
    def wishes(self) -> tuple[int, ...]:
        """Places of objectives to minimise or maximise."""
        return tuple(
            i
            for i, objective in enumerate(self.evaluator.objectives)
            if isinstance(objective.requirement, Minimise | Maximise)
        )

    def all_met(self, values: Array) -> NDArray[np.bool_]:
        """Which builds, by measured values (B, m), meet every objective that can be met."""
        good = np.ones(len(values), bool)
        for i, objective in enumerate(self.evaluator.objectives):
            verdict = met(objective.requirement, values[:, i])
            if verdict is not None:
                good &= verdict
        return good & ~np.isnan(values).any(axis=1)

    def held(self, t: Array) -> dict[str, str]:
        """Free variables that sit on an end of their range, and which ("low", "high"); one point (p,)."""
        span = self.upper - self.lower
        ends = {}
        for k, i in enumerate(self.free):
            if t[k] - self.lower[k] <= AT_RANGE * span[k]:
                ends[self.variables[i].name] = "low"
            elif self.upper[k] - t[k] <= AT_RANGE * span[k]:
                ends[self.variables[i].name] = "high"
        return ends
