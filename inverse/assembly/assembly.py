"""The public door: bodies and links in, a `Model` out, which is arrays and names and nothing else."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from inverse.assembly.algebra import Monomial, Square, symbol
from inverse.assembly.bodies import Body, Mass, Pendulum
from inverse.assembly.book import Book
from inverse.assembly.links import GROUND, Gear, Link, Spring
from inverse.assembly.matrix_model import Label, MatrixModel
from inverse.assembly.parameters import Amount, Parameters, Register, Variable
from inverse.assembly.statics import Deflection, lean, settle
from inverse.assembly.terms import Array, Compiler, Monomials, Squares, Sums
from inverse.errors import ModelError
from inverse.gravity import STANDARD_GRAVITY
from inverse.units import Kind, Product


@dataclass(frozen=True)
class Dependents:
    """Dimensions that follow from others: rod lengths and directions, settlements, link forces, rest angles.

    They make the sums `vanishing` zero; `seeds` raised to `seed_power` (S,) is where the search starts.
    Sums and monomials are of a table of their own.
    """

    names: tuple[str, ...]
    table: Monomials
    vanishing: Sums
    seeds: Sums
    seed_power: Array

    def __len__(self) -> int:
        """How many."""
        return len(self.names)


@dataclass(frozen=True)
class Model:
    """An assembly as arrays. ``D`` base dimensions, then the dependent ones; ``n`` coordinates.

    `components` gives each reported component as ((coordinate, monomial), ...); `parts` names all
    bodies and links, whose masses and prices are `part_mass` and `part_cost`.
    """

    parameters: Parameters
    dependents: Dependents
    names: tuple[str, ...]
    positive: NDArray[np.bool_]
    monomials: Monomials
    mass: Squares
    stiffness: Squares
    damping: Squares
    coordinates: tuple[str, ...]
    components: Mapping[str, tuple[tuple[int, int], ...]]
    bodies: Mapping[str, tuple[str, ...]]
    parts: tuple[str, ...]
    part_mass: Sums
    part_cost: Sums

    @property
    def size(self) -> int:
        """Number of coordinates ``n``."""
        return len(self.coordinates)

    def component(self, name: str) -> str:
        """Full name of a component given as such, or as a body that has only one.

        Raises
        ------
        KeyError
            If there is no such component, or the body has several.
        """
        if name in self.components:
            return name
        (only,) = self.bodies[name] if len(self.bodies[name]) == 1 else (None,)
        if only is None:
            raise KeyError(name)
        return only


@dataclass(frozen=True, slots=True, kw_only=True)
class Price:
    """What one piece of a part costs: a number times powers of the part's own dimensions (SI), by their keys."""

    part: str
    amount: Product


@dataclass(frozen=True, kw_only=True)
class Assembly:
    """Bodies, links and imported matrices under gravity [m/s²], and what their parts cost."""

    bodies: tuple[Body, ...] = ()
    links: tuple[Link, ...] = ()
    matrices: tuple[MatrixModel, ...] = ()
    gravity: Amount = STANDARD_GRAVITY
    prices: tuple[Price, ...] = ()

    def compile(self, variables: Sequence[Variable] = (), sags: Sequence[Deflection] = ()) -> Model:
        """Tables of terms for these variables; `sags` are the static deflections that will be asked for.

        Raises
        ------
        ModelError
            If parts do not fit together or the assembly cannot rest.
        """
        bodies = self._named_bodies()
        register = Register({v.name: v for v in variables})
        book = self._open_book(register, bodies)
        for gear in (link for link in self.links if isinstance(link, Gear)):
            gear.constrain(book, bodies)
        for body in self._hung_in_order(bodies):
            body.enter(book)
        for matrix in self.matrices:
            matrix.enter(book)
            bodies |= {label: Label(name=label) for label in matrix.labels if label not in bodies}
        for link in self.links:
            link.enter(book, bodies)
        for segment, moment in book.hanging:
            book.stiffness.append(Square(segment.pendulum, "", moment * segment.cosine, segment.angle))
        lean(book)
        settle(book, self._nominal(register, book), sags)
        book.stiffness += book.geometric
        for price in self.prices:
            self._enter_price(book, price)
        return _compiled(book, list(bodies), [link.name for link in self.links])

    def _enter_price(self, book: Book, price: Price) -> None:
        """The price of all pieces of a part, over its dimensions as they are shown."""
        known = {name: entry.shown for name, entry in book.register.dimensions.items()}
        known |= {definition.name: symbol(definition.name) for definition in book.definitions}
        total = Monomial(price.amount.coefficient) * known.get(f"{price.part}.count", Monomial(1.0))
        for key, power in price.amount.powers:
            name = f"{price.part}.{key}"
            if name not in known:
                own = sorted(n.removeprefix(f"{price.part}.") for n in known if n.startswith(f"{price.part}."))
                raise ModelError(f"the price of `{price.part}` names `{key}`; its dimensions are {', '.join(own)}")
            total = total * known[name] ** float(power)
        book.part_cost.setdefault(price.part, []).append(total)

    def _named_bodies(self) -> dict[str, Body]:
        names = Counter([body.name for body in self.bodies] + [link.name for link in self.links])
        for name, count in names.items():
            if count > 1:
                raise ModelError(f"two parts are named `{name}`")
        if GROUND in names:
            raise ModelError("no part may be named `ground`")
        return {body.name: body for body in self.bodies}

    def _open_book(self, register: Register, bodies: dict[str, Body]) -> Book:
        weightless = self.gravity == 0
        gravity = register.take("", "gravity", Kind.ACCELERATION, self.gravity, signed=True)
        return Book(register, gravity, weightless, self._moved(bodies))

    def _moved(self, bodies: dict[str, Body]) -> frozenset[str]:
        """Pendulums and sliding masses joined, through any links, to a preloaded spring on one of them."""
        swinging = {name for name, b in bodies.items() if isinstance(b, Pendulum | Mass)}
        joins = [set(link.between) & swinging for link in self.links]
        joins += [{b.name, b.hung_from or b.name} & swinging for b in self.bodies if isinstance(b, Pendulum)]
        moved = {
            name
            for link in self.links
            if isinstance(link, Spring) and link.preload is not None
            for name in set(link.between) & swinging
        }
        growing = bool(moved)
        while growing:
            joined = {name for join in joins if join & moved for name in join}
            growing, moved = not joined <= moved, moved | joined
        if not any(isinstance(bodies[name], Pendulum) for name in moved):
            return frozenset()
        return frozenset(moved)

    def _hung_in_order(self, bodies: dict[str, Body]) -> list[Body]:
        """Bodies with every pendulum after what it hangs from."""
        ordered: dict[str, Body] = {}
        for body in bodies.values():
            above: dict[str, Body] = {}
            while body.name not in ordered:
                if body.name in above:
                    circle = " → ".join((*above, body.name))
                    raise ModelError(f"`hung_from` runs in a circle: {circle}")
                above[body.name] = body
                parent = body.hung_from if isinstance(body, Pendulum) else None
                if parent is None:
                    break
                if parent not in bodies:
                    raise ModelError(f"pendulum `{body.name}` hangs from `{parent}`, which is not a body")
                body = bodies[parent]
            ordered.update(reversed(above.items()))
        return list(ordered.values())

    def _nominal(self, register: Register, book: Book) -> dict[str, float]:
        """Values at a generic point: start values, or the middle of each range."""
        values = {name: _middle(v) for name, v in register.variables.items()}
        known = {name: _value(dimension.follows, values) for name, dimension in register.dimensions.items()}
        for definition in book.definitions:
            total = sum(_value(term, known) for term in definition.seed)
            known[definition.name] = float(max(total, 0.0) ** definition.seed_power if definition.positive else total)
        return known


def _middle(variable: Variable) -> float:
    if variable.value is not None:
        return variable.value
    if variable.positive:
        return float(np.sqrt(variable.low * variable.high))
    # Not the exact middle, which is often zero and then no generic point.
    return variable.low + 0.6180339887498949 * (variable.high - variable.low)


def _value(term: Monomial, known: Mapping[str, float]) -> float:
    value = term.coefficient
    for name, power in term.powers:
        value *= known[name] ** power
    return value


def _compiled(book: Book, bodies: list[str], links: list[str]) -> Model:
    parameters = Parameters.compile(book.register)
    base = [d.name for d in parameters.dimensions]
    names = (*base, *(definition.name for definition in book.definitions))
    positive = np.array([*parameters.positive, *(d.positive for d in book.definitions)], bool)
    index = {name: i for i, name in enumerate(names)}
    columns = {name: i for i, name in enumerate(book.coordinates)}
    compiler = Compiler()
    parts = tuple(dict.fromkeys((*bodies, *links)))
    tables = [compiler.squares(_merged(squares), columns) for squares in (book.mass, book.stiffness, book.damping)]
    rows = {
        name: tuple((columns[c], compiler.place(term)) for c, entry in row.items() for term in entry)
        for name, row in book.components.items()
    }
    part_mass, part_cost = (
        compiler.sums([tuple(known.get(part, ())) for part in parts]) for known in (book.part_mass, book.part_cost)
    )
    return Model(
        parameters=parameters,
        dependents=_dependents(book, index, positive),
        names=names,
        positive=positive,
        monomials=compiler.table(index, positive),
        mass=tables[0],
        stiffness=tables[1],
        damping=tables[2],
        coordinates=tuple(book.coordinates),
        components=rows,
        bodies=_components_of(bodies, rows),
        parts=parts,
        part_mass=part_mass,
        part_cost=part_cost,
    )


def _components_of(bodies: list[str], components: Iterable[str]) -> dict[str, tuple[str, ...]]:
    """Component names by body."""
    known: dict[str, tuple[str, ...]] = dict.fromkeys(bodies, ())
    for component in components:
        body = component.rpartition(".")[0]
        known[body] = (*known[body], component)
    return known


def _merged(squares: list[Square]) -> list[Square]:
    """Squares of one owner on the same row and weight up to a number become one."""
    known: dict[object, Square] = {}
    for square in squares:
        key = (square.owner, square.axis, square.weight.powers, tuple(square.row.items()))
        if key in known:
            total = known[key].weight.coefficient + square.weight.coefficient
            square = replace(known[key], weight=Monomial(total, square.weight.powers))
        known[key] = square
    return [square for square in known.values() if square.weight.coefficient]


def _dependents(book: Book, index: Mapping[str, int], positive: NDArray[np.bool_]) -> Dependents:
    compiler = Compiler()
    vanishing = compiler.sums([definition.vanishing for definition in book.definitions])
    seeds = compiler.sums([definition.seed for definition in book.definitions])
    return Dependents(
        names=tuple(definition.name for definition in book.definitions),
        table=compiler.table(index, positive),
        vanishing=vanishing,
        seeds=seeds,
        seed_power=np.array([definition.seed_power for definition in book.definitions], float),
    )
