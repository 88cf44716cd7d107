"""Chains from spectra: the error in the recovered spectrum, and the steps of the inverse eigenvalue Newton method."""

import math

import numpy as np
import pytest

from inverse.design.inverse_newton import solve_inverse_eigenvalues
from inverse.design.reconstruction import chain_from_two_spectra, mirror_chain, relay_chain


def spectra(kind, n):
    rng = np.random.default_rng(n)
    match kind:
        case "equally spaced":
            return np.arange(n) * 2.0, np.arange(n - 1) * 2.0 + 1.0
        case "random":
            lam = np.concatenate([[0.0], np.cumsum(rng.uniform(0.5, 2.0, n - 1))])
            return lam, lam[:-1] + rng.uniform(0.01, 0.99, n - 1) * np.diff(lam)
        case _:
            lam = np.concatenate([[0.0], np.cumsum(10 ** rng.uniform(-6, 0, n - 1))])
            return lam, lam[:-1] + 10 ** rng.uniform(-6, -1e-3, n - 1) * np.diff(lam)


def record(benchmark, chain, wanted):
    """The goal is 1e-10 at 200 bodies."""
    error = float(np.abs(chain.eigenvalues()[wanted > 0] / wanted[wanted > 0] - 1).max())
    benchmark.extra_info["relative error in the recovered spectrum"] = error
    benchmark.extra_info["greatest over smallest mass"] = float(chain.masses.max() / chain.masses.min())
    assert error < 1e-12


@pytest.mark.parametrize("n", [10, 50, 200, 500])
@pytest.mark.parametrize("kind", ["equally spaced", "random", "six orders of magnitude"])
def test_two_spectra(benchmark, kind, n):
    """Free chain from its spectrum and that with one end held."""
    lam, mu = spectra(kind, n)
    record(benchmark, benchmark(chain_from_two_spectra, lam, mu, total_mass=1.0), lam)


@pytest.mark.parametrize("n", [10, 50, 200, 1000])
def test_mirror(benchmark, n):
    """Chain tied at both ends with ω = 1, 2, …, n."""
    lam = np.arange(1.0, n + 1) ** 2
    record(benchmark, benchmark(mirror_chain, lam, total_mass=1.0), lam)


@pytest.mark.parametrize("n", [10, 50, 200, 1000])
def test_relay(benchmark, n):
    """Free chain with ω = 0, 1, …, n − 1."""
    record(benchmark, benchmark(relay_chain, n, math.pi, 1.0), np.arange(n) ** 2.0)


@pytest.mark.parametrize("n", [10, 50, 200])
def test_newton(benchmark, n):
    """Additive problem: seeded symmetric coupling, eigenvalues of a hidden diagonal of 10, 20, …, from c = targets."""
    coupling = np.random.default_rng(n).normal(size=(n, n)) * 3 / math.sqrt(n)
    family = np.concatenate([[coupling + coupling.T], [np.diag(row) for row in np.eye(n)]])
    targets = np.linalg.eigvalsh(family[0] + np.diag(np.arange(1.0, n + 1) * 10))

    found = benchmark(solve_inverse_eigenvalues, family, targets, targets)

    benchmark.extra_info["Newton steps"] = found.steps
    benchmark.extra_info["residuals"] = list(found.residuals)
    assert found.converged
    assert found.steps <= 8
