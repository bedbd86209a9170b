"""Wide tables: one row per time, one column per value of a place, places in a table of their own.

The header of the record reads ``time [s], rake 1 u [m/s], rake 1 v [m/s], tap p [Pa]``: the name of
the place, then the quantity (or its ``_std``), then the unit.  The table of places has ``name, x
[mm], y [mm], z [mm]``, ``group`` and directions as wanted, and the standard deviations that do not
change with time.  Both are turned into the long form, one row per place and time, and checked as
such.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from ..errors import ReadingError, did_you_mean
from .table import DIRECTION, PLACE, VALUES, is_empty

Cells = tuple[str, list[str], list[list[Any]]]
PLACE_COLUMNS = ("name", "group", *PLACE, *DIRECTION, *(f"{value}_std" for value in VALUES))
RECORD_COLUMNS = (*VALUES, *(f"{value}_std" for value in VALUES))


def long_form(header: Sequence[str], rows: Sequence[Sequence[Any]], *, places: Cells,
              where: str) -> tuple[list[str], list[list[Any]]]:
    """Header and rows of the long table.

    Raises
    ------
    ReadingError
        No time column, a column whose place or quantity is unknown, units that differ between
        places, a place named twice or without a record.
    """
    clock = [k for k, text in enumerate(header) if _column(text) == "time"]
    if len(clock) != 1:
        raise ReadingError("A record needs one column of times.", where=where,
                           got=f"{len(clock)} columns 'time'", remedy="Head it 'time [s]'.")
    known = _place_rows(places)
    columns = {k: _of_place(text, known, where) for k, text in enumerate(header) if k != clock[0]}
    units = _one_unit_each(columns.values(), where)
    missing = [name for name in known if name not in {name for name, _, _ in columns.values()}]
    if missing:
        raise ReadingError("A place has no column in the record.", where=where,
                           got=f"'{missing[0]}'", remedy="Leave it out of the table of places.")
    fixed = _kept(places[1], list(units), where)
    head = [*(places[1][k] for k in fixed), header[clock[0]],
            *(f"{quantity} [{unit}]" for quantity, unit in units.items())]
    table = []
    for row in rows:
        if all(is_empty(cell) for cell in row):
            continue
        for name, place in known.items():
            cells = {what: row[k] for k, (own, what, _) in columns.items() if own == name}
            table.append([*(place[k] for k in fixed), row[clock[0]],
                          *(cells.get(quantity, "") for quantity in units)])
    return head, table


def _column(text: str) -> str:
    return text.split("[")[0].strip()


def _place_rows(places: Cells) -> dict[str, list[Any]]:
    where, header, rows = places
    names = [_column(text) for text in header]
    for text in names:
        if text not in PLACE_COLUMNS:
            raise ReadingError("A column does not belong into a table of places.", where=where,
                               got=repr(text), remedy=f"Known: {', '.join(PLACE_COLUMNS)}."
                               + did_you_mean(text, PLACE_COLUMNS))
    if "name" not in names:
        raise ReadingError("The places have no names.", where=where, got=", ".join(names),
                           remedy="Add a column 'name'; the record's columns begin with it.")
    known: dict[str, list[Any]] = {}
    for row in rows:
        name = str(row[names.index("name")]).strip()
        if name in known:
            raise ReadingError("A place stands twice in the table.", where=where, got=f"'{name}'",
                               remedy="Give every place its own name.")
        known[name] = list(row)
    return known


def _of_place(text: str, known: dict[str, list[Any]], where: str) -> tuple[str, str, str]:
    """Place, quantity and unit of a column such as ``rake 1 u [m/s]``."""
    name, _, quantity = _column(text).rpartition(" ")
    unit = text.partition("[")[2].rpartition("]")[0].strip()
    if quantity not in RECORD_COLUMNS or name.strip() not in known:
        raise ReadingError("A column of the record names no place and quantity.",
                           where=f"{where}, column '{text.strip()}'",
                           got=f"place '{name}', quantity '{quantity}'",
                           remedy="Head it with the name of the place, the quantity and its unit: "
                                  f"'{next(iter(known), 'probe 1')} u [m/s]'.")
    return name.strip(), quantity, unit


def _one_unit_each(columns: Any, where: str) -> dict[str, str]:
    """Unit of each quantity in the order of the table's columns."""
    units: dict[str, str] = {}
    for name, quantity, unit in columns:
        if units.setdefault(quantity, unit) != unit:
            raise ReadingError("A quantity is given in two units.", where=where,
                               got=f"'{name} {quantity}' in [{unit}] and [{units[quantity]}]",
                               remedy="Use one unit for each quantity of a record.")
    return units


def _kept(header: Sequence[str], recorded: Sequence[str], where: str) -> list[int]:
    """Columns of the places that go into the long table."""
    kept = []
    for k, text in enumerate(header):
        column = _column(text)
        if column in recorded:
            raise ReadingError("A column stands in the record and in the table of places.",
                               where=where, got=repr(column), remedy="Leave one of them.")
        if not column.endswith("_std") or column.removesuffix("_std") in recorded:
            kept.append(k)
    return kept
