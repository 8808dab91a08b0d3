"""Pairing: every unit has one partner (one may stay single)."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from core.frame import Frame, listed
from core.kinds import Arrangement, Cells, Members, OutcomeKind, Places, row_labels
from core.parts import Columns, Event, Level, Mask, UnitAutomaton
from core.process import Process, Rows, Trace
from core.reading import Fields, OpenTable, Report
from core.statement import Statement
from core.stream import Bits


class PairingFields(Fields):
    """Keys of ``[outcome]``."""

    kind: str = Field(description='"pairing"')
    sides: str | None = Field(
        None, description="a column with exactly two values: every pair then joins one unit of each"
    )
    single: bool = Field(False, description="true: one unit stays single if the numbers do not fit")


class Pairing(OutcomeKind):
    """A perfect matching of the units, or with `single` one that leaves exactly one unit alone.

    A row holds each unit's partner, or itself if it stays single: int32, shape (batch, units).
    `side` holds 0 or 1 for each unit, or is None.
    """

    name = "pairing"
    meaning = "Every unit gets one partner (reviews, exchange partners, first rounds of a tournament)."
    example = '[outcome]\nkind = "pairing"\nsides = "role"'
    Fields = PairingFields

    def __init__(self, units: int, side: NDArray[np.int64] | None, *, single: bool) -> None:
        self.units, self.side, self.single = units, side, single
        self.places = Places("partner", ("paired",))

    @classmethod
    def of(cls, fields: Any, frame: Frame, open_table: OpenTable, report: Report) -> Pairing | None:
        """Read the sides, and see that the numbers fit."""
        side: NDArray[np.int64] | None = None
        spare = frame.size % 2
        if fields.sides is not None:
            if fields.sides not in frame.columns:
                known = frame.columns
                message = "the list has no such column."
                report.fault("sides", message, found=fields.sides, allowed=listed(known), known=known)
                return None
            codes, values = frame.codes(fields.sides)
            if len(values) != 2 or "" in values:
                found = listed([value or "a blank" for value in values], 5)
                report.fault("sides", "this column must have exactly two values.", found=found)
                return None
            side = codes.astype(np.int64)
            spare = abs(frame.size - 2 * int(side.sum()))
        if spare > 1:
            message = f"one side has {spare} units more than the other, so they cannot be paired."
            report.fault("sides", message, allowed="sides of equal size, or one more with single = true")
            return None
        if spare and not fields.single:
            allowed = "single = true, or an even number of units" if side is None else "single = true, or equal sides"
            report.fault("single", "one unit is left over and finds no partner.", allowed=allowed)
            return None
        return cls(frame.size, side, single=bool(spare))

    @property
    def width(self) -> int:
        """Number of units."""
        return self.units

    def words(self) -> str:
        """Return what is drawn."""
        rest = " and one stays single" if self.single else ""
        return f"{self.units:,} units are joined in {self.units // 2:,} pairs{rest}."

    def cells(self) -> tuple[int, int]:
        """Units by partners, and one column for staying single."""
        return self.units, self.units + 1

    def alike(self, cells: Cells) -> NDArray[np.int64]:
        """Return labels of units (of one side) that may have the same partners, each other left aside.

        Two such units may either have each other (rows equal with the diagonal filled) or not (with it empty); no unit
        is alike to others in both ways, because `may` is symmetric.
        """
        table = np.concatenate([cells.may, cells.must], axis=1)
        labels = []
        for diagonal in (False, True):
            rows = table.copy()
            np.fill_diagonal(rows[:, : self.units], diagonal)
            labels.append(row_labels(rows))
        plain, filled = labels
        shared = np.bincount(filled)[filled] > 1
        side = np.zeros(self.units, np.int64) if self.side is None else self.side
        return row_labels(np.stack([shared, np.where(shared, filled, plain), side], axis=1).astype(np.int64))

    def possible(self) -> Mask:
        """Return the cells that the kind itself allows: partners of the other side, single only where one is left."""
        may = np.ones((self.units, self.units + 1), bool)
        np.fill_diagonal(may, False)
        may[:, -1] = self.single
        if self.side is not None:
            may[:, :-1] &= self.side[:, None] != self.side[None, :]
            if self.single:
                may[:, -1] = self.side == self._larger()
        return may

    def _larger(self) -> int:
        return int(self.side is not None and 2 * int(self.side.sum()) > self.units)

    def tally(self, rows: Rows, weights: NDArray[np.int64], places: Sequence[int] | None = None) -> NDArray[np.int64]:
        """Return the sum of the weights of the units that are paired."""
        paired = rows != np.arange(self.units)
        total: NDArray[np.int64] = paired @ weights
        return total

    def process(
        self, members: Members, cells: Cells, arrangement: Arrangement, automata: Sequence[UnitAutomaton]
    ) -> Process:
        """One level per unit of each group (with sides: of one side): the group of its partner."""
        first = [int(m[0]) for m in members]
        order = list(arrangement.groups)
        if self.side is not None:
            order = [g for g in order if self.side[first[g]] == self._larger()]
            others = [g for g in arrangement.groups if g not in order]
        levels = []
        for place, group in enumerate(order):
            partners = others if self.side is not None else order[place:]
            events = [Event(group, 0, 0)] if self.side is None else []
            for partner in partners:
                unit = first[partner] if partner != group else int(members[group][-1])
                if (partner != group or len(members[group]) > 1) and cells.may[first[group], unit]:
                    events.append(Event(group, 0, 1, partner))
            if self.single and cells.may[first[group], -1]:
                events.append(Event(group, 0, 1))
            levels += [Level(tuple(events))] * len(members[group])
        return _Joining(self, levels, members)

    def lines(self, row: Rows, ids: Sequence[str]) -> list[tuple[str, ...]]:
        """One line per pair, the earlier unit first; a single unit with a blank partner."""
        return [
            (ids[unit], ids[partner] if partner != unit else "")
            for unit, partner in enumerate(row.tolist())
            if unit <= partner
        ]

    def read(self, lines: Sequence[tuple[int, str]], ids: Sequence[str]) -> Rows | str:
        """Read the pairs."""
        index = {name: unit for unit, name in enumerate(ids)}
        row = np.full(self.units, -1, np.int32)
        for unit, name in lines:
            if name and name not in index:
                return f"{name!r} is not in the list."
            partner = index[name] if name else unit
            if row[unit] >= 0 or row[partner] >= 0:
                return f"{ids[unit] if row[unit] >= 0 else name} stands there twice."
            row[unit], row[partner] = partner, unit
        if (row < 0).any():
            return f"{ids[int(np.flatnonzero(row < 0)[0])]} is missing."
        allowed = self.possible()
        single = row == np.arange(self.units)
        if single.sum() != int(self.single):
            return f"{int(single.sum())} units are single; {int(self.single)} must be."
        for unit, partner in enumerate(row.tolist()):
            if not allowed[unit, -1 if partner == unit else partner]:
                return f"{ids[unit]} has no partner of the other side."
        return row

    def variables(self) -> NDArray[np.int64]:
        """Return the variables: one for each two units, and one for each that may stay single."""
        possible = self.possible()
        first = np.triu(possible)  # the column for being single lies above the diagonal
        numbers = np.where(first, np.cumsum(first).reshape(first.shape), 0)
        numbers[:, :-1] += numbers[:, :-1].T.copy()
        return numbers

    def state(self, model: Statement) -> None:
        """Say that every unit has one partner or is single, and how many are single."""
        every = range(self.units)
        for unit in every:
            model.exactly_one(model.at(unit, partner) for partner in range(self.units + 1))
        model.sum(((1, model.at(unit, self.units)) for unit in every), int(self.single), int(self.single))

    def row(self, used: Mask) -> Rows:
        """Return each unit's partner, itself for a single one."""
        partner = used.argmax(axis=1)
        return np.where(partner == self.units, np.arange(self.units), partner).astype(np.int32)


class _Joining(Process):
    """The next unit of a group (its earliest that is left) picks a partner, or nothing if none is left.

    Own columns: how many are left in each group, and (last) how many have stayed single.
    """

    def __init__(self, kind: Pairing, levels: Sequence[Level], members: Members) -> None:
        self.kind, self.levels, self.members, self.units = kind, tuple(levels), tuple(members), kind.units
        self.start = (*(len(m) for m in members), 0)

    def step(self, level: int, event: Event, own: Columns) -> tuple[Columns, NDArray[np.int64], Mask | None]:
        """Take the picking unit out of its group, then the partner out of its own."""
        after = own.copy()
        pool = np.zeros(own.shape[1], own.dtype)
        if event.count == 0:
            alive: Mask = own[event.group] == 0
        else:
            after[event.group] -= 1
            alive = after[event.group] >= 0
            if event.partner < 0:
                pool += 1
                after[-1] += 1
                alive &= after[-1] <= 1
            else:
                pool = np.maximum(after[event.partner], 0)
                after[event.partner] -= 1
                alive &= after[event.partner] >= 0
        if level == len(self.levels) - 1:
            alive &= (after[:-1] == 0).all(axis=0) & (after[-1] == int(self.kind.single))
        return after, pool, alive

    def lift(self, events: NDArray[np.int32], bits: Bits) -> Rows:
        """Return pairs; the partner is uniform among those left of its group."""
        batch = len(events)
        every = np.arange(batch)
        rows = np.tile(np.arange(self.kind.units, dtype=np.int32), (batch, 1))
        left = [np.ones((batch, len(m)), bool) for m in self.members]
        for level, at in enumerate(self.levels):
            for index, event in enumerate(at.events):
                picked = every[events[:, level] == index]
                if event.count == 0 or not picked.size:
                    continue
                unit = left[event.group][picked].argmax(axis=1)
                left[event.group][picked, unit] = False
                if event.partner < 0:
                    continue
                pool = left[event.partner][picked]
                # proposals that have died may find an empty pool; they are dropped by the caller
                choice = bits.below(np.maximum(pool.sum(axis=1), 1))
                partner = (np.cumsum(pool, axis=1) > choice[:, None]).argmax(axis=1)
                left[event.partner][picked, partner] = False
                one, other = self.members[event.group][unit], self.members[event.partner][partner]
                rows[picked, one], rows[picked, other] = other, one
        return rows

    def trace(self) -> Trace:
        """Return an empty pairing."""
        return _JoiningTrace(self)


class _JoiningTrace(Trace):
    def __init__(self, process: _Joining) -> None:
        self._process = process
        self._left = [list(map(int, m)) for m in process.members]
        self._row = np.arange(process.kind.units, dtype=np.int32)

    def pool(self, level: int, event: Event) -> list[int]:
        if event.count == 0:
            return []
        unit = self._left[event.group][0]
        if event.partner < 0:
            return [unit]
        return [u for u in self._left[event.partner] if u != unit]

    def take(self, level: int, event: Event, units: Sequence[int]) -> None:
        if event.count == 0:
            return
        unit = self._left[event.group].pop(0)
        if event.partner >= 0:
            partner = units[0]
            self._left[event.partner].remove(partner)
            self._row[unit], self._row[partner] = partner, unit

    def find(self, level: int, row: Rows) -> tuple[int, list[int]]:
        events = self._process.levels[level].events
        if not events:
            raise ValueError("this outcome cannot come from this process")
        left = self._left[events[0].group]
        for index, event in enumerate(events):
            if event.count == 0:
                if not left:
                    return index, []
                continue
            partner = int(row[left[0]]) if left else -1
            if event.partner < 0 and left and partner == left[0]:
                return index, [left[0]]
            if event.partner >= 0 and partner in self._left[event.partner] and partner != left[0]:
                return index, [partner]
        raise ValueError("this outcome cannot come from this process")

    def row(self) -> Rows:
        return self._row
