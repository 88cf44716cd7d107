"""A study text that holds every table and kind, and the folder with the files it names."""

import numpy as np
import pytest

EVERYTHING = """
title = "One of each"
gravity = { latitude = "54.3 deg", height = "12 m" }

[variables.arm]
range = ["1.2 m", "2.6 m"]
start = "2 m"
[variables.rate]
range = ["0.5 N/m", "60 N/m"]
start = "8 N/m"
stock = "springs"
[variables.wire]
range = ["1 mm", "4 mm"]
start = "2 mm"
stock = "preferred"
[variables.offset]
range = ["-0.2 m", "0.2 m"]
start = "0 m"
[variables.turns]
range = [4, 12]
start = 8
stock = "counts"
[variables.steel]
value = "79.3 GPa"
[variables.coil]
value = "20 mm"
[variables.share]
range = [0.5, 1.5]
start = 1

[stock.springs]
file = "springs.csv"
[stock.counts]
values = [4, 6, 8, 10]
[stock.preferred]
series = "R20"
from = "1 mm"
to = "4 mm"

[[body]]
name = "east"
kind = "pendulum"
mass = "6.5 kg"
length = "arm"
rod_mass = "0.4 kg"
bob_radius = "90 mm"
damping_ratio = 0.002
swing = "4 deg"
[[body]]
name = "west"
kind = "pendulum"
mass = "6.5 kg"
length = "0.98 * arm"
[[body]]
name = "low west"
kind = "pendulum"
mass = "0.7 kg"
length = "0.4 m"
hung_from = "west"
[[body]]
name = "cart"
kind = "mass"
mass = "12 lb"
[[body]]
name = "deck"
kind = "mass"
mass = "65 kg"
moves = "vertical"
[[body]]
name = "motor"
kind = "rotor"
inertia = "0.62 kg m^2"
[[body]]
name = "pump"
kind = "rotor"
inertia = "1.9 kg m^2"
swing = "2 deg"
[[body]]
name = "stage"
kind = "platform"
mass = "180 kg"
inertia = "21 kg m^2"
centre = ["offset", "0.1 m"]
[[body]]
name = "bench"
kind = "platform"
mass = "180 kg"
inertia = ["9.5 kg m^2", "21 kg m^2", "27 kg m^2", "0.1 kg m^2", "0 kg m^2", "-0.2 kg m^2"]
centre = ["60 mm", "0 mm", "110 mm"]
[[body]]
name = "foot"
kind = "joint"
position = ["0 m", "0 m"]
fixed = true
[[body]]
name = "roller"
kind = "joint"
position = ["1 m", "0 m"]
fixed = ["z"]
[[body]]
name = "tip"
kind = "joint"
position = ["0.5 m", "0.8 m"]
mass = "20 kg"

[[link]]
name = "tie"
kind = "spring"
between = ["east", "west"]
at = { east = "0.6 m", west = "0.5 m" }
rate = "steel * wire^4 / (8 * coil^3 * turns)"
mass = "0.1 kg"
loss_factor = 0.01
[[link]]
name = "wall"
kind = "spring"
between = ["cart", "ground"]
rate = "rate"
[[link]]
name = "dashpot"
kind = "damper"
between = ["cart", "ground"]
coefficient = "4 N s/m"
[[link]]
name = "feet"
kind = "spring"
between = ["deck", "ground"]
rate = "9 kN/m"
static_rate = "7 kN/m"
count = 4
preload = "3 N"
[[link]]
name = "coupling"
kind = "shaft"
between = ["motor", "ground"]
rate = "14 kN m"
[[link]]
name = "mesh"
kind = "gear"
between = ["motor", "pump"]
ratio = -0.4
[[link]]
name = "brake"
kind = "damper"
between = ["pump", "ground"]
coefficient = "0.1 N m s/rad"
[[link]]
name = "left"
kind = "spring"
between = ["stage", "ground"]
at = ["-0.5 m", "-0.1 m"]
direction = [0, 1]
rate = "9 kN/m"
[[link]]
name = "right"
kind = "spring"
between = ["stage", "ground"]
at = "0.5 m"
rate = "9000 * rate"
[[link]]
name = "mount a"
kind = "mount"
between = ["bench", "ground"]
at = ["-0.4 m", "0.3 m", "-0.08 m"]
rates = ["20 kN/m", "14 kN/m"]
height = "120 mm"
count = 2
[[link]]
name = "mount b"
kind = "mount"
between = ["bench", "ground"]
at = ["0.4 m", "0.3 m", "-0.08 m"]
rates = ["40 kN/m", "28 kN/m", "20 kN/m"]
static_rate = "30 kN/m"
[[link]]
name = "mount c"
kind = "mount"
between = ["bench", "ground"]
at = ["offset", "-0.3 m", "-0.08 m"]
rates = ["40 kN/m", "28 kN/m"]
[[link]]
name = "bottom"
kind = "rod"
between = ["foot", "roller"]
area = "2 cm^2"
modulus = "69 GPa"
density = "2700 kg/m^3"
[[link]]
name = "rise"
kind = "rod"
between = ["foot", "tip"]
area = "2 cm^2"
modulus = "69 GPa"
[[link]]
name = "fall"
kind = "rod"
between = ["roller", "tip"]
area = "2 cm^2"
modulus = "69 GPa"
[[link]]
name = "n2 stop"
kind = "spring"
between = ["n2", "ground"]
rate = "3 kN/m"

[[matrix]]
labels = ["n1", "n2"]
name = "box"
mass = "mass.mtx"
stiffness = "stiffness.mtx"
stiffness_times = "share"

[[objective]]
kind = "frequency"
mode = 1
target = "0.36 Hz"
within = "0.5 %"
weight = 2
[[objective]]
kind = "frequency"
mode = { like = { east = 1, west = -1 } }
at_least = "2.5 s"
label = "out of step"
[[objective]]
kind = "period"
mode = 2
at_most = "4 s"
[[objective]]
kind = "splitting"
modes = [1, 2]
target = "0.1 rad/s"
within = "0.01 Hz"
[[objective]]
kind = "beat period"
modes = [1, 2]
target = "40 s"
within = "2 s"
[[objective]]
kind = "frequency ratio"
modes = [2, 1]
at_most = 0.9
[[objective]]
kind = "keep out"
band = ["13.5 Hz", "16.5 Hz"]
margin = "5 %"
driven_by = "bench"
[[objective]]
kind = "keep out"
orders = [1, 2]
speed = ["1420 rpm", "1500 rpm"]
margin = "1 Hz"
driven_by = ["motor", "stage.z"]
[[objective]]
kind = "transfer time"
from = "east"
to = "west"
target = "20 s"
within = "1 s"
horizon = "60 s"
completeness = "90 %"
[[objective]]
kind = "transfer completeness"
from = "stage.z"
to = "stage.ry"
at_least = 0.1
time = "20 s"
[[objective]]
kind = "handed amplitude"
from = "east"
to = "west"
maximise = true
[[objective]]
kind = "shape"
mode = 1
like = { east = 1, "stage.ry" = 0 }
at_least = "20 %"
[[objective]]
kind = "nodal point"
mode = 1
body = "bench"
at_most = 0.2
[[objective]]
kind = "nodal point"
mode = 1
body = "motor"
axis = "r"
at_most = 0.2
[[objective]]
kind = "energy share"
mode = 1
body = "bench"
axis = "z"
at_least = 0
[[objective]]
kind = "sag"
body = "deck"
at_most = "14 mm"
[[objective]]
kind = "sag"
body = "bench"
force = "100 N"
axis = "x"
at_most = "14 mm"
[[objective]]
kind = "sag"
link = "rise"
at_most = "1 mm"
[[objective]]
kind = "total mass"
minimise = true
[[objective]]
kind = "cost"
parts = ["w*"]
at_most = 100
[[objective]]
kind = "least change"
minimise = true

[[tolerance]]
on = ["*.length"]
each = "1 mm"
[[tolerance]]
on = ["*.rate", "mount ?.rates.*"]
each = "4 %"
batch = "3 %"
distribution = "uniform"
[[tolerance]]
on = ["tie.coil"]
each = "IT8"
[[tolerance]]
on = ["stage.centre.x", "tip.position.*"]
each = "class m"

[[load]]
name = "drive"
kind = "unbalance"
body = "deck"
amplitude = "50 g mm"
orders = [1]
speed = ["1420 rpm", "1500 rpm"]
[[load]]
name = "push"
kind = "force"
body = "stage"
axis = "ry"
amplitude = "3 N m"
[[load]]
name = "floor"
kind = "base acceleration"
axis = "z"
amplitude = "0.1 m/s^2"

[[cost]]
on = ["wall", "west"]
price = 12.5
[[cost]]
on = ["tie"]
price_per = "4 * wire^2"
[[cost]]
on = ["*.length"]
tolerance_price = "0.002 / tolerance"

[[adjust]]
on = ["*.length"]
range = ["1.9 m", "2.1 m"]
step = "0.5 mm"
direction = "up"
cost = 3

[solve]
route = "gradient"
seed = 7
starts = 12
alternatives = 2
"""

SPRINGS = "part,value,unit,tolerance,mass,price,quantity\n" + "".join(
    f"S-{rate},{rate},N/m,2 %,{rate / 100:.2f} kg,{rate},{rate}\n" for rate in (1, 2, 4, 8, 16, 32)
)


def matrix_market(matrix):
    lines = ["%%MatrixMarket matrix array real general", f"{len(matrix)} {len(matrix)}"]
    return "\n".join(lines + [repr(float(x)) for x in np.asarray(matrix).T.ravel()]) + "\n"


@pytest.fixture(scope="session")
def everything():
    """One of each kind of table and key that can be judged."""
    return EVERYTHING


@pytest.fixture(scope="session")
def folder(tmp_path_factory):
    """The folder of that study, with the files it names."""
    path = tmp_path_factory.mktemp("study")
    (path / "springs.csv").write_text(SPRINGS, "utf-8")
    (path / "mass.mtx").write_text(matrix_market(np.eye(2)), "utf-8")
    (path / "stiffness.mtx").write_text(matrix_market([[2e3, -1e3], [-1e3, 1e3]]), "utf-8")
    return path
