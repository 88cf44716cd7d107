"""Which mode a shape names."""

import numpy as np
from dense_states import Structure, Term, between, ring, row, row_point, unit
from numpy.testing import assert_allclose

from objectives import Like
from objectives.identity import assurance, identify, one_frequency, subspace_assurance

THREE = [
    Like((("a.x", 1.0), ("b.x", 1.0), ("c.x", 1.0))),
    Like((("a.x", 1.0), ("b.x", 0.0), ("c.x", -1.0))),
    Like((("a.x", 1.0), ("b.x", -1.5), ("c.x", 1.0))),
]


def like(**values: float) -> Like:
    return Like(tuple((f"{name}.x", value) for name, value in values.items()))


def test_a_mode_is_found_by_its_own_shape():
    state = row(3).at(row_point(3))
    for j in range(3):
        own = like(**dict(zip("abc", state.phi[0][:, j], strict=True)))
        assert_allclose(assurance(own, state)[0], np.eye(3)[j], atol=1e-12)


def test_shapes_get_different_modes_and_the_best_pair_goes_first():
    state = row(3).at(*(row_point(3, seed=s) for s in range(20)))
    found = identify(THREE, state)
    table = np.stack([assurance(shape, state) for shape in THREE], axis=1)
    for b in range(20):
        index = [int(found.index[shape][b]) for shape in THREE]
        assert sorted(index) == [0, 1, 2]
        shape, mode = np.unravel_index(table[b].argmax(), (3, 3))
        assert index[shape] == mode


def test_runner_up_within_a_twentieth_is_ambiguous():
    state = row(2).at([0.0, 0.0, 0.0, 0.0, -3.0])
    even, far = like(a=1, b=1.0), like(a=1, b=0.05)
    found = identify([even], state)
    assert_allclose([found.assurance[even][0], found.runner_up[even][0]], [1.0, 0.0], atol=1e-12)
    assert not found.ambiguous(even).any()
    found = identify([far], state)
    assert_allclose(found.assurance[far] + found.runner_up[far], 1.0, rtol=1e-12)
    assert found.ambiguous(far) == (found.assurance[far] - found.runner_up[far] < 0.05)
    assert identify([like(a=1, b=0.01)], state).ambiguous(like(a=1, b=0.01)).all()


def test_one_shape_written_twice_is_one_mode():
    state = row(3).at(row_point(3))
    same = [like(a=1, b=0.5, c=-1), like(a=-2, b=-1, c=2), like(c=3, b=-1.5, a=-3), like(a=0.1, b=0.05, c=-0.1)]
    found = identify([*same, like(a=1, b=1, c=1)], state)
    assert len({int(found.index[shape][0]) for shape in same}) == 1
    assert found.index[same[0]] != found.index[like(a=1, b=1, c=1)]


def test_more_shapes_than_modes_leave_the_least_alike_without():
    state = row(2).at(row_point(2))
    shapes = [like(a=1, b=1), like(a=1, b=-1), like(a=1, b=0)]
    found = identify(shapes, state)
    index = [int(found.index[shape][0]) for shape in shapes]
    assert sorted(index) == [-1, 0, 1]
    assert np.isnan(found.assurance[shapes[index.index(-1)]]).all()


def test_rigid_modes_are_never_named():
    state = ring().at([0.1, 0.0, 0.2, 0.0, 0.3, 0.1])
    together = like(a=1, b=1, c=1)
    assert identify([together], state).index[together] > 0


def test_modes_of_one_frequency_are_judged_by_what_they_span():
    """Ring of three, λ = 0, 3, 3 (exact): every shape without a mean is in the plane of the double frequency."""
    state = ring().at(np.zeros(6))
    assert one_frequency(state)[0].tolist() == [[True, False, False], [False, True, True], [False, True, True]]
    shape, other = like(a=1, b=-0.3, c=-0.7), like(a=0.2, b=0.5, c=-0.7)
    for angle in (0.0, 0.4, 2.0):
        turn = np.eye(3)
        turn[1:, 1:] = [[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]]
        state.phi = state.phi @ turn
        assert_allclose(subspace_assurance(shape, state), [[0.0, 1.0, 1.0]], atol=1e-12)
        found = identify([shape, other], state)
        assert {int(found.index[shape][0]), int(found.index[other][0])} == {1, 2}
        assert_allclose([found.assurance[shape], found.assurance[other]], 1.0, rtol=1e-12)
        # The other mode of the same frequency is no rival, the rigid one is not either.
        assert not found.ambiguous(shape).any()


def test_of_one_frequency_each_shape_gets_the_mode_turned_to_it():
    state = ring().at(np.zeros(6))
    state.phi = np.array([[[1, 1, 1], [1, -1, 1], [1, 0, -2]]]) / np.sqrt([3, 2, 6])
    first, second = like(a=1, b=1, c=-2), like(a=1, b=-1, c=0)
    found = identify([first, second], state)
    assert (found.index[first], found.index[second]) == (2, 1)


def test_assurance_does_not_depend_on_units():
    """A displacement in metres and a rotation coupled by mass, the rotation then in milliradians."""
    n = 2
    mass, stiffness = np.array([[5.0, 0.4], [0.4, 0.3]]), np.array([[140.0, 3.0], [3.0, 8.0]])
    scale = np.diag([1.0, 1e-3])
    values = []
    for D, a in ((np.eye(n), (0.1, 1.0)), (scale, (0.1, 1e3))):
        state = Structure(("a.x", "b.x"), (Term(D @ mass @ D, None, "a"), Term(D @ stiffness @ D))).at([])
        values.append(assurance(like(a=a[0], b=a[1]), state))
        assert_allclose(values[-1].sum(), 1.0, rtol=1e-12)
    assert_allclose(values[0], values[1], rtol=1e-9)


def test_components_that_a_mode_does_not_move_give_no_assurance():
    apart = Structure(
        ("a.x", "b.x", "c.x"),
        (
            *(Term(unit(3, i), None, name) for i, name in enumerate("abc")),
            Term(between(3, 0, 1)),
            Term(unit(3, 0)),
            Term(9.0 * unit(3, 2)),
        ),
    )
    state = apart.at([])
    assert assurance(like(a=1, b=1), state)[0, 2] == 0.0
