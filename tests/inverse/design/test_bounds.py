"""Certified ranges and proofs of impossibility against closed forms and dense samples of designs."""

import numpy as np
import pytest
from families import cases, drawn_assembly, follow, free
from numpy.testing import assert_allclose

from inverse.assembly.assembly import Assembly
from inverse.assembly.bodies import Mass, Pendulum, Platform
from inverse.assembly.links import Mount, Spring
from inverse.assembly.parameters import Variable
from inverse.design.bounds import Budget, acceptable_boxes, best, prove_impossible, reachable_range
from inverse.design.problem import Problem
from inverse.evaluation.evaluator import Evaluator
from objectives.base import AtLeast, AtMost, Maximise, Minimise, Target
from objectives.frequency import BeatPeriod, Frequency, FrequencyRatio, Period, Splitting
from objectives.keep_out import KeepOut
from objectives.parts import LeastChange, TotalMass
from objectives.shape import Shape
from objectives.state import Like

G = 9.80665


def frequency(mode, requirement):
    return Frequency(requirement=requirement, label=f"frequency {mode}", mode=mode)


def beat(requirement):
    return BeatPeriod(requirement=requirement, label="beat", between=(1, 2))


def problem(model, *objectives):
    return Problem(Evaluator(model, objectives))


def tied_pair(rate=(0.5, 60.0)):
    """Equal pendulums of 1.2 to 2.6 m, tied at their bobs: ω_1² = g/L, ω_2² = g/L + 2k/m (textbook, exact)."""
    return Assembly(
        bodies=tuple(Pendulum(name=n, mass=6.5, length=follow("L")) for n in ("east", "west")),
        links=(Spring(name="tie", between=("east", "west"), rate=follow("k")),),
        gravity=G,
    ).compile(free(L=(1.2, 2.6), k=rate))


def pair_beat(L, k):
    return 2 * np.pi / (np.sqrt(G / L + 2 * k / 6.5) - np.sqrt(G / L))


def test_range_of_a_single_pendulum_is_exact():
    model = Assembly(bodies=(Pendulum(name="p", mass=1.0, length=follow("L")),), gravity=G).compile(free(L=(1.2, 2.6)))
    found = reachable_range(problem(model, frequency(1, AtLeast(0.4))), 0)

    ends = np.sqrt(G / np.array([2.6, 1.2])) / (2 * np.pi)
    assert found.closed
    assert found.certain_low <= ends[0]
    assert found.certain_high >= ends[1]
    assert_allclose([found.certain_low, found.certain_high], ends, rtol=1e-12)
    assert_allclose([found.found_low, found.found_high], ends, rtol=1e-12)
    assert_allclose([found.low_at[0], found.high_at[0]], [2.6, 1.2])


def test_range_of_a_beat_and_of_a_beat_at_a_given_frequency():
    f = 0.36
    asked = problem(tied_pair(), frequency(1, Target(f, 0.005 * f)), beat(Target(40.0, 2.0)))
    lengths = G / (2 * np.pi * f * np.array([1.005, 0.995])) ** 2

    alone, given = reachable_range(asked, 1), reachable_range(asked, 1, given=[0])
    # T falls with k and with L; windows are taken with 2e-9 of slack, brackets are closed to 1e-6.
    for found, lengths_at in ((alone, [1.2, 2.6]), (given, lengths)):
        ends = pair_beat(np.array(lengths_at)[::-1], np.array([60.0, 0.5]))
        assert found.certain_low <= ends[0]
        assert found.certain_high >= ends[1]
        assert ends[0] <= found.found_low * (1 + 1e-8)
        assert ends[1] >= found.found_high * (1 - 1e-8)
        assert_allclose([found.certain_low, found.certain_high], ends, rtol=2e-6)
        assert found.closed


def test_one_objective_out_of_reach():
    verdict = prove_impossible(problem(tied_pair(), frequency(1, Target(0.6, 0.003)), beat(Target(40.0, 2.0))))

    certificate = verdict.certificate
    assert certificate.claim == "impossible: `frequency 1`"
    greatest = np.sqrt(G / 1.2) / (2 * np.pi)
    # The window is widened by two slacks of 1e-9 of its value.
    assert_allclose(certificate.gap, 0.597 - greatest, rtol=1e-6)
    assert certificate.gap <= 0.597 - greatest
    assert "frequency 1" in certificate.reason
    assert_allclose(verdict.closest[0], 1.2)


def test_two_objectives_that_cannot_hold_together_are_named():
    """Each alone can be met; at 0.36 Hz the softest tie beats in 186 s, exact above, and 220 s are asked."""
    objectives = (frequency(1, Target(0.36, 0.0018)), beat(Target(220.0, 10.0)), frequency(2, AtLeast(0.3)))
    for alone in objectives:
        assert prove_impossible(problem(tied_pair(), alone)).met_at is not None

    asked = problem(tied_pair(), *objectives)
    verdict = prove_impossible(asked)
    assert verdict.certificate.claim == "impossible: `frequency 1` and `beat`"
    assert verdict.certificate.reason.startswith("wherever `frequency 1` can be met, `beat` is missed by 22.")
    # The nearest beat is at the upper edge of the frequency, where the pendulum is shortest.
    nearest = pair_beat(G / (2 * np.pi * 0.3618) ** 2, 0.5)
    assert verdict.certificate.gap <= 210 - nearest
    # The bracket of the distance is closed to 1e-6, the window has 4e-9 of slack, relative to 187 s.
    assert_allclose(verdict.certificate.gap, 210 - nearest, rtol=1e-4)
    assert_allclose(asked.evaluator.at(verdict.closest[None]).values()[0, 1], nearest, rtol=1e-4)


def test_what_can_be_met_is_met():
    asked = problem(tied_pair(), frequency(1, Target(0.36, 0.0018)), beat(Target(40.0, 2.0)))
    verdict = prove_impossible(asked)
    assert verdict.certificate is None
    assert asked.all_met(asked.evaluator.at(verdict.met_at[None]).values())[0]


def test_a_spent_budget_decides_nothing():
    asked = problem(cases()["mount position"], frequency(1, Target(3.6, 1e-4)), frequency(2, Target(4.9, 1e-4)))
    verdict = prove_impossible(asked, Budget(boxes=3))
    assert verdict.certificate is None
    assert verdict.met_at is None
    assert verdict.message.startswith("Not decided within")


def test_objectives_without_bounds_are_left_out_and_named():
    shape = Shape(
        requirement=AtLeast(2.0), label="shape", mode=1, like=Like((("east.x", 1.0), ("west.x", 1.0)))
    )  # no modal assurance exceeds one, but nothing here knows it
    asked = problem(tied_pair(), frequency(1, AtLeast(0.3)), shape)
    found = reachable_range(asked, 1, budget=Budget(boxes=10))
    assert (found.certain_low, found.certain_high) == (-np.inf, np.inf)
    assert "not a function of the frequencies alone" in found.unbounded_because
    verdict = prove_impossible(asked, Budget(boxes=200))
    assert verdict.certificate is None
    assert "`shape`" in verdict.message
    beyond = problem(tied_pair(), frequency(1, AtLeast(3.0)), shape)
    assert prove_impossible(beyond).certificate.claim == "impossible: `frequency 1`"


def test_a_mode_named_by_its_shape_is_one_of_all():
    """Both modes lie between the lowest of the lower and the highest of the upper, which is proof enough."""
    swinging = Frequency(requirement=AtLeast(3.0), label="together", mode=Like((("east.x", 1.0), ("west.x", 1.0))))
    verdict = prove_impossible(problem(tied_pair(), swinging))
    assert verdict.certificate.claim == "impossible: `together`"
    greatest = np.sqrt(G / 1.2 + 2 * 60.0 / 6.5) / (2 * np.pi)
    assert verdict.certificate.gap <= 3.0 - greatest


def test_mounts_that_carry_a_load():
    """A mass m on four struts of height H, rates k and q: each carries m g/4 and loses m g/(4 H) laterally.

    Then ω² = (4q − m g/H)/m along x and y, with the mounts in the plane of the centre of mass (exact).
    """
    m, H = 100.0, 0.1
    model = Assembly(
        bodies=(Platform(name="stage", mass=m, inertia=(8.0, 8.0, 8.0)),),
        links=tuple(
            Mount(
                name=f"mount{i}",
                between=("stage", "ground"),
                at=(x, y, 0.0),
                rates=(follow("k"), follow("q")),
                height=H,
            )
            for i, (x, y) in enumerate([(0.4, 0.4), (0.4, -0.4), (-0.4, 0.4), (-0.4, -0.4)])
        ),
        gravity=G,
    ).compile(free(k=(4e4, 6e4), q=(4e3, 6e3)))
    found = reachable_range(problem(model, frequency(1, AtLeast(1.0))), 0, budget=Budget(boxes=2000))
    exact = np.sqrt((4 * np.array([4e3, 6e3]) - m * G / H) / m) / (2 * np.pi)
    assert found.certain_low <= exact[0] * (1 + 1e-12)
    assert found.certain_high >= exact[1] * (1 - 1e-12)
    # Loads found at rest are known but for their correlation with the rates: a bracket of first order in the boxes.
    assert_allclose([found.certain_low, found.certain_high], exact, rtol=2e-2)
    assert_allclose([found.found_low, found.found_high], exact, rtol=1e-9)


def test_assemblies_that_topple_everywhere():
    """The weight of 100 kg stands 1.5 m or more above springs that right it with 2·2000·0.4² N m/rad: 640 < 1471."""
    model = Assembly(
        bodies=(Platform(name="stage", mass=100.0, inertia=(4.0,), centre=(0.0, follow("h"))),),
        links=tuple(
            Spring(name=f"s{i}", between=("stage", "ground"), at=(x,), rate=2000.0) for i, x in enumerate((-0.4, 0.4))
        ),
    ).compile(free(h=(1.5, 2.0)))
    verdict = prove_impossible(problem(model, frequency(1, AtLeast(0.1))))
    assert verdict.certificate.claim == "impossible: no stable rest position"


def test_the_lightest_spring_mass_chain():
    """One mass on one spring: m ≥ k/ω²; least mass at the least rate, closed form."""
    model = Assembly(
        bodies=(Mass(name="b", mass=follow("m")),),
        links=(Spring(name="s", between=("b", "ground"), rate=follow("k")),),
    ).compile(free(m=(0.1, 10.0), k=(50.0, 500.0)))
    mass = TotalMass(requirement=Minimise(), label="mass", parts=("b",))
    found = best(problem(model, frequency(1, AtMost(2.0)), mass), 1)
    exact = 50.0 / (2 * np.pi * 2.0) ** 2
    assert found.certain <= exact * (1 + 1e-9)
    assert_allclose([found.certain, found.found], exact, rtol=3e-6)
    most = TotalMass(requirement=Maximise(), label="mass", parts=("b",))
    found = best(problem(model, frequency(1, AtLeast(2.0)), most), 1)
    assert_allclose([found.certain, found.found], 500.0 / (2 * np.pi * 2.0) ** 2, rtol=3e-6)


def test_acceptable_designs_as_boxes():
    asked = problem(tied_pair(), frequency(1, Target(0.36, 0.02)), beat(Target(40.0, 10.0)))
    regions = acceptable_boxes(asked)
    assert regions.names == ("L", "k")
    L, k = np.meshgrid(np.geomspace(1.2, 2.6, 70), np.geomspace(0.5, 60, 70))
    x = np.stack([L.ravel(), k.ravel()], axis=1)
    good = (np.abs(np.sqrt(G / x[:, 0]) / (2 * np.pi) - 0.36) <= 0.02) & (np.abs(pair_beat(*x.T) - 40) <= 10)

    def within(boxes):
        return ((x[:, None] >= boxes[:, 0]) & (x[:, None] <= boxes[:, 1])).all(axis=2).any(axis=1)

    assert not (within(regions.inside) & ~good).any()
    assert not (within(regions.outside) & good).any()
    assert (within(regions.inside) | within(regions.outside) | within(regions.undecided)).all()
    area = [
        np.prod(np.log(b[:, 1] / b[:, 0]), axis=1).sum() for b in (regions.inside, regions.outside, regions.undecided)
    ]
    assert_allclose(sum(area), np.log(2.6 / 1.2) * np.log(120), rtol=1e-9)
    assert area[2] < 0.01 * sum(area)
    assert area[0] > 0


def test_the_same_question_has_the_same_answer():
    asked = problem(cases()["tie between different lengths"], frequency(1, AtLeast(0.3)), beat(AtMost(9.0)))
    first, second = (reachable_range(asked, 1, budget=Budget(boxes=500)) for _ in range(2))
    assert (first.certain_low, first.certain_high) == (second.certain_low, second.certain_high)
    assert np.array_equal(first.low_at, second.low_at)


def asked_at_random(model, rng):
    """A problem with up to three random wishes, windows near or beyond what samples reach, and the samples' values."""
    evaluator = Evaluator(model, ())
    if model.size - evaluator.rigid < 2:
        return None
    variables = model.parameters.variables
    low, high = np.array([v.low for v in variables]), np.array([v.high for v in variables])
    share = rng.random((300, len(low)))
    share[:100] = np.round(share[:100])
    x = np.clip(low + share * (high - low), low, high)

    def window(values):
        values = values[~np.isnan(values)]
        if not len(values):
            return AtLeast(1.0)
        value = rng.choice(values) * rng.choice([1.0, 1.0, 0.8, 1.25])
        return (Target(value, 0.02 * abs(value)), AtLeast(value), AtMost(value))[rng.integers(3)]

    def all_of(requirements):
        first, second, third, fourth, fifth = requirements
        return (
            frequency(1, first),
            Period(requirement=second, label="period 2", mode=2),
            Splitting(requirement=third, label="splitting", between=(1, 2)),
            FrequencyRatio(requirement=fourth, label="ratio", between=(1, 2)),
            beat(fifth),
        )

    values = Evaluator(model, all_of([AtLeast(1.0)] * 5)).at(x).values()
    middle = float(np.nanmedian(values[:, 0])) if np.isfinite(values[:, 0]).any() else 1.0
    band = KeepOut(label="keep out", bands=((0.95 * middle, 1.05 * middle),))
    kept = rng.choice(6, rng.integers(1, 4), replace=False)
    objectives = (*all_of([window(values[:, i]) for i in range(5)]), band)
    chosen = problem(model, *(objectives[i] for i in kept))
    return chosen, chosen.evaluator.at(x).values()


def check_random_problem(seed):
    """No false 'impossible', no value beyond a certain end, no design that does not hold."""
    rng = np.random.default_rng(seed)
    drawn = asked_at_random(drawn_assembly(rng), rng)
    if drawn is None:
        return "nothing"
    asked, values = drawn
    verdict = prove_impossible(asked, Budget(boxes=1000))
    if verdict.met_at is not None:
        assert asked.all_met(asked.evaluator.at(verdict.met_at[None]).values())[0]
    if verdict.certificate is not None:
        assert not asked.all_met(values).any()
        assert verdict.certificate.gap >= 0
    for i in range(values.shape[1]):
        found = reachable_range(asked, i, budget=Budget(boxes=300))
        known = values[np.isfinite(values[:, i]), i]
        if len(known):
            rounding = 1e-11 * np.abs(known).max()  # of the sampled values themselves
            assert found.certain_low <= known.min() + rounding
            assert found.certain_high >= known.max() - rounding
        if found.found_low is not None:
            assert found.certain_low <= found.found_low <= found.found_high <= found.certain_high
    return "met" if verdict.met_at is not None else "impossible" if verdict.certificate else "open"


def test_random_problems_against_dense_samples():
    outcomes = [check_random_problem(seed) for seed in range(40)]
    # Both answers occur, and most questions are decided.
    assert outcomes.count("met") >= 8
    assert outcomes.count("impossible") >= 8
    assert outcomes.count("open") <= 4


@pytest.mark.slow
def test_five_hundred_random_problems_against_dense_samples():
    outcomes = [check_random_problem(seed) for seed in range(1000, 1500)]
    assert outcomes.count("open") <= 50


def test_least_change_and_fixed_variables():
    """Root of the sum of squared logarithms from the start; a fixed variable has no part in it."""
    model = Assembly(
        bodies=(Mass(name="b", mass=follow("m")),),
        links=(Spring(name="s", between=("b", "ground"), rate=follow("k")),),
    )
    variables = [Variable(name="m", low=2.0, high=2.0), Variable(name="k", low=50.0, high=500.0, start=100.0)]
    change = LeastChange(requirement=Minimise(), label="change")
    asked = problem(model.compile(variables), frequency(1, AtLeast(2.0)), change)
    least = np.log(2.0 * (2 * np.pi * 2.0) ** 2 / 100.0)
    found = best(asked, 1)
    assert_allclose([found.certain, found.found], least, rtol=3e-6)
