"""Assignment: every unit goes to exactly one place."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from core.frame import Frame, nearest
from core.kinds import Arrangement, Cells, Members, OutcomeKind, PlaceList, Places, read_places
from core.parts import Count, Event, Level, Mask, Part, UnitAutomaton
from core.process import Process, Rows, Taking, TakingTrace, Trace
from core.reading import Fields, OpenTable, Report
from core.statement import Statement
from core.stream import Bits


class AssignmentFields(Fields):
    """Keys of ``[outcome]``."""

    kind: str = Field(description='"assignment"')
    places: PlaceList = Field(
        description='the places: ["a", "b"], or [{id = "a", min = 1, max = 9}, ...], or {file = "places.csv", id = "place"}'
    )


class Assignment(OutcomeKind):
    """A map from units to places; place p takes between `least[p]` and `most[p]` units.

    A row holds each unit's place: int32, shape (batch, units).
    """

    name = "assignment"
    meaning = "Every unit goes to exactly one place (rooms, groups, treatment arms)."
    example = '[outcome]\nkind = "assignment"\nplaces = [{id = "room 1", max = 12}, {id = "room 2", max = 20}]'
    Fields = AssignmentFields

    def __init__(self, units: int, places: Places, least: Sequence[int], most: Sequence[int]) -> None:
        self.units, self.places = units, places
        self.least, self.most = tuple(least), tuple(most)

    @classmethod
    def of(cls, fields: Any, frame: Frame, open_table: OpenTable, report: Report) -> Assignment | None:
        """Read the places and how many units each may take."""
        places = read_places(fields.places, "place", "places", open_table, report)
        if places is None:
            return None
        least = _capacity(places, "min", 0, report)
        most = _capacity(places, "max", frame.size, report)
        if least is None or most is None:
            return None
        for name, low, high in zip(places.ids, least, most, strict=True):
            if low > high:
                if high == frame.size:
                    message = f"place {name} needs more units than the list has."
                    report.fault("places", message, found=low, allowed=f"at most {frame.size}")
                    return None
                report.fault("places", f"place {name}: min is above max.", found=f"min {low}, max {high}")
                return None
        if sum(least) > frame.size:
            message = f"the places need more units than the list has ({frame.size})."
            report.fault("places", message, found=f"{sum(least)} as the sum of min")
            return None
        if sum(most) < frame.size:
            message = f"the places do not hold all {frame.size} units of the list."
            report.fault("places", message, found=f"{sum(most)} as the sum of max")
            return None
        _hint(places, report)
        return cls(frame.size, places, least, [min(high, frame.size) for high in most])

    @property
    def width(self) -> int:
        """Number of units."""
        return self.units

    def words(self) -> str:
        """Return what is drawn."""
        bounds = zip(self.places.ids, self.least, self.most, strict=True)
        told = ", ".join(f"{name} ({self._limits(low, high)})" for name, low, high in list(bounds)[:12])
        more = ", ..." if len(self.places.ids) > 12 else ""
        return f"Each of {self.units:,} units goes to one of {len(self.places.ids):,} places: {told}{more}."

    def _limits(self, low: int, high: int) -> str:
        if low == 0 and high == self.units:
            return "any number"
        if low == 0:
            return f"at most {high}"
        return f"exactly {high}" if low == high else f"{low} to {high}"

    def cells(self) -> tuple[int, int]:
        """Units by places."""
        return self.units, len(self.places.ids)

    def tally(self, rows: Rows, weights: NDArray[np.int64], places: Sequence[int] | None = None) -> NDArray[np.int64]:
        """Return the sum of the weights of the units in these places."""
        if places is None:
            return np.full(len(rows), weights.sum(), np.int64)
        inside = np.zeros(len(self.places.ids), bool)
        inside[list(places)] = True
        chosen = np.flatnonzero(weights)
        total: NDArray[np.int64] = inside[rows[:, chosen]] @ weights[chosen]
        return total

    def process(
        self, members: Members, cells: Cells, arrangement: Arrangement, automata: Sequence[UnitAutomaton]
    ) -> Process:
        """One level per group and place: how many of the group go there."""
        allowed = {
            (group, place)
            for group in arrangement.groups
            for place in np.flatnonzero(cells.may[int(members[group][0])]).tolist()
        }
        places = range(len(self.places.ids))
        pairs = (
            [(g, p) for p in places for g in arrangement.groups]
            if arrangement.by_place
            else [(g, p) for g in arrangement.groups for p in places]
        )
        levels = [
            Level(tuple(Event(g, p, n) for n in range(min(len(members[g]), self.most[p]) + 1)))
            for g, p in pairs
            if (g, p) in allowed
        ]
        stuck = [g for g in arrangement.groups if not any((g, p) in allowed for p in places)]
        return _Placing(self, [*levels, *(Level(()) for _ in stuck)], members)

    def parts(self, groups: int) -> list[Part]:
        """Return one count per place that is not wide open."""
        parts: list[Part] = []
        for place, (low, high) in enumerate(zip(self.least, self.most, strict=True)):
            if low > 0 or high < self.units:
                weights = np.zeros((groups, len(self.places.ids)), np.int64)
                weights[:, place] = 1
                parts.append(Count(weights, low, high))
        return parts

    def arrangements(self, groups: int) -> list[Arrangement]:
        """Places outside, or groups outside."""
        order = tuple(range(groups))
        return [Arrangement(order), Arrangement(order, by_place=False)]

    def lines(self, row: Rows, ids: Sequence[str]) -> list[tuple[str, ...]]:
        """One line per unit: where it goes."""
        return [(ids[unit], self.places.ids[place]) for unit, place in enumerate(row.tolist())]

    def read(self, lines: Sequence[tuple[int, str]], ids: Sequence[str]) -> Rows | str:
        """Read each unit's place."""
        row = np.full(self.units, -1, np.int32)
        for unit, name in lines:
            if name not in self.places.ids:
                return f"{ids[unit]} is at {name!r}, which is no place of the sheet."
            if row[unit] >= 0:
                return f"{ids[unit]} stands there twice."
            row[unit] = self.places.ids.index(name)
        if (row < 0).any():
            return f"{ids[int(np.flatnonzero(row < 0)[0])]} has no place."
        for place, count in enumerate(np.bincount(row, minlength=len(self.places.ids)).tolist()):
            if not self.least[place] <= count <= self.most[place]:
                low, high = self.least[place], self.most[place]
                return f"{self.places.ids[place]} has {count} units, not between {low} and {high}."
        return row

    def state(self, model: Statement) -> None:
        """Say that every unit has one place, and how many a place takes."""
        places = range(len(self.places.ids))
        for unit in range(self.units):
            model.exactly_one(model.at(unit, place) for place in places)
        for place, (low, high) in enumerate(zip(self.least, self.most, strict=True)):
            if low > 0 or high < self.units:
                model.sum(((1, model.at(unit, place)) for unit in range(self.units)), low, high)

    def row(self, used: Mask) -> Rows:
        """Return each unit's place."""
        return np.asarray(used.argmax(axis=1), np.int32)


def _hint(places: Places, report: Report) -> None:
    """Say so if a column seems to be meant as min or max, which would otherwise limit nothing."""
    if places.table is not None and not {"min", "max"} & set(places.columns):
        for column in places.columns:
            if places.table.is_number(column) and not nearest(column, ("min", "max")):
                report.notice(
                    f"the places have neither min nor max, so each may take any number; their column {column} limits nothing "
                    "unless a rule refers to it."
                )
    for column in places.columns:
        near = nearest(column, ("min", "max"))
        if near and column not in ("min", "max"):
            report.notice(f"the places have a column {column}, which limits nothing; was {near} meant?")


def _capacity(places: Places, column: str, default: int, report: Report) -> list[int] | None:
    """Return the least or greatest number of units of each place; blank means no limit."""
    if column not in places.columns or places.table is None:
        return [default] * len(places.ids)
    numbers = []
    for row, text in enumerate(places.table.text(column)):
        if text and not (text.isascii() and text.isdecimal()):
            at = report.line(places.table, row, column)
            at.fault("", "this is no number of units.", found=text, allowed="an integer of at least 0, or a blank")
            return None
        numbers.append(int(text) if text else default)
    return numbers


class _Placing(Taking):
    def __init__(self, kind: Assignment, levels: Sequence[Level], members: Members) -> None:
        super().__init__(levels, members, exhaust=True)
        self.kind = kind
        self._levels_of: dict[int, list[int]] = {}
        for index, level in enumerate(self.levels):
            if level.events:
                self._levels_of.setdefault(level.events[0].group, []).append(index)

    def lift(self, events: NDArray[np.int32], bits: Bits) -> Rows:
        batch = len(events)
        rows = np.zeros((batch, self.kind.units), np.int32)
        for group, levels in self._levels_of.items():
            members = self.members[group]
            places = np.array([self.levels[i].events[0].place for i in levels], np.int32)
            counts = np.stack([self.counts(events, i) for i in levels], axis=1)
            # the place of the i-th unit taken from the group
            ends = np.cumsum(counts, axis=1)
            rank = np.arange(len(members))
            taken = np.zeros((batch, len(members)), np.int64)
            for column in range(len(levels) - 1):
                taken += rank >= ends[:, column, None]
            if len(members) == 1:
                rows[:, members] = places[taken]
            else:
                order = bits.shuffles(batch, len(members))
                values = np.empty((batch, len(members)), np.int32)
                np.put_along_axis(values, order, places[taken], axis=1)
                rows[:, members] = values
        return rows

    def trace(self) -> Trace:
        return _PlacingTrace(self)


class _PlacingTrace(TakingTrace):
    def __init__(self, process: _Placing) -> None:
        super().__init__(process)
        self._row = np.zeros(process.kind.units, np.int32)

    def put(self, event: Event, units: Sequence[int]) -> None:
        self._row[list(units)] = event.place

    def stands(self, row: Rows, unit: int, place: int) -> bool:
        return bool(row[unit] == place)

    def row(self) -> Rows:
        return self._row
