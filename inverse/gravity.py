"""Gravity at a place, on the Geodetic Reference System 1980.

Symbols, after [1]_: ``γ`` normal gravity [m/s²], ``γ_e`` at the equator, ``φ`` geodetic latitude,
``h`` height above the ellipsoid [m], ``a`` equatorial radius [m], ``f`` flattening, ``e²`` first
eccentricity squared, ``m = ω² a² b / GM``, ``k = b γ_p / (a γ_e) - 1``.

References
----------
.. [1] H. Moritz, "Geodetic Reference System 1980", Bulletin géodésique 54(3), 1980, pp. 395-405.
"""

from __future__ import annotations

import math

from inverse.errors import QuantityError

STANDARD_GRAVITY = 9.80665
"""Standard acceleration of free fall [m/s²], exact by convention."""

_EQUATORIAL_GRAVITY = 9.7803267715
_GRAVITY_CONSTANT = 0.001931851353  # k
_EQUATORIAL_RADIUS = 6378137.0
_FLATTENING = 1 / 298.257222101
_ECCENTRICITY_SQUARED = 0.00669438002290
_CENTRIFUGAL_RATIO = 0.00344978600308  # m
_LOWEST, _HIGHEST = -500.0, 10_000.0


def normal_gravity(latitude_rad: float, height_m: float) -> float:
    """Return normal gravity: Somigliana's formula, carried up by the second-order free-air formula.

    ``γ = γ_e (1 + k sin²φ) / √(1 - e² sin²φ)``, times
    ``1 - 2 (1 + f + m - 2 f sin²φ) h/a + 3 (h/a)²``: within 1e-7 of the exact field of the
    ellipsoid at all heights allowed. Gravity on the ground departs from it by its anomalies, of the
    order of 1e-4.

    Parameters
    ----------
    latitude_rad : float
        Geodetic latitude, -π/2 to π/2.
    height_m : float
        Above the ellipsoid, -500 m to 10 km; deeper down the rock above would count.

    Returns
    -------
    float
        In m/s².

    Raises
    ------
    QuantityError
        If the latitude or the height is outside.
    """
    if not -math.pi / 2 <= latitude_rad <= math.pi / 2:
        found = f"{math.degrees(latitude_rad):g} deg"
        raise QuantityError("a latitude from -90 deg to 90 deg", found)
    if not _LOWEST <= height_m <= _HIGHEST:
        hint = "give gravity itself as an acceleration"
        raise QuantityError("a height from -500 m to 10 km", f"{height_m:g} m", hint)
    sine_squared = math.sin(latitude_rad) ** 2
    on_ellipsoid = (
        _EQUATORIAL_GRAVITY
        * (1 + _GRAVITY_CONSTANT * sine_squared)
        / math.sqrt(1 - _ECCENTRICITY_SQUARED * sine_squared)
    )
    gradient = 1 + _FLATTENING + _CENTRIFUGAL_RATIO - 2 * _FLATTENING * sine_squared
    height = height_m / _EQUATORIAL_RADIUS
    return on_ellipsoid * (1 - 2 * gradient * height + 3 * height**2)
