"""Sums of products of named dimensions, as the tables of terms are written.

A `Monomial` is ``c · Π d_i^e_i``; a `Polynomial` is a tuple of them, to be added; a `Row` is a linear form
over coordinates whose entries are polynomials. They exist only while an assembly is put together:
`inverse.assembly.terms` compiles them into arrays.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Monomial:
    """``coefficient · Π name^power`` with the names sorted and no power zero."""

    coefficient: float
    powers: tuple[tuple[str, float], ...] = ()

    def __mul__(self, other: Monomial | float) -> Monomial:
        """Product; powers of one name add up."""
        if not isinstance(other, Monomial):
            return Monomial(self.coefficient * other, self.powers)
        powers = dict(self.powers)
        for name, power in other.powers:
            powers[name] = powers.get(name, 0.0) + power
        return Monomial(self.coefficient * other.coefficient, normal_form(powers))

    __rmul__ = __mul__

    def __pow__(self, exponent: float) -> Monomial:
        """Power of every factor."""
        return Monomial(
            self.coefficient**exponent,
            normal_form({name: power * exponent for name, power in self.powers}),
        )

    def __truediv__(self, other: Monomial | float) -> Monomial:
        """Quotient."""
        return self * (other**-1 if isinstance(other, Monomial) else 1.0 / other)

    def __neg__(self) -> Monomial:
        """Opposite sign."""
        return self * -1.0


Polynomial = tuple[Monomial, ...]
Row = dict[str, Polynomial]


@dataclass(frozen=True, slots=True)
class Square:
    """One term ``weight · (row)²`` with the part it belongs to.

    `static` replaces the weight where slow loads are carried (a rubber mount is softer at rest).
    """

    owner: str
    axis: str
    weight: Monomial
    row: Row
    static: Monomial | None = None


ONE = Monomial(1.0)


def symbol(name: str) -> Monomial:
    """A dimension standing alone."""
    return Monomial(1.0, ((name, 1.0),))


def normal_form(powers: Mapping[str, float]) -> tuple[tuple[str, float], ...]:
    """Sorted, without zero powers."""
    return tuple(sorted((name, power) for name, power in powers.items() if power))


def collected(terms: Iterable[Monomial]) -> Polynomial:
    """Like terms added, vanishing ones dropped."""
    total: dict[tuple[tuple[str, float], ...], float] = {}
    for term in terms:
        total[term.powers] = total.get(term.powers, 0.0) + term.coefficient
    return tuple(Monomial(c, powers) for powers, c in total.items() if c)


def times(factor: Monomial | float, row: Row) -> Row:
    """A row multiplied by one monomial."""
    return {coordinate: tuple(term * factor for term in entry) for coordinate, entry in row.items()}


def plus(*rows: Row) -> Row:
    """The sum of rows, entries that cancel dropped."""
    coordinates = dict.fromkeys(c for row in rows for c in row)
    total = {c: collected(t for row in rows for t in row.get(c, ())) for c in coordinates}
    return {c: entry for c, entry in total.items() if entry}


def minus(first: Row, second: Row) -> Row:
    """The difference of two rows."""
    return plus(first, times(-1.0, second))


def product(first: Polynomial, second: Polynomial) -> Polynomial:
    """Every term times every term."""
    return collected(a * b for a in first for b in second)
