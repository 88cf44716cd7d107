"""Rows, weights and matrices of a batch of builds.

Symbols: ``w`` weights (B, T) and ``R`` rows (B, T, n) of the squares, so ``K = Rᵀ diag(w) R`` and, with the strains
``E = R Φ``, ``φ_iᵀ K φ_j = Σ_t w_t E_ti E_tj``.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray

from inverse.assembly.assembly import Model
from inverse.assembly.terms import Array, IntArray, Point, Squares, add_at
from inverse.matrices.equilibrium import RestSlopes


@dataclass(frozen=True)
class Stack:
    """One matrix of a batch of builds, kept as its squares."""

    squares: Squares
    a: Array
    constant: NDArray[np.bool_]
    """Which monomials are plain numbers, shape (N,)."""

    @property
    def weights(self) -> Array:
        """``w``, shape (B, T)."""
        return self.a[:, self.squares.weight]

    @property
    def varying(self) -> IntArray:
        """Entries whose monomial depends on dimensions."""
        return np.flatnonzero(~self.constant[self.squares.entry])

    @cached_property
    def rows(self) -> Array:
        """``R``, shape (B, T, n)."""
        s = self.squares
        R = np.zeros((len(self.a), len(s) * s.size))
        add_at(R, s.entry_row * s.size + s.entry_column, self.a[:, s.entry])
        return R.reshape(len(self.a), len(s), s.size)

    def sparse_rows(self, build: int = 0) -> sp.csr_array:
        """``R`` of one build."""
        s = self.squares
        return sp.csr_array((self.a[build, s.entry], (s.entry_row, s.entry_column)), shape=(len(s), s.size))

    def matrix(self) -> Array:
        """``Rᵀ diag(w) R``, shape (B, n, n)."""
        return np.asarray(np.swapaxes(self.rows * self.weights[:, :, None], 1, 2) @ self.rows)

    def sparse_matrix(self, build: int = 0) -> sp.csc_array:
        """The same for one build."""
        R = self.sparse_rows(build)
        return sp.csc_array(R.T @ sp.diags_array(self.weights[build]) @ R)

    def only(self, build: int) -> Stack:
        """The same for one build alone."""
        return Stack(self.squares, self.a[[build]], self.constant)

    def diagonal(self) -> Array | None:
        """The matrix as a vector (B, n) where no square joins two coordinates, else None."""
        s = self.squares
        if not s.uncoupled:
            return None
        out = np.zeros((len(self.a), s.size))
        add_at(out, s.entry_column, self.a[:, s.weight[s.entry_row]] * self.a[:, s.entry] ** 2)
        return out

    def strains(self, shapes: Array) -> Array:
        """``R Φ``, shape (B, T, r)."""
        if len(self.a) == 1 and "rows" not in self.__dict__:
            return np.asarray(self.sparse_rows() @ shapes[0])[None]
        return np.asarray(self.rows @ shapes)


@dataclass(frozen=True)
class Matrices:
    """A batch of builds at rest: the point, the values of all monomials, and the stacks over them."""

    model: Model
    point: Point

    @cached_property
    def a(self) -> Array:
        """Values of the monomials, shape (B, N)."""
        return self.model.monomials.values(self.point)

    @cached_property
    def rest(self) -> RestSlopes:
        """How dependent dimensions follow the base ones."""
        return RestSlopes(self.model, self.point)

    @cached_property
    def mass(self) -> Stack:
        """``M``."""
        return Stack(self.model.mass, self.a, self.model.monomials.constant)

    @cached_property
    def stiffness(self) -> Stack:
        """``K``."""
        return Stack(self.model.stiffness, self.a, self.model.monomials.constant)

    @cached_property
    def damping(self) -> Stack:
        """``C``."""
        return Stack(self.model.damping, self.a, self.model.monomials.constant)

    def component_rows(self, names: tuple[str, ...]) -> Array:
        """Rows that read the named components off the coordinates, shape (B, s, n)."""
        rows = np.zeros((len(self.a), len(names), self.model.size))
        for i, name in enumerate(names):
            for coordinate, monomial in self.model.components[name]:
                rows[:, i, coordinate] += self.a[:, monomial]
        return rows

    def owned(self, name: str) -> IntArray:
        """Mass squares of a part or of one of its axes."""
        return self.model.mass.owned(name)
