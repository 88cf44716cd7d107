"""Static equilibrium: what is found, and what is refused."""

import numpy as np
import pytest
from assemblies import built
from numpy.testing import assert_allclose

from inverse.assembly.assembly import Assembly
from inverse.assembly.bodies import Joint, Mass, Pendulum, Platform, Rotor
from inverse.assembly.links import Gear, Mount, Rod, Shaft, Spring
from inverse.assembly.statics import Deflection
from inverse.errors import ModelError
from inverse.modal.solution import solve_modes

G = 9.80665


def value(matrices, name):
    return float(matrices.point.values[0, matrices.model.names.index(name)])


def test_preload_moves_a_pendulum_to_where_moments_balance():
    """m g L sin θ = (p − k L sin θ) L cos θ, and K = V'' there, by plain calculus."""
    m, L, k, p = 1.0, 1.0, 2.0, 3.0
    matrices = built(
        Assembly(
            bodies=(Pendulum(name="bob", mass=m, length=L),),
            links=(Spring(name="pull", between=("bob", "ground"), rate=k, preload=p),),
        ).compile()
    )
    sine = value(matrices, "bob.rest_sine")
    theta = np.arcsin(sine)
    tension = p + k * (-L * sine)
    assert_allclose(m * G * L * sine, tension * L * np.cos(theta), rtol=1e-13)

    def energy(angle):
        return -m * G * L * np.cos(angle) - p * L * np.sin(angle) + k / 2 * (L * np.sin(angle)) ** 2

    h = 1e-4
    curvature = (energy(theta + h) - 2 * energy(theta) + energy(theta - h)) / h**2
    # Second difference of a smooth function: truncation h² and rounding 1e-16/h² meet near 1e-7.
    assert_allclose(solve_modes(matrices).eigenvalues[0, 0], curvature / (m * L**2), rtol=1e-6)


def test_a_tall_soft_mount_loses_lateral_rate():
    """A 2.5 Hz mount 100 mm tall loses m g/H = g/(ω² H) ≈ 0.4 of its axial rate laterally (exact)."""
    m, H = 10.0, 0.1
    k = m * (2 * np.pi * 2.5) ** 2
    body = Platform(name="slab", mass=m, inertia=(0.5, 0.5, 0.8))
    mount = Mount(name="mount", between=("slab", "ground"), at=(0.0, 0.0, 0.0), rates=(k, k), height=H)
    matrices = built(Assembly(bodies=(body,), links=(mount,)).compile())
    assert_allclose(value(matrices, "mount.force"), m * G, rtol=1e-13)
    modes = solve_modes(matrices)
    lateral = np.sort(modes.eigenvalues[0, modes.rigid :])[:2]
    assert_allclose(lateral, (k - m * G / H) / m, rtol=1e-12)
    assert_allclose(m * G / H / k, 0.3974, rtol=1e-3)


def test_a_sag_is_weight_over_rate_and_static_rate_counts():
    matrices = built(
        Assembly(
            bodies=(Mass(name="block", mass=4.0, moves="vertical"),),
            links=(Spring(name="k", between=("block", "ground"), rate=1000.0, static_rate=800.0),),
        ).compile(sags=[Deflection("block.z"), Deflection("k"), Deflection("block.z", ("block.z", 10.0))])
    )
    assert_allclose(value(matrices, Deflection("block.z").name), -4.0 * G / 800.0, rtol=1e-13)
    assert_allclose(abs(value(matrices, Deflection("k").name)), 4.0 * G / 800.0, rtol=1e-13)
    assert_allclose(abs(value(matrices, Deflection("block.z", ("block.z", 10.0)).name)), 10.0 / 800.0, rtol=1e-13)


def test_a_platform_on_its_edge_topples():
    body = Platform(name="tower", mass=100.0, inertia=(4.0,), centre=(0.0, 2.0))
    feet = tuple(Spring(name=f"f{x}", between=("tower", "ground"), at=x, rate=2000.0) for x in (-0.2, 0.2))
    modes = solve_modes(built(Assembly(bodies=(body,), links=feet).compile()))
    assert not modes.stable[0]


def test_a_string_of_rods_under_tension_has_the_frequency_of_a_loaded_string():
    """A bob on a vertical rod is a pendulum: N/ℓ restores it, ω² = g/ℓ up to g m/(E A) (common practice, no source)."""
    matrices = built(
        Assembly(
            bodies=(
                Joint(name="top", position=(0.0, 0.0), fixed=("x", "z")),
                Joint(name="bob", position=(0.0, -2.0), mass=3.0),
            ),
            links=(Rod(name="rod", between=("top", "bob"), area=1e-4, modulus=2e11),),
        ).compile()
    )
    assert_allclose(solve_modes(matrices).eigenvalues[0, 0], G / 2.0, rtol=1e-12)


REFUSED = {
    "nothing carries the load": Assembly(
        bodies=(Platform(name="slab", mass=1.0, inertia=(1.0,), centre=(0.0, 0.1)),),
        links=(Spring(name="k", between=("slab", "ground"), at=(0.5, 0.1), rate=10.0),),
    ),
    "no first-order coupling": Assembly(
        bodies=(
            Platform(name="floor", mass=1.0, inertia=(1.0,)),
            Pendulum(name="bob", mass=1.0, length=1.0, hung_from="floor"),
        )
    ),
    "without first-order coupling": Assembly(
        bodies=(Mass(name="a", mass=1.0), Mass(name="b", mass=1.0, moves="vertical")),
        links=(Spring(name="k", between=("a", "b"), rate=1.0),),
    ),
    "runs in a circle": Assembly(
        bodies=(
            Pendulum(name="a", mass=1.0, length=1.0, hung_from="b"),
            Pendulum(name="b", mass=1.0, length=1.0, hung_from="a"),
        )
    ),
    "use a shaft": Assembly(
        bodies=(Rotor(name="a", inertia=1.0), Rotor(name="b", inertia=1.0)),
        links=(Spring(name="k", between=("a", "b"), rate=1.0),),
    ),
    "joins rotors": Assembly(
        bodies=(Mass(name="a", mass=1.0),), links=(Shaft(name="s", between=("a", "ground"), rate=1.0),)
    ),
    "closes a loop of gears": Assembly(
        bodies=tuple(Rotor(name=n, inertia=1.0) for n in "abc"),
        links=tuple(
            Gear(name=f"g{i}", between=pair, ratio=2.0) for i, pair in enumerate([("a", "b"), ("b", "c"), ("a", "c")])
        ),
    ),
    "two parts are named": Assembly(bodies=(Mass(name="a", mass=1.0), Mass(name="a", mass=1.0))),
    "is not a body": Assembly(
        bodies=(Mass(name="a", mass=1.0),), links=(Spring(name="k", between=("a", "b"), rate=1.0),)
    ),
    "must be greater than zero": Assembly(bodies=(Mass(name="a", mass=0.0),)),
    "must run between two joints": Assembly(
        bodies=(Mass(name="a", mass=1.0),),
        links=(Rod(name="r", between=("a", "ground"), area=1.0, modulus=1.0),),
    ),
}


@pytest.mark.parametrize("message", REFUSED)
def test_what_cannot_be_is_refused_in_words(message):
    with pytest.raises(ModelError, match=message):
        built(REFUSED[message].compile())


def test_a_coordinate_without_mass_is_refused():
    frame = Assembly(
        bodies=(Joint(name="a", position=(0.0, 0.0), fixed=("x", "z")), Joint(name="b", position=(1.0, 0.0))),
        links=(Rod(name="r", between=("a", "b"), area=1.0, modulus=1.0),),
        gravity=0.0,
    )
    with pytest.raises(ModelError, match="has no mass"):
        solve_modes(built(frame.compile()))
