"""A result as plain text, at most 80 columns wide, aligned, the same on a terminal and in a pipe."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from inverse.study.result import Design, ObjectiveRow, Result
from inverse.units import Kind, format_quantity, quantity_dimension

BAR = 15
"""Width of the bar that shows a window with the value in it."""

MOST_MODES = 12

MOST_SENTENCES = 12


def summary(result: Result) -> str:
    """The first things a reader wants: the answer, what was asked, the parts to order, and why if not."""
    blocks = [f"{result.status.upper()}: {result.message}"]
    blocks += [f"note: {warning}" for warning in result.warnings]
    if result.objectives:
        blocks.append(objectives_table(result.objectives))
    if result.variables:
        blocks.append(variables_table(result))
    if result.tolerance is not None:
        blocks.append(worst_table(result.tolerance["worst_case"]))
        if told := [row["sentence"] for row in result.tolerance["sensitivities"]]:
            blocks.append("\n".join(told[:MOST_SENTENCES]))
        blocks += [f"note: {remark}" for remark in result.tolerance.get("remarks", ())]
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
    table = [("objective", "asked", "achieved", "", "")]
    for row in rows:
        verdict = {True: "met", False: "missed", None: ""}[row.met]
        table.append((row.label, asked(row), shown(row.achieved, row.unit), window_bar(row), verdict))
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
    """The variables, those of other designs beside them."""
    head = ("variable", "value", *(f"design {i}" for i in range(2, 2 + len(result.alternatives))))
    table = [head[: 2 + min(len(result.alternatives), 3)]]
    for name, value in result.variables.items():
        unit = result.design.variable_units[name]
        others = [shown(design.variables[name], unit) for design in result.alternatives[:3]]
        table.append((name, shown(value, unit), *others))
    return aligned(table)


def worst_table(rows: Sequence[Mapping[str, Any]]) -> str:
    """The farthest builds found within the tolerances."""
    table = [("worst builds found", "lowest", "highest")]
    table += [(row["label"], shown(row["low"], row["unit"]), shown(row["high"], row["unit"])) for row in rows]
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
    """Columns padded to the widest entry, long names cut in the middle."""
    cut = [[_short(cell, 40 if i == len(row) - 1 else 34) for i, cell in enumerate(row)] for row in table]
    widths = [max(len(row[i]) for row in cut if i < len(row)) for i in range(max(map(len, cut)))]
    return "\n".join("  ".join(cell.ljust(w) for cell, w in zip(row, widths, strict=False)).rstrip() for row in cut)


def _short(text: str, width: int = 34) -> str:
    clean = "".join(c if c.isprintable() else "�" for c in text)
    return clean if len(clean) <= width else f"{clean[: width // 2 - 1]}…{clean[-(width // 2) :]}"
