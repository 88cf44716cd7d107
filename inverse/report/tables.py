"""A result as plain text, at most 80 columns wide, aligned; `print_summary` adds colour where a terminal shows it."""

from __future__ import annotations

import re
import textwrap
from collections.abc import Mapping, Sequence
from typing import Any

from inverse.study.result import Design, ObjectiveRow, Result
from inverse.units import Kind, format_quantity, quantity_dimension

BAR = 15
"""Width of the bar that shows a window with the value in it."""

MOST_MODES = 12

MOST_PARTS = 20

WIDTH = 80

NARROWEST = 8
"""Columns are not wrapped below this width."""

LONGEST = 60
"""Names are cut in the middle beyond this length."""

MOST_SENTENCES = 12


def summary(result: Result) -> str:
    """The first things a reader wants: the answer, what was asked, the parts to order, and why if not."""
    blocks = [wrapped(f"{result.status.upper()}: {result.message}")]
    blocks += [wrapped(f"note: {warning}") for warning in result.warnings]
    if result.objectives:
        blocks.append(objectives_table(result.objectives))
    if result.variables:
        blocks.append(variables_table(result))
    if result.command == "size":
        blocks.append(parts_table(result.design))
    if result.reach:
        blocks.append(reach_table(result.reach))
    if result.tolerance is not None:
        blocks.append(worst_table(result.tolerance["worst_case"]))
        if told := [row["sentence"] for row in result.tolerance["sensitivities"]]:
            blocks.append("\n".join(wrapped(line) for line in told[:MOST_SENTENCES]))
        blocks += [wrapped(f"note: {remark}") for remark in result.tolerance.get("remarks", ())]
        if recentred := result.tolerance.get("recentred"):
            blocks.append(recentred_table(result, recentred))
    if result.command == "modes" or not result.objectives:
        blocks.append(modes_table(result.design))
    return "\n\n".join(blocks)


def shown(value: float | None, unit: str) -> str:
    """A number with a fitting prefix."""
    if value is None:
        return "–"
    if unit == "1":
        return f"{value:.5g}"
    kind = next((kind for kind in Kind if kind.unit == unit), None)
    return format_quantity(value, kind or quantity_dimension(f"1 {unit}")[1])


def objectives_table(rows: Sequence[ObjectiveRow]) -> str:
    """One line per objective."""
    table = [("objective", "asked", "achieved", "margin", "", "")]
    for row in rows:
        verdict = {True: "met", False: "missed", None: ""}[row.met]
        margin = shown(row.margin, row.unit) if row.met is not None else ""
        table.append((row.label, asked(row), shown(row.achieved, row.unit), margin, window_bar(row), verdict))
    return aligned(table)


def asked(row: ObjectiveRow) -> str:
    """What a row asks for, in words."""
    given = row.asked
    if "bands" in given:
        return "none in " + ", ".join(f"{shown(low, 'Hz')} to {shown(high, 'Hz')}" for low, high in given["bands"])
    if "target" in given:
        return f"{shown(given['target'], row.unit)} ± {shown(given['within'], row.unit)}"
    if "at_least" in given:
        return f"≥ {shown(given['at_least'], row.unit)}"
    if "at_most" in given:
        return f"≤ {shown(given['at_most'], row.unit)}"
    return "least" if "minimise" in given else "greatest"


def window_bar(row: ObjectiveRow) -> str:
    """The window between bars with the value as a dot; an arrow where it lies far outside."""
    if row.achieved is None or "target" not in row.asked:
        return ""
    low = row.asked["target"] - 2 * row.asked["within"]
    place = round((row.achieved - low) / (4 * row.asked["within"]) * (BAR - 1))
    cells = ["·"] * BAR
    cells[(BAR - 1) // 4], cells[BAR - 1 - (BAR - 1) // 4] = "[", "]"
    cells[min(max(place, 0), BAR - 1)] = "‹" if place < 0 else "›" if place >= BAR else "●"
    return "".join(cells)


def variables_table(result: Result) -> str:
    """The variables, and beside them those of other designs with what these achieve."""
    others = result.alternatives[:3]
    designs = (result.design, *others)
    table = [("variable", "value", *(f"design {i}" for i in range(2, 2 + len(others))))]
    for name, unit in result.design.variable_units.items():
        table.append((name, *(shown(design.variables[name], unit) for design in designs)))
    if others:
        for rows in zip(*(design.objectives for design in designs), strict=True):
            table.append((rows[0].label, *(shown(row.achieved, row.unit) for row in rows)))
    more = len(result.alternatives) - len(others)
    return aligned(table) + (f"\n… and {more} more designs in report.html" if more > 0 else "")


def parts_table(design: Design) -> str:
    """One line per part with its dimensions; a name without a dot, such as `gravity`, is no part."""
    parts: dict[str, list[str]] = {}
    for name, value in design.dimensions.items():
        part, _, dimension = name.partition(".")
        if dimension:
            parts.setdefault(part, []).append(f"{dimension} {shown(value, design.dimension_units[name])}")
    rows = [(part, ", ".join(dimensions)) for part, dimensions in list(parts.items())[:MOST_PARTS]]
    more = len(parts) - len(rows)
    return aligned([("part", "dimensions"), *rows]) + (f"\n… and {more} more in parts.csv" if more > 0 else "")


def reach_table(rows: Sequence[Mapping[str, Any]]) -> str:
    """What each objective can be: found at designs, and certainly not beyond."""
    table = [("within the ranges", "never below", "found from", "found to", "never above")]
    ends = ("certain_low", "found_low", "found_high", "certain_high")
    table += [(row["label"], *(shown(row[end], row["unit"]) for end in ends)) for row in rows]
    return aligned(table)


def worst_table(rows: Sequence[Mapping[str, Any]]) -> str:
    """The farthest builds found within the tolerances, and what none exceeds where that is known."""
    table = [("worst builds", "never below", "lowest found", "highest found", "never above")]
    ends = ("certain_low", "low", "high", "certain_high")
    table += [(row["label"], *(shown(row[end], row["unit"]) for end in ends)) for row in rows]
    return aligned(table)


def recentred_table(result: Result, recentred: Mapping[str, Any]) -> str:
    """Variables that a re-centred nominal design moves."""
    units = result.design.variable_units
    table = [("re-centred", "from", "to")]
    for name, value in recentred["variables"].items():
        if value != result.variables[name]:
            table.append((name, shown(result.variables[name], units[name]), shown(value, units[name])))
    return aligned(table)


def modes_table(design: Design) -> str:
    """The lowest modes with what moves most in each."""
    table = [("mode", "frequency", "moves most")]
    for mode in design.modes[:MOST_MODES]:
        sizes = {body: max(u, key=abs) for body, u in mode.shape.items()}
        most = sorted(sizes, key=lambda body: -abs(sizes[body]))[:3]
        moves = ", ".join(f"{_short(body, 14)} {sizes[body]:+.2f}" for body in most)
        table.append((str(mode.number), shown(mode.frequency_hz, "Hz"), moves))
    more = len(design.modes) - MOST_MODES
    rigid = f"\nrigid modes: {design.rigid_modes}" if design.rigid_modes else ""
    return aligned(table) + (f"\n… and {more} more in result.json" if more > 0 else "") + rigid


def aligned(table: Sequence[Sequence[str]]) -> str:
    """Columns padded to their widest entry; where that is too wide for the line, the widest columns are wrapped."""
    columns = max(map(len, table))
    cells = [[*map(_cell, row), *[""] * (columns - len(row))] for row in table]
    widths = [max(1, *map(len, column)) for column in zip(*cells, strict=True)]
    while sum(widths) + 2 * (columns - 1) > WIDTH and max(widths) > NARROWEST:
        widths[widths.index(max(widths))] -= 1
    lines = []
    for row in cells:
        wrapped_cells = [textwrap.wrap(cell, width) or [""] for cell, width in zip(row, widths, strict=True)]
        for i in range(max(map(len, wrapped_cells))):
            line = [(cell[i] if i < len(cell) else "").ljust(w) for cell, w in zip(wrapped_cells, widths, strict=True)]
            lines.append("  ".join(line).rstrip())
    return "\n".join(lines).replace("\N{NO-BREAK SPACE}", " ")


def wrapped(text: str) -> str:
    """A sentence over as many lines as it needs."""
    return "\n".join(textwrap.wrap(_printable(text), WIDTH, subsequent_indent="  ", break_on_hyphens=False))


def print_summary(result: Result) -> None:
    """Print the summary, in colour if standard output is a terminal."""
    from rich.console import Console
    from rich.text import Text

    text = Text(summary(result))
    text.highlight_regex(r"(?m)^MET:|(?<=  )met$", "bold green")
    text.highlight_regex(r"(?m)^(NOT MET|IMPOSSIBLE):|(?<=  )missed$", "bold red")
    Console(highlight=False, soft_wrap=True).print(text)


def _cell(text: str) -> str:
    """A number and its unit stay on one line."""
    return re.sub(
        r"(?<=[\d±]) (?=\S)",
        "\N{NO-BREAK SPACE}",
        _short(text, LONGEST) if len(text) > 2 * LONGEST else _printable(text),
    )


def _printable(text: str) -> str:
    return "".join(c if c.isprintable() else "�" for c in text)


def _short(text: str, width: int) -> str:
    clean = _printable(text)
    return clean if len(clean) <= width else f"{clean[: width // 2 - 1]}…{clean[-(width // 2) :]}"
