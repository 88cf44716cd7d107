"""Eigenvalues of all designs in a box at once: bounds that hold for every one of them, rounding included.

Symbols
-------
x        coordinates of a box, (P,): free variables, or base dimensions with their errors
x^ν      a monomial ``Π x_p^ν_p``; every coefficient of K and M is one
Q_ν      its symmetric pattern: ``K(x) = Σ_ν x^ν Q_ν``, ``Q_ν = Q_ν⁺ − Q_ν⁻`` with both parts semidefinite
s        positive monomials that rescale displacements, ``q_i = s_i(x) q_i'``: other matrices, same eigenvalues
δ, r     ``δ_p = log(x_p/c_p)``, of signed coordinates ``x_p − c_p``, about the centre c; ``|δ_p| ≤ r_p``
X, Λ     modes at the centre: ``XᵀM(c)X = I``, ``XᵀK(c)X = Λ``
E        what changes in the box, ``Xᵀ(K(x) − λ̄ M(x))X − (Λ − λ̄) = Σ_p δ_p E_p + …``

Monomials have exact intervals [lo, hi] over a box. Three kinds of bound are intersected, the first for several s.

*By monomials*: with ``K_lo = Σ lo Q⁺ − hi Q⁻`` and ``K_hi = Σ hi Q⁺ − lo Q⁻``,
``λ_j(K_lo, M_hi) ≤ λ_j ≤ λ_j(K_hi, M_lo)`` wherever the bound is ≥ 0; where it is negative the other mass matrix is
taken. M_lo has to be positive definite, or there is no upper bound. A semidefinite pattern, as that of a square on a
constant row, costs nothing; a cross term ``w v_a v_b`` of a row that varies is widened by the matrix absolute value
``Q⁺ + Q⁻``.

*About the centre*: ``λ_j(x) = μ`` makes ``Xᵀ(K(x) − μ M(x))X`` singular. While its block on other modes C is regular,
``λ_j(c) + E_jj − (μ − λ̄) M_jj − μ = z`` with ``|z| ≤ Σ_c E_jc²/|λ_c − μ|/(1 − q)`` (Schur complement; q bounds E_CC
relative to ``|Λ_C − μ|``), so that λ_j is linear in δ but for terms of second order.

*Of two neighbours*: the same with a block of two. Their difference is known better than each of them, and they
may coincide: by Haynsworth's inertia additivity [1]_ the lower of the block's two is the lower mode.

Rounding: computed eigenvalues of computed matrices are judged by what their own modes leave, ``F = XᵀKX − Λ`` and
``G = XᵀMX − I``; by congruence and Weyl's inequality [2]_ the exact ones are within ``(λ ± |F|)/(1 ± |G|)``. To F is
added ``κ |X|ᵀ K_abs |X|`` for all rounding on the way there, K_abs being the sum of the sizes of all contributions and
``κ = 2ε (3n + V + 32)``: n for each product [3]_, V for the sum of monomials, the rest for coefficients, powers being
within 4 units in the last place. Nothing is assumed of the eigensolver.

What is found at rest enters as a number if it does not change in the box (rod lengths between joints that stay), with
the rounding of its search; otherwise it is enclosed by Krawczyk's operator and counts as one more coordinate. Where
that fails, in boxes too wide, nothing is bounded. The rest position meant is the one that the search from its seed
finds at the centre of the box, and those it leads to.

References
----------
.. [1] E. V. Haynsworth, "Determination of the inertia of a partitioned Hermitian matrix", Linear Algebra and its
   Applications 1, 1968, pp. 73-81.
.. [2] B. N. Parlett, "The Symmetric Eigenvalue Problem", SIAM, 1998, section 10.3.
.. [3] N. J. Higham, "Accuracy and Stability of Numerical Algorithms", SIAM, 2002, section 3.5.
.. [4] A. Neumaier, "Interval Methods for Systems of Equations", Cambridge University Press, 1990, section 5.1.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import scipy.sparse as sp
import scipy.sparse.csgraph as csgraph
from numpy.typing import NDArray

from inverse.assembly.algebra import Monomial, symbol
from inverse.assembly.assembly import Model
from inverse.assembly.terms import Array, IntArray, Monomials, Squares, Sums
from inverse.errors import InverseError
from inverse.matrices.equilibrium import at_rest

EPS = float(np.finfo(float).eps)

ULPS = 8
"""Rounding of one power and one product in a coefficient, in units in the last place, with room."""

SAME_POWER = 1e-12
"""Exponents closer than this are one."""

MOST_FORMS = 6
"""Scalings tried at most."""

WORKSPACE = 4_000_000
"""Numbers worked on at a time."""

INFLATED = 1 + 64 * EPS
"""Covers the rounding of short sums of bounds."""

GROWTHS = 12
"""How often a box of unknowns is grown before the attempt is given up."""

GROWN = 1.2
"""By how much at a time."""

LOST = 100.0
"""Given up at once when the unknowns could be this many times their size."""

KRAWCZYK_ROUNDING = 1e-12
"""Relative rounding of the sums and products in Krawczyk's operator, with room for some thousand terms."""

PASSES = 2
"""Each pass about the centre uses the bounds of the one before."""


class EnclosureError(InverseError, ValueError):
    """No guarantee can be given, and what stands in its way."""


@dataclass(frozen=True, slots=True)
class Contributions:
    """A sum multiplied out: ``coefficient · x^powers`` at (row, column) of a matrix, ``Z`` of them."""

    powers: Array
    row: IntArray
    column: IntArray
    coefficient: Array


@dataclass(frozen=True, slots=True)
class Join:
    """A row with monomials at two coordinates: powers (P,) of its `entry` at the first, less those at the second."""

    first: int
    second: int
    ahead: Array
    entry: Array


@dataclass(frozen=True)
class Patterns:
    """``Σ_ν x^ν Q_ν``: `powers` (V, P), and ``Q_ν``, ``Q_ν⁺``, ``Q_ν⁻`` and the sizes that were added up, (V, n, n)."""

    powers: Array
    whole: Array
    above: Array
    below: Array
    sizes: Array

    @classmethod
    def of(cls, found: Contributions, scaling: Array, weight: Array) -> Patterns:
        """Like monomials collected after rescaling by powers (n, P), split in the metric of a `weight` (n,)."""
        n = len(weight)
        powers = found.powers + scaling[found.row] + scaling[found.column]
        powers, first, group = _alike(powers)
        Q, sizes = np.zeros((2, len(first), n, n))
        place = (group, found.row, found.column)
        np.add.at(Q, place, found.coefficient)
        np.add.at(sizes, place, np.abs(found.coefficient))
        Q = (Q + np.swapaxes(Q, 1, 2)) / 2
        above, below, sizes = _split(Q, sizes, weight)
        return cls(powers, Q, above, below, sizes)

    def between(self, low: Array, high: Array) -> tuple[Array, Array]:
        """Matrices below and above all those whose coefficients (B, V) are within [low, high]."""
        return _sum(low, self.above) - _sum(high, self.below), _sum(high, self.above) - _sum(low, self.below)


def _alike(powers: Array) -> tuple[Array, IntArray, IntArray]:
    """Different rows of powers, where each occurs first, and which of them each row is."""
    _, first, group = np.unique(np.round(powers / SAME_POWER), axis=0, return_index=True, return_inverse=True)
    return powers[first], np.asarray(first, np.intp), np.asarray(group.ravel(), np.intp)


def _sum(coefficients: Array, patterns: Array) -> Array:
    """``Σ_ν a_ν Q_ν``, shape (B, n, n)."""
    return np.asarray((coefficients @ patterns.reshape(len(patterns), -1)).reshape(-1, *patterns.shape[1:]))


def _split(Q: Array, sizes: Array, weight: Array) -> tuple[Array, Array, Array]:
    """Semidefinite parts of each pattern, and the sizes with what the split may have lost to rounding."""
    n, metric = len(weight), weight[:, None] * weight
    values, vectors = np.linalg.eigh(Q / metric)
    size = np.abs(values).max(axis=1, initial=0.0)[:, None]
    rounding = 8 * n * EPS * size
    zero = np.zeros_like(Q)
    up, down = (values < -rounding).any(axis=1), (values > rounding).any(axis=1)
    mixed = up & down
    parts = [
        vectors * np.maximum(sign * values, 0.0)[:, None] @ np.swapaxes(vectors, 1, 2) * metric for sign in (1, -1)
    ]
    above = np.where(mixed[:, None, None], parts[0], np.where(up[:, None, None], zero, Q))
    below = np.where(mixed[:, None, None], parts[1], np.where(up[:, None, None], -Q, zero))
    lost = n * size[:, :, None] * metric
    return above, below, np.maximum(sizes, np.abs(above) + np.abs(below)) + lost


@dataclass(frozen=True, slots=True)
class Enclosure:
    """Bounds of ``B`` boxes: eigenvalues ascending (B, n), and of some pairs λ_j − λ_i (B, k) [rad²/s²].

    `sound` tells in which boxes the mass matrix is certainly positive definite.
    """

    low: Array
    high: Array
    difference_low: Array
    difference_high: Array
    sound: NDArray[np.bool_]


@dataclass(frozen=True)
class Rest:
    """What is found at rest and changes in the box: ``S`` unknowns y, with as many equations ``G(x, y) = 0``.

    `equations` and `slopes` (``∂G/∂y``) are over the coordinates of the box, then the unknowns; `base` gives the base
    dimensions (B, D) of points of the box.
    """

    model: Model
    names: tuple[str, ...]
    places: IntArray
    positive: NDArray[np.bool_]
    equations: Contributions
    slopes: Contributions
    base: Callable[[Array], Array]

    def at(self, x: Array) -> Array:
        """The unknowns at points (B, P) of the box, shape (B, S); NaN where there is no rest position."""
        return np.asarray(at_rest(self.model, self.base(x)).values[:, self.places])

    def enclose(self, low: Array, high: Array, positive: NDArray[np.bool_]) -> tuple[Array, Array, NDArray[np.bool_]]:
        """Ranges (B, S) of the unknowns over boxes (B, P), and where they are proved; ones elsewhere.

        Krawczyk's operator [4]_, ``y_c − Y G(x, y_c) + (I − Y ∂G/∂y(x, y)) (y − y_c)`` with ``Y ≈ (∂G/∂y)⁻¹``: where
        it maps a box of unknowns into its inside there is exactly one rest position in that box for every x.
        The box is grown from the rest position at the centre.
        """
        centre = _centre(low, high, positive)
        y = self.at(centre)
        sound = np.asarray(np.isfinite(y).all(axis=1))
        y = np.where(sound[:, None], y, 1.0)
        signs = np.append(positive, self.positive)
        equations, slopes = (_Sum.of(found, len(self.names)) for found in (self.equations, self.slopes))
        Y, solved = _inverses(slopes.at(signs, np.hstack([centre, y])))
        G, least = (part[:, :, 0] for part in equations.times(Y, signs, np.hstack([low, y]), np.hstack([high, y])))
        # Whatever does not change at all still needs a box with an inside.
        least_room = KRAWCZYK_ROUNDING * (np.abs(y) + 0.01 * np.abs(y).max(axis=1, keepdims=True))
        first, last = -G - 2 * least - least_room, -G + 2 * least + least_room
        proved, going = np.zeros(len(low), bool), np.asarray(sound & solved)
        for _ in range(GROWTHS):
            bounds = [np.where(self.positive, np.maximum(y + d, y / 2), y + d) for d in (first, last)]
            reach = np.maximum(np.abs(bounds[0] - y), np.abs(bounds[1] - y))[:, :, None]
            YJ, spread = slopes.times(Y, signs, np.hstack([low, bounds[0]]), np.hstack([high, bounds[1]]))
            shrunk = np.abs(np.eye(len(self.names)) - YJ) + spread
            radius = (least + (shrunk @ reach)[:, :, 0]) * (1 + KRAWCZYK_ROUNDING)
            inside = (y - G - radius > bounds[0]) & (y - G + radius < bounds[1])
            new = inside.all(axis=1) & going
            grown = np.where(new[:, None], radius, GROWN * radius + least_room)
            first, last = (np.where(going[:, None], -G + side * grown, d) for side, d in ((-1, first), (1, last)))
            proved |= new
            going = going & ~new & (radius < LOST * (1 + np.abs(y))).all(axis=1)
            if not going.any():
                break
        slack = 4 * EPS * np.abs(y)
        rows = proved[:, None]
        return np.where(rows, y + first - slack, 1.0), np.where(rows, y + last + slack, 1.0), proved


@dataclass(frozen=True)
class _Sum:
    """A matrix of sums of monomials ``Σ_ν x^ν Q_ν``, like monomials collected: `powers` (V, ·), ``Q`` (V, S, C)."""

    powers: Array
    Q: Array
    sizes: Array

    @classmethod
    def of(cls, found: Contributions, rows: int) -> _Sum:
        """Collect."""
        powers, first, group = _alike(found.powers)
        Q, sizes = np.zeros((2, len(first), rows, int(found.column.max(initial=0)) + 1))
        np.add.at(Q, (group, found.row, found.column), found.coefficient)
        np.add.at(sizes, (group, found.row, found.column), np.abs(found.coefficient))
        return cls(powers, Q, sizes)

    def at(self, signs: NDArray[np.bool_], x: Array) -> Array:
        """At points."""
        return _sum(_values(self.powers, signs, x), self.Q)

    def times(self, Y: Array, signs: NDArray[np.bool_], low: Array, high: Array) -> tuple[Array, Array]:
        """Middle and radius of ``Σ_ν x^ν (Y Q_ν)``: what Y cancels within a monomial widens nothing."""
        lo, hi = power_ranges(self.powers, signs, low, high)
        B, (V, S, C) = len(Y), self.Q.shape
        parts = (Y[:, None] @ self.Q[None]).reshape(B, V, S * C)
        middle = (((lo + hi) / 2)[:, None] @ parts).reshape(B, S, C)
        radius = (((hi - lo) / 2)[:, None] @ np.abs(parts)).reshape(B, S, C)
        rounding = np.abs(Y) @ _sum(np.maximum(np.abs(lo), np.abs(hi)), self.sizes)
        return middle, radius + KRAWCZYK_ROUNDING * rounding


def _inverses(matrices: Array) -> tuple[Array, NDArray[np.bool_]]:
    """Approximate inverses of a batch, zero where there is none."""
    size = np.abs(matrices).max(axis=2, keepdims=True)
    scaled = matrices / np.where(size > 0, size, 1.0)
    solved = np.linalg.cond(scaled) < 1 / np.sqrt(EPS)
    inverse = np.linalg.inv(np.where(solved[:, None, None], scaled, np.eye(matrices.shape[1])))
    return np.where(solved[:, None, None], inverse / np.swapaxes(np.where(size > 0, size, 1.0), 1, 2), 0.0), solved


@dataclass(frozen=True)
class Family:
    """All matrices of an assembly over boxes of some coordinates; `over_variables` and `over_dimensions` make it.

    Attributes
    ----------
    names : tuple of str
        The coordinates, (P,).
    positive : ndarray of bool, shape (P,)
        Which of them are greater than zero, and thus may have any power.
    low, high : ndarray, shape (P,)
        The whole box.
    stiffness, mass : Contributions
        Multiplied out, unscaled.
    joins : tuple of Join
        What rows ask of scalings.
    part_mass, part_cost : tuple of Contributions
        By part; None where it depends on what is found at rest.
    size : int
        Number of coordinates of the assembly ``n``.
    rest : Rest, optional
        Dimensions that are found at rest and change in the box; to the matrices they are further coordinates.
    """

    names: tuple[str, ...]
    positive: NDArray[np.bool_]
    low: Array
    high: Array
    stiffness: Contributions
    mass: Contributions
    joins: tuple[Join, ...]
    part_mass: tuple[Contributions | None, ...]
    part_cost: tuple[Contributions | None, ...]
    size: int
    rest: Rest | None

    @cached_property
    def signs(self) -> NDArray[np.bool_]:
        """Which coordinates are positive, those found at rest included."""
        return self.positive if self.rest is None else np.append(self.positive, self.rest.positive)

    @cached_property
    def forms(self) -> tuple[tuple[Patterns, Patterns], ...]:
        """Stiffness and mass for every scaling kept; the first is without one."""
        centre = _centre(self.low[None], self.high[None], self.positive)
        if self.rest is not None:
            centre = np.hstack([centre, self.rest.at(centre)])
            if not np.isfinite(centre).all():
                raise EnclosureError("in the middle of the ranges there is no rest position")
        return tuple(self._form(scaling, centre) for scaling in self._scalings())

    def _form(self, scaling: Array, centre: Array) -> tuple[Patterns, Patterns]:
        mass = self.mass
        powers = mass.powers + scaling[mass.row] + scaling[mass.column]
        value = mass.coefficient * _values(powers, self.signs, centre)[0]
        own = mass.row == mass.column
        weight = np.sqrt(np.bincount(mass.row[own], np.abs(value[own]), self.size))
        if not (weight > 0).all():
            raise EnclosureError("a coordinate has no mass of its own")
        return Patterns.of(self.stiffness, scaling, weight), Patterns.of(mass, scaling, weight)

    def _scalings(self) -> list[Array]:
        """None; those in which most rows do not vary; and those in which the mass or the stiffness does not."""
        plain = np.zeros((self.size, len(self.signs)))
        wanted = [plain, *_steady_diagonals(self), *_steady_rows(self)]
        different = {tuple(np.round(s / SAME_POWER).ravel()): s for s in wanted}
        return list(different.values())[:MOST_FORMS]

    def enclose(
        self,
        low: Array,
        high: Array,
        *,
        modes: Sequence[int] = (),
        pairs: Sequence[tuple[int, int]] = (),
    ) -> Enclosure:
        """Bounds over boxes.

        Parameters
        ----------
        low, high : ndarray, shape (B, P)
            Boxes in the coordinates themselves (no logarithms).
        modes : sequence of int
            Positions (from 0, rigid modes included) whose bounds are also taken about the centre.
        pairs : sequence of (int, int)
            Positions whose differences are wanted.
        """
        V = sum(len(p.powers) for p in self.forms[0])
        step = max(1, WORKSPACE // (max(V, 8) * self.size**2))
        starts = range(0, max(len(low), 1), step)
        parts = [self._enclose(low[k : k + step], high[k : k + step], modes, pairs) for k in starts]
        return Enclosure(
            low=np.concatenate([part.low for part in parts]),
            high=np.concatenate([part.high for part in parts]),
            difference_low=np.concatenate([part.difference_low for part in parts]),
            difference_high=np.concatenate([part.difference_high for part in parts]),
            sound=np.concatenate([part.sound for part in parts]),
        )

    def _enclose(self, low: Array, high: Array, modes: Sequence[int], pairs: Sequence[tuple[int, int]]) -> Enclosure:
        B, n = len(low), self.size
        bound_low, bound_high, sound = np.full((B, n), -np.inf), np.full((B, n), np.inf), np.zeros(B, bool)
        low, high, known = self._with_rest(low, high)
        for form in self.forms:
            lower, upper, definite = _by_monomials(form, self.signs, low, high)
            np.fmax(bound_low, lower, out=bound_low)
            np.fmin(bound_high, upper, out=bound_high)
            sound |= definite
        np.maximum.accumulate(bound_low, axis=1, out=bound_low)
        bound_high = np.minimum.accumulate(bound_high[:, ::-1], axis=1)[:, ::-1].copy()
        i, j = np.array(pairs, np.intp).reshape(-1, 2).T
        looked_at = sorted({*modes, *i.tolist(), *j.tolist()})
        if not looked_at:
            return _only(known, Enclosure(bound_low, bound_high, np.empty((B, 0)), np.empty((B, 0)), sound))
        centred = _Centred.at(self, low, high)
        slopes, remainder = _about_centre(centred, looked_at, bound_low, bound_high)
        below, above = bound_low[:, j] - bound_high[:, i], bound_high[:, j] - bound_low[:, i]
        for k, (first, second) in enumerate(pairs):
            i_j = looked_at.index(first), looked_at.index(second)
            linear = slopes[:, i_j[1]] - slopes[:, i_j[0]], remainder[:, i_j[0]] + remainder[:, i_j[1]]
            for lower, upper in _differences(centred, (first, second), linear, bound_low, bound_high):
                below[:, k] = np.fmax(below[:, k], lower)
                above[:, k] = np.fmin(above[:, k], upper)
        ascending = j >= i
        below[:, ascending] = np.maximum(below[:, ascending], 0.0)
        return _only(known, Enclosure(bound_low, bound_high, below, above, sound))

    def _with_rest(self, low: Array, high: Array) -> tuple[Array, Array, NDArray[np.bool_]]:
        """Boxes with what is found at rest as further coordinates, and for which of them it is known."""
        if self.rest is None:
            return low, high, np.ones(len(low), bool)
        y_low, y_high, known = self.rest.enclose(low, high, self.positive)
        return np.hstack([low, y_low]), np.hstack([high, y_high]), known


def _only(known: NDArray[np.bool_], found: Enclosure) -> Enclosure:
    """Bounds taken back where they are not known to hold."""
    if known.all():
        return found
    rows = known[:, None]
    return Enclosure(
        low=np.where(rows, found.low, -np.inf),
        high=np.where(rows, found.high, np.inf),
        difference_low=np.where(rows, found.difference_low, -np.inf),
        difference_high=np.where(rows, found.difference_high, np.inf),
        sound=found.sound & known,
    )


def _by_monomials(
    form: tuple[Patterns, Patterns], positive: NDArray[np.bool_], low: Array, high: Array
) -> tuple[Array, Array, NDArray[np.bool_]]:
    """Lower and upper bounds (B, n), and in which boxes ``M_lo`` is positive definite."""
    (K_lo, K_hi, K_abs), (M_lo, M_hi, M_abs) = (_assembled(patterns, positive, low, high) for patterns in form)
    kappa = _kappa(form, K_lo.shape[1])
    lower, _, _ = _verified(K_lo, M_hi, K_abs, M_abs, kappa)
    _, upper, sound = _verified(K_hi, M_lo, K_abs, M_abs, kappa)
    # Of a negative λ the bound is found with the other mass matrix; where its sign is open it is zero at best.
    b = np.flatnonzero((lower < 0).any(axis=1))
    if len(b):
        other, _, _ = _verified(K_lo[b], M_lo[b], K_abs[b], M_abs[b], kappa)
        lower[b] = np.where(lower[b] < 0, np.minimum(other, 0.0), lower[b])
    b = np.flatnonzero(((upper < 0) | np.isinf(upper)).any(axis=1))
    if len(b):
        _, other, _ = _verified(K_hi[b], M_hi[b], K_abs[b], M_abs[b], kappa)
        open_sign = np.where(np.isinf(upper[b]), np.inf, 0.0)
        changed = np.where(other < 0, other, open_sign)
        upper[b] = np.where((upper[b] < 0) | np.isinf(upper[b]), changed, upper[b])
    return lower, upper, sound


def _kappa(form: tuple[Patterns, Patterns], n: int) -> float:
    return 2 * EPS * (3 * n + max(len(patterns.powers) for patterns in form) + 32)


def _assembled(patterns: Patterns, positive: NDArray[np.bool_], low: Array, high: Array) -> tuple[Array, Array, Array]:
    lo, hi = power_ranges(patterns.powers, positive, low, high)
    below, above = patterns.between(lo, hi)
    return below, above, _sum(np.maximum(np.abs(lo), np.abs(hi)), patterns.sizes)


def _verified(K: Array, M: Array, K_abs: Array, M_abs: Array, kappa: float) -> tuple[Array, Array, NDArray[np.bool_]]:
    """Bounds (B, n) below and above the eigenvalues of pencils known to within `kappa` of K_abs and M_abs."""
    values, X = _modes(K, M)
    n = K.shape[1]
    with np.errstate(invalid="ignore", over="ignore"):
        F, G = _left_over(K, X), _left_over(M, X)
        F[:, range(n), range(n)] -= values
        G[:, range(n), range(n)] -= 1.0
        f, g = (
            (np.abs(error) + kappa * _left_over(sizes, np.abs(X))).sum(axis=2).max(axis=1)[:, None]
            for error, sizes in ((F, K_abs), (G, M_abs))
        )
        definite = g < 1
        g = np.where(definite, g, 0.0)
        below, above = values - f * INFLATED, values + f * INFLATED
        lower = np.where(below >= 0, below / (1 + g), below / (1 - g)) - 4 * EPS * np.abs(below)
        upper = np.where(above >= 0, above / (1 - g), above / (1 + g)) + 4 * EPS * np.abs(above)
    known = definite & np.isfinite(f)
    return np.where(known, lower, -np.inf), np.where(known, upper, np.inf), definite[:, 0]


def _left_over(matrix: Array, X: Array) -> Array:
    """``XᵀAX``."""
    return np.asarray(np.swapaxes(X, 1, 2) @ matrix @ X)


def _modes(K: Array, M: Array) -> tuple[Array, Array]:
    """Eigenvalues ascending and modes; not numbers where M is not positive definite."""
    diagonal = np.einsum("bii->bi", M)
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        scale = 1 / np.sqrt(np.where(diagonal > 0, diagonal, np.nan))
        scaled = M * scale[:, :, None] * scale[:, None, :]
        good = np.asarray(np.isfinite(scaled).all((1, 2)) & np.isfinite(K).all((1, 2)))
        sizes, U = np.linalg.eigh(np.where(good[:, None, None], scaled, np.eye(M.shape[1])))
        W = scale[:, :, None] * U / np.sqrt(np.where(sizes > 0, sizes, np.nan))[:, None, :]
        good &= np.isfinite(W).all((1, 2))
        A = np.where(good[:, None, None], _left_over(K, np.where(good[:, None, None], W, 0.0)), 0.0)
    values, V = np.linalg.eigh((A + np.swapaxes(A, 1, 2)) / 2)
    return np.where(good[:, None], values, np.nan), np.where(good[:, None, None], W @ V, np.nan)


def power_ranges(powers: Array, positive: NDArray[np.bool_], low: Array, high: Array) -> tuple[Array, Array]:
    """Ranges (B, V) of the monomials ``Π x^powers``, powers (V, P), over boxes (B, P), rounded outward."""
    lo, hi = np.ones((len(low), len(powers))), np.ones((len(low), len(powers)))
    for p in np.argsort(~positive, kind="stable"):
        own = np.flatnonzero(powers[:, p])
        if not len(own):
            continue
        below, above = _power(low[:, p, None], high[:, p, None], powers[own, p], bool(positive[p]))
        ends = np.stack([lo[:, own] * below, lo[:, own] * above, hi[:, own] * below, hi[:, own] * above])
        lo[:, own], hi[:, own] = ends.min(axis=0), ends.max(axis=0)
    slack = ULPS * EPS * (1 + len(positive))
    return lo - slack * np.abs(lo), hi + slack * np.abs(hi)


def _power(low: Array, high: Array, power: Array, positive: bool) -> tuple[Array, Array]:
    """Range of ``x^power``; of signed coordinates powers are whole and positive."""
    first, second = low**power, high**power
    below, above = np.minimum(first, second), np.maximum(first, second)
    if not positive:
        below = np.where((power % 2 == 0) & (low <= 0) & (high >= 0), 0.0, below)
    return below, above


def _values(powers: Array, positive: NDArray[np.bool_], x: Array) -> Array:
    """Monomials at points (B, P), shape (B, V)."""
    value = np.ones((len(x), len(powers)))
    for p in range(len(positive)):
        own = np.flatnonzero(powers[:, p])
        value[:, own] *= x[:, p, None] ** powers[own, p]
    return value


def _centre(low: Array, high: Array, positive: NDArray[np.bool_]) -> Array:
    with np.errstate(invalid="ignore"):
        return np.asarray(np.clip(np.where(positive, np.sqrt(low * high), (low + high) / 2), low, high))


@dataclass(frozen=True)
class _Expansion:
    """Monomials (B, V) about the centre: slopes (B, V, P) over δ, and what the rest of the series can come to."""

    value: Array
    slope: Array
    remainder: Array
    most: Array

    @classmethod
    def of(cls, powers: Array, positive: NDArray[np.bool_], centre: Array, r: Array) -> _Expansion:
        """The rest is that of the majorant, whose coefficients are the sizes of those of the series.

        The majorant of ``x^ν`` is ``|c|^ν e^(|ν| r)``, of a signed ``x^k`` it is ``(|c| + r)^k``.
        """
        value = _values(powers, positive, centre)
        slope = np.empty((*value.shape, len(positive)))
        most = np.ones_like(value)
        for p in range(len(positive)):
            e = powers[:, p]
            if positive[p]:
                slope[:, :, p] = e * value
                most *= np.abs(centre[:, p, None]) ** e * np.exp(np.abs(e) * r[:, p, None])
            else:
                lowered = powers.copy()
                lowered[:, p] = np.maximum(e - 1, 0)
                slope[:, :, p] = e * _values(lowered, positive, centre)
                most *= (np.abs(centre[:, p, None]) + r[:, p, None]) ** e
        slack = 4 * ULPS * EPS * (1 + len(positive))
        linear = np.einsum("bvp,bp->bv", np.abs(slope), r)
        rest = np.maximum(most - np.abs(value) - linear, 0.0) + slack * (most + linear)
        return cls(value, slope, rest, most)


@dataclass(frozen=True)
class _Centred:
    """K and M in the basis of the modes at the centre of each box.

    `K_p` and `M_p` (B, P, n, n) are the slopes; `K_rest` and `M_rest` (B, n, n) bound every entry of what the slopes
    leave out and of all rounding.
    """

    values: Array
    r: Array
    K_p: Array
    M_p: Array
    K_rest: Array
    M_rest: Array

    @classmethod
    def at(cls, family: Family, low: Array, high: Array) -> _Centred:
        """Expand about the centres of boxes."""
        positive, form = family.signs, family.forms[0]
        c = _centre(low, high, positive)
        with np.errstate(invalid="ignore", divide="ignore"):
            relative = np.maximum(np.log(high / c), np.log(c / low)) + 4 * EPS
        r = np.where(high > low, np.where(positive, relative, np.maximum(high - c, c - low) * (1 + 4 * EPS)), 0.0)
        expansions = [_Expansion.of(patterns.powers, positive, c, r) for patterns in form]
        values, X = _modes(*(_sum(e.value, patterns.whole) for e, patterns in zip(expansions, form, strict=True)))
        kappa = _kappa(form, family.size)
        parts = [_in_modes(e, patterns, X, kappa) for e, patterns in zip(expansions, form, strict=True)]
        (K_c, K_p, K_rest), (M_c, M_p, M_rest) = parts
        n = family.size
        K_c[:, range(n), range(n)] -= values
        M_c[:, range(n), range(n)] -= 1.0
        return cls(values, r, K_p, M_p, K_rest + np.abs(K_c), M_rest + np.abs(M_c))


def _in_modes(expansion: _Expansion, patterns: Patterns, X: Array, kappa: float) -> tuple[Array, Array, Array]:
    """Value, slopes, and the bound on the rest, in the basis X."""
    B, n, _ = X.shape
    V = len(patterns.powers)
    half = (patterns.whole.reshape(V * n, n) @ X).reshape(B, V, n, n)
    whole = (np.swapaxes(X, 1, 2)[:, None] @ half).reshape(B, V, n * n)
    value = (expansion.value[:, None, :] @ whole).reshape(B, n, n)
    slopes = (np.swapaxes(expansion.slope, 1, 2) @ whole).reshape(B, expansion.slope.shape[2], n, n)
    rest = (expansion.remainder[:, None, :] @ np.abs(whole)).reshape(B, n, n)
    rounding = 2 * kappa * _left_over(_sum(expansion.most, patterns.sizes), np.abs(X))
    return value, slopes, rest + rounding


def _about_centre(centred: _Centred, modes: Sequence[int], bound_low: Array, bound_high: Array) -> tuple[Array, Array]:
    """Bounds of some modes drawn closer, in place; slopes (B, k, P) and remainders (B, k), infinite where invalid."""
    B, P = centred.r.shape
    slopes, remainder = np.zeros((B, len(modes), P)), np.full((B, len(modes)), np.inf)
    for _ in range(PASSES):
        for k, j in enumerate(modes):
            lam = centred.values[:, j]
            block = _block(centred, (j,), lam, bound_low[:, j], bound_high[:, j])
            slopes[:, k], remainder[:, k] = block.slopes[:, :, 0, 0], block.rho
            spread = (np.abs(slopes[:, k]) * centred.r).sum(axis=1) * INFLATED + block.rho + 8 * EPS * np.abs(lam)
            bound_low[:, j] = np.fmax(bound_low[:, j], lam - spread)
            bound_high[:, j] = np.fmin(bound_high[:, j], lam + spread)
    return slopes, remainder


@dataclass(frozen=True)
class _Block:
    """``Λ_J − λ̄ + Σ δ_p slopes_p``, slopes (B, P, |J|, |J|), within `rho` (B,) of the true block in norm."""

    slopes: Array
    rho: Array


def _block(centred: _Centred, own: tuple[int, ...], reference: Array, low: Array, high: Array) -> _Block:
    """The Schur complement on modes `own` while their eigenvalues stay within [low, high] (B,)."""
    n = centred.values.shape[1]
    J = list(own)
    C = [c for c in range(n) if c not in own]
    lam = reference[:, None, None, None]
    with np.errstate(all="ignore"):
        E_p = centred.K_p - lam * centred.M_p
        shift = np.maximum(high - reference, reference - low)[:, None, None]
        M_all = centred.M_rest + np.einsum("bp,bpij->bij", centred.r, np.abs(centred.M_p))
        rest = centred.K_rest + np.abs(lam[:, 0]) * centred.M_rest + shift * M_all
        all_of_it = rest + np.einsum("bp,bpij->bij", centred.r, np.abs(E_p))
        rho = rest[:, J][:, :, J].sum(axis=2).max(axis=1)
        if C:
            away = np.maximum(centred.values[:, C] - high[:, None], low[:, None] - centred.values[:, C])
            root = 1 / np.sqrt(np.where(away > 0, away, np.nan))
            q = (all_of_it[:, C][:, :, C] * root[:, :, None] * root[:, None, :]).sum(axis=2).max(axis=1)
            across = ((all_of_it[:, J][:, :, C] ** 2).sum(axis=1) * root**2).sum(axis=1)
            rho = rho + across / np.where(q < 1, 1 - q, np.nan)
        rho = np.where(np.isfinite(rho), rho * (1 + 16 * n * EPS), np.inf)
    return _Block(E_p[:, :, J][:, :, :, J], rho)


def _differences(
    centred: _Centred, pair: tuple[int, int], linear: tuple[Array, Array], bound_low: Array, bound_high: Array
) -> Iterator[tuple[Array, Array]]:
    """Bounds (B,) on the difference of two modes: each linear by itself, and together if they are neighbours.

    `linear` are the slopes (B, P) of the difference and what they leave out (B,).
    """
    r, values, (first, second) = centred.r, centred.values, pair
    gap = values[:, second] - values[:, first]
    with np.errstate(invalid="ignore"):
        spread = (np.abs(linear[0]) * r).sum(axis=1) + linear[1]
        spread = spread * INFLATED + 16 * EPS * (np.abs(values[:, first]) + np.abs(values[:, second]))
    yield gap - spread, gap + spread
    if second != first + 1:
        return
    middle = (values[:, first] + values[:, second]) / 2
    block = _block(centred, (first, second), middle, bound_low[:, first], bound_high[:, second])
    s = block.slopes
    with np.errstate(invalid="ignore"):
        tilt = (np.abs(s[:, :, 1, 1] - s[:, :, 0, 0]) * r).sum(axis=1) * INFLATED
        cross = (np.abs(s[:, :, 0, 1]) * r).sum(axis=1) * INFLATED
        slack = 2 * block.rho + 16 * EPS * (np.abs(values[:, first]) + np.abs(values[:, second]))
        yield np.maximum(gap - tilt, 0.0) - slack, np.hypot(gap + tilt, 2 * cross) * INFLATED + slack


def _steady_rows(family: Family) -> Iterator[Array]:
    """Scalings in which the entries of most rows vary by one common factor, so that their squares stay squares.

    Entries v_a, v_b of a row ask for ``s_a v_a ∝ s_b v_b``; what contradicts an earlier row is let go. In every
    group so joined one monomial stays open: the first row constant, or each coordinate unscaled in turn.
    """
    orders = (family.joins, family.joins[::-1])
    for anchor, joins in itertools.product((None, *range(family.size)), orders):
        scaling = np.zeros((family.size, len(family.signs)))
        for group, offset in _joined(family.size, len(family.signs), joins):
            root = anchor if anchor in group else group[0]
            own = np.zeros(len(family.signs))
            if anchor is None:
                known = ((join.first, join.entry) for join in joins if join.first in group)
                root, own = next(known, (root, own))
            scaling[list(group)] = offset - offset[group.index(root)] - own
        yield scaling


def _joined(size: int, width: int, joins: Sequence[Join]) -> list[tuple[tuple[int, ...], Array]]:
    """Groups of coordinates and their powers relative to the first."""
    groups: list[dict[int, Array]] = [{i: np.zeros(width)} for i in range(size)]
    home = list(range(size))
    for join in joins:
        a, b = home[join.first], home[join.second]
        if a == b:
            continue
        move = groups[a][join.first] + join.ahead - groups[b][join.second]
        for i, offset in groups[b].items():
            groups[a][i], home[i] = offset + move, a
        groups[b] = {}
    return [(tuple(group), np.array(list(group.values()))) for group in groups if group]


def _steady_diagonals(family: Family) -> Iterator[Array]:
    """Scalings in which the diagonal of the mass or of the stiffness is constant wherever it is one monomial."""
    for found in (family.mass, family.stiffness):
        scaling = np.zeros((family.size, len(family.signs)))
        for i in range(family.size):
            own = np.unique(found.powers[(found.row == i) & (found.column == i)], axis=0)
            if len(own) == 1:
                scaling[i] = np.where(family.signs, -own[0] / 2, 0.0)
        yield scaling


def over_variables(model: Model) -> Family:
    """The free variables as coordinates, within their ranges; fixed ones enter as numbers.

    Raises
    ------
    EnclosureError
        If nothing is free, or a square has dimensions that no equation at rest determines; it is named.
    """
    variables = model.parameters.variables
    free = [v for v in variables if v.free]
    numbers = {v.name: Monomial(v.low) for v in variables if not v.free}
    follows = {d.name: _replaced(d.follows, numbers) for d in model.parameters.dimensions}
    middle = np.array([[_inside(v.low, v.high) for v in variables]], float)

    def base(x: Array) -> Array:
        every = np.tile(middle, (len(x), 1))
        every[:, [v.free for v in variables]] = x
        return model.parameters.nominal.values(model.parameters.variable_point(every))

    return _family(model, follows, [(v.name, v.low, v.high, v.positive) for v in free], base)


def over_dimensions(model: Model, low: Array, high: Array) -> Family:
    """The base dimensions that vary as coordinates, each on its own, within [low, high] (D,).

    Raises
    ------
    EnclosureError
        If nothing varies, or a square has dimensions that no equation at rest determines; it is named.
    """
    dimensions = model.parameters.dimensions
    varies = high > low
    follows = {
        d.name: symbol(d.name) if vary else Monomial(float(value))
        for d, vary, value in zip(dimensions, varies, low, strict=True)
    }
    coordinates = [
        (d.name, float(a), float(b), d.positive)
        for d, vary, a, b in zip(dimensions, varies, low, high, strict=True)
        if vary
    ]

    def base(x: Array) -> Array:
        every = np.tile(low, (len(x), 1))
        every[:, varies] = x
        return every

    return _family(model, follows, coordinates, base)


def _inside(low: float, high: float) -> float:
    return float(np.sqrt(low * high)) if low > 0 else low + 0.6 * (high - low)


def _family(
    model: Model,
    follows: Mapping[str, Monomial],
    coordinates: Sequence[tuple[str, float, float, bool]],
    base: Callable[[Array], Array],
) -> Family:
    if not coordinates:
        raise EnclosureError("there is no box to look at: nothing is free to vary")
    names = tuple(name for name, *_ in coordinates)
    positive = np.array([p for *_, p in coordinates], bool)
    inside = np.array([[_inside(a, b) for _, a, b, _ in coordinates]], float)
    settled, matched = _settled(model, follows, base(inside))
    follows = {**follows, **settled}
    plain = _Table(model, follows, names, positive)
    rest = _rest(plain, matched, base) if plain.unknown else None
    full = plain if rest is None else _Table(model, follows, names + rest.names, np.append(positive, rest.positive))
    return Family(
        names=names,
        positive=positive,
        low=np.array([a for _, a, _, _ in coordinates], float),
        high=np.array([b for _, _, b, _ in coordinates], float),
        stiffness=full.multiplied_out(model.stiffness),
        mass=full.multiplied_out(model.mass),
        joins=(*full.joins(model.stiffness), *full.joins(model.mass)),
        part_mass=plain.sums(model.part_mass),
        part_cost=plain.sums(model.part_cost),
        size=model.size,
        rest=rest,
    )


def _replaced(monomial: Monomial, known: Mapping[str, Monomial]) -> Monomial:
    """Names replaced by what they follow."""
    result = Monomial(monomial.coefficient)
    for name, power in monomial.powers:
        result = result * known.get(name, symbol(name)) ** power
    return result


def _symbolic(table: Monomials, names: Sequence[str]) -> list[Monomial]:
    """Compiled monomials with their names again."""
    powers: list[dict[str, float]] = [{} for _ in range(len(table))]
    exponents = sp.coo_array(sp.csr_array(table.exponents))
    for i, j, e in zip(*exponents.coords, exponents.data, strict=True):
        powers[int(i)][names[int(j)]] = float(e)
    for i, dimensions, signed in zip(table.mixed, table.signed_dimension, table.signed_power, strict=True):
        powers[int(i)].update({names[int(j)]: float(e) for j, e in zip(dimensions, signed, strict=True) if e})
    return [Monomial(float(c), tuple(sorted(own.items()))) for c, own in zip(table.coefficients, powers, strict=True)]


def _settled(
    model: Model, follows: Mapping[str, Monomial], nominal: Array
) -> tuple[dict[str, Monomial], dict[str, int]]:
    """Dependent dimensions that are the same in the whole box, as numbers, and the equations of the others.

    Each unknown is matched with one of the equations it stands in. It changes if that equation names a
    dimension that does, or another unknown that does (block triangular form).
    """
    names, dependents = model.names, model.dependents
    if not len(dependents):
        return {}, {}
    terms = _symbolic(dependents.table, names)
    equations: list[set[str]] = [set() for _ in range(dependents.vanishing.size)]
    for term, place in zip(dependents.vanishing.term, dependents.vanishing.place, strict=True):
        equations[int(place)] |= {name for name, _ in terms[int(term)].powers}
    column = {name: k for k, name in enumerate(dependents.names)}
    pairs = [(e, column[name]) for e, named in enumerate(equations) for name in named if name in column]
    e, u = np.array(pairs, np.intp).reshape(-1, 2).T
    graph = sp.csr_array((np.ones(len(pairs)), (e, u)), shape=(len(equations), len(column)))
    matched = csgraph.maximum_bipartite_matching(graph, perm_type="row")
    changing = {name for name, monomial in follows.items() if monomial.powers}
    changing |= {name for name, k in column.items() if matched[k] < 0}
    growing = True
    while growing:
        new = {name for name, k in column.items() if name not in changing and equations[matched[k]] & changing}
        growing = bool(new)
        changing |= new
    values = at_rest(model, nominal).values[0]
    settled = {name: Monomial(float(values[names.index(name)])) for name in column if name not in changing}
    return settled, {name: int(matched[k]) for name, k in column.items() if name in changing and matched[k] >= 0}


def _rest(table: _Table, matched: Mapping[str, int], base: Callable[[Array], Array]) -> Rest:
    """The equations of what is found at rest and changes, and their slopes, over the box and the unknowns."""
    model = table.model
    lost = sorted(table.unknown & (set(model.dependents.names) - set(matched)))
    if lost:
        raise EnclosureError(
            f"no bound can be guaranteed: the term of `{table.owner(lost[0])}` holds `{lost[0]}`, which is found at "
            "rest and determined by no equation of its own"
        )
    terms = [_replaced(m, table.follows) for m in _symbolic(model.dependents.table, model.names)]
    equations: list[list[Monomial]] = [[] for _ in range(model.dependents.vanishing.size)]
    for term, place in zip(model.dependents.vanishing.term, model.dependents.vanishing.place, strict=True):
        equations[int(place)].append(terms[int(term)])
    names = _reached(sorted(table.unknown), {name: equations[e] for name, e in matched.items()})
    places = np.array([model.names.index(name) for name in names], np.intp)
    full = _Table(model, table.follows, table.names + names, np.append(table.positive, model.positive[places]))
    own = [(i, m) for i, name in enumerate(names) for m in equations[matched[name]]]
    slopes = [
        (i, names.index(name), power * m * symbol(name) ** -1)
        for i, m in own
        for name, power in m.powers
        if name in names
    ]
    return Rest(
        model=model,
        names=names,
        places=places,
        positive=model.positive[places],
        equations=full.contributions([(i, 0, m) for i, m in own]),
        slopes=full.contributions(slopes),
        base=base,
    )


def _reached(names: Sequence[str], equations: Mapping[str, Sequence[Monomial]]) -> tuple[str, ...]:
    """Unknowns, and those that their equations name in turn."""
    known = list(names)
    for name in known:
        named = {other for m in equations[name] for other, _ in m.powers if other in equations}
        known += sorted(named - set(known))
    return tuple(known)


@dataclass(frozen=True)
class _Table:
    """Monomials of a model over the coordinates of a box."""

    model: Model
    follows: Mapping[str, Monomial]
    names: tuple[str, ...]
    positive: NDArray[np.bool_]

    @cached_property
    def monomials(self) -> list[Monomial]:
        """In the order of the model."""
        return [_replaced(m, self.follows) for m in _symbolic(self.model.monomials, self.model.names)]

    def powers(self, monomials: Sequence[Monomial]) -> Array:
        """Powers over the coordinates, shape (N, P)."""
        index = {name: p for p, name in enumerate(self.names)}
        table = np.zeros((len(monomials), len(self.names)))
        for i, monomial in enumerate(monomials):
            for name, power in monomial.powers:
                table[i, index[name]] += power
        return table

    def multiplied_out(self, squares: Squares) -> Contributions:
        """``Σ_t w_t r_t r_tᵀ`` entry by entry."""
        rows = self._rows(squares)
        found = [
            (a, b, self.monomials[w] * v * u)
            for w, row in zip(squares.weight, rows, strict=True)
            for a, v in row
            for b, u in row
        ]
        return self.contributions(found)

    def contributions(self, found: Sequence[tuple[int, int, Monomial]]) -> Contributions:
        """Monomials at (row, column)."""
        places = np.array([(a, b) for a, b, _ in found], np.intp).reshape(-1, 2)
        coefficients = np.array([m.coefficient for *_, m in found], float)
        return Contributions(self.powers([m for *_, m in found]), places[:, 0], places[:, 1], coefficients)

    @cached_property
    def unknown(self) -> frozenset[str]:
        """Names in any square that are no coordinates: what is found at rest and changes."""
        squares = [self._rows(squares) for squares in (self.model.mass, self.model.stiffness)]
        weights = [self.monomials[int(w)] for s in (self.model.mass, self.model.stiffness) for w in s.weight]
        entries = [m for rows in squares for row in rows for _, m in row]
        return frozenset(name for m in (*weights, *entries) for name, _ in m.powers if name not in self.names)

    def owner(self, unknown: str) -> str:
        """The first part with a square that holds a name."""
        for squares in (self.model.stiffness, self.model.mass):
            for t, row in enumerate(self._rows(squares)):
                held = (self.monomials[int(squares.weight[t])], *(m for _, m in row))
                if any(unknown == name for m in held for name, _ in m.powers):
                    return squares.owner[t]
        raise KeyError(unknown)

    def _rows(self, squares: Squares) -> list[list[tuple[int, Monomial]]]:
        """Entries of every square."""
        rows: list[list[tuple[int, Monomial]]] = [[] for _ in range(len(squares))]
        for t, column, entry in zip(squares.entry_row, squares.entry_column, squares.entry, strict=True):
            rows[int(t)].append((int(column), self.monomials[int(entry)]))
        return rows

    def joins(self, squares: Squares) -> Iterator[Join]:
        """What rows of single monomials ask of the scaling of displacements."""
        for row in self._rows(squares):
            if len({a for a, _ in row}) < len(row):
                continue
            powers = self.powers([m for _, m in row])
            if (powers[:, ~self.positive] != 0).any():
                continue
            for k in range(1, len(row)):
                yield Join(row[0][0], row[k][0], powers[0] - powers[k], powers[0])

    def sums(self, sums: Sums) -> tuple[Contributions | None, ...]:
        """Each sum at place (0, 0); None where it depends on what is found at rest."""
        return tuple(self._sum(sums.term[sums.place == s]) for s in range(sums.size))

    def _sum(self, terms: IntArray) -> Contributions | None:
        own = [self.monomials[int(i)] for i in terms]
        if any(name not in self.names for monomial in own for name, _ in monomial.powers):
            return None
        return self.contributions([(0, 0, m) for m in own])
