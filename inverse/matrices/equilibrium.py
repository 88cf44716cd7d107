"""The rest position: dependent dimensions from base ones, and the way back for derivatives.

Symbols: ``z`` base dimensions and ``y`` dependent ones in local coordinates, ``G(z, y) = 0`` their equations, so
``∂y/∂z = −G_y⁻¹ G_z`` (implicit function theorem).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import scipy.sparse as sp
import scipy.sparse.linalg as spla
from numpy.typing import NDArray

from inverse.assembly.assembly import Model
from inverse.assembly.terms import Array, Point

NEWTON_STEPS = 40
NEWTON_TOLERANCE = 1e-15
STAGNATION = 1e-8
DENSE_DEPENDENTS = 64
"""Up to this many dependent dimensions a batch is solved dense and together, beyond it build by build, sparse."""


def at_rest(model: Model, base: Array) -> Point:
    """All dimensions of a batch of builds, the dependent ones found by Newton's method.

    Parameters
    ----------
    model : Model
    base : ndarray, shape (B, D)
        Base dimensions, SI.

    Returns
    -------
    Point
        Shape (B, D + dependents); NaN for a build that has no rest position.
    """
    dependents = model.dependents
    if not len(dependents):
        return Point(base, model.positive)
    first = base.shape[1]
    point = Point(np.hstack([base, np.ones((len(base), len(dependents)))]), model.positive)
    # Seeds name at most one level of earlier seeds (directions need lengths), so twice is enough.
    for _ in range(2):
        seeds = dependents.seeds.values(dependents.table.values(point))
        with np.errstate(invalid="ignore"):
            point = _with(point, first, seeds**dependents.seed_power)
    return _newton(model, point, first)


def _with(point: Point, first: int, dependent: Array) -> Point:
    values = point.values.copy()
    values[:, first:] = dependent
    return Point(values, point.positive)


def _newton(model: Model, point: Point, first: int) -> Point:
    """Solve for the dependent dimensions of every build, each until its own steps no longer shrink."""
    dependents, positive = model.dependents, model.positive[first:]
    values = point.values
    left, before = np.arange(point.builds), np.full(point.builds, np.inf)
    for _ in range(NEWTON_STEPS):
        some = Point(values[left], point.positive)
        y = some.values[:, first:]
        residual = dependents.vanishing.values(dependents.table.values(some))
        step = -RestSlopes(model, some).solve(residual[:, None, :])[:, 0]
        with np.errstate(over="ignore", invalid="ignore"):
            new = np.where(positive, y * np.exp(np.clip(step, -1, 1)), y + step)
        values[left, first:] = new
        size = np.linalg.norm(step / _scale(new, positive), axis=1)
        # Steps that no longer shrink are rounding.
        done = (size <= NEWTON_TOLERANCE) | ((size <= STAGNATION) & (size >= before / 4))
        lost = ~np.isfinite(size)
        values[left[lost], first:] = np.nan
        going = ~done & ~lost
        left, before = left[going], size[going]
        if not len(left):
            break
    values[left, first:] = np.nan
    return Point(values, point.positive)


def _scale(y: Array, positive: NDArray[np.bool_]) -> Array:
    """What a step is compared with: one for logarithms, for signed dimensions their greatest."""
    signed = np.abs(np.where(positive, 0.0, y))
    own = np.maximum(signed, 1e-3 * signed.max(axis=1, keepdims=True, initial=0.0))
    return np.where(positive, 1.0, own + np.finfo(float).tiny)


@dataclass(frozen=True)
class RestSlopes:
    """``G_z`` and ``G_y`` at a batch of points, ready to solve with."""

    model: Model
    point: Point

    @cached_property
    def _by_dimension(self) -> Array:
        """``∂G/∂(z, y)``, shape (B, S, D + S); the batch is small or the model is."""
        dependents = self.model.dependents
        picks = np.zeros((1, dependents.vanishing.size, len(dependents.table)))
        np.add.at(picks[0], (dependents.vanishing.place, dependents.vanishing.term), 1.0)
        a = dependents.table.values(self.point)
        return dependents.table.pull(self.point, a, np.broadcast_to(picks, (len(a), *picks.shape[1:])))

    def _single(self, build: int) -> sp.csr_array:
        """``∂G/∂(z, y)`` of one build, sparse."""
        dependents = self.model.dependents
        point = Point(self.point.values[[build]], self.point.positive)
        slopes = dependents.table.jacobian(point, dependents.table.values(point))
        vanishing = dependents.vanishing
        ones = np.ones(len(vanishing.term))
        picks = sp.csr_array((ones, (vanishing.place, vanishing.term)), shape=(vanishing.size, slopes.shape[0]))
        return sp.csr_array(picks @ slopes)

    def solve(self, right: Array) -> Array:
        """``G_y⁻¹ right`` for rows ``right`` (B, k, S)."""
        first = len(self.point.positive) - len(self.model.dependents)
        if len(self.model.dependents) <= DENSE_DEPENDENTS:
            G_y = self._by_dimension[:, :, first:]
            return np.swapaxes(_dense_solve(G_y, np.swapaxes(right, 1, 2)), 1, 2)
        return np.stack([_sparse_solver(self._single(b)[:, first:])(right[b].T).T for b in range(len(right))])

    def solve_adjoint(self, right: Array) -> Array:
        """``G_y⁻ᵀ right`` for rows ``right`` (B, k, S)."""
        first = len(self.point.positive) - len(self.model.dependents)
        if len(self.model.dependents) <= DENSE_DEPENDENTS:
            G_y = self._by_dimension[:, :, first:]
            return np.swapaxes(_dense_solve(np.swapaxes(G_y, 1, 2), np.swapaxes(right, 1, 2)), 1, 2)
        return np.stack([_sparse_solver(self._single(b)[:, first:].T)(right[b].T).T for b in range(len(right))])

    def pull(self, cotangent: Array) -> Array:
        """Derivatives over all dimensions, (B, k, D + S), to those over the base ones, (B, k, D)."""
        if not len(self.model.dependents):
            return cotangent
        first = len(self.point.positive) - len(self.model.dependents)
        base, adjoint = cotangent[:, :, :first], self.solve_adjoint(cotangent[:, :, first:])
        if len(self.model.dependents) <= DENSE_DEPENDENTS:
            return np.asarray(base - adjoint @ self._by_dimension[:, :, :first])
        return np.stack([base[b] - adjoint[b] @ self._single(b)[:, :first] for b in range(len(base))])


def _dense_solve(matrices: Array, right: Array) -> Array:
    """Batched solve that gives NaN for a singular matrix instead of raising for all."""
    try:
        return np.asarray(np.linalg.solve(matrices, right))
    except np.linalg.LinAlgError:
        return np.stack([_one_solve(m, r) for m, r in zip(matrices, right, strict=True)])


def _one_solve(matrix: Array, right: Array) -> Array:
    try:
        return np.asarray(np.linalg.solve(matrix, right))
    except np.linalg.LinAlgError:
        return np.full_like(right, np.nan)


def _sparse_solver(matrix: sp.sparray) -> Callable[[Array], Array]:
    """Solver of one sparse system, NaN where it is singular."""
    try:
        solve: Callable[[Array], Array] = spla.splu(sp.csc_array(matrix)).solve
    except RuntimeError:
        return lambda right: np.full_like(right, np.nan)
    return solve
