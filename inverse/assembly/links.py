"""Links: each writes the squares of its stretch, its damping, its own mass, and what its load does at rest.

The first body named in `between` is the one carried: a strut's load F is positive when it is compressed, and
`direction` points from the second end to the first. Along a row (x) the second body stands further along it.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from inverse.assembly.algebra import ONE, Monomial, Row, Square, minus, plus, symbol, times
from inverse.assembly.bodies import SPACE, Body, Joint, Mass, Pendulum, Platform, Rotor
from inverse.assembly.book import Book, Definition, Load, Motion, Place, Pull, Segment, along
from inverse.assembly.parameters import Amount
from inverse.errors import ModelError
from inverse.units import Kind

GROUND = "ground"


class Link(Protocol):
    """What the assembly asks of a link."""

    @property
    def name(self) -> str:
        """Unique among parts."""
        ...

    @property
    def between(self) -> tuple[str, str]:
        """The carried end first; either may be the ground."""
        ...

    def enter(self, book: Book, bodies: dict[str, Body]) -> None:
        """Write the link's terms."""
        ...


@dataclass(frozen=True, slots=True)
class End:
    """One end of a link: its body (None for the ground), how the point moves and where it was tied."""

    body: Body | None
    motion: Motion
    key: str
    place: Place


@dataclass(frozen=True, slots=True, kw_only=True)
class Tied:
    """What links between two points share: ends, where they are tied, and a direction."""

    name: str
    between: tuple[str, str]
    at: Place | dict[str, Place] = None
    direction: tuple[float, ...] | None = None
    count: Amount | None = None

    def ends(self, book: Book, bodies: dict[str, Body]) -> tuple[End, End]:
        """Both ends, with the ground where there is no body."""
        first, second = (self._end(book, bodies, body) for body in self.between)
        return first, second

    def _end(self, book: Book, bodies: dict[str, Body], name: str) -> End:
        if name == GROUND:
            return End(None, {}, "at", None)
        if name not in bodies:
            raise ModelError(f"link `{self.name}` joins `{name}`, which is not a body")
        given = isinstance(self.at, dict)
        key = f"at.{name}" if given else "at"
        place = self.at.get(name) if isinstance(self.at, dict) else self.at
        return End(bodies[name], bodies[name].motion(book, self.name, key, place), key, place)

    def pieces(self, book: Book) -> Monomial:
        """How many identical ones stand side by side."""
        return ONE if self.count is None else book.dimension(self.name, "count", Kind.RATIO, self.count)

    def line(self, first: End, second: End) -> dict[str, float]:
        """Unit vector of the link, as a table over axes."""
        bodies = [end.body for end in (first, second) if end.body is not None]
        if any(isinstance(body, Rotor) for body in bodies):
            raise ModelError(f"link `{self.name}` is tied to a rotor: use a shaft or a gear between rotors")
        free = any(isinstance(body, Platform | Joint) for body in bodies)
        if self.direction is None:
            axis = "z" if free else next(iter(next(end.motion for end in (first, second) if end.body)))
            return {axis: 1.0}
        given = np.asarray(self.direction, float)
        size = float(np.linalg.norm(given))
        if len(given) not in (2, 3) or not np.isfinite(size) or size == 0:
            raise ModelError(f"`{self.name}.direction` must be two (x, z) or three numbers, not all of them zero")
        axes = ("x", "z") if len(given) == 2 else SPACE
        return {axis: float(n) / size for axis, n in zip(axes, given, strict=True) if n}

    def stretch(self, first: End, second: End, line: dict[str, float]) -> Row:
        """How much the link lengthens along `line`: motion of the first end less that of the second."""
        parts = []
        for end in (first, second):
            part = along(tuple(line.values()), tuple(line), end.motion)
            if end.body is not None and not part:
                raise ModelError(
                    f"link `{self.name}` leaves `{end.body.name}` without first-order coupling: the body cannot "
                    f"move along the link there ({_words(line)}); give a `direction` along which both ends move"
                )
            parts.append(part)
        return minus(parts[0], parts[1])


def _words(line: dict[str, float]) -> str:
    return ", ".join(f"{axis} {n:.3g}" for axis, n in line.items())


@dataclass(frozen=True, slots=True, kw_only=True)
class Spring(Tied):
    """A spring along one line, with its own mass and preload (tension) if given."""

    rate: Amount
    static_rate: Amount | None = None
    mass: Amount | None = None
    preload: Amount | None = None

    def enter(self, book: Book, bodies: dict[str, Body]) -> None:
        """k (stretch)²; a third of its own mass where one end is held, m/6 [[2, 1], [1, 2]] otherwise."""
        first, second = self.ends(book, bodies)
        line = self.line(first, second)
        stretch, n = self.stretch(first, second, line), self.pieces(book)
        k = n * book.dimension(self.name, "rate", Kind.RATE, self.rate)
        static = _static(book, self.name, n, self.static_rate)
        book.stiffness.append(Square(self.name, "", k, stretch, static))
        if self.mass is not None:
            m = n * book.dimension(self.name, "mass", Kind.MASS, self.mass, signed=True)
            book.weigh(self.name, m)
            rows = [along(tuple(line.values()), tuple(line), end.motion) for end in (first, second)]
            book.bar_inertia(self.name, "", m, rows[0], rows[1])
        preload = None
        if self.preload is not None:
            preload = n * book.dimension(self.name, "preload", Kind.FORCE, self.preload, signed=True)
        self._load(book, bodies, first, second, line, Load(f"{self.name}.force", -1.0, stretch, static or k, preload))

    def _load(
        self, book: Book, bodies: dict[str, Body], first: End, second: End, line: dict[str, float], load: Load
    ) -> None:
        if {end.body.name for end in (first, second) if end.body} & book.moved:
            _pull(book, self, bodies, (first, second), load)
            return
        if load.preload is not None:
            book.preloads.append((load.preload, load.elongation))
        if not book.weightless:
            _overturning(book, self.name, first, second, line, load)


@dataclass(frozen=True, slots=True, kw_only=True)
class Mount(Tied):
    """A mount that is stiff along its axis and across it, and loses lateral rate under load if it has a height."""

    rates: tuple[Amount, ...]
    height: Amount | None = None
    static_rate: Amount | None = None

    def enter(self, book: Book, bodies: dict[str, Body]) -> None:
        """k_i (stretch_i)² along the axis and across it; −F/H across it for a strut of height H under load F."""
        first, second = self.ends(book, bodies)
        line = self.line(first, second)
        if "z" not in line and not any(isinstance(e.body, Platform | Joint) for e in (first, second)):
            line = {"z": 1.0}
        n = self.pieces(book)
        axial = n * book.dimension(self.name, "rates.axial", Kind.RATE, self.rates[0])
        static = _static(book, self.name, n, self.static_rate)
        stretch = self.stretch(first, second, line)
        book.stiffness.append(Square(self.name, "axial", axial, stretch, static))
        load = Load(f"{self.name}.force", -1.0, stretch, static or axial, None)
        across = list(self._across(first, second, line))
        names = ("lateral",) if len(self.rates) == 2 else ("lateral", "lateral2")
        lateral = [
            n * book.dimension(self.name, f"rates.{key}", Kind.RATE, rate)
            for key, rate in zip(names, self.rates[1:], strict=True)
        ]
        for rate, row in zip(lateral * (3 - len(lateral)), across, strict=False):
            if row:
                book.stiffness.append(Square(self.name, "lateral", rate, row))
        if book.weightless:
            return
        if self.height is not None:
            H = book.dimension(self.name, "height", Kind.LENGTH, self.height)
            F = book.force(load)
            for row in across:
                if row:
                    book.geometric.append(Square(self.name, "", -F / H, row))
        _overturning(book, self.name, first, second, line, load)

    def _across(self, first: End, second: End, line: dict[str, float]) -> Iterator[Row]:
        """Relative motion along each direction across the axis."""
        axis = np.array([line.get(a, 0.0) for a in SPACE])
        for across in _perpendiculars(axis):
            yield plus(
                along(across, SPACE, first.motion),
                times(-1.0, along(across, SPACE, second.motion)),
            )


def _perpendiculars(axis: np.ndarray) -> tuple[tuple[float, ...], ...]:
    """Two directions across an axis: in the x–z plane first, then the one that completes a right-handed set."""
    helper = np.array([0.0, 1.0, 0.0]) if abs(axis[1]) < 0.9 else np.array([0.0, 0.0, 1.0])
    one = np.cross(helper, axis)
    one = one / np.linalg.norm(one)
    other = np.cross(axis, one)
    return tuple(map(float, one)), tuple(map(float, other))


@dataclass(frozen=True, slots=True, kw_only=True)
class Damper(Tied):
    """A viscous damper between two points, or between two rotors."""

    coefficient: Amount

    def enter(self, book: Book, bodies: dict[str, Body]) -> None:
        """c (rate of stretch)²."""
        first, second = self.ends(book, bodies)
        turns = any(isinstance(end.body, Rotor) for end in (first, second))
        line = {"r": 1.0} if turns else self.line(first, second)
        kind = Kind.TORSIONAL_DAMPING if turns else Kind.DAMPING
        c = self.pieces(book) * book.dimension(self.name, "coefficient", kind, self.coefficient)
        book.damping.append(Square(self.name, "", c, self.stretch(first, second, line)))


@dataclass(frozen=True, slots=True, kw_only=True)
class Shaft:
    """A torsion spring between two rotors, or a rotor and the ground."""

    name: str
    between: tuple[str, str]
    rate: Amount
    count: Amount | None = None

    def enter(self, book: Book, bodies: dict[str, Body]) -> None:
        """k (twist)²."""
        tied = Tied(name=self.name, between=self.between, count=self.count)
        ends = tied.ends(book, bodies)
        _only_rotors(self.name, "shaft", ends)
        k = tied.pieces(book) * book.dimension(self.name, "rate", Kind.TORSIONAL_RATE, self.rate)
        book.stiffness.append(Square(self.name, "", k, tied.stretch(*ends, {"r": 1.0})))


@dataclass(frozen=True, slots=True, kw_only=True)
class Gear:
    """An exact constraint: the second rotor turns `ratio` times as fast as the first, backwards if negative."""

    name: str
    between: tuple[str, str]
    ratio: Amount

    def constrain(self, book: Book, bodies: dict[str, Body]) -> None:
        """Give the second rotor a row over the first one's coordinate; before any body is entered."""
        rotors = [bodies.get(body) for body in self.between]
        if not all(isinstance(body, Rotor) for body in rotors):
            raise ModelError(f"gear `{self.name}` must join two rotors, found {' and '.join(self.between)}")
        r = book.dimension(self.name, "ratio", Kind.RATIO, self.ratio, sign_apart=True)
        first, second = (f"{body}.r" for body in self.between)
        if second in book.components:
            if first in book.components:
                raise ModelError(f"gear `{self.name}` closes a loop of gears: leave one of them out")
            first, second, r = second, first, ONE / r
        row = book.components.get(first) or book.coordinate(first[:-2], "r")
        book.components[second] = times(r, row)

    def enter(self, book: Book, bodies: dict[str, Body]) -> None:
        """Nothing more: the constraint is in the rows."""


def _only_rotors(name: str, kind: str, ends: tuple[End, End]) -> None:
    if not all(end.body is None or isinstance(end.body, Rotor) for end in ends):
        raise ModelError(f"{kind} `{name}` joins rotors, or a rotor and the ground; between other bodies use a spring")


@dataclass(frozen=True, slots=True, kw_only=True)
class Rod:
    """An elastic rod between two joints, its stiffness along its line, its mass consistent in every direction.

    Its length ℓ and direction n follow from the joints' places and are dimensions found before the matrices.
    """

    name: str
    between: tuple[str, str]
    area: Amount
    modulus: Amount
    density: Amount | None = None

    def enter(self, book: Book, bodies: dict[str, Body]) -> None:
        """E A/ℓ (n·Δu)², ρ A ℓ/6 [[2, 1], [1, 2]] along each axis; under tension N, N/ℓ across it."""
        first, second = self._joints(bodies)
        length, cosines = self._geometry(book, first, second)
        A = book.dimension(self.name, "area", Kind.AREA, self.area)
        E = book.dimension(self.name, "modulus", Kind.MODULUS, self.modulus)
        motions = [joint.motion(book, self.name, "", None) for joint in (first, second)]
        relative = {
            axis: plus(motions[1].get(axis, {}), times(-1.0, motions[0].get(axis, {}))) for axis in first.directions
        }
        stretch = plus(*(times(cosines[axis], row) for axis, row in relative.items()))
        book.stiffness.append(Square(self.name, "", E * A / length, stretch))
        if self.density is not None:
            rho = book.dimension(self.name, "density", Kind.DENSITY, self.density)
            self._enter_mass(book, rho * A * length, motions, first.directions)
        if not book.weightless:
            N = book.force(Load(f"{self.name}.force", 1.0, stretch, E * A / length, None))
            book.geometric += [Square(self.name, "", N / length, row) for row in relative.values() if row]
            book.geometric.append(Square(self.name, "", -N / length, stretch))

    def _enter_mass(self, book: Book, m: Monomial, motions: list[Motion], axes: tuple[str, ...]) -> None:
        book.weigh(self.name, m)
        for axis in axes:
            book.bar_inertia(self.name, axis, m, motions[0].get(axis, {}), motions[1].get(axis, {}))
        for motion in motions:
            book.carry(self.name, 0.5 * m, motion.get("z", {}))

    def _joints(self, bodies: dict[str, Body]) -> tuple[Joint, Joint]:
        first, second = (bodies.get(name) for name in self.between)
        if not isinstance(first, Joint) or not isinstance(second, Joint):
            raise ModelError(f"rod `{self.name}` must run between two joints, found {' and '.join(self.between)}")
        if first.directions != second.directions:
            raise ModelError(
                f"rod `{self.name}` joins a joint in the plane to one in space: give both as many coordinates"
            )
        return first, second

    def _geometry(self, book: Book, first: Joint, second: Joint) -> tuple[Monomial, dict[str, Monomial]]:
        """ℓ² = Σ Δ², n = Δ/ℓ, as dependent dimensions with the polynomials n ℓ − Δ and Σ n² − 1."""
        a, b = first.place(book), second.place(book)
        length = symbol(f"{self.name}.length")
        cosines = {axis: symbol(f"{self.name}.cosine.{axis}") for axis in a}
        squares = tuple(term for axis in a for term in (b[axis] ** 2, -2.0 * a[axis] * b[axis], a[axis] ** 2))
        unit = (*(n**2 for n in cosines.values()), -ONE)
        book.definitions.append(Definition(f"{self.name}.length", True, squares, 0.5, unit))
        for axis, n in cosines.items():
            seed = (b[axis] / length, -a[axis] / length)
            vanishing = (n * length, -b[axis], a[axis])
            book.definitions.append(Definition(f"{self.name}.cosine.{axis}", False, seed, 1.0, vanishing))
        return length, cosines


def _static(book: Book, name: str, pieces: Monomial, rate: Amount | None) -> Monomial | None:
    """The rate under slow load, where it differs."""
    return None if rate is None else pieces * book.dimension(name, "static_rate", Kind.RATE, rate)


def _overturning(book: Book, name: str, first: End, second: End, line: dict[str, float], load: Load) -> None:
    """Vertical force F n_z at height z on a platform: F n_z z on each horizontal rotation."""
    for end, sign in ((first, 1.0), (second, -1.0)):
        if isinstance(end.body, Platform) and "z" in line:
            height = end.body.height(book, name, end.key, end.place)
            if height is not None:
                F = book.force(load)
                end.body.tilt(book, name, sign * line["z"] * F * height)


def _pull(book: Book, spring: Spring, bodies: dict[str, Body], ends: tuple[End, End], load: Load) -> None:
    """A horizontal spring among bodies that a preload moves: what it stretches by, angle by angle."""
    lever: list[tuple[Segment, Monomial, float]] = []
    slides: list[tuple[str, float]] = []
    for end, sign in zip(ends, (-1.0, 1.0), strict=True):
        root = end.body
        if isinstance(root, Pendulum):
            chain, _ = book.hangings[root.name]
            depth = chain[-1].length if end.place is None else symbol(f"{spring.name}.{end.key}")
            lengths = [*(segment.length for segment in chain[:-1]), depth]
            lever += [(segment, length, sign) for segment, length in zip(chain, lengths, strict=True)]
            while isinstance(root, Pendulum):
                root = bodies.get(root.hung_from or GROUND)
        if isinstance(root, Mass):
            slides.append((f"{root.name}.x", sign))
    book.pulls.append(Pull(load.name, load.rate, load.preload, tuple(lever), tuple(slides)))
