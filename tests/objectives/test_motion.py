"""Energy and amplitude handed over: closed forms, published chains, and searches checked by brute sampling."""

from math import comb, sqrt

import numpy as np
import pytest
from dense_states import GivenState, chain, hung, ring, row, row_point, two
from numpy.testing import assert_allclose

from objectives import (
    AtLeast,
    BeatPeriod,
    HandedAmplitude,
    Target,
    TransferCompleteness,
    TransferTime,
)
from objectives.state import Eigenvalues, FrozenDisplacement, OwnerForm, ReleasedAmplitudes
from objectives.transfer import MOST, PER_CYCLE, Exchange, longest_beat, maxima

T = Target(1.0, 0.1)


def wish(kind, source="a.x", target="b", requirement=T, **rest):
    return kind(requirement=requirement, label="", source=source, target=target, **rest)


def value(objective, state):
    return objective.measure(state).values[:, 0]


def given(omega, c, S=None, u=None) -> GivenState:
    quantities = {Eigenvalues(): np.square(omega), ReleasedAmplitudes("a.x"): c}
    if S is not None:
        quantities[OwnerForm("b")] = S
    if u is not None:
        quantities[FrozenDisplacement("b.x")] = u
    return GivenState(quantities)


@pytest.mark.parametrize("coupling", [1e-5, 0.02, 0.4])
@pytest.mark.parametrize("detuning", [0.0, 1e-3, 1.0])
def test_two_bodies_hand_over_in_half_a_beat(detuning, coupling):
    """Completeness 1/(1 + ((ω_a² − ω_b²)/2K_ab)²), half the beat period (closed form, verified)."""
    structure, z = two(detuning * coupling, coupling)
    state = structure.at(z)
    beat = BeatPeriod(requirement=T, label="", between=(1, 2)).measure(state).values[:, 0]
    # λ, and with it the splitting, is known to rounding over its share of the frequency.
    assert_allclose(value(wish(TransferTime), state), beat / 2, rtol=1e-10)
    assert_allclose(value(wish(TransferCompleteness), state), 1 / (1 + (detuning / 2) ** 2), rtol=1e-9)


@pytest.mark.parametrize("N", range(1, 8))
def test_chains_with_integer_spectrum_hand_a_pulse_over_whole(N):
    """ω = 0, 1, …, N: perfect at t = π (R. Vaia 2020, arXiv 2008.01685; masses and rates derived and verified)."""
    masses = [comb(N, k) ** 2 / comb(2 * N, 2 * k) for k in range(N + 1)]
    rates = [
        sqrt(masses[k] * masses[k + 1]) * sqrt((2 * k + 1) * (2 * k + 2) * (2 * N - 2 * k) * (2 * N - 2 * k - 1)) / 4
        for k in range(N)
    ]
    state, last = chain(masses, rates).at([]), f"m{N}"
    # The share is level at its top: half the digits of the frequencies are left in the time of longer chains.
    assert_allclose(value(wish(TransferTime, "m0.x", last), state), np.pi, rtol=1e-12 * 4**N)
    assert_allclose(value(wish(TransferCompleteness, "m0.x", last), state), 1.0, rtol=1e-12)
    assert_allclose(value(wish(HandedAmplitude, "m0.x", f"{last}.x"), state), 1.0, rtol=1e-12)
    assert_allclose(longest_beat(Exchange.of(state, "m0.x", last)).period, 2 * np.pi, rtol=1e-11)


@pytest.mark.parametrize(
    ("N", "mass", "rate", "amplitude", "when"),
    [(10, 2.17757, 0.676402, 0.99626874, 12.6452), (20, 2.666, 0.573832, 0.99356605, 23.782)],
)
def test_chains_with_adapted_ends(N, mass, rate, amplitude, when):
    """Only end masses and end springs differ (model of R. Vaia 2018, arXiv 1804.07489; values by computation)."""
    state = chain([mass, *[1.0] * (N - 2), mass], [rate, *[1.0] * (N - 3), rate]).at([])
    measured = value(wish(HandedAmplitude, "m0.x", f"m{N - 1}.x", horizon=1.5 * when), state)
    # The maximum over mass and rate is flat: their printed digits cost less than the digits of the amplitude.
    assert_allclose(measured, amplitude, atol=1e-6)


def test_a_detuned_pair_hands_over_part_of_its_amplitude():
    """The amplitude ratio r of each mode obeys r − 1/|r| = d/k_c (exact); the envelope peaks at 2r/(1 + r²)."""
    coupling, detuning = 1e-3, 7e-4
    structure, z = two(detuning, coupling)
    r = np.roots([1.0, -detuning / coupling, -1.0]).max()
    measured = value(wish(HandedAmplitude, target="b.x"), structure.at(z))
    # The carrier peaks within a cycle of the envelope: (π splitting/frequency)²/2 is lost at most.
    assert_allclose(measured, 2 * r / (1 + r**2), rtol=5e-6)


def test_shares_sum_to_one_also_where_owners_couple_coordinates():
    state = hung().at(0.2 * np.random.default_rng(3).standard_normal(6))
    t = np.linspace(0, 50, 300)[None]
    shares = np.array([Exchange.of(state, "b.x", owner).share(t)[0] for owner in "abc"])
    assert_allclose(shares.sum(axis=0), 1.0, rtol=1e-12)
    assert shares.min() > -1e-12


def test_the_share_of_the_released_body_starts_at_one():
    state = row().at(row_point())
    assert_allclose(Exchange.of(state, "a.x", "a").share(np.zeros((1, 1)))[0], 1.0, rtol=1e-13)


def test_shares_are_the_same_in_any_units():
    """One component in millimetres: its displacement, its column of the mass matrix and ``q_0`` scale together."""
    state = row().at(row_point())
    scale = np.diag([1.0, 1e3, 1.0, 1.0])
    by_hand = np.linalg.inv(scale) @ state.matrix(0, True) @ np.linalg.inv(scale)
    phi = scale @ state.phi[0]
    assert_allclose(phi.T @ by_hand @ phi, np.eye(4), atol=1e-12)
    c = np.linalg.solve(phi, np.eye(4)[1])
    own = np.linalg.inv(scale) @ state.matrix(0, True, "c") @ np.linalg.inv(scale)
    other = GivenState({Eigenvalues(): state.lam[0], ReleasedAmplitudes("b.x"): c, OwnerForm("c"): phi.T @ own @ phi})
    t = np.linspace(0, 30, 50)[None]
    assert_allclose(Exchange.of(other, "b.x", "c").share(t)[0], Exchange.of(state, "b.x", "c").share(t)[0], atol=1e-13)


@pytest.mark.parametrize("seed", range(12))
def test_the_first_great_maximum_is_found(seed):
    """Against a scan of the same share, sampled 40 times as densely."""
    n = 3 + seed % 3
    state, last = row(n).at(row_point(n, 0.2 + 0.3 * (seed % 4), seed)), "abcdefgh"[n - 1]
    found = maxima(state, "a.x", last)
    horizon = longest_beat(Exchange.of(state, "a.x", last)).period[0]
    assert found.horizon[0] == horizon
    exchange = Exchange.of(state, "a.x", last)
    t = np.linspace(0, horizon, int(40 * PER_CYCLE * horizon * exchange.fastest()[0] / (2 * np.pi)))
    s = exchange.share(t[None])[0][0]
    peak = np.flatnonzero((s[1:-1] > s[:-2]) & (s[1:-1] >= s[2:])) + 1
    step = t[1]
    assert_allclose(found.greatest, s.max(), rtol=1e-4)
    assert found.at_end[0] == (not (s[peak] >= 0.9 * found.greatest[0]).any())
    if not found.at_end[0]:
        first = peak[s[peak] >= 0.9 * found.greatest[0]][0]
        assert_allclose(found.time, t[first], atol=step)
    times, shares = found.of(0)
    high = peak[s[peak] >= 0.8001 * found.greatest[0]]
    assert all(np.abs(times - instant).min() <= step for instant in t[high])
    assert (shares >= 0.8 * found.greatest[0]).all()
    # Found to rounding: the slope vanishes as far as the bend lets it.
    slope = exchange.share(times[None])[1][0]
    assert np.abs(slope / exchange.bend(times[None])[0]).max(initial=0.0) <= 1e-12 * horizon


@pytest.mark.parametrize("seed", range(8))
def test_the_greatest_amplitude_is_found(seed):
    """Against a scan of the same motion, sampled densely enough to lose 1e-6."""
    state = row(4).at(row_point(4, 0.02 * 3 ** (seed % 4), seed))
    exchange, u = Exchange.of(state, "a.x"), state[FrozenDisplacement("c.x")][0]
    horizon = longest_beat(exchange).period[0]
    t = np.linspace(0, horizon, int(2500 * horizon * exchange.omega.max() / (2 * np.pi)))
    scan = max(
        np.abs(np.cos(np.outer(piece, exchange.omega[0])) @ (exchange.c[0] * u)).max()
        for piece in np.array_split(t, 50)
    )
    measured = value(wish(HandedAmplitude, target="c.x"), state)[0]
    assert scan <= measured * (1 + 1e-12)
    assert_allclose(measured, scan, rtol=2e-6)


def test_a_very_slow_beat_needs_no_sample_for_each_cycle():
    """A beat of five million cycles: the envelope rules out all but those near its top."""
    structure, z = two(0.0, 2e-7)
    assert_allclose(value(wish(HandedAmplitude, target="b.x"), structure.at(z)), 1.0, rtol=1e-8)


def test_a_horizon_of_too_many_cycles_is_searched_as_far_as_it_goes():
    """Two frequencies 1e-8 apart beside a third: the default horizon would be 1e8 cycles."""
    S = np.array([[1.0, -1.0, 0.0], [-1.0, 1.0, 0.0], [0.0, 0.0, 0.0]])
    state = given([1.0, 2.0, 2.0 + 2e-8], np.sqrt([0.5, 0.4, 0.1]), S)
    found = maxima(state, "a.x", "b")
    assert_allclose(found.horizon, 2 * np.pi * MOST / PER_CYCLE, rtol=1e-6)
    assert_allclose(found.time, np.pi, rtol=1e-6)


def three_tones(weight: float) -> GivenState:
    """A share with maxima of unlike height: the first is lower than the greatest."""
    return given([0.0, 1.0, 1.9], [1.0, 1.0, weight], 2 * np.eye(3) - 1)


def test_lower_maxima_before_the_first_are_passed_over():
    found = maxima(three_tones(0.35), "a.x", "b", 60.0)
    times, shares = found.of(0)
    before = times < found.time[0]
    assert (shares[before] < 0.9 * found.greatest).all()
    assert found.share[0] >= 0.9 * found.greatest[0]
    assert (shares >= 0.8 * found.greatest).all()


def test_a_design_near_a_switch_is_flagged():
    """While the weight of one tone grows, the time jumps; it never does so unannounced."""
    S = np.outer([-1.0, 1.0, -1.0], [-1.0, 1.0, -1.0])
    states = [given([0.0, 1.0, 2.9], [1.0, 1.0, weight], S) for weight in np.linspace(0.05, 1.2, 400)]
    found = [maxima(state, "a.x", "b", 60.0) for state in states]
    times = np.array([f.time[0] for f in found])
    near = np.array([f.near_switch[0] for f in found])
    jumps = np.flatnonzero(np.abs(np.diff(times)) > 0.5)
    assert len(jumps)
    assert (near[jumps] & near[jumps + 1]).all()
    assert not near.all()


def test_an_end_counts_only_if_nothing_inside_does():
    structure, z = two()
    beat = BeatPeriod(requirement=T, label="", between=(1, 2)).measure(structure.at(z)).values[0, 0]
    found = maxima(structure.at(z), "a.x", "b", beat / 4)
    assert found.at_end.all()
    assert_allclose([found.time[0], found.share[0]], [beat / 4, 0.5], rtol=1e-9)
    found = maxima(structure.at(z), "a.x", "b", 0.51 * beat)
    assert not found.at_end.any()
    assert_allclose(found.time, beat / 2, rtol=1e-9)


def test_completeness_asked_for_passes_over_lower_maxima():
    plain = maxima(three_tones(0.35), "a.x", "b", 60.0)
    times, shares = plain.of(0)
    wanted = (plain.share[0] + plain.greatest[0]) / 2
    assert plain.share[0] < wanted
    found = maxima(three_tones(0.35), "a.x", "b", 60.0, wanted)
    assert_allclose(found.time, times[shares >= wanted][0])
    none = maxima(three_tones(0.35), "a.x", "b", 60.0, 1.01 * plain.greatest[0])
    assert np.isnan(none.time).all()
    # A share that is asked for and exactly reached is reached.
    exact = maxima(three_tones(0.35), "a.x", "b", 60.0, plain.greatest[0] * (1 + 1e-12))
    assert_allclose(exact.share, plain.greatest)


def test_a_share_without_exchange_has_no_time_and_is_nothing():
    state = given([1.0, 2.0], [1.0, 1.0], np.zeros((2, 2)))
    assert np.isnan(value(wish(TransferTime, horizon=10.0), state)).all()
    assert_allclose(value(wish(TransferCompleteness, horizon=10.0), state), 0.0, atol=1e-15)


@pytest.mark.parametrize(
    ("omega", "c", "period"),
    [
        ([1.0, 2.0], [1.0, 1e-3 * 0.99], np.nan),
        ([1.0, 2.0], [1.0, 1e-3 * 1.01], 2 * np.pi),
        ([1.0, 1.0 + 1e-10], [1.0, 1.0], np.nan),
        ([0.0, 0.0, 2.0], [1.0, 1.0, 1.0], np.pi),
        ([1.0, 1.5, 3.0], [1.0, 1e-4, 1.0], np.pi),
        # Three modes of one frequency, each below the threshold, together above it.
        ([1.0, 3.0, 3.0, 3.0], [1.0, 8e-4, 8e-4, 8e-4], np.pi),
    ],
)
def test_the_longest_beat_counts_excited_frequencies(omega, c, period):
    beat = longest_beat(Exchange.of(given(omega, c, np.eye(len(c))), "a.x", "b"))
    assert_allclose(beat.period, period, rtol=1e-14)


def test_transfer_does_not_depend_on_the_basis_of_a_repeated_frequency():
    """A ring of three turned within its double frequency: the same motion, whatever the solver returned."""
    state = ring().at(np.zeros(6))
    objectives = [
        wish(kind, target=to, horizon=7.0)
        for kind, to in ((TransferTime, "b"), (TransferCompleteness, "b"), (HandedAmplitude, "b.x"))
    ]
    before = [value(o, state) for o in objectives]
    turn = np.array([[1, 0, 0], [0, np.cos(0.7), -np.sin(0.7)], [0, np.sin(0.7), np.cos(0.7)]])
    state.phi = state.phi @ turn
    assert_allclose([value(o, state) for o in objectives], before, rtol=1e-10)


def test_builds_of_a_batch_are_what_they_are_alone():
    rng = np.random.default_rng(5)
    z = row_point() + 0.3 * rng.standard_normal((7, 11))
    together = row().at(*z)
    together.lam[3] = np.nan  # no stable rest
    for objective in (
        wish(TransferTime, target="d"),
        wish(TransferCompleteness, target="d"),
        wish(HandedAmplitude, target="d.x"),
    ):
        measured = objective.measure(together)
        alone = np.array([value(objective, row().at(point))[0] for point in z])
        alone[3] = np.nan
        assert_allclose(measured.values[:, 0], alone, rtol=1e-9)


def test_the_time_is_pursued_as_a_great_maximum_at_that_time():
    structure, z = two()
    state = structure.at(z)
    half = value(wish(TransferTime), state)[0]
    at_it = wish(TransferTime, requirement=Target(half, 0.01 * half)).pursue(state)
    assert_allclose(at_it.equal.values, 0.0, atol=1e-6)
    assert_allclose(at_it.positive.values, 0.1, atol=1e-6)
    edge = wish(TransferTime, requirement=Target(half / 1.01, 0.01 * half / 1.01)).pursue(state)
    assert_allclose(np.abs(edge.equal.values), 1.0, rtol=0.03)
    # A minimum has the same slope; that the share must be great tells it apart.
    empty = wish(TransferTime, requirement=Target(2 * half, 1.0)).pursue(state)
    assert_allclose(empty.equal.values, 0.0, atol=1e-6)
    assert (empty.positive.values < -0.8).all()
    asked = wish(TransferTime, requirement=Target(half, 1.0), completeness=0.95).pursue(state)
    assert_allclose(asked.positive.values, [[0.1, 0.05]], atol=1e-6)


def test_completeness_at_least_is_pursued_on_the_share():
    structure, z = two(0.03)
    objective = wish(TransferCompleteness, requirement=AtLeast(0.9))
    state = structure.at(z)
    assert_allclose(objective.pursue(state).positive.values, (objective.measure(state).values - 0.9) / 0.9)
