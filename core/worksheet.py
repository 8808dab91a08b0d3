"""Reading one worksheet of an XLSX file as text cells."""

from __future__ import annotations

import io
import re
import zipfile
from collections.abc import Sequence
from xml.etree import ElementTree

import numpy as np
import polars as pl

from core.cells import (
    BLOCK_LINES,
    CONTROLS,
    Faults,
    block_digests,
    check_controls,
    check_names,
    cleaned,
    without_blank_rows,
)
from core.errors import Fault, SheetError
from core.frame import Table, listed, nearest

_ERROR_CELL = re.compile(rb'<c\s[^>]*\bt="e"[^>]*>')
_LONG_NUMBER = re.compile(rb"<c\s([^>]*)>\s*<v>-?(?:[0-9]{16,}|[0-9.]+[eE]\+?(?:1[5-9]|[2-9][0-9]|[0-9]{3}))</v>")
_MERGED = re.compile(rb'<(?:\w+:)?mergeCell\s[^>]*\bref="([A-Z0-9:]+)"')
_ADDRESS = re.compile(rb'\br="([A-Z0-9]+)"')


def read_worksheet(raw: bytes, shown: str, worksheet: str | None, sha256: str) -> Table:
    """Return the table on a worksheet (the first one by default) of the XLSX file with the bytes `raw`.

    The first row with text is the header. Whole numbers have no decimals, days are written ``2026-03-01``,
    points in time ``2026-03-01 08:30:00``, times of day ``08:30:00``. Blocks are of 1,000 rows of cells in
    canonical form.

    Raises
    ------
    SheetError
        for a damaged file, an unknown worksheet, merged cells, error values, numbers with more digits than a
        spreadsheet keeps, a header with blank or repeated names, control characters.
    """
    cells, name = _cells_of(raw, shown, worksheet)
    faults = Faults(shown)
    _check_part(faults, _part_of(raw, name))
    cells = cells.with_columns(pl.all().str.replace_all("\r\n", "\n", literal=True))
    return _table_of(faults, _plain_times(cleaned(cells, spaced=True, beyond=True)), sha256)


def _cells_of(raw: bytes, shown: str, worksheet: str | None) -> tuple[pl.DataFrame, str]:
    """Return all cells from the first row on, and the worksheet's name."""
    # Imported here: no other list needs it, and it takes time to load.
    import fastexcel

    try:
        book = fastexcel.read_excel(raw)
        names = book.sheet_names
        name = worksheet if worksheet is not None else names[0]
        if name in names:
            return book.load_sheet(name, header_row=None, skip_rows=0, dtypes="string").to_polars(), name
    except (fastexcel.FastExcelError, pl.exceptions.PolarsError, IndexError, ValueError):
        raise SheetError(
            Fault("this file is no XLSX workbook, or it is damaged or locked by a password.", shown)
        ) from None
    raise SheetError(
        Fault(
            "this file has no such worksheet.",
            shown,
            key="worksheet",
            found=name,
            allowed=listed(names),
            nearest=nearest(name, names),
        )
    )


def _table_of(faults: Faults, cells: pl.DataFrame, sha256: str) -> Table:
    """Return the table of a worksheet's cells."""
    # Columns without any text, such as formatted ones at the right, are no columns of the list.
    cells = cells.select([column for column in cells.columns if (cells[column] != "").any()])
    if not cells.width:
        raise SheetError(Fault("this worksheet is empty.", faults.file))
    head = min(int((cells[column] != "").arg_max() or 0) for column in cells.columns)
    names = [str(name) for name in cells.row(head)]
    check_names(faults, names, f"row {head + 1}")
    _check_cells(faults, cells, names)
    if head + 1 == cells.height:
        faults.add("there are no rows below the header.")
    faults.stop_if_any()
    rows = (cells.slice(start, BLOCK_LINES).rows() for start in range(0, cells.height, BLOCK_LINES))
    return without_blank_rows(
        Table(
            faults.file,
            cells.slice(head + 1).rename(dict(zip(cells.columns, names, strict=True))),
            np.arange(head + 2, cells.height + 1, dtype=np.int64),
            sha256,
            block_digests(rows),
            "row",
        )
    )


def _check_cells(faults: Faults, cells: pl.DataFrame, names: Sequence[str]) -> None:
    for number, (column, name) in enumerate(zip(cells.columns, names, strict=True), start=1):
        for row in cells[column].str.contains(CONTROLS).arg_true().to_list():
            check_controls(faults, cells[column][row], f"row {row + 1}, column {name or number}")


def _plain_times(cells: pl.DataFrame) -> pl.DataFrame:
    """Write days without a time, and times without a day, as a worksheet shows them."""
    day = pl.all().str.replace(r"^(\d{4}-\d{2}-\d{2}) 00:00:00$", "$1")
    return cells.select(day.str.replace(r"^1899-12-3[01] (\d{2}:\d{2}:\d{2})$", "$1"))


def _part_of(raw: bytes, worksheet: str) -> bytes:
    """Return the XML of a worksheet, or b"" if the workbook is put together in an unusual way."""
    try:
        with zipfile.ZipFile(io.BytesIO(raw)) as book:
            links = ElementTree.fromstring(book.read("xl/_rels/workbook.xml.rels"))
            targets = {link.get("Id", ""): link.get("Target", "") for link in links}
            for element in ElementTree.fromstring(book.read("xl/workbook.xml")).iter():
                if element.tag.endswith("}sheet") and element.get("name") == worksheet:
                    key = next((value for name, value in element.items() if name.endswith("}id")), "")
                    target = targets.get(key, "")
                    return book.read(target.lstrip("/") if target.startswith("/") else f"xl/{target}")
    except (zipfile.BadZipFile, KeyError, ElementTree.ParseError, NotImplementedError, RuntimeError, OSError):
        return b""
    return b""


def _check_part(faults: Faults, part: bytes) -> None:
    """Fault what is lost when cells are read as text: merged cells, errors, digits beyond the fifteenth."""
    for match in _MERGED.finditer(part):
        faults.add("these cells are merged; give each row its own cell.", f"cells {match[1].decode()}")
    for match in _ERROR_CELL.finditer(part):
        faults.add("this cell shows an error of the spreadsheet and has no value.", _address(match[0]))
    for match in _LONG_NUMBER.finditer(part):
        if b't="' not in match[1] or b't="n"' in match[1]:
            message = "this number has more digits than a spreadsheet keeps (15); store it as text."
            faults.add(message, _address(match[1]))


def _address(attributes: bytes) -> str:
    address = _ADDRESS.search(attributes)
    return f"cell {address[1].decode()}" if address else "a cell"
