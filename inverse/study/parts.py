"""Variables, stock and the assembly: tables in, dataclasses out."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from inverse.assembly.bodies import Body, Joint, Mass, Pendulum, Platform, Rotor
from inverse.assembly.book import Place
from inverse.assembly.links import Damper, Gear, Link, Mount, Rod, Shaft, Spring
from inverse.assembly.matrix_model import Label, MatrixModel
from inverse.assembly.parameters import Amount, Variable
from inverse.errors import QuantityError
from inverse.study import companions, schema
from inverse.study.content import Stock, StockItem, StockList, StockSeries, Swing
from inverse.study.entries import Scope, found, read_amount
from inverse.study.names import GROUND, Names, described
from inverse.units import Kind


@dataclass
class Parts:
    """Reads the tables of variables, stock, bodies, links and matrices; notes what does not fit together."""

    tables: schema.StudyFile
    scope: Scope
    folder: Path
    names: Names
    warnings: list[str] = field(default_factory=list)

    def stocks(self) -> dict[str, Stock]:
        """What can be ordered, by name."""
        stocks: dict[str, Stock] = {}
        for name, table in self.tables.stock.items():
            try:
                stocks[name] = self._stock(name, table)
            except QuantityError as error:
                self.names.problems.unread(f"stock.{name}, {table.file}", "", error)
        return stocks

    def _stock(self, name: str, table: schema.Stock) -> Stock:
        if table.series is not None and table.from_ is not None and table.to is not None:
            low, high = table.from_.value, table.to.value
            return StockSeries(name=name, unit=table.to.dimension.unit, series=table.series, low=low, high=high)
        if table.file is not None:
            items, dimension = companions.read_stock(companions.path_of(table.file, self.folder))
            return StockList(name=name, unit=dimension.unit, items=items)
        values = table.values or ()
        items = tuple(StockItem(part=None, value=value.value) for value in values)
        return StockList(name=name, unit=values[0].dimension.unit, items=items)

    def variables(self, stocks: Mapping[str, Stock]) -> tuple[Variable, ...]:
        """All variables in SI."""
        variables = []
        for name, table in self.tables.variables.items():
            low, high = table.ends
            if table.stock is not None:
                self._check_stock(name, table, stocks)
            unit = "rad/s" if low.dimension == Kind.FREQUENCY.si.dimension else low.dimension.unit
            start = None if table.start is None else table.start.value
            variables.append(
                Variable(name=name, low=low.value, high=high.value, start=start, unit=unit, stock=table.stock)
            )
        return tuple(variables)

    def _check_stock(self, name: str, table: schema.Variable, stocks: Mapping[str, Stock]) -> None:
        where, (low, high) = f"variables.{name}", table.ends
        if table.stock not in self.tables.stock:
            self.names.problems.unknown(where, "stock", "the name of a [stock.NAME] table", str(table.stock), stocks)
            return
        stock = stocks.get(str(table.stock))
        if stock is None:
            return
        if stock.unit != low.dimension.unit:
            what = f"values in {stock.unit} in stock.{stock.name}"
            self.names.problems.add(where, "stock", f"values in {low.dimension.unit}", what)
        elif isinstance(stock, StockList) and not any(low.value <= i.value <= high.value for i in stock.items):
            self.warnings.append(f"{where}: nothing in stock.{stock.name} lies within the range")

    def enter(self) -> tuple[MatrixModel, ...]:
        """All parts under their names; the imported matrices are returned."""
        self._enter_bodies()
        self._enter_links()
        matrices = self._matrices()
        self._check_hanging()
        self._check_ends()
        return matrices

    def _enter_bodies(self) -> None:
        for i, table in enumerate(self.tables.body):
            if table.name in self.names.bodies:
                self.names.problems.add(f"body[{i + 1}]", "name", "a name of its own", f"{found(table.name)} again")
                continue
            self.names.enter(_body(table))

    def _enter_links(self) -> None:
        for i, table in enumerate(self.tables.link):
            if table.name in self.names.bodies or table.name in self.names.links:
                self.names.problems.add(f"link[{i + 1}]", "name", "a name of its own", f"{found(table.name)} again")
                continue
            self.names.links[table.name] = self._link(table, self.names.place("link", i))

    def _link(self, table: schema.Link, where: str) -> Link:
        name, between = table.name, table.between
        if isinstance(table, schema.Tied):
            tied: dict[str, Any] = {
                "name": name,
                "between": between,
                "at": _at(table.at),
                "direction": table.direction,
                "count": table.count,
            }
        match table:
            case schema.Spring():
                return Spring(
                    **tied, rate=table.rate, static_rate=table.static_rate, mass=table.mass, preload=table.preload
                )
            case schema.Mount():
                return Mount(**tied, rates=table.rates, height=table.height, static_rate=table.static_rate)
            case schema.Damper():
                return Damper(**tied, coefficient=self._coefficient(table, where))
            case schema.Shaft():
                return Shaft(name=name, between=between, rate=table.rate, count=table.count)
            case schema.Gear():
                return Gear(name=name, between=between, ratio=table.ratio)
            case schema.Rod():
                return Rod(name=name, between=between, area=table.area, modulus=table.modulus, density=table.density)
        raise AssertionError(table)

    def _coefficient(self, table: schema.Damper, where: str) -> Amount:
        """Its unit follows from what it joins."""
        turns = any(isinstance(self.names.bodies.get(end), Rotor) for end in table.between)
        kind = Kind.TORSIONAL_DAMPING if turns else Kind.DAMPING
        try:
            return read_amount(table.coefficient, kind, "positive", self.scope)
        except QuantityError as error:
            hint = error.hint or ("it is between rotors" if turns else "it is between points")
            self.names.problems.add(where, "coefficient", error.expected, error.found, hint)
            return 1.0

    def _matrices(self) -> tuple[MatrixModel, ...]:
        models: list[MatrixModel] = []
        for i, table in enumerate(self.tables.matrix):
            where = self.names.place("matrix", i)
            name = table.name or f"matrix{i + 1}"
            if name in self.names.bodies or name in self.names.links or name in [model.name for model in models]:
                self.names.problems.add(where, "name", "a name of its own", f"{found(name)} again")
            for label in table.labels:
                if label in self.names.links or self.names.components.get(label, (f"{label}.x",)) != (f"{label}.x",):
                    what = f"{found(label)}, which is another part"
                    self.names.problems.add(where, "labels", "labels, or bodies with one component x", what)
                elif label not in self.names.bodies:
                    self.names.enter(Label(name=label))
            files = {key: self._matrix(table, key, where) for key in ("mass", "stiffness", "damping")}
            models.append(
                MatrixModel(
                    name=name,
                    labels=table.labels,
                    **files,
                    mass_times=table.mass_times,
                    stiffness_times=table.stiffness_times,
                    damping_times=table.damping_times,
                )
            )
        return tuple(models)

    def _matrix(self, table: schema.Matrices, key: str, where: str) -> Any:
        name = getattr(table, key)
        if name is None:
            return None
        try:
            return companions.read_matrix(companions.path_of(name, self.folder), len(table.labels))
        except QuantityError as error:
            self.names.problems.unread(where, key, error)
            return None

    def _check_hanging(self) -> None:
        known_to_end: set[str] = set()
        for i, table in enumerate(self.tables.body):
            if not isinstance(table, schema.Pendulum) or table.hung_from is None:
                continue
            where, holder = self.names.place("body", i), self.names.bodies.get(table.hung_from)
            if holder is None:
                self.names.problems.unknown(
                    where, "hung_from", "the name of a body", table.hung_from, self.names.bodies
                )
            elif not isinstance(holder, Pendulum) and not (isinstance(holder, Mass) and holder.axis == "x"):
                expected = "a pendulum or a mass that moves horizontally"
                hint = "this one gives its swing no first-order coupling"
                self.names.problems.add(where, "hung_from", expected, found(table.hung_from), hint)
            elif circle := self._circle(table.name, known_to_end):
                self.names.problems.add(where, "hung_from", "a pendulum that hangs from above", f"a circle, {circle}")

    def _circle(self, name: str, known_to_end: set[str]) -> str:
        """The way up from a pendulum as far as it repeats itself, if it does and has not been followed before."""
        way: dict[str, None] = {}
        while isinstance(body := self.names.bodies.get(name), Pendulum) and name not in known_to_end:
            if name in way:
                names = [*way][[*way].index(name) :]
                known_to_end.update(way)
                return " → ".join([*(names if len(names) < 8 else [*names[:4], "…", *names[-3:]]), name])
            way[name] = None
            name = body.hung_from or ""
        known_to_end.update(way)
        return ""

    def _check_ends(self) -> None:
        for i, table in enumerate(self.tables.link):
            where = self.names.place("link", i)
            unknown = [end for end in table.between if end != GROUND and end not in self.names.bodies]
            for end in unknown:
                known = [*self.names.bodies, GROUND]
                self.names.problems.unknown(where, "between", 'the name of a body, or "ground"', end, known)
            if unknown:
                continue
            self._check_what_it_joins(table, where)
            if isinstance(table, schema.Tied) and table.at is not None:
                self._check_at(table, where)

    def _check_what_it_joins(self, table: schema.Link, where: str) -> None:
        bodies = [self.names.bodies.get(end) for end in table.between]
        joined = " and ".join(described(body) for body in bodies)
        rotors = [isinstance(body, Rotor) for body in bodies]
        match table:
            case schema.Rod():
                fits, expected = all(isinstance(body, Joint) for body in bodies), "two joints"
            case schema.Gear():
                fits, expected = all(rotors), "two rotors"
            case schema.Shaft():
                fits, expected = all(r or b is None for r, b in zip(rotors, bodies, strict=True)), "rotors"
            case schema.Damper():
                mixed = any(rotors) and any(b is not None and not r for r, b in zip(rotors, bodies, strict=True))
                fits, expected = not mixed, "rotors, or no rotor"
            case _:
                fits, expected = not any(rotors), "no rotor"
        if not fits:
            hint = "between rotors use a shaft or a gear" if any(rotors) else ""
            self.names.problems.add(where, "between", f"{expected} at the ends", joined, hint)

    def _check_at(self, table: schema.Tied, where: str) -> None:
        at = table.at
        if isinstance(at, dict):
            for end, place in at.items():
                key = f"at.{end}"
                if end not in table.between:
                    self.names.problems.unknown(where, key, "a body at one of its ends", end, table.between)
                elif not _takes_place(self.names.bodies.get(end)):
                    self.names.problems.add(
                        where, key, "a pendulum or a platform", described(self.names.bodies.get(end))
                    )
                else:
                    self._check_place(where, key, end, place)
            return
        ends = [end for end in table.between if _takes_place(self.names.bodies.get(end))]
        if not ends:
            joined = " and ".join(described(self.names.bodies.get(end)) for end in table.between)
            self.names.problems.add(where, "at", "a pendulum or a platform at one of the ends", joined, "leave it out")
        for end in ends:
            self._check_place(where, "at", end, at or ())

    def _check_place(self, where: str, key: str, end: str, place: Sequence[Amount]) -> None:
        body = self.names.bodies[end]
        if isinstance(body, Platform):
            allowed = (1, 2) if body.plane else (3,)
            expected = "x or [x, z]" if body.plane else "[x, y, z]"
        else:
            allowed, expected = (1,), "one depth below the pivot"
        if len(place) not in allowed:
            hint = "give it by body, at = { … }" if key == "at" else ""
            self.names.problems.add(
                where, key, f"{expected} on {described(body)} {found(end)}", f"{len(place)} numbers", hint
            )

    def swings(self) -> dict[str, Swing]:
        """Amplitudes in use, by body."""
        return {
            table.name: Swing(value=table.swing.value, unit=table.swing.dimension.unit)
            for table in self.tables.body
            if table.swing is not None
        }

    def damping_ratios(self) -> dict[str, Amount]:
        """Of bodies alone, by name."""
        return {table.name: table.damping_ratio for table in self.tables.body if table.damping_ratio is not None}

    def loss_factors(self) -> dict[str, Amount]:
        """Of links, by name."""
        return {
            table.name: table.loss_factor
            for table in self.tables.link
            if isinstance(table, schema.Elastic) and table.loss_factor is not None
        }


def _body(table: schema.Body) -> Body:
    match table:
        case schema.SlidingMass():
            return Mass(name=table.name, mass=table.mass, moves=table.moves)
        case schema.Pendulum():
            return Pendulum(
                name=table.name,
                mass=table.mass,
                length=table.length,
                rod_mass=table.rod_mass,
                bob_radius=table.bob_radius,
                hung_from=table.hung_from,
            )
        case schema.Rotor():
            return Rotor(name=table.name, inertia=table.inertia)
        case schema.Platform():
            return Platform(name=table.name, mass=table.mass, inertia=table.inertia, centre=table.centre or ())
        case schema.Joint():
            return Joint(name=table.name, position=table.position, fixed=table.fixed, mass=table.mass)
    raise AssertionError(table)


def _at(at: tuple[Amount, ...] | dict[str, tuple[Amount, ...]] | None) -> Place | dict[str, Place]:
    """A single number stands for itself, several are coordinates."""
    if isinstance(at, dict):
        return {body: _at_one(place) for body, place in at.items()}
    return None if at is None else _at_one(at)


def _at_one(place: tuple[Amount, ...]) -> Place:
    return place[0] if len(place) == 1 else place


def _takes_place(body: Body | None) -> bool:
    """Whether it matters where on the body a link is tied."""
    return isinstance(body, Pendulum | Platform)
