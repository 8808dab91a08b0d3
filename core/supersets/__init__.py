"""Sets that can be counted and drawn from exactly, and that hold every admissible outcome."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from core.kinds import Arrangement, Cells, OutcomeKind, join_labels
from core.parts import Part
from core.process import Process
from core.rules import Rule
from core.supersets.build import build
from core.supersets.diagram import Diagram

ARRANGEMENTS = {
    "list": "in the order of the list",
    "near": "so that few rules are half-way at a time",
    "places, list": "place by place, in the order of the list",
    "list, places": "unit by unit, in the order of the list",
    "near, places": "unit by unit, so that few rules are half-way at a time",
}


def arrangements(kind: OutcomeKind) -> tuple[str, ...]:
    """Return the names of the orders of levels that make a difference for this kind."""
    if kind.name == "assignment":
        return ("near, places", "places, list", "list, places")
    return ("near", "list") if kind.name in ("selection", "pairing") else ("list",)


def superset(
    kind: OutcomeKind,
    rules: Sequence[Rule],
    arrangement: str,
    *,
    budget: int,
    tick: Callable[[], None] = lambda: None,
) -> Diagram:
    """Return the diagram of all outcomes that meet these rules.

    Units that none of the rules tells apart form one group, and only how many of a group are picked is decided level by
    level. Raises OverBudget if more than `budget` edges would have to be tried.
    """
    process, parts = _assemble(kind, rules, arrangement)
    return build(process, parts, budget, tick)


def _assemble(kind: OutcomeKind, rules: Sequence[Rule], arrangement: str) -> tuple[Process, list[Part]]:
    shape = kind.cells()
    may, must = kind.possible(), np.zeros(shape, bool)
    for rule in rules:
        cells = rule.cells()
        if cells is not None:
            may &= cells[0]
            must |= cells[1]
    cells_of_kind = Cells(may, must)
    labels = [label for rule in rules for label in rule.labels()]
    if kind.name != "roster":
        labels.append(kind.alike(cells_of_kind))
    members = _members(join_labels(labels, kind.units))
    automata = [automaton for rule in rules if (automaton := rule.automaton()) is not None]
    plain = Arrangement(tuple(range(len(members))), by_place=arrangement.startswith("places"))

    def parts() -> list[Part]:
        return kind.parts(len(members)) + [part for rule in rules for part in rule.parts(members) or []]

    process = kind.process(members, cells_of_kind, plain, automata)
    if arrangement.startswith("near"):
        order = _near(process, parts(), len(members))
        process = kind.process(members, cells_of_kind, Arrangement(order, by_place=False), automata)
    return process, parts()


def _members(labels: NDArray[np.int64]) -> list[NDArray[np.int64]]:
    order = np.argsort(labels, kind="stable")
    return np.split(order, np.cumsum(np.bincount(labels))[:-1])


def _near(process: Process, parts: Sequence[Part], groups: int) -> tuple[int, ...]:
    """Return an order of groups in which few parts are begun and unfinished at a time.

    Greedy: next comes the group after which the fewest parts are open; among equals the one that opens fewest, then the
    earliest in the list.
    """
    touches = np.zeros((len(parts), groups), bool)
    for level in process.levels:
        for event in level.events:
            for row, part in enumerate(parts):
                if part.concerns(event):
                    touches[row, event.group] = True
                    if event.partner >= 0:
                        touches[row, event.partner] = True
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
