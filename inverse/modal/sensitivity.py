"""Exact derivatives of modes, as the way back from modes to the monomials of the terms.

Symbols
-------
φ, λ     mode shapes (mass-normalised) and eigenvalues
Γ, Δ     derivatives of some value with respect to ``ΦᵀKΦ`` and ``ΦᵀMΦ``, ``Φ`` held
w, R, E  weights, rows and strains ``E = RΦ`` of the squares

Every derivative passes through Γ and Δ. For an eigenvalue they are the classical ``dλ = φᵀ(dK − λ dM)φ`` [1]_; for a
shape ``dφ_j = Σ_i φ_i φ_iᵀ(dK − λ_j dM)φ_j/(λ_j − λ_i) − ½ φ_j φ_jᵀ dM φ_j``. Within a cluster the shapes are
arbitrary, a value that is well defined does not depend on how they turn among themselves, and the
quotient is left out: nothing is ever divided by a vanishing gap.

References
----------
.. [1] R. L. Fox and M. P. Kapoor, "Rates of change of eigenvalues and eigenvectors", AIAA Journal 6(12),
   1968, pp. 2426-2429.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import scipy.sparse as sp
import scipy.sparse.linalg as spla

from inverse.assembly.terms import Array, IntArray, add_at
from inverse.errors import ModelError
from inverse.matrices.stack import Matrices, Stack
from inverse.modal.solution import ModalSolution

CLUSTER = 1e-9
"""Frequencies that agree to this share count as one."""


def clustered(eigenvalues: Array) -> np.ndarray:
    """Which pairs of modes have one frequency, shape (..., r, r)."""
    omega = np.sqrt(np.abs(eigenvalues))
    gap = np.abs(omega[..., :, None] - omega[..., None, :])
    return np.asarray(gap <= CLUSTER * np.maximum(omega[..., :, None], omega[..., None, :]))


def pull_eigenvalues(matrices: Matrices, modes: ModalSolution, cotangent: Array, out: Array) -> None:
    """Add derivatives with respect to the monomials of ``λ``-derivatives (B, k, r) to `out` (B, k, N)."""
    _pull_diagonal(matrices.stiffness, modes.shapes, cotangent, out)
    _pull_diagonal(matrices.mass, modes.shapes, -cotangent * np.nan_to_num(modes.eigenvalues)[:, None], out)


def _pull_diagonal(stack: Stack, shapes: Array, cotangent: Array, out: Array, chosen: IntArray | None = None) -> None:
    """``Σ_j γ_j d(φ_jᵀ S φ_j)`` over the squares (or the chosen ones) of one stack, ``φ`` held."""
    used = _used(cotangent)
    shapes, cotangent = shapes[:, :, used], cotangent[:, :, used]
    E = stack.strains(shapes)
    squares = stack.squares
    by_weight = cotangent @ np.swapaxes(E**2, 1, 2)
    if chosen is not None:
        outside = np.ones(len(squares), bool)
        outside[chosen] = False
        by_weight[:, :, outside] = 0.0
    add_at(out, squares.weight, by_weight)
    varying = _varying(stack, chosen)
    if len(varying):
        row, column = squares.entry_row[varying], squares.entry_column[varying]
        slope = 2 * stack.weights[:, row, None] * E[:, row] * shapes[:, column]
        add_at(out, squares.entry[varying], cotangent @ np.swapaxes(slope, 1, 2))


def pull_form(stack: Stack, shapes: Array, form: Array, out: Array, chosen: IntArray | None = None) -> None:
    """Add the derivatives of ``Σ Γ_ij φ_iᵀ S φ_j`` with ``φ`` held.

    Parameters
    ----------
    stack : Stack
        ``S``, or with `chosen` only some of its squares.
    shapes : ndarray, shape (B, n, r)
    form : ndarray, shape (B, k, r, r)
        ``Γ``; only its symmetric part counts.
    out : ndarray, shape (B, k, N)
        Derivatives with respect to the monomials, added to.
    """
    symmetric = (form + np.swapaxes(form, 2, 3)) / 2
    E, squares = stack.strains(shapes), stack.squares
    EG = E[:, None] @ symmetric
    by_weight = np.einsum("bkts,bts->bkt", EG, E)
    if chosen is not None:
        outside = np.ones(len(squares), bool)
        outside[chosen] = False
        by_weight[:, :, outside] = 0.0
    add_at(out, squares.weight, by_weight)
    varying = _varying(stack, chosen)
    if len(varying):
        row, column = squares.entry_row[varying], squares.entry_column[varying]
        slope = np.einsum("bkes,bes->bke", EG[:, :, row], shapes[:, column])
        add_at(out, squares.entry[varying], 2 * stack.weights[:, None, row] * slope)


def pull_owned(matrices: Matrices, modes: ModalSolution, chosen: IntArray, cotangent: Array, out: Array) -> Array:
    """Derivatives of ``φ_jᵀ M_b φ_j``: its own part into `out`, what passes through ``φ`` returned, (B, k, n, r)."""
    _pull_diagonal(matrices.mass, modes.shapes, cotangent, out, chosen)
    mass = matrices.mass
    E, w = mass.strains(modes.shapes)[:, chosen], mass.weights[:, chosen]
    through = 2 * np.swapaxes(mass.rows[:, chosen], 1, 2) @ (w[:, :, None] * E)
    return np.asarray(through[:, None] * cotangent[:, :, None, :])


def pull_shapes(matrices: Matrices, modes: ModalSolution, cotangent: Array, out: Array) -> None:
    """Add derivatives that pass through the mode shapes, (B, k, n, r), to `out` (B, k, N)."""
    if modes.complete:
        stiffness, mass = shape_forms(modes, cotangent)
        pull_form(matrices.stiffness, modes.shapes, stiffness, out)
        pull_form(matrices.mass, modes.shapes, mass, out)
        return
    if matrices.point.builds != 1:
        raise ModelError("shape derivatives from some of the modes are taken one build at a time")
    for k in range(cotangent.shape[1]):
        for j in np.flatnonzero(np.abs(cotangent[0, k]).max(axis=0)):
            _pull_shape_bordered(matrices, modes, int(j), cotangent[0, k, :, j], out[:, k : k + 1])


def shape_forms(modes: ModalSolution, cotangent: Array) -> tuple[Array, Array]:
    """``Γ, Δ`` of derivatives with respect to shapes, from all modes; (B, k, r, r) each."""
    along = np.swapaxes(modes.shapes, 1, 2)[:, None] @ cotangent
    values = np.nan_to_num(modes.eigenvalues)
    gap = values[:, None, :] - values[:, :, None]
    same = clustered(values)
    quotient = np.where(same, 0.0, 1.0 / np.where(same, 1.0, gap))
    stiffness = along * quotient[:, None]
    mass = -stiffness * values[:, None, None, :] - 0.5 * along * same[:, None]
    return stiffness, mass


def _pull_shape_bordered(matrices: Matrices, modes: ModalSolution, j: int, cotangent: Array, out: Array) -> None:
    """One shape of a large model: the adjoint of Nelson's bordered system, solved sparse.

    With ``[[K − λM, Mφ_c], [φ_cᵀM, 0]]`` bordered by the whole cluster of the mode, ``dφ_j`` is the solution for
    the load ``−(dK − λ dM)φ_j`` less ``½ φ_c φ_cᵀ dM φ_j``.
    """
    K, M = matrices.stiffness.sparse_matrix(), matrices.mass.sparse_matrix()
    lam, phi = float(modes.eigenvalues[0, j]), modes.shapes[0]
    cluster = phi[:, clustered(modes.eigenvalues[0])[j]]
    border = sp.csc_array(M @ cluster)
    scale = float(abs(K.diagonal()).max()) or 1.0
    system = sp.block_array([[(K - lam * M) / scale, border], [border.T, None]], format="csc")
    load = np.concatenate([cotangent, np.zeros(cluster.shape[1])])
    adjoint = spla.splu(system).solve(load)[: len(cotangent)] / scale
    pair = np.stack([adjoint, phi[:, j]], axis=1)[None]
    cross = np.array([[[[0.0, -1.0], [0.0, 0.0]]]])
    pull_form(matrices.stiffness, pair, cross, out)
    pull_form(matrices.mass, pair, -lam * cross, out)
    own = np.hstack([cluster, phi[:, [j]]])[None]
    form = np.zeros((1, 1, own.shape[2], own.shape[2]))
    form[0, 0, :-1, -1] = -0.5 * (cluster.T @ cotangent)
    pull_form(matrices.mass, own, form, out)


def _used(cotangent: Array) -> IntArray:
    """Modes that any derivative mentions; most objectives look at few."""
    return np.flatnonzero(np.abs(cotangent).reshape(-1, cotangent.shape[-1]).max(axis=0, initial=0.0))


def _varying(stack: Stack, chosen: IntArray | None) -> IntArray:
    """Entries of rows that depend on dimensions."""
    varying = stack.varying
    return varying if chosen is None else varying[np.isin(stack.squares.entry_row[varying], chosen)]


def to_dimensions(matrices: Matrices, by_monomial: Array, by_dimension: Array | None = None) -> Array:
    """From derivatives over monomials (B, k, N) to base dimensions (B, k, D), in local coordinates.

    `by_dimension`, (B, k, D + dependents), are derivatives taken with respect to dimensions directly.
    """
    total = matrices.model.monomials.pull(matrices.point, matrices.a, by_monomial)
    if by_dimension is not None:
        total = total + by_dimension
    return matrices.rest.pull(total)


def directional_derivatives(matrices: Matrices, modes: ModalSolution, j: int, directions: Array) -> Array:
    """Derivatives of all eigenvalues of the cluster of mode ``j`` along some directions, ascending.

    For a repeated eigenvalue these are the eigenvalues of ``Φ_cᵀ(K' − λM')Φ_c``; for a simple one the derivative.

    Parameters
    ----------
    matrices, modes
        One build.
    j : int
        Position of the mode among all.
    directions : ndarray, shape (s, D)
        Directions in local coordinates of the base dimensions.

    Returns
    -------
    ndarray, shape (s, size of the cluster)
    """
    members = np.flatnonzero(clustered(modes.eigenvalues[0])[j])
    forms = cluster_forms(matrices, modes, members)
    blocks = np.einsum("sd,ijd->sij", directions, forms)
    return np.asarray(np.linalg.eigvalsh(blocks))


def cluster_forms(matrices: Matrices, modes: ModalSolution, members: Sequence[int] | IntArray) -> Array:
    """``φ_iᵀ(∂K − λ̄ ∂M)φ_j`` for modes of one cluster over base dimensions, shape (c, c, D)."""
    shapes = modes.shapes[:, :, members]
    lam = float(modes.eigenvalues[0, members].mean())
    c = shapes.shape[2]
    units = np.eye(c * c).reshape(1, c * c, c, c)
    out = np.zeros((1, c * c, len(matrices.model.monomials)))
    pull_form(matrices.stiffness, shapes, units, out)
    pull_form(matrices.mass, shapes, -lam * units, out)
    return to_dimensions(matrices, out).reshape(c, c, -1)
