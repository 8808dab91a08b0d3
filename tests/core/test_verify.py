"""Freeze, draw, verify: what was frozen stays so, and a replay names the first thing that is not as it was."""

from __future__ import annotations

import contextlib
import copy
import json
import shutil
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import core
from core import jobs
from core.__main__ import main
from core.drawbook import DrawBook
from core.errors import BrokenSeal, CallError, LotwrightError
from core.files import json_bytes, open_sheet
from core.parts import Mask
from core.planner import make_plan
from core.process import Rows
from core.record import frozen_of, sealed
from core.rules.quota import Quota
from core.sceptic import examine
from tests.core.draws import unbuilt

SCENARIOS = Path(core.__file__).parents[1] / "scenarios"
SEED = "40719335804071933580"

SHEET = """format = 1
title = "Panel"
purpose = "Who sits on it"
[record]
operator = "o"
[frame]
file = "people.csv"
[outcome]
kind = "selection"
size = 4
[[rule]]   # not too many
kind = "quota"
where = {dept = "a"}
max = 1
[[rule]]
kind = "apart"
file = "pairs.csv"
note = "siblings"
[[rule]]
kind = "total"
column = "pay"
min = 10.5
[[rule]]
kind = "pin"
units = ["p03"]
off = true
"""
PEOPLE = "id,dept,pay\n" + "".join(f"p{n:02d},{'abc'[n % 3]},{n}.25\n" for n in range(12))
PAIRS = "one,two\np01,p02\np04,p11\n"


def written(folder: Path) -> Path:
    folder.mkdir(exist_ok=True)
    (folder / "people.csv").write_text(PEOPLE, encoding="utf-8")
    (folder / "pairs.csv").write_text(PAIRS, encoding="utf-8")
    (folder / "sheet.toml").write_text(SHEET, encoding="utf-8")
    return folder / "sheet.toml"


def draw(sheet: Path, to: str = "drawn", seed: str = SEED, **more: Any) -> Path:
    """Draw into a folder beside the sheet; return the record's path."""
    wish = jobs.Wish(sheet, (("", seed),), sheet.parent / to, **more)
    return jobs.draw_to_files(wish).record_file


@pytest.fixture
def sheet(tmp_path: Path) -> Path:
    return written(tmp_path / "case")


@pytest.fixture
def record(sheet: Path) -> Path:
    """Return the record of a draw of three outcomes by a plan that checks everything; not frozen."""
    plan = sheet.parent / "plan.json"
    plan.write_bytes(json_bytes(unbuilt(open_sheet(sheet), outcomes=3).plan.to_json()))
    return draw(sheet, outcomes=3, plan=plan)


@pytest.fixture
def frozen(sheet: Path) -> Path:
    """Return the record of the second draw of a frozen sheet."""
    jobs.freeze(sheet, outcomes=2)
    draw(sheet, "first", "a first seed")
    return draw(sheet, "second", reason="the first was read out wrongly")


def broken(path: Path, **more: Any) -> BrokenSeal:
    with pytest.raises(BrokenSeal) as caught:
        jobs.verify(path, **more)
    assert caught.value.exit_code == 5
    return caught.value


def edit(path: Path, old: str, new: str) -> None:
    text = path.read_text(encoding="utf-8")
    assert text.count(old) == 1
    path.write_text(text.replace(old, new), encoding="utf-8")


# -- the scenarios --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", sorted(path.parent.name for path in SCENARIOS.glob("*/sheet.toml")))
def test_a_scenario_is_frozen_drawn_and_verified(name: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """And again after all of it was moved elsewhere, and by the second implementation."""
    folder = tmp_path / name
    shutil.copytree(SCENARIOS / name, folder)
    sheet = str(folder / "sheet.toml")
    assert main(["freeze", sheet]) == 0
    assert "Digest: " in capsys.readouterr().out
    assert main(["draw", sheet, "--seed", SEED, "--to", str(folder / "drawn")]) == 0
    assert "Draw 1 of 1 from the draw book" in capsys.readouterr().out
    assert main(["verify", str(folder / "drawn" / "record.json")]) == 0
    assert "Verified: " in capsys.readouterr().out
    assert main(["verify", str(folder / "drawn" / "record.json"), "--independent"]) == 0
    folder.rename(tmp_path / "elsewhere")
    assert main(["verify", str(tmp_path / "elsewhere" / "drawn" / "record.json"), "--workers", "1"]) == 0
    book = DrawBook(tmp_path / "elsewhere" / "sheet.drawbook").entries()
    assert [entry["event"] for entry in book] == ["freeze", "draw", "drawn"]


# -- a good record --------------------------------------------------------------------------------------------


def test_a_good_record_verifies(record: Path) -> None:
    told = jobs.verify(record)
    assert told["verified"]
    assert told["outcomes"] == 3
    assert not told["frozen"]
    assert jobs.verify(record, workers=2) == told


def test_a_good_record_of_a_frozen_sheet_verifies(frozen: Path) -> None:
    told = jobs.verify(frozen)
    assert told["frozen"]
    assert told["draw"] == 2
    assert jobs.verify(frozen.parents[1] / "first" / "record.json")["draw"] == 1


def test_the_record_alone_moved_needs_to_be_told_where_the_sheet_is(record: Path, tmp_path: Path) -> None:
    moved = tmp_path / "far" / "away"
    record.parent.rename(moved) if moved.parent.mkdir() is None else None
    error = broken(moved / "record.json")
    assert error.part == "sheet"
    assert "--sheet" in str(error)
    sheet = record.parents[1] / "sheet.toml"
    assert jobs.verify(moved / "record.json", sheet_path=sheet)["verified"]
    assert main(["verify", str(moved / "record.json"), "--sheet", str(sheet)]) == 0
    assert main(["verify", str(moved / "record.json")]) == 5
    assert broken(moved / "record.json", sheet_path=tmp_path / "none.toml").part == "sheet"


def test_a_sheet_beside_the_record_is_found(record: Path, tmp_path: Path) -> None:
    pile = tmp_path / "pile"
    shutil.copytree(record.parents[1], pile, ignore=shutil.ignore_patterns("drawn", "plan.json"))
    for name in ("record.json", "outcomes.csv"):
        shutil.copy(record.parent / name, pile)
    shutil.rmtree(record.parents[1])
    assert jobs.verify(pile / "record.json")["verified"]


@pytest.mark.parametrize("content", [b"", b"{}", b"[]", b"\xff\xfe", b'{"digests": {}}', b"[" * 10**5])
def test_what_is_no_record_is_refused_in_words(tmp_path: Path, content: bytes) -> None:
    path = tmp_path / "record.json"
    path.write_bytes(content)
    with pytest.raises(LotwrightError):
        jobs.verify(path)
    assert main(["verify", str(path)]) in (2, 5)
    assert main(["verify", str(tmp_path / "none.json")]) == 2


# -- what was changed is named --------------------------------------------------------------------------------


def leaves(value: Any, path: tuple[Any, ...] = ()) -> Iterator[tuple[Any, ...]]:
    """Yield the way to every value of a record; of a list the first and the last entry."""
    if isinstance(value, dict) and value:
        for key in value:
            yield from leaves(value[key], (*path, key))
    elif isinstance(value, list) and value:
        for place in sorted({0, len(value) - 1}):
            yield from leaves(value[place], (*path, place))
    else:
        yield path


def at(value: Any, path: tuple[Any, ...]) -> Any:
    for step in path:
        value = value[step]
    return value


def with_leaf(record: dict[str, Any], path: tuple[Any, ...], value: Any) -> dict[str, Any]:
    changed = copy.deepcopy(record)
    at(changed, path[:-1])[path[-1]] = value
    return changed


def other(value: Any) -> Any:
    """Return another value of the same type: a sign changed, a number one higher."""
    if isinstance(value, bool):
        return not value
    if isinstance(value, str):
        return value[:-1] + ("1" if value[-1] != "1" else "2") if value else "x"
    return value + 1 if isinstance(value, int | float) else "x"


def test_a_changed_value_anywhere_in_the_record_names_its_part(record: Path) -> None:
    good = json.loads(record.read_bytes())
    parts = set()
    for path in leaves(good):
        record.write_bytes(json_bytes(with_leaf(good, path, other(at(good, path)))))
        error = broken(record)
        # a part's own digest that was changed points at the part
        assert error.part == (path[1] if path[0] == "digests" else path[0]), path
        assert repr(error.part) in str(error)
        parts.add(path[0])
    assert parts == set(good)


def test_a_changed_list_names_list_and_lines(record: Path) -> None:
    folder = record.parents[1]
    edit(folder / "people.csv", "p07,b,7.25", "p07,b,7.26")
    error = broken(record)
    assert error.part == "frame"
    assert "people.csv has changed, in lines 1 to 1000." in str(error)
    edit(folder / "people.csv", "p07,b,7.26", "p07,b,7.25")
    edit(folder / "pairs.csv", "p11", "p10")
    error = broken(record)
    assert error.part == "list pairs.csv"
    assert "lines 1 to 1000" in str(error)


@pytest.mark.parametrize(
    ("old", "new", "line"),
    [
        ("max = 1", "max = 2", 14),
        ("# not too many", "# not many", 11),
        ('"Panel"', '"Panels"', 2),
        ("\noff = true", "", 26),
    ],
)
def test_a_changed_sheet_names_the_line(record: Path, old: str, new: str, line: int) -> None:
    edit(record.parents[1] / "sheet.toml", old, new)
    error = broken(record)
    assert error.part == "rules"
    assert f"line {line} differs" in str(error)


@pytest.mark.parametrize("number", [1, 2, 3])
def test_a_changed_outcome_is_named_by_its_number(record: Path, number: int) -> None:
    path = record.parent / "outcomes.csv"
    lines = path.read_text(encoding="utf-8").splitlines(keepends=True)
    place = next(i for i, line in enumerate(lines) if line.startswith(f"{number},"))
    lines[place + 1] = lines[place + 1].replace("p", "q")
    path.write_text("".join(lines), encoding="utf-8")
    error = broken(record)
    assert error.part == f"outcome number {number}"
    assert f"line {place + 2} (outcome {number})" in str(error)


def test_outcomes_cut_short_lengthened_or_missing(record: Path) -> None:
    path = record.parent / "outcomes.csv"
    data = path.read_bytes()
    for changed in (data[:-1], data[: len(data) // 2], data + b"4,p01\n", b"", data.replace(b"\n", b"\r\n")):
        path.write_bytes(changed)
        assert broken(record).part.startswith("outcome number")
    path.unlink()
    assert broken(record).part == "outcome"


def test_a_changed_draw_book_is_named(frozen: Path, capsys: pytest.CaptureFixture[str]) -> None:
    book = frozen.parents[1] / "sheet.drawbook"
    data = book.read_bytes()
    for place in range(3, len(data) - 1, 97):
        changed = bytearray(data)
        changed[place] ^= 1
        book.write_bytes(bytes(changed))
        assert broken(frozen).part == "draw book"
    assert main(["verify", str(frozen)]) == 5
    assert "sheet.drawbook, line" in capsys.readouterr().err
    lines = data.splitlines(keepends=True)
    for left in (lines[:-2], lines[:3], [], [lines[0], *lines[2:]]):
        book.write_bytes(b"".join(left))
        assert broken(frozen).part == "draw book"


def test_of_another_draw_book_that_is_whole_in_itself_nothing_fits(frozen: Path, tmp_path: Path) -> None:
    other_sheet = written(tmp_path / "other")
    jobs.freeze(other_sheet, outcomes=2)
    draw(other_sheet, "first", "a first seed")
    draw(other_sheet, "second", "yet another seed", reason="none")
    shutil.copy(other_sheet.with_name("sheet.drawbook"), frozen.parents[1])
    assert broken(frozen).part == "draw book"


# -- forgeries that are sealed again --------------------------------------------------------------------------


def forged(path: Path, change: Callable[[dict[str, Any]], object]) -> BrokenSeal:
    """Change the record, seal it again as the program would, and verify."""
    record = json.loads(path.read_bytes())
    change(record)
    path.write_bytes(json_bytes(sealed(record)))
    return broken(path)


def test_another_seed_gives_another_outcome(record: Path) -> None:
    error = forged(record, lambda r: r["seed"]["parties"][0].update(text=SEED[::-1]))
    assert error.part == "outcome number 1"
    assert "differs from the replay" in str(error)


def test_another_seed_of_a_frozen_draw_is_seen_in_the_draw_book(frozen: Path) -> None:
    assert forged(frozen, lambda r: r["seed"]["parties"][0].update(text=SEED[::-1])).part == "seed"


def test_a_frozen_draw_told_as_not_frozen_does_not_replay(frozen: Path) -> None:
    assert forged(frozen, lambda r: r.update(frozen=None)).part.startswith("outcome number")


def test_a_first_draw_is_not_made_of_a_second(frozen: Path) -> None:
    assert forged(frozen, lambda r: r["draw"].update(number=1, of=1, reason=None)).part == "draw"


def test_the_draw_before_is_not_this_one(frozen: Path) -> None:
    first = json.loads((frozen.parents[1] / "first" / "record.json").read_bytes())
    assert forged(frozen, lambda r: r.update(draw=first["draw"])).part == "seed"


def test_another_time_of_freezing_is_seen(frozen: Path) -> None:
    assert forged(frozen, lambda r: r["frozen"].update(at="2001-01-01T00:00:00+00:00")).part == "frozen"


# What may be told in other words: versions, and what the record says of them.
_WORDS = {"program", "algorithms", "cautions", "outcome"}


def test_no_forged_value_passes(record: Path) -> None:
    """Every value of the record changed, one at a time, and the record sealed again: all but words are found out."""
    good = json.loads(record.read_bytes())
    assert sealed(good) == good
    passed = set()
    for path in leaves(good):
        if path[0] in ("digests", "digest"):
            continue
        record.write_bytes(json_bytes(sealed(with_leaf(good, path, other(at(good, path))))))
        with contextlib.suppress(BrokenSeal):
            jobs.verify(record)
            passed.add(path)
    unexpected = {path for path in passed if path[0] not in _WORDS}
    assert unexpected == {
        ("format",),
        ("sheet", "file"),  # it is found by its path
        ("frame", "order"),
        ("frame", "normalisation"),
        ("rules", 0, "words"),
        ("rules", 3, "words"),
        ("draw", "number"),  # of a sheet that was not frozen: nobody counted
        ("draw", "of"),
        ("draw", "reason"),
        ("draw", "at"),
        ("draw", "entry"),
        *(("ledger", "acceptance", key) for key in ("estimate", "low", "high")),
        ("admissible", "low"),
        ("admissible", "high"),
    }


def test_no_record_that_lacks_or_confuses_something_ends_in_a_traceback(record: Path, frozen: Path) -> None:
    """Parts left out or of another type, sealed again: an error of the program's own, or verified, never another."""
    for path, parts in ((record, None), (frozen, ("frozen", "draw", "seed"))):
        good = json.loads(path.read_bytes())
        ways = {way[:depth] for way in leaves(good) for depth in range(1, len(way) + 1)}
        for way in sorted(ways, key=str):
            if way[0] in ("digests", "digest", *_WORDS) or (parts and way[0] not in parts):
                continue
            for value in (None, {}, -1):
                path.write_bytes(json_bytes(sealed(with_leaf(good, way, value))))
                with contextlib.suppress(BrokenSeal):
                    jobs.verify(path)
        path.write_bytes(json_bytes(good))
        assert jobs.verify(path)["verified"]


# -- freezing -------------------------------------------------------------------------------------------------


def test_the_frozen_digest_covers_sheet_lists_and_plan(tmp_path: Path) -> None:
    digests = set()
    for number, (name, old, new) in enumerate(
        [
            ("sheet.toml", "size = 4", "size = 4"),
            ("sheet.toml", "size = 4", "size = 5"),
            ("sheet.toml", '"Panel"', '"Panels"'),
            ("sheet.toml", '"siblings"', '"sibling"'),
            ("people.csv", "p11,c,11.25", "p11,c,11.24"),
            ("people.csv", "p11,c,11.25", "p11,c,11.250"),
            ("pairs.csv", "p11", "p10"),
        ]
    ):
        sheet = written(tmp_path / str(number))
        edit(sheet.with_name(name), old, new)
        digests.add(jobs.freeze(sheet)["digest"])
    sheet = written(tmp_path / "plan")
    digests.add(jobs.freeze(sheet, outcomes=5)["digest"])
    assert len(digests) == 8


def test_comments_and_layout_are_no_content(sheet: Path) -> None:
    """They may change after freezing, and the record shows the text as it was when drawn."""
    jobs.freeze(sheet)
    edit(sheet, "# not too many", "# at most one, as agreed\n")
    record = draw(sheet)
    assert "as agreed" in json.loads(record.read_bytes())["sheet"]["text"]
    assert jobs.verify(record)["verified"]
    edit(sheet, "# at most one, as agreed\n", "# not too many")
    error = broken(record)
    assert error.part == "rules"
    assert "line 11 differs" in str(error)


@pytest.mark.parametrize(
    ("old", "new", "part"),
    [("size = 4", "size = 5", "outcome"), ("max = 1", "max = 2", "rule"), ('"Panel"', '"Panels"', "title")],
)
def test_a_frozen_sheet_that_was_changed_is_not_drawn_from(
    sheet: Path, old: str, new: str, part: str, capsys: pytest.CaptureFixture[str]
) -> None:
    jobs.freeze(sheet)
    edit(sheet, old, new)
    assert main(["draw", str(sheet), "--seed", SEED, "--to", str(sheet.parent / "drawn")]) == 5
    assert f"sheet.toml has changed since it was frozen, in {part}." in capsys.readouterr().err
    assert not (sheet.parent / "drawn").exists()
    assert [entry["event"] for entry in jobs.book_of(sheet).entries()] == ["freeze"]
    edit(sheet, new, old)
    assert json.loads(draw(sheet).read_bytes())["draw"]["number"] == 1


def test_a_changed_line_of_a_long_list_is_named(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    sheet = tmp_path / "sheet.toml"
    lines = ["id,dept", *(f"u{number},{'ab'[number % 2]}" for number in range(2, 2501))]
    (tmp_path / "list.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    sheet.write_text(
        'format = 1\n[frame]\nfile = "list.csv"\n[outcome]\nkind = "selection"\nsize = 10\n'
        '[[rule]]\nkind = "quota"\nwhere = {dept = "a"}\nmin = 5\nmax = 5\n',
        encoding="utf-8",
    )
    assert main(["freeze", str(sheet)]) == 0
    record = draw(sheet)
    assert lines[1499] == "u1500,a"
    edit(tmp_path / "list.csv", "u1500,a\n", "u1500,b\n")
    capsys.readouterr()
    assert main(["draw", str(sheet), "--seed", "1", "--to", str(tmp_path / "again"), "--reason", "r"]) == 5
    assert "list.csv has changed, in lines 1001 to 2000." in capsys.readouterr().err
    error = broken(record)
    assert error.part == "frame"
    assert "lines 1001 to 2000" in str(error)


def test_frozen_file_and_draw_book_must_fit_each_other(sheet: Path) -> None:
    jobs.freeze(sheet)
    frozen, book = jobs.frozen_path(sheet), jobs.book_of(sheet).path
    good, entries = frozen.read_bytes(), book.read_bytes()

    def stopped() -> str:
        with pytest.raises(BrokenSeal) as caught:
            draw(sheet)
        return caught.value.part

    frozen.write_bytes(good.replace(b"Panel", b"Penal"))
    assert stopped() == "frozen file"
    frozen.unlink()
    assert stopped() == "frozen file"
    frozen.write_bytes(good)
    book.unlink()
    assert stopped() == "draw book"
    book.write_bytes(entries.replace(b"freeze", b"frieze"))
    assert stopped() == "draw book"
    book.write_bytes(entries)
    assert draw(sheet).exists()


def test_freezing_twice_is_refused_and_a_new_version_names_the_old(sheet: Path) -> None:
    first = jobs.freeze(sheet)
    with pytest.raises(CallError, match="frozen already"):
        jobs.freeze(sheet)
    edit(sheet, "max = 1", "max = 2")
    second = jobs.freeze(sheet)
    entries = jobs.book_of(sheet).entries()
    assert [entry["supersedes"] for entry in entries] == [None, first["digest"]]
    assert entries[1]["digest"] == second["digest"] != first["digest"]


def test_a_freeze_that_was_killed_before_its_entry_can_be_made_again(
    sheet: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    class Killed(Exception):
        pass

    def kill(*_: object) -> None:
        raise Killed

    with monkeypatch.context() as patch:
        patch.setattr(DrawBook, "append", kill)
        with pytest.raises(Killed):
            jobs.freeze(sheet)
    with pytest.raises(BrokenSeal):
        draw(sheet)
    assert jobs.freeze(sheet)["entry"] == 1
    assert draw(sheet).exists()


# -- the draws of a frozen sheet ------------------------------------------------------------------------------


def test_the_second_draw_needs_a_reason_and_says_that_it_is_the_second(
    sheet: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["freeze", str(sheet)]) == 0
    call = ["draw", str(sheet), "--seed", SEED, "--to"]
    assert main([*call, str(sheet.parent / "one")]) == 0
    capsys.readouterr()
    assert main([*call, str(sheet.parent / "two")]) == 2
    assert "This is draw 2" in capsys.readouterr().err
    assert main([*call, str(sheet.parent / "two"), "--reason", "  "]) == 2
    assert not (sheet.parent / "two").exists()
    capsys.readouterr()
    assert main([*call, str(sheet.parent / "two"), "--reason", "read out wrongly"]) == 0
    assert "Draw 2 of 2" in capsys.readouterr().out
    record = json.loads((sheet.parent / "two" / "record.json").read_bytes())
    assert (record["draw"]["number"], record["draw"]["of"], record["draw"]["reason"]) == (2, 2, "read out wrongly")
    assert any("This is draw 2 of 2" in caution for caution in record["cautions"])
    events = [entry["event"] for entry in jobs.book_of(sheet).entries()]
    assert events == ["freeze", "draw", "drawn", "draw", "drawn"]


def test_a_frozen_draw_uses_the_frozen_plan_and_number(sheet: Path) -> None:
    made = jobs.freeze(sheet, outcomes=2)
    record = json.loads(draw(sheet).read_bytes())
    assert record["plan"] == made["plan"]
    assert record["outcomes"]["count"] == 2
    with pytest.raises(CallError, match="frozen for 2 outcomes"):
        draw(sheet, "more", outcomes=3, reason="more")
    plan = sheet.parent / "plan.json"
    plan.write_bytes(json_bytes(unbuilt(open_sheet(sheet), outcomes=2).plan.to_json()))
    with pytest.raises(CallError, match="frozen with another plan"):
        draw(sheet, "other", plan=plan, reason="other plan")


def test_the_same_seed_draws_something_else_from_a_frozen_sheet(sheet: Path) -> None:
    """The key is made from the frozen digest, which the plan is part of."""
    before = draw(sheet, "before").parent / "outcomes.csv"
    jobs.freeze(sheet)
    after = draw(sheet, "after").parent / "outcomes.csv"
    assert before.read_bytes() != after.read_bytes()
    assert frozen_of(open_sheet(sheet), make_plan(open_sheet(sheet)).plan)["digest"] != open_sheet(sheet).digest


def test_an_interrupted_draw_keeps_its_number(sheet: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Killed at any moment, the draw goes on under the number that it was entered with."""

    class Killed(Exception):
        pass

    def kill(*_: object, **__: object) -> None:
        raise Killed

    jobs.freeze(sheet)
    for number, (owner, name) in enumerate([(DrawBook, "append"), (jobs, "draw"), (jobs, "write_whole")], 1):
        folder, reason = f"drawn{number}", "again" if number > 1 else ""
        with monkeypatch.context() as patch:
            patch.setattr(owner, name, kill)
            with pytest.raises(Killed):
                draw(sheet, folder, f"{SEED}{number}", reason=reason)
        record = draw(sheet, folder, f"{SEED}{number}", reason=reason, resume=True)
        assert json.loads(record.read_bytes())["draw"]["number"] == number
        assert jobs.verify(record)["draw"] == number
    events = [entry["event"] for entry in jobs.book_of(sheet).entries()]
    assert events == ["freeze", *["draw", "drawn"] * 3]


def test_a_draw_that_another_one_has_followed_is_not_gone_on_with(sheet: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    from core.errors import Cancelled

    jobs.freeze(sheet, outcomes=5000)
    asked = iter([False])
    with pytest.raises(Cancelled):
        jobs.draw_to_files(jobs.Wish(sheet, (("", "1"),), sheet.parent / "one"), cancelled=lambda: next(asked, True))
    draw(sheet, "two", reason="the first was stopped")
    with pytest.raises(CallError, match="cannot be gone on with"):
        draw(sheet, "one", "1", reason="why not", resume=True)


# -- the second implementation --------------------------------------------------------------------------------


def test_the_second_implementation_finds_a_good_record_good(record: Path, frozen: Path) -> None:
    for path in (record, frozen):
        findings = examine(path)
        assert all(finding.holds for finding in findings)
        assert any(finding.part == "rule 1 (quota)" for finding in findings)


def test_a_mutant_check_is_caught_by_the_second_implementation_only(
    sheet: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """A quota that lets everything pass: the replay does the same and is content, the sceptic is not."""

    def always(self: Quota, rows: Rows) -> Mask:
        return np.ones(len(rows), bool)

    plan = sheet.parent / "plan.json"
    plan.write_bytes(json_bytes(unbuilt(open_sheet(sheet), outcomes=40).plan.to_json()))
    monkeypatch.setattr(Quota, "check", always)
    record = draw(sheet, outcomes=40, plan=plan)
    assert jobs.verify(record)["verified"]
    wrong = [finding for finding in examine(record) if not finding.holds]
    assert [finding.part for finding in wrong] == ["rule 1 (quota)"]
    assert wrong[0].outcome is not None
    assert main(["verify", str(record), "--independent"]) == 5
    assert "BROKEN rule 1 (quota)" in capsys.readouterr().out
