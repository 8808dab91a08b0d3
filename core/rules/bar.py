"""Bar: units or cells that must not be."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from core.cellrules import Cell, CellFields, cell_words, holds, open_table, read_cells
from core.parts import Mask
from core.process import Rows
from core.reading import Report
from core.rules import ASSIGNMENT, ORDER, PAIRING, ROSTER, SELECTION, Case, Rule
from core.setting import Setting, with_article
from core.statement import Statement


class Bar(Rule):
    """Units that are certainly out, or cells that are certainly not used."""

    name = "bar"
    kinds = (SELECTION, ASSIGNMENT, ROSTER, ORDER, PAIRING)
    meaning = "The named units are certainly not drawn, or the named cells (unit and slot, place, position or partner) are not."
    example = '[[rule]]\nkind = "bar"\nfile = "leave.csv"'
    Fields = CellFields

    def __init__(self, setting: Setting, units: Sequence[int], cells: Sequence[Cell], words: str) -> None:
        self._setting, self._units, self._cells, self._words = setting, tuple(units), tuple(cells), words

    @classmethod
    def of(cls, fields: Any, setting: Setting, report: Report) -> Bar | None:
        """Read units or cells."""
        found = read_cells(fields, setting, report)
        if found is None:
            return None
        units, cells = found
        if cells:
            return cls(setting, [], cells, f"These are not allowed: {cell_words(cells, setting)}.")
        kind = setting.kind
        named = f"{setting.unit_words(units)} {'are' if len(units) > 1 else 'is'}"
        if kind.name in (SELECTION, PAIRING):
            if fields.in_ is not None:
                report.fault("in", f"{with_article(kind.name)} has no places.", found=fields.in_)
                return None
            if kind.name == SELECTION:
                return cls(setting, [], [(unit, 0) for unit in units], f"{named} certainly not drawn.")
            return cls(setting, units, [], f"{named} certainly single.")
        if kind.name != ROSTER and fields.in_ is None:
            message = f"this key is missing, units need it in {with_article(kind.name)}."
            report.fault("in", message, allowed=f"a list of {kind.places.word}s")
            return None
        places = setting.in_places(fields.in_, "in", report)
        if places is None:
            return None
        every = "any slot" if fields.in_ is None else " or ".join(kind.places.ids[p] for p in places)
        verb = "not on duty in" if kind.name == ROSTER else f"not at {kind.places.word}"
        return cls(setting, [], [(unit, p) for unit in units for p in places], f"{named} {verb} {every}.")

    @classmethod
    def cases(cls) -> Sequence[Case]:
        """Return examples for each kind."""
        units = tuple({"id": f"u{i}"} for i in range(4))
        return [
            Case(units, {"kind": "selection", "size": 2}, {"units": ["u1"]}),
            Case(
                units,
                {"kind": "assignment", "places": ["p", "q", "r"]},
                {"units": ["u1", "u2"], "in": ["p", "r"]},
            ),
            Case(units, {"kind": "assignment", "places": ["p", "q"]}, {"cells": [{"unit": "u1", "place": "q"}]}),
            Case(units[:3], {"kind": "roster", "slots": ["s", "t"]}, {"units": ["u2"]}),
            Case(units[:3], {"kind": "roster", "slots": ["s", "t"]}, {"cells": [{"unit": "u0", "slot": "t"}]}),
            Case(units, {"kind": "order"}, {"cells": [{"unit": f"u{i}", "position": i + 1} for i in range(4)]}),
            Case(units, {"kind": "pairing"}, {"cells": [{"unit": "u3", "with": "u0"}]}),
            Case(units[:3], {"kind": "pairing", "single": True}, {"units": ["u1"]}),
        ]

    def check(self, rows: Rows) -> Mask:
        """Look up every unit and cell."""
        good = np.ones(len(rows), bool)
        for unit in self._units:
            good &= rows[:, unit] == unit
        for cell in self._cells:
            if self._setting.kind.name == SELECTION:
                good &= ~(rows == cell[0]).any(axis=1)
            else:
                good &= ~holds(self._setting.kind, rows, cell)
        return good

    def state(self, model: Statement) -> None:
        """Say that the cells are not used."""
        for unit in self._units:
            model.must(model.at(unit, self._setting.kind.units))
        for cell in self._cells:
            model.must(~model.at(*cell))

    def words(self) -> str:
        """Return for example "p1 is certainly not drawn."."""
        return self._words

    def cells(self) -> tuple[Mask, Mask] | None:
        """Close the cells."""
        may, must = open_table(self._setting.kind)
        for unit, place in self._cells:
            may[unit, place] = False
            if self._setting.kind.name == PAIRING:
                may[place, unit] = False
        for unit in self._units:
            may[unit, :-1] = False
            may[:, unit] = False
        return may, must
