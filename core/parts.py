"""What a built-in rule remembers while an outcome is built, decision by decision.

An outcome is built by a sequence of *levels*. At each level one of the level's *events* happens: `count` units of one
group (units that no built-in rule tells apart) go to one place. A *part* is a small automaton over these events: some
integer columns, a step for each event, and a verdict. All states of a level are stepped at once: columns are arrays of
shape (width, nodes).
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Columns = NDArray[Any]
Mask = NDArray[np.bool_]


@dataclass(frozen=True)
class Event:
    """One possible decision: `count` units of group `group` go to place `place`.

    `place` is the index of the place, slot or position (0 for a selection). In a pairing the next unit of group
    `group` is paired with a unit of group `partner` (or stays single: `partner` = -1, `count` = 1).
    """

    group: int
    place: int
    count: int
    partner: int = -1


@dataclass(frozen=True)
class Level:
    """One decision: exactly one of the events happens."""

    events: tuple[Event, ...]


class Part(ABC):
    """The automaton of a rule, or of a piece of one.

    `start` holds the columns' values before the first level. A part is handed the levels once (`prepare`), and is
    then kept from its `first` to its `last` level only: outside, it takes no column of the state.
    """

    start: tuple[int, ...] = (0,)

    def prepare(self, levels: Sequence[Level]) -> None:
        """Find the levels at which this part has something to say."""
        touched = [i for i, level in enumerate(levels) if any(self.concerns(e) for e in level.events)]
        # a part that nothing concerns still has its verdict to give: at the first level
        touched = touched or [0]
        self.first, self.last = touched[0], touched[-1]
        self.touched = set(touched)
        self.end = len(levels) - 1

    @abstractmethod
    def concerns(self, event: Event) -> bool:
        """Return whether the event can change the columns or the verdict."""

    def rules_out(self, event: Event) -> bool:
        """Return whether the event can happen in no state at all."""
        return False

    @abstractmethod
    def step(self, event: Event, columns: Columns) -> tuple[Columns, Mask | None]:
        """Return the columns after the event, and which states are still alive (None: all)."""

    def settle(self, level: int, columns: Columns) -> tuple[Columns, Mask | None]:
        """Return the columns after the level with values that can no longer matter made equal, and the alive states.

        Called after every touched level, with the states of all events together; after the part's last level the
        verdict must be complete.
        """
        return columns, None


class Count(Part):
    """A weighted count with bounds: sum of weight[group, place] x count must lie in [low, high].

    Parameters
    ----------
    weights
        Integers, shape (groups, places).
    low, high
        Inclusive bounds; None = no bound.
    either
        If given, the final sum must be 0 or this number (all or none), instead of bounds.
    """

    def __init__(
        self, weights: NDArray[np.int64], low: int | None, high: int | None, *, either: int | None = None
    ) -> None:
        self._weights = weights.tolist()
        self._low, self._high, self._either = low, high, either
        self._only_adds = bool((weights >= 0).all())

    def concerns(self, event: Event) -> bool:
        """Return whether the event adds anything."""
        return self.amount(event) != 0

    def amount(self, event: Event) -> int:
        """Return what the event adds."""
        amount: int = self._weights[event.group][event.place] * event.count
        return amount

    def rules_out(self, event: Event) -> bool:
        """Return whether the event alone goes beyond the upper bound (where nothing can be subtracted later)."""
        most = self._high if self._either is None else self._either
        if most is None or not self._only_adds:
            return False
        return self.amount(event) > most

    def prepare(self, levels: Sequence[Level]) -> None:
        """Also bound what is still to come after each level."""
        super().prepare(levels)
        self._rest_low = [0] * (len(levels) + 1)
        self._rest_high = [0] * (len(levels) + 1)
        for i in range(len(levels) - 1, -1, -1):
            amounts = [self.amount(event) for event in levels[i].events]
            self._rest_low[i] = self._rest_low[i + 1] + min(amounts, default=0)
            self._rest_high[i] = self._rest_high[i + 1] + max(amounts, default=0)

    def step(self, event: Event, columns: Columns) -> tuple[Columns, Mask | None]:
        """Add the event's amount."""
        return columns + self.amount(event), None

    def settle(self, level: int, columns: Columns) -> tuple[Columns, Mask | None]:
        """Drop states that cannot end within the bounds; make equal those that cannot end outside."""
        value = columns[0]
        rest_low, rest_high = self._rest_low[level + 1], self._rest_high[level + 1]
        if self._either is not None:
            alive = (value == 0) | (value >= _clipped(self._either - rest_high))
            return columns, alive
        alive = np.ones(value.shape, bool)
        safe = np.ones(value.shape, bool)
        if self._low is not None:
            alive &= value >= _clipped(self._low - rest_high)
            safe &= value >= _clipped(self._low - rest_low)
        if self._high is not None:
            alive &= value <= _clipped(self._high - rest_low)
            safe &= value <= _clipped(self._high - rest_high)
        if safe.any():
            floor = int(value[safe].min())
            columns = np.where(safe, floor, value)[None, :]
        return columns, alive


def _clipped(bound: int) -> int:
    """Return a bound within int64; values stay below 2^62 (numbers in lists are limited so that their sums do)."""
    return max(-(1 << 62), min(1 << 62, bound))


class UnitAutomaton(ABC):
    """What one unit of a roster may do from slot to slot, whatever the others do.

    Units with equal `labels` behave alike.
    """

    labels: NDArray[np.int64]

    @abstractmethod
    def start(self, unit: int) -> int:
        """Return the state before the first slot."""

    @abstractmethod
    def step(self, unit: int, state: int, slot: int, on: bool) -> int | None:
        """Return the state after the slot, on duty or not; None if that breaks the rule."""

    @abstractmethod
    def accepts(self, unit: int, state: int) -> bool:
        """Return whether the unit may end in this state."""
