"""Refinement: building a further rule into a diagram, for the nodes that matter.

The refined diagram's nodes are pairs (node of the given diagram, what the parts remember), or (node, forgotten). A
forgotten node lets everything pass that the given diagram lets pass: the parts no longer look. At each level the
`width` heaviest nodes are kept, by (paths from the start) x (completions in the given diagram); the others are forgotten,
and merged where they stand on the same node.

**Each outcome still comes from exactly one path.** The events of an outcome determine its path in the given diagram (see
`core.process`); what the parts remember is a function of the events and of which nodes are forgotten, hence so is the path
in the refined one. The pools are those of the given diagram, so path and choices stay one to one with outcomes. And no
admissible outcome is lost: a node that remembers drops only what breaks the rule, a forgotten one drops nothing. So
the refined set lies between the outcomes that meet the rule and the given set; `width` 1 is (nearly) the given set, an
unlimited width is the rule built in. What passed through forgotten nodes must be checked.

(Compilation by refinement under a width limit: Andersen, Hadzic, Hooker and Tiedemann 2007; from memory.)
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from core.parts import Columns, Event, Mask, Part
from core.supersets.build import join_layer, number_equal, weigh
from core.supersets.diagram import Diagram, Layer, OverBudget, float_options

FORGOTTEN = 1


def refine(
    diagram: Diagram,
    parts: Sequence[Part],
    width: int,
    budget: int,
    tick: Callable[[], None] = lambda: None,
) -> Diagram:
    """Return the diagram with the parts built in, as far as `width` nodes that remember per level allow.

    Raises OverBudget if more than `budget` edges would have to be tried.
    """
    levels = diagram.process.levels
    for part in parts:
        part.prepare(levels)
    state = _Refined(diagram, parts, width)
    raw: list[Layer] = []
    for level in range(diagram.levels):
        raw.append(state.expand(level))
        if state.tried > budget:
            raise OverBudget(level, len(levels), state.events)
        tick()
    tried, events = diagram.tried + state.tried, diagram.events + state.events
    forgotten = state.forgotten or diagram.forgetful
    return weigh(diagram.process, raw, state.size, tick, tried=tried, events=events, forgetful=forgotten)


class _Refined:
    """The states of the current level: a node of the given diagram, and each part's columns.

    The first row of a part's columns says whether it is forgotten; then the others are 0.
    """

    def __init__(self, diagram: Diagram, parts: Sequence[Part], width: int) -> None:
        self._diagram, self._parts, self._width = diagram, parts, width
        self._base = np.zeros(1, np.int64)
        self._mass = np.ones(1)
        self._columns: dict[int, Columns] = {}
        self.size = 1
        self.tried = self.events = 0
        self.forgotten = False

    def expand(self, level: int) -> Layer:
        """Follow every edge of the given diagram; merge equal states; forget the light ones."""
        for i, part in enumerate(self._parts):
            if part.first == level:
                start = np.array([0, *part.start], np.int64)[:, None]
                self._columns[i] = np.repeat(start, self.size, axis=1)
        base = self._diagram.layer(level)
        counts = np.diff(base.starts)[self._base]
        source = np.repeat(np.arange(self.size), counts)
        offset = np.arange(len(source)) - np.repeat(np.cumsum(counts) - counts, counts)
        edge = base.starts[self._base][source] + offset
        self.tried += len(edge) * (8 + sum(len(c) for c in self._columns.values())) // 8
        columns, alive = self._step(level, base.event[edge], source)
        source, edge = source[alive], edge[alive]
        columns = {i: c[:, alive] for i, c in columns.items()}
        child = base.child[edge].astype(np.int64)
        mass = self._mass[source] * self._share(base, level)[edge]
        return self._merge(level, base, source, edge, child, columns, mass)

    def _step(self, level: int, event: NDArray[np.int32], source: NDArray[np.int64]) -> tuple[dict[int, Columns], Mask]:
        events = self._diagram.process.levels[level].events
        columns = {i: c[:, source] for i, c in self._columns.items()}
        alive = np.ones(len(source), bool)
        touched = [i for i in columns if level in self._parts[i].touched]
        if touched:
            order = np.argsort(event, kind="stable")
            for group in np.split(order, np.cumsum(np.bincount(event, minlength=len(events)))[:-1]):
                if group.size:
                    self.events += 1
                    self._happen(events[event[group[0]]], group, touched, columns, alive)
        for i in touched:
            part = self._parts[i]
            rest, fine = part.settle(level, columns[i][1:])
            columns[i], kept = _remembering(columns[i][0], rest, fine)
            alive &= kept
            if part.last == level:
                del columns[i]
        return columns, alive

    def _happen(
        self, event: Event, where: NDArray[np.int64], touched: list[int], columns: dict[int, Columns], alive: Mask
    ) -> None:
        for i in touched:
            if self._parts[i].concerns(event):
                before = columns[i][:, where]
                rest, fine = self._parts[i].step(event, before[1:])
                columns[i][:, where], kept = _remembering(before[0], rest, fine)
                alive[where] &= kept

    def _share(self, base: Layer, level: int) -> NDArray[np.float64]:
        """Return each edge's share of its node in the given diagram: with it, paths times completions is a share too."""
        ratio, power = float_options(base, self._diagram.process.levels[level].events)
        mantissa, exponent = self._diagram.potentials[level + 1]
        ratio = ratio * mantissa[base.child]
        power = power + exponent[base.child]
        here, top = self._diagram.potentials[level]
        shift = np.clip(power - top[base.source], -1070, 1000).astype(np.int32)
        share: NDArray[np.float64] = np.ldexp(ratio, shift) / here[base.source]
        return share

    def _merge(
        self,
        level: int,
        base: Layer,
        source: NDArray[np.int64],
        edge: NDArray[np.int64],
        child: NDArray[np.int64],
        columns: dict[int, Columns],
        mass: NDArray[np.float64],
    ) -> Layer:
        nodes = self.size
        if columns and len(child):
            number, first = number_equal([child, *(row for c in columns.values() for row in c)], len(child))
            if len(first) > self._width:
                total = _sums(number, mass, len(first))
                light = np.ones(len(first), bool)
                light[np.argsort(-total, kind="stable")[: self._width]] = False
                forget = light[number]
                for c in columns.values():
                    c[0, forget] = FORGOTTEN
                    c[1:, forget] = 0
                self.forgotten = True
                number, first = number_equal([child, *(row for c in columns.values() for row in c)], len(child))
        else:
            number, first = number_equal([child], len(child)) if len(child) else (child, child)
        self.size = len(first)
        self._base = child[first]
        self._mass = _sums(number, mass, len(first))
        self._columns = {i: c[:, first] for i, c in columns.items()}
        order = np.argsort(source, kind="stable")
        return join_layer(source[order], number[order], base.event[edge][order], base.pool[edge][order], nodes)


def _remembering(forgotten: NDArray[np.int64], rest: Columns, fine: Mask | None) -> tuple[Columns, Mask]:
    """Return columns and verdict where a part that has forgotten stays as it is, and alive."""
    free = forgotten == FORGOTTEN
    rest = np.where(free, 0, rest)
    kept = np.ones(free.shape, bool) if fine is None else fine | free
    return np.concatenate([forgotten[None], rest]), kept


def _sums(number: NDArray[np.int64], mass: NDArray[np.float64], count: int) -> NDArray[np.float64]:
    """Return the mass of each numbered node, added up in a fixed order."""
    return np.asarray(np.bincount(number, weights=mass, minlength=count), np.float64)
