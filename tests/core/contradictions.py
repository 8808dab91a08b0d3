"""Sheets of fifteen rules of which two or three cannot hold together, and sheets that are possible but rare."""

from __future__ import annotations

from dataclasses import dataclass
from decimal import Decimal
from typing import Any

Rule = dict[str, Any]
HIDDEN = "hidden"


@dataclass(frozen=True)
class Contradiction:
    """A sheet; the ids of the rules that conflict begin with `HIDDEN`."""

    name: str
    units: list[dict[str, Any]]
    outcome: dict[str, Any]
    rules: list[Rule]


def unit(number: int) -> str:
    """Return the id of a unit."""
    return f"u{number:02d}"


UNITS = [
    {
        "id": unit(i),
        "dept": "abc"[i % 3],
        "grade": str(1 + i % 4),
        "team": f"t{i // 4}",
        "twin": f"w{i // 2}",
        "half": "xy"[i // 12],
        "hours": f"{i}.5",
    }
    for i in range(24)
]
PLACES = [{"id": f"p{i}", "min": 6, "max": 6} for i in range(1, 5)]
SLOTS = [f"s{i}" for i in range(1, 9)]
THEMES = "abacabadaebc"
TALKS = [{"id": unit(i), "theme": THEMES[i]} for i in range(12)]
# regions of ten, in each of which five are of one country and five of the other
PEOPLE = [{"id": unit(i), "region": "rs"[i // 10], "country": "ab"[i % 2], "level": str(i % 5)} for i in range(20)]

SELECTION: list[Rule] = [
    {"kind": "quota", "where": {"dept": "a"}, "min": 2},
    {"kind": "quota", "where": {"dept": "b"}, "min": 2},
    {"kind": "quota", "where": {"dept": "c"}, "min": 2},
    {"kind": "quota", "per": "grade", "max": 5},
    {"kind": "total", "column": "hours", "min": 60},
    {"kind": "total", "column": "hours", "max": 200},
    {"kind": "apart", "pairs": [["u00", "u05"], ["u02", "u07"]]},
    {"kind": "needs", "if": ["u04"], "then": ["u05"]},
    {"kind": "needs", "if": ["u10", "u11"], "then": ["u12"]},
    {"kind": "bar", "units": ["u06"]},
    {"kind": "pin", "units": ["u16"]},
    {"kind": "together", "pairs": [["u08", "u09"]]},
    {"kind": "distinct", "column": "team", "min": 3},
]
ASSIGNMENT: list[Rule] = [
    {"kind": "quota", "where": {"dept": "a"}, "per": "place", "min": 1},
    {"kind": "quota", "where": {"dept": "b"}, "per": "place", "min": 1},
    {"kind": "quota", "where": {"grade": "1"}, "per": "place", "max": 4},
    {"kind": "quota", "where": {"grade": "2"}, "per": "place", "max": 4},
    {"kind": "total", "column": "hours", "per": "place", "min": 30},
    {"kind": "total", "column": "hours", "per": "place", "max": 120},
    {"kind": "apart", "pairs": [["u10", "u14"], ["u11", "u15"]]},
    {"kind": "apart", "units": ["u00", "u07", "u17"]},
    {"kind": "together", "pairs": [["u12", "u17"], ["u09", "u14"]]},
    {"kind": "pin", "units": ["u00"], "in": ["p1", "p2"]},
    {"kind": "bar", "units": ["u01"], "in": ["p3"]},
    {"kind": "distinct", "column": "grade", "min": 2},
    {"kind": "distinct", "column": "dept", "min": 2},
]
ROSTER: list[Rule] = [
    {"kind": "quota", "per": "slot", "max": 4},
    {"kind": "quota", "where": {"dept": "a"}, "per": "slot", "min": 1},
    {"kind": "quota", "where": {"grade": ["1", "2"]}, "per": "slot", "min": 1},
    {"kind": "load", "max": 4},
    {"kind": "load", "where": {"dept": "b"}, "max": 3},
    {"kind": "apart", "pairs": [["u00", "u01"], ["u05", "u06"]]},
    {"kind": "together", "pairs": [["u02", "u09"]]},
    {"kind": "total", "column": "hours", "per": "slot", "max": 40},
    {"kind": "total", "column": "hours", "min": 20},
    {"kind": "run", "duties": True, "max": 3},
    {"kind": "bar", "cells": [{"unit": "u07", "slot": "s2"}, {"unit": "u08", "slot": "s3"}]},
    {"kind": "pin", "cells": [{"unit": "u04", "slot": "s6"}]},
    {"kind": "quota", "in": ["s1", "s2"], "max": 7},
]
ORDER: list[Rule] = [
    {"kind": "before", "pairs": [["u00", "u08"], ["u04", "u10"]]},
    {"kind": "before", "pairs": [["u05", "u11"]]},
    {"kind": "before", "pairs": [["u09", "u10"]]},
    {"kind": "apart", "pairs": [["u07", "u09"], ["u00", "u11"]]},
    {"kind": "apart", "units": ["u03", "u07"]},
    {"kind": "bar", "cells": [{"unit": "u07", "position": 1}]},
    {"kind": "bar", "units": ["u09"], "in": [3, 4]},
    {"kind": "pin", "units": ["u08"], "in": [8, 9, 10, 11, 12]},
    {"kind": "run", "alike": "theme", "max": 2},
    {"kind": "apart", "pairs": [["u06", "u08"]]},
    {"kind": "apart", "pairs": [["u01", "u10"]]},
    {"kind": "bar", "units": ["u11"], "in": [1, 2]},
    {"kind": "before", "pairs": [["u02", "u08"]]},
]
PAIRING: list[Rule] = [
    *({"kind": "bar", "cells": [{"unit": unit(i), "with": unit((i + 3) % 20)}]} for i in range(0, 16, 2)),
    {"kind": "apart", "pairs": [["u00", "u04"], ["u12", "u18"]]},
    {"kind": "mixed", "column": "level", "min": 1},
    {"kind": "pin", "units": ["u00", "u01"]},
    {"kind": "differ", "column": "level", "by_at_most": 4},
    {"kind": "agree", "column": "level", "by_at_most": 4},
]

_HIDDEN: dict[str, tuple[str, list[Rule]]] = {
    "needs what is barred": (
        "selection",
        [
            {"kind": "pin", "units": ["u13"]},
            {"kind": "needs", "if": ["u13"], "then": ["u14"]},
            {"kind": "bar", "units": ["u14"]},
        ],
    ),
    "two of those kept apart": (
        "selection",
        [
            {"kind": "quota", "where": {"team": "t5"}, "min": 2},
            {"kind": "apart", "units": ["u20", "u21", "u22", "u23"]},
        ],
    ),
    "an odd number of twins": (
        "selection",
        [{"kind": "together", "alike": "twin"}, {"kind": "quota", "where": {"half": "x"}, "min": 5, "max": 5}],
    ),
    "hours that only others bring": (
        "selection",
        [
            {"kind": "total", "column": "hours", "min": 175},
            {"kind": "quota", "where": {"half": "y"}, "max": 8},
            {"kind": "bar", "units": ["u23"]},
        ],
    ),
    "a team that cannot come": (
        "selection",
        [{"kind": "distinct", "column": "team", "min": 6}, {"kind": "bar", "units": ["u00", "u01", "u02", "u03"]}],
    ),
    "needs of two kept apart": (
        "selection",
        [
            {"kind": "needs", "if": ["u13"], "then": ["u18"]},
            {"kind": "apart", "pairs": [["u13", "u18"]]},
            {"kind": "pin", "units": ["u13"]},
        ],
    ),
    "a friend's friend": (
        "assignment",
        [
            {"kind": "together", "pairs": [["u02", "u03"]]},
            {"kind": "together", "pairs": [["u03", "u04"]]},
            {"kind": "apart", "pairs": [["u02", "u04"]]},
        ],
    ),
    "more hours than there is room": (
        "assignment",
        [
            {"kind": "total", "column": "hours", "in": ["p1", "p2"], "max": 140},
            {"kind": "total", "column": "hours", "in": ["p3", "p4"], "max": 140},
        ],
    ),
    "one of each team, yet two": (
        "assignment",
        [{"kind": "distinct", "column": "team", "min": 6}, {"kind": "together", "pairs": [["u20", "u21"]]}],
    ),
    "sent where none may be": (
        "assignment",
        [
            {"kind": "pin", "units": ["u05", "u08"], "in": ["p1"]},
            {"kind": "quota", "where": {"dept": "c"}, "in": ["p1"], "max": 1},
        ],
    ),
    "a slot of leaves": (
        "roster",
        [
            {"kind": "quota", "per": "slot", "min": 3},
            {"kind": "bar", "units": [unit(i) for i in range(1, 11)], "in": ["s5"]},
        ],
    ),
    "three duties far apart": (
        "roster",
        [{"kind": "spacing", "min": 4}, {"kind": "load", "where": {"id": "u03"}, "min": 3}],
    ),
    "twice in a row": (
        "roster",
        [
            {"kind": "run", "duties": True, "max": 1},
            {"kind": "pin", "cells": [{"unit": "u03", "slot": "s4"}, {"unit": "u03", "slot": "s5"}]},
        ],
    ),
    "fewer duties than slots want": (
        "roster",
        [
            {"kind": "quota", "per": "slot", "min": 3},
            {"kind": "load", "max": 2},
            {"kind": "bar", "units": ["u10"]},
        ],
    ),
    "hours for one alone": (
        "roster",
        [
            {"kind": "total", "column": "hours", "in": ["s7"], "min": 30},
            {"kind": "quota", "in": ["s7"], "max": 2},
        ],
    ),
    "a circle in three rules": (
        "order",
        [
            {"kind": "before", "pairs": [["u01", "u03"]]},
            {"kind": "before", "pairs": [["u03", "u05"]]},
            {"kind": "before", "pairs": [["u05", "u01"]]},
        ],
    ),
    "near and far": (
        "order",
        [{"kind": "spacing", "alike": "theme", "min": 2}, {"kind": "together", "pairs": [["u00", "u02"]]}],
    ),
    "first, but not before": (
        "order",
        [
            {"kind": "pin", "units": ["u05"], "in": [1, 2]},
            {"kind": "before", "pairs": [["u06", "u05"], ["u03", "u05"]]},
        ],
    ),
    "no gap left to stand in": (
        "order",
        [
            {"kind": "run", "alike": "theme", "max": 1},
            {"kind": "together", "units": ["u01", "u03", "u05", "u11"]},
            {"kind": "pin", "cells": [{"unit": "u00", "position": 2}]},
        ],
    ),
    "an odd number in each region": (
        "pairing",
        [{"kind": "agree", "column": "region"}, {"kind": "mixed", "column": "country", "max": 1}],
    ),
    "made, but alike": (
        "pairing",
        [
            {"kind": "pin", "cells": [{"unit": "u02", "with": "u04"}]},
            {"kind": "differ", "column": "country"},
        ],
    ),
    "near and far at once": (
        "pairing",
        [
            {"kind": "agree", "column": "level", "by_at_most": 1},
            {"kind": "differ", "column": "level", "by_at_least": 2},
        ],
    ),
}
_KINDS: dict[str, tuple[list[dict[str, Any]], dict[str, Any], list[Rule]]] = {
    "selection": (UNITS, {"kind": "selection", "size": 10}, SELECTION),
    "assignment": (UNITS, {"kind": "assignment", "places": PLACES}, ASSIGNMENT),
    "roster": (UNITS[:12], {"kind": "roster", "slots": SLOTS}, ROSTER),
    "order": (TALKS, {"kind": "order"}, ORDER),
    "pairing": (PEOPLE, {"kind": "pairing"}, PAIRING),
}


def _sheet(name: str, kind: str, hidden: list[Rule]) -> Contradiction:
    units, outcome, fillers = _KINDS[kind]
    rules = [{**rule, "id": f"filler {number}"} for number, rule in enumerate(fillers[: 15 - len(hidden)])]
    for number, rule in enumerate(hidden):
        rules.insert(3 + 5 * number, {**rule, "id": f"{HIDDEN} {number}"})
    return Contradiction(name, units, outcome, rules)


CONTRADICTIONS = [_sheet(name, kind, hidden) for name, (kind, hidden) in _HIDDEN.items()]


# -- possible but rare ------------------------------------------------------------------------------------------

_ITEMS = [
    {"id": unit(i), "amount": f"{(37 * i * i + 11 * i + 5) % 1009}.{(53 * i) % 100:02d}", "sort": "abcd"[i % 4]}
    for i in range(40)
]
RARE = [
    Contradiction(
        "a sum to the last cent",
        _ITEMS,
        {"kind": "selection", "size": 12},
        [
            {"kind": "total", "column": "amount", "min": Decimal("6200.00"), "max": Decimal("6200.03")},
            {"kind": "quota", "per": "sort", "min": 3, "max": 3},
        ],
    ),
    Contradiction(
        "as many duties as there may be",
        UNITS[:12],
        {"kind": "roster", "slots": SLOTS},
        [
            {"kind": "quota", "per": "slot", "min": 3, "max": 3},
            {"kind": "load", "max": 2},
            {"kind": "spacing", "min": 4},
            {"kind": "total", "column": "hours", "per": "slot", "min": 17, "max": 19},
            {"kind": "apart", "pairs": [["u00", "u01"], ["u05", "u06"], ["u10", "u11"]]},
        ],
    ),
    Contradiction(
        "places of the same hours",
        UNITS,
        {"kind": "assignment", "places": PLACES},
        [
            {"kind": "total", "column": "hours", "per": "place", "min": 72, "max": 72},
            {"kind": "quota", "where": {"dept": "a"}, "per": "place", "min": 2, "max": 2},
            {"kind": "quota", "where": {"dept": "b"}, "per": "place", "min": 2, "max": 2},
            {"kind": "distinct", "column": "team", "min": 6},
        ],
    ),
]
