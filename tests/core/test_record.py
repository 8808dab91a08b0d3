"""The record: its seal, what it says of the seed, and how it names what has changed."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import pytest

from core.engine import draw
from core.frame import Table
from core.record import (
    broken_part,
    cautions,
    changed,
    changed_file,
    files_of,
    frozen_of,
    needed_bits,
    readable,
    record_of,
    sealed,
    seed_bits,
)
from core.sheet import digest_of
from core.stream import make_key
from core.tables import read_table
from tests.core.draws import RARE, unbuilt
from tests.tools import sheet_of

PARTIES = [("", "4071933580" * 2)]
ABOUT = {"number": 1, "of": 1, "reason": None, "at": "2024-01-01T00:00:00+00:00", "entry": None}


@pytest.fixture(scope="module")
def record() -> dict[str, Any]:
    ready = unbuilt(RARE, block=1024)
    drawn = draw(ready, make_key("draw", RARE.digest, PARTIES), 2)
    return record_of(ready, drawn, PARTIES, path="sheet.toml", outcomes_sha256="0" * 64, frozen=None, draw=ABOUT)


# -- seeds ----------------------------------------------------------------------------------------------------


def test_twenty_decimal_dice_carry_66_4_bits() -> None:
    assert round(seed_bits([("", "40719335804071933580")]), 1) == 66.4
    assert seed_bits([("", "40719 33580 40719-33580")]) == pytest.approx(20 * math.log2(10))


@pytest.mark.parametrize(
    ("text", "bits"),
    [
        ("7", math.log2(10)),
        ("abc", 3 * math.log2(26)),
        ("Abc", 3 * math.log2(52)),
        ("Abc1", 4 * math.log2(62)),
        ("Abc1!", 5 * math.log2(94)),
        (" ,;.-_/", 0.0),
        ("", 0.0),
    ],
)
def test_bits_of_a_text_are_those_of_its_smallest_usual_alphabet(text: str, bits: float) -> None:
    assert seed_bits([("", text)]) == pytest.approx(bits)


def test_several_parties_bring_the_sum() -> None:
    assert seed_bits([("a", "12345"), ("b", "xyz")]) == pytest.approx(5 * math.log2(10) + 3 * math.log2(26))


@pytest.mark.parametrize("size", [1, 2, 3, 1000, 10**15, 3**400, 10**4000])
def test_needed_bits_are_log2_of_the_size(size: int) -> None:
    assert needed_bits(size) == pytest.approx(math.log2(size), rel=1e-12, abs=1e-12)


def test_nothing_needs_nothing() -> None:
    assert needed_bits(0) == 0.0


def test_record_says_what_the_seed_carries_and_what_is_needed(record: dict[str, Any]) -> None:
    assert record["seed"]["bits"] == 66.4
    # where the size is an estimate, the upper end of its interval is the careful choice
    estimate = int(record["admissible"]["high"])
    assert record["seed"]["needed"] == round(math.log2(estimate), 1)
    assert any("The seed is short" in caution for caution in record["cautions"])


def test_a_seed_with_bits_to_spare_is_not_called_short() -> None:
    told = cautions(RARE, frozen=True, number=1, bits=200.0, needed=110.0)
    assert not any("The seed is short" in caution for caution in told)
    assert any("The seed is short" in c for c in cautions(RARE, frozen=True, number=1, bits=150.0, needed=110.0))


# -- the seal -------------------------------------------------------------------------------------------------


def test_a_record_is_sealed_and_stays_so_through_json(record: dict[str, Any]) -> None:
    assert broken_part(record) == ""
    assert broken_part(json.loads(json.dumps(record, indent=1))) == ""
    assert sealed(record) == record


def test_the_changed_part_is_named(record: dict[str, Any]) -> None:
    parts = [part for part in record if part not in ("digests", "digest")]
    assert len(parts) >= 15
    for part in parts:
        assert broken_part({**record, part: _other(record[part])}) == part
        assert broken_part({key: value for key, value in record.items() if key != part}) == part


def test_a_changed_seal_is_named(record: dict[str, Any]) -> None:
    assert broken_part({**record, "digest": "0" * 64}) == "digest"
    assert broken_part({**record, "digests": {**record["digests"], "more": "0" * 64}}) == "more"
    assert broken_part({**record, "digests": None}) == "digests"
    assert broken_part({}) == "digests"


def test_an_added_part_is_named(record: dict[str, Any]) -> None:
    assert broken_part({**record, "note": "added later"}) == "note"


def test_parts_sealed_one_by_one_but_not_as_a_whole_are_seen(record: dict[str, Any]) -> None:
    seed = {**record["seed"], "bits": 300.0}
    forged = {**record, "seed": seed, "digests": {**record["digests"], "seed": digest_of(seed)}}
    assert broken_part(forged) == "digest"


def _other(value: Any) -> Any:
    if isinstance(value, dict) and value:
        first = next(iter(value))
        return {**value, first: _other(value[first])}
    if isinstance(value, list) and value:
        return [_other(value[0]), *value[1:]]
    return value + "x" if isinstance(value, str) else "x"


# -- what has changed -----------------------------------------------------------------------------------------


def listed(path: Path, lines: int, other: int | None = None, *, end: str = "\n") -> Table:
    """Write and read a list of so many lines, the header included; line `other` (from 1) is different."""
    told = ["id,dept", *(f"u{number},{'x' if number == other else 'a'}" for number in range(2, lines + 1))]
    path.write_bytes((end.join(told) + end).encode())
    return read_table(path)


def known(table: Table) -> dict[str, Any]:
    return files_of({table.name: table})[0]


@pytest.mark.parametrize(
    ("line", "words"),
    [
        (2, "lines 1 to 1000"),
        (1000, "lines 1 to 1000"),
        (1001, "lines 1001 to 2000"),
        (1500, "lines 1001 to 2000"),
        (2000, "lines 1001 to 2000"),
        (2001, "lines 2001 to 3000"),
        (2500, "lines 2001 to 3000"),
    ],
)
def test_a_changed_line_is_named_by_its_thousand(tmp_path: Path, line: int, words: str) -> None:
    """Lines are those of the file, counted from 1, the header among them."""
    before = known(listed(tmp_path / "list.csv", 2500))
    told = changed_file(before, listed(tmp_path / "list.csv", 2500, line))
    assert told == f"list.csv has changed, in {words}."


def test_an_unchanged_list_is_unchanged(tmp_path: Path) -> None:
    before = known(listed(tmp_path / "list.csv", 2500))
    assert changed_file(before, listed(tmp_path / "list.csv", 2500)) == ""


def test_a_shorter_or_longer_list_is_seen(tmp_path: Path) -> None:
    before = known(listed(tmp_path / "list.csv", 2500))
    assert "lines 2001 to 3000" in changed_file(before, listed(tmp_path / "list.csv", 2400))
    assert "ends earlier, after line 2000" in changed_file(before, listed(tmp_path / "list.csv", 2000))
    assert "lines 3001 to 4000" in changed_file(
        known(listed(tmp_path / "list.csv", 3000)), listed(tmp_path / "list.csv", 3001)
    )


def test_other_line_ends_are_a_change(tmp_path: Path) -> None:
    before = known(listed(tmp_path / "list.csv", 20))
    assert "lines 1 to 1000" in changed_file(before, listed(tmp_path / "list.csv", 20, end="\r\n"))


def test_a_list_that_was_not_there_is_seen(tmp_path: Path) -> None:
    assert changed_file(None, listed(tmp_path / "list.csv", 3)) == "list.csv was not there before."


UNITS = [{"id": f"u{i}", "dept": "ab"[i % 2]} for i in range(6)]


def test_what_is_frozen_covers_sheet_and_plan() -> None:
    rule = {"kind": "quota", "where": {"dept": "a"}, "min": 1, "max": 1}
    ready = unbuilt(sheet_of(UNITS, {"kind": "selection", "size": 2}, [rule]))
    frozen = frozen_of(ready.sheet, ready.plan)
    assert changed(frozen, ready.sheet) == ""
    assert frozen["digest"] == digest_of({key: value for key, value in frozen.items() if key != "digest"})
    assert frozen_of(ready.sheet, unbuilt(ready.sheet, block=512).plan)["digest"] != frozen["digest"]
    for units, size, now in ((UNITS, 3, rule), (UNITS[:5], 2, rule), (UNITS, 2, {**rule, "max": 2})):
        other = unbuilt(sheet_of(units, {"kind": "selection", "size": size}, [now]))
        assert frozen_of(other.sheet, other.plan)["digest"] != frozen["digest"]
        part = "outcome" if size == 3 else "frame" if len(units) == 5 else "rule"
        assert changed(frozen, other.sheet) == f"sheet.toml has changed since it was frozen, in {part}."


def test_digest_to_read_aloud() -> None:
    assert readable("0123456789abcdef" * 4) == "0123 4567 89ab cdef"
