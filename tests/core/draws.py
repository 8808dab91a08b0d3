"""Draws that tests of engine, record and ledger share."""

from __future__ import annotations

from core.planner import Plan, Ready, ready
from core.sheet import Sheet
from core.supersets import arrangements, superset
from tests.tools import sheet_of, sheet_text

_UNITS = [{"id": f"i{n:03d}", "region": "nsewc"[n % 5], "risk": "hml"[(n * 7 // 5) % 3]} for n in range(200)]
_RULES = [{"kind": "quota", "where": {"region": r}, "min": 6, "max": 6} for r in "nsewc"]
_RULES += [{"kind": "quota", "where": {"risk": r}, "min": 8, "max": 12} for r in "hml"]
RARE_TEXT = sheet_text(_UNITS, {"kind": "selection", "size": 30}, _RULES)
# 30 of 200: with no rule built in, about one proposal in 1,200 is accepted
RARE = sheet_of(_UNITS, {"kind": "selection", "size": 30}, _RULES)


def unbuilt(sheet: Sheet, *, outcomes: int = 1, block: int = 256) -> Ready:
    """Return a sheet with a plan that builds in nothing: every rule is checked, in the order of the sheet."""
    arrangement = arrangements(sheet.kind)[0]
    diagram = superset(sheet.kind, [], arrangement, budget=10**6)
    plan = Plan(
        sheet=sheet.digest,
        outcomes=outcomes,
        memory=4.0,
        arrangement=arrangement,
        built_in=(),
        partly=(),
        checked=tuple(rule.id for rule in sheet.rules),
        block=block,
        edges=diagram.edges,
        nodes=diagram.nodes,
        superset=diagram.digest,
        size=str(diagram.size),
        about=f"{diagram.size:,}",
        pilot={"proposals": 0, "accepted": 0, "rules": [{"id": r.id, "any": 0, "alone": 0} for r in sheet.rules]},
        words=("Nothing is built in.",),
    )
    return ready(sheet, plan)
