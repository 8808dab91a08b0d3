"""Mixed: how many pairs join different values."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from core.kinds import Members
from core.parts import Count, Event, Mask, Part
from core.process import Rows
from core.reading import Report
from core.rules import PAIRING, Case, Rule, heads
from core.setting import RuleFields, Setting, bounds_words
from core.statement import Statement


class MixedFields(RuleFields):
    """Keys of `mixed`."""

    column: str = Field(description="a column of the list")
    min: int | None = Field(None, ge=0, description="an integer of at least 0")
    max: int | None = Field(None, ge=0, description="an integer of at least 0")


class Mixed(Rule):
    """The number of pairs whose values differ lies within bounds."""

    name = "mixed"
    kinds = (PAIRING,)
    meaning = "At least `min` and at most `max` pairs join units with different values of `column`."
    example = '[[rule]]\nkind = "mixed"\ncolumn = "country"\nmin = 4'
    Fields = MixedFields

    def __init__(self, setting: Setting, codes: NDArray[np.int64], fields: MixedFields) -> None:
        self._setting, self._codes, self._fields = setting, codes, fields

    @classmethod
    def of(cls, fields: Any, setting: Setting, report: Report) -> Mixed | None:
        """Read the column."""
        pairs = setting.kind.units // 2
        known = setting.has_column(fields.column, "column", report)
        if fields.min is None and fields.max is None:
            report.fault("min", "mixed needs min or max.", allowed="an integer of at least 0")
            return None
        if not known:
            return None
        if fields.min is not None and fields.max is not None and fields.min > fields.max:
            report.fault("min", "min is above max.", found=f"min {fields.min}, max {fields.max}")
            return None
        if fields.min is not None and fields.min > pairs:
            report.fault(
                "min", "this can never hold, there are not so many pairs.", found=fields.min, allowed=f"at most {pairs}"
            )
            return None
        if (fields.min or 0) == 0 and (fields.max is None or fields.max >= pairs):
            report.notice("this rule always holds: its bounds are beyond the number of pairs.")
        return cls(setting, setting.frame.codes(fields.column)[0].astype(np.int64), fields)

    @classmethod
    def cases(cls) -> Sequence[Case]:
        """Return examples."""
        units = tuple({"id": f"u{i}", "c": "aabbb"[i]} for i in range(5))
        return [
            Case(units[:4], {"kind": "pairing"}, {"column": "c", "min": 1}),
            Case(units, {"kind": "pairing", "single": True}, {"column": "c", "max": 1}),
        ]

    def _numbers(self, rows: Rows) -> NDArray[np.int64]:
        numbers: NDArray[np.int64] = (self._codes[rows] != self._codes).sum(axis=1) // 2
        return numbers

    def check(self, rows: Rows) -> Mask:
        """Count the pairs that differ."""
        numbers = self._numbers(rows)
        good = np.ones(len(rows), bool)
        if self._fields.min is not None:
            good &= numbers >= self._fields.min
        if self._fields.max is not None:
            good &= numbers <= self._fields.max
        return good

    def state(self, model: Statement) -> None:
        """Count the pairs that differ."""
        differ = np.argwhere(np.triu(self._codes[:, None] != self._codes)).tolist()
        what = f"pair{{s}} differing in {self._fields.column}"
        model.sum(((1, model.at(*pair)) for pair in differ), self._fields.min, self._fields.max, what=what)

    def words(self) -> str:
        """Return for example "At least 4 pairs join units with different country."."""
        low, high = (None if b is None else str(b) for b in (self._fields.min, self._fields.max))
        told = bounds_words(low, high)
        join = "pair joins" if (high or low) == "1" else "pairs join"
        return f"{told[0].upper()}{told[1:]} {join} units that differ in {self._fields.column}."

    def figure(self, row: Rows) -> str:
        """Return the number of pairs that differ."""
        return str(int(self._numbers(row[None])[0]))

    def labels(self) -> list[NDArray[np.int64]]:
        """Units are told apart by their value."""
        return [self._codes]

    def parts(self, members: Members) -> list[Part] | None:
        """Return a count of pairs of groups with different values."""
        return [_Differing(self._codes[heads(members)], self._fields.min, self._fields.max)]


class _Differing(Count):
    def __init__(self, values: NDArray[np.int64], low: int | None, high: int | None) -> None:
        super().__init__(np.zeros((0, 0), np.int64), low, high)
        self._values = values.tolist()

    def amount(self, event: Event) -> int:
        return int(event.partner >= 0 and event.count > 0 and self._values[event.group] != self._values[event.partner])
