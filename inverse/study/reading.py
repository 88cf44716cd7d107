"""From a study file to its content.

A file is read in three steps, and the first one that finds problems reports them all: the text as TOML, each table
by itself, and what needs several tables (names, ends of links, patterns over dimensions).
"""

from __future__ import annotations

import re
import tomllib
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import fields
from pathlib import Path
from typing import Any

import numpy as np

from inverse.assembly.assembly import Assembly, Model
from inverse.assembly.parameters import Variable
from inverse.assembly.statics import Deflection
from inverse.errors import ModelError, QuantityError, StudyError
from inverse.gravity import STANDARD_GRAVITY
from inverse.study import companions, schema
from inverse.study.content import SolveSettings, StudyContent
from inverse.study.entries import Scope
from inverse.study.names import Names
from inverse.study.parts import Parts
from inverse.study.problems import Problems, translate
from inverse.study.shop import Dimensions, Shop
from inverse.study.wishes import Wishes
from inverse.units import Product


def read_study(path: Path) -> StudyContent:
    """Read a study file and the files it names.

    Raises
    ------
    StudyError
        If a file is at fault, or the parts make no assembly; the message names file, table and key.
    """
    try:
        text = companions.contents(path, "a study file")
    except QuantityError as error:
        raise StudyError(f"{path}: {error}") from None
    return parse_study(text, path.parent, path.stem, str(path))


def parse_study(text: str, folder: Path, name: str, file: str = "") -> StudyContent:
    """Read the text of a study.

    Parameters
    ----------
    text : str
        TOML 1.0.
    folder : Path
        To which the paths in it are relative.
    name : str
        Of the study.
    file : str, optional
        How messages name it; `name` by default.

    Raises
    ------
    StudyError
        As `read_study`.
    """
    problems = Problems(file or name)
    raw = _toml(text, problems)
    tables, scope = _tables(raw, problems)
    return _content(tables, scope, folder, Names(raw, problems), name, text)


def _toml(text: str, problems: Problems) -> dict[str, Any]:
    try:
        if len(text) > companions.LARGEST_FILE:
            raise ValueError("the text is too large")
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        problems.stop(f"this is no TOML: {_one_line(error)}{_slip(text, str(error))}")
    except RecursionError:
        problems.stop("this is no TOML: brackets nested beyond all use")
    except ValueError as error:  # numbers of thousands of digits, dates that are none
        problems.stop(f"this is no TOML: {_one_line(error)}")


def _one_line(error: Exception) -> str:
    words = " ".join(str(error).split())
    return "a number with too many digits" if "digits" in words else words[:200]


def _slip(text: str, message: str) -> str:
    """What is wrong most often in a line that is no TOML: a quantity without its quotes."""
    place = re.search(r"at line (\d+)", message)
    lines = text.splitlines()
    if not place or int(place[1]) > len(lines):
        return ""
    line = lines[int(place[1]) - 1]
    if re.match(r"\s*[\w.\"-]+\s*=\s*[-+]?[\d.]+\s*[^\W\d_]", line):
        return '; quantities stand in quotes, as in mass = "6.5 kg"'
    return ""


def _tables(raw: Mapping[str, Any], problems: Problems) -> tuple[schema.StudyFile, Scope]:
    from pydantic import ValidationError

    scope = schema.scope_of(raw)
    try:
        return schema.StudyFile.model_validate(raw, context=scope), scope
    except ValidationError as error:
        translate(error.errors(include_url=False), raw, problems)
    problems.stop("the file cannot be read")


def _content(tables: schema.StudyFile, scope: Scope, folder: Path, names: Names, name: str, text: str) -> StudyContent:
    """The third step."""
    parts, shop = Parts(tables, scope, folder, names), Shop(tables, names)
    stocks = parts.stocks()
    variables = parts.variables(stocks)
    matrices = parts.enter()
    names.problems.raise_any()
    prices, loads = shop.prices(), shop.loads()
    wishes = Wishes(tables, names, variables, prices)
    objectives = wishes.objectives()
    names.problems.raise_any()
    assembly = Assembly(
        bodies=tuple(names.bodies[table.name] for table in tables.body),
        links=tuple(names.links.values()),
        matrices=matrices,
        gravity=STANDARD_GRAVITY if tables.gravity is None else tables.gravity,
        prices=prices,
    )
    model = _compiled(assembly, variables, tuple(wishes.deflections), names.problems)
    wishes.check_mode_numbers(model)
    over = Dimensions(model, names.problems)
    tolerances, conditions = shop.tolerances(over), shop.conditions(over)
    tolerance_prices, adjustments = shop.tolerance_prices(over), shop.adjustments(over)
    names.problems.raise_any()
    wishes.refuse_unjudged()
    return StudyContent(
        name=name,
        title=tables.title or name,
        text=text,
        variables=variables,
        assembly=assembly,
        model=model,
        objectives=objectives,
        deflections=tuple(wishes.deflections),
        tolerances=tolerances,
        stocks=stocks,
        loads=loads,
        conditions=conditions,
        tolerance_prices=tolerance_prices,
        adjustments=adjustments,
        swings=parts.swings(),
        damping_ratios=parts.damping_ratios(),
        loss_factors=parts.loss_factors(),
        solve=SolveSettings(**tables.solve.model_dump()),
        warnings=(*parts.warnings, *_unused(assembly, variables)),
    )


def _compiled(
    assembly: Assembly, variables: Sequence[Variable], deflections: Sequence[Deflection], problems: Problems
) -> Model:
    try:
        # Extreme sizes overflow on the way; what comes of it is judged where modes are computed.
        with np.errstate(all="ignore"):
            return assembly.compile(variables, deflections)
    except ModelError as error:
        problems.stop(str(error))
    except RecursionError:
        problems.stop("pendulums hang one from another too many times over")
    except (ArithmeticError, ValueError) as error:
        problems.stop(f"the parts make no assembly that can be computed: {_one_line(error)}")


def _unused(assembly: Assembly, variables: Sequence[Variable]) -> Iterator[str]:
    """Variables that no part follows."""
    parts: tuple[Any, ...] = (*assembly.bodies, *assembly.links, *assembly.matrices)
    amounts = [assembly.gravity, *(getattr(part, field.name) for part in parts for field in fields(part))]
    used = {name for amount in amounts for product in _products(amount) for name, _ in product.powers}
    for variable in variables:
        if variable.name not in used:
            yield f"variables.{variable.name}: no part follows it"


def _products(value: object) -> Iterator[Product]:
    if isinstance(value, Product):
        yield value
    elif isinstance(value, tuple):
        for item in value:
            yield from _products(item)
    elif isinstance(value, Mapping):
        yield from _products(tuple(value.values()))
