"""Refined modes of batches, against dense eigenvalues (scipy.linalg.eigh) and closed forms."""

import numpy as np
import pytest
import scipy.linalg as sl
from assemblies import chain, every_part, nominal, pair

from inverse.assembly.assembly import Assembly, Model
from inverse.assembly.bodies import Mass
from inverse.assembly.links import Spring
from inverse.assembly.terms import Array, Point
from inverse.matrices.equilibrium import at_rest
from inverse.matrices.stack import Matrices
from inverse.modal.inertia import Pencil
from inverse.modal.refinement import Block, Neighbours, choose_blocks, iterate, rayleigh_ritz, refine_modes
from inverse.modal.solution import solve_modes

BUILDS = 100


def varied(model: Model, share: float = 0.02, builds: int = BUILDS, seed: int = 5) -> Point:
    rng = np.random.default_rng(seed)
    base = nominal(model) * (1 + share * rng.uniform(-1, 1, (builds, len(model.parameters.dimensions))))
    point = at_rest(model, base)
    return Point(np.asfortranarray(point.values), point.positive)


def eigenvalues(model: Model, point: Point) -> Array:
    """One build after the other, (B, n)."""
    matrices = Matrices(model, point)
    pairs = zip(matrices.stiffness.matrix(), matrices.mass.matrix(), strict=True)
    return np.array(
        [sl.eigh(K, M, eigvals_only=True) if np.isfinite(K).all() else np.full(len(K), np.nan) for K, M in pairs]
    )


def settled(found: Neighbours) -> Array:
    return found.bounds <= 1e-9 * np.abs(found.shift + found.offsets).min(axis=0)


ASSEMBLIES = {**every_part(), "chain of nine": chain([1.0, 2.0, 1.5] * 3, [100.0, 50.0, 75.0] * 3)}


@pytest.mark.parametrize("place", ["lowest", "lowest two", "last two", "first and third"])
@pytest.mark.parametrize("name", ASSEMBLIES)
def test_refined_modes_are_the_numbered_ones(name, place):
    model = ASSEMBLIES[name].compile()
    point = varied(model)
    exact = eigenvalues(model, point)
    sound = np.isfinite(exact).all(axis=1)
    rigid = solve_modes(Matrices(model, at_rest(model, nominal(model)))).rigid
    last = model.size - 1
    positions = {
        "lowest": [rigid],
        "lowest two": [rigid, rigid + 1],
        "last two": [last - 1, last],
        "first and third": [rigid, min(rigid + 2, last)],
    }[place]
    pencil = Pencil.of(model)
    blocks = choose_blocks(pencil, point, positions, rigid)
    found = refine_modes(pencil, point, blocks, positions, settled, rigid)
    values = (found.shift + found.offsets).T
    assert np.isnan(values[~sound]).all()
    # What dense eigenvalues are themselves in error by: rounding of the greatest one.
    rounding = 1e-14 * model.size * exact[sound, -1:]
    assert (np.abs(values - exact[:, positions])[sound] <= found.bounds[sound, None] + rounding).all()
    assert settled(found)[sound].all()


@pytest.mark.parametrize("steps", [1, 2, 3])
def test_bounds_hold_and_shrink(steps):
    model = ASSEMBLIES["chain of nine"].compile()
    point = varied(model, 0.05)
    exact = eigenvalues(model, point)
    pencil = Pencil.of(model)
    (block,) = choose_blocks(pencil, point, [4])
    found = iterate(pencil, point, block, steps)
    confirmed = np.isfinite(found.bounds)
    error = np.abs(found.shift + found.offsets.T - exact[:, block.first : block.last + 1]).max(axis=1)
    assert confirmed.mean() > 0.9
    assert (error[confirmed] <= found.bounds[confirmed] + 1e-13 * exact[confirmed, -1]).all()
    assert np.median(found.bounds[confirmed]) < exact[0, 4] * 10.0 ** (-1 - 2 * steps)


@pytest.mark.parametrize("rate", [1e-6, 1e-3, 1.0])
def test_splitting_of_nearly_equal_pendulums_keeps_its_digits(rate):
    """λ₂ − λ₁ = √((g/L₁ − g/L₂)² + 4k²) for unit bobs on point-mass pendulums tied at the bobs (exact)."""
    model = pair(rate=rate).compile()
    names = [d.name for d in model.parameters.dimensions]
    g, east, west = (names.index(n) for n in ("gravity", "east.length", "west.length"))
    base = np.repeat(nominal(model), BUILDS, axis=0)
    rng = np.random.default_rng(1)
    base[:, [east, west]] *= 1 + rate * 0.05 * rng.uniform(-1, 1, (BUILDS, 2))
    difference = base[:, g] * (base[:, west] - base[:, east]) / (base[:, east] * base[:, west])
    exact = np.hypot(difference, 2 * rate)
    point, pencil = Point(np.asfortranarray(base), model.positive), Pencil.of(model)
    (block,) = choose_blocks(pencil, point, [0, 1])
    found = iterate(pencil, point, block, 2)
    error = np.abs(found.offsets[1] - found.offsets[0] - exact)
    assert (error <= 2 * found.bounds).all()
    # Rounding of entries of size g/L: 40 of these were the most seen, where the shift falls on one of the modes.
    assert error.max() <= 100 * np.finfo(float).eps * 9.8
    assert (found.bounds <= 1e-12 * 9.8).all()


def test_repeated_frequencies_stay_a_block():
    """Free ring of three equal masses and springs: λ = 0, 3, 3 (exact); builds are all alike."""
    model = Assembly(
        bodies=tuple(Mass(name=f"m{i}", mass=1.0) for i in range(3)),
        links=tuple(Spring(name=f"k{i}", between=(f"m{i}", f"m{(i + 1) % 3}"), rate=1.0) for i in range(3)),
    ).compile()
    point = Point(np.asfortranarray(np.repeat(nominal(model), 8, axis=0)), model.positive)
    pencil = Pencil.of(model)
    blocks = choose_blocks(pencil, point, [1, 2], 1)
    found = refine_modes(pencil, point, blocks, [1, 2], settled, 1)
    np.testing.assert_allclose(found.shift + found.offsets, 3.0, rtol=1e-12)


def test_crossing_modes_are_refined_or_solved_in_full():
    """Two chains that do not touch, of nearly the same frequencies: the second and third mode change places."""
    two = chain([1.0] * 6, [100.0, 50.0, 75.0, 1e-9, 50.0, 75.0])
    model = two.compile()
    point = varied(model, 0.1)
    exact = eigenvalues(model, point)
    pencil = Pencil.of(model)
    positions = [2, 3]
    found = refine_modes(pencil, point, choose_blocks(pencil, point, positions), positions, settled)
    values = (found.shift + found.offsets).T
    assert (np.abs(values - exact[:, positions]) <= found.bounds[:, None] + 1e-13 * exact[:, -1:]).all()


def test_a_block_with_the_wrong_number_is_not_confirmed():
    model = ASSEMBLIES["chain of nine"].compile()
    point = varied(model)
    pencil = Pencil.of(model)
    (block,) = choose_blocks(pencil, point, [3])
    wrong = Block(2, 2, block.shift, block.low, block.high, block.start)
    assert np.isinf(iterate(pencil, point, wrong, 2).bounds).all()
    found = refine_modes(pencil, point, [wrong], [2], settled)
    np.testing.assert_allclose(found.shift + found.offsets[0], eigenvalues(model, point)[:, 2], rtol=1e-11)


@pytest.mark.parametrize("r", [1, 2, 3, 5])
def test_small_pairs_by_rotations(r):
    """Against scipy.linalg.eigh, pair by pair."""
    rng = np.random.default_rng(r)
    F = rng.standard_normal((40, r, r))
    G = F + np.swapaxes(F, 1, 2)
    H = np.einsum("bij,bkj->bik", F, F) + np.eye(r)
    mu, C, _ = rayleigh_ritz(np.moveaxis(G, 0, 2), np.moveaxis(H, 0, 2))
    expected = np.array([sl.eigh(g, h, eigvals_only=True) for g, h in zip(G, H, strict=True)])
    np.testing.assert_allclose(np.sort(mu, axis=0).T, expected, rtol=1e-11, atol=1e-12)
    gram = np.einsum("rkb,brs,slb->bkl", C, H, C)
    np.testing.assert_allclose(gram, np.broadcast_to(np.eye(r), gram.shape), atol=1e-11)
