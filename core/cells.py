"""What every reader of lists shares: collecting faults, checking names and cells, and cleaning them."""

from __future__ import annotations

import hashlib
import json
import re
from collections.abc import Iterable, Sequence
from dataclasses import replace

import numpy as np
import polars as pl

from core.errors import Fault, SheetError
from core.frame import Table, shortened

BLOCK_LINES = 1000
MOST_FAULTS = 20
MARK = "\ufeff"
# Control characters but tab and line feed, and the byte order mark, which is as invisible.
CONTROLS = r"[\x00-\x08\x0B-\x1F\x7F-\x{9F}\x{FEFF}]"
# All characters that may change, or change others, when text is composed (NFC), and more: looking for them is
# several times quicker than composing.
LOOSE = (
    r"[\p{M}\x{374}\x{37E}\x{387}\x{958}-\x{95F}\x{9DC}-\x{9DF}\x{A33}-\x{A5E}\x{B5C}\x{B5D}\x{F43}-\x{FB9}"
    r"\x{1100}-\x{11FF}\x{1F00}-\x{2001}\x{2126}-\x{212B}\x{2329}\x{232A}\x{2ADC}\x{F900}-\x{10FFFF}]"
)

_CONTROL = re.compile("[\x00-\x08\x0b-\x1f\x7f-\x9f\ufeff]")
_SIGNS = {
    "\0": "NUL",
    "\r": "a carriage return without a line feed",
    "\x1b": "escape",
    MARK: "a byte order mark",
}


class Faults:
    """Collects the faults of one file: the first 20 are kept in full, the others counted.

    Attributes
    ----------
    file
        The file as the user wrote it.
    more
        How many faults were found beyond the kept ones.
    """

    def __init__(self, file: str) -> None:
        self.file = file
        self.more = 0
        self._kept: list[Fault] = []

    def __bool__(self) -> bool:
        return bool(self._kept)

    def add(
        self,
        message: str,
        place: str = "",
        found: str = "",
        allowed: str = "",
        nearest: str = "",
        key: str = "",
    ) -> None:
        """Add one fault; the arguments are those of `core.errors.Fault`."""
        if len(self._kept) < MOST_FAULTS:
            self._kept.append(Fault(message, self.file, place, key, found, allowed, nearest))
        else:
            self.more += 1

    def stop_if_any(self) -> None:
        """Raise SheetError with what was collected, if anything was."""
        if not self._kept:
            return
        more = [Fault(f"and {self.more:,} more faults in this file.", self.file)] if self.more else []
        raise SheetError([*self._kept, *more])


def check_names(faults: Faults, names: Sequence[str], place: str) -> None:
    """Fault blank and repeated column names."""
    seen: dict[str, int] = {}
    for number, column in enumerate(names, start=1):
        if not column:
            faults.add(f"column {number} has no name.", place)
        elif column in seen:
            faults.add(f"columns {seen[column]} and {number} have the same name.", place, shortened(column))
        else:
            seen[column] = number


def check_controls(faults: Faults, text: str, place: str) -> None:
    """Fault the first control character of a cell; tabs and line breaks are none."""
    found = _CONTROL.search(text)
    if found:
        add_control(faults, found[0], place)


def add_control(faults: Faults, sign: str, place: str, hint: str = "") -> None:
    """Add the fault for the control character `sign` found at `place`."""
    name = f"U+{ord(sign):04X}" + (f", {_SIGNS[sign]}" if sign in _SIGNS else "")
    faults.add(f"there is a control character in this cell{hint}.", place, name, "text, tabs and line breaks")


def canonical(rows: Sequence[Sequence[str]]) -> bytes:
    """Return rows of cells as JSON without spaces in UTF-8: ``[["badge","dept"],["001","deck"]]``."""
    return json.dumps(rows, ensure_ascii=False, separators=(",", ":")).encode("utf-8", "surrogatepass")


def block_digests(blocks: Iterable[Sequence[Sequence[str]]]) -> tuple[str, ...]:
    """Return the SHA-256 of each block of rows in canonical form, hexadecimal."""
    return tuple(hashlib.sha256(canonical(block)).hexdigest() for block in blocks)


def cleaned(cells: pl.DataFrame, *, spaced: bool, beyond: bool) -> pl.DataFrame:
    """Return the cells as `core.frame.clean` makes them, and nulls as "".

    Parameters
    ----------
    cells
        Columns of ``polars.String``.
    spaced
        Whether a cell may begin or end with ASCII white space.
    beyond
        Whether a cell may hold white space beyond ASCII, or not be in Unicode NFC.
    """
    nulls = [name for name in cells.columns if cells[name].null_count()]
    if nulls:
        cells = cells.with_columns(pl.col(nulls).fill_null(""))
    if spaced:
        cells = cells.select(pl.all().str.strip_chars())
    if not beyond:
        return cells
    sizes = cells.select((pl.all().str.len_bytes() != pl.all().str.len_chars()).any())
    columns = [name for name in cells.columns if sizes[name].any()]
    if not spaced:
        cells = cells.with_columns(pl.col(columns).str.strip_chars())
    loose = [name for name in columns if cells[name].str.contains(LOOSE).any()]
    return cells.with_columns(pl.col(loose).str.normalize("NFC"))


def without_blank_rows(table: Table) -> Table:
    """Return the table without the rows that have no text in any cell, as they trail many an exported list.

    Raises
    ------
    SheetError
        if no row is left.
    """
    blank = pl.Series(np.ones(len(table), np.bool_))
    for column in table.columns:
        blank &= table.data[column] == ""
        if not blank.any():
            break
    if blank.all():
        raise SheetError(Fault("there are no lines with text below the header.", table.name))
    if not blank.any():
        return table
    return replace(table, data=table.data.filter(~blank), lines=table.lines[~blank.to_numpy()])
