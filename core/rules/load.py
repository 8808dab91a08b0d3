"""Load: how many slots one unit has in all."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from core.parts import Mask, UnitAutomaton
from core.process import Rows
from core.reading import FromColumn, Report
from core.rules import ROSTER, Case, Rule
from core.setting import RuleFields, Setting, Where, bounds_words, where_words


class LoadFields(RuleFields):
    """Keys of a load."""

    where: Where | None = Field(None, description="which units this is about")
    min: int | FromColumn | None = Field(None, description='an integer of at least 0, or {column = "days"}')
    max: int | FromColumn | None = Field(None, description='an integer of at least 0, or {column = "days"}')


class Load(Rule):
    """Every matching unit is on duty in `low` to `high` slots (int64 arrays over the units)."""

    name = "load"
    kinds = (ROSTER,)
    meaning = "Each unit that matches `where` is on duty in at least `min` and at most `max` slots in all."
    example = '[[rule]]\nkind = "load"\nmin = 1\nmax = 3'
    Fields = LoadFields

    def __init__(self, setting: Setting, low: NDArray[np.int64], high: NDArray[np.int64], fields: LoadFields) -> None:
        self._setting, self._low, self._high, self._fields = setting, low, high, fields

    @classmethod
    def of(cls, fields: Any, setting: Setting, report: Report) -> Load | None:
        """Read the bounds of every unit."""
        mask = setting.where(fields.where, report, empty=fields.empty)
        if fields.min is None and fields.max is None:
            report.fault("min", "a load needs min or max.", allowed="an integer of at least 0")
            return None
        slots = len(setting.kind.places.ids)
        low = _per_unit(fields.min, "min", 0, setting, report)
        high = _per_unit(fields.max, "max", slots, setting, report)
        if mask is None or low is None or high is None:
            return None
        low, high = np.where(mask, low, 0), np.where(mask, high, slots)
        for wrong, key, message in (
            (low > high, "min", "min is above max"),
            (low > slots, "min", f"there are only {slots} slots"),
            ((low < 0) | (high < 0), "min", "a number of slots cannot be negative"),
        ):
            if wrong.any():
                unit = int(np.flatnonzero(wrong)[0])
                found = f"min {low[unit]}, max {high[unit]}"
                report.fault(key, f"{setting.frame.ids[unit]}: {message}.", found=found)
                return None
        if (low <= 0).all() and (high >= slots).all():
            report.notice("this load always holds: its bounds are beyond what there is.")
        return cls(setting, low, high, fields)

    @classmethod
    def cases(cls) -> Sequence[Case]:
        """Return examples."""
        units = tuple({"id": f"u{i}", "days": i} for i in range(3))
        roster = {"kind": "roster", "slots": ["s", "t", "u"]}
        return [
            Case(units, roster, {"min": 1, "max": 2}),
            Case(units, roster, {"where": {"id": "u1"}, "max": 1}),
            Case(units, roster, {"max": {"column": "days"}}),
        ]

    def check(self, rows: Rows) -> Mask:
        """Count every unit's slots."""
        loads = rows.sum(axis=2)
        good: Mask = ((loads >= self._low) & (loads <= self._high)).all(axis=1)
        return good

    def words(self) -> str:
        """Return for example "Each unit is on duty in between 1 and 3 slots."."""
        matching = f" with {where_words(self._fields.where)}" if self._fields.where else ""
        low, high = (
            f"its {b.column}" if isinstance(b, FromColumn) else None if b is None else str(b)
            for b in (self._fields.min, self._fields.max)
        )
        plural = "" if (high or low) == "1" else "s"
        return f"Each unit{matching} is on duty in {bounds_words(low, high)} slot{plural}."

    def figure(self, row: Rows) -> str:
        """Return the smallest and largest load."""
        loads = row.sum(axis=1)
        return f"from {int(loads.min())} to {int(loads.max())}"

    def automaton(self) -> UnitAutomaton | None:
        """Count the slots up to what still matters."""
        return _Counting(self._low, self._high, len(self._setting.kind.places.ids))


def _per_unit(
    bound: int | FromColumn | None, key: str, default: int, setting: Setting, report: Report
) -> NDArray[np.int64] | None:
    size = setting.frame.size
    if not isinstance(bound, FromColumn):
        return np.full(size, default if bound is None else min(bound, 10**9), np.int64)
    if not setting.has_column(bound.column, key, report):
        return None
    texts = setting.frame.table.text(bound.column)
    for row, text in enumerate(texts):
        if not text.isdecimal():
            where = f"{setting.frame.table.name}, {setting.frame.table.place(row, bound.column)}"
            report.fault(key, f"{where}: this is no number of slots.", found=text)
            return None
    return np.array([int(text) for text in texts], np.int64)


class _Counting(UnitAutomaton):
    def __init__(self, low: NDArray[np.int64], high: NDArray[np.int64], slots: int) -> None:
        self._low, self._high = low.tolist(), high.tolist()
        self.labels = low * (slots + 1) + np.minimum(high, slots)

    def start(self, unit: int) -> int:
        return 0

    def step(self, unit: int, state: int, slot: int, on: bool) -> int | None:
        after = state + on
        return after if after <= self._high[unit] else None

    def accepts(self, unit: int, state: int) -> bool:
        return bool(state >= self._low[unit])
