"""What no build within the limits can exceed: enclosures of the tolerance box, cut into pieces.

Errors that parts share are taken as if each part had its own, so that the box only grows: what is guaranteed for it
holds for every build. Tight for narrow tolerances, with an error of second order in the width of the pieces.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from inverse.assembly.terms import Array
from inverse.evaluation.evaluator import Evaluator
from inverse.matrices.enclosure import Enclosure, EnclosureError, over_dimensions
from inverse.tolerance.distributions import Errors
from objectives.base import Objective
from objectives.frequency import BeatPeriod, Frequency, FrequencyRatio, Period, Splitting

LARGEST = 60
"""Coordinates up to which an enclosure is computed."""

PIECES = 1024
"""Pieces at most."""

TURN = 2 * np.pi

Ends = tuple[float | None, float | None]
"""Certain lower and upper end, None where nothing is certain."""


def certain_ends(evaluator: Evaluator, x: Array, errors: Errors) -> tuple[Ends, ...]:
    """Per objective, ends that no build exceeds; for measures of one or two numbered modes.

    Parameters
    ----------
    evaluator : Evaluator
    x : ndarray, shape (P,)
        Variables of the nominal design.
    errors : Errors
    """
    nothing: Ends = (None, None)
    none = tuple(nothing for _ in evaluator.objectives)
    nominal = evaluator.nominal(x[None])[0]
    limits = errors.limits(nominal)
    if evaluator.model.size > LARGEST or not limits.any():
        return none
    places = [_modes(objective, evaluator.rigid) for objective in evaluator.objectives]
    wanted = sorted({place for known in places for place in known})
    pairs = sorted({known for known in places if len(known) == 2})
    if not wanted:
        return none
    try:
        family = over_dimensions(evaluator.model, nominal - limits, nominal + limits)
    except EnclosureError:
        return none
    found = family.enclose(*_pieces(np.asarray(family.low), np.asarray(family.high)), modes=wanted, pairs=pairs)
    if not found.sound.all():
        return none
    return tuple(
        _ends(objective, known, found, pairs) if known else nothing
        for objective, known in zip(evaluator.objectives, places, strict=True)
    )


def _pieces(low: Array, high: Array) -> tuple[Array, Array]:
    """The box (P,) cut alike along every edge, as often as `PIECES` allows; (B, P) each."""
    cuts = max(int(PIECES ** (1 / len(low))), 1)
    edges = np.linspace(low, high, cuts + 1)
    # The outermost edges are those of the box, whatever rounding made of them.
    edges[0], edges[-1] = low, high
    places = np.stack(np.meshgrid(*[np.arange(cuts)] * len(low), indexing="ij"), axis=-1).reshape(-1, len(low))
    columns = np.arange(len(low))
    return edges[places, columns], edges[places + 1, columns]


def _modes(objective: Objective, rigid: int) -> tuple[int, ...]:
    """Positions of numbered modes, ascending; empty for other measures."""
    kinds = Frequency | Period | Splitting | BeatPeriod | FrequencyRatio
    numbers = [mode for mode in objective.modes if isinstance(mode, int)]
    if not isinstance(objective, kinds) or len(numbers) != len(objective.modes):
        return ()
    places = tuple(mode + rigid - 1 for mode in numbers)
    return places if places == tuple(sorted(places)) else ()


def _ends(objective: Objective, known: tuple[int, ...], found: Enclosure, pairs: list[Any]) -> Ends:
    """The least lower and the greatest upper end over all pieces."""
    first, last = known[0], known[-1]
    low, high = (np.sqrt(np.maximum(part, 0.0)) / TURN for part in (found.low, found.high))
    match objective:
        case Frequency():
            return _finite(low[:, first], high[:, first])
        case Period():
            return _finite(_inverse(high[:, first]), _inverse(low[:, first]))
        case FrequencyRatio():
            return _finite(low[:, last] * _inverse(high[:, first]), high[:, last] * _inverse(low[:, first]))
    k = pairs.index(known)
    below, above = found.difference_low[:, k] / TURN**2, found.difference_high[:, k] / TURN**2
    widest, narrowest = high[:, first] + high[:, last], _inverse(low[:, first] + low[:, last])
    least, most = np.where(below > 0, below / widest, below * narrowest), above * narrowest
    if isinstance(objective, Splitting):
        return _finite(least, most)
    return _finite(_inverse(most), _inverse(least))


def _inverse(value: Array) -> Array:
    """``1/value``, infinite where it is not positive."""
    return np.divide(1.0, value, out=np.full_like(value, np.inf), where=value > 0)


def _finite(low: Array, high: Array) -> Ends:
    # A few roundings each, outward.
    ends = (float(np.min(low)) * (1 - 1e-14), float(np.max(high)) * (1 + 1e-14))
    return (ends[0] if np.isfinite(ends[0]) else None, ends[1] if np.isfinite(ends[1]) else None)
