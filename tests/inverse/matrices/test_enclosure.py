"""Bounds over boxes against dense samples, closed forms, other number systems, and the rule that is false.

Samples are solved by scipy's general symmetric eigensolver, whose error of about ``n ε λ_max`` is allowed for.
"""

import mpmath
import numpy as np
import pytest
from assemblies import every_part, nominal
from families import cases, drawn_assembly, follow
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_less
from scipy.linalg import eigh

from inverse.assembly.assembly import Assembly
from inverse.assembly.bodies import Mass, Pendulum, Rotor
from inverse.assembly.links import Shaft, Spring
from inverse.assembly.parameters import Variable
from inverse.evaluation.evaluator import Evaluator
from inverse.matrices.enclosure import EnclosureError, over_dimensions, over_variables, power_ranges
from inverse.matrices.equilibrium import at_rest
from inverse.matrices.stack import Matrices
from inverse.units import Product


def eigenvalues(model, base):
    matrices = Matrices(model, at_rest(model, base))
    pairs = zip(matrices.stiffness.matrix(), matrices.mass.matrix(), strict=True)
    return np.array([eigh(K, M, eigvals_only=True) for K, M in pairs])


def over_half_a_per_cent(name):
    model = every_part()[name].compile()
    d = nominal(model)[0]
    spread = np.where(model.parameters.positive, 0.005 * d, 0.0)
    return over_dimensions(model, d - spread, d + spread)


def sampled(low, high, rng, count=150):
    """Points of a box, many of them on its corners."""
    share = rng.random((count, len(low)))
    share[: count // 3] = np.round(share[: count // 3])
    return np.clip(low + share * (high - low), low, high)


def all_pairs(n):
    return [(i, j) for i in range(n) for j in range(i + 1, n)]


def check_holds(model, family, low, high, rng):
    """Every sample of every box is within its bounds, differences included."""
    n, pairs = model.size, all_pairs(model.size)
    found = family.enclose(low, high, modes=range(n), pairs=pairs)
    for b in range(len(low)):
        values = eigenvalues(model, Evaluator(model, ()).nominal(sampled(low[b], high[b], rng)))
        rounding = 1e-13 * n * np.abs(values).max()
        differences = values[:, [j for _, j in pairs]] - values[:, [i for i, _ in pairs]]
        assert np.all(values >= found.low[b] - rounding)
        assert np.all(values <= found.high[b] + rounding)
        assert np.all(differences >= found.difference_low[b] - rounding)
        assert np.all(differences <= found.difference_high[b] + rounding)
    return found


def boxes_within(family, rng, count=6):
    """The whole box, and boxes from all of it down to a thousandth."""
    span = family.high - family.low
    share = np.exp(rng.uniform(np.log(1e-3), 0, (count, 1)))
    share[0] = 1.0
    low = family.low + rng.random((count, len(span))) * (1 - share) * span
    return low, np.minimum(low + share * span, family.high)


@settings(max_examples=100)
@given(st.integers(0, 10**6))
def test_no_design_is_outside_the_bounds(seed):
    rng = np.random.default_rng(seed)
    model = drawn_assembly(rng)
    family = over_variables(model)
    check_holds(model, family, *boxes_within(family, rng), rng)


def termwise(family, low, high):
    """The rule without its hypothesis: every monomial at its own end, whether or not its pattern is semidefinite."""
    (stiffness, mass), positive = family.forms[0], family.positive
    (k_low, k_high), (m_low, m_high) = (power_ranges(p.powers, positive, low, high) for p in (stiffness, mass))

    def matrices(patterns, values):
        return np.tensordot(values, patterns.whole, 1)

    pairs = [(k_low, m_high), (k_high, m_low)]
    return [
        np.array(
            [eigh(K, M, eigvals_only=True) for K, M in zip(matrices(stiffness, k), matrices(mass, m), strict=True)]
        )
        for k, m in pairs
    ]


CROSS_TERMS = [name for name in cases() if name != "rods of free area"]


@pytest.mark.parametrize("name", CROSS_TERMS)
def test_where_the_termwise_rule_is_false_the_bounds_hold(name):
    model = cases()[name]
    family, rng = over_variables(model), np.random.default_rng(7)
    low, high = boxes_within(family, rng, 40)
    check_holds(model, family, low, high, rng)

    false = 0
    for b in range(len(low)):
        try:
            lower, upper = (side[0] for side in termwise(family, low[[b]], high[[b]]))
        except np.linalg.LinAlgError:  # its mass matrix is not even positive definite
            false += 1
            continue
        values = eigenvalues(model, Evaluator(model, ()).nominal(sampled(low[b], high[b], rng)))
        rounding = 1e-12 * values.max()
        false += bool((values < lower - rounding).any() or (values > upper + rounding).any())
    # Every box here, but for those so small that the sample misses it.
    assert false >= 36


def test_coordinates_do_not_matter():
    """A pendulum of 1.2 to 2.6 m, in displacements and as a rotor in angles: ω² = g/L at both ends, exact.

    Interval arithmetic in angles alone would give m g L/(m L²) with each L at its own end, 0.210 to 0.670 Hz.
    """
    g, m = 9.80665, 1.0
    arm = Variable(name="L", low=1.2, high=2.6)
    hanging = Assembly(bodies=(Pendulum(name="p", mass=m, length=follow("L")),), gravity=g)
    turning = Assembly(
        bodies=(Rotor(name="p", inertia=follow("L", power=2)),),
        links=(Shaft(name="weight", between=("p", "ground"), rate=follow("L", m * g)),),
    )
    for assembly in (hanging, turning):
        family = over_variables(assembly.compile([arm]))
        found = family.enclose(family.low[None], family.high[None])
        assert_allclose([found.low[0, 0], found.high[0, 0]], [g / 2.6, g / 1.2], rtol=1e-12)
    lower, upper = termwise(family, family.low[None], family.high[None])
    assert_allclose(np.sqrt([lower[0, 0], upper[0, 0]]) / (2 * np.pi), [0.210, 0.670], atol=5e-4)


def test_tie_between_different_lengths_is_tightest_in_angles():
    """The other way round: one row of the tie is constant in angles only, and its form is among those tried."""
    model = cases()["tie between different lengths"]
    family = over_variables(model)
    widths = []
    for forms in (family.forms[:1], family.forms):
        family.__dict__["forms"] = forms  # a cached property
        found = family.enclose(family.low[None], family.high[None])
        widths.append(found.high - found.low)
    # In displacements the tie is widened by its own rate; the lower frequency gains a factor of 16.
    assert widths[1][0, 0] < 0.1 * widths[0][0, 0]
    assert np.all(widths[1] <= widths[0])


@pytest.mark.parametrize("spread", [1.0, 1e4, 1e9])
def test_bounds_carry_their_rounding(spread):
    """Against 50 digits (mpmath), no slack given: rates up to a factor 1e9 apart, boxes of no width and of a little."""
    rng = np.random.default_rng(3)
    names = [f"k{i}" for i in range(4)]
    masses = [1.0, 0.3, 2.0, 0.7]
    assembly = Assembly(
        bodies=tuple(Mass(name=f"b{i}", mass=m) for i, m in enumerate(masses)),
        links=tuple(
            Spring(name=f"s{i}", between=(f"b{i - 1}" if i else "ground", f"b{i}"), rate=follow(name))
            for i, name in enumerate(names)
        ),
    )
    family = over_variables(assembly.compile([Variable(name=name, low=0.1, high=1e12) for name in names]))
    for width in (0.0, 1e-12, 1e-3):
        rates = np.array([1.0, spread, 3.0, spread**0.5]) * rng.uniform(1, 2, 4)
        low, high = rates[None], rates[None] * (1 + width)
        found = family.enclose(low, high, modes=range(4), pairs=all_pairs(4))
        for k in (low[0], high[0], np.clip(rates * (1 + width * rng.random(4)), low[0], high[0])):
            exact = exact_eigenvalues(k, masses)
            assert all(
                mpmath.mpf(a) <= v <= mpmath.mpf(b) for a, v, b in zip(found.low[0], exact, found.high[0], strict=True)
            )
            for (i, j), a, b in zip(all_pairs(4), found.difference_low[0], found.difference_high[0], strict=True):
                assert mpmath.mpf(a) <= exact[j] - exact[i] <= mpmath.mpf(b)
        if width == 0.0:
            # What is given away is rounding: κ of 2e-14, on both sides, times a few for |X|ᵀ K_abs |X| over λ_max.
            assert np.all(found.high - found.low <= 3e-12 * float(exact[-1]))


def exact_eigenvalues(rates, masses):
    """Of a chain held at its first spring, from the floats as they are."""
    with mpmath.workdps(50):
        k, m = [mpmath.mpf(float(x)) for x in rates], [mpmath.mpf(x) for x in masses]
        A = mpmath.zeros(len(m))
        for i in range(len(m)):
            A[i, i] = (k[i] + (k[i + 1] if i + 1 < len(k) else 0)) / m[i]
            if i:
                A[i, i - 1] = A[i - 1, i] = -k[i] / mpmath.sqrt(m[i] * m[i - 1])
        return sorted(mpmath.eigsy(A, eigvals_only=True))


@pytest.mark.parametrize("name", [*cases(), "pair that nearly agrees"])
def test_excess_over_the_true_range_falls_with_the_square_of_the_width(name):
    """Overestimation divided by width² stays bounded, where interval arithmetic alone is off in proportion to it."""
    model = nearly_equal_pair() if name == "pair that nearly agrees" else cases()[name]
    family, n = over_variables(model), model.size
    rigid = Evaluator(model, ()).rigid
    middle = family.low + 0.37 * (family.high - family.low)
    excess = []
    for share in (1e-2, 1e-3):
        low, high = middle[None], middle[None] + share * (family.high - family.low)
        found = family.enclose(low, high, modes=range(n), pairs=all_pairs(n))
        grid = np.stack(np.meshgrid(*np.linspace(low[0], high[0], 5).T, indexing="ij"), axis=-1).reshape(
            -1, len(middle)
        )
        values = eigenvalues(model, Evaluator(model, ()).nominal(grid))
        true = np.append(np.ptp(values, axis=0)[rigid:], np.ptp(np.diff(values, axis=1)[:, rigid:], axis=0))
        neighbours = [k for k, (i, j) in enumerate(all_pairs(n)) if j == i + 1 and i >= rigid]
        bound = np.append(
            (found.high - found.low)[0, rigid:], (found.difference_high - found.difference_low)[0, neighbours]
        )
        excess.append(bound - true)
    # A factor of 100, less what the five-point grid misses of the true range.
    assert_array_less(excess[1], excess[0] / 20 + 1e-9 * values.max())


def nearly_equal_pair():
    """A beat: two pendulums and a weak tie, whose frequencies differ by a thousandth."""
    return Assembly(
        bodies=tuple(Pendulum(name=n, mass=1.0, length=follow("L")) for n in ("east", "west")),
        links=(Spring(name="tie", between=("east", "west"), rate=follow("k")),),
    ).compile([Variable(name="L", low=1.2, high=2.6), Variable(name="k", low=0.005, high=0.02)])


def test_the_difference_of_neighbours_is_known_better_than_either():
    model = nearly_equal_pair()
    family = over_variables(model)
    low, high = np.array([[1.9, 0.010]]), np.array([[1.92, 0.011]])
    found = family.enclose(low, high, pairs=[(0, 1)])
    # λ_2 − λ_1 = 2k/m, exact for equal pendulums.
    assert found.difference_low[0, 0] <= 0.020
    assert found.difference_high[0, 0] >= 0.022
    assert found.difference_high[0, 0] - found.difference_low[0, 0] < 0.002 * 1.2
    assert (found.high - found.low)[0, 0] > 0.05


def test_negative_eigenvalues_are_bounded_too():
    """A platform with its weight high above its springs topples for some positions, K loses a positive square."""
    model = cases()["weight above its springs"]
    family, rng = over_variables(model), np.random.default_rng(0)
    found = check_holds(model, family, *boxes_within(family, rng, 30), rng)
    assert (found.high[:, 0] < 0).any()
    assert (found.low[:, 0] > 0).any()


def test_boxes_are_independent_of_their_batch():
    model = cases()["mount position"]
    family = over_variables(model)
    low, high = boxes_within(family, np.random.default_rng(1), 5)
    together = family.enclose(low, high, modes=[0, 1], pairs=[(0, 1)])
    for b in range(5):
        alone = family.enclose(low[[b]], high[[b]], modes=[0, 1], pairs=[(0, 1)])
        # Sums of a batch may be taken in another order; both are bounds.
        assert_allclose(alone.low, together.low[[b]], rtol=1e-9)
        assert_allclose(alone.difference_high, together.difference_high[[b]], rtol=1e-9)


def test_dimensions_each_with_its_own_error():
    """Pendulums with rods, bobs and ties, all of whose positive dimensions are 1 % uncertain."""
    model = every_part()["pendulums with rods, bobs and ties"].compile()
    d = nominal(model)[0]
    spread = np.where(model.parameters.positive, 0.01 * d, 0.0)
    family = over_dimensions(model, d - spread, d + spread)
    assert len(family.names) == np.count_nonzero(spread)
    found = family.enclose(family.low[None], family.high[None], modes=range(4))
    rng = np.random.default_rng(5)
    values = eigenvalues(model, sampled(d - spread, d + spread, rng, 400))
    assert np.all(values >= found.low)
    assert np.all(values <= found.high)
    # Worst cases of tolerances are met to a few per cent of themselves; twice what is seen against corners.
    assert np.all(found.high - found.low < 1.8 * np.ptp(values, axis=0))


def test_rest_lengths_that_do_not_change_are_no_hindrance():
    """A frame of rods in given places: lengths and directions are found at rest, areas are free."""
    model = cases()["rods of free area"]
    assert over_variables(model).names == ("a", "b")


@pytest.mark.parametrize("name", [name for name in every_part() if over_half_a_per_cent(name).rest is not None])
def test_what_is_found_at_rest_is_enclosed(name):
    """Loaded mounts, rods under their weight, pendulums moved by a preload: all positive dimensions 0.5 % uncertain."""
    model, family = every_part()[name].compile(), over_half_a_per_cent(name)
    low, high, proved = family.rest.enclose(family.low[None], family.high[None], family.positive)
    found = family.enclose(family.low[None], family.high[None], modes=range(model.size))
    assert proved.all()

    x = sampled(family.low, family.high, np.random.default_rng(2), 200)
    base = family.rest.base(x)
    at = at_rest(model, base).values[:, family.rest.places]
    # The search for the rest position ends within 1e-11 of the greatest unknown.
    rounding = 1e-11 * np.abs(at).max()
    assert np.all(at >= low - rounding)
    assert np.all(at <= high + rounding)
    values = eigenvalues(model, base)
    assert np.all(values >= found.low - 1e-12 * values.max())
    assert np.all(values <= found.high + 1e-12 * values.max())


def test_a_box_too_wide_for_its_rest_position_has_no_bounds():
    model = every_part()["platform in space on loaded mounts"].compile()
    d = nominal(model)[0]
    family = over_dimensions(model, d, np.where(model.parameters.positive, 30 * d, d))
    found = family.enclose(family.low[None], family.high[None], pairs=[(0, 1)])
    assert np.all(found.low == -np.inf)
    assert np.all(found.high == np.inf)
    assert found.difference_high[0, 0] == np.inf
    assert not found.sound[0]


def test_nothing_free_is_refused():
    with pytest.raises(EnclosureError, match="nothing is free"):
        over_variables(Assembly(bodies=(Mass(name="b", mass=1.0),)).compile())


@given(st.floats(0.1, 10), st.floats(0, 3), st.floats(-3, 3), st.floats(0, 3), st.sampled_from([1, 2, 3, 4]))
def test_ranges_of_monomials(low, width, signed_low, signed_width, power):
    """Exact ends by mpmath intervals of its own (``iv``)."""
    positive, lows, highs = np.array([True, False]), [low, signed_low], [low + width, signed_low + signed_width]
    found = power_ranges(np.array([[-1.5, float(power)]]), positive, np.array([lows]), np.array([highs]))
    first = mpmath.iv.mpf([lows[0], highs[0]]) ** mpmath.iv.mpf(-1.5)
    second = mpmath.iv.mpf([lows[1], highs[1]]) ** power
    exact = first * second
    assert float(found[0][0, 0]) <= float(exact.a) * (1 - 1e-15 * np.sign(float(exact.a)))
    assert float(found[1][0, 0]) >= float(exact.b) * (1 + 1e-15 * np.sign(float(exact.b))) or float(exact.b) == 0
    assert_allclose(np.ravel(found), [float(exact.a), float(exact.b)], rtol=1e-13, atol=1e-300)


def test_products_of_variables():
    """A rate of wire and coil, k ∝ d⁴/D³: one monomial, so that its range is met exactly."""
    rate = Product(coefficient=1e9, powers=(("wire", 4), ("coil", -3)))
    assembly = Assembly(
        bodies=(Mass(name="b", mass=2.0),), links=(Spring(name="s", between=("b", "ground"), rate=rate),)
    )
    wire, coil = Variable(name="wire", low=0.001, high=0.002), Variable(name="coil", low=0.01, high=0.03)
    family = over_variables(assembly.compile([wire, coil]))
    found = family.enclose(family.low[None], family.high[None])
    ends = [1e9 * 0.001**4 / 0.03**3 / 2, 1e9 * 0.002**4 / 0.01**3 / 2]
    assert_allclose([found.low[0, 0], found.high[0, 0]], ends, rtol=1e-12)
