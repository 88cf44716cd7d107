"""Second derivatives of eigenvalues, for simple ones and for the mean of a cluster.

Symbols: ``G_p = ∂K/∂p − λ ∂M/∂p``, ``c`` the members of the cluster, ``i`` the modes outside it. Twice differentiating
``K φ = λ M φ`` and projecting leaves, summed over the cluster [1]_::

    Σ λ_pq = Σ_c φᵀ(K_pq − λ M_pq)φ − tr(G_p^c M_q^c + G_q^c M_p^c) + 2 Σ_c Σ_i (φ_iᵀG_pφ_c)(φ_iᵀG_qφ_c)/(λ_c − λ_i)

The gaps that divide are those to modes outside the cluster.

References
----------
.. [1] M. I. Friswell, "The derivatives of repeated eigenvalues and their associated eigenvectors", J. Vib.
   Acoust. 118(3), 1996, pp. 390-397 (the simple case goes back to Plaut and Huseyin, AIAA J. 11, 1973).
"""

from __future__ import annotations

import numpy as np
import scipy.sparse as sp

from inverse.assembly.terms import Array, add_at
from inverse.errors import ModelError
from inverse.matrices.stack import Matrices, Stack
from inverse.modal.sensitivity import clustered, to_dimensions
from inverse.modal.solution import ModalSolution


def second_derivatives(matrices: Matrices, modes: ModalSolution, j: int) -> tuple[Array, Array]:
    """Gradient and Hessian of the mean eigenvalue of the cluster of mode ``j``.

    Parameters
    ----------
    matrices, modes
        One build with all its modes.
    j : int
        Position among all modes.

    Returns
    -------
    gradient : ndarray, shape (D,)
    hessian : ndarray, shape (D, D)
        Over base dimensions in local coordinates (logarithms of positive ones) [rad²/s²].

    Raises
    ------
    ModelError
        If the modes are not complete: each of them enters the Hessian.
    """
    if not modes.complete:
        raise ModelError("second derivatives need all modes of the assembly")
    lam, members = modes.eigenvalues[0], np.flatnonzero(clustered(modes.eigenvalues[0])[j])
    outside = np.setdiff1d(np.arange(len(lam)), members)
    mean = float(lam[members].mean())
    total = np.zeros((len(matrices.model.parameters.dimensions),) * 2)
    gradient = np.zeros(len(total))
    by_monomial = np.zeros(len(matrices.model.monomials))
    curvature = sp.csr_array((len(by_monomial),) * 2)
    G, Mc = [], []
    for member in members:
        stiffness = _cross_forms(matrices, matrices.stiffness, modes, int(member))
        mass = _cross_forms(matrices, matrices.mass, modes, int(member))
        cross = stiffness - mean * mass
        total += 2 * (cross[outside].T / (mean - lam[outside])) @ cross[outside]
        gradient += cross[member]
        G.append(cross[members])
        Mc.append(mass[members])
        shape = modes.shapes[0, :, member]
        for stack, factor in ((matrices.stiffness, 1.0), (matrices.mass, -mean)):
            slope, bend = _quadratic(stack, shape, len(by_monomial))
            by_monomial += factor * slope
            curvature = curvature + factor * bend
    mixed = np.einsum("abp,baq->pq", np.array(G), np.array(Mc))
    total += _through_dimensions(matrices, by_monomial, curvature) - mixed - mixed.T
    return gradient / len(members), total / len(members)


def _cross_forms(matrices: Matrices, stack: Stack, modes: ModalSolution, j: int) -> Array:
    """``φ_iᵀ (∂S/∂p) φ_j`` for all modes i and base dimensions p, shape (r, D)."""
    squares, shapes = stack.squares, modes.shapes[0]
    E, w = stack.strains(modes.shapes)[0], stack.weights[0]
    out = np.zeros((1, shapes.shape[1], len(matrices.model.monomials)))
    add_at(out, squares.weight, (E * E[:, [j]]).T[None])
    varying = stack.varying
    row, column = squares.entry_row[varying], squares.entry_column[varying]
    slope = w[row, None] * (E[row] * shapes[column, j, None] + E[row, j, None] * shapes[column])
    add_at(out, squares.entry[varying], slope.T[None])
    return np.asarray(to_dimensions(matrices, out)[0])


def _quadratic(stack: Stack, shape: Array, monomials: int) -> tuple[Array, sp.csr_array]:
    """First and second derivatives of ``φᵀ S φ`` over monomials, ``φ`` held."""
    squares, w = stack.squares, stack.weights[0]
    strain = stack.sparse_rows() @ shape
    gradient = np.zeros(monomials)
    np.add.at(gradient, squares.weight, strain**2)
    entries = stack.varying
    row, lever = squares.entry_row[entries], shape[squares.entry_column[entries]]
    np.add.at(gradient, squares.entry[entries], 2 * w[row] * strain[row] * lever)
    # A square w e², e = Σ v φ: w with v gives 2 e φ, and v with v gives 2 w φ φ.
    place, weight = squares.entry[entries], squares.weight[row]
    crossed = sp.csr_array((2 * strain[row] * lever, (weight, place)), shape=(monomials, monomials))
    spread = sp.csr_array((lever, (row, place)), shape=(len(squares), monomials))
    return gradient, sp.csr_array(crossed + crossed.T + spread.T @ sp.diags_array(2 * w) @ spread)


def _through_dimensions(matrices: Matrices, by_monomial: Array, curvature: sp.csr_array) -> Array:
    """Second derivatives over base dimensions of a function of monomials with this gradient and Hessian.

    The dependent dimensions ``y(z)`` bend too: with ``μ = G_y⁻ᵀ ∂f/∂y`` the whole is ``Tᵀ(f'' − Σ μ_s G_s'')T``, ``T``
    the derivative of all dimensions over the base ones.
    """
    model, point = matrices.model, matrices.point
    J = model.monomials.jacobian(point, matrices.a)
    second = sp.csr_array(J.T @ curvature @ J) + model.monomials.second(point, by_monomial)
    base = len(model.parameters.dimensions)
    if not len(model.dependents):
        return np.asarray(second.toarray())
    slopes = matrices.rest
    identity = np.eye(len(model.names))[None]
    T = slopes.pull(identity)[0]
    first = (J.T @ by_monomial)[base:]
    adjoint = slopes.solve_adjoint(first[None, None])[0, 0]
    vanishing = model.dependents.vanishing
    weights = np.zeros(len(model.dependents.table))
    np.add.at(weights, vanishing.term, adjoint[vanishing.place])
    second = second - model.dependents.table.second(point, weights)
    return np.asarray(T.T @ (second @ T))
