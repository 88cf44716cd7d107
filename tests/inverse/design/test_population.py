"""Zeros of bounded systems of equations by a population of starts."""

import numpy as np
import pytest
from benchmarks.problems import FAMILIES, make_problem
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from inverse.design.population import Budget, Stop, solve_population

TOLERANCE = 1e-10  # the default


def affine(matrix, constant):
    """Residuals ``A x - b``."""

    def residuals(points):
        return points @ matrix.T - constant, np.broadcast_to(matrix, (len(points), *matrix.shape)).copy()

    return residuals


def solve(residuals, lower, upper, *, seed=0, **settings):
    lower, upper = np.asarray(lower, dtype=float), np.asarray(upper, dtype=float)
    return solve_population(residuals, lower, upper, rng=np.random.default_rng(seed), **settings)


def counted(residuals):
    """The same residuals, and the list of the batches asked for."""
    batches = []

    def wrapped(points):
        batches.append(points.copy())
        return residuals(points)

    return wrapped, batches


@pytest.mark.parametrize("bodies", [3, 6, 10])
@pytest.mark.parametrize("family", FAMILIES)
def test_hidden_designs_are_recovered(family, bodies):
    """Any design with the asked frequencies counts: the hidden one need not be the only one."""
    for seed in range(12):
        problem = make_problem(family, bodies, seed)
        found = solve(problem.residuals, problem.lower, problem.upper)
        assert found.stopped_because is Stop.SOLVED, problem.description
        assert np.abs(problem.residuals(found.solutions)[0]).max() <= TOLERANCE
        # The most needed when written were 1909; the margin is for other LAPACK builds.
        assert found.evaluations < 20_000


@pytest.mark.parametrize("family", ["chain", "tree", "ring"])
def test_a_problem_that_needs_lineages_is_solved(family):
    problem = make_problem(family, 20, 1)
    found = solve(problem.residuals, problem.lower, problem.upper)
    assert found.stopped_because is Stop.SOLVED


def test_hidden_designs_satisfy_their_own_problem_and_jacobians_are_derivatives():
    """Central differences; the error of order h² is below 1e-8 at h = 1e-5."""
    for family in FAMILIES:
        problem = make_problem(family, 5, 0)
        values, jacobian = problem.residuals(problem.hidden[None])
        assert_array_equal(values, 0.0)
        shift = 1e-5 * np.eye(len(problem.hidden))
        ahead, behind = (problem.residuals(problem.hidden + s)[0] for s in (shift, -shift))
        assert_allclose(jacobian[0], (ahead - behind).T / 2e-5, atol=1e-8)


def test_an_easy_problem_costs_one_start():
    problem = make_problem("rotor train", 10, 0)
    residuals, batches = counted(problem.residuals)
    found = solve(residuals, problem.lower, problem.upper)
    assert found.stopped_because is Stop.SOLVED
    assert [len(batch) for batch in batches] == [1] * found.rounds
    assert found.evaluations == found.rounds <= 20


def test_the_result_repeats_for_a_seed_and_changes_with_it():
    problem = make_problem("chain", 10, 3)
    one, two, other = (solve(problem.residuals, problem.lower, problem.upper, seed=seed) for seed in (5, 5, 6))
    assert_array_equal(one.solutions, two.solutions)
    assert_array_equal(one.best, two.best)
    assert (one.evaluations, one.rounds) == (two.evaluations, two.rounds)
    assert not np.array_equal(one.best, other.best) or one.evaluations != other.evaluations


def test_every_point_asked_for_lies_inside_the_bounds():
    problem = make_problem("chain", 10, 0)
    lower, upper = problem.lower + 0.1, problem.upper - 0.1  # so that no solution is left inside, perhaps
    residuals, batches = counted(problem.residuals)
    found = solve(residuals, lower, upper, budget=Budget(evaluations=20_000))
    asked = np.concatenate(batches)
    assert (asked >= lower).all()
    assert (asked <= upper).all()
    assert found.evaluations == len(asked)
    assert found.rounds == len(batches)


@given(st.integers(0, 2**32 - 1), st.integers(1, 5), st.integers(0, 4))
def test_fewer_equations_than_variables_take_the_nearest_solution(seed, equations, spare):
    """For a linear system the damped steps stay in the row space, as the pseudo-inverse does."""
    rng = np.random.default_rng(seed)
    matrix = rng.normal(size=(equations, equations + spare))
    start = rng.uniform(-1, 1, equations + spare)
    constant = matrix @ (start + rng.uniform(-1, 1, len(start)))
    wide = np.full(len(start), 1e3)
    found = solve(affine(matrix, constant), -wide, wide, first=start[None], tolerance=1e-9)
    nearest = start + np.linalg.pinv(matrix) @ (constant - matrix @ start)
    # An error of 1e-9 in the residuals, times the inverse of the smallest singular value.
    smallest = np.linalg.svd(matrix, compute_uv=False)[-1]
    if smallest > 1e-3:
        assert_allclose(found.solutions[0], nearest, atol=1e-8 * np.sqrt(equations) / smallest)


def test_more_equations_than_variables_that_agree_are_solved():
    matrix = np.random.default_rng(1).normal(size=(7, 3))
    hidden = np.array([0.2, -0.4, 0.7])
    found = solve(affine(matrix, matrix @ hidden), -np.ones(3), np.ones(3))
    assert_allclose(found.solutions, hidden[None], atol=1e-9)


def test_equations_that_disagree_end_at_the_bounded_least_squares_point():
    """Reference: `scipy.optimize.lsq_linear`."""
    from scipy.optimize import lsq_linear

    rng = np.random.default_rng(2)
    matrix, constant = rng.normal(size=(6, 4)), 3.0 * rng.normal(size=6)
    found = solve(affine(matrix, constant), -np.ones(4), np.ones(4))
    assert found.stopped_because is Stop.EXHAUSTED
    assert found.solutions.shape == (0, 4)
    expected = lsq_linear(matrix, constant, (-1, 1), tol=1e-14).x
    assert np.isclose(np.abs(expected), 1.0).any()  # the bounds do bind
    # The search leaves when a step gains less than 1e-5 of the cost, which is square in the point.
    assert_allclose(found.best, expected, atol=1e-2)
    assert_allclose(found.residuals, matrix @ found.best - constant, atol=1e-12)
    assert_allclose(found.jacobian, matrix)


def test_a_target_out_of_reach_is_given_up_after_the_asked_number_of_starts():
    residuals = affine(np.array([[1.0, 0.0]]), np.array([5.0]))
    few = solve(residuals, [-1, -1], [1, 1], starts=24)
    more = solve(residuals, [-1, -1], [1, 1], starts=96)
    assert few.stopped_because is more.stopped_because is Stop.EXHAUSTED
    assert few.evaluations < 24 * 10
    assert few.evaluations < more.evaluations
    assert few.best[0] == 1.0


def test_a_hard_problem_without_a_solution_ends_when_generations_repeat_their_best():
    """An eigenvalue equation asked twice, for different values, cannot hold."""
    problem = make_problem("chain", 10, 0)

    def residuals(points):
        values, jacobian = problem.residuals(points)
        return np.append(values, values[:, :1] - 0.1, axis=1), np.append(jacobian, jacobian[:, :1], axis=1)

    found = solve(residuals, problem.lower, problem.upper)
    assert found.stopped_because is Stop.EXHAUSTED
    # If all other equations hold, the two that conflict share the 0.1 between them.
    assert np.sqrt((found.residuals**2).sum()) <= 0.1 / np.sqrt(2) + 1e-6


def test_the_budget_ends_the_search():
    problem = make_problem("chain", 20, 2)
    found = solve(problem.residuals, problem.lower, problem.upper, budget=Budget(evaluations=500))
    assert found.stopped_because is Stop.BUDGET
    # Passed by one batch, and by the steps with which the best point converges.
    assert 500 <= found.evaluations < 700


def test_fixed_variables_keep_their_value_exactly():
    matrix = np.array([[1.0, 1.0, 1.0], [1.0, -1.0, 0.0]])
    third = 0.1 + 0.2
    found = solve(affine(matrix, np.array([1.0, 0.2])), [-1, -1, third], [1, 1, third])
    assert found.solutions[0, 2] == third
    assert_allclose(found.solutions[0], [(1.2 - third) / 2, (0.8 - third) / 2, third], atol=1e-9)


def test_nothing_free_is_an_evaluation():
    fixed = np.array([0.5])
    met = solve(affine(np.eye(1), np.array([0.5])), fixed, fixed)
    missed = solve(affine(np.eye(1), np.array([0.7])), fixed, fixed)
    assert met.stopped_because is Stop.SOLVED
    assert missed.stopped_because is Stop.EXHAUSTED
    assert_array_equal(missed.best, fixed)


def parabola_outside(feasible):
    """Residual ``x² + y² - 1``, not a number where not feasible."""

    def residuals(points):
        values = (points**2).sum(axis=1, keepdims=True) - 1.0
        jacobian = 2.0 * points[:, None, :]
        outside = ~feasible(points)
        values[outside], jacobian[outside] = np.nan, np.nan
        return values, jacobian

    return residuals


def test_the_infeasible_is_stepped_around():
    """Only a sliver of the circle is feasible, and most starts are not."""
    found = solve(parabola_outside(lambda x: (x[:, 0] > 0.9) & (x[:, 1] < 0.9)), [-2, -2], [2, 2], wanted=3)
    assert found.stopped_because is Stop.SOLVED
    assert (found.solutions[:, 0] > 0.9).all()


def test_an_empty_feasible_set_is_a_result():
    found = solve(parabola_outside(lambda x: x[:, 0] > 3), [-2, -2], [2, 2])
    assert found.stopped_because is Stop.INFEASIBLE
    assert found.solutions.shape == (0, 2)
    assert np.isnan(found.best).all()
    assert np.isnan(found.residuals).all()


def test_distinct_solutions_are_told_apart_and_counted():
    """x² = 1/4, y² = 1/4: four points, and no fifth."""

    def residuals(points):
        jacobian = np.zeros((len(points), 2, 2))
        jacobian[:, [0, 1], [0, 1]] = 2.0 * points
        return points**2 - 0.25, jacobian

    found = solve(residuals, [-1, -1], [1, 1], wanted=5)
    assert found.stopped_because is Stop.EXHAUSTED
    assert_allclose(
        np.unique(np.round(found.solutions, 9), axis=0), [[-0.5, -0.5], [-0.5, 0.5], [0.5, -0.5], [0.5, 0.5]]
    )


def test_solutions_on_a_curve_keep_their_distance():
    found = solve(parabola_outside(lambda x: x[:, 0] < 9), [-2, -2], [2, 2], wanted=6, distinct=0.05)
    gaps = np.abs(found.solutions[:, None] - found.solutions).max(axis=2) + np.eye(6)
    assert found.solutions.shape == (6, 2)
    assert gaps.min() > 0.05 * 4


def test_satisfied_hinges_have_no_pull():
    """x = 0.3 with x + y >= 0.5."""

    def residuals(points):
        slack = points.sum(axis=1) - 0.5
        jacobian = np.zeros((len(points), 2, 2))
        jacobian[:, 0, 0] = 1.0
        jacobian[slack < 0, 1] = 1.0
        return np.stack([points[:, 0] - 0.3, np.minimum(0.0, slack)], axis=1), jacobian

    start = np.array([[-0.9, -0.9]])
    found = solve(residuals, [-1, -1], [1, 1], first=start)
    assert found.stopped_because is Stop.SOLVED
    assert found.solutions[0].sum() >= 0.5 - TOLERANCE


def test_given_starts_are_the_first_points_asked_for():
    residuals, batches = counted(affine(np.eye(2), np.zeros(2)))
    solve(residuals, [-1, -1], [1, 1], first=np.array([[0.5, 0.25], [3.0, 0.0]]))
    assert_allclose(batches[0], [[0.5, 0.25], [1.0, 0.0]], rtol=1e-15)


@pytest.mark.parametrize(
    ("lower", "upper", "said"),
    [
        ([0.0, 2.0], [1.0, 1.0], "found 2.0 and 1.0 for variable 1"),
        ([0.0], [np.inf], "found 0.0 and inf for variable 0"),
        ([np.nan], [1.0], "found nan and 1.0 for variable 0"),
        ([0.0], [1.0, 2.0], r"one shape \(p,\), found \(1,\) and \(2,\)"),
    ],
)
def test_impossible_bounds_are_refused(lower, upper, said):
    with pytest.raises(ValueError, match=said):
        solve(affine(np.eye(1), np.zeros(1)), lower, upper)
