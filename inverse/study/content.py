"""What a study file says, checked and in SI: variables, assembly, objectives, and what later commands use."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

from inverse.assembly.assembly import Assembly, Model
from inverse.assembly.parameters import Amount, Variable
from inverse.assembly.statics import Deflection
from inverse.units import Product, Window
from objectives.base import Objective


@dataclass(frozen=True, slots=True, kw_only=True)
class SolveSettings:
    """How designs are looked for."""

    route: Literal["auto", "gradient", "convex", "search", "reconstruct"] = "auto"
    seed: int = 1
    starts: int = 24
    alternatives: int = 5


@dataclass(frozen=True, slots=True, kw_only=True)
class StockItem:
    """One thing that can be ordered; `tolerance` is what its maker allows, `quantity` how many there are."""

    part: str | None
    value: float
    tolerance: Window | None = None
    mass: float | None = None
    price: float | None = None
    quantity: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class StockList:
    """Things that can be ordered, in the order of the list; values in `unit`."""

    name: str
    unit: str
    items: tuple[StockItem, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class StockSeries:
    """Preferred numbers of one series (ISO 3) between two values in `unit`."""

    name: str
    unit: str
    series: str
    low: float
    high: float


Stock = StockList | StockSeries


@dataclass(frozen=True, slots=True, kw_only=True)
class Tolerance:
    """One batch: what is allowed on some dimensions.

    `each` is a half-width, absolute in the unit of the dimensions or a share of each one's value, or a published
    class: "f", "m", "c" or "v" of ISO 2768-1, or a grade of ISO 286 such as "IT8".
    """

    on: tuple[str, ...]
    dimensions: tuple[str, ...]
    each: Window | str | None
    batch: Window | None
    distribution: Literal["normal", "uniform", "triangular"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Load:
    """A periodic load on a component, or of the ground along an axis; `speed` in Hz."""

    name: str
    kind: str
    component: str
    amplitude: float
    orders: tuple[float, ...] = ()
    speed: tuple[float, float] | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Change:
    """What a condition does to one dimension."""

    dimension: str
    how: Literal["set", "factor", "shift"]
    value: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Condition:
    """A state in which objectives must hold too; `temperature` in K."""

    name: str
    changes: tuple[Change, ...]
    temperature: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class TolerancePrice:
    """What holding a tolerance on some dimensions costs, a product of `tolerance` in SI."""

    dimensions: tuple[str, ...]
    amount: Product


@dataclass(frozen=True, slots=True, kw_only=True)
class Adjustment:
    """What can be moved on some dimensions once they are built, SI."""

    dimensions: tuple[str, ...]
    low: float
    high: float
    step: float | None
    direction: Literal["both", "up", "down"]
    cost: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Swing:
    """The amplitude a body will be used at, in rad or m as `unit` says."""

    value: float
    unit: str


@dataclass(frozen=True, slots=True, kw_only=True)
class StudyContent:
    """Everything a study file states.

    `model` is the assembly compiled with the variables and deflections; prices of parts are in the assembly.
    `damping_ratios` are by body, `loss_factors` by link. `warnings` name what is no error but hardly meant.
    """

    name: str
    title: str
    text: str
    variables: tuple[Variable, ...]
    assembly: Assembly
    model: Model
    objectives: tuple[Objective, ...] = ()
    deflections: tuple[Deflection, ...] = ()
    tolerances: tuple[Tolerance, ...] = ()
    stocks: Mapping[str, Stock] = field(default_factory=dict)
    loads: tuple[Load, ...] = ()
    conditions: tuple[Condition, ...] = ()
    tolerance_prices: tuple[TolerancePrice, ...] = ()
    adjustments: tuple[Adjustment, ...] = ()
    swings: Mapping[str, Swing] = field(default_factory=dict)
    damping_ratios: Mapping[str, Amount] = field(default_factory=dict)
    loss_factors: Mapping[str, Amount] = field(default_factory=dict)
    solve: SolveSettings = field(default_factory=SolveSettings)
    warnings: tuple[str, ...] = ()
