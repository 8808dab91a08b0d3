"""Files: where lists are looked up, outcomes there and back, and writing that is whole or not at all."""

from __future__ import annotations

import errno
import json
import os
import stat
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from core.errors import CallError, SheetError
from core.files import (
    cause,
    json_bytes,
    open_sheet,
    outcomes_bytes,
    read_json,
    read_outcomes,
    read_record,
    read_text,
    refuse_other,
    unique_parties,
    write_whole,
)
from tests.tools import Row, sheet_of, universe

UNITS: list[Row] = [
    {"id": name, "side": side} for name, side in zip(["p1", "p, 2", 'p"3"', "\u00e9"], "xyxy", strict=True)
]
KINDS: list[Row] = [
    {"kind": "selection", "size": {"min": 1}},
    {"kind": "assignment", "places": ["r 1", "r,2"]},
    {"kind": "roster", "slots": ["w1", "w2"]},
    {"kind": "order"},
    {"kind": "pairing"},
    {"kind": "pairing", "sides": "side"},
]


# --- lists ------------------------------------------------------------------------------------------------------


def test_lists_are_looked_up_beside_the_sheet(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    folder = tmp_path / "a"
    (folder / "lists").mkdir(parents=True)
    (folder / "sheet.toml").write_text('format = 1\nframe = {file = "lists/b.csv"}\noutcome = {kind = "order"}\n')
    (folder / "lists/b.csv").write_text("id\np1\np2\n")
    monkeypatch.chdir(tmp_path)
    assert open_sheet(Path("a/sheet.toml")).frame.ids == ["p1", "p2"]
    (tmp_path / "link.toml").symlink_to(folder / "sheet.toml")
    assert open_sheet(Path("link.toml")).frame.ids == ["p1", "p2"], "beside the sheet itself, not the link to it"


def test_a_list_in_the_folder_by_a_roundabout_way(tmp_path: Path) -> None:
    (tmp_path / "sheet.toml").write_text(
        f'format = 1\nframe = {{file = "../{tmp_path.name}/b.csv"}}\noutcome = {{kind = "order"}}\n'
    )
    (tmp_path / "b.csv").write_text("id\np1\n")
    assert open_sheet(tmp_path / "sheet.toml").frame.ids == ["p1"]


def test_a_list_outside_needs_leave(tmp_path: Path) -> None:
    (tmp_path / "in").mkdir()
    (tmp_path / "in/sheet.toml").write_text('format = 1\nframe = {file = "../b.csv"}\noutcome = {kind = "order"}\n')
    (tmp_path / "b.csv").write_text("id\np1\n")
    with pytest.raises(SheetError, match="outside"):
        open_sheet(tmp_path / "in/sheet.toml")
    assert open_sheet(tmp_path / "in/sheet.toml", allow_outside=True).frame.ids == ["p1"]


# --- outcomes ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("outcome", KINDS, ids=lambda row: "-".join(map(str, row.values())))
def test_outcomes_there_and_back(outcome: Row, tmp_path: Path) -> None:
    sheet = sheet_of(UNITS, outcome)
    rows = universe(sheet.kind)
    if outcome["kind"] == "roster":
        rows = rows[rows.any(axis=(1, 2))]  # an outcome without any duty has no lines
    path = tmp_path / "outcomes.csv"
    path.write_bytes(outcomes_bytes(sheet, rows))
    found = read_outcomes(sheet, path)
    assert [name for name, _ in found] == [str(number) for number in range(1, len(rows) + 1)]
    assert all(not isinstance(row, str) for _, row in found), found
    assert (np.stack([row for _, row in found]) == rows).all()


@pytest.mark.parametrize("outcome", KINDS, ids=lambda row: "-".join(map(str, row.values())))
def test_one_outcome_without_its_number(outcome: Row, tmp_path: Path) -> None:
    sheet = sheet_of(UNITS, outcome)
    row = universe(sheet.kind)[-1]
    header, *lines = outcomes_bytes(sheet, row[None]).decode().splitlines()
    path = tmp_path / "outcome.csv"
    text = "\n".join(line.split(",", 1)[1] for line in [header, *lines])
    path.write_text(text.replace("unit", "id", 1))
    ((name, found),) = read_outcomes(sheet, path)
    assert name == "1"
    assert not isinstance(found, str)
    assert (found == row).all()


def test_lines_of_outcomes_csv() -> None:
    sheet = sheet_of([{"id": "a"}, {"id": "b"}, {"id": "c"}], {"kind": "pairing", "single": True})
    assert outcomes_bytes(sheet, np.array([[1, 0, 2], [0, 2, 1]], np.int32)) == (
        b"outcome,unit,partner\n1,a,b\n1,c,\n2,a,\n2,b,c\n"
    )


def test_many_unknown_units_are_counted(tmp_path: Path) -> None:
    sheet = sheet_of(UNITS, {"kind": "selection"})
    (tmp_path / "o.csv").write_text("unit\n" + "".join(f"x{i}\n" for i in range(1234)))
    with pytest.raises(SheetError) as caught:
        read_outcomes(sheet, tmp_path / "o.csv")
    assert len(caught.value.faults) == 21
    assert str(caught.value.faults[-1]) == "o.csv: and 1,214 more lines like these."


# --- writing ----------------------------------------------------------------------------------------------------


def test_a_file_is_written_whole(tmp_path: Path) -> None:
    path = tmp_path / "deep/er/a.json"
    write_whole(path, b"one")
    write_whole(path, b"two")
    assert path.read_bytes() == b"two"
    assert [entry.name for entry in path.parent.iterdir()] == ["a.json"]
    assert stat.S_IMODE(path.stat().st_mode) == 0o644


@pytest.mark.parametrize("name", ["fsync", "replace", "chmod", "fdopen"])
def test_a_file_that_cannot_be_written_leaves_everything_as_it_was(name: str, tmp_path: Path, monkeypatch: Any) -> None:
    def refuse(*_: object) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    (tmp_path / "a.json").write_text("old")
    with monkeypatch.context() as patch:
        patch.setattr(os, name, refuse)
        for path in (tmp_path / "a.json", tmp_path / "b.json", tmp_path / "deep/er/a.json"):
            with pytest.raises(CallError, match=r"cannot be written: no space is left on the disk\."):
                write_whole(path, b"new")
    assert {str(p.relative_to(tmp_path)) for p in tmp_path.rglob("*")} == {"a.json"}
    assert (tmp_path / "a.json").read_text() == "old"


def test_folders_that_hold_something_stay(tmp_path: Path, monkeypatch: Any) -> None:
    def refuse(*_: object) -> None:
        (tmp_path / "deep/other").touch()
        raise OSError(errno.EIO, os.strerror(errno.EIO))

    monkeypatch.setattr(os, "fsync", refuse)
    with pytest.raises(CallError):
        write_whole(tmp_path / "deep/er/a.json", b"new")
    assert sorted(p.name for p in tmp_path.rglob("*")) == ["deep", "other"]


def test_what_is_there_is_not_overwritten_by_mistake(tmp_path: Path) -> None:
    refuse_other(tmp_path / "new.json", "plan", "arrangement")
    (tmp_path / "plan.json").write_text('{"arrangement": "list"}')
    refuse_other(tmp_path / "plan.json", "plan", "arrangement")
    (tmp_path / "other.json").write_text('{"a": 1}')
    (tmp_path / "crew.csv").write_text("id\np1\n")
    for name in ("other.json", "crew.csv"):
        with pytest.raises(CallError, match=f"{name} is there already and is no plan"):
            refuse_other(tmp_path / name, "plan", "arrangement")
    with pytest.raises(CallError, match="is a folder, not a file"):
        refuse_other(tmp_path, "plan", "arrangement")


@pytest.mark.parametrize(
    ("error", "words"),
    [
        (OSError(errno.ENOSPC, "x"), "no space is left on the disk"),
        (PermissionError(errno.EACCES, "x"), "permission was denied"),
        (FileExistsError(errno.EEXIST, "x"), "a part of its path is a file, not a folder"),
        (OSError(errno.EIO, "Input/Output Error"), "input/output error"),
        (OSError("no number"), "the system gives no reason"),
        (ValueError("embedded null byte"), "this is no name of a file"),
    ],
)
def test_causes_in_words(error: Exception, words: str) -> None:
    assert cause(error) == words


# --- JSON, text, seeds ------------------------------------------------------------------------------------------


def test_json_there_and_back(tmp_path: Path) -> None:
    value = {"a": [1, "\u00e9", None], "b": str(2**70)}
    (tmp_path / "a.json").write_bytes(json_bytes(value))
    assert read_json(tmp_path / "a.json", "plan") == value
    (tmp_path / "a.json").write_bytes(b"\xef\xbb\xbf" + json.dumps(value).encode())
    assert read_json(tmp_path / "a.json", "plan") == value


@pytest.mark.parametrize("text", ['{"format": "x"}', '{"digests": {}}'])
def test_what_may_be_a_record(text: str, tmp_path: Path) -> None:
    (tmp_path / "a.json").write_text(text)
    assert read_record(tmp_path / "a.json") == json.loads(text)


def test_text_is_read_as_it_is(tmp_path: Path) -> None:
    (tmp_path / "a").write_bytes(b"\xef\xbb\xbfa\r\nb\n\xc3\xa9")
    assert read_text(tmp_path / "a") == "\ufeffa\r\nb\n\u00e9"


@pytest.mark.parametrize(
    ("texts", "parties"),
    [
        (["4 0 7"], [("", "4 0 7")]),
        (["a=4"], [("", "a=4")]),
        (["a=4", " b =0=7 "], [("a", "4"), ("b", "0=7 ")]),
    ],
)
def test_seeds(texts: list[str], parties: list[tuple[str, str]]) -> None:
    assert unique_parties(texts) == parties
