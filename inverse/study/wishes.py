"""Objectives: tables in, `objectives` out, with the static deflections that the assembly must compute for them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

from inverse.assembly.assembly import Model, Price
from inverse.assembly.links import Mount, Rod, Spring
from inverse.assembly.parameters import Variable
from inverse.assembly.statics import Deflection
from inverse.study import schema
from inverse.study.entries import ModeText, found
from inverse.study.names import TRANSLATIONS, Names, described, matched
from inverse.units import Window
from objectives.base import AtLeast, Objective
from objectives.frequency import BeatPeriod, Frequency, FrequencyRatio, Period, Splitting
from objectives.keep_out import Band, KeepOut, bands_from_orders, merged
from objectives.parts import Cost, LeastChange, StaticSag, TotalMass
from objectives.shape import EnergyShare, NodalPoint, Shape
from objectives.state import Like, ModeReference, Sag
from objectives.transfer import HandedAmplitude, TransferCompleteness, TransferTime

NOT_JUDGED = ("damping ratio", "decay time", "response", "transmissibility", "peak response")
"""Kinds of objective that can be written but are not judged yet; conditions are not either."""


@dataclass
class Wishes:
    """Reads the tables of objectives; notes what they ask of parts that are not there."""

    tables: schema.StudyFile
    names: Names
    variables: Sequence[Variable]
    prices: Sequence[Price]
    deflections: dict[Deflection, None] = field(default_factory=dict)
    labels: set[str] = field(default_factory=set)

    def objectives(self) -> tuple[Objective, ...]:
        """All objectives that can be judged, in the order of the file."""
        objectives = []
        for i, table in enumerate(self.tables.objective):
            where = f"objective[{i + 1}]"
            conditions = table.conditions or ()
            for name in conditions:
                known = [condition.name for condition in self.tables.condition]
                if name not in known:
                    self.names.problems.unknown(where, "conditions", "the name of a [[condition]]", name, known)
            if table.kind in NOT_JUDGED:
                self._check_unjudged(table, where)
                continue
            objective = self._objective(table, where, conditions)
            if objective is not None:
                objectives.append(objective)
        return tuple(objectives)

    def _objective(self, table: Any, where: str, conditions: tuple[str, ...]) -> Objective | None:
        before = len(self.names.problems.lines)
        kind: type[Any]
        rest: dict[str, Any]
        match table:
            case schema.Frequency() | schema.Period():
                kind = Frequency if isinstance(table, schema.Frequency) else Period
                subject, rest = _mode_words(table.mode), {"mode": self._mode(where, table.mode)}
            case schema.Splitting() | schema.BeatPeriod() | schema.FrequencyRatio():
                kind = {"splitting": Splitting, "beat period": BeatPeriod}.get(table.kind, FrequencyRatio)
                subject = "-".join(map(_mode_words, table.modes))
                rest = {"between": tuple(self._mode(where, mode) for mode in table.modes)}
            case schema.KeepOut():
                kind, (subject, rest) = KeepOut, self._keep_out(where, table)
            case schema.TransferTime():
                kind, (subject, rest) = TransferTime, self._transfer(where, table)
                rest |= {"completeness": table.completeness}
            case schema.TransferCompleteness():
                kind, (subject, rest) = TransferCompleteness, self._transfer(where, table)
                rest |= {"time": table.time}
            case schema.HandedAmplitude():
                kind, (subject, rest) = HandedAmplitude, self._transfer(where, table)
                rest["target"] = self.names.component(where, "to", table.to)
            case schema.Shape():
                kind, subject = Shape, _mode_words(table.mode)
                rest = {"mode": self._mode(where, table.mode), "like": self._like(where, "like", table.like)}
            case schema.NodalPoint():
                kind, (subject, rest) = NodalPoint, self._nodal_point(where, table)
            case schema.EnergyShare():
                kind, subject = EnergyShare, f"{_mode_words(table.mode)} {table.body} {table.axis or ''}".strip()
                self.names.check_axis(where, table.body, table.axis)
                whole = table.axis is None or len(self.names.components.get(table.body, ())) == 1
                owner = table.body if whole else f"{table.body}.{table.axis}"
                rest = {"mode": self._mode(where, table.mode), "owner": owner}
            case schema.Sag():
                kind, subject, rest = StaticSag, str(table.body or table.link), {"sag": self._sag(where, table)}
            case schema.TotalMass():
                kind, subject, rest = TotalMass, "", {"parts": self._weighed(where, table.parts)}
            case schema.Cost():
                kind, subject, rest = Cost, "", {"parts": self._priced(where, table.parts)}
            case _:
                kind, subject, rest = LeastChange, "", {}
                self._check_starts(where)
        if len(self.names.problems.lines) > before:
            return None
        requirement = {} if isinstance(table, schema.KeepOut) else {"requirement": table.requirement()}
        objective: Objective = kind(
            label=self._label(table.label or f"{table.kind} {subject}".strip()),
            weight=table.weight,
            conditions=conditions,
            **(requirement | rest),
        )
        return objective

    def _label(self, wanted: str) -> str:
        """The label, with a counter where it is taken."""
        label, n = wanted, 1
        while label in self.labels:
            n += 1
            label = f"{wanted} ({n})"
        self.labels.add(label)
        return label

    def _mode(self, where: str, mode: ModeText) -> ModeReference:
        return mode if isinstance(mode, int) else self._like(where, "mode.like", mode)

    def _like(self, where: str, key: str, pattern: Sequence[tuple[str, float]]) -> Like:
        resolved: dict[str, float] = {}
        for name, value in pattern:
            component = self.names.component(where, key, name)
            if component in resolved:
                self.names.problems.add(where, key, "each component once", f"{found(name)} again")
            resolved[component] = value
        return Like(tuple(resolved.items()) if len(resolved) > 1 else tuple(pattern))

    def _keep_out(self, where: str, table: schema.KeepOut) -> tuple[str, dict[str, Any]]:
        if table.band is not None:
            bands: tuple[tuple[float, float], ...] = (table.band,)
            subject = f"{table.band[0]:.6g}-{table.band[1]:.6g} Hz"
        else:
            orders, (low, high) = table.orders or (), table.speed or (0.0, 0.0)
            bands = bands_from_orders(orders, low, high)
            subject = f"orders {', '.join(f'{order:g}' for order in orders)}"
        margin = table.margin or Window(0.0, relative=True)
        owners = tuple(self.names.owner(where, "driven_by", name) for name in table.driven_by or ())
        widened = merged([_widened(band, margin) for band in bands])
        # What it measures is the distance from the bands, which must not be negative.
        return subject, {"requirement": AtLeast(0.0), "bands": widened, "driven_by": owners}

    def _transfer(self, where: str, table: schema.Transfer) -> tuple[str, dict[str, Any]]:
        source = self.names.component(where, "from", table.from_)
        target = self.names.owner(where, "to", table.to)
        if target in (source, self.names.owner(where, "from", table.from_)):
            self.names.problems.add(where, "to", "another body than `from`", found(table.to))
        rest = {"source": source, "target": target, "horizon": table.horizon}
        return f"{table.from_}-{table.to}", rest

    def _nodal_point(self, where: str, table: schema.NodalPoint) -> tuple[str, dict[str, Any]]:
        self.names.check_axis(where, table.body, table.axis)
        axes = TRANSLATIONS if table.axis is None else (table.axis,)
        counted = {
            name: tuple(component for component in own if component.rpartition(".")[2] in axes)
            for name, own in self.names.components.items()
        }
        bodies = {name: own for name, own in counted.items() if own}
        if self.names.components.get(table.body) and table.axis is None and table.body not in bodies:
            self.names.problems.add(where, "axis", "the axis of a body that only turns", "none", 'such as axis = "r"')
        subject = f"{_mode_words(table.mode)} {table.body} {table.axis or ''}".strip()
        return subject, {"mode": self._mode(where, table.mode), "own": bodies.get(table.body, ()), "bodies": bodies}

    def _sag(self, where: str, table: schema.Sag) -> Sag:
        of = self._sagging_link(where, table.link) if table.link else self._sagging_body(where, table)
        case = None if table.force is None else (of, table.force)
        self.deflections[Deflection(of, case)] = None
        return Sag(of, table.force)

    def _sagging_link(self, where: str, name: str) -> str:
        link = self.names.links.get(name)
        if link is None:
            self.names.problems.unknown(where, "link", "the name of a link", name, self.names.links)
        elif not isinstance(link, Spring | Mount | Rod):
            self.names.problems.add(where, "link", "a spring, mount or rod", described(link))
        return name

    def _sagging_body(self, where: str, table: schema.Sag) -> str:
        body, axis = str(table.body), table.axis or "z"
        own = self.names.moving(where, "body", body)
        if table.force is None and axis != "z":
            self.names.problems.add(where, "axis", '"z" for the deflection under the own weight', found(axis))
        if own and f"{body}.{axis}" not in own:
            axes = ", ".join(component.rpartition(".")[2] for component in own)
            hint = "a force may act along another `axis`" if table.axis is None else ""
            self.names.problems.add(
                where, "body", f"a body that moves along {axis}", f"{found(body)} with {axes}", hint
            )
        return f"{body}.{axis}"

    def _parts(self, where: str, patterns: Sequence[str] | None, known: Sequence[str]) -> tuple[str, ...]:
        return matched(self.names.problems, where, "parts", patterns or ("*",), known, "part")

    def _weighed(self, where: str, patterns: Sequence[str] | None) -> tuple[str, ...]:
        if not self.names.bodies:
            self.names.problems.note(where, "", "there is no part that has a mass")
        return self._parts(where, patterns, [*self.names.bodies, *self.names.links]) if self.names.bodies else ()

    def _priced(self, where: str, patterns: Sequence[str] | None) -> tuple[str, ...]:
        priced = list(dict.fromkeys(price.part for price in self.prices))
        if not priced:
            self.names.problems.add(where, "", "prices in [[cost]] tables", "none")
            return ()
        return self._parts(where, patterns, priced)

    def _check_starts(self, where: str) -> None:
        free = [variable for variable in self.variables if variable.free]
        if missing := [variable.name for variable in free if variable.start is None]:
            listed = ", ".join(f"`{name}`" for name in missing[:8])
            self.names.problems.add(where, "", "a `start` for every free variable", f"none for {listed}")

    def check_mode_numbers(self, model: Model) -> None:
        """No mode beyond the number of coordinates."""
        for i, table in enumerate(self.tables.objective):
            key = "modes" if isinstance(table, schema.AskedOfModes) else "mode"
            for mode in getattr(table, "modes", None) or (getattr(table, "mode", None),):
                if isinstance(mode, int) and mode > model.size:
                    most = f"a mode from 1 to {model.size}, the number of coordinates"
                    self.names.problems.add(f"objective[{i + 1}]", key, most, str(mode))

    def _check_unjudged(self, table: Any, where: str) -> None:
        if isinstance(table, schema.AskedOfMode):
            self._mode(where, table.mode)
            return
        if table.load not in [load.name for load in self.tables.load]:
            known = [load.name for load in self.tables.load]
            self.names.problems.unknown(where, "load", "the name of a [[load]]", table.load, known)
        if table.quantity == "link force":
            if table.body not in self.names.links:
                self.names.problems.unknown(where, "body", "the name of a link", table.body, self.names.links)
        else:
            self.names.check_axis(where, table.body, table.axis)

    def refuse_unjudged(self) -> None:
        """What can be written and checked, and that this version cannot answer."""
        for i, table in enumerate(self.tables.objective):
            if table.kind in NOT_JUDGED:
                self.names.problems.note(
                    f"objective[{i + 1}]", "kind", f"this version does not judge {found(table.kind)} yet"
                )
        for i in range(len(self.tables.condition)):
            self.names.problems.note(self.names.place("condition", i), "", "this version does not judge conditions yet")
        self.names.problems.raise_any()


def _mode_words(mode: ModeText) -> str:
    """A mode in a label: its number, or the components that move in its shape."""
    if isinstance(mode, int):
        return str(mode)
    moving = [(name, "-" if value < 0 else "+") for name, value in mode if value]
    return "".join(sign + name for name, sign in moving).removeprefix("+")


def _widened(band: Band, margin: Window) -> Band:
    """Edges moved outward; a lower edge at or below zero becomes the smallest that has a logarithm."""
    low, high = band
    if margin.relative:
        low, high = low * (1 - margin.value), high * (1 + margin.value)
    else:
        low, high = low - margin.value, high + margin.value
    return max(low, 1e-9 * high), high
