"""Parts of the state: what a count remembers is enough to decide, and states that it makes equal are equal.

A part is walked through all sequences of events. At each level the columns after `settle` must determine which of the
rests can still end well: if two beginnings with different futures get the same columns, the diagram would merge them. A
beginning that is dropped must have no good future, and at the end exactly the good ones are left.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Sequence

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from core.parts import Columns, Count, Event, Level, Mask, Part

Path = tuple[int, ...]


def walk(part: Part, levels: Sequence[Level]) -> list[dict[Path, tuple[int, ...] | None]]:
    """Return for each level the columns of every sequence of events up to it, None if it is dropped.

    The part is driven as the diagram drives it: `rules_out`, `step` for events that concern it, `settle` for all states of
    a touched level together; all sequences are kept apart, so that one may see which get equal columns.
    """
    part.prepare(levels)
    alive: dict[Path, tuple[int, ...]] = {(): tuple(part.start)}
    found = []
    for number, level in enumerate(levels):
        every: dict[Path, tuple[int, ...] | None] = {
            path + (index,): None for path in alive for index in range(len(level.events))
        }
        for index, event in enumerate(level.events):
            if number in part.touched and part.rules_out(event):
                continue
            for path, state in alive.items():
                columns = np.array(state, np.int64)[:, None]
                fine: Mask | None = None
                if part.concerns(event):
                    columns, fine = part.step(event, columns)
                if fine is None or fine[0]:
                    every[path + (index,)] = tuple(columns[:, 0].tolist())
        kept = [path for path, state in every.items() if state is not None]
        if number in part.touched and kept:
            columns = np.array([every[path] for path in kept], np.int64).T.reshape(-1, len(kept))
            columns, fine = part.settle(number, columns)
            for at, path in enumerate(kept):
                every[path] = tuple(columns[:, at].tolist()) if fine is None or fine[at] else None
        found.append(every)
        alive = {path: state for path, state in every.items() if state is not None}
    return found


def remembers_enough(part: Part, levels: Sequence[Level], good: Callable[[Sequence[Event]], bool]) -> None:
    """Raise AssertionError if the part's states do not decide as `good` does on whole sequences."""
    whole = {
        path: good([level.events[index] for level, index in zip(levels, path, strict=True)])
        for path in itertools.product(*(range(len(level.events)) for level in levels))
    }
    alive: set[Path] = {()}
    for number, states in enumerate(walk(part, levels), 1):
        futures = {
            path: frozenset(rest for rest in _rests(levels[number:]) if whole[path + rest])
            for path in states
            if path[:-1] in alive
        }
        alive = {path for path, state in states.items() if state is not None}
        for path, future in futures.items():
            assert path in alive or not future, f"{path} is dropped but could end well"
        of_state: dict[tuple[int, ...], frozenset[Path]] = {}
        for path in alive:
            state = states[path]
            assert state is not None
            if number == len(levels):
                assert futures[path], f"{path} is left at the end but breaks the bounds"
            assert of_state.setdefault(state, futures[path]) == futures[path], f"{path} is merged with another future"


def _rests(levels: Sequence[Level]) -> list[Path]:
    return list(itertools.product(*(range(len(level.events)) for level in levels)))


def takings(sizes: Sequence[int], places: int = 1) -> list[Level]:
    """Return levels that take 0 to `size` units of each group for each place."""
    return [
        Level(tuple(Event(group, place, count) for count in range(size + 1)))
        for group, size in enumerate(sizes)
        for place in range(places)
    ]


def within(weights: np.ndarray, low: int | None, high: int | None) -> Callable[[Sequence[Event]], bool]:
    def good(events: Sequence[Event]) -> bool:
        total = sum(int(weights[e.group, e.place]) * e.count for e in events)
        return (low is None or total >= low) and (high is None or total <= high)

    return good


BOUNDS = [(None, 2), (2, None), (1, 3), (0, 0), (3, 3), (None, None), (-2, 1), (None, -1), (50, None), (2, 1)]
WEIGHTS = [
    np.array([[1], [1], [1]]),
    np.array([[1], [0], [2]]),
    np.array([[3], [-2], [1]]),
    np.array([[0], [0], [1]]),
    np.array([[-1], [-1], [-2]]),
    np.array([[1, 0], [0, 1], [1, 1]]),
    np.array([[2, -1], [1, 1], [0, 0]]),
]


@pytest.mark.parametrize(("low", "high"), BOUNDS)
@pytest.mark.parametrize("weights", WEIGHTS, ids=lambda w: str(w.tolist()))
def test_count_keeps_what_matters(weights: np.ndarray, low: int | None, high: int | None) -> None:
    levels = takings([2, 1, 2], weights.shape[1]) if weights.shape[1] == 1 else takings([1, 2, 1], 2)
    remembers_enough(Count(weights.astype(np.int64), low, high), levels, within(weights, low, high))


@given(
    st.lists(st.tuples(st.integers(1, 3), st.integers(-4, 4)), min_size=1, max_size=4),
    st.none() | st.integers(-8, 8),
    st.none() | st.integers(-8, 8),
)
def test_count_keeps_what_matters_in_general(groups: list[tuple[int, int]], low: int | None, high: int | None) -> None:
    weights = np.array([[weight] for _, weight in groups], np.int64)
    remembers_enough(Count(weights, low, high), takings([size for size, _ in groups]), within(weights, low, high))


@pytest.mark.parametrize("sizes", [[1, 1], [2, 1], [1, 3, 1], [2, 2]])
def test_all_or_none(sizes: list[int]) -> None:
    """Of all groups but the last, all units or none; the last does not count."""
    levels = takings([*sizes, 2])
    weights = np.array([[1]] * len(sizes) + [[0]])
    number = sum(sizes)

    def good(events: Sequence[Event]) -> bool:
        return sum(event.count for event in events if event.group < len(sizes)) in (0, number)

    remembers_enough(Count(weights, None, None, either=number), levels, good)


def test_a_count_that_nothing_can_change_is_still_decided() -> None:
    """No event adds anything: the sum is 0, and a lower bound of 1 is missed."""
    levels = takings([0, 1])
    weights = np.array([[1], [0]])
    for low, high in ((1, None), (None, -1), (0, 0), (None, None)):
        remembers_enough(Count(weights, low, high), levels, within(weights, low, high))


def test_sums_beyond_the_bounds_of_machine_integers_do_not_occur() -> None:
    """18 digits (the largest amount) and bounds of 18 digits add up exactly."""
    weights = np.array([[10**18 - 1], [10**18 - 1], [-(10**18) + 1]])
    for low, high in ((10**18, None), (None, 10**18 - 1), (10**18 - 1, 10**18 - 1)):
        remembers_enough(Count(weights, low, high), takings([1, 1, 2]), within(weights, low, high))


def test_count_says_which_events_it_is_about() -> None:
    part = Count(np.array([[1, 0], [3, -1]]), None, 4)
    assert part.amount(Event(1, 0, 2)) == 6
    assert not part.concerns(Event(0, 1, 5))
    assert not part.concerns(Event(1, 0, 0))
    assert part.concerns(Event(1, 1, 1))
    assert not part.rules_out(Event(1, 0, 2)), "what is too much may be taken back by a negative weight"
    part = Count(np.array([[1, 0], [3, 1]]), None, 4)
    assert part.rules_out(Event(1, 0, 2))
    assert not part.rules_out(Event(1, 0, 1))


def test_first_and_last_level() -> None:
    """A part takes room in the state only between the levels that it is about."""
    part = Count(np.array([[0], [1], [0], [1], [0]]), 1, 1)
    part.prepare(takings([1] * 5))
    assert (part.first, part.last, part.touched, part.end) == (1, 3, {1, 3}, 4)


def test_states_that_cannot_miss_are_merged() -> None:
    """Without an upper bound, all sums from the lower bound on are one state."""
    part = Count(np.array([[1], [1]]), 2, None)
    (_, states) = walk(part, takings([3, 3]))
    assert len({state for state in states.values() if state is not None}) == 1


# --- saboteurs: a count that merges or drops too much ------------------------------------------------------------


class Forgets(Count):
    """Makes all states equal that are alive."""

    def settle(self, level: int, columns: Columns) -> tuple[Columns, Mask | None]:
        _, alive = super().settle(level, columns)
        return np.zeros_like(columns), alive


class Hasty(Count):
    """Drops what has not reached its lower bound yet."""

    def settle(self, level: int, columns: Columns) -> tuple[Columns, Mask | None]:
        columns, alive = super().settle(level, columns)
        return columns, alive if self._low is None or alive is None else alive & (columns[0] >= self._low)


class Lax(Count):
    """Never drops anything."""

    def settle(self, level: int, columns: Columns) -> tuple[Columns, Mask | None]:
        return columns, None


class Strict(Count):
    """Rules out events that reach the upper bound."""

    def rules_out(self, event: Event) -> bool:
        return self._high is not None and self.amount(event) >= self._high


@pytest.mark.parametrize(
    ("saboteur", "words"),
    [
        (Forgets, "merged with another future"),
        (Hasty, "dropped but could end well"),
        (Lax, "left at the end"),
        (Strict, "dropped but could end well"),
    ],
)
def test_a_saboteur_is_caught(saboteur: type[Count], words: str) -> None:
    weights = np.array([[1], [1], [1]])
    with pytest.raises(AssertionError, match=words):
        remembers_enough(saboteur(weights, 2, 3), takings([1, 3, 1]), within(weights, 2, 3))
