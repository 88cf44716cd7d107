"""The book in which bodies and links enter their terms while an assembly is put together.

Coordinates are the displacements a person would report: of a pendulum the horizontal displacement of its bob,
of a mass its travel, of a platform those of its reference point and its rotations. Only a
geared rotor has no coordinate of its own: its motion is a row over that of its mate.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

from inverse.assembly.algebra import ONE, Monomial, Polynomial, Row, Square, plus, symbol, times
from inverse.assembly.parameters import Amount, Register
from inverse.units import Kind

Motion = dict[str, Row]
"""Displacement of a point along each axis it can move on, as rows over the coordinates."""

Place = Amount | tuple[Amount, ...] | None
"""Where a link is tied: a depth, coordinates from a reference point, or nowhere in particular."""


@dataclass(frozen=True, slots=True)
class Load:
    """A force found by static equilibrium, under a dimension's name, and the work it does.

    The link carries ``force = sign · (rate · elongation + preload)``.
    """

    name: str
    sign: float
    elongation: Row
    rate: Monomial
    preload: Monomial | None


@dataclass(frozen=True, slots=True)
class Definition:
    """A dependent dimension: ``name = (Σ terms)^power`` to start from, and the polynomials that must vanish."""

    name: str
    positive: bool
    seed: Polynomial
    seed_power: float
    vanishing: Polynomial


@dataclass(frozen=True, slots=True)
class Segment:
    """One hanging length: its angle's row, and what a moved rest position makes of it."""

    pendulum: str
    angle: Row
    length: Monomial
    sine: Polynomial
    cosine: Monomial


@dataclass(frozen=True, slots=True)
class Pull:
    """A horizontal spring in an assembly that its preload moves: ends as sums of ``length · sine``."""

    name: str
    rate: Monomial
    preload: Monomial | None
    lever: tuple[tuple[Segment, Monomial, float], ...]
    slides: tuple[tuple[str, float], ...]


@dataclass(slots=True)
class Book:
    """Everything entered so far.

    `geometric` are the squares whose weight holds a force found at rest; `hangings` are, for each pendulum,
    the hanging lengths from the top down to it and the motion of its bob.
    """

    register: Register
    gravity: Monomial
    weightless: bool
    moved: frozenset[str]
    coordinates: list[str] = field(default_factory=list)
    components: dict[str, Row] = field(default_factory=dict)
    mass: list[Square] = field(default_factory=list)
    stiffness: list[Square] = field(default_factory=list)
    damping: list[Square] = field(default_factory=list)
    geometric: list[Square] = field(default_factory=list)
    hanging: list[tuple[Segment, Monomial]] = field(default_factory=list)
    weight: list[tuple[str, Monomial, Row]] = field(default_factory=list)
    preloads: list[tuple[Monomial, Row]] = field(default_factory=list)
    loads: dict[str, Load] = field(default_factory=dict)
    pulls: list[Pull] = field(default_factory=list)
    definitions: list[Definition] = field(default_factory=list)
    hangings: dict[str, tuple[list[Segment], Motion]] = field(default_factory=dict)
    part_mass: dict[str, list[Monomial]] = field(default_factory=dict)
    part_cost: dict[str, list[Monomial]] = field(default_factory=dict)

    def dimension(
        self,
        part: str,
        key: str,
        kind: Kind,
        amount: Amount,
        *,
        signed: bool = False,
        sign_apart: bool = False,
    ) -> Monomial:
        """Enter a dimension of a part."""
        return self.register.take(part, key, kind, amount, signed=signed, sign_apart=sign_apart)

    def coordinate(self, body: str, axis: str) -> Row:
        """A new coordinate, which is also the component of that name."""
        name = f"{body}.{axis}"
        self.coordinates.append(name)
        self.components[name] = {name: (ONE,)}
        return self.components[name]

    def weigh(self, part: str, mass: Monomial) -> None:
        """Add to the mass of a part."""
        self.part_mass.setdefault(part, []).append(mass)

    def inertia(self, owner: str, axis: str, mass: Monomial, row: Row) -> None:
        """A mass that moves as `row`; one that cannot move leaves no term."""
        if row:
            self.mass.append(Square(owner, axis, mass, row))

    def bar_inertia(self, owner: str, axis: str, mass: Monomial, first: Row, second: Row) -> None:
        """A mass spread evenly between two ends whose motion varies linearly: m/6 [[2, 1], [1, 2]].

        As squares: m/4 (a + b)² + m/12 (a − b)², or m/3 b² where one end is still.
        """
        if not first or not second:
            self.inertia(owner, axis, mass / 3, first or second)
            return
        self.inertia(owner, axis, mass / 4, plus(first, second))
        self.inertia(owner, axis, mass / 12, plus(first, times(-1.0, second)))

    def carry(self, owner: str, mass: Monomial, vertical: Row) -> None:
        """A weight that static equilibrium must carry."""
        if vertical and not self.weightless:
            self.weight.append((owner, mass * self.gravity, vertical))

    def force(self, load: Load) -> Monomial:
        """The force of a link at rest as a dimension of that link."""
        self.loads[load.name] = load
        return symbol(load.name)


def along(direction: Sequence[float], axes: Sequence[str], motion: dict[str, Row]) -> Row:
    """Motion of a point projected on a unit vector."""
    return plus(*(times(n, motion[axis]) for n, axis in zip(direction, axes, strict=True) if n and axis in motion))
