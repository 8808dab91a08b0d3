"""Spacing: a least distance between two duties of one unit, or between units alike in an order."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from core.kinds import Members
from core.parts import Columns, Event, Mask, Part, UnitAutomaton
from core.process import Rows
from core.reading import Report
from core.rules import ORDER, ROSTER, Case, Rule, heads, unit_groups
from core.setting import RuleFields, Setting
from core.statement import Statement


class SpacingFields(RuleFields):
    """Keys of `spacing`."""

    min: int = Field(ge=1, description="an integer of at least 1; 2 means: never twice in a row")
    alike: str | None = Field(None, description="in an order: a column; units with the same value keep the distance")


class Spacing(Rule):
    """Two duties of a unit, or two units alike, are at least `distance` apart."""

    name = "spacing"
    kinds = (ROSTER, ORDER)
    meaning = (
        "From one duty of a unit to its next there are at least `min` slots (2: never two in a row); in an order, two units "
        "with the same value of `alike` stand at least `min` positions apart."
    )
    example = '[[rule]]\nkind = "spacing"\nmin = 3'
    Fields = SpacingFields

    def __init__(self, setting: Setting, distance: int, codes: NDArray[np.int64] | None, alike: str) -> None:
        self._setting, self._distance, self._codes, self._alike = setting, distance, codes, alike

    @classmethod
    def of(cls, fields: Any, setting: Setting, report: Report) -> Spacing | None:
        """Read the distance and, for an order, the column."""
        if fields.min == 1:
            report.notice("this spacing always holds: min = 1 allows neighbours.")
        if setting.kind.name == ROSTER:
            if fields.alike is not None:
                message = "this key is for orders; in a roster, spacing is about the duties of one unit."
                report.fault("alike", message, found=fields.alike, allowed="min alone")
                return None
            return cls(setting, min(fields.min, max(2, len(setting.kind.places.ids))), None, "")
        if fields.alike is None:
            report.fault("alike", "this key is missing, an order needs it.", allowed="a column of the list")
            return None
        found = setting.values(fields.alike, "alike", report)
        if found is None:
            return None
        counts = np.bincount(found[0][found[0] >= 0]) if (found[0] >= 0).any() else np.zeros(1, int)
        most = int(counts.max())
        if (most - 1) * fields.min + 1 > setting.kind.units:
            value = found[1][int(counts.argmax())]
            message = f"this can never hold: {most} of {setting.kind.units} units have {fields.alike} {value}."
            limit = (setting.kind.units - 1) // (most - 1) if most > 1 else setting.kind.units
            report.fault("min", message, found=fields.min, allowed=f"at most {limit}")
            return None
        if most < 2:
            report.notice("this spacing always holds: no two units are alike.")
        return cls(setting, min(fields.min, setting.kind.units), found[0], fields.alike)

    @classmethod
    def cases(cls) -> Sequence[Case]:
        """Return examples."""
        units = tuple({"id": f"u{i}", "c": ["a", "b", "a", "", "b"][i]} for i in range(5))
        roster = {"kind": "roster", "slots": ["s", "t", "u", "v"]}
        return [
            Case(units[:2], roster, {"min": 2}),
            Case(units[:2], roster, {"min": 3}),
            Case(units, {"kind": "order"}, {"min": 3, "alike": "c"}),
        ]

    def check(self, rows: Rows) -> Mask:
        """Compare each slot or position with the next ones."""
        good = np.ones(len(rows), bool)
        if self._codes is None:
            for gap in range(1, min(self._distance, rows.shape[2])):
                good &= ~(rows[:, :, gap:] & rows[:, :, :-gap]).any(axis=(1, 2))
            return good
        values = self._codes[rows]
        for gap in range(1, min(self._distance, rows.shape[1])):
            good &= ~((values[:, gap:] == values[:, :-gap]) & (values[:, gap:] >= 0)).any(axis=1)
        return good

    def state(self, model: Statement) -> None:
        """Say of every stretch of `distance` that at most one of it is alike, or duty."""
        places = range(len(self._setting.kind.places.ids))
        stretches = [places[begin : begin + self._distance] for begin in places[: len(places) - self._distance + 1]]
        for group in unit_groups(self._setting.kind.units, self._codes):
            for stretch in stretches if self._distance > 1 else []:
                model.at_most_one(model.at(unit, place) for unit in group for place in stretch)

    def words(self) -> str:
        """Return for example "No unit is on duty in two slots less than 3 apart."."""
        if self._codes is not None:
            return f"Two units with the same {self._alike} stand at least {self._distance} positions apart."
        if self._distance == 2:
            return "No unit is on duty in two slots in a row."
        return f"From one duty of a unit to its next there are at least {self._distance} slots."

    def labels(self) -> list[NDArray[np.int64]]:
        """In an order, units are told apart by their value."""
        return [] if self._codes is None else [self._codes]

    def parts(self, members: Members) -> list[Part] | None:
        """In an order, return the memory of the last values."""
        if self._codes is None:
            return []
        return [_Recent(self._codes[heads(members)], self._distance - 1)] if self._distance > 1 else []

    def automaton(self) -> UnitAutomaton | None:
        """In a roster, return the count of slots until the unit may be on duty again."""
        return _Resting(self._setting.kind.units, self._distance) if self._codes is None else None


class _Resting(UnitAutomaton):
    def __init__(self, units: int, distance: int) -> None:
        self._distance = distance
        self.labels = np.zeros(units, np.int64)

    def start(self, unit: int) -> int:
        return 0

    def step(self, unit: int, state: int, slot: int, on: bool) -> int | None:
        if on:
            return self._distance - 1 if state == 0 else None
        return max(state - 1, 0)

    def accepts(self, unit: int, state: int) -> bool:
        return True


class _Recent(Part):
    """Columns: the values (plus 1; 0 for none) at the last positions, the latest first."""

    def __init__(self, values: NDArray[np.int64], memory: int) -> None:
        self._values = (values + 1).tolist()
        self.start = (0,) * memory

    def concerns(self, event: Event) -> bool:
        """Every placing matters."""
        return True

    def step(self, event: Event, columns: Columns) -> tuple[Columns, Mask | None]:
        """Refuse a value that is remembered."""
        value = self._values[event.group]
        fine = (columns != value).all(axis=0) if value else None
        return np.concatenate([np.full((1, columns.shape[1]), value), columns[:-1]]), fine
