"""Planning: decided by counted steps alone, and a proof with a smallest conflict where no outcome is possible."""

from __future__ import annotations

import inspect
import json
import os
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pytest

import core
from core import jobs, planner
from core.__main__ import main
from core.errors import CallError, Infeasible
from core.files import json_bytes, open_sheet
from core.planner import BYTES_PER_EDGE, Plan, make_plan, ready
from core.sheet import Sheet, canonical_json
from core.stream import make_key
from tests.core.draws import RARE, RARE_TEXT, unbuilt
from tests.tools import Row, admissible, sheet_of, sheet_text

ROOT = Path(core.__file__).parents[1]
AUDIT = ROOT / "scenarios" / "audit_vouchers" / "sheet.toml"
FAIR = ROOT / "scenarios" / "science_fair" / "sheet.toml"


def text_of(plan: Plan) -> str:
    return canonical_json(plan.to_json())


@pytest.fixture(scope="module")
def audit() -> Sheet:
    return open_sheet(AUDIT)


@pytest.fixture(scope="module")
def audit_plan(audit: Sheet) -> Plan:
    """Return a plan that builds in some rules and checks others, so that the pilots decided."""
    plan = make_plan(audit, outcomes=100).plan
    assert plan.built_in
    assert plan.checked
    return plan


# -- the same plan everywhere ---------------------------------------------------------------------------------


def test_twice_in_one_process(audit: Sheet, audit_plan: Plan) -> None:
    assert text_of(make_plan(audit, outcomes=100).plan) == text_of(audit_plan)
    assert text_of(make_plan(open_sheet(AUDIT), outcomes=100).plan) == text_of(audit_plan)


def test_no_clock_decides(audit_plan: Plan, monkeypatch: pytest.MonkeyPatch) -> None:
    """Every clock jumps by an hour whenever it is read."""
    hours = iter(range(10**9))
    for clock in ("time", "monotonic", "perf_counter", "process_time", "thread_time"):
        monkeypatch.setattr(time, clock, lambda: 3600.0 * next(hours))
        monkeypatch.setattr(time, f"{clock}_ns", lambda: 3_600_000_000_000 * next(hours))
    assert text_of(make_plan(open_sheet(AUDIT), outcomes=100).plan) == text_of(audit_plan)


_ELSEWHERE = """
import importlib, pkgutil, sys, core.rules
for name in sorted((f"core.rules.{i.name}" for i in pkgutil.iter_modules(core.rules.__path__)), reverse=True):
    importlib.import_module(name)
from pathlib import Path
from core.files import open_sheet
from core.planner import make_plan
from core.sheet import canonical_json
for path in sys.argv[1:]:
    print(canonical_json(make_plan(open_sheet(Path(path)), outcomes=100).plan.to_json()))
"""


@pytest.mark.parametrize("hash_seed", ["1", "4242"])
def test_other_hashes_imports_and_threads_in_another_process(audit_plan: Plan, hash_seed: str) -> None:
    """Rules imported last to first, one thread instead of several, another folder and language."""
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONHASHSEED": hash_seed, "PYTHONUTF8": "1"}
    environment |= {"POLARS_MAX_THREADS": "1", "OMP_NUM_THREADS": "1", "LC_ALL": "C"}
    call = [sys.executable, "-c", _ELSEWHERE, str(AUDIT), str(FAIR)]
    told = subprocess.run(call, env=environment, cwd="/", check=True, capture_output=True, text=True).stdout
    here = [text_of(audit_plan), text_of(make_plan(open_sheet(FAIR), outcomes=100).plan)]
    assert told.splitlines() == here


def test_a_draw_with_workers_makes_the_same_plan(tmp_path: Path) -> None:
    sheet = _written(tmp_path, WIDE)
    plans = []
    for workers in (1, 2):
        wish = jobs.Wish(sheet, (("", "1"),), tmp_path / f"drawn{workers}", outcomes=100, workers=workers)
        plans.append(jobs.draw_to_files(wish).record["plan"])
    assert plans[0] == plans[1] == make_plan(open_sheet(sheet), outcomes=100).plan.to_json()


def test_pilots_use_bits_of_their_own(monkeypatch: pytest.MonkeyPatch) -> None:
    """No seed can reach a plan: there is no parameter for it, and every key that is made is the pilot's."""
    assert set(inspect.signature(make_plan).parameters) == {"sheet", "outcomes", "memory", "tick"}
    keys: list[tuple[Any, ...]] = []

    def noted(*arguments: Any) -> bytes:
        keys.append(arguments)
        return make_key(*arguments)

    monkeypatch.setattr(planner, "make_key", noted)
    sheet = sheet_of(*WIDE)
    make_plan(sheet, outcomes=100)
    assert keys
    assert set(keys) == {("pilot", sheet.digest), ("last pilot", sheet.digest)}
    assert make_key("pilot", sheet.digest) != make_key("draw", sheet.digest)


# -- what may change it ---------------------------------------------------------------------------------------

# Two totals over 40 different amounts: built in, they need some 100,000 edges each, together millions.
WIDE: tuple[list[Row], Row, list[Row]] = (
    [{"id": f"u{n:02d}", "one": 7 * n * n % 101, "two": 11 * n * n % 97} for n in range(40)],
    {"kind": "selection", "size": 10},
    [
        {"kind": "total", "column": "one", "min": 400, "max": 430},
        {"kind": "total", "column": "two", "min": 400, "max": 430},
    ],
)


def _written(folder: Path, stated: tuple[list[Row], Row, list[Row]]) -> Path:
    path = folder / "sheet.toml"
    path.write_text(sheet_text(*stated), encoding="utf-8")
    return path


def test_memory_that_does_not_bind_changes_the_figure_only(audit: Sheet, audit_plan: Plan) -> None:
    more = make_plan(audit, outcomes=100, memory=64.0).plan
    assert more.to_json() == {**audit_plan.to_json(), "memory": "64.0"}


def test_memory_that_binds_is_kept_to() -> None:
    """With less memory less is built in, and what is drawn from stays a superset of the same outcomes."""
    sheet = sheet_of(*WIDE)
    rich, poor = make_plan(sheet, outcomes=10**6), make_plan(sheet, outcomes=10**6, memory=0.01)
    assert poor.plan.edges <= 0.01 * 2**30 / BYTES_PER_EDGE < rich.plan.edges
    assert set(poor.plan.built_in) < set(rich.plan.built_in)
    assert int(poor.plan.size or 0) > int(rich.plan.size or 0)


def test_more_outcomes_pay_for_more_planning() -> None:
    sheet = sheet_of(*WIDE)
    one, many = make_plan(sheet, outcomes=1).plan, make_plan(sheet, outcomes=10**6).plan
    assert len(one.built_in) < len(many.built_in)


def test_a_note_or_a_title_does_not_change_how_it_is_drawn() -> None:
    units, outcome, rules = WIDE
    plain, noted = sheet_of(*WIDE), sheet_of(units, outcome, [{**rules[0], "note": "why"}, rules[1]])
    one, other = make_plan(plain, outcomes=100).plan, make_plan(noted, outcomes=100).plan
    assert (one.built_in, one.checked, one.superset) == (other.built_in, other.checked, other.superset)


# -- plans from files -----------------------------------------------------------------------------------------


def test_a_plan_comes_back_from_json(audit_plan: Plan) -> None:
    again = Plan.from_json(json.loads(json_bytes(audit_plan.to_json())))
    assert again == audit_plan
    assert again.digest == audit_plan.digest


def test_a_plan_made_earlier_is_built_again(audit: Sheet, audit_plan: Plan) -> None:
    again = ready(audit, audit_plan)
    assert again.diagram.digest == audit_plan.superset
    assert tuple(rule.id for rule in again.checks) == audit_plan.checked


@pytest.fixture
def case(tmp_path: Path) -> Path:
    """Return a folder with a sheet that planning would build in fully, and a plan that builds in nothing."""
    (tmp_path / "sheet.toml").write_text(RARE_TEXT, encoding="utf-8")
    (tmp_path / "plan.json").write_bytes(json_bytes(unbuilt(RARE, block=512).plan.to_json()))
    return tmp_path


def drawn(case: Path, *more: str) -> int:
    return main(["draw", str(case / "sheet.toml"), "--seed", "1", "--to", str(case / "drawn"), *more])


def test_a_given_plan_is_used(case: Path) -> None:
    given = json.loads((case / "plan.json").read_bytes())
    assert given["built_in"] == []
    assert make_plan(RARE).plan.checked == ()
    assert drawn(case, "--plan", str(case / "plan.json")) == 0
    record = json.loads((case / "drawn" / "record.json").read_bytes())
    assert record["plan"] == given
    assert {rule["treatment"] for rule in record["rules"]} == {"checked"}
    assert record["ledger"]["proposed"] > 1


def test_the_plan_that_a_call_writes_is_the_one_that_a_draw_makes(
    case: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["plan", str(case / "sheet.toml"), "--to", str(case / "made.json"), "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert drawn(case) == 0
    record = json.loads((case / "drawn" / "record.json").read_bytes())
    assert record["plan"] == json.loads((case / "made.json").read_bytes())
    assert record["plan_digest"] == told["plan_digest"]


def test_a_plan_for_another_sheet_is_refused(case: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (case / "sheet.toml").write_text(RARE_TEXT.replace("size = 30", "size = 31"), encoding="utf-8")
    assert drawn(case, "--plan", str(case / "plan.json")) == 2
    assert "the plan was made for another sheet" in capsys.readouterr().err
    assert not (case / "drawn").exists()


BAD_PLANS: list[tuple[Row, str]] = [
    ({"format": "lotwright plan 0"}, "no plan of a known format"),
    ({"superset": "0" * 64}, "the superset comes out differently"),
    ({"checked": []}, "names other rules"),
    ({"checked": ["quota 1"] * 8}, "names other rules"),
    ({"arrangement": "by chance"}, "names other rules|arrangement"),
    ({"block": 0}, "its block must be from 1"),
    ({"block": 10**9}, "its block must be from 1"),
    ({"block": "many"}, "is no plan"),
    ({"memory": "1e-6"}, "does not fit in the memory"),
    ({"memory": "inf"}, "does not fit in the memory"),
    ({"memory": "nan"}, "cannot be used|is no plan"),
    ({"built_in": 7}, "is no plan"),
    ({"pilot": None}, "is no plan"),
    ({"pilot": {"proposals": 7, "accepted": 8, "rules": []}}, "its pilot accepted more"),
    ({"pilot": {"proposals": 7, "accepted": 1, "rules": [{"id": "quota 1"}]}}, "it has no any"),
    ({"size": "[]"}, "its size is no number"),
    ({"size": "7"}, "the size it states is not that of its superset"),
]


@pytest.mark.parametrize(("change", "words"), BAD_PLANS, ids=[str(change)[:40] for change, _ in BAD_PLANS])
def test_a_plan_that_was_edited_is_refused_in_words(case: Path, change: Row, words: str) -> None:
    plan = {**json.loads((case / "plan.json").read_bytes()), **change}
    (case / "plan.json").write_bytes(json_bytes(plan))
    wish = jobs.Wish(case / "sheet.toml", (("", "1"),), case / "drawn", plan=case / "plan.json")
    with pytest.raises(CallError, match=words):
        jobs.draw_to_files(wish)


@pytest.mark.parametrize("content", [b"", b"[]", b"{}", b'{"format": "lotwright plan 1"}', b"\xff", b"[" * 10**5])
def test_what_is_no_plan_is_refused_in_words(case: Path, content: bytes) -> None:
    (case / "plan.json").write_bytes(content)
    assert drawn(case, "--plan", str(case / "plan.json")) == 2
    assert not (case / "drawn").exists()


# -- impossible sheets ----------------------------------------------------------------------------------------

SIX: list[Row] = [{"id": f"u{i}", "dept": "aaabbc"[i], "pay": i} for i in range(6)]
INNOCENT = {"kind": "bar", "id": "innocent", "units": ["u5"]}

# name, outcome, rules; the ids of the rules that conflict begin with "x"
IMPOSSIBLE: list[tuple[str, list[Row], Row, list[Row]]] = [
    (
        "a quota above what the others leave",
        [{"id": f"u{i}", "dept": "aaabbbccc"[i]} for i in range(9)],
        {"kind": "selection", "size": 5},
        [
            {"kind": "quota", "id": "x1", "where": {"dept": "a"}, "min": 3},
            {"kind": "quota", "id": "c", "where": {"dept": "c"}, "max": 2},
            {"kind": "quota", "id": "x2", "where": {"dept": "b"}, "min": 3},
            {**INNOCENT, "units": ["u8"]},
        ],
    ),
    (
        "quotas that leave too few",
        SIX,
        {"kind": "selection", "size": 4},
        [
            {**INNOCENT},
            {"kind": "quota", "id": "x1", "where": {"dept": "a"}, "max": 1},
            {"kind": "quota", "id": "x2", "where": {"dept": ["b", "c"]}, "max": 2},
        ],
    ),
    (
        "apart, together and pinned",
        SIX,
        {"kind": "selection", "size": 3},
        [
            {"kind": "apart", "id": "x1", "units": ["u0", "u1"]},
            {"kind": "together", "id": "x2", "units": ["u0", "u1"]},
            {"kind": "pin", "id": "x3", "units": ["u0"]},
            {**INNOCENT},
        ],
    ),
    (
        "apart and together in one place",
        SIX,
        {"kind": "assignment", "places": ["p", "q"]},
        [
            {"kind": "quota", "id": "q", "per": "place", "min": 1},
            {"kind": "together", "id": "x1", "units": ["u0", "u1", "u2"]},
            {"kind": "apart", "id": "x2", "units": ["u2", "u1"]},
        ],
    ),
    (
        "pinned and barred",
        SIX,
        {"kind": "selection", "size": 3},
        [
            {"kind": "pin", "id": "x1", "units": ["u1", "u2"]},
            {**INNOCENT},
            {"kind": "bar", "id": "x2", "units": ["u2", "u4"]},
        ],
    ),
    (
        "more duties than loads allow",
        SIX[:4],
        {"kind": "roster", "slots": ["s1", "s2", "s3"]},
        [
            {"kind": "quota", "id": "x1", "per": "slot", "min": 3, "max": 3},
            {"kind": "spacing", "id": "s", "min": 1},
            {"kind": "load", "id": "x2", "max": 2},
        ],
    ),
    (
        "fewer duties than loads ask for",
        SIX[:4],
        {"kind": "roster", "slots": ["s1", "s2", "s3"]},
        [
            {"kind": "load", "id": "x1", "min": 1},
            {"kind": "quota", "id": "x2", "max": 3},
            {"kind": "bar", "id": "innocent", "cells": [{"unit": "u0", "slot": "s1"}]},
        ],
    ),
    (
        "a total out of reach",
        SIX,
        {"kind": "selection", "size": 2},
        [
            {"kind": "total", "id": "x1", "column": "pay", "min": 8},
            {"kind": "bar", "id": "x2", "units": ["u5"]},
            {"kind": "apart", "id": "a", "units": ["u0", "u1"]},
        ],
    ),
    (
        "before what stands first",
        SIX[:5],
        {"kind": "order"},
        [
            {"kind": "run", "id": "r", "alike": "dept", "max": 2},
            {"kind": "before", "id": "x1", "pairs": [["u0", "u1"], ["u1", "u2"]]},
            {"kind": "pin", "id": "x2", "cells": [{"unit": "u2", "position": 2}]},
        ],
    ),
    (
        "two sorts in turn, begun by the smaller",
        [{"id": f"u{i}", "dept": "aaabb"[i]} for i in range(5)],
        {"kind": "order"},
        [
            {"kind": "bar", "id": "b", "units": ["u0"], "in": [1]},
            {"kind": "run", "id": "x1", "alike": "dept", "max": 1},
            {"kind": "pin", "id": "x2", "units": ["u3"], "in": [1]},
        ],
    ),
    (
        "nobody left to be paired with",
        [{"id": f"u{i}", "dept": "aabb"[i]} for i in range(4)],
        {"kind": "pairing"},
        [
            {"kind": "apart", "id": "a", "units": ["u0", "u3"]},
            {"kind": "bar", "id": "x1", "cells": [{"unit": "u0", "with": "u1"}]},
            {"kind": "agree", "id": "x2", "column": "dept"},
        ],
    ),
    (
        "three conflicts of one rule with the rest",
        SIX,
        {"kind": "selection", "size": 3},
        [
            {"kind": "quota", "id": "x1", "where": {"dept": "a"}, "min": 1, "max": 1},
            {"kind": "pin", "id": "x2", "units": ["u0"]},
            {"kind": "needs", "id": "x3", "if": ["u0"], "then": ["u1"]},
            {**INNOCENT},
        ],
    ),
]


@pytest.mark.parametrize(
    ("units", "outcome", "rules"), [case[1:] for case in IMPOSSIBLE], ids=[case[0] for case in IMPOSSIBLE]
)
def test_an_impossible_sheet_is_proved_with_a_smallest_conflict(
    units: list[Row], outcome: Row, rules: list[Row]
) -> None:
    """The rules named conflict, and without any one of them there are outcomes: both by listing everything."""
    sheet = sheet_of(units, outcome, rules)
    with pytest.raises(Infeasible) as caught:
        make_plan(sheet)
    conflict = caught.value.rules
    assert sorted(conflict) == [rule["id"] for rule in rules if str(rule["id"]).startswith("x")]
    assert caught.value.words == tuple(sheet.rule(id).words() for id in conflict)
    named = [rule for rule in rules if rule["id"] in conflict]
    assert not admissible(sheet_of(units, outcome, named))
    for left_out in named:
        assert admissible(sheet_of(units, outcome, [rule for rule in named if rule is not left_out]))


def test_of_several_conflicts_one_is_named() -> None:
    rules = [
        {"kind": "pin", "id": "p1", "units": ["u0"]},
        {"kind": "bar", "id": "b1", "units": ["u0"]},
        {"kind": "pin", "id": "p2", "units": ["u1"]},
        {"kind": "bar", "id": "b2", "units": ["u1"]},
    ]
    with pytest.raises(Infeasible) as caught:
        make_plan(sheet_of(SIX, {"kind": "selection", "size": 3}, rules))
    assert caught.value.rules in (("p1", "b1"), ("p2", "b2"))


def test_an_impossible_sheet_ends_with_3_in_every_job(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    _, units, outcome, rules = IMPOSSIBLE[4]
    path = str(_written(tmp_path, (units, outcome, rules)))
    for call in (["plan", path], ["draw", path, "--seed", "1", "--to", str(tmp_path / "drawn")], ["freeze", path]):
        assert main(call) == 3
        errors = capsys.readouterr().err
        assert "No outcome is possible: these 2 rules cannot hold together." in errors
        assert "x1: " in errors
        assert "x2: " in errors
        assert "innocent" not in errors
    assert {found.name for found in tmp_path.iterdir()} == {"sheet.toml"}, "nothing is written"


def test_rare_is_not_called_impossible() -> None:
    """One admissible set of 12,870, found by building the rule in."""
    units = [{"id": f"u{i:02d}", "pay": 3**i} for i in range(16)]
    total = sum(3**i for i in range(0, 16, 2))
    rule = {"kind": "total", "column": "pay", "min": total, "max": total}
    made = make_plan(sheet_of(units, {"kind": "selection", "size": 8}, [rule]))
    assert made.plan.size == "1"
