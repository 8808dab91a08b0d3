"""Needs: if some units are drawn, others must be drawn too."""

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
from core.rules import SELECTION, Case, Rule, heads
from core.setting import RuleFields, Setting, Units
from core.statement import Statement


class NeedsFields(RuleFields):
    """Keys of `needs`."""

    if_: list[str | int] = Field(alias="if", description="a list of units")
    then: list[str | int] = Field(description="a list of units")


class Needs(Rule):
    """If all of `condition` are in, all of `consequence` are in."""

    name = "needs"
    kinds = (SELECTION,)
    meaning = "If all units of `if` are drawn, all units of `then` are drawn too."
    example = '[[rule]]\nkind = "needs"\nif = ["p1", "p2"]\nthen = ["p9"]'
    Fields = NeedsFields

    def __init__(self, setting: Setting, condition: Units, consequence: Units) -> None:
        self._setting, self._if, self._then = setting, condition, consequence

    @classmethod
    def of(cls, fields: Any, setting: Setting, report: Report) -> Needs | None:
        """Read both lists."""
        condition = setting.units(fields.if_, "if", report)
        consequence = setting.units(fields.then, "then", report)
        if condition is None or consequence is None:
            return None
        both = np.intersect1d(condition, consequence)
        if both.size:
            report.fault("then", "a unit cannot need itself.", found=setting.frame.ids[int(both[0])])
            return None
        return cls(setting, condition, consequence)

    @classmethod
    def cases(cls) -> Sequence[Case]:
        """Return examples."""
        units = tuple({"id": f"u{i}"} for i in range(5))
        return [
            Case(units, {"kind": "selection"}, {"if": ["u3"], "then": ["u0", "u1"]}),
            Case(units, {"kind": "selection", "size": 3}, {"if": ["u0", "u4"], "then": ["u2"]}),
        ]

    def check(self, rows: Rows) -> Mask:
        """Look up both lists."""
        drawn = [(rows == unit).any(axis=1) for unit in (*self._if, *self._then)]
        split = len(self._if)
        good: Mask = ~np.all(drawn[:split], axis=0) | np.all(drawn[split:], axis=0)
        return good

    def effort(self) -> int:
        """One pass per unit."""
        return len(self._if) + len(self._then)

    def state(self, model: Statement) -> None:
        """Say of each unit of `then` that it is implied."""
        condition = [model.at(unit, 0) for unit in self._if.tolist()]
        for unit in self._then.tolist():
            model.implies(condition, model.at(unit, 0))

    def words(self) -> str:
        """Return for example "If p1 is drawn, p2 is drawn too."."""
        words = self._setting.unit_words
        one, more = self._if.tolist(), self._then.tolist()
        first = f"{words(one)} {'are all' if len(one) > 1 else 'is'} drawn"
        return f"If {first}, {words(more)} {'are' if len(more) > 1 else 'is'} drawn too."

    def labels(self) -> list[NDArray[np.int64]]:
        """Units are told apart by the list they stand in."""
        return [self._setting.group_labels([self._if, self._then])]

    def parts(self, members: Members) -> list[Part] | None:
        """Return the memory of both lists."""
        first = heads(members)
        return [_Implication(np.isin(first, self._if), np.isin(first, self._then), [len(m) for m in members])]


class _Implication(Part):
    """Columns: whether a unit of `if` is out already; whether one of `then` is."""

    start = (0, 0)

    def __init__(self, condition: Mask, consequence: Mask, sizes: Sequence[int]) -> None:
        self._if, self._then, self._sizes = condition.tolist(), consequence.tolist(), list(sizes)

    def prepare(self, levels: Sequence[Level]) -> None:
        """Also find after which level neither list has units to come."""
        super().prepare(levels)
        groups = [[e.group for e in level.events] for level in levels]
        self._last_then = max((i for i, gs in enumerate(groups) if any(self._then[g] for g in gs)), default=-1)
        self._last_if = max((i for i, gs in enumerate(groups) if any(self._if[g] for g in gs)), default=-1)

    def concerns(self, event: Event) -> bool:
        """Units of both lists matter."""
        return bool(self._if[event.group] or self._then[event.group])

    def step(self, event: Event, columns: Columns) -> tuple[Columns, Mask | None]:
        """Note what is out."""
        if event.count == self._sizes[event.group]:
            return columns, None
        after = columns.copy()
        after[0 if self._if[event.group] else 1] = 1
        return after, None

    def settle(self, level: int, columns: Columns) -> tuple[Columns, Mask | None]:
        """Refuse "all of if, not all of then"; once the rule cannot be broken any more, forget why."""
        condition_out, consequence_out = columns
        fulfilled = (condition_out == 1) | ((level >= self._last_then) & (consequence_out == 0))
        alive = fulfilled | (level < self._last_if) | (consequence_out == 0)
        return np.where(fulfilled, np.array([[1], [0]]), columns), alive
