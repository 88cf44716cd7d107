"""What a run found: one frozen record, the same names as in ``result.json``. SI values throughout."""

from __future__ import annotations

import enum
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any, Self

from inverse.design.bounds import Certificate
from inverse.design.shortfall import Shortfall
from inverse.design.verification import Verification
from inverse.errors import DesignError

if TYPE_CHECKING:
    import pandas as pd

Number = float | None
"""A number of a record; None where there is none (an objective undefined at this design)."""


class Status(enum.StrEnum):
    """How a run ended."""

    MET = "met"
    NOT_MET = "not met"
    IMPOSSIBLE = "impossible"


@dataclass(frozen=True, slots=True, kw_only=True)
class Mode:
    """One oscillating mode; the largest component of its shape is +1 (metres and radians)."""

    number: int
    frequency_hz: float
    damping_ratio: Number
    shape: Mapping[str, tuple[float, ...]]
    condition: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class ObjectiveRow:
    """One objective at a design. `asked`, `achieved` and `margin` are in `unit`; a negative margin is missed."""

    kind: str
    label: str
    asked: Mapping[str, Any]
    achieved: Number
    unit: str
    met: bool | None
    margin: Number
    condition: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Design:
    """One set of parts and what its assembly does.

    `components` names, for each body, the axes in the order in which a mode's shape lists them.
    """

    variables: Mapping[str, float]
    variable_units: Mapping[str, str]
    dimensions: Mapping[str, float]
    dimension_units: Mapping[str, str]
    components: Mapping[str, tuple[str, ...]]
    modes: tuple[Mode, ...]
    rigid_modes: int
    objectives: tuple[ObjectiveRow, ...]

    @property
    def met(self) -> bool:
        """Whether every objective that can be met is."""
        return all(row.met is not False for row in self.objectives)


@dataclass(frozen=True, slots=True, kw_only=True)
class Result:
    """What a command leaves behind."""

    study: str
    title: str
    command: str
    status: Status
    message: str
    route: str
    seed: int
    design: Design
    alternatives: tuple[Design, ...] = ()
    shortfall: Shortfall | None = None
    verification: Verification | None = None
    certificate: Certificate | None = None
    reach: tuple[Mapping[str, Any], ...] | None = None
    tolerance: Mapping[str, Any] | None = None
    warnings: tuple[str, ...] = ()
    modal_solves: int = 0
    wall_s: float = 0.0
    versions: Mapping[str, str] = field(default_factory=dict)

    @property
    def variables(self) -> Mapping[str, float]:
        """Values of the variables, SI."""
        return self.design.variables

    @property
    def dimensions(self) -> Mapping[str, float]:
        """Values of the parts' dimensions, SI."""
        return self.design.dimensions

    @property
    def modes(self) -> tuple[Mode, ...]:
        """Oscillating modes of the design."""
        return self.design.modes

    @property
    def rigid_modes(self) -> int:
        """Number of rigid modes of the design."""
        return self.design.rigid_modes

    @property
    def objectives(self) -> tuple[ObjectiveRow, ...]:
        """What was asked and what the design does."""
        return self.design.objectives

    def require_success(self) -> Self:
        """Return the result itself, or raise with the reason.

        Raises
        ------
        DesignError
            If an objective is missed.
        """
        if self.status is Status.MET:
            return self
        raise DesignError(f"{self.study}: {self.message}")

    def save(self, folder: str | Path) -> Path:
        """Write ``result.json`` and ``parts.csv`` into a folder.

        Raises
        ------
        StudyError
            If they cannot be written.
        """
        from inverse.study.archive import save_result

        return save_result(self, folder)

    def as_record(self) -> dict[str, Any]:
        """Plain lists, dictionaries and numbers, ready for ``result.json``."""
        return {
            "study": self.study,
            "title": self.title,
            "command": self.command,
            "status": str(self.status),
            "message": self.message,
            "route": self.route,
            "seed": self.seed,
            **_design_record(self.design),
            "alternatives": [_design_record(design) for design in self.alternatives],
            "shortfall": None if self.shortfall is None else _plain(self.shortfall),
            "verification": None if self.verification is None else _plain(self.verification),
            "certificate": None if self.certificate is None else _plain(self.certificate),
            "reach": None if self.reach is None else [dict(row) for row in self.reach],
            "tolerance": None if self.tolerance is None else dict(self.tolerance),
            "warnings": list(self.warnings),
            "evaluations": {"modal_solves": self.modal_solves, "wall_s": self.wall_s},
            "versions": dict(self.versions),
        }

    def to_frame(self, table: str) -> pd.DataFrame:
        """One of the tables ``variables``, ``dimensions``, ``modes``, ``objectives`` as a pandas DataFrame.

        Raises
        ------
        ValueError
            For any other name.
        """
        import pandas as pd

        design = self.design
        match table:
            case "variables" | "dimensions":
                values = getattr(design, table)
                units = design.variable_units if table == "variables" else design.dimension_units
                rows = [{"name": name, "value": value, "unit": units[name]} for name, value in values.items()]
            case "modes":
                rows = [
                    {
                        "number": m.number,
                        "frequency [Hz]": m.frequency_hz,
                        "damping ratio [1]": m.damping_ratio,
                    }
                    | {
                        f"{body}.{axis}": v
                        for body, u in m.shape.items()
                        for axis, v in zip(design.components[body], u, strict=True)
                    }
                    for m in design.modes
                ]
            case "objectives":
                rows = [_plain(row) for row in design.objectives]
            case _:
                raise ValueError(f"no table `{table}`; there are variables, dimensions, modes, objectives")
        return pd.DataFrame(rows)


def _design_record(design: Design) -> dict[str, Any]:
    return {
        "variables": _with_units(design.variables, design.variable_units),
        "dimensions": _with_units(design.dimensions, design.dimension_units),
        "components": _plain(design.components),
        "modes": [_plain(mode) for mode in design.modes],
        "rigid_modes": design.rigid_modes,
        "objectives": [_plain(row) for row in design.objectives],
    }


def _with_units(values: Mapping[str, float], units: Mapping[str, str]) -> dict[str, Any]:
    return {name: {"value": value, "unit": units[name]} for name, value in values.items()}


def _plain(record: Any) -> Any:
    """Dataclasses as dictionaries, tuples as lists, all the way down."""
    if hasattr(record, "__dataclass_fields__"):
        return {name: _plain(getattr(record, name)) for name in record.__dataclass_fields__}
    if isinstance(record, Mapping):
        return {key: _plain(value) for key, value in record.items()}
    if isinstance(record, tuple | list):
        return [_plain(value) for value in record]
    return record
