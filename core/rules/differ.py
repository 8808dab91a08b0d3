"""Differ: the two of a pair differ in a column."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from core.pairrules import PairFields, alike_table, pair_words, partners_allowed, state_partners
from core.parts import Mask
from core.process import Rows
from core.reading import Report
from core.rules import PAIRING, Case, Rule
from core.setting import Setting
from core.statement import Statement


class Differ(Rule):
    """The partners' values differ, or differ by a number within bounds. `allowed` is a table over pairs of units."""

    name = "differ"
    kinds = (PAIRING,)
    meaning = (
        "The two of each pair have different values of `column`; with `by_at_least` or `by_at_most` the numbers differ by so "
        "much."
    )
    example = '[[rule]]\nkind = "differ"\ncolumn = "institute"'
    Fields = PairFields

    def __init__(self, setting: Setting, allowed: Mask, fields: PairFields) -> None:
        self._setting, self._allowed, self._fields = setting, allowed, fields

    @classmethod
    def of(cls, fields: Any, setting: Setting, report: Report) -> Differ | None:
        """Read the column."""
        table = alike_table(fields, setting, report)
        if table is None:
            return None
        return cls(setting, table if fields.is_numeric() else ~table, fields)

    @classmethod
    def cases(cls) -> Sequence[Case]:
        """Return examples."""
        units = tuple({"id": f"u{i}", "c": "abac"[i], "n": i} for i in range(4))
        return [
            Case(units, {"kind": "pairing"}, {"column": "c"}),
            Case(units, {"kind": "pairing"}, {"column": "n", "by_at_least": 2}),
        ]

    def check(self, rows: Rows) -> Mask:
        """Look up every pair."""
        return partners_allowed(self._allowed, rows)

    def state(self, model: Statement) -> None:
        """Say that no other pairs are made."""
        state_partners(self._allowed, model)

    def words(self) -> str:
        """Return for example "The two of each pair have different institute."."""
        return pair_words(self._fields, f"The two of each pair have a different {self._fields.column}.")

    def cells(self) -> tuple[Mask, Mask] | None:
        """Close the pairs that are alike."""
        may = np.concatenate([self._allowed, np.ones((len(self._allowed), 1), bool)], axis=1)
        return may, np.zeros_like(may)
