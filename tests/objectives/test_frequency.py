"""Frequencies and what is made of them, as judged and as pursued."""

import numpy as np
import pytest
from dense_states import GivenState, ring, row, row_point, two
from numpy.testing import assert_allclose

from objectives import (
    AtLeast,
    AtMost,
    BeatPeriod,
    Frequency,
    FrequencyRatio,
    Like,
    NodalPoint,
    Period,
    Splitting,
    Target,
)
from objectives.state import Eigenvalues


def tones(*frequencies: float, rigid: int = 0) -> GivenState:
    return GivenState({Eigenvalues(): np.square(2 * np.pi * np.array([0.0] * rigid + list(frequencies)))}, rigid)


def wish(kind, requirement, **rest):
    return kind(requirement=requirement, label="", **rest)


@pytest.mark.parametrize(
    ("kind", "rest", "expected"),
    [
        (Frequency, {"mode": 2}, 2.5),
        (Period, {"mode": 2}, 0.4),
        (Splitting, {"between": (1, 2)}, 0.5),
        (Splitting, {"between": (2, 1)}, -0.5),
        (BeatPeriod, {"between": (1, 2)}, 2.0),
        (FrequencyRatio, {"between": (1, 2)}, 1.25),
    ],
)
def test_modes_are_numbered_over_the_oscillating_ones(kind, rest, expected):
    measured = wish(kind, Target(1.0, 0.1), **rest).measure(tones(2.0, 2.5, 4.0, rigid=2))
    assert_allclose(measured.values, expected, rtol=1e-13)


@pytest.mark.parametrize("gap", [1e-4, 1e-8, 1e-12])
def test_a_small_splitting_keeps_its_digits(gap):
    """(λ_j − λ_i)/(ω_i + ω_j) is as good as λ itself: λ_j − λ_i is exact where they are close (Sterbenz)."""
    lam = np.array([1.0, 1.0 + gap])
    exact = (lam[1] - lam[0]) / (1 + np.sqrt(lam[1])) / (2 * np.pi)
    state = GivenState({Eigenvalues(): lam})
    measured = wish(Splitting, Target(1.0, 0.1), between=(1, 2)).measure(state)
    assert_allclose(measured.values, exact, rtol=1e-15)


def test_equal_frequencies_beat_for_ever_and_are_pursued_all_the_same():
    """Ring of three: λ = 0, 3, 3 (exact)."""
    state = tones(1.0, 1.0)
    objective = wish(BeatPeriod, Target(40.0, 2.0), between=(1, 2))
    assert objective.measure(state).values == np.inf
    pursuit = objective.pursue(state)
    assert_allclose(pursuit.equal.values, -20.0)
    assert np.abs(pursuit.equal.gradient[Eigenvalues()]).max() > 0
    ringing = objective.measure(ring().at(np.zeros(6))).values
    assert abs(ringing) > 1e12


WINDOWS = [
    (Frequency, {"mode": 1}, lambda v: (v, 3 * v)),
    (Period, {"mode": 1}, lambda v: (1 / v, 3 / v)),
    (Splitting, {"between": (1, 2)}, lambda v: (1.0, 1.0 + v)),
    (BeatPeriod, {"between": (1, 2)}, lambda v: (1.0, 1.0 + 1 / v)),
    (FrequencyRatio, {"between": (1, 2)}, lambda v: (1.0, v)),
]


@pytest.mark.parametrize(("kind", "rest", "at"), WINDOWS, ids=[kind.kind for kind, _, _ in WINDOWS])
def test_residuals_are_one_on_the_edge_of_the_window(kind, rest, at):
    objective = wish(kind, Target(5.0, 0.05), **rest)
    assert_allclose(objective.pursue(tones(*at(5.0))).equal.values, 0.0, atol=1e-12)
    for edge in (4.95, 5.05):
        # Linear only to first order: half a window in a hundred.
        assert_allclose(np.abs(objective.pursue(tones(*at(edge))).equal.values), 1.0, rtol=0.02)


@pytest.mark.parametrize(("kind", "rest", "at"), WINDOWS, ids=[kind.kind for kind, _, _ in WINDOWS])
def test_limits_are_pursued_to_where_they_are_met(kind, rest, at):
    for requirement in (AtLeast(5.0), AtMost(5.0)):
        objective = wish(kind, requirement, **rest)
        for value in (0.5, 4.99, 5.01, 50.0):
            state = tones(*at(value))
            met = requirement.margin(objective.measure(state).values) >= 0
            assert (objective.pursue(state).positive.values >= 0).all() == met.all()


@pytest.mark.parametrize("mode", range(1, 7))
@pytest.mark.parametrize("kind", [Frequency, Period])
def test_a_limit_sees_every_mode_that_may_meet_its_own(kind, mode):
    """Neighbours add what is implied: no design is excluded by them, and their number is fixed."""
    rng = np.random.default_rng(mode)
    for requirement in (AtLeast(1.0), AtMost(1.0)):
        objective = wish(kind, requirement, mode=mode)
        widths = set()
        for _ in range(30):
            state = tones(*np.sort(rng.uniform(0.5, 1.5, 6)))
            room = objective.pursue(state).positive.values[0]
            assert (room.min() >= 0) == (requirement.margin(objective.measure(state).values[0, 0]) >= 0)
            widths.add(len(room))
        upward = isinstance(requirement, AtLeast) == (kind is Frequency)
        assert widths == {min(4, 7 - mode if upward else mode)}
        assert objective.modes_needed == (mode + 3 if upward else mode)


def test_modes_named_by_shape_may_cross():
    even, odd = Like((("a.x", 1.0), ("b.x", 1.0))), Like((("a.x", 1.0), ("b.x", -1.0)))
    structure, z = two(0.0, 0.05)
    named = type(structure)(structure.components, structure.terms, likes=(even, odd))
    objective = wish(Splitting, Target(0.1, 0.01), between=(odd, even))
    assert objective.measure(named.at(z)).values < 0
    assert objective.modes_needed is None
    assert objective.likes == (odd, even)
    # No beat that long, and none at all the other way round.
    beat = wish(BeatPeriod, AtLeast(1.0), between=(odd, even))
    assert (beat.pursue(named.at(z)).positive.values < 0).any()


def test_the_sign_of_a_shape_does_not_matter_to_a_still_body():
    state = row().at(row_point())
    bodies = {name: (f"{name}.x",) for name in "abcd"}
    for requirement in (Target(0.0, 0.05), AtMost(0.1), Target(0.5, 0.1)):
        objective = wish(NodalPoint, requirement, mode=2, own=("b.x",), bodies=bodies)
        before = objective.pursue(state)
        turned = row().at(row_point())
        turned.phi = -turned.phi
        after = objective.pursue(turned)
        assert_allclose(np.abs(after.equal.values), np.abs(before.equal.values))
        assert_allclose(np.sort(after.positive.values), np.sort(before.positive.values))
