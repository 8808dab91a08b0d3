"""Roster: each unit is on duty in some of the slots."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from core.frame import Frame
from core.kinds import Arrangement, Cells, Members, OutcomeKind, PlaceList, Places, read_places, row_labels
from core.parts import Columns, Event, Level, Mask, UnitAutomaton
from core.process import Process, Rows, Trace
from core.reading import Fields, OpenTable, Report
from core.statement import Statement
from core.stream import Bits


class RosterFields(Fields):
    """Keys of ``[outcome]``."""

    kind: str = Field(description='"roster"')
    slots: PlaceList = Field(
        description='the slots in their order: ["w1", "w2"], or [{id = "w1", need = 5}, ...], or {file = "slots.csv", id = "slot"}'
    )


class Roster(OutcomeKind):
    """A 0/1 table of units by slots.

    A row holds who is on duty when: bool, shape (batch, units, slots).
    """

    name = "roster"
    meaning = "Who is on duty (is tested, is on call) in which slot."
    example = '[outcome]\nkind = "roster"\nslots = ["w14", "w15", "w16"]'
    Fields = RosterFields

    def __init__(self, units: int, places: Places) -> None:
        self.units, self.places = units, places

    @classmethod
    def of(cls, fields: Any, frame: Frame, open_table: OpenTable, report: Report) -> Roster | None:
        """Read the slots."""
        places = read_places(fields.slots, "slot", "slots", open_table, report)
        return None if places is None else cls(frame.size, places)

    @property
    def width(self) -> int:
        """Units times slots."""
        return self.units * len(self.places.ids)

    def words(self) -> str:
        """Return what is drawn."""
        return f"Each of {self.units:,} units is on duty in some of {len(self.places.ids):,} slots."

    def cells(self) -> tuple[int, int]:
        """Units by slots."""
        return self.units, len(self.places.ids)

    def tally(self, rows: Rows, weights: NDArray[np.int64], places: Sequence[int] | None = None) -> NDArray[np.int64]:
        """Return the sum of the weights over all duties in these slots."""
        chosen = np.flatnonzero(weights)
        part = rows[:, chosen] if places is None else rows[:, chosen][:, :, list(places)]
        total: NDArray[np.int64] = part.sum(axis=2, dtype=np.int64) @ weights[chosen]
        return total

    def process(
        self, members: Members, cells: Cells, arrangement: Arrangement, automata: Sequence[UnitAutomaton]
    ) -> Process:
        """One level per slot and state: how many of the units in that state are on duty."""
        return _Serving(self, _States(self, members, cells, automata))

    def lines(self, row: Rows, ids: Sequence[str]) -> list[tuple[str, ...]]:
        """One line per duty, slot by slot."""
        return [(ids[unit], self.places.ids[slot]) for slot, unit in np.argwhere(row.T).tolist()]

    def read(self, lines: Sequence[tuple[int, str]], ids: Sequence[str]) -> Rows | str:
        """Read the duties."""
        row = np.zeros((self.units, len(self.places.ids)), bool)
        for unit, name in lines:
            if name not in self.places.ids:
                return f"{ids[unit]} is in {name!r}, which is no slot of the sheet."
            slot = self.places.ids.index(name)
            if row[unit, slot]:
                return f"{ids[unit]} stands twice in {name}."
            row[unit, slot] = True
        return row

    def state(self, model: Statement) -> None:
        """Say nothing: every table is a roster."""

    def row(self, used: Mask) -> Rows:
        """Return the table itself."""
        return used.copy()


@dataclass(frozen=True)
class _State:
    """What one unit may still do. Equal states are one: units in them are not told apart from here on.

    `group` matters only if the unit can be on duty in this slot; `off` and `on` are numbers of states of the next slot,
    or -1.
    """

    group: int
    off: int
    on: int


class _States:
    """The automata of all units, joined and minimised from the last slot back.

    `of_slot[t]` lists the different states before slot t (there is one state after the last slot: done).
    """

    def __init__(self, kind: Roster, members: Members, cells: Cells, automata: Sequence[UnitAutomaton]) -> None:
        self.slots = len(kind.places.ids)
        self._cells, self._automata = cells, automata
        group_of = np.zeros(kind.units, np.int64)
        for group, units in enumerate(members):
            group_of[units] = group
        labels = [group_of, row_labels(np.concatenate([cells.may, cells.must], axis=1))]
        self._unit_labels = row_labels(np.stack([*labels, *(a.labels for a in automata)], axis=1))
        self._known: list[dict[_State, int]] = [{} for _ in range(self.slots)]
        self.start = np.zeros(kind.units, np.int64)
        for label in range(int(self._unit_labels.max()) + 1):
            units = np.flatnonzero(self._unit_labels == label)
            self.start[units] = self._first_state(int(units[0]), int(group_of[units[0]]))
        self.of_slot = [list(known) for known in self._known]
        self.most = self._most()

    def _first_state(self, unit: int, group: int) -> int:
        """Return the state of a unit before the first slot, -1 if it can meet its rules in no way."""
        reached: list[set[tuple[int, ...]]] = [{tuple(a.start(unit) for a in self._automata)}]
        for slot in range(self.slots):
            after = (self._next(unit, s, slot, on) for s in reached[-1] for on in (False, True))
            reached.append({state for state in after if state is not None})
        numbers = {s: 0 for s in reached[-1] if all(a.accepts(unit, x) for a, x in zip(self._automata, s, strict=True))}
        for slot in range(self.slots - 1, -1, -1):
            before: dict[tuple[int, ...], int] = {}
            for state in reached[slot]:
                off, on = (
                    numbers.get(n, -1) if (n := self._next(unit, state, slot, duty)) is not None else -1
                    for duty in (False, True)
                )
                if off >= 0 or on >= 0:
                    merged = _State(group if on >= 0 else -1, off, on)
                    before[state] = self._known[slot].setdefault(merged, len(self._known[slot]))
            numbers = before
        return numbers.get(next(iter(reached[0])), -1)

    def _next(self, unit: int, state: tuple[int, ...], slot: int, on: bool) -> tuple[int, ...] | None:
        if on and not self._cells.may[unit, slot] or not on and self._cells.must[unit, slot]:
            return None
        after = []
        for automaton, at in zip(self._automata, state, strict=True):
            following = automaton.step(unit, at, slot, on)
            if following is None:
                return None
            after.append(following)
        return tuple(after)

    def _most(self) -> list[list[int]]:
        """Largest number of units that can be in each state before each slot."""
        most = []
        reachable = [{int(s)} if s >= 0 else set() for s in self.start]
        for states in self.of_slot:
            counts = [0] * len(states)
            following = []
            for at in reachable:
                for state in at:
                    counts[state] += 1
                following.append({n for s in at for n in (states[s].off, states[s].on) if n >= 0})
            most.append(counts)
            reachable = following
        return most


class _Serving(Process):
    """Slot by slot, state by state. Own columns: how many units are in each state.

    During a slot: first the states whose turn is still to come, then the states of the next slot as they fill.
    """

    def __init__(self, kind: Roster, states: _States) -> None:
        self.kind, self.states, self.units = kind, states, kind.units
        levels: list[Level] = []
        self._slot_of: list[int] = []
        self._turns: list[list[int]] = []
        for slot, at in enumerate(states.of_slot):
            turns = [number for number, state in enumerate(at) if state.on >= 0]
            self._turns.append(turns)
            for turn in turns:
                most = states.most[slot][turn]
                levels.append(Level(tuple(Event(at[turn].group, slot, n) for n in range(most + 1))))
                self._slot_of.append(slot)
            if not turns:
                levels.append(Level((Event(0, slot, 0),)))
                self._slot_of.append(slot)
        if (states.start < 0).any():
            levels = [Level(()), *levels]
            self._slot_of.insert(0, 0)
        self.levels = tuple(levels)
        self._first = [self._slot_of.index(slot) for slot in range(states.slots)]
        counts = np.bincount(np.maximum(states.start, 0), minlength=len(states.of_slot[0]))
        self.start = tuple(counts.tolist())

    def step(self, level: int, event: Event, own: Columns) -> tuple[Columns, NDArray[np.int64], Mask | None]:
        """Let `count` of the state's units be on duty and the others off."""
        slot = self._slot_of[level]
        at, turns = self.states.of_slot[slot], self._turns[slot]
        if level == self._first[slot]:
            own = self._open(slot, own)
        if not turns:
            return own, np.zeros(own.shape[1], own.dtype), None
        state = at[turns[level - self._first[slot]]]
        pool, rest = own[0], own[1:].copy()
        waiting = len(turns) - (level - self._first[slot]) - 1
        rest[waiting + state.on] += event.count
        alive: Mask = pool >= event.count
        if state.off >= 0:
            rest[waiting + state.off] += pool - event.count
        else:
            alive = pool == event.count
        return rest, pool, alive

    def _open(self, slot: int, own: Columns) -> Columns:
        """Put the units that cannot be on duty into their next states at once."""
        at, turns = self.states.of_slot[slot], self._turns[slot]
        following = len(self.states.of_slot[slot + 1]) if slot + 1 < self.states.slots else 1
        next_counts = np.zeros((following, own.shape[1]), own.dtype)
        for number, state in enumerate(at):
            if state.on < 0:
                next_counts[state.off] += own[number]
        return np.concatenate([own[turns], next_counts])

    def lift(self, events: NDArray[np.int32], bits: Bits) -> Rows:
        """Return rosters; who of a state is on duty is uniform."""
        batch = len(events)
        rows = np.zeros((batch, self.kind.units, self.states.slots), bool)
        state_of = np.tile(self.states.start, (batch, 1))
        for slot, at in enumerate(self.states.of_slot):
            turns = self._turns[slot]
            on = np.zeros((batch, self.kind.units), bool)
            if turns:
                order = bits.shuffles(batch, self.kind.units)
                shuffled = np.take_along_axis(state_of, order, axis=1)
                duty = np.zeros((batch, self.kind.units), bool)
                for place, turn in enumerate(turns):
                    level = self._first[slot] + place
                    counts = events[:, level].astype(np.int64)
                    if counts.any():
                        inside = shuffled == turn
                        duty |= inside & (np.cumsum(inside, axis=1, dtype=np.int32) <= counts[:, None])
                np.put_along_axis(on, order, duty, axis=1)
            rows[:, :, slot] = on
            on_next = np.array([state.on for state in at])
            off_next = np.array([state.off for state in at])
            # proposals that have died may stand in impossible states; they are dropped by the caller
            state_of = np.maximum(np.where(on, on_next[state_of], off_next[state_of]), 0)
        return rows

    def trace(self) -> Trace:
        """Return an empty roster."""
        return _ServingTrace(self)

    def turn(self, level: int) -> tuple[int, int | None]:
        """Return the slot of a level and the state whose turn it is (None: nobody can be on duty)."""
        slot = self._slot_of[level]
        turns = self._turns[slot]
        return slot, turns[level - self._first[slot]] if turns else None

    def closes(self, level: int) -> bool:
        """Return whether the level is the last of its slot."""
        return level + 1 == len(self.levels) or self._slot_of[level + 1] != self._slot_of[level]


class _ServingTrace(Trace):
    def __init__(self, process: _Serving) -> None:
        self._process = process
        self._state = process.states.start.tolist()
        self._row = np.zeros((process.kind.units, process.states.slots), bool)

    def pool(self, level: int, event: Event) -> list[int]:
        _, turn = self._process.turn(level)
        return [unit for unit, state in enumerate(self._state) if state == turn]

    def take(self, level: int, event: Event, units: Sequence[int]) -> None:
        slot, _ = self._process.turn(level)
        self._row[list(units), slot] = True
        if self._process.closes(level):
            at = self._process.states.of_slot[slot]
            self._state = [
                at[state].on if self._row[unit, slot] else at[state].off for unit, state in enumerate(self._state)
            ]

    def find(self, level: int, row: Rows) -> tuple[int, list[int]]:
        slot, turn = self._process.turn(level)
        at = self._process.states.of_slot[slot]
        if any((at[state].on if row[unit, slot] else at[state].off) < 0 for unit, state in enumerate(self._state)):
            raise ValueError("this outcome cannot come from this process")
        units = [unit for unit, state in enumerate(self._state) if state == turn and row[unit, slot]]
        return len(units), units

    def row(self) -> Rows:
        return self._row
