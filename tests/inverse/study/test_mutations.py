"""Whatever stands in a study file, reading it succeeds or says what is wrong, and does so at once."""

import re
import time
from pathlib import Path

import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from inverse.errors import StudyError
from inverse.study.reading import read_study

STUDIES = Path(__file__).parents[3] / "studies"
NAMES = ["lantern_pair", "bench", "gantry", "pump_train", "micro_pair", "sieve", "lantern_row"]
LONGEST = 1.0  # seconds of processor time; the largest text takes a tenth of it

VALUES = [
    *('""', '" "', "3", "0", "-1", "1e308", "1e-308", "nan", "inf", "-inf", "true", "false", "[]", "{}", "1979-05-27"),
    *(
        "[[1]]",
        '["1 m", "1 m"]',
        '["2 m", "1 m"]',
        "[1, 2, 3, 4, 5, 6, 7]",
        "{ like = { east = 1 } }",
        "{ a = { b = {} } }",
    ),
    *(
        '"6,5 kg"',
        '"1e400 kg"',
        '"1e-400 m"',
        '"1e49 kg"',
        '"1e-49 m"',
        '"1e49 N/m"',
        '"1e-49 N/m"',
        '"-1 m"',
        '"0 kg"',
    ),
    *('"0 m"', '"1 furlong"', '"5 %"', '"1 Hz"', '"2 s"', '"1 rad/s"', '"9.81 m/s^2"', '"0 m/s^2"', '"1 N m/rad"'),
    *(
        '"arm"',
        '"rate"',
        '"arm^99"',
        '"arm^0.5"',
        '"-1 * arm"',
        '"arm / arm"',
        '"arm * rate * arm"',
        '"(((arm)))"',
        '"1/0"',
    ),
    *(
        '"east"',
        '"ground"',
        '"stage"',
        '"stage.ry"',
        '"bench.z"',
        '"motor"',
        '"*"',
        '"*.length"',
        '"[a-"',
        '"IT8"',
        '"class m"',
    ),
    *(
        '"../../etc/passwd"',
        '"/dev/zero"',
        '"."',
        '"springs.csv"',
        '"mass.mtx"',
        '"\\u0000"',
        '"é"',
        '"\\U0001F600"',
        "'''\n'''",
    ),
    *(
        '"pendulum"',
        '"mass"',
        '"rod"',
        '"keep out"',
        '"frequency"',
        '"sag"',
        '"response"',
        '"horizontal"',
        '"vertical"',
    ),
    *(
        "9" * 400,
        "0x" + "f" * 400,
        "1_0",
        "+1",
        "07",
        '"' + "a" * 5000 + '"',
        '"' + "(" * 500 + '"',
        "[" * 60 + "]" * 60,
    ),
]
LINES = [
    *(
        "[[body]]",
        "[[link]]",
        "[[objective]]",
        "[[matrix]]",
        "[[tolerance]]",
        "[[condition]]",
        "[solve]",
        "[variables.arm]",
    ),
    *(
        'name = "east"',
        'kind = "spring"',
        'hung_from = "west"',
        'between = ["east", "stage"]',
        "fixed = true",
        "count = 3",
    ),
    *(
        'at = { east = "1 m" }',
        "direction = [1, 0]",
        'preload = "3 N"',
        'height = "1 mm"',
        'gravity = "0 m/s^2"',
        'gravity = "arm"',
    ),
    *(
        "a.b.c = 1",
        '"" = 1',
        '"a\\nb" = 1',
        "= 1",
        "a =",
        "]",
        '"""',
        "# \x7f",
        "\t",
        "x = {",
        "mode = 99",
        'moves = "vertical"',
    ),
]


NUMBERS = ["0", "-1", "1", "2", "3.5", "0.01", "1e-9", "1e9", "1e-30", "1e30", "1e45", "-1e45"]
KINDS = [
    *("number", "number", "name", "name", "without", "value", "value"),
    *("line", "drop", "double", "swap", "word", "cut", "bytes", "block"),
]


@st.composite
def mutations(draw):
    """A change of one text: numbers, names, values and lines replaced, dropped, doubled, moved, ends cut off, bytes."""
    kind = draw(st.sampled_from(KINDS))
    place, other = draw(st.integers(0, 10**6)), draw(st.integers(0, 10**6))
    if kind == "value":
        return kind, place, draw(st.sampled_from(VALUES))
    if kind == "number":
        return kind, place, draw(st.sampled_from(NUMBERS))
    if kind == "line":
        return kind, place, draw(st.sampled_from(LINES))
    if kind == "bytes":
        return kind, place, draw(st.binary(min_size=1, max_size=8))
    return kind, place, other


def exchanged(data, pattern, place, new):
    """One of the places where a pattern matches, replaced."""
    places = list(re.finditer(pattern, data))
    if not places:
        return data
    start, end = places[place % len(places)].span()
    return data[:start] + new + data[end:]


def mutated(data, mutation):
    kind, place, what = mutation
    lines = data.split(b"\n")
    i = place % len(lines)
    match kind:
        case "value":
            places = [k for k, line in enumerate(lines) if b"=" in line] or [0]
            k = places[place % len(places)]
            lines[k] = lines[k].partition(b"=")[0] + b"= " + what.encode()
        case "line":
            lines.insert(i, what.encode())
        case "drop":
            del lines[i]
        case "double":
            lines.insert(what % len(lines), lines[i])
        case "swap":
            j = what % len(lines)
            lines[i], lines[j] = lines[j], lines[i]
        case "word":
            words = re.findall(rb"[\w.]+", data)
            if words:
                old, new = words[place % len(words)], words[what % len(words)]
                return re.sub(rb"\b%s\b" % re.escape(old), new.replace(b"\\", b""), data, count=1 + place % 3)
        case "number":
            return exchanged(data, rb"(?<![\w.])[\d.]+(?:e[-+]?\d+)?", place, what.encode())
        case "name":
            quoted = re.findall(rb'"[^"\n]*"', data) or [b'""']
            return exchanged(data, rb'"[^"\n]*"', place, quoted[what % len(quoted)])
        case "without":
            blocks = data.split(b"\n[")
            del blocks[place % len(blocks)]
            return b"\n[".join(blocks)
        case "cut":
            return data[: place % (len(data) + 1)]
        case "bytes":
            at = place % (len(data) + 1)
            return data[:at] + what + data[at:]
        case "block":
            blocks = data.split(b"\n[")
            blocks.insert(place % len(blocks) + 1, blocks[what % len(blocks)])
            return b"\n[".join(blocks)
    return b"\n".join(lines)


def assert_read_or_refused(path, data):
    path.write_bytes(data)
    began = time.process_time()
    message = refusal(path)
    assert time.process_time() - began < LONGEST
    if message is not None:
        assert message.startswith(str(path))
        assert len(message.splitlines()) <= 10
        for internal in ("pydantic", "Traceback", "validation error", "Input should", "ctx", "NoneType"):
            assert internal not in message


def refusal(path):
    try:
        read_study(path)
    except StudyError as error:
        return str(error)
    return None


def read_mutated(everything, folder, base, changes):
    data = everything.encode() if base == "everything" else (STUDIES / f"{base}.toml").read_bytes()
    for change in changes:
        data = mutated(data, change)
    assert_read_or_refused(folder / "mutated.toml", data)


bases = st.sampled_from(["everything", *NAMES])
several = st.lists(mutations(), min_size=1, max_size=3)
in_one_folder = settings(suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow])


@settings(in_one_folder, max_examples=400)
@given(base=bases, changes=several)
def test_a_mutated_study_is_read_or_refused(everything, folder, base, changes):
    read_mutated(everything, folder, base, changes)


@pytest.mark.slow
@settings(in_one_folder, max_examples=4000)
@given(base=bases, changes=st.lists(mutations(), min_size=1, max_size=5))
def test_thousands_of_mutated_studies_are_read_or_refused(everything, folder, base, changes):
    read_mutated(everything, folder, base, changes)


@settings(in_one_folder, max_examples=100)
@given(data=st.binary(max_size=200))
@example(data=b"\xef\xbb\xbf")
@example(data=b"\xff\xfe[\x00")
def test_random_bytes_are_read_or_refused(folder, data):
    assert_read_or_refused(folder / "random.toml", data)
