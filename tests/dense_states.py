"""States made plainly from dense matrices, with a chain rule written out: what objectives are tested against.

``M = Σ e^{z_i} M_i`` by owner and ``K = Σ e^{z_i} K_i``, with constant symmetric ``M_i`` and ``K_i``; terms without a
variable have the factor one. Coordinates are the components.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from scipy.linalg import eigh

from objectives.identity import identify
from objectives.state import (
    Changes,
    Displacement,
    Eigenvalues,
    Energy,
    FrozenDisplacement,
    Like,
    MassBlock,
    MassForm,
    OwnerForm,
    PartCost,
    PartMass,
    ReleasedAmplitudes,
    Sag,
    StiffnessForm,
)


@dataclass(frozen=True)
class Term:
    """``e^{z_i} pattern``, of an owner in M, of none in K."""

    pattern: np.ndarray
    variable: int | None = None
    owner: str | None = None


@dataclass(frozen=True)
class Structure:
    """Components, terms, and how many of the lowest modes are rigid."""

    components: tuple[str, ...]
    terms: tuple[Term, ...]
    rigid: int = 0
    likes: tuple[Like, ...] = ()

    def at(self, *z: Sequence[float]) -> "DenseState":
        """A batch of builds."""
        return DenseState(self, np.atleast_2d(np.asarray(z, float)))


@dataclass
class DenseState:
    """A batch of builds, one dense eigenproblem each."""

    structure: Structure
    z: np.ndarray
    rigid: int = field(init=False)
    builds: int = field(init=False)

    def __post_init__(self) -> None:
        self.rigid, self.builds = self.structure.rigid, len(self.z)
        solved = [eigh(self.matrix(b, False), self.matrix(b, True)) for b in range(self.builds)]
        self.lam = np.array([values for values, _ in solved])
        self.lam[:, : self.rigid] = 0.0
        self.phi = np.array([vectors for _, vectors in solved])

    def matrix(self, b: int, mass: bool, owner: str | None = None, by: int | None = None) -> np.ndarray:
        """M or K, of one owner where given, or the derivative by one variable."""
        n = len(self.structure.components)
        total = np.zeros((n, n))
        for term in self.structure.terms:
            mine = (term.owner is not None) == mass and owner in (None, term.owner)
            if mine and (by is None or term.variable == by):
                total += (1.0 if term.variable is None else np.exp(self.z[b, term.variable])) * term.pattern
        return total

    @cached_property
    def identification(self):
        return identify(self.structure.likes, self)

    def index(self, mode):
        if isinstance(mode, Like):
            return self.identification.index[mode]
        place = self.rigid + mode - 1
        return np.full(self.builds, place if mode > 0 and place < self.lam.shape[1] else -1)

    def __getitem__(self, quantity):
        if quantity == Eigenvalues():
            return self.lam
        return np.array([self.value(b, quantity) for b in range(self.builds)])

    def place(self, component: str) -> int:
        return self.structure.components.index(component)

    def value(self, b: int, quantity):
        phi, M = self.phi[b], self.matrix(b, True)
        match quantity:
            case Displacement(component) | FrozenDisplacement(component):
                return phi[self.place(component)]
            case Energy(owner):
                return np.diag(phi.T @ self.matrix(b, True, owner) @ phi)
            case MassBlock(components):
                chosen = [self.place(c) for c in components]
                return M[np.ix_(chosen, chosen)]
            case StiffnessForm():
                return np.diag(self.lam[b])
            case MassForm():
                return np.eye(len(phi))
            case OwnerForm(owner):
                return phi.T @ self.matrix(b, True, owner) @ phi
            case ReleasedAmplitudes(component):
                return phi.T @ M[:, self.place(component)]
            case Sag(of, force):
                return np.linalg.inv(self.matrix(b, False))[self.place(of), self.place(of)] * force
            case PartMass(part) | PartCost(part):
                return np.trace(self.matrix(b, True, part))
            case Changes():
                return self.z[b]

    def slope(self, b: int, quantity, i: int):
        """Derivative of a quantity over ``z_i``."""
        phi, lam = self.phi[b], self.lam[b]
        dM, dK = self.matrix(b, True, by=i), self.matrix(b, False, by=i)
        match quantity:
            case Eigenvalues():
                return np.array([p @ (dK - x * dM) @ p for x, p in zip(lam, phi.T, strict=True)])
            case Displacement(component):
                return self._turn(b, dM, dK)[self.place(component)]
            case Energy(owner):
                own, change = self.matrix(b, True, owner), self.matrix(b, True, owner, by=i)
                return np.diag(2 * phi.T @ own @ self._turn(b, dM, dK) + phi.T @ change @ phi)
            case MassBlock(components):
                chosen = [self.place(c) for c in components]
                return dM[np.ix_(chosen, chosen)]
            case StiffnessForm():
                return phi.T @ dK @ phi
            case MassForm():
                return phi.T @ dM @ phi
            case OwnerForm(owner):
                return phi.T @ self.matrix(b, True, owner, by=i) @ phi
            case FrozenDisplacement() | ReleasedAmplitudes():
                # Components are coordinates: nothing but the shapes could change these.
                return np.zeros(len(lam))
            case Sag(of, force):
                flexibility = np.linalg.inv(self.matrix(b, False))[self.place(of)]
                return -flexibility @ dK @ flexibility * force
            case PartMass(part) | PartCost(part):
                return np.trace(self.matrix(b, True, part, by=i))
            case Changes():
                return np.eye(self.z.shape[1])[i]

    def _turn(self, b: int, dM: np.ndarray, dK: np.ndarray) -> np.ndarray:
        """Derivatives of the shapes: Fox and Kapoor 1968, AIAA J. 6, 2426, their second formulation."""
        phi, lam, turned = self.phi[b], self.lam[b], np.zeros_like(self.phi[b])
        for j, x in enumerate(lam):
            turned[:, j] = -0.5 * (phi[:, j] @ dM @ phi[:, j]) * phi[:, j]
            for i, other in enumerate(lam):
                if i != j:
                    turned[:, j] += phi[:, i] * (phi[:, i] @ (dK - x * dM) @ phi[:, j]) / (x - other)
        return turned

    def jacobian(self, measured) -> np.ndarray:
        """Derivatives of measured values over ``z``, shape (B, k, P)."""
        B, k = measured.values.shape
        out = np.zeros((B, k, self.z.shape[1]))
        for quantity, gradient in measured.gradient.items():
            assert gradient.shape[:2] == (B, k)
            gradient = np.nan_to_num(gradient)
            for b in range(B):
                for i in range(out.shape[2]):
                    slope = self.slope(b, quantity, i)
                    out[b, :, i] += np.tensordot(gradient[b], slope, np.ndim(slope))
        return out


@dataclass
class GivenState:
    """One build whose quantities are given outright."""

    values: Mapping
    rigid: int = 0
    builds: int = 1

    def __getitem__(self, quantity):
        return np.asarray(self.values[quantity], float)[None]

    def index(self, mode):
        return np.full(1, self.rigid + mode - 1)


def unit(n: int, i: int) -> np.ndarray:
    return np.outer(np.eye(n)[i], np.eye(n)[i])


def between(n: int, i: int, j: int) -> np.ndarray:
    return np.outer(np.eye(n)[i] - np.eye(n)[j], np.eye(n)[i] - np.eye(n)[j])


def row(n: int = 4) -> Structure:
    """Masses a, b, … on springs of their own and tied to the next; every mass, spring and tie has its variable."""
    names = "abcdefgh"[:n]
    masses = tuple(Term(unit(n, i), i, name) for i, name in enumerate(names))
    springs = tuple(Term(unit(n, i), n + i) for i in range(n))
    ties = tuple(Term(between(n, i, i + 1), 2 * n + i) for i in range(n - 1))
    return Structure(tuple(f"{name}.x" for name in names), masses + springs + ties)


def row_point(n: int = 4, tie: float = 0.3, seed: int = 1) -> np.ndarray:
    """A point of `row` at which nothing is equal by accident."""
    z = 0.3 * np.random.default_rng(seed).standard_normal(3 * n - 1)
    z[2 * n :] += np.log(tie)
    return z


def ring() -> Structure:
    """Three masses tied to each other: at equal ones λ = 0, 3, 3 (exact)."""
    masses = tuple(Term(unit(3, i), i, name) for i, name in enumerate("abc"))
    ties = tuple(Term(between(3, i, (i + 1) % 3), 3 + i) for i in range(3))
    return Structure(("a.x", "b.x", "c.x"), masses + ties, rigid=1)


def hung() -> Structure:
    """Mass matrix with coupling inside each owner: two rods end to end, in the displacements of their ends."""
    first = np.array([[1.0, 0.0, 0.0], [0.0, 0.0, 0.0], [0.0, 0.0, 0.0]]) / 3
    second = np.array([[2.0, 1.0, 0.0], [1.0, 2.0, 0.0], [0.0, 0.0, 0.0]]) / 6
    third = np.array([[0.0, 0.0, 0.0], [0.0, 2.0, 1.0], [0.0, 1.0, 2.0]]) / 6
    return Structure(
        ("a.x", "b.x", "c.x"),
        (
            Term(first, 0, "a"),
            Term(second, 1, "b"),
            Term(third, 2, "c"),
            Term(unit(3, 0), 3),
            Term(between(3, 0, 1), 4),
            Term(between(3, 1, 2), 5),
        ),
    )


def chain(masses: Sequence[float], rates: Sequence[float]) -> Structure:
    """A free chain of masses m0, m1, …; no variables."""
    n = len(masses)
    return Structure(
        tuple(f"m{i}.x" for i in range(n)),
        (
            *(Term(m * unit(n, i), None, f"m{i}") for i, m in enumerate(masses)),
            *(Term(k * between(n, i, i + 1)) for i, k in enumerate(rates)),
        ),
        rigid=1,
    )


def two(detuning: float = 0.0, coupling: float = 0.02) -> tuple[Structure, np.ndarray]:
    """Two unit masses on springs 1 and 1 + detuning, tied; variables m_a, m_b, k_a, k_b, tie, and their values."""
    return row(2), np.log([1.0, 1.0, 1.0, 1.0 + detuning, coupling])
