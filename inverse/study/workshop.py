"""From the tolerances a study states to the unit errors of its base dimensions."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace

import numpy as np

from inverse.assembly.assembly import Model
from inverse.assembly.terms import Array
from inverse.errors import StudyError
from inverse.study.content import Tolerance as Stated
from inverse.tolerance.classes import class_limit
from inverse.tolerance.distributions import Errors, Limit, Tolerance
from inverse.units import Window


def errors_of(stated: Sequence[Stated], model: Model, base: Array) -> Errors:
    """Unit errors at a nominal design.

    A dimension that was written as a product has a place of its own with nominal value one, so that an
    absolute error on it counts as a share of the product's value.

    Parameters
    ----------
    stated : sequence of Tolerance
        As the study states them.
    model : Model
    base : ndarray, shape (D,)
        Nominal base dimensions.

    Raises
    ------
    StudyError
        If a limit is not smaller than the size of its dimension.
    """
    names = [dimension.name for dimension in model.parameters.dimensions]
    shown = _shown(model, base)
    errors = Errors.of([table for one in stated for table in _tables(one, names, base, shown)], len(names))
    product = shown[errors.dimension] != base[errors.dimension]
    absolute = product & ~errors.relative
    size = np.where(absolute, errors.size / np.abs(shown[errors.dimension]), errors.size)
    errors = replace(errors, size=size, relative=errors.relative | product)
    _refuse_too_wide(errors, model, base, names)
    return errors


def _tables(one: Stated, names: list[str], base: Array, shown: Array) -> Iterator[Tolerance]:
    """The batch as one table, what each piece has for itself as one per dimension."""
    places = tuple(names.index(name) for name in one.dimensions)
    if one.batch is not None:
        yield Tolerance(dimensions=places, batch=_limit(one.batch), distribution=one.distribution)
    for name, place in zip(one.dimensions, places, strict=True):
        each = Limit(class_limit(one.each, shown[place])) if isinstance(one.each, str) else _limit(one.each)
        yield Tolerance(
            dimensions=(place,), each=each, distribution=one.distribution, pieces=(_pieces(name, names, base),)
        )


def _pieces(name: str, names: list[str], base: Array) -> int:
    """How many identical pieces stand behind a dimension of a counted link."""
    count = f"{name.partition('.')[0]}.count"
    return int(base[names.index(count)]) if count in names and name != count else 1


def _limit(window: Window | None) -> Limit:
    return Limit() if window is None else Limit(window.value, window.relative)


def _shown(model: Model, base: Array) -> Array:
    """Dimensions as they are read: products multiplied out."""
    known = dict(zip((d.name for d in model.parameters.dimensions), base, strict=True))
    return np.array(
        [
            d.shown.coefficient * np.prod([known[name] ** power for name, power in d.shown.powers])
            for d in model.parameters.dimensions
        ]
    )


def _refuse_too_wide(errors: Errors, model: Model, base: Array, names: list[str]) -> None:
    limits = errors.limits(base)
    for place, dimension in enumerate(model.parameters.dimensions):
        if dimension.positive and limits[place] >= base[place]:
            raise StudyError(
                f"the tolerance on `{names[place]}` allows ± {limits[place]:.4g} on {base[place]:.4g}: a "
                "dimension must stay positive in every build; tighten the tolerance"
            )
