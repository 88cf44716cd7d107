"""Bodies: each knows its coordinates, its mass terms, its weight, and how a point fixed to it moves.

Symbols of the terms are those of the table in DEVELOPERS.md. Rotations follow the right-hand rule with z up
and x along the row, so that a point at (x, z) of a plane platform moves by ``z·ry`` along x and by ``−x·ry`` along z.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, Literal, Protocol

from inverse.assembly.algebra import ONE, Monomial, Row, Square, minus, plus, symbol, times
from inverse.assembly.book import Book, Motion, Place, Segment
from inverse.assembly.parameters import Amount
from inverse.errors import ModelError
from inverse.units import Kind

SPACE = ("x", "y", "z")
ROTATIONS = ("rx", "ry", "rz")


class Body(Protocol):
    """What the assembly asks of a body."""

    @property
    def name(self) -> str:
        """Unique among parts."""
        ...

    axes: ClassVar[tuple[str, ...]]

    def enter(self, book: Book) -> None:
        """Write the body's coordinates and terms."""
        ...

    def motion(self, book: Book, owner: str, key: str, place: Place) -> Motion:
        """How the point moves where `owner` (a link) is tied; `key` names its dimension there."""
        ...


@dataclass(frozen=True, slots=True, kw_only=True)
class Mass:
    """A body that slides along one axis."""

    axes: ClassVar[tuple[str, ...]] = ("x", "z")
    name: str
    mass: Amount
    moves: Literal["horizontal", "vertical"] = "horizontal"

    @property
    def axis(self) -> str:
        """The axis it slides along."""
        return "x" if self.moves == "horizontal" else "z"

    def enter(self, book: Book) -> None:
        """Mass m on its own coordinate."""
        m = book.dimension(self.name, "mass", Kind.MASS, self.mass)
        row = book.coordinate(self.name, self.axis)
        book.weigh(self.name, m)
        book.inertia(self.name, self.axis, m, row)
        if self.axis == "z":
            book.carry(self.name, m, row)

    def motion(self, book: Book, owner: str, key: str, place: Place) -> Motion:
        """Every point of it moves alike."""
        return {self.axis: book.components[f"{self.name}.{self.axis}"]}


@dataclass(frozen=True, slots=True, kw_only=True)
class Rotor:
    """A body that turns about the shaft line."""

    axes: ClassVar[tuple[str, ...]] = ("r",)
    name: str
    inertia: Amount

    def enter(self, book: Book) -> None:
        """Moment of inertia J on its rotation, which a gear may have tied to another rotor's."""
        J = book.dimension(self.name, "inertia", Kind.INERTIA, self.inertia)
        component = f"{self.name}.r"
        row = book.components.get(component) or book.coordinate(self.name, "r")
        book.inertia(self.name, "r", J, row)

    def motion(self, book: Book, owner: str, key: str, place: Place) -> Motion:
        """Its rotation."""
        return {"r": book.components[f"{self.name}.r"]}


@dataclass(frozen=True, slots=True, kw_only=True)
class Pendulum:
    """A bob on a uniform rod, hanging from a fixed pivot, another pendulum's bob or a sliding mass.

    Its coordinate x is the horizontal displacement of the bob from rest; with the rest angle θ₀ (zero unless a
    preload moves it), c = cos θ₀ and s = sin θ₀, its angle moves by (x − x_pivot)/(L c).
    """

    axes: ClassVar[tuple[str, ...]] = ("x",)
    name: str
    mass: Amount
    length: Amount
    rod_mass: Amount | None = None
    bob_radius: Amount | None = None
    hung_from: str | None = None

    def enter(self, book: Book) -> None:
        """Bob m, solid sphere ⅖ m r², rod m_r, and the weight each hanging length carries."""
        m = book.dimension(self.name, "mass", Kind.MASS, self.mass)
        L = book.dimension(self.name, "length", Kind.LENGTH, self.length)
        x = book.coordinate(self.name, "x")
        pivot, chain = self._pivot(book), self._chain(book)
        segment = self._segment(book, L, minus(x, pivot.get("x", {})))
        own = {"x": x, "z": plus(pivot.get("z", {}), self._rise(segment))}
        book.hangings[self.name] = ([*chain, segment], own)
        book.weigh(self.name, m)
        for axis in ("x", "z"):
            book.inertia(self.name, "x", m, own[axis])
        self._hang(book, m, [*chain, segment], 1.0)
        if self.bob_radius is not None:
            r = book.dimension(self.name, "bob_radius", Kind.LENGTH, self.bob_radius, signed=True)
            book.inertia(self.name, "x", 0.4 * m * r**2, segment.angle)
        if self.rod_mass is not None:
            m_r = book.dimension(self.name, "rod_mass", Kind.MASS, self.rod_mass, signed=True)
            book.weigh(self.name, m_r)
            for axis in ("x", "z"):
                book.bar_inertia(self.name, "x", m_r, pivot.get(axis, {}), own[axis])
            self._hang(book, m_r, chain, 1.0)
            self._hang(book, m_r, [segment], 0.5)

    def motion(self, book: Book, owner: str, key: str, place: Place) -> Motion:
        """Horizontal motion of a point `place` below the pivot, of the bob if nothing is said."""
        chain, own = book.hangings[self.name]
        if place is None:
            return {"x": own["x"]}
        if isinstance(place, tuple):
            raise ModelError(f"`{owner}.{key}`: a tie on pendulum `{self.name}` has one depth, not coordinates")
        h = book.dimension(owner, key, Kind.LENGTH, place, signed=True)
        lever = times(h * chain[-1].cosine, chain[-1].angle)
        return {"x": plus(self._pivot(book).get("x", {}), lever)}

    def _pivot(self, book: Book) -> Motion:
        if self.hung_from is None:
            return {}
        if self.hung_from in book.hangings:
            return book.hangings[self.hung_from][1]
        if f"{self.hung_from}.x" not in book.components or f"{self.hung_from}.z" in book.components:
            raise ModelError(
                f"pendulum `{self.name}` hangs from `{self.hung_from}`, which gives its swing no first-order coupling: "
                "hang it from another pendulum or from a mass that moves horizontally"
            )
        return {"x": book.components[f"{self.hung_from}.x"]}

    def _chain(self, book: Book) -> list[Segment]:
        hangings = book.hangings
        return hangings[self.hung_from][0] if self.hung_from in hangings else []

    def _segment(self, book: Book, L: Monomial, swing: Row) -> Segment:
        moved = self.name in book.moved
        c = symbol(f"{self.name}.rest_cosine") if moved else ONE
        s = (symbol(f"{self.name}.rest_sine"),) if moved else ()
        return Segment(self.name, times((L * c) ** -1, swing), L, s, c)

    def _rise(self, segment: Segment) -> Row:
        """Vertical motion of the bob relative to its pivot, L s per angle."""
        return plus(*(times(segment.length * s, segment.angle) for s in segment.sine))

    def _hang(self, book: Book, mass: Monomial, chain: list[Segment], share: float) -> None:
        """Weight that straightens every length above it: share · m g L c per angle."""
        for segment in [] if book.weightless else chain:
            book.hanging.append((segment, share * mass * book.gravity * segment.length))


@dataclass(frozen=True, slots=True, kw_only=True)
class Platform:
    """A rigid body on links, in the plane (z, ry) or in space (six components), moved at its reference point."""

    axes: ClassVar[tuple[str, ...]] = (*SPACE, *ROTATIONS)
    name: str
    mass: Amount
    inertia: tuple[Amount, ...]
    centre: tuple[Amount, ...] = ()

    @property
    def plane(self) -> bool:
        """Whether it moves in the x–z plane only: one moment of inertia was given."""
        return len(self.inertia) == 1

    def enter(self, book: Book) -> None:
        """Mass at its centre, inertia about it, and the overturning work of its weight."""
        for axis in ("z", "ry") if self.plane else (*SPACE, *ROTATIONS):
            book.coordinate(self.name, axis)
        m = book.dimension(self.name, "mass", Kind.MASS, self.mass)
        place = self._place(book, self.name, "centre", self.centre)
        centre = self._displacement(book, place)
        book.weigh(self.name, m)
        for axis, row in centre.items():
            book.inertia(self.name, axis, m, row)
        book.carry(self.name, m, centre["z"])
        self._enter_inertia(book)
        if "z" in place and not book.weightless:
            self.tilt(book, self.name, -m * book.gravity * place["z"])

    def _enter_inertia(self, book: Book) -> None:
        if self.plane:
            J = book.dimension(self.name, "inertia", Kind.INERTIA, self.inertia[0])
            book.inertia(self.name, "ry", J, book.components[f"{self.name}.ry"])
            return
        for key, axis, amount in zip(("xx", "yy", "zz"), ROTATIONS, self.inertia, strict=False):
            J = book.dimension(self.name, f"inertia.{key}", Kind.INERTIA, amount)
            book.inertia(self.name, axis, J, book.components[f"{self.name}.{axis}"])
        pairs = (("xy", "rx", "ry"), ("yz", "ry", "rz"), ("zx", "rz", "rx"))
        for (key, first, second), amount in zip(pairs, self.inertia[3:], strict=False):
            J = book.dimension(self.name, f"inertia.{key}", Kind.INERTIA, amount, signed=True)
            a, b = (book.components[f"{self.name}.{axis}"] for axis in (first, second))
            # 2 J a b as a difference of squares keeps every term of one form.
            book.inertia(self.name, "", J / 2, plus(a, b))
            book.inertia(self.name, "", -J / 2, minus(a, b))

    def tilt(self, book: Book, owner: str, moment: Monomial) -> None:
        """Second-order work of a vertical force `moment / z` at height z: z F on each horizontal rotation."""
        for axis in ("ry",) if self.plane else ("rx", "ry"):
            row = book.components[f"{self.name}.{axis}"]
            book.geometric.append(Square(owner, axis, moment, row))

    def height(self, book: Book, owner: str, key: str, place: Place) -> Monomial | None:
        """The z coordinate of the point where `owner` is tied, None at the height of the reference point."""
        return self._place(book, owner, key, place).get("z")

    def motion(self, book: Book, owner: str, key: str, place: Place) -> Motion:
        """Motion of a point given from the reference point: ``u + ω × r``."""
        return self._displacement(book, self._place(book, owner, key, place))

    def _place(self, book: Book, owner: str, key: str, place: Place) -> dict[str, Monomial]:
        values = place if isinstance(place, tuple) else () if place is None else (place,)
        allowed = (1, 2) if self.plane else (3,)
        if values and len(values) not in allowed:
            raise ModelError(
                f"`{owner}.{key}`: a point on platform `{self.name}` has "
                f"{'one (x) or two (x, z)' if self.plane else 'three'} coordinates, found {len(values)}"
            )
        axes = ("x", "z") if self.plane else SPACE
        single = len(values) == 1
        return {
            axis: book.dimension(owner, key if single else f"{key}.{axis}", Kind.LENGTH, value, signed=True)
            for axis, value in zip(axes, values, strict=False)
        }

    def _displacement(self, book: Book, place: dict[str, Monomial]) -> Motion:
        cross = {"x": (("ry", "z", 1.0), ("rz", "y", -1.0)), "y": (("rz", "x", 1.0), ("rx", "z", -1.0)),
                 "z": (("rx", "y", 1.0), ("ry", "x", -1.0))}  # fmt: skip
        motion: Motion = {}
        for axis, turns in cross.items():
            parts = [book.components.get(f"{self.name}.{axis}", {})]
            for rotation, arm, sign in turns:
                row = book.components.get(f"{self.name}.{rotation}")
                if row and arm in place:
                    parts.append(times(sign * place[arm], row))
            if row := plus(*parts):
                motion[axis] = row
        return motion


@dataclass(frozen=True, slots=True, kw_only=True)
class Joint:
    """A point of a rod frame; fixed, free, or held along some axes."""

    axes: ClassVar[tuple[str, ...]] = SPACE
    name: str
    position: tuple[Amount, ...]
    fixed: tuple[str, ...] = ()
    mass: Amount | None = None

    @property
    def directions(self) -> tuple[str, ...]:
        """The axes of its plane or space."""
        return ("x", "z") if len(self.position) == 2 else SPACE

    def enter(self, book: Book) -> None:
        """Its place, its free coordinates, and a mass if it has one."""
        for axis in self.directions:
            if axis not in self.fixed:
                book.coordinate(self.name, axis)
        if self.mass is not None:
            m = book.dimension(self.name, "mass", Kind.MASS, self.mass, signed=True)
            motion = self.motion(book, self.name, "", None)
            book.weigh(self.name, m)
            for axis, row in motion.items():
                book.inertia(self.name, axis, m, row)
            book.carry(self.name, m, motion.get("z", {}))

    def place(self, book: Book) -> dict[str, Monomial]:
        """Its coordinates in space."""
        return {
            axis: book.dimension(self.name, f"position.{axis}", Kind.LENGTH, value, signed=True)
            for axis, value in zip(self.directions, self.position, strict=True)
        }

    def motion(self, book: Book, owner: str, key: str, place: Place) -> Motion:
        """Motion along its free axes."""
        return {
            axis: book.components[f"{self.name}.{axis}"]
            for axis in self.directions
            if f"{self.name}.{axis}" in book.components
        }
