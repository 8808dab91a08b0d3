"""Bad sheets and lists, each with every line that must be told, for test_bad_input.py.

A line is given by the parts that must stand in it, in their order, divided by ``...``.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

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
