"""Counts of eigenvalues below a limit, against dense eigenvalues (scipy.linalg.eigh) and closed forms."""

import numpy as np
import pytest
import scipy.linalg as sl
from assemblies import chain, every_part, nominal

from inverse.assembly.assembly import Assembly, Model
from inverse.assembly.bodies import Mass
from inverse.assembly.links import Spring
from inverse.assembly.terms import Point
from inverse.matrices.equilibrium import at_rest
from inverse.matrices.stack import Matrices
from inverse.modal.inertia import Elimination, Pencil, count_below, count_pivots

BUILDS = 100


def lattice(rows: int, columns: int) -> Assembly:
    """Masses on a grid, each tied to its neighbours and the first row to the ground."""
    ties = [((i, j), (i + 1, j)) for i in range(rows - 1) for j in range(columns)]
    ties += [((i, j), (i, j + 1)) for i in range(rows) for j in range(columns - 1)]
    named = [(f"m{a}-{b}", f"m{c}-{d}") for (a, b), (c, d) in ties]
    named += [(f"m0-{j}", "ground") for j in range(columns)]
    return Assembly(
        bodies=tuple(Mass(name=f"m{i}-{j}", mass=1.0 + 0.1 * i) for i in range(rows) for j in range(columns)),
        links=tuple(Spring(name=f"k{t}", between=pair, rate=100.0 + t) for t, pair in enumerate(named)),
    )


ASSEMBLIES = {
    **every_part(),
    "chain of nine": chain([1.0, 2.0, 1.5] * 3, [100.0, 50.0, 75.0] * 3),
    "lattice": lattice(4, 5),
}


def varied(model: Model, share: float = 0.02, builds: int = BUILDS, seed: int = 3) -> Point:
    """Builds whose base dimensions all vary by a share of their own."""
    rng = np.random.default_rng(seed)
    return at_rest(model, nominal(model) * (1 + share * rng.uniform(-1, 1, (builds, len(model.parameters.dimensions)))))


def eigenvalues(model: Model, point: Point) -> np.ndarray:
    """One build after the other; NaN for a build that has no rest position."""
    matrices = Matrices(model, point)
    pairs = zip(matrices.stiffness.matrix(), matrices.mass.matrix(), strict=True)
    return np.array(
        [sl.eigh(K, M, eigvals_only=True) if np.isfinite(K).all() else np.full(len(K), np.nan) for K, M in pairs]
    )


@pytest.mark.parametrize("name", ASSEMBLIES)
def test_counts_are_those_of_dense_eigenvalues(name):
    model = ASSEMBLIES[name].compile()
    point = varied(model)
    values = eigenvalues(model, point)
    sound = np.isfinite(values).all(axis=1)
    middle = np.median(values[sound], axis=0)
    # Within the spread of a mode (off the median itself, which is some build's own), between modes, beyond all.
    limits = np.concatenate([middle * (1 + 1e-7), (middle[1:] + middle[:-1]) / 2, [2 * middle[-1]]])
    limits = limits[limits > 1e-9 * middle[-1]]
    counted = count_below(Pencil.of(model), point, limits.tolist())
    expected = (values[None] < limits[:, None, None]).sum(axis=2)
    np.testing.assert_array_equal(counted[:, sound], expected[:, sound])
    assert (counted[:, ~sound] == -1).all()


def test_count_turns_over_at_the_exact_frequencies_of_a_uniform_chain():
    """λ_j = 4(k/m) sin²(jπ/(2(n+1))), fixed at both ends (exact)."""
    n = 12
    exact = 4 * np.sin(np.arange(1, n + 1) * np.pi / (2 * (n + 1))) ** 2
    model = chain([1.0] * n, [1.0] * (n + 1), last_held=True).compile()
    point = Point(np.asfortranarray(nominal(model)), model.positive)
    # 1e-11 is far above the rounding of entries of size 2 and far below what a window resolves.
    limits = [float(v) for v in np.concatenate([exact * (1 - 1e-11), exact * (1 + 1e-11)])]
    below, certain = count_pivots(Pencil.of(model), point, limits)
    assert certain.all()
    np.testing.assert_array_equal(below[:, 0], [*range(n), *range(1, n + 1)])


@pytest.mark.parametrize("closed", [False, True])
def test_a_pivot_that_vanishes_exactly(closed):
    """Diagonals equal to the limit: K = [[2, −1], [−1, 2]] has λ = 1, 3; a ring of three held ones 1, 4, 4 (exact)."""
    if closed:
        ties = [("m0", "m1"), ("m1", "m2"), ("m2", "m0"), ("m0", "ground"), ("m1", "ground"), ("m2", "ground")]
        bodies, limit = 3, 3.0
    else:
        ties = [("m0", "m1"), ("m0", "ground"), ("m1", "ground")]
        bodies, limit = 2, 2.0
    model = Assembly(
        bodies=tuple(Mass(name=f"m{i}", mass=1.0) for i in range(bodies)),
        links=tuple(Spring(name=f"k{t}", between=pair, rate=1.0) for t, pair in enumerate(ties)),
    ).compile()
    point = Point(np.asfortranarray(np.repeat(nominal(model), 3, axis=0)), model.positive)
    pencil = Pencil.of(model)
    assert (count_below(pencil, point, [limit]) == 1).all()
    # Without circles the infinite pivot that follows is right; with them the build must be handed back.
    assert count_pivots(pencil, point, [limit])[1].all() != closed


def test_rates_of_twelve_decades_are_handed_back_and_still_counted():
    model = chain([1.0, 1.0, 1.0], [1.0, 1e12, 1e6]).compile()
    point = varied(model)
    limit = float(np.median(Matrices(model, point).stiffness.weights[:, 0])) / 3
    pencil = Pencil.of(model)
    assert not count_pivots(pencil, point, [limit])[1].any()
    # The soft spring carries all three masses: λ₁ = k₁/(m₁ + m₂ + m₃) but for shares of 1e-6.
    masses = Matrices(model, point).mass.weights.sum(axis=1)
    lowest = Matrices(model, point).stiffness.weights[:, 0] / masses
    clear = np.abs(lowest / limit - 1) > 1e-5
    np.testing.assert_array_equal(count_below(pencil, point, [limit])[0, clear], (lowest < limit)[clear])


def test_trees_are_eliminated_without_fill_and_lattices_with():
    star = Elimination.of(6, [(0, i) for i in range(1, 6)])
    assert star.acyclic
    assert star.slots == 5
    ring = Elimination.of(5, [(i, (i + 1) % 5) for i in range(5)])
    assert not ring.acyclic
    assert ring.slots == 7  # a ring of n fills n − 3 entries
    forest = Elimination.of(4, [(0, 1), (2, 3)])
    assert forest.acyclic
    assert len(forest.roots) == 2


@pytest.mark.parametrize("backward", [False, True])
def test_factors_solve_the_system(backward):
    model = lattice(3, 4).compile()
    point = varied(model, builds=7)
    pencil = Pencil.of(model, backward=backward)
    chunk = pencil.load(point.values.T)
    A = pencil.full(chunk.stiffness)
    D, U = pencil.shifted(chunk, 1e-300)
    L = np.empty_like(U)
    pencil.elimination.factor(D, U, L)
    right = np.random.default_rng(0).standard_normal((model.size, 2, 7))
    solution = right.copy()
    pencil.elimination.solve(D, L, solution)
    # Condition about 1e3 times rounding, with a margin of a hundred.
    np.testing.assert_allclose(np.einsum("bij,jrb->irb", A, solution), right, atol=1e-11)


def test_a_build_without_rest_position_has_no_count():
    model = every_part()["pendulums moved by a preload, one on a cart"].compile()
    point = varied(model, builds=5)
    point.values[2, -1] = np.nan
    counted = count_below(Pencil.of(model), point, [1.0])
    assert counted[0, 2] == -1
    assert (np.delete(counted[0], 2) >= 0).all()
