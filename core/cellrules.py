"""What `pin` and `bar` share: reading cells, and turning them into what each unit may and must do."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from pydantic import Field

from core.frame import Table
from core.kinds import OutcomeKind
from core.parts import Mask
from core.process import Rows
from core.reading import Report, TableFile, shown
from core.setting import RuleFields, Setting, one_of, stopped

Cell = tuple[int, int]


class CellFields(RuleFields):
    """Keys of `pin` and `bar`."""

    units: list[str | int] | None = Field(None, description="a list of units")
    cells: list[dict[str, Any]] | None = Field(None, description='a list of cells such as {unit = "p1", slot = "w14"}')
    file: TableFile | str | None = Field(
        None, description='a file with a column of units and one of slots, places, positions or partners: "leave.csv"'
    )
    in_: list[str | int] | None = Field(None, alias="in", description='a list of slots, places or positions: ["w14"]')


def read_cells(fields: CellFields, setting: Setting, report: Report) -> tuple[list[int], list[Cell]] | None:
    """Return the units named on their own, and the cells, of which one list is empty.

    The second number of a cell is a place, or in a pairing the partner.
    """
    given = [key for key in ("units", "cells", "file") if getattr(fields, key) is not None]
    if len(given) != 1:
        one_of(("units", "cells", "file"), given, report)
        return None
    if fields.units is not None:
        units = setting.units(fields.units, "units", report)
        return None if units is None else (units.tolist(), [])
    if fields.in_ is not None:
        report.fault("in", "`in` goes with units only; cells name their place.", found=fields.in_)
        return None
    word = "with" if setting.kind.name == "pairing" else setting.kind.places.word
    if fields.cells is not None:
        return _from_cells(fields.cells, word, setting, report)
    assert fields.file is not None
    return _from_file(fields.file, word, setting, report)


def _from_cells(
    cells: list[dict[str, Any]], word: str, setting: Setting, report: Report
) -> tuple[list[int], list[Cell]] | None:
    keys = ("unit", word) if word else ("unit",)
    before = len(report.faults)
    for number, cell in enumerate(cells, 1):
        if set(cell) != set(keys):
            message = f"cell {number} does not have the keys that it needs here."
            report.fault("cells", message, found=cell, allowed=" and ".join(keys))
        if stopped(report, "cells", before):
            break
    if not cells:
        report.fault("cells", "there is no cell.", allowed="at least one")
    if len(report.faults) > before:
        return None
    return _resolved([[cell[key] for key in keys] for cell in cells], None, keys, setting, report)


def _from_file(
    file: TableFile | str, word: str, setting: Setting, report: Report
) -> tuple[list[int], list[Cell]] | None:
    table = setting.table(file, "file", report)
    if table is None:
        return None
    unit = setting.frame.id if setting.frame.id in table.columns else "unit"
    if unit not in table.columns:
        allowed = f"{setting.frame.id} or unit"
        report.fault("file", f"{table.name} has no column of units.", found=", ".join(table.columns), allowed=allowed)
        return None
    if len(table.columns) == 1:
        return _resolved([[name] for name in table.text(unit)], table, (unit,), setting, report)
    if word not in table.columns:
        message = f"{table.name} has no column {word}." if word else f"{table.name} has more columns than one."
        allowed = f"{unit} and {word}" if word else unit
        report.fault("file", message, found=", ".join(table.columns), allowed=allowed)
        return None
    lines = list(zip(table.text(unit), table.text(word), strict=True))
    return _resolved(lines, table, (unit, word), setting, report)


def _resolved(
    lines: Sequence[Sequence[object]], table: Table | None, columns: Sequence[str], setting: Setting, report: Report
) -> tuple[list[int], list[Cell]] | None:
    """Return the units, or the cells, that lines of one or two names mean; None after reporting faults.

    The lines stand in columns of a table, or are the keys of cells in the sheet.
    """
    before = len(report.faults)
    units: dict[int, None] = {}
    cells: dict[Cell, None] = {}
    pairing = setting.kind.name == "pairing"
    for row, names in enumerate(lines):
        ats = [report if table is None else report.line(table, row, column) for column in columns]
        key = "cells" if table is None else ""
        unit = setting.unit(names[0], key, ats[0])
        if len(names) == 1:
            if unit is not None and unit in units:
                ats[0].fault(key, "this unit is named twice.", found=names[0])
            elif unit is not None:
                units[unit] = None
        else:
            second = setting.unit(names[1], key, ats[1]) if pairing else setting.in_place(names[1], key, ats[1])
            if unit is not None and second is not None:
                if (unit, second) in cells:
                    ats[1].fault(key, "this cell is named twice.", found=f"{shown(names[0])}, {shown(names[1])}")
                elif pairing and unit == second:
                    ats[1].fault(key, "a unit cannot be its own partner.", found=names[0])
                cells[unit, second] = None
        if stopped(report, key or "file", before):
            break
    return (list(units), list(cells)) if len(report.faults) == before else None


def holds(kind: OutcomeKind, rows: Rows, cell: Cell) -> Mask:
    """Return in which outcomes the unit is at the place (in a pairing: has the partner)."""
    unit, place = cell
    if kind.name == "selection":
        found: Mask = (rows == unit).any(axis=1)
    elif kind.name == "roster":
        found = rows[:, unit, place].astype(bool)
    elif kind.name == "order":
        found = rows[:, place] == unit
    else:
        found = rows[:, unit] == place
    return found


def open_table(kind: OutcomeKind) -> tuple[Mask, Mask]:
    """Return tables of `may` (all) and `must` (none) of the kind's shape."""
    return np.ones(kind.cells(), bool), np.zeros(kind.cells(), bool)


def cell_words(cells: Sequence[Cell], setting: Setting) -> str:
    """Return cells in words: "p1 in w14, p2 in w15"."""
    ids, places = setting.frame.ids, setting.kind.places.ids
    if setting.kind.name == "pairing":
        told = [f"{ids[unit]} with {ids[partner]}" for unit, partner in cells[:12]]
    else:
        word = "at position" if setting.kind.name == "order" else "in"
        told = [f"{ids[unit]} {word} {places[place]}" for unit, place in cells[:12]]
    return ", ".join(told) + (f" and {len(cells) - 12} more" if len(cells) > 12 else "")
