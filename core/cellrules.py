"""What `pin` and `bar` share: reading cells, and turning them into what each unit may and must do."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from pydantic import Field

from core.kinds import OutcomeKind
from core.parts import Mask
from core.process import Rows
from core.reading import Report, TableFile
from core.setting import RuleFields, Setting

Cell = tuple[int, int]


class CellFields(RuleFields):
    """Keys of `pin` and `bar`."""

    units: list[str | int] | None = Field(None, description="a list of units")
    cells: list[dict[str, Any]] | None = Field(None, description='a list of cells such as {unit = "p1", slot = "w14"}')
    file: TableFile | str | None = Field(None, description="a file with a column of units and one of places")
    in_: list[str | int] | None = Field(None, alias="in", description="a list of slots, places or positions")


def read_cells(fields: CellFields, setting: Setting, report: Report) -> tuple[list[int], list[Cell]] | None:
    """Return the units named on their own, and the cells, of which one list is empty.

    The second number of a cell is a place, or in a pairing the partner.
    """
    given = [key for key in ("units", "cells", "file") if getattr(fields, key) is not None]
    if len(given) != 1:
        report.fault("", "one of these must be given.", found=given or None, allowed="units, cells or file")
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
    wanted = {"unit", word} if word else {"unit"}
    for cell in cells:
        if set(cell) != wanted:
            report.fault("cells", "a cell has other keys.", found=cell, allowed=" and ".join(sorted(wanted)))
            return None
    if not cells:
        report.fault("cells", "there is no cell.", allowed="at least one")
        return None
    return _resolved(
        [cell["unit"] for cell in cells],
        [cell[word] for cell in cells] if word else None,
        "cells",
        setting,
        report,
    )


def _from_file(
    file: TableFile | str, word: str, setting: Setting, report: Report
) -> tuple[list[int], list[Cell]] | None:
    table = setting.table(file, "file", report)
    if table is None:
        return None
    column = setting.frame.id if setting.frame.id in table.columns else "unit"
    if column not in table.columns:
        allowed = f"{setting.frame.id} or unit"
        report.fault("file", f"{table.name} has no column of units.", found=", ".join(table.columns), allowed=allowed)
        return None
    second = table.text(word) if word and word in table.columns else None
    if second is None and len(table.columns) > 1:
        report.fault("file", f"{table.name} has no column {word}.", found=", ".join(table.columns), allowed=word)
        return None
    return _resolved(table.text(column), second, "file", setting, report)


def _resolved(
    names: Sequence[object], seconds: Sequence[object] | None, key: str, setting: Setting, report: Report
) -> tuple[list[int], list[Cell]] | None:
    before = len(report.faults)
    if seconds is None:
        units = setting.units(names, key, report)
        return None if units is None else (units.tolist(), [])
    cells: list[Cell] = []
    for name, second in zip(names, seconds, strict=True):
        unit = setting.units([name], key, report)
        if setting.kind.name == "pairing":
            partner = setting.units([second], key, report)
            place: tuple[int, ...] | None = None if partner is None else (int(partner[0]),)
        else:
            place = setting.in_places([second], key, report)
        if unit is None or place is None:
            continue
        cell = (int(unit[0]), place[0])
        if cell in cells:
            report.fault(key, "this cell is named twice.", found=f"{name}, {second}")
        elif setting.kind.name == "pairing" and cell[0] == cell[1]:
            report.fault(key, "a unit cannot be its own partner.", found=name)
        else:
            cells.append(cell)
    return ([], cells) if len(report.faults) == before else None


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
