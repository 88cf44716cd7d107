"""Inverse eigenvalue problems of the literature, quadratic convergence, and refusals."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy.linalg import eigh

from inverse.design.inverse_newton import solve_inverse_eigenvalues
from inverse.errors import DesignError


def with_constant(constant, *others):
    return np.array([constant, *others], dtype=float)


def units(n):
    return [np.diag(row) for row in np.eye(n)]


def spring_chain(n):
    """K_0 = 0, and the patterns of the n springs of a chain held at one end."""
    rows = np.eye(n) - np.eye(n, k=-1)
    return with_constant(np.zeros((n, n)), *(np.outer(row, row) for row in rows))


def test_additive_problem():
    """S. Friedland, J. Nocedal and M. L. Overton, SIAM J. Numer. Anal. 24, 1987, example 1.

    Value from memory, confirmed by computation. Newton's method takes six steps from c = targets.
    """
    A0 = [
        [0, 4, -1, 1, 1, 5, -1, 1],
        [4, 0, -1, 2, 1, 4, -1, 2],
        [-1, -1, 0, 3, 1, 3, -1, 3],
        [1, 2, 3, 0, 1, 2, -1, 4],
        [1, 1, 1, 1, 0, 1, -1, 5],
        [5, 4, 3, 2, 1, 0, -1, 6],
        [-1, -1, -1, -1, -1, -1, 0, 7],
        [1, 2, 3, 4, 5, 6, 7, 0],
    ]
    targets = np.arange(1, 9) * 10.0

    found = solve_inverse_eigenvalues(with_constant(A0, *units(8)), targets, targets)

    assert found.converged
    assert found.steps <= 6
    # Printed to ten decimals.
    assert_allclose(
        found.unknowns,
        [
            11.9078761025,
            19.7055215081,
            30.5454981870,
            40.0626574884,
            51.5871402907,
            64.7021314322,
            70.1706758209,
            71.3184991702,
        ],
        atol=1e-10,
    )


def lower_rows(B):
    """Row and column k of the lower triangle, for each k; they sum to B."""
    low = np.tril(B)
    return [
        np.outer(e, row) + np.outer(row, e) - np.diag(np.diag(B) * e)
        for e, row in zip(np.eye(len(B)), low, strict=True)
    ]


def triple_eigenvalue():
    """The same paper, example 2; at c = 1 the lowest eigenvalue is 1, three times."""
    V = np.array(
        [
            [1, -1, -3, -5, -6],
            [1, 1, -2, -5, -17],
            [1, -1, -1, 5, 18],
            [1, 1, 1, 2, 0],
            [1, -1, 2, 0, 1],
            [1, 1, 3, 0, -1],
            [2.5, 0.2, 0.3, 0.5, 0.6],
            [2, -0.2, 0.3, 0.5, 0.8],
        ]
    )
    return with_constant(np.zeros((8, 8)), *lower_rows(np.eye(8) + V @ V.T))


def test_triple_eigenvalue():
    """Five smallest asked for, three of them equal, eight unknowns. Value from memory, confirmed by computation."""
    targets = [1, 1, 1, 2.1207536089, 9.2188681786]
    found = solve_inverse_eigenvalues(triple_eigenvalue(), targets, [0.99] * 4 + [1.01] * 4)

    assert found.converged
    assert found.steps <= 6
    # The targets are given to ten decimals; the equations' condition of 270 acts on the last of them.
    assert_allclose(found.unknowns, 1.0, atol=1e-8)


def test_convergence_is_quadratic_where_eigenvalues_repeat():
    """``e_(k+1) ≤ C e_k²`` with one C while the error falls from a tenth to 1e-9; twice the C of 11 seen."""
    family = triple_eigenvalue()
    targets = np.linalg.eigvalsh(family.sum(axis=0))[:5]
    start = [0.98] * 4 + [1.02] * 4

    error = [
        np.abs(solve_inverse_eigenvalues(family, targets, start, max_steps=k).unknowns - 1).max() for k in range(1, 6)
    ]

    assert error[0] < 0.2
    assert error[-1] < 1e-8
    assert np.all(np.divide(error[1:], np.square(error[:-1])) < 22)


def test_generalised_pair():
    """Both matrices vary. J. H. Wilkinson and C. Reinsch, Linear Algebra, 1971: the pair and its eigenvalues; split
    into a family as H. Dai and P. Lancaster did (Numer. Linear Algebra Appl. 4, 1997), solution all ones.

    Values and split from memory, confirmed by computation.
    """
    A = np.array([[10, 2, 3, 1, 1], [2, 12, 1, 2, 1], [3, 1, 11, 1, -1], [1, 2, 1, 9, 1], [1, 1, -1, 1, 15]])
    B = np.array([[12, 1, -1, 2, 1], [1, 14, 1, -1, 1], [-1, 1, 16, -1, 1], [2, -1, -1, 12, -1], [1, 1, 1, -1, 11]])

    def by_diagonals(C):
        bands = [np.diag(np.diag(C, k), k) + np.diag(np.diag(C, k), -k) for k in range(1, 5)]
        return with_constant(np.diag(np.diag(C) - 1), np.eye(5), *bands)

    targets = [0.432787211017, 0.663662748393, 0.943859004679, 1.10928454002, 1.49235323254]
    found = solve_inverse_eigenvalues(by_diagonals(A), targets, [1.1, 1.2, 1.3, 1.4, 1.5], mass=by_diagonals(B))

    assert found.converged
    assert found.steps <= 6
    # Twelve digits given, a condition of 13.
    assert_allclose(found.unknowns, 1.0, atol=1e-9)
    assert_allclose(found.achieved, targets, atol=1e-14)


def test_ring_with_its_double_root():
    """Ring of three equal masses and springs: λ = 0, 3, 3 (exact). The double root alone fixes all three rates."""
    rows = np.eye(3) - np.roll(np.eye(3), 1, axis=1)
    ring = with_constant(np.zeros((3, 3)), *(np.outer(row, row) for row in rows))

    found = solve_inverse_eigenvalues(ring, [3, 3], [1.2, 0.9, 0.7], places=[1, 2])

    assert found.converged
    assert_allclose(found.unknowns, 1.0, rtol=1e-12)


@pytest.mark.parametrize("n", [2, 6, 25])
def test_masses_of_the_uniform_chain(n):
    """K fixed, masses unknown; the sines of the uniform chain (Rayleigh, Theory of Sound, § 120), all masses one."""
    K = spring_chain(n).sum(axis=0)
    stiffness = with_constant(K, *np.zeros((n, n, n)))
    wanted = 4 * np.sin((2 * np.arange(1, n + 1) - 1) * np.pi / (2 * (2 * n + 1))) ** 2
    start = 1 + 0.01 * np.cos(np.arange(n))  # not mirror-symmetric, and near: masses enter ill-conditioned

    found = solve_inverse_eigenvalues(stiffness, wanted, start, mass=with_constant(np.zeros((n, n)), *units(n)))

    assert found.converged
    # Absolute in the greatest eigenvalue, and judged against a general solver.
    K, M = stiffness[0], np.diag(found.unknowns)
    assert_allclose(eigh(K, M, eigvals_only=True), wanted, atol=1e-11)


def test_repeated_eigenvalues_that_are_not_asked_for_do_no_harm():
    """Two masses among four that hang on equal springs: the double root 5 is left out and left alone."""
    family = with_constant(
        np.diag([0.0, 0.0, 5.0, 5.0]), np.diag([1.0, 0, 0, 0]), [[1, -1, 0, 0], [-1, 1, 0, 0], [0] * 4, [0] * 4]
    )
    found = solve_inverse_eigenvalues(family, [0.5, 3.0], [0.8, 1.5])
    # λ_1 λ_2 = c_1 c_2 and λ_1 + λ_2 = c_1 + 2 c_2.
    assert found.converged
    assert_allclose([found.unknowns.prod(), found.unknowns @ [1, 2]], [1.5, 3.5], rtol=1e-12)


parts = st.lists(st.tuples(st.floats(0.7, 1.4), st.floats(-0.01, 0.01)), min_size=2, max_size=6)


@given(parts)
def test_a_design_near_by_is_found_from_its_own_spectrum(drawn):
    family = spring_chain(len(drawn))
    hidden = np.array([c for c, _ in drawn])
    targets = np.linalg.eigvalsh(np.tensordot(hidden, family[1:], 1))

    found = solve_inverse_eigenvalues(family, targets, hidden * [1 + d for _, d in drawn], max_steps=12)

    assert found.converged
    # What convergence means, whichever of the designs with this spectrum it is.
    assert_allclose(np.linalg.eigvalsh(np.tensordot(found.unknowns, family[1:], 1)), targets, atol=1e-10)


@given(st.floats(1e-6, 1e6), st.floats(1e-6, 1e6))
def test_units_do_not_matter(stiffness_unit, mass_unit):
    """All rates and all masses in other units: the unknowns scale, the steps stay."""
    family, targets, start = spring_chain(3), np.array([0.2, 1.5, 3.2]), np.ones(3)
    plain = solve_inverse_eigenvalues(family, targets, start)
    scaled = solve_inverse_eigenvalues(
        family, targets * stiffness_unit / mass_unit, start * stiffness_unit, mass=mass_unit * np.eye(3)
    )
    assert plain.converged
    assert scaled.steps == plain.steps
    assert_allclose(scaled.unknowns, plain.unknowns * stiffness_unit, rtol=1e-10)


def test_not_reaching_is_a_result_that_raises_on_request():
    """Two equal eigenvalues of a 2 by 2 chain would need a spring of rate zero and one of none: no real solution."""
    family = spring_chain(2)
    # λ_1 λ_2 = c_1 c_2 and λ_1 + λ_2 = c_1 + 2 c_2 have real solutions only if (λ_1 + λ_2)² ≥ 8 λ_1 λ_2.
    found = solve_inverse_eigenvalues(family, [1.0, 1.1], [1.0, 0.5])
    assert not found.converged
    assert np.abs(found.achieved - found.targets).max() > 1e-3
    with pytest.raises(DesignError, match=found.message.split(":")[0]):
        found.require_success()


def test_unknowns_that_do_the_same_are_named():
    family = with_constant(np.zeros((2, 2)), np.eye(2), 2 * np.eye(2))
    found = solve_inverse_eigenvalues(family, [1.0, 2.0], [1.0, 1.0])
    assert not found.converged
    assert found.steps == 0
    assert "do not act separately" in found.message


def test_a_mass_that_turns_negative_is_named():
    mass = with_constant(np.diag([1.0, 0.0]), np.diag([0.0, 1.0]))
    stiffness = with_constant([[2.0, -1.0], [-1.0, 1.0]], np.zeros((2, 2)))
    found = solve_inverse_eigenvalues(stiffness, [50.0], [1.0], mass=mass, places=[1])
    assert not found.converged
    assert "not positive definite" in found.message


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ({"targets": [1.0, 1.0]}, "2 unknowns and 3 equations from 2 targets, 1 asked for 2 times counting as 3"),
        ({"targets": [1.0]}, "2 unknowns and 1 equations"),
        ({"targets": [1.0, 2.0, 3.0]}, "`targets`: expected at most 2"),
        ({"targets": []}, "`targets`"),
        ({"start": [1.0]}, "`start`: expected 2"),
        ({"places": [0, 2]}, "`places`: expected 2 different places from 0 to 1"),
        ({"stiffness": np.eye(2)}, "`stiffness`: expected the matrices"),
        ({"stiffness": np.ones((3, 2, 2)) + np.eye(2, k=1)}, "`stiffness`: matrix 0 is not finite and symmetric"),
        ({"mass": np.eye(3)}, "`mass`: expected the shape"),
        ({"mass": -np.eye(2)}, "not positive definite at `start`"),
    ],
)
def test_malformed_data_is_refused_where_it_stands(arguments, words):
    given_ = {"stiffness": spring_chain(2), "targets": [1.0, 2.0], "start": [1.0, 1.0]} | arguments
    with pytest.raises(ValueError, match=words):
        solve_inverse_eigenvalues(**given_)
