"""Selection: some units are in, the others are out."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from core.frame import Frame
from core.kinds import Arrangement, Cells, Members, OutcomeKind, Places
from core.parts import Count, Event, Level, Mask, Part, UnitAutomaton
from core.process import Process, Rows, Taking, TakingTrace, Trace
from core.reading import Fields, OpenTable, Report
from core.statement import Statement
from core.stream import Bits


class Size(Fields):
    """A range of sizes."""

    min: int = Field(0, ge=0, description="an integer of at least 0")
    max: int | None = Field(None, ge=0, description="an integer of at least 0")


class SelectionFields(Fields):
    """Keys of ``[outcome]``."""

    kind: str = Field(description='"selection"')
    size: int | Size | None = Field(
        None, description="how many units are drawn: an integer, or {min = 3, max = 5}; without it any number"
    )


class Selection(OutcomeKind):
    """A subset of the units of a size between `least` and `most`.

    A row holds the indices of the units that are in, ascending, padded with the number of units: int32, shape
    (batch, most).
    """

    name = "selection"
    meaning = "Some of the units are drawn, the others are not (a sample, a panel, a set of vouchers)."
    example = '[outcome]\nkind = "selection"\nsize = 30'
    Fields = SelectionFields

    def __init__(self, units: int, least: int, most: int) -> None:
        self.units, self.least, self.most = units, least, most
        self.places = Places("", ("drawn",))

    @classmethod
    def of(cls, fields: Any, frame: Frame, open_table: OpenTable, report: Report) -> Selection | None:
        """Read the size."""
        size = fields.size
        if isinstance(size, int):
            least = most = size
        else:
            least = size.min if size else 0
            most = frame.size if size is None or size.max is None else size.max
        if least < 0:
            report.fault("size", "a size is never negative.", found=least, allowed="an integer of at least 0")
            return None
        if least > frame.size:
            message = "so many units cannot be drawn from this list."
            report.fault("size", message, found=least, allowed=f"at most {frame.size}")
            return None
        if least > most:
            report.fault("size", "min is above max.", found=f"min {least}, max {most}")
            return None
        return cls(frame.size, least, min(most, frame.size))

    @property
    def width(self) -> int:
        """Largest number of units drawn."""
        return max(1, self.most)

    def words(self) -> str:
        """Return what is drawn."""
        if self.least == self.most:
            return f"{self.most:,} of {self.units:,} units are drawn."
        return f"Between {self.least:,} and {self.most:,} of {self.units:,} units are drawn."

    def cells(self) -> tuple[int, int]:
        """One column: drawn."""
        return self.units, 1

    def tally(self, rows: Rows, weights: NDArray[np.int64], places: Sequence[int] | None = None) -> NDArray[np.int64]:
        """Return the sum of the drawn units' weights."""
        padded = np.append(weights, 0)
        total: NDArray[np.int64] = padded[rows].sum(axis=1)
        return total

    def process(
        self, members: Members, cells: Cells, arrangement: Arrangement, automata: Sequence[UnitAutomaton]
    ) -> Process:
        """One level per group: how many of it are drawn."""
        levels = []
        for group in arrangement.groups:
            size, first = len(members[group]), int(members[group][0])
            least = size if cells.must[first, 0] else 0
            most = min(size, self.most) if cells.may[first, 0] else 0
            levels.append(Level(tuple(Event(group, 0, count) for count in range(least, most + 1))))
        return _Drawing(self, levels, members)

    def parts(self, groups: int) -> list[Part]:
        """Return the kind's own count: how many are drawn in all."""
        return [Count(np.ones((groups, 1), np.int64), self.least, self.most)]

    def lines(self, row: Rows, ids: Sequence[str]) -> list[tuple[str, ...]]:
        """One line per unit drawn."""
        return [(ids[unit],) for unit in row.tolist() if unit < self.units]

    def read(self, lines: Sequence[tuple[int, str]], ids: Sequence[str]) -> Rows | str:
        """Read the drawn units."""
        drawn = sorted(unit for unit, _ in lines)
        for unit, following in zip(drawn, drawn[1:], strict=False):
            if unit == following:
                return f"{ids[unit]} stands there twice."
        if not self.least <= len(drawn) <= self.most:
            return f"it has {len(drawn)} units; the sheet says: {self.words()}"
        return np.array(drawn + [self.units] * (self.width - len(drawn)), np.int32)

    def state(self, model: Statement) -> None:
        """Say how many are drawn."""
        model.sum(((1, model.at(unit, 0)) for unit in range(self.units)), self.least, self.most)

    def row(self, used: Mask) -> Rows:
        """Return the drawn units."""
        drawn = np.flatnonzero(used[:, 0]).tolist()
        return np.array(drawn + [self.units] * (self.width - len(drawn)), np.int32)


class _Drawing(Taking):
    def __init__(self, kind: Selection, levels: Sequence[Level], members: Members) -> None:
        super().__init__(levels, members, exhaust=False)
        self.kind = kind

    def lift(self, events: NDArray[np.int32], bits: Bits) -> Rows:
        batch = len(events)
        rows = np.full((batch, self.kind.width + 1), self.kind.units, np.int32)
        filled = np.zeros(batch, np.int64)
        for level in range(len(self.levels)):
            members = self.members[self.levels[level].events[0].group] if self.levels[level].events else None
            if members is None:
                continue
            counts = self.counts(events, level)
            if not counts.any():
                continue
            if len(members) == 1:
                picked = np.where(counts[:, None] == 1, 0, -1)
            else:
                picked = bits.subsets(len(members), counts)
            where = np.arange(picked.shape[1]) < counts[:, None]
            target = np.where(where, filled[:, None] + np.arange(picked.shape[1]), self.kind.width)
            target = np.minimum(target, self.kind.width)
            units = np.where(where, members[picked], self.kind.units)
            np.put_along_axis(rows, target, units.astype(np.int32), axis=1)
            filled += counts
        rows = rows[:, : self.kind.width]
        rows.sort(axis=1)
        return rows

    def trace(self) -> Trace:
        return _DrawingTrace(self)


class _DrawingTrace(TakingTrace):
    def __init__(self, process: _Drawing) -> None:
        super().__init__(process)
        self._kind = process.kind
        self._drawn: list[int] = []

    def put(self, event: Event, units: Sequence[int]) -> None:
        self._drawn += units

    def stands(self, row: Rows, unit: int, place: int) -> bool:
        return unit in row.tolist()

    def row(self) -> Rows:
        drawn = sorted(self._drawn)
        return np.array(drawn + [self._kind.units] * (self._kind.width - len(drawn)), np.int32)
