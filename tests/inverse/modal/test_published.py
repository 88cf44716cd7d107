"""Modes against published and exact values."""

import numpy as np
import pytest
from assemblies import built, chain, mounted_body, pair, rod_frame, rod_tower, series_of_pendulums
from numpy.testing import assert_allclose

from inverse.assembly.assembly import Assembly
from inverse.assembly.bodies import Mass, Pendulum, Platform, Rotor
from inverse.assembly.links import Gear, Shaft, Spring
from inverse.assembly.matrix_model import MatrixModel
from inverse.modal.solution import solve_modes


def omega(assembly: Assembly) -> np.ndarray:
    """Circular frequencies of all modes, rigid ones as zero."""
    return np.sqrt(solve_modes(built(assembly.compile())).eigenvalues[0])


@pytest.mark.parametrize("n", [1, 2, 7, 30])
def test_uniform_chains_have_sine_frequencies(n):
    """Uniform chains in closed form (any text on vibration, e.g. Rayleigh, Theory of Sound, § 120)."""
    j = np.arange(1, n + 1)
    fixed_free = omega(chain([1.0] * n, [1.0] * n))
    fixed_fixed = omega(chain([1.0] * n, [1.0] * (n + 1), last_held=True))
    free_free = omega(chain([1.0] * n, [1.0] * (n - 1), first_held=False))

    # Rounding of the weights and of the solver: 30 bodies reach 4e-15; the margin is for other BLAS builds.
    assert_allclose(fixed_free, 2 * np.sin((2 * j - 1) * np.pi / (2 * (2 * n + 1))), rtol=1e-12)
    assert_allclose(fixed_fixed, 2 * np.sin(j * np.pi / (2 * (n + 1))), rtol=1e-12)
    assert_allclose(free_free, 2 * np.sin((j - 1) * np.pi / (2 * n)), rtol=1e-12)


def test_three_mass_chain():
    """L. Meirovitch, Elements of Vibration Analysis: the three-mass chain (printed digits confirmed)."""
    rates = [1.0, 1.0, 2.0]
    assert_allclose(omega(chain([1.0, 1.0, 2.0], rates)), [0.3730873, 1.3213245, 2.0285235], rtol=1e-7)


def test_car_bounce_and_pitch_rao():
    """S. S. Rao, Mechanical Vibrations: bounce and pitch of a car; x/θ with θ lifting the rear end.

    Printed 5.8593, 9.4341, −2.6461, 0.3061. Our ry lowers the front (x > 0), so x/θ keeps its sign with
    the front spring at +1.0 m.
    """
    car = Assembly(
        bodies=(Platform(name="car", mass=1000.0, inertia=(1000 * 0.9**2,)),),
        links=(
            Spring(name="front", between=("car", "ground"), at=1.0, rate=18000.0),
            Spring(name="rear", between=("car", "ground"), at=-1.5, rate=22000.0),
        ),
    )
    modes = solve_modes(built(car.compile()))
    ratio = modes.shapes[0, 0] / modes.shapes[0, 1]
    assert_allclose(np.sqrt(modes.eigenvalues[0]), [5.8592918, 9.4340889], rtol=1e-7)
    assert_allclose(ratio, [-2.6461098, 0.3061098], rtol=1e-6)


def test_car_bounce_and_pitch_thomson():
    """W. T. Thomson, Theory of Vibration with Applications: 3220 lb, r = 4 ft (printed 6.90, 9.06 rad/s)."""
    pound, foot = 4.4482216152605, 0.3048
    mass = 3220 / 32.2 * pound / foot
    car = Assembly(
        bodies=(Platform(name="car", mass=mass, inertia=(mass * (4 * foot) ** 2,)),),
        links=(
            Spring(name="front", between=("car", "ground"), at=4.5 * foot, rate=2400 * pound / foot),
            Spring(name="rear", between=("car", "ground"), at=-5.5 * foot, rate=2600 * pound / foot),
        ),
    )
    # Four digits: the data are exact in pounds and feet, the reference was computed to five.
    assert_allclose(omega(car), [6.8994, 9.0515], rtol=1e-5)


def test_three_disc_train():
    """W. T. Thomson: free train of three discs, J = 5, 11, 22, K = 1e5, 2e5 (from memory, computed)."""
    train = Assembly(
        bodies=tuple(Rotor(name=f"d{i}", inertia=J) for i, J in enumerate([5.0, 11.0, 22.0])),
        links=(
            Shaft(name="s0", between=("d0", "d1"), rate=1e5),
            Shaft(name="s1", between=("d1", "d2"), rate=2e5),
        ),
    )
    assert_allclose(omega(train), [0, 123.6658, 202.6583], rtol=1e-6)


@pytest.mark.parametrize(
    ("n", "zeros"),
    [
        (2, [0.5857864, 3.4142136]),
        (3, [0.4157746, 2.2942804, 6.2899451]),
        (4, [0.3225477, 1.7457611, 4.5366203, 9.3950709]),
        (5, [0.2635603, 1.4134031, 3.5964258, 7.08581, 12.6408008]),
    ],
)
def test_pendulums_in_series_swing_at_the_zeros_of_laguerre(n, zeros):
    """ω² l/g of n equal pendulums hung in series are the zeros of the Laguerre polynomial L_n (exact)."""
    square = omega(series_of_pendulums(n, length=0.7)) ** 2 * 0.7 / 9.80665
    assert_allclose(square, zeros, rtol=2e-7)
    # The zeros again, from NumPy's own polynomial module.
    assert_allclose(square, np.polynomial.laguerre.Laguerre.basis(n).roots(), rtol=1e-11)


def test_linear_molecule_stretch_ratio():
    """Ratio of the two stretching frequencies of CO₂, √(1 + 2·16/12) (exact; textbook of classical mechanics)."""
    assert_allclose(
        np.divide(*omega(chain([16.0, 12.0, 16.0], [1.0, 1.0], first_held=False))[[2, 1]]),
        1.9148542,
        rtol=1e-7,
    )


def test_body_on_four_mounts():
    """Six frequencies, exact pairwise closed form (2 × 2 pairs by symmetry)."""
    hertz = omega(mounted_body()) / (2 * np.pi)
    exact = [4.038563423, 4.321653201, 6.366197724, 7.507323651, 8.870096682, 10.82878425]
    assert_allclose(hertz, exact, rtol=1e-9)


def test_pair_of_pendulums_beats_in_twenty_seconds():
    """K = [[mg/L + k, −k], [−k, mg/L + k]] in displacements (common practice, no source)."""
    f = omega(pair()) / (2 * np.pi)
    assert_allclose(1 / (f[1] - f[0]), 20.0, rtol=1e-7)


def test_geared_train_reduces_to_the_equivalent_inertia():
    """A rotor behind a gear of ratio r counts r² J at the first shaft (common practice, no source)."""
    geared = Assembly(
        bodies=tuple(Rotor(name=n, inertia=J) for n, J in [("a", 3.0), ("b", 2.0), ("c", 5.0)]),
        links=(
            Shaft(name="s", between=("a", "b"), rate=1e3),
            Gear(name="g", between=("b", "c"), ratio=-3.0),
        ),
    )
    reduced = 2.0 + 9 * 5.0
    assert_allclose(omega(geared), [0, np.sqrt(1e3 * (1 / 3.0 + 1 / reduced))], rtol=1e-12)


def test_generalised_pair_from_matrices():
    """J. H. Wilkinson and C. Reinsch, Handbook for Automatic Computation II, 1971 (from memory, 10 digits)."""
    A = [[10, 2, 3, 1, 1], [2, 12, 1, 2, 1], [3, 1, 11, 1, -1], [1, 2, 1, 9, 1], [1, 1, -1, 1, 15]]
    B = [[12, 1, -1, 2, 1], [1, 14, 1, -1, 1], [-1, 1, 16, -1, 1], [2, -1, -1, 12, -1], [1, 1, 1, -1, 11]]
    labels = tuple("abcde")
    model = MatrixModel(name="pair", labels=labels, mass=np.array(B, float), stiffness=np.array(A, float))
    known = [0.432787211017, 0.663662748393, 0.943859004679, 1.10928454002, 1.49235323254]
    assert_allclose(omega(Assembly(matrices=(model,))) ** 2, known, rtol=1e-10)


AREAS = [35.274, 15.463, 32.11, 14.065, 0.645, 4.88, 24.046, 24.34, 13.343, 13.543]


def test_frame_of_ten_rods():
    """Design of Kaveh and Zolghadr 2012 (weight 529.09 kg; frequencies recomputed with consistent mass)."""
    model = rod_frame(AREAS, 69.8e9, 2770.0, 454.0).compile()
    matrices = built(model)
    published = [7.0001, 16.1193, 20.0756, 20.4565, 29.149, 29.7611, 47.9502, 51.2148]
    assert_allclose(solve_modes(matrices).frequencies[0], published, rtol=5e-6)
    weight = model.part_mass.values(matrices.a)[0].sum() - 4 * 454.0
    assert_allclose(weight, 529.09, rtol=1e-5)


def test_frame_of_ten_rods_inch_units():
    """Miguel and Miguel 2012, firefly design, printed frequencies and weight, inch units."""
    areas = [36.198, 14.03, 34.754, 14.9, 0.654, 4.672, 23.467, 25.508, 12.707, 12.351]
    printed = [7.0002, 16.164, 20.0029, 20.0221, 28.5428, 28.922, 48.3538, 50.8004]
    frequencies = omega(rod_frame(areas, 68947570000.0, 2767.99, 453.59237)) / (2 * np.pi)
    assert_allclose(frequencies, printed, rtol=3e-5)  # printed to 1e-4 Hz, unit factors to 1e-5


def test_tower_of_72_rods():
    """Miguel and Miguel 2012, firefly design: printed 4.000, 4.000, 6.000, 6.2468, 9.038 Hz, 327.691 kg.

    The printed f1 and f3 are 0.04 % off a recomputation, hence 1e-3.
    """
    psi, pound, inch = 6894.757293168, 0.45359237, 0.0254
    areas = [3.3411, 7.7587, 0.645, 0.645, 9.0202, 8.2567, 0.645, 0.645]
    areas += [12.045, 8.0401, 0.645, 0.645, 17.38, 8.0561, 0.645, 0.645]
    model = rod_tower(areas, 1e7 * psi, 0.1 * pound / inch**3, 5000 * pound).compile()
    matrices = built(model)
    assert_allclose(solve_modes(matrices).frequencies[0, :5], [4.0, 4.0, 6.0, 6.2468, 9.038], rtol=1e-3)
    weight = model.part_mass.values(matrices.a)[0].sum() - 4 * 5000 * pound
    assert_allclose(weight, 327.691, rtol=1e-5)


@pytest.mark.parametrize("n", [3, 5, 8])
def test_two_spectra_matrix_as_a_chain_of_binomial_masses(n):
    """Gladwell, Jones and Willms, J. Appl. Math. 2014, 515082: ω² = 0, 2, …, and 1, 3, … with the last held."""
    from math import comb

    masses = [float(comb(2 * n - 2, i)) for i in range(n - 1)] + [comb(2 * n - 2, n - 1) / 2]
    rates = [i / 2 * comb(2 * n - 2, i) for i in range(1, n)]
    free = chain(masses, rates, first_held=False)
    held = chain(masses[:-1], rates, first_held=False, last_held=True)
    assert_allclose(omega(free) ** 2, np.arange(0, 2 * n - 1, 2), rtol=1e-11, atol=1e-12)
    assert_allclose(omega(held) ** 2, np.arange(1, 2 * n - 2, 2), rtol=1e-11)


@pytest.mark.parametrize("ratio", [0.01, 0.1, 0.5])
def test_own_mass_of_a_spring_counts_a_third(ratio):
    """The m_s/3 rule errs against β tan β = m_s/M by 1e-4 at 0.1 and 2.1e-3 at 0.5 (exact wave equation)."""
    from scipy.optimize import brentq

    spring = Spring(name="k", between=("m", "ground"), rate=100.0, mass=ratio)
    ours = omega(Assembly(bodies=(Mass(name="m", mass=1.0),), links=(spring,)))[0]
    beta = brentq(lambda b: b * np.tan(b) - ratio, 1e-9, 1.5)
    exact = beta / np.sqrt(ratio) * np.sqrt(100.0)
    rule_error = {0.01: 1.2e-6, 0.1: 1.06e-4, 0.5: 2.12e-3}[ratio]
    assert_allclose(exact / ours, 1 - rule_error, rtol=0.1 * rule_error)


def test_compound_pendulum_of_bob_and_rod():
    """ω² = (m + m_r/2) g L / (m L² + ⅖ m r² + m_r L²/3) (rigid body dynamics, any text)."""
    m, L, m_r, r, g = 2.0, 1.3, 0.5, 0.2, 9.80665
    bob = Pendulum(name="p", mass=m, length=L, rod_mass=m_r, bob_radius=r)
    exact = (m + m_r / 2) * g * L / (m * L**2 + 0.4 * m * r**2 + m_r * L**2 / 3)
    assert_allclose(omega(Assembly(bodies=(bob,)))[0] ** 2, exact, rtol=1e-14)


def test_pendulum_on_a_free_cart():
    """ω² = g/L (1 + m/M) and one rigid mode (any text on dynamics)."""
    cart = Assembly(
        bodies=(
            Mass(name="cart", mass=3.0),
            Pendulum(name="bob", mass=2.0, length=0.9, hung_from="cart"),
        )
    )
    assert_allclose(omega(cart) ** 2, [0, 9.80665 / 0.9 * (1 + 2.0 / 3.0)], rtol=1e-13)
