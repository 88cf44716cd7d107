"""What objectives measure, against closed forms and published values."""

import numpy as np
import pytest
import scipy.linalg as sl
from assemblies import built, chain, pair
from numpy.testing import assert_allclose

from inverse.assembly.assembly import Assembly
from inverse.assembly.bodies import Mass, Pendulum, Platform
from inverse.assembly.links import Spring
from inverse.evaluation.evaluator import Evaluator
from inverse.evaluation.state import BuildState
from inverse.matrices.equilibrium import at_rest
from inverse.matrices.stack import Matrices
from objectives import (
    AtLeast,
    AtMost,
    BeatPeriod,
    EnergyShare,
    Frequency,
    HandedAmplitude,
    KeepOut,
    Like,
    Minimise,
    NodalPoint,
    Shape,
    Splitting,
    Target,
    TransferCompleteness,
    TransferTime,
    bands_from_orders,
)
from objectives.base import met
from objectives.identity import assurance, identify
from objectives.keep_out import merged
from objectives.transfer import Exchange

T = Target(1.0, 0.1)


def measure(assembly: Assembly, *objectives) -> np.ndarray:
    return Evaluator(assembly.compile(), objectives).at(np.zeros((1, 0))).values()[0]


def detuned(difference: float, coupling: float = 0.02) -> Assembly:
    """Two unit masses on springs 1 and 1 + difference, tied by a weak spring."""
    return Assembly(
        bodies=(Mass(name="a", mass=1.0), Mass(name="b", mass=1.0)),
        links=(
            Spring(name="ka", between=("a", "ground"), rate=1.0),
            Spring(name="kb", between=("b", "ground"), rate=1.0 + difference),
            Spring(name="tie", between=("a", "b"), rate=coupling),
        ),
    )


@pytest.mark.parametrize("difference", [1e-6, 0.01, 0.05])
def test_two_coupled_bodies_hand_over_in_half_the_beat(difference):
    """Completeness 1/(1 + ((ω_a² − ω_b²)/2K_ab)²), time half the beat period (closed form, verified)."""
    beat, time, completeness = measure(
        detuned(difference),
        BeatPeriod(requirement=T, label="", between=(1, 2)),
        TransferTime(requirement=T, label="", source="a.x", target="b"),
        TransferCompleteness(requirement=T, label="", source="a.x", target="b"),
    )
    assert_allclose(time, beat / 2, rtol=1e-10)
    assert_allclose(completeness, 1 / (1 + (difference / (2 * 0.02)) ** 2), rtol=1e-10)


@pytest.mark.parametrize("difference", [0.0, 0.03])
def test_greatest_amplitude_of_a_detuned_pair(difference):
    """Amplitude ratio r of each mode obeys r − 1/|r| = d/k_c (exact); its envelope peaks at 2r/(1 + r²)."""
    coupling = 0.02
    r = np.roots([1.0, -difference / coupling, -1.0]).max()
    (value,) = measure(
        detuned(difference, coupling),
        HandedAmplitude(requirement=T, label="", source="a.x", target="b.x"),
    )
    # The carrier need not peak just where the envelope does: one part in (splitting/frequency)² here.
    assert_allclose(value, 2 * r / (1 + r**2), rtol=2e-3)
    assert value <= 2 * r / (1 + r**2) * (1 + 1e-12)


@pytest.mark.parametrize(
    ("masses", "rates"),
    [
        ([1.0, 2 / 3, 1.0], [1.0, 1.0]),
        ([1.0, 0.6, 0.6, 1.0], [1.5, 1.8, 1.5]),
        ([1.0, 4 / 7, 18 / 35, 4 / 7, 1.0], [2.0, 18 / 7, 18 / 7, 2.0]),
    ],
)
def test_chains_with_integer_spectrum_hand_a_pulse_over_whole(masses, rates):
    """ω = 0, 1, …, N: perfect transfer at t = π (R. Vaia 2020, arXiv 2008.01685; formula derived and verified)."""
    last = f"m{len(masses) - 1}"
    free = chain(masses, rates, first_held=False)
    amplitude, share = measure(
        free,
        HandedAmplitude(requirement=T, label="", source="m0.x", target=f"{last}.x", horizon=np.pi),
        TransferCompleteness(requirement=T, label="", source="m0.x", target=last, time=np.pi),
    )
    assert_allclose([amplitude, share], 1.0, rtol=1e-12)


def test_two_pendulums_of_the_trade():
    """Two 1 m pendulums tied for a beat of 20 s (common practice, no source)."""
    beat, split = measure(
        pair(),
        BeatPeriod(requirement=T, label="", between=(1, 2)),
        Splitting(requirement=T, label="", between=(1, 2)),
    )
    assert_allclose([beat, 1 / split], 20.0, rtol=1e-7)


def series() -> Assembly:
    return Assembly(
        bodies=(
            Pendulum(name="top", mass=2.0, length=1.0, rod_mass=0.4),
            Pendulum(name="low", mass=0.5, length=0.7, rod_mass=0.1, hung_from="top"),
        )
    )


def test_energy_shares_sum_to_one_for_pendulums_in_series():
    matrices = built(series().compile())
    state = BuildState(matrices)
    t = np.linspace(0, 30, 400)[None]
    shares = [Exchange.of(state, "top.x", owner).share(t)[0] for owner in ("top", "low")]
    assert_allclose(np.sum(shares, axis=0), 1.0, rtol=1e-12)
    assert min(s.min() for s in shares) > -1e-12
    assert_allclose(Exchange.of(state, "top.x", "low").energy, matrices.mass.matrix()[:, 0, 0], rtol=1e-12)


def test_time_derivatives_of_a_share():
    exchange = Exchange.of(BuildState(built(series().compile())), "top.x", "low")
    h, t = 1e-5, np.array([[0.3, 2.2]])
    plus, minus, here = exchange.share(t + h), exchange.share(t - h), exchange.share(t)
    assert_allclose((plus[0] - minus[0]) / (2 * h), here[1], rtol=1e-8)
    assert_allclose((plus[1] - minus[1]) / (2 * h), exchange.bend(t), rtol=1e-8)


def test_a_release_that_excites_one_mode_transfers_nothing():
    assembly = Assembly(
        bodies=(Mass(name="a", mass=1.0), Mass(name="b", mass=1.0)),
        links=(
            Spring(name="k", between=("a", "ground"), rate=1.0),
            Spring(name="l", between=("b", "ground"), rate=2.0),
        ),
    )
    values = measure(
        assembly,
        TransferTime(requirement=T, label="", source="a.x", target="b"),
        TransferCompleteness(requirement=T, label="", source="a.x", target="b"),
    )
    assert np.isnan(values).all()


def test_transfer_needs_the_completeness_it_asks_for():
    common = {"requirement": T, "label": "", "source": "a.x", "target": "b"}
    reached, missed = measure(
        detuned(0.03), TransferTime(**common, completeness=0.6), TransferTime(**common, completeness=0.7)
    )
    assert reached > 0
    assert np.isnan(missed)


def test_keep_out_measures_from_the_nearest_edge():
    f = np.sqrt([1.0, 3.0]) / (2 * np.pi)
    assembly = chain([1.0, 1.0], [1.0] * 3, last_held=True)
    inside = KeepOut(requirement=AtLeast(0.0), label="", bands=((f[0] - 0.01, f[0] + 0.03),))
    outside = KeepOut(requirement=AtLeast(0.0), label="", bands=((f[0] + 0.02, f[1] - 0.05),))
    assert_allclose(measure(assembly, inside, outside), [-0.01, 0.02], rtol=1e-10)


def test_bands_of_orders_are_merged():
    """Order times speed (common practice, no source)."""
    assert merged(bands_from_orders([1, 2, 2.5], 20.0, 26.0)) == ((20.0, 26.0), (40.0, 65.0))


def test_assurance_is_the_same_in_metres_and_millimetres():
    """Unweighted assurance would pick another mode in other units."""
    values = []
    for unit in (1.0, 1e3):
        # Rotation in radians beside a displacement in metres, then in millimetres: lengths times 1000.
        body = Platform(name="p", mass=5.0 / unit**0, inertia=(0.3 * unit**2,))
        springs = tuple(
            Spring(name=f"s{x}", between=("p", "ground"), at=x * unit, rate=k) for x, k in ((0.3, 50.0), (-0.2, 90.0))
        )
        state = BuildState(built(Assembly(bodies=(body,), links=springs, gravity=0.0).compile()))
        values.append(assurance(Like((("p.z", 0.1 * unit), ("p.ry", 1.0))), state))
    assert_allclose(values[0], values[1], rtol=1e-9)


def test_two_shapes_get_two_modes_even_if_both_prefer_one():
    state = BuildState(built(pair().compile()))
    likes = [Like((("east.x", 1.0), ("west.x", 0.9))), Like((("east.x", 0.9), ("west.x", 1.0)))]
    found = identify(likes, state)
    assert {int(found.index[like][0]) for like in likes} == {0, 1}


def test_shapes_of_one_frequency_turn_towards_the_shape_asked_for():
    """A ring of three: within λ = 3 twice, any shape orthogonal to the rigid one is a mode."""
    ring = Assembly(
        bodies=tuple(Mass(name=n, mass=1.0) for n in "abc"),
        links=tuple(Spring(name=n + m, between=(n, m), rate=1.0) for n, m in ("ab", "bc", "ca")),
    )
    like = Like((("a.x", 1.0), ("b.x", -1.0), ("c.x", 0.0)))
    values = measure(
        ring,
        Shape(requirement=T, label="", mode=like, like=like),
        Frequency(requirement=T, label="", mode=like),
        NodalPoint(requirement=T, label="", mode=like, own=("c.x",), bodies={n: (f"{n}.x",) for n in "abc"}),
        EnergyShare(requirement=T, label="", mode=like, owner="a"),
    )
    assert_allclose(values, [1.0, np.sqrt(3) / (2 * np.pi), 0.0, 0.5], atol=1e-12)


def test_met_has_a_relative_slack_on_the_edge():
    edge = np.array([1.1, 1.1 * (1 + 5e-10), 1.1 * (1 + 3e-9)])
    assert met(AtMost(1.1), edge).tolist() == [True, True, False]
    assert met(Target(1.0, 0.1), edge).tolist() == [True, True, False]
    assert met(Minimise(), edge) is None
    assert met(AtLeast(1.0), np.array([np.nan])).tolist() == [False]


def test_a_mode_beyond_the_last_has_no_value():
    assert np.isnan(measure(pair(), Frequency(requirement=T, label="", mode=3))).all()


def test_batches_give_what_single_builds_give():
    model = detuned(0.03).compile()
    objectives = (
        TransferTime(requirement=T, label="", source="a.x", target="b"),
        BeatPeriod(requirement=T, label="", between=(1, 2)),
        KeepOut(requirement=AtLeast(0.0), label="", bands=((0.1, 0.12),)),
    )
    evaluator = Evaluator(model, objectives)
    d = np.tile(model.parameters.nominal.values(model.parameters.variable_point(np.zeros((1, 0)))), (5, 1))
    d *= 1 + 0.01 * np.random.default_rng(0).standard_normal(d.shape)
    together = evaluator.of_dimensions(d, np.zeros((5, 0)))
    single = [evaluator.of_dimensions(row[None], np.zeros((1, 0))).values()[0] for row in d]
    assert_allclose(together.values(), single, rtol=1e-12)
    assert np.isfinite(at_rest(model, d).values).all()
    assert Matrices(model, at_rest(model, d)).point.builds == 5


@pytest.mark.parametrize("coupling", [0.0, 0.3])
def test_labels_of_a_matrix_have_their_share_of_the_energy(coupling):
    """Shares of all labels sum to one; with a diagonal mass they are m u² of each (common practice, no source)."""
    from inverse.assembly.matrix_model import MatrixModel

    M = np.array([[2.0, coupling], [coupling, 3.0]])
    K = np.array([[50.0, -10.0], [-10.0, 70.0]])
    model = MatrixModel(name="pair", labels=("u", "v"), mass=M, stiffness=K)
    shares = measure(
        Assembly(matrices=(model,)),
        EnergyShare(requirement=T, label="", mode=1, owner="u"),
        EnergyShare(requirement=T, label="", mode=1, owner="v"),
        TransferCompleteness(requirement=T, label="", source="u.x", target="v"),
    )
    assert_allclose(shares[0] + shares[1], 1.0, rtol=1e-12)
    assert 0 < shares[2] <= 1
    if not coupling:
        _, shapes = sl.eigh(K, M)
        assert_allclose(shares[0], 2.0 * shapes[0, 0] ** 2, rtol=1e-12)


def test_geared_rotors_weigh_with_their_own_inertia():
    """Mass-weighted assurance of rotors a, c and e, two of them geared to one shaft, against plain arithmetic."""
    from inverse.assembly.bodies import Rotor
    from inverse.assembly.links import Gear, Shaft

    inertia = {"a": 0.6, "b": 0.03, "c": 0.3, "d": 1.9, "e": 0.1}
    train = Assembly(
        bodies=tuple(Rotor(name=name, inertia=J) for name, J in inertia.items()),
        links=(
            Shaft(name="s1", between=("a", "b"), rate=28e3),
            Gear(name="g1", between=("b", "c"), ratio=-0.4),
            Shaft(name="s2", between=("c", "d"), rate=5729.6),
            Gear(name="g2", between=("e", "c"), ratio=2.5),
        ),
    )
    like = Like((("a.r", 1.0), ("e.r", -1.0), ("c.r", 0.0)))
    (value,) = measure(train, Shape(requirement=T, label="", mode=2, like=like))

    M = np.diag([0.6, 0.03 + 0.4**2 * 0.3 + 0.16**2 * 0.1, 1.9])
    twist = np.array([[1.0, -1.0, 0.0], [0.0, -0.4, -1.0]])
    _, shapes = sl.eigh(twist.T @ np.diag([28e3, 5729.6]) @ twist, M)
    u = np.array([shapes[0, 2], -0.16 * shapes[1, 2], -0.4 * shapes[1, 2]])
    W, a = np.diag([0.6, 0.1, 0.3]), np.array([1.0, -1.0, 0.0])
    assert_allclose(value, (a @ W @ u) ** 2 / ((a @ W @ a) * (u @ W @ u)), rtol=1e-9)
