"""Weaker forms of rules: whatever meets the rule meets them, so building one in loses nothing."""

from typing import Any

import pytest

from core.planner import make_plan, ready
from core.supersets import arrangements, superset
from tests.tools import admissible, is_bijection, is_uniform, keys_of, law_of, passing, sheet_of, universe

AMOUNTS = ("123456.78", "98765.43", "-54321.09", "31415.92", "27182.81", "0.01")
UNITS = [{"id": f"u{i}", "dept": "ab"[i % 2], "amount": amount} for i, amount in enumerate(AMOUNTS)]
CASES: list[tuple[int, dict[str, Any], dict[str, Any]]] = [
    (6, {"kind": "selection", "size": 3}, {"min": 90000, "max": 200000}),
    (6, {"kind": "selection"}, {"max": 100000}),
    (6, {"kind": "selection", "size": 2}, {"per": "dept", "min": -60000, "max": 120000}),
    (5, {"kind": "assignment", "places": ["p", "q"]}, {"per": "place", "min": 10000}),
    (5, {"kind": "assignment", "places": ["p", "q"]}, {"where": {"dept": "a"}, "in": ["q"], "max": 100000}),
    (3, {"kind": "roster", "slots": ["s", "t", "v"]}, {"per": "slot", "min": 0, "max": 150000}),
    (3, {"kind": "roster", "slots": ["s", "t", "v"]}, {"min": 200000}),
]


@pytest.mark.parametrize(("count", "outcome", "rule"), CASES)
def test_weaker_totals_hold_wherever_the_total_holds(count: int, outcome: dict[str, Any], rule: dict[str, Any]) -> None:
    sheet = sheet_of(UNITS[:count], outcome, [{"kind": "total", "column": "amount", **rule}])
    rows, total = universe(sheet.kind), sheet.rules[0]
    strict = total.check(rows)
    assert 0 < strict.sum() < len(rows)
    forms = total.weaker()
    assert forms
    for form in forms:
        assert form.id.startswith(f"{total.id}~")
        assert (form.check(rows) | ~strict).all(), "an admissible outcome would be lost"
        for arrangement in arrangements(sheet.kind):
            diagram = superset(sheet.kind, [form], arrangement, budget=10**6)
            held = set(keys_of(rows[passing([form], rows)]))
            assert admissible(sheet) <= held
            assert is_bijection(diagram, held)
            assert is_uniform(law_of(diagram), held)


def test_the_strictest_form_comes_first() -> None:
    sheet = sheet_of(UNITS, {"kind": "selection", "size": 3}, [{"kind": "total", "column": "amount", "min": 90000}])
    rows = universe(sheet.kind)
    sizes = [int(form.check(rows).sum()) for form in sheet.rules[0].weaker()]
    assert sizes == sorted(sizes)
    assert sizes[0] >= sheet.rules[0].check(rows).sum()


def test_a_total_far_out_is_drawn_from_and_the_plan_is_used_again() -> None:
    """200 amounts, 30 drawn, a total that uniform samples reach about 4 times in a million (mean + 5 sd)."""
    cents = [int(100_000 * 1.03 ** ((i * 7919) % 200)) % 900_000 + 1000 for i in range(200)]
    units = [{"id": f"v{i}", "amount": f"{c // 100}.{c % 100:02d}"} for i, c in enumerate(cents)]
    mean = sum(cents) / 200
    sd = (30 * (1 - 30 / 200) * sum((c - mean) ** 2 for c in cents) / 199) ** 0.5
    rule = {"kind": "total", "column": "amount", "min": round((30 * mean + 5 * sd) / 100)}
    made = make_plan(sheet_of(units, {"kind": "selection", "size": 30}, [rule]), outcomes=1000)
    assert any("~" in id for id in made.plan.built_in)
    assert made.plan.checked == (made.sheet.rules[0].id,)
    assert made.plan.pilot["accepted"] > 0.01 * made.plan.pilot["proposals"]
    assert ready(made.sheet, made.plan).diagram.digest == made.plan.superset
