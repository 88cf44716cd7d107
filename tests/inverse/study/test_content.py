"""What a study says arrives in SI, under the names of the study."""

import subprocess
import sys
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from inverse.assembly.bodies import Joint, Mass, Pendulum, Platform, Rotor
from inverse.assembly.parameters import Variable
from inverse.gravity import normal_gravity
from inverse.study.content import (
    Adjustment,
    Load,
    SolveSettings,
    StockItem,
    StockList,
    StockSeries,
    Swing,
    Tolerance,
    TolerancePrice,
)
from inverse.study.names import components_of
from inverse.study.reading import parse_study, read_study
from inverse.units import Product, Window
from objectives.base import AtLeast, AtMost, Maximise, Minimise, Target
from objectives.state import Like, Sag

STUDIES = Path(__file__).parents[3] / "studies"
ROUNDING = 1e-15  # relative: one factor of a unit


@pytest.fixture(scope="module")
def content(everything, folder):
    return parse_study(everything, folder, "all")


@pytest.mark.parametrize("path", sorted(STUDIES.glob("*.toml")), ids=lambda path: path.stem)
def test_every_worked_study_is_read_without_a_warning(path):
    content = read_study(path)
    assert content.warnings == ()
    assert content.name == path.stem
    assert content.text == path.read_text("utf-8")
    assert content.objectives


def test_the_lantern_pair_is_what_its_file_says():
    content = read_study(STUDIES / "lantern_pair.toml")
    arm, rate = content.variables
    assert arm == Variable(name="arm", low=1.2, high=2.6, unit="m")
    assert rate == Variable(name="rate", low=0.5, high=60, start=8, unit="N/m")
    east, west = content.assembly.bodies
    followed = Product(1.0, (("arm", Fraction(1)),))
    assert east == Pendulum(name="east", mass=6.5, length=followed, rod_mass=0.4)
    assert west == Pendulum(name="west", mass=6.5, length=followed, rod_mass=0.4)
    assert [(o.kind, o.label) for o in content.objectives] == [
        ("frequency", "frequency 1"),
        ("beat period", "beat period 1-2"),
    ]
    assert content.objectives[0].requirement == Target(0.36, pytest.approx(0.0018, rel=ROUNDING))
    assert content.objectives[1].requirement == Target(40, 2)
    assert content.objectives[1].between == (1, 2)
    assert [t.dimensions for t in content.tolerances] == [("east.length", "west.length"), ("tie.rate",)]
    assert content.damping_ratios == {"east": 0.002, "west": 0.002}
    assert content.solve == SolveSettings(seed=20261201)
    assert content.assembly.gravity == 9.8156


def test_variables_keep_their_unit_range_start_and_stock(content):
    known = {v.name: v for v in content.variables}
    assert known["wire"] == Variable(name="wire", low=0.001, high=0.004, start=0.002, unit="m", stock="preferred")
    assert known["offset"] == Variable(name="offset", low=-0.2, high=0.2, start=0, unit="m")
    assert known["turns"] == Variable(name="turns", low=4, high=12, start=8, unit="1", stock="counts")
    assert known["steel"] == Variable(name="steel", low=79.3e9, high=79.3e9, unit="Pa")


def test_a_variable_that_is_a_frequency_counts_radians(folder):
    """So that the rate of `mass * pace^2` is m ω², by plain algebra."""
    text = '[variables.pace]\nrange = ["1 Hz", "60 cpm", ]\n'.replace('"60 cpm", ', '"3 Hz"')
    (pace,) = parse_study(text, folder, "pace").variables
    assert pace.unit == "rad/s"
    assert_allclose((pace.low, pace.high), (2 * np.pi, 6 * np.pi), rtol=ROUNDING)


def test_gravity_is_that_of_the_place(content, folder):
    assert content.assembly.gravity == normal_gravity(np.radians(54.3), 12)
    assert parse_study("", folder, "empty").assembly.gravity == 9.80665
    text = '[variables.g]\nrange = ["9.7 m/s^2", "9.9 m/s^2"]\n'
    assert parse_study('gravity = "g"\n' + text, folder, "varied").assembly.gravity == Product(
        1.0, (("g", Fraction(1)),)
    )
    assert parse_study('gravity = "0 m/s^2"\n', folder, "afloat").assembly.gravity == 0


def test_the_components_are_those_of_the_compiled_assembly(content):
    model = content.model
    for body in content.assembly.bodies:
        assert set(components_of(body)) == set(model.bodies[body.name])
    kinds = {type(body) for body in content.assembly.bodies}
    assert kinds == {Mass, Pendulum, Rotor, Platform, Joint}


def test_objectives_stand_in_file_order_with_labels_of_their_own(content):
    assert [o.label for o in content.objectives] == [
        "frequency 1",
        "out of step",
        "period 2",
        "splitting 1-2",
        "beat period 1-2",
        "frequency ratio 2-1",
        "keep out 13.5-16.5 Hz",
        "keep out orders 1, 2",
        "transfer time east-west",
        "transfer completeness stage.z-stage.ry",
        "handed amplitude east-west",
        "shape 1",
        "nodal point 1 bench",
        "nodal point 1 motor r",
        "energy share 1 bench z",
        "sag deck",
        "sag bench",
        "sag rise",
        "total mass",
        "cost",
        "least change",
    ]


def test_repeated_labels_are_counted(folder):
    body = '[[body]]\nname = "a"\nkind = "mass"\nmass = "1 kg"\n'
    objective = '[[objective]]\nkind = "frequency"\nmode = 1\nminimise = true\n'
    content = parse_study(body + 3 * objective, folder, "thrice")
    assert [o.label for o in content.objectives] == ["frequency 1", "frequency 1 (2)", "frequency 1 (3)"]


def test_objectives_measure_what_is_asked(content):
    of = {o.label: o for o in content.objectives}
    assert of["frequency 1"].weight == 2
    assert of["out of step"].requirement == AtLeast(0.4)  # a period of 2.5 s
    assert of["out of step"].mode == Like((("east.x", 1.0), ("west.x", -1.0)))
    assert of["period 2"].requirement == AtMost(4)
    assert_allclose(of["splitting 1-2"].requirement.value, 0.1 / (2 * np.pi), rtol=ROUNDING)
    assert of["frequency ratio 2-1"].between == (2, 1)
    assert of["transfer time east-west"].source == "east.x"
    assert of["transfer time east-west"].target == "west"
    assert of["transfer time east-west"].horizon == 60
    assert of["transfer time east-west"].completeness == 0.9
    assert of["transfer completeness stage.z-stage.ry"].target == "stage.ry"
    assert of["transfer completeness stage.z-stage.ry"].time == 20
    assert of["handed amplitude east-west"].requirement == Maximise()
    assert of["handed amplitude east-west"].target == "west.x"
    assert of["shape 1"].like == Like((("east.x", 1.0), ("stage.ry", 0.0)))
    assert of["nodal point 1 bench"].own == ("bench.x", "bench.y", "bench.z")
    assert of["nodal point 1 motor r"].bodies == {"motor": ("motor.r",), "pump": ("pump.r",)}
    assert of["energy share 1 bench z"].owner == "bench.z"
    assert of["sag deck"].sag == Sag("deck.z")
    assert of["sag bench"].sag == Sag("bench.x", 100.0)
    assert of["sag rise"].sag == Sag("rise")
    assert of["cost"].parts == ("west", "wall")
    assert of["total mass"].requirement == Minimise()
    assert {"east", "feet", "bottom", "n1"} <= set(of["total mass"].parts)


def test_along_an_axis_only_displacements_along_it_are_compared(everything, folder):
    text = everything.replace('body = "bench"\nat_most = 0.2', 'body = "bench"\naxis = "z"\nat_most = 0.2', 1)
    (node,) = (o for o in parse_study(text, folder, "z").objectives if o.label == "nodal point 1 bench z")
    assert node.own == ("bench.z",)
    assert node.bodies == {name: (f"{name}.z",) for name in ("deck", "stage", "bench", "tip")}


def test_margins_move_the_edges_of_bands_outward(content):
    """13.5 to 16.5 Hz with 5 %; first and second order of 1420 to 1500 rpm with 1 Hz."""
    one, two = (o for o in content.objectives if o.kind == "keep out")
    assert_allclose(one.bands, [(13.5 * 0.95, 16.5 * 1.05)], rtol=ROUNDING)
    assert_allclose(two.bands, [(1420 / 60 - 1, 26), (2 * 1420 / 60 - 1, 51)], rtol=ROUNDING)
    assert one.driven_by == ("bench",)
    assert two.driven_by == ("motor", "stage.z")


def test_a_band_may_begin_at_zero(folder):
    text = '[[objective]]\nkind = "keep out"\nband = ["0 Hz", "5 Hz"]\nmargin = "1 Hz"\n'
    ((low, high),) = parse_study(text, folder, "low").objectives[0].bands
    assert 0 < low < 1e-8
    assert high == 6


def test_deflections_are_those_that_objectives_ask_for(content):
    assert [(d.of, d.case) for d in content.deflections] == [
        ("deck.z", None),
        ("bench.x", ("bench.x", 100.0)),
        ("rise", None),
    ]
    assert all(d.name in content.model.names for d in content.deflections)


def test_tolerances_name_their_dimensions(content):
    lengths, rates, coil, coordinates = content.tolerances
    assert lengths.dimensions == ("east.length", "west.length", "low west.length")
    assert lengths.each == Window(0.001, relative=False)
    assert lengths.batch is None
    assert lengths.distribution == "normal"
    assert rates.dimensions[:2] == ("tie.rate", "wall.rate")
    assert "mount b.rates.lateral2" in rates.dimensions
    assert (rates.each, rates.batch) == (Window(0.04, relative=True), Window(0.03, relative=True))
    assert coil == Tolerance(on=("tie.coil",), dimensions=("tie.coil",), each="IT8", batch=None, distribution="normal")
    assert coordinates.each == "m"
    assert coordinates.dimensions == ("stage.centre.x", "tip.position.x", "tip.position.z")


def test_stock_lists_and_series_are_read(content):
    springs = content.stocks["springs"]
    assert (springs.unit, len(springs.items)) == ("N/m", 6)
    window = Window(0.02, relative=True)
    assert springs.items[3] == StockItem(part="S-8", value=8, tolerance=window, mass=0.08, price=8, quantity=8)
    values = tuple(StockItem(part=None, value=value) for value in (4.0, 6.0, 8.0, 10.0))
    assert content.stocks["counts"] == StockList(name="counts", unit="1", items=values)
    assert content.stocks["preferred"] == StockSeries(name="preferred", unit="m", series="R20", low=0.001, high=0.004)


def test_loads_prices_and_adjustments_are_read(content):
    drive, push, floor = content.loads
    assert drive.component == "deck.z"
    assert_allclose(drive.amplitude, 50e-6, rtol=ROUNDING)
    assert_allclose(drive.speed, (1420 / 60, 25), rtol=ROUNDING)
    assert push == Load(name="push", kind="force", component="stage.ry", amplitude=3)
    assert floor.component == "ground.z"
    prices = {price.part: price.amount for price in content.assembly.prices}
    assert prices["west"] == Product(12.5, ())
    assert prices["tie"] == Product(4.0, (("wire", Fraction(2)),))
    lengths = ("east.length", "west.length", "low west.length")
    assert content.tolerance_prices == (
        TolerancePrice(dimensions=lengths, amount=Product(0.002, (("tolerance", Fraction(-1)),))),
    )
    assert content.adjustments == (
        Adjustment(dimensions=lengths, low=1.9, high=2.1, step=0.0005, direction="up", cost=3),
    )


def test_swing_damping_and_solver_settings_are_read(content):
    assert content.swings == {
        "east": Swing(value=pytest.approx(np.radians(4), rel=ROUNDING), unit="rad"),
        "pump": Swing(value=pytest.approx(np.radians(2), rel=ROUNDING), unit="rad"),
    }
    assert content.damping_ratios == {"east": 0.002}
    assert content.loss_factors == {"tie": 0.01}
    assert content.solve == SolveSettings(route="gradient", seed=7, starts=12, alternatives=2)


def test_what_is_hardly_meant_is_a_warning(folder):
    text = '[variables.spare]\nrange = ["1 N/m", "2 N/m"]\nstock = "big"\n[stock.big]\nvalues = ["5 N/m"]\n'
    assert parse_study(text, folder, "spare").warnings == (
        "variables.spare: nothing in stock.big lies within the range",
        "variables.spare: no part follows it",
    )


def test_matrices_with_the_same_labels_add_up(folder):
    """One unit pattern times a variable beside the stiffness as it is; a label takes links like a body."""
    text = """
[variables.rate]
range = ["1 N/m", "9 N/m"]
start = "3 N/m"
[[matrix]]
labels = ["n1", "n2"]
mass = "mass.mtx"
stiffness = "stiffness.mtx"
[[matrix]]
labels = ["n1", "n2"]
stiffness = "mass.mtx"
stiffness_times = "rate"
[[link]]
name = "stop"
kind = "spring"
between = ["n2", "ground"]
rate = "3 kN/m"
"""
    content = parse_study(text, folder, "box")
    assert [model.name for model in content.assembly.matrices] == ["matrix1", "matrix2"]
    assert content.model.coordinates == ("n1.x", "n2.x")
    assert "matrix2.stiffness_times" in content.model.names


def test_an_absolute_path_may_lead_anywhere(folder, tmp_path):
    text = f"[stock.springs]\nfile = '{folder / 'springs.csv'}'\n"
    assert len(parse_study(text, tmp_path, "elsewhere").stocks["springs"].items) == 6


def test_a_stock_list_may_begin_with_a_mark_of_byte_order(tmp_path):
    """Common practice of spreadsheets, no source."""
    (tmp_path / "list.csv").write_bytes(b"\xef\xbb\xbfpart,value,unit\r\na,4,1\r\n\r\n")
    stock = parse_study('[stock.counts]\nfile = "list.csv"\n', tmp_path, "excel").stocks["counts"]
    assert stock == StockList(name="counts", unit="1", items=(StockItem(part="a", value=4),))


def test_an_empty_text_is_a_study_of_nothing(folder):
    content = parse_study("", folder, "nothing")
    assert content.title == "nothing"
    assert content.solve == SolveSettings(route="auto", seed=1, starts=24, alternatives=5)
    assert content.objectives == ()


def test_nothing_that_takes_long_is_imported_for_reading():
    """The command must answer at once."""
    code = "import sys, inverse.study.reading; print(*sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert not {"pandas", "cvxpy", "optuna", "matplotlib", "scipy.optimize", "scipy.io"} & set(done.stdout.split())
