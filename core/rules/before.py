"""Before: one unit stands earlier than another."""

from __future__ import annotations

from collections.abc import Sequence
from graphlib import CycleError, TopologicalSorter
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from core.kinds import Members
from core.parts import Columns, Event, Mask, Part
from core.process import Rows
from core.reading import Report, TableFile
from core.rules import ORDER, Case, Rule, heads
from core.setting import RuleFields, Setting, one_of
from core.statement import Statement


class BeforeFields(RuleFields):
    """Keys of `before`."""

    pairs: list[list[str | int]] | None = Field(None, description='a list of pairs: [["first", "later"]]')
    file: TableFile | str | None = Field(None, description="a file with two columns: first, later")


class Before(Rule):
    """Of each pair the first stands earlier than the second."""

    name = "before"
    kinds = (ORDER,)
    meaning = "Of each pair the first unit stands earlier than the second."
    example = '[[rule]]\nkind = "before"\npairs = [["t02", "t09"]]'
    Fields = BeforeFields

    def __init__(self, setting: Setting, pairs: NDArray[np.int64]) -> None:
        self._setting, self._pairs = setting, pairs

    @classmethod
    def of(cls, fields: Any, setting: Setting, report: Report) -> Before | None:
        """Read the pairs; a circle among them is a fault."""
        if (fields.pairs is None) == (fields.file is None):
            both = [] if fields.pairs is None else ["pairs", "file"]
            one_of(("pairs", "file"), both, report)
            return None
        pairs = setting.pairs(fields.pairs, fields.file, report)
        if pairs is None:
            return None
        earlier: dict[int, set[int]] = {}
        for first, second in np.array(pairs).tolist():
            earlier.setdefault(second, set()).add(first)
        try:
            TopologicalSorter(earlier).prepare()
        except CycleError as error:
            circle = " before ".join(setting.frame.ids[unit] for unit in error.args[1])
            key = "pairs" if fields.file is None else "file"
            report.fault(key, "this can never hold: these pairs go round in a circle.", found=circle)
            return None
        return cls(setting, np.array(pairs, np.int64))

    @classmethod
    def cases(cls) -> Sequence[Case]:
        """Return examples."""
        units = tuple({"id": f"u{i}"} for i in range(5))
        return [Case(units, {"kind": "order"}, {"pairs": [["u3", "u1"], ["u1", "u0"]]})]

    def check(self, rows: Rows) -> Mask:
        """Compare positions."""
        position = np.argsort(rows, axis=1)
        good: Mask = np.all(position[:, self._pairs[:, 0]] < position[:, self._pairs[:, 1]], axis=1)
        return good

    def effort(self) -> int:
        """Positions have to be sorted."""
        return 8

    def state(self, model: Statement) -> None:
        """Compare positions."""
        for first, second in self._pairs.tolist():
            terms = [
                (sign * place, model.at(unit, place))
                for sign, unit in ((1, first), (-1, second))
                for place in range(self._setting.kind.units)
            ]
            model.sum(terms, high=-1)

    def words(self) -> str:
        """Return for example "t02 stands before t09."."""
        ids = self._setting.frame.ids
        told = [f"{ids[a]} stands before {ids[b]}" for a, b in self._pairs[:12].tolist()]
        return ", ".join(told) + (f" and {len(self._pairs) - 12} more" if len(self._pairs) > 12 else "") + "."

    def labels(self) -> list[NDArray[np.int64]]:
        """Every named unit is told apart."""
        labels = np.zeros(self._setting.frame.size, np.int64)
        named = np.unique(self._pairs)
        labels[named] = np.arange(1, len(named) + 1)
        return [labels]

    def parts(self, members: Members) -> list[Part] | None:
        """Return one memory per pair."""
        group_of = {unit: group for group, unit in enumerate(heads(members).tolist())}
        return [_Waits(group_of[first], group_of[second]) for first, second in self._pairs.tolist()]


class _Waits(Part):
    """Column: whether the first unit has been placed."""

    def __init__(self, first: int, second: int) -> None:
        self._first, self._second = first, second

    def concerns(self, event: Event) -> bool:
        """Only the two units matter."""
        return event.group in (self._first, self._second)

    def step(self, event: Event, columns: Columns) -> tuple[Columns, Mask | None]:
        """Let the second unit be placed only after the first."""
        if event.group == self._first:
            return np.ones_like(columns), None
        return columns, columns[0] == 1
