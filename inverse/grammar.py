"""The grammar that units and products share: one recursive descent, never evaluated as code.

    unit     := factor ((' ' | '*' | '·' | '/') factor)*, from left to right
    product  := factor (('*' | '/') factor)*
    factor   := (name | number | '(' ... ')') ['^' number | '^(p/q)']

`inverse.units` says what names and numbers may stand in which of them.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import NoReturn

from inverse.errors import QuantityError

NAME_PATTERN = r"[A-Za-z][A-Za-z0-9_]*"
"""What a variable may be called."""

MAX_TEXT, MAX_DEPTH, MAX_POWER = 1000, 20, 100
"""Limits far beyond any use; they bound what a hostile file can cost."""

_NUMBER = r"(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE][+-]?[0-9]+)?"
LEADING_NUMBER = re.compile(rf"([+-]?)({_NUMBER})")
PRODUCT_TOKEN = re.compile(rf"\s*({_NUMBER}|{NAME_PATTERN}|[-*/^()])")
UNIT_TOKEN = re.compile(rf"\s*({_NUMBER}|[A-Za-zµ%°]+|[-*·/^()])")
PRODUCT_START = re.compile(rf"\s*(?:-?\s*[A-Za-z(]|[+-]?{_NUMBER}\s*[*/^])")
ALIKE = str.maketrans("μ⋅−", "µ·-")  # Greek mu, dot operator, minus sign: same look and meaning
SUPERSCRIPTS = re.compile("[⁻⁰¹²³⁴⁵⁶⁷⁸⁹]+")
ORDINARY = str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789")
NO_COMMA = "decimals are written with a point, and thousands with nothing between"
OUT_OF_RANGE = "it is too large or too small a number"
_POWER_FORMS = 'a power is written "^2", "^-1", "^0.5" or "^(1/2)"'
_MISPLACED = {
    "": "it ends too early",
    "+": "a sum is no product",
    "-": 'a sum is no product; a sign belongs to a number or a power, as in "x^-1"',
    "*": "* stands between two factors; powers are written with ^",
    ",": NO_COMMA,
}

_Powers = tuple[tuple[str, Fraction], ...]


@dataclass(frozen=True, slots=True)
class Product:
    """A coefficient times names to powers, in order of appearance; a power may have come to 0."""

    coefficient: float
    powers: _Powers

    def __mul__(self, other: Product) -> Product:
        powers = dict(self.powers)
        for name, power in other.powers:
            powers[name] = powers.get(name, Fraction(0)) + power
        return Product(self.coefficient * other.coefficient, tuple(powers.items()))

    def __truediv__(self, other: Product) -> Product:
        quotient = self.coefficient / other.coefficient
        return replace(self * other ** Fraction(-1), coefficient=quotient)

    def __pow__(self, power: Fraction) -> Product:
        coefficient = math.pow(self.coefficient, float(power))
        return Product(coefficient, tuple((name, power * own) for name, own in self.powers))

    def __str__(self) -> str:
        return written(self.coefficient, self.powers, " * ", " / ")


def written(coefficient: float, powers: _Powers, times: str, over: str) -> str:
    """Write a product, or a unit, with one line of division."""

    def raised(name: str, power: Fraction) -> str:
        return name if power == 1 else f"{name}^{power if power.denominator == 1 else f'({power})'}"

    above = [raised(name, power) for name, power in powers if power >= 0]
    below = [raised(name, -power) for name, power in powers if power < 0]
    if coefficient != 1 or not above:
        above.insert(0, repr(coefficient).removesuffix(".0"))
    divisor = times.join(below) if len(below) < 2 else f"({times.join(below)})"
    return times.join(above) + (over + divisor if below else "")


class Reader:
    """Recursive descent over one text; `fail` raises with the whole that the text is part of."""

    def __init__(self, text: str, token: re.Pattern[str], fail: Callable[[str], NoReturn]) -> None:
        self.of_units, self.fail = token is UNIT_TOKEN, fail
        self.tokens: list[str] = []
        self.position = end = 0
        while match := token.match(text, end):
            self.tokens.append(match[1])
            end = match.end()
        if rest := text[end:].strip():
            self.misplaced(rest[0])

    @property
    def token(self) -> str:
        """The one to be read next; empty at the end."""
        return self.tokens[self.position] if self.position < len(self.tokens) else ""

    def take(self, *wanted: str) -> bool:
        """Step over the next token if it is one of those wanted."""
        found = self.token in wanted
        self.position += found
        return found

    def take_number(self) -> str:
        """Step over the next token if it is a number, and return it or nothing."""
        number = self.token if self.token[:1].isdigit() or self.token[:1] == "." else ""
        self.position += bool(number)
        return number

    def misplaced(self, token: str) -> NoReturn:
        """Refuse a token where it stands."""
        if (token[:1].isalnum() and token.isascii()) or token == "(":
            self.fail(f"* or / is missing before {token!r}; no units stand inside a product")
        if SUPERSCRIPTS.match(token):
            self.fail(_POWER_FORMS)
        self.fail(_MISPLACED.get(token) or f"{token!r} has no place there")

    def read(self) -> Product:
        """Read all of the text."""
        try:
            product = self.product(0)
        except QuantityError:
            raise
        except (ArithmeticError, ValueError):  # from powers and quotients of floats
            self.fail(OUT_OF_RANGE)
        if self.token:
            self.misplaced(self.token)
        if not math.isfinite(product.coefficient) or product.coefficient == 0:
            self.fail(OUT_OF_RANGE)
        powers = [power for _, power in product.powers]
        if any(abs(p) > MAX_POWER or p.denominator.bit_length() > MAX_POWER for p in powers):
            self.fail(f"powers are whole or simple fractions, up to {MAX_POWER}")
        return product

    def product(self, depth: int) -> Product:
        """Read factors and what joins them."""
        result = self.factor(depth)
        while self.token:
            if self.take("/"):
                result = result / self.factor(depth)
            elif self.take("*", "·") or (self.of_units and self.token not in ("^", ")", "-")):
                result = result * self.factor(depth)
            else:
                break
        return result

    def factor(self, depth: int) -> Product:
        """Read one factor with its power."""
        if self.take("("):
            return self.power_of(self.enclosed(depth + 1))
        sign = -1.0 if not self.of_units and self.take("-") else 1.0
        if number := self.take_number():
            return Product(sign, ()) * self.power_of(Product(self.value(number), ()))
        name = self.token
        if sign < 0 or not name or name in "*·/^()-":
            self.misplaced("-" if sign < 0 else name)
        self.position += 1
        return self.power_of(Product(1.0, ((name, Fraction(1)),)))

    def enclosed(self, depth: int) -> Product:
        """Read what parentheses hold."""
        if depth > MAX_DEPTH:
            self.fail(f"parentheses go {MAX_DEPTH} deep at most")
        inner = self.product(depth)
        if not self.take(")"):
            self.misplaced(self.token)
        return inner

    def value(self, number: str) -> float:
        """Return a number met as a factor; in a unit that is only the 1 of ``1/K``."""
        if self.of_units and not (number == "1" and self.position == 1 and self.token == "/"):
            self.fail('one number stands in front, without gaps; powers are written "mm^2"')
        if float(number) == 0:
            self.fail("zero is no factor")
        return float(number)

    def power_of(self, base: Product) -> Product:
        """Read a power, if there is one."""
        if not self.take("^"):
            return base
        if self.take("("):
            power = self.exponent()
            divisor = self.exponent() if self.take("/") else Fraction(1)
            if divisor == 0 or not self.take(")"):
                self.fail(_POWER_FORMS)
            power /= divisor
        else:
            power = self.exponent()
        if base.coefficient < 0 and power.denominator != 1:
            self.fail("a negative number has whole powers only")
        return base**power

    def exponent(self) -> Fraction:
        """Read a signed number as a fraction."""
        sign = -1 if self.take("-") else 1
        number = self.take_number()
        return sign * exact(number, self.fail) if number else self.fail(_POWER_FORMS)


def exact(number: str, fail: Callable[[str], NoReturn]) -> Fraction:
    """Return the fraction that a decimal is.

    The float is looked at first, because 1e999999999 as a fraction fills the memory.
    """
    if math.isinf(float(number)):
        fail("the number is too large")
    if float(number) == 0:
        return fail("the number is too small") if re.match("[0.]*[1-9]", number) else Fraction(0)
    return Fraction(number)
