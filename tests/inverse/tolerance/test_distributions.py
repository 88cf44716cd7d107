"""Unit errors against scipy.stats, and what tables of errors do to builds."""

import numpy as np
import pytest
from scipy import stats

from inverse.tolerance.distributions import Cube, Errors, Limit, Tolerance, draw_builds, quantiles

NOMINAL = np.array([2.0, 3.0, 0.0, -4.0])


@pytest.mark.parametrize(
    ("name", "reference"),
    [
        ("normal", stats.truncnorm(-3, 3, scale=1 / 3)),
        ("uniform", stats.uniform(-1, 2)),
        ("triangular", stats.triang(0.5, -1, 2)),
    ],
)
def test_quantiles(name, reference):
    p = np.concatenate([[0.0, 1.0, 0.5], np.linspace(1e-9, 1 - 1e-9, 1001)])
    # The reference's own truncated quantile is good to 1e-10 near the ends.
    np.testing.assert_allclose(quantiles(name, p), reference.ppf(p), atol=1e-9)
    assert np.abs(quantiles(name, p)).max() <= 1 + 1e-12


def draw(*tables: Tolerance, builds: int = 2**14) -> np.ndarray:
    """Deviations from nominal, (B, 4)."""
    errors = Errors.of(tables, len(NOMINAL))
    (points,) = Cube(errors.units, 1).chunks(builds, builds)
    return draw_builds(errors, NOMINAL, points) - NOMINAL


def test_each_part_has_its_own_error_and_a_batch_one_in_common():
    d = draw(Tolerance(dimensions=(0, 1), each=Limit(0.01), batch=Limit(0.02, relative=True)))
    # Standard deviation of a normal truncated at three sigma: 0.98658 sigma (closed form).
    sigma = 0.98658 / 3
    np.testing.assert_allclose(d[:, 0].std(), sigma * np.hypot(0.01, 0.04), rtol=0.01)
    np.testing.assert_allclose(d[:, 1].std(), sigma * np.hypot(0.01, 0.06), rtol=0.01)
    # What is left when the common share, a part of each one's own nominal value, is taken out.
    np.testing.assert_allclose((d[:, 0] / 2 - d[:, 1] / 3).std(), sigma * np.hypot(0.01 / 2, 0.01 / 3), rtol=0.01)
    assert (d[:, 2:] == 0).all()


def test_limits_are_kept_and_reached():
    table = Tolerance(dimensions=(0, 3), each=Limit(0.01), batch=Limit(0.1, relative=True), distribution="uniform")
    errors = Errors.of((table,), 4)
    np.testing.assert_allclose(errors.limits(NOMINAL), [0.21, 0, 0, 0.41])
    d = draw(table)
    assert (np.abs(d) <= errors.limits(NOMINAL) + 1e-15).all()
    assert np.abs(d[:, 0]).max() > 0.2


def test_an_absolute_error_common_to_many_is_a_batch():
    d = draw(Tolerance(dimensions=(0, 1, 2), batch=Limit(1e-3)))
    np.testing.assert_allclose(d[:, 0], d[:, 1], atol=1e-15)
    np.testing.assert_allclose(d[:, 0], d[:, 2], atol=1e-15)


def test_matched_parts_agree_within_their_remainder_and_keep_their_limit():
    d = draw(Tolerance(dimensions=(0, 1), each=Limit(0.01), matched=Limit(0.001), distribution="uniform"))
    assert np.abs(d[:, 0] - d[:, 1]).max() <= 0.002
    assert np.abs(d[:, 0]).max() <= 0.01
    assert np.abs(d[:, 0]).max() > 0.0095
    with pytest.raises(ValueError, match="matched"):
        draw(Tolerance(dimensions=(0,), each=Limit(0.01), matched=Limit(0.02)))


def test_errors_of_pieces_in_parallel_average_out():
    d = draw(Tolerance(dimensions=(0, 1), each=Limit(0.03), pieces=(1, 9)))
    np.testing.assert_allclose(d[:, 0].std() / d[:, 1].std(), 3.0, rtol=0.02)


def test_points_are_the_same_for_the_same_seed_however_they_are_cut():
    whole = np.concatenate(list(Cube(5, 7).chunks(1000, 1024)))
    cut = np.concatenate(list(Cube(5, 7).chunks(1000, 128)))
    np.testing.assert_array_equal(whole, cut)
    assert not np.array_equal(whole, next(Cube(5, 8).chunks(1000, 1024)))


def test_without_errors_every_build_is_the_nominal_one():
    assert (draw(builds=8) == 0).all()


def test_columns_of_builds_are_contiguous():
    errors = Errors.of((Tolerance(dimensions=(0,), each=Limit(0.1)),), 4)
    assert draw_builds(errors, NOMINAL, np.full((8, 1), 0.5)).T.flags.c_contiguous
