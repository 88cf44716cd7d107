"""The page and the tables: the numbers are there, and hostile names are only text."""

import re
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import pytest

from inverse import load_study
from inverse.report.charts import frequency_chart, shape_charts
from inverse.report.page import render_page
from inverse.report.tables import aligned, objectives_table, summary, window_bar, wrapped
from inverse.study.result import Certificate, Mode, ObjectiveRow

STUDIES = Path(__file__).parents[3] / "studies"
VOID = {"meta", "line", "rect", "br"}


class Balanced(HTMLParser):
    """Collects text and checks that every element is closed."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.text: list[str] = []
        self.tags: set[str] = set()

    def handle_starttag(self, tag, attrs):
        self.tags.add(tag)
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.tags.add(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        self.text.append(data)


def read(page: str) -> Balanced:
    parser = Balanced()
    parser.feed(page)
    assert parser.open == []
    return parser


@pytest.mark.parametrize("name", ["lantern_pair", "sieve", "bench", "gantry"])
def test_page_is_self_contained_and_says_the_answer(name):
    study = load_study(STUDIES / f"{name}.toml")
    result = study.size()
    page = render_page(result, study.text)
    parsed = read(page)
    text = " ".join(parsed.text)
    assert "script" not in parsed.tags
    assert "http" not in page
    assert "Every objective is met." in text
    for row in result.objectives:
        assert row.label in text
    assert study.title in text
    assert "local codes" in text
    assert len(page) < 200_000


HOSTILE = ["<script>alert(1)</script>", "\"' onload='x", "‮gnp.exe", "x" * 1000, "&amp; {{ 7*7 }}"]


@pytest.mark.parametrize("name", HOSTILE, ids=["tag", "quotes", "direction", "long", "template"])
def test_hostile_names_are_text(name):
    result = load_study(STUDIES / "lantern_pair.toml").size()
    design = result.design
    rows = tuple(replace(row, label=name) for row in design.objectives)
    modes = tuple(replace(mode, shape={name: (1.0,), "west": (-1.0,)}) for mode in design.modes)
    components = {name: ("x",), "west": ("x",)}
    changed = replace(design, objectives=rows, modes=modes, components=components)
    hostile = replace(result, title=name, warnings=(name,), design=changed)
    parsed = read(render_page(hostile, name))
    assert "script" not in parsed.tags
    assert name in "".join(parsed.text)
    assert max(map(len, objectives_table(hostile.objectives).splitlines())) <= 80
    told = summary(hostile)
    assert max(map(len, told.splitlines())) <= 80
    assert all(c.isprintable() or c == "\n" for c in told)


def row(achieved: float) -> ObjectiveRow:
    return ObjectiveRow(
        kind="frequency",
        label="f",
        asked={"target": 10.0, "within": 1.0},
        achieved=achieved,
        unit="Hz",
        met=True,
        margin=0.0,
    )


def test_bar_shows_the_value_in_its_window():
    assert window_bar(row(10.0)) == "···[···●···]···"
    assert window_bar(row(2.0)).startswith("‹")
    assert window_bar(row(20.0)).endswith("›")


def test_wide_tables_wrap_and_keep_every_word():
    cells = [
        ("objective", "asked", "", "achieved"),
        ("a long name " * 5, "none in 21.3 Hz to 21.5 Hz " * 3, "", "42.6 Hz"),
    ]
    lines = aligned(cells).splitlines()
    assert max(map(len, lines)) <= 80
    assert not any(line.rstrip().endswith(("21.3", "21.5", "42.6")) for line in lines), "a number without its unit"
    assert sorted(" ".join(lines).split()) == sorted(" ".join(" ".join(row) for row in cells).split())


def test_control_characters_do_not_reach_the_terminal():
    """ECMA-48: sequences that begin with ESC steer a terminal."""
    assert wrapped("lamp\x1b[2J") == "lamp�[2J"


def test_drawings_do_not_leave_their_picture():
    """A component of one in every direction, the largest a shape has."""
    axes = ("x", "z", "ry")
    shape = {"left": (1.0, 1.0, 1.0), "right": (-1.0, -1.0, -1.0)}
    mode = Mode(number=1, frequency_hz=2.0, damping_ratio=None, shape=shape)
    ((_, chart),) = shape_charts((mode,), {"left": axes, "right": axes})
    height = float(re.search(r'viewBox="0 0 340 ([\d.]+)"', chart)[1])
    for x, y in re.findall(r'c?x2?="([\d.-]+)" c?y2?="([\d.-]+)"', chart):
        assert 0 <= float(x) <= 340
        assert 0 <= float(y) <= height
    assert chart.count('class="moved"') == 2


def test_numbers_of_the_shapes_are_a_table_too():
    study = load_study(STUDIES / "cart.toml")
    result = study.size()
    text = read(render_page(result, study.text)).text
    for mode in result.modes[:8]:
        for u in mode.shape.values():
            assert all(f"{v:+.4f}" in text for v in u)


def test_a_proof_is_shown():
    study = load_study(STUDIES / "lantern_pair.toml")
    proof = Certificate(claim="0.6 Hz is out of reach", rule="enclosure", gap=0.14, reason="the arms are too long")
    text = " ".join(read(render_page(replace(study.size(), certificate=proof), "")).text)
    assert "0.6 Hz is out of reach (enclosure, gap 0.14). the arms are too long" in text


def test_chart_of_frequencies_names_bands_and_windows():
    result = load_study(STUDIES / "sieve.toml").size()
    chart = frequency_chart(result.modes, result.objectives)
    assert chart.count('class="band"') == 1
    assert chart.count('class="mode"') == len(result.modes)
    assert 'role="img"' in chart
