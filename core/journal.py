"""The journal of a draw: finished blocks, one per line, so that an interrupted draw goes on to the same bytes."""

from __future__ import annotations

import contextlib
import hashlib
import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from core.errors import CallError
from core.sheet import canonical_json


class FileJournal:
    """Blocks kept in a file, each line with a checksum.

    A line that was being written when the program was killed is recognised and dropped; everything before it counts.

    Parameters
    ----------
    path
        The file; created if missing.
    draw
        What identifies the draw (digests of plan and key, number of outcomes): a journal of another draw is refused.
    resume
        Whether an existing journal is gone on with; else it is an error that there is one.
    """

    def __init__(self, path: Path, draw: dict[str, Any], *, resume: bool) -> None:
        self._path = path
        self._kept: list[dict[str, Any]] = []
        good = 0
        if path.exists():
            if not resume:
                raise CallError(
                    f"{path.name} holds an unfinished draw. Go on with it (--resume), or choose another folder (--to)."
                )
            good = self._read(draw)
        self._file = path.open("r+b" if path.exists() else "w+b")
        self._file.truncate(good)
        self._file.seek(good)
        if not good:
            self._write({"draw": draw})

    def _read(self, draw: dict[str, Any]) -> int:
        """Read the good lines; return how many bytes they take."""
        good = 0
        for number, line in enumerate(self._path.read_bytes().splitlines(keepends=True)):
            value = _checked(line)
            if value is None:
                break
            if number == 0 and value.get("draw") != draw:
                raise CallError(
                    f"{self._path.name} belongs to another draw (other sheet, plan, seed or number of outcomes). "
                    "Choose another folder (--to)."
                )
            if number and value["block"] != number - 1:
                break
            if number:
                self._kept.append(value)
            good += len(line)
        return good

    def blocks(self) -> Iterator[dict[str, Any]]:
        """Return what was kept."""
        return iter(self._kept)

    def keep(self, entry: dict[str, Any]) -> None:
        """Write a block."""
        self._write(entry)

    def _write(self, value: dict[str, Any]) -> None:
        text = canonical_json(value)
        try:
            self._file.write(f"{_sum(text)} {text}\n".encode())
            self._file.flush()
        except OSError as error:
            raise CallError(f"{self._path} cannot be written: {(error.strerror or str(error)).lower()}.") from None

    def close(self) -> None:
        """Close the file and leave it."""
        # what could not be written was told of when it was written
        with contextlib.suppress(OSError):
            self._file.close()

    def finish(self) -> None:
        """Close the file and remove it: the draw is complete."""
        self.close()
        self._path.unlink(missing_ok=True)


def _sum(text: str) -> str:
    return hashlib.sha256(text.encode()).hexdigest()[:16]


def _checked(line: bytes) -> dict[str, Any] | None:
    try:
        found, text = line.decode().rstrip("\n").split(" ", 1)
        value = json.loads(text) if line.endswith(b"\n") and found == _sum(text) else None
    except (UnicodeDecodeError, ValueError):
        return None
    return value if isinstance(value, dict) else None
