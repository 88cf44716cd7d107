"""What errors of dimensions do to objectives, first and second order."""

from dataclasses import dataclass, replace
from fractions import Fraction

import numpy as np
import pytest
from assemblies import chain, every_part, pair
from numpy.testing import assert_allclose

from inverse.assembly.assembly import Assembly
from inverse.assembly.bodies import Mass
from inverse.assembly.links import Spring
from inverse.assembly.parameters import Variable
from inverse.evaluation.evaluator import Evaluator
from inverse.tolerance.distributions import Errors, Limit, Tolerance
from inverse.tolerance.sensitivities import Sensitivity, expand, sensitivities, sentence
from inverse.units import Product
from objectives import BeatPeriod, Frequency, FrequencyRatio, Period, Splitting, Target, TransferCompleteness
from objectives.base import Objective
from objectives.state import Measured, State

T = Target(1.0, 0.1)


def pendulums() -> tuple[Evaluator, Errors, list[str]]:
    """Two equal pendulums of 1 m on a 20 s beat; lengths to 1 mm each, and a common error of 2 mm."""
    model = pair().compile()
    objectives = (
        Frequency(requirement=T, label="f", mode=1),
        BeatPeriod(requirement=T, label="beat", between=(1, 2)),
        TransferCompleteness(requirement=T, label="whole", source="east.x", target="west"),
    )
    names = [dimension.name for dimension in model.parameters.dimensions]
    lengths = tuple(names.index(name) for name in ("east.length", "west.length"))
    errors = Errors.of([Tolerance(dimensions=lengths, each=Limit(1e-3), batch=Limit(2e-3))], len(names))
    return Evaluator(model, objectives), errors, names


def test_slopes_and_curvatures_are_those_of_small_changes():
    """Central differences of first and second order over the dimension itself (common practice, no source)."""
    evaluator, errors, names = pendulums()
    rows = {(row.label, row.moves): row for row in sensitivities(evaluator, np.zeros(0), errors)}
    base = evaluator.nominal(np.zeros((1, 0)))[0]
    h = 1e-3
    for i, label in enumerate(("f", "beat", "whole")):
        d = np.tile(base, (3, 1))
        d[:, names.index("east.length")] += [-h, 0.0, h]
        low, here, high = evaluator.of_dimensions(d, np.zeros((3, 0))).values()[:, i]
        row = rows[label, ("east.length",)]
        scale = abs(here)
        assert_allclose(row.first, (high - low) / (2 * h), rtol=1e-4, atol=1e-4 * scale)
        assert_allclose(row.second, (high - 2 * here + low) / h**2, rtol=2e-3, atol=1e-3 * scale)


def test_the_common_error_moves_the_frequency_as_both_lengths_do():
    """f ∝ L^(−1/2) where both lengths change alike: −½ percent per percent (any text)."""
    evaluator, errors, _ = pendulums()
    rows = sensitivities(evaluator, np.zeros(0), errors)
    common = next(row for row in rows if row.label == "f" and len(row.moves) == 2)
    assert_allclose(common.first * 1.0 / common.value, -0.5, rtol=1e-6)


def test_sentences_say_what_it_means_for_the_shop():
    evaluator, errors, _ = pendulums()
    words = [sentence(row) for row in sensitivities(evaluator, np.zeros(0), errors)]
    assert any(line.startswith("3 mm on east.length moves f by") for line in words)
    assert all(line.isprintable() for line in words)


@pytest.mark.parametrize("label", ["f", "beat", "whole"])
def test_greatest_effect_comes_first(label):
    evaluator, errors, _ = pendulums()
    effects = [row.effect for row in sensitivities(evaluator, np.zeros(0), errors) if row.label == label]
    assert effects == sorted(effects, reverse=True)


@dataclass(frozen=True, slots=True, kw_only=True)
class Plain(Objective):
    """The same objective as one whose curvature is taken by differences."""

    inner: Objective

    @property
    def modes_needed(self) -> int | None:
        return self.inner.modes_needed

    def measure(self, state: State) -> Measured:
        return self.inner.measure(state)


KINDS = (
    Frequency(requirement=T, label="", mode=2),
    Period(requirement=T, label="", mode=3),
    Splitting(requirement=T, label="", between=(1, 3)),
    BeatPeriod(requirement=T, label="", between=(1, 2)),
    FrequencyRatio(requirement=T, label="", between=(1, 2)),
)
ASSEMBLIES = {
    "chain": chain([1.0, 2.0, 1.5, 1.0], [100.0, 50.0, 75.0, 60.0]),
    "pair and a third": Assembly(
        bodies=tuple(Mass(name=n, mass=1.0) for n in "abc"),
        links=(
            *(Spring(name=f"k{n}", between=(n, "ground"), rate=k) for n, k in zip("abc", (1.0, 1.0, 3.0), strict=True)),
            Spring(name="tie", between=("a", "b"), rate=0.01),
            Spring(name="far", between=("b", "c"), rate=0.02),
        ),
    ),
    "pendulums": every_part()["pendulums with rods, bobs and ties"],
}


@pytest.mark.parametrize("name", ASSEMBLIES)
def test_exact_curvatures_are_those_of_differences_within_their_error(name):
    """Two independent ways to one number: closed formulas, and differences of exact gradients."""
    model = ASSEMBLIES[name].compile()
    plain = tuple(Plain(requirement=T, label="", inner=kind) for kind in KINDS)
    places = [i for i, dimension in enumerate(model.parameters.dimensions) if dimension.positive]
    found = expand(Evaluator(model, (*KINDS, *plain)), np.zeros(0), places)
    assert found.method == ("exact",) * 5 + ("differences",) * 5
    exact, near = found.second[:5], found.second[5:]
    scale = np.abs(exact).max(axis=(1, 2), keepdims=True)
    assert (np.abs(near - exact) <= 3 * found.error[5:] + 1e-9 * scale).all()
    assert (found.error[5:] < 1e-5 * scale).all()


def test_difference_of_equal_lengths_has_no_slope_but_a_curvature():
    """Unit bobs tied at the bobs (exact): λ₂ − λ₁ = √((g/L₁ − g/L₂)² + 4k²), λ₁ + λ₂ = g/L₁ + g/L₂ + 2k."""
    evaluator, _, names = pendulums()
    at = [names.index("east.length"), names.index("west.length")]
    found = expand(evaluator, np.zeros(0), at)
    difference = np.zeros(len(names))
    difference[at] = 0.5, -0.5
    k, g, h = 1.0331557, 9.80665, 1e-3

    def beat(s):
        a, b = g / (1 + s / 2), g / (1 - s / 2)
        gap, total = np.hypot(a - b, 2 * k), a + b + 2 * k
        return 2 * np.pi / (np.sqrt((total + gap) / 2) - np.sqrt((total - gap) / 2))

    assert abs(found.first[1] @ difference) < 1e-9
    # Of fourth order in h/L against the coupling: 1e-5.
    expected = (beat(h) - 2 * beat(0) + beat(-h)) / h**2
    assert_allclose(difference @ found.second[1] @ difference, expected, rtol=1e-4)


def test_changes_at_the_limits_are_real_and_second_order_describes_them():
    evaluator, errors, names = pendulums()
    base = evaluator.nominal(np.zeros((1, 0)))
    for row in sensitivities(evaluator, np.zeros(0), errors):
        d = np.repeat(base, 2, axis=0)
        d[:, [names.index(name) for name in row.moves]] += row.limit * np.array([[-1.0], [1.0]])
        values = evaluator.of_dimensions(d, np.zeros((2, 0))).values()[:, ["f", "beat", "whole"].index(row.label)]
        assert_allclose(values - row.value, [row.down, row.up], atol=1e-12 * abs(row.value))
        assert row.described


def test_percent_per_percent_of_a_power_law():
    """f ∝ L^(−1/2): −½ % per %, and ½ · ¾ % per hundred squared percent (any text)."""
    evaluator, errors, _ = pendulums()
    common = next(
        row for row in sensitivities(evaluator, np.zeros(0), errors) if row.label == "f" and len(row.moves) == 2
    )
    assert_allclose([common.percent, common.percent_second], [-0.5, 0.75 / 200], rtol=1e-6)


def test_coinciding_modes_are_judged_at_the_limits():
    """Ring of three equal masses and springs, one spring 1 + p: λ = 0, 3, 3 + 2p (exact), sorted."""
    ring = Assembly(
        bodies=tuple(Mass(name=f"m{i}", mass=1.0) for i in range(3)),
        links=tuple(Spring(name=f"k{i}", between=(f"m{i}", f"m{(i + 1) % 3}"), rate=1.0) for i in range(3)),
    )
    model = ring.compile()
    names = [dimension.name for dimension in model.parameters.dimensions]
    errors = Errors.of([Tolerance(dimensions=(names.index("k0.rate"),), each=Limit(0.01))], len(names))
    (row,) = sensitivities(Evaluator(model, (Frequency(requirement=T, label="f", mode=1),)), np.zeros(0), errors)
    assert row.method == "limits"
    # Rigid modes are not numbered: mode 1 is the lower of the two, which stays when the spring is stiffer.
    softer = (np.sqrt(2.98) - np.sqrt(3)) / (2 * np.pi)
    assert_allclose([row.down, row.up], [softer, 0.0], atol=1e-12)
    assert_allclose([row.first, row.second], [-softer / 0.02, softer / 0.01**2], rtol=1e-9)


def test_a_product_is_counted_in_what_it_comes_to():
    """ω² = k/m with k = 3 wire²: ∂f/∂k = f/2k, in hertz per newton per metre."""
    assembly = Assembly(
        bodies=(Mass(name="m", mass=2.0),),
        links=(
            Spring(
                name="s",
                between=("m", "ground"),
                rate=Product(coefficient=3.0, powers=(("wire", Fraction(2)),)),
            ),
        ),
    )
    model = assembly.compile([Variable(name="wire", low=2.0, high=2.0, unit="m")])
    names = [dimension.name for dimension in model.parameters.dimensions]
    errors = Errors.of([Tolerance(dimensions=(names.index("s.rate"),), each=Limit(0.05, relative=True))], len(names))
    (row,) = sensitivities(Evaluator(model, (Frequency(requirement=T, label="f", mode=1),)), np.array([2.0]), errors)
    f = np.sqrt(12 / 2) / (2 * np.pi)
    assert_allclose([row.nominal, row.limit, row.first, row.second], [12, 0.6, f / 24, -f / 4 / 144], rtol=1e-9)


ROW = Sensitivity(
    label="beat", unit="s", value=20.0, moves=("east.length",), per="m", nominal=1.0, limit=1e-3,
    first=0.0, second=0.0, error=0.0, method="exact", down=-3.0, up=3.2,
)  # fmt: skip


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({}, "1 mm on east.length moves beat by 3.1 s"),
        ({"down": -0.5}, "1 mm on east.length moves beat by −0.5 s below and +3.2 s above nominal"),
        ({"down": 3.1}, "1 mm on east.length, either way, moves beat up by 3.2 s: half the error, a quarter of that"),
        ({"down": 0.0, "up": 0.0}, "1 mm on east.length does not move beat"),
        ({"up": np.nan}, "1 mm on east.length leaves beat without a value"),
        ({"value": np.nan}, "beat has no value at the nominal design"),
        (
            {"moves": ("a.rate", "b.rate"), "per": "1", "limit": 0.03},
            "3 % on a.rate and b.rate together moves beat by 3.1 s",
        ),
    ],
)
def test_sentences(changes, words):
    assert sentence(replace(ROW, **changes)) == words
