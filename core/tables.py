"""Reading lists: CSV and XLSX files and rows written in the sheet become a `Table`, or a list of faults.

A file is looked at whole before it is parsed, so that every fault is named with its line, and nothing is
guessed: encoding and separator are what the caller says. Lines without any text (also lines of separators
only) are skipped; the lines after them keep their numbers.
"""

from __future__ import annotations

import codecs
import hashlib
import io
import os
from collections.abc import Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from decimal import Decimal
from pathlib import Path

import numpy as np
import polars as pl
from numpy.typing import NDArray

from core.cells import (
    BLOCK_LINES,
    MARK,
    Faults,
    block_digests,
    canonical,
    check_controls,
    check_names,
    cleaned,
    without_blank_rows,
)
from core.csvtext import (
    SEPARATORS,
    Layout,
    blank_records,
    cells_of,
    check_controls_of_text,
    check_quotes,
    check_separator,
    check_widths,
    layout_of,
)
from core.errors import Fault, SheetError
from core.frame import Table, clean, listed, nearest, shortened
from core.worksheet import read_worksheet

ENCODINGS = (
    *("utf-8", "utf-16", "utf-16-le", "utf-16-be"),
    *("cp1250", "cp1251", "cp1252", "cp1253", "cp1254", "cp1257", "cp437", "cp850"),
    *("latin-1", "iso-8859-2", "iso-8859-15", "koi8-r", "mac-roman"),
    *("big5", "euc-kr", "gb18030", "shift-jis"),
)

_PIECE = 1 << 18
_PART = 1 << 22
_MAGIC = (
    (b"\x89PNG", "a PNG picture"),
    (b"\xff\xd8\xff", "a JPEG picture"),
    (b"GIF8", "a GIF picture"),
    (b"%PDF", "a PDF document"),
    (b"PK\x03\x04", "a ZIP archive or an office file (a workbook's name must end in .xlsx)"),
    (b"\xd0\xcf\x11\xe0", "an old office file (save it as .xlsx or .csv)"),
    (b"\x1f\x8b", "a gzip archive"),
    (b"\x7fELF", "a program"),
    (b"SQLite format 3\x00", "a database"),
    (b"PAR1", "a Parquet file"),
)
_OTHER_WORKBOOKS = (".xls", ".xlsm", ".xlsb", ".ods", ".numbers")
_CELL_VALUES = "text in quotation marks, a whole number, a decimal number written in full"


def read_table(
    path: Path,
    *,
    name: str | None = None,
    encoding: str = "utf-8",
    separator: str = ",",
    worksheet: str | None = None,
) -> Table:
    r"""Read a CSV file, or an XLSX file if its name ends in ``.xlsx`` (see `core.worksheet`).

    Parameters
    ----------
    path
        The file.
    name
        What the user calls it, for messages; by default the file's own name.
    encoding
        One of `ENCODINGS`. A ``utf-8`` file may start with a byte order mark, a ``utf-16`` file must.
    separator
        ``,`` or ``;`` or a tab. The quotation mark is ``"``, doubled inside a quoted cell. Lines end with
        ``\n`` or ``\r\n``; a line break inside a cell becomes ``\n``.
    worksheet
        Name of the worksheet; by default the first one.

    Returns
    -------
    Table
        Every cell as cleaned text. Blocks are of 1,000 lines (up to a byte 0A) of the file.

    Raises
    ------
    SheetError
        with every fault that was found: up to 20 of them, and how many more.
    """
    shown = path.name if name is None else name
    if separator not in SEPARATORS:
        kinds = ", ".join(f"{sign!r} ({word})" for sign, word in SEPARATORS.items())
        message = "this separator is not known."
        raise SheetError(Fault(message, shown, key="separator", found=repr(separator), allowed=kinds))
    known = _known_encoding(shown, encoding)
    suffix = path.suffix.lower()
    if suffix in _OTHER_WORKBOOKS:
        raise SheetError(Fault(f"files of this type ({suffix}) are not read; save it as .xlsx or .csv.", shown))
    if worksheet is not None and suffix != ".xlsx":
        raise SheetError(Fault("only .xlsx files have worksheets.", shown, key="worksheet", found=worksheet))
    raw, sha256 = _bytes_of(path, shown)
    if suffix == ".xlsx":
        return read_worksheet(raw, shown, worksheet, sha256)
    return _read_csv(raw, shown, known, separator, sha256)


# --- rows written in the sheet ------------------------------------------------------------------------------


def inline_table(name: str, rows: Sequence[Mapping[str, object]]) -> Table:
    """Return the table of rows written in the sheet; every row must have the columns of the first.

    Values are text, whole numbers or `decimal.Decimal`, written out in full. Lines count the rows from 1. The
    digest is that of the header and the rows of cells in canonical form (`core.cells.canonical`).

    Raises
    ------
    SheetError
        naming each row and column that is wrong: other types, missing or unknown columns, control characters.
    """
    faults = Faults(name)
    if not rows:
        faults.add("the list has no rows.")
        faults.stop_if_any()
    names = [clean(column) for column in rows[0]]
    if not names:
        faults.add("the list has no columns.")
    check_names(faults, names, "row 1")
    for column in names:
        check_controls(faults, column, "row 1")
    cells: list[list[str]] = []
    for number, row in enumerate(rows, start=1):
        values = {clean(column): value for column, value in row.items()}
        if number > 1:
            _check_keys(faults, f"row {number}", names, [clean(column) for column in row])
        cells.append([_inline_cell(faults, f"row {number}, column {key}", values.get(key, "")) for key in names])
    faults.stop_if_any()
    everything = [names, *cells]
    return Table(
        name,
        pl.DataFrame(cells, schema=dict.fromkeys(names, pl.String), orient="row"),
        np.arange(1, len(rows) + 1, dtype=np.int64),
        hashlib.sha256(canonical(everything)).hexdigest(),
        block_digests(everything[start : start + BLOCK_LINES] for start in range(0, len(everything), BLOCK_LINES)),
        "row",
    )


def _check_keys(faults: Faults, place: str, names: Sequence[str], keys: Sequence[str]) -> None:
    for key in keys:
        if key not in names:
            faults.add("the first row has no such column.", place, key, listed(names), nearest(key, names))
    for column in names:
        if column not in keys:
            faults.add(f'column {column} of the first row is missing here (write "" for a blank).', place)
    if len(set(keys)) < len(keys):
        faults.add("two columns of this row have the same name.", place)


def _inline_cell(faults: Faults, place: str, value: object) -> str:
    if isinstance(value, str):
        check_controls(faults, value, place)
        return clean(value)
    if isinstance(value, int) and not isinstance(value, bool):
        if value.bit_length() <= 256:
            return str(value)
        faults.add("this number is too large.", place, allowed=_CELL_VALUES)
    elif isinstance(value, Decimal):
        exponent = value.as_tuple().exponent
        if isinstance(exponent, int) and -36 <= exponent <= 0:
            return format(value, "f")
        faults.add("this number is not written in full.", place, shortened(str(value)), _CELL_VALUES)
    else:
        faults.add("this value cannot be a cell.", place, shortened(str(value)), _CELL_VALUES)
    return ""


# --- from the file to UTF-8 text ----------------------------------------------------------------------------


def _known_encoding(shown: str, encoding: str) -> str:
    """Return the name `ENCODINGS` has for `encoding`, such as ``cp1252`` for ``windows-1252``."""
    known = {codecs.lookup(name).name: name for name in ENCODINGS} | {"utf-8-sig": "utf-8"}
    try:
        found = codecs.lookup(encoding).name
    except (LookupError, ValueError):
        found = ""
    if found in known:
        return known[found]
    raise SheetError(
        Fault(
            "this encoding is not known.",
            shown,
            key="encoding",
            found=encoding,
            allowed=", ".join(ENCODINGS),
            nearest=nearest(encoding, ENCODINGS),
        )
    )


def _bytes_of(path: Path, shown: str) -> tuple[bytes, str]:
    """Return the whole file and its SHA-256, or say why it cannot be read."""
    try:
        if path.is_dir():
            raise SheetError(Fault("this is a folder, not a file.", shown))
        if path.exists() and not path.is_file():
            raise SheetError(Fault("this is not a regular file.", shown))
        return _read_and_hash(path, shown)
    except FileNotFoundError:
        raise SheetError(Fault("there is no such file.", shown, nearest=_near_file(path))) from None
    except PermissionError:
        raise SheetError(Fault("this file may not be read: permission was denied.", shown)) from None
    except (OSError, ValueError) as error:
        reason = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        raise SheetError(Fault(f"this file cannot be read: {reason}.", shown)) from None


def _read_and_hash(path: Path, shown: str) -> tuple[bytes, str]:
    """Read the file in parts, each of which is hashed while the next one is read."""
    digest = hashlib.sha256()
    with path.open("rb", buffering=0) as file, ThreadPoolExecutor(max_workers=1) as hashing:
        size = os.fstat(file.fileno()).st_size
        holder = io.BytesIO(bytes(size))
        view = holder.getbuffer()
        at = 0
        while count := file.readinto(view[at : at + _PART]):
            hashing.submit(digest.update, view[at : at + count])
            at += count
        if at != size or file.read(1):
            raise SheetError(Fault("this file changed while it was read.", shown))
    # With no view of it left, the parts stay where they were read to: `getvalue` does not copy.
    del view
    return holder.getvalue(), digest.hexdigest()


def _near_file(path: Path) -> str:
    try:
        return nearest(path.name, [entry.name for entry in path.parent.iterdir()])
    except OSError:
        return ""


def _refuse_binary(raw: bytes, shown: str, encoding: str) -> None:
    """Stop at files that are no text, or text whose first bytes give another encoding away."""
    for start, words in _MAGIC:
        if raw.startswith(start):
            raise SheetError(Fault(f"this is no CSV file: it looks like {words}.", shown))
    if encoding.startswith("utf-16"):
        return
    head = raw[:4096]
    nuls = head.count(0)
    likely = ""
    if raw.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)):
        likely = "utf-16"
    elif nuls > len(head) // 3:
        likely = "utf-16-le" if head[1::2].count(0) > nuls // 2 else "utf-16-be"
    if likely:
        message = f'this file is not {encoding}; if it is a CSV file, say encoding = "{likely}".'
        raise SheetError(Fault(message, shown))
    controls = sum(1 for byte in head if byte < 32 and byte not in b"\t\n\r")
    if controls > 8 and controls > len(head) // 10:
        raise SheetError(Fault("this is no CSV file: it holds binary data.", shown))


def _text_of(raw: bytes, shown: str, encoding: str) -> bytes:
    """Return the file's text as UTF-8 without byte order mark. What is said to be UTF-8 is not looked at yet."""
    _refuse_binary(raw, shown, encoding)
    if encoding == "utf-8":
        return raw.removeprefix(codecs.BOM_UTF8)
    if encoding == "utf-16" and not raw.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)):
        message = "a utf-16 file starts with a byte order mark and this one does not."
        raise SheetError(Fault(message, shown, key="encoding", found=encoding, allowed="utf-16-le, utf-16-be"))
    try:
        return raw.decode(encoding).removeprefix(MARK).encode("utf-8")
    except UnicodeDecodeError as error:
        raise _wrong_bytes(error, encoding, shown) from None


def _check_utf8(raw: bytes, shown: str) -> None:
    """Raise SheetError at the first byte that is not UTF-8."""
    # Piece by piece, the decoded text never has to be held as a whole.
    decoder = codecs.getincrementaldecoder("utf-8")()
    try:
        for base in range(0, len(raw), _PIECE):
            decoder.decode(raw[base : base + _PIECE], base + _PIECE >= len(raw))
    except UnicodeDecodeError:
        try:
            raw.decode("utf-8")
        except UnicodeDecodeError as error:
            raise _wrong_bytes(error, "utf-8", shown) from None


def _wrong_bytes(error: UnicodeDecodeError, encoding: str, shown: str) -> SheetError:
    line = error.object[: error.start].decode(encoding, "replace").count("\n") + 1
    found = " ".join(f"{byte:02X}" for byte in error.object[error.start : max(error.end, error.start + 1)][:4])
    message = f"these bytes are not {encoding}; name the encoding of the file, such as"
    return SheetError(Fault(f'{message} encoding = "cp1252".', shown, f"line {line}", found=found))


# --- from the text to the table -----------------------------------------------------------------------------


def _read_csv(raw: bytes, shown: str, encoding: str, separator: str, sha256: str) -> Table:
    data = _text_of(raw, shown, encoding)
    if not data or data.isspace():
        raise SheetError(Fault("this file is empty.", shown))
    # Hashing and parsing let go of the interpreter, so they run beside the checks. If one of those finds a fault,
    # what was parsed is dropped, whatever became of it.
    with ThreadPoolExecutor(max_workers=2) as beside:
        parsing = beside.submit(_parsed, data, separator, shown)
        layout = layout_of(data, separator)
        if encoding == "utf-8" and layout.highest >= 0x80:
            _check_utf8(raw, shown)
        newlines = layout.newlines if encoding == "utf-8" else _newlines_of(raw)
        blocks = beside.submit(_block_digests, raw, newlines, len(raw) - len(data) if encoding == "utf-8" else 0)
        blank = blank_records(data, layout)
        names, lines = _checked(data, layout, blank, shown, encoding, separator)
        if blank.any():
            cells = _parsed(_without_blank_lines(data, layout, blank), separator, shown)
        else:
            cells = parsing.result()
    if cells.shape != (lines.size, len(names)):
        raise SheetError(Fault("this file could not be divided into lines and cells without doubt.", shown))
    cells.columns = names
    if layout.broken and b"\r\n" in data:
        cells = cells.with_columns(pl.all().str.replace_all("\r\n", "\n", literal=True))
    cells = cleaned(cells, spaced=layout.spaced, beyond=_beyond(data, layout.highest))
    return without_blank_rows(Table(shown, cells, lines, sha256, blocks.result()))


def _newlines_of(raw: bytes) -> NDArray[np.int64]:
    return np.flatnonzero(np.frombuffer(raw, np.uint8) == ord("\n"))


def _block_digests(raw: bytes, newlines: NDArray[np.int64], shift: int) -> tuple[str, ...]:
    """Return the SHA-256 of each run of 1,000 lines; `shift` is what to add to the offsets of newlines."""
    cuts = [0, *(newlines[BLOCK_LINES - 1 :: BLOCK_LINES] + (shift + 1)).tolist()]
    if cuts[-1] != len(raw):
        cuts.append(len(raw))
    view = memoryview(raw)
    return tuple(hashlib.sha256(view[a:b]).hexdigest() for a, b in zip(cuts, cuts[1:], strict=False))


def _checked(
    data: bytes, layout: Layout, blank: NDArray[np.bool_], shown: str, encoding: str, separator: str
) -> tuple[list[str], NDArray[np.int64]]:
    """Check the text; return the column names and the line on which each record below them starts."""
    faults = Faults(shown)
    head = int(np.argmin(blank))
    text = data[int(layout.starts[head]) : int(layout.ends[head])].decode("utf-8")
    names = [clean(cell) for cell in cells_of(text, separator)]
    place = f"line {int(layout.lines[head])}"
    check_quotes(faults, data, layout, separator)
    well_quoted = not faults
    if well_quoted:
        check_separator(faults, names, separator, place)
        check_names(faults, names, place)
    hint = ' (a file from Windows may need encoding = "cp1252")' if encoding in ("latin-1", "iso-8859-15") else ""
    check_controls_of_text(faults, data, layout, names, separator, hint)
    below = slice(1, None) if not blank.any() else np.flatnonzero(~blank)[1:]
    lines = layout.lines[below]
    if well_quoted:
        check_widths(faults, layout.cells[below], lines, len(names))
        if not lines.size:
            faults.add("there are no lines below the header.")
    faults.stop_if_any()
    return names, lines


def _without_blank_lines(data: bytes, layout: Layout, blank: NDArray[np.bool_]) -> bytes:
    edges = np.flatnonzero(np.diff(np.concatenate(([True], blank, [True])).astype(np.int8)))
    view = memoryview(data)
    runs = zip(edges[0::2].tolist(), edges[1::2].tolist(), strict=True)
    return b"".join(view[int(layout.starts[a]) : int(layout.ends[b - 1]) + 1] for a, b in runs)


def _parsed(text: bytes, separator: str, shown: str) -> pl.DataFrame:
    try:
        return pl.read_csv(text, separator=separator, infer_schema=False)
    except pl.exceptions.PolarsError as error:
        reason = shortened(str(error), 200)
        raise SheetError(Fault(f"this file cannot be read as CSV: {reason}", shown)) from None


def _beyond(data: bytes, highest: int) -> bool:
    """Tell whether a text may hold white space beyond ASCII, or may not be in NFC, from its highest byte."""
    # Characters below U+0300, the first that starts with byte CC, never combine, and one of them is a space.
    return highest >= 0xCC or (highest >= 0xC2 and b"\xc2" in data and "\u00a0".encode() in data)
