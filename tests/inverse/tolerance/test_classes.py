"""Published tolerance classes."""

import pytest
from numpy.testing import assert_allclose

from inverse.errors import StudyError
from inverse.tolerance.classes import GRADE_UP_TO, GRADES, class_limit

MULTIPLES = {6: 10, 7: 16, 8: 25, 9: 40, 10: 64, 11: 100}


@pytest.mark.parametrize(
    ("name", "length", "half"),
    [("m", 1.2, 1.2e-3), ("m", 0.025, 0.2e-3), ("f", 0.12, 0.15e-3), ("c", 4.0, 4e-3), ("v", 0.004, 0.5e-3)],
)
def test_general_tolerances(name, length, half):
    """ISO 2768-1, table 1 (from memory)."""
    assert_allclose(class_limit(name, length), half)


@pytest.mark.parametrize("grade", GRADES)
def test_grades_follow_their_formula(grade):
    """ISO 286-1: grade = multiple of i = 0.45 D^(1/3) + 0.001 D at the geometric mean D of the range.

    The published values are rounded, by up to a tenth in the lowest ranges.
    """
    for low, high in zip((3.0, *GRADE_UP_TO[1:-1]), GRADE_UP_TO[1:], strict=True):
        D = (low * high) ** 0.5
        exact = MULTIPLES[grade] * (0.45 * D ** (1 / 3) + 0.001 * D)
        assert_allclose(2e6 * class_limit(f"IT{grade}", high * 1e-3), exact, rtol=0.1)


@pytest.mark.parametrize(("name", "length"), [("x", 1.0), ("IT3", 0.1), ("m", 5.0), ("f", 3.0), ("IT8", 0.6)])
def test_what_the_tables_do_not_hold_is_refused(name, length):
    with pytest.raises(StudyError, match="class"):
        class_limit(name, length)
