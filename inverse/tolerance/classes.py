"""Published tolerance classes: half-widths on a nominal length.

Sources: ISO 2768-1 (general tolerances for linear dimensions, table 1) and ISO 286-1 (standard tolerance grades IT);
values from memory, the grades confirmed by their formula ``i = 0.45 D^(1/3) + 0.001 D`` (D in mm, i in µm) within
rounding. Confirm against the standards before ordering by them.
"""

from __future__ import annotations

from bisect import bisect_left

from inverse.errors import StudyError

GENERAL_UP_TO = (3.0, 6.0, 30.0, 120.0, 400.0, 1000.0, 2000.0, 4000.0)
"""Upper ends of the ranges of nominal length [mm]; the first begins at 0.5 mm."""

GENERAL = {
    "f": (0.05, 0.05, 0.1, 0.15, 0.2, 0.3, 0.5, None),
    "m": (0.1, 0.1, 0.2, 0.3, 0.5, 0.8, 1.2, 2.0),
    "c": (0.2, 0.3, 0.5, 0.8, 1.2, 2.0, 3.0, 4.0),
    "v": (None, 0.5, 1.0, 1.5, 2.5, 4.0, 6.0, 8.0),
}
"""± values [mm]."""

GRADE_UP_TO = (3.0, 6.0, 10.0, 18.0, 30.0, 50.0, 80.0, 120.0, 180.0, 250.0, 315.0, 400.0, 500.0)
"""Upper ends of the ranges of nominal size [mm]."""

GRADES = {
    6: (6, 8, 9, 11, 13, 16, 19, 22, 25, 29, 32, 36, 40),
    7: (10, 12, 15, 18, 21, 25, 30, 35, 40, 46, 52, 57, 63),
    8: (14, 18, 22, 27, 33, 39, 46, 54, 63, 72, 81, 89, 97),
    9: (25, 30, 36, 43, 52, 62, 74, 87, 100, 115, 130, 140, 155),
    10: (40, 48, 58, 70, 84, 100, 120, 140, 160, 185, 210, 230, 250),
    11: (60, 75, 90, 110, 130, 160, 190, 220, 250, 290, 320, 360, 400),
}
"""Whole widths [µm]; half of each lies on either side."""


def class_limit(name: str, length: float) -> float:
    """Half-width [m] of a class on a nominal length [m].

    Raises
    ------
    StudyError
        If the class is unknown, or has no value for this length.
    """
    millimetres = round(abs(length) * 1e3, 9)
    if name in GENERAL:
        place = bisect_left(GENERAL_UP_TO, millimetres)
        value = GENERAL[name][place] if place < len(GENERAL_UP_TO) and millimetres >= 0.5 else None
        if value is not None:
            return value * 1e-3
    elif name.startswith("IT") and name[2:].isdigit() and int(name[2:]) in GRADES:
        place = bisect_left(GRADE_UP_TO, millimetres)
        if place < len(GRADE_UP_TO) and millimetres > 0:
            return GRADES[int(name[2:])][place] * 1e-6 / 2
    else:
        known = ", ".join(["class f, m, c, v", *(f"IT{grade}" for grade in GRADES)])
        raise StudyError(f"tolerance class `{name}` has no table here; there are {known}")
    raise StudyError(
        f"tolerance class `{name}` has no value for a length of {millimetres:g} mm: state the limit itself"
    )
