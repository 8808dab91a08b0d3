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
from core.setting import RuleFields, Setting, Where, bounds_words, stopped, where_words
from core.statement import Statement


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
        low = _per_unit(fields.min, "min", mask, setting, report)
        high = _per_unit(fields.max, "max", mask, setting, report)
        if mask is None or low is None or high is None:
            return None
        low = low if fields.min is not None else np.zeros_like(low)
        high = np.where(mask, high, slots) if fields.max is not None else np.full_like(high, slots)
        never, crossed = low > slots, low > high
        if never.any() or crossed.any():
            unit = int(np.flatnonzero(never | crossed)[0])
            name = f"{setting.frame.ids[unit]}: " if FromColumn in (type(fields.min), type(fields.max)) else ""
            message = "this can never hold, there are not so many slots." if never[unit] else "min is above max."
            least = low[unit] if isinstance(fields.min, FromColumn) else fields.min
            found = f"min {least}" + (f", max {high[unit]}" if fields.max is not None else "")
            report.fault("min", f"{name}{message}", found=found, allowed=f"at most {slots}" if never[unit] else "")
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

    def state(self, model: Statement) -> None:
        """Count every unit's slots."""
        slots = range(len(self._setting.kind.places.ids))
        for unit, (low, high) in enumerate(zip(self._low.tolist(), self._high.tolist(), strict=True)):
            if low > 0 or high < len(slots):
                what = f"for {self._setting.frame.ids[unit]}"
                model.sum(((1, model.at(unit, slot)) for slot in slots), low, high, what=what)

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
    bound: int | FromColumn | None, key: str, mask: Mask | None, setting: Setting, report: Report
) -> NDArray[np.int64] | None:
    """Return the bound of each matching unit, 0 for the others; None after reporting what is no number of slots."""
    matching = np.ones(setting.frame.size, bool) if mask is None else mask
    if not isinstance(bound, FromColumn):
        if bound is not None and bound < 0:
            report.fault(key, "a number of slots is never negative.", found=bound, allowed="at least 0")
            return None
        return np.where(matching, min(bound or 0, 10**9), 0).astype(np.int64)
    if not setting.has_column(bound.column, key, report):
        return None
    before = len(report.faults)
    texts = setting.frame.table.text(bound.column)
    for row in np.flatnonzero(matching).tolist():
        text = texts[row]
        if not (text.isascii() and text.isdecimal() and len(text) <= 9):
            at = report.line(setting.frame.table, row, bound.column)
            at.fault("", f"this is no number of slots, and {report.place} needs one.", found=text or "a blank")
        if stopped(report, key, before):
            break
    if len(report.faults) > before:
        return None
    return np.array([int(text) if use else 0 for text, use in zip(texts, matching, strict=True)], np.int64)


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
