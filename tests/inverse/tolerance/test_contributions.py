"""Variance shares against functions whose Sobol' indices are known in closed form."""

import numpy as np
import pytest
from assemblies import pair
from numpy.testing import assert_allclose
from scipy import stats

from inverse.assembly.assembly import Assembly
from inverse.assembly.bodies import Pendulum
from inverse.assembly.links import Spring
from inverse.evaluation.evaluator import Evaluator
from inverse.tolerance.contributions import Contributions, contributions, sobol_indices, unit_deviation
from inverse.tolerance.distributions import Errors, Limit, Tolerance
from objectives.base import Minimise
from objectives.frequency import BeatPeriod, Frequency, Splitting
from objectives.parts import TotalMass


def test_ishigami_function():
    """Analytic indices for a = 7, b = 0.1 (T. Ishigami and T. Homma 1990; I. M. Sobol' and Y. Levitan 1999)."""

    def ishigami(p):
        x = np.pi * (2 * p - 1)
        return (np.sin(x[:, 0]) + 7 * np.sin(x[:, 1]) ** 2 + 0.1 * x[:, 2] ** 4 * np.sin(x[:, 0]))[:, None]

    found = sobol_indices(ishigami, 3, seed=1, points=2**16)
    # 65536 points: the stated standard errors are about 2e-3 here.
    assert_allclose(found.first[0], [0.31390519114781146, 0.4424111447900409, 0.0], atol=0.01)
    assert_allclose(found.total[0], [0.5575888552099592, 0.4424111447900409, 0.2436836640621477], atol=0.01)
    assert_allclose(found.variance[0], 13.844587940719254, rtol=0.01)


def test_g_function():
    """Analytic indices for a = 0, 1, 4.5, 9, 99 four times (A. Saltelli and I. M. Sobol' 1995)."""
    a = np.array([0.0, 1.0, 4.5, 9.0, 99.0, 99.0, 99.0, 99.0])

    def g(p):
        return np.prod((np.abs(4 * p - 2) + a) / (1 + a), axis=1)[:, None]

    found = sobol_indices(g, 8, seed=1, points=2**16)
    first = [0.716192169, 0.179048042, 0.0236757742, 0.00716192169]
    total = [0.787144127, 0.242198193, 0.0343169102, 0.0104603871]
    assert_allclose(found.first[0, :4], first, atol=0.01)
    assert_allclose(found.total[0, :4], total, atol=0.01)


def test_stated_errors_are_those_of_repetition():
    """Over 40 seeds the estimates scatter by what they say, within three of the 11 % that 40 of them know it to."""
    found = [
        sobol_indices(lambda p: (p[:, :1] + p[:, 1:2] ** 2) * (1 + p[:, 2:3]), 3, seed=s, points=2**9)
        for s in range(40)
    ]
    for name in ("first", "total"):
        seen = np.std([getattr(one, name) for one in found], axis=0, ddof=1)
        said = np.sqrt(np.mean([getattr(one, f"{name}_error") ** 2 for one in found], axis=0))
        assert_allclose(said / seen, 1.0, atol=0.35)


def test_sums_linear_in_their_inputs_split_as_their_squares_and_groups_add_up():
    """Σ a_i p_i: a_i²/Σ a² (closed form); a group has the sum of its members, a constant shifts nothing."""
    a = np.array([3.0, 2.0, 1.0])
    found = sobol_indices(
        lambda p: np.stack([1e6 + p @ a, np.full(len(p), 7.0)], axis=1), 3, seed=1, groups=[[0, 2], [1]], points=2**12
    )
    assert_allclose(found.first[0], [10 / 14, 4 / 14], atol=4 * found.first_error[0].max())
    assert_allclose(found.total[0], [10 / 14, 4 / 14], atol=4 * found.total_error[0].max())
    assert_allclose(found.variance[0], 14 / 12, rtol=0.01)
    assert_allclose([found.first[1], found.total[1]], 0.0)
    assert_allclose(found.mean, [1e6 + 3, 7.0], rtol=1e-6)


def test_points_without_a_value_are_left_out_and_counted():
    def f(p):
        return np.where(p[:, :1] < 0.1, np.nan, p[:, :1] + p[:, 1:2])

    found = sobol_indices(f, 2, seed=1, points=2**13)
    # A point is left out where A or B (and with them the mixed ones) lack a value: 1 − 0.9².
    assert_allclose(found.undefined[0], 0.19, atol=0.01)
    assert_allclose(found.total[0], np.array([0.81, 1.0]) / 1.81, atol=0.02)


@pytest.mark.parametrize(
    ("name", "reference"),
    [
        ("normal", stats.truncnorm(-3, 3, scale=1 / 3)),
        ("uniform", stats.uniform(-1, 2)),
        ("triangular", stats.triang(0.5, -1, 2)),
    ],
)
def test_deviation_of_unit_errors(name, reference):
    assert_allclose(unit_deviation(name), reference.std(), rtol=1e-9)


def of(assembly: Assembly, *objectives, tables: dict[str, dict[str, object]]) -> Contributions:
    model = assembly.compile()
    names = [dimension.name for dimension in model.parameters.dimensions]
    stated = [
        Tolerance(dimensions=tuple(i for i, name in enumerate(names) if name.endswith(pattern)), **limits)
        for pattern, limits in tables.items()
    ]
    return contributions(Evaluator(model, objectives), np.zeros(0), Errors.of(stated, len(names)), seed=3)


def test_where_errors_act_in_proportion_the_linear_budget_agrees():
    found = of(
        pair(),
        Frequency(requirement=Minimise(), label="f", mode=1),
        TotalMass(requirement=Minimise(), label="mass", parts=("east", "west")),
        tables={".length": {"each": Limit(1e-3), "batch": Limit(2e-3)}, ".mass": {"each": Limit(0.01)}},
    )
    assert [one.remark for one in found.scatter] == [None, None]
    shares = {(one.label, one.moves): one for one in found.shares}
    # Two lengths' own errors count a quarter of the squared common one each: 1 : 1 : 16 in f ∝ (L₁ + L₂)^(-1/2).
    for moves, share in ((("east.length",), 1 / 18), (("east.length", "west.length"), 16 / 18)):
        one = shares["f", moves]
        assert_allclose([one.linear, one.total, one.first_order], share, atol=0.01)
    assert_allclose(shares["mass", ("west.mass",)].total, 0.5, atol=0.01)
    assert shares["mass", ("west.length",)].total == 0
    assert_allclose(found.scatter[1].deviation, np.sqrt(2) * 0.01 * unit_deviation("normal"), rtol=0.01)
    totals = [one.total for one in found.shares if one.label == "f"]
    assert totals == sorted(totals, reverse=True)


def test_weakly_tied_equal_pendulums_scatter_in_second_order():
    """Splitting ≈ √((g/L₁ − g/L₂)² + 4k²)/2ω: detuned far beyond the tie, slopes at the nominal say nothing."""
    weak = Assembly(
        bodies=tuple(Pendulum(name=name, mass=1.0, length=1.0) for name in ("east", "west")),
        links=(Spring(name="tie", between=("east", "west"), rate=0.02),),
    )
    found = of(
        weak,
        Splitting(requirement=Minimise(), label="split", between=(1, 2)),
        BeatPeriod(requirement=Minimise(), label="beat", between=(1, 2)),
        tables={".length": {"each": Limit(5e-3)}, ".rate": {"each": Limit(0.01, relative=True)}},
    )
    for one in found.scatter:
        assert one.linear_deviation < 0.5 * one.deviation
        assert one.remark is not None
        assert "linear budget" in one.remark
    east = next(one for one in found.shares if one.label == "split" and one.moves == ("east.length",))
    # The difference is what counts: neither length alone says much, both together nearly all.
    assert east.total > 0.5 > east.first_order + 3 * east.first_error


def test_without_errors_nothing_contributes():
    assert of(pair(), Frequency(requirement=Minimise(), label="f", mode=1), tables={}).shares == ()
