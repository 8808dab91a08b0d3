"""How an outcome is built, level by level: the state that a kind itself keeps, whatever the rules are.

Every decision is of one shape: *pick `count` units out of a pool*. A level's event says how many are picked and from
which group; the process tells how large the pool is at a state, so that the event stands for binomial(pool, count)
different choices of units. A sequence of events (a *path*) together with the choices is one outcome, and every
outcome comes from exactly one path and one choice at each of its levels: the pools are determined by what was picked
before. So the number of outcomes is the sum over paths of the product of the binomials, and a path drawn with
probability proportional to that product, followed by uniform choices, is a uniform outcome.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Sequence
from math import comb
from typing import Any

import numpy as np
from numpy.typing import NDArray

from core.parts import Columns, Event, Level, Mask
from core.stream import Bits

Rows = NDArray[Any]


class Trace(ABC):
    """One outcome while it is built (or read back) level by level, unit by unit; plain and slow."""

    @abstractmethod
    def pool(self, level: int, event: Event) -> list[int]:
        """Return the units that the event may pick from, in the order of the frame."""

    @abstractmethod
    def take(self, level: int, event: Event, units: Sequence[int]) -> None:
        """Let the event happen with these units."""

    @abstractmethod
    def row(self) -> Rows:
        """Return the finished outcome as one row of its kind."""

    @abstractmethod
    def find(self, level: int, row: Rows) -> tuple[int, list[int]]:
        """Return which event of the level made this outcome, and the units it picked."""


class Process(ABC):
    """The levels of a kind over given groups, and the kind's own columns of the state."""

    levels: tuple[Level, ...]
    start: tuple[int, ...] = ()
    units: int

    @property
    def count_type(self) -> type[np.int16] | type[np.int64]:
        """Type of own columns: they hold numbers of units, and states are copied often."""
        return np.int16 if self.units < 1 << 15 else np.int64

    @abstractmethod
    def step(self, level: int, event: Event, own: Columns) -> tuple[Columns, NDArray[np.int64], Mask | None]:
        """Return own columns after the event, the pool's size before it, and the states where it can happen."""

    @abstractmethod
    def lift(self, events: NDArray[np.int32], bits: Bits) -> Rows:
        """Return one uniform outcome for each path; `events` has shape (batch, levels)."""

    @abstractmethod
    def trace(self) -> Trace:
        """Return an empty outcome."""


def combination(size: int, count: int, index: int) -> list[int]:
    """Return the combination of `count` of 0..size-1 with this index in lexicographic order (exact)."""
    chosen = []
    item = 0
    for left in range(count, 0, -1):
        while (block := comb(size - item - 1, left - 1)) <= index:
            index -= block
            item += 1
        chosen.append(item)
        item += 1
    return chosen


def combination_index(size: int, chosen: Sequence[int]) -> int:
    """Return the index of a combination in lexicographic order; the inverse of `combination`."""
    index, item = 0, 0
    for place, value in enumerate(chosen):
        left = len(chosen) - place
        index += sum(comb(size - i - 1, left - 1) for i in range(item, value))
        item = value + 1
    return index


def lift_one(process: Process, path: Sequence[int], choices: Sequence[int]) -> Rows:
    """Return the outcome of a path, given the index of the choice made at each level; exact, one by one."""
    trace = process.trace()
    for level, (event_index, choice) in enumerate(zip(path, choices, strict=True)):
        event = process.levels[level].events[event_index]
        pool = trace.pool(level, event)
        trace.take(level, event, [pool[i] for i in combination(len(pool), event.count, choice)])
    return trace.row()


def retrace(process: Process, row: Rows) -> tuple[list[int], list[int]]:
    """Return the path of an outcome and the index of the choice at each level; the inverse of `lift_one`."""
    trace = process.trace()
    path, choices = [], []
    for level in range(len(process.levels)):
        event_index, units = trace.find(level, row)
        event = process.levels[level].events[event_index]
        pool = trace.pool(level, event)
        choices.append(combination_index(len(pool), [pool.index(u) for u in units]))
        trace.take(level, event, units)
        path.append(event_index)
    return path, choices


class Taking(Process):
    """Groups whose units are taken, level by level, until (if `exhaust`) none is left.

    A group's column "how many are left" exists only between its first and its last level.

    Parameters
    ----------
    levels
        Events pick from the pool of their group.
    members
        Units of each group, in the order of the frame.
    exhaust
        Whether every unit must have been taken by the group's last level.
    """

    def __init__(self, levels: Sequence[Level], members: Sequence[NDArray[np.int64]], *, exhaust: bool) -> None:
        self.levels = tuple(levels)
        self.members = tuple(members)
        self.units = sum(len(m) for m in members)
        self._sizes = np.array([len(m) for m in members], self.count_type)
        self._exhaust = exhaust
        first: dict[int, int] = {}
        last: dict[int, int] = {}
        for i, level in enumerate(self.levels):
            for event in level.events:
                first.setdefault(event.group, i)
                last[event.group] = i
        self._opening: list[list[int]] = [[] for _ in self.levels]
        self._closing: list[list[int]] = [[] for _ in self.levels]
        for group in sorted(first):
            self._opening[first[group]].append(group)
            self._closing[last[group]].append(group)
        open_groups: list[int] = []
        self._rows: list[dict[int, int]] = []
        self._kept: list[NDArray[np.int64]] = []
        for i in range(len(self.levels)):
            open_groups = open_groups + self._opening[i]
            self._rows.append({group: row for row, group in enumerate(open_groups)})
            self._kept.append(np.array([r for r, g in enumerate(open_groups) if last[g] != i], np.int64))
            open_groups = [g for g in open_groups if last[g] != i]

    def step(self, level: int, event: Event, own: Columns) -> tuple[Columns, NDArray[np.int64], Mask | None]:
        """Take `count` of the group; the pool is what is left of it."""
        opening = self._opening[level]
        if opening:
            fresh = np.broadcast_to(self._sizes[opening][:, None], (len(opening), own.shape[1]))
            own = np.concatenate([own, fresh])
        row = self._rows[level][event.group]
        pool = own[row]
        after = own.copy()
        after[row] -= event.count
        alive: Mask = after[row] >= 0
        if self._exhaust:
            for group in self._closing[level]:
                alive &= after[self._rows[level][group]] == 0
        return after[self._kept[level]], pool, alive

    def lift(self, events: NDArray[np.int32], bits: Bits) -> Rows:
        """Left to the kind."""
        raise TypeError("a kind lifts its own outcomes")

    def counts(self, events: NDArray[np.int32], level: int) -> NDArray[np.int64]:
        """Return how many units are picked at a level, shape (batch,)."""
        table = np.array([event.count for event in self.levels[level].events], np.int64)
        return table[events[:, level]]


class TakingTrace(Trace):
    """The trace of a `Taking` process; the kind says where the picked units go."""

    def __init__(self, process: Taking) -> None:
        self.process = process
        self.left = [list(map(int, m)) for m in process.members]

    def pool(self, level: int, event: Event) -> list[int]:
        """Return what is left of the group."""
        return list(self.left[event.group])

    def take(self, level: int, event: Event, units: Sequence[int]) -> None:
        """Remove the units from their group."""
        self.left[event.group] = [u for u in self.left[event.group] if u not in units]
        self.put(event, units)

    @abstractmethod
    def put(self, event: Event, units: Sequence[int]) -> None:
        """Note where the units went."""

    def find(self, level: int, row: Rows) -> tuple[int, list[int]]:
        """Return the event whose place holds as many of its group as it counts."""
        for index, event in enumerate(self.process.levels[level].events):
            units = [u for u in self.left[event.group] if self.stands(row, u, event.place)]
            if len(units) == event.count:
                return index, units
        raise ValueError("this outcome cannot come from this process")

    @abstractmethod
    def stands(self, row: Rows, unit: int, place: int) -> bool:
        """Return whether the unit is at the place in the outcome."""
