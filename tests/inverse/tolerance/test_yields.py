"""Shares of builds that pass: against closed forms, against all modes of every build, and their intervals."""

import tracemalloc
from dataclasses import dataclass

import numpy as np
import pytest
from assemblies import chain, every_part, pair
from scipy import stats

from inverse.assembly.assembly import Assembly
from inverse.assembly.bodies import Pendulum
from inverse.assembly.links import Spring
from inverse.evaluation.evaluator import Evaluator
from inverse.tolerance.distributions import Cube, Errors, Limit, Tolerance, draw_builds
from inverse.tolerance.yields import Judge, clopper_pearson, measure_yield
from objectives.base import AtLeast, AtMost, Minimise, Objective, Target
from objectives.frequency import BeatPeriod, Frequency, FrequencyRatio, Period, Splitting
from objectives.keep_out import KeepOut
from objectives.state import Measured, State

NONE = np.zeros(0)


@dataclass(frozen=True, slots=True, kw_only=True)
class InFull(Objective):
    """The same objective as one that no test but all modes decides."""

    inner: Objective

    @property
    def modes_needed(self) -> int | None:
        return self.inner.modes_needed

    def measure(self, state: State) -> Measured:
        return self.inner.measure(state)


def evaluator(assembly: Assembly, *objectives: Objective) -> Evaluator:
    return Evaluator(assembly.compile(), objectives)


def errors_on(found: Evaluator, pattern: str, **limits: object) -> Errors:
    names = [d.name for d in found.model.parameters.dimensions]
    places = tuple(i for i, name in enumerate(names) if name.endswith(pattern))
    return Errors.of((Tolerance(dimensions=places, **limits),), len(names))


@pytest.mark.parametrize(("passed", "builds"), [(0, 50), (50, 50), (0, 1), (1, 1), (7, 50), (99_990, 100_000)])
@pytest.mark.parametrize("confidence", [0.95, 0.99])
def test_interval_is_that_of_the_exact_binomial_test(passed, builds, confidence):
    """scipy.stats.binomtest with method 'exact'."""
    expected = stats.binomtest(passed, builds).proportion_ci(confidence, "exact")
    # Its own root finder stops at 1e-12.
    np.testing.assert_allclose(clopper_pearson(passed, builds, confidence), expected, rtol=1e-9, atol=1e-12)


@pytest.mark.parametrize("within", [0.05, 0.5, 2.0])
def test_beat_of_two_pendulums_detuned_by_their_lengths(within):
    """Closed form: λ₂ − λ₁ = √((g/L₁ − g/L₂)² + 4k²), λ₁ + λ₂ = g/L₁ + g/L₂ + 2k for unit bobs tied at the bobs."""
    k, g, limit = 1.0331557, 9.80665, 0.02  # a 20 s beat at L = 1 m
    rng = np.random.default_rng(12)
    L = 1 + limit * stats.truncnorm(-3, 3, scale=1 / 3).ppf(rng.random((2, 1_000_000)))
    total, gap = (g / L).sum(axis=0) + 2 * k, np.hypot(g / L[0] - g / L[1], 2 * k)
    beat = 2 * np.pi / (np.sqrt((total + gap) / 2) - np.sqrt((total - gap) / 2))
    expected = float(np.mean(np.abs(beat - 20) <= within))
    found = evaluator(pair(rate=k), BeatPeriod(requirement=Target(20.0, within), label="", between=(1, 2)))
    measured = measure_yield(found, NONE, errors_on(found, ".length", each=Limit(limit)), seed=3)
    # Four standard deviations of the closed form's own million draws and of as many independent ones as builds.
    sampling = 4 * np.sqrt(expected * (1 - expected) * (1 / 1e6 + 1 / measured.builds))
    assert abs(measured.share - expected) <= sampling
    assert measured.low <= measured.share <= measured.high


def chosen_objectives(values: np.ndarray) -> tuple[Objective, ...]:
    f = values
    return (
        Frequency(requirement=Target(f[0], 0.01 * f[0]), label="", mode=1),
        Frequency(requirement=AtLeast(0.99 * f[1]), label="", mode=2),
        Frequency(requirement=AtMost(1.01 * f[2]), label="", mode=3),
        Period(requirement=Target(1 / f[1], 0.012 / f[1]), label="", mode=2),
        KeepOut(
            requirement=AtLeast(0.0),
            label="",
            bands=(tuple(sorted((f[1] * 1.012, f[2] * 0.988))), (f[2] * 2, f[2] * 2.2)),
        ),
        Splitting(requirement=Target(f[2] - f[1], 0.03 * (f[2] - f[1])), label="", between=(2, 3)),
        BeatPeriod(requirement=AtMost(1.02 / (f[1] - f[0])), label="", between=(1, 2)),
        FrequencyRatio(requirement=Target(f[2] / f[0], 0.01 * f[2] / f[0]), label="", between=(1, 3)),
    )


CASES = {
    "chain": chain([1.0, 2.0, 1.5, 1.0, 2.0], [100.0, 50.0, 75.0, 60.0, 80.0]),
    "free chain": chain([1.0, 2.0, 1.5, 1.0], [100.0, 50.0, 75.0], first_held=False),
    "pendulums": every_part()["pendulums with rods, bobs and ties"],
    "near-degenerate row": Assembly(
        bodies=tuple(Pendulum(name=f"p{i}", mass=1.0, length=1.0) for i in range(4)),
        links=tuple(Spring(name=f"s{i}", between=(f"p{i}", f"p{i + 1}"), rate=0.05) for i in range(3)),
    ),
}


@pytest.mark.parametrize("one", range(8))
@pytest.mark.parametrize("name", CASES)
def test_every_test_agrees_with_all_modes_build_by_build(name, one):
    three = [Frequency(requirement=Minimise(), label="", mode=mode) for mode in (1, 2, 3)]
    values = evaluator(CASES[name], *three).at(NONE).values()[0]
    objective = chosen_objectives(values)[one]
    other = InFull(requirement=objective.requirement, label="", inner=objective)
    quick, full = evaluator(CASES[name], objective), evaluator(CASES[name], other)
    errors = errors_on(quick, "", each=Limit(0.03, relative=True))
    judges = [Judge.of(each, NONE) for each in (quick, full)]
    assert not judges[0].rest.objectives
    assert judges[1].rest.objectives
    (points,) = Cube(errors.units, 2).chunks(2**11, 2**11)
    base = draw_builds(errors, judges[0].nominal, points)
    verdicts = [judge.passes(base) for judge in judges]
    np.testing.assert_array_equal(verdicts[0], verdicts[1])
    assert verdicts[0].any()


def test_several_objectives_must_be_met_at_once():
    three = [Frequency(requirement=Minimise(), label="", mode=mode) for mode in (1, 2, 3)]
    objectives = chosen_objectives(evaluator(CASES["chain"], *three).at(NONE).values()[0])
    found = evaluator(CASES["chain"], *objectives)
    errors = errors_on(found, ".rate", each=Limit(0.03, relative=True))
    (points,) = Cube(errors.units, 2).chunks(2**11, 2**11)
    base = draw_builds(errors, Judge.of(found, NONE).nominal, points)
    alone = [Judge.of(evaluator(CASES["chain"], o), NONE).passes(base) for o in objectives]
    np.testing.assert_array_equal(Judge.of(found, NONE).passes(base), np.all(alone, axis=0))


def test_a_mode_that_does_not_exist_fails_every_build():
    for objective in (
        Frequency(requirement=AtLeast(0.01), label="", mode=3),
        Frequency(requirement=AtMost(100.0), label="", mode=3),
        Splitting(requirement=AtLeast(0.0), label="", between=(1, 3)),
    ):
        found = evaluator(pair(), objective)
        errors = errors_on(found, ".length", each=Limit(0.01))
        assert measure_yield(found, NONE, errors, seed=1, builds=2**8).share == 0


def test_builds_that_topple_have_failed():
    """Mounts of height H under a load F lose F/H laterally; at ten times the mass nothing is left."""
    found = evaluator(
        every_part()["platform in space on loaded mounts"],
        Frequency(requirement=AtMost(1e3), label="", mode=1),
    )
    names = [d.name for d in found.model.parameters.dimensions]
    errors = errors_on(found, "stage.mass", each=Limit(15.0, relative=True), distribution="uniform")
    judge = Judge.of(found, NONE)
    (points,) = Cube(1, 2).chunks(2**7, 2**7)
    base = draw_builds(errors, judge.nominal, points)
    whole = base[:, names.index("stage.mass")] > 0
    stable = found.of_dimensions(base[whole], np.zeros((whole.sum(), 0))).state.modes.stable
    assert judge.stable_below is not None
    np.testing.assert_array_equal(judge.passes(base)[whole], stable)
    assert 0.1 < stable.mean() < 0.9
    assert not judge.passes(base)[~whole].any()


def test_a_part_without_substance_has_failed():
    found = evaluator(pair(), Frequency(requirement=AtLeast(0.01), label="", mode=1))
    errors = errors_on(found, ".length", each=Limit(1.5, relative=True), distribution="uniform")
    measured = measure_yield(found, NONE, errors, seed=1, builds=2**12)
    # Both lengths positive: (5/6)² of the square, and the rest of the condition holds nearly always.
    np.testing.assert_allclose(measured.share, 25 / 36, atol=0.01)


def test_memory_does_not_grow_with_builds():
    found = evaluator(CASES["chain"], Frequency(requirement=AtLeast(0.5), label="", mode=1))
    errors = errors_on(found, ".rate", each=Limit(0.03, relative=True))
    measure_yield(found, NONE, errors, seed=1, builds=2**16)
    peaks = []
    for builds in (2**17, 2**19):
        tracemalloc.start()
        measure_yield(found, NONE, errors, seed=1, builds=builds)
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
    assert peaks[1] < 1.2 * peaks[0]
    assert peaks[1] < 100e6


def test_same_seed_same_yield():
    found = evaluator(CASES["chain"], Frequency(requirement=Target(0.4, 0.01), label="", mode=1))
    errors = errors_on(found, ".rate", each=Limit(0.05, relative=True))
    first, second = (measure_yield(found, NONE, errors, seed=4, builds=2**12) for _ in range(2))
    assert first == second
