"""Sets that can be counted and drawn from exactly, and that hold every admissible outcome."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from core.kinds import Arrangement, Cells, Members, OutcomeKind, join_labels
from core.parts import Part
from core.process import Process
from core.rules import Rule
from core.supersets.build import build
from core.supersets.diagram import Diagram, OverBudget
from core.supersets.refine import refine

ARRANGEMENTS = {
    "list": "in the order of the list",
    "near": "so that few rules are half-way at a time",
    "values": "value by value of the rule that counts most apart",
    "places, list": "place by place, in the order of the list",
    "list, places": "unit by unit, in the order of the list",
    "near, places": "unit by unit, so that few rules are half-way at a time",
}


def arrangements(kind: OutcomeKind) -> tuple[str, ...]:
    """Return the names of the orders of levels that make a difference for this kind."""
    if kind.name == "assignment":
        return ("near, places", "places, list", "list, places")
    return ("near", "values", "list") if kind.name in ("selection", "pairing") else ("list",)


# Beyond so many groups, or groups times places, not even the list of levels is made: no diagram over them would fit.
MOST_GROUPS = 20_000
MOST_CELLS = 4_000_000


def superset(
    kind: OutcomeKind,
    rules: Sequence[Rule],
    arrangement: str,
    *,
    partly: Sequence[tuple[Rule, int]] = (),
    budget: int,
    tick: Callable[[], None] = lambda: None,
) -> Diagram:
    """Return the diagram of all outcomes that meet these rules, and meet further ones as far as their width allows.

    Units that none of the rules tells apart form one group, and only how many of a group are picked is decided level by
    level. `partly` gives rules with the number of nodes per level that remember them (see `core.supersets.refine`); they
    must still be checked. Raises OverBudget if more than `budget` edges would have to be tried.
    """
    further = [rule for rule, _ in partly]
    process, members = _assemble(kind, rules, further, arrangement)
    parts = kind.parts(len(members)) + _parts(rules, members)
    diagram = build(process, parts, budget, tick)
    for rule, width in partly:
        if diagram.is_empty:
            break
        diagram = refine(diagram, _parts([rule], members), width, budget, tick)
    return diagram


def _assemble(
    kind: OutcomeKind, rules: Sequence[Rule], further: Sequence[Rule], arrangement: str
) -> tuple[Process, Members]:
    """Return the process over groups that tell apart what all the rules tell apart, and the groups."""
    may, must = kind.possible(), np.zeros(kind.cells(), bool)
    for rule in rules:
        cells = rule.cells()
        if cells is not None:
            may &= cells[0]
            must |= cells[1]
    cells_of_kind = Cells(may, must)
    labels = [label for rule in (*rules, *further) for label in rule.labels()]
    if kind.name != "roster":
        labels.append(kind.alike(cells_of_kind))
    members = _members(join_labels(labels, kind.units))
    if len(members) > MOST_GROUPS or len(members) * kind.cells()[1] > MOST_CELLS:
        raise OverBudget(0, len(members), 0)
    automata = [automaton for rule in rules if (automaton := rule.automaton()) is not None]
    plain = Arrangement(tuple(range(len(members))), by_place=arrangement.startswith("places"))
    process = kind.process(members, cells_of_kind, plain, automata)
    if not arrangement.startswith(("list", "places")):
        order = (
            _near(process, kind.parts(len(members)) + _parts([*rules, *further], members), len(members))
            if arrangement.startswith("near")
            else _value_by_value([_parts([rule], members) for rule in (*rules, *further)], process, len(members))
        )
        process = kind.process(members, cells_of_kind, Arrangement(order, by_place=False), automata)
    return process, members


def _parts(rules: Sequence[Rule], members: Members) -> list[Part]:
    return [part for rule in rules for part in rule.parts(members) or []]


def _members(labels: NDArray[np.int64]) -> list[NDArray[np.int64]]:
    order = np.argsort(labels, kind="stable")
    return np.split(order, np.cumsum(np.bincount(labels))[:-1])


def _touches(process: Process, parts: Sequence[Part], groups: int) -> NDArray[np.bool_]:
    """Return which parts concern which groups: bool, shape (parts, groups)."""
    touches = np.zeros((len(parts), groups), bool)
    for level in process.levels:
        for event in level.events:
            for row, part in enumerate(parts):
                if part.concerns(event):
                    touches[row, event.group] = True
                    if event.partner >= 0:
                        touches[row, event.partner] = True
    return touches


def _value_by_value(parts_of_rules: Sequence[Sequence[Part]], process: Process, groups: int) -> tuple[int, ...]:
    """Return the groups sorted by what the rule with most parts counts apart, then by the next rule, and so on.

    So the counts of that rule are needed one after the other, not all at a time.
    """
    keys = []
    for parts in sorted(parts_of_rules, key=len):
        if len(parts) > 1:
            touched = _touches(process, parts, groups)
            keys.append(np.where(touched.any(axis=0), touched.argmax(axis=0), len(parts)))
    order = np.lexsort(keys) if keys else np.arange(groups)
    return tuple(order.tolist())


def _near(process: Process, parts: Sequence[Part], groups: int) -> tuple[int, ...]:
    """Return an order of groups in which few parts are begun and unfinished at a time.

    Greedy: next comes the group after which the fewest parts are open; among equals the one that opens fewest, then the
    earliest in the list.
    """
    touches = _touches(process, parts, groups)
    # a part that concerns every group is open all the time, whatever the order
    touches = touches[~touches.all(axis=1)]
    left = touches.sum(axis=1)
    begun = np.zeros(len(touches), bool)
    remaining = np.ones(groups, bool)
    order = []
    for _ in range(groups):
        open_after = ((begun[:, None] | touches) & (left[:, None] - touches > 0)).sum(axis=0)
        opened = (~begun[:, None] & touches).sum(axis=0)
        score = np.where(remaining, open_after * (len(touches) + 1) + opened, np.iinfo(np.int64).max)
        group = int(score.argmin())
        order.append(group)
        remaining[group] = False
        begun |= touches[:, group]
        left = left - touches[:, group]
    return tuple(order)
