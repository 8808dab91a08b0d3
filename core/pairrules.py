"""What `differ` and `agree` share: comparing the two units of a pair in a column."""

from __future__ import annotations

from decimal import Decimal

import numpy as np
from pydantic import Field

from core.errors import SheetError
from core.parts import Mask
from core.process import Rows
from core.reading import Number, Report
from core.setting import RuleFields, Setting


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
    if not setting.has_column(fields.column, "column", report):
        return None
    if not fields.is_numeric():
        codes, values = setting.frame.codes(fields.column)
        if "" in values:
            line = setting.frame.table.place(int(np.flatnonzero(codes == values.index(""))[0]))
            report.fault("column", f"{setting.frame.table.name}, {line} is blank in this column.", found=fields.column)
            return None
        table: Mask = codes[:, None] == codes[None, :]
    else:
        try:
            amounts = setting.frame.amounts(fields.column)
        except SheetError as error:
            report.take(error)
            return None
        least, most = (
            None if bound is None else Decimal(bound).scaleb(amounts.decimals)
            for bound in (fields.by_at_least, fields.by_at_most)
        )
        for key, bound in (("by_at_least", least), ("by_at_most", most)):
            if bound is not None and not (bound.is_finite() and 0 <= bound < 10**18):
                report.fault(key, "this is no distance.", found=getattr(fields, key), allowed="a number of at least 0")
                return None
        if least is not None and most is not None and least > most:
            report.fault("by_at_least", "by_at_least is above by_at_most.", found=f"{fields.by_at_least}")
            return None
        gap = np.abs(amounts.values[:, None] - amounts.values[None, :])
        table = np.ones(gap.shape, bool)
        if least is not None:
            table &= gap >= -int(-least // 1)
        if most is not None:
            table &= gap <= int(most // 1)
    return table


def partners_allowed(allowed: Mask, rows: Rows) -> Mask:
    """Return which outcomes have allowed pairs only; a single unit is no pair."""
    every = np.arange(rows.shape[1])
    good: Mask = (allowed[every, rows] | (rows == every)).all(axis=1)
    return good


def pair_words(fields: PairFields, plain: str) -> str:
    """Return the rule as a sentence; `plain` is the one without numbers."""
    if not fields.is_numeric():
        return plain
    least, most = fields.by_at_least, fields.by_at_most
    bounds = [f"at least {least}" if least is not None else "", f"at most {most}" if most is not None else ""]
    return f"The two of each pair differ in {fields.column} by {' and '.join(b for b in bounds if b)}."
