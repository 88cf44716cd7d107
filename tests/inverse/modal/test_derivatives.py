"""Derivatives of modes with respect to every dimension of every part, proved by the order of their error."""

import numpy as np
import pytest
from assemblies import built, every_part, pair
from numpy.testing import assert_allclose
from orders import decades, order_of_error

from inverse.assembly.assembly import Assembly
from inverse.assembly.bodies import Mass
from inverse.assembly.links import Spring
from inverse.modal.curvature import second_derivatives
from inverse.modal.sensitivity import (
    cluster_forms,
    directional_derivatives,
    pull_eigenvalues,
    pull_shapes,
    to_dimensions,
)
from inverse.modal.solution import solve_modes

ASSEMBLIES = every_part()


def eigenvalue_jacobian(matrices, modes) -> np.ndarray:
    r = modes.eigenvalues.shape[1]
    out = np.zeros((1, r, len(matrices.model.monomials)))
    pull_eigenvalues(matrices, modes, np.eye(r)[None], out)
    return to_dimensions(matrices, out)[0]


@pytest.fixture(params=ASSEMBLIES, scope="module")
def case(request):
    model = ASSEMBLIES[request.param].compile()
    matrices = built(model)
    return model, matrices, solve_modes(matrices)


def dimension_directions(model):
    """Every dimension alone; signed ones by a tenth of a metre, kilogram or newton per unit."""
    for i, dimension in enumerate(model.parameters.dimensions):
        step = np.zeros(len(model.parameters.dimensions))
        step[i] = 0.3 if dimension.positive else 0.1
        yield dimension.name, step


def test_eigenvalues_by_every_dimension(case):
    model, matrices, modes = case
    jacobian = eigenvalue_jacobian(matrices, modes)
    scale = modes.eigenvalues[0, modes.rigid :]
    span = []
    for name, u in dimension_directions(model):

        def value(h, u=u):
            return solve_modes(built(model, h * u), rigid=modes.rigid).eigenvalues[0, modes.rigid :] / scale

        slope = (jacobian @ u)[modes.rigid :] / scale
        size = float(np.linalg.norm(slope))
        order, best = order_of_error(value, slope)
        # Rounding of λ, up to 1e-13, over the step where it meets the truncation error, near 1e-3.
        assert best < max(1e-6, 1e-10 / (size or 1.0)), name
        if size > 1e-3:
            assert order == pytest.approx(2.0, abs=0.15), name
            span.append(decades(value, slope))
    assert max(span) >= 3.0


def test_shapes_and_second_derivatives_along_a_generic_direction(case):
    model, matrices, modes = case
    rng = np.random.default_rng(5)
    positive = model.parameters.positive
    u = rng.standard_normal(len(positive)) * np.where(positive, 0.1, 0.02)
    r = modes.eigenvalues.shape[1]

    cotangent = rng.standard_normal((1, 1, model.size, r))
    cotangent[..., : modes.rigid] = 0.0
    out = np.zeros((1, 1, len(model.monomials)))
    pull_shapes(matrices, modes, cotangent, out)
    slope = to_dimensions(matrices, out)[0] @ u

    def value(h):
        shapes = solve_modes(built(model, h * u), rigid=modes.rigid).shapes
        signs = np.sign(np.einsum("bnr,bnr->br", shapes, modes.shapes))
        return np.array([(cotangent[0] * shapes * signs[:, None]).sum()])

    order, best = order_of_error(value, slope)
    assert order == pytest.approx(2.0, abs=0.15)
    assert best < 1e-6

    for j in range(modes.rigid, r):
        gradient, hessian = second_derivatives(matrices, modes, j)

        def gradient_at(h, j=j):
            there = built(model, h * u)
            return eigenvalue_jacobian(there, solve_modes(there, rigid=modes.rigid))[j]

        assert_allclose(gradient, eigenvalue_jacobian(matrices, modes)[j], rtol=1e-9, atol=1e-9 * abs(gradient).max())
        order, best = order_of_error(gradient_at, hessian @ u)
        assert order == pytest.approx(2.0, abs=0.2)
        assert best < 1e-5


def test_uniform_chain_of_three():
    """∂λ/∂k of the uniform fixed-fixed chain of three (exact): .25 .0428932; .5 .5; .25 1.4571068."""
    from assemblies import chain

    matrices = built(chain([1.0] * 3, [1.0] * 4, last_held=True).compile())
    jacobian = eigenvalue_jacobian(matrices, solve_modes(matrices))
    columns = [i for i, d in enumerate(matrices.model.parameters.dimensions) if d.name.endswith("rate")]
    exact = [[0.25, 0.0428932, 0.0428932, 0.25], [0.5] * 4, [0.25, 1.4571068, 1.4571068, 0.25]]
    assert_allclose(jacobian[:, columns], exact, atol=5e-8)  # seven printed decimals


def ring() -> Assembly:
    """Three equal masses and springs in a ring, λ = 0, 3, 3."""
    return Assembly(
        bodies=tuple(Mass(name=f"m{i}", mass=1.0) for i in range(3)),
        links=tuple(Spring(name=f"k{i}", between=(f"m{i}", f"m{(i + 1) % 3}"), rate=1.0) for i in range(3)),
    )


def test_double_root_of_the_ring_has_directional_derivatives_zero_and_two():
    """One spring 1 + p gives exactly 0, 3, 3 + 2p; differences of sorted values would give 1 and 1."""
    model = ring().compile()
    matrices = built(model)
    modes = solve_modes(matrices)
    u = np.array([[float(d.name == "k0.rate") for d in model.parameters.dimensions]])
    assert_allclose(directional_derivatives(matrices, modes, 1, u), [[0.0, 2.0]], atol=1e-13)


def test_cluster_mean_bends_smoothly_where_single_roots_do_not():
    """λ₂ + λ₃ of the ring is 6 + 2p: a gradient of 1 for the mean and, over log rates, 1 for its curvature."""
    model = ring().compile()
    matrices = built(model)
    modes = solve_modes(matrices)
    place = [d.name for d in model.parameters.dimensions].index("k0.rate")
    gradient, hessian = second_derivatives(matrices, modes, 1)
    assert_allclose([gradient[place], hessian[place, place]], [1.0, 1.0], atol=1e-12)

    rng = np.random.default_rng(0)
    u = rng.standard_normal(len(gradient)) * 0.1 * np.array(model.parameters.positive)

    def mean(h):
        return np.array([solve_modes(built(model, h * u)).eigenvalues[0, 1:].mean()])

    second = np.array([(mean(h) - 2 * mean(0.0) + mean(-h))[0] / h**2 for h in (1e-2, 1e-3)])
    assert_allclose(second, u @ hessian @ u, rtol=1e-3)


def test_difference_of_equal_lengths_moves_nothing_to_first_order():
    """At two equal pendulums the splitting's slope by the difference of lengths is zero, its curvature is not."""
    model = pair().compile()
    matrices = built(model)
    modes = solve_modes(matrices)
    names = [d.name for d in model.parameters.dimensions]
    u = np.zeros(len(names))
    u[names.index("east.length")], u[names.index("west.length")] = 1.0, -1.0
    (g1, h1), (g2, h2) = (second_derivatives(matrices, modes, j) for j in (0, 1))
    assert abs((g2 - g1) @ u) < 1e-12
    assert abs(u @ (h2 - h1) @ u) > 0.1


def test_forms_of_a_cluster_are_symmetric():
    matrices = built(ring().compile())
    forms = cluster_forms(matrices, solve_modes(matrices), [1, 2])
    assert_allclose(forms, np.swapaxes(forms, 0, 1), atol=1e-14)


def test_shape_slopes_of_a_large_model_agree_with_the_dense_ones():
    """Nelson's bordered system, solved sparse, against all modes."""
    from assemblies import chain

    rng = np.random.default_rng(3)
    n = 900
    model = chain(list(rng.uniform(1, 2, n)), list(rng.uniform(1, 2, n))).compile()
    matrices = built(model)
    few, all_modes = solve_modes(matrices, wanted=4), solve_modes(matrices)
    cotangent = np.zeros((1, 1, n, n))
    cotangent[0, 0, :, 1] = rng.standard_normal(n)
    signs = np.sign(np.sum(few.shapes[0, :, 1] * all_modes.shapes[0, :, 1]))
    slopes = []
    for modes, c in ((few, cotangent[..., :4]), (all_modes, cotangent)):
        out = np.zeros((1, 1, len(model.monomials)))
        pull_shapes(matrices, modes, c[..., : modes.shapes.shape[2]], out)
        slopes.append(to_dimensions(matrices, out)[0, 0])
    assert_allclose(signs * slopes[0], slopes[1], rtol=1e-5, atol=1e-7 * abs(slopes[1]).max())
