"""The draw book: an append-only, hash-chained list of what was frozen and drawn, in a file beside the sheet.

Each line is one entry and carries the hash of the line before, so that an entry cannot be changed or taken out without
breaking all that follow. A line is written in one piece and forced to the disk; a last line without its end (the program
was killed while writing) was never reported to anybody and is dropped by the next append.
"""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from core.errors import BrokenSeal, CallError
from core.sheet import canonical_json, digest_of

NOTHING = "0" * 64


class DrawBook:
    """The draw book of a sheet. Reading checks the chain."""

    def __init__(self, path: Path) -> None:
        self.path = path

    def entries(self) -> list[dict[str, Any]]:
        """Return all entries in order.

        Raises
        ------
        BrokenSeal
            naming the first line that does not fit.
        CallError
            if the file cannot be read.
        """
        if not self.path.exists():
            return []
        try:
            raw = self.path.read_bytes()
        except OSError as error:
            raise CallError(f"{self.path} cannot be read: {_cause(error)}.") from None
        return self._parsed(raw)[0]

    def _parsed(self, raw: bytes) -> tuple[list[dict[str, Any]], int]:
        entries: list[dict[str, Any]] = []
        previous, good = NOTHING, 0
        lines = raw.splitlines(keepends=True)
        for number, line in enumerate(lines, 1):
            if number == len(lines) and not line.endswith(b"\n"):
                break
            entry = _entry(line)
            if entry is None or entry.get("previous") != previous or entry.get("entry") != number:
                raise BrokenSeal(
                    "draw book",
                    f"{self.path.name}, line {number}: this entry was changed, or one before it was changed or taken out.",
                )
            entries.append(entry)
            previous = entry["hash"]
            good += len(line)
        return entries, good

    def append(self, content: dict[str, Any]) -> dict[str, Any]:
        """Add an entry and return it with its number and hash; other programs wait meanwhile.

        Raises BrokenSeal as `entries` does, CallError if the file cannot be written.
        """
        try:
            return self._append(content)
        except OSError as error:
            raise CallError(f"{self.path} cannot be written: {_cause(error)}.") from None

    def _append(self, content: dict[str, Any]) -> dict[str, Any]:
        with self.path.open("a+b") as file, _locked(file.fileno()):
            file.seek(0)
            entries, good = self._parsed(file.read())
            file.truncate(good)
            entry = {**content, "entry": len(entries) + 1, "previous": entries[-1]["hash"] if entries else NOTHING}
            entry["hash"] = digest_of(entry)
            file.write(canonical_json(entry).encode() + b"\n")
            file.flush()
            os.fsync(file.fileno())
        return entry


def _entry(line: bytes) -> dict[str, Any] | None:
    try:
        value = json.loads(line)
    except (ValueError, RecursionError):
        return None
    if not isinstance(value, dict):
        return None
    claimed = value.pop("hash", None)
    if claimed != digest_of(value) or canonical_json({**value, "hash": claimed}).encode() + b"\n" != line:
        return None
    return {**value, "hash": claimed}


def _cause(error: OSError) -> str:
    return (error.strerror or str(error)).lower()


@contextmanager
def _locked(descriptor: int) -> Iterator[None]:
    """Keep other programs out; the system lets go of the lock whenever and however this one ends."""
    if sys.platform == "win32":
        import msvcrt

        msvcrt.locking(descriptor, msvcrt.LK_LOCK, 1)
        yield
        return
    import fcntl

    fcntl.flock(descriptor, fcntl.LOCK_EX)
    try:
        yield
    finally:
        fcntl.flock(descriptor, fcntl.LOCK_UN)
