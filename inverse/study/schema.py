"""The study file, table by table: what may stand where, in which unit, and what it means.

Each class is one table of the file and each field one of its keys; what a key takes is told by the entries at the head.
Rules that need other tables (names, patterns, units that follow from a part) are in `inverse.study.reading`.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Annotated, Any, ClassVar, Literal, Self, get_args

from pydantic import BaseModel, ConfigDict, Field, GetJsonSchemaHandler, ValidationError, model_validator

from inverse.assembly.parameters import Amount
from inverse.errors import QuantityError
from inverse.study import entries
from inverse.study.entries import Known, Measure, ModeText, Scope, found, read_quantity, read_window, refusal
from inverse.units import Kind, Product, Window
from objectives.base import AtLeast, AtMost, Maximise, Minimise, Requirement, Target

# ---------------------------------------------------------------- what keys take

Name = Annotated[str, entries.PART]
VariableName = Annotated[str, entries.VARIABLE_NAME]
PartName = Annotated[str, entries.REFERENCE]
Names = Annotated[tuple[str, ...], entries.NAMES]
Patterns = Annotated[tuple[str, ...], entries.PATTERNS]
Words = Annotated[str, entries.text("a text")]
Axis = Annotated[str, entries.choice("x", "y", "z", "rx", "ry", "rz", "r")]
FilePath = Annotated[str, entries.text("the path of a file", 1000)]
Yes = Annotated[bool, entries.YES]
Raw = Annotated[str | int | float, entries.RAW]
AnyQuantity = Annotated[Measure, entries.ANY_QUANTITY]
Ends = Annotated[tuple[str, str], entries.ENDS]
At = Annotated[tuple[Amount, ...] | dict[str, tuple[Amount, ...]], entries.AT]
Direction = Annotated[tuple[float, ...], entries.DIRECTION]
Mode = Annotated[ModeText, entries.MODE]
Modes = Annotated[tuple[ModeText, ModeText], entries.MODES]
Likeness = Annotated[tuple[tuple[str, float], ...], entries.LIKE]

Mass = Annotated[Amount, entries.amount(Kind.MASS)]
MassOrZero = Annotated[Amount, entries.amount(Kind.MASS, "not negative")]
Length = Annotated[Amount, entries.amount(Kind.LENGTH)]
LengthOrZero = Annotated[Amount, entries.amount(Kind.LENGTH, "not negative")]
Rate = Annotated[Amount, entries.amount(Kind.RATE)]
Share = Annotated[Amount, entries.amount(Kind.RATIO, "not negative")]
Count = Annotated[Amount, entries.COUNT]
Factor = Annotated[Amount, entries.FACTOR]
Duration = Annotated[float, entries.quantity(Kind.TIME)]
Completeness = Annotated[float, entries.quantity(Kind.RATIO, "positive", 1.0)]
Price = Annotated[float, entries.quantity(Kind.PRICE, "not negative")]
Band = Annotated[tuple[float, float], entries.span(Kind.FREQUENCY, "not negative")]
SpeedRange = Annotated[tuple[float, float], entries.span(Kind.SPEED)]
Orders = Annotated[tuple[float, ...], entries.ORDERS]


def about(text: str, default: Any = ...) -> Any:
    """A key with its meaning; without a default it is required."""
    return Field(default, description=text)


class Table(BaseModel):
    """A table of the file: keys beyond those below are refused."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True)

    def given(self, *keys: str) -> list[str]:
        """Those of some keys that the file has."""
        return [key for key in keys if getattr(self, key) is not None]

    def refuse(self, key: str, expected: str, what: str, hint: str = "") -> Exception:
        """Error at a key of this table."""
        return refusal(QuantityError(expected, what, hint), key)


# ---------------------------------------------------------------- variables and stock


class Variable(Table):
    """A number the designer may choose within a range, or a fixed one."""

    range: Annotated[tuple[Measure, Measure], entries.RANGE] | None = about("[lowest, highest], with units", None)
    value: AnyQuantity | None = about("of a fixed variable, instead of a range", None)
    start: AnyQuantity | None = about("the design as it stands; otherwise starts are chosen", None)
    stock: Words | None = about("name of the stock list that has the only values that can be ordered", None)

    @model_validator(mode="after")
    def _one_of_two(self) -> Self:
        if len(self.given("range", "value")) != 1:
            raise self.refuse("", "either `range` or `value`", "both" if self.range else "neither")
        if self.value and self.start:
            raise self.refuse("start", "a `range` beside `start`", "`value`", "a fixed variable has no start")
        if self.range and self.start:
            low, high = self.range
            if self.start.dimension != low.dimension:
                raise self.refuse("start", f"a value in {low.dimension.unit}", f"one in {self.start.dimension.unit}")
            if not low.value <= self.start.value <= high.value:
                inside = f"a start within the range, {low.value:.6g} to {high.value:.6g} {low.dimension.unit}"
                raise self.refuse("start", inside, f"{self.start.value:.6g} {low.dimension.unit}")
        return self

    @property
    def ends(self) -> tuple[Measure, Measure]:
        """The range; of a fixed variable its value twice."""
        if self.range:
            return self.range
        assert self.value is not None  # by the check above
        return self.value, self.value


SERIES = ("R5", "R10", "R20", "R40", "R80")


class Stock(Table):
    """What can be ordered: a list in a file, values, or a series of preferred numbers."""

    file: FilePath | None = about("CSV with part, value, unit; optional tolerance, mass, price, quantity", None)
    values: Annotated[tuple[Measure, ...], entries.listed(entries.ANY_QUANTITY, "quantities")] | None = about(
        "the values themselves", None
    )
    series: Annotated[str, entries.choice(*SERIES)] | None = about("preferred numbers (ISO 3)", None)
    from_: AnyQuantity | None = Field(None, alias="from", description="smallest value of the series")
    to: AnyQuantity | None = about("greatest value of the series", None)

    @model_validator(mode="after")
    def _one_of_three(self) -> Self:
        sources = self.given("file", "values", "series")
        if len(sources) != 1:
            raise self.refuse("", "one of `file`, `values`, `series`", " and ".join(sources) or "none of them")
        ends = {"from": self.from_, "to": self.to}
        for key, end in ends.items():
            if (end is None) == (self.series is not None):
                raise self.refuse(key, "`from` and `to` with a `series` only", "none" if end is None else "one")
        if self.from_ and self.to:
            if self.from_.dimension != self.to.dimension:
                raise self.refuse("to", f"a value in {self.from_.dimension.unit}", f"one in {self.to.dimension.unit}")
            if not 0 < self.from_.value < self.to.value:
                raise self.refuse("from", "a smallest value above zero and below `to`", f"{self.from_.value:.6g}")
        for value in self.values or ():
            if value.dimension != (self.values or (value,))[0].dimension:
                raise self.refuse("values", "values of one unit", "several")
        return self


# ---------------------------------------------------------------- bodies


class Body(Table):
    """What bodies have in common."""

    name: Name = about("unique among bodies and links")
    damping_ratio: Share | None = about("of the body alone, the others held", None)
    swing: Annotated[Measure, entries.SWING] | None = about("the amplitude it will be used at", None)


class SlidingMass(Body):
    """A body that slides along one axis."""

    kind: Literal["mass"]
    mass: Mass = about("its mass")
    moves: Annotated[Literal["horizontal", "vertical"], entries.choice("horizontal", "vertical")] = about(
        "along x (horizontal) or z (vertical)", "horizontal"
    )


class Pendulum(Body):
    """A bob on a uniform rod that swings in x."""

    kind: Literal["pendulum"]
    mass: Mass = about("of the bob")
    length: Length = about("from the pivot to the bob's centre")
    rod_mass: MassOrZero | None = about("of the uniform rod, which reaches to the bob's centre", None)
    bob_radius: LengthOrZero | None = about("makes the bob a solid sphere", None)
    hung_from: PartName | None = about("another pendulum, at its bob's centre, or a horizontally moving mass", None)


class Rotor(Body):
    """A body that turns about the shaft line."""

    kind: Literal["rotor"]
    inertia: Annotated[Amount, entries.amount(Kind.INERTIA)] = about("moment of inertia about the shaft line")


class Platform(Body):
    """A rigid body on links, in the plane (z, ry) or in space (all six)."""

    kind: Literal["platform"]
    mass: Mass = about("its mass")
    inertia: Annotated[tuple[Amount, ...], entries.INERTIA] = about(
        "about the centre of mass: one value in the plane; xx yy zz, or xx yy zz xy yz zx, in space"
    )
    centre: Annotated[tuple[Amount, ...], entries.COORDINATES] | None = about(
        "of mass, from the reference point: x or [x, z] in the plane, three in space", None
    )

    @model_validator(mode="after")
    def _centre_fits(self) -> Self:
        allowed = (1, 2) if len(self.inertia) == 1 else (3,)
        if self.centre is not None and len(self.centre) not in allowed:
            place = "one (x) or two (x, z) coordinates in the plane" if allowed == (1, 2) else "three coordinates"
            raise self.refuse("centre", place, f"{len(self.centre)}", "one moment of inertia makes it a plane platform")
        return self


class Joint(Body):
    """A point of a rod frame."""

    kind: Literal["joint"]
    position: Annotated[tuple[Amount, ...], entries.POSITION] = about("[x, z] or [x, y, z]")
    fixed: Annotated[tuple[str, ...], entries.FIXED] = about("true, or the axes along which it is held", ())
    mass: MassOrZero | None = about("a mass it carries", None)

    @model_validator(mode="after")
    def _fixed_fits(self) -> Self:
        if len(self.position) == 2 and self.fixed == ("y",):
            raise self.refuse("fixed", "axes among x and z for a joint in the plane", "y")
        return self


AnyBody = Annotated[SlidingMass | Pendulum | Rotor | Platform | Joint, Field(discriminator="kind")]


# ---------------------------------------------------------------- links


class Link(Table):
    """What links have in common."""

    name: Name = about("unique among bodies and links")
    between: Ends = about('the bodies at its ends, the carried one first, or one and "ground"')


class Elastic(Link):
    """What links that store energy have in common."""

    loss_factor: Share | None = about("of its material", None)


class Tied(Link):
    """What links between points have in common."""

    at: At | None = about(
        "depth below a pivot, or coordinates on a platform; one for both ends or a table by body", None
    )
    direction: Direction | None = about("along which it acts, from the second end to the first", None)
    count: Count | None = about("identical pieces in parallel", None)


class Spring(Tied, Elastic):
    """A spring along one line."""

    kind: Literal["spring"]
    rate: Rate = about("force per stretch")
    static_rate: Rate | None = about("rate under slow load, where it differs", None)
    mass: MassOrZero | None = about("its own mass", None)
    preload: Annotated[Amount, entries.amount(Kind.FORCE, "any")] | None = about("tension at rest", None)


class Mount(Tied, Elastic):
    """A mount, stiff along its axis and across it."""

    kind: Literal["mount"]
    rates: Annotated[tuple[Amount, ...], entries.RATES] = about("[axial, lateral] or [axial, lateral, lateral]")
    height: Length | None = about("of a strut, which under load loses lateral rate", None)
    static_rate: Rate | None = about("axial rate under slow load, where it differs", None)


class Damper(Tied):
    """A viscous damper."""

    kind: Literal["damper"]
    coefficient: Raw = about("in N s/m between points, in N m s/rad between rotors; or a product of variables")


class Shaft(Elastic):
    """A torsion spring between two rotors, or a rotor and the ground."""

    kind: Literal["shaft"]
    rate: Annotated[Amount, entries.amount(Kind.TORSIONAL_RATE)] = about("moment per twist")
    count: Count | None = about("identical pieces in parallel", None)


class Gear(Link):
    """An exact constraint between two rotors."""

    kind: Literal["gear"]
    ratio: Annotated[Amount, entries.amount(Kind.RATIO, "any")] = about(
        "speed of the second body over that of the first, negative for an external mesh"
    )

    @model_validator(mode="after")
    def _turns(self) -> Self:
        if self.ratio == 0:
            raise self.refuse("ratio", "a ratio other than zero", "0")
        return self


class Rod(Elastic):
    """An elastic rod between two joints."""

    kind: Literal["rod"]
    area: Annotated[Amount, entries.amount(Kind.AREA)] = about("of its cross-section")
    modulus: Annotated[Amount, entries.amount(Kind.MODULUS)] = about("Young's modulus")
    density: Annotated[Amount, entries.amount(Kind.DENSITY)] | None = about("where its mass counts", None)


AnyLink = Annotated[Spring | Mount | Damper | Shaft | Gear | Rod, Field(discriminator="kind")]


class Matrices(Table):
    """Imported matrices over labels; each label is a body with one component x."""

    labels: Annotated[tuple[str, ...], entries.LABELS] = about("of the degrees of freedom, in order")
    name: Name | None = about("of the model, for its dimensions", None)
    mass: FilePath | None = about("Matrix Market file, SI, symmetric", None)
    stiffness: FilePath | None = about("Matrix Market file, SI, symmetric", None)
    damping: FilePath | None = about("Matrix Market file, SI, symmetric", None)
    mass_times: Factor | None = about("a product of variables the matrix is multiplied by", None)
    stiffness_times: Factor | None = about("a product of variables the matrix is multiplied by", None)
    damping_times: Factor | None = about("a product of variables the matrix is multiplied by", None)

    @model_validator(mode="after")
    def _something(self) -> Self:
        if not self.given("mass", "stiffness", "damping"):
            raise self.refuse("", "a file for `mass`, `stiffness` or `damping`", "none")
        for key in ("mass", "stiffness", "damping"):
            if getattr(self, f"{key}_times") is not None and getattr(self, key) is None:
                raise self.refuse(f"{key}_times", f"a matrix `{key}` to multiply", "none")
        return self


# ---------------------------------------------------------------- objectives


class Asked(Table):
    """An objective and what is required of it."""

    measures: ClassVar[Kind]
    most: ClassVar[float] = float("inf")
    otherwise: ClassVar[str] = ""
    """Hint at the kind that measures what was found instead."""
    WAYS: ClassVar[tuple[str, ...]] = ("target", "at_least", "at_most", "minimise", "maximise")

    label: Words | None = about("names it in results", None)
    weight: Annotated[float, entries.quantity(Kind.RATIO)] = about("ranks targets that cannot all be met", 1.0)
    conditions: Names | None = about("conditions under which it must hold; all of them by default", None)
    target: Raw | None = about("wanted value", None)
    within: Raw | None = about('allowed on both sides of the target, absolute or "2 %" of it', None)
    at_least: Raw | None = about("lowest value allowed", None)
    at_most: Raw | None = about("greatest value allowed", None)
    minimise: Yes | None = about("the less the better", None)
    maximise: Yes | None = about("the more the better", None)

    @property
    def measured_in(self) -> Kind:
        """What kind of quantity it measures."""
        return self.measures

    @model_validator(mode="after")
    def _one_way(self) -> Self:
        ways = self.given(*self.WAYS)
        if len(ways) != 1:
            listed = "exactly one of `target` with `within`, `at_least`, `at_most`, `minimise`, `maximise`"
            raise self.refuse("", listed, " and ".join(f"`{way}`" for way in ways) or "none of them")
        if (self.target is None) != (self.within is None):
            missing, there = ("within", "target") if self.within is None else ("target", "within")
            raise self.refuse(missing, f"`{missing}` beside `{there}`", "none", 'such as within = "1 %"')
        self.requirement()
        return self

    def requirement(self) -> Requirement:
        """The window, limit or wish in SI."""
        if self.minimise:
            return Minimise()
        if self.maximise:
            return Maximise()
        if self.at_least is not None:
            return AtLeast(self._number("at_least", self.at_least))
        if self.at_most is not None:
            return AtMost(self._number("at_most", self.at_most))
        value = self._number("target", self.target)
        try:
            window: Window = read_window(self.within, self.measured_in)
        except QuantityError as error:
            raise refusal(error, "within") from None
        within = window.value * value if window.relative else window.value
        if not within > 0:
            raise self.refuse("within", "a window greater than zero", found(self.within))
        return Target(value, within)

    def _number(self, key: str, value: object) -> float:
        try:
            return read_quantity(value, self.measured_in, "not negative", self.most)
        except QuantityError as error:
            better = QuantityError(error.expected, error.found, error.hint or self.otherwise)
            raise refusal(better, key) from None

    @classmethod
    def __get_pydantic_json_schema__(cls, core: Any, handler: GetJsonSchemaHandler) -> dict[str, Any]:
        """Say which quantity it is, and that there is exactly one requirement."""
        schema = handler.resolve_ref_schema(handler(core))
        kind = getattr(cls, "measures", None)
        if kind is not None:
            shown = entries.quantity(kind).json
            for key in ("target", "at_least", "at_most"):
                text = schema["properties"][key]["description"]
                schema["properties"][key] = shown | {"description": f"{text}: {shown['description']}"}
        schema["oneOf"] = [{"required": ["target", "within"]}, *({"required": [way]} for way in cls.WAYS[1:])]
        schema["dependentRequired"] = {"within": ["target"]}
        return schema


class AskedOfMode(Asked):
    """An objective on one mode."""

    mode: Mode = about("its number, or { like = … } for the mode of a shape")


class AskedOfModes(Asked):
    """An objective on two modes."""

    modes: Modes = about("[i, j], two modes")


class Ascending(AskedOfModes):
    """An objective on the distance of two modes."""

    @model_validator(mode="after")
    def _ascends(self) -> Self:
        first, second = self.modes
        if isinstance(first, int) and isinstance(second, int) and first > second:
            raise self.refuse("modes", f"[{second}, {first}], the lower mode first", f"[{first}, {second}]")
        return self


class Frequency(AskedOfMode):
    """Frequency of a mode."""

    measures = Kind.FREQUENCY
    kind: Literal["frequency"]


class Period(AskedOfMode):
    """Period of a mode."""

    measures = Kind.TIME
    otherwise = 'for a frequency use kind = "frequency"'
    kind: Literal["period"]


class Splitting(Ascending):
    """Difference of two frequencies."""

    measures = Kind.FREQUENCY
    kind: Literal["splitting"]


class BeatPeriod(Ascending):
    """Time of one beat of two modes, there and back once."""

    measures = Kind.TIME
    otherwise = 'for a difference of frequencies use kind = "splitting"'
    kind: Literal["beat period"]


class FrequencyRatio(AskedOfModes):
    """Frequency of the second mode over that of the first."""

    measures = Kind.RATIO
    kind: Literal["frequency ratio"]


class KeepOut(Table):
    """Bands in which no oscillating mode may lie."""

    kind: Literal["keep out"]
    label: Words | None = about("names it in results", None)
    weight: Annotated[float, entries.quantity(Kind.RATIO)] = about("ranks what cannot all be met", 1.0)
    conditions: Names | None = about("conditions under which it must hold; all of them by default", None)
    band: Band | None = about("[lowest, highest] frequency", None)
    orders: Orders | None = about("multiples of the speed, each a band", None)
    speed: SpeedRange | None = about("[lowest, highest] rotational speed, with `orders`", None)
    margin: Annotated[Window, entries.window(Kind.FREQUENCY)] | None = about("moves the edges outward", None)
    driven_by: Annotated[tuple[str, ...], entries.one_or_listed(entries.REFERENCE, "names")] | None = about(
        "bodies or components; only modes in which they take part count", None
    )

    @model_validator(mode="after")
    def _band_or_orders(self) -> Self:
        if self.band and self.given("orders", "speed"):
            raise self.refuse("band", "`band`, or `orders` with `speed`", "both")
        if not self.band and not self.orders:
            raise self.refuse("", "`band`, or `orders` with `speed`", "`speed` alone" if self.speed else "neither")
        if not self.band and not self.speed:
            raise self.refuse("speed", 'a range of speeds beside `orders`, such as ["1420 rpm", "1500 rpm"]', "none")
        if self.margin and self.margin.relative and self.margin.value >= 1:
            raise self.refuse("margin", "less than 100 % of the edges", f"{100 * self.margin.value:.6g} %")
        return self


class Transfer(Asked):
    """An objective on motion handed from one body to another."""

    from_: PartName = Field(alias="from", description="body or component that is displaced and released")
    to: PartName = about("body or component that receives")
    horizon: Duration | None = about("time looked at; the longest beat period by default", None)


class TransferTime(Transfer):
    """When the receiver first holds the greatest share of the energy."""

    measures = Kind.TIME
    kind: Literal["transfer time"]
    completeness: Completeness | None = about("share that must arrive", None)


class TransferCompleteness(Transfer):
    """Share of the energy that arrives."""

    measures = Kind.RATIO
    most = 1.0
    kind: Literal["transfer completeness"]
    time: Duration | None = about("when it is judged; at the transfer time by default", None)


class HandedAmplitude(Transfer):
    """Greatest displacement of the receiver over the initial one."""

    measures = Kind.RATIO
    kind: Literal["handed amplitude"]


class Shape(AskedOfMode):
    """Mass-weighted modal assurance of a mode with a wanted shape."""

    measures = Kind.RATIO
    most = 1.0
    kind: Literal["shape"]
    like: Likeness = about("wanted displacements by body or component")


class NodalPoint(AskedOfMode):
    """Displacement of a body over the greatest in the mode."""

    measures = Kind.RATIO
    most = 1.0
    kind: Literal["nodal point"]
    body: PartName = about("the body to be still")
    axis: Axis | None = about("along which; else the length of its translation", None)


class EnergyShare(AskedOfMode):
    """Share of a mode's energy that a body holds."""

    measures = Kind.RATIO
    most = 1.0
    kind: Literal["energy share"]
    body: PartName = about("the body")
    axis: Axis | None = about("only its motion along or about this axis", None)


class Sag(Asked):
    """Static deflection of a body, downward positive, or the change of length of a link."""

    measures = Kind.LENGTH
    kind: Literal["sag"]
    body: PartName | None = about("the body that sinks", None)
    link: PartName | None = about("the link that stretches", None)
    force: Annotated[float, entries.quantity(Kind.FORCE)] | None = about("instead of the own weight", None)
    axis: Annotated[str, entries.choice("x", "y", "z")] | None = about("along which the force acts", None)

    @model_validator(mode="after")
    def _body_or_link(self) -> Self:
        if len(self.given("body", "link")) != 1:
            raise self.refuse("", "either `body` or `link`", "both" if self.body else "neither")
        for key in self.given("force", "axis") if self.link else []:
            raise self.refuse(key, f"`{key}` beside `body` only", "`link`", "name the body that the force acts on")
        return self


class DampingRatio(AskedOfMode):
    """Damping ratio of a mode."""

    measures = Kind.RATIO
    kind: Literal["damping ratio"]


class DecayTime(AskedOfMode):
    """Time in which a mode decays to 1/e."""

    measures = Kind.TIME
    kind: Literal["decay time"]


class SteadyMotion(Asked):
    """An objective on steady motion under a load."""

    body: PartName = about("body whose motion is looked at; with `link force` the link")
    load: PartName = about("name of the load")
    axis: Axis | None = about("along or about which", None)
    quantity: Annotated[str, entries.choice("displacement", "velocity", "acceleration", "link force")] = about(
        "what is looked at", "displacement"
    )

    @property
    def measured_in(self) -> Kind:
        """Follows from the quantity."""
        turning = self.axis is not None and self.axis.startswith("r")
        kinds = {
            "displacement": Kind.ANGLE if turning else Kind.LENGTH,
            "velocity": Kind.SPEED if turning else Kind.VELOCITY,
            "acceleration": Kind.ACCELERATION,
            "link force": Kind.FORCE,
        }
        return kinds[self.quantity]


class Response(SteadyMotion):
    """Amplitude of the steady motion at one frequency."""

    kind: Literal["response"]
    at_frequency: Annotated[float, entries.quantity(Kind.FREQUENCY)] = about("of the load")


class Transmissibility(SteadyMotion):
    """Motion over that of the base, or force into the ground over the force."""

    measures = Kind.RATIO
    kind: Literal["transmissibility"]
    at_frequency: Annotated[float, entries.quantity(Kind.FREQUENCY)] = about("of the load")

    @property
    def measured_in(self) -> Kind:
        """A ratio."""
        return Kind.RATIO


class PeakResponse(SteadyMotion):
    """Greatest amplitude of the steady motion over a band."""

    kind: Literal["peak response"]
    band: Band = about("[lowest, highest] frequency")


class TotalMass(Asked):
    """Mass of bodies, rods and links with mass."""

    measures = Kind.MASS
    kind: Literal["total mass"]
    parts: Patterns | None = about("patterns over part names; all by default", None)


class Cost(Asked):
    """Price of the parts."""

    measures = Kind.PRICE
    kind: Literal["cost"]
    parts: Patterns | None = about("patterns over part names; all by default", None)


class LeastChange(Asked):
    """How far variables move from their start values."""

    measures = Kind.RATIO
    kind: Literal["least change"]


AnyObjective = Annotated[
    Frequency
    | Period
    | Splitting
    | BeatPeriod
    | FrequencyRatio
    | KeepOut
    | TransferTime
    | TransferCompleteness
    | HandedAmplitude
    | Shape
    | NodalPoint
    | EnergyShare
    | Sag
    | DampingRatio
    | DecayTime
    | Response
    | Transmissibility
    | PeakResponse
    | TotalMass
    | Cost
    | LeastChange,
    Field(discriminator="kind"),
]


# ---------------------------------------------------------------- what the shop, the site and the budget add


class Tolerance(Table):
    """What the shop allows on dimensions; one table is one batch."""

    on: Patterns = about('patterns over dimension names, such as ["*.length"]')
    each: Raw | None = about('every piece for itself: "1 mm", "4 %", a class as "class m" (ISO 2768-1) or "IT8"', None)
    batch: Raw | None = about("one error common to all", None)
    distribution: Annotated[str, entries.choice("normal", "uniform", "triangular")] = about(
        "normal has its limit at three standard deviations and is truncated there", "normal"
    )

    @model_validator(mode="after")
    def _something(self) -> Self:
        if not self.given("each", "batch"):
            raise self.refuse("", "`each` or `batch`, or both", "neither")
        return self


class Load(Table):
    """A periodic load."""

    name: Name = about("unique among loads")
    kind: Annotated[
        str, entries.choice("force", "unbalance", "base displacement", "base velocity", "base acceleration")
    ] = about("what acts")
    body: PartName | None = about("on which it acts; none for a moving base", None)
    axis: Axis | None = about("along or about which", None)
    amplitude: Raw = about("N, or N m about an axis; kg m of an unbalance; m, m/s or m/s^2 of the base")
    orders: Orders | None = about("multiples of the speed at which it acts", None)
    speed: SpeedRange | None = about("[lowest, highest] rotational speed", None)

    @model_validator(mode="after")
    def _orders_and_speed(self) -> Self:
        if len(self.given("orders", "speed")) == 1:
            missing = "speed" if self.orders else "orders"
            raise self.refuse(missing, "`orders` and `speed` together", f"no `{missing}`")
        base = self.kind.startswith("base")
        if base and self.body:
            raise self.refuse("body", f"no body with a {self.kind}", "one", "it moves the ground")
        if not base and not self.body:
            raise self.refuse("body", "the body on which it acts", "none")
        return self


class Condition(Table):
    """A state of the assembly in which objectives must hold too."""

    name: Name = about("unique among conditions")
    set: Annotated[tuple[tuple[str, Any], ...], entries.by_pattern(entries.RAW)] | None = about(
        "values by dimension pattern", None
    )
    factor: Annotated[tuple[tuple[str, float], ...], entries.by_pattern(entries.quantity(Kind.RATIO))] | None = about(
        "factors by dimension pattern", None
    )
    shift: Annotated[tuple[tuple[str, Any], ...], entries.by_pattern(entries.RAW)] | None = about(
        "changes by dimension pattern", None
    )
    temperature: Annotated[float, entries.quantity(Kind.TEMPERATURE)] | None = about("of the whole assembly", None)

    @model_validator(mode="after")
    def _something(self) -> Self:
        if not self.given("set", "factor", "shift", "temperature"):
            raise self.refuse("", "`set`, `factor`, `shift` or `temperature`", "none of them")
        return self


class Prices(Table):
    """What parts cost, and what tightening a tolerance costs."""

    on: Patterns = about("patterns over part names, or over dimension names")
    price: Price | None = about("of one piece", None)
    price_per: Annotated[Product, entries.own_product("a product of the part's own dimensions in SI")] | None = about(
        'price of one piece as a product of its dimensions, such as "4.2 * mass"', None
    )
    tolerance_price: (
        Annotated[Product, entries.own_product('a product of `tolerance` in SI, such as "0.002 / tolerance"')] | None
    ) = about('price of a tolerance, such as "0.002 / tolerance"; a number stands for number / tolerance', None)

    @model_validator(mode="after")
    def _something(self) -> Self:
        if self.price is not None and self.price_per is not None:
            raise self.refuse("price", "either `price` or `price_per`", "both")
        if not self.given("price", "price_per", "tolerance_price"):
            raise self.refuse("", "`price`, `price_per` or `tolerance_price`", "none of them")
        if self.price_per is not None and self.price_per.coefficient < 0:
            raise self.refuse("price_per", "a price greater than zero", "a negative one")
        if self.tolerance_price is not None:
            self._check_tolerance_price(self.tolerance_price)
        return self

    def _check_tolerance_price(self, price: Product) -> None:
        names = {name for name, _ in price.powers}
        falling = all(power < 0 for _, power in price.powers)
        if names - {"tolerance"} or not falling or price.coefficient < 0:
            raise self.refuse("tolerance_price", 'a falling product of `tolerance`, as "0.002 / tolerance"', str(price))


class Adjust(Table):
    """What can be adjusted once it is built."""

    on: Patterns = about("patterns over dimension names")
    range: Annotated[tuple[Measure, Measure], entries.RANGE] = about("[lowest, highest] value it can be set to")
    step: AnyQuantity | None = about("between settings; none where it is continuous", None)
    direction: Annotated[str, entries.choice("both", "up", "down")] = about("in which it can be moved", "both")
    cost: Price | None = about("of one adjustment", None)

    @model_validator(mode="after")
    def _step_fits(self) -> Self:
        if self.step:
            low, high = self.range
            if self.step.dimension != low.dimension:
                raise self.refuse("step", f"a step in {low.dimension.unit}", f"one in {self.step.dimension.unit}")
            if not 0 < self.step.value <= high.value - low.value:
                raise self.refuse("step", "a step above zero and within the range", f"{self.step.value:.6g}")
        return self


class Solve(Table):
    """How designs are looked for."""

    route: Annotated[str, entries.choice("auto", "gradient", "convex", "search", "reconstruct")] = about(
        "the way it is solved", "auto"
    )
    seed: Annotated[int, entries.whole("a seed", 0, 2**63 - 1)] = about("of the random starts", 1)
    starts: Annotated[int, entries.whole("a number of starts", 1, 100_000)] = about("tried", 24)
    alternatives: Annotated[int, entries.whole("a number of designs", 0, 1000)] = about("other designs to keep", 5)


class StudyFile(Table):
    """One file is one reproducible piece of work. Quantities are texts with units."""

    title: Words | None = about("of the study", None)
    gravity: Annotated[Amount, entries.GRAVITY] | None = about("an acceleration, or latitude and height", None)
    variables: dict[VariableName, Variable] = about("what may be chosen, by name", {})
    stock: dict[str, Stock] = about("what can be ordered, by name", {})
    body: list[AnyBody] = about("bodies", [])
    link: list[AnyLink] = about("links between bodies, or a body and the ground", [])
    matrix: list[Matrices] = about("imported matrices", [])
    objective: list[AnyObjective] = about("what is asked", [])
    tolerance: list[Tolerance] = about("what the shop allows", [])
    load: list[Load] = about("periodic loads", [])
    condition: list[Condition] = about("states in which objectives must hold", [])
    cost: list[Prices] = about("prices", [])
    adjust: list[Adjust] = about("what can be adjusted when built", [])
    solve: Solve = about("how designs are looked for", Solve())


# ---------------------------------------------------------------- doors


def _kinds(union: Any) -> dict[str, type[Table]]:
    tables = get_args(get_args(union)[0])
    return {get_args(table.model_fields["kind"].annotation)[0]: table for table in tables}


KINDS: Mapping[str, Mapping[str, type[Table]]] = {
    "body": _kinds(AnyBody),
    "link": _kinds(AnyLink),
    "objective": _kinds(AnyObjective),
}
"""Tables whose keys depend on their `kind`."""

ARRAYS = ("body", "link", "matrix", "objective", "tolerance", "load", "condition", "cost", "adjust")
PLAIN: Mapping[str, type[Table]] = {
    "variables": Variable,
    "stock": Stock,
    "matrix": Matrices,
    "tolerance": Tolerance,
    "load": Load,
    "condition": Condition,
    "cost": Prices,
    "adjust": Adjust,
    "solve": Solve,
    "": StudyFile,
}
"""Tables of one kind only, by section."""


def scope_of(raw: Mapping[str, Any]) -> Scope:
    """The variables of a file as far as their own tables can be read."""
    tables = raw.get("variables")
    known: dict[str, Known | None] = {}
    for name, table in tables.items() if isinstance(tables, dict) else ():
        try:
            low, high = Variable.model_validate(table).ends
            known[name] = Known(low.dimension, low.value, high.value)
        except ValidationError:
            known[name] = None
    return Scope(known)


def json_schema() -> dict[str, Any]:
    """JSON Schema (draft 2020-12) of the study file, for editors and for checks before a run."""
    schema = _without_null(StudyFile.model_json_schema(by_alias=True))
    schema["properties"]["variables"]["propertyNames"] = entries.VARIABLE_NAME.json
    for table in schema["$defs"].values():
        table["title"] = table["properties"].get("kind", {}).get("const", table["title"])
    head = {"$schema": "https://json-schema.org/draft/2020-12/schema", "title": "Study"}
    return head | {key: value for key, value in schema.items() if key != "title"}


def _without_null(schema: Any) -> Any:
    """TOML has no null: what may be left out is not required, and that says it all."""
    if isinstance(schema, list):
        return [_without_null(item) for item in schema]
    if not isinstance(schema, dict):
        return schema
    plain = {key: _without_null(value) for key, value in schema.items() if (key, value) != ("default", None)}
    options = plain.get("anyOf")
    if isinstance(options, list) and {"type": "null"} in options:
        rest = [option for option in options if option != {"type": "null"}]
        del plain["anyOf"]
        plain = (rest[0] if len(rest) == 1 else {"anyOf": rest}) | plain
    return plain
