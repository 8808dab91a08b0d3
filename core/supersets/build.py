"""Building diagrams: states expanded level by level, equal ones merged, hopeless ones dropped, potentials from the end.

The mathematics of the result stands in `core.supersets.diagram`.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from core.parts import Columns, Event, Mask, Part
from core.process import Process
from core.supersets.diagram import (
    MOST_EDGES_OF_A_NODE,
    SCALE,
    TIGHT,
    Diagram,
    Layer,
    OverBudget,
    float_options,
)


def build(process: Process, parts: Sequence[Part], budget: int, tick: Callable[[], None] = lambda: None) -> Diagram:
    """Return the diagram of a process under the parts.

    Parameters
    ----------
    budget
        The largest number of edges that may be tried.
    tick
        Called after each level; may raise to stop the work.

    Raises
    ------
    OverBudget
        if the diagram would need more edges.
    """
    for part in parts:
        part.prepare(process.levels)
    state = _State(process, parts, budget)
    raw: list[Layer] = []
    for level in range(len(process.levels)):
        raw.append(state.expand(level))
        tick()
    return weigh(process, raw, state.size, tick, tried=state.tried, events=state.events)


class _State:
    """All states of the current level: own columns of the process and the columns of each part that is alive."""

    def __init__(self, process: Process, parts: Sequence[Part], budget: int) -> None:
        self._process, self._parts, self._budget = process, parts, budget
        self.size = 1
        self.tried = self.events = 0
        self._own: Columns = np.array(process.start, process.count_type).reshape(-1, 1)
        self._columns: dict[int, Columns] = {}

    def expand(self, level: int) -> Layer:
        """Let every event of the level happen in every state; merge equal states; return the edges."""
        if not self.size:
            return _no_edges(0)
        for i, part in enumerate(self._parts):
            if part.first == level:
                self._columns[i] = np.repeat(np.array(part.start, np.int64)[:, None], self.size, axis=1)
        touched = [i for i in self._columns if level in self._parts[i].touched]
        # wide states cost more: eight 64-bit columns count as one edge
        weight = 8 + len(self._own) // 2 + sum(len(columns) for columns in self._columns.values())
        pieces = []
        for index, event in enumerate(self._process.levels[level].events):
            if any(self._parts[i].rules_out(event) for i in touched):
                continue
            self.events += 1
            piece = self._happen(level, index, event, touched)
            if piece is not None:
                pieces.append(piece)
                self.tried += len(piece[1]) * weight // 8
                if self.tried > self._budget:
                    raise OverBudget(level, len(self._process.levels), self.events)
        return self._merge(level, pieces, touched)

    def _happen(
        self, level: int, index: int, event: Event, touched: list[int]
    ) -> tuple[int, NDArray[np.int64], Columns, NDArray[np.int64], dict[int, Columns]] | None:
        own, pool, alive = self._process.step(level, event, self._own)
        columns = dict(self._columns)
        for i in touched:
            if self._parts[i].concerns(event):
                columns[i], fine = self._parts[i].step(event, columns[i])
                if fine is not None:
                    alive = fine if alive is None else alive & fine
        if alive is None:
            return index, np.arange(self.size), own, pool, columns
        kept = np.flatnonzero(alive)
        if not kept.size:
            return None
        return index, kept, own[:, kept], pool[kept], {i: c[:, kept] for i, c in columns.items()}

    def _merge(
        self,
        level: int,
        pieces: list[tuple[int, NDArray[np.int64], Columns, NDArray[np.int64], dict[int, Columns]]],
        touched: list[int],
    ) -> Layer:
        nodes = self.size
        if not pieces:
            self.size = 0
            return _no_edges(nodes)
        event = np.concatenate([np.full(len(p[1]), p[0], np.int32) for p in pieces])
        source = np.concatenate([p[1] for p in pieces])
        own = np.concatenate([p[2] for p in pieces], axis=1)
        pool = np.concatenate([p[3] for p in pieces]).astype(np.int32)
        columns = {i: np.concatenate([p[4][i] for p in pieces], axis=1) for i in self._columns}
        alive: Mask | None = None
        for i in touched:
            columns[i], fine = self._parts[i].settle(level, columns[i])
            if fine is not None:
                alive = fine if alive is None else alive & fine
            if self._parts[i].last == level:
                del columns[i]
        if alive is not None and not alive.any():
            self.size = 0
            return _no_edges(nodes)
        if alive is not None and not alive.all():
            event, source, own, pool = event[alive], source[alive], own[:, alive], pool[alive]
            columns = {i: c[:, alive] for i, c in columns.items()}
        child, first = number_equal([*own, *(row for c in columns.values() for row in c)], len(source))
        self.size = len(first)
        self._own = own[:, first]
        self._columns = {i: c[:, first] for i, c in columns.items()}
        # sources ascend within an event, so a stable sort by source keeps the events in order
        order = np.argsort(source, kind="stable")
        return join_layer(source[order], child[order], event[order], pool[order], nodes)


def _no_edges(nodes: int) -> Layer:
    empty = np.empty(0, np.int64)
    return join_layer(empty, empty, empty.astype(np.int32), empty.astype(np.int32), nodes)


def join_layer(
    source: NDArray[np.int64],
    child: NDArray[np.int64],
    event: NDArray[np.int32],
    pool: NDArray[np.int32],
    nodes: int,
) -> Layer:
    """Return edges as a layer: they are ordered by source, then by event; potentials and limits are still to be found."""
    starts = np.zeros(nodes + 1, np.int64)
    np.cumsum(np.bincount(source, minlength=nodes), out=starts[1:])
    none = np.empty(0, np.uint64)
    return Layer(source.astype(np.int32), child.astype(np.int32), event, pool, starts, none, False, False)


def number_equal(rows: list[NDArray[np.int64]], count: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Return for each column of `rows` the number of its value, and for each number the first column that has it.

    Numbers follow the order of the values, so they do not depend on how equal columns are found.
    """
    key = np.zeros(count, np.int64)
    space = 1
    for row in rows:
        low = int(row.min())
        span = int(row.max()) - low + 1
        if span == 1:
            continue
        if space * span >= 1 << 62:
            values, key = np.unique(key, return_inverse=True)
            space = len(values)
        place = row.astype(np.int64) - low
        if space * span >= 1 << 62:
            values, place = np.unique(place, return_inverse=True)
            span = len(values)
        key = key * span + place
        space *= span
    if space <= 4 * count + 1024:
        seen = np.full(space, -1, np.int64)
        seen[key[::-1]] = np.arange(count - 1, -1, -1)
        present = np.flatnonzero(seen >= 0)
        first = seen[present]
        seen[present] = np.arange(len(present))
        return seen[key], first
    _, first, numbers = np.unique(key, return_index=True, return_inverse=True)
    return numbers, first


def weigh(
    process: Process,
    raw: Sequence[Layer],
    ends: int,
    tick: Callable[[], None],
    *,
    tried: int,
    events: int,
    forgetful: bool = False,
) -> Diagram:
    """Return the diagram of layers whose potentials are still to be found.

    Backward pass: drop what cannot end, compute the potentials and the limits of every edge.
    """
    mantissa = np.ones(ends)
    exponent = np.zeros(ends, np.int64)
    renumber = np.arange(ends)
    potentials = [(mantissa, exponent)]
    layers = []
    for level in range(len(raw) - 1, -1, -1):
        layer = raw[level]
        child = renumber[layer.child]
        kept = child >= 0
        source = layer.source[kept].astype(np.int64)
        alive = np.bincount(source, minlength=layer.nodes) > 0
        renumber = np.where(alive, np.cumsum(alive) - 1, -1)
        layer = join_layer(renumber[source], child[kept], layer.event[kept], layer.pool[kept], int(alive.sum()))
        mantissa, exponent = _limit(layer, process.levels[level].events, mantissa, exponent)
        layers.append(layer)
        potentials.append((mantissa, exponent))
        tick()
    layers.reverse()
    potentials.reverse()
    return Diagram(process, layers, potentials, tried=tried, events=events, forgetful=forgetful)


def _limit(
    layer: Layer, events: Sequence[Event], mantissa: NDArray[np.float64], exponent: NDArray[np.int64]
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Set the limits of the layer's edges; return the potentials of its nodes as mantissa and exponent."""
    nodes = layer.nodes
    if not nodes:
        return np.empty(0), np.empty(0, np.int64)
    widest = int(np.diff(layer.starts).max())
    if widest >= MOST_EDGES_OF_A_NODE:
        raise ArithmeticError("a node has more edges than the certificate of the last acceptance allows")
    ratio, power = float_options(layer, events)
    ratio = ratio * mantissa[layer.child]
    power = power + exponent[layer.child]
    top = np.maximum.reduceat(power, layer.starts[:-1])
    value = np.ldexp(ratio, np.maximum(power - top[layer.source], -1070).astype(np.int32))
    total = np.bincount(layer.source, weights=value, minlength=nodes)
    layer.forced = widest == 1
    if not layer.forced:
        width = np.maximum(np.ceil(value / total[layer.source] * SCALE), 1.0).astype(np.uint64)
        running = np.cumsum(width)
        before = np.concatenate([np.zeros(1, np.uint64), running])[layer.starts[:-1]]
        layer.limits = running - before[layer.source]
        layer.loose = bool((width < TIGHT).any())
    out_mantissa, out_power = np.frexp(total)
    return out_mantissa, out_power + top
