"""Pin: units or cells that must be."""

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


class Pin(Rule):
    """Key units that are certainly in, or cells that are certainly used.

    `choices` holds alternatives: of each list of cells at least one must be used.
    """

    name = "pin"
    kinds = (SELECTION, ASSIGNMENT, ROSTER, ORDER, PAIRING)
    meaning = "The named units are certainly drawn, or the named cells (unit and slot, place, position or partner) are."
    example = '[[rule]]\nkind = "pin"\ncells = [{unit = "p1", slot = "w14"}]'
    Fields = CellFields

    def __init__(self, setting: Setting, units: Sequence[int], choices: Sequence[Sequence[Cell]], words: str) -> None:
        self._setting, self._units, self._choices, self._words = setting, tuple(units), tuple(choices), words

    @classmethod
    def of(cls, fields: Any, setting: Setting, report: Report) -> Pin | None:
        """Read units or cells."""
        found = read_cells(fields, setting, report)
        if found is None:
            return None
        units, cells = found
        if cells:
            return cls(setting, [], [[cell] for cell in cells], f"These are fixed: {cell_words(cells, setting)}.")
        kind = setting.kind
        named = setting.unit_words(units)
        if kind.name in (SELECTION, PAIRING):
            if fields.in_ is not None:
                report.fault("in", f"{with_article(kind.name)} has no places.", found=fields.in_)
                return None
            verb = "certainly drawn" if kind.name == SELECTION else "certainly paired"
            return cls(setting, units, [], f"{named} {'are' if len(units) > 1 else 'is'} {verb}.")
        if kind.name != ROSTER and fields.in_ is None:
            message = f"this key is missing, units need it in {with_article(kind.name)}."
            report.fault("in", message, allowed=f"a list of {kind.places.word}s")
            return None
        places = setting.in_places(fields.in_, "in", report)
        if places is None:
            return None
        every = "every slot" if fields.in_ is None else ", ".join(kind.places.ids[p] for p in places)
        verb = "certainly on duty in" if kind.name == ROSTER else f"certainly at {kind.places.word}"
        if len(places) > 1 and kind.name != ROSTER:
            every = f"one of {every}"
        words = f"{named} {'are' if len(units) > 1 else 'is'} {verb} {every}."
        if kind.name == ROSTER:
            return cls(setting, [], [[(unit, p)] for unit in units for p in places], words)
        return cls(setting, [], [[(unit, p) for p in places] for unit in units], words)

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
            Case(units, {"kind": "order"}, {"units": ["u1"], "in": [1, 3]}),
            Case(units, {"kind": "order"}, {"cells": [{"unit": "u3", "position": 2}]}),
            Case(units, {"kind": "pairing"}, {"cells": [{"unit": "u3", "with": "u0"}]}),
            Case(units[:3], {"kind": "pairing", "single": True}, {"units": ["u1"]}),
        ]

    def check(self, rows: Rows) -> Mask:
        """Look up every unit and cell."""
        good = np.ones(len(rows), bool)
        for unit in self._units:
            if self._setting.kind.name == SELECTION:
                good &= (rows == unit).any(axis=1)
            else:
                good &= rows[:, unit] != unit
        for choice in self._choices:
            good &= np.any([holds(self._setting.kind, rows, cell) for cell in choice], axis=0)
        return good

    def state(self, model: Statement) -> None:
        """Say that of each choice one cell is used."""
        for unit in self._units:
            selection = self._setting.kind.name == SELECTION
            model.must(model.at(unit, 0) if selection else ~model.at(unit, self._setting.kind.units))
        for choice in self._choices:
            model.any_of(model.at(*cell) for cell in choice)

    def words(self) -> str:
        """Return for example "p1 and p2 are certainly drawn."."""
        return self._words

    def cells(self) -> tuple[Mask, Mask] | None:
        """Demand cells; in kinds where a unit is at one place only, close the others instead."""
        may, must = open_table(self._setting.kind)
        name = self._setting.kind.name
        for unit in self._units:
            if name == SELECTION:
                must[unit, 0] = True
            else:
                may[unit, -1] = False
        for choice in self._choices:
            unit, places = choice[0][0], [place for _, place in choice]
            if name == ROSTER:
                must[unit, places] = True
                continue
            others = np.ones(may.shape[1], bool)
            others[places] = False
            may[unit, others] = False
            if name == ORDER and len(places) == 1:
                may[np.arange(len(may)) != unit, places[0]] = False
            if name == PAIRING:
                partner = places[0]
                may[partner, np.arange(may.shape[1]) != unit] = False
                rest = ~np.isin(np.arange(len(may)), [unit, partner])
                may[rest, unit] = may[rest, partner] = False
        return may, must
