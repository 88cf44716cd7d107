"""Matrices from elsewhere as squares: ``P = Σ s_i (v_i · q)²`` with ``s_i`` the eigenvalues of ``P``."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import NDArray

from inverse.assembly.algebra import ONE, Monomial, Row, Square
from inverse.assembly.book import Book, Motion, Place
from inverse.assembly.parameters import Amount
from inverse.assembly.terms import Array
from inverse.errors import ModelError
from inverse.units import Kind

SYMMETRY = 1e-12
"""A difference between mirrored entries up to this share of the greatest is rounding."""

NULL = 1e-13
"""Eigenvalues below this share of the greatest, per row, are zeros of the matrix."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Label:
    """A degree of freedom of an imported matrix, as a body that links can be tied to."""

    axes: ClassVar[tuple[str, ...]] = ("x",)
    name: str

    def enter(self, book: Book) -> None:
        """Its terms are those of the matrix."""

    def motion(self, book: Book, owner: str, key: str, place: Place) -> Motion:
        """Its one component."""
        return {"x": book.components[f"{self.name}.x"]}


@dataclass(frozen=True, slots=True, kw_only=True)
class MatrixModel:
    """Mass, stiffness and damping matrices over labels, each optionally times a product of variables.

    Labels become bodies with one component ``x``; tables with the same labels add up.
    """

    name: str
    labels: tuple[str, ...]
    mass: Array | None = None
    stiffness: Array | None = None
    damping: Array | None = None
    mass_times: Amount | None = None
    stiffness_times: Amount | None = None
    damping_times: Amount | None = None

    def enter(self, book: Book) -> None:
        """Squares of all three; those of the mass belong to the labels, so that each has its share of the energy."""
        for label in self.labels:
            if f"{label}.x" not in book.components:
                book.coordinate(label, "x")
        given = (
            (book.stiffness, self.stiffness, "stiffness", self.stiffness_times),
            (book.damping, self.damping, "damping", self.damping_times),
        )
        for squares, matrix, key, amount in given:
            if matrix is not None:
                squares += self._squares(self._checked(key, matrix), self._factor(book, key, amount))
        if self.mass is not None:
            factor = self._factor(book, "mass", self.mass_times)
            book.mass += self._owned_squares(self._checked("mass", self.mass), factor)

    def _factor(self, book: Book, key: str, amount: Amount | None) -> Monomial:
        return ONE if amount is None else book.dimension(self.name, f"{key}_times", Kind.RATIO, amount)

    def _checked(self, key: str, given: Array) -> Array:
        matrix, n = np.asarray(given, float), len(self.labels)
        if matrix.shape != (n, n):
            raise ModelError(f"`{self.name}.{key}` has shape {matrix.shape}, expected {n} × {n} for {n} labels")
        size = float(np.abs(matrix).max(initial=0.0))
        if not np.isfinite(size) or np.abs(matrix - matrix.T).max(initial=0.0) > SYMMETRY * size:
            raise ModelError(f"`{self.name}.{key}` is not symmetric to rounding, or holds a number that is not finite")
        return np.asarray((matrix + matrix.T) / 2)

    def _squares(self, matrix: Array, factor: Monomial) -> list[Square]:
        values, vectors, kept = _eigenpairs(matrix)
        return [
            Square(self.name, "", float(value) * factor, self._row(vector))
            for value, vector in zip(values[kept], vectors.T[kept], strict=True)
        ]

    def _owned_squares(self, matrix: Array, factor: Monomial) -> list[Square]:
        """``P = Σ_b r_b r_bᵀ`` with ``r_b`` the rows of ``P^½``: one per label, ``√m e_b`` where P is diagonal."""
        values, vectors, kept = _eigenpairs(matrix)
        if (values[kept] < 0).any():
            raise ModelError(f"`{self.name}.mass` has a negative eigenvalue: no motion has a negative kinetic energy")
        root = (vectors[:, kept] * np.sqrt(values[kept])) @ vectors[:, kept].T
        return [
            Square(label, "x", factor, self._row(row))
            for label, row in zip(self.labels, root, strict=True)
            if row.any()
        ]

    def _row(self, vector: Array) -> Row:
        return {f"{label}.x": (Monomial(float(v)),) for label, v in zip(self.labels, vector, strict=True) if v}


def _eigenpairs(matrix: Array) -> tuple[Array, Array, NDArray[np.bool_]]:
    """Eigenvalues and vectors, those of a diagonal matrix without rounding, and which are not zero."""
    if np.count_nonzero(matrix - np.diag(np.diag(matrix))) == 0:
        values, vectors = np.diag(matrix), np.eye(len(matrix))
    else:
        values, vectors = np.linalg.eigh(matrix)
    return values, vectors, np.abs(values) > NULL * len(matrix) * np.abs(values).max(initial=0.0)
