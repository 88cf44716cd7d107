"""Numbers with their units, and products of names: text in, SI out.

Two small grammars, read by one recursive descent and never evaluated as code::

    quantity := number unit                     "6.5 kg", "2.3 N m/deg", "12e-6 1/K"
    unit     := factor ((' ' | '*' | '·' | '/') factor)*, from left to right
    product  := factor (('*' | '/') factor)*    "steel * wire^4 / (8 * coil^3 * turns)"
    factor   := (name | number | '(' ... ')') ['^' number | '^(p/q)']

In a unit the names are unit symbols, there is no number (but for the 1 of ``1/K``), powers are
whole and may be superscripts. The symbols are those of SI mechanics with every prefix, min h d,
deg rev, in ft lb lbf psi, degC, rpm cpm, % ppm.

A cycle is a turn: Hz is rev/s and cpm is rpm, so that 60 rpm is 1 Hz and 1 rad/s is 1/2π Hz by
plain algebra. Conversions are exact fractions times a power of π, rounded once at the end. Signs
and ranges are not judged here: whoever asks knows whether a negative length makes sense.
"""

from __future__ import annotations

import difflib
import math
import sys
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from decimal import Decimal
from enum import Enum
from fractions import Fraction
from typing import NoReturn

from inverse.errors import QuantityError
from inverse.grammar import (
    ALIKE,
    LEADING_NUMBER,
    MAX_TEXT,
    NAME_PATTERN,
    NO_COMMA,
    ORDINARY,
    OUT_OF_RANGE,
    PRODUCT_START,
    PRODUCT_TOKEN,
    SUPERSCRIPTS,
    UNIT_TOKEN,
    Product,
    Reader,
    exact,
    written,
)

__all__ = ["NAME_PATTERN", "Dimension", "Kind", "Product", "Window"]


@dataclass(frozen=True, slots=True)
class Dimension:
    """Exponents of kg, m, s, K and rad."""

    exponents: tuple[Fraction, ...]

    def __mul__(self, other: Dimension) -> Dimension:
        return Dimension(tuple(a + b for a, b in zip(self.exponents, other.exponents, strict=True)))

    def __pow__(self, power: Fraction | int) -> Dimension:
        return Dimension(tuple(a * power for a in self.exponents))

    @property
    def without_angle(self) -> Dimension:
        """The same with radians taken as pure numbers."""
        return Dimension((*self.exponents[:-1], Fraction(0)))

    @property
    def unit(self) -> str:
        """The SI unit in which values of this dimension are given, in a form that can be read."""
        if self in _KIND_OF:
            return _KIND_OF[self].unit
        powers = zip(("kg", "m", "s", "K", "rad"), self.exponents, strict=True)
        return written(1.0, tuple(p for p in powers if p[1]), " ", "/")


@dataclass(frozen=True, slots=True)
class _Unit:
    """``scale · π^pi`` SI base units; `offset` says where its zero stands, in base units."""

    scale: Fraction
    dimension: Dimension
    pi: int = 0
    offset: Fraction = Fraction(0)

    def __mul__(self, other: _Unit) -> _Unit:
        return _Unit(self.scale * other.scale, self.dimension * other.dimension, self.pi + other.pi)

    def __pow__(self, power: int) -> _Unit:
        return _Unit(self.scale**power, self.dimension**power, self.pi * power)


def _row(scale: str | Fraction, *exponents: int, pi: int = 0, offset: str = "0") -> _Unit:
    """Make one row of the tables below; exponents of kg, m, s, K, rad, the last zeros left out."""
    dimension = Dimension(tuple(Fraction(e) for e in (*exponents, 0, 0, 0, 0, 0)[:5]))
    return _Unit(Fraction(scale), dimension, pi, Fraction(offset))


_POUND, _INCH, _ONE = Fraction("0.45359237"), Fraction("0.0254"), _row("1")
_POUND_FORCE = _POUND * Fraction("9.80665")
_PREFIXED = {
    "m": _row("1", 0, 1),
    "g": _row("0.001", 1),
    "s": _row("1", 0, 0, 1),
    "K": _row("1", 0, 0, 0, 1),
    "rad": _row("1", 0, 0, 0, 0, 1),
    "Hz": _row("2", 0, 0, -1, 0, 1, pi=1),
    "N": _row("1", 1, 1, -2),
    "Nm": _row("1", 1, 2, -2),
    "Pa": _row("1", 1, -1, -2),
    "J": _row("1", 1, 2, -2),
    "W": _row("1", 1, 2, -3),
}
_UNPREFIXED = {
    "min": _row("60", 0, 0, 1),
    "h": _row("3600", 0, 0, 1),
    "d": _row("86400", 0, 0, 1),
    "deg": _row("1/180", 0, 0, 0, 0, 1, pi=1),
    "rev": _row("2", 0, 0, 0, 0, 1, pi=1),
    "rpm": _row("1/30", 0, 0, -1, 0, 1, pi=1),
    "cpm": _row("1/30", 0, 0, -1, 0, 1, pi=1),
    "in": _row(_INCH, 0, 1),
    "ft": _row(12 * _INCH, 0, 1),
    "lb": _row(_POUND, 1),
    "lbf": _row(_POUND_FORCE, 1, 1, -2),
    "psi": _row(_POUND_FORCE / _INCH**2, 1, -1, -2),
    "degC": _row("1", 0, 0, 0, 1, offset="273.15"),
    "%": _row("0.01"),
    "ppm": _row("1e-6"),
}
_PREFIXES = {
    **dict(zip("QRYZEPTGMk", range(30, 0, -3), strict=True)),
    **{"h": 2, "da": 1, "": 0, "d": -1, "c": -2, "u": -6},
    **dict(zip("mµnpfazyrq", range(-3, -33, -3), strict=True)),
}
_UNITS = {
    prefix + symbol: replace(unit, scale=unit.scale * Fraction(10) ** power)
    for prefix, power in _PREFIXES.items()
    for symbol, unit in _PREFIXED.items()
} | _UNPREFIXED
_OTHER_SPELLINGS = {
    **{"°": "deg", "°C": "degC", "C": "degC", "sec": "s", "hr": "h"},
    **{"inch": "in", "foot": "ft", "feet": "ft", "lbs": "lb"},
}


def _read_unit(text: str, expected: str, whole: str) -> _Unit:
    """Return the unit that `text` stands for; `whole` is what messages quote."""

    def fail(hint: str) -> NoReturn:
        raise QuantityError(expected, whole, hint)

    plain = SUPERSCRIPTS.sub(lambda run: "^" + run[0].translate(ORDINARY), text)
    unit, powers = _ONE, Reader(plain, UNIT_TOKEN, fail).read().powers
    for symbol, power in powers:
        if symbol not in _UNITS:
            found = f"the unknown unit {_shown(symbol)} in {whole}"
            raise QuantityError(expected, found, _near_units(symbol))
        if power.denominator != 1:
            fail("units have whole powers")
        unit = unit * _UNITS[symbol] ** int(power)
    # An offset counts where its unit stands alone: 5 degC is a temperature, 5 N/degC are 5 N/K.
    return _UNITS[powers[0][0]] if len(powers) == 1 and powers[0][1] == 1 else unit


def _si_unit(text: str) -> _Unit:
    """Return a unit of our own writing; "1" is that of pure numbers."""
    return _ONE if text == "1" else _read_unit(text, "a unit", text)


def _near_units(symbol: str) -> str:
    """Hint at what may have been meant: another spelling or case, a missing space, a slip."""
    usual = [prefix for prefix, power in _PREFIXES.items() if abs(power) <= 9 and prefix != "u"]
    known = [prefix + name for prefix in usual for name in _PREFIXED] + [*_UNPREFIXED]
    cuts = ((symbol[:i], symbol[i:]) for i in range(1, len(symbol)))
    near = (
        [other for spelling, other in _OTHER_SPELLINGS.items() if spelling == symbol]
        or [name for name in known if name.casefold() == symbol.casefold()]
        or [f"{a} {b}" for a, b in cuts if a in _UNITS and b in _UNITS]
        or difflib.get_close_matches(symbol[:20], known, n=2)
    )
    return _did_you_mean(near)


def _did_you_mean(near: Iterable[str]) -> str:
    quoted = " or ".join(f'"{name}"' for name in near)
    return f"did you mean {quoted}?" if quoted else ""


def _shown(text: str) -> str:
    """Quote for a message, the end cut off where it is long."""
    return repr(text if len(text) <= 60 else text[:57] + "...")


class Kind(Enum):
    """What a number is: its SI unit in results, its name and an example in messages.

    `shown` lists the units in which people read it, the largest first.
    """

    LENGTH = "m", "a length", '"20 mm"', "m, mm, µm"
    MASS = "kg", "a mass", '"6.5 kg"', "kg, g, mg"
    RATE = "N/m", "a rate", '"7.4 N/m"', "GN/m, MN/m, kN/m, N/m, mN/m"
    TORSIONAL_RATE = "N m/rad", "a torsional rate", '"350 N m/rad"', "kN m/rad, N m/rad, mN m/rad"
    FREQUENCY = "Hz", "a frequency", '"0.36 Hz"', "MHz, kHz, Hz, mHz, µHz"
    TIME = "s", "a time", '"20 s"', "s, ms, µs"
    ANGLE = "rad", "an angle", '"5 deg"', "rad, mrad, µrad"
    FORCE = "N", "a force", '"3 N"', "MN, kN, N, mN"
    MOMENT = "N m", "a moment", '"12 N m"', "kN m, N m, mN m"
    INERTIA = "kg m^2", "a moment of inertia", '"0.02 kg m^2"', "kg m^2, kg cm^2"
    AREA = "m^2", "an area", '"120 mm^2"', "m^2, cm^2, mm^2"
    MODULUS = "Pa", "a modulus", '"79.3 GPa"', "GPa, MPa, kPa, Pa"
    DENSITY = "kg/m^3", "a density", '"7850 kg/m^3"', "kg/m^3"
    ACCELERATION = "m/s^2", "an acceleration", '"9.81 m/s^2"', "m/s^2, mm/s^2"
    DAMPING = "N s/m", "a damping coefficient", '"4 N s/m"', "kN s/m, N s/m, mN s/m"
    TORSIONAL_DAMPING = "N m s/rad", "a torsional damping", '"0.1 N m s/rad"', "N m s/rad"
    UNBALANCE = "kg m", "an unbalance", '"50 g mm"', "kg m, g m, g mm"
    TEMPERATURE = "K", "a temperature", '"20 degC"', "K"
    TEMPERATURE_DIFFERENCE = "K", "a difference of temperatures", '"20 K"', "K"
    RATIO = "1", "a pure number", '0.3 or "2 %"', "1"
    PRICE = "1", "a price", "12.5", "1"
    SPEED = "Hz", "a rotational speed", '"1450 rpm"', "kHz, Hz, mHz"
    VELOCITY = "m/s", "a velocity", '"5 mm/s"', "m/s, mm/s, µm/s"

    def __init__(self, unit: str, noun: str, example: str, shown: str) -> None:
        self.unit, self.noun, self.example = unit, noun, example
        self.shown = tuple(shown.split(", "))
        self.si = _si_unit(unit)

    @property
    def expectation(self) -> str:
        """Name and example, as messages put it."""
        return f"{self.noun}, such as {self.example}"


@dataclass(frozen=True, slots=True)
class Window:
    """What is allowed on both sides of a value: absolute in SI, or `relative`, a share of it."""

    value: float
    relative: bool


# Where two kinds share a dimension the first gives the name.
_KIND_OF = {kind.si.dimension: kind for kind in reversed(Kind)}
_TIME, _FORCE_PER_MASS = Kind.TIME.si.dimension, Kind.ACCELERATION.si.dimension


def dimension_of(kind: Kind | Dimension) -> Dimension:
    """Return the dimension of a kind; a dimension stays what it is."""
    return kind if isinstance(kind, Dimension) else kind.si.dimension


def _described(dimension: Dimension) -> str:
    noun = _KIND_OF[dimension].noun if dimension in _KIND_OF else "a quantity"
    return noun if dimension == _ONE.dimension else f"{noun} in {dimension.unit}"


@dataclass(frozen=True, slots=True, kw_only=True)
class _Quantity:
    """What was read, `bare` if without a unit, and how messages quote it."""

    number: Fraction
    unit: _Unit
    bare: bool
    whole: str

    def value(self, si: _Unit, expected: str, *, difference: bool = False) -> float:
        """Convert to another unit of the same dimension; a difference knows no offset."""
        offset = 0 if difference else self.unit.offset
        exact = (self.number * self.unit.scale + offset) / si.scale
        try:
            value = float(exact) * math.pi ** (self.unit.pi - si.pi)
        except OverflowError:
            value = math.inf
        if math.isinf(value) or (value == 0 and exact != 0):
            raise QuantityError(expected, self.whole, OUT_OF_RANGE)
        return value

    def require(self, kind: Kind, expected: str) -> None:
        """Check the dimension; radians below the line may be left out: N m for N m/rad."""
        found, wanted = self.unit.dimension, kind.si.dimension
        if found == wanted or (wanted.exponents[-1] < 0 and found == wanted.without_angle):
            return
        if self.bare:
            hint = f'its unit is missing, as in "{float(self.number):g} {kind.unit}"'
            raise QuantityError(expected, f"the bare number {self.whole}", hint)
        hint, found, wanted = "", found.without_angle, wanted.without_angle
        if wanted in (found * _FORCE_PER_MASS, found * _FORCE_PER_MASS**-1):
            hint = "g and lb are masses, N and lbf are forces"
        elif found == wanted == _TIME**-1:
            hint = "Hz counts cycles and rad/s radians: write which one is meant"
        described = _described(self.unit.dimension)
        raise QuantityError(expected, f"{self.whole}, {described}", hint)


def _read(text: object, expected: str) -> _Quantity:
    """Read a quantity of whatever kind."""
    if isinstance(text, str):
        return _read_text(text, expected)
    if isinstance(text, bool) or not isinstance(text, int | float):
        raise QuantityError(expected, f"a value of type {type(text).__name__}")
    if not -math.inf < text < math.inf or abs(text) > sys.float_info.max:
        raise QuantityError(expected, "a number that is not finite")
    return _Quantity(number=Fraction(text), unit=_ONE, bare=True, whole=f"{text:g}")


def _read_text(text: str, expected: str) -> _Quantity:
    whole = _shown(text)

    def fail(hint: str) -> NoReturn:
        raise QuantityError(expected, whole, hint)

    if len(text) > MAX_TEXT:
        fail(f"a text of {len(text)} characters is too long")
    if "," in text:
        fail(NO_COMMA)
    plain = text.translate(ALIKE).strip()
    match = LEADING_NUMBER.match(plain)
    if not match:
        fail("a finite number comes first, then its unit")
    number = exact(match[2], fail) * (-1 if match[1] == "-" else 1)
    rest = plain[match.end() :].strip()
    if rest.startswith(("/", "*", "^")):
        fail('the number is followed by a unit, as in "5 mm" or "5 1/K"')
    unit = _read_unit(rest, expected, whole) if rest else _ONE
    return _Quantity(number=number, unit=unit, bare=not rest, whole=whole)


def parse_quantity(text: object, kind: Kind) -> float:
    """Read one quantity.

    Parameters
    ----------
    text : str, or int or float for pure numbers
        "20 mm", "0.36 Hz", "2 %". A frequency may be given as a period.
    kind : Kind
        What is expected there.

    Returns
    -------
    float
        In ``kind.unit``; frequencies and rotational speeds in Hz, temperatures from absolute zero.

    Raises
    ------
    QuantityError
        If it cannot be read, is not finite, or is something else.
    """
    quantity = _read(text, kind.expectation)
    if kind is Kind.FREQUENCY and quantity.unit.dimension == _TIME:
        if quantity.number == 0:
            raise QuantityError(kind.expectation, quantity.whole, "no period is zero")
        per_period = _UNITS["Hz"] * _UNITS["s"] * quantity.unit**-1
        quantity = replace(quantity, number=1 / quantity.number, unit=per_period)
    quantity.require(kind, kind.expectation)
    difference = kind is Kind.TEMPERATURE_DIFFERENCE
    return quantity.value(kind.si, kind.expectation, difference=difference)


def parse_window(text: object, kind: Kind) -> Window:
    """Read the half-width allowed on both sides of a value of some kind.

    A pure number written with a unit ("2 %", "50 ppm") is a share of the value, also where that
    is a pure number itself; all else is absolute, temperatures as differences. The window of a
    frequency is a frequency, never a period.

    Raises
    ------
    QuantityError
        If it cannot be read, is negative or not finite, or is something else.
    """
    expected = f'the window of {kind.noun}, such as {kind.example}, or a share of it, "2 %"'
    quantity = _read(text, expected)
    if quantity.number < 0:
        raise QuantityError(expected, quantity.whole, "it holds on both sides and has no sign")
    relative = quantity.unit.dimension == _ONE.dimension and not quantity.bare
    if relative:
        kind = Kind.RATIO
    quantity.require(kind, expected)
    return Window(quantity.value(kind.si, expected, difference=True), relative)


def quantity_dimension(text: object) -> tuple[float, Dimension]:
    """Read a quantity whose kind is not known beforehand.

    Returns
    -------
    value : float
        In ``dimension.unit``: Hz for all that counts turns per time.
    dimension : Dimension
        With radians kept: N m and N m/rad differ. A time stays a time.

    Raises
    ------
    QuantityError
        If it cannot be read or is not finite.
    """
    expected = 'a quantity, such as "1.2 m", or a pure number'
    quantity = _read(text, expected)
    dimension = quantity.unit.dimension
    kind = _KIND_OF.get(dimension)
    return quantity.value(kind.si if kind else _Unit(Fraction(1), dimension), expected), dimension


def is_product_text(text: str) -> bool:
    """Tell a product of names from a quantity by its beginning.

    A product begins with a letter, a parenthesis, or a number followed by ``*``, ``/`` or ``^``:
    "arm", "0.98 * arm", "2 * m". All else is a quantity: "2 m", "3", "5 1/K".
    """
    return PRODUCT_START.match(text[:MAX_TEXT].translate(ALIKE)) is not None


def is_quantity_text(text: str) -> bool:
    """Tell a quantity from a product of names: the opposite of `is_product_text`."""
    return not is_product_text(text)


def parse_product(text: object) -> Product:
    """Read a product of names and pure numbers with whole or rational powers.

    Names follow `NAME_PATTERN`; whether they exist is for `product_dimension` to say. A number may
    have a sign, which counts after its power as usual: ``-2^2`` is -4.

    Raises
    ------
    QuantityError
        If it is no product, or its coefficient is zero or not finite.
    """
    expected = 'a product of names and numbers, such as "0.98 * arm"'
    if not isinstance(text, str):
        raise QuantityError(expected, f"a value of type {type(text).__name__}")
    whole = _shown(text)

    def fail(hint: str) -> NoReturn:
        raise QuantityError(expected, whole, hint)

    if len(text) > MAX_TEXT:
        fail(f"a text of {len(text)} characters is too long")
    return Reader(text.translate(ALIKE), PRODUCT_TOKEN, fail).read()


def product_dimension(product: Product, dimensions: Mapping[str, Kind | Dimension]) -> Dimension:
    """Work out the dimension of a product, radians taken as pure numbers.

    Raises
    ------
    QuantityError
        If it contains a name that `dimensions` has not.
    """
    result = _ONE.dimension
    for name, power in product.powers:
        if name not in dimensions:
            near = _did_you_mean(difflib.get_close_matches(name, dimensions, n=1))
            raise QuantityError("the name of a variable", _shown(name), near)
        result = result * dimension_of(dimensions[name]) ** power
    return result.without_angle


def check_product(product: Product, kind: Kind, dimensions: Mapping[str, Kind | Dimension]) -> None:
    """Make sure that a product has the dimension of a kind, radians taken as pure numbers.

    Raises
    ------
    QuantityError
        If it has another, or contains a name that `dimensions` has not.
    """
    found = product_dimension(product, dimensions)
    if found != kind.si.dimension.without_angle:
        raise QuantityError(kind.noun, f"{_shown(str(product))}, {_described(found)}")


def format_quantity(value: float, kind: Kind | Dimension, digits: int = 5) -> str:
    """Write a number for people, in the unit that fits its size.

    Parameters
    ----------
    value : float
        In SI; need not be finite.
    kind : Kind or Dimension
        A dimension that no kind has is written in base units.
    digits : int
        Significant digits; zeros at the end are left out.
    """
    known = kind if isinstance(kind, Kind) else _KIND_OF.get(kind)
    unit = known.unit if known else dimension_of(kind).unit
    if not math.isfinite(value):
        return f"{value} {unit}".removesuffix(" 1")
    # Rounded before the unit is chosen, so that 999.9999 N/m are 1 kN/m.
    exact = amount = Decimal(f"{value or 0.0:.{digits - 1}e}")
    if known and value:
        for unit in known.shown:
            scale = _si_unit(unit).scale / known.si.scale
            amount = exact * scale.denominator / scale.numerator
            if abs(amount) >= (1 if scale > 1 else Decimal("0.1")):
                break
    plain = "f" if -5 <= amount.adjusted() < 7 else "e"
    return f"{amount.normalize():{plain}} {unit}".removesuffix(" 1")
