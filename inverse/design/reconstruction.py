"""Chains of masses and springs with a given spectrum, in closed form.

Symbols
-------
λ_j, μ_j   eigenvalues ω² [rad²/s²] of the chain, and of the chain with its near body held
w_j        ``φ_j1²/Σφ_j1²``, the share of mode j in the motion of the near body (``φᵀMφ = 1``)
m_i, k_i   masses [kg], and rates [N/m] of the springs between bodies i and i + 1; k_0, k_n go to the ground
J          ``M^(-1/2) K M^(-1/2)``, a Jacobi matrix
q_i, e_i   ``k_i/m_i``, ``k_i/m_(i+1)`` [rad²/s²]: ``J = RᵀR`` with R upper bidiagonal, squared entries q_i and e_i

The near body is the first one of the chain, the far body the last.

A chain is fixed, up to one common factor, by its spectrum and the spectrum with one end held, and exists exactly
if the two interlace, ``λ_1 < μ_1 < λ_2 < … < μ_(n-1) < λ_n`` [1]_ [2]_; a mirror-symmetric chain is fixed by its
spectrum alone [3]_. Either way the data give the shares w_j,

    ``w_j ∝ Π_i (μ_i − λ_j) / Π_(i≠j) (λ_i − λ_j)``        ``w_j ∝ 1 / |Π_(i≠j) (λ_i − λ_j)|`` (mirror) [4]_,

and J is the matrix of the recurrence of the polynomials orthogonal under the masses w_j at the points λ_j.
Orthogonalising [5]_ or building J point by point [6]_ gives the entries of J to the rounding of the largest of them.
Here the points are added from above, and not J but its factor R is carried along, in the manner of [7]_: in

1. the shift ``RᵀR + δ``, δ > 0, that brings the next point to zero (the differential stationary quotient-difference
   step), and
2. the new mass at zero, which leaves ``R Rᵀ`` as it is and adds a row and a column of zeros,

there is no subtraction but that of given numbers. So every q_i and e_i, and every mass and rate, which are sums of
products and quotients of them, keeps its relative accuracy, over however many orders of magnitude they spread.

References
----------
From memory, not looked up for this module: the formulas are derived above and under test.

.. [1] G. M. L. Gladwell, "Inverse Problems in Vibration", 2nd ed., Kluwer, 2004, chapters 3 and 4.
.. [2] H. Hochstadt, "On the construction of a Jacobi matrix from spectral data", Linear Algebra and its Applications 8,
   1974, pp. 435-446.
.. [3] H. Hochstadt, "On some inverse problems in matrix theory", Archiv der Mathematik 18, 1967, pp. 201-207.
.. [4] C. de Boor and G. H. Golub, "The numerically stable reconstruction of a Jacobi matrix from spectral data", Linear
   Algebra and its Applications 21, 1978, pp. 245-260.
.. [5] D. Boley and G. H. Golub, "A survey of matrix inverse eigenvalue problems", Inverse Problems 3, 1987,
   pp. 595-622.
.. [6] W. B. Gragg and W. J. Harrod, "The numerically stable reconstruction of Jacobi matrices from spectral data",
   Numerische Mathematik 44, 1984, pp. 317-335.
.. [7] D. P. Laurie, "Accurate recovery of recursion coefficients from Gaussian quadrature formulas", Journal of
   Computational and Applied Mathematics 112, 1999, pp. 165-180.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from typing import Self

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.linalg import eigh_tridiagonal

from inverse.errors import InverseError

Array = NDArray[np.float64]

FREE = (0.0, 0.0)
"""No spring to the ground at either end."""


class SpectrumError(InverseError, ValueError):
    """No chain has the spectrum or spectra asked for.

    `pair` holds the names of the two eigenvalues that stand in the way, such as ``("λ_2", "μ_2")``; empty where it is
    no matter of two.
    """

    def __init__(self, message: str, pair: tuple[str, ...] = ()) -> None:
        """Keep the pair beside the sentence."""
        self.pair = pair
        super().__init__(message)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Chain:
    """Masses in a row, springs between neighbours, the ends free or tied to the ground."""

    masses: Array
    """Shape (n,), from the near end to the far one [kg]."""
    rates: Array
    """Shape (n + 1,) [N/m]: near body to ground, between neighbours in turn, far body to ground; zero where none is."""

    def scaled(self, factor: float) -> Self:
        """Return the chain with all masses and rates times a factor: the eigenvalues stay.

        To give one part its value: ``chain.scaled(2.5 / chain.masses[0])``.
        """
        return type(self)(masses=self.masses * factor, rates=self.rates * factor)

    def eigenvalues(self) -> Array:
        """ω² of all modes, ascending, shape (n,) [rad²/s²], each to high relative accuracy.

        In the order spring, body, spring, …, spring, the entries √(k/m) between neighbours form a matrix of zero
        diagonal whose eigenvalues are ±ω and zeros, and bisection finds each to a few units in its last place
        (J. W. Demmel and W. Kahan, SIAM J. Sci. Stat. Comput. 11, 1990, pp. 873-912; from memory).
        """
        n = len(self.masses)
        between = np.sqrt(np.column_stack([self.rates[:-1], self.rates[1:]]) / self.masses[:, None]).ravel()
        omega = eigh_tridiagonal(
            np.zeros(2 * n + 1),
            between,
            eigvals_only=True,
            select="i",
            select_range=(n + 1, 2 * n),
            lapack_driver="stebz",
            tol=np.finfo(float).tiny,  # the default stops at the rounding of the highest
        )
        return np.asarray(omega**2)


def chain_from_two_spectra(
    spectrum: ArrayLike, held: ArrayLike, *, ground: tuple[float, float] = FREE, total_mass: float
) -> Chain:
    """The chain with a given spectrum, and a given spectrum when its near body is held.

    Parameters
    ----------
    spectrum : array_like, shape (n,)
        Eigenvalues ω² of the chain, in any order [rad²/s²]. The lowest is zero exactly if no end is tied to the ground.
    held : array_like, shape (n - 1,)
        Eigenvalues ω² with the near body held, in any order [rad²/s²].
    ground : (float, float)
        Rates of the springs to the ground at the near and the far end, as a ratio: ``(0, 0)`` for a free chain,
        ``(0, 1)`` tied at the far end, ``(1, 0)`` at the near one, ``(2, 1)`` at both, more stiffly at the near one.
    total_mass : float
        Sum of the masses [kg]; see `Chain.scaled` where one part is given instead.

    Raises
    ------
    SpectrumError
        If the spectra do not interlace (with the first pair that breaks it), the ground does not agree with the lowest
        eigenvalue, or the parts would differ beyond what a double-precision number can hold.
    ValueError
        For data of the wrong shape or sign.
    """
    lam, mu = _ascending(spectrum, "spectrum"), _ascending(held, "held")
    if len(mu) != len(lam) - 1:
        raise ValueError(
            f"`held`: expected {len(lam) - 1} eigenvalues, one fewer than the {len(lam)} of the chain, found {len(mu)}"
        )
    _require_interlacing(lam, mu)
    _require_ground(lam, ground)
    return _chain(lam, _share_ratios(lam, mu), ground, total_mass)


def mirror_chain(spectrum: ArrayLike, *, total_mass: float) -> Chain:
    """The mirror-symmetric chain with a given spectrum.

    Parameters
    ----------
    spectrum : array_like, shape (n,)
        Eigenvalues ω², all different, in any order [rad²/s²]. If the lowest is zero the chain is free, otherwise it is
        tied to the ground at both ends alike.
    total_mass : float
        Sum of the masses [kg]; see `Chain.scaled` where one part is given instead.

    Raises
    ------
    SpectrumError
        If two eigenvalues coincide (with the pair), or the parts would differ beyond what a double-precision number can
        hold.
    ValueError
        For data of the wrong shape or sign.
    """
    lam = _ascending(spectrum, "spectrum")
    _require_simple(lam)
    chain = _chain(lam, _mirror_share_ratios(lam), FREE if lam[0] == 0 else (1.0, 1.0), total_mass)
    # Mirrored parts differ by rounding; whoever orders them wants them equal.
    return Chain(masses=0.5 * (chain.masses + chain.masses[::-1]), rates=0.5 * (chain.rates + chain.rates[::-1]))


def relay_chain(n: int, transfer_time: float, total_mass: float) -> Chain:
    """The free chain of n bodies that hands a pulse from end to end without loss, at its slowest frequencies.

    That of `relay_from_orders` with the orders 0, 1, …, n − 1.
    """
    return relay_from_orders(range(n), transfer_time, total_mass)


def relay_from_orders(orders: ArrayLike, transfer_time: float, total_mass: float) -> Chain:
    """The mirror-symmetric chain with ω_j = p_j π/T, which hands the motion of one end body to the other in the time T.

    The modes of a mirror-symmetric chain are in turn even and odd under reflection. So if ``cos ω_j T`` is in turn
    1 and −1, or −1 and 1, the state at T is that at 0 mirrored, or mirrored and reversed: that is, if the p_j are whole
    numbers in turn even and odd [1]_. After 2 T all is as it was. (A free chain that starts with a momentum drifts as
    a whole besides.)

    Parameters
    ----------
    orders : array_like of int, shape (n,)
        p_1 < p_2 < …, alternately even and odd, none negative. Starting with 0: a free chain; otherwise tied at both
        ends. Starting with an odd one: the pulse arrives reversed.
    transfer_time : float
        T [s].
    total_mass : float
        Sum of the masses [kg].

    Raises
    ------
    SpectrumError
        If two neighbouring orders do not differ by an odd number (with the pair), or the parts would differ beyond
        what a double-precision number can hold.
    ValueError
        For data of the wrong shape or sign.

    References
    ----------
    .. [1] R. Vaia, arXiv 2008.01685, 2020 (from memory).
    """
    p = np.sort(np.asarray(orders))
    if p.dtype.kind not in "iu" or p.ndim != 1 or p.size == 0 or p[0] < 0:
        raise ValueError(f"`orders`: expected a list of whole numbers, none negative, found {orders!r}")
    for i in np.flatnonzero(np.diff(p) % 2 == 0)[:1]:
        raise SpectrumError(
            f"no relay: orders {i + 1} and {i + 2} are {p[i]} and {p[i + 1]}; "
            "one of two neighbours has to be even and the other odd",
            (f"p_{i + 1}", f"p_{i + 2}"),
        )
    if not (transfer_time > 0 and math.isfinite(transfer_time)):
        raise ValueError(f"`transfer_time`: expected a positive time in s, found {transfer_time}")
    unit = mirror_chain(np.square(p, dtype=float), total_mass=total_mass)
    # Scaled afterwards, so that the differences of eigenvalues are those of whole numbers.
    return Chain(masses=unit.masses, rates=unit.rates * (math.pi / transfer_time) ** 2)


def _ascending(values: ArrayLike, name: str) -> Array:
    lam = np.sort(np.asarray(values, dtype=float))
    if lam.ndim != 1 or (lam.size == 0 and name == "spectrum"):
        raise ValueError(f"`{name}`: expected a list of eigenvalues, found an array of shape {lam.shape}")
    if not np.all(np.isfinite(lam)) or np.any(lam < 0):
        wrong = lam[~(np.isfinite(lam) & (lam >= 0))][0]
        raise ValueError(f"`{name}`: expected ω² [rad²/s²], finite and not negative, found {wrong}")
    return lam


def _require_simple(lam: Array) -> None:
    for i in np.flatnonzero(np.diff(lam) == 0)[:1]:
        pair = (f"λ_{i + 1}", f"λ_{i + 2}")
        raise SpectrumError(
            f"no chain has this spectrum: {pair[0]} = {pair[1]} = {lam[i]!s}; the eigenvalues of a chain all differ",
            pair,
        )


def _require_interlacing(lam: Array, mu: Array) -> None:
    """``λ_1 < μ_1 < λ_2 < …``, or the first pair that is out of order."""
    merged = np.empty(len(lam) + len(mu))
    merged[0::2], merged[1::2] = lam, mu
    broken = np.flatnonzero(np.diff(merged) <= 0)
    for i in broken[:1]:
        pair = tuple(f"{'λμ'[k % 2]}_{k // 2 + 1}" for k in (i, i + 1))
        raise SpectrumError(
            f"no chain has these spectra: they have to interlace, but {pair[0]} = {merged[i]!s} is not less than "
            f"{pair[1]} = {merged[i + 1]!s} (λ the chain, μ with its near body held; {len(broken)} such pairs)",
            pair,
        )


def _require_ground(lam: Array, ground: tuple[float, float]) -> None:
    near, far = ground
    if not (math.isfinite(near) and math.isfinite(far) and near >= 0 and far >= 0):
        raise ValueError(f"`ground`: expected two rates that are not negative, as a ratio, found {ground}")
    if (near == far == 0) != (lam[0] == 0):
        raise SpectrumError(
            f"the lowest eigenvalue is {lam[0]!s}: it is zero exactly if neither end is tied to the ground, but "
            f"`ground` is {ground}; give (0, 1), (1, 0) or the ratio of both rates for a tied chain, "
            "and an exact zero for a free one"
        )


def _share_ratios(lam: Array, mu: Array) -> Array:
    """``w_j/w_(j+1)``; factors are paired so that each is near one, and no product over- or underflows on the way."""
    ratios = np.empty(len(mu))
    for j, (a, b) in enumerate(itertools.pairwise(lam)):
        below, above = lam[:j], lam[j + 2 :]
        ratios[j] = (
            np.prod(((a - mu[:j]) / (a - below)) * ((b - below) / (b - mu[:j])))
            * np.prod(((mu[j + 1 :] - a) / (above - a)) * ((above - b) / (mu[j + 1 :] - b)))
            * ((mu[j] - a) / (b - mu[j]))
        )
    return ratios


def _mirror_share_ratios(lam: Array) -> Array:
    """``w_j/w_(j+1)`` of the mirror-symmetric chain."""
    ratios = np.empty(len(lam) - 1)
    for j, (a, b) in enumerate(itertools.pairwise(lam)):
        ratios[j] = np.prod((b - lam[:j]) / (a - lam[:j])) * np.prod((lam[j + 2 :] - b) / (lam[j + 2 :] - a))
    return ratios


def _chain(lam: Array, ratios: Array, ground: tuple[float, float], total_mass: float) -> Chain:
    if not (total_mass > 0 and math.isfinite(total_mass)):
        raise ValueError(f"`total_mass`: expected a positive mass in kg, found {total_mass}")
    # Infinities, zeros and nan are looked for at the end.
    with np.errstate(all="ignore"):
        q, e = _factor(lam, ratios)
        roots, k_near, k_far = _mass_roots(q, e, ground)
        masses = np.square(roots)
        rates = np.concatenate([[k_near], np.sqrt(q[:-1]) * np.sqrt(e) * (roots[:-1] * roots[1:]), [k_far]])
        chain = Chain(masses=masses, rates=rates).scaled(total_mass / masses.sum())
    parts = np.concatenate([chain.masses, chain.rates[1:-1]])
    if not np.all(np.isfinite(parts) & (parts > np.finfo(float).tiny)):
        raise SpectrumError(
            "the parts of the chain with this spectrum differ by more than double-precision numbers can hold, some 300 "
            "orders of magnitude; spread the eigenvalues more evenly, or hold the other end"
        )
    return chain


def _factor(lam: Array, ratios: Array) -> tuple[Array, Array]:
    """q (n,) and e (n − 1,) of the factor R for shares in the given ratios at the eigenvalues λ."""
    q, e = [0.0], list[float]()
    relative = 0.0  # shares so far, over the share of the next point
    for gap, ratio in zip(np.diff(lam)[::-1].tolist(), ratios[::-1].tolist(), strict=True):
        _shift(q, e, gap)
        relative = (1.0 + relative) / ratio
        _add_at_zero(q, e, relative)
    _shift(q, e, float(lam[0]))
    return np.array(q), np.array(e)


def _shift(q: list[float], e: list[float], delta: float) -> None:
    """The factor of ``RᵀR + δ``, in place."""
    t = delta
    for i, (q_i, e_i) in enumerate(zip(q, e, strict=False)):
        q[i] = q_i + t
        e[i] = e_i * (q_i / q[i])
        t = t * (e_i / q[i]) + delta
    q[-1] += t


def _add_at_zero(q: list[float], e: list[float], relative: float) -> None:
    """The factor with one more point at zero, whose share is that of all others over `relative`, in place.

    ``x dμ`` does not see a point at zero, hence q_i + e_i and e_i q_(i+1) stay as they were, with ``q_1 = ∫x dμ/∫dμ``;
    d is what e_i gains.
    """
    d = q[0] / (1.0 + relative)
    q[0] = q[0] * (relative / (1.0 + relative))
    for i, e_i in enumerate(e):
        e[i] = e_i + d
        share = q[i + 1] / e[i] if e[i] > 0 else math.nan
        q[i + 1], d = e_i * share, d * share
    e.append(d)
    q.append(0.0)


def _mass_roots(q: Array, e: Array, ground: tuple[float, float]) -> tuple[Array, float, float]:
    """``x = √m``, k_0 and k_n, up to a common factor.

    At equal displacements only the springs to the ground pull: ``J x = a e_1 + b e_n`` with ``k_0 = a x_1`` and
    ``k_n = b x_n``. With ``J u = e_1``, ``J v = q_n e_n`` and v_n = 1 that is ``x = s u + v``, a = s, b = q_n, and the
    ratio asked for, ``near/far = k_0/k_n``, is a quadratic in s. R has negative entries beside its diagonal, so that
    nothing is subtracted in solving.
    """
    near, far = ground
    v = _back_substitute(q, e, np.zeros(len(e)), 1.0)
    if near == 0:
        return v, 0.0, q[-1]
    y = np.concatenate([[1.0], np.cumprod(np.sqrt(e) / np.sqrt(q[1:]))]) / np.sqrt(q[0])  # Rᵀ y = e_1
    u = _back_substitute(q, e, y[:-1], y[-1] / math.sqrt(q[-1]))
    if far == 0:
        return u, u[0], 0.0
    s = _positive_root(far * u[0], (far - near) * v[0], near * q[-1])
    x = s * u + v
    return x, s * x[0], q[-1] * x[-1]


def _back_substitute(q: Array, e: Array, y: Array, last: float) -> Array:
    """x with ``R x = y`` in all rows but the last, and x_n given."""
    x = [last]
    for q_i, e_i, y_i in zip(q[-2::-1].tolist(), e[::-1].tolist(), y[::-1].tolist(), strict=True):
        x.append((y_i + math.sqrt(e_i) * x[-1]) / math.sqrt(q_i) if q_i > 0 else math.nan)
    return np.array(x[::-1])


def _positive_root(a: float, b: float, c: float) -> float:
    """The positive root of ``a s² + b s = c`` for positive a and c, without cancellation."""
    root = math.hypot(b, 2.0 * math.sqrt(a * c))
    return (root - b) / (2.0 * a) if b < 0 else 2.0 * c / (b + root)
