"""The layered diagram: every way to build an outcome, with equal states merged, counted and drawn from exactly.

A node of level l is a state (integers: the kind's own columns and those of the built-in parts); an edge is an event
that leads to a node of level l + 1 and stands for `options` = binomial(pool, count) choices of units. The outcomes of
the diagram are the paths from the start to the end, each with one choice per edge (`core.process` shows that path and
choices are one to one with outcomes), so their number is the sum over paths of the product of options.

**The law.** Each node s has a potential W(s) > 0, a floating-point number with an exponent of its own, W(end) = 1, and
W(s) = sum over its edges e of options(e) x W(child(e)) up to rounding. At s edge e is taken with probability
k(e) / 2^64, where k(e) = max(1, ceil(S x share)), S = 2^64 - 2^34, share = options(e) W(child) / W(s) in floats. What is
left of 2^64 rejects the proposal. A finished path p is accepted with probability

    a(p) = C x product of options / product of (k / 2^64),     C = (1 - 2^-29)^levels / W(start),

and its choices are uniform, so that every outcome of the diagram comes with probability exactly C, whatever was
rounded. Needed is only a(p) <= 1. With u = 2^-53, a share is built by at most four roundings, so
k / 2^64 >= (1 - 2^-30) (1 - u)^4 x share > (1 - 2^-29) x exact share, and the exact shares telescope to
(product of options) / W(start). That proves a(p) <= 1. From above, an edge with k >= 2^40 has k / 2^64 <= exact share
(the factor 1 - 2^-30 outweighs ceil and rounding), hence a(p) > 1 - levels x 2^-28 if all its edges are such: a 64-bit
word below that bound accepts without more ado; the rare others are decided by exact fractions. The sum of a node's k is
at most S (1 + (edges + 3) u') + edges <= 2^64 while a node has fewer than 2^21 edges (u' = 2 u). A level where no node has a choice
takes no bits: there k / 2^64 is 1 and the exact share differs from 1 by at most 2 u.

Sums are made in a fixed order (numpy.bincount), all else is elementwise, integers, comparisons or powers of two: the
same bits on every machine. (Self-reducible acceptance-rejection: Jerrum, Valiant and Vazirani 1986; from memory.)
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property
from math import comb
from typing import Any

import numpy as np
from numpy.typing import NDArray

from core.parts import Event, Mask
from core.process import Process, Rows, lift_one, retrace
from core.stream import Bits

SCALE = float(2**64 - 2**34)
TIGHT = 1 << 40
_LOSS = Fraction(2**29 - 1, 2**29)
MOST_EDGES_OF_A_NODE = 1 << 21


class OverBudget(Exception):
    """The diagram would need more edges than allowed; `level` of `levels` was reached, having tried `events` events."""

    def __init__(self, level: int, levels: int, events: int) -> None:
        self.level, self.levels, self.events = level, levels, events
        super().__init__(f"stopped at level {level} of {levels}")


@dataclass
class Layer:
    """Edges from the nodes of one level to those of the next, ordered by node and, within a node, by event."""

    source: NDArray[np.int32]
    child: NDArray[np.int32]
    event: NDArray[np.int32]
    pool: NDArray[np.int32]
    starts: NDArray[np.int64]
    limits: NDArray[np.uint64]
    forced: bool
    loose: bool

    @property
    def nodes(self) -> int:
        """Number of nodes of the level."""
        return len(self.starts) - 1


# of the nodes of one level: mantissas in [0.5, 1) and exponents of two
Potentials = tuple[NDArray[np.float64], NDArray[np.int64]]


class Diagram:
    """The outcomes that a process and the built-in parts let through. Made by `build`.

    `forgetful` says that a rule built in has been forgotten somewhere, so that it must be checked; `potentials` holds W
    of every node, level by level. `tried` and `events` count the work of building: edges tried, and events applied to all
    states of a level.

    Guarantee: exact. Every outcome comes from one path and one choice; `draw` gives each the same chance; `size` is
    an exact integer.
    """

    def __init__(
        self,
        process: Process,
        layers: list[Layer],
        potentials: list[Potentials],
        *,
        tried: int,
        events: int,
        forgetful: bool = False,
    ) -> None:
        self.process = process
        self._layers = layers
        self.potentials = potentials
        self.tried, self.events, self.forgetful = tried, events, forgetful

    def __getstate__(self) -> dict[str, Any]:
        """Leave out what workers do not need: the exact integers, and all potentials but the first."""
        kept = {name: value for name, value in self.__dict__.items() if name != "completions"}
        return {**kept, "potentials": self.potentials[:1]}

    # -- what it is -------------------------------------------------------------------------------------------

    @property
    def nodes(self) -> int:
        """Number of nodes, ends excluded."""
        return sum(layer.nodes for layer in self._layers)

    @property
    def edges(self) -> int:
        """Number of edges."""
        return sum(len(layer.child) for layer in self._layers)

    @property
    def levels(self) -> int:
        """Number of levels."""
        return len(self._layers)

    @property
    def is_empty(self) -> bool:
        """Whether no outcome meets the built-in rules: proved by having listed every state."""
        return not self._layers or self._layers[0].nodes == 0

    @cached_property
    def weight(self) -> Fraction:
        """W(start) as an exact fraction: |outcomes| up to rounding."""
        mantissa, exponent = self.potentials[0]
        return Fraction(float(mantissa[0])) * Fraction(2) ** int(exponent[0]) if len(mantissa) else Fraction(0)

    def layer(self, level: int) -> Layer:
        """Return the edges of a level; not to be changed."""
        return self._layers[level]

    @cached_property
    def digest(self) -> str:
        """SHA-256 over all that decides a draw: W(start), and events, children and limits of every level."""
        total = hashlib.sha256(str(self.weight).encode())
        for layer in self._layers:
            for array in (layer.child, layer.event, layer.pool, layer.starts, layer.limits):
                total.update(array.astype(array.dtype.newbyteorder("<"), copy=False).tobytes())
        return total.hexdigest()

    # -- exact integers ---------------------------------------------------------------------------------------

    def links(self, level: int) -> tuple[NDArray[np.int32], NDArray[np.int32], NDArray[np.int32], NDArray[np.int32]]:
        """Return source, child, event and pool of each edge of the level, by source and then by event; not to be changed.

        Each node of the level is the source, each node of the next level the child of at least one edge.
        """
        layer = self._layers[level]
        return layer.source, layer.child, layer.event, layer.pool

    def options(self, level: int) -> NDArray[np.object_]:
        """Return binomial(pool, count) of each edge of the level as Python integers."""
        layer = self._layers[level]
        exact, place = exact_options(layer.event, layer.pool, self.process.levels[level].events)
        options: NDArray[np.object_] = np.array(exact, object)[place]
        return options

    @cached_property
    def completions(self) -> list[NDArray[np.object_]]:
        """Number of outcomes that go through each node, from it to the end, as Python integers, by level."""
        if self.is_empty:
            return [np.array([0], object)]
        counts: list[NDArray[np.object_]] = [np.array([1], object)]
        for level in range(self.levels - 1, -1, -1):
            layer = self._layers[level]
            through = self.options(level) * counts[-1][layer.child]
            counts.append(np.add.reduceat(through, layer.starts[:-1]))
        return counts[::-1]

    @property
    def size(self) -> int:
        """Exact number of outcomes."""
        return int(self.completions[0][0])

    def unrank(self, index: int) -> Rows:
        """Return outcome number `index`, 0 <= index < size: a bijection."""
        node, path, choices = 0, [], []
        for level in range(self.levels):
            for edge, options, below in self._edges_of(level, node):  # noqa: B007 (used after the loop)
                if index < options * below:
                    break
                index -= options * below
            choice, index = divmod(index, below)
            layer = self._layers[level]
            path.append(int(layer.event[edge]))
            choices.append(choice)
            node = int(layer.child[edge])
        return lift_one(self.process, path, choices)

    def rank(self, row: Rows) -> int:
        """Return the number of an outcome; the inverse of `unrank`. Raises ValueError if it is not one of them."""
        path, choices = retrace(self.process, row)
        node, index = 0, 0
        for level, (event, choice) in enumerate(zip(path, choices, strict=True)):
            layer = self._layers[level]
            for edge, options, below in self._edges_of(level, node):
                if layer.event[edge] == event:
                    break
                index += options * below
            else:
                raise ValueError("this outcome breaks a built-in rule")
            index += choice * below
            node = int(layer.child[edge])
        return index

    def _edges_of(self, level: int, node: int) -> list[tuple[int, int, int]]:
        """Edges of a node, with their options and the completions of their child."""
        layer = self._layers[level]
        events = self.process.levels[level].events
        edges = range(int(layer.starts[node]), int(layer.starts[node + 1]))
        return [
            (
                edge,
                comb(int(layer.pool[edge]), events[layer.event[edge]].count),
                int(self.completions[level + 1][layer.child[edge]]),
            )
            for edge in edges
        ]

    # -- drawing ----------------------------------------------------------------------------------------------

    def choose(self, level: int, nodes: NDArray[np.int64], words: NDArray[np.uint64]) -> NDArray[np.int64]:
        """Return the edge that each node takes for a 64-bit word; -1 where the word falls into what is left over."""
        layer = self._layers[level]
        low = layer.starts[nodes]
        end = layer.starts[nodes + 1]
        if layer.forced:
            return low
        high = end.copy()
        for _ in range(int((end - low).max(initial=0)).bit_length()):
            middle = np.minimum((low + high) >> 1, end - 1)
            beyond = (low < high) & (layer.limits[middle] <= words)
            low = np.where(beyond, middle + 1, low)
            high = np.where(beyond, high, np.minimum(middle, high))
        return np.where(low < end, low, -1)

    def width(self, level: int, edge: int) -> int:
        """Return k of an edge, as the limits hold it (2^64 where the event is forced)."""
        layer = self._layers[level]
        if layer.forced:
            return 1 << 64
        first = int(layer.starts[layer.source[edge]]) == edge
        return int(layer.limits[edge]) - (0 if first else int(layer.limits[edge - 1]))

    def acceptance(self, edges: Sequence[int]) -> Fraction:
        """Return a(p), the exact probability of the last acceptance of the path made of these edges."""
        factor = _LOSS**self.levels / self.weight
        for level, edge in enumerate(edges):
            layer = self._layers[level]
            count = self.process.levels[level].events[layer.event[edge]].count
            factor *= Fraction(comb(int(layer.pool[edge]), count) << 64, self.width(level, edge))
        if factor > 1:
            raise ArithmeticError("the last acceptance exceeds 1: the certificate of this diagram is broken")
        return factor

    @property
    def surely(self) -> int:
        """A word below this accepts a path all of whose edges are tight, whatever the exact fraction."""
        return (1 << 64) - (self.levels << 36)

    def accepts(self, edges: NDArray[np.int64], loose: Mask, words: NDArray[np.uint64], bits: Bits) -> Mask:
        """Return the verdict of the last acceptance, shape (batch,); exact.

        A word w stands for the interval [w, w + 1) / 2^64; where a(p) lies inside, further words decide.
        """
        verdict = (words < np.uint64(self.surely)) & ~loose
        for row in np.flatnonzero(~verdict):
            wanted = self.acceptance(edges[row].tolist())
            drawn = int(words[row])
            depth = 64
            while drawn == wanted.numerator * (1 << depth) // wanted.denominator and wanted < 1:
                drawn = (drawn << 64) | int(bits.words(1)[0])
                depth += 64
            verdict[row] = wanted == 1 or drawn < wanted.numerator * (1 << depth) // wanted.denominator
        return verdict

    def propose(self, count: int, bits: Bits) -> tuple[Rows, Mask]:
        """Return `count` proposals and which of them come through the weighting.

        Rows that do not are no outcomes and must be dropped; those that do are independent and uniform.
        """
        nodes = np.zeros(count, np.int64)
        alive = np.ones(count, bool)
        loose = np.zeros(count, bool)
        events = np.zeros((count, self.levels), np.int32)
        edges = np.zeros((count, self.levels), np.int64)
        for level, layer in enumerate(self._layers):
            words = np.empty(0, np.uint64) if layer.forced else bits.words(count)
            edge = self.choose(level, nodes, words)
            alive &= edge >= 0
            edge = np.maximum(edge, 0)
            if layer.loose:
                first = layer.starts[nodes] == edge
                below = np.where(first, np.uint64(0), layer.limits[edge - 1])
                loose |= layer.limits[edge] - below < TIGHT
            edges[:, level] = edge
            events[:, level] = layer.event[edge]
            nodes = layer.child[edge].astype(np.int64)
        alive[alive] = self.accepts(edges[alive], loose[alive], bits.words(int(alive.sum())), bits)
        return self.process.lift(events, bits), alive

    def paths(self) -> list[list[int]]:
        """Return every path from start to end as edge numbers; for small diagrams."""
        found: list[tuple[list[int], int]] = [([], 0)]
        for layer in self._layers:
            found = [
                ([*path, edge], int(layer.child[edge]))
                for path, node in found
                for edge in range(int(layer.starts[node]), int(layer.starts[node + 1]))
            ]
        return [path for path, _ in found]

    def law(self) -> list[tuple[list[int], int, Fraction]]:
        """Return for each path its events, its number of outcomes, and the exact chance of each of these outcomes.

        The chance of an edge is measured on `choose` itself: the words that lead to it, found by bisection.
        """
        law = []
        measured: dict[tuple[int, int], int] = {}
        for path in self.paths():
            chance = self.acceptance(path)
            options, node, events = 1, 0, []
            for level, edge in enumerate(path):
                layer = self._layers[level]
                event = int(layer.event[edge])
                options *= comb(int(layer.pool[edge]), self.process.levels[level].events[event].count)
                if (level, edge) not in measured:
                    measured[level, edge] = self._measure(level, node, edge)
                chance *= Fraction(measured[level, edge], 1 << 64)
                events.append(event)
                node = int(layer.child[edge])
            law.append((events, options, chance / options))
        return law

    def _measure(self, level: int, node: int, edge: int) -> int:
        """Return the number of 64-bit words that lead from the node to the edge."""

        def first_word(leads: Callable[[int], bool]) -> int:
            low, high = 0, 1 << 64
            while low < high:
                middle = (low + high) // 2
                low, high = (low, middle) if leads(middle) else (middle + 1, high)
            return low

        def chosen(word: int) -> int:
            taken = int(self.choose(level, np.array([node]), np.array([word], np.uint64))[0])
            return taken if taken >= 0 else 1 << 62

        if self._layers[level].forced:
            return 1 << 64
        return first_word(lambda w: chosen(w) > edge) - first_word(lambda w: chosen(w) >= edge)


def exact_options(
    event: NDArray[np.int32], pool: NDArray[np.int32], events: Sequence[Event]
) -> tuple[list[int], NDArray[np.int64]]:
    """Return the different values of binomial(pool, count), and for each edge the place of its value among them."""
    counts = [e.count for e in events]
    low = int(pool.min())
    span = int(pool.max()) - low + 1
    present, place = np.unique(event.astype(np.int64) * span + (pool - low), return_inverse=True)
    return [comb(code % span + low, counts[code // span]) for code in present.tolist()], place


def float_options(layer: Layer, events: Sequence[Event]) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Return binomial(pool, count) of each edge as a correctly rounded mantissa in [0.5, 1] and an exponent."""
    exact, place = exact_options(layer.event, layer.pool, events)
    lengths = [number.bit_length() for number in exact]
    mantissa = np.array([number / (1 << length) for number, length in zip(exact, lengths, strict=True)])
    return mantissa[place], np.array(lengths, np.int64)[place]
