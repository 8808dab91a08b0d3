"""Files: sheets, outcomes, plans and records to and from the disk. What is written is written whole or not at all."""

from __future__ import annotations

import csv
import io
import json
import os
import tempfile
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from core.errors import CallError, Fault, SheetError
from core.frame import Table
from core.process import Rows
from core.reading import TableFile
from core.sheet import Sheet, read_sheet
from core.tables import read_table

LARGEST_SHEET = 64 * 2**20


def open_sheet(path: Path, *, allow_outside: bool = False) -> Sheet:
    """Return the sheet in a file; its lists are looked up beside it.

    Raises
    ------
    SheetError
        if the sheet or one of its lists is wrong; with all faults.
    """
    return read_sheet(read_text(path), path.name, _Beside(path, allow_outside))


class _Beside:
    """Opens the lists of a sheet: those in its folder, others only if the user allows it."""

    def __init__(self, sheet: Path, allow_outside: bool) -> None:
        self._sheet, self._allow = sheet, allow_outside

    def __call__(self, wanted: TableFile) -> Table:
        folder = self._sheet.resolve().parent
        try:
            path = (folder / wanted.file).resolve()
        except (OSError, ValueError, RuntimeError):
            raise SheetError(Fault("this is no name of a file.", self._sheet.name, found=wanted.file)) from None
        if not self._allow and not path.is_relative_to(folder):
            raise SheetError(
                Fault(
                    "this file lies outside the sheet's folder.",
                    self._sheet.name,
                    found=wanted.file,
                    allowed="files in the folder of the sheet, or others with --allow-outside",
                )
            )
        return read_table(
            path,
            name=wanted.file,
            encoding=wanted.encoding,
            separator=wanted.separator,
            worksheet=wanted.worksheet,
        )


def read_text(path: Path) -> str:
    """Return a text file as it is (UTF-8; line ends kept); SheetError if it cannot be read."""
    try:
        if path.is_dir():
            raise SheetError(Fault("this is a folder, not a file.", str(path), allowed="the name of a sheet"))
        if path.stat().st_size > LARGEST_SHEET:
            raise SheetError(Fault("this file is too large to be a sheet.", path.name, allowed="at most 64 MiB"))
        return path.read_bytes().decode("utf-8-sig")
    except FileNotFoundError:
        raise SheetError(Fault("there is no such file.", str(path))) from None
    except UnicodeDecodeError as error:
        line = path.read_bytes()[: error.start].count(b"\n") + 1
        raise SheetError(Fault("this is not UTF-8 text.", path.name, f"line {line}", allowed="UTF-8")) from None
    except (OSError, ValueError) as error:
        raise SheetError(Fault(f"this file cannot be read: {_cause(error)}.", str(path))) from None


def read_json(path: Path, what: str) -> dict[str, Any]:
    """Return the JSON object in a file; `what` says what it should be."""
    try:
        value = json.loads(read_text(path))
    except (ValueError, RecursionError):
        raise CallError(f"{path.name} is no {what}: it is not JSON.") from None
    if not isinstance(value, dict):
        raise CallError(f"{path.name} is no {what}.")
    return value


def write_whole(path: Path, data: bytes) -> None:
    """Write a file as a whole: a temporary file beside it, forced to the disk, then renamed.

    Raises CallError if that fails (no right to write, disk full); the old file is then as it was.
    """
    temporary = ""
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        descriptor, temporary = tempfile.mkstemp(prefix=f".{path.name}.", dir=path.parent)
        with os.fdopen(descriptor, "wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        os.chmod(temporary, 0o644)
        os.replace(temporary, path)
    except OSError as error:
        if temporary:
            Path(temporary).unlink(missing_ok=True)
        raise CallError(f"{path} cannot be written: {_cause(error)}.") from None


def json_bytes(value: object) -> bytes:
    """Return JSON to be read by people too."""
    return (json.dumps(value, indent=1, ensure_ascii=False) + "\n").encode()


def outcomes_bytes(sheet: Sheet, rows: Rows) -> bytes:
    """Return outcomes.csv: one line per unit (duty, position, pair), outcomes counted from 1."""
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(("outcome", *sheet.kind.header))
    ids = sheet.frame.ids
    for number, row in enumerate(rows, 1):
        writer.writerows((number, *line) for line in sheet.kind.lines(row, ids))
    return text.getvalue().encode()


def read_outcomes(sheet: Sheet, path: Path) -> list[tuple[str, Rows | str]]:
    """Return the outcomes in a file as (name, row), or (name, sentence) where the lines are no outcome.

    The column ``outcome`` may be missing: then the file holds one outcome.
    """
    table = read_table(path)
    header = sheet.kind.header
    unit_column = "unit" if "unit" in table.columns else sheet.frame.id
    wanted = (unit_column, *header[1:])
    missing = [column for column in wanted if column not in table.columns]
    if missing:
        raise SheetError(
            Fault(
                f"an outcome of this sheet has the columns {', '.join(('outcome', *header))}.",
                table.name,
                found=", ".join(table.columns),
            )
        )
    names = table.text("outcome") if "outcome" in table.columns else ["1"] * len(table)
    seconds = table.text(header[1]) if len(header) > 1 else [""] * len(table)
    faults: list[Fault] = []
    grouped: dict[str, list[tuple[int, str]]] = {}
    for row, (name, unit, second) in enumerate(zip(names, table.text(unit_column), seconds, strict=True)):
        index = sheet.frame.index(unit)
        if index is None:
            faults.append(Fault("there is no such unit in the list.", table.name, table.place(row), found=unit))
        else:
            grouped.setdefault(name, []).append((index, second))
    if faults:
        raise SheetError(faults[:20])
    return [(name, sheet.kind.read(lines, sheet.frame.ids)) for name, lines in grouped.items()]


def _cause(error: Exception) -> str:
    return error.strerror.lower() if isinstance(error, OSError) and error.strerror else str(error)


def unique_parties(texts: Sequence[str]) -> list[tuple[str, str]]:
    """Return the seed texts of a call as (name, text): one text alone, or NAME=TEXT each."""
    if not texts:
        raise CallError(
            'A draw needs a seed: --seed "TEXT". Take it from outside, for example from dice thrown in public.'
        )
    for text in texts:
        if not text.strip():
            raise CallError("The seed text is empty.")
        if any(ord(sign) < 32 or ord(sign) == 127 for sign in text):
            raise CallError("The seed text has a line break or another control character; write it on one line.")
    if len(texts) == 1:
        return [("", texts[0])]
    parties = []
    for text in texts:
        name, equals, value = text.partition("=")
        if not equals or not name.strip() or not value.strip():
            raise CallError(f"With several seeds each is NAME=TEXT. Found: {text!r}.")
        parties.append((name.strip(), value))
    names = [name for name, _ in parties]
    twice = next((name for name in names if names.count(name) > 1), None)
    if twice is not None:
        raise CallError(f"Two seeds have the same name: {twice!r}.")
    return parties
