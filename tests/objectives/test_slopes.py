"""Every measure and every pursuit, differentiated through plain dense matrices, by the order of its error."""

from dataclasses import replace

import numpy as np
import pytest
from dense_states import hung, ring, row, row_point, two
from orders import decades, order_of_error

from objectives import (
    AtLeast,
    AtMost,
    BeatPeriod,
    Cost,
    EnergyShare,
    Frequency,
    FrequencyRatio,
    HandedAmplitude,
    KeepOut,
    LeastChange,
    Like,
    Minimise,
    NodalPoint,
    Period,
    Sag,
    Shape,
    Splitting,
    StaticSag,
    Target,
    TotalMass,
    TransferCompleteness,
    TransferTime,
)

LIKE = Like((("a.x", 1.0), ("b.x", -0.3), ("c.x", -0.9)))
NAMED = replace(row(), likes=(LIKE,))
BODIES = {name: (f"{name}.x",) for name in "abcd"}


def wish(kind, requirement=None, **rest):
    return kind(label="", requirement=Target(1.0, 0.1) if requirement is None else requirement, **rest)


def transfer(kind, requirement=None, source="a.x", target="b", **rest):
    return wish(kind, requirement, source=source, target=target, **rest)


def check(structure, z, column, seed=0, scale=0.3, smallest=1e-7):
    """Central differences of `column`, a function of a state, fall with the square of the step onto its gradient."""
    u = scale * np.random.default_rng(seed).standard_normal(len(z))
    state = structure.at(z)
    measured = column(state)
    slope = state.jacobian(measured)[0] @ u
    assert np.isfinite(measured.values).all()
    assert np.isfinite(slope).all()

    def value(h):
        return column(structure.at(z + h * u)).values[0]

    order, best = order_of_error(value, slope)
    assert order == pytest.approx(2.0, abs=0.1)
    assert best < smallest
    # Where the last step is not the best one, rounding has been reached before it.
    assert best < 0.01 * smallest or decades(value, slope) >= 3.0


MEASURES = {
    "frequency": wish(Frequency, mode=2),
    "frequency by shape": wish(Frequency, mode=LIKE),
    "period": wish(Period, mode=1),
    "splitting": wish(Splitting, between=(1, 3)),
    "beat period": wish(BeatPeriod, between=(1, 2)),
    "frequency ratio": wish(FrequencyRatio, between=(1, 3)),
    "keep out, above": wish(KeepOut, AtLeast(0.0), bands=((0.01, 0.05),)),
    "keep out, inside": wish(KeepOut, AtLeast(0.0), bands=((0.01, 0.05), (0.1, 0.21))),
    "keep out, driven": wish(KeepOut, AtLeast(0.0), bands=((0.6, 0.7),), driven_by=("c",)),
    "transfer time": transfer(TransferTime, horizon=40.0),
    "transfer time over the longest beat": transfer(TransferTime, target="c"),
    "transfer completeness": transfer(TransferCompleteness, horizon=40.0),
    "completeness at a time": transfer(TransferCompleteness, time=4.0),
    "handed amplitude": transfer(HandedAmplitude, target="b.x", horizon=9.0),
    "handed amplitude over the longest beat": transfer(HandedAmplitude, target="c.x"),
    "shape": wish(Shape, mode=1, like=LIKE),
    "shape by shape": wish(Shape, mode=LIKE, like=LIKE),
    "nodal point": wish(NodalPoint, mode=2, own=("b.x",), bodies=BODIES),
    "nodal point of two axes": wish(
        NodalPoint, mode=2, own=("b.x", "c.x"), bodies={"a": ("a.x", "d.x"), "b": ("b.x", "c.x")}
    ),
    "energy share": wish(EnergyShare, mode=3, owner="b"),
    "total mass": wish(TotalMass, Minimise(), parts=("a", "c")),
    "cost": wish(Cost, Minimise(), parts=("b",)),
    "least change": wish(LeastChange, Minimise()),
    "sag": wish(StaticSag, sag=Sag("b.x", 2.0)),
}


@pytest.mark.parametrize("kind", MEASURES)
def test_measures_of_a_row(kind):
    check(NAMED, row_point(), MEASURES[kind].measure)


PURSUITS = {
    "frequency": wish(Frequency, Target(0.2, 0.01), mode=2),
    "frequency at least": wish(Frequency, AtLeast(0.2), mode=2),
    "frequency at most": wish(Frequency, AtMost(0.3), mode=3),
    "period": wish(Period, Target(5.0, 0.1), mode=2),
    "period at least": wish(Period, AtLeast(5.0), mode=2),
    "period at most": wish(Period, AtMost(5.0), mode=2),
    "splitting": wish(Splitting, Target(0.02, 0.001), between=(1, 2)),
    "beat period": wish(BeatPeriod, Target(40.0, 2.0), between=(1, 2)),
    "beat period at least": wish(BeatPeriod, AtLeast(40.0), between=(1, 2)),
    "beat period at most": wish(BeatPeriod, AtMost(40.0), between=(1, 2)),
    "frequency ratio": wish(FrequencyRatio, Target(1.5, 0.1), between=(1, 2)),
    "keep out": wish(KeepOut, bands=((0.15, 0.2), (0.25, 0.26))),
    "transfer time": transfer(TransferTime, Target(7.0, 0.1), horizon=40.0, completeness=0.8),
    "transfer time at most": transfer(TransferTime, AtMost(7.0), horizon=40.0),
    "transfer completeness": transfer(TransferCompleteness, AtLeast(0.9), horizon=40.0),
    "handed amplitude": transfer(HandedAmplitude, AtLeast(0.9), target="b.x", horizon=9.0),
    "shape": wish(Shape, AtLeast(0.9), mode=1, like=LIKE),
    "still": wish(NodalPoint, Target(0.0, 0.02), mode=2, own=("b.x",), bodies=BODIES),
    "nearly still": wish(NodalPoint, AtMost(0.02), mode=2, own=("b.x",), bodies=BODIES),
}


@pytest.mark.parametrize("kind", PURSUITS)
def test_pursuits_of_a_row(kind):
    pursuit = PURSUITS[kind].pursue(row().at(row_point()))
    sides = [side for side in ("equal", "positive") if getattr(pursuit, side).values.size]
    assert sides
    for side in sides:
        check(row(), row_point(), lambda state, side=side: getattr(PURSUITS[kind].pursue(state), side))


@pytest.mark.parametrize("target", ["a", "b", "c"])
def test_shares_of_owners_that_couple_coordinates(target):
    z = 0.2 * np.random.default_rng(3).standard_normal(6)
    check(hung(), z, transfer(TransferCompleteness, target=target, time=3.0).measure)


SMOOTH = {
    "share": transfer(TransferCompleteness, time=1.3),
    "time": transfer(TransferTime, horizon=3.0),
    "completeness": transfer(TransferCompleteness, horizon=3.0),
    "amplitude": transfer(HandedAmplitude, target="b.x", horizon=1.5),
}


@pytest.mark.parametrize("kind", SMOOTH)
def test_motion_is_smooth_where_frequencies_coincide(kind):
    """A ring of three: λ = 0, 3, 3. Single shapes turn at random there, the motion does not."""
    check(ring(), np.zeros(6), SMOOTH[kind].measure)


@pytest.mark.parametrize("side", ["equal", "positive"])
def test_pursuit_of_a_time_is_smooth_where_frequencies_coincide(side):
    objective = transfer(TransferTime, Target(1.8, 0.1), horizon=3.0)
    check(ring(), np.zeros(6), lambda state: getattr(objective.pursue(state), side))


@pytest.mark.parametrize("gap", [1e-12, 1e-9, 1e-6, 1e-3])
def test_nearly_coinciding_frequencies_lose_no_digits(gap):
    """The ring with one spring 1 + p has λ = 0, 3, 3 + 2p (exact)."""
    z = np.array([0.0, 0.0, 0.0, np.log1p(gap), 0.0, 0.0])
    check(ring(), z, SMOOTH["share"].measure)
    check(ring(), z, SMOOTH["time"].measure)


SYMMETRIC = {
    "beat": wish(BeatPeriod, between=(1, 2)),
    "splitting": wish(Splitting, between=(1, 2)),
    "time": transfer(TransferTime),
    "completeness": transfer(TransferCompleteness, time=60.0),
    "amplitude": transfer(HandedAmplitude, target="b.x", horizon=100.0),
    "share of energy": wish(EnergyShare, mode=1, owner="a"),
    "shape": wish(Shape, mode=2, like=Like((("a.x", 1.0), ("b.x", -0.5)))),
}


@pytest.mark.parametrize("kind", SYMMETRIC)
def test_two_equal_bodies(kind):
    # The beat is long: the phase that rounding spoils is counted in hundreds of radians.
    check(*two(), SYMMETRIC[kind].measure, scale=0.05, smallest=1e-6)


def test_the_difference_of_equal_bodies_does_nothing_in_first_order():
    """The beat of two equal bodies does not feel the difference of their springs in first order (verified)."""
    structure, z = two()
    state = structure.at(z)
    for objective in (SYMMETRIC["beat"], SYMMETRIC["time"]):
        slope = state.jacobian(objective.measure(state))[0, 0]
        assert abs(slope[2] - slope[3]) < 1e-9 * abs(slope).max()


def test_completeness_of_equal_bodies_is_stationary():
    structure, z = two()
    state = structure.at(z)
    measured = transfer(TransferCompleteness).measure(state)
    assert measured.values[0, 0] == pytest.approx(1.0, abs=1e-12)
    assert abs(state.jacobian(measured)).max() < 1e-9


def test_a_time_at_the_end_of_the_horizon_moves_with_the_beat_period():
    """Seen from where it was released, the energy of two bodies is whole again after a beat."""
    structure, z = two(0.01)
    objective = transfer(TransferTime, target="a")
    state = structure.at(z)
    found = objective.maxima(state)
    beat = wish(BeatPeriod, between=(1, 2)).measure(state)
    assert found.at_end.all()
    assert found.time[0] == pytest.approx(beat.values[0, 0], rel=1e-12)
    measured = objective.measure(state)
    np.testing.assert_allclose(state.jacobian(measured), state.jacobian(beat), rtol=1e-9)


def test_what_does_not_exist_has_no_value_and_no_slope():
    state = row(2).at(row_point(2))
    for objective in (
        wish(Frequency, mode=3),
        wish(Period, mode=3),
        wish(Splitting, between=(1, 3)),
        wish(BeatPeriod, between=(1, 3)),
        wish(FrequencyRatio, between=(1, 3)),
        wish(EnergyShare, mode=3, owner="a"),
        wish(NodalPoint, mode=3, own=("a.x",), bodies={"a": ("a.x",)}),
        wish(Shape, mode=3, like=Like((("a.x", 1.0), ("b.x", 1.0)))),
    ):
        measured = objective.measure(state)
        assert np.isnan(measured.values).all()
        assert not state.jacobian(measured).any()
