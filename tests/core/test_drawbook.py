"""The draw book: its chain shows every change, survives being killed, and stands two programs at once."""

from __future__ import annotations

import itertools
import json
import subprocess
import sys
from pathlib import Path

import pytest

import core
from core.drawbook import NOTHING, DrawBook
from core.errors import BrokenSeal, CallError
from core.sheet import canonical_json, digest_of

CONTENTS = [{"event": "freeze", "title": "Ä\u2028"}, {"event": "draw", "draw": 1}, {"event": "drawn", "draw": 1}]


@pytest.fixture
def book(tmp_path: Path) -> DrawBook:
    made = DrawBook(tmp_path / "sheet.drawbook")
    for content in CONTENTS:
        made.append(content)
    return made


def test_entries_are_numbered_and_chained(book: DrawBook) -> None:
    entries = book.entries()
    assert [entry["entry"] for entry in entries] == [1, 2, 3]
    assert [entry["previous"] for entry in entries] == [NOTHING, entries[0]["hash"], entries[1]["hash"]]
    for entry, content in zip(entries, CONTENTS, strict=True):
        assert entry == {**entry, **content}
        assert entry["hash"] == digest_of({key: value for key, value in entry.items() if key != "hash"})


def test_append_returns_what_it_wrote(book: DrawBook) -> None:
    entry = book.append({"event": "draw", "draw": 2})
    assert entry == book.entries()[-1]


def test_no_file_is_an_empty_book(tmp_path: Path) -> None:
    assert DrawBook(tmp_path / "none").entries() == []


def damaged(book: DrawBook, lines: list[bytes]) -> BrokenSeal:
    book.path.write_bytes(b"".join(lines))
    with pytest.raises(BrokenSeal) as caught:
        book.entries()
    with pytest.raises(BrokenSeal):
        book.append({"event": "draw"})
    assert book.path.read_bytes() == b"".join(lines), "a broken book is not written to"
    return caught.value


def test_every_changed_bit_shows(book: DrawBook) -> None:
    """Except in the end of the last line, which makes it a line that was being written."""
    raw = book.path.read_bytes()
    for place, bit in itertools.product(range(len(raw) - 1), (1, 32)):
        changed = bytearray(raw)
        changed[place] ^= bit
        if b"\n" in (raw[place : place + 1], changed[place : place + 1]):
            continue
        error = damaged(book, [bytes(changed)])
        assert error.part == "draw book"
        line = raw.count(b"\n", 0, place) + 1
        assert f"line {line}:" in str(error)


@pytest.mark.parametrize(
    ("order", "line"), [([1, 2], 1), ([0, 2], 2), ([0, 2, 1], 2), ([1, 0, 2], 1), ([0, 1, 1, 2], 3)]
)
def test_a_deleted_swapped_or_doubled_entry_shows(book: DrawBook, order: list[int], line: int) -> None:
    lines = book.path.read_bytes().splitlines(keepends=True)
    error = damaged(book, [lines[number] for number in order])
    assert error.part == "draw book"
    assert f"sheet.drawbook, line {line}:" in str(error)


def test_an_entry_changed_with_its_hash_shows_in_the_next(book: DrawBook) -> None:
    lines = book.path.read_bytes().splitlines(keepends=True)
    entry = {**json.loads(lines[1]), "draw": 7}
    entry["hash"] = digest_of({key: value for key, value in entry.items() if key != "hash"})
    lines[1] = canonical_json(entry).encode() + b"\n"
    assert "line 3:" in str(damaged(book, lines))


def test_what_is_no_draw_book_is_refused(book: DrawBook) -> None:
    for content in (
        b"\n",
        b"[]\n",
        b"null\n",
        b"\xff\xfe\n",
        b"[" * 100_000 + b"\n",
        b'{"entry": 1}\n',
        b"\0" * 50 + b"\n",
    ):
        assert "line 1:" in str(damaged(book, [content]))


def test_killed_while_writing(book: DrawBook) -> None:
    """The last line cut anywhere: it was reported to nobody, and the next entry takes its place."""
    raw = book.path.read_bytes()
    lines = raw.splitlines(keepends=True)
    start = len(raw) - len(lines[-1])
    for cut in range(start, len(raw)):
        book.path.write_bytes(raw[:cut])
        assert len(book.entries()) == 2
        if cut % 16 == 0 or cut == len(raw) - 1:
            book.append(CONTENTS[-1])
            assert book.path.read_bytes() == raw


def test_two_programs_at_once_keep_the_chain(tmp_path: Path) -> None:
    path = tmp_path / "sheet.drawbook"
    program = (
        "import sys, pathlib; from core.drawbook import DrawBook; book = DrawBook(pathlib.Path(sys.argv[1]))\n"
        "for turn in range(40): book.append({'event': 'draw', 'by': sys.argv[2], 'turn': turn})"
    )
    root = Path(core.__file__).parents[1]
    calls = [[sys.executable, "-c", program, str(path), name] for name in "ab"]
    running = [subprocess.Popen(call, cwd=root) for call in calls]
    assert [process.wait() for process in running] == [0, 0]
    entries = DrawBook(path).entries()
    assert len(entries) == 80
    for name in "ab":
        assert [entry["turn"] for entry in entries if entry["by"] == name] == list(range(40))


def test_a_book_that_cannot_be_read_or_written_is_told_in_words(tmp_path: Path) -> None:
    folder = DrawBook(tmp_path)
    with pytest.raises(CallError, match="cannot be read"):
        folder.entries()
    with pytest.raises(CallError, match="cannot be written"):
        folder.append({"event": "draw"})
    with pytest.raises(CallError, match="cannot be written"):
        DrawBook(tmp_path / "none" / "sheet.drawbook").append({"event": "draw"})
