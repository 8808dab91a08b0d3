"""Total: the sum of a number column over what is drawn lies between bounds."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from core.frame import Amounts
from core.kinds import Members
from core.kinds.selection import Selection
from core.parts import Count, Mask, Part
from core.process import Rows
from core.reading import Bound, Report
from core.rules import ASSIGNMENT, ROSTER, SELECTION, Case, Rule, heads
from core.setting import RuleFields, Scope, Setting, Where, scope_terms, scope_words, where_words
from core.statement import Statement

# into how many steps the weaker forms of a total divide the largest sum
_PARTS = (4000, 1000, 250)


class TotalFields(RuleFields):
    """Keys of a total."""

    column: str = Field(description="a column of numbers")
    where: Where | None = Field(None, description="which units are counted")
    min: Bound | None = Field(None, description='a number, or {column = "need"}')
    max: Bound | None = Field(None, description='a number, or {column = "need"}')
    per: str | None = Field(None, description='"slot", "place" or a column: each of its values is added up on its own')
    in_: list[str | int] | None = Field(None, alias="in", description="a list of slots or places")


class Total(Rule):
    """Sums of a column, each within its bounds; exact, in integers of the column's smallest decimal."""

    name = "total"
    kinds = (SELECTION, ASSIGNMENT, ROSTER)
    meaning = "The numbers in `column` of what is drawn add up to at least `min` and at most `max`."
    example = '[[rule]]\nkind = "total"\ncolumn = "amount"\nmin = 70000.00'
    Fields = TotalFields

    def __init__(self, setting: Setting, scopes: Sequence[Scope], amounts: Amounts, fields: TotalFields) -> None:
        self._setting, self._kind, self._amounts = setting, setting.kind, amounts
        self._scopes, self._fields = tuple(scopes), fields
        self._weights = [np.where(scope.units, amounts.values, 0) for scope in scopes]

    @classmethod
    def of(cls, fields: Any, setting: Setting, report: Report) -> Total | None:
        """Read the column and the scopes, and compare the bounds with what there is."""
        mask = setting.where(fields.where, report, empty=fields.empty)
        amounts = setting.amounts(fields.column, "column", report)
        if fields.min is None and fields.max is None:
            report.fault("min", "a total needs min or max.", allowed="a number")
            return None
        if amounts is None or mask is None:
            return None
        scopes = setting.scopes(mask, fields.per, fields.in_, fields.min, fields.max, report, decimals=amounts.decimals)
        if scopes is None:
            return None
        times = len(setting.kind.places.ids) if setting.kind.name == ROSTER else 1
        if int(np.abs(amounts.values).sum()) * times >= 1 << 62:
            report.fault("column", "the numbers are too large to be added up over all slots.", found=fields.column)
            return None
        rule = cls(setting, scopes, amounts, fields)
        loose = [rule._looseness(i, report) for i in range(len(scopes))]
        if any(found is None for found in loose):
            return None
        if all(loose):
            report.notice("this total always holds: its bounds are beyond what there is.")
        return rule

    def _looseness(self, index: int, report: Report) -> bool | None:
        """Return whether a scope's bounds can never be missed; None after reporting that they can never be met."""
        scope, weights = self._scopes[index], self._weights[index]
        slots = 1
        if self._kind.name == ROSTER:
            slots = len(self._kind.places.ids) if scope.places is None else len(scope.places)
        least, most = int(weights[weights < 0].sum()) * slots, int(weights[weights > 0].sum()) * slots
        name = f"{scope.words}: " if scope.words else ""
        told = self._amounts.in_words
        never = f"{name}this can never hold, whoever is counted."
        if scope.low is not None and scope.high is not None and scope.low > scope.high:
            found = f"min {told(scope.low)}, max {told(scope.high)}"
            report.fault("min", f"{name}min is above max.", found=found)
            return None
        if scope.low is not None and scope.low > most:
            report.fault("min", never, found=told(scope.low), allowed=f"at most {told(most)}")
            return None
        if scope.high is not None and scope.high < least:
            report.fault("max", never, found=told(scope.high), allowed=f"at least {told(least)}")
            return None
        return (scope.low is None or scope.low <= least) and (scope.high is None or scope.high >= most)

    @classmethod
    def cases(cls) -> Sequence[Case]:
        """Return examples for each kind."""
        units = tuple({"id": f"u{i}", "h": f"{i}.5"} for i in range(4))
        places = {"kind": "assignment", "places": ["p", "q"]}
        return [
            Case(units, {"kind": "selection", "size": 2}, {"column": "h", "min": 4}),
            Case(units, places, {"column": "h", "per": "place", "max": 5}),
            Case(
                units[:3],
                {"kind": "roster", "slots": ["s", "t"]},
                {"column": "h", "per": "slot", "min": 1, "max": 3},
            ),
        ]

    def _sums(self, rows: Rows, index: int) -> NDArray[np.int64]:
        return self._kind.tally(rows, self._weights[index], self._scopes[index].places)

    def check(self, rows: Rows) -> Mask:
        """Add up every scope."""
        good = np.ones(len(rows), bool)
        for index, scope in enumerate(self._scopes):
            sums = self._sums(rows, index)
            if scope.low is not None:
                good &= sums >= scope.low
            if scope.high is not None:
                good &= sums <= scope.high
        return good

    def effort(self) -> int:
        """One pass per scope."""
        return len(self._scopes)

    def state(self, model: Statement) -> None:
        """Add up every scope."""
        for scope, weights in zip(self._scopes, self._weights, strict=True):
            what = f"of {self._fields.column}" + (f" in {scope.words}" if scope.words else "")
            terms = scope_terms(self._kind, scope, weights, model)
            model.sum(terms, scope.low, scope.high, what=what, decimals=self._amounts.decimals)

    def words(self) -> str:
        """Return for example "A total of at least 70000.00 of amount is drawn."."""
        matching = f" of units with {where_words(self._fields.where)}" if self._fields.where else ""
        what = f"in total of {self._fields.column}{matching}"
        return scope_words(self._setting, self._scopes, self._fields.per, what, self._amounts.decimals)

    def figure(self, row: Rows) -> str:
        """Return the sums."""
        told = [
            f"{scope.words + ': ' if scope.words else ''}{self._amounts.in_words(int(self._sums(row[None], i)[0]))}"
            for i, scope in enumerate(self._scopes[:12])
        ]
        return ", ".join(told)

    def weaker(self) -> Sequence[Rule]:
        """Return the same total in larger units, rounded so that whatever meets this one meets it too.

        With a = step x w + r, 0 <= r < step, a sum of a is step x (sum of w) + (sum of r); the sum of r lies between the
        smallest and the largest that can be drawn, so the bounds on the sum of w are loosened by these.
        """
        values = self._amounts.values
        picked = self._kind.most if isinstance(self._kind, Selection) else len(values)
        spread = int(np.sort(np.abs(values))[len(values) - picked :].sum())
        return [self._in_steps(spread // parts) for parts in _PARTS if spread // parts > 1]

    def _in_steps(self, step: int) -> Rule:
        values = self._amounts.values
        rest = values % step  # the remainder of a division, no draw
        scopes = []
        for scope in self._scopes:
            least, most = self._remainders(rest, scope)
            low = None if scope.low is None else -((most - scope.low) // step)
            high = None if scope.high is None else (scope.high - least) // step
            scopes.append(replace(scope, low=low, high=high))
        rule = Total(self._setting, scopes, Amounts(values // step, 0), self._fields)
        rule.id, rule.note = f"{self.id}~{step}", ""
        return rule

    def _remainders(self, rest: NDArray[np.int64], scope: Scope) -> tuple[int, int]:
        """Return the smallest and largest sum of remainders that an outcome can have in a scope."""
        ordered = np.sort(rest[scope.units])
        if isinstance(self._kind, Selection):
            least = self._kind.least if scope.units.all() else 0
            return int(ordered[:least].sum()), int(ordered[max(0, len(ordered) - self._kind.most) :].sum())
        slots = len(self._kind.places.ids) if self._kind.name == ROSTER else 1
        return 0, int(ordered.sum()) * slots

    def labels(self) -> list[NDArray[np.int64]]:
        """Units are told apart by their amounts in each scope."""
        return self._weights

    def parts(self, members: Members) -> list[Part] | None:
        """Return one sum per scope."""
        first = heads(members)
        parts: list[Part] = []
        for scope, amounts in zip(self._scopes, self._weights, strict=True):
            weights = np.zeros((len(members), len(self._kind.places.ids)), np.int64)
            columns = slice(None) if scope.places is None else list(scope.places)
            weights[:, columns] = amounts[first][:, None]
            parts.append(Count(weights, scope.low, scope.high))
        return parts
