"""Seeded inverse eigenvalue problems with a known hidden answer, as plain arrays.

Every family draws the hidden design log-uniformly from ranges a factor `RANGE` wide and asks for
the natural frequencies that this design has. Sizes are numbers of bodies, ``n``.

==============  ======================================================  ========  ========
family          assembly                                                unknowns  targets
==============  ======================================================  ========  ========
chain           unit masses, fixed at one end, free at the other        n         n
tree            unit masses on a random recursive tree, whose root has  n         n - 1
                a spring to the ground; all modes but the lowest
ring            unit masses in a closed ring, one of them on a known    n         n
                unit spring to the ground
pendulum row    unit bobs in displacement, lengths and ties unknown     2 n - 1   n
rotor train     free at both ends, inertias and shafts unknown          2 n - 1   n - 1
==============  ======================================================  ========  ========
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

RANGE = 4.0
"""Upper end over lower end of every unknown."""

COUNTS: Mapping[int, int] = {3: 12, 6: 12, 10: 12, 20: 6, 30: 6, 60: 3}
"""Number of bodies, and how many problems of that size make up the benchmark."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Springs:
    """``K = Σ_t exp(x_t) b_t b_tᵀ + K_0`` and ``M = diag(exp(x_m))``.

    The first unknowns are the logarithms of the rates, the others those of the masses; masses
    that are not unknown are one.
    """

    patterns: Array  # (t, n), the rows are b_t
    ground: Array  # (n, n), K_0
    masses_unknown: bool = False
    skipped: int = 0  # lowest modes that are not asked for

    @property
    def unknowns(self) -> int:
        """Number of variables."""
        springs, bodies = self.patterns.shape
        return springs + bodies * self.masses_unknown

    def log_eigenvalues(self, points: Array) -> tuple[Array, Array]:
        """Logarithms of the eigenvalues asked for (B, m), and derivatives (B, m, p)."""
        springs, bodies = self.patterns.shape
        rates = np.exp(points[:, :springs])
        products = (self.patterns[:, :, None] * self.patterns[:, None, :]).reshape(springs, -1)
        stiffness = (rates @ products).reshape(-1, bodies, bodies) + self.ground
        if self.masses_unknown:
            scale = np.exp(-0.5 * points[:, springs:])
            stiffness *= scale[:, :, None] * scale[:, None, :]
        values, vectors = np.linalg.eigh(stiffness)
        values, vectors = values[:, self.skipped :], vectors[:, :, self.skipped :]
        shapes = scale[:, :, None] * vectors if self.masses_unknown else vectors
        energies = (self.patterns @ shapes) ** 2 * rates[:, :, None] / values[:, None, :]
        if self.masses_unknown:
            energies = np.concatenate([energies, -(vectors**2)], axis=1)
        return np.log(values), np.swapaxes(energies, 1, 2)


@dataclass(frozen=True, slots=True, kw_only=True)
class Problem:
    """A bounded system of equations that has at least the solution `hidden`."""

    family: str
    bodies: int
    seed: int
    residuals: Callable[[Array], tuple[Array, Array]]
    lower: Array
    upper: Array
    hidden: Array

    @property
    def description(self) -> str:
        """One line for tables and failure messages."""
        return f"{self.family} of {self.bodies}, seed {self.seed}"


def _edges(pairs: list[tuple[int, int]], bodies: int) -> Array:
    """Rows e_a − e_b; a negative second number is the ground."""
    rows = np.zeros((len(pairs), bodies))
    for row, (a, b) in zip(rows, pairs, strict=True):
        row[a] = 1.0
        if b >= 0:
            row[b] = -1.0
    return rows


def _chain(bodies: int, rng: np.random.Generator) -> Springs:
    pairs = [(i, i - 1) for i in range(bodies)]
    return Springs(patterns=_edges(pairs, bodies), ground=np.zeros((bodies, bodies)))


def _tree(bodies: int, rng: np.random.Generator) -> Springs:
    pairs = [(i, int(rng.integers(i)) if i else -1) for i in range(bodies)]
    return Springs(patterns=_edges(pairs, bodies), ground=np.zeros((bodies, bodies)), skipped=1)


def _ring(bodies: int, rng: np.random.Generator) -> Springs:
    pairs = [(i, (i + 1) % bodies) for i in range(bodies)]
    ground = np.zeros((bodies, bodies))
    ground[0, 0] = 1.0
    return Springs(patterns=_edges(pairs, bodies), ground=ground)


def _pendulum_row(bodies: int, rng: np.random.Generator) -> Springs:
    # The unknowns of a pendulum are the logarithms of m g / L.
    pairs = [(i, -1) for i in range(bodies)] + [(i, i - 1) for i in range(1, bodies)]
    return Springs(patterns=_edges(pairs, bodies), ground=np.zeros((bodies, bodies)))


def _rotor_train(bodies: int, rng: np.random.Generator) -> Springs:
    pairs = [(i, i - 1) for i in range(1, bodies)]
    return Springs(
        patterns=_edges(pairs, bodies),
        ground=np.zeros((bodies, bodies)),
        masses_unknown=True,
        skipped=1,
    )


FAMILIES: Mapping[str, Callable[[int, np.random.Generator], Springs]] = {
    "chain": _chain,
    "tree": _tree,
    "ring": _ring,
    "pendulum row": _pendulum_row,
    "rotor train": _rotor_train,
}


def make_problem(family: str, bodies: int, seed: int) -> Problem:
    """Draw one problem; the same arguments give the same problem."""
    rng = np.random.default_rng([list(FAMILIES).index(family), bodies, seed])
    springs = FAMILIES[family](bodies, rng)
    upper = np.full(springs.unknowns, 0.5 * np.log(RANGE))
    hidden = rng.uniform(-upper, upper)
    wanted = springs.log_eigenvalues(hidden[None])[0]

    def residuals(points: Array) -> tuple[Array, Array]:
        values, derivatives = springs.log_eigenvalues(points)
        return values - wanted, derivatives

    return Problem(
        family=family,
        bodies=bodies,
        seed=seed,
        residuals=residuals,
        lower=-upper,
        upper=upper,
        hidden=hidden,
    )
