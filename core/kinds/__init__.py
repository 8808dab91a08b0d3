"""Kinds of outcome: what one complete result is. One file each; `load` finds them.

A kind says how an outcome is written as a row of an array, what is counted in it, how it is built level by level
(`process`), and how it is shown. It knows no rule: rules reach it only as cells that may or must be used, and (in a
roster) as what a unit may do from slot to slot.
"""

from __future__ import annotations

import importlib
import pkgutil
from abc import ABC, abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray

from core.errors import SheetError
from core.frame import Frame, Table, clean, listed
from core.parts import Mask, Part, UnitAutomaton
from core.process import Process, Rows
from core.reading import Fields, OpenTable, Report, TableFile, plain
from core.statement import Statement
from core.tables import inline_table


@dataclass(frozen=True, eq=False)
class Places:
    """The slots of a roster, the places of an assignment or the positions of an order.

    Attributes
    ----------
    word
        "slot", "place", "position", or "" for kinds without places.
    ids
        Their names, in the order given.
    table
        Their columns, or None if they have none.
    """

    word: str
    ids: tuple[str, ...]
    table: Table | None = None

    @property
    def columns(self) -> tuple[str, ...]:
        """Names of the columns of the places."""
        return self.table.columns if self.table is not None else ()


@dataclass(frozen=True, eq=False)
class Cells:
    """What the rules allow and demand of single units, before anything is counted.

    Attributes
    ----------
    may
        bool, shape (units, places): the unit may be there. In a pairing (units, units + 1): the unit may have this
        partner, or (last column) stay single.
    must
        bool, the same shape: the unit must be there.
    """

    may: Mask
    must: Mask


@dataclass(frozen=True)
class Arrangement:
    """An order of the levels: `groups` in the order in which they are decided, and (assignment) which loop is outer."""

    groups: tuple[int, ...]
    by_place: bool = True


Members = Sequence[NDArray[np.int64]]


class OutcomeKind(ABC):
    """One kind of outcome over a given frame.

    Class attributes: `name` is the word in the sheet, `meaning` one sentence, `example` TOML, `Fields` the keys of
    ``[outcome]``. Instance attributes: `units` the number of units; `places` its slots, places or positions.
    """

    name: ClassVar[str]
    meaning: ClassVar[str]
    example: ClassVar[str]
    Fields: ClassVar[type[Fields]]
    known: ClassVar[dict[str, type[OutcomeKind]]] = {}
    units: int
    places: Places

    def __init_subclass__(cls) -> None:
        """Register the kind under its name."""
        OutcomeKind.known[cls.name] = cls

    @classmethod
    @abstractmethod
    def of(cls, fields: Any, frame: Frame, open_table: OpenTable, report: Report) -> OutcomeKind | None:
        """Return the kind that ``[outcome]`` states, or None after reporting what is wrong."""

    @property
    @abstractmethod
    def width(self) -> int:
        """Number of array elements of one outcome."""

    @abstractmethod
    def words(self) -> str:
        """Return what is drawn, as a sentence."""

    @abstractmethod
    def cells(self) -> tuple[int, int]:
        """Return the shape of `Cells.may`."""

    def possible(self) -> Mask:
        """Return the cells that the kind itself allows, whatever the rules."""
        return np.ones(self.cells(), bool)

    def alike(self, cells: Cells) -> NDArray[np.int64]:
        """Return a label per unit: units with equal labels have equal cells. int64, shape (units,)."""
        return row_labels(np.concatenate([cells.may, cells.must], axis=1))

    @abstractmethod
    def tally(self, rows: Rows, weights: NDArray[np.int64], places: Sequence[int] | None = None) -> NDArray[np.int64]:
        """Return for each outcome the sum of `weights` (one per unit) over the units in these places (None: all)."""

    @abstractmethod
    def process(
        self, members: Members, cells: Cells, arrangement: Arrangement, automata: Sequence[UnitAutomaton]
    ) -> Process:
        """Return how outcomes are built when units of one group are not told apart.

        Units of a group have equal cells, except in a roster, where cells and automata are the units' own.
        """

    def parts(self, groups: int) -> list[Part]:
        """Return the counts that the kind itself keeps (its size, how full its places are)."""
        return []

    def arrangements(self, groups: int) -> list[Arrangement]:
        """Return orders of levels worth trying, the plainest first."""
        return [Arrangement(tuple(range(groups)))]

    @abstractmethod
    def lines(self, row: Rows, ids: Sequence[str]) -> list[tuple[str, ...]]:
        """Return the outcome as lines of outcomes.csv (without the outcome's number), in their fixed order."""

    @abstractmethod
    def read(self, lines: Sequence[tuple[int, str]], ids: Sequence[str]) -> Rows | str:
        """Return the row that lines (unit's index, second column) make, or a sentence why they are no outcome."""

    def variables(self) -> NDArray[np.int64]:
        """Return which 0/1 variable says that a cell is used: from 1 on, 0 for cells that cannot be. Shape `cells`."""
        possible = self.possible()
        return np.where(possible, np.cumsum(possible).reshape(possible.shape), 0)

    @abstractmethod
    def state(self, model: Statement) -> None:
        """Say when cells make an outcome; that impossible cells are not used goes without saying."""

    @abstractmethod
    def row(self, used: Mask) -> Rows:
        """Return the outcome in which these cells (bool, shape `cells`) are used, as one row."""

    @property
    def header(self) -> tuple[str, ...]:
        """Column names of `lines`."""
        return ("unit", self.places.word) if self.places.word else ("unit",)


def row_labels(rows: NDArray[Any]) -> NDArray[np.int64]:
    """Return a number for each row of a table, equal for equal rows, in the order of first appearance."""
    packed = np.packbits(rows, axis=1) if rows.dtype == bool else np.ascontiguousarray(rows)
    if packed.shape[1] == 1:
        whole = packed[:, 0]
    else:
        whole = np.ascontiguousarray(packed).view(np.dtype((np.void, packed.dtype.itemsize * packed.shape[1])))[:, 0]
    _, first, label = np.unique(whole, return_index=True, return_inverse=True)
    order = np.empty(len(first), np.int64)
    order[np.argsort(first)] = np.arange(len(first))
    return order[label]


def join_labels(labels: Sequence[NDArray[np.int64]], size: int) -> NDArray[np.int64]:
    """Return one label per unit, equal where all the labels are equal, numbered in the order of first appearance."""
    key, space = np.zeros(size, np.int64), 1
    for label in labels:
        low = int(label.min())
        span = int(label.max()) - low + 1
        if span == 1:
            continue
        if space * span >= 1 << 62:
            key = np.unique(key, return_inverse=True)[1].astype(np.int64)
            label = np.unique(label, return_inverse=True)[1].astype(np.int64)
            low, span, space = 0, int(label.max()) + 1, int(key.max()) + 1
        key = key * span + (label - low)
        space *= span
    return row_labels(key[:, None])


PlaceList = list[str] | list[int] | list[dict[str, Any]] | TableFile


def read_places(value: PlaceList, word: str, key: str, open_table: OpenTable, report: Report) -> Places | None:
    """Return the places that a sheet lists by name, as tables or in a file, or None after reporting faults."""
    if isinstance(value, TableFile):
        try:
            table = open_table(value)
        except SheetError as error:
            report.take(error, key, inside=key)
            return None
        column = clean(value.id or "id")
        if column not in table.columns:
            message = f"{table.name} has no such column to take the names of the {word}s from."
            known = table.columns
            report.fault(f"{key}.id", message, found=column, allowed=listed(known), known=known)
            return None
        names = table.text(column)
    else:
        if not value:
            report.fault(key, f"there is no {word}.", allowed="at least one")
            return None
        items = [item if isinstance(item, dict) else {"id": item} for item in value]
        missing = [number for number, item in enumerate(items, 1) if plain(item.get("id")) is None]
        if missing:
            report.fault(key, f"{word} {missing[0]} of the list has no id.", allowed='{id = "a", ...}')
            return None
        columns = dict.fromkeys(column for item in items for column in item)
        try:
            table = inline_table(
                f"{report.file}, {report.place}, {key}", [{c: item.get(c, "") for c in columns} for item in items]
            )
        except SheetError as error:
            report.take(error)
            return None
        names = table.text("id")
    seen: dict[str, int] = {}
    for number, name in enumerate(names, 1):
        if not name or name in seen:
            cause = f"has the name of {word} {seen[name]}" if name else "has no name"
            report.fault(key, f"{word} {number} {cause}.", found=name or None, allowed="names that are all different")
            return None
        seen[name] = number
    return Places(word, tuple(names), table)


def load(package: str) -> None:
    """Import every module of a package, so that what is defined there registers itself."""
    module = importlib.import_module(package)
    for info in sorted(pkgutil.iter_modules(module.__path__), key=lambda found: found.name):
        importlib.import_module(f"{package}.{info.name}")
