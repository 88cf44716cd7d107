"""Variance shares against functions whose Sobol' indices are known in closed form."""

import numpy as np
from numpy.testing import assert_allclose

from inverse.tolerance.contributions import sobol_indices


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
