"""Run: at most so many in a row."""

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


class RunFields(RuleFields):
    """Keys of `run`."""

    max: int = Field(ge=1, description="an integer of at least 1")
    alike: str | None = Field(None, description="in an order: a column; units with the same value make a run")
    duties: bool | None = Field(None, description="in a roster: true")


class Run(Rule):
    """At most `most` units alike (or duties of a unit) in a row."""

    name = "run"
    kinds = (ORDER, ROSTER)
    meaning = (
        "In an order at most `max` units with the same value of `alike` stand in a row; in a roster (`duties = true`) a unit is "
        "on duty in at most `max` slots in a row."
    )
    example = '[[rule]]\nkind = "run"\nalike = "theme"\nmax = 1'
    Fields = RunFields

    def __init__(self, setting: Setting, most: int, codes: NDArray[np.int64] | None, alike: str) -> None:
        self._setting, self._most, self._codes, self._alike = setting, most, codes, alike

    @classmethod
    def of(cls, fields: Any, setting: Setting, report: Report) -> Run | None:
        """Read the column of an order."""
        if setting.kind.name == ROSTER:
            if fields.alike is not None or fields.duties is not True:
                key = "duties" if fields.alike is None else "alike"
                message = "in a roster, a run is about the duties of one unit."
                report.fault(key, message, found=getattr(fields, key), allowed="duties = true, without alike")
                return None
            if fields.max >= len(setting.kind.places.ids):
                report.notice("this run always holds: there are no more slots than that.")
            return cls(setting, min(fields.max, len(setting.kind.places.ids)), None, "")
        if fields.alike is None or fields.duties is not None:
            key = "alike" if fields.duties is None else "duties"
            message = "in an order, a run is about units alike."
            report.fault(key, message, found=getattr(fields, key), allowed='alike = "a column", without duties')
            return None
        found = setting.values(fields.alike, "alike", report)
        if found is None:
            return None
        codes, values = found
        for value, name in enumerate(values):
            count = int((codes == value).sum())
            others = setting.kind.units - count
            if count > (others + 1) * fields.max:
                message = f"this can never hold: {count} of {setting.kind.units} units have {fields.alike} {name}."
                report.fault("max", message, found=fields.max, allowed=f"at least {-(-count // (others + 1))}")
                return None
        if np.bincount(codes[codes >= 0], minlength=1).max() <= fields.max:
            report.notice("this run always holds: no more units than that are alike.")
        return cls(setting, min(fields.max, setting.kind.units), codes, fields.alike)

    @classmethod
    def cases(cls) -> Sequence[Case]:
        """Return examples."""
        units = tuple({"id": f"u{i}", "c": ["a", "a", "a", "b", ""][i]} for i in range(5))
        return [
            Case(units, {"kind": "order"}, {"max": 1, "alike": "c"}),
            Case(units, {"kind": "order"}, {"max": 2, "alike": "c"}),
            Case(units[:2], {"kind": "roster", "slots": ["s", "t", "u", "v"]}, {"max": 2, "duties": True}),
        ]

    def check(self, rows: Rows) -> Mask:
        """Look for `most` + 1 in a row."""
        if self._codes is None:
            streak: NDArray[Any] = rows
        else:
            values = self._codes[rows]
            streak = (values[:, 1:] == values[:, :-1]) & (values[:, 1:] >= 0)
        # duties in a row, or (of units alike) links between neighbours: one link less than there are units
        length = self._most + (self._codes is None)
        slots = streak.shape[-1]
        good = np.ones(len(rows), bool)
        for begin in range(slots - length + 1):
            whole = streak[..., begin : begin + length].all(axis=-1)
            good &= ~np.any(whole, axis=tuple(range(1, whole.ndim)))
        return good

    def state(self, model: Statement) -> None:
        """Say of every stretch of `most` + 1 that not all of it is alike, or duty."""
        places = range(len(self._setting.kind.places.ids))
        stretches = [places[begin : begin + self._most + 1] for begin in places[: len(places) - self._most]]
        for group in unit_groups(self._setting.kind.units, self._codes):
            for stretch in stretches:
                model.sum(((1, model.at(unit, place)) for unit in group for place in stretch), high=self._most)

    def words(self) -> str:
        """Return for example "No two units with the same theme stand in a row."."""
        if self._codes is None:
            return f"No unit is on duty in more than {self._most} slot{'s' if self._most > 1 else ''} in a row."
        if self._most == 1:
            return f"No two units with the same {self._alike} stand next to each other."
        return f"At most {self._most} units with the same {self._alike} stand in a row."

    def labels(self) -> list[NDArray[np.int64]]:
        """In an order, units are told apart by their value."""
        return [] if self._codes is None else [self._codes]

    def parts(self, members: Members) -> list[Part] | None:
        """In an order, return the memory of the last value and its run."""
        return [] if self._codes is None else [_Streak(self._codes[heads(members)], self._most)]

    def automaton(self) -> UnitAutomaton | None:
        """In a roster, count the duties in a row."""
        return _Duties(self._setting.kind.units, self._most) if self._codes is None else None


class _Duties(UnitAutomaton):
    def __init__(self, units: int, most: int) -> None:
        self._most = most
        self.labels = np.zeros(units, np.int64)

    def start(self, unit: int) -> int:
        return 0

    def step(self, unit: int, state: int, slot: int, on: bool) -> int | None:
        if not on:
            return 0
        return state + 1 if state < self._most else None

    def accepts(self, unit: int, state: int) -> bool:
        return True


class _Streak(Part):
    """Columns: the value (plus 1; 0 for none) at the last position, and how often in a row it stands there."""

    start = (0, 0)

    def __init__(self, values: NDArray[np.int64], most: int) -> None:
        self._values, self._most = (values + 1).tolist(), most

    def concerns(self, event: Event) -> bool:
        """Every placing matters."""
        return True

    def step(self, event: Event, columns: Columns) -> tuple[Columns, Mask | None]:
        """Lengthen the run or begin a new one."""
        value = self._values[event.group]
        if value == 0:
            return np.zeros_like(columns), None
        length = np.where(columns[0] == value, columns[1] + 1, 1)
        return np.stack([np.full_like(length, value), length]), length <= self._most
