"""Chains from their spectra, against closed forms and against inertia counted with fifty digits."""

import math
from fractions import Fraction

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from scipy.linalg import expm

from inverse.design.reconstruction import (
    Chain,
    SpectrumError,
    chain_from_two_spectra,
    mirror_chain,
    relay_chain,
    relay_from_orders,
)


def near_held(chain):
    return Chain(masses=chain.masses[1:], rates=chain.rates[1:])


def matrices(chain):
    """K and M, dense."""
    k = chain.rates
    return np.diag(k[:-1] + k[1:]) - np.diag(k[1:-1], 1) - np.diag(k[1:-1], -1), np.diag(chain.masses)


def count_below(chain, shift):
    """Eigenvalues below a shift: negative pivots of K − σM (Sylvester), in fifty digits."""
    with mpmath.workdps(50):
        k = [mpmath.mpf(x) for x in chain.rates.tolist()]
        m = [mpmath.mpf(x) for x in chain.masses.tolist()]
        count, pivot = 0, mpmath.inf
        for i, m_i in enumerate(m):
            pivot = k[i] + k[i + 1] - shift * m_i - k[i] ** 2 / pivot
            count += pivot < 0
        return count


def assert_spectrum(chain, wanted, rtol):
    """Exactly one eigenvalue within `rtol` of each one wanted, the zero of a free chain left out."""
    with mpmath.workdps(50):
        for j, lam in enumerate(sorted(wanted)):
            if lam > 0:
                bounds = [mpmath.mpf(lam) * (1 + sign * mpmath.mpf(rtol)) for sign in (-1, 1)]
                assert [count_below(chain, bound) for bound in bounds] == [j, j + 1]


def equally_spaced(n, rng):
    return np.arange(n) * 2.0, np.arange(n - 1) * 2.0 + 1.0


def random_interlacing(n, rng):
    lam = np.concatenate([[0.0], np.cumsum(rng.uniform(0.5, 2.0, n - 1))])
    return lam, lam[:-1] + rng.uniform(0.01, 0.99, n - 1) * np.diff(lam)


def wildly_spaced(n, rng):
    """Gaps over six orders of magnitude, and the held spectrum as close to the free one."""
    lam = np.concatenate([[0.0], np.cumsum(10 ** rng.uniform(-6, 0, n - 1))])
    return lam, lam[:-1] + 10 ** rng.uniform(-6, -1e-3, n - 1) * np.diff(lam)


@pytest.mark.parametrize("spectra", [equally_spaced, random_interlacing, wildly_spaced])
def test_two_spectra_of_200_bodies_are_recovered(spectra):
    """Goal 1e-10; 2e-15 reached, the margin is for other mathematical libraries."""
    lam, mu = spectra(200, np.random.default_rng(5))

    chain = chain_from_two_spectra(lam, mu, total_mass=40.0)

    assert_spectrum(chain, lam, 1e-13)
    assert_spectrum(near_held(chain), mu, 1e-13)
    assert_allclose(chain.masses.sum(), 40.0, rtol=1e-13)


@pytest.mark.parametrize("first", [0, 1])
def test_mirror_chain_of_200_bodies_is_recovered(first):
    """Squares of whole numbers, from 0 (free) and from 1 (tied at both ends). Tolerance as above; 6e-15 reached."""
    lam = np.arange(first, first + 200) ** 2.0

    chain = mirror_chain(lam, total_mass=1.0)

    assert_spectrum(chain, lam, 1e-13)
    assert_array_equal(chain.masses, chain.masses[::-1])
    assert_array_equal(chain.rates, chain.rates[::-1])
    assert (chain.rates[0] > 0) == first


@pytest.mark.parametrize("n", [2, 3, 5, 8, 50, 200])
def test_relay_has_vaias_masses_and_springs(n):
    """``m_k = C(N,k)²/C(2N,2k)``, ``K_k = √(m_k m_(k+1)) √((2k+1)(2k+2)(2N−2k)(2N−2k−1))/4``, ω = 0 … N.

    R. Vaia, arXiv 2008.01685, 2020; A. Scherer, L. Vinet and A. Zhedanov, arXiv 2108.09386, 2021 (derived, confirmed
    by computation; the printed formula was not seen).
    """
    N = n - 1
    m = np.array([float(Fraction(math.comb(N, k) ** 2, math.comb(2 * N, 2 * k))) for k in range(n)])
    k = np.arange(N)
    K = np.sqrt(m[:-1] * m[1:] * (2 * k + 1) * (2 * k + 2) * (2 * N - 2 * k) * (2 * N - 2 * k - 1)) / 4

    chain = relay_chain(n, math.pi, m.sum())

    # Rounding gathers with n: 5e-15 at 200.
    assert_allclose(chain.masses, m, rtol=1e-13)
    assert_allclose(chain.rates, [0.0, *K, 0.0], rtol=1e-13)


@pytest.mark.parametrize(
    ("n", "m", "k"),
    [
        (3, [1, 4, 3], [2, 6]),
        (4, [1, 6, 15, 10], [3, 15, 30]),
        (5, [1, 8, 28, 56, 35], [4, 28, 84, 140]),
        (6, [1, 10, 45, 120, 210, 126], [5, 45, 180, 420, 630]),
    ],
)
def test_binomial_chain(n, m, k):
    """Spectra 0, 2, …, 2n − 2 and, with the last mass held, 1, 3, …, 2n − 3: whole-number parts.

    G. M. L. Gladwell, T. H. Jones and N. B. Willms, "A test matrix for an inverse eigenvalue problem", J. Appl.
    Math. 2014, 515082 (spectra from the abstract; the parts derived exactly).
    """
    chain = chain_from_two_spectra(np.arange(n) * 2, np.arange(n - 1) * 2 + 1, total_mass=sum(m))
    assert_allclose(chain.masses[::-1], m, rtol=1e-13)
    assert_allclose(chain.rates[::-1], [0, *k, 0], rtol=1e-13)


@pytest.mark.parametrize("n", [50, 200])
def test_binomial_chain_over_many_orders_of_magnitude(n):
    """The same with ``m_i = C(2n−2, i)``, the last half of that, ``k_i = (i/2) C(2n−2, i)``: 118 orders at n = 200."""
    m = [Fraction(math.comb(2 * n - 2, i), 1 + (i == n - 1)) for i in range(n)]
    k = [Fraction(i * math.comb(2 * n - 2, i), 2) for i in range(1, n)]
    total = sum(m)

    chain = chain_from_two_spectra(np.arange(n) * 2, np.arange(n - 1) * 2 + 1, total_mass=1.0)

    # Each part, the smallest too, to its own rounding: 1.6e-13 at 200, which gathers along the chain.
    assert_allclose(chain.masses[::-1], [float(x / total) for x in m], rtol=1e-11)
    assert_allclose(chain.rates[::-1], [0.0, *(float(x / total) for x in k), 0.0], rtol=1e-11)


def sines(n, numerators, denominator):
    return 4 * np.sin(np.pi * np.asarray(numerators) / denominator) ** 2


def free_free(n):
    return sines(n, np.arange(n), 2 * n)


def fixed_free(n):
    return sines(n, 2 * np.arange(1, n + 1) - 1, 2 * (2 * n + 1))


def fixed_fixed(n):
    return sines(n, np.arange(1, n + 1), 2 * (n + 1))


@pytest.mark.parametrize("n", [2, 3, 12, 60])
@pytest.mark.parametrize(
    ("ground", "whole", "held"),
    [
        ((0, 0), free_free, fixed_free),
        ((0, 1), fixed_free, fixed_fixed),
        ((1, 0), fixed_free, fixed_free),
        ((1, 1), fixed_fixed, fixed_fixed),
    ],
)
def test_uniform_chains_from_their_sines(ground, whole, held, n):
    """Spectra of uniform chains in closed form (any text on vibration, e.g. Rayleigh, Theory of Sound, § 120)."""
    chain = chain_from_two_spectra(whole(n), held(n - 1), ground=ground, total_mass=n)
    # Neighbours at the ends of the spectrum stand (π/n)² apart: what rounding moves there moves all parts.
    assert_allclose(chain.masses, 1.0, rtol=1e-10)
    assert_allclose(chain.rates, [ground[0], *np.ones(n - 1), ground[1]], rtol=1e-10)


@pytest.mark.parametrize("n", [1, 2, 3, 12, 60])
@pytest.mark.parametrize("whole", [free_free, fixed_fixed])
def test_uniform_mirror_chains_from_their_sines(whole, n):
    """The same from one spectrum."""
    chain = mirror_chain(whole(n), total_mass=n)
    end = float(whole is fixed_fixed)
    assert_allclose(chain.masses, 1.0, rtol=1e-10)
    assert_allclose(chain.rates, [end, *np.ones(n - 1), end], rtol=1e-10)


def test_ground_springs_come_out_in_the_ratio_asked_for():
    lam, mu = [1.0, 4.0, 9.0, 12.0], [2.0, 5.0, 10.0]
    for near, far in [(3.0, 1.0), (0.01, 5.0), (1.0, 1e-6)]:
        chain = chain_from_two_spectra(lam, mu, ground=(near, far), total_mass=7.0)
        assert_allclose(chain.rates[0] / chain.rates[-1], near / far, rtol=1e-13)
        assert_spectrum(chain, lam, 1e-13)
        assert_spectrum(near_held(chain), mu, 1e-13)


@pytest.mark.parametrize(
    ("orders", "arrives"),
    [(range(2), 1), (range(6), 1), ([0, 3, 4, 7, 8], 1), (range(1, 6), -1), ([2, 5, 6, 9], 1), (range(30), 1)],
)
def test_relay_hands_the_pulse_over_whole(orders, arrives):
    """The motion by the matrix exponential of the first-order system, no modes involved."""
    time, n = 4.0, len(orders)
    chain = relay_from_orders(orders, time, 3.0)
    K, M = matrices(chain)
    generator = np.block([[np.zeros((n, n)), np.eye(n)], [-np.linalg.solve(M, K), np.zeros((n, n))]])
    propagator = expm(time * generator)

    wanted = arrives * np.kron(np.eye(2), np.eye(n)[::-1])
    if min(orders) == 0:  # nothing holds a free chain: a kick also sets the whole in steady motion
        wanted[:n, n:] += time * chain.masses / chain.masses.sum()
    size = np.repeat([1.0, max(orders) * np.pi / time], n)  # displacements and velocities, each in their own
    # Every body's displacement and velocity arrive at its mirror twin and nothing stays behind; the rounding of the
    # exponential, which squares some ten times.
    assert_allclose(propagator * size / size[:, None], wanted * size / size[:, None], rtol=0, atol=1e-11)


def test_eigenvalues_of_parts_far_apart_are_right_to_the_last_digits():
    """Each checked by counting in fifty digits; assembled matrices lose the lowest ones altogether."""
    rng = np.random.default_rng(11)
    chain = Chain(masses=10 ** rng.uniform(-6, 6, 12), rates=10 ** rng.uniform(-6, 6, 13))
    assert_spectrum(chain, chain.eigenvalues(), 1e-13)


gaps = st.lists(
    st.tuples(st.floats(1e-3, 10.0), st.floats(0.001, 0.999)), min_size=1, max_size=12
)  # to the next eigenvalue, and where between the two the held one lies
grounds = st.tuples(st.just(0.0) | st.floats(0.01, 100.0), st.floats(0.01, 100.0)) | st.just((1.0, 0.0))


@given(gaps, st.floats(1e-3, 10.0), grounds, st.floats(0.01, 100.0))
def test_reconstructing_then_solving_returns_both_spectra(steps, lowest, ground, total_mass):
    lam = np.cumsum([lowest, *(gap for gap, _ in steps)])
    mu = lam[:-1] + [place for _, place in steps] * np.diff(lam)

    chain = chain_from_two_spectra(lam, mu, ground=ground, total_mass=total_mass)

    assert np.all(chain.masses > 0)
    assert np.all(chain.rates[1:-1] > 0)
    assert_allclose(chain.masses.sum(), total_mass, rtol=1e-13)
    assert_allclose(chain.rates[0] * ground[1], chain.rates[-1] * ground[0], rtol=1e-12)
    # Relative to each eigenvalue; the worst of thousands is 3e-15.
    assert_allclose(chain.eigenvalues(), lam, rtol=1e-13)
    assert_allclose(near_held(chain).eigenvalues(), mu, rtol=1e-13)


@given(st.lists(st.floats(1e-3, 10.0), min_size=1, max_size=12), st.booleans())
def test_mirror_chain_returns_its_spectrum(gaps, free):
    lam = np.cumsum([0.0 if free else 1.0, *gaps])
    chain = mirror_chain(lam, total_mass=1.0)
    assert np.all(chain.masses > 0)
    # A zero found by bisection is exact or the square of something tiny.
    assert_allclose(chain.eigenvalues(), lam, rtol=1e-13, atol=1e-200)


part = st.floats(0.5, 2.0)


@given(st.lists(st.tuples(part, part), min_size=1, max_size=5), part, st.sampled_from([(0, 0), (0, 1), (1, 0), (1, 1)]))
def test_solving_then_reconstructing_returns_the_parts(parts, last, ends):
    masses, rates = np.array([m for m, _ in parts]), np.array([*(k for _, k in parts), last])
    rates[[0, -1]] *= ends
    built = Chain(masses=masses, rates=rates)
    lam = built.eigenvalues()
    if not any(ends):
        lam[0] = 0.0  # bisection leaves the square of something tiny

    mu = near_held(built).eigenvalues() if len(parts) > 1 else np.array([])

    chain = chain_from_two_spectra(lam, mu, ground=tuple(rates[[0, -1]]), total_mass=masses.sum())

    # The eigenvalues are rounded, and only their distances matter.
    closest = np.diff(np.sort([*lam, *mu])).min(initial=lam[-1] or 1.0)
    rtol = 100 * np.finfo(float).eps * max(1.0, lam[-1] / closest)
    assert_allclose(chain.masses, masses, rtol=rtol)
    assert_allclose(chain.rates, rates, rtol=rtol)


def test_order_of_the_lists_does_not_matter_and_scaling_keeps_the_spectrum():
    chain = chain_from_two_spectra([9, 0, 4], [6, 1], total_mass=1.0)
    assert_array_equal(chain.masses, chain_from_two_spectra([0, 4, 9], [1, 6], total_mass=1.0).masses)
    scaled = chain.scaled(2.5 / chain.masses[0])
    assert_allclose(scaled.masses[0], 2.5, rtol=1e-15)
    assert_allclose(scaled.eigenvalues(), chain.eigenvalues(), rtol=1e-14)


@pytest.mark.parametrize(
    ("lam", "mu", "pair"),
    [
        ([0, 2, 4], [1, 5], ("μ_2", "λ_3")),
        ([1, 2, 4], [0.5, 3], ("λ_1", "μ_1")),
        ([0, 2, 4], [1, 2], ("λ_2", "μ_2")),
        ([0, 2, 2], [1, 2], ("λ_2", "μ_2")),
    ],
)
def test_broken_interlacing_is_refused_by_its_pair(lam, mu, pair):
    with pytest.raises(SpectrumError, match=f"{pair[0]} = .* is not less than {pair[1]} = ") as caught:
        chain_from_two_spectra(lam, mu, total_mass=1.0)
    assert caught.value.pair == pair


def test_repeated_eigenvalues_are_refused_by_their_pair():
    with pytest.raises(SpectrumError, match=r"λ_2 = λ_3 = 4\.0") as caught:
        mirror_chain([9, 4, 4, 0], total_mass=1.0)
    assert caught.value.pair == ("λ_2", "λ_3")


def test_ground_has_to_agree_with_the_lowest_eigenvalue():
    with pytest.raises(SpectrumError, match=r"lowest eigenvalue is 1\.0"):
        chain_from_two_spectra([1, 3], [2], total_mass=1.0)
    with pytest.raises(SpectrumError, match=r"lowest eigenvalue is 0\.0"):
        chain_from_two_spectra([0, 3], [2], ground=(0, 1), total_mass=1.0)


@pytest.mark.parametrize("n", [600, 1500])
def test_parts_beyond_the_range_of_numbers_are_refused(n):
    """The binomial chain of 600 bodies would spread over 360 orders of magnitude."""
    with pytest.raises(SpectrumError, match="orders of magnitude"):
        chain_from_two_spectra(np.arange(n) * 2, np.arange(n - 1) * 2 + 1, total_mass=1.0)


def test_orders_of_equal_parity_are_refused():
    with pytest.raises(SpectrumError, match="orders 2 and 3 are 1 and 3"):
        relay_from_orders([0, 1, 3], 1.0, 1.0)


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: chain_from_two_spectra([0, 1, 2], [0.5], total_mass=1.0), "`held`: expected 2 eigenvalues"),
        (lambda: chain_from_two_spectra([0, 1], [0.5], total_mass=0.0), "`total_mass`"),
        (lambda: chain_from_two_spectra([1, 2], [1.5], ground=(-1, 1), total_mass=1.0), "`ground`"),
        (lambda: mirror_chain([-1.0, 2], total_mass=1.0), r"`spectrum`: .* found -1\.0"),
        (lambda: mirror_chain([], total_mass=1.0), "`spectrum`: expected a list"),
        (lambda: mirror_chain([0, math.nan], total_mass=1.0), "`spectrum`: .* found nan"),
        (lambda: relay_from_orders([0.0, 1.0], 1.0, 1.0), "`orders`: expected a list of whole numbers"),
        (lambda: relay_from_orders([-1, 0], 1.0, 1.0), "`orders`: expected .* none negative"),
        (lambda: relay_chain(3, -1.0, 1.0), "`transfer_time`"),
    ],
)
def test_malformed_data_is_refused_where_it_stands(call, words):
    with pytest.raises(ValueError, match=words):
        call()
