"""The JSON Schema of the study file is a valid one, and judges texts as the reading does as far as a schema can.

Reference: `jsonschema`, a general-purpose library, for draft 2020-12.
"""

import tomllib
from pathlib import Path

import jsonschema
import pytest

from inverse.study.schema import KINDS, PLAIN, json_schema

STUDIES = Path(__file__).parents[3] / "studies"


@pytest.fixture(scope="module")
def validator():
    return jsonschema.Draft202012Validator(json_schema())


def test_the_schema_itself_is_valid():
    schema = json_schema()
    assert schema["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    jsonschema.Draft202012Validator.check_schema(schema)


@pytest.mark.parametrize("path", sorted(STUDIES.glob("*.toml")), ids=lambda path: path.stem)
def test_worked_studies_are_valid(validator, path):
    assert list(validator.iter_errors(tomllib.loads(path.read_text("utf-8")))) == []


def test_one_of_everything_is_valid(validator, everything):
    assert list(validator.iter_errors(tomllib.loads(everything))) == []


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ('mass = "6.5 kg"', "mass = 6.5"),
        ('rod_mass = "0.4 kg"', 'rodmass = "0.4 kg"'),
        ('kind = "pendulum"', 'kind = "pendulam"'),
        ('kind = "gear"\n', ""),
        ('mass = "6.5 kg"\n', ""),
        ("[[matrix]]", "[matrix]"),
        ('within = "0.5 %"\n', ""),
        ('within = "0.5 %"', 'within = "0.5 %"\nat_least = "1 Hz"'),
        ('at_most = "4 s"', 'at_most = "4 s"\nwithin = "1 s"'),
        ("minimise = true", "minimise = false"),
        ("modes = [1, 2]", "modes = [1]"),
        ("mode = 1", "mode = 0"),
        ('["1.2 m", "2.6 m"]', '["1.2 m"]'),
        ('route = "gradient"', 'route = "newton"'),
        ("[variables.steel]", '[variables."2 steel"]'),
        ("[solve]", "[solver]"),
    ],
)
def test_broken_texts_are_invalid(validator, everything, old, new):
    assert old in everything
    assert list(validator.iter_errors(tomllib.loads(everything.replace(old, new, 1))))


def test_every_key_says_what_it_means():
    tables = [*PLAIN.values(), *(table for kinds in KINDS.values() for table in kinds.values())]
    for table in tables:
        assert table.__doc__
        for name, field in table.model_fields.items():
            assert name == "kind" or field.description, f"{table.__name__}.{name}"
