"""Charts as inline SVG: real text, an accessible name, colours from the page's own palette.

Coordinates are in user units; the page scales a picture to its column, so that its width sets the size of its text.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from html import escape

from inverse.report.tables import shown
from inverse.study.result import Mode, ObjectiveRow

WIDTH, LEFT, RIGHT = 640, 130, 20
SHAPE_WIDTH, SHAPE_LEFT, SHAPE_RIGHT = 340, 96, 52

MOST_SHAPES = 8
"""Mode shapes drawn; the rest is in result.json."""

MOST_BARS = 24
"""Components of one mode drawn as bars."""

MOST_SKETCHED = 8
"""Bodies up to which a mode is also sketched."""

SKETCH_HEIGHT, BODY_RADIUS, REACH, TURN = 64.0, 7.0, 15.0, 50.0
"""Of the sketch: its height, and how far a component of one moves [user units] and turns [degrees]."""


@dataclass(slots=True)
class Drawing:
    """An SVG picture under construction."""

    title: str
    width: float
    height: float
    parts: list[str] = field(default_factory=list)

    def add(self, tag: str, text: str = "", **attributes: object) -> None:
        """One element; underscores in attribute names become hyphens."""
        given = "".join(f' {k.rstrip("_").replace("_", "-")}="{_number(v)}"' for k, v in attributes.items())
        self.parts.append(f"<{tag}{given}>{escape(text)}</{tag}>" if text else f"<{tag}{given}/>")

    def svg(self) -> str:
        """The whole picture."""
        name, box = escape(self.title), f"0 0 {_number(self.width)} {_number(self.height)}"
        head = f'<svg role="img" aria-label="{name}" viewBox="{box}"><title>{name}</title>'
        return head + "".join(self.parts) + "</svg>"


def _number(value: object) -> str:
    if isinstance(value, float):
        return f"{value:.2f}".rstrip("0").rstrip(".")
    return escape(str(value), quote=True)


def frequency_chart(modes: Sequence[Mode], rows: Sequence[ObjectiveRow]) -> str:
    """Frequencies on one axis, with the windows asked for and the bands to keep out of."""
    windows = [row for row in rows if row.unit == "Hz" and row.kind == "frequency"]
    bands = [(row, band) for row in rows for band in row.asked.get("bands", ())]
    values = [mode.frequency_hz for mode in modes[:40]]
    values += [edge for _, band in bands for edge in band]
    values += [v for row in windows for v in _edges(row) if v is not None]
    values = [v for v in values if v > 0]
    if not values:
        return ""
    low, high = min(values), max(values)
    low, high = (low / 1.15, high * 1.15)
    logarithmic = high / low > 8

    def place(f: float) -> float:
        share = math.log(f / low) / math.log(high / low) if logarithmic else (f - low) / (high - low)
        return LEFT + (WIDTH - LEFT - RIGHT) * min(max(share, 0.0), 1.0)

    lanes = [*((row.label, band, "band") for row, band in bands)]
    lanes += [(row.label, _edges(row), "window") for row in windows]
    drawing = Drawing("Frequencies against what was asked", WIDTH, 70 + 22.0 * len(lanes))
    for i, (label, (first, last), kind) in enumerate(lanes):
        y = 12 + 22.0 * i
        a, b = place(low if first is None else first), place(high if last is None else last)
        drawing.add("rect", x=a, y=y, width=max(b - a, 2.0), height=14, class_=kind)
        drawing.add("text", _short(label), x=4, y=y + 11, class_="label")
    axis = drawing.height - 34
    drawing.add("line", x1=LEFT, y1=axis, x2=WIDTH - RIGHT, y2=axis, class_="axis")
    for tick in _ticks(low, high, logarithmic):
        drawing.add("line", x1=place(tick), y1=axis, x2=place(tick), y2=axis + 5, class_="axis")
        drawing.add("text", shown(tick, "Hz"), x=place(tick), y=axis + 20, class_="tick")
    for mode in modes[:40]:
        x = place(mode.frequency_hz)
        drawing.add("line", x1=x, y1=6, x2=x, y2=axis, class_="mode")
        drawing.add("text", str(mode.number), x=x + 3, y=axis - 3, class_="number")
    return drawing.svg()


def _edges(row: ObjectiveRow) -> tuple[float | None, float | None]:
    asked = row.asked
    if "target" in asked:
        return asked["target"] - asked["within"], asked["target"] + asked["within"]
    return asked.get("at_least"), asked.get("at_most")


def _ticks(low: float, high: float, logarithmic: bool) -> list[float]:
    if logarithmic:
        powers = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
        ticks = [m * 10.0**p for p in powers for m in (1, 2, 5)]
    else:
        step = 10.0 ** math.floor(math.log10((high - low) / 2))
        step *= next((m for m in (1, 2, 5) if (high - low) / (m * step) <= 6), 10)
        ticks = [step * k for k in range(math.floor(low / step), math.ceil(high / step) + 1)]
    return [tick for tick in ticks if low <= tick <= high]


def shape_charts(modes: Sequence[Mode], components: Mapping[str, tuple[str, ...]]) -> list[tuple[Mode, str]]:
    """The lowest modes, each as bars: one per component, right positive."""
    return [(mode, _shape(mode, components)) for mode in modes[:MOST_SHAPES]]


def _shape(mode: Mode, components: Mapping[str, tuple[str, ...]]) -> str:
    bars = [
        (body if len(u) == 1 else f"{body} {axis}", v)
        for body, u in mode.shape.items()
        for axis, v in zip(components[body], u, strict=True)
    ]
    bars = bars[:MOST_BARS]
    top = SKETCH_HEIGHT if len(mode.shape) <= MOST_SKETCHED else 0.0
    name = f"Mode {mode.number} at {shown(mode.frequency_hz, 'Hz')}"
    drawing = Drawing(name, SHAPE_WIDTH, top + 12 + 18.0 * len(bars))
    if top:
        _sketch(drawing, mode, components)
    middle = (SHAPE_LEFT + SHAPE_WIDTH - SHAPE_RIGHT) / 2
    reach = (SHAPE_WIDTH - SHAPE_LEFT - SHAPE_RIGHT) / 2
    drawing.add("line", x1=middle, y1=top + 2, x2=middle, y2=drawing.height - 2, class_="axis")
    for i, (label, value) in enumerate(bars):
        y, size = top + 6 + 18.0 * i, abs(value) * reach
        drawing.add("rect", x=middle if value >= 0 else middle - size, y=y, width=max(size, 0.5), height=12,
                    class_="forward" if value >= 0 else "backward")  # fmt: skip
        drawing.add("text", _short(label, 14), x=4, y=y + 10, class_="label")
        drawing.add("text", f"{value:+.3f}", x=SHAPE_WIDTH - 4, y=y + 10, class_="value")
    return drawing.svg()


def _sketch(drawing: Drawing, mode: Mode, components: Mapping[str, tuple[str, ...]]) -> None:
    """The bodies side by side in the order of the study, at rest (outline) and displaced (filled).

    x goes right and z up; a hand shows the turn, clockwise positive, as a rotation about y is seen along y.
    """
    pitch, y = SHAPE_WIDTH / len(mode.shape), SKETCH_HEIGHT / 2
    for i, (body, u) in enumerate(mode.shape.items()):
        moved = dict(zip(components[body], u, strict=True))
        rest = pitch * (i + 0.5)
        x_to, y_to = rest + REACH * moved.get("x", 0.0), y - REACH * moved.get("z", 0.0)
        drawing.add("circle", cx=rest, cy=y, r=BODY_RADIUS, class_="rest")
        drawing.add("circle", cx=x_to, cy=y_to, r=BODY_RADIUS, class_="moved")
        for axis in ("ry", "r"):
            if axis in moved:
                angle = math.radians(TURN * moved[axis])
                tip = (x_to + 2 * BODY_RADIUS * math.sin(angle), y_to - 2 * BODY_RADIUS * math.cos(angle))
                drawing.add("line", x1=x_to, y1=y_to, x2=tip[0], y2=tip[1], class_="mode")


def _short(text: str, width: int = 20) -> str:
    return text if len(text) <= width else text[: width - 1] + "…"
