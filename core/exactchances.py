"""Exact chances, from the counts of a diagram into which every rule is built.

For an edge e of the diagram

    ways(e) = (ways to reach its node) x options(e) x (ways to complete from its child)

is the number of outcomes that go through e, an exact integer; so the sum over the edges of an event, divided by the
size, is the exact chance of the event, and the expected number of units of a group at a place is the sum of count x
chance.

*Units of a group share it evenly.* A group holds units that no built-in rule tells apart (equal labels, equal cells; in
a roster: units that start in one state, which holds all that the rules let a unit do). Exchanging two of them turns
every outcome that meets the built-in rules into one that meets them too, and doing it twice changes nothing: the
exchange maps the outcomes one to one onto themselves. All outcomes have the same chance, so whatever holds for one
unit of the group, or for one pair of units of given groups, has the same chance for any other. A unit of a group of n
therefore has 1 / n of the expected number, a pair of two groups 1 / (n m) of the expected number of pairs, and a pair
within a group 1 / (n (n - 1)) of the expected number of ordered pairs. For pairs, the forward pass is made again from
each level of the first group, weighted with the count there. In a roster states of different units merge, so that a
unit has to be followed: see `_followed`.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any, Protocol, cast

import numpy as np
from numpy.typing import NDArray

from core.kinds import OutcomeKind
from core.kinds.pairing import Pairing
from core.kinds.selection import Selection
from core.supersets.diagram import Diagram

# Multiplications of exact integers that passes beyond the first two may take (some seconds).
MOST_STEPS = 100_000_000

Exact = NDArray[np.object_]
Tick = Callable[[], None]


class _Flow:
    """Exact sums over the edges of a diagram; all numbers are Python integers in object arrays."""

    def __init__(self, diagram: Diagram, tick: Tick) -> None:
        self.size = diagram.size
        self.events = [level.events for level in diagram.process.levels]
        self.edges = [len(diagram.links(level)[0]) for level in range(diagram.levels)]
        self._diagram, self._tick = diagram, tick
        self._below = diagram.completions
        self._options = [diagram.options(level) for level in range(diagram.levels)]
        self._by_child = [_runs(diagram.links(level)[1]) for level in range(diagram.levels)]
        self._reached: list[Exact] = [np.array([1], object)]
        for level in range(diagram.levels):
            self._reached.append(self.pour(level, self._reached[-1]))

    def pour(self, level: int, at: Exact, options: Exact | None = None) -> Exact:
        """Carry amounts from the nodes of the level to those of the next, times the options of each edge."""
        self._tick()
        order, starts = self._by_child[level]
        amounts = at[self._diagram.links(level)[0]] * (self._options[level] if options is None else options)
        poured: Exact = np.add.reduceat(amounts[order], starts)
        return poured

    def pour_weighted(self, level: int, weights: Sequence[int]) -> Exact:
        """Carry on the ways to reach the level's nodes, times a weight for each event."""
        return self.pour(level, self._reached[level], self._options[level] * self._of_edge(level, weights))

    def ahead(self, level: int, weights: Sequence[int]) -> Exact:
        """Return for each node of the level the sum over its edges of weight x options x completions."""
        source, child, _, _ = self._diagram.links(level)
        through = self._options[level] * self._of_edge(level, weights) * self._below[level + 1][child]
        _, starts = _runs(source)
        total: Exact = np.add.reduceat(through, starts)
        return total

    def outcomes(self, level: int, at: Exact, options: Exact) -> int:
        """Return the sum over the edges of amount x options x completions."""
        source, child, _, _ = self._diagram.links(level)
        return int((at[source] * options * self._below[level + 1][child]).sum())

    def ways(self, level: int, at: Exact | None = None) -> list[int]:
        """Return how many outcomes go through each event of the level (`at`: amounts instead of ways to reach)."""
        source, child, event, _ = self._diagram.links(level)
        at = self._reached[level] if at is None else at
        through = at[source] * self._options[level] * self._below[level + 1][child]
        order, starts = _runs(event)
        ways = [0] * len(self.events[level])
        for index, amount in zip(event[order][starts].tolist(), np.add.reduceat(through[order], starts), strict=True):
            ways[index] = int(amount)
        return ways

    def split(self, level: int) -> tuple[Exact, Exact]:
        """Return for each edge the options with and without a given unit of its pool: count / pool of all, and the rest."""
        pool = self._diagram.links(level)[3]
        options = self._options[level]
        counts = self._of_edge(level, [event.count for event in self.events[level]])
        chosen: Exact = options * counts // np.maximum(pool, 1)
        return chosen, options - chosen

    def _of_edge(self, level: int, weights: Sequence[int]) -> Exact:
        of_edge: Exact = np.array(weights, object)[self._diagram.links(level)[2]]
        return of_edge


def _runs(keys: NDArray[Any]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Return an order in which equal keys stand together, and where each run of equals starts in it."""
    order = np.argsort(keys, kind="stable")
    ordered = keys[order]
    return order, np.flatnonzero(np.concatenate([[True], ordered[1:] != ordered[:-1]]))


@dataclass(frozen=True)
class Known:
    """Exact chances by class: units of one class have the same chances.

    Attributes
    ----------
    of
        The class of each unit.
    units
        Chance of a unit of each class: drawn, paired, placed (1); in a roster its expected number of duties.
    cells
        By class and place; empty lists in a pairing.
    pairs
        By class and class, symmetric; on the diagonal that of two different units of the class. None if not counted.

    Guarantee: exact.
    """

    of: NDArray[np.int64]
    units: list[Fraction]
    cells: list[list[Fraction]]
    pairs: list[list[Fraction]] | None


class _Grouped(Protocol):
    members: Sequence[NDArray[np.int64]]


def known_chances(kind: OutcomeKind, diagram: Diagram, *, pairs: bool, tick: Tick) -> Known | None:
    """Return the exact chances of the outcomes of a diagram that is not empty.

    None, or `Known.pairs` = None, where more than MOST_STEPS steps would be needed; pairs of a roster are never counted.

    Guarantee: exact; sums that must hold whatever the rules are have been checked (ArithmeticError if one does not).
    """
    flow = _Flow(diagram, tick)
    if kind.name == "roster":
        return _roster(flow, cast(_Serving, diagram.process))
    members = cast(_Grouped, diagram.process).members
    of = np.zeros(kind.units, np.int64)
    for group, units in enumerate(members):
        of[units] = group
    sizes = [len(units) for units in members]
    known = _pairing(flow, of, sizes) if kind.name == "pairing" else _placing(kind, flow, of, sizes, pairs=pairs)
    _certify(kind, known)
    return known


def _placing(kind: OutcomeKind, flow: _Flow, of: NDArray[np.int64], sizes: Sequence[int], *, pairs: bool) -> Known:
    """Return the chances of being at each place; drawn is a place too."""
    picks = [[0] * len(kind.places.ids) for _ in sizes]
    for level, events in enumerate(flow.events):
        for event, ways in zip(events, flow.ways(level), strict=True):
            picks[event.group][event.place] += ways * event.count
    cells = [[Fraction(n, flow.size * size) for n in row] for row, size in zip(picks, sizes, strict=True)]
    met: list[list[int]] | None = None
    if pairs:
        met = _adjacent(flow, len(sizes)) if kind.name == "order" else _together(flow, len(sizes))
    shared = None if met is None else _shared(met, sizes, flow.size)
    return Known(of, [sum(row, Fraction(0)) for row in cells], cells, shared)


def _shared(counted: list[list[int]], sizes: Sequence[int], size: int) -> list[list[Fraction]]:
    """Return the chance of one pair, given the numbers of ordered pairs of groups over all outcomes."""
    pairs = [[Fraction(0)] * len(sizes) for _ in sizes]
    for g, row in enumerate(counted):
        for h, ways in enumerate(row):
            if g != h:
                pairs[g][h] = Fraction(ways, size * sizes[g] * sizes[h])
            elif sizes[g] > 1:
                pairs[g][g] = Fraction(ways, size * sizes[g] * (sizes[g] - 1))
    return pairs


def _together(flow: _Flow, groups: int) -> list[list[int]] | None:
    """Return numbers of ordered pairs at the same place: the sum over all outcomes of count x count of two groups."""
    levels = [level for level, events in enumerate(flow.events) if events]
    place = {level: flow.events[level][0].place for level in levels}
    last = {place[level]: level for level in levels}
    steps = sum(sum(flow.edges[level + 1 : last[place[level]] + 1]) for level in levels)
    if steps > MOST_STEPS:
        return None
    counts = {level: [event.count for event in flow.events[level]] for level in levels}
    ahead = {level: flow.ahead(level, counts[level]) for level in levels}
    found = [[0] * groups for _ in range(groups)]
    for level in levels:
        one = flow.events[level][0].group
        found[one][one] += sum(n * c * (c - 1) for n, c in zip(flow.ways(level), counts[level], strict=True))
        at = flow.pour_weighted(level, counts[level])
        for later in range(level + 1, last[place[level]] + 1):
            if place[later] == place[level]:
                other = flow.events[later][0].group
                number = int((at * ahead[later]).sum())
                found[one][other] += number
                found[other][one] += number
            at = flow.pour(later, at)
    return found


def _adjacent(flow: _Flow, groups: int) -> list[list[int]] | None:
    """Return numbers of ordered pairs that stand next to each other, over all outcomes."""
    levels = range(len(flow.events) - 1)
    if sum(len(flow.events[level]) * (flow.edges[level] + flow.edges[level + 1]) for level in levels) > MOST_STEPS:
        return None
    found = [[0] * groups for _ in range(groups)]
    for level in levels:
        for index, event in enumerate(flow.events[level]):
            at = flow.pour_weighted(level, [int(i == index) for i in range(len(flow.events[level]))])
            for following, number in zip(flow.events[level + 1], flow.ways(level + 1, at), strict=True):
                found[event.group][following.group] += number
                found[following.group][event.group] += number
    return found


def _pairing(flow: _Flow, of: NDArray[np.int64], sizes: Sequence[int]) -> Known:
    """Return the chances of pairs and of having a partner."""
    found = [[0] * len(sizes) for _ in sizes]
    single = [0] * len(sizes)
    for level, events in enumerate(flow.events):
        for event, ways in zip(events, flow.ways(level), strict=True):
            if event.partner >= 0:
                found[event.group][event.partner] += ways
                found[event.partner][event.group] += ways
            elif event.count:
                single[event.group] += ways
    units = [1 - Fraction(ways, flow.size * size) for ways, size in zip(single, sizes, strict=True)]
    return Known(of, units, [[] for _ in sizes], _shared(found, sizes, flow.size))


class _UnitState(Protocol):
    """What a unit of a roster may still do: numbers of its next states, or -1."""

    @property
    def off(self) -> int: ...
    @property
    def on(self) -> int: ...


class _UnitStates(Protocol):
    start: NDArray[np.int64]

    @property
    def of_slot(self) -> Sequence[Sequence[_UnitState]]: ...


class _Serving(Protocol):
    """A roster's process: `turn` is the slot of a level and the state whose units are picked from there."""

    @property
    def states(self) -> _UnitStates: ...
    def turn(self, level: int) -> tuple[int, int | None]: ...
    def closes(self, level: int) -> bool: ...


def _roster(flow: _Flow, serving: _Serving) -> Known | None:
    """Return the chances of being on duty, slot by slot; None if units would have to be followed for too long.

    A class is the units of one start state. While no other unit can come into the states that the class can be in, all
    duties done from these states are its own; only classes that merge with others are followed.
    """
    starts, of = np.unique(serving.states.start, return_inverse=True)
    sizes = np.bincount(of).tolist()
    reach = [_reach(serving.states.of_slot, start) for start in starts.tolist()]
    duties: list[dict[int, int]] = [{} for _ in serving.states.of_slot]
    edges = [0] * len(duties)
    for level, events in enumerate(flow.events):
        slot, turn = serving.turn(level)
        edges[slot] += flow.edges[level]
        if turn is not None:
            duties[slot][turn] = sum(e.count * n for e, n in zip(events, flow.ways(level), strict=True))
    owners = [{s: sum(s in r[slot] for r in reach) for s in turns} for slot, turns in enumerate(duties)]
    merging = [any(n.get(s, 0) > 1 for n, at in zip(owners, r, strict=False) for s in at) for r in reach]
    steps = sum(
        edges[slot] * (len(r[slot]) + len(r[slot + 1]))
        for r, merges in zip(reach, merging, strict=True)
        for slot in range(len(edges))
        if merges
    )
    if steps > MOST_STEPS:
        return None
    cells = []
    for start, size, at, merges in zip(starts.tolist(), sizes, reach, merging, strict=True):
        if merges:
            cells.append([Fraction(n, flow.size) for n in _followed(flow, serving, start)])
        else:
            own = [sum(n for s, n in turns.items() if s in at[slot]) for slot, turns in enumerate(duties)]
            cells.append([Fraction(n, flow.size * size) for n in own])
    for slot, turns in enumerate(duties):
        total = sum(size * row[slot] for size, row in zip(sizes, cells, strict=True))
        if total != Fraction(sum(turns.values()), flow.size):
            raise ArithmeticError("the chances of a slot do not sum to its expected number of duties")
    return Known(of, [sum(row, Fraction(0)) for row in cells], cells, None)


def _reach(of_slot: Sequence[Sequence[_UnitState]], start: int) -> list[set[int]]:
    """Return the states that a unit can be in before each slot, and after the last."""
    reach = [{start}]
    for at in of_slot:
        reach.append({after for s in reach[-1] for after in (at[s].off, at[s].on) if after >= 0})
    return reach


def _followed(flow: _Flow, serving: _Serving, start: int) -> list[int]:
    """Return in how many outcomes one given unit of a start state is on duty, slot by slot.

    The ways to reach each node are kept apart by the state of this unit. Where count of the pool of its state are put
    on duty, it is among them in binomial(pool - 1, count - 1) of the binomial(pool, count) choices; other decisions
    do not touch it. `waiting` holds states whose turn in the slot is still to come, `decided` those of the next slot.
    """
    found = [0] * len(serving.states.of_slot)
    waiting: dict[int, Exact] = {}
    decided: dict[int, Exact] = {start: np.array([1], object)}

    def enter(state: int, amounts: Exact) -> None:
        decided[state] = decided[state] + amounts if state in decided else amounts

    for level in range(len(flow.events)):
        slot, turn = serving.turn(level)
        at = serving.states.of_slot[slot]
        if level == 0 or serving.closes(level - 1):
            opened, decided = decided, {}
            waiting = {state: amounts for state, amounts in opened.items() if at[state].on >= 0}
            for state in opened.keys() - waiting.keys():
                enter(at[state].off, opened[state])
        own = waiting.pop(turn, None) if turn is not None else None
        waiting = {state: flow.pour(level, amounts) for state, amounts in waiting.items()}
        decided = {state: flow.pour(level, amounts) for state, amounts in decided.items()}
        if own is not None and turn is not None:
            chosen, spared = flow.split(level)
            found[slot] += flow.outcomes(level, own, chosen)
            enter(at[turn].on, flow.pour(level, own, chosen))
            if at[turn].off >= 0:
                enter(at[turn].off, flow.pour(level, own, spared))
    return found


def _certify(kind: OutcomeKind, known: Known) -> None:
    """Raise ArithmeticError if a sum that must hold whatever the rules are does not."""
    sizes = np.bincount(known.of).tolist()
    if isinstance(kind, Selection):
        total = sum(size * chance for size, chance in zip(sizes, known.units, strict=True))
        good = kind.least <= total <= kind.most
    elif isinstance(kind, Pairing):
        assert known.pairs is not None
        good = all(
            chance == sum((size - (g == h)) * row[h] for h, size in enumerate(sizes))
            for g, (chance, row) in enumerate(zip(known.units, known.pairs, strict=True))
        )
    else:
        good = all(chance == 1 for chance in known.units)
    if not good:
        raise ArithmeticError("exact chances do not sum to what every outcome has")
