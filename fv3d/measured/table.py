"""The table of readings at the door: header, units and cells checked, everything to SI.

Inside fv3d there is no unit and no empty cell any more.
"""

from __future__ import annotations

import csv
import math
import os
import re
from dataclasses import dataclass
from difflib import get_close_matches
from typing import Any

import numpy as np

from ..errors import ReadingError
from .units import LENGTH, NUMBER, PRESSURE, TIME, VELOCITY, Dimension

PLACE = ("x", "y", "z")
DIRECTION = ("nx", "ny", "nz")
AXIS_DIRECTION = {"u": (1.0, 0.0, 0.0), "v": (0.0, 1.0, 0.0), "w": (0.0, 0.0, 1.0)}
VALUES: dict[str, Dimension] = {"u": VELOCITY, "v": VELOCITY, "w": VELOCITY, "along": VELOCITY,
                                "speed": VELOCITY, "p": PRESSURE}
TEXT = ("name", "group")
COLUMNS: dict[str, Dimension | None] = {
    **dict.fromkeys(TEXT), **dict.fromkeys(PLACE, LENGTH), "time": TIME, **VALUES,
    **{f"{value}_std": dimension for value, dimension in VALUES.items()},
    **dict.fromkeys(DIRECTION, NUMBER)}
EXAMPLE = "x [mm], y [mm], z [mm], u [m/s], u_std [m/s], name, group"


@dataclass(frozen=True)
class Table:
    """Checked columns of a table of readings, in SI.

    Attributes
    ----------
    source : str
        File or object the table came from.
    numbers : mapping of column to (n,) array
        NaN stands for an empty cell.
    name, group : tuple of str, length n
    """

    source: str
    numbers: dict[str, np.ndarray]
    name: tuple[str, ...]
    group: tuple[str, ...]

    def cell(self, row: int, column: str) -> str:
        """Words that lead the user to a cell; the first reading is row 1."""
        return f"{self.source}, row {row + 1} ('{self.name[row]}'), column '{column}'"


def read_table(source: Any, *, places: Any = None) -> Table:
    """Read and check a table of readings.

    Parameters
    ----------
    source : path or DataFrame
        A text table separated by commas, semicolons or tabs (lines starting with ``#`` are
        skipped), or a DataFrame with the same column names.
    places : path or DataFrame, optional
        Places of a ``source`` with one column per value, see :mod:`fv3d.measured.wide`.

    Raises
    ------
    ReadingError
        Anything that cannot be used, with file, row and column.
    """
    where, header, rows = read_cells(source)
    if places is not None:
        from .wide import long_form
        header, rows = long_form(header, rows, places=read_cells(places), where=where)
    rows = [row for row in rows if not all(is_empty(cell) for cell in row)]
    columns = _read_header(header, where)
    if not rows:
        raise ReadingError("The table holds no readings.", where=where, got="no rows",
                           remedy=f"Add one row per place below the header, such as {EXAMPLE}.")
    table = _read_cells(columns, rows, where)
    _check_names(table)
    _check_places(table)
    _check_values(table)
    _check_directions(table)
    return table


def read_cells(source: Any) -> tuple[str, list[str], list[list[Any]]]:
    """Words for the source, header cells and rows of cells, unchecked."""
    if isinstance(source, (str, os.PathLike)):
        where = os.path.basename(os.fspath(source))
        header, rows = _read_text(os.fspath(source))
    elif hasattr(source, "columns") and hasattr(source, "itertuples"):
        where = "DataFrame"
        header = [str(column) for column in source.columns]
        rows = [list(row) for row in source.itertuples(index=False, name=None)]
    else:
        raise ReadingError("Readings are made from a file or a DataFrame.",
                           where="the argument of Readings or read_readings",
                           got=type(source).__name__, remedy=f"Give a table with {EXAMPLE}.")
    return where, header, rows


def _read_text(path: str) -> tuple[list[str], list[list[Any]]]:
    where = os.path.basename(path)
    try:
        with open(path, encoding="utf-8-sig", newline="") as file:
            lines = [line for line in file if line.strip() and not line.lstrip().startswith("#")]
    except OSError as error:
        raise ReadingError("The table of readings cannot be opened.", where=path,
                           got=error.strerror, remedy="Check the path and its permissions.") \
            from None
    except UnicodeDecodeError:
        raise ReadingError("The table of readings is not UTF-8 text.", where=path,
                           got="other bytes", remedy="Export the sheet as CSV in UTF-8.") from None
    if not lines:
        raise ReadingError("The table of readings is empty.", where=where, got="no lines",
                           remedy=f"Write a header such as {EXAMPLE}.")
    separator = max(",;\t", key=lines[0].count)
    try:
        table = list(csv.reader(lines, delimiter=separator, skipinitialspace=True, strict=True))
    except csv.Error as error:
        raise ReadingError("The table of readings is not a CSV table.", where=where,
                           got=str(error), remedy="Check the quotation marks.") from None
    header, rows = table[0], table[1:]
    for number, row in enumerate(rows):
        if len(row) != len(header):
            raise ReadingError("A row has another number of cells than the header.",
                               where=f"{where}, row {number + 1}",
                               got=f"{len(row)} cells, {len(header)} columns",
                               remedy="Separate cells alike in every row; a decimal comma needs "
                                      "a table separated by semicolons.")
    if separator != ",":
        rows = [[_decimal_point(cell) for cell in row] for row in rows]
    return header, rows


def _decimal_point(cell: str) -> str:
    return cell.replace(",", ".") if re.fullmatch(r"\s*[-+\d.eE]*,[\deE+-]*\s*", cell) else cell


def _read_header(header: list[str], where: str) -> list[tuple[str, float]]:
    columns: list[tuple[str, float]] = []
    for text in header:
        match = re.fullmatch(r"\s*([^\[\]]*?)\s*(?:\[\s*([^\[\]]*?)\s*\])?\s*", text)
        column, unit = match.groups() if match else (text, None)
        place = f"{where}, column '{text.strip()}'"
        if column not in COLUMNS and re.fullmatch(r"[^()]*\(.*\)", column):
            raise ReadingError("The unit of a column stands in round brackets.", where=place,
                               got=column, remedy="Use square brackets: 'x [mm]', 'u [m/s]'.")
        if column not in COLUMNS:
            near = get_close_matches(column.lower(), COLUMNS, n=1, cutoff=0.5)
            hint = f"Did you mean '{near[0]}'? " if near else ""
            raise ReadingError("A column has an unknown name.", where=place, got=column,
                               remedy=f"{hint}Known columns: {', '.join(COLUMNS)}.")
        if column in [known for known, _ in columns]:
            raise ReadingError("A column stands twice in the table.", where=place, got=column,
                               remedy="Leave one of them.")
        dimension = COLUMNS[column]
        if dimension is None and unit is not None:
            raise ReadingError("A column of text has a unit.", where=place, got=f"[{unit}]",
                               remedy=f"Write '{column}' alone.")
        if dimension is NUMBER:
            unit = unit or ""
        columns.append((column, 1.0 if dimension is None else dimension.factor(unit, where=place)))
    _check_columns([column for column, _ in columns], where)
    return columns


def _check_columns(columns: list[str], where: str) -> None:
    lacking = [column for column in PLACE if column not in columns]
    if lacking:
        raise ReadingError("The place of the readings is incomplete.", where=where,
                           got=f"no column {', '.join(lacking)}",
                           remedy="Give x, y and z with their unit, such as 'x [mm]'.")
    values = [column for column in columns if column in VALUES]
    if not values:
        raise ReadingError("The table holds no measured quantity.", where=where,
                           got=", ".join(columns),
                           remedy=f"Give at least one of {', '.join(VALUES)} with its unit.")
    for column in VALUES:
        if column in values and f"{column}_std" not in columns:
            raise ReadingError("A measured quantity has no standard deviation.",
                               where=f"{where}, column '{column}'",
                               got=f"no column '{column}_std'",
                               remedy=f"Add '{column}_std' with its unit beside '{column}'.")
        if f"{column}_std" in columns and column not in values:
            raise ReadingError("A standard deviation has no measured quantity.",
                               where=f"{where}, column '{column}_std'",
                               got=f"no column '{column}'",
                               remedy=f"Add '{column}' or remove '{column}_std'.")
    directions = [column for column in DIRECTION if column in columns]
    if ("along" in values) != (len(directions) == 3) or len(directions) in (1, 2):
        raise ReadingError("'along' and its direction go together.", where=where,
                           got=", ".join([c for c in values if c == "along"] + directions),
                           remedy="Give along, along_std, nx, ny and nz, or none of them.")


def is_empty(cell: Any) -> bool:
    """An empty text cell, or the missing value of a DataFrame."""
    if isinstance(cell, str):
        return not cell.strip()
    return cell is None or type(cell).__name__ in ("NAType", "NaTType") or bool(cell != cell)


def _read_cells(columns: list[tuple[str, float]], rows: list[list[Any]], where: str) -> Table:
    texts: dict[str, list[str]] = {}
    for k, (column, _) in enumerate(columns):
        if column in TEXT:
            texts[column] = ["" if is_empty(row[k]) else str(row[k]).strip() for row in rows]
    given = texts.get("name", [""] * len(rows))
    name = tuple(text or f"reading {row + 1}" for row, text in enumerate(given))
    group = tuple(text or own for text, own in
                  zip(texts.get("group", [""] * len(rows)), name, strict=True))
    table = Table(where, {}, name, group)
    for k, (column, factor) in enumerate(columns):
        if column not in TEXT:
            cells = [_number(row[k], table, i, column) for i, row in enumerate(rows)]
            table.numbers[column] = factor * np.array(cells, dtype=np.float64)
    return table


def _number(cell: Any, table: Table, row: int, column: str) -> float:
    if is_empty(cell):
        return math.nan
    try:
        if isinstance(cell, str) and "_" in cell:
            raise ValueError
        number = float(cell)
    except (TypeError, ValueError):
        raise ReadingError("A cell is not a number.", where=table.cell(row, column),
                           got=repr(cell), remedy="Write a plain number, or leave the cell empty "
                                                  "where nothing was measured.") from None
    if not math.isfinite(number):
        raise ReadingError("A cell is not a finite number.", where=table.cell(row, column),
                           got=repr(cell),
                           remedy="Leave the cell empty where nothing was measured.")
    return number


def _check_names(table: Table) -> None:
    time = table.numbers.get("time", np.full(len(table.name), math.nan))
    seen: dict[tuple[str, str], int] = {}
    for row, name in enumerate(table.name):
        key = (name, repr(float(time[row])))
        if key in seen:
            raise ReadingError("Two readings have the same name.",
                               where=table.cell(row, "name"),
                               got=f"'{name}' also in row {seen[key] + 1}",
                               remedy="Give every reading its own name; only readings at "
                                      "different times may share one.")
        seen[key] = row


def _first(mask: np.ndarray) -> int | None:
    return int(np.argmax(mask)) if mask.any() else None


def _check_places(table: Table) -> None:
    for column in PLACE:
        row = _first(np.isnan(table.numbers[column]))
        if row is not None:
            raise ReadingError("A reading has no place.", where=table.cell(row, column),
                               got="an empty cell", remedy="Give x, y and z of every reading.")
    time = table.numbers.get("time")
    if time is not None and (row := _first(np.isnan(time))) is not None and np.any(time == time):
        raise ReadingError("A reading has no time while others have one.",
                           where=table.cell(row, "time"), got="an empty cell",
                           remedy="Keep time-resolved readings and means in two tables.")


def _check_values(table: Table) -> None:
    held = np.zeros(len(table.name), dtype=bool)
    for column in VALUES:
        if column not in table.numbers:
            continue
        value, std = table.numbers[column], table.numbers[f"{column}_std"]
        present = ~np.isnan(value)
        held |= present
        row = _first(present & np.isnan(std))
        if row is not None:
            raise ReadingError("A value has no standard deviation.",
                               where=table.cell(row, f"{column}_std"), got="an empty cell",
                               remedy="Give one standard deviation of every value.")
        row = _first(present & ~(std > 0))
        if row is not None:
            raise ReadingError("A standard deviation is not positive.",
                               where=table.cell(row, f"{column}_std"), got=f"{std[row]:g} (SI)",
                               remedy="Give the real uncertainty of the instrument; no reading "
                                      "is exact.")
        row = _first(present & (value < 0)) if column == "speed" else None
        if row is not None:
            raise ReadingError("A speed is negative.", where=table.cell(row, column),
                               got=f"{value[row]:g} m/s",
                               remedy="Use u, v, w or along for a component with a sign.")
    held |= np.isfinite(table.numbers.get("time", np.full(len(held), math.nan)))  # a lost sample
    row = _first(~held)
    if row is not None:
        raise ReadingError("A reading carries no value.", where=table.cell(row, "name"),
                           got="only empty cells", remedy="Fill in a value or remove the row.")


def _check_directions(table: Table) -> None:
    if "along" not in table.numbers:
        return
    present = ~np.isnan(table.numbers["along"])
    direction = np.stack([table.numbers[column] for column in DIRECTION], axis=1)
    row = _first(present & np.isnan(direction).any(axis=1))
    if row is not None:
        column = DIRECTION[int(np.argmax(np.isnan(direction[row])))]
        raise ReadingError("A reading along a direction has no direction.",
                           where=table.cell(row, column), got="an empty cell",
                           remedy="Give nx, ny and nz wherever along is given.")
    row = _first(present & ~(np.linalg.norm(direction, axis=1) > 0))
    if row is not None:
        raise ReadingError("The direction of a reading is zero.",
                           where=table.cell(row, "nx, ny, nz"), got="(0, 0, 0)",
                           remedy="Give the direction the instrument looks along.")
