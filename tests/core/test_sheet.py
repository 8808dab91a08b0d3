"""The sheet: kept byte for byte, its digest, what rules say when it is read, and `where` against plain Python."""

from __future__ import annotations

import json
import math
import tomllib
from collections.abc import Mapping, Sequence
from decimal import Decimal
from fractions import Fraction
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from core.errors import SheetError
from core.files import open_sheet
from core.frame import clean
from core.reading import Report, plain, read_toml, scaled, shown
from core.setting import Setting
from core.sheet import Sheet, read_sheet
from tests.tools import Row, no_files, passing, sheet_of, sheet_text, toml, universe

UNITS: list[Row] = [
    {"id": "p1", "dept": "deck", "amount": "10.50", "days": 1},
    {"id": "p2", "dept": "deck", "amount": "20.00", "days": 2},
    {"id": "p3", "dept": "engine", "amount": "-3.25", "days": 0},
    {"id": "p4", "dept": "", "amount": "7", "days": 3},
]
SELECTION: Row = {"kind": "selection", "size": 2}
ROSTER: Row = {"kind": "roster", "slots": [{"id": "w1", "need": 1}, {"id": "w2", "need": 2}]}
ORDER: Row = {"kind": "order"}
PAIRING: Row = {"kind": "pairing"}
PLACES: Row = {"kind": "assignment", "places": ["r1", "r2"]}


def read(text: str) -> Sheet:
    return read_sheet(text, "sheet.toml", no_files)


def faults(units: list[Row], outcome: Row, *rules: Row) -> list[str]:
    with pytest.raises(SheetError) as caught:
        sheet_of(units, outcome, rules)
    return [str(fault) for fault in caught.value.faults]


def admissible(*rules: Row, outcome: Row = SELECTION) -> int:
    """Return the number of outcomes that meet the rules, by listing."""
    sheet = sheet_of(UNITS, outcome, rules)
    rows = universe(sheet.kind)
    return int(passing(sheet.rules, rows).sum())


# --- kept as it is ----------------------------------------------------------------------------------------------

TEXT = """# why: the agreement of March
format = 1      # the only one
title = "Crew \\u00e9"

[frame]   # four people
units = [
  {id = "p1", dept = "deck"},   # the first
  {id = "p2", dept = "deck"},
]
[outcome]
kind   =   'selection'
size = 1
"""


@pytest.mark.parametrize(
    "raw",
    [
        TEXT.encode(),
        TEXT.replace("\n", "\r\n").encode(),
        b"\xef\xbb\xbf" + TEXT.encode(),
        b"\xef\xbb\xbf" + TEXT.replace("\n", "\r\n").encode(),
        TEXT.rstrip("\n").encode(),
        (TEXT + "\n\n# \u00fc \u4e2d\t\n").encode(),
    ],
    ids=["plain", "CRLF", "BOM", "BOM and CRLF", "no last line end", "more at the end"],
)
def test_text_is_kept_byte_for_byte(raw: bytes, tmp_path: Path) -> None:
    path = tmp_path / "sheet.toml"
    path.write_bytes(raw)
    sheet = open_sheet(path)
    assert sheet.text.encode() == raw
    assert sheet.title == "Crew \u00e9"
    assert sheet.digest == read(TEXT).digest, "comments, line ends and a byte order mark say nothing"


# --- the digest -------------------------------------------------------------------------------------------------

STATED: dict[str, Any] = {
    "format": 1,
    "title": "a",
    "purpose": "b",
    "frame": {"id": "id", "units": [{"id": "p1", "dept": "x", "n": Decimal("1.5")}, {"id": "p2", "dept": "y", "n": 2}]},
    "outcome": {"kind": "selection", "size": {"min": 0, "max": 2}},
    "rule": [
        {
            "kind": "quota",
            "id": "q",
            "where": {"dept": ["x", "y"], "n": {"min": 1, "max": 2}},
            "min": 0,
            "max": 2,
            "off": False,
        },
        {"kind": "total", "column": "n", "max": Decimal("3.25"), "note": "c", "off": True},
        {"kind": "pin", "units": ["p1"]},
    ],
    "record": {"basis": "law", "operator": "o", "scrutineer": "s", "published": "p", "seed_from": "f"},
}


def written(document: Mapping[str, Any], *, backwards: bool = False) -> str:
    """Return the document as TOML on single lines; `backwards`: every table's keys in the opposite order."""

    def turned(value: Any) -> Any:
        if isinstance(value, Mapping):
            return {key: turned(value[key]) for key in reversed(list(value))}
        return [turned(item) for item in value] if isinstance(value, list) else value

    stated = turned(document) if backwards else document
    return "".join(f"{key} = {toml(value)}\n" for key, value in stated.items())


def test_digest_does_not_depend_on_the_writing() -> None:
    digest = read(written(STATED)).digest
    assert read(written(STATED, backwards=True)).digest == digest
    spaced = "\n\n".join(f"  {line}   # a comment" for line in written(STATED).splitlines())
    assert read(spaced).digest == digest
    tables = written({k: v for k, v in STATED.items() if k not in ("outcome", "rule")})
    tables += '[outcome]\nkind = "selection"\n[outcome.size]\nmax = 2\nmin = 0\n'
    for rule in STATED["rule"]:
        tables += "[[rule]]\n" + "".join(f"{key} = {toml(value)}\n" for key, value in rule.items())
    assert read(tables).digest == digest


def changes() -> dict[str, dict[str, Any]]:
    """Return the document with one value changed, for every value that can be changed to a valid one."""
    others: dict[str, Any] = {
        "title": "z",
        "purpose": "z",
        "frame.units.0.dept": "z",
        "frame.units.0.n": Decimal("1.50"),
        "frame.units.1.n": 1,
        "outcome.size.min": 1,
        "outcome.size.max": 1,
        "rule.0.id": "z",
        "rule.0.where.dept.1": "x",
        "rule.0.where.n.min": 0,
        "rule.0.where.n.max": Decimal("2.5"),
        "rule.0.min": 1,
        "rule.0.max": 1,
        "rule.0.off": True,
        "rule.1.max": Decimal("3.5"),
        "rule.1.note": "z",
        "rule.1.off": False,
        "rule.2.kind": "bar",
        "rule.2.units.0": "p2",
        **{f"record.{key}": "z" for key in STATED["record"]},
    }
    changed = {}
    for path, value in others.items():
        document = tomllib.loads(written(STATED), parse_float=Decimal)
        *way, last = (int(part) if part.isdecimal() else part for part in path.split("."))
        place: Any = document
        for part in way:
            place = place[part]
        assert place[last] != value or str(place[last]) != str(value)
        place[last] = value
        changed[path] = document
    return changed


@pytest.mark.parametrize("path", changes())
def test_digest_depends_on_every_value(path: str) -> None:
    assert read(written(changes()[path])).digest != read(written(STATED)).digest


def test_digest_depends_on_the_order_of_lists() -> None:
    turned = {**STATED, "rule": STATED["rule"][::-1]}
    assert read(written(turned)).digest != read(written(STATED)).digest
    turned = {**STATED, "frame": {**STATED["frame"], "units": STATED["frame"]["units"][::-1]}}
    assert read(written(turned)).digest != read(written(STATED)).digest


def test_digest_depends_on_the_bytes_of_every_list(tmp_path: Path) -> None:
    (tmp_path / "sheet.toml").write_text(
        'format = 1\nframe = {file = "a.csv"}\noutcome = {kind = "selection"}\nrule = [{kind = "bar", file = "b.csv"}]\n'
    )
    (tmp_path / "a.csv").write_text("id\np1\np2\n")
    (tmp_path / "b.csv").write_text("id\np1\n")
    digests = {open_sheet(tmp_path / "sheet.toml").digest}
    (tmp_path / "a.csv").write_text("id\np1\np3\n")
    digests.add(open_sheet(tmp_path / "sheet.toml").digest)
    (tmp_path / "b.csv").write_text("id\np3\n")
    digests.add(open_sheet(tmp_path / "sheet.toml").digest)
    (tmp_path / "b.csv").write_text("id\np3\n\n")
    digests.add(open_sheet(tmp_path / "sheet.toml").digest)
    assert len(digests) == 4


JSON = st.recursive(
    st.booleans() | st.integers(-99, 99) | st.text(max_size=3),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=2), inner, max_size=3),
    max_leaves=8,
)


@given(JSON, JSON)
def test_equal_texts_mean_equal_values(one: Any, other: Any) -> None:
    from core.sheet import canonical_json

    equal = json.dumps(one, sort_keys=True) == json.dumps(other, sort_keys=True)
    assert (canonical_json(one) == canonical_json(other)) == equal


# --- rules that are not in force, and rules that say nothing ------------------------------------------------------


def test_rules_that_are_off_are_kept_and_not_in_force() -> None:
    off = {"kind": "pin", "units": ["p1"], "off": True, "note": "not agreed", "id": "agreed"}
    sheet = sheet_of(UNITS, SELECTION, [{"kind": "bar", "units": ["p2"]}, off])
    assert [rule.id for rule in sheet.rules] == ["bar 1"]
    assert [(r.id, r.kind, r.note, r.words) for r in sheet.off] == [
        ("agreed", "pin", "not agreed", "p1 is certainly drawn.")
    ]
    assert admissible(off) == admissible()


def test_rules_that_are_off_are_read_all_the_same() -> None:
    told = faults(UNITS, SELECTION, {"kind": "pin", "units": ["p9"], "off": True})
    assert told[0].startswith("sheet.toml, [[rule]] 1 (pin), units: there is no such unit in the list. Found: p9.")


def test_ids_of_rules() -> None:
    sheet = sheet_of(
        UNITS, SELECTION, [{"kind": "bar", "units": ["p2"]}, {"kind": "pin", "units": ["p1"], "id": "key"}]
    )
    assert [rule.id for rule in sheet.rules] == ["bar 1", "key"]
    assert sheet.rule("key").name == "pin"
    told = faults(UNITS, SELECTION, {"kind": "quota", "min": 1, "id": "quota 2"}, {"kind": "quota", "min": 1})
    assert told == [
        "sheet.toml, [[rule]] 2 (quota), id: another rule has this id. Found: quota 2. Allowed: an id that no other rule has."
    ]


@pytest.mark.parametrize(
    ("outcome", "rule"),
    [
        (SELECTION, {"kind": "quota", "min": 0}),
        (SELECTION, {"kind": "quota", "where": {"dept": "deck"}, "max": 2}),
        (SELECTION, {"kind": "quota", "where": {"dept": "cook"}, "max": 0, "empty": True}),
        (SELECTION, {"kind": "total", "column": "amount", "min": -4}),
        (SELECTION, {"kind": "total", "column": "amount", "max": Decimal("37.5")}),
        (SELECTION, {"kind": "apart", "alike": "id"}),
        (PAIRING, {"kind": "together", "alike": "id"}),
        (ROSTER, {"kind": "quota", "max": 8}),
        (ROSTER, {"kind": "load", "max": 2}),
        (ROSTER, {"kind": "load", "min": 1, "where": {"dept": "cook"}, "empty": True}),
        (ROSTER, {"kind": "spacing", "min": 1}),
        (ROSTER, {"kind": "run", "duties": True, "max": 2}),
        (ORDER, {"kind": "spacing", "min": 1, "alike": "dept"}),
        (ORDER, {"kind": "spacing", "min": 9, "alike": "id"}),
        (ORDER, {"kind": "run", "alike": "dept", "max": 2}),
        (PAIRING, {"kind": "mixed", "column": "dept", "max": 2}),
    ],
    ids=lambda value: value["kind"],
)
def test_a_rule_that_always_holds_says_so(outcome: Row, rule: Row) -> None:
    sheet = sheet_of(UNITS, outcome, [rule])
    assert len(sheet.notices) == 1
    assert sheet.notices[0].startswith(f"[[rule]] 1 ({rule['kind']}): this ")
    assert "always holds" in sheet.notices[0]
    assert passing(sheet.rules, universe(sheet.kind)).all()


@pytest.mark.parametrize(
    ("outcome", "rule"),
    [
        (SELECTION, {"kind": "quota", "where": {"dept": "deck"}, "max": 1}),
        (SELECTION, {"kind": "total", "column": "amount", "min": 4}),
        (ROSTER, {"kind": "load", "max": {"column": "days"}}),
        (ROSTER, {"kind": "run", "duties": True, "max": 1}),
        (ORDER, {"kind": "spacing", "min": 2, "alike": "dept"}),
        (ORDER, {"kind": "run", "alike": "dept", "max": 1}),
        (PAIRING, {"kind": "mixed", "column": "dept", "max": 1}),
    ],
    ids=lambda value: value["kind"],
)
def test_a_rule_that_can_be_broken_says_nothing(outcome: Row, rule: Row) -> None:
    sheet = sheet_of(UNITS, outcome, [rule])
    assert sheet.notices == ()
    assert not passing(sheet.rules, universe(sheet.kind)).all()


def test_a_misspelt_limit_of_a_place_is_told() -> None:
    places = {"kind": "assignment", "places": [{"id": "a", "mni": 3}, {"id": "b", "mni": ""}]}
    (notice,) = sheet_of(UNITS, places).notices
    assert notice == "[outcome]: the places have a column mni, which limits nothing; was min meant?"


# --- numbers ----------------------------------------------------------------------------------------------------


@given(
    st.decimals(allow_nan=False, allow_infinity=False, places=None) | st.integers(), st.integers(0, 6), st.booleans()
)
def test_scaling_is_exact(value: Decimal | int, decimals: int, up: bool) -> None:
    number = Decimal(value)
    found = scaled(value, decimals, up=up)
    if number.adjusted() > 40 and number:
        assert found is None
        return
    if number.adjusted() < -100:
        return
    exact = Fraction(number) * 10**decimals
    expected = math.ceil(exact) if up else math.floor(exact)
    assert found == expected if abs(expected) <= 10**18 else found is None


@pytest.mark.parametrize(
    ("text", "up", "down"),
    [
        ("1.005", 101, 100),
        ("-1.005", -100, -101),
        ("1.00", 100, 100),
        ("1e-999999", 1, 0),
        ("-1e-999999", 0, -1),
        ("0e999999", 0, 0),
        ("1.0000000000000000000000000000000000001", 101, 100),
        ("1e16", 10**18, 10**18),
        ("1e17", None, None),
        ("1e999999", None, None),
        ("nan", None, None),
        ("inf", None, None),
        ("-inf", None, None),
    ],
)
def test_scaling_of_numbers_that_invite_mistakes(text: str, up: int | None, down: int | None) -> None:
    number = Decimal(text)
    assert (scaled(number, 2, up=True), scaled(number, 2, up=False)) == (up, down)


@pytest.mark.parametrize(
    ("bound", "expected"),
    [
        ({"min": Decimal("17.49")}, 3),
        ({"min": Decimal("17.50")}, 3),
        ({"min": Decimal("17.501")}, 2),
        ({"min": Decimal("17.5000000000000000000000000000000000001")}, 2),
        ({"max": Decimal("3.7499")}, 0),
        ({"max": Decimal("3.75")}, 1),
        ({"min": 27, "max": 27}, 1),
        ({"min": Decimal("26.999"), "max": Decimal("27.001")}, 1),
    ],
)
def test_bounds_of_a_total_are_exact(bound: Row, expected: int) -> None:
    assert admissible({"kind": "total", "column": "amount", **bound}) == expected


def test_bounds_from_columns_of_slots() -> None:
    per = {"kind": "quota", "per": "slot"}
    assert admissible({**per, "min": {"column": "need"}, "max": {"column": "need"}}, outcome=ROSTER) == 4 * 6
    assert admissible({**per, "in": ["w2"], "max": {"column": "need"}}, outcome=ROSTER) == 16 * (1 + 4 + 6)
    assert (
        admissible({"kind": "total", "column": "days", "per": "slot", "min": {"column": "need"}}, outcome=ROSTER)
        == 14 * 12
    )


def test_bounds_from_columns_of_units() -> None:
    assert admissible({"kind": "load", "max": {"column": "days"}}, outcome=ROSTER) == 3 * 4 * 1 * 4
    assert (
        admissible({"kind": "load", "min": {"column": "days"}, "where": {"days": [1, 2]}}, outcome=ROSTER)
        == 3 * 1 * 4 * 4
    )


def test_a_column_with_blanks_is_read_only_where_it_is_needed() -> None:
    units = [*UNITS[:3], {**UNITS[3], "days": ""}]
    rule = {"kind": "load", "max": {"column": "days"}}
    assert faults(units, ROSTER, rule) == [
        "sheet.toml, [frame], units, row 4, column days: this is no number of slots, and [[rule]] 1 (load) needs one. "
        "Found: a blank."
    ]
    assert sheet_of(units, ROSTER, [{**rule, "where": {"dept": "deck"}}]).rules


def test_one_workbook_with_two_worksheets(tmp_path: Path) -> None:
    openpyxl = pytest.importorskip("openpyxl")
    book = openpyxl.Workbook()
    book.active.title = "crew"
    for line in (["badge"], ["p1"], ["p2"]):
        book.active.append(line)
    weeks = book.create_sheet("weeks")
    weeks.append(["slot", "need"])
    weeks.append(["w1", 1])
    book.save(tmp_path / "book.xlsx")
    (tmp_path / "sheet.toml").write_text(
        'format = 1\nframe = {file = "book.xlsx", worksheet = "crew", id = "badge"}\n[outcome]\nkind = "roster"\n'
        'slots = {file = "book.xlsx", worksheet = "weeks", id = "slot"}\n'
    )
    sheet = open_sheet(tmp_path / "sheet.toml")
    assert (sheet.frame.ids, sheet.kind.places.ids) == (["p1", "p2"], ("w1",))
    assert list(sheet.tables) == ["book.xlsx"]


# --- where ------------------------------------------------------------------------------------------------------


def selected(units: list[Row], where: Row) -> list[str]:
    """Return the units that a `where` selects."""
    sheet = sheet_of(units, {"kind": "selection"})
    document = read_toml(f"where = {toml(where)}", "sheet.toml")
    report = Report("sheet.toml", "")
    mask = Setting(sheet.frame, sheet.kind, no_files).where(document["where"], report, empty=True)
    assert mask is not None, report.faults
    return [unit for unit, inside in zip(sheet.frame.ids, mask, strict=True) if inside]


@pytest.mark.parametrize(
    ("where", "expected"),
    [
        ({}, ["p1", "p2", "p3", "p4"]),
        ({"dept": "deck"}, ["p1", "p2"]),
        ({"dept": " deck "}, ["p1", "p2"]),
        ({"dept": "Deck"}, []),
        ({"dept": ""}, ["p4"]),
        ({"dept": ["engine", "deck"]}, ["p1", "p2", "p3"]),
        ({"days": 1}, ["p1"]),
        ({"days": "1"}, ["p1"]),
        ({"days": ["1", 3]}, ["p1", "p4"]),
        ({"days": Decimal("1.0")}, []),
        ({"amount": Decimal("10.50")}, ["p1"]),
        ({"amount": Decimal("10.5")}, []),
        ({"amount": 7}, ["p4"]),
        ({"amount": {"min": Decimal("10.5")}}, ["p1", "p2"]),
        ({"amount": {"min": Decimal("10.501")}}, ["p2"]),
        ({"amount": {"max": Decimal("-3.25")}}, ["p3"]),
        ({"amount": {"max": Decimal("-3.2500000000000000000000000000000001")}}, []),
        ({"amount": {"min": 7, "max": Decimal("10.5")}}, ["p1", "p4"]),
        ({"amount": {"min": 10**17}}, []),
        ({"amount": {"max": 10**17}}, ["p1", "p2", "p3", "p4"]),
        ({"amount": {"min": -(10**17)}, "dept": "deck"}, ["p1", "p2"]),
        ({"dept": "deck", "days": {"min": 2}}, ["p2"]),
    ],
)
def test_where(where: Row, expected: list[str]) -> None:
    assert selected(UNITS, where) == expected


def test_where_takes_small_decimals_as_they_are_written() -> None:
    assert selected([{"id": "a", "x": "0.0000001"}, {"id": "b", "x": "1"}], {"x": Decimal("0.0000001")}) == ["a"]


CELL = st.sampled_from(["", "a", "b", "1", "2", "1.0", " a", "\u00e9", "e\u0301"])
AMOUNT = st.decimals(-99, 99, places=2)
TEXTS = CELL | st.integers(0, 3) | st.sampled_from([Decimal("1.0"), Decimal("2.5")])
RANGE = st.dictionaries(st.sampled_from(["min", "max"]), AMOUNT | st.integers(-99, 99), min_size=1).filter(
    lambda r: len(r) < 2 or r["min"] <= r["max"]
)


@settings(max_examples=60)
@given(
    st.lists(st.tuples(CELL, AMOUNT), min_size=1, max_size=8),
    st.fixed_dictionaries({}, optional={"text": TEXTS | st.lists(TEXTS, min_size=1, max_size=3), "amount": RANGE}),
)
def test_where_against_plain_python(rows: list[tuple[str, Decimal]], where: Row) -> None:
    units = [{"id": f"u{i}", "text": text, "amount": f"{amount:f}"} for i, (text, amount) in enumerate(rows)]
    expected = []
    for i, (text, amount) in enumerate(rows):
        wanted = where.get("text", text)
        texts = wanted if isinstance(wanted, list) else [wanted]
        limits = where.get("amount", {})
        if clean(text) in {clean(str(value)) for value in texts} and (
            Fraction(limits.get("min", amount)) <= Fraction(amount) <= Fraction(limits.get("max", amount))
        ):
            expected.append(f"u{i}")
    assert selected(units, where) == expected


# --- anything may stand in a rule -------------------------------------------------------------------------------

LEAF = (
    st.booleans()
    | st.integers(-(10**20), 10**20)
    | st.integers(-2, 4)
    | st.decimals(allow_nan=False, allow_infinity=False)
    | st.sampled_from(["", "deck", "dept", "days", "amount", "p1", "p2", "w1", "slot", "id", "x\ny", "need", "r1"])
)
ANYTHING = LEAF | st.lists(LEAF, max_size=3) | st.lists(st.lists(LEAF, max_size=2), max_size=2)
TABLES = st.dictionaries(
    st.sampled_from(["min", "max", "column", "dept", "days", "amount", "unit", "slot"]), ANYTHING, max_size=2
)
KEYS = [
    "where",
    "min",
    "max",
    "per",
    "in",
    "column",
    "units",
    "cells",
    "pairs",
    "alike",
    "if",
    "then",
    "duties",
    "by_at_most",
]
RULE = st.dictionaries(st.sampled_from(KEYS), ANYTHING | TABLES | st.lists(TABLES, max_size=2), max_size=4)
NAMES = ["quota", "total", "load", "pin", "bar", "apart", "together", "needs", "distinct", "spacing", "run", "before"]


@settings(max_examples=300)
@given(
    st.sampled_from([*NAMES, "differ", "agree", "mixed"]),
    RULE,
    st.sampled_from([SELECTION, ROSTER, ORDER, PAIRING, PLACES]),
)
def test_whatever_stands_in_a_rule_it_is_read_or_refused(name: str, body: Row, outcome: Row) -> None:
    told: list[str] = []
    try:
        sheet = sheet_of(UNITS, outcome, [{**body, "kind": name}])
        told += [rule.words() for rule in sheet.rules]
    except SheetError as error:
        told += [str(fault) for fault in error.faults]
    assert told, "neither read nor refused"
    assert all(line and "\n" not in line for line in told)


@settings(max_examples=300)
@given(
    st.fixed_dictionaries(
        {},
        optional={
            "where": st.dictionaries(
                st.sampled_from(["dept", "days", "amount", "x"]), LEAF | st.lists(LEAF, max_size=2) | TABLES, max_size=2
            ),
            "min": st.integers(-2, 9) | TABLES,
            "max": st.integers(-2, 9) | TABLES,
            "per": st.sampled_from(["slot", "place", "dept", "need", "days", "", "id"]),
            "in": st.lists(st.sampled_from(["w1", "w2", "r1", "r2", "", "x"]), max_size=2),
            "empty": st.booleans(),
        },
    ),
    st.sampled_from([SELECTION, ROSTER, PLACES]),
)
def test_quotas_are_read_or_refused(body: Row, outcome: Row) -> None:
    told: Sequence[object]
    try:
        sheet = sheet_of(UNITS, outcome, [{**body, "kind": "quota"}])
    except SheetError as error:
        told = error.faults
    else:
        told = sheet.rules
        assert not sheet.notices or sheet.rules[0].check(universe(sheet.kind)).all()
    assert told, "neither read nor refused"


# --- values in words --------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ('"a\\nb\\u001b"', "a\\u000Ab\\u001B"),
        ("true", "true"),
        ("[1, 2.50, true]", "[1, 2.50, true]"),
        ('{a = "x", "b c" = [2024-01-01]}', '{a = "x", "b c" = [2024-01-01]}'),
        ("[nan, inf, -inf]", "[nan, inf, -inf]"),
        ("07:32:00", "07:32:00"),
        (f'"{"a" * 99}"', "a" * 57 + "..."),
    ],
)
def test_values_are_shown_as_the_sheet_writes_them(text: str, expected: str) -> None:
    assert shown(read_toml(f"x = {text}", "sheet.toml")["x"]) == expected


@pytest.mark.parametrize(
    ("value", "expected"), [(True, None), ([1], None), (7, "7"), ("7", "7"), (Decimal("7.50"), "7.50")]
)
def test_plain(value: object, expected: str | None) -> None:
    assert plain(value) == expected


def test_a_sheet_of_the_tools_is_a_sheet() -> None:
    assert read(sheet_text(UNITS, SELECTION)).frame.size == 4
