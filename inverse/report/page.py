"""The page: one self-contained file that a colleague can check a design from."""

from __future__ import annotations

from functools import cache
from pathlib import Path

from jinja2 import Environment, Template
from markupsafe import Markup

from inverse.report.charts import MOST_BARS, MOST_SHAPES, frequency_chart, shape_charts
from inverse.report.tables import asked, shown
from inverse.study.result import Result, Status

MOST_MODES = 40

MOST_COMPONENTS = 200
"""Components in the table of mode shapes."""

ANSWERS = {
    Status.MET: "Every objective is met.",
    Status.NOT_MET: "Not every objective is met.",
    Status.IMPOSSIBLE: "Proved impossible within the ranges.",
}

LITERATURE = {
    "gradient": (
        "Derivatives of frequencies and shapes: Fox and Kapoor, AIAA Journal 6(12), 1968.",
        "Many starts until further ones repeat: Boender and Rinnooy Kan, Mathematical Programming 37, 1987.",
    ),
}

CAUTIONS = (
    (
        ("length", "rod_mass"),
        "Suspended and swinging masses can fall and strike. Have hangers, pivots and ties dimensioned and checked by a "
        "licensed person for strength, fatigue and wear, secure them against falling, keep people out of the swing, "
        "and follow the local codes.",
    ),
    (
        ("rate", "rates", "preload"),
        "Stressed springs store energy. Keep to the maker's limits of load and travel, release them before work on the "
        "assembly, and follow the local codes.",
    ),
    (
        ("N m/rad",),
        "Turning parts can burst and catch. Guard them, keep to permitted speeds, and have shafts and couplings "
        "checked for strength by a licensed person under the local codes.",
    ),
    (
        ("area", "position"),
        "A frame that carries people or loads over people is a structure: frequency and weight are no check of "
        "strength, buckling or fixings. Leave that to licensed practice under the local codes.",
    ),
)


@cache
def _template() -> Template:
    source = Path(__file__).with_name("page.html.j2").read_text(encoding="utf-8")
    return Environment(autoescape=True, trim_blocks=True, lstrip_blocks=True).from_string(source)


def render_page(result: Result, study_text: str) -> str:
    """``report.html`` of a result; names and texts of the study appear as text, whatever they hold."""
    design = result.design
    beyond = len(design.modes) - MOST_MODES
    return _template().render(
        result=result,
        heading=result.title or result.study,
        answer=ANSWERS[result.status] if result.objectives else "Modes of the design as it stands.",
        alternatives=range(2, 2 + len(result.alternatives)),
        variables=[
            {
                "name": name,
                "cells": [
                    shown(one.variables[name], design.variable_units[name]) for one in (design, *result.alternatives)
                ],
            }
            for name in result.variables
        ],
        achieved=[
            {"name": rows[0].label, "cells": [shown(row.achieved, row.unit) for row in rows]}
            for rows in zip(*(one.objectives for one in (design, *result.alternatives)), strict=True)
            if result.alternatives
        ],
        dimensions=[(name, shown(value, design.dimension_units[name])) for name, value in result.dimensions.items()],
        objectives=[
            {
                "label": row.label,
                "asked": asked(row),
                "achieved": shown(row.achieved, row.unit),
                "margin": shown(row.margin, row.unit),
                "met": row.met,
            }
            for row in result.objectives
        ],
        reach=[
            {
                "label": row["label"],
                "cells": [
                    shown(row[end], row["unit"]) for end in ("certain_low", "found_low", "found_high", "certain_high")
                ],
            }
            for row in result.reach or ()
        ],
        worst=[
            {
                "label": row["label"],
                "cells": [shown(row[end], row["unit"]) for end in ("certain_low", "low", "high", "certain_high")],
            }
            for row in (result.tolerance or {}).get("worst_case", ())
        ],
        frequency_chart=Markup(frequency_chart(design.modes, result.objectives)),
        modes=[
            {
                "number": mode.number,
                "frequency": shown(mode.frequency_hz, "Hz"),
                "period": shown(1 / mode.frequency_hz, "s"),
            }
            for mode in design.modes[:MOST_MODES]
        ],
        more_modes=f"{beyond} more modes are in result.json. " if beyond > 0 else "",
        rigid=f"Rigid modes: {design.rigid_modes}." if design.rigid_modes else "",
        shapes=[
            ({"number": mode.number, "frequency": shown(mode.frequency_hz, "Hz")}, Markup(chart))
            for mode, chart in shape_charts(design.modes, design.components)
        ],
        shape_heads=[mode.number for mode in design.modes[:MOST_SHAPES]],
        shape_rows=_shape_rows(result)[:MOST_COMPONENTS],
        most_bars=MOST_BARS,
        versions=", ".join(f"{name} {version}" for name, version in result.versions.items()),
        literature=LITERATURE.get(result.route, ()),
        cautions=_cautions(result),
        study_text=study_text,
    )


def _shape_rows(result: Result) -> list[tuple[str, list[str]]]:
    """The numbers of the shapes drawn: a row for every component, a column for every mode."""
    modes = result.design.modes[:MOST_SHAPES]
    return [
        (body if len(axes) == 1 else f"{body} {axis}", [f"{mode.shape[body][i]:+.4f}" for mode in modes])
        for body, axes in result.design.components.items()
        for i, axis in enumerate(axes)
        if all(body in mode.shape for mode in modes)
    ]


def _cautions(result: Result) -> list[str]:
    """What can hurt somebody in an assembly with such parts."""
    known = {name.split(".")[1] for name in result.dimensions if "." in name}
    known |= set(result.design.dimension_units.values())
    return [words for triggers, words in CAUTIONS if known & set(triggers)]
