"""Where the records and cells of a CSV text lie, and what is wrong with it, found on its bytes.

The text is UTF-8. One pass over pieces of it, small enough for the processor's cache, finds the records; the
checks look again only if that pass leaves a doubt.
"""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from core.cells import MARK, MOST_FAULTS, Faults, add_control
from core.frame import shortened

SEPARATORS = {",": "comma", ";": "semicolon", "\t": "tab"}

_PIECE = 1 << 18
_TAB, _NEWLINE, _RETURN, _SPACE, _QUOTE, _DELETE = 9, 10, 13, 32, 34, 127
_QUOTED = re.compile(rb'"(?:[^"]++|"")*+"')
_Offsets = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Layout:
    """Where the records of a CSV text lie.

    Attributes
    ----------
    ends
        int64, shape (records,): offset of the newline that ends the record, or the length of the text.
    cells
        int64, shape (records,): number of cells.
    lines
        int64, shape (records,): the line, from 1, on which the record starts.
    newlines, quotes
        int64: offset of every newline, quoted ones too, and of every quotation mark.
    broken
        Whether a newline is quoted, so that a cell holds a line break.
    spaced
        Whether a cell may begin or end with ASCII white space.
    doubtful
        Whether there are, or may be, control characters below a space besides line ends.
    highest
        The highest byte.
    """

    ends: _Offsets
    cells: _Offsets
    lines: _Offsets
    newlines: _Offsets
    quotes: _Offsets
    broken: bool
    spaced: bool
    doubtful: bool
    highest: int

    @cached_property
    def starts(self) -> _Offsets:
        """int64, shape (records,): offset of the first byte of the record."""
        return np.concatenate((np.zeros(1, np.int64), self.ends[:-1] + 1))

    def line_at(self, offset: int) -> int:
        """Return the line of the byte at `offset`."""
        return int(np.searchsorted(self.newlines, offset)) + 1


class _Survey:
    """A pass over a text, piece by piece, and what it has seen so far."""

    def __init__(self, data: bytes, separator: str) -> None:
        self.data = data
        self.array = np.frombuffer(data, np.uint8)
        self.separator = ord(separator)
        self.highest = 0
        self.doubtful = False
        # In quotes a tab that separates elsewhere may begin or end a cell.
        self.spaced = data.endswith(b" ") or (separator == "\t" and b'"' in data)
        self._spare = tuple(np.empty(_PIECE, np.bool_) for _ in range(3))

    def pieces(self) -> Iterator[tuple[int, NDArray[np.uint8]]]:
        """Yield offset and bytes of each piece; a piece ends with a newline if it holds one."""
        base = 0
        while base < len(self.data):
            end = self.data.rfind(b"\n", base, base + _PIECE) + 1 or min(base + _PIECE, len(self.data))
            piece = self.array[base:end]
            if piece[0] == _SPACE or (piece[-1] == _SPACE and end < len(self.data)):
                self.spaced = True
            yield base, piece
            base = end

    def where(self, piece: NDArray[np.uint8], byte: int, number: int) -> NDArray[np.bool_]:
        """Return where `piece` holds `byte`, in the spare array `number` (0 or 1)."""
        return np.equal(piece, byte, out=self._spare[number][: piece.size])

    def look(self, piece: NDArray[np.uint8], marks: NDArray[np.bool_], newlines: _Offsets) -> None:
        """Note low and high bytes, and spaces beside marks.

        `marks` is spare array 0 (1 and 2 are overwritten), `newlines` the offsets of all newlines in the piece.
        """
        one, two = (spare[: piece.size] for spare in self._spare[1:])
        self.highest = max(self.highest, int(piece.max()))
        # What is left of the low bytes besides newlines, carriage returns before them, and separators.
        low = int(np.count_nonzero(np.less(piece, _SPACE, out=one))) - newlines.size
        if low:
            returns = newlines[newlines > 0] - 1
            returns = returns[piece[returns] == _RETURN]
            low -= returns.size
            self.spaced |= bool((piece[returns - 1] == _SPACE).any())
        if low and self.separator == _TAB:
            low -= int(np.count_nonzero(np.equal(piece, _TAB, out=one)))
        self.doubtful |= low > 0
        if not self.spaced:
            space = np.equal(piece, _SPACE, out=one)
            beside = np.logical_or(marks[2:], marks[:-2], out=two[2:])
            self.spaced = bool(np.logical_and(beside, space[1:-1], out=beside).any())

    def layout(self, ends: _Offsets, cells: _Offsets, newlines: _Offsets, quotes: _Offsets) -> Layout:
        """Return the layout; `ends` may lack the last record's."""
        broken = newlines.size > ends.size
        if ends.size < cells.size:
            ends = np.append(ends, len(self.data))
        if broken:
            lines = np.searchsorted(newlines, np.concatenate((np.zeros(1, np.int64), ends[:-1] + 1))) + 1
        else:
            lines = np.arange(1, ends.size + 1)
        # A tab that does not separate is in doubt as well; it and a quoted newline may begin or end a cell.
        spaced = self.spaced or self.doubtful or broken
        return Layout(ends, cells, lines, newlines, quotes, broken, spaced, self.doubtful, self.highest)


def layout_of(data: bytes, separator: str) -> Layout:
    """Find the records of `data`, which is not empty."""
    if b'"' not in data and (regular := _regular_layout(data, separator)):
        return regular
    return _general_layout(data, separator)


def _regular_layout(data: bytes, separator: str) -> Layout | None:
    """Return the layout of a text without quotes whose lines all have as many cells (2 or more) as the first.

    This is the usual case, and the cheaper one: if separators are taken in groups of one line's number, each
    group must lie between two newlines. None: the text is not like this.
    """
    width = data.count(separator.encode(), 0, data.find(b"\n") + 1) + 1
    rest = data[data.rfind(b"\n") + 1 :]
    if width < 2 or len(rest) >= _PIECE:
        return None
    survey = _Survey(data, separator)
    found = []
    for base, piece in survey.pieces():
        newline = survey.where(piece, _NEWLINE, 1)
        ends = np.flatnonzero(newline)
        marks = survey.where(piece, survey.separator, 0)
        separators = np.flatnonzero(marks)
        np.logical_or(marks, newline, out=marks)
        survey.look(piece, marks, ends)
        if not ends.size and base == len(data) - len(rest):
            break
        if separators.size != ends.size * (width - 1):
            return None
        groups = separators.reshape(-1, width - 1)
        if (groups[:, -1] > ends).any() or (groups[1:, 0] < ends[:-1]).any():
            return None
        found.append(ends + base)
    if rest and rest.count(separator.encode()) != width - 1:
        return None
    newlines = np.concatenate(found)
    cells = np.broadcast_to(np.int64(width), newlines.size + bool(rest))
    return survey.layout(newlines, cells, newlines, np.zeros(0, np.int64))


def _general_layout(data: bytes, separator: str) -> Layout:
    """Return the layout of any text: a separator or newline counts after an even number of quotes."""
    survey = _Survey(data, separator)
    quotes, newlines, ends, closing = [], [], [], []
    quotes_seen = marks_seen = 0
    for base, piece in survey.pieces():
        hits = survey.where(piece, survey.separator, 0)
        for byte in (_NEWLINE, _QUOTE):
            np.logical_or(hits, survey.where(piece, byte, 1), out=hits)
        marks = np.flatnonzero(hits)
        kinds = piece[marks]
        survey.look(piece, hits, marks[kinds == _NEWLINE])
        marks += base
        is_quote = kinds == _QUOTE
        outside = (np.cumsum(is_quote) + quotes_seen) & 1 == 0
        quotes.append(marks[is_quote])
        newlines.append(marks[kinds == _NEWLINE])
        quotes_seen += quotes[-1].size
        outside &= ~is_quote
        marks, kinds = marks[outside], kinds[outside]
        ending = np.flatnonzero(kinds == _NEWLINE)
        ends.append(marks[ending])
        closing.append(ending + marks_seen)
        marks_seen += marks.size
    ended = np.concatenate(ends)
    if not ended.size or ended[-1] != len(data) - 1:
        closing.append(np.array([marks_seen], np.int64))
    closed = np.concatenate((np.full(1, -1, np.int64), *closing))
    return survey.layout(ended, closed[1:] - closed[:-1], np.concatenate(newlines), np.concatenate(quotes))


def blank_records(data: bytes, layout: Layout) -> NDArray[np.bool_]:
    """Tell which records are lines without any text; spaces and tabs are none."""
    blank = np.zeros(layout.ends.size, np.bool_)
    lone = layout.cells == 1
    if lone.any():
        first = np.frombuffer(data, np.uint8)[np.minimum(layout.starts, len(data) - 1)]
        maybe = (layout.starts >= layout.ends) | (first == _SPACE) | (first == _TAB) | (first == _RETURN)
        for record in np.flatnonzero(maybe & lone).tolist():
            blank[record] = not data[layout.starts[record] : layout.ends[record]].strip()
    return blank


def cells_of(text: str, separator: str) -> list[str]:
    """Return the cells of one record's text, as csv reads them; plain splitting if csv will not."""
    # A carriage return on its own is no end of a line here, but is for csv.
    text = text.replace("\r\n", "\n").replace("\r", " ")
    try:
        return next(csv.reader(io.StringIO(text, newline=""), delimiter=separator), [""])
    except csv.Error:
        return text.split(separator)


def check_separator(faults: Faults, names: Sequence[str], separator: str, place: str) -> None:
    """Stop if the header is one cell that holds another separator: all further faults would follow."""
    if len(names) != 1:
        return
    for sign, word in SEPARATORS.items():
        if sign != separator and sign in names[0]:
            toml = "\\t" if sign == "\t" else sign
            faults.add(
                f"the header is one cell and holds a {word}; if that is what separates the cells,"
                f' say separator = "{toml}".',
                place,
                shortened(names[0]),
            )
            faults.stop_if_any()


def check_widths(faults: Faults, cells: _Offsets, lines: _Offsets, width: int) -> None:
    """Fault records with another number of cells than the header; `lines` says where each starts."""
    ragged = np.flatnonzero(cells != width)
    for record in ragged[:MOST_FAULTS].tolist():
        count = int(cells[record])
        words = "1 cell" if count == 1 else f"{count} cells"
        faults.add(f"this line has {words} and the header has {width}.", f"line {int(lines[record])}")
    faults.more += max(0, ragged.size - MOST_FAULTS)


def check_quotes(faults: Faults, data: bytes, layout: Layout, separator: str) -> None:
    """Fault quotation marks that do not enclose a whole cell."""
    if _well_quoted(data, layout, separator):
        return
    sign, position = separator.encode(), 0
    while (quote := data.find(b'"', position)) >= 0:
        start = max(data.rfind(sign, position, quote) + 1, data.rfind(b"\n", position, quote) + 1, position)
        line = f"line {layout.line_at(quote)}"
        if quote != start:
            faults.add(
                "there is a quotation mark within a cell that does not begin with one;"
                " put the whole cell in quotation marks and double the one inside.",
                line,
            )
            position = _end_of_cell(data, quote, sign)
        elif (match := _QUOTED.match(data, quote)) is None:
            faults.add("the quotation mark that opens a cell here is never closed.", line)
            return
        elif data[match.end() : match.end() + 1] in (b"", b"\n", b"\r", sign):
            position = _end_of_cell(data, match.end(), sign)
        else:
            faults.add(
                f"text follows the quotation mark that closes the cell opened on {line};"
                " a quotation mark inside a cell must be doubled.",
                f"line {layout.line_at(match.end() - 1)}",
            )
            position = _end_of_cell(data, match.end(), sign)


def _well_quoted(data: bytes, layout: Layout, separator: str) -> bool:
    """Tell whether every opening quotation mark begins a cell and every closing one ends it."""
    if not layout.quotes.size:
        return True
    array = np.frombuffer(data, np.uint8)
    opening, shutting = layout.quotes[0::2], layout.quotes[1::2]
    beside = np.zeros(256, np.bool_)
    beside[[ord(separator), _NEWLINE, _QUOTE]] = True
    begins = beside[array[opening[opening > 0] - 1]].all()
    beside[_RETURN] = True
    ends = beside[array[shutting[shutting < len(data) - 1] + 1]].all()
    return bool(layout.quotes.size % 2 == 0 and begins and ends)


def _end_of_cell(data: bytes, position: int, sign: bytes) -> int:
    """Return the offset after the next separator or newline."""
    newline = data.find(b"\n", position)
    end = data.find(sign, position, newline if newline >= 0 else len(data))
    end = end if end >= 0 else newline
    return end + 1 if end >= 0 else len(data)


def check_controls_of_text(
    faults: Faults, data: bytes, layout: Layout, names: Sequence[str], separator: str, hint: str
) -> None:
    """Fault control characters, each with its line and column."""
    offsets = _control_offsets(data, layout)
    if offsets.size and not layout.newlines.size and data.count(b"\r") > 1:
        faults.add("the lines of this file end with carriage returns only; save it with usual line ends.")
        faults.stop_if_any()
    for offset in offsets[:MOST_FAULTS].tolist():
        sign = data[offset : offset + 4].decode("utf-8", "ignore")[0]
        add_control(faults, sign, _place_at(data, layout, names, separator, offset), hint)
    faults.more += max(0, offsets.size - MOST_FAULTS)


def _control_offsets(data: bytes, layout: Layout) -> _Offsets:
    """Return the offsets of control characters (tab and line ends are none) and byte order marks."""
    array = np.frombuffer(data, np.uint8)
    found = [np.zeros(0, np.int64)]
    if layout.doubtful:
        low = (array < _SPACE) & (array != _NEWLINE) & (array != _TAB)
        before = layout.newlines[layout.newlines > 0] - 1
        low[before[array[before] == _RETURN]] = False
        found.append(np.flatnonzero(low))
    if layout.highest >= _DELETE and b"\x7f" in data:
        found.append(np.flatnonzero(array == _DELETE))
    if layout.highest > _DELETE and b"\xc2" in data:
        # U+0080 .. U+009F are the two bytes C2 80 .. C2 9F.
        pairs = np.flatnonzero(array[:-1] == 0xC2)
        following = array[pairs + 1]
        found.append(pairs[(following >= 0x80) & (following <= 0x9F)])
    if layout.highest >= 0xEF and b"\xef" in data:
        found.append(np.array([at.start() for at in re.finditer(MARK.encode(), data)], np.int64))
    return np.unique(np.concatenate(found))


def _place_at(data: bytes, layout: Layout, names: Sequence[str], separator: str, offset: int) -> str:
    """Return the line and the column's name of the byte at `offset`."""
    record = int(np.searchsorted(layout.starts, offset, side="right")) - 1
    before = data[int(layout.starts[record]) : offset].decode("utf-8", "replace")
    at = len(cells_of(before, separator)) - 1
    # A column of a broken header may have no usable name.
    named = names[at] if at < len(names) and names[at].isprintable() else ""
    return f"line {layout.line_at(offset)}, column {named or at + 1}"
