"""What the shop, the site and the budget add: loads, prices, and what names dimensions by patterns."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fnmatch import fnmatchcase
from fractions import Fraction
from typing import Literal, cast

from inverse.assembly.algebra import Monomial
from inverse.assembly.assembly import Model, Price
from inverse.assembly.parameters import Dimension, Variable
from inverse.errors import QuantityError
from inverse.study import companions, schema
from inverse.study.content import Adjustment, Change, Condition, Load, Tolerance, TolerancePrice
from inverse.study.entries import found, read_quantity
from inverse.study.names import GROUND, TRANSLATIONS, Names, matched
from inverse.study.problems import Problems
from inverse.units import Kind, Product, Window

_AMPLITUDES = {
    "force": Kind.FORCE,
    "unbalance": Kind.UNBALANCE,
    "base displacement": Kind.LENGTH,
    "base velocity": Kind.VELOCITY,
    "base acceleration": Kind.ACCELERATION,
}


def published_class(text: object) -> str | None:
    """A class of ISO 2768-1 ("f", "m", "c", "v") or a grade of ISO 286 ("IT8"), None where it is a quantity."""
    if not isinstance(text, str):
        return None
    words = text.split()
    if len(words) == 2 and words[0] == "class":
        if words[1] not in ("f", "m", "c", "v"):
            raise QuantityError('"class f", "class m", "class c" or "class v" (ISO 2768-1)', found(text))
        return words[1]
    if text.upper().startswith("IT"):
        if not re.fullmatch(r"IT(0?1|[02-9]|1[0-8])", text):
            raise QuantityError('a grade from "IT01" to "IT18" (ISO 286-1)', found(text))
        return text
    return None


_CHANGES: tuple[Literal["set", "factor", "shift"], ...] = ("set", "factor", "shift")


@dataclass
class Shop:
    """Reads the tables of loads, prices, tolerances, conditions and adjustments."""

    tables: schema.StudyFile
    names: Names

    def loads(self) -> tuple[Load, ...]:
        """Periodic loads, each on one component."""
        loads: dict[str, Load] = {}
        for i, table in enumerate(self.tables.load):
            where = self.names.place("load", i)
            if table.name in loads:
                self.names.problems.add(f"load[{i + 1}]", "name", "a name of its own", f"{found(table.name)} again")
            component = self._loaded(where, table)
            turning = component.rpartition(".")[2] in ("r", "rx", "ry", "rz")
            kind = Kind.MOMENT if turning and table.kind == "force" else _AMPLITUDES[table.kind]
            try:
                amplitude = read_quantity(table.amplitude, kind, "positive")
            except QuantityError as error:
                self.names.problems.unread(where, "amplitude", error)
                continue
            loads[table.name] = Load(
                name=table.name,
                kind=table.kind,
                component=component,
                amplitude=amplitude,
                orders=table.orders or (),
                speed=table.speed,
            )
        return tuple(loads.values())

    def _loaded(self, where: str, table: schema.Load) -> str:
        if table.body is None:
            if table.axis not in TRANSLATIONS:
                self.names.problems.add(where, "axis", '"x", "y" or "z" for a moving base', found(table.axis or "none"))
            return f"{GROUND}.{table.axis}"
        if table.axis is None:
            return self.names.component(where, "body", table.body)
        self.names.check_axis(where, table.body, table.axis)
        return f"{table.body}.{table.axis}"

    def prices(self) -> tuple[Price, ...]:
        """Prices of parts."""
        prices: dict[str, Price] = {}
        for i, table in enumerate(self.tables.cost):
            where = f"cost[{i + 1}]"
            amount = Product(table.price, ()) if table.price is not None else table.price_per
            if amount is None:
                continue
            known = [*self.names.bodies, *self.names.links]
            for part in matched(self.names.problems, where, "on", table.on, known, "part"):
                if part in prices:
                    self.names.problems.add(
                        where, "on", "parts without a price", f"{found(part)}, which has one already"
                    )
                elif amount.coefficient:
                    prices[part] = Price(part=part, amount=amount)
        return tuple(prices.values())

    def tolerances(self, over: Dimensions) -> tuple[Tolerance, ...]:
        """One batch per table, no dimension in two."""
        owner: dict[str, int] = {}
        tolerances = []
        for i, table in enumerate(self.tables.tolerance):
            where = f"tolerance[{i + 1}]"
            names = over.matched(where, table.on)
            for name in names:
                if name in owner:
                    what = f"`{name}` in tolerance[{owner[name] + 1}] already"
                    self.names.problems.add(where, "on", "dimensions of no other table", what)
                owner.setdefault(name, i)
            each = self._each(where, table.each, names, over)
            batch = None if table.batch is None else over.window(where, "batch", table.batch, names)
            over.check_size(where, names, [w for w in (each, batch) if isinstance(w, Window)])
            tolerances.append(
                Tolerance(
                    on=table.on,
                    dimensions=names,
                    each=each,
                    batch=batch,
                    distribution=cast(Literal["normal", "uniform", "triangular"], table.distribution),
                )
            )
        return tuple(tolerances)

    def _each(
        self, where: str, each: str | float | None, names: Sequence[str], over: Dimensions
    ) -> Window | str | None:
        """A half-width, or a published class of lengths."""
        if each is None:
            return None
        try:
            given = published_class(each)
        except QuantityError as error:
            self.names.problems.unread(where, "each", error)
            return None
        if given is None:
            return over.window(where, "each", each, names)
        for name in names:
            if over.units[name] != "m":
                what = f"`{name}` in {over.units[name]}"
                self.names.problems.add(where, "each", "lengths only with a published class", what)
                break
        return given

    def conditions(self, over: Dimensions) -> tuple[Condition, ...]:
        """What each condition does, dimension by dimension."""
        conditions: dict[str, Condition] = {}
        for i, table in enumerate(self.tables.condition):
            where = self.names.place("condition", i)
            if table.name in conditions:
                self.names.problems.add(
                    f"condition[{i + 1}]", "name", "a name of its own", f"{found(table.name)} again"
                )
            changes: list[Change] = []
            for how in _CHANGES:
                for pattern, value in getattr(table, how) or ():
                    for name in over.matched(where, (pattern,), how):
                        number = value if how == "factor" else over.value(where, how, value, name)
                        changes.append(Change(dimension=name, how=how, value=number))
            conditions[table.name] = Condition(name=table.name, changes=tuple(changes), temperature=table.temperature)
        return tuple(conditions.values())

    def tolerance_prices(self, over: Dimensions) -> tuple[TolerancePrice, ...]:
        """What tightening costs."""
        prices = []
        for i, table in enumerate(self.tables.cost):
            if table.tolerance_price is None:
                continue
            amount = table.tolerance_price
            if not amount.powers:
                amount = Product(amount.coefficient, (("tolerance", Fraction(-1)),))
            prices.append(TolerancePrice(dimensions=over.of_parts(f"cost[{i + 1}]", table.on), amount=amount))
        return tuple(prices)

    def adjustments(self, over: Dimensions) -> tuple[Adjustment, ...]:
        """What can be moved once it is built."""
        adjustments = []
        for i, table in enumerate(self.tables.adjust):
            where = f"adjust[{i + 1}]"
            names = over.matched(where, table.on)
            low, high = table.range
            for name in names:
                if over.units[name] not in (low.dimension.unit, low.dimension.without_angle.unit):
                    what = f"a range in {low.dimension.unit}"
                    self.names.problems.add(where, "range", f"{over.units[name]} for `{name}`", what)
                    break
            adjustments.append(
                Adjustment(
                    dimensions=names,
                    low=low.value,
                    high=high.value,
                    step=None if table.step is None else table.step.value,
                    direction=cast(Literal["both", "up", "down"], table.direction),
                    cost=table.cost or 0.0,
                )
            )
        return tuple(adjustments)


class Dimensions:
    """The dimensions of the parts, to which tolerances, conditions, prices and adjustments refer."""

    def __init__(self, model: Model, problems: Problems) -> None:
        self.problems, self.parts = problems, model.parts
        dimensions = model.parameters.dimensions
        self.units = {dimension.name: dimension.unit for dimension in dimensions}
        self.highest = _highest(model.parameters.variables, dimensions)

    def matched(self, where: str, patterns: Sequence[str], key: str = "on") -> tuple[str, ...]:
        """The dimensions that some patterns name."""
        return matched(self.problems, where, key, patterns, list(self.units), "dimension")

    def of_parts(self, where: str, patterns: Sequence[str]) -> tuple[str, ...]:
        """The same, a pattern that names parts standing for all their dimensions."""
        parts = [f"{part}.*" for part in self.parts if any(fnmatchcase(part, pattern) for pattern in patterns)]
        own = [pattern for pattern in patterns if any(fnmatchcase(name, pattern) for name in self.units)]
        used = [pattern for pattern in parts if any(fnmatchcase(name, pattern) for name in self.units)]
        return self.matched(where, own + used or patterns)

    def window(self, where: str, key: str, text: object, names: Sequence[str]) -> Window | None:
        """A half-width that fits all of some dimensions."""
        result = None
        for unit, name in {self.units[name]: name for name in names}.items():
            try:
                result = companions.window_in(text, unit)
            except QuantityError as error:
                self.problems.add(where, key, error.expected, error.found, error.hint or f"`{name}` is in {unit}")
                return None
        return result

    def value(self, where: str, key: str, text: object, name: str) -> float:
        """A value of one dimension."""
        try:
            return companions.value_in(text, self.units[name])
        except QuantityError as error:
            self.problems.unread(where, f"{key}.{name}", error)
            return 0.0

    def check_size(self, where: str, names: Sequence[str], windows: Sequence[Window]) -> None:
        """A tolerance must leave something of a dimension that cannot be zero."""
        for name in names:
            value = self.highest.get(name)
            if value is None:
                continue
            allowed = sum(window.value * (value if window.relative else 1.0) for window in windows)
            if allowed >= value:
                what = f"{allowed:.6g} of {value:.6g} {self.units[name]}"
                self.problems.add(where, "", f"a tolerance smaller than `{name}` itself", what)
                return


def _highest(variables: Sequence[Variable], dimensions: Sequence[Dimension]) -> dict[str, float]:
    """The greatest value that each positive dimension can have, as it is shown."""
    known = {variable.name: (variable.low, variable.high) for variable in variables if variable.positive}
    base: dict[str, tuple[float, float]] = {}
    highest: dict[str, float] = {}
    for dimension in dimensions:
        if dimension.positive and all(name in known for name, _ in dimension.follows.powers):
            base[dimension.name] = _interval(dimension.follows, known)
    for dimension in dimensions:
        shown = dimension.shown
        if dimension.name in base and shown.coefficient > 0 and all(name in base for name, _ in shown.powers):
            highest[dimension.name] = _interval(shown, base)[1]
    return highest


def _interval(term: Monomial, known: Mapping[str, tuple[float, float]]) -> tuple[float, float]:
    """Least and greatest value of a positive monomial."""
    low = high = math.log(abs(term.coefficient))
    for name, power in term.powers:
        ends = [power * math.log(end) for end in known[name]]
        low, high = low + min(ends), high + max(ends)
    return math.exp(min(low, 700.0)), math.exp(min(high, 700.0))
