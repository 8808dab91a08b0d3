"""The journal: what was kept comes back, what was torn is dropped, what belongs to another draw is refused."""

from __future__ import annotations

import errno
import io
from pathlib import Path
from typing import Any

import pytest

from core.errors import CallError
from core.journal import FileJournal

DRAW = {"plan": "p", "key": "k", "outcomes": 3}
ENTRIES: list[dict[str, Any]] = [{"block": number, "rows": "ä\r\u2028" * number} for number in range(4)]


def kept(path: Path, entries: list[dict[str, Any]] = ENTRIES) -> bytes:
    """Write a journal and leave it as an interrupted draw does; return its bytes."""
    journal = FileJournal(path, DRAW, resume=False)
    for entry in entries:
        journal.keep(entry)
    journal.close()
    return path.read_bytes()


def resumed(path: Path) -> list[dict[str, Any]]:
    journal = FileJournal(path, DRAW, resume=True)
    found = list(journal.blocks())
    journal.close()
    return found


def test_blocks_come_back(tmp_path: Path) -> None:
    path = tmp_path / "draw.journal"
    before = kept(path)
    assert resumed(path) == ENTRIES
    assert path.read_bytes() == before


def test_a_new_journal_is_empty_and_resume_may_start_one(tmp_path: Path) -> None:
    assert resumed(tmp_path / "draw.journal") == []


def test_a_line_that_was_being_written_is_dropped(tmp_path: Path) -> None:
    """Cut anywhere: what is before the last whole line counts, and the journal can be gone on with."""
    path = tmp_path / "draw.journal"
    whole = kept(path)
    ends = [i + 1 for i, byte in enumerate(whole) if byte == ord("\n")]
    for cut in range(len(whole)):
        path.write_bytes(whole[:cut])
        good = sum(end <= cut for end in ends)
        assert resumed(path) == ENTRIES[: max(0, good - 1)], cut
        assert path.read_bytes() == whole[: ends[max(0, good - 1)]], cut


def test_going_on_after_a_torn_line_gives_the_same_bytes(tmp_path: Path) -> None:
    path = tmp_path / "draw.journal"
    whole = kept(path)
    path.write_bytes(whole[:-3])
    journal = FileJournal(path, DRAW, resume=True)
    journal.keep(ENTRIES[-1])
    journal.close()
    assert path.read_bytes() == whole


def test_from_a_changed_line_on_nothing_counts(tmp_path: Path) -> None:
    path = tmp_path / "draw.journal"
    lines = kept(path).splitlines(keepends=True)
    for number in range(1, len(lines)):
        for place in (0, 10, 17, len(lines[number]) // 2):
            changed = bytearray(lines[number])
            changed[place] ^= 1
            path.write_bytes(b"".join([*lines[:number], bytes(changed), *lines[number + 1 :]]))
            assert resumed(path) == ENTRIES[: number - 1], (number, place)


def test_a_missing_block_ends_what_counts(tmp_path: Path) -> None:
    path = tmp_path / "draw.journal"
    lines = kept(path).splitlines(keepends=True)
    path.write_bytes(b"".join(lines[:2] + lines[3:]))
    assert resumed(path) == ENTRIES[:1]


@pytest.mark.parametrize("part", sorted(DRAW))
def test_the_journal_of_another_draw_is_refused_and_left_alone(tmp_path: Path, part: str) -> None:
    path = tmp_path / "draw.journal"
    before = kept(path)
    with pytest.raises(CallError, match="another draw"):
        FileJournal(path, {**DRAW, part: "other"}, resume=True)
    assert path.read_bytes() == before


def test_without_resume_an_unfinished_draw_is_not_touched(tmp_path: Path) -> None:
    path = tmp_path / "draw.journal"
    before = kept(path)
    with pytest.raises(CallError, match="--resume"):
        FileJournal(path, DRAW, resume=False)
    assert path.read_bytes() == before


def test_a_finished_journal_is_gone(tmp_path: Path) -> None:
    path = tmp_path / "draw.journal"
    FileJournal(path, DRAW, resume=False).finish()
    assert not path.exists()


def test_a_full_disk_is_told_in_words(tmp_path: Path) -> None:
    class FullDisk(io.BytesIO):
        def flush(self) -> None:
            raise OSError(errno.ENOSPC, "No space left on device")

        def close(self) -> None:
            raise OSError(errno.ENOSPC, "No space left on device")

    journal = FileJournal(tmp_path / "draw.journal", DRAW, resume=False)
    journal.close()
    journal._file = FullDisk()  # type: ignore[assignment]
    with pytest.raises(CallError, match=r"draw\.journal cannot be written: no space left on device"):
        journal.keep(ENTRIES[0])
    journal.close()
