"""Order: all units in a row, one at each position."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from core.frame import Frame
from core.kinds import Arrangement, Cells, Members, OutcomeKind, Places
from core.parts import Event, Level, Mask, UnitAutomaton
from core.process import Process, Rows, Taking, TakingTrace, Trace
from core.reading import Fields, OpenTable, Report
from core.statement import Statement
from core.stream import Bits


class OrderFields(Fields):
    """Keys of ``[outcome]``."""

    kind: str = Field(description='"order"')


class Order(OutcomeKind):
    """A permutation of the units.

    A row holds the unit at each position: int32, shape (batch, units).
    """

    name = "order"
    meaning = "All units in a row, one after the other (a running order, a list of callings)."
    example = '[outcome]\nkind = "order"'
    Fields = OrderFields

    def __init__(self, units: int) -> None:
        self.units = units
        self.places = Places("position", tuple(str(i) for i in range(1, units + 1)))

    @classmethod
    def of(cls, fields: Any, frame: Frame, open_table: OpenTable, report: Report) -> Order | None:
        """There is nothing to read."""
        return cls(frame.size)

    @property
    def width(self) -> int:
        """Number of positions."""
        return self.units

    def words(self) -> str:
        """Return what is drawn."""
        return f"All {self.units:,} units are put in an order."

    def cells(self) -> tuple[int, int]:
        """Units by positions."""
        return self.units, self.units

    def tally(self, rows: Rows, weights: NDArray[np.int64], places: Sequence[int] | None = None) -> NDArray[np.int64]:
        """Return the sum of the weights of the units at these positions."""
        chosen = rows if places is None else rows[:, list(places)]
        total: NDArray[np.int64] = weights[chosen].sum(axis=1)
        return total

    def process(
        self, members: Members, cells: Cells, arrangement: Arrangement, automata: Sequence[UnitAutomaton]
    ) -> Process:
        """One level per position: a unit of which group stands there."""
        levels = [
            Level(tuple(Event(g, p, 1) for g in arrangement.groups if cells.may[int(members[g][0]), p]))
            for p in range(self.units)
        ]
        return _Lining(self, levels, members)

    def lines(self, row: Rows, ids: Sequence[str]) -> list[tuple[str, ...]]:
        """One line per position."""
        return [(ids[unit], str(place)) for place, unit in enumerate(row.tolist(), 1)]

    def read(self, lines: Sequence[tuple[int, str]], ids: Sequence[str]) -> Rows | str:
        """Read which unit stands where."""
        row = np.full(self.units, -1, np.int32)
        for unit, name in lines:
            if name not in self.places.ids:
                return f"{ids[unit]} is at position {name!r}; positions are 1 to {self.units}."
            if row[int(name) - 1] >= 0:
                return f"position {name} is taken twice."
            row[int(name) - 1] = unit
        if (row < 0).any():
            return f"nothing stands at position {int(np.flatnonzero(row < 0)[0]) + 1}."
        if len(set(row.tolist())) < self.units:
            return "a unit stands there twice."
        return row

    def state(self, model: Statement) -> None:
        """Say that every unit has one position and every position one unit."""
        every = range(self.units)
        for one in every:
            model.exactly_one(model.at(one, position) for position in every)
            model.exactly_one(model.at(unit, one) for unit in every)

    def row(self, used: Mask) -> Rows:
        """Return the unit at each position."""
        return np.asarray(used.argmax(axis=0), np.int32)


class _Lining(Taking):
    def __init__(self, kind: Order, levels: Sequence[Level], members: Members) -> None:
        super().__init__(levels, members, exhaust=True)
        self.kind = kind

    def lift(self, events: NDArray[np.int32], bits: Bits) -> Rows:
        batch = len(events)
        queue = np.empty((batch, self.kind.units), np.int32)
        offset = np.zeros(len(self.members), np.int64)
        start = 0
        for number, members in enumerate(self.members):
            size = len(members)
            offset[number] = start
            if size == 1:
                queue[:, start] = members[0]
            else:
                queue[:, start : start + size] = members[bits.shuffles(batch, size)]
            start += size
        rows = np.empty((batch, self.kind.units), np.int32)
        following = np.tile(offset, (batch, 1))
        every = np.arange(batch)
        for position, level in enumerate(self.levels):
            if not level.events:
                continue
            group = np.array([event.group for event in level.events])[events[:, position]]
            where = following[every, group]
            # proposals that have died may run past the end of their group; they are dropped by the caller
            rows[:, position] = queue[every, np.minimum(where, self.kind.units - 1)]
            following[every, group] = where + 1
        return rows

    def trace(self) -> Trace:
        return _LiningTrace(self)


class _LiningTrace(TakingTrace):
    def __init__(self, process: _Lining) -> None:
        super().__init__(process)
        self._row = np.zeros(process.kind.units, np.int32)

    def put(self, event: Event, units: Sequence[int]) -> None:
        self._row[event.place] = units[0]

    def stands(self, row: Rows, unit: int, place: int) -> bool:
        return bool(row[place] == unit)

    def find(self, level: int, row: Rows) -> tuple[int, list[int]]:
        """Return the event of the group whose unit stands at the position."""
        place = self.process.levels[level].events[0].place
        unit = int(row[place])
        for index, event in enumerate(self.process.levels[level].events):
            if unit in self.left[event.group]:
                return index, [unit]
        raise ValueError("this outcome cannot come from this process")

    def row(self) -> Rows:
        return self._row
