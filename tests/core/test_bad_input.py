"""What the program says to bad input: a table of sheets, lists and calls, each with every line that must be told.

A line is given by the parts that must stand in it, in their order, divided by ``...``. Whatever the input: the exit code
is the one stated, nothing is written, nothing stands on stdout, there is no traceback, no word of Python, and the answer
comes within seconds.
"""

from __future__ import annotations

import errno
import os
import re
import subprocess
import sys
import time
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

from core.__main__ import main
from tests.core.bad_rules import RULES
from tests.core.bad_sheets import (
    CREW,
    DEEP,
    FRAMES,
    GOOD,
    KINDS,
    PLAN,
    PNG,
    SHEETS,
    Bad,
    Content,
    called,
    frame,
    outcome,
)

ROOT = Path(__file__).parents[2]
DRAW = ("draw", "sheet.toml", "--seed", "40719")
CHECK = ("check", "sheet.toml", "outcome.csv")
NEVER = re.compile(
    r"Traceback|Error\b|pydantic|NoneType|Decimal\(|datetime|<class|\b(str|dict|bool|int|tuple|float|None|True|False)\b"
    r"|[Vv]alidation|input_|object at|mistake|  \b|[^.]\.\.$"
)


def checked(kind: str, text: Content, *told: str) -> Bad:
    """Return a bad outcome to be checked."""
    return Bad(told, {"sheet.toml": outcome(kind), "outcome.csv": text}, CHECK)


# --- calls ------------------------------------------------------------------------------------------------------

NUMBER = "is not an integer from 1 to 10^12. See: lotwright draw --help"
CALLS = {
    "unknown job": called(
        "drow sheet.toml", "There is no such job. Found: drow. Allowed: plan, draw...Did you mean draw?"
    ),
    "unknown option": called(
        (*DRAW, "--wrokers", "2"), "There is no such option. Found: --wrokers...Did you mean --workers?"
    ),
    "shortened option": called(
        (*DRAW, "--out", "2"), "There is no such option. Found: --out. ...Did you mean --outcomes?"
    ),
    "unknown option of none": called("--bogus", "There is no such option. Found: --bogus"),
    "a word too many": called((*DRAW, "again"), "There is a word too many. Found: again. See: lotwright draw --help"),
    "no sheet named": called("draw", "This is missing: SHEET. See: lotwright draw --help"),
    "no seed": called("draw sheet.toml", "A draw needs a seed: --seed"),
    "seed without text": called("draw sheet.toml --seed", "--seed: a value must follow. See: lotwright draw --help"),
    "seed of zero length": called((*DRAW[:3], ""), "The seed text is empty."),
    "seed of blanks": called((*DRAW[:3], " \u3000"), "The seed text is empty."),
    "seed with a line break": called((*DRAW[:3], "4\n7"), "The seed text has a line break"),
    "seed with a control character": called(
        (*DRAW[:3], "4\x077"), "The seed text has a line break or another control character"
    ),
    "seed with a rare line break": called((*DRAW[:3], "4\u20287"), "The seed text has a line break"),
    "seed that is no text": called(
        (*DRAW[:3], "4\udcff7"), "The seed text has a line break or another control character"
    ),
    "two seeds without names": called((*DRAW, "--seed", "33580"), "With several seeds each is NAME=TEXT. Found: 40719"),
    "two seeds with one name": called(
        "draw sheet.toml --seed a=1 --seed a=2", "Two seeds have the same name. Found: a"
    ),
    "two seeds whose names look the same": called(
        "draw sheet.toml --seed \u00e9=1 --seed e\u0301=2", "Two seeds have the same name. Found: \u00e9"
    ),
    "seed with a name only": called(
        "draw sheet.toml --seed a=1 --seed b=", "With several seeds each is NAME=TEXT. Found: b="
    ),
    **{
        f"outcomes {n!r}": called((*DRAW, "--outcomes", n), f"--outcomes: '{n}' {NUMBER}")
        for n in ("0", "-1", "x", "1.5", "", "1" + "0" * 13)
    },
    "limit 0": called((*DRAW, "--limit", "0"), f"--limit: '0' {NUMBER}"),
    "workers 0": called((*DRAW, "--workers", "0"), f"--workers: '0' {NUMBER}"),
    "memory 0": called("plan sheet.toml --memory 0", "--memory: '0' is not a number of GiB from 0.01 to 4096"),
    "memory nan": called("plan sheet.toml --memory nan", "--memory: 'nan' is not a number of GiB"),
    "plan missing": called((*DRAW, "--plan", "plan.json"), "plan.json: there is no such file"),
    "plan a list": called((*DRAW, "--plan", "crew.csv"), "crew.csv is no plan: it is not JSON"),
    "plan a folder": called(
        (*DRAW, "--plan", "a.json"), "a.json: this is a folder, not a file. Allowed: the name of a plan", a_json=None
    ),
    "plan a list of JSON": called((*DRAW, "--plan", "a.json"), "a.json is no plan: it is JSON, but", a_json="[]"),
    "plan empty": called((*DRAW, "--plan", "a.json"), "a.json is no plan: ", a_json="{}"),
    "plan nested": called((*DRAW, "--plan", "a.json"), "a.json is no plan: it is not JSON", a_json=DEEP * 20),
    "plan to a folder": called("plan sheet.toml --to lists", "lists is a folder, not a file...--to", lists=None),
    "plan over the list": called("plan sheet.toml --to crew.csv", "crew.csv is there already and is no plan"),
    "plan over the sheet": called("plan sheet.toml --to sheet.toml", "sheet.toml is there already and is no plan"),
    "plan below a file": called(
        "plan sheet.toml --to crew.csv/plan.json", "crew.csv/plan.json cannot be written: a part of its path is a file"
    ),
    "draw to a file": called((*DRAW, "--to", "crew.csv"), "crew.csv is a file, not a folder"),
    "draw to a finished folder": Bad(
        ("done holds the record of an earlier draw",),
        {"sheet.toml": GOOD, "done": None, "done/record.json": "{}"},
        (*DRAW, "--to", "done"),
    ),
    "record missing": called("verify record.json", "record.json: there is no such file"),
    "record a folder": called(
        "verify record.json",
        "record.json: this is a folder, not a file. Allowed: the name of a record",
        record_json=None,
    ),
    "record not JSON": called("verify record.json", "record.json is no record: it is not JSON", record_json="nonsense"),
    "record of another sort": called(
        "verify record.json", "record.json is no record: it has neither", record_json='{"a": 1}'
    ),
    "record of another sort, independently": called(
        "verify record.json --independent", "record.json is no record: it has neither", record_json='{"a": 1}'
    ),
    "record without digests": called(
        "verify record.json", "The record was changed in the part 'digests'", code=5, record_json='{"format": "x"}'
    ),
    "outcome missing": called("check sheet.toml outcome.csv", "outcome.csv: there is no such file"),
    "outcome a folder": checked("selection", None, "outcome.csv: this is a folder, not a file"),
    "outcome empty": checked("selection", "", "outcome.csv: this file is empty"),
    "outcome a picture": checked("selection", PNG, "outcome.csv: this is no CSV file"),
    "outcome without units": checked(
        "selection", "who\np1\n", "outcome.csv: this file has no column unit. Found: who...Allowed: the columns of"
    ),
    "outcome without slots": checked(
        "roster", "unit,place\np1,w1\n", "outcome.csv: this file has no column slot. Found: unit, place"
    ),
    "outcome with unknown units": checked(
        "selection",
        'unit\np1\np99\n""\n',
        "outcome.csv, line 3, column unit: there is no such unit in the list. Found: p99",
    ),
    "explain an unknown word": called("explain qouta", "There is no rule or kind 'qouta'. Did you mean 'quota'?"),
    "freeze what is faulty": called("freeze nothing.toml", "nothing.toml: there is no such file"),
}
TABLE = {**SHEETS, **FRAMES, **KINDS, **RULES, **CALLS}

# --- the tests --------------------------------------------------------------------------------------------------


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Return a folder with the list, in which the calls are made."""
    (tmp_path / "crew.csv").write_text(CREW)
    monkeypatch.chdir(tmp_path)
    return tmp_path


def fill(folder: Path, files: Mapping[str, Content]) -> None:
    for name, content in files.items():
        path = folder / name
        if content is None:
            path.mkdir()
        else:
            path.write_bytes(content if isinstance(content, bytes) else content.encode())


def listing(folder: Path) -> dict[str, bytes | None]:
    return {
        str(path.relative_to(folder)): path.read_bytes() if path.is_file() else None
        for path in sorted(folder.rglob("*"))
    }


def tells(line: str, told: str) -> bool:
    """Return whether a line begins with the first of the parts that are told, and has the others in their order."""
    parts = told.split("...")
    return re.match(".*?".join(map(re.escape, parts)), line) is not None


def hold(bad: Bad, code: int, out: str, err: str) -> None:
    """Hold what was said against what must be said."""
    lines = err.splitlines()
    assert len(lines) == len(bad.told), err
    for line, told in zip(lines, bad.told, strict=True):
        assert tells(line, told), f"\nsaid: {line}\nwanted: {told}"
        assert not NEVER.search(line.strip()), line
    assert code == bad.code
    assert out == ""


def test_the_table_is_long_enough() -> None:
    assert len(TABLE) == len(SHEETS) + len(FRAMES) + len(KINDS) + len(RULES) + len(CALLS) >= 100


@pytest.mark.parametrize("bad", [pytest.param(bad, id=name) for name, bad in TABLE.items()])
def test_bad_input(bad: Bad, folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    fill(folder, bad.files)
    before = listing(folder)
    begun = time.monotonic()
    code = main(bad.call)
    seconds = time.monotonic() - begun
    hold(bad, code, *capsys.readouterr())
    assert listing(folder) == before
    assert seconds < 5


# --- what needs more than files and a call ----------------------------------------------------------------------


def test_a_list_outside_by_a_link(folder: Path, tmp_path_factory: pytest.TempPathFactory, capsys: Any) -> None:
    outside = tmp_path_factory.mktemp("outside") / "units.csv"
    outside.write_text("id\np1\np2\n")
    (folder / "link.csv").symlink_to(outside)
    (folder / "sheet.toml").write_text(frame('file = "link.csv"'))
    assert main(PLAN) == 2
    told = capsys.readouterr().err
    assert tells(told, "sheet.toml, [frame], file: this file lies outside the sheet's folder. Found: link.csv")
    assert str(outside) not in told
    assert main([*PLAN, "--allow-outside"]) == 0
    (folder / "sheet.toml").write_text(frame(f'file = "{outside}"'))
    assert main(PLAN) == 2
    assert main([*PLAN, "--allow-outside"]) == 0


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="nothing is unreadable to this user")
@pytest.mark.parametrize(
    ("name", "told"),
    [("sheet.toml", "sheet.toml: this file cannot be read: permission"), ("crew.csv", "crew.csv: ...permission")],
)
def test_unreadable_file(name: str, told: str, folder: Path, capsys: Any) -> None:
    (folder / "sheet.toml").write_text(GOOD)
    (folder / name).chmod(0)
    assert main(PLAN) == 2
    assert tells(capsys.readouterr().err, told)


@pytest.mark.parametrize("code", [errno.EACCES, errno.EIO])
def test_sheet_that_the_system_does_not_give(code: int, folder: Path, monkeypatch: Any, capsys: Any) -> None:
    def refuse(path: Path) -> bytes:
        raise OSError(code, os.strerror(code), str(path))

    (folder / "sheet.toml").write_text(GOOD)
    monkeypatch.setattr(Path, "read_bytes", refuse)
    assert main(PLAN) == 2
    assert tells(capsys.readouterr().err, "sheet.toml: this file cannot be read: ")


@contextmanager
def full_disk(monkeypatch: pytest.MonkeyPatch, name: str) -> Iterator[None]:
    """Let a function of `os` fail as on a full disk."""

    def refuse(*_: object) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    with monkeypatch.context() as patch:
        patch.setattr(os, name, refuse)
        yield


@pytest.mark.parametrize("name", ["fsync", "replace"])
@pytest.mark.parametrize("target", ["plan.json", "deep/er/plan.json"])
def test_full_disk_leaves_nothing_of_a_plan(
    name: str, target: str, folder: Path, monkeypatch: Any, capsys: Any
) -> None:
    (folder / "sheet.toml").write_text(GOOD)
    before = listing(folder)
    with full_disk(monkeypatch, name):
        assert main([*PLAN, "--to", target]) == 2
    said = capsys.readouterr()
    assert said.err == f"{target} cannot be written: no space is left on the disk.\n"
    assert said.out == ""
    assert listing(folder) == before


def test_full_disk_leaves_the_old_plan(folder: Path, monkeypatch: Any) -> None:
    (folder / "sheet.toml").write_text(GOOD)
    assert main([*PLAN, "--to", "plan.json"]) == 0
    before = listing(folder)
    with full_disk(monkeypatch, "fsync"):
        assert main([*PLAN, "--outcomes", "7", "--to", "plan.json"]) == 2
    assert listing(folder) == before
    assert main([*PLAN, "--outcomes", "7", "--to", "plan.json"]) == 0
    assert listing(folder) != before


def test_full_disk_leaves_no_half_of_a_draw(folder: Path, monkeypatch: Any, capsys: Any) -> None:
    (folder / "sheet.toml").write_text(GOOD)
    with full_disk(monkeypatch, "fsync"):
        assert main(DRAW) == 2
    said = capsys.readouterr()
    assert "no space" in said.err
    assert said.out == ""
    left = {name for name in listing(folder) if name.startswith("drawn/")}
    assert not {name for name in left if not name.endswith(".journal")}, "only the journal, to go on from, may stay"
    assert main([*DRAW, "--resume"]) == 0
    assert {"drawn/outcomes.csv", "drawn/record.json"} < set(listing(folder))


@pytest.mark.parametrize("call", [(*PLAN, "--to", "new/plan.json"), (*DRAW, "--to", "new")], ids=["plan", "draw"])
def test_a_folder_that_may_not_be_made(call: Sequence[str], folder: Path, monkeypatch: Any, capsys: Any) -> None:
    def refuse(path: Path, *_: object, **__: object) -> None:
        raise PermissionError(errno.EACCES, os.strerror(errno.EACCES), str(path))

    (folder / "sheet.toml").write_text(GOOD)
    before = listing(folder)
    monkeypatch.setattr(Path, "mkdir", refuse)
    assert main(call) == 2
    said = capsys.readouterr()
    assert tells(said.err, f"{call[-1]} cannot be written: permission")
    assert said.out == ""
    assert listing(folder) == before


def test_another_sheets_plan(folder: Path, capsys: Any) -> None:
    (folder / "sheet.toml").write_text(GOOD)
    assert main([*PLAN, "--to", "plan.json"]) == 0
    (folder / "sheet.toml").write_text(outcome("selection", "size = 2"))
    before = listing(folder)
    capsys.readouterr()
    assert main([*DRAW, "--plan", "plan.json"]) == 2
    said = capsys.readouterr()
    assert tells(said.err, "plan.json cannot be used: ")
    assert said.out == ""
    assert listing(folder) == before


def test_frozen_list_changed(folder: Path, capsys: Any) -> None:
    (folder / "sheet.toml").write_text(GOOD)
    assert main(["freeze", "sheet.toml"]) == 0
    (folder / "crew.csv").write_text(CREW.replace("p6", "p7"))
    before = listing(folder)
    capsys.readouterr()
    assert main(DRAW) == 5
    said = capsys.readouterr()
    assert tells(said.err, "crew.csv has changed, in lines 1 to ...freeze the new version")
    assert said.out == ""
    assert listing(folder) == before


def test_frozen_twice(folder: Path, capsys: Any) -> None:
    (folder / "sheet.toml").write_text(GOOD)
    assert main(["freeze", "sheet.toml"]) == 0
    before = listing(folder)
    capsys.readouterr()
    assert main(["freeze", "sheet.toml"]) == 2
    assert tells(capsys.readouterr().err, "sheet.toml is frozen already")
    assert listing(folder) == before


@pytest.mark.parametrize(
    ("kind", "lines", "told"),
    [
        ("selection", "unit\np1\n", "BROKEN selection: Not an outcome: it has 1 units"),
        ("selection", "unit\np1\np1\np2\n", "BROKEN selection: Not an outcome: p1 stands there twice"),
        ("assignment", "unit,place\np1,r9\n", "BROKEN assignment: Not an outcome: p1 is at 'r9'"),
        ("assignment", "unit,place\np1,r1\n", "BROKEN assignment: Not an outcome: p2 has no place"),
        ("roster", "unit,slot\np1,w9\n", "BROKEN roster: Not an outcome: p1 is in 'w9'"),
        ("order", "unit,position\np1,0\n", "BROKEN order: Not an outcome: p1 is at position '0'; positions are 1 to 6"),
        ("order", "unit,position\np1,x\n", "BROKEN order: Not an outcome: p1 is at position 'x'"),
        ("pairing", "unit,partner\np1,zz\n", "BROKEN pairing: Not an outcome: 'zz' is not in the list"),
        ("pairing", "unit,partner\np1,p2\n", "BROKEN pairing: Not an outcome: p3 is missing"),
    ],
)
def test_lines_that_are_no_outcome(kind: str, lines: str, told: str, folder: Path, capsys: Any) -> None:
    (folder / "sheet.toml").write_text(outcome(kind))
    (folder / "outcome.csv").write_text(lines)
    before = listing(folder)
    assert main(CHECK) == 1
    assert tells(capsys.readouterr().out, told)
    assert listing(folder) == before


@pytest.mark.parametrize("name", ["broken TOML", "several faults", "pin two at one position"])
def test_as_a_program(name: str, folder: Path) -> None:
    bad = TABLE[name]
    fill(folder, bad.files)
    before = listing(folder)
    done = program(bad.call, folder)
    hold(bad, done.returncode, done.stdout, done.stderr)
    assert listing(folder) == before


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="no device that is always full")
def test_output_that_cannot_be_written(folder: Path) -> None:
    with open("/dev/full", "w") as full:
        done = program(("explain", "quota"), folder, stdout=full)
    assert done.returncode == 2
    assert done.stderr == "The output cannot be read or written: no space is left on the disk.\n"


def test_output_that_nobody_reads(folder: Path) -> None:
    reading, writing = os.pipe()
    os.close(reading)
    with os.fdopen(writing, "w") as closed:
        done = program(("explain", "quota"), folder, stdout=closed)
    assert (done.returncode, done.stderr) == (0, "")


def test_a_mistake_of_the_program_is_told_as_such(folder: Path, monkeypatch: Any, capsys: Any) -> None:
    def fail(*_: object, **__: object) -> None:
        raise ZeroDivisionError("division by zero")

    monkeypatch.setattr("core.files.read_sheet", fail)
    (folder / "sheet.toml").write_text(GOOD)
    assert main(PLAN) == 70
    assert tells(capsys.readouterr().err, "Something went wrong inside the program; this is its mistake, not yours")
    monkeypatch.setenv("LOTWRIGHT_DEBUG", "1")
    with pytest.raises(ZeroDivisionError):
        main(PLAN)


def program(call: Sequence[str], folder: Path, stdout: Any = subprocess.PIPE) -> subprocess.CompletedProcess[str]:
    """Run ``python -m core`` in a process of its own."""
    return subprocess.run(
        [sys.executable, "-m", "core", *call],
        cwd=folder,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        stdout=stdout,
        stderr=subprocess.PIPE,
        text=True,
        check=False,
    )
