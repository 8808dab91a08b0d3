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
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest

from core.__main__ import main

ROOT = Path(__file__).parents[2]
CREW = """\
badge,dept,grade,amount,days,sex
p1,deck,A,10.50,1,f
p2,deck,B,20.00,2,m
p3,engine,A,-3.25,1,m
p4,engine,B,7.00,3,f
p5,galley,A,0.00,2,m
p6,galley,C,99.95,,m
"""
TALKS = "id,theme\na,x\nb,x\nc,x\nd,y\n"
FRAME = 'format = 1\n[frame]\nfile = "crew.csv"\nid = "badge"\n'
OUTCOMES = {
    "selection": "size = 3",
    "assignment": 'places = ["r1", "r2", "r3"]',
    "roster": 'slots = [{id = "w1", need = 1}, {id = "w2", need = 2}, {id = "w3", need = "x"}]',
    "order": "",
    "pairing": "",
}
PLAN = ("plan", "sheet.toml")
DRAW = ("draw", "sheet.toml", "--seed", "40719")
CHECK = ("check", "sheet.toml", "outcome.csv")
NEVER = re.compile(
    r"Traceback|Error\b|pydantic|NoneType|Decimal\(|datetime|<class|\b(str|dict|bool|int|tuple|float|None|True|False)\b"
    r"|[Vv]alidation|input_|object at|mistake|  \b|[^.]\.\.$"
)
Content = str | bytes | None


@dataclass(frozen=True)
class Bad:
    """One bad input. A file without content is a folder."""

    told: tuple[str, ...]
    files: Mapping[str, Content] = field(default_factory=dict)
    call: tuple[str, ...] = PLAN
    code: int = 2


def outcome(kind: str, body: str | None = None) -> str:
    """Return a sheet without rules."""
    return f'{FRAME}[outcome]\nkind = "{kind}"\n{OUTCOMES[kind] if body is None else body}\n'


def ruled(kind: str, rule: str, body: str) -> str:
    """Return a sheet with one rule."""
    return f'{outcome(kind)}[[rule]]\nkind = "{rule}"\n{body}\n'


def frame(body: str) -> str:
    """Return a sheet with this frame."""
    return f'format = 1\n[frame]\n{body}\n[outcome]\nkind = "selection"\nsize = 1\n'


def sheet(text: Content, *told: str, **files: Content) -> Bad:
    """Return a bad sheet; files are given as name=content, with _ for the dot."""
    return Bad(told, {"sheet.toml": text, **{name.replace("_", "."): c for name, c in files.items()}})


def rule(kind: str, name: str, body: str, *told: str, **files: Content) -> Bad:
    """Return a bad rule, whose faults are all in its table."""
    lines = tuple(t if t.startswith("/") else f"sheet.toml, [[rule]] 1 ({name})...{t}" for t in told)
    return sheet(ruled(kind, name, body), *(line.removeprefix("/") for line in lines), **files)


def called(call: tuple[str, ...] | str, *told: str, code: int = 2, **files: Content) -> Bad:
    """Return a bad call with a good sheet."""
    words = tuple(call.split()) if isinstance(call, str) else call
    given = {"sheet.toml": outcome("selection"), **{name.replace("_", "."): c for name, c in files.items()}}
    return Bad(told, given, words, code)


def checked(kind: str, text: Content, *told: str) -> Bad:
    """Return a bad outcome to be checked."""
    return Bad(told, {"sheet.toml": outcome(kind), "outcome.csv": text}, CHECK)


GOOD = outcome("selection")
DEEP = "[" * 5000 + "]" * 5000
HUGE = "1" + "0" * 30
PNG = b"\x89PNG\r\n\x1a\n" + bytes(64)
INLINE = 'units = [{id = "a", n = 1}, {id = "b", n = 2}]'

# --- the sheet as a file, and its uppermost keys ----------------------------------------------------------------

SHEETS = {
    "broken TOML": sheet(
        'format = 1\ntitle = "unfinished\n', 'sheet.toml, line 2: ...TOML... closing "...Found: title ='
    ),
    "key twice": sheet("format = 1\nformat = 1\n", "sheet.toml, line 2: ...second time...Found: format = 1."),
    "table twice": sheet(GOOD + "[frame]\n", "sheet.toml, line 8: ...stands in the sheet already...Found: [frame]."),
    "no value": sheet("format = \n", "sheet.toml, line 1: ...there is no value that can be read...Found: format ="),
    "word without quotes": sheet(
        "title = yes\n", "sheet.toml, line 1: ...a text stands in quotation marks...Found: title ="
    ),
    "open list": sheet("rule = [1, 2", "sheet.toml, at the end: ...] that closes a list is missing"),
    "control character": sheet(
        'title = "a\x01b"', 'sheet.toml, line 1: ...control character...Found: title = "a\\u0001b"'
    ),
    "no such day": sheet("a = 2024-02-31", "sheet.toml, line 1: ...no such day"),
    "a list as sheet": sheet(CREW, "sheet.toml, line 1: ...key = value...Found: badge,dept"),
    "nested lists": sheet(f"x = {DEEP}", "sheet.toml: ...too many tables or lists stand within each other"),
    "nested tables": sheet("x = " + "{a = " * 60 + "1" + "}" * 60, "sheet.toml: ...within each other"),
    "nested keys": sheet(f"{GOOD}size{'.a' * 5000} = 1", "sheet.toml, line 8: ...within each other"),
    "nested where": rule("selection", "quota", f"where{'.a' * 60} = 1", "/sheet.toml, line 10: ...within each other"),
    "endless integer": sheet(f"x = {'9' * 5000}", "sheet.toml: ...more than 1,000 digits"),
    "endless hexadecimal": sheet(f"x = 0x{'f' * 5000}", "sheet.toml: ...more than 1,000 digits"),
    "endless exponent": sheet("x = 1e99999999999999999999", "sheet.toml: ...more than 1,000 digits"),
    "not UTF-8": sheet(
        GOOD.encode() + b"# \xff\n", "sheet.toml, line 8: this is not UTF-8...Allowed: ...saved as UTF-8"
    ),
    "UTF-16": sheet(GOOD.encode("utf-16"), "sheet.toml, line 1: this is not UTF-8"),
    "binary": sheet(bytes(range(256)) * 4, "sheet.toml, line 2: this is not UTF-8"),
    "no sheet": called("plan shet.toml", "shet.toml: there is no such file. Did you mean 'sheet.toml'?"),
    "sheet is a folder": sheet(None, "sheet.toml: this is a folder, not a file. Allowed: the name of a sheet."),
    "sheet of 70 MiB": sheet(b"#" * (70 << 20), "sheet.toml: this file is too large to be a sheet...at most 64 MiB"),
    "empty sheet": sheet(
        "",
        "sheet.toml, format: this key is missing. Allowed: 1.",
        "sheet.toml, frame: this key is missing. Allowed: a table [frame].",
        "sheet.toml, outcome: this key is missing. Allowed: a table [outcome].",
    ),
    "format missing": sheet(GOOD.replace("format = 1\n", ""), "sheet.toml, format: this key is missing. Allowed: 1."),
    "format 2": sheet(
        GOOD.replace("= 1\n", "= 2\n", 1), "sheet.toml, format: this format is not known. Found: 2. Allowed: 1."
    ),
    "format text": sheet(GOOD.replace("= 1\n", '= "1"\n', 1), 'sheet.toml, format: ...Found: "1". Allowed: 1.'),
    "format true": sheet(GOOD.replace("= 1\n", "= true\n", 1), "sheet.toml, format: ...Found: true. Allowed: 1."),
    "format decimal": sheet(GOOD.replace("= 1\n", "= 1.0\n", 1), "sheet.toml, format: ...Found: 1.0. Allowed: 1."),
    "unknown key": sheet(
        f'titel = "x"\n{GOOD}', "sheet.toml, titel: there is no such key...Allowed: format, title...mean 'title'?"
    ),
    "title a number": sheet(f"title = 5\n{GOOD}", "sheet.toml, title: ...Found: 5. Allowed: text."),
    "frame a text": sheet(
        GOOD.replace("[frame]", 'frame = "x"\n[x]'), 'sheet.toml, frame: ...Found: "x"', "sheet.toml, x: "
    ),
    "frame a list": sheet(
        GOOD.replace("[frame]", "[[frame]]"), "sheet.toml, frame: ...Found: [{file = ...a table [frame]"
    ),
    "rule a table": sheet(
        f'{GOOD}[rule]\nkind = "quota"', 'sheet.toml, rule: ...Found: {kind = "quota"}. Allowed: tables [[rule]]'
    ),
    "rule a list of texts": sheet(f'rule = ["quota"]\n{GOOD}', 'sheet.toml, rule: ...Found: ["quota"]'),
    "unknown key of record": sheet(
        f'{GOOD}[record]\nbasiss = "x"', "sheet.toml, [record], basiss: ...Did you mean 'basis'?"
    ),
    "record a number": sheet(f"{GOOD}[record]\nbasis = 5", "sheet.toml, [record], basis: ...Found: 5. Allowed: text"),
    "key with a line break": sheet(f'"a\\nb" = 1\n{GOOD}', "sheet.toml, a\\u000Ab: there is no such key"),
    "several faults": sheet(
        """format = 1
titel = "x"
frame = {file = "crew.csv", id = "bagde"}
outcome = {kind = "selection", size = "3"}
record = {basiss = "x"}
[[rule]]
kind = "qouta"
[[rule]]
kind = "total"
min = 5
[[rule]]
kind = "before"
""",
        "sheet.toml, titel: there is no such key...Did you mean 'title'?",
        "sheet.toml, [record], basiss: there is no such key...Did you mean 'basis'?",
        "sheet.toml, [frame], id: ...no such column...Found: bagde...Did you mean 'badge'?",
        'sheet.toml, [outcome], size: ...Found: "3"',
        "sheet.toml, [[rule]] 1 (qouta), kind: there is no such rule. ...Did you mean 'quota'?",
        "sheet.toml, [[rule]] 2 (total), column: this key is missing",
    ),
    "several faults of rules": sheet(
        GOOD
        + """[[rule]]
kind = "quota"
where = {dept = "dekc"}
min = 1
[[rule]]
kind = "total"
column = "amuont"
[[rule]]
kind = "pin"
units = ["p9", "p8", "p1", "p1"]
[[rule]]
kind = "load"
max = 1
[[rule]]
kind = "total"
column = "days"
min = 1
[[rule]]
kind = "total"
column = "days"
max = 1
""",
        "sheet.toml, [[rule]] 1 (quota), where: no unit...Found: dept dekc...Did you mean 'dept deck'?",
        "sheet.toml, [[rule]] 2 (total), column: ...no such column...Did you mean 'amount'?",
        "sheet.toml, [[rule]] 2 (total), min: a total needs min or max",
        "sheet.toml, [[rule]] 3 (pin), units: there is no such unit...Found: p9",
        "sheet.toml, [[rule]] 3 (pin), units: there is no such unit...Found: p8",
        "sheet.toml, [[rule]] 3 (pin), units: this unit is named twice. Found: p1",
        "sheet.toml, [[rule]] 4 (load), kind: this rule is for a roster, not for a selection",
        "sheet.toml, [[rule]] 5 (total), column: not every line has a number...Found: days. ...(amount)",
        "crew.csv, line 7, column days: a number is needed here and the cell is blank",
        "sheet.toml, [[rule]] 6 (total), column: not every line has a number...Found: days",
    ),
}

# --- the list ---------------------------------------------------------------------------------------------------

FRAMES = {
    "no list": sheet(frame('id = "badge"'), "sheet.toml, [frame], file: either file or units must be given"),
    "two lists": sheet(frame(f'file = "crew.csv"\n{INLINE}'), "sheet.toml, [frame], file: ...Found: both"),
    "list missing": sheet(
        frame('file = "crw.csv"'),
        "sheet.toml, [frame], file: there is no such file. Found: crw.csv. Did you mean 'crew.csv'?",
    ),
    "list is a folder": sheet(
        frame('file = "lists"'), "sheet.toml, [frame], file: this is a folder...Found: lists", lists=None
    ),
    "list is the folder": sheet(frame('file = "."'), "sheet.toml, [frame], file: this is a folder...Found: ."),
    "list without name": sheet(frame('file = ""'), 'sheet.toml, [frame], file: this is no name of a file. Found: ""'),
    "list with NUL in its name": sheet(
        frame('file = "a\\u0000b"'), "sheet.toml, [frame], file: this is no name...Found: a\\u0000b"
    ),
    "list with an endless name": sheet(
        frame(f'file = "{"a" * 5000}"'), "sheet.toml, [frame], file: this is no name...Found: aaa"
    ),
    "file a number": sheet(frame("file = 5"), "sheet.toml, [frame], file: ...Found: 5. Allowed: name of a file"),
    "unknown key of frame": sheet(frame('files = "crew.csv"'), "sheet.toml, [frame], files: ...Did you mean 'file'?"),
    "empty list": sheet(frame('file = "a.csv"'), "a.csv: this file is empty", a_csv=""),
    "header only": sheet(frame('file = "a.csv"'), "a.csv: there are no lines below the header", a_csv="id,dept\n"),
    "columns twice": sheet(
        frame('file = "a.csv"'), "a.csv, line 1: columns 2 and 3 have the same name. Found: x", a_csv="id,x,x\n1,2,3\n"
    ),
    "column without name": sheet(
        frame('file = "a.csv"'), "a.csv, line 1: column 2 has no name", a_csv="id,,x\n1,2,3\n"
    ),
    "ragged lines": sheet(
        frame('file = "a.csv"'),
        "a.csv, line 3: this line has 1 cell and the header has 2",
        "a.csv, line 4: this line has 3 cells and the header has 2",
        a_csv="id,x\np1,a\np2\np3,a,b\n",
    ),
    "picture as list": sheet(
        frame('file = "a.csv"'), "a.csv: this is no CSV file: it looks like a PNG picture", a_csv=PNG
    ),
    "binary list": sheet(
        frame('file = "a.csv"'), "a.csv: this is no CSV file: it holds binary data", a_csv=bytes(range(32)) * 9
    ),
    "list in another encoding": sheet(
        frame('file = "a.csv"'), "a.csv, line 2: these bytes are not utf-8...cp1252", a_csv=b"id\nM\xfc\n"
    ),
    "control character in a list": sheet(
        frame('file = "a.csv"'), "a.csv, line 2, column x: ...control character...U+0002", a_csv="id,x\np,a\2b\n"
    ),
    "workbook that is none": sheet(
        frame('file = "a.xlsx"'), "a.xlsx: this file is no XLSX workbook", a_xlsx="id\np1\n"
    ),
    "unknown encoding": sheet(
        frame('file = "crew.csv"\nencoding = "utf8x"'), "sheet.toml, [frame], encoding: ...Found: utf8x...mean 'utf-8'?"
    ),
    "codec that is no encoding": sheet(
        frame('file = "crew.csv"\nencoding = "rot13"'), "sheet.toml, [frame], encoding: ...Found: rot13"
    ),
    "unknown separator": sheet(
        frame('file = "crew.csv"\nseparator = "|"'), "sheet.toml, [frame], separator: ...Found: '|'"
    ),
    "wrong separator": sheet(frame('file = "crew.csv"\nseparator = ";"'), 'crew.csv, line 1: ...say separator = ","'),
    "worksheet of a CSV file": sheet(
        frame('file = "crew.csv"\nworksheet = "a"'), "sheet.toml, [frame], worksheet: ...Found: a"
    ),
    "id column missing": sheet(
        frame('file = "crew.csv"\nid = "bagde"'), "sheet.toml, [frame], id: ...Found: bagde...mean 'badge'?"
    ),
    "id column not named": sheet(
        frame('file = "crew.csv"'), "sheet.toml, [frame], id: ...Found: id. Allowed: badge, dept"
    ),
    "ids twice": sheet(
        frame('file = "a.csv"'),
        "a.csv, column id: the same id stands on lines 2 and 4...Found: p1",
        a_csv="id\np1\np2\np1 \n",
    ),
    "ids blank": sheet(
        frame('file = "a.csv"'), "a.csv, line 3, column id: this line has no id", a_csv="id,x\np1,a\n,b\n"
    ),
    "no units": sheet(frame("units = []"), "sheet.toml, [frame], units: the list has no rows"),
    "units a text": sheet(frame('units = "x"'), 'sheet.toml, [frame], units: ...Found: "x". Allowed: a list of tables'),
    "units a list of texts": sheet(frame('units = ["a", "b"]'), 'sheet.toml, [frame], units: ...Found: ["a", "b"]'),
    "units with other columns": sheet(
        frame('units = [{id = "a", x = "1"}, {id = "b"}, {id = "c", x = "", y = "2"}]'),
        "sheet.toml, [frame], units, row 2: column x of the first row is missing",
        "sheet.toml, [frame], units, row 3: the first row has no such column. Found: y",
    ),
    "units with values that are none": sheet(
        frame(
            f'units = [{{id = "a", x = 2024-01-01}}, {{id = "b", x = nan}}, {{id = "c", x = 1e400}}, {{id = "d", x = {"9" * 100}}}]'
        ),
        "sheet.toml, [frame], units, row 1, column x: this value cannot be a cell. Found: 2024-01-01",
        "sheet.toml, [frame], units, row 2, column x: this number is not written in full",
        "sheet.toml, [frame], units, row 3, column x: this number is not written in full. Found: 1E+400",
        "sheet.toml, [frame], units, row 4, column x: this number is too large",
    ),
    "list outside": sheet(
        frame('file = "../x.csv"'),
        "sheet.toml, [frame], file: this file lies outside...Found: ../x.csv...--allow-outside",
    ),
    "list at an absolute place": sheet(
        frame('file = "/etc/passwd"'), "sheet.toml, [frame], file: this file lies outside"
    ),
}

# --- the outcome ------------------------------------------------------------------------------------------------

AT = "sheet.toml, [outcome], "
KINDS = {
    "kind missing": sheet(f"{FRAME}[outcome]\nsize = 3", f"{AT}kind: this key is missing. Allowed: assignment, order"),
    "kind unknown": sheet(
        f'{FRAME}[outcome]\nkind = "selecton"', f"{AT}kind: ...Found: selecton...Did you mean 'selection'?"
    ),
    "kind a number": sheet(f"{FRAME}[outcome]\nkind = 5", f"{AT}kind: ...Found: 5. Allowed: assignment"),
    "key of another kind": sheet(outcome("order", "size = 3"), f"{AT}size: there is no such key here. Allowed: kind."),
    "size misspelt": sheet(outcome("selection", "siez = 3"), f"{AT}siez: ...Did you mean 'size'?"),
    "size negative": sheet(
        outcome("selection", "size = -1"), f"{AT}size: ...Found: -1. Allowed: an integer of at least 0"
    ),
    "size too large": sheet(outcome("selection", "size = 7"), f"{AT}size: ...Found: 7. Allowed: at most 6"),
    "size huge": sheet(outcome("selection", f"size = {HUGE}"), f"{AT}size: ...Found: {HUGE}. Allowed: at most 6"),
    "size a text": sheet(outcome("selection", 'size = "3"'), f'{AT}size: ...Found: "3". Allowed: how many units'),
    "size true": sheet(outcome("selection", "size = true"), f"{AT}size: ...Found: true"),
    "size a decimal": sheet(outcome("selection", "size = 2.5"), f"{AT}size: ...Found: 2.5"),
    "size nan": sheet(outcome("selection", "size = nan"), f"{AT}size: ...Found: nan"),
    "size a day": sheet(outcome("selection", "size = 2024-01-01"), f"{AT}size: ...Found: 2024-01-01"),
    "size crossed": sheet(
        outcome("selection", "size = {min = 3, max = 1}"), f"{AT}size: min is above max. Found: min 3, max 1"
    ),
    "size with unknown key": sheet(
        outcome("selection", "size = {mni = 3}"), f"{AT}size: ...Found: {{mni = 3}}...{{min = 3, max = 5}}"
    ),
    "places missing": sheet(outcome("assignment", ""), f"{AT}places: this key is missing. Allowed: the places:"),
    "no places": sheet(outcome("assignment", "places = []"), f"{AT}places: there is no place"),
    "places twice": sheet(
        outcome("assignment", 'places = ["a", "b", "a "]'), f"{AT}places: place 3 has the name of place 1. Found: a"
    ),
    "place without name": sheet(outcome("assignment", 'places = ["a", ""]'), f"{AT}places: place 2 has no name"),
    "place without id": sheet(
        outcome("assignment", 'places = [{id = "a"}, {min = 3}]'), f"{AT}places: place 2 of the list has no id"
    ),
    "places a number": sheet(
        outcome("assignment", "places = 3"), f'{AT}places: ...Found: 3. Allowed: the places: ["a", "b"]'
    ),
    "places mixed": sheet(outcome("assignment", 'places = ["a", 5]'), f'{AT}places: ...Found: ["a", 5]'),
    "place min a word": sheet(
        outcome("assignment", 'places = [{id = "a", min = "x"}]'), f"{AT}places, row 1, column min: ...Found: x"
    ),
    "place min negative": sheet(
        outcome("assignment", 'places = [{id = "a", min = -2}]'), f"{AT}places, row 1, column min: ...Found: -2"
    ),
    "place crossed": sheet(
        outcome("assignment", 'places = [{id = "a", min = 4, max = 2}]'),
        f"{AT}places: place a: min is above max. Found: min 4, max 2",
    ),
    "place too large": sheet(
        outcome("assignment", 'places = [{id = "a", min = 9}]'),
        f"{AT}places: place a needs more units...Found: 9. Allowed: at most 6",
    ),
    "places too large": sheet(
        outcome("assignment", 'places = [{id = "a", min = 4}, {id = "b", min = 4}]'),
        f"{AT}places: the places need more units than...(6). Found: 8",
    ),
    "places too small": sheet(
        outcome("assignment", 'places = [{id = "a", max = 2}, {id = "b", max = 1}]'),
        f"{AT}places: the places do not hold all 6 units...Found: 3",
    ),
    "file of places missing": sheet(
        outcome("assignment", 'places = {file = "crw.csv"}'),
        f"{AT}places: there is no such file. Found: crw.csv. Did you mean",
    ),
    "file of places a folder": sheet(
        outcome("assignment", 'places = {file = "lists"}'), f"{AT}places: this is a folder...Found: lists", lists=None
    ),
    "file of places misspelt": sheet(
        outcome("assignment", 'places = {fiel = "crew.csv"}'), f'{AT}places: ...Found: {{fiel = "crew.csv"}}'
    ),
    "file of places without column": sheet(
        outcome("assignment", 'places = {file = "crew.csv", id = "room"}'),
        f"{AT}places.id: ...Found: room. Allowed: badge",
    ),
    "file of places unreadable": sheet(
        outcome("assignment", 'places = {file = "crew.csv", encoding = "utf9"}'),
        f"{AT}places.encoding: this encoding is not known. Found: utf9",
    ),
    "slots twice": sheet(
        outcome("roster", 'slots = ["a", "b", "a"]'), f"{AT}slots: slot 3 has the name of slot 1. Found: a"
    ),
    "slots in a file twice": sheet(
        outcome("roster", 'slots = {file = "a.csv", id = "slot"}'),
        f"{AT}slots: slot 2 has the name of slot 1",
        a_csv="slot\nw1\nw1\n",
    ),
    "slots misspelt": sheet(
        outcome("roster", 'slot = ["a"]'), f"{AT}slots: this key is missing", f"{AT}slot: ...Did you mean 'slots'?"
    ),
    "slots days": sheet(outcome("roster", "slots = [2024-01-01]"), f"{AT}slots: ...Found: [2024-01-01]"),
    "sides unknown": sheet(
        outcome("pairing", 'sides = "sxe"'), f"{AT}sides: ...no such column. Found: sxe...Did you mean 'sex'?"
    ),
    "sides with three values": sheet(
        outcome("pairing", 'sides = "dept"'), f"{AT}sides: ...exactly two values. Found: deck, engine, galley"
    ),
    "sides with a blank": sheet(
        'format = 1\n[frame]\nfile = "a.csv"\n[outcome]\nkind = "pairing"\nsides = "s"',
        f"{AT}sides: ...Found: a blank, x",
        a_csv="id,s\na,x\nb,\n",
    ),
    "sides uneven": sheet(outcome("pairing", 'sides = "sex"'), f"{AT}sides: one side has 2 units more than the other"),
    "odd pairing": sheet(
        'format = 1\n[frame]\nfile = "a.csv"\n[outcome]\nkind = "pairing"',
        f"{AT}single: one unit is left over...Allowed: single = true",
        a_csv="id\na\nb\nc\n",
    ),
    "single a word": sheet(outcome("pairing", 'single = "yes"'), f'{AT}single: ...Found: "yes". Allowed: true'),
}

# --- rules ------------------------------------------------------------------------------------------------------

UNKNOWN = "there is no such unit in the list. Found: "
RULES = {
    "rule unknown": sheet(
        ruled("selection", "qouta", "min = 1"), "sheet.toml, [[rule]] 1 (qouta), kind: ...Did you mean 'quota'?"
    ),
    "rule without kind": sheet(
        f"{GOOD}[[rule]]\nmin = 1", "sheet.toml, [[rule]] 1, kind: this key is missing. Allowed: agree, apart"
    ),
    "rule with blank kind": sheet(
        f'{GOOD}[[rule]]\nkind = ""', 'sheet.toml, [[rule]] 1, kind: there is no such rule. Found: ""'
    ),
    "rule with a number as kind": sheet(
        f"{GOOD}[[rule]]\nkind = 5", "sheet.toml, [[rule]] 1, kind: there is no such rule. Found: 5"
    ),
    "rule with unknown key": rule(
        "selection", "quota", "mni = 1", "mni: there is no such key here. ...Did you mean 'min'?"
    ),
    "rule with note a number": rule("selection", "quota", "min = 1\nnote = 5", "note: ...Found: 5. Allowed: text"),
    "rule with off a word": rule("selection", "quota", 'min = 1\noff = "yes"', 'off: ...Found: "yes". Allowed: true'),
    "rule with empty a number": rule("selection", "quota", "min = 1\nempty = 1", "empty: ...Found: 1. Allowed: true"),
    "rule with id a number": rule("selection", "quota", "min = 1\nid = 5", "id: ...Found: 5. Allowed: a short name"),
    "rule with blank id": rule("selection", "quota", 'min = 1\nid = " "', "id: an id cannot be blank"),
    "rule ids twice": sheet(
        f'{GOOD}[[rule]]\nkind = "pin"\nunits = ["p1"]\nid = "a"\n[[rule]]\nkind = "bar"\nunits = ["p2"]\nid = "a"',
        "sheet.toml, [[rule]] 2 (bar), id: another rule has this id. Found: a",
    ),
    "rule ids twice, one faulty": sheet(
        f'{GOOD}[[rule]]\nkind = "pin"\nunits = ["p9"]\nid = "a"\n[[rule]]\nkind = "bar"\nunits = ["p2"]\nid = "a"',
        f"sheet.toml, [[rule]] 1 (pin), units: {UNKNOWN}p9",
        "sheet.toml, [[rule]] 2 (bar), id: another rule has this id. Found: a",
    ),
    # rules of another kind, for every kind
    "load in a selection": rule("selection", "load", "min = 1", "kind: this rule is for a roster, not for a selection"),
    "needs in an assignment": rule(
        "assignment", "needs", "", "kind: this rule is for a selection, not for an assignment"
    ),
    "distinct in a roster": rule(
        "roster", "distinct", "", "kind: this rule is for a selection or an assignment, not for a roster"
    ),
    "quota in an order": rule(
        "order",
        "quota",
        "min = 1",
        "kind: this rule is for a selection, an assignment or a roster, not for an order. Found: quota",
    ),
    "before in a pairing": rule(
        "pairing", "before", "", "kind: this rule is for an order, not for a pairing...Allowed: agree, apart"
    ),
    # where
    "where matches nobody": rule(
        "selection",
        "quota",
        'where = {dept = "dekc"}\nmin = 1',
        "where: no unit...Found: dept dekc...empty = true...'dept deck'?",
    ),
    "where matches nobody by two keys": rule(
        "selection",
        "quota",
        'where = {dept = "deck", grade = "C"}\nmin = 1',
        "where: no unit...Found: dept deck and grade C",
    ),
    "where with an unknown column": rule(
        "selection", "quota", 'where = {detp = "deck"}\nmin = 1', "where: ...mean 'dept'?"
    ),
    "where a text": rule(
        "selection", "quota", 'where = "deck"\nmin = 1', 'where: ...Found: "deck". Allowed: which units'
    ),
    "where with true": rule(
        "selection", "quota", "where = {dept = true}\nmin = 1", "where: dept must be compared...Found: true"
    ),
    "where with a day": rule(
        "selection", "quota", "where = {dept = [2024-01-01]}\nmin = 1", "where: ...Found: [2024-01-01]"
    ),
    "where with an empty list": rule("selection", "quota", "where = {dept = []}\nmin = 1", "where: ...Found: []"),
    "where with an empty range": rule(
        "selection", "quota", "where = {amount = {}}\nmin = 1", "where: ...needs min or max. Found: {}"
    ),
    "where with a crossed range": rule(
        "selection", "quota", "where = {amount = {min = 5, max = 1}}\nmin = 1", "where: ...min is above max"
    ),
    "where with a misspelt range": rule(
        "selection", "quota", "where = {amount = {mni = 1}}\nmin = 1", "where: ...Did you mean 'min'?"
    ),
    "where with a range of words": rule(
        "selection", "quota", 'where = {amount = {min = "a"}}\nmin = 1', "where: ...needs numbers"
    ),
    "where with nan": rule(
        "selection", "quota", "where = {amount = {min = nan}}\nmin = 1", "where: ...needs numbers. Found: {min = nan}"
    ),
    "where with inf": rule(
        "selection", "quota", "where = {amount = {max = inf}}\nmin = 1", "where: ...needs numbers. Found: {max = inf}"
    ),
    "where with 1e400": rule(
        "selection", "quota", "where = {amount = {max = 1e400}}\nmin = 1", "where: ...up to 18 digits"
    ),
    "where with 1e999999": rule(
        "selection", "quota", "where = {amount = {max = 1e999999}}\nmin = 1", "where: ...up to 18 digits"
    ),
    "where with a range of a text column": rule(
        "selection",
        "quota",
        "where = {dept = {min = 1}}\nmin = 1",
        "where: not every line has a number...Found: dept. Allowed: a column of numbers (amount)",
        *(f"/crew.csv, line {line}, column dept: this is not a number. Found: " for line in range(2, 8)),
    ),
    "where with a range over blanks": rule(
        "selection",
        "quota",
        "where = {days = {min = 1}}\nmin = 1",
        "where: ...Found: days",
        "/crew.csv, line 7, column days: ...blank",
    ),
    # quota
    "quota without bounds": rule("selection", "quota", "", "min: a quota needs min or max"),
    "quota crossed": rule("selection", "quota", "min = 4\nmax = 2", "min: min is above max. Found: min 4, max 2"),
    "quota above what matches": rule(
        "selection",
        "quota",
        'where = {dept = "deck"}\nmin = 3',
        "min: this can never hold...Found: 3. Allowed: at most 2",
    ),
    "quota of nobody on purpose": rule(
        "selection",
        "quota",
        'where = {dept = "x"}\nempty = true\nmin = 1',
        "min: this can never hold...Found: 1. Allowed: at most 0",
    ),
    "quota min negative": rule("selection", "quota", "min = -1", "min: a number of units is never negative. Found: -1"),
    "quota max negative": rule("selection", "quota", "max = -1", "max: a number of units is never negative. Found: -1"),
    "quota a text": rule("selection", "quota", 'min = "1"', 'min: ...Found: "1". Allowed: an integer'),
    "quota a decimal": rule("selection", "quota", "min = 1.5", "min: ...Found: 1.5"),
    "quota true": rule("selection", "quota", "min = true", "min: ...Found: true"),
    "quota nan": rule("selection", "quota", "min = nan", "min: ...Found: nan"),
    "quota huge": rule("selection", "quota", f"max = {HUGE}", f"max: this number is too large...Found: {HUGE}"),
    "quota from a column of units": rule(
        "selection", "quota", 'min = {column = "days"}', "min: this column cannot be used here. Found: days"
    ),
    "quota from a misspelt key": rule(
        "selection", "quota", 'min = {colum = "days"}', 'min: ...Found: {colum = "days"}'
    ),
    "quota from an unknown column": rule(
        "roster",
        "quota",
        'per = "slot"\nmin = {column = "ned"}',
        "min: ...Found: ned...(id, need). Did you mean 'need'?",
    ),
    "quota from a column without per": rule("roster", "quota", 'min = {column = "need"}', 'min: ...with per = "slot"'),
    "quota from a column of words": rule(
        "roster",
        "quota",
        'per = "slot"\nmin = {column = "need"}',
        f"/{AT}slots, row 3, column need: ...[[rule]] 1 (quota) needs one. Found: x",
    ),
    "quota per unknown": rule(
        "selection", "quota", 'per = "detp"\nmin = 1', "per: there is no such column...Did you mean 'dept'?"
    ),
    "quota per slot in a selection": rule(
        "selection", "quota", 'per = "slot"\nmin = 1', "per: ...Found: slot. Allowed: badge, dept"
    ),
    "quota per a number": rule("selection", "quota", "per = 5\nmin = 1", "per: ...Found: 5"),
    "quota per value above": rule("selection", "quota", 'per = "dept"\nmin = 3', "min: dept deck: this can never hold"),
    "quota per column of both": sheet(
        outcome("roster", 'slots = [{id = "w1", dept = "a"}]') + '[[rule]]\nkind = "quota"\nper = "dept"\nmin = 1',
        "sheet.toml, [[rule]] 1 (quota), per: both the list and the slots have this column...Found: dept",
    ),
    "quota in a selection's places": rule(
        "selection", "quota", 'in = ["w1"]\nmin = 1', "in: a selection has no places"
    ),
    "quota in an unknown slot": rule(
        "roster", "quota", 'in = ["w9"]\nmin = 1', "in: there is no such slot. Found: w9. Allowed: w1, w2, w3"
    ),
    "quota in a slot twice": rule(
        "roster", "quota", 'in = ["w1", "w1"]\nmin = 1', "in: this slot is named twice. Found: w1"
    ),
    "quota in no slot": rule("roster", "quota", "in = []\nmin = 1", "in: no slot is named"),
    "quota in a text": rule("roster", "quota", 'in = "w1"\nmin = 1', 'in: ...Found: "w1". Allowed: a list'),
    # total and load
    "total without column": rule(
        "selection", "total", "min = 1", "column: this key is missing. Allowed: a column of numbers"
    ),
    "total without bounds": rule("selection", "total", 'column = "amount"', "min: a total needs min or max"),
    "total of an unknown column": rule(
        "selection", "total", 'column = "amuont"\nmin = 1', "column: ...Did you mean 'amount'?"
    ),
    "total over blanks": rule(
        "selection", "total", 'column = "days"\nmin = 1', "column: ...Found: days", "/crew.csv, line 7, column days: "
    ),
    "total beyond all": rule(
        "selection",
        "total",
        'column = "amount"\nmin = 999',
        "min: this can never hold...Found: 999.00. Allowed: at most 137.45",
    ),
    "total below all": rule(
        "selection",
        "total",
        'column = "amount"\nmax = -9',
        "max: this can never hold...Found: -9.00. Allowed: at least -3.25",
    ),
    "total crossed": rule(
        "selection", "total", 'column = "amount"\nmin = 5\nmax = 1', "min: min is above max. Found: min 5.00, max 1.00"
    ),
    "total nan": rule("selection", "total", 'column = "amount"\nmin = nan', "min: ...Found: nan"),
    "total inf": rule("selection", "total", 'column = "amount"\nmax = inf', "max: ...Found: inf"),
    "total 1e400": rule(
        "selection", "total", 'column = "amount"\nmax = 1e400', "max: this number is too large...Found: 1E+400"
    ),
    "total 1e999999": rule("selection", "total", 'column = "amount"\nmax = 1e999999', "max: this number is too large"),
    "load without bounds": rule("roster", "load", "", "min: a load needs min or max"),
    "load above the slots": rule(
        "roster", "load", f"min = {HUGE}", f"min: this can never hold...Found: min {HUGE}. Allowed: at most 3"
    ),
    "load negative": rule("roster", "load", "max = -1", "max: a number of slots is never negative. Found: -1"),
    "load hugely negative": rule(
        "roster", "load", f"min = -{HUGE}", f"min: a number of slots is never negative. Found: -{HUGE}"
    ),
    "load crossed": rule("roster", "load", "min = 2\nmax = 1", "min: min is above max. Found: min 2, max 1"),
    "load from an unknown column": rule("roster", "load", 'max = {column = "dyas"}', "max: ...Did you mean 'days'?"),
    "load from a column with a blank": rule(
        "roster",
        "load",
        'max = {column = "days"}',
        "/crew.csv, line 7, column days: ...[[rule]] 1 (load) needs one. Found: a blank",
    ),
    "load from a column, crossed": rule(
        "roster",
        "load",
        'min = 2\nmax = {column = "days"}\nwhere = {days = ["1", "2"]}',
        "min: p1: min is above max. Found: min 2, max 1",
    ),
    # pin and bar
    "pin without anything": rule(
        "selection", "pin", "", ": one of these keys must be given. Allowed: units, cells or file"
    ),
    "pin twice over": rule(
        "selection", "pin", 'units = ["p1"]\nfile = "crew.csv"', "file: only one...Found: units and file"
    ),
    "pin nobody": rule("selection", "pin", "units = []", "units: no unit is named"),
    "pin an unknown unit": rule(
        "selection",
        "pin",
        'units = ["p1", "p99"]',
        f"units: {UNKNOWN}p99. Allowed: the ids of the list, in its column badge",
    ),
    "pin a misspelt unit": sheet(
        frame('units = [{id = "north"}, {id = "south"}]') + '[[rule]]\nkind = "pin"\nunits = ["nroth"]',
        "sheet.toml, [[rule]] 1 (pin), units: there is no such unit...Did you mean 'north'?",
    ),
    "pin a unit twice": rule("selection", "pin", 'units = ["p1", "p1 "]', "units: this unit is named twice"),
    "pin a text": rule("selection", "pin", 'units = "p1"', 'units: ...Found: "p1". Allowed: a list'),
    "pin a decimal": rule("selection", "pin", "units = [1.5]", "units: ...Found: [1.5]"),
    "pin in a place of a selection": rule(
        "selection", "pin", 'units = ["p1"]\nin = ["w1"]', "in: a selection has no places"
    ),
    "pin without in": rule(
        "assignment", "pin", 'units = ["p1"]', "in: this key is missing...in an assignment. Allowed: a list of places"
    ),
    "pin in an unknown place": rule(
        "assignment", "pin", 'units = ["p1"]\nin = ["r9"]', "in: there is no such place. Found: r9. Allowed: r1, r2, r3"
    ),
    "pin at position 0": rule(
        "order", "pin", 'units = ["p1"]\nin = [0]', "in: there is no such position. Found: 0. Allowed: 1 to 6"
    ),
    "pin at position n + 1": rule(
        "order", "pin", 'units = ["p1"]\nin = [7]', "in: there is no such position. Found: 7. Allowed: 1 to 6"
    ),
    "pin at position x": rule(
        "order", "pin", 'units = ["p1"]\nin = ["x"]', "in: there is no such position. Found: x. Allowed: 1 to 6"
    ),
    "pin cells with unknown names": rule(
        "roster",
        "pin",
        'cells = [{unit = "p1", slot = "w9"}, {unit = "p9", slot = "w1"}]',
        "cells: there is no such slot. Found: w9",
        f"cells: {UNKNOWN}p9",
    ),
    "pin at a position that is true": rule(
        "order", "pin", 'cells = [{unit = "p1", position = true}]', "cells: there is no such position. Found: true"
    ),
    "pin at a huge position": rule(
        "order", "pin", f'cells = [{{unit = "p1", position = {HUGE}}}]', f"cells: ...Found: {HUGE}"
    ),
    "pin with itself": rule(
        "pairing", "pin", 'cells = [{unit = "p1", with = "p1"}]', "cells: a unit cannot be its own partner. Found: p1"
    ),
    "pin with an unknown unit": rule("pairing", "pin", 'cells = [{unit = "p1", with = "p9"}]', f"cells: {UNKNOWN}p9"),
    "pin two at one position": Bad(
        (
            "No outcome is possible: this rule can never hold.",
            "  pin 1: These are fixed: p1 at position 1, p2 at position 1.",
        ),
        {"sheet.toml": ruled("order", "pin", 'cells = [{unit = "p1", position = 1}, {unit = "p2", position = 1}]')},
        code=3,
    ),
    "bar cells without slot": rule(
        "roster", "bar", 'cells = [{unit = "p1"}]', 'cells: cell 1 ...Found: {unit = "p1"}. Allowed: unit and slot'
    ),
    "bar cells of another kind": rule(
        "roster", "bar", 'cells = [{unit = "p1", place = "w1"}]', "cells: cell 1 ...Allowed: unit and slot"
    ),
    "bar cells with more keys": rule(
        "order", "bar", 'cells = [{unit = "p1", position = 1, x = 2}]', "cells: cell 1 ...Allowed: unit and position"
    ),
    "bar cells with partner": rule(
        "pairing", "bar", 'cells = [{unit = "p1", partner = "p2"}]', "cells: cell 1 ...Allowed: unit and with"
    ),
    "bar cells that are texts": rule(
        "roster", "bar", 'cells = ["p1"]', 'cells: ...Found: ["p1"]. Allowed: a list of cells'
    ),
    "bar a cell twice": rule(
        "roster",
        "bar",
        'cells = [{unit = "p1", slot = "w1"}, {unit = "p1", slot = "w1"}]',
        "cells: this cell is named twice. Found: p1, w1",
    ),
    "bar no cell": rule("roster", "bar", "cells = []", "cells: there is no cell"),
    "bar a file that is missing": rule(
        "roster",
        "bar",
        'file = "leaf.csv"',
        "file: there is no such file. Found: leaf.csv...'leave.csv'?",
        leave_csv="a\n1\n",
    ),
    "bar a file with unknown names": rule(
        "roster",
        "bar",
        'file = "leave.csv"',
        f"/leave.csv, line 3, column badge: {UNKNOWN}p9",
        "/leave.csv, line 4, column slot: there is no such slot. Found: w9. Allowed: w1, w2, w3",
        leave_csv="badge,slot\np1,w1\np9,w2\np2,w9\n",
    ),
    "bar a file without units": rule(
        "roster",
        "bar",
        'file = "a.csv"',
        "file: a.csv has no column of units. Found: who, slot",
        a_csv="who,slot\np1,w1\n",
    ),
    "bar a file without slots": rule(
        "roster",
        "bar",
        'file = "a.csv"',
        "file: a.csv has no column slot...Allowed: badge and slot",
        a_csv="badge,x\np1,w1\n",
    ),
    "bar a file with too many columns": rule(
        "selection", "bar", 'file = "a.csv"', "file: a.csv has more columns than one", a_csv="badge,slot\np1,w1\n"
    ),
    "bar a file outside": rule(
        "roster", "bar", 'file = "../leave.csv"', "file: this file lies outside the sheet's folder. Found: ../leave.csv"
    ),
    "bar a file with a thousand unknown names": rule(
        "selection",
        "bar",
        'file = "a.csv"',
        *(f"/a.csv, line {line}, column badge: {UNKNOWN}x" for line in range(2, 22)),
        "file: there may be more faults like these",
        a_csv="badge\n" + "".join(f"x{i}\n" for i in range(1000)),
    ),
    # groups
    "apart without anything": rule(
        "selection", "apart", "", ": one of these keys must be given. Allowed: units, pairs, file or alike"
    ),
    "apart twice over": rule(
        "selection", "apart", 'units = ["p1", "p2"]\nalike = "dept"', "alike: only one...Found: units and alike"
    ),
    "apart of one": rule(
        "selection", "apart", 'units = ["p1"]', 'units: a group has two units at least. Found: ["p1"]'
    ),
    "apart with an unknown unit": rule("selection", "apart", 'units = ["p1", "p9"]', f"units: {UNKNOWN}p9"),
    "apart in an unknown column": rule("selection", "apart", 'alike = "dpet"', "alike: ...Did you mean 'dept'?"),
    "apart too large": rule(
        "assignment",
        "apart",
        'units = ["p1", "p2", "p3", "p4"]',
        "units: this can never hold: 4 units cannot all be in different places. Found: p1, p2, p3 and p4. ...at most 3",
    ),
    "together in threes": rule(
        "pairing",
        "together",
        'units = ["p1", "p2", "p3"]',
        "units: this can never hold: an odd number...Found: 3 units",
    ),
    "together in an odd class": rule(
        "pairing", "together", 'alike = "grade"', "alike: this can never hold: an odd number...p1, p3 and p5"
    ),
    "together with pairs of one": rule(
        "order", "together", 'pairs = [["p1"]]', 'pairs: a pair has two units. Found: ["p1"]'
    ),
    "together with pairs of three": rule(
        "order", "together", 'pairs = [["p1", "p2", "p3"]]', "pairs: a pair has two units"
    ),
    "together with itself": rule(
        "order", "together", 'pairs = [["p1", "p1"]]', "pairs: this unit is named twice. Found: p1"
    ),
    "together with no pairs": rule("order", "together", "pairs = []", "pairs: there is no pair"),
    "together with texts": rule("order", "together", 'pairs = ["p1", "p2"]', "pairs: ...Allowed: a list of pairs"),
    "together with a file of three columns": rule(
        "order", "together", 'file = "crew.csv"', "file: crew.csv must have two columns"
    ),
    "together with a file with a blank": rule(
        "order", "together", 'file = "a.csv"', f"/a.csv, line 2: {UNKNOWN}a blank", a_csv="a,b\np1,\n"
    ),
    # needs, distinct
    "needs without then": rule(
        "selection", "needs", 'if = ["p1"]', "then: this key is missing. Allowed: a list of units"
    ),
    "needs itself": rule(
        "selection", "needs", 'if = ["p1"]\nthen = ["p1"]', "then: a unit cannot need itself. Found: p1"
    ),
    "needs unknown units": rule(
        "selection", "needs", 'if = ["p9"]\nthen = ["p8"]', f"if: {UNKNOWN}p9", f"then: {UNKNOWN}p8"
    ),
    "needs nobody": rule("selection", "needs", 'if = []\nthen = ["p8"]', "if: no unit is named", f"then: {UNKNOWN}p8"),
    "distinct in an unknown column": rule(
        "selection", "distinct", 'column = "detp"\nmin = 1', "column: ...Did you mean 'dept'?"
    ),
    "distinct above the values": rule(
        "selection", "distinct", 'column = "dept"\nmin = 4', "min: this can never hold...Found: 4. Allowed: at most 3"
    ),
    "distinct of none": rule(
        "selection", "distinct", 'column = "dept"\nmin = 0', "min: ...Found: 0. Allowed: an integer of at least 1"
    ),
    # spacing, run, before
    "spacing without min": rule("roster", "spacing", "", "min: this key is missing"),
    "spacing 0": rule("roster", "spacing", "min = 0", "min: ...Found: 0. Allowed: an integer of at least 1"),
    "spacing alike in a roster": rule("roster", "spacing", 'min = 2\nalike = "dept"', "alike: this key is for orders"),
    "spacing without alike": rule("order", "spacing", "min = 2", "alike: this key is missing"),
    "spacing in an unknown column": rule(
        "order", "spacing", 'min = 2\nalike = "detp"', "alike: ...Did you mean 'dept'?"
    ),
    "spacing that never holds": rule(
        "order",
        "spacing",
        'min = 9\nalike = "dept"',
        "min: this can never hold: 2 of 6 units have dept deck. Found: 9. Allowed: at most 5",
    ),
    "spacing huge": rule(
        "order", "spacing", f'min = {HUGE}\nalike = "dept"', f"min: this can never hold...Found: {HUGE}"
    ),
    "run without alike": rule("order", "run", "max = 1", "alike: in an order, a run is about units alike"),
    "run of duties in an order": rule(
        "order", "run", "max = 1\nduties = true", "duties: in an order, a run is about units alike. Found: true"
    ),
    "run without duties": rule("roster", "run", "max = 1", "duties: in a roster, a run is about the duties"),
    "run alike in a roster": rule(
        "roster", "run", 'max = 1\nalike = "dept"', "alike: in a roster, a run is about the duties"
    ),
    "run 0": rule("order", "run", 'max = 0\nalike = "dept"', "max: ...Found: 0. Allowed: an integer of at least 1"),
    "run in an unknown column": rule("order", "run", 'max = 1\nalike = "detp"', "alike: ...Did you mean 'dept'?"),
    "run that never holds": sheet(
        'format = 1\n[frame]\nfile = "talks.csv"\n[outcome]\nkind = "order"\n[[rule]]\nkind = "run"\nmax = 1\nalike = "theme"',
        "sheet.toml, [[rule]] 1 (run), max: this can never hold: 3 of 4 units have theme x. Found: 1. Allowed: at least 2",
        talks_csv=TALKS,
    ),
    "before without pairs": rule("order", "before", "", ": one of these keys must be given. Allowed: pairs or file"),
    "before twice over": rule(
        "order", "before", 'pairs = [["p1", "p2"]]\nfile = "crew.csv"', "file: only one...Found: pairs and file"
    ),
    "before in a circle": rule(
        "order",
        "before",
        'pairs = [["p1", "p2"], ["p2", "p3"], ["p3", "p1"]]',
        "pairs: this can never hold: these pairs go round in a circle. Found: ... before ... before ",
    ),
    "before in a circle by file": rule(
        "order", "before", 'file = "a.csv"', "file: ...circle. Found: ", a_csv="a,b\np1,p2\np2,p1\n"
    ),
    "before itself": rule("order", "before", 'pairs = [["p1", "p1"]]', "pairs: this unit is named twice"),
    "before unknown units": rule(
        "order", "before", 'pairs = [["p1", "p9"], ["p8", "p2"]]', f"pairs: {UNKNOWN}p9", f"pairs: {UNKNOWN}p8"
    ),
    # pairings
    "differ without column": rule("pairing", "differ", "", "column: this key is missing"),
    "differ in an unknown column": rule("pairing", "differ", 'column = "detp"', "column: ...Did you mean 'dept'?"),
    "differ over a blank": rule(
        "pairing",
        "differ",
        'column = "days"',
        "column: every unit needs a value...crew.csv has a blank in line 7. Found: days",
    ),
    "differ negative": rule(
        "pairing",
        "differ",
        'column = "amount"\nby_at_least = -1',
        "by_at_least: ...Found: -1. Allowed: a number of at least 0",
    ),
    "differ crossed": rule(
        "pairing",
        "differ",
        'column = "amount"\nby_at_least = 5\nby_at_most = 1',
        "by_at_least: by_at_least is above by_at_most. Found: 5 and 1",
    ),
    "agree nan": rule("pairing", "agree", 'column = "amount"\nby_at_most = nan', "by_at_most: ...Found: nan"),
    "agree 1e999999": rule(
        "pairing", "agree", 'column = "amount"\nby_at_most = 1e999999', "by_at_most: ...Found: 1E+999999"
    ),
    "agree over a blank": rule(
        "pairing",
        "agree",
        'column = "days"\nby_at_most = 1',
        "column: ...Found: days",
        "/crew.csv, line 7, column days: ...blank",
    ),
    "mixed without bounds": rule("pairing", "mixed", 'column = "dept"', "min: mixed needs min or max"),
    "mixed in an unknown column": rule(
        "pairing", "mixed", 'column = "detp"\nmin = 1', "column: ...Did you mean 'dept'?"
    ),
    "mixed above the pairs": rule(
        "pairing", "mixed", 'column = "dept"\nmin = 4', "min: this can never hold...Found: 4. Allowed: at most 3"
    ),
    "mixed crossed": rule("pairing", "mixed", 'column = "dept"\nmin = 2\nmax = 1', "min: min is above max"),
    "mixed negative": rule(
        "pairing", "mixed", 'column = "dept"\nmin = -1', "min: ...Found: -1. Allowed: an integer of at least 0"
    ),
}

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
    "draw to a finished folder": called(
        (*DRAW, "--to", "done"), "done holds the record of an earlier draw", **{"done": None, "done/record_json": "{}"}
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
