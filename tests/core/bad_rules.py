"""Bad rules, each with every line that must be told; see bad_sheets.py."""

from __future__ import annotations

from tests.core.bad_sheets import AT, GOOD, HUGE, TALKS, Bad, frame, outcome, rule, ruled, sheet

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
