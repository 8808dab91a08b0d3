"""What `differ` and `agree` share: comparing the two units of a pair in a column."""

from __future__ import annotations

import numpy as np
from pydantic import Field

from core.parts import Mask
from core.process import Rows
from core.reading import Number, Report, plain, scaled
from core.setting import RuleFields, Setting
from core.statement import Statement


class PairFields(RuleFields):
    """Keys of `differ` and `agree`."""

    column: str = Field(description="a column of the list")
    by_at_most: Number | None = Field(None, description="a number of at least 0; the column must hold numbers")
    by_at_least: Number | None = Field(None, description="a number of at least 0; the column must hold numbers")

    def is_numeric(self) -> bool:
        """Return whether numbers are compared."""
        return self.by_at_most is not None or self.by_at_least is not None


def alike_table(fields: PairFields, setting: Setting, report: Report) -> Mask | None:
    """Return for each two units whether their values are equal, or differ within the bounds: bool, (units, units)."""
    if not fields.is_numeric():
        if not setting.has_column(fields.column, "column", report):
            return None
        codes, values = setting.frame.codes(fields.column)
        if "" in values:
            place = setting.frame.table.place(int(np.flatnonzero(codes == values.index(""))[0]))
            message = f"every unit needs a value in this column, and {setting.frame.table.name} has a blank in {place}."
            report.fault("column", message, found=fields.column)
            return None
        same: Mask = codes[:, None] == codes[None, :]
        return same
    amounts = setting.amounts(fields.column, "column", report)
    bounds: dict[str, int | None] = {}
    for key, up in (("by_at_least", True), ("by_at_most", False)):
        number = getattr(fields, key)
        decimals = 0 if amounts is None else amounts.decimals
        bounds[key] = None if number is None else scaled(number, decimals, up=up)
        if number is not None and (bounds[key] is None or number < 0):
            allowed = "a number of at least 0 and at most 18 digits"
            report.fault(key, "this is no difference of two numbers.", found=number, allowed=allowed)
            return None
    least, most = fields.by_at_least, fields.by_at_most
    if least is not None and most is not None and least > most:
        report.fault("by_at_least", "by_at_least is above by_at_most.", found=f"{plain(least)} and {plain(most)}")
        return None
    if amounts is None:
        return None
    gap = np.abs(amounts.values[:, None] - amounts.values[None, :])
    table: Mask = np.ones(gap.shape, bool)
    if bounds["by_at_least"] is not None:
        table &= gap >= bounds["by_at_least"]
    if bounds["by_at_most"] is not None:
        table &= gap <= bounds["by_at_most"]
    return table


def partners_allowed(allowed: Mask, rows: Rows) -> Mask:
    """Return which outcomes have allowed pairs only; a single unit is no pair."""
    every = np.arange(rows.shape[1])
    good: Mask = (allowed[every, rows] | (rows == every)).all(axis=1)
    return good


def state_partners(allowed: Mask, model: Statement) -> None:
    """Say that only allowed pairs are made."""
    for unit, partner in np.argwhere(np.triu(~allowed, 1)).tolist():
        model.must(~model.at(unit, partner))


def pair_words(fields: PairFields, without: str) -> str:
    """Return the rule as a sentence; `without` is the one without numbers."""
    if not fields.is_numeric():
        return without
    least, most = fields.by_at_least, fields.by_at_most
    bounds = [f"{word} {plain(b)}" for word, b in (("at least", least), ("at most", most)) if b is not None]
    return f"The two of each pair differ in {fields.column} by {' and '.join(bounds)}."
