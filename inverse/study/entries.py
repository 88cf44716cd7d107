"""Single entries of a study file: how each is read, and how the JSON Schema describes it.

An `Entry` reads one value as TOML gives it and returns it in SI, or raises `QuantityError` with what was expected and
what was found. Where products are allowed it looks up the variables in the `Scope`.
"""

from __future__ import annotations

import json
import math
import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import date, datetime, time
from typing import Any, Literal

from inverse.assembly.parameters import Amount
from inverse.errors import QuantityError
from inverse.gravity import normal_gravity
from inverse.units import (
    NAME_PATTERN,
    Dimension,
    Kind,
    Product,
    Window,
    check_product,
    is_product_text,
    parse_product,
    parse_quantity,
    parse_window,
    quantity_dimension,
)

PART_NAME = r"[^\W_][\w -]*"
"""Parts are named in shell-style patterns and in `part.key`, so that their names hold none of `. * ? [ ]`."""

SMALLEST, LARGEST = 1e-50, 1e50
"""Sizes in SI between which powers of dimensions stay far from the limits of floating point."""

Sign = Literal["positive", "not negative", "any"]
Json = dict[str, Any]

_SIGN_WORDS: dict[Sign, str] = {"positive": " greater than zero", "not negative": " of zero or more", "any": ""}


@dataclass(frozen=True, slots=True)
class Known:
    """A variable as far as products need it."""

    dimension: Dimension
    low: float
    high: float


@dataclass(frozen=True, slots=True)
class Scope:
    """The variables of the study; None for one whose own table is at fault."""

    variables: Mapping[str, Known | None] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Measure:
    """A quantity of any kind, in ``dimension.unit``."""

    value: float
    dimension: Dimension


@dataclass(frozen=True, slots=True)
class Entry:
    """How one value is read, and its JSON Schema; usable as an annotation of a pydantic field."""

    read: Callable[[object, Scope], Any]
    json: Json

    def __get_pydantic_core_schema__(self, source: object, handler: object) -> Any:
        """Read the value with the scope of the validation."""
        from pydantic_core import core_schema

        def validated(value: object, info: core_schema.ValidationInfo[Scope]) -> Any:
            try:
                return self.read(value, info.context or Scope())
            except QuantityError as error:
                raise refusal(error) from None

        return core_schema.with_info_plain_validator_function(validated)

    def __get_pydantic_json_schema__(self, core: object, handler: object) -> Json:
        """Describe the value."""
        return dict(self.json)

    def __hash__(self) -> int:
        """By identity: the description is a dict."""
        return id(self)


def refusal(error: QuantityError, key: str = "") -> Exception:
    """The same as an error of the validation, at a key of the table that is being read."""
    from pydantic_core import PydanticCustomError

    parts = {"expected": error.expected, "found": error.found, "hint": error.hint, "key": key}
    return PydanticCustomError("study", "{expected}", parts)


def found(value: object) -> str:
    """A value as messages quote it, whatever it is."""
    match value:
        case bool():
            return "true" if value else "false"
        case str():
            return repr(value if len(value) <= 60 else value[:57] + "...")
        case int() | float():
            return f"{value:.12g}" if abs(value) < 1e300 else "a huge number" if abs(value) < math.inf else str(value)
        case list() | tuple():
            return f"an array of {len(value)}" if value else "an empty array"
        case dict():
            return "a table"
        case datetime() | date() | time():
            return "a date or time"
    return "something else"


# ---------------------------------------------------------------- words


def _text(value: object, expected: str) -> str:
    if not isinstance(value, str):
        raise QuantityError(expected, found(value))
    if not value.strip():
        raise QuantityError(expected, "an empty text")
    return value


def text(expected: str, limit: int = 300) -> Entry:
    """A text of one line."""

    def read(value: object, scope: Scope) -> str:
        words = _text(value, expected)
        if len(words) > limit:
            raise QuantityError(expected, f"a text of {len(words)} characters", f"{limit} are enough")
        if not words.isprintable():
            raise QuantityError(expected, found(words), "it is one line without control characters")
        return words

    return Entry(read, {"type": "string", "minLength": 1, "maxLength": limit})


def choice(*options: str) -> Entry:
    """One of a few words."""
    expected = "one of " + ", ".join(f'"{option}"' for option in options)

    def read(value: object, scope: Scope) -> str:
        if isinstance(value, str) and value in options:
            return value
        raise QuantityError(expected, found(value), near(value, options))

    return Entry(read, {"enum": list(options)})


def near(word: object, known: Sequence[str]) -> str:
    """Hint at a word that looks like the one found."""
    import difflib

    if not isinstance(word, str):
        return ""
    folded = {name.casefold(): name for name in known}
    close = difflib.get_close_matches(word[:60].casefold(), list(folded), n=1)
    return f'did you mean "{folded[close[0]]}"?' if close else ""


def _read_part_name(value: object, scope: Scope) -> str:
    expected = "a name of letters, digits, spaces, - and _, beginning with a letter or digit"
    name = _text(value, expected)
    if len(name) > 60 or not re.fullmatch(PART_NAME, name) or name != name.strip():
        raise QuantityError(expected, found(name))
    if name == "ground":
        raise QuantityError("the name of a part", found(name), "ground is what does not move")
    return name


PART = Entry(_read_part_name, {"type": "string", "pattern": f"^{PART_NAME}$", "maxLength": 60})
REFERENCE = text("the name of a part")


def _read_variable_name(value: object, scope: Scope) -> str:
    """A name that can stand in a product."""
    expected = "a variable's name of letters, digits and _, beginning with a letter"
    name = _text(value, expected)
    if len(name) > 60 or not re.fullmatch(NAME_PATTERN, name):
        raise QuantityError(expected, found(name))
    return name


VARIABLE_NAME = Entry(_read_variable_name, {"type": "string", "pattern": f"^{NAME_PATTERN}$", "maxLength": 60})


def _read_yes(value: object, scope: Scope) -> bool:
    if value is not True:
        raise QuantityError("true", found(value), "leave it out where it does not hold")
    return True


YES = Entry(_read_yes, {"const": True})


# ---------------------------------------------------------------- numbers


def whole(noun: str, low: int, high: int) -> Entry:
    """A whole number in a range."""
    expected = f"{noun}, a whole number from {low} to {high}"

    def read(value: object, scope: Scope) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or not low <= value <= high:
            raise QuantityError(expected, found(value))
        return value

    return Entry(read, {"type": "integer", "minimum": low, "maximum": high})


def _number(value: object, expected: str) -> str | int | float:
    if isinstance(value, bool) or not isinstance(value, str | int | float):
        raise QuantityError(expected, found(value))
    return value


def _sized(number: float, expected: str, value: object) -> float:
    if number and not SMALLEST <= abs(number) <= LARGEST:
        raise QuantityError(expected, found(value), "no part is that large or small")
    return number


def read_quantity(value: object, kind: Kind, sign: Sign = "any", most: float = math.inf) -> float:
    """A quantity of one kind, with its sign."""
    example = kind.expectation.removeprefix(kind.noun)
    expected = f"{kind.noun}{_SIGN_WORDS[sign]}{example}"
    number = _sized(parse_quantity(_number(value, expected), kind), expected, value)
    if (number < 0 and sign != "any") or (number == 0 and sign == "positive"):
        raise QuantityError(expected, found(value))
    if number > most:
        raise QuantityError(f"{kind.noun} up to {most:g}", found(value), 'a share is a number, 0.95, or "95 %"')
    return number


def read_window(value: object, kind: Kind) -> Window:
    """The half-width allowed on both sides."""
    return parse_window(_number(value, f"the window of {kind.noun}"), kind)


def read_measure(value: object) -> Measure:
    """A quantity of any kind; what counts turns per time in rad/s, so that products of it are plain algebra."""
    expected = 'a quantity, such as "1.2 m", or a pure number'
    number, dimension = quantity_dimension(_number(value, expected))
    if dimension == Kind.FREQUENCY.si.dimension:
        number *= 2 * math.pi
    return Measure(_sized(number, expected, value), dimension)


def _json_of(kind: Kind) -> Json:
    bare = kind.unit == "1"
    examples = [json.loads(example) for example in kind.example.split(" or ")]
    return {
        "type": ["number", "string"] if bare else "string",
        "description": kind.expectation,
        "examples": examples,
    }


def quantity(kind: Kind, sign: Sign = "positive", most: float = math.inf) -> Entry:
    """A quantity of one kind."""
    return Entry(lambda value, scope: read_quantity(value, kind, sign, most), _json_of(kind))


def window(kind: Kind) -> Entry:
    """A half-width, absolute or as a share."""
    return Entry(
        lambda value, scope: read_window(value, kind),
        {"type": ["number", "string"], "description": f'{kind.noun} or a share, such as "2 %"'},
    )


ANY_QUANTITY = Entry(
    lambda value, scope: read_measure(value),
    {"type": ["number", "string"], "description": 'a quantity with its unit, such as "1.2 m", or a pure number'},
)
RAW = Entry(
    lambda value, scope: _number(value, 'a quantity, such as "1 mm" or "4 %"'),
    {"type": ["number", "string"]},
)
"""A quantity whose kind follows from the rest of the study."""


def span(kind: Kind, lowest: Sign = "positive") -> Entry:
    """Two quantities, the lower one first."""

    def read(value: object, scope: Scope) -> tuple[float, float]:
        expected = f"[lowest, highest], two of {kind.noun}"
        if not isinstance(value, list) or len(value) != 2:
            raise QuantityError(expected, found(value))
        low, high = (read_quantity(end, kind, lowest) for end in value)
        if not low < high:
            raise QuantityError(expected, f"[{found(value[0])}, {found(value[1])}]", "the lower end stands first")
        return low, high

    item = _json_of(kind)
    return Entry(read, {"type": "array", "items": item, "minItems": 2, "maxItems": 2})


def _read_range(value: object, scope: Scope) -> tuple[Measure, Measure]:
    expected = '[lowest, highest] with units, such as ["1.2 m", "2.6 m"]'
    if not isinstance(value, list) or len(value) != 2:
        raise QuantityError(expected, found(value))
    low, high = (read_measure(end) for end in value)
    both = f"[{found(value[0])}, {found(value[1])}]"
    if low.dimension != high.dimension:
        raise QuantityError("two ends of the same unit", both)
    if low.value == high.value:
        raise QuantityError(expected, f"the empty range {both}", "a variable that is fixed has a `value` instead")
    if low.value > high.value:
        raise QuantityError(expected, both, "the range is reversed")
    return low, high


RANGE = Entry(_read_range, {"type": "array", "items": {"type": ["number", "string"]}, "minItems": 2, "maxItems": 2})


# ---------------------------------------------------------------- dimensions of parts


def read_amount(value: object, kind: Kind, sign: Sign, scope: Scope) -> Amount:
    """A quantity, or a product of variables of the same unit and with the sign that is needed."""
    if not isinstance(value, str) or not is_product_text(value):
        return read_quantity(value, kind, sign)
    product = read_product(value, scope)
    if all(scope.variables[name] is not None for name, _ in product.powers):
        _check_unit(product, kind, scope)
        _check_sign(product, value, sign, kind, scope)
    return product


def read_product(value: str, scope: Scope) -> Product:
    """A product of variables, powers that have cancelled left out."""
    product = parse_product(value)
    for name, _ in product.powers:
        if name not in scope.variables:
            hint = near(name, list(scope.variables)) or "a number is followed by its unit, a name is a variable's"
            raise QuantityError("the name of a variable", found(name), hint)
    return Product(product.coefficient, tuple((name, power) for name, power in product.powers if power))


def _check_unit(product: Product, kind: Kind, scope: Scope) -> None:
    known = ((name, scope.variables[name]) for name, _ in product.powers)
    check_product(product, kind, {name: variable.dimension for name, variable in known if variable})


def _check_sign(product: Product, value: str, sign: Sign, kind: Kind, scope: Scope) -> None:
    low, high = math.log10(abs(product.coefficient)), math.log10(abs(product.coefficient))
    for name, power in product.powers:
        known = scope.variables[name]
        if known is None:
            continue
        if known.low > 0:
            ends = float(power) * math.log10(known.low), float(power) * math.log10(known.high)
            low, high = low + min(ends), high + max(ends)
            continue
        if sign == "positive":
            hint = f"the range of `{name}` reaches zero or below"
            raise QuantityError(f"{kind.noun} greater than zero", found(value), hint)
        if power < 0 or power.denominator != 1:
            hint = f"`{name}` may be zero or negative and has whole powers of 1 or more only"
            raise QuantityError(kind.noun, found(value), hint)
        if sign == "not negative" and known.low < 0:
            hint = f"the range of `{name}` reaches below zero"
            raise QuantityError(f"{kind.noun} of zero or more", found(value), hint)
    if product.coefficient < 0 and sign != "any":
        raise QuantityError(f"{kind.noun}{_SIGN_WORDS[sign]}", found(value))
    if low < math.log10(SMALLEST) or high > math.log10(LARGEST):
        raise QuantityError(kind.noun, found(value), "over the ranges of its variables it gets too large or too small")


def amount(kind: Kind, sign: Sign = "positive") -> Entry:
    """A dimension of a part: a quantity or a product."""
    words = f"{kind.expectation}, or a product of variables"
    return Entry(
        lambda value, scope: read_amount(value, kind, sign, scope),
        _json_of(kind) | {"description": words},
    )


def _read_count(value: object, scope: Scope) -> Amount:
    number = read_amount(value, Kind.RATIO, "positive", scope)
    if isinstance(number, float) and (number != int(number) or number > 1e6):
        raise QuantityError("how many, a whole number of 1 or more", found(value))
    return number


COUNT = Entry(_read_count, {"type": ["number", "string"]})


def _read_factor(value: object, scope: Scope) -> Amount:
    """A number or a product of any unit, for a matrix is a pattern times a dimension."""
    if not isinstance(value, str) or not is_product_text(value):
        return read_quantity(value, Kind.RATIO, "positive")
    product = read_product(value, scope)
    _check_sign(product, value, "positive", Kind.RATIO, scope)
    return product


FACTOR = Entry(_read_factor, {"type": ["number", "string"]})


def own_product(expected: str) -> Entry:
    """A product in the names of something else than variables, or a plain number."""

    def read(value: object, scope: Scope) -> Product:
        if isinstance(value, str):
            return parse_product(value)
        return Product(read_quantity(value, Kind.PRICE, "positive"), ())

    return Entry(read, {"type": ["number", "string"], "description": expected})


# ---------------------------------------------------------------- several at once


def listed(entry: Entry, noun: str, *lengths: int) -> Entry:
    """An array of some length, at least one where none is given."""
    counts = " or ".join(map(str, lengths)) or "one or more"
    expected = f"an array of {counts} {noun}"

    def read(value: object, scope: Scope) -> tuple[Any, ...]:
        if not isinstance(value, list):
            raise QuantityError(expected, found(value))
        if len(value) not in lengths if lengths else not value:
            raise QuantityError(expected, found(value))
        return tuple(entry.read(item, scope) for item in value)

    bounds = {"minItems": min(lengths, default=1)} | ({"maxItems": max(lengths)} if lengths else {})
    return Entry(read, {"type": "array", "items": entry.json, **bounds})


def _distinct(entry: Entry, noun: str) -> Entry:
    def read(value: object, scope: Scope) -> tuple[Any, ...]:
        items: tuple[Any, ...] = entry.read(value, scope)
        for i, item in enumerate(items):
            if item in items[:i]:
                raise QuantityError(f"{noun}, each once", f"{found(item)} twice")
        return items

    return Entry(read, entry.json)


def one_or_listed(entry: Entry, noun: str, *lengths: int) -> Entry:
    """One value, which needs no brackets, or an array."""
    several = listed(entry, noun, *lengths)

    def read(value: object, scope: Scope) -> tuple[Any, ...]:
        items: tuple[Any, ...] = several.read(value if isinstance(value, list) else [value], scope)
        return items

    return Entry(read, {"anyOf": [entry.json, several.json]})


PATTERNS = listed(text('a pattern, such as "*.length"'), 'patterns, such as ["*.length"]')
NAMES = _distinct(listed(text("a name"), "names"), "names")
LABELS = _distinct(listed(PART, "labels"), "labels")
ENDS = _distinct(listed(REFERENCE, 'names, such as ["east", "west"] or ["east", "ground"]', 2), "two ends")
_NUMBERS = listed(quantity(Kind.RATIO, "any"), "pure numbers (x, z or x, y, z)", 2, 3)
SIGNED_LENGTH = amount(Kind.LENGTH, "any")
COORDINATES = one_or_listed(SIGNED_LENGTH, "coordinates", 1, 2, 3)
POSITION = listed(SIGNED_LENGTH, "coordinates (x, z or x, y, z)", 2, 3)
RATES = listed(amount(Kind.RATE), "rates (axial, lateral)", 2, 3)
ORDERS = listed(quantity(Kind.RATIO), "orders, such as [1, 2]")


def _read_direction(value: object, scope: Scope) -> tuple[float, ...]:
    numbers: tuple[float, ...] = _NUMBERS.read(value, scope)
    if not any(numbers):
        raise QuantityError("a direction, such as [0, 1]", "nothing but zeros")
    return numbers


DIRECTION = Entry(_read_direction, _NUMBERS.json)


def _read_inertia(value: object, scope: Scope) -> tuple[Amount, ...]:
    values = value if isinstance(value, list) else [value]
    if len(values) not in (1, 3, 6):
        raise QuantityError("one, three or six moments of inertia (xx yy zz xy yz zx)", found(value))
    signs: tuple[Sign, ...] = ("positive", "positive", "positive", "any", "any", "any")
    moments = tuple(read_amount(item, Kind.INERTIA, sign, scope) for item, sign in zip(values, signs, strict=False))
    numbers = [moment for moment in moments if isinstance(moment, float)]
    if len(numbers) == len(moments) > 1:
        _refuse_impossible_inertia(numbers, value)
    return moments


def _refuse_impossible_inertia(moments: Sequence[float], value: object) -> None:
    """Masses are positive: no principal moment exceeds the sum of the two others."""
    import numpy as np

    xx, yy, zz, xy, yz, zx = (*moments, 0.0, 0.0, 0.0)[:6]
    smallest, middle, largest = np.linalg.eigvalsh(np.array([[xx, xy, zx], [xy, yy, yz], [zx, yz, zz]]))
    if smallest <= 0 or largest > (smallest + middle) * (1 + 1e-9):
        raise QuantityError(
            "moments of inertia of a body, none of the principal ones greater than the two others together",
            f"principal moments {smallest:.6g}, {middle:.6g} and {largest:.6g} kg m^2",
            "the last three are entries of the inertia matrix, with its sign" if len(moments) == 6 else "",
        )


_INERTIA_ITEM = amount(Kind.INERTIA, "any").json
INERTIA = Entry(
    _read_inertia,
    {"anyOf": [_INERTIA_ITEM, {"type": "array", "items": _INERTIA_ITEM, "minItems": 1, "maxItems": 6}]},
)


def _read_at(value: object, scope: Scope) -> tuple[Amount, ...] | dict[str, tuple[Amount, ...]]:
    if not isinstance(value, dict):
        return COORDINATES.read(value, scope)  # type: ignore[no-any-return]
    if not value:
        raise QuantityError('a table by body, such as { east = "0.6 m" }', "an empty table")
    return {str(body): COORDINATES.read(place, scope) for body, place in value.items()}


AT = Entry(
    _read_at,
    {"anyOf": [*COORDINATES.json["anyOf"], {"type": "object", "additionalProperties": COORDINATES.json}]},
)


def _read_fixed(value: object, scope: Scope) -> tuple[str, ...]:
    if isinstance(value, bool):
        return ("x", "y", "z") if value else ()
    return _AXES.read(value, scope)  # type: ignore[no-any-return]


_AXES = _distinct(listed(choice("x", "y", "z"), 'axes, such as ["z"], or true'), "axes")
FIXED = Entry(_read_fixed, {"anyOf": [{"type": "boolean"}, _AXES.json]})


def _read_like(value: object, scope: Scope) -> tuple[tuple[str, float], ...]:
    expected = "a table of two or more bodies or components, such as { east = 1, west = -1 }"
    if not isinstance(value, dict) or len(value) < 2:
        hint = ""
        if isinstance(value, dict) and any(isinstance(item, dict) for item in value.values()):
            hint = 'a component is written in quotes, "stage.ry" = 1'
        raise QuantityError(expected, "a table of one" if isinstance(value, dict) and value else found(value), hint)
    for name, item in value.items():
        if isinstance(item, dict):
            raise QuantityError(
                expected, f"a table at {found(name)}", 'a component is written in quotes, "stage.ry" = 1'
            )
    pattern = tuple((name, read_quantity(item, Kind.RATIO, "any")) for name, item in value.items())
    if not any(number for _, number in pattern):
        raise QuantityError(expected, "nothing but zeros")
    return pattern


LIKE = Entry(
    _read_like,
    {"type": "object", "additionalProperties": {"type": ["number", "string"]}, "minProperties": 2},
)

ModeText = int | tuple[tuple[str, float], ...]
_MODE_NUMBER = whole("the number of a mode", 1, 1_000_000)


def _read_mode(value: object, scope: Scope) -> ModeText:
    if isinstance(value, dict):
        if set(value) != {"like"}:
            raise QuantityError(
                "a mode's number, or { like = { east = 1, west = -1 } }", "a table without `like` alone"
            )
        return _read_like(value["like"], scope)
    return _MODE_NUMBER.read(value, scope)  # type: ignore[no-any-return]


MODE = Entry(
    _read_mode,
    {
        "anyOf": [
            _MODE_NUMBER.json,
            {
                "type": "object",
                "properties": {"like": LIKE.json},
                "required": ["like"],
                "additionalProperties": False,
            },
        ]
    },
)
MODES = _distinct(listed(MODE, "modes", 2), "two modes")


def _read_gravity(value: object, scope: Scope) -> Amount:
    if not isinstance(value, dict):
        return read_amount(value, Kind.ACCELERATION, "not negative", scope)
    if set(value) != {"latitude", "height"}:
        raise QuantityError(
            'gravity, such as "9.81 m/s^2" or { latitude = "54.3 deg", height = "12 m" }',
            f"a table with {', '.join(map(found, list(value)[:5])) or 'nothing in it'}",
        )
    return normal_gravity(
        parse_quantity(_number(value["latitude"], "a latitude"), Kind.ANGLE),
        parse_quantity(_number(value["height"], "a height"), Kind.LENGTH),
    )


GRAVITY = Entry(
    _read_gravity,
    {
        "anyOf": [
            amount(Kind.ACCELERATION).json,
            {
                "type": "object",
                "properties": {"latitude": _json_of(Kind.ANGLE), "height": _json_of(Kind.LENGTH)},
                "required": ["latitude", "height"],
                "additionalProperties": False,
            },
        ]
    },
)


def _read_swing(value: object, scope: Scope) -> Measure:
    measure = read_measure(value)
    if measure.dimension not in (Kind.ANGLE.si.dimension, Kind.LENGTH.si.dimension) or measure.value <= 0:
        raise QuantityError('an amplitude, such as "8 deg" or "40 mm"', found(value))
    return measure


SWING = Entry(_read_swing, {"type": "string", "description": 'the amplitude in use, such as "8 deg" or "40 mm"'})


def by_pattern(entry: Entry) -> Entry:
    """A table from patterns over dimension names to values."""

    def read(value: object, scope: Scope) -> tuple[tuple[str, Any], ...]:
        if not isinstance(value, dict) or not value:
            raise QuantityError('a table by dimension, such as { "*.rate" = 0.9 }', found(value))
        return tuple((name, entry.read(item, scope)) for name, item in value.items())

    return Entry(read, {"type": "object", "additionalProperties": entry.json, "minProperties": 1})
