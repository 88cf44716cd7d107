"""Variables, and the dimensions of the parts that follow them.

A *variable* is a number the designer may choose; a *dimension* belongs to one part. Two dimensions may
follow one variable and yet have an error each, so every dimension has a place of its own in ``d``.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from inverse.assembly.algebra import Monomial, symbol
from inverse.assembly.terms import Array, Monomials, Point
from inverse.errors import ModelError
from inverse.units import Kind, Product


@dataclass(frozen=True, slots=True, kw_only=True)
class Variable:
    """A free number within a range, or a fixed one (`low` = `high`), SI.

    Positive ones are handled in logarithms: `positive` is true exactly where `low` > 0.
    """

    name: str
    low: float
    high: float
    start: float | None = None
    unit: str = "1"
    stock: str | None = None

    @property
    def positive(self) -> bool:
        """Whether its logarithm can be taken throughout the range."""
        return self.low > 0

    @property
    def free(self) -> bool:
        """Whether there is anything to choose."""
        return self.high > self.low

    @property
    def value(self) -> float | None:
        """The design as it stands: the start value, or the fixed one."""
        return self.start if self.free else self.low


Amount = float | Product
"""What a dimension is given as: a number in SI, or a product of variables."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Dimension:
    """A number that belongs to one part.

    `follows` gives its nominal value over the variables. Where a dimension was written as a product, its
    factors are dimensions of their own; the product keeps a place in ``d`` with nominal value one,
    which takes an error on the result, and `shown` multiplies it out.
    """

    name: str
    unit: str
    follows: Monomial
    positive: bool
    shown: Monomial


@dataclass(slots=True)
class Register:
    """The dimensions met while an assembly is put together, in order."""

    variables: Mapping[str, Variable]
    dimensions: dict[str, Dimension] = field(default_factory=dict)

    def take(
        self,
        part: str,
        key: str,
        kind: Kind,
        amount: Amount,
        *,
        signed: bool = False,
        sign_apart: bool = False,
    ) -> Monomial:
        """Enter a dimension and return it as a monomial over dimensions.

        A `signed` dimension may be zero or negative and is then used with whole powers only; with
        `sign_apart` its size is the dimension and its sign, which never changes, stays in the
        coefficient. A dimension of the surroundings has no part ("").
        """
        name = f"{part}.{key}" if part else key
        sign = 1.0
        if sign_apart and _coefficient(amount) < 0:
            sign, amount = -1.0, _negative(amount)
        if isinstance(amount, Product) and _has_factors(amount):
            return sign * self._take_product(part, name, kind, amount)
        follows = self._over_variables(name, amount)
        self._enter(name, kind.unit, follows, positive=not signed, shown=sign * symbol(name))
        return sign * symbol(name)

    def _take_product(self, part: str, name: str, kind: Kind, amount: Product) -> Monomial:
        """Enter the factors and, with nominal value one, the product itself."""
        shown = Monomial(amount.coefficient) * symbol(name)
        for variable, power in amount.powers:
            factor, source = f"{part}.{variable}", self._variable(name, variable)
            self._enter(factor, source.unit, symbol(variable), positive=source.positive, shown=symbol(factor))
            shown = shown * symbol(factor) ** float(power)
        self._enter(name, kind.unit, Monomial(1.0), positive=True, shown=shown)
        return shown

    def _enter(self, name: str, unit: str, follows: Monomial, *, positive: bool, shown: Monomial) -> None:
        if positive and not self._is_positive(follows):
            raise ModelError(f"`{name}` must be greater than zero throughout the range of what it follows")
        entry = Dimension(name=name, unit=unit, follows=follows, positive=positive, shown=shown)
        known = self.dimensions.setdefault(name, entry)
        if known.follows != follows or known.shown != shown:
            raise ModelError(
                f"`{name}` is given twice with different values: a factor of a product and a dimension of the "
                "same part share this name; rename the variable"
            )

    def _is_positive(self, follows: Monomial) -> bool:
        return follows.coefficient > 0 and all(self.variables[variable].positive for variable, _ in follows.powers)

    def _over_variables(self, name: str, amount: Amount) -> Monomial:
        if not isinstance(amount, Product):
            return Monomial(float(amount))
        follows = Monomial(amount.coefficient)
        for variable, power in amount.powers:
            self._variable(name, variable)
            follows = follows * symbol(variable) ** float(power)
        return follows

    def _variable(self, name: str, variable: str) -> Variable:
        try:
            return self.variables[variable]
        except KeyError:
            raise ModelError(f"`{name}` follows `{variable}`, which is not a variable") from None


def _coefficient(amount: Amount) -> float:
    return amount.coefficient if isinstance(amount, Product) else float(amount)


def _negative(amount: Amount) -> Amount:
    if isinstance(amount, Product):
        return Product(coefficient=-amount.coefficient, powers=amount.powers)
    return -float(amount)


def _has_factors(amount: Product) -> bool:
    """More than a scaled variable."""
    return len(amount.powers) > 1 or any(power != 1 for _, power in amount.powers)


@dataclass(frozen=True)
class Parameters:
    """Variables ``x`` (P) and the base dimensions (D) as monomials of them."""

    variables: tuple[Variable, ...]
    dimensions: tuple[Dimension, ...]
    nominal: Monomials

    @classmethod
    def compile(cls, register: Register) -> Parameters:
        """Arrays from the register."""
        variables = tuple(register.variables.values())
        positive = np.array([v.positive for v in variables], bool)
        index = {v.name: i for i, v in enumerate(variables)}
        dimensions = tuple(register.dimensions.values())
        nominal = Monomials.compile([d.follows for d in dimensions], index, positive)
        return cls(variables, dimensions, nominal)

    @property
    def positive(self) -> NDArray[np.bool_]:
        """Which dimensions are positive, shape (D,)."""
        return np.array([d.positive for d in self.dimensions], bool)

    def variable_point(self, x: Array) -> Point:
        """Variables (B, P) as a point of their own space."""
        return Point(np.atleast_2d(x), np.array([v.positive for v in self.variables], bool))

    def pull(self, point: Point, d: Array, cotangent: Array) -> Array:
        """From derivatives in local coordinates of ``d``, (B, k, D), to those of ``x``, (B, k, P)."""
        slope = np.where(self.positive, 1.0 / np.where(self.positive, d, 1.0), 1.0)
        return self.nominal.pull(point, d, cotangent * slope[:, None, :])
