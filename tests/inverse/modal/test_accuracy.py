"""Frequencies of badly scaled assemblies against arbitrary precision (mpmath)."""

import mpmath as mp
import numpy as np
import pytest
from assemblies import built, chain

from inverse.assembly.assembly import Assembly
from inverse.assembly.bodies import Mass, Pendulum, Platform
from inverse.assembly.links import Mount, Spring
from inverse.modal.solution import solve_modes


def exact_eigenvalues(model_matrices) -> list[float]:
    """Eigenvalues of the same squares, weights and rows taken as exact, in 60 digits."""
    with mp.workdps(60):
        K, M = (
            sum(
                (
                    mp.mpf(float(w)) * (row := mp.matrix(r.tolist())) * row.T
                    for w, r in zip(s.weights[0], s.rows[0], strict=True)
                ),
                mp.zeros(s.squares.size),
            )
            for s in (model_matrices.stiffness, model_matrices.mass)
        )
        L = mp.cholesky(M)
        inverse = L**-1
        return sorted(float(v) for v in mp.eigsy(inverse * K * inverse.T, eigvals_only=True))


def worst_error(assembly: Assembly) -> float:
    matrices = built(assembly.compile())
    modes = solve_modes(matrices)
    exact = np.array(exact_eigenvalues(matrices)[modes.rigid :])
    assert modes.stable[0]
    return float(np.abs(np.sqrt(modes.eigenvalues[0, modes.rigid :] / exact) - 1).max())


@pytest.mark.parametrize("decades", [0, 2, 4, 6, 8, 10, 12])
@pytest.mark.parametrize("seed", [1, 2])
def test_rates_from_one_to_a_tera_newton_side_by_side(decades, seed):
    rng = np.random.default_rng(seed)
    rates = 10 ** rng.uniform(0, decades, 9)
    masses = 10 ** rng.uniform(-decades / 4, decades / 4, 8)
    rates[[0, -1]] = 1.0, 10.0**decades
    # The aim is 1e-9; 3e-15 was the worst seen, the margin is for other LAPACK builds.
    assert worst_error(chain(list(masses), list(rates), last_held=True)) < 1e-12


def test_soft_tie_beside_stiff_ones_in_a_free_assembly():
    """A rigid mode, a mode at 1e-6 of the others, and rates of 1e12: rank counts what a threshold cannot."""
    loose = chain([1.0, 2.0, 3.0, 4.0], [1e12, 1e-3, 1e12], first_held=False)
    assert solve_modes(built(loose.compile())).rigid == 1
    assert worst_error(loose) < 1e-12


def test_hung_pendulums_with_coupled_masses():
    assembly = Assembly(
        bodies=(
            Pendulum(name="top", mass=1e3, length=1.0, rod_mass=1.0),
            Pendulum(name="low", mass=1e-6, length=1e-3, hung_from="top"),
            Mass(name="cart", mass=1.0),
        ),
        links=(
            Spring(name="soft", between=("top", "cart"), rate=1e-2),
            Spring(name="wall", between=("cart", "ground"), rate=1e9, mass=0.1),
        ),
    )
    assert worst_error(assembly) < 1e-11


def test_platform_whose_weight_takes_stiffness_away():
    """Negative squares are taken off in factored form; the low mode keeps its digits."""
    assembly = Assembly(
        bodies=(Platform(name="top", mass=50.0, inertia=(3.0, 3.0, 4.0), centre=(0.0, 0.0, 0.4)),),
        links=tuple(
            Mount(name=f"m{i}", between=("top", "ground"), at=(x, y, -0.1), rates=(1e11, 1e4), height=0.2)
            for i, (x, y) in enumerate([(0.3, 0.3), (0.3, -0.3), (-0.3, 0.3), (-0.3, -0.3)])
        ),
    )
    assert worst_error(assembly) < 1e-10


@pytest.mark.parametrize("n", [900, 2000])
def test_large_chain_keeps_its_lowest_modes(n):
    """Sparse path against the closed form 2 sin((2j−1)π/(2(2n+1))); λ_max/λ_min is 1.6e6 at 2000 bodies."""
    matrices = built(chain([1.0] * n, [1.0] * n).compile())
    modes = solve_modes(matrices, wanted=6)
    assert modes.shapes.shape[2] < n
    j = np.arange(1, 7)
    exact = 2 * np.sin((2 * j - 1) * np.pi / (2 * (2 * n + 1)))
    np.testing.assert_allclose(np.sqrt(modes.eigenvalues[0]), exact, rtol=1e-9)


def test_large_free_network_has_its_rigid_modes_and_no_others():
    """Spectrum of a 30 × 30 grid of masses: SciPy's LaplacianNd gives the free one in closed form."""
    from scipy.sparse.linalg import LaplacianNd

    side = 30
    names = [[f"m{i}_{j}" for j in range(side)] for i in range(side)]
    pairs = [(names[i][j], names[i + 1][j]) for i in range(side - 1) for j in range(side)]
    pairs += [(names[i][j], names[i][j + 1]) for i in range(side) for j in range(side - 1)]
    grid = Assembly(
        bodies=tuple(Mass(name=name, mass=1.0) for row in names for name in row),
        links=tuple(Spring(name=f"k{i}", between=pair, rate=1.0) for i, pair in enumerate(pairs)),
    )
    modes = solve_modes(built(grid.compile()), wanted=8)
    exact = np.sort(-LaplacianNd((side, side), boundary_conditions="neumann").eigenvalues())
    assert modes.rigid == 1
    np.testing.assert_allclose(modes.eigenvalues[0, 1:9], exact[1:9], rtol=1e-9)
