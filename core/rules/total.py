"""Total: the sum of a number column over what is drawn lies between bounds."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from core.errors import SheetError
from core.frame import Amounts
from core.kinds import Members
from core.parts import Count, Mask, Part
from core.process import Rows
from core.reading import Bound, Report
from core.rules import ASSIGNMENT, ROSTER, SELECTION, Case, Rule, heads
from core.setting import RuleFields, Scope, Setting, Where, scope_words, where_words


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
        if fields.min is None and fields.max is None:
            report.fault("min", "a total needs min or max.", allowed="a number")
            return None
        if not setting.has_column(fields.column, "column", report) or mask is None:
            return None
        try:
            amounts = setting.frame.amounts(fields.column)
        except SheetError as error:
            report.take(error)
            return None
        scopes = setting.scopes(mask, fields.per, fields.in_, fields.min, fields.max, report, decimals=amounts.decimals)
        if scopes is None:
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
        name = scope.words or "in all"
        told = self._amounts.in_words
        if scope.low is not None and scope.high is not None and scope.low > scope.high:
            report.fault("min", f"{name}: min is above max.", found=f"{told(scope.low)} and {told(scope.high)}")
            return None
        if scope.low is not None and scope.low > most:
            report.fault("min", f"{name}: this can never hold.", found=told(scope.low), allowed=f"at most {told(most)}")
            return None
        if scope.high is not None and scope.high < least:
            report.fault(
                "max",
                f"{name}: this can never hold.",
                found=told(scope.high),
                allowed=f"at least {told(least)}",
            )
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
