"""The command line: exit status, what goes where, and nothing half written."""

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner

from inverse.cli import main
from inverse.study.archive import load_result, record_text

STUDIES = Path(__file__).parents[2] / "studies"


@pytest.fixture
def run(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    return lambda *arguments: CliRunner().invoke(main, [str(a) for a in arguments])


def impossible(folder: Path) -> Path:
    """The lantern pair asked for a frequency its arms cannot reach."""
    text = (STUDIES / "lantern_pair.toml").read_text(encoding="utf-8").replace('"0.36 Hz"', '"0.6 Hz"')
    path = folder / "too_fast.toml"
    path.write_text(text, encoding="utf-8")
    return path


def test_met_is_zero_and_leaves_its_files(run, tmp_path):
    done = run("size", STUDIES / "lantern_pair.toml")
    assert done.exit_code == 0, done.output
    folder = tmp_path / "out/lantern_pair"
    assert {p.name for p in folder.iterdir()} == {"result.json", "parts.csv", "report.html", "study.toml"}
    record = json.loads((folder / "result.json").read_text(encoding="utf-8"))
    assert record["status"] == "met"
    assert record["variables"]["arm"]["unit"] == "m"
    assert set(record["evaluations"]) == {"modal_solves", "wall_s"}
    assert (folder / "parts.csv").read_text().startswith("part,dimension,value,unit,tolerance,stock part number\n")


def test_not_met_is_one_and_says_what_would_do(run, tmp_path):
    done = run("size", impossible(tmp_path))
    assert done.exit_code == 1
    assert "open the range of `arm` down to" in " ".join(done.output.split())


def test_impossible_is_said_with_its_proof(run, tmp_path):
    """Arms of 1.2 m and more swing at 0.4575 Hz at most: g/L with the rod's share, by hand 0.45747 Hz."""
    done = run("size", impossible(tmp_path))
    record = load_result("out/too_fast")
    assert done.exit_code == 1
    assert record.status == "impossible"
    assert "`frequency 1`" in record.certificate.claim
    assert abs(record.certificate.gap - (0.6 - 0.003 - 0.45747)) < 1e-4


def test_reach_brackets_what_can_be_attained(run):
    assert run("reach", STUDIES / "lantern_pair.toml", "--out", "bounds").exit_code == 0
    result = load_result("bounds")
    assert result.status == "met"
    for row in result.reach:
        assert row["certain_low"] <= row["found_low"] <= row["found_high"] <= row["certain_high"]
    frequency = result.reach[0]
    assert frequency["found_high"] == pytest.approx(0.45747, abs=1e-4)
    assert frequency["certain_high"] == pytest.approx(frequency["found_high"], rel=1e-6)


def test_reach_proves_the_impossible(run, tmp_path):
    assert run("reach", impossible(tmp_path), "--out", "bounds").exit_code == 1
    assert load_result("bounds").status == "impossible"


def test_faults_of_the_file_are_two_with_one_line_and_no_folder(run, tmp_path):
    (tmp_path / "bad.toml").write_text("title = 3", encoding="utf-8")
    done = run("size", "bad.toml")
    assert done.exit_code == 2
    assert "Traceback" not in done.output
    assert not (tmp_path / "out").exists()
    assert run("size", "missing.toml").exit_code == 2
    assert run("size").exit_code == 2
    assert run("nonsense").exit_code == 2


def test_a_variable_without_value_is_named(run):
    done = run("modes", STUDIES / "lantern_pair.toml")
    assert done.exit_code == 2
    assert "no value for `arm`" in done.output
    assert "--design" in done.output


def test_json_prints_the_record_and_nothing_else(run, tmp_path):
    done = run("size", STUDIES / "lantern_pair.toml", "--json")
    assert done.output == (tmp_path / "out/lantern_pair/result.json").read_text(encoding="utf-8")
    json.loads(done.output)


def test_output_fits_eighty_columns_and_lists_the_parts(run):
    for name in ("pump_train", "bench", "cart"):
        output = run("size", STUDIES / f"{name}.toml").output
        assert max(map(len, output.splitlines())) <= 80
        assert "part " in output
    assert "\x1b" not in output, "no colour in a pipe"


@pytest.mark.parametrize("encoding", ["ascii", "cp1252"])
def test_a_pipe_of_another_encoding_costs_no_run(tmp_path, encoding):
    done = subprocess.run(
        [sys.executable, "-m", "inverse", "size", STUDIES / "lantern_pair.toml", "--out", tmp_path],
        env=os.environ | {"PYTHONIOENCODING": encoding},
        capture_output=True,
        check=False,
    )
    assert (done.returncode, done.stderr) == (0, b"")


def test_a_reader_that_leaves_early_is_no_fault(tmp_path):
    # The read end is closed before anything is written, so that the first print finds no reader.
    reader, writer = os.pipe()
    os.close(reader)
    with os.fdopen(writer, "wb") as closed:
        done = subprocess.run(
            [sys.executable, "-m", "inverse", "size", STUDIES / "lantern_pair.toml", "--out", tmp_path],
            stdout=closed,
            stderr=subprocess.PIPE,
            check=False,
        )
    assert (done.returncode, done.stderr) == (0, b"")
    assert (tmp_path / "report.html").exists()


def test_quiet_prints_nothing(run):
    assert run("size", STUDIES / "lantern_pair.toml", "--quiet").output == ""


def test_modes_takes_the_design_of_an_earlier_run(run, tmp_path):
    assert run("size", STUDIES / "lantern_pair.toml", "--out", "first", "--quiet").exit_code == 0
    assert run("modes", STUDIES / "lantern_pair.toml", "--design", "first", "--out", "second").exit_code == 0
    one, two = load_result("first"), load_result("second")
    assert one.variables == two.variables
    assert [m.number for m in two.modes] == [1, 2]


def test_report_makes_the_page_again(run, tmp_path):
    run("size", STUDIES / "lantern_pair.toml", "--out", "first", "--quiet")
    page = tmp_path / "first/report.html"
    before = page.read_bytes()
    page.unlink()
    assert run("report", "first").exit_code == 0
    assert page.read_bytes() == before


def test_a_result_reads_back_as_it_was(run, tmp_path):
    run("size", STUDIES / "pump_train.toml", "--out", "first", "--quiet")
    text = (tmp_path / "first/result.json").read_text(encoding="utf-8")
    assert record_text(load_result("first")) == text


@pytest.mark.parametrize("damage", ["", "{}", "[1]", '{"status": "met"', "\x00"])
def test_a_damaged_result_is_refused(run, tmp_path, damage):
    (tmp_path / "result.json").write_text(damage, encoding="utf-8")
    done = run("report", tmp_path)
    assert done.exit_code == 2
    assert "no result file" in done.output


def test_a_folder_that_cannot_be_made_is_a_fault_of_the_command(run, tmp_path):
    (tmp_path / "taken").write_text("a file")
    done = run("size", STUDIES / "lantern_pair.toml", "--out", "taken/inside")
    assert done.exit_code == 2
    assert "cannot write" in done.output


def test_internal_faults_are_three_and_keep_their_traceback_for_debug(run, monkeypatch):
    import inverse.study.study

    def broken(*_, **__):
        raise RuntimeError("nothing to see")

    monkeypatch.setattr(inverse.study.study.Study, "size", broken)
    done = run("size", STUDIES / "lantern_pair.toml")
    assert done.exit_code == 3
    assert "internal fault: RuntimeError: nothing to see" in done.output
    assert isinstance(run("size", STUDIES / "lantern_pair.toml", "--debug").exception, RuntimeError)


def test_tolerance_judges_the_nominal_design_and_draws_builds(run, tmp_path):
    run("size", STUDIES / "lantern_pair.toml", "--out", "first", "--quiet")
    done = run("tolerance", STUDIES / "lantern_pair.toml", "--design", "first", "--out", "second")
    assert done.exit_code == 0
    shop = load_result("second").tolerance
    asked = {"yield", "yield_low", "yield_high", "confidence", "builds", "worst_case", "contributions", "sensitivities"}
    assert asked <= set(shop)
    assert shop["builds"] >= 10**5
    assert 0.99 < shop["yield_low"] < shop["yield"] < shop["yield_high"] <= 1
    beat = shop["worst_case"][1]
    assert beat["high"] > 42.0, "the worst build misses the window while nearly every build passes"
    assert run("tolerance", STUDIES / "cart.toml").exit_code == 2


def test_recentring_moves_a_design_off_the_edge(run):
    """The pump train sized for least change sits on an edge of a band: half the builds miss it."""
    run("size", STUDIES / "pump_train.toml", "--out", "first", "--quiet")
    done = run("tolerance", STUDIES / "pump_train.toml", "--design", "first", "--out", "second")
    shop = load_result("second").tolerance
    assert shop["yield"] < 0.6
    assert shop["recentred"]["yield_after"] > 0.999
    assert "re-centred" in done.output


def test_schema_is_json(run):
    assert json.loads(run("schema").output)["type"] == "object"


def test_version_is_that_of_the_package():
    from importlib.metadata import version

    from inverse.study.study import VERSION

    assert version("modewright") == VERSION


NOTHING_ASKED = """
[variables.k]
range = ["1 N/m", "4 N/m"]
[[body]]
name = "a"
kind = "mass"
mass = "1 kg"
[[link]]
name = "s"
kind = "spring"
between = ["a", "ground"]
rate = "k"
[[tolerance]]
on = ["s.rate"]
each = "5 %"
"""


@pytest.mark.parametrize("command", ["size", "modes", "tolerance"])
def test_without_objectives_the_status_is_met(run, tmp_path, command):
    text = (
        NOTHING_ASKED if command == "size" else NOTHING_ASKED.replace('range = ["1 N/m", "4 N/m"]', 'value = "2 N/m"')
    )
    (tmp_path / "bare.toml").write_text(text, encoding="utf-8")
    done = run(command, "bare.toml")
    assert done.exit_code == 0, done.output
    assert load_result("out/bare").status == "met"
