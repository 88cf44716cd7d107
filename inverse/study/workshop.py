"""From the tolerances a study states to unit errors of its base dimensions, and what they do to a design."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from inverse.assembly.assembly import Model
from inverse.assembly.terms import Array
from inverse.design.problem import Problem
from inverse.errors import StudyError
from inverse.evaluation.evaluator import Evaluator
from inverse.study.content import Tolerance as Stated
from inverse.tolerance.classes import class_limit
from inverse.tolerance.contributions import contributions
from inverse.tolerance.distributions import Errors, Limit, Tolerance
from inverse.tolerance.guaranteed import certain_ends
from inverse.tolerance.recentring import recentre
from inverse.tolerance.sensitivities import sensitivities, sentence, shown_values
from inverse.tolerance.worst_case import extremes
from inverse.tolerance.yields import measure_yield
from inverse.units import Window

ATTAINED = 1e-6
"""Relative gap at which a bound counts as attained by the build that was found."""


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
    shown = shown_values(model, base)
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


def _refuse_too_wide(errors: Errors, model: Model, base: Array, names: list[str]) -> None:
    limits = errors.limits(base)
    for place, dimension in enumerate(model.parameters.dimensions):
        if dimension.positive and limits[place] >= base[place]:
            raise StudyError(
                f"the tolerance on `{names[place]}` allows ± {limits[place]:.4g} on {base[place]:.4g}: a "
                "dimension must stay positive in every build; tighten the tolerance"
            )


def tolerance_record(evaluator: Evaluator, x: Array, stated: Sequence[Stated], *, seed: int) -> dict[str, Any]:
    """What the shop does to one design: the part of a result under ``tolerance``.

    Parameters
    ----------
    evaluator : Evaluator
    x : ndarray, shape (P,)
        Variables of the design.
    stated : sequence of Tolerance
        As the study states them.
    seed : int
        Of the builds drawn and of the corners searched.
    """
    base = evaluator.nominal(x[None])[0]
    errors = errors_of(stated, evaluator.model, base)
    passed = measure_yield(evaluator, x, errors, seed=seed)
    return {
        "yield": passed.share,
        "yield_low": passed.low,
        "yield_high": passed.high,
        "confidence": passed.confidence,
        "builds": passed.builds,
        "worst_case": _worst_case(evaluator, x, errors, base, seed),
        "contributions": [],
        "sensitivities": _sensitivities(evaluator, x, errors),
    }


def recentring_record(problem: Problem, x: Array, stated: Sequence[Stated], *, seed: int) -> dict[str, Any] | None:
    """A nominal design that more builds of pass, on builds drawn afresh; None where none was found."""
    model = problem.evaluator.model
    found = recentre(problem, x, lambda base: errors_of(stated, model, base), seed=seed + 1)
    if not found.moved:
        return None
    return {
        "variables": {v.name: float(value) for v, value in zip(problem.variables, found.x, strict=True)},
        "yield_before": found.before.share,
        "yield_after": found.after.share,
        "seed": found.after.seed,
    }


def _worst_case(evaluator: Evaluator, x: Array, errors: Errors, base: Array, seed: int) -> list[dict[str, Any]]:
    """The extremes found, with the builds they were found at, and what no build exceeds where that is known."""
    touched = sorted(set(errors.dimension.tolist()))
    dimensions = evaluator.model.parameters.dimensions
    slopes = errors.slopes(base)

    def build(u: Array) -> dict[str, float]:
        values = shown_values(evaluator.model, base + slopes @ u)
        return {dimensions[i].name: float(values[i]) for i in touched}

    return [
        {
            "label": objective.label,
            "unit": objective.unit,
            "low": found.low,
            "high": found.high,
            "low_at": build(found.low_at),
            "high_at": build(found.high_at),
            "exact": _agree(found.low, ends[0]) and _agree(found.high, ends[1]),
            "certain_low": ends[0],
            "certain_high": ends[1],
        }
        for objective, found, ends in zip(
            evaluator.objectives,
            extremes(evaluator, x, errors, seed=seed),
            certain_ends(evaluator, x, errors),
            strict=True,
        )
    ]


def _agree(found: float | None, certain: float | None) -> bool:
    return found is not None and certain is not None and abs(found - certain) <= ATTAINED * abs(found)


def _sensitivities(evaluator: Evaluator, x: Array, errors: Errors) -> list[dict[str, Any]]:
    """First and second order effect of every error on every objective, ranked, with a sentence for the shop."""
    return [
        {
            "label": row.label,
            "dimension": ", ".join(row.moves),
            "value": row.first,
            "second": row.second,
            "unit": f"{row.unit} per {row.per}",
            "sentence": sentence(row),
        }
        for row in sensitivities(evaluator, x, errors)
    ]


def contribution_records(
    evaluator: Evaluator, x: Array, stated: Sequence[Stated], *, seed: int
) -> tuple[list[dict[str, Any]], list[str]]:
    """Variance shares of every objective, and remarks where the linear budget does not hold them."""
    errors = errors_of(stated, evaluator.model, evaluator.nominal(x[None])[0])
    found = contributions(evaluator, x, errors, seed=seed)
    rows = [
        {
            "label": share.label,
            "dimension": ", ".join(share.moves),
            "first_order": share.first_order,
            "total": share.total,
            "linear": share.linear,
        }
        for share in found.shares
    ]
    return rows, [one.remark for one in found.scatter if one.remark]
