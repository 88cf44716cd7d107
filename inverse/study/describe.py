"""A design in words and numbers: what a result records of one point."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np

from inverse.assembly.algebra import Monomial
from inverse.assembly.terms import Array
from inverse.evaluation.evaluator import Evaluation, Evaluator
from inverse.study.result import Design, Mode, ObjectiveRow
from objectives.base import AtLeast, AtMost, Maximise, Minimise, Objective, Target, met
from objectives.keep_out import KeepOut

ALL_MODES_UP_TO = 500
"""Coordinates up to which every oscillating mode is recorded."""

MODES_BEYOND = 20
"""Modes recorded beyond those asked for in larger assemblies."""

AXES = ("x", "y", "z", "rx", "ry", "rz", "r")


def evaluated(evaluator: Evaluator, x: Array) -> Evaluation:
    """One design with all the modes a record shows, its rigid modes counted where it stands."""
    evaluation = evaluator.at(x)
    needed = evaluator.modes_needed
    wanted = None
    if evaluator.model.size > ALL_MODES_UP_TO and needed is not None:
        wanted = needed + MODES_BEYOND
    state = replace(evaluation.state, wanted=wanted, known_rigid=None)
    return Evaluation(evaluator, evaluation.x, state)


def describe(evaluation: Evaluation) -> Design:
    """The record of one design."""
    model = evaluation.evaluator.model
    parameters, x = model.parameters, evaluation.x[0]
    state = evaluation.state
    values = evaluation.values()[0]
    return Design(
        variables={v.name: float(value) for v, value in zip(parameters.variables, x, strict=True)},
        variable_units={v.name: v.unit for v in parameters.variables},
        dimensions=_shown(evaluation),
        dimension_units={d.name: d.unit for d in parameters.dimensions},
        components={
            body: tuple(c.rpartition(".")[2] for c in sorted(own, key=_axis))
            for body, own in model.bodies.items()
            if own
        },
        modes=tuple(_modes(evaluation)),
        rigid_modes=state.rigid,
        objectives=tuple(
            objective_row(objective, float(value))
            for objective, value in zip(evaluation.evaluator.objectives, values, strict=True)
        ),
    )


def _shown(evaluation: Evaluation) -> dict[str, float]:
    """Dimensions as a person reads them: a product is multiplied out."""
    parameters = evaluation.evaluator.model.parameters
    base = dict(zip((d.name for d in parameters.dimensions), evaluation.state.matrices.point.values[0], strict=False))
    return {d.name: _value(d.shown, base) for d in parameters.dimensions}


def _value(term: Monomial, known: Mapping[str, float]) -> float:
    return float(term.coefficient * np.prod([known[name] ** power for name, power in term.powers]))


def _modes(evaluation: Evaluation) -> list[Mode]:
    state = evaluation.state
    model, modes = evaluation.evaluator.model, state.modes
    names = tuple(model.components)
    motion = (state.matrices.component_rows(names) @ modes.shapes)[0]
    records = []
    for j in range(modes.rigid, modes.eigenvalues.shape[1]):
        if not modes.eigenvalues[0, j] > 0:
            continue
        column = motion[:, j] / motion[np.argmax(np.abs(motion[:, j])), j]
        shown = dict(zip(names, column, strict=True))
        shape = {
            body: tuple(float(shown[c]) for c in sorted(own, key=_axis)) for body, own in model.bodies.items() if own
        }
        frequency = float(np.sqrt(modes.eigenvalues[0, j]) / (2 * np.pi))
        records.append(Mode(number=j - modes.rigid + 1, frequency_hz=frequency, damping_ratio=None, shape=shape))
    return records


def _axis(component: str) -> int:
    return AXES.index(component.rpartition(".")[2])


def objective_row(objective: Objective, value: float) -> ObjectiveRow:
    """One objective's row: what was asked, what is achieved, and the margin."""
    requirement = objective.requirement
    asked: dict[str, Any]
    match requirement:
        case Target(target, within):
            asked = {"target": target, "within": within}
        case AtLeast(limit):
            asked = {"at_least": limit}
        case AtMost(limit):
            asked = {"at_most": limit}
        case Minimise():
            asked = {"minimise": True}
        case Maximise():
            asked = {"maximise": True}
    if isinstance(objective, KeepOut):
        asked["bands"] = [list(band) for band in objective.bands]
    known = bool(np.isfinite(value))
    verdict = met(requirement, np.array([value]))
    margin = None
    if known and not isinstance(requirement, Minimise | Maximise):
        margin = float(requirement.margin(np.array([value]))[0])
    return ObjectiveRow(
        kind=objective.kind,
        label=objective.label,
        asked=asked,
        achieved=value if known else None,
        unit=objective.unit,
        met=None if verdict is None else bool(verdict[0]),
        margin=margin,
    )
