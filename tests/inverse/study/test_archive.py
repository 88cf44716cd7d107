"""Results as files and back: what was written is read, whole or not at all."""

import csv
import io
import json
import os
from dataclasses import replace

import pytest

from inverse.design.shortfall import Shortfall
from inverse.design.verification import Verification
from inverse.errors import StudyError
from inverse.study.archive import load_result, parts_text, record_text, save_result
from inverse.study.result import Certificate, Design, Mode, ObjectiveRow, Result, Status


@pytest.fixture
def result():
    """A made-up pair in which every optional part of the record is filled."""
    shapes = ({"east": (1.0,), "stage": (-0.25, 0.0, 1e-9)}, {"east": (0.1,), "stage": (1.0, -0.5, 0.125)})
    design = Design(
        variables={"arm": 1.9377, "rate": 0.1 + 0.2},
        variable_units={"arm": "m", "rate": "N/m"},
        dimensions={"gravity": 9.8156, "east.length": 1.9377, "east.mass": 6.5, "tie.rate": 0.1 + 0.2},
        dimension_units={"gravity": "m/s^2", "east.length": "m", "east.mass": "kg", "tie.rate": "N/m"},
        components={"east": ("x",), "stage": ("x", "z", "ry")},
        modes=tuple(
            Mode(number=i + 1, frequency_hz=0.36 + i, damping_ratio=None, shape=shape) for i, shape in enumerate(shapes)
        ),
        rigid_modes=1,
        objectives=(
            ObjectiveRow(
                kind="keep out",
                label="Große Bänder",
                asked={"bands": [[21.3, 21.5], [42.6, 55.0]]},
                achieved=None,
                unit="Hz",
                met=False,
                margin=None,
            ),
        ),
    )
    return Result(
        study="pair",
        title="Pair",
        command="size",
        status=Status.NOT_MET,
        message="missed",
        route="gradient",
        seed=7,
        design=design,
        alternatives=(replace(design, rigid_modes=0),),
        shortfall=Shortfall(missed=("a",), held={"arm": "low"}, opposed=(("a", "b"),), relaxations=("widen a",)),
        verification=Verification(method="twice", largest_difference=1e-15, agrees=True),
        certificate=Certificate(claim="out of reach", rule="enclosure", gap=0.5, reason="too short"),
        warnings=("a close call",),
        modal_solves=3,
        wall_s=0.25,
        versions={"modewright": "0.1.0"},
    )


def test_a_result_reads_back_equal(result, tmp_path):
    assert load_result(save_result(result, tmp_path / "new/folder")) == result


def test_the_same_result_gives_the_same_bytes(result, tmp_path):
    first = save_result(result, tmp_path / "first")
    second = save_result(load_result(first), tmp_path / "second")
    for name in ("result.json", "parts.csv"):
        text = (first / name).read_bytes()
        assert text == (second / name).read_bytes()
        assert text.endswith(b"\n")
        assert b"\r" not in text


@pytest.mark.parametrize("value", [float("nan"), float("inf"), float("-inf")])
def test_numbers_that_are_not_finite_are_null(result, value):
    """RFC 8259, section 6: JSON has no NaN and no infinity."""
    rows = (replace(result.objectives[0], achieved=value, margin=value),)
    changed = replace(result, design=replace(result.design, objectives=rows))

    def refused(name):
        raise AssertionError(f"{name} is no JSON")

    row = json.loads(record_text(changed), parse_constant=refused)["objectives"][0]
    assert row["achieved"] is None
    assert row["margin"] is None


def test_parts_list_has_a_row_per_dimension_and_gravity_is_no_part(result):
    rows = list(csv.DictReader(io.StringIO(parts_text(result))))
    assert [(r["part"], r["dimension"], float(r["value"]), r["unit"]) for r in rows] == [
        ("east", "length", 1.9377, "m"),
        ("east", "mass", 6.5, "kg"),
        ("tie", "rate", 0.1 + 0.2, "N/m"),
    ]


def test_extra_texts_are_written_beside(result, tmp_path):
    save_result(result, tmp_path, {"report.html": "<p>Grüße</p>\n"})
    assert (tmp_path / "report.html").read_text(encoding="utf-8") == "<p>Grüße</p>\n"


def test_what_cannot_be_replaced_stays_as_it_was(result, tmp_path, monkeypatch):
    save_result(result, tmp_path)
    before = (tmp_path / "result.json").read_bytes()

    def full(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", full)
    with pytest.raises(StudyError, match="No space left"):
        save_result(replace(result, message="other"), tmp_path)
    monkeypatch.undo()
    assert (tmp_path / "result.json").read_bytes() == before
    assert sorted(p.name for p in tmp_path.iterdir()) == ["parts.csv", "result.json"]


def test_a_folder_without_result_says_so(tmp_path):
    with pytest.raises(StudyError, match=r"result\.json: cannot read a result"):
        load_result(tmp_path)
