"""Quota: at least and at most so many units of a sort."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from core.kinds import Members
from core.parts import Count, Mask, Part
from core.process import Rows
from core.reading import FromColumn, Report
from core.rules import ASSIGNMENT, ROSTER, SELECTION, Case, Rule, heads
from core.setting import RuleFields, Scope, Setting, Where, scope_terms, scope_words, where_words
from core.statement import Statement


class QuotaFields(RuleFields):
    """Keys of a quota."""

    where: Where | None = Field(None, description='which units are counted, for example {dept = "deck"}')
    min: int | FromColumn | None = Field(None, description='an integer of at least 0, or {column = "need"}')
    max: int | FromColumn | None = Field(None, description='an integer of at least 0, or {column = "need"}')
    per: str | None = Field(None, description='"slot", "place" or a column: each of its values is counted on its own')
    in_: list[str | int] | None = Field(None, alias="in", description="a list of slots or places")


class Quota(Rule):
    """Counts of units, each within its bounds."""

    name = "quota"
    kinds = (SELECTION, ASSIGNMENT, ROSTER)
    meaning = (
        "At least `min` and at most `max` of the units that match `where` are drawn; with `per` in each slot or place, "
        "or for each value of a column, on its own."
    )
    example = '[[rule]]\nkind = "quota"\nwhere = {dept = "deck"}\nper = "slot"\nmin = 1'
    Fields = QuotaFields

    def __init__(self, setting: Setting, scopes: Sequence[Scope], where: str, fields: QuotaFields) -> None:
        self._setting, self._kind = setting, setting.kind
        self._scopes, self._where, self._fields = tuple(scopes), where, fields

    @classmethod
    def of(cls, fields: Any, setting: Setting, report: Report) -> Quota | None:
        """Read the scopes and compare the bounds with what there is."""
        mask = setting.where(fields.where, report, empty=fields.empty)
        if fields.min is None and fields.max is None:
            report.fault("min", "a quota needs min or max.", allowed="an integer of at least 0")
            return None
        if mask is None:
            return None
        scopes = setting.scopes(mask, fields.per, fields.in_, fields.min, fields.max, report)
        if scopes is None:
            return None
        rule = cls(setting, scopes, where_words(fields.where), fields)
        loose = 0
        for scope in scopes:
            most = int(scope.units.sum()) * rule._times(scope)
            name = f"{scope.words}: " if scope.words else ""
            for key, bound in (("min", scope.low), ("max", scope.high)):
                if bound is not None and bound < 0:
                    report.fault(key, f"{name}a number of units is never negative.", found=bound, allowed="at least 0")
                    return None
            if scope.low is not None and scope.high is not None and scope.low > scope.high:
                report.fault("min", f"{name}min is above max.", found=f"min {scope.low}, max {scope.high}")
                return None
            if scope.low is not None and scope.low > most:
                message = f"{name}this can never hold, there are not so many to count."
                report.fault("min", message, found=scope.low, allowed=f"at most {most}")
                return None
            loose += (scope.low or 0) == 0 and (scope.high is None or scope.high >= most)
        if loose == len(scopes):
            report.notice("this quota always holds: its bounds are beyond what there is.")
        return rule

    def _times(self, scope: Scope) -> int:
        """How often one unit can be counted."""
        if self._kind.name != ROSTER:
            return 1
        return len(self._kind.places.ids) if scope.places is None else len(scope.places)

    @classmethod
    def cases(cls) -> Sequence[Case]:
        """Return examples for each kind."""
        units = tuple({"id": f"u{i}", "dept": "ab"[i % 2]} for i in range(4))
        slots = {"kind": "roster", "slots": [{"id": "s1", "month": "m"}, {"id": "s2", "month": "m"}]}
        places = {"kind": "assignment", "places": ["p", "q"]}
        return [
            Case(units, {"kind": "selection", "size": 2}, {"where": {"dept": "a"}, "min": 1, "max": 1}),
            Case(units, {"kind": "selection"}, {"per": "dept", "min": 1}),
            Case(units, places, {"where": {"dept": "a"}, "per": "place", "max": 1}),
            Case(units, places, {"min": 1, "max": 2, "in": ["q"]}),
            Case(units[:3], slots, {"per": "slot", "min": 1, "max": 2}),
            Case(units[:3], slots, {"per": "month", "where": {"dept": "a"}, "max": 2}),
        ]

    def _counts(self, rows: Rows, scope: Scope) -> NDArray[np.int64]:
        return self._kind.tally(rows, scope.units.astype(np.int64), scope.places)

    def check(self, rows: Rows) -> Mask:
        """Count every scope."""
        good = np.ones(len(rows), bool)
        for scope in self._scopes:
            counts = self._counts(rows, scope)
            if scope.low is not None:
                good &= counts >= scope.low
            if scope.high is not None:
                good &= counts <= scope.high
        return good

    def effort(self) -> int:
        """One pass per scope."""
        return len(self._scopes)

    def state(self, model: Statement) -> None:
        """Count every scope."""
        for scope in self._scopes:
            what = f"in {scope.words}" if scope.words else ""
            model.sum(scope_terms(self._kind, scope, scope.units, model), scope.low, scope.high, what=what)

    def words(self) -> str:
        """Return for example "Each slot has at least 1 unit with dept deck."."""
        matching = f" with {self._where}" if self._where else ""
        return scope_words(self._setting, self._scopes, self._fields.per, f"unit{{s}}{matching}")

    def figure(self, row: Rows) -> str:
        """Return the counts."""
        told = [f"{s.words + ': ' if s.words else ''}{int(self._counts(row[None], s)[0])}" for s in self._scopes]
        return ", ".join(told[:12]) + (", ..." if len(told) > 12 else "")

    def labels(self) -> list[NDArray[np.int64]]:
        """Units are told apart by which scopes count them."""
        return [scope.units.astype(np.int64) for scope in self._scopes if not scope.units.all()]

    def parts(self, members: Members) -> list[Part] | None:
        """Return one count per scope."""
        first = heads(members)
        parts: list[Part] = []
        for scope in self._scopes:
            weights = np.zeros((len(members), len(self._kind.places.ids)), np.int64)
            columns = slice(None) if scope.places is None else list(scope.places)
            weights[:, columns] = scope.units[first].astype(np.int64)[:, None]
            parts.append(Count(weights, scope.low, scope.high))
        return parts
