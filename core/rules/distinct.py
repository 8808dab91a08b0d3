"""Distinct: at least so many different values."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from core.kinds import Members
from core.parts import Columns, Event, Level, Mask, Part
from core.process import Rows
from core.reading import Report
from core.rules import ASSIGNMENT, SELECTION, Case, Rule, heads, unit_groups
from core.setting import RuleFields, Setting
from core.statement import Statement


class DistinctFields(RuleFields):
    """Keys of `distinct`."""

    column: str = Field(description="a column of the list")
    min: int = Field(ge=1, description="an integer of at least 1")


class Distinct(Rule):
    """The number of different values of a column, in all or in each place; blank is no value."""

    name = "distinct"
    kinds = (SELECTION, ASSIGNMENT)
    meaning = "Among the drawn units (in each place) there are at least `min` different values of `column`."
    example = '[[rule]]\nkind = "distinct"\ncolumn = "department"\nmin = 4'
    Fields = DistinctFields

    def __init__(self, setting: Setting, codes: NDArray[np.int64], fields: DistinctFields) -> None:
        self._setting, self._kind, self._codes, self._fields = setting, setting.kind, codes, fields

    @classmethod
    def of(cls, fields: Any, setting: Setting, report: Report) -> Distinct | None:
        """Read the column."""
        found = setting.values(fields.column, "column", report)
        if found is None:
            return None
        codes, values = found
        if fields.min > len(values):
            report.fault(
                "min",
                f"this can never hold, {fields.column} has not so many different values.",
                found=fields.min,
                allowed=f"at most {len(values)}",
            )
            return None
        return cls(setting, codes, fields)

    @classmethod
    def cases(cls) -> Sequence[Case]:
        """Return examples."""
        units = tuple({"id": f"u{i}", "c": ["a", "b", "a", "c", ""][i]} for i in range(5))
        return [
            Case(units, {"kind": "selection", "size": 3}, {"column": "c", "min": 2}),
            Case(units, {"kind": "selection"}, {"column": "c", "min": 3}),
            Case(units, {"kind": "assignment", "places": ["p", "q"]}, {"column": "c", "min": 1}),
        ]

    def _numbers(self, rows: Rows) -> NDArray[np.int64]:
        """Return the number of different values in each place: shape (batch, places)."""
        numbers = np.zeros((len(rows), len(self._kind.places.ids)), np.int64)
        for value in range(int(self._codes.max(initial=-1)) + 1):
            weights = (self._codes == value).astype(np.int64)
            if self._kind.name == SELECTION:
                numbers[:, 0] += self._kind.tally(rows, weights) > 0
                continue
            held = rows[:, np.flatnonzero(weights)]
            for place in range(numbers.shape[1]):
                numbers[:, place] += (held == place).any(axis=1)
        return numbers

    def check(self, rows: Rows) -> Mask:
        """Count the values."""
        good: Mask = np.all(self._numbers(rows) >= self._fields.min, axis=1)
        return good

    def effort(self) -> int:
        """One pass per value."""
        return max(1, int(self._codes.max(initial=0)))

    def state(self, model: Statement) -> None:
        """Count the values in each place: a value counts only if a unit that has it is there."""
        holders = unit_groups(self._kind.units, self._codes)
        places = self._kind.places
        for place, name in enumerate(places.ids):
            seen = [model.new() for _ in holders]
            for value, units in zip(seen, holders, strict=True):
                model.any_of([~value, *(model.at(unit, place) for unit in units)])
            what = f"different value{{s}} of {self._fields.column}" + (
                f" in {places.word} {name}" if places.word else ""
            )
            model.sum(((1, value) for value in seen), self._fields.min, what=what)

    def words(self) -> str:
        """Return for example "At least 4 different values of department are drawn."."""
        plural = "" if self._fields.min == 1 else "s"
        what = f"at least {self._fields.min} different value{plural} of {self._fields.column}"
        if self._kind.name == SELECTION:
            return f"{what[0].upper()}{what[1:]} {'is' if self._fields.min == 1 else 'are'} drawn."
        return f"Each place has {what}."

    def figure(self, row: Rows) -> str:
        """Return the number of values."""
        return ", ".join(map(str, self._numbers(row[None])[0].tolist()))

    def labels(self) -> list[NDArray[np.int64]]:
        """Units are told apart by their value."""
        return [self._codes]

    def parts(self, members: Members) -> list[Part] | None:
        """Return one memory of values per place."""
        values = self._codes[heads(members)]
        return [_Values(values, place, self._fields.min) for place in range(len(self._kind.places.ids))]


class _Values(Part):
    """Columns: how many values have been finished or seen, then for each value whether it has been seen."""

    def __init__(self, values: NDArray[np.int64], place: int, need: int) -> None:
        self._values, self._place, self._need = values.tolist(), place, need
        self._number = int(values.max(initial=-1)) + 1
        self.start = (0,) * (self._number + 1)

    def prepare(self, levels: Sequence[Level]) -> None:
        """Also find the last level of each value."""
        super().prepare(levels)
        self._last_of = [-1] * self._number
        for index, level in enumerate(levels):
            for event in level.events:
                if self.concerns(event):
                    self._last_of[self._values[event.group]] = index

    def concerns(self, event: Event) -> bool:
        """Units with a value that go to the place matter."""
        return event.place == self._place and event.count > 0 and self._values[event.group] >= 0

    def step(self, event: Event, columns: Columns) -> tuple[Columns, Mask | None]:
        """Mark the value as seen."""
        value = 1 + self._values[event.group]
        after = columns.copy()
        after[0] += columns[value] == 0
        after[value] = 1
        return after, None

    def settle(self, level: int, columns: Columns) -> tuple[Columns, Mask | None]:
        """Forget values that cannot come again, and everything once there are enough."""
        after = columns.copy()
        coming = np.zeros(columns.shape[1], np.int64)
        for value, last in enumerate(self._last_of):
            if last <= level:
                after[1 + value] = 0
            else:
                coming += columns[1 + value] == 0
        enough = after[0] >= self._need
        after[:, enough] = 0
        after[0, enough] = self._need
        return after, after[0] + coming >= self._need
