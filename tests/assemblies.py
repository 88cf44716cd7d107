"""Assemblies for tests: published ones with their known answers, and one of every kind of part."""

import numpy as np

from inverse.assembly.assembly import Assembly, Model
from inverse.assembly.bodies import Joint, Mass, Pendulum, Platform, Rotor
from inverse.assembly.links import Damper, Gear, Mount, Rod, Shaft, Spring
from inverse.matrices.equilibrium import at_rest
from inverse.matrices.stack import Matrices


def nominal(model: Model) -> np.ndarray:
    """Base dimensions of a model without variables, shape (1, D)."""
    parameters = model.parameters
    return parameters.nominal.values(parameters.variable_point(np.zeros((1, 0))))


def built(model: Model, z: np.ndarray | None = None) -> Matrices:
    """The model at rest, its base dimensions displaced by local coordinates `z`."""
    d = nominal(model)
    if z is not None:
        positive = model.parameters.positive
        d = np.where(positive, d * np.exp(np.where(positive, z, 0.0)), d + z)
    return Matrices(model, at_rest(model, d))


def chain(masses: list[float], rates: list[float], *, first_held: bool = True, last_held: bool = False) -> Assembly:
    """Masses in a row; one spring more for each end that is held."""
    n = len(masses)
    ends = [("ground", "m0")] * first_held + [(f"m{i}", f"m{i + 1}") for i in range(n - 1)]
    ends += [(f"m{n - 1}", "ground")] * last_held
    return Assembly(
        bodies=tuple(Mass(name=f"m{i}", mass=m) for i, m in enumerate(masses)),
        links=tuple(
            Spring(name=f"k{i}", between=pair, rate=k) for i, (pair, k) in enumerate(zip(ends, rates, strict=True))
        ),
    )


def series_of_pendulums(n: int, length: float = 1.0, gravity: float = 9.80665) -> Assembly:
    """n equal pendulums, each hung from the bob above."""
    return Assembly(
        bodies=tuple(
            Pendulum(name=f"p{i}", mass=1.0, length=length, hung_from=f"p{i - 1}" if i else None) for i in range(n)
        ),
        gravity=gravity,
    )


def pair(length: float = 1.0, mass: float = 1.0, rate: float = 1.0331557, gravity: float = 9.80665) -> Assembly:
    """Two equal pendulums with a spring between their bobs."""
    return Assembly(
        bodies=tuple(Pendulum(name=n, mass=mass, length=length) for n in ("east", "west")),
        links=(Spring(name="tie", between=("east", "west"), rate=rate),),
        gravity=gravity,
    )


def mounted_body(**mount: object) -> Assembly:
    """A body on four mounts whose six frequencies are exact in pairs (no gravity)."""
    corners = [(x, y) for x in (0.4, -0.4) for y in (0.25, -0.25)]
    return Assembly(
        bodies=(Platform(name="body", mass=100.0, inertia=(4.0, 6.0, 8.0)),),
        links=tuple(
            Mount(
                name=f"mount{i}",
                between=("body", "ground"),
                at=(x, y, -0.15),
                rates=(40000.0, 20000.0, 20000.0),
                **mount,
            )
            for i, (x, y) in enumerate(corners)
        ),
        gravity=0.0,
    )


def rod_frame(areas_cm2: list[float], modulus: float, density: float, added: float) -> Assembly:
    """The frame of ten rods, joints and rods numbered from 1 as published."""
    places = [(18.288, 9.144), (18.288, 0), (9.144, 9.144), (9.144, 0), (0, 9.144), (0, 0)]
    rods = [(5, 3), (3, 1), (6, 4), (4, 2), (3, 4), (1, 2), (5, 4), (6, 3), (3, 2), (4, 1)]
    return Assembly(
        bodies=tuple(
            Joint(
                name=f"j{i}",
                position=place,
                fixed=("x", "z") if i > 4 else (),
                mass=added if i <= 4 else None,
            )
            for i, place in enumerate(places, start=1)
        ),
        links=tuple(
            Rod(name=f"rod{i}", between=(f"j{a}", f"j{b}"), area=area * 1e-4, modulus=modulus, density=density)
            for i, ((a, b), area) in enumerate(zip(rods, areas_cm2, strict=True), start=1)
        ),
        gravity=0.0,
    )


def rod_tower(areas_cm2: list[float], modulus: float, density: float, added: float) -> Assembly:
    """The tower of 72 rods: square, four storeys, base fixed, 16 groups numbered from the top storey down."""
    side, storey = 3.048, 1.524
    corners = [(0.0, 0.0), (side, 0.0), (side, side), (0.0, side)]
    bodies = [
        Joint(
            name=f"l{level}c{c}",
            position=(x, y, level * storey),
            fixed=("x", "y", "z") if level == 0 else (),
            mass=added if level == 4 else None,
        )
        for level in range(5)
        for c, (x, y) in enumerate(corners)
    ]
    rods: list[Rod] = []

    def rod(first: str, second: str, group: int) -> None:
        area = areas_cm2[group] * 1e-4
        rods.append(Rod(name=f"rod{len(rods)}", between=(first, second), area=area, modulus=modulus, density=density))

    for level in range(4, 0, -1):
        group = 4 * (4 - level)
        for c in range(4):
            following = (c + 1) % 4
            rod(f"l{level - 1}c{c}", f"l{level}c{c}", group)
            rod(f"l{level - 1}c{c}", f"l{level}c{following}", group + 1)
            rod(f"l{level - 1}c{following}", f"l{level}c{c}", group + 1)
            rod(f"l{level}c{c}", f"l{level}c{following}", group + 2)
        rod(f"l{level}c0", f"l{level}c2", group + 3)
        rod(f"l{level}c1", f"l{level}c3", group + 3)
    return Assembly(bodies=tuple(bodies), links=tuple(rods), gravity=0.0)


def every_part() -> dict[str, Assembly]:
    """Small assemblies that between them hold every part with every option, at no special point."""
    mounts = tuple(
        Mount(
            name=f"mount{i}",
            between=("stage", "ground"),
            at=(x + 0.01 * i, y, -0.15),
            rates=(40000.0, 20000.0, 22000.0),
            height=0.1,
            static_rate=30000.0,
            count=2.0 if i == 0 else None,
        )
        for i, (x, y) in enumerate([(0.4, 0.25), (0.4, -0.25), (-0.4, 0.25), (-0.4, -0.25)])
    )
    places = [(2.0, 1.0), (2.0, 0.0), (1.0, 1.0), (1.0, 0.1), (0.0, 1.0), (0.0, 0.0)]
    rods = [(5, 3), (3, 1), (6, 4), (4, 2), (3, 4), (1, 2), (5, 4), (6, 3), (3, 2), (4, 1)]
    return {
        "pendulums with rods, bobs and ties": Assembly(
            bodies=tuple(
                Pendulum(
                    name=f"p{i}",
                    mass=1.0 + 0.1 * i,
                    length=1.0 + 0.2 * i,
                    rod_mass=0.1 + 0.01 * i,
                    bob_radius=0.1,
                    hung_from="p0" if i == 1 else None,
                )
                for i in range(4)
            ),
            links=(
                Spring(name="a", between=("p1", "p2"), at=0.6, rate=3.0, mass=0.1),
                Spring(name="b", between=("p2", "p3"), at={"p2": 0.4, "p3": 0.9}, rate=2.0, count=3.0),
            ),
        ),
        "pendulums moved by a preload, one on a cart": Assembly(
            bodies=(
                Pendulum(name="p", mass=1.0, length=1.0, rod_mass=0.2),
                Pendulum(name="q", mass=1.2, length=1.3),
                Pendulum(name="r", mass=0.5, length=0.4, hung_from="q"),
                Mass(name="cart", mass=2.0),
                Pendulum(name="s", mass=0.7, length=0.6, hung_from="cart"),
            ),
            links=(
                Spring(name="tight", between=("p", "q"), rate=2.0, preload=3.0),
                Spring(name="loose", between=("r", "cart"), rate=2.0, at=0.3),
                Spring(name="wall", between=("cart", "ground"), rate=5.0, mass=0.3),
            ),
        ),
        "platform in space on loaded mounts": Assembly(
            bodies=(
                Platform(
                    name="stage",
                    mass=100.0,
                    inertia=(4.0, 6.0, 8.0, 0.1, 0.2, 0.3),
                    centre=(0.01, 0.02, 0.03),
                ),
            ),
            links=mounts,
        ),
        "platform in the plane on springs": Assembly(
            bodies=(
                Platform(name="stage", mass=100.0, inertia=(4.0,), centre=(0.1, 0.2)),
                Mass(name="block", mass=7.0, moves="vertical"),
            ),
            links=(
                Spring(name="left", between=("stage", "ground"), at=(-0.4, -0.1), rate=20000.0, preload=100.0),
                Spring(
                    name="right",
                    between=("stage", "ground"),
                    at=(0.4, -0.1),
                    rate=30000.0,
                    direction=(0.3, 1.0),
                ),
                Spring(name="hanger", between=("stage", "block"), at=(0.2, -0.3), rate=900.0),
            ),
        ),
        "rod frame under its own weight": Assembly(
            bodies=tuple(
                Joint(
                    name=f"j{i}",
                    position=place,
                    fixed=("x", "z") if i > 4 else (),
                    mass=4.0 + i if i <= 4 else None,
                )
                for i, place in enumerate(places, start=1)
            ),
            links=tuple(
                Rod(name=f"rod{i}", between=(f"j{a}", f"j{b}"), area=1e-4 * i, modulus=1e7, density=2770.0)
                for i, (a, b) in enumerate(rods, start=1)
            ),
        ),
        "geared rotors": Assembly(
            bodies=tuple(Rotor(name=f"d{i}", inertia=1.0 + i) for i in range(4)),
            links=(
                Shaft(name="input", between=("d0", "d1"), rate=100.0),
                Gear(name="mesh", between=("d1", "d2"), ratio=-2.5),
                Shaft(name="output", between=("d2", "d3"), rate=50.0, count=2.0),
                Damper(name="brake", between=("d0", "d3"), coefficient=0.1),
            ),
        ),
    }
