"""The independent checker: every rule and kind by hand-made outcomes, published counts, and altered records.

Nothing of core but the checker itself is imported here, so that these expectations stand on their own.
"""

from __future__ import annotations

import ast
import hashlib
import itertools
import json
import sys
from collections.abc import Iterable
from pathlib import Path

import pytest

import core.sceptic
from core.sceptic import Finding, check_outcomes, examine

Rows = list[dict[str, str]]
COLUMN = {"selection": "", "assignment": "place", "roster": "slot", "order": "position", "pairing": "partner"}

# Six units: `dept` A A A B B and blank, `pay` with decimals, `need` for rules that refer to a column.
CREW = """
format = 1
[frame]
units = [
  {id = "a", team = "p", dept = "A", pay = 10.5, need = 1, side = "L"},
  {id = "b", team = "q", dept = "A", pay = 20, need = 2, side = "L"},
  {id = "c", team = "r", dept = "A", pay = "-5.25", need = 0, side = "L"},
  {id = "d", team = "p", dept = "B", pay = 40, need = 1, side = "R"},
  {id = "e", team = "q", dept = "B", pay = 7, need = 1, side = "R"},
  {id = "f", team = "r", dept = "", pay = 1, need = 0, side = "R"},
]
"""
SELECTION = CREW + '[outcome]\nkind = "selection"\n'
ASSIGNMENT = CREW + (
    '[outcome]\nkind = "assignment"\nplaces = [{id = "x", max = 4, zone = "n", need = 3}, '
    '{id = "y", min = 1, zone = "n", need = 1}, {id = "z", zone = "s", need = 0}]\n'
)
ROSTER = CREW + (
    '[outcome]\nkind = "roster"\n'
    'slots = [{id = "1", month = "may", need = 2}, {id = "2", month = "may", need = 1}, '
    '{id = "3", month = "june", need = 0}, {id = "4", month = "", need = 1}]\n'
)
ORDER = CREW + '[outcome]\nkind = "order"\n'
PAIRING = CREW + '[outcome]\nkind = "pairing"\n'


def lines(kind: str, text: str) -> Rows:
    """Lines of an outcome: "a b" (selection), "abcdef" in order (order), else "unit:where unit:where"."""
    if kind == "order":
        return [{"unit": unit, "position": str(place)} for place, unit in enumerate(text, start=1)]
    cells = (cell.partition(":") for cell in text.split())
    return [{"unit": unit, **({COLUMN[kind]: where} if COLUMN[kind] else {})} for unit, _, where in cells]


def check(sheet: str, *outcomes: Rows, folder: Path = Path()) -> list[Finding]:
    return check_outcomes(sheet, folder, list(outcomes))


def holding(sheet: str, outcomes: Iterable[Rows], folder: Path = Path()) -> int:
    """Return how many of the outcomes, each checked alone, meet everything."""
    return sum(all(finding.holds for finding in check(sheet, outcome, folder=folder)) for outcome in outcomes)


def rule(text: str) -> str:
    return f"[[rule]]\n{text}\n"


def test_imports_the_standard_library_only() -> None:
    tree = ast.parse(Path(core.sceptic.__file__).read_text(encoding="utf-8"))
    names = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            names |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0
            names.add(str(node.module))
    assert names
    assert {name.partition(".")[0] for name in names} <= sys.stdlib_module_names
    assert not {"importlib", "builtins", "runpy", "subprocess"} & names


# ---- kinds: sheet, outcomes that are of the kind, outcomes that are not (with a word of the reason)

KINDS: list[tuple[str, str, list[str], list[tuple[str, str]]]] = [
    (
        "selection",
        SELECTION,
        ["", "a", "a b c d e f"],
        [("a a", "twice"), ("a q", "'q' is not in the frame")],
    ),
    (
        "selection",
        SELECTION + "size = 2\n",
        ["a b"],
        [("a", "counted 1, allowed 2..2"), ("a b c", "counted 3")],
    ),
    (
        "selection",
        SELECTION + "size = {min = 1, max = 2}\n",
        ["a", "a b"],
        [("", "counted 0"), ("a b c", "..2")],
    ),
    ("selection", SELECTION + "size = {min = 5}\n", ["a b c d e f"], [("a b c d", "counted 4, allowed 5..")]),
    (
        "assignment",
        ASSIGNMENT,
        ["a:x b:x c:x d:x e:y f:y", "a:y b:y c:y d:y e:y f:y", "a:x b:y c:z d:x e:y f:z"],
        [
            ("a:x b:x c:x d:x e:x f:y", "place x: counted 5, allowed ..4"),
            ("a:x b:x c:x d:x e:z f:z", "place y: counted 0, allowed 1.."),
            ("a:x b:y c:z d:x e:y", "5 names"),
            ("a:x b:y c:z d:x e:y f:z f:x", "7 names"),
            ("a:x b:y c:z d:x e:y f:w", "'w'"),
        ],
    ),
    (
        "roster",
        ROSTER,
        ["", "a:1", "a:1 a:2 a:3 a:4 b:1"],
        [("a:5", "slot '5'"), ("a:1 a:1", "twice"), ("q:1", "'q'"), ("a:", "slot ''")],
    ),
    ("order", ORDER, ["abcdef", "fedcba"], [("abcde", "5 names"), ("abcdee", "6 names"), ("abcdefa", "'7'")]),
    (
        "pairing",
        PAIRING,
        ["a:b c:d e:f", "f:a e:b d:c"],
        [
            ("a:b c:d", "4 names"),
            ("a:b c:d e: f:", "2 units stay single, not 0"),
            ("a:b b:a c:d e:f", "8 names"),
            ("a:a b:c d:e f:", "7 names"),
            ("a:b c:d e:q", "'q'"),
        ],
    ),
    ("pairing", PAIRING + 'sides = "side"\n', ["a:d b:e c:f", "f:a b:d e:c"], [("a:b c:d e:f", "a and b")]),
    ("pairing", PAIRING + 'sides = "dept"\n', [], [("a:d b:e c:f", "does not make two sides")]),
]


@pytest.mark.parametrize(("kind", "sheet", "good", "bad"), KINDS)
def test_kind(kind: str, sheet: str, good: list[str], bad: list[tuple[str, str]]) -> None:
    for text in good:
        assert check(sheet, lines(kind, text)) == [
            Finding(f"kind {kind}", None, True, f"Each of 1 outcomes is of the kind {kind}.")
        ]
    for text, word in bad:
        (finding,) = check(sheet, lines(kind, text))
        assert not finding.holds, text
        assert finding.outcome == 1
        assert finding.words.startswith("Outcome 1: ")
        assert word in finding.words


def test_two_units_at_one_position() -> None:
    rows = lines("order", "abcdef")
    rows[1]["position"] = "1"
    (finding,) = check(ORDER, rows)
    assert finding.words == "Outcome 1: number of units at position 1: counted 2, allowed 1..1."


FIVE = (
    CREW.replace('  {id = "f", team = "r", dept = "", pay = 1, need = 0, side = "R"},\n', "")
    + '[outcome]\nkind = "pairing"\n'
)


def test_single_units_of_a_pairing() -> None:
    single = FIVE + "single = true\n"
    assert holding(single, [lines("pairing", text) for text in ("a:b c:d e:", "a: b:c d:e")]) == 2
    assert holding(FIVE, [lines("pairing", "a:b c:d e:")]) == 0
    (finding,) = check(single, lines("pairing", "a:b c: d: e:"))
    assert finding.words == "Outcome 1: 3 units stay single, not 1."
    across = single + 'sides = "side"\n'  # a b c on one side, d e on the other
    assert holding(across, [lines("pairing", text) for text in ("a:d b:e c:", "e:c d:b a:")]) == 2
    assert holding(across, [lines("pairing", "a:b c:d e:")]) == 0
    assert holding(FIVE + 'sides = "side"\n', [lines("pairing", "a:d b:e c:")]) == 0
    for units in ('{id = 1, s = "x"}, {id = 2, s = ""}', '{id = 1, s = "x"}, {id = 2, s = "y"}, {id = 3, s = "z"}'):
        sheet = f'format = 1\nframe = {{units = [{units}]}}\n[outcome]\nkind = "pairing"\nsides = "s"\n'
        (finding,) = check(sheet + "single = true\n", lines("pairing", "1:2" if "3" not in units else "1:2 3:"))
        assert "does not make two sides" in finding.words
    even = PAIRING + "single = true\n"  # with even numbers nobody stays single
    assert holding(even, [lines("pairing", "a:b c:d e:f")]) == 1
    assert holding(even, [lines("pairing", "a:b c:d e: f:")]) == 0
    uneven = PAIRING.replace('need = 1, side = "R"},\n  {id = "e"', 'need = 1, side = "L"},\n  {id = "e"')
    (finding,) = check(uneven + 'sides = "side"\nsingle = true\n', lines("pairing", "a:e b:f c: d:"))
    assert finding.words == "Outcome 1: 2 units cannot be paired, which `single` does not allow."


# ---- rules: each with outcomes that meet it (+) and outcomes that do not (-, with what is counted)

SHEETS = {
    "selection": SELECTION,
    "assignment": ASSIGNMENT,
    "roster": ROSTER,
    "order": ORDER,
    "pairing": PAIRING,
}
RULES = """
selection: quota, max = 1, where = {dept = "A"}
+ a d e f
- a b >> over all: counted 2, allowed ..1
selection: quota, min = 2, where = {dept = ["B", ""]}
+ d f
- a d >> over all: counted 1, allowed 2..
selection: quota, min = 1, where = {pay = {min = 10.5, max = 20}}
+ a
+ b
- c d e f >> counted 0
selection: quota, min = 1, where = {pay = {max = 1}}
+ c
+ f
- a b d e >> counted 0
selection: quota, min = 1, where = {pay = 10.5, dept = "A"}
+ a
- b c d e f >> counted 0
selection: quota, min = 1, max = 2, per = "dept"
+ a d
+ a b d e f
- a b c d >> dept A: counted 3, allowed 1..2
- a f >> dept B: counted 0
assignment: quota, max = 2, per = "place"
+ a:x b:x c:y d:y e:z f:z
- a:x b:x c:x d:y e:z f:z >> place x: counted 3
assignment: quota, min = 1, per = "place", in = ["x"]
+ a:x b:y c:y d:y e:y f:y
- a:z b:y c:y d:y e:y f:y >> place x: counted 0
assignment: quota, min = {column = "need"}, per = "place"
+ a:x b:x c:x d:y e:y f:z
- a:x b:x c:y d:y e:z f:z >> place x: counted 2, allowed 3..
assignment: quota, max = 4, per = "zone"
+ a:x b:x c:y d:y e:z f:z
- a:x b:x c:x d:y e:y f:z >> zone n: counted 5
assignment: quota, min = 1, per = "zone", in = ["y", "z"]
+ a:x b:x c:x d:y e:y f:z
- a:x b:x c:x d:y e:y f:y >> zone s: counted 0
assignment: quota, max = 1, per = "dept", in = ["x", "z"]
+ a:x b:y c:y d:z e:y f:y
- a:x b:z c:y d:y e:y f:y >> dept A: counted 2
assignment: quota, max = 1, in = ["x"], where = {dept = "B"}
+ a:x b:x d:x c:y e:y f:y
- d:x e:x a:y b:y c:y f:y >> over all: counted 2
roster: quota, min = 1, max = 2, per = "slot"
+ a:1 b:1 a:2 c:3 c:4
- a:1 b:1 c:1 a:2 a:3 a:4 >> slot 1: counted 3
- a:1 a:2 a:3 >> slot 4: counted 0
roster: quota, min = {column = "need"}, per = "slot"
+ a:1 b:1 a:2 c:4
- a:1 a:2 a:4 >> slot 1: counted 1, allowed 2..
roster: quota, min = 1, max = 2, per = "month"
+ a:1 b:2 c:3
+ a:1 a:2 a:3 a:4 b:4 c:4
- a:1 b:1 c:2 d:3 >> month may: counted 3
- a:1 >> month june: counted 0
roster: quota, max = 2, per = "dept"
+ a:1 b:2 d:1 e:4 f:1 f:2 f:3
- a:1 a:2 b:3 >> dept A: counted 3
roster: quota, max = 1
+ a:1
- a:1 a:2 >> over all: counted 2
selection: total, column = "pay", min = 25.25
+ a b c
+ d
- b c >> over all: counted 14.75, allowed 25.25..
selection: total, column = "pay", max = 30.4
+ a b c
- a b >> counted 30.5, allowed ..30.4
selection: total, column = "pay", max = 10.5, where = {dept = "A"}
+ a d e
- a b d >> counted 30.5
assignment: total, column = "pay", min = 0, per = "place"
+ a:x c:x b:y d:y e:z f:z
- c:x a:y b:y d:y e:z f:z >> place x: counted -5.25, allowed 0..
roster: total, column = "pay", max = 40, per = "month"
+ a:1 a:2 d:3
- a:1 a:2 b:1 >> month may: counted 41
roster: load, max = 2
+ a:1 a:2 b:3
- a:1 a:2 a:3 >> slots of unit a: counted 3, allowed ..2
roster: load, min = 1, where = {dept = "B"}
+ d:1 e:4
- a:1 d:2 >> slots of unit e: counted 0, allowed 1..
roster: load, min = {column = "need"}
+ a:1 b:1 b:2 d:1 e:1
- a:1 b:1 d:1 e:1 >> slots of unit b: counted 1, allowed 2..
selection: pin, units = ["a", "b"]
+ a b
+ a b c
- a >> b breaks the pin
selection: pin, cells = [{unit = "a"}]
+ a b
- b >> a breaks the pin
selection: bar, units = ["a", "b"]
+
+ c
- b >> b breaks the bar
assignment: pin, units = ["a", "b"], in = ["x", "z"]
+ a:x b:z c:y d:y e:y f:y
- a:x b:y c:y d:y e:y f:y >> b breaks the pin
assignment: bar, units = ["a", "b"], in = ["x", "z"]
+ a:y b:y c:x d:y e:y f:y
- a:y b:z c:y d:y e:y f:y >> b breaks the bar
assignment: pin, cells = [{unit = "a", place = "z"}]
+ a:z b:y c:y d:y e:y f:y
- a:x b:y c:y d:y e:y f:y >> a with z breaks the pin
assignment: bar, cells = [{unit = "a", place = "z"}]
+ a:x b:y c:y d:y e:y f:y
- a:z b:y c:y d:y e:y f:y >> a with z breaks the bar
roster: pin, units = ["a"]
+ a:1 a:2 a:3 a:4
- a:1 a:2 a:3 >> a breaks the pin
roster: pin, units = ["a"], in = ["1", "3"]
+ a:1 a:3
- a:1 a:2 >> a breaks the pin
roster: bar, units = ["a"]
+
+ b:1
- b:1 a:4 >> a breaks the bar
roster: bar, units = ["a"], in = ["1", "3"]
+ a:2 b:1
- a:3 >> a breaks the bar
roster: pin, cells = [{unit = "a", slot = "2"}, {unit = "b", slot = 3}]
+ a:2 b:3
- a:2 b:2 >> b with 3 breaks the pin
roster: bar, cells = [{unit = "a", slot = "2"}]
+ a:1 b:2
- a:2 >> a with 2 breaks the bar
order: pin, units = ["a", "b"], in = [1, 2, 3]
+ bcadef
- bcdaef >> a breaks the pin
order: bar, units = ["a"], in = [1, 6]
+ bacdef
- abcdef >> a breaks the bar
- bcdefa >> a breaks the bar
order: pin, cells = [{unit = "a", position = 2}]
+ bacdef
- abcdef >> a with 2 breaks the pin
order: bar, cells = [{unit = "a", position = 2}]
+ abcdef
- bacdef >> a with 2 breaks the bar
pairing: pin, cells = [{unit = "b", with = "a"}]
+ a:b c:d e:f
- a:c b:d e:f >> b with a breaks the pin
pairing: bar, cells = [{unit = "b", with = "a"}]
+ a:c b:d e:f
- a:b c:d e:f >> b with a breaks the bar
selection: apart, units = ["a", "b", "c"]
+ a d e f
+ d
- a c d >> a, b, c are not apart
selection: apart, pairs = [["a", "b"], ["b", "c"]]
+ a c
- b c >> b, c are not apart
selection: apart, alike = "dept"
+ a d f
- d e >> d, e are not apart
selection: together, pairs = [["a", "b"], ["c", "c"]]
+ a b
+ c
- a c >> a, b are not together
selection: together, alike = "dept"
+ a b c
+ d e f
+ f
- a b d e >> a, b, c are not together
assignment: apart, units = ["a", "b", "c"]
+ a:x b:y c:z d:x e:x f:x
- a:x b:y c:y d:z e:z f:z >> a, b, c are not apart
assignment: together, alike = "dept"
+ a:x b:x c:x d:y e:y f:z
- a:x b:x c:x d:y e:z f:z >> d, e are not together
roster: apart, pairs = [["a", "b"]]
+ a:1 b:2 c:1
- a:1 b:2 a:2 >> a, b are not apart
roster: together, units = ["a", "b"]
+
+ a:1 b:1 c:2
- a:1 b:1 a:2 >> a, b are not together
order: apart, alike = "dept"
+ adbecf
- abdecf >> a, b, c are not apart
- adbcef >> a, b, c are not apart
order: apart, units = ["a", "b"]
+ acbdef
- cbadef >> a, b are not apart
order: together, units = ["a", "b", "c"]
+ dbacef
+ abcdef
+ defcba
- abdcef >> a, b, c are not together
pairing: apart, units = ["a", "b", "c"]
+ a:d b:e c:f
- a:d b:c e:f >> a, b, c are not apart
pairing: together, pairs = [["a", "b"]]
+ b:a c:d e:f
- a:c b:d e:f >> a, b are not together
selection: needs, if = ["a", "b"], then = ["c", "d"]
+ a b c d
+ a
+ b c
- a b >> a, b without c, d
- a b c >> a, b without d
selection: needs, if = ["a"], then = ["c"]
+ a c
- a >> a without c
selection: distinct, column = "dept", min = 2
+ a d
+ a b e f
- a b f >> values of dept: counted 1, allowed 2..
assignment: distinct, column = "side", min = 2
+ a:x d:x b:y e:y c:z f:z
- a:x d:x b:y e:y c:y f:z >> values of side at z: counted 1
- a:x d:x b:y e:y c:y f:y >> values of side at z: counted 0
roster: spacing, min = 2
+ a:1 a:3 b:2 b:4
- a:1 a:2 >> a is at number 1 and again at 2
roster: spacing, min = 3
+ a:1 a:4
- a:2 a:4 >> a is at number 2 and again at 4
order: spacing, alike = "dept", min = 2
+ adbecf
- abdecf >> A is at number 1 and again at 2
order: spacing, alike = "team", min = 3
+ abcdef
- abdcef >> p is at number 1 and again at 3
roster: run, duties = true, max = 2
+ a:1 a:2 a:4 b:3
+ a:1 a:3 a:4
- a:2 a:3 a:4 >> a is at number 3 and again at 4, 3 in a row
order: run, alike = "dept", max = 2
+ abdcef
+ abfcde
- dabcef >> A is at number 3 and again at 4, 3 in a row
order: run, alike = "team", max = 1
+ abcdef
- adbcef >> p is at number 1 and again at 2, 2 in a row
order: before, pairs = [["b", "a"], ["a", "f"]]
+ cbadef
- abcdef >> b stands at 2 and a at 1
- bfacde >> a stands at 3 and f at 2
pairing: differ, column = "side"
+ a:d b:e c:f
- a:b c:d e:f >> a with b: side does not differ
pairing: agree, column = "team"
+ a:d b:e c:f
- a:d b:f c:e >> b with f: team does not agree
pairing: agree, column = "need", by_at_most = 1
+ a:d c:f b:e
- a:d c:b e:f >> b with c: counted 2, allowed ..1
pairing: differ, column = "pay", by_at_least = 6.01
+ a:c b:e d:f
- a:b c:d e:f >> e with f: counted 6, allowed 6.01..
pairing: differ, column = "pay", by_at_least = 6, by_at_most = 45
+ a:c b:f d:e
- a:b c:d e:f >> c with d: counted 45.25, allowed 6..45
pairing: mixed, column = "side", min = 1, max = 2
+ a:b c:d e:f
- a:d b:e c:f >> pairs that differ in side: counted 3, allowed 1..2
pairing: mixed, column = "side", min = 2
+ a:d b:e c:f
- a:b c:d e:f >> pairs that differ in side: counted 1, allowed 2..
"""


def blocks(table: str) -> list[tuple[str, str]]:
    """Split the table into (rule, lines of outcomes)."""
    found: list[tuple[str, str]] = []
    for line in table.strip().splitlines():
        if line[0] in "+-":
            found[-1] = (found[-1][0], found[-1][1] + line + "\n")
        else:
            found.append((line, ""))
    return found


@pytest.mark.parametrize(("head", "outcomes"), blocks(RULES))
def test_rule(head: str, outcomes: str) -> None:
    kind, _, text = head.partition(": ")
    name, _, keys = text.partition(", ")
    sheet = f'rule = [{{kind = "{name}", {keys}}}]\n' + SHEETS[kind]
    signs = set()
    for line in outcomes.splitlines():
        outcome, _, counted = line[1:].strip().partition(" >> ")
        structure, finding = check(sheet, lines(kind, outcome))
        assert structure.holds, structure.words
        assert finding.part == f"rule 1 ({name})"
        assert finding.holds == (line[0] == "+"), f"{outcome}: {finding.words}"
        assert counted in finding.words
        assert finding.outcome == (None if finding.holds else 1)
        signs.add(line[0])
    assert signs == {"+", "-"}


def test_every_rule_is_in_the_table() -> None:
    """Every rule but those for graphs, with every kind it is for."""
    one = {"load": "roster", "needs": "selection", "before": "order", "differ": "pairing", "agree": "pairing"}
    expected = {(kind, name) for name, kind in {**one, "mixed": "pairing"}.items()}
    every = ("selection", "assignment", "roster", "order", "pairing")
    expected |= {(kind, name) for kind in every for name in ("pin", "bar", "apart", "together")}
    expected |= {(kind, name) for kind in every[:3] for name in ("quota", "total")}
    expected |= {(kind, "distinct") for kind in every[:2]}
    expected |= {(kind, name) for kind in ("roster", "order") for name in ("spacing", "run")}
    assert {tuple(head.partition(",")[0].split(": ")) for head, _ in blocks(RULES)} == expected


def test_rules_on_single_units() -> None:
    sheet = FIVE + "single = true\n"
    pin, bar = rule('kind = "pin"\nunits = ["e"]'), rule('kind = "bar"\nunits = ["e"]')
    paired, single = lines("pairing", "a:b c: d:e"), lines("pairing", "a:b c:d e:")
    assert holding(sheet + pin, [paired]) == 1
    assert holding(sheet + pin, [single]) == 0
    assert holding(sheet + bar, [single]) == 1
    assert holding(sheet + bar, [paired]) == 0
    apart, together = (rule(f'kind = "{name}"\npairs = [["c", "e"]]') for name in ("apart", "together"))
    assert holding(sheet + apart, [single]) == 1
    assert holding(sheet + together, [single]) == 0  # a single unit is paired with nobody
    alone = [rule('kind = "together"\n' + text) for text in ('units = ["e"]', 'pairs = [["e", "e"]]')]
    assert holding(sheet + "".join(alone), [single]) == 1  # a group of one is ignored
    mixed = rule('kind = "mixed"\ncolumn = "side"\nmin = 1\nmax = 1')
    assert holding(sheet + mixed, [single]) == 1  # a single unit is no pair
    assert holding(sheet + rule('kind = "differ"\ncolumn = "team"'), [single]) == 1


def test_rules_read_their_files(tmp_path: Path) -> None:
    crew = "\ufeffbadge;dept\r\n 01 ;A\r\n02;Cafe\u0301\r\n;\r\n03;B\r\n"
    (tmp_path / "crew.csv").write_bytes(crew.encode("utf-16-le"))
    (tmp_path / "slots.csv").write_text("week,need\nw1,1\nw2,2\n", encoding="utf-8")
    (tmp_path / "leave.csv").write_text("reason,slot,badge\nill,w1,01\n\n", encoding="utf-8-sig")
    (tmp_path / "off.csv").write_text("unit\n02\n", encoding="utf-8")
    (tmp_path / "late.csv").write_bytes("unit;slot;note\n03;w2;spät\n".encode("latin-1"))
    (tmp_path / "pairs.csv").write_text("one,other\n01,03\n", encoding="utf-8")
    sheet = """
        format = 1
        frame = {file = "crew.csv", id = "badge", encoding = "utf-16-le", separator = ";"}
        outcome = {kind = "roster", slots = {file = "slots.csv", id = "week"}}
        rule = [
          {kind = "bar", file = "leave.csv"},
          {kind = "bar", file = "off.csv", in = ["w2"], id = "holiday"},
          {kind = "apart", file = "pairs.csv", note = "why", empty = true},
          {kind = "quota", per = "slot", max = {column = "need"}},
          {kind = "load", max = 0, where = {dept = "Caf\u00e9"}},
          {kind = "bar", file = {file = "late.csv", separator = ";", encoding = "latin-1"}},
          {kind = "load", max = 0, off = true},
        ]
    """
    assert holding(sheet, [lines("roster", "03:w1 01:w2"), lines("roster", "03:w1")], tmp_path) == 2
    failing = {
        "01:w1": "rule 1 (bar)",
        "02:w2": "rule holiday (bar)",
        "01:w2 03:w2": "rule 3 (apart)",
        "02:w1 03:w1": "rule 4 (quota)",
        "02:w1": "rule 5 (load)",
        "03:w2": "rule 6 (bar)",
    }
    for text, part in failing.items():
        findings = check(sheet, lines("roster", "03:w1"), lines("roster", text), folder=tmp_path)
        assert part in [finding.part for finding in findings if finding.outcome == 2 and not finding.holds]
        assert findings[-1] == Finding("rule 7 (load)", None, True, "The rule is off, so it is not in force.")


# ---- counts by exact listing


def test_audit_sample() -> None:
    """41 of the 70 selections: exact listing (8 vouchers, draw 4, at most 2 from A, total at least 120)."""
    values, depts = (5, 8, 12, 20, 30, 45, 60, 100), "AAAABBCC"
    units = ", ".join(f'{{id = {v}, value = {v}, dept = "{d}"}}' for v, d in zip(values, depts, strict=True))
    sheet = f"""
        format = 1
        frame = {{units = [{units}]}}
        outcome = {{kind = "selection", size = 4}}
        rule = [{{kind = "quota", where = {{dept = "A"}}, max = 2}},
                {{kind = "total", column = "value", min = 120}}]
    """
    chosen = [" ".join(map(str, four)) for four in itertools.combinations(values, 4)]
    assert len(chosen) == 70
    assert holding(sheet, [lines("selection", four) for four in chosen]) == 41


def test_panel() -> None:
    """7 panels of 2 with one man, one woman, one young, one old: exact listing (1 x 1 + 3 x 2)."""
    people = ["m young", "m old", "m old", "m old", "w young", "w young", "w old"]
    units = ", ".join(f'{{id = {i}, sex = "{p[0]}", age = "{p[2:]}"}}' for i, p in enumerate(people))
    sheet = f"format = 1\nframe = {{units = [{units}]}}\noutcome = {{kind = 'selection', size = 2}}\n"
    for column, value in (("sex", "m"), ("sex", "w"), ("age", "young"), ("age", "old")):
        sheet += rule(f'kind = "quota"\nwhere = {{{column} = "{value}"}}\nmin = 1\nmax = 1')
    panels = [lines("selection", f"{i} {j}") for i, j in itertools.combinations(range(7), 2)]
    assert holding(sheet, panels) == 7


def test_derangements() -> None:
    """9 derangements of 4: OEIS A000166."""
    cells = ", ".join(f'{{unit = "{unit}", position = {place}}}' for place, unit in enumerate("abcd", start=1))
    sheet = "format = 1\nframe = {units = ['a', 'b', 'c', 'd']}\noutcome = {kind = 'order'}\n"
    sheet += rule(f'kind = "bar"\ncells = [{cells}]')
    assert holding(sheet, [lines("order", "".join(order)) for order in itertools.permutations("abcd")]) == 9


def test_latin_squares() -> None:
    """12 Latin squares of order 3, among all fillings of the 9 cells: OEIS A002860."""
    cells = [f"{row}{column}" for row in range(3) for column in range(3)]
    units = ", ".join(f'{{id = "{cell}", row = {cell[0]}, column = {cell[1]}}}' for cell in cells)
    sheet = f"format = 1\nframe = {{units = [{units}]}}\noutcome = {{kind = 'assignment', places = [1, 2, 3]}}\n"
    sheet += rule('kind = "apart"\nalike = "row"') + rule('kind = "apart"\nalike = "column"')
    fillings = [lines("assignment", " ".join(map(":".join, zip(cells, filling, strict=True))))
                for filling in itertools.product("123", repeat=9)]  # fmt: skip
    assert len(fillings) == 19_683
    assert holding(sheet, fillings) == 12


# ---- what cannot be re-checked is a finding, never a pass and never a traceback


@pytest.mark.parametrize(
    ("sheet", "part", "word"),
    [
        ("format = ", "sheet", "TOMLDecodeError"),
        ("format = 2", "sheet", "format 1"),
        ("", "sheet", "format 1"),
        ("format = 1", "kind None", "the outcome kind None cannot be re-checked independently"),
        ("format = 1\noutcome = 3", "sheet", "AttributeError"),
        ("format = 1\noutcome = {kind = ['order']}", "kind ['order']", "TypeError"),
        (
            "format = 1\noutcome = {kind = 'graph'}",
            "kind graph",
            "'graph' cannot be re-checked independently",
        ),
        ("format = 1\noutcome = {kind = 'order', size = 3}", "kind order", "keys that cannot be re-checked"),
        ("format = 1\noutcome = {kind = 'order'}", "frame", "needs one source"),
        ("format = 1\noutcome = {kind = 'order'}\nframe = {units = 3}", "frame", "not a list"),
        ("format = 1\noutcome = {kind = 'order'}\nframe = {units = 'abc'}", "frame", "not a list"),
        ("format = 1\noutcome = {kind = 'order'}\nframe = {units = [true]}", "frame", "neither a text nor"),
        ("format = 1\noutcome = {kind = 'order'}\nframe = {units = ['a', ' a ']}", "frame", "occurs twice"),
        ("format = 1\noutcome = {kind = 'order'}\nframe = {units = ['']}", "frame", "blank"),
        ("format = 1\noutcome = {kind = 'order'}\nframe = {file = 'no.csv'}", "frame", "no.csv is missing"),
        ("format = 1\noutcome = {kind = 'order'}\nframe = {file = '.'}", "frame", "is not a file"),
        ("format = 1\noutcome = {kind = 'order'}\nframe = {file = 'a.xlsx'}", "frame", "worksheet"),
        (
            "format = 1\noutcome = {kind = 'order'}\nframe = {file = 'a.csv', worksheet = 'x'}",
            "frame",
            "is a worksheet",
        ),
        ("format = 1\noutcome = {kind = 'order'}\nframe = {file = 'a\\u0000'}", "frame", "In the frame"),
        ("format = 1\noutcome = {kind = 'order'}\nframe = {units = ['a'], odd = 1}", "frame", "odd"),
        (
            "format = 1\noutcome = {kind = 'roster'}\nframe = {units = ['a']}",
            "kind roster",
            "slots is missing",
        ),
        (
            "format = 1\noutcome = {kind = 'roster', slots = 'ab'}\nframe = {units = ['a']}",
            "kind roster",
            "slots",
        ),
        ("a = " + "[" * 10_000, "sheet", "In the sheet"),
    ],
)
def test_sheet_that_cannot_be_read(sheet: str, part: str, word: str) -> None:
    (finding,) = check(sheet, [])
    assert finding.part == part
    assert not finding.holds
    assert word in finding.words


@pytest.mark.parametrize(
    ("text", "word"),
    [
        ("", "the rule 'None' cannot be re-checked"),
        ('kind = "connected"', "the rule 'connected' cannot be re-checked independently for the kind roster"),
        ('kind = "needs"\nif = ["a"]\nthen = ["b"]', "the rule 'needs' cannot be re-checked"),
        ('kind = "load"\nmax = 9\nper = "slot"', "keys that cannot be re-checked independently: per"),
        ('kind = "load"\nmax = true', "True is neither a text nor a number"),
        ('kind = "load"\nmax = nan', "which is not a number"),
        ('kind = "load"\nmax = 1e999999999', "neither a text nor a number"),
        ('kind = "load"\nmax = {column = "nil"}', "nil"),
        ('kind = "load"\nmax = 9\nwhere = {nil = 1}', "no column 'nil'"),
        ('kind = "load"\nmax = 9\nwhere = {dept = {min = 1}}', "which is not a number"),
        ('kind = "load"\nmax = 9\nwhere = {pay = {least = 1}}', "least"),
        ('kind = "load"\nmax = 9\nwhere = 3', "In the rule"),
        ('kind = "quota"\nmax = 99\nper = "nil"', "not a column of the units or the locations alone"),
        ('kind = "quota"\nmax = 99\nper = "need"', "not a column of the units or the locations alone"),
        ('kind = "quota"\nmax = {column = "need"}\nper = "month"', "need"),
        ('kind = "quota"\nmax = 99\nin = ["9"]', "'9' is not a unit or location"),
        ('kind = "quota"\nmax = 99\nin = "1"', "not a list"),
        ('kind = "total"\nmax = 99\ncolumn = "dept"', "which is not a number"),
        ('kind = "total"\nmax = 99', "column"),
        ('kind = "pin"', "one of units, cells and file"),
        ('kind = "bar"\nunits = ["q"]', "'q' is not a unit"),
        ('kind = "bar"\nunits = "q"', "not a list"),
        ('kind = "bar"\ncells = [{unit = "a", place = "1"}]', "place"),
        ('kind = "bar"\ncells = [{unit = "a"}]', "slot"),
        ('kind = "bar"\ncells = [{unit = "a", slot = "2"}]\nin = ["1"]', "cells do not go with `in`"),
        ('kind = "bar"\nfile = "no.csv"', "no.csv is missing"),
        ('kind = "apart"\nunits = ["a", "b"]\nalike = "dept"', "exactly one list"),
        ('kind = "apart"\npairs = [["a", "b", "c"]]', "does not name two units"),
        ('kind = "apart"\npairs = ["ab"]', "not a list"),
        ('kind = "spacing"\nmin = 2\nalike = "dept"', "`alike` is needed in an order"),
        ('kind = "spacing"', "min"),
        ('kind = "run"\nmax = 2', "duties = true"),
        ('kind = "run"\nduties = true\nmax = 0', "at least 1"),
    ],
)
def test_rule_that_cannot_be_re_checked(text: str, word: str) -> None:
    structure, finding = check(ROSTER + rule(text), lines("roster", "a:1 b:2"))
    assert structure.holds
    assert not finding.holds
    assert word in f"{finding.part} {finding.words}"


@pytest.mark.parametrize(
    ("kind", "text", "word"),
    [
        ("selection", 'kind = "quota"\nmax = 9\nin = ["x"]', "no locations"),
        ("selection", 'kind = "pin"\nunits = ["a"]\nin = ["x"]', "does not go with this kind"),
        ("selection", 'kind = "pin"\ncells = [{unit = "a", place = "x"}]', "place"),
        ("assignment", 'kind = "pin"\nunits = ["a"]', "needs `in`"),
        ("order", 'kind = "bar"\nunits = ["a"]\nin = [7]', "'7' is not a unit or location"),
        ("order", 'kind = "run"\nalike = "dept"\nmax = 3\nduties = true', "duties = true"),
        ("pairing", 'kind = "bar"\nunits = ["a"]\nin = ["b"]', "does not go with this kind"),
        ("pairing", 'kind = "agree"\ncolumn = "dept"\nby_at_most = 3', "which is not a number"),
    ],
)
def test_rule_of_another_kind(kind: str, text: str, word: str) -> None:
    outcome = {
        "selection": "a",
        "assignment": "a:x b:y c:y d:y e:y f:y",
        "order": "abcdef",
        "pairing": "a:b c:d e:f",
    }
    structure, finding = check(SHEETS[kind] + rule(text), lines(kind, outcome[kind]))
    assert structure.holds
    assert not finding.holds
    assert word in finding.words


def test_several_outcomes() -> None:
    sheet = SELECTION + "size = 2\n" + rule('kind = "quota"\nwhere = {dept = "A"}\nmax = 1')
    good, bad, broken = lines("selection", "a d"), lines("selection", "a b"), lines("selection", "a")
    assert [finding.words for finding in check(sheet, good, good)] == [
        "Each of 2 outcomes is of the kind selection.",
        "The rule holds in each of 2 outcomes.",
    ]
    assert [finding.outcome for finding in check(sheet, good, good, bad)] == [None, 3]
    kind, quota = check(sheet, good, broken, bad)
    assert kind.outcome == 2
    assert quota.outcome == 3  # a broken outcome does not hide the ones after it
    kind, quota = check(sheet, good, broken)
    assert kind.outcome == 2
    assert not quota.holds
    assert quota.words == ("In the rule 1 (quota): outcome 2 could not be checked, because its structure is broken.")


# ---- records


def digest(data: bytes) -> str:
    return hashlib.sha256(data).hexdigest()


def write_record(folder: Path, **changes: object) -> Path:
    """Write a record of two draws with its sheet, list and outcomes; `changes` go into the sealed record."""
    (folder / "draw").mkdir(parents=True, exist_ok=True)
    sheet = (
        "format = 1\nframe = {file = 'crew.csv'}\noutcome = {kind = 'selection', size = 2}\n"
        "rule = [{kind = 'apart', file = 'pairs.csv'}]\n"
    )
    files = {
        "sheet.toml": sheet,
        "crew.csv": "id,name\na,Zoë\nb,\nc,\n",
        "pairs.csv": "one,other\na,b\n",
        "draw/outcomes.csv": "outcome,unit\n1,a\n1,c\n2,b\n2,c\n",
    }
    for name, text in files.items():
        (folder / name).write_bytes(text.encode("utf-8"))
    record: dict[str, object] = {
        "format": "lotwright record 1",
        "sheet": {"file": "sheet.toml", "path": "../sheet.toml", "text": sheet, "title": "Zoë"},
        "files": [{"name": name, "sha256": digest(files[name].encode())} for name in ("crew.csv", "pairs.csv")],
        "outcomes": {
            "file": "outcomes.csv",
            "sha256": digest(files["draw/outcomes.csv"].encode()),
            "count": 2,
        },
        **changes,
    }
    text = json.dumps(record, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
    record["digest"] = digest(text.encode("utf-8"))
    path = folder / "draw" / "record.json"
    path.write_text(json.dumps(record, indent=1), encoding="utf-8")
    return path


def failing(path: Path, sheet: Path | None = None) -> dict[str, str]:
    return {finding.part: finding.words for finding in examine(path, sheet) if not finding.holds}


PARTS = [
    "record", "sheet", "file crew.csv", "file pairs.csv", "outcomes file", "outcome count", "kind selection",
    "rule 1 (apart)",
]  # fmt: skip


def test_record_that_holds(tmp_path: Path) -> None:
    findings = examine(write_record(tmp_path))
    assert [finding.part for finding in findings] == PARTS
    assert [finding.words for finding in findings if not finding.holds] == []
    assert findings[-1].words == "The rule holds in each of 2 outcomes."
    assert findings[-3].words == "The record and outcomes.csv count 2 outcomes."


def test_sheet_beside_the_record_or_given(tmp_path: Path) -> None:
    path = write_record(tmp_path)
    for name in ("sheet.toml", "crew.csv", "pairs.csv"):
        (tmp_path / name).rename(path.parent / name)
    assert failing(path) == {}
    (tmp_path / "elsewhere").mkdir()
    for name in ("sheet.toml", "crew.csv", "pairs.csv"):
        (path.parent / name).rename(tmp_path / "elsewhere" / name)
    assert set(failing(path)) == {"sheet", "file crew.csv", "file pairs.csv", "frame"}
    assert failing(path, tmp_path / "elsewhere" / "sheet.toml") == {}


@pytest.mark.parametrize(
    ("name", "old", "new", "parts"),
    [
        ("draw/record.json", "lotwright record 1", "lotwright record 2", {"record"}),
        ("draw/record.json", '"title": "Zo\\u00eb"', '"title": "Zoe"', {"record"}),
        ("draw/record.json", '"count": 2', '"count": 3', {"record", "outcome count"}),
        ("draw/record.json", '"count": 2', '"count": 1', {"record", "outcome count"}),
        ("draw/record.json", "size = 2", "size = 3", {"record", "sheet", "kind selection", "rule 1 (apart)"}),
        ("draw/record.json", "{", "[", {"record"}),
        ("draw/record.json", '"path"', '"way"', {"record"}),
        ("sheet.toml", "size = 2", "size = 2 ", {"sheet"}),
        ("sheet.toml", "\n", "\r\n", {"sheet"}),
        ("sheet.toml", "size", "\udcff", {"sheet"}),
        ("crew.csv", "Zoë", "Zoe", {"file crew.csv"}),
        ("crew.csv", "c,", "d,", {"file crew.csv", "kind selection", "rule 1 (apart)"}),
        ("crew.csv", "b,", "b", {"file crew.csv", "frame"}),
        ("crew.csv", "Zoë", "\udcff", {"file crew.csv", "frame"}),
        ("crew.csv", "Zoë", '"Zoë', {"file crew.csv", "frame"}),
        ("pairs.csv", "a,b", "a,c", {"file pairs.csv", "rule 1 (apart)"}),
        ("pairs.csv", "a,b\n", "b,a\n", {"file pairs.csv"}),
        ("draw/outcomes.csv", "2,c", "2,a", {"outcomes file", "rule 1 (apart)"}),
        ("draw/outcomes.csv", "2,c\n", "", {"outcomes file", "kind selection", "rule 1 (apart)"}),
        ("draw/outcomes.csv", "2,b\n2,c\n", "", {"outcomes file", "outcome count"}),
        ("draw/outcomes.csv", "2,", "3,", {"outcomes file", "outcome count"}),
        ("draw/outcomes.csv", "2,", "02,", {"outcomes file", "outcome count"}),
        ("draw/outcomes.csv", "2,", "two,", {"outcomes file", "outcome count"}),
        ("draw/outcomes.csv", "outcome,unit", "outcome,person", {"outcomes file", "outcome count"}),
    ],
)
def test_altered_file_is_named(tmp_path: Path, name: str, old: str, new: str, parts: set[str]) -> None:
    path = write_record(tmp_path)
    before = (tmp_path / name).read_bytes().decode("utf-8")
    assert old in before
    (tmp_path / name).write_bytes(before.replace(old, new).encode("utf-8", "surrogateescape"))
    assert set(failing(path)) == parts


@pytest.mark.parametrize(
    ("name", "parts"),
    [
        ("draw/record.json", {"record"}),
        ("sheet.toml", {"sheet"}),
        ("crew.csv", {"file crew.csv", "frame"}),
        ("pairs.csv", {"file pairs.csv", "rule 1 (apart)"}),
        ("draw/outcomes.csv", {"outcomes file", "outcome count"}),
    ],
)
def test_missing_file_or_folder_in_its_place(tmp_path: Path, name: str, parts: set[str]) -> None:
    path = write_record(tmp_path)
    (tmp_path / name).unlink()
    assert set(failing(path)) == parts
    (tmp_path / name).mkdir()
    found = failing(path)
    assert set(found) == parts
    assert any("is missing or is not a file" in words for words in found.values())


def test_other_format_of_record(tmp_path: Path) -> None:
    assert set(failing(write_record(tmp_path, format="lotwright record 2"))) == {"record"}


def test_given_sheet_that_is_missing(tmp_path: Path) -> None:
    assert failing(write_record(tmp_path), tmp_path / "no.toml") == {
        "sheet": "In the sheet: no.toml is missing or is not a file."
    }


@pytest.mark.parametrize("text", ["", "\n,\n", "id,id\na,b\n", "id,name\na\n", "id,name\na,b,c\n", 'id\n"a"b\n'])
def test_list_that_is_no_list(tmp_path: Path, text: str) -> None:
    (tmp_path / "crew.csv").write_text(text, encoding="utf-8")
    (finding,) = check("format = 1\nframe = {file = 'crew.csv'}\noutcome = {kind = 'order'}", folder=tmp_path)
    assert finding.part == "frame"
    assert finding.words.startswith("In the frame: crew.csv ")


def test_list_without_digest(tmp_path: Path) -> None:
    crew = {"name": "crew.csv", "sha256": digest("id,name\na,Zoë\nb,\nc,\n".encode())}
    assert failing(write_record(tmp_path, files=[crew])) == {
        "file pairs.csv": "In the file pairs.csv: the record holds no digest."
    }


def test_empty_outcomes_have_no_line(tmp_path: Path) -> None:
    sheet = "format = 1\nframe = {units = ['a']}\noutcome = {kind = 'roster', slots = ['s']}\n"
    data = b"outcome,unit,slot\n2,a,s\n"
    path = write_record(
        tmp_path,
        sheet={"file": "sheet.toml", "path": "../sheet.toml", "text": sheet},
        outcomes={"file": "outcomes.csv", "sha256": digest(data), "count": 3},
    )
    (tmp_path / "sheet.toml").write_bytes(sheet.encode())
    (path.parent / "outcomes.csv").write_bytes(data)
    assert failing(path) == {}
    words = {finding.part: finding.words for finding in examine(path)}
    assert words["outcome count"] == "Outcomes without a line, such as 1, are empty, as the sheet allows."


SURROGATE = "\ud800"


@pytest.mark.parametrize(
    "changes",
    [
        {"sheet": None},
        {"sheet": {"file": "\0", "path": 3, "text": 4}},
        {"sheet": {"file": SURROGATE, "path": "", "text": SURROGATE}},
        {"files": None},
        {"files": [3]},
        {"files": [{"name": 3, "sha256": []}]},
        {"outcomes": {}},
        {"outcomes": {"file": "..", "count": 2}},
        {"outcomes": {"file": 7, "count": "many"}},
    ],
)
def test_sealed_record_with_wrong_types(tmp_path: Path, changes: dict[str, object]) -> None:
    try:
        path = write_record(tmp_path, **changes)
    except UnicodeEncodeError:
        path = tmp_path / "draw" / "record.json"
        path.write_text(json.dumps({"format": "lotwright record 1", "files": [], "outcomes": {}, **changes}))
    assert failing(path)


@pytest.mark.parametrize("data", [b"", b"\xff\xfe", b"[]", b"3", b'{"format": 1}', b"[" * 100_000, b"\0" * 9])
def test_record_that_cannot_be_read(tmp_path: Path, data: bytes) -> None:
    path = tmp_path / "record.json"
    path.write_bytes(data)
    (finding,) = examine(path)
    assert finding.part == "record"
    assert not finding.holds
