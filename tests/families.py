"""Assemblies with free variables, for tests of what holds over whole ranges."""

import numpy as np

from inverse.assembly.assembly import Assembly, Model
from inverse.assembly.bodies import Joint, Mass, Pendulum, Platform, Rotor
from inverse.assembly.links import Gear, Rod, Shaft, Spring
from inverse.assembly.parameters import Variable
from inverse.units import Product


def follow(name: str, coefficient: float = 1.0, power: int = 1) -> Product:
    """A dimension that follows one variable."""
    return Product(coefficient=coefficient, powers=((name, power),))


def free(**ranges: tuple[float, float]) -> list[Variable]:
    """Variables with their ranges."""
    return [Variable(name=name, low=low, high=high) for name, (low, high) in ranges.items()]


def cases() -> dict[str, Model]:
    """Cross terms whose coefficient varies, and what else has been found to go wrong."""
    pendulums = (
        Pendulum(name="p", mass=1.0, length=follow("L")),
        Pendulum(name="q", mass=1.3, length=follow("M")),
    )
    hung = (pendulums[0], Pendulum(name="q", mass=1.3, length=follow("M"), hung_from="p"))
    places = {"j0": (0.0, 0.0), "j1": (0.0, 1.0), "tip": (1.3, 0.4)}
    return {
        "mount position": Assembly(
            bodies=(Platform(name="stage", mass=100.0, inertia=(4.0,)),),
            links=(
                Spring(name="left", between=("stage", "ground"), at=(follow("a"),), rate=2e4),
                Spring(name="right", between=("stage", "ground"), at=(0.4,), rate=follow("k")),
            ),
            gravity=0.0,
        ).compile(free(a=(-0.5, -0.2), k=(1e4, 3e4))),
        "offset centre of mass": Assembly(
            bodies=(Platform(name="stage", mass=100.0, inertia=(4.0,), centre=(follow("c"),)),),
            links=(
                Spring(name="left", between=("stage", "ground"), at=(-0.4,), rate=2e4),
                Spring(name="right", between=("stage", "ground"), at=(0.3,), rate=3e4),
            ),
            gravity=0.0,
        ).compile(free(c=(-0.2, 0.15))),
        "gear ratio": Assembly(
            bodies=tuple(Rotor(name=f"d{i}", inertia=J) for i, J in enumerate((1.0, 0.05, 0.05, 1.0))),
            links=(
                Shaft(name="frame", between=("ground", "d0"), rate=100.0),
                Shaft(name="input", between=("d0", "d1"), rate=100.0),
                Gear(name="mesh", between=("d1", "d2"), ratio=follow("r")),
                Shaft(name="output", between=("d2", "d3"), rate=follow("k")),
            ),
        ).compile(free(r=(1.5, 3.0), k=(20.0, 80.0))),
        "tie between different lengths": Assembly(
            bodies=pendulums, links=(Spring(name="tie", between=("p", "q"), at=0.6, rate=100.0),)
        ).compile(free(L=(0.3, 0.6), M=(1.5, 2.5))),
        "hung pendulum with a tie": Assembly(
            bodies=hung, links=(Spring(name="tie", between=("q", "ground"), at=0.6, rate=100.0),)
        ).compile(free(L=(1.2, 2.6), M=(1.0, 2.0))),
        "weight above its springs": Assembly(
            bodies=(Platform(name="stage", mass=100.0, inertia=(4.0,), centre=(0.0, follow("h"))),),
            links=tuple(
                Spring(name=f"s{i}", between=("stage", "ground"), at=(x,), rate=2000.0)
                for i, x in enumerate((-0.4, 0.4))
            ),
        ).compile(free(h=(0.1, 1.5))),
        "rods of free area": Assembly(
            bodies=tuple(
                Joint(name=name, position=place, fixed=("x", "z") if name != "tip" else (), mass=5.0)
                for name, place in places.items()
            ),
            links=(
                Rod(name="strut", between=("j0", "tip"), area=follow("a"), modulus=7e10, density=2700.0),
                Rod(name="tie", between=("j1", "tip"), area=follow("b"), modulus=7e10, density=2700.0),
            ),
            gravity=0.0,
        ).compile(free(a=(1e-4, 1e-3), b=(5e-5, 5e-4))),
    }


class Draw:
    """Numbers for an assembly, some of them free, up to three; a range is a few per cent to a factor of three."""

    def __init__(self, rng: np.random.Generator, most: int = 3) -> None:
        """Start without variables."""
        self.rng, self.most, self.variables = rng, most, []

    def amount(self, low: float, high: float) -> Product | float:
        """A positive number, fixed or free, now and then a square."""
        value = float(np.exp(self.rng.uniform(np.log(low), np.log(high))))
        if len(self.variables) >= self.most or self.rng.random() < 0.5:
            return value
        width = float(np.exp(self.rng.uniform(np.log(1.02), np.log(3.0))))
        self.variables.append(Variable(name=f"v{len(self.variables)}", low=value, high=value * width))
        return follow(self.variables[-1].name, power=int(self.rng.choice([1, 1, 1, 2])))

    def place(self, low: float, high: float) -> Product | float:
        """A coordinate that may be zero or negative."""
        value = float(self.rng.uniform(low, high))
        if len(self.variables) >= self.most or self.rng.random() < 0.5:
            return value
        width = float(self.rng.uniform(0.05, 0.6)) * (high - low)
        self.variables.append(Variable(name=f"v{len(self.variables)}", low=value, high=value + width))
        return follow(self.variables[-1].name)


def drawn_assembly(rng: np.random.Generator) -> Model:
    """A random small assembly of a random kind, one to three of whose numbers are free."""
    kinds = (_chain, _row, _hung, _cart, _stage, _train)
    draw = Draw(rng)
    assembly = kinds[rng.integers(len(kinds))](draw)
    return assembly.compile(draw.variables) if draw.variables else drawn_assembly(rng)


def _chain(draw: Draw) -> Assembly:
    n = int(draw.rng.integers(2, 6))
    held = draw.rng.random() < 0.8
    bodies = tuple(Mass(name=f"b{i}", mass=draw.amount(0.5, 3.0)) for i in range(n))
    ends = [(f"b{draw.rng.integers(i)}", f"b{i}") for i in range(1, n)] + [("ground", "b0")] * held
    links = tuple(Spring(name=f"s{i}", between=e, rate=draw.amount(20.0, 500.0)) for i, e in enumerate(ends))
    return Assembly(bodies=bodies, links=links)


def _row(draw: Draw) -> Assembly:
    bodies = tuple(
        Pendulum(name=f"p{i}", mass=draw.amount(0.5, 3.0), length=draw.amount(0.7, 2.0), rod_mass=draw.amount(0.1, 0.3))
        for i in range(3)
    )
    links = tuple(
        Spring(name=f"s{i}", between=(f"p{i}", f"p{i + 1}"), at=draw.place(0.2, 1.5), rate=draw.amount(0.5, 20.0))
        for i in range(2)
    )
    return Assembly(bodies=bodies, links=links)


def _hung(draw: Draw) -> Assembly:
    bodies = (
        Pendulum(name="p", mass=draw.amount(0.5, 3.0), length=draw.amount(0.7, 2.0)),
        Pendulum(
            name="q",
            mass=draw.amount(0.5, 3.0),
            length=draw.amount(0.7, 2.0),
            hung_from="p",
            rod_mass=draw.amount(0.1, 0.4),
        ),
    )
    tie = Spring(name="s", between=("q", "ground"), at=draw.place(0.2, 1.0), rate=draw.amount(0.5, 20.0))
    return Assembly(bodies=bodies, links=(tie,))


def _cart(draw: Draw) -> Assembly:
    bodies = (
        Mass(name="c", mass=draw.amount(1.0, 5.0)),
        Pendulum(name="q", mass=draw.amount(0.5, 3.0), length=draw.amount(0.7, 2.0), hung_from="c"),
    )
    links = (
        Spring(name="s", between=("c", "ground"), rate=draw.amount(5.0, 50.0)),
        Spring(name="t", between=("q", "ground"), at=draw.place(0.2, 1.0), rate=draw.amount(5.0, 50.0)),
    )
    return Assembly(bodies=bodies, links=links)


def _stage(draw: Draw) -> Assembly:
    height = (draw.place(-0.5, 1.0),) if draw.rng.random() < 0.3 else ()
    bodies = (
        Platform(
            name="p",
            mass=draw.amount(50.0, 150.0),
            inertia=(draw.amount(3.0, 8.0),),
            centre=(draw.place(-0.2, 0.2), *height),
        ),
        Mass(name="m", mass=draw.amount(1.0, 10.0), moves="vertical"),
    )
    links = (
        *(
            Spring(
                name=f"s{i}", between=("p", "ground"), at=(draw.place(x - 0.1, x + 0.1),), rate=draw.amount(5e3, 5e4)
            )
            for i, x in enumerate((-0.4, 0.4))
        ),
        Spring(name="h", between=("p", "m"), at=(draw.place(-0.3, 0.3),), rate=draw.amount(100.0, 5000.0)),
    )
    return Assembly(bodies=bodies, links=links)


def _train(draw: Draw) -> Assembly:
    bodies = tuple(Rotor(name=f"d{i}", inertia=draw.amount(0.5, 3.0)) for i in range(4))
    links = (
        Shaft(name="i", between=("d0", "d1"), rate=draw.amount(20.0, 200.0)),
        Gear(name="g", between=("d1", "d2"), ratio=draw.amount(0.5, 3.0)),
        Shaft(name="o", between=("d2", "d3"), rate=draw.amount(20.0, 200.0)),
    )
    return Assembly(bodies=bodies, links=links)
