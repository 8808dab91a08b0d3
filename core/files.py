"""Files: sheets, outcomes, plans and records to and from the disk. What is written is written whole or not at all."""

from __future__ import annotations

import contextlib
import csv
import errno
import io
import json
import os
import tempfile
import unicodedata
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from core.errors import CallError, Fault, LotwrightError, SheetError
from core.frame import Table, clean, nearest
from core.process import Rows
from core.reading import TableFile, one_line, shown
from core.sheet import Sheet, read_sheet
from core.tables import read_table

LARGEST_SHEET = 64 * 2**20
_MOST_FAULTS = 20
_MOST_NAMES = 2000


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
        return read_table(
            self._path(wanted.file),
            name=wanted.file,
            encoding=wanted.encoding,
            separator=wanted.separator,
            worksheet=wanted.worksheet,
        )

    def _path(self, name: str) -> Path:
        """Return where a list is, or say what is wrong with its name in the sheet."""
        folder = self._sheet.resolve().parent
        try:
            path = (folder / name).resolve()
            missing = not path.exists()
        except (OSError, ValueError, RuntimeError):
            raise self._fault("this is no name of a file.", name) from None
        if not name.strip():
            raise self._fault("this is no name of a file.", name)
        if not self._allow and not path.is_relative_to(folder):
            allowed = "files in the folder of the sheet, or others with --allow-outside"
            raise self._fault("this file lies outside the sheet's folder.", name, allowed)
        if missing:
            raise self._fault("there is no such file.", name, near=_near(path))
        if path.is_dir():
            raise self._fault("this is a folder, not a file.", name, "the name of a list")
        return path

    def _fault(self, message: str, name: str, allowed: str = "", near: str = "") -> SheetError:
        return SheetError(Fault(message, self._sheet.name, "", "", shown(name) or '""', allowed, near))


def _near(path: Path) -> str:
    try:
        beside = [entry.name for entry in path.parent.iterdir() if entry.is_file() and entry.suffix == path.suffix]
    except OSError:
        return ""
    return nearest(path.name, beside)


def read_text(path: Path, what: str = "sheet") -> str:
    """Return a text file as it is (UTF-8; line ends and a byte order mark kept); SheetError if it cannot be read.

    `what` says what the file should be.
    """
    try:
        if path.is_dir():
            raise SheetError(Fault("this is a folder, not a file.", str(path), allowed=f"the name of a {what}"))
        if path.exists() and not path.is_file():
            raise SheetError(Fault("this is not a regular file.", str(path), allowed=f"the name of a {what}"))
        if path.stat().st_size > LARGEST_SHEET:
            raise SheetError(Fault(f"this file is too large to be a {what}.", path.name, allowed="at most 64 MiB"))
        return path.read_bytes().decode("utf-8")
    except FileNotFoundError:
        raise SheetError(Fault("there is no such file.", str(path), nearest=_near(path))) from None
    except UnicodeDecodeError as error:
        line = error.object[: error.start].count(b"\n") + 1
        raise SheetError(Fault("this is not UTF-8 text.", path.name, f"line {line}", allowed=_UTF8)) from None
    except (OSError, ValueError) as error:
        raise SheetError(Fault(f"this file cannot be read: {cause(error)}.", one_line(str(path)))) from None


_UTF8 = "a text file, saved as UTF-8"


def read_json(path: Path, what: str) -> dict[str, Any]:
    """Return the JSON object in a file; `what` says what it should be."""
    try:
        value = json.loads(read_text(path, what).removeprefix("\ufeff"))
    except (ValueError, RecursionError):
        raise CallError(f"{path.name} is no {what}: it is not JSON.") from None
    if not isinstance(value, dict):
        raise CallError(f"{path.name} is no {what}: it is JSON, but not a table of keys and values.")
    return value


def read_record(path: Path) -> dict[str, Any]:
    """Return what a record's file holds; CallError if it was never one (whether it is true is for `verify` to say)."""
    record = read_json(path, "record")
    if "format" not in record and "digests" not in record:
        raise CallError(f"{path.name} is no record: it has neither a format nor digests.")
    return record


def write_whole(path: Path, data: bytes) -> None:
    """Write a file as a whole: a temporary file beside it, forced to the disk, then renamed.

    Raises CallError if that fails (no right to write, disk full); the old file, and the folders, are then as they were.
    """
    temporary = ""
    made: list[Path] = []
    try:
        made = [folder for folder in path.parents if not folder.exists()]
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
        for folder in made:
            with contextlib.suppress(OSError):
                folder.rmdir()
        raise CallError(f"{path} cannot be written: {cause(error)}.") from None


def refuse_other(path: Path, what: str, key: str) -> None:
    """Raise CallError if a file is there that was not written by this program for this purpose.

    `key` is a key that such a file has: a list or a sheet must not be lost because its name was given by mistake.
    """
    if path.is_dir():
        raise CallError(f"{path} is a folder, not a file. Give the {what} a name (--to).")
    if not path.exists():
        return
    try:
        ours = key in read_json(path, what)
    except LotwrightError:
        ours = False
    if not ours:
        raise CallError(f"{path} is there already and is no {what}. Choose another name (--to).")


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
    unit_column = next((column for column in ("unit", sheet.frame.id) if column in table.columns), "unit")
    missing = [column for column in (unit_column, *header[1:]) if column not in table.columns]
    if missing:
        raise SheetError(
            Fault(
                f"this file has no column {' and no column '.join(missing)}.",
                table.name,
                found=", ".join(table.columns),
                allowed=f"the columns of outcomes.csv: {', '.join(('outcome', *header))}",
            )
        )
    names = table.text("outcome") if "outcome" in table.columns else ["1"] * len(table)
    seconds = table.text(header[1]) if len(header) > 1 else [""] * len(table)
    faults: list[Fault] = []
    grouped: dict[str, list[tuple[int, str]]] = {}
    for row, (name, unit, second) in enumerate(zip(names, table.text(unit_column), seconds, strict=True)):
        index = sheet.frame.index(unit)
        if index is None:
            near = (
                nearest(unit, sheet.frame.ids) if sheet.frame.size <= _MOST_NAMES and len(faults) < _MOST_FAULTS else ""
            )
            place = table.place(row, unit_column)
            message = "there is no such unit in the list."
            faults.append(Fault(message, table.name, place, found=shown(unit) or "a blank", nearest=near))
        else:
            grouped.setdefault(name, []).append((index, second))
    if len(faults) > _MOST_FAULTS:
        more = Fault(f"and {len(faults) - _MOST_FAULTS:,} more lines like these.", table.name)
        raise SheetError([*faults[:_MOST_FAULTS], more])
    if faults:
        raise SheetError(faults)
    return [(name, sheet.kind.read(lines, sheet.frame.ids)) for name, lines in grouped.items()]


_CAUSES = {
    errno.ENOSPC: "no space is left on the disk",
    errno.EACCES: "permission was denied",
    errno.EPERM: "permission was denied",
    errno.EROFS: "the disk is read-only",
    errno.EISDIR: "there is a folder of this name",
    errno.EEXIST: "a part of its path is a file, not a folder",
    errno.ENOTDIR: "a part of its path is a file, not a folder",
    errno.ENOENT: "there is no such folder",
    errno.ENAMETOOLONG: "its name is too long",
}


def cause(error: Exception) -> str:
    """Return in words why a file cannot be read or written."""
    if isinstance(error, OSError):
        return _CAUSES.get(error.errno or 0, (error.strerror or "the system gives no reason").lower())
    return "this is no name of a file"


def unique_parties(texts: Sequence[str]) -> list[tuple[str, str]]:
    """Return the seed texts of a call as (name, text): one text alone, or NAME=TEXT each."""
    if not texts:
        raise CallError(
            'A draw needs a seed: --seed "TEXT". Take it from outside, for example from dice thrown in public.'
        )
    for text in texts:
        if not text.strip():
            raise CallError("The seed text is empty.")
        if any(unicodedata.category(sign) in ("Cc", "Cs", "Zl", "Zp") for sign in text):
            raise CallError("The seed text has a line break or another control character; write it on one line.")
    if len(texts) == 1:
        return [("", texts[0])]
    parties = []
    for text in texts:
        name, equals, value = text.partition("=")
        if not equals or not name.strip() or not value.strip():
            raise CallError(f"With several seeds each is NAME=TEXT. Found: {text}")
        parties.append((name.strip(), value))
    names = [clean(name) for name, _ in parties]
    twice = next((name for name in names if names.count(name) > 1), None)
    if twice is not None:
        raise CallError(f"Two seeds have the same name. Found: {twice}")
    return parties
