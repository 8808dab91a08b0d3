"""The list that is drawn from: a table of text cells, the codes and numbers rules read, and its units."""

from __future__ import annotations

import difflib
import unicodedata
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
import polars as pl
from numpy.typing import NDArray

from core.errors import Fault, SheetError

_NAMED_LINES = 10
_NAMED_IDS = 20
_MOST_DIGITS = 18
_SUM_LIMIT = 2**62
_NUMBER = r"^[+-]?(?:[0-9]+(?:\.[0-9]+)?|\.[0-9]+)$"
_NUMBER_WORDS = f"plain decimal numbers such as -1250.50: at most {_MOST_DIGITS} digits, no exponent, no thousands sign"


def clean(text: str) -> str:
    """Return `text` as every cell and id is compared: without white space around it, in Unicode NFC."""
    return unicodedata.normalize("NFC", text.strip())


def nearest(word: str, known: Iterable[str]) -> str:
    """Return the name of `known` most like `word` (letter case is ignored), or "" if none is near."""
    by_lower = {name.lower(): name for name in known}
    found = difflib.get_close_matches(word.lower(), list(by_lower), n=1, cutoff=0.6)
    return by_lower[found[0]] if found else ""


def listed(names: Sequence[str], most: int = 20) -> str:
    """Return `names` as one phrase, at most `most` of them, and how many more there are."""
    if len(names) <= most:
        return ", ".join(names)
    return ", ".join(names[:most]) + f" and {len(names) - most:,} more"


@dataclass(frozen=True, eq=False)
class Amounts:
    """A column of numbers as integers.

    Attributes
    ----------
    values
        int64, shape (rows,): the number times ``10 ** decimals``, exactly. The sum of the absolute values is
        below ``2 ** 62``, so no sum over rows can overflow.
    decimals
        The largest number of decimals written in the column.
    """

    values: NDArray[np.int64]
    decimals: int

    def in_words(self, value: int) -> str:
        """Return the scaled integer `value` as decimal text with all the column's decimals."""
        sign = "-" if value < 0 else ""
        digits = str(abs(value)).rjust(self.decimals + 1, "0")
        if not self.decimals:
            return sign + digits
        return f"{sign}{digits[: -self.decimals]}.{digits[-self.decimals :]}"


@dataclass(frozen=True, eq=False)
class Table:
    """Lines of text cells as read from a file or written in the sheet.

    Attributes
    ----------
    name
        The file as the user wrote it, such as ``crew.csv``, or the inline table's name.
    data
        One column per column of the file, each ``polars.String``. Cells are cleaned (see `clean`); a blank
        cell is ``""``, never null.
    lines
        int64, shape (rows,): the line (row of a worksheet, place in an inline list) where each row starts.
    sha256
        Digest of the file's bytes, hexadecimal.
    blocks
        Digest of each 1,000 lines of the file, hexadecimal: two versions of a file differ in these lines.
    line_word
        What `lines` counts, in messages: ``line`` or ``row``.
    """

    name: str
    data: pl.DataFrame
    lines: NDArray[np.int64]
    sha256: str
    blocks: tuple[str, ...]
    line_word: str = "line"
    _codes: dict[str, tuple[NDArray[np.int32], tuple[str, ...]]] = field(default_factory=dict, init=False, repr=False)
    _amounts: dict[str, Amounts | SheetError] = field(default_factory=dict, init=False, repr=False)

    @property
    def columns(self) -> tuple[str, ...]:
        """Names of the columns, in the order of the file."""
        return tuple(self.data.columns)

    def __len__(self) -> int:
        return self.data.height

    def place(self, row: int, column: str = "") -> str:
        """Return where row `row` (from 0) is found in the file, as faults say it."""
        text = f"{self.line_word} {int(self.lines[row])}"
        return f"{text}, column {column}" if column else text

    def text(self, column: str) -> list[str]:
        """Return the cells of `column`. Raises SheetError if there is no such column."""
        return self._series(column).to_list()

    def codes(self, column: str) -> tuple[NDArray[np.int32], tuple[str, ...]]:
        """Return each row's value of `column` as a code.

        Returns
        -------
        codes, values
            int32, shape (rows,), read-only, and the different values sorted as text; ``values[codes[i]]`` is
            the cell of row i. The blank value ``""`` is among them if it occurs. Kept for the next call.

        Raises
        ------
        SheetError
            if there is no such column.
        """
        if column not in self._codes:
            series = self._series(column)
            values = series.unique().sort()
            codes = series.cast(pl.Enum(values)).to_physical().cast(pl.Int32).to_numpy()
            codes = np.array(codes, dtype=np.int32)
            codes.setflags(write=False)
            self._codes[column] = (codes, tuple(values.to_list()))
        return self._codes[column]

    def amounts(self, column: str) -> Amounts:
        """Return `column` as exact integers. Kept for the next call.

        Raises
        ------
        SheetError
            if there is no such column, or naming the lines (up to 10, then how many more) whose cell is blank
            or is no plain decimal number of at most 18 digits, or if the sum of the absolute values is too
            large.
        """
        if column not in self._amounts:
            try:
                self._amounts[column] = self._read_amounts(column, self._series(column))
            except SheetError as error:
                self._amounts[column] = error
        found = self._amounts[column]
        if isinstance(found, SheetError):
            raise SheetError(found.faults)
        return found

    def is_number(self, column: str) -> bool:
        """Tell whether `amounts` can read every row of `column` (a table without rows has no numbers)."""
        if not len(self):
            return False
        try:
            self.amounts(column)
        except SheetError:
            return False
        return True

    def _series(self, column: str) -> pl.Series:
        if column not in self.data.columns:
            raise SheetError(
                Fault(
                    "there is no such column.",
                    file=self.name,
                    found=column,
                    allowed=listed(self.columns),
                    nearest=nearest(column, self.columns),
                )
            )
        return self.data[column]

    def _read_amounts(self, column: str, cells: pl.Series) -> Amounts:
        fine = cells.str.contains(_NUMBER)
        self._refuse(column, cells, ~fine, "this is not a number.")
        point = cells.str.find(".", literal=True)
        places = (cells.str.len_bytes() - point - 1).fill_null(0).cast(pl.Int64).to_numpy()
        decimals = int(places.max(initial=0))
        digits = cells.str.replace(".", "", literal=True).str.strip_prefix("+")
        size = digits.str.strip_prefix("-").str.strip_chars_start("0").str.len_bytes().cast(pl.Int64).to_numpy()
        too_long = (size > 0) & (size + (decimals - places) > _MOST_DIGITS)
        self._refuse(column, cells, pl.Series(too_long), "this number has too many digits.")
        # Zeros may be written with any number of decimals; 10 ** shift must stay an int64 all the same.
        shift = np.where(size > 0, decimals - places, 0)
        values = digits.cast(pl.Int64).to_numpy() * np.power(np.int64(10), shift)
        whole = np.abs(values)
        total = (int((whole >> 32).sum()) << 32) + int((whole & 0xFFFFFFFF).sum())
        if total >= _SUM_LIMIT:
            raise SheetError(
                Fault(
                    "the numbers of this column are too large to be added up exactly.",
                    file=self.name,
                    place=f"column {column}",
                    allowed=f"a sum (without signs and decimal point) below {_SUM_LIMIT}",
                )
            )
        values.setflags(write=False)
        return Amounts(values, decimals)

    def _refuse(self, column: str, cells: pl.Series, bad: pl.Series, message: str) -> None:
        rows = np.flatnonzero(bad.to_numpy())
        if not rows.size:
            return
        faults = []
        for row in rows[:_NAMED_LINES].tolist():
            cell = cells[row]
            faults.append(
                Fault(
                    message if cell else "a number is needed here and the cell is blank.",
                    file=self.name,
                    place=self.place(row, column),
                    found=shortened(cell),
                    allowed=_NUMBER_WORDS,
                )
            )
        if rows.size > _NAMED_LINES:
            faults.append(
                Fault(
                    f"and {rows.size - _NAMED_LINES:,} more {self.line_word}s like these.",
                    file=self.name,
                    place=f"column {column}",
                )
            )
        raise SheetError(faults)


def shortened(text: str, most: int = 60) -> str:
    """Return `text` for a message: on one line, cut after `most` characters."""
    flat = " ".join(text.split())
    return flat if len(flat) <= most else flat[: most - 3] + "..."


@dataclass(frozen=True, eq=False)
class Frame:
    """The units that can be drawn: a table, one of whose columns tells its rows apart. Made by `frame_of`.

    Attributes
    ----------
    table
        The lines of the list. Row i is unit i.
    id
        Name of the id column.
    """

    table: Table
    id: str

    @cached_property
    def ids(self) -> list[str]:
        """Id of each unit, in the order of the list."""
        return self.table.text(self.id)

    @property
    def size(self) -> int:
        """Number of units."""
        return len(self.table)

    @property
    def columns(self) -> tuple[str, ...]:
        """Names of the columns, in the order of the file."""
        return self.table.columns

    @cached_property
    def _rows(self) -> dict[str, int]:
        return {unit: row for row, unit in enumerate(self.ids)}

    def index(self, unit_id: str) -> int | None:
        """Return the row of the unit with this id (cleaned as the cells are), or None."""
        row = self._rows.get(unit_id)
        return row if row is not None else self._rows.get(clean(unit_id))

    def codes(self, column: str) -> tuple[NDArray[np.int32], tuple[str, ...]]:
        """Return `Table.codes` of the list."""
        return self.table.codes(column)

    def amounts(self, column: str) -> Amounts:
        """Return `Table.amounts` of the list."""
        return self.table.amounts(column)

    def is_number(self, column: str) -> bool:
        """Return `Table.is_number` of the list."""
        return self.table.is_number(column)

    def totals(self) -> dict[str, str]:
        """Return the control total of each column that is wholly numeric, except the id column.

        The text has as many decimals as the column: ``{"amount": "1234.50"}``.
        """
        totals = {}
        for column in self.columns:
            if column != self.id and self.is_number(column):
                amounts = self.amounts(column)
                totals[column] = amounts.in_words(int(amounts.values.sum()))
        return totals

    def blanks(self) -> dict[str, int]:
        """Return the number of blank cells of each column that has any."""
        counts = {column: int((self.table.data[column] == "").sum()) for column in self.columns}
        return {column: count for column, count in counts.items() if count}


def frame_of(table: Table, id: str) -> Frame:
    """Return the frame whose units are the lines of `table`, told apart by column `id`.

    Guarantee: the frame has at least one unit; ids are not blank and all different after cleaning.

    Raises
    ------
    SheetError
        naming a missing id column, an empty list, each blank id's line, and each repeated id with its lines
        (up to 20 faults, then how many more).
    """
    name = clean(id)
    if name not in table.columns:
        raise SheetError(
            Fault(
                "the list has no such column to take the ids from.",
                file=table.name,
                key="id",
                found=id,
                allowed=listed(table.columns),
                nearest=nearest(name, table.columns),
            )
        )
    if not len(table):
        raise SheetError(Fault("the list has no lines, so there is nothing to draw from.", file=table.name))
    ids = table.data[name]
    if _any_repeated(ids) or (ids == "").any():
        raise SheetError(_id_faults(table, name))
    return Frame(table, name)


def _any_repeated(ids: pl.Series) -> bool:
    """Tell whether a value occurs twice. Different hashes settle it; only equal ones need the text."""
    hashes = np.sort(ids.hash().to_numpy())
    return bool((hashes[1:] == hashes[:-1]).any()) and ids.n_unique() < len(ids)


def _id_faults(table: Table, column: str) -> list[Fault]:
    ids = table.data[column]
    blank = np.flatnonzero((ids == "").to_numpy()).tolist()
    faults = [
        Fault(f"this {table.line_word} has no id.", file=table.name, place=table.place(row, column))
        for row in blank[:_NAMED_IDS]
    ]
    rows_of: dict[str, list[int]] = {}
    for row in np.flatnonzero((ids.is_duplicated() & (ids != "")).to_numpy()).tolist():
        rows_of.setdefault(ids[row], []).append(row)
    for unit, rows in list(rows_of.items())[: _NAMED_IDS - len(faults)]:
        lines = [str(int(table.lines[row])) for row in rows]
        told = listed(lines, 10) if len(lines) > 10 else ", ".join(lines[:-1]) + f" and {lines[-1]}"
        faults.append(
            Fault(
                f"the same id stands on {table.line_word}s {told}"
                " (white space around an id and the way accents are stored make no difference).",
                file=table.name,
                place=f"column {column}",
                found=shortened(unit),
            )
        )
    left = len(blank) + len(rows_of) - len(faults)
    if left:
        faults.append(Fault(f"and {left:,} more ids like these.", file=table.name, place=f"column {column}"))
    return faults
