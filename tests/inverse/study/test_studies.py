"""Every study in `studies/` does its job, every script runs, and the README's example says what happens."""

import re
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from inverse import load_study
from inverse.study.result import Status

ROOT = Path(__file__).parents[3]
STUDIES = sorted((ROOT / "studies").glob("*.toml"))
SCRIPTS = sorted((ROOT / "studies").glob("*.py"))


@pytest.fixture(scope="module")
def sized():
    """Results by study, each computed once."""
    return {path.stem: load_study(path).size() for path in STUDIES}


@pytest.mark.parametrize("name", [path.stem for path in STUDIES])
def test_study_is_met_and_confirmed_by_the_second_path(sized, name):
    result = sized[name]
    assert result.status is Status.MET, result.message
    assert result.verification.agrees
    assert result.verification.largest_difference < 1e-9


def test_row_of_five_says_what_completeness_its_parts_allow(sized):
    rows = {row.label: row for row in sized["lantern_row"].objectives}
    assert rows["transfer completeness first-fifth"].achieved >= 0.95
    assert rows["what the parts allow"].achieved >= 0.99
    assert rows["what the parts allow"].met is None


def test_same_seed_gives_the_same_record():
    study = load_study(ROOT / "studies/micro_pair.toml")
    first, second = (study.size(seed=3).as_record() for _ in range(2))
    for record in (first, second):
        record["evaluations"]["wall_s"] = 0.0
    assert first == second


def test_a_design_can_be_judged_again():
    study = load_study(ROOT / "studies/lantern_pair.toml")
    sized = study.size()
    judged = study.modes(sized.variables)
    assert judged.status is Status.MET
    np.testing.assert_allclose(
        [row.achieved for row in judged.objectives], [row.achieved for row in sized.objectives], rtol=1e-14
    )


@pytest.mark.parametrize("path", SCRIPTS, ids=lambda p: p.stem)
def test_script_runs(path, tmp_path):
    arguments = (
        [str(ROOT / "studies/lantern_pair.toml"), str(tmp_path / "picture.svg")] if path.stem == "exchange" else []
    )
    run = subprocess.run(
        [sys.executable, str(path), *arguments], capture_output=True, text=True, cwd=ROOT, check=False, timeout=120
    )
    assert run.returncode == 0, run.stderr


def test_python_example_of_the_readme(tmp_path, monkeypatch, capsys):
    (example,) = re.findall(r"```python\n(.*?)```", (ROOT / "README.md").read_text(encoding="utf-8"), re.S)
    monkeypatch.chdir(tmp_path)
    (tmp_path / "studies").symlink_to(ROOT / "studies")
    exec(compile(example, "README.md", "exec"), {})
    assert capsys.readouterr().out == "met 1.9377\n"
    assert (tmp_path / "out/lantern_pair/result.json").exists()


def test_tables_as_data_frames():
    result = load_study(ROOT / "studies/cart.toml").size()
    frame = result.to_frame("modes")
    assert list(frame.columns) == ["number", "frequency [Hz]", "damping ratio [1]", "cart.z", "cart.ry"]
    assert result.to_frame("objectives")["met"].tolist() == [True, True]
    assert result.to_frame("dimensions").set_index("name").loc["cart.mass", "value"] == 420.0
    assert result.to_frame("variables")["unit"].tolist() == ["N/m", "N/m"]
    with pytest.raises(ValueError, match="no table `nonsense`"):
        result.to_frame("nonsense")


def test_readme_shows_what_the_command_prints(tmp_path, monkeypatch):
    from click.testing import CliRunner

    from inverse.cli import main

    monkeypatch.chdir(tmp_path)
    printed = CliRunner().invoke(main, ["size", str(ROOT / "studies/lantern_pair.toml")])
    assert printed.exit_code == 0
    assert printed.output.strip() in (ROOT / "README.md").read_text(encoding="utf-8")
