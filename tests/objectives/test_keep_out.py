"""Bands, which modes count, and the ways past them."""

from itertools import combinations_with_replacement

import numpy as np
import pytest
from dense_states import GivenState, row, row_point
from numpy.testing import assert_allclose

from objectives import KeepOut, bands_from_orders
from objectives.base import met
from objectives.keep_out import merged, number_of_choices
from objectives.state import Eigenvalues, Energy


def tones(*frequencies: float, rigid: int = 0, **energies) -> GivenState:
    lam = np.square(2 * np.pi * np.array([0.0] * rigid + list(frequencies)))
    return GivenState({Eigenvalues(): lam, **{Energy(k): v for k, v in energies.items()}}, rigid)


def keep_out(*bands, **rest) -> KeepOut:
    return KeepOut(label="", bands=bands, **rest)


def distance(objective: KeepOut, state: GivenState) -> float:
    return float(objective.measure(state).values[0, 0])


@pytest.mark.parametrize(
    ("frequencies", "expected"),
    [([5.0, 30.0], 5.0), ([11.0, 30.0], -1.0), ([18.0, 30.0], -2.0), ([9.0, 20.5], 0.5), ([10.0, 40.0], 0.0)],
)
def test_distance_is_from_the_nearest_edge(frequencies, expected):
    assert_allclose(distance(keep_out((10.0, 20.0)), tones(*frequencies)), expected, atol=1e-12)


def test_rigid_modes_do_not_count():
    assert_allclose(distance(keep_out((0.0, 2.0)), tones(3.0, rigid=2)), 1.0)


def test_a_band_from_zero_has_no_lower_side():
    objective = keep_out((-1.0, 4.0))
    assert_allclose(distance(objective, tones(0.1)), -3.9)
    assert objective.nearest_choice(tones(0.1)).tolist() == [[0]]
    assert (objective.pursue(tones(0.1, 9.0)).positive.values[0] < 0).sum() == 1


def test_only_modes_count_in_which_the_driven_one_takes_part():
    state = tones(5.0, 15.0, 30.0, motor=[0.4, 5e-7, 0.6], pump=[0.0, 1e-3, 0.0])
    assert_allclose(distance(keep_out((10.0, 20.0), driven_by=("motor",)), state), 5.0)
    assert_allclose(distance(keep_out((10.0, 20.0), driven_by=("motor", "pump")), state), -5.0)
    assert keep_out((16.0, 20.0), driven_by=("motor",)).nearest_choice(state).tolist() == [[1]]
    assert distance(keep_out((10.0, 20.0), driven_by=("idle",)), tones(15.0, idle=[0.0])) == np.inf


def test_bands_are_joined_and_one_below_zero_refused():
    assert keep_out((40.0, 52.0), (20.0, 26.0), (50.0, 65.0)).bands == ((20.0, 26.0), (40.0, 65.0))
    assert bands_from_orders([2, 1, 2.5], 20.0, 26.0) == ((20.0, 26.0), (40.0, 65.0))
    assert merged([(5.0, 3.0)]) == ((3.0, 5.0),)
    with pytest.raises(ValueError, match="found -2 Hz to -1 Hz"):
        keep_out((-2.0, -1.0))


def test_rounding_on_an_edge_is_met_but_no_more():
    """A relative slack of 1e-9 of the edge: its distance from it is zero, which has no relative slack."""
    objective = keep_out((100.0, 120.0))
    for beyond, expected in ((5e-8, True), (2e-6, False)):
        measured = objective.measure(tones(100.0 + beyond)).values
        assert met(objective.requirement, measured).item() is expected


def test_modes_keep_to_the_side_they_are_nearest_to():
    objective = keep_out((10.0, 20.0), (30.0, 40.0))
    state = tones(9.0, 14.0, 16.0, 25.0, 36.0)
    assert objective.nearest_choice(state).tolist() == [[2, 4]]
    assert objective.pursue(state).equal.values.size == 0
    room = objective.pursue(state).positive.values[0]
    # Those inside a band are the ones that have to move: 14 down to 10, 16 up to 20, 36 up to 40.
    assert_allclose(np.sort(room[room < 0]), np.sort([10 / 10 - 14 / 10, 16 / 20 - 1, 36 / 40 - 1]), atol=1e-8)


def test_a_choice_sends_modes_across():
    objective = keep_out((10.0, 20.0))
    state = tones(9.0, 14.0, 30.0)
    for below, wrong in ((0, [9 / 20 - 1, 14 / 20 - 1]), (1, [14 / 20 - 1]), (3, [1 - 1.4, 1 - 3.0])):
        room = objective.pursue(state, np.array([[below]])).positive.values[0]
        assert_allclose(np.sort(room[room < 0]), np.sort(wrong), atol=1e-8)


def test_a_design_with_room_everywhere_meets_the_objective():
    rng = np.random.default_rng(2)
    objective = keep_out((10.0, 12.0), (20.0, 22.0))
    for _ in range(200):
        state = tones(*np.sort(rng.uniform(5.0, 30.0, 3)))
        room = objective.pursue(state).positive.values
        assert (room >= 0).all() == (distance(objective, state) > 0)


def test_choices_are_non_decreasing_splits():
    ways = list(combinations_with_replacement(range(5), 2))
    assert number_of_choices(4, 2) == len(ways) == 15
    objective = keep_out((10.0, 20.0), (30.0, 40.0))
    state = tones(9.0, 14.0, 16.0, 36.0)
    near = objective.choices_near(state, [(1, 0), (0, -1), (-3, 3), (2, 0)])
    assert near[:, 0].tolist() == [[2, 3], [3, 3], [2, 2], [0, 4], [4, 4]]
    assert all(tuple(choice) in ways for choice in near[:, 0].tolist())


def test_columns_do_not_depend_on_the_design():
    objective = keep_out((0.15, 0.2), (0.25, 0.26))
    state = row().at(*(row_point(seed=s) for s in range(6)))
    pursuit = objective.pursue(state)
    assert pursuit.positive.values.shape == (6, 16)
    one = objective.pursue(row().at(row_point(seed=4)))
    assert_allclose(pursuit.positive.values[4], one.positive.values[0], rtol=1e-12)
