"""A result as files, and files as a result again. Each file is written whole or not at all."""

from __future__ import annotations

import csv
import io
import json
import math
import os
import tempfile
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from inverse.design.bounds import Certificate
from inverse.design.shortfall import Shortfall
from inverse.design.verification import Verification
from inverse.errors import StudyError
from inverse.study.result import Design, Mode, ObjectiveRow, Result, Status

RECORD = "result.json"
PARTS = "parts.csv"
STUDY_TEXT = "study.toml"
"""A copy of the study, so that a result says what was asked and the page can be made again."""

PARTS_COLUMNS = ("part", "dimension", "value", "unit", "tolerance", "stock part number")


def save_result(result: Result, folder: str | Path, extra: Mapping[str, str] | None = None) -> Path:
    """Write ``result.json``, ``parts.csv`` and any `extra` texts (by file name) into a folder, made if missing.

    Raises
    ------
    StudyError
        If the folder or a file cannot be written; what stood there before is untouched.
    """
    target = Path(folder)
    texts = {RECORD: record_text(result), PARTS: parts_text(result), **(extra or {})}
    try:
        target.mkdir(parents=True, exist_ok=True)
        for name, text in texts.items():
            _replace(target / name, text)
    except OSError as error:
        raise StudyError(f"{target}: cannot write the result: {error.strerror or error}") from error
    return target


def _replace(path: Path, text: str) -> None:
    """Write beside the file, then move into its place."""
    handle, temporary = tempfile.mkstemp(prefix=f".{path.name}.", dir=path.parent)
    try:
        with os.fdopen(handle, "w", encoding="utf-8", newline="\n") as file:
            file.write(text)
            file.flush()
            os.fsync(file.fileno())
        os.chmod(temporary, 0o644)
        os.replace(temporary, path)
    except BaseException:
        Path(temporary).unlink(missing_ok=True)
        raise


def read_text(path: Path) -> str:
    """Read a text that an earlier run left, empty if there is none."""
    try:
        return path.read_text(encoding="utf-8")
    except FileNotFoundError:
        return ""
    except (OSError, UnicodeDecodeError) as error:
        raise StudyError(f"{path}: cannot be read: {error}") from error


def record_text(result: Result) -> str:
    """``result.json``: numbers that are not finite become null."""
    return json.dumps(_finite(result.as_record()), indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def _finite(value: Any) -> Any:
    if isinstance(value, float) and not math.isfinite(value):
        return None
    if isinstance(value, dict):
        return {key: _finite(entry) for key, entry in value.items()}
    if isinstance(value, list):
        return [_finite(entry) for entry in value]
    return value


def parts_text(result: Result) -> str:
    """``parts.csv``: a row for every dimension of every part."""
    text = io.StringIO()
    table = csv.writer(text, lineterminator="\n")
    table.writerow(PARTS_COLUMNS)
    for name, value in result.dimensions.items():
        part, _, dimension = name.partition(".")
        if dimension:
            table.writerow([part, dimension, repr(value), result.design.dimension_units[name], "", ""])
    return text.getvalue()


def load_result(folder: str | Path) -> Result:
    """Read a result back from its folder.

    Raises
    ------
    StudyError
        If there is no result, or it is not one of ours.
    """
    path = Path(folder) / RECORD
    try:
        return _result(json.loads(path.read_text(encoding="utf-8")))
    except OSError as error:
        raise StudyError(f"{path}: cannot read a result: {error.strerror or error}") from error
    except (ValueError, KeyError, TypeError, AttributeError) as error:
        raise StudyError(f"{path}: this is no result file, or it was cut short ({type(error).__name__})") from error


def _result(record: dict[str, Any]) -> Result:
    known = {
        key: record[key] for key in ("study", "title", "command", "message", "route", "seed", "reach", "tolerance")
    }
    shortfall, verification, certificate = (record[key] for key in ("shortfall", "verification", "certificate"))
    return Result(
        **known,
        status=Status(record["status"]),
        design=_design(record),
        alternatives=tuple(_design(entry) for entry in record["alternatives"]),
        shortfall=None if shortfall is None else _shortfall(shortfall),
        verification=None if verification is None else Verification(**_number(verification, "largest_difference")),
        certificate=None if certificate is None else Certificate(**certificate),
        warnings=tuple(record["warnings"]),
        modal_solves=record["evaluations"]["modal_solves"],
        wall_s=record["evaluations"]["wall_s"],
        versions=record["versions"],
    )


def _number(record: dict[str, Any], key: str) -> dict[str, Any]:
    """A number that must be there; null stands for one that was not finite."""
    return record | {key: math.inf if record[key] is None else record[key]}


def _shortfall(record: dict[str, Any]) -> Shortfall:
    pairs = tuple((first, second) for first, second in record["opposed"])
    return Shortfall(
        missed=tuple(record["missed"]),
        held=record["held"],
        opposed=pairs,
        relaxations=tuple(record["relaxations"]),
    )


def _design(record: dict[str, Any]) -> Design:
    return Design(
        variables={name: entry["value"] for name, entry in record["variables"].items()},
        variable_units={name: entry["unit"] for name, entry in record["variables"].items()},
        dimensions={name: entry["value"] for name, entry in record["dimensions"].items()},
        dimension_units={name: entry["unit"] for name, entry in record["dimensions"].items()},
        components={body: tuple(axes) for body, axes in record["components"].items()},
        modes=tuple(
            Mode(**(mode | {"shape": {body: tuple(u) for body, u in mode["shape"].items()}}))
            for mode in record["modes"]
        ),
        rigid_modes=record["rigid_modes"],
        objectives=tuple(ObjectiveRow(**row) for row in record["objectives"]),
    )
