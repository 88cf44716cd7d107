import math

import mpmath
import pytest

from inverse.errors import QuantityError
from inverse.gravity import STANDARD_GRAVITY, normal_gravity

# The four constants that define GRS80: H. Moritz, "Geodetic Reference System 1980", Bulletin
# géodésique 54(3), 1980, pp. 395-405 (from memory).
RADIUS, GM, J2, SPIN = (
    mpmath.mpf("6378137"),
    mpmath.mpf("3986005e8"),
    mpmath.mpf("108263e-8"),
    mpmath.mpf("7292115e-11"),
)


def test_standard_gravity_is_that_of_the_weights_and_measures_conference():
    """3rd General Conference on Weights and Measures, 1901 (from memory)."""
    assert STANDARD_GRAVITY == 9.80665


@pytest.mark.parametrize(
    ("latitude", "published"),
    [(0, 9.7803267715), (45, 9.8061992024865), (90, 9.8321863685)],
)
def test_gravity_on_the_ellipsoid_is_the_published_one(latitude, published):
    """Moritz 1980 (from memory, confirmed by the exact field below); 45 degrees: computed apart."""
    # The pole follows from k, given to ten digits: 2e-11 of 9.8 m/s².
    assert normal_gravity(math.radians(latitude), 0.0) == pytest.approx(published, rel=5e-12)


def somigliana_pizzetti(latitude, height):
    """The exact field of the rotating level ellipsoid, from nothing but its four constants.

    Reference: W. A. Heiskanen and H. Moritz, "Physical Geodesy", Freeman 1967, sections 2-7 and 2-8
    (from memory): the potential in ellipsoidal coordinates, here differentiated numerically.
    """
    with mpmath.workdps(40):
        squared = mpmath.mpf("0.0067")
        for _ in range(40):
            e = mpmath.sqrt(squared)
            second = e / mpmath.sqrt(1 - squared)
            q0 = ((1 + 3 / second**2) * mpmath.atan(second) - 3 / second) / 2
            squared = 3 * J2 + 2 * SPIN**2 * RADIUS**3 * e**3 / (15 * GM * q0)
        semi_minor = RADIUS * mpmath.sqrt(1 - squared)
        focus = mpmath.sqrt(RADIUS**2 - semi_minor**2)

        def potential(x, z):
            d = x * x + z * z - focus**2
            u = mpmath.sqrt(d / 2 * (1 + mpmath.sqrt(1 + 4 * (focus * z / d) ** 2)))
            q = ((1 + 3 * (u / focus) ** 2) * mpmath.atan(focus / u) - 3 * u / focus) / 2
            swelling = SPIN**2 * RADIUS**2 * q / (2 * q0) * ((z / u) ** 2 - mpmath.mpf(1) / 3)
            return GM / focus * mpmath.atan(focus / u) + swelling + (SPIN * x) ** 2 / 2

        sine, cosine = mpmath.sin(latitude), mpmath.cos(latitude)
        normal = RADIUS / mpmath.sqrt(1 - squared * sine**2)
        x, z = (normal + height) * cosine, (normal * (1 - squared) + height) * sine
        along_x = mpmath.diff(lambda t: potential(t, z), x)
        along_z = mpmath.diff(lambda t: potential(x, t), z)
        return float(mpmath.hypot(along_x, along_z))


@pytest.mark.parametrize("latitude", [0, 30, 54.3, -54.3, 90])
# Seen: 6e-9 at -500 m, 4e-12 at 0, 1.1e-8 at 1 km, 7.2e-8 at 10 km; the formula leaves out (h/a)³.
@pytest.mark.parametrize(("height", "tolerance"), [(-500, 1e-8), (0, 1e-11), (1000, 2e-8), (10_000, 1e-7)])
def test_gravity_with_height_is_near_the_exact_field_of_the_ellipsoid(latitude, height, tolerance):
    angle = math.radians(latitude)
    exact = somigliana_pizzetti(mpmath.mpf(angle), mpmath.mpf(height))
    assert normal_gravity(angle, height) == pytest.approx(exact, rel=tolerance)


@pytest.mark.parametrize(
    ("latitude", "height", "part"),
    [
        (math.radians(91), 0.0, "found 91 deg"),
        (math.nan, 0.0, "a latitude from -90 deg to 90 deg"),
        (0.5, -3000.0, "found -3000 m; give gravity itself"),
        (0.5, 20_000.0, "a height from -500 m to 10 km"),
        (0.5, math.nan, "found nan m"),
    ],
)
def test_a_place_off_the_map_is_refused(latitude, height, part):
    with pytest.raises(QuantityError) as failure:
        normal_gravity(latitude, height)
    assert part in str(failure.value)
