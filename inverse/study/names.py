"""The names in a study file and what they stand for."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from fnmatch import fnmatchcase
from typing import Any

from inverse.assembly.bodies import Body, Joint, Mass, Pendulum, Platform, Rotor
from inverse.assembly.links import Damper, Gear, Link, Mount, Rod, Shaft, Spring
from inverse.study.entries import found
from inverse.study.problems import Problems, place_of

GROUND = "ground"
TRANSLATIONS = ("x", "y", "z")

_WORDS = {
    Mass: "a mass",
    Pendulum: "a pendulum",
    Rotor: "a rotor",
    Platform: "a platform",
    Joint: "a joint",
    Spring: "a spring",
    Mount: "a mount",
    Damper: "a damper",
    Shaft: "a shaft",
    Gear: "a gear",
    Rod: "a rod",
}


def described(part: object) -> str:
    """What a part is, in words."""
    return "the ground" if part is None else _WORDS.get(type(part), "a label")


def components_of(body: Body) -> tuple[str, ...]:
    """Names of the components of a body, in the order of results."""
    match body:
        case Mass():
            axes: tuple[str, ...] = (body.axis,)
        case Platform():
            axes = ("z", "ry") if body.plane else body.axes
        case Joint():
            axes = tuple(axis for axis in body.directions if axis not in body.fixed)
        case _:
            axes = body.axes
    return tuple(f"{body.name}.{axis}" for axis in axes)


def matched(
    problems: Problems, where: str, key: str, patterns: Sequence[str], known: Sequence[str], noun: str
) -> tuple[str, ...]:
    """The names that shell-style patterns match, in their own order; a pattern that matches none is a problem."""
    chosen: set[str] = set()
    for pattern in patterns:
        some = [name for name in known if fnmatchcase(name, pattern)]
        if not some:
            problems.unknown(where, key, f"a pattern that matches a {noun}", pattern, known)
        chosen.update(some)
    return tuple(name for name in known if name in chosen)


@dataclass
class Names:
    """Bodies (labels of matrices among them), links and components by name, and the problems of asking for others."""

    raw: Mapping[str, Any]
    problems: Problems
    bodies: dict[str, Body] = field(default_factory=dict)
    links: dict[str, Link] = field(default_factory=dict)
    components: dict[str, tuple[str, ...]] = field(default_factory=dict)

    def place(self, section: str, index: int) -> str:
        """How messages name a table of an array."""
        return place_of(section, index, self.raw[section][index])

    def enter(self, body: Body) -> None:
        """A body and its components."""
        self.bodies[body.name] = body
        self.components[body.name] = components_of(body)

    def component(self, where: str, key: str, name: str) -> str:
        """A component given as such, or as a body that has only one."""
        own = self.components.get(name)
        if own is not None and len(own) == 1:
            return own[0]
        known = [component for components in self.components.values() for component in components]
        if name in known:
            return name
        if own is None:
            self.problems.unknown(where, key, "the name of a body or component", name, [*self.components, *known])
        elif own:
            listed = ", ".join(f'"{component}"' for component in own)
            self.problems.add(where, key, f"one of its components, {listed}", f"the body {found(name)}")
        else:
            self.problems.add(where, key, "a body that can move", f"{found(name)}, which is fixed")
        return name

    def owner(self, where: str, key: str, name: str) -> str:
        """A body, or a component of a body that has several."""
        if self.components.get(name):
            return name
        component = self.component(where, key, name)
        body = component.rpartition(".")[0]
        return body if len(self.components.get(body, ())) == 1 else component

    def moving(self, where: str, key: str, name: str) -> tuple[str, ...]:
        """The components of a body that can move."""
        own = self.components.get(name)
        if own is None:
            self.problems.unknown(where, key, "the name of a body", name, self.components)
        elif not own:
            self.problems.add(where, key, "a body that can move", f"{found(name)}, which is fixed")
        return own or ()

    def check_axis(self, where: str, body: str, axis: str | None) -> None:
        """A body, and an axis on which it moves."""
        own = self.moving(where, "body", body)
        if own and axis is not None and f"{body}.{axis}" not in own:
            axes = ", ".join(component.rpartition(".")[2] for component in own)
            self.problems.add(where, "axis", f"an axis on which {found(body)} moves ({axes})", found(axis))
