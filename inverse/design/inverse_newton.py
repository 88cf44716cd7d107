"""Newton's method for an affine family of pencils with given eigenvalues, repeated ones among them.

Symbols
-------
K(c), M(c)  ``K_0 + Σ_k c_k K_k`` and ``M_0 + Σ_k c_k M_k``, symmetric, M(c) positive definite
c           the unknowns, shape (p,)
λ*_i        the targets, eigenvalues of ``K φ = λ M φ``
Q           its eigenvectors so far, ``Qᵀ M Q = I``, those of the targets first
W           ``Qᵀ K Q``
Y           skew-symmetric; ``e^Y`` turns Q into the eigenvectors

Method III of [1]_ with its extension to repeated eigenvalues: at the solution ``e^(−Y) W e^Y = Λ*`` for some Y, to
first order ``W = Λ* + Y Λ* − Λ* Y``. Within a group of equal targets this says

    ``q_iᵀ (K(c) − λ* M(c)) q_j = 0,   i ≤ j``,

linear equations for c in which no gap is divided by; a target that is asked for t times gives t (t + 1)/2 of them.
Between groups it gives ``y_ij = w_ij/(λ_j − λ_i)``, and Q is turned by the Cayley transform, ``(I + Y/2)(I − Y/2)⁻¹``.
Convergence is quadratic from a start that is near enough, also where targets repeat. What is added here:

- where fewer eigenvalues are asked for than there are, the rest of Q is turned to diagonalise W on its own span
  (Rayleigh and Ritz), whose values stand in for the missing targets;
- where M changes with c, Q is made orthonormal in the new M before it is turned;
- no two columns are turned by more than a right angle.

References
----------
.. [1] S. Friedland, J. Nocedal and M. L. Overton, "The formulation and analysis of numerical methods for inverse
   eigenvalue problems", SIAM Journal on Numerical Analysis 24(3), 1987, pp. 634-667 (from memory).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Self

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.linalg import eigh, solve_triangular

from inverse.errors import DesignError

Array = NDArray[np.float64]

REPEATED_RTOL = 1e-9
"""Targets closer than this share of the greatest one are one target, asked for several times."""

RESIDUAL_RTOL = 1e-12
"""Converged when ``Qᵀ K Q`` is ``Λ*`` to this share of the greatest eigenvalue: some thousand roundings of it."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class InverseEigenvalues:
    """The unknowns, the eigenvalues they give, and how the iteration went."""

    unknowns: Array
    """c, shape (p,), in the units the family was given in."""
    targets: Array
    """λ*, ascending."""
    achieved: Array
    """Eigenvalues at `unknowns` in the places asked for, ascending."""
    converged: bool
    """Whether the targets are eigenvalues in the places asked for."""
    message: str
    """How it ended, in words."""
    residuals: tuple[float, ...]
    """Greatest entry of ``Qᵀ K Q − Λ*`` after each step, as a share of the greatest eigenvalue."""
    condition: float
    """Condition of the last step's equations, scaled to rows and columns of equal size; large: the unknowns do
    not act separately on the targets."""

    @property
    def steps(self) -> int:
        """Newton steps taken."""
        return len(self.residuals)

    def require_success(self) -> Self:
        """Return the result itself, or raise with the reason.

        Raises
        ------
        DesignError
            If the targets are not reached.
        """
        if self.converged:
            return self
        raise DesignError(self.message)


def solve_inverse_eigenvalues(
    stiffness: ArrayLike,
    targets: ArrayLike,
    start: ArrayLike,
    *,
    mass: ArrayLike | None = None,
    places: Sequence[int] | None = None,
    max_steps: int = 30,
) -> InverseEigenvalues:
    """The member of an affine family ``K(c) φ = λ M(c) φ`` that has the eigenvalues asked for.

    Not converging is a result, with its reason. The unknowns are not kept within any range.

    Parameters
    ----------
    stiffness : array_like, shape (p + 1, n, n)
        K_0, K_1, …, K_p, symmetric.
    targets : array_like, shape (r,)
        λ* in any order, r ≤ n.
    start : array_like, shape (p,)
        c to start from.
    mass : array_like, shape (p + 1, n, n) or (n, n), optional
        M_0, M_1, …, M_p, or one constant M; the identity by default.
    places : sequence of int, optional
        Places, from 0, that the ascending targets take among the ascending eigenvalues; default the r lowest.
    max_steps : int
        Newton steps at most.

    Raises
    ------
    ValueError
        If shapes do not fit, a matrix is not symmetric, M is not positive definite at the start, or the number of
        unknowns is not that of the equations: one for each target, t (t + 1)/2 for one that is asked for t times.
    """
    family = _Family.read(stiffness, mass)
    lam = np.sort(np.asarray(targets, dtype=float))
    c = np.asarray(start, dtype=float)
    chosen = _places(places, len(lam), family.size)
    groups = _groups(lam)
    _require_square(lam, groups, c, family)
    return _iterate(family, lam, groups, chosen, c, max_steps)


@dataclass(frozen=True, slots=True)
class _Family:
    """K_0 … K_p and M_0 … M_p, each (p + 1, n, n)."""

    stiffness: Array
    mass: Array

    @classmethod
    def read(cls, stiffness: ArrayLike, mass: ArrayLike | None) -> _Family:
        K = np.asarray(stiffness, dtype=float)
        if K.ndim != 3 or K.shape[1] != K.shape[2]:
            raise ValueError(f"`stiffness`: expected the matrices K_0, …, K_p, shape (p + 1, n, n), found {K.shape}")
        M = np.eye(K.shape[1]) if mass is None else np.asarray(mass, dtype=float)
        if M.shape == K.shape[1:]:
            M = np.concatenate([M[None], np.zeros_like(K[1:])])
        if M.shape != K.shape:
            raise ValueError(f"`mass`: expected the shape of `stiffness`, {K.shape}, or {K.shape[1:]}, found {M.shape}")
        for name, stack in (("stiffness", K), ("mass", M)):
            skew = np.abs(stack - stack.mT).max(axis=(1, 2))
            # Rounding of a product such as BᵀB; more is a mistake.
            for k in np.flatnonzero(~(skew <= 1e-12 * np.abs(stack).max(axis=(1, 2)))):
                raise ValueError(f"`{name}`: matrix {k} is not finite and symmetric: entries differ by {skew[k]:.3g}")
        return cls(K, M)

    @property
    def size(self) -> int:
        return len(self.stiffness[0])

    def at(self, c: Array) -> tuple[Array, Array]:
        """K(c) and M(c)."""
        weights = np.concatenate([[1.0], c])
        return np.tensordot(weights, self.stiffness, 1), np.tensordot(weights, self.mass, 1)


def _places(places: Sequence[int] | None, r: int, n: int) -> NDArray[np.intp]:
    chosen = np.arange(r) if places is None else np.sort(np.asarray(places, dtype=np.intp))
    if len(chosen) != r or r > n or len(set(chosen.tolist())) < r or np.any((chosen < 0) | (chosen >= n)):
        raise ValueError(
            f"`places`: expected {r} different places from 0 to {n - 1}, one for each target, found {places}"
            if places is not None
            else f"`targets`: expected at most {n}, the number of eigenvalues, found {r}"
        )
    return chosen


def _groups(lam: Array) -> NDArray[np.intp]:
    """The number of the group of equal targets that each belongs to."""
    if lam.ndim != 1 or lam.size == 0 or not np.all(np.isfinite(lam)):
        raise ValueError(f"`targets`: expected a list of eigenvalues, found {lam}")
    return np.concatenate([[0], np.cumsum(np.diff(lam) > REPEATED_RTOL * np.abs(lam).max())])


def _require_square(lam: Array, groups: NDArray[np.intp], c: Array, family: _Family) -> None:
    unknowns = len(family.stiffness) - 1
    if c.shape != (unknowns,) or not np.all(np.isfinite(c)):
        raise ValueError(f"`start`: expected {unknowns} finite numbers, one for each matrix after the first, found {c}")
    times = np.bincount(groups).tolist()
    equations = sum(t * (t + 1) // 2 for t in times)
    if equations != unknowns:
        repeated = "".join(
            f", {lam[groups == g][0]:.9g} asked for {t} times counting as {t * (t + 1) // 2}"
            for g, t in enumerate(times)
            if t > 1
        )
        raise ValueError(
            f"expected as many unknowns as equations, found {unknowns} unknowns and {equations} equations from "
            f"{len(lam)} targets{repeated}; free or fix unknowns, or ask for more or fewer eigenvalues"
        )


def _iterate(
    family: _Family, lam: Array, groups: NDArray[np.intp], chosen: NDArray[np.intp], c: Array, max_steps: int
) -> InverseEigenvalues:
    try:
        Q = eigh(*family.at(c))[1]
    except np.linalg.LinAlgError:
        raise ValueError("the mass matrix is not positive definite at `start`") from None
    Q = np.hstack([Q[:, chosen], np.delete(Q, chosen, axis=1)])
    residuals: list[float] = []
    condition = np.nan
    message = f"No convergence in {max_steps} steps: start nearer, or ask for less of a change."
    while len(residuals) < max_steps:
        system, rhs = _equations(family, Q, lam, groups)
        following, condition = _solve_scaled(system, rhs)
        if not condition < 1 / np.finfo(float).eps:
            message = "The unknowns do not act separately on the targets: the equations of a step are singular."
            break
        K, M = family.at(following)
        try:
            Q, residual = _turned(Q, K, M, lam, groups)
        except np.linalg.LinAlgError:
            message = "A step led to a mass matrix that is not positive definite: start nearer."
            break
        c = following
        residuals.append(residual)
        if residual <= RESIDUAL_RTOL:
            message = (
                f"Converged to another place: the targets are eigenvalues, but not numbers {(chosen + 1).tolist()} "
                "in ascending order; start nearer, or ask for other places."
            )
            break
    return _judged(family, lam, chosen, c, tuple(residuals), condition, message)


def _equations(family: _Family, Q: Array, lam: Array, groups: NDArray[np.intp]) -> tuple[Array, Array]:
    """``q_iᵀ (K(c) − λ* M(c)) q_j = 0`` for i ≤ j within each group, as a system in c."""
    i, j = np.nonzero(np.triu(groups[:, None] == groups))
    target = (np.bincount(groups, lam) / np.bincount(groups))[groups[i]]
    terms = np.sum(Q[:, i] * (family.stiffness @ Q[:, j] - family.mass @ (target * Q[:, j])), axis=1)
    return terms[1:].T, -terms[0]


def _solve_scaled(system: Array, rhs: Array) -> tuple[Array, float]:
    """Solution and condition number, unknowns and equations scaled to size one first."""
    columns = np.abs(system).max(axis=0)
    columns = np.where(columns > 0, columns, 1.0)
    rows = np.abs(system / columns).max(axis=1)
    rows = np.where(rows > 0, rows, 1.0)
    U, s, Vt = np.linalg.svd(system / columns / rows[:, None])
    if s[-1] == 0:
        return np.zeros_like(rhs), np.inf
    return Vt.T @ (U.T @ (rhs / rows) / s) / columns, float(s[0] / s[-1])


def _turned(Q: Array, K: Array, M: Array, lam: Array, groups: NDArray[np.intp]) -> tuple[Array, float]:
    """Q turned towards the eigenvectors of (K, M), and what is left to do."""
    r, n = len(lam), len(Q)
    Q = np.array(solve_triangular(np.linalg.cholesky(Q.T @ M @ Q), Q.T, lower=True).T, dtype=float)
    rest, turn = np.linalg.eigh(Q[:, r:].T @ K @ Q[:, r:])
    Q[:, r:] = Q[:, r:] @ turn
    label = np.concatenate([groups, np.full(n - r, -1)])
    values = np.concatenate([lam, rest])
    apart = label[:, None] != label
    gap = values - values[:, None]
    W = np.where(apart & (gap != 0), Q.T @ K @ Q, 0.0)
    half = np.clip(0.5 * W / np.where(W == 0, 1.0, gap), -1.0, 1.0)  # half = tan(angle/2)
    half = 0.5 * (half - half.T)
    # (I − Y/2)ᵀ = I + Y/2
    turned = np.asarray(np.linalg.solve(np.eye(n) + half, (Q @ (np.eye(n) + half)).T).T, dtype=float)
    left = turned.T @ K @ turned[:, :r] - np.eye(n, r) * lam
    return turned, float(np.abs(left).max() / (np.abs(values).max() or 1.0))


def _judged(
    family: _Family,
    lam: Array,
    chosen: NDArray[np.intp],
    c: Array,
    residuals: tuple[float, ...],
    condition: float,
    message: str,
) -> InverseEigenvalues:
    """The result, judged by the eigenvalues at c and not by the iteration's own account."""
    values = eigh(*family.at(c), eigvals_only=True)
    achieved = values[chosen]
    # Some eigenvalues lie within √2 |left|_F of the targets (W. Kahan, 1967; from memory), and |left|_F within n times
    # its greatest entry.
    near = bool(np.abs(achieved - lam).max() <= 2 * len(values) * RESIDUAL_RTOL * np.abs(values).max())
    if near:
        message = f"Converged in {len(residuals)} steps."
    return InverseEigenvalues(
        unknowns=c,
        targets=lam,
        achieved=achieved,
        converged=near,
        message=message,
        residuals=residuals,
        condition=condition,
    )
