"""Files that a study names: stock lists (CSV) and matrices (Matrix Market)."""

from __future__ import annotations

import csv
import io
from pathlib import Path

import numpy as np

from inverse.assembly.terms import Array
from inverse.errors import QuantityError
from inverse.study.content import StockItem
from inverse.study.entries import found, near, read_measure, read_quantity
from inverse.units import Dimension, Kind, Window, parse_window, quantity_dimension

LARGEST_FILE = 5_000_000
"""Bytes of a study file or a stock list; beyond that it is something else."""

LARGEST_MATRIX = 5_000
"""Degrees of freedom of an imported matrix, which is held in full."""

_REQUIRED = ("part", "value", "unit")
_COLUMNS = (*_REQUIRED, "tolerance", "mass", "price", "quantity")
_KINDS = {kind.unit: kind for kind in reversed(Kind)}


def window_in(text: object, unit: str) -> Window:
    """A half-width for a dimension of which only the SI unit is known.

    Raises
    ------
    QuantityError
        If it cannot be read, or has another unit.
    """
    kind = _KINDS.get(unit)
    if kind is not None:
        return parse_window(text, kind)
    if isinstance(text, str):
        share = _share(text)
        if share is not None:
            return share
    return Window(abs(value_in(text, unit)), relative=False)


def _share(text: str) -> Window | None:
    try:
        window = parse_window(text, Kind.RATIO)
    except QuantityError:
        return None
    return window if window.relative else None


def value_in(text: object, unit: str) -> float:
    """A value of a dimension of which only the SI unit is known.

    Raises
    ------
    QuantityError
        If it cannot be read, or has another unit.
    """
    kind = _KINDS.get(unit)
    if kind is not None:
        return read_quantity(text, kind)
    measure = read_measure(text)
    if measure.dimension.without_angle.unit != unit and measure.dimension.unit != unit:
        raise QuantityError(f"a quantity in {unit}", f"{found(text)}, in {measure.dimension.unit}")
    return measure.value


def path_of(name: str, folder: Path) -> Path:
    """The file that a study in a folder names.

    Raises
    ------
    QuantityError
        If it is no file, or a relative path leads out of the folder.
    """
    expected = "a file in the study's folder, or an absolute path"
    try:
        path = (folder / name).resolve()
        if not Path(name).is_absolute() and not path.is_relative_to(folder.resolve()):
            raise QuantityError(expected, found(name), "the path leads out of the folder")
        if not path.is_file():
            raise QuantityError(expected, found(name), "there is no such file")
    except (OSError, ValueError, RuntimeError) as error:
        if isinstance(error, QuantityError):
            raise
        raise QuantityError(expected, found(name), "no file can have such a name") from None
    return path


def contents(path: Path, noun: str) -> str:
    """Text of a file in UTF-8, a mark of byte order at its beginning left out.

    Raises
    ------
    QuantityError
        If it is too large, cannot be read, or is no such text.
    """
    expected = f"{noun} in UTF-8"
    try:
        if not path.is_file():
            raise QuantityError(expected, "a folder" if path.is_dir() else "no such file")
        size = path.stat().st_size
        if size > LARGEST_FILE:
            raise QuantityError(expected, f"{size / 1e6:.1f} MB", f"{LARGEST_FILE / 1e6:.0f} MB are the limit")
        data = path.read_bytes()
    except OSError as error:
        raise QuantityError(expected, "a file that cannot be read", error.strerror or "") from None
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        hint = "save the file with the encoding UTF-8"
        raise QuantityError(expected, f"bytes that are none, at line {line}", hint) from None


def read_stock(path: Path) -> tuple[tuple[StockItem, ...], Dimension]:
    """A stock list, and the dimension of its values.

    Raises
    ------
    QuantityError
        If the file or one of its lines is at fault.
    """
    text = contents(path, "a stock list")
    rows = csv.reader(io.StringIO(text, newline=""), strict=True)
    try:
        header = [column.strip() for column in next(rows, [])]
        _check_header(header)
        items: dict[str, StockItem] = {}
        dimensions: list[Dimension] = []
        for cells in rows:
            if not any(cell.strip() for cell in cells):
                continue
            item, dimension = _read_line(header, cells, rows.line_num)
            if item.part in items:
                raise QuantityError("each part once", f"{found(item.part)} again at line {rows.line_num}")
            if dimensions and dimension != dimensions[0]:
                what = f"{dimension.unit} after {dimensions[0].unit} at line {rows.line_num}"
                raise QuantityError("values of one kind", what)
            items[str(item.part)] = item
            dimensions.append(dimension)
    except csv.Error as error:
        raise QuantityError("a stock list in CSV", f"{error} at line {rows.line_num}") from None
    if not items:
        raise QuantityError("a stock list with at least one part", "none")
    return tuple(items.values()), dimensions[0]


def _check_header(header: list[str]) -> None:
    expected = f"the columns {', '.join(_REQUIRED)} and perhaps {', '.join(_COLUMNS[3:])}"
    for column in header:
        if column not in _COLUMNS:
            hint = near(column, _COLUMNS) or "columns are parted by commas"
            raise QuantityError(expected, f"the column {found(column)}", hint)
    if len(set(header)) < len(header):
        raise QuantityError(expected, "a column twice")
    if missing := [column for column in _REQUIRED if column not in header]:
        raise QuantityError(expected, f"no column {missing[0]}")


def _read_line(header: list[str], cells: list[str], line: int) -> tuple[StockItem, Dimension]:
    if len(cells) != len(header):
        hint = "decimals are written with a point"
        raise QuantityError(f"{len(header)} columns at line {line}", f"{len(cells)}", hint)
    row = {column: cell.strip() for column, cell in zip(header, cells, strict=True)}
    try:
        return _item(row)
    except QuantityError as error:
        raise QuantityError(f"{error.expected} at line {line}", error.found, error.hint) from None


def _item(row: dict[str, str]) -> tuple[StockItem, Dimension]:
    if not row["part"]:
        raise QuantityError("a part number", "none")
    unit = "" if row["unit"] == "1" else row["unit"]
    value, dimension = quantity_dimension(f"{row['value']} {unit}".strip())
    if not value > 0:
        raise QuantityError("a value greater than zero", found(row["value"]))
    item = StockItem(
        part=row["part"],
        value=value,
        tolerance=window_in(row["tolerance"], dimension.unit) if row.get("tolerance") else None,
        mass=read_quantity(row["mass"], Kind.MASS, "not negative") if row.get("mass") else None,
        price=read_quantity(row["price"], Kind.PRICE, "not negative") if row.get("price") else None,
        quantity=_pieces(row["quantity"]) if row.get("quantity") else None,
    )
    return item, dimension


def _pieces(cell: str) -> int:
    if not cell.isascii() or not cell.isdigit() or len(cell) > 9:
        raise QuantityError("how many are in stock, a whole number", found(cell))
    return int(cell)


def read_matrix(path: Path, size: int) -> Array:
    """A square real matrix from a Matrix Market file, for `size` labels.

    Raises
    ------
    QuantityError
        If the file is at fault or the matrix has another size.
    """
    from scipy.io import mminfo, mmread

    expected = f"a real {size} × {size} matrix in Matrix Market format, one row per label"
    if size > LARGEST_MATRIX:
        raise QuantityError(f"at most {LARGEST_MATRIX} labels", f"{size}", "reduce the model first")
    try:
        rows, columns, stored, _, numbers, _ = mminfo(path)
        if (rows, columns) != (size, size):
            raise QuantityError(expected, f"{rows} × {columns}")
        if numbers not in ("real", "integer", "double"):
            raise QuantityError(expected, f"one of {numbers} numbers")
        if stored > size * size:
            raise QuantityError(expected, f"{stored} entries")
        matrix = mmread(path, spmatrix=False)
    except QuantityError:
        raise
    except (OSError, ValueError, OverflowError, TypeError, IndexError, KeyError, EOFError) as error:
        raise QuantityError(expected, "a file that cannot be read as one", str(error).splitlines()[0][:120]) from None
    dense = np.asarray(matrix if isinstance(matrix, np.ndarray) else matrix.toarray(), float)
    if not np.isfinite(dense).all():
        raise QuantityError(expected, "numbers that are not finite")
    if np.abs(dense - dense.T).max(initial=0.0) > 1e-12 * np.abs(dense).max(initial=0.0):
        raise QuantityError("a matrix that is symmetric to rounding", "one that is not")
    return dense
