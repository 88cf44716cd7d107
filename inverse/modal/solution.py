"""Undamped modes of a batch of builds.

Symbols
-------
K, M     stiffness and mass, ``K φ_j = λ_j M φ_j``, ``φ_iᵀ M φ_j = δ_ij``, ``ω_j² = λ_j``
w, R     weights and rows of the squares of K: ``K = Rᵀ diag(w) R``
L        Cholesky factor of M
E        strains ``R Φ``

Three steps of growing cost are taken as the spread ``λ_max/λ_min`` asks for them. An eigenvalue of the
assembled pencil is in error by ``ε λ_max``; the Rayleigh quotient taken on the squares,
``Σ w (Rφ)²``, brings that to ``ε² λ_max²/λ``; beyond that the singular values of ``diag(√w) R L⁻ᵀ`` are
computed by one-sided Jacobi rotations [1]_, which never form K. What is left is the error that the
rounded weights themselves carry.

References
----------
.. [1] Z. Drmač and K. Veselić, "New fast and accurate Jacobi SVD algorithm: I", SIAM J. Matrix Anal.
   Appl. 29(4), 2008, pp. 1322-1342 (LAPACK's ``dgejsv``).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.linalg as sl
import scipy.sparse as sp
import scipy.sparse.linalg as spla
from numpy.typing import NDArray

from inverse.assembly.terms import Array
from inverse.errors import ModelError
from inverse.matrices.stack import Matrices, Stack
from inverse.modal.rigid import count_rigid

REFINED_SPREAD = 1e3
"""From this λ_max/λ_min on eigenvalues are refined on the squares (error 2e-13 without)."""

FACTORED_SPREAD = 1e8
"""From here on the refinement itself is too coarse (2e-8 squared) and the factored form takes over."""

SPARSE_SIZE = 800
"""From this many coordinates on, and where few modes are wanted, the matrices are kept sparse."""

SPARSE_SHARE = 0.1
"""Few: at most this share of all modes."""

UNSTABLE = 1e-9
"""A negative λ beyond this share of the smallest positive one is no rounding: the rest is unstable."""


@dataclass(frozen=True)
class ModalSolution:
    """``r`` modes of each of ``B`` builds in ascending order, the rigid ones first and exactly zero.

    Attributes
    ----------
    eigenvalues : ndarray, shape (B, r)
        ``λ`` [rad²/s²]; NaN for a build without modes (no rest position, mass not positive).
    shapes : ndarray, shape (B, n, r)
        Mass-normalised ``φ_j`` in the coordinates of the model.
    rigid : int
        Number of rigid modes.
    stable : ndarray of bool, shape (B,)
        Whether the rest position is one of stable equilibrium.
    """

    eigenvalues: Array
    shapes: Array
    rigid: int
    stable: NDArray[np.bool_]

    @property
    def complete(self) -> bool:
        """Whether all modes are there."""
        n, r = self.shapes.shape[1:]
        return bool(n == r)

    @property
    def frequencies(self) -> Array:
        """Frequencies of the oscillating modes, shape (B, r − rigid) [Hz]."""
        with np.errstate(invalid="ignore"):
            return np.asarray(np.sqrt(self.eigenvalues[:, self.rigid :]) / (2 * np.pi))


def solve_modes(matrices: Matrices, wanted: int | None = None, rigid: int | None = None) -> ModalSolution:
    """Modes of a batch of builds.

    Parameters
    ----------
    matrices : Matrices
        Builds at rest.
    wanted : int, optional
        How many oscillating modes from the lowest are needed; None for all. More may come back.
    rigid : int, optional
        Number of rigid modes where it is known; by default counted on the first sound build.

    Raises
    ------
    ModelError
        If a coordinate has no mass.
    """
    _refuse_massless(matrices)
    if rigid is None:
        sound = np.flatnonzero(np.isfinite(matrices.a).all(axis=1))
        b = int(sound[0]) if len(sound) else 0
        rigid = count_rigid(matrices.stiffness.sparse_rows(b), matrices.stiffness.weights[b]) if len(sound) else 0
    n = matrices.model.size
    if wanted is not None and n >= SPARSE_SIZE and wanted + rigid <= SPARSE_SHARE * n:
        return _stacked([_solve_sparse(matrices, b, wanted, rigid) for b in range(matrices.point.builds)], rigid)
    return _solve_dense(matrices, rigid)


def _refuse_massless(matrices: Matrices) -> None:
    squares = matrices.model.mass
    massless = set(range(squares.size)) - set(squares.entry_column.tolist())
    if massless:
        name = matrices.model.coordinates[min(massless)]
        raise ModelError(f"`{name}` has no mass: give its body a mass, or its rods a density")


def _solve_dense(matrices: Matrices, rigid: int) -> ModalSolution:
    K = matrices.stiffness.matrix()
    with np.errstate(invalid="ignore", divide="ignore"):
        back, sound = _whitening(matrices.mass)
    lost = ~(np.isfinite(K).all((1, 2)) & sound)
    if lost.any():
        K[lost], back[lost] = np.eye(K.shape[1]), np.eye(K.shape[1]) if back.ndim == 3 else 1.0
    A = back[:, :, None] * K * back[:, None, :] if back.ndim == 2 else np.swapaxes(back, 1, 2) @ K @ back
    values, vectors = np.linalg.eigh(A)
    shapes = back[:, :, None] * vectors if back.ndim == 2 else back @ vectors
    values, stable = _ordered(values, rigid)
    _refine(matrices, values, shapes, rigid, stable & ~lost)
    values[lost], stable[lost] = np.nan, False
    return ModalSolution(values, np.asarray(shapes), rigid, stable)


def _whitening(mass: Stack) -> tuple[Array, NDArray[np.bool_]]:
    """``L⁻ᵀ`` of each mass matrix, as a vector (B, n) where it is diagonal; and which are positive definite."""
    if (diagonal := mass.diagonal()) is not None:
        return 1 / np.sqrt(diagonal), np.asarray(np.isfinite(diagonal).all(1) & (diagonal > 0).all(1))
    M = mass.matrix()
    n, diagonal = M.shape[1], np.einsum("bii->bi", M)
    sound: NDArray[np.bool_] = np.isfinite(M).all((1, 2)) & (diagonal > 0).all(1)
    scale = np.sqrt(np.where(sound[:, None], diagonal, 1.0))
    scaled = np.where(sound[:, None, None], M / (scale[:, :, None] * scale[:, None, :]), np.eye(n))
    try:
        L = np.linalg.cholesky(scaled)
    except np.linalg.LinAlgError:
        for b in range(len(M)):
            if np.linalg.eigvalsh(scaled[b])[0] <= n * np.finfo(float).eps:
                sound[b], scaled[b] = False, np.eye(n)
        L = np.linalg.cholesky(scaled)
    return np.swapaxes(np.linalg.inv(L), 1, 2) / scale[:, :, None], sound


def _ordered(values: Array, rigid: int) -> tuple[Array, NDArray[np.bool_]]:
    """Rigid eigenvalues set to zero; stable where nothing negative is left.

    With a negative eigenvalue the order would put it among the rigid ones, so those are the `rigid`
    smallest in size only where the rest is stable.
    """
    smallest = values[:, 0] if values.shape[1] else np.zeros(len(values))
    reference = values[:, rigid] if values.shape[1] > rigid else np.ones(len(values))
    rounding = 64 * np.finfo(float).eps * np.abs(values).max(axis=1, initial=0.0)
    stable = (reference > 0) & (smallest >= -np.maximum(UNSTABLE * reference, rounding))
    values[:, :rigid] = np.where(stable[:, None], 0.0, values[:, :rigid])
    return values, stable


def _refine(matrices: Matrices, values: Array, shapes: Array, rigid: int, stable: NDArray[np.bool_]) -> None:
    """Bring eigenvalues to the accuracy of the squares where the spread asks for it, in place."""
    if values.shape[1] <= rigid:
        return
    spread = values[:, -1] / np.where(stable, np.maximum(values[:, rigid], 1e-300), 1.0)
    coarse = (spread > REFINED_SPREAD) | ~stable
    if coarse.any():
        stiffness = matrices.stiffness
        quotient = np.einsum("bt,btj->bj", stiffness.weights, stiffness.strains(shapes) ** 2)
        chosen = coarse & stable & (spread <= FACTORED_SPREAD)
        values[chosen, rigid:] = quotient[chosen, rigid:]
    for b in np.flatnonzero((spread > FACTORED_SPREAD) & np.isfinite(spread)):
        factored = _solve_factored(matrices, int(b), rigid)
        if factored is not None:
            values[b], shapes[b], stable[b] = factored


def _solve_factored(matrices: Matrices, b: int, rigid: int) -> tuple[Array, Array, bool] | None:
    """Modes of one build from singular values; None where the mass matrix has no factor."""
    R, w = matrices.stiffness.rows[b], matrices.stiffness.weights[b]
    back, sound = _whitening(matrices.mass.only(b))
    if not sound[0]:
        return None
    back = np.diag(back[0]) if back.ndim == 2 else back[0]
    up, down = w > 0, w < 0
    omega, V = _singular(np.sqrt(w[up])[:, None] * (R[up] @ back))
    if down.any():
        return _with_negative(omega, V, np.sqrt(-w[down])[:, None] * (R[down] @ back @ V), rigid, back)
    omega[:rigid] = 0.0
    return omega**2, back @ V, True


def _singular(A: Array) -> tuple[Array, Array]:
    """Singular values ascending and right vectors, to high relative accuracy."""
    rows, n = A.shape
    if rows < n:
        A = np.vstack([A, np.zeros((n - rows, n))])
    s, _, V, work, _, info = sl.lapack.dgejsv(A, joba=2, jobu=3, jobv=0, jobr=0, jobt=0, jobp=0)
    if info != 0:
        raise np.linalg.LinAlgError("one-sided Jacobi rotations did not converge")
    return np.asarray(s * work[0] / work[1])[::-1].copy(), np.asarray(V)[:, ::-1].copy()


def _with_negative(omega: Array, V: Array, N: Array, rigid: int, back: Array) -> tuple[Array, Array, bool] | None:
    """Take negative squares off: ``diag(ω²) − NᵀN = Ω(I − Ω⁻¹NᵀNΩ⁻¹)Ω``, again a product of factors."""
    N = N.copy()
    N[:, :rigid] = 0.0
    live = slice(rigid, None)
    if not (omega[live] > 0).all():
        return None
    scaled = N[:, live] / omega[live]
    try:
        C = np.linalg.cholesky(np.eye(scaled.shape[1]) - scaled.T @ scaled)
    except np.linalg.LinAlgError:
        return None
    inner, W = _singular(C.T * omega[live])
    values = np.concatenate([np.zeros(rigid), inner**2])
    shapes = np.hstack([V[:, :rigid], V[:, live] @ W])
    return values, back @ shapes, True


def _stacked(single: list[tuple[Array, Array, bool]], rigid: int) -> ModalSolution:
    values, shapes, stable = zip(*single, strict=True)
    return ModalSolution(np.stack(values), np.stack(shapes), rigid, np.array(stable))


def _solve_sparse(matrices: Matrices, b: int, wanted: int, rigid: int) -> tuple[Array, Array, bool]:
    """Lowest modes of one build by shift-and-invert Lanczos, refined on the squares, counted by inertia."""
    K, M = matrices.stiffness.sparse_matrix(b), matrices.mass.sparse_matrix(b)
    diagonal = sp.csc_array(sp.diags_array(M.diagonal()))
    if (M - diagonal).count_nonzero() == 0:
        back = sp.diags_array(1 / np.sqrt(M.diagonal()))
        A, B = sp.csc_array(back @ K @ back), None
    else:
        back, A, B = sp.eye_array(M.shape[0]), K, M
    top = float((K.diagonal() / M.diagonal()).max())
    sigma = -1e-10 * top if rigid else 0.0
    count = wanted + rigid
    values, vectors = _lanczos(A, B, sigma, count)
    shapes = back @ vectors
    stretch = matrices.stiffness.sparse_rows(b) @ shapes
    quotient = matrices.stiffness.weights[b] @ stretch**2
    order = np.argsort(quotient)
    values, shapes = quotient[order], np.asarray(shapes)[:, order]
    rounding = 64 * np.finfo(float).eps * top
    stable = bool(values[0] >= -rounding and (values[rigid:] > 0).all())
    values[:rigid] = 0.0
    return values, shapes, stable


def _lanczos(A: sp.csc_array, B: sp.csc_array | None, sigma: float, count: int) -> tuple[Array, Array]:
    """`count` eigenpairs above the shift, none left out: as many as there are negative pivots beyond the last.

    One pair more than asked tells where the next one lies; a pair that Lanczos missed shows as a pivot
    too many, and the search is widened.
    """
    identity = sp.eye_array(A.shape[0], format="csc") if B is None else B
    inverse = _factor(sp.csc_array(A - sigma * identity))
    operator = spla.LinearOperator(A.shape, matvec=inverse.solve, dtype=float)
    start = np.random.default_rng(0).standard_normal(A.shape[0])
    size = count + 1
    while True:
        values, vectors = spla.eigsh(A, k=size, M=B, sigma=sigma, OPinv=operator, v0=start, tol=1e-12)
        between = np.sqrt(max(values[-1], 0.0) * max(values[-2], 0.0)) or values[-1] / 2
        below = negative_pivots(sp.csc_array(A - between * identity))
        if below <= int(np.sum(values < between)) or size >= A.shape[0] - 2:
            return values[:count], vectors[:, :count]
        size = below + 1


def _factor(matrix: sp.csc_array) -> spla.SuperLU:
    """Symmetric sparse factors with pivots on the diagonal."""
    return spla.splu(matrix, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True})


def negative_pivots(matrix: sp.csc_array) -> int:
    """Sylvester's inertia: eigenvalues of the pencil below the shift."""
    factors = _factor(matrix)
    return int(np.sum(factors.U.diagonal() < 0))
