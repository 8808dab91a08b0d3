"""Counts over a sample of outcomes, and simultaneous intervals for what they estimate.

The outcomes are independent and uniform, so the number of them that show something is binomial. Each interval is that
of Clopper and Pearson (1934) at level 1 - 0.05 / m, m being the number of intervals given, so that all of them hold
together with probability at least 0.95 (Bonferroni).
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from core.errors import CallError
from core.kinds import OutcomeKind
from core.kinds.pairing import Pairing
from core.process import Rows

LEVEL = 0.95
# Cells or pairs: more cannot be looked at, and would fill the memory.
MOST_LISTED = 2_000_000

Counts = NDArray[np.int64]


@dataclass(frozen=True)
class Wanted:
    """Which tables to fill."""

    units: bool
    cells: bool
    pairs: bool

    @classmethod
    def of(cls, kind: OutcomeKind, *, cells: bool, pairs: bool) -> Wanted:
        """Return what the kind can give of what is asked for. Raises CallError if that is too much to list."""
        number = kind.units * (kind.units - 1) // 2
        asked = cells or (pairs and kind.name == "pairing")
        cells_number = number if kind.name == "pairing" else kind.units * len(kind.places.ids)
        for word, count, wanted in (("cells", cells_number, asked), ("pairs", number, pairs)):
            if wanted and count > MOST_LISTED:
                raise CallError(f"There are {count:,} {word}, too many to list; up to {MOST_LISTED:,} can be.")
        given = {"selection": False, "roster": cells, "pairing": cells}.get(kind.name, cells_number <= MOST_LISTED)
        return cls(True, given, pairs)


@dataclass
class Sample:
    """Counts over outcomes; tables that are not wanted are None.

    Attributes
    ----------
    size
        Number of outcomes.
    units
        Shape (units, 1): in how many outcomes the unit is drawn or paired. In a roster (units, slots): in how many it
        has at least 1, 2, ... duties, so that a row sums to all its duties. None where each unit is in every outcome.
    cells, pairs
        Shapes (units, places) and (units, units). The cells of a pairing are its pairs.
    """

    kind: OutcomeKind
    wanted: Wanted
    size: int = 0
    units: Counts | None = field(init=False, default=None)
    cells: Counts | None = field(init=False, default=None)
    pairs: Counts | None = field(init=False, default=None)

    def add(self, rows: Rows) -> None:
        """Count more outcomes."""
        kind, wanted = self.kind, self.wanted
        self.size += len(rows)
        if wanted.units and varies(kind):
            self.units = _plus(self.units, _count_units(kind, rows))
        if wanted.cells and kind.name != "pairing":
            self.cells = _plus(self.cells, _count_cells(kind, rows))
        if wanted.pairs or (wanted.cells and kind.name == "pairing"):
            self.pairs = _plus(self.pairs, _count_pairs(kind, rows))

    @property
    def intervals(self) -> int:
        """How many intervals are made of the counts."""
        pairs = 0 if self.pairs is None else int(np.triu(possible_pairs(self.kind), 1).sum())
        return sum(c.size for c in (self.units, self.cells) if c is not None) + pairs

    def bounds(self, counts: Counts) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Return the limits of the chances that these counts estimate, both of the shape of `counts`.

        Guarantee: the intervals of all counts of this sample hold together with probability at least LEVEL.
        """
        from scipy.special import betainccinv, betaincinv  # imported where used: a slow import

        tail = (1 - LEVEL) / self.intervals / 2
        seen, place = np.unique(counts, return_inverse=True)
        low = np.where(seen > 0, betaincinv(np.maximum(seen, 1), self.size - seen + 1, tail), 0.0)
        high = np.where(seen < self.size, betainccinv(seen + 1, np.maximum(self.size - seen, 1), tail), 1.0)
        return low[place].reshape(counts.shape), high[place].reshape(counts.shape)


def _plus(total: Counts | None, more: Counts) -> Counts:
    return more if total is None else total + more


def varies(kind: OutcomeKind) -> bool:
    """Return whether a unit can be left out of an outcome."""
    return kind.name in ("selection", "roster") or (isinstance(kind, Pairing) and kind.single)


def possible_pairs(kind: OutcomeKind) -> NDArray[np.bool_]:
    """Return which two units can be a pair at all, shape (units, units)."""
    if isinstance(kind, Pairing):
        return kind.possible()[:, :-1]
    return ~np.eye(kind.units, dtype=bool)


def _count_units(kind: OutcomeKind, rows: Rows) -> Counts:
    if kind.name == "selection":
        return np.bincount(rows.ravel(), minlength=kind.units + 1)[: kind.units, None]
    if kind.name == "pairing":
        paired: Counts = (rows != np.arange(kind.units)).sum(axis=0)[:, None]
        return paired
    slots = rows.shape[2]
    loads = rows.sum(axis=2, dtype=np.int64) + np.arange(kind.units) * (slots + 1)
    exactly = np.bincount(loads.ravel(), minlength=kind.units * (slots + 1)).reshape(kind.units, slots + 1)
    at_least: Counts = exactly[:, ::-1].cumsum(axis=1)[:, ::-1][:, 1:]
    return at_least


def _count_cells(kind: OutcomeKind, rows: Rows) -> Counts:
    shape = kind.cells()
    if kind.name == "roster":
        on_duty: Counts = rows.sum(axis=0, dtype=np.int64)
        return on_duty
    every = np.arange(rows.shape[1])
    cell = rows.astype(np.int64) * shape[1] + every if kind.name == "order" else every * shape[1] + rows
    return np.bincount(cell.ravel(), minlength=shape[0] * shape[1]).reshape(shape)


def _count_pairs(kind: OutcomeKind, rows: Rows) -> Counts:
    """Count for each two units the outcomes in which they are together; symmetric, the diagonal means nothing."""
    size, batch = kind.units, len(rows)
    if kind.name in ("order", "pairing"):
        wide = rows.astype(np.int64)
        one, other = (wide[:, :-1], wide[:, 1:]) if kind.name == "order" else (np.arange(size), wide)
        met = np.bincount((one * size + other).ravel(), minlength=size * size).reshape(size, size)
        return met + met.T if kind.name == "order" else met
    met = np.zeros((size, size), np.int64)
    # products of 0/1 tables in floats: sums of fewer than 2^24 ones are exact in any order
    if kind.name == "roster":
        step = max(1, (1 << 22) // (size * size))
        for begin in range(0, batch, step):
            part = rows[begin : begin + step].astype(np.float32)
            met += (part @ part.transpose(0, 2, 1) > 0).sum(axis=0)
        return met
    for place in range(len(kind.places.ids)):
        inside = np.zeros((batch, size + 1), np.float32)
        if kind.name == "selection":
            inside[np.arange(batch)[:, None], rows] = 1
        else:
            inside[:, :size] = rows == place
        met += (inside.T @ inside)[:size, :size].astype(np.int64)
    return met
