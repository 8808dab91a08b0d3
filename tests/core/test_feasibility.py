"""Impossible or rare: what kinds and rules state is what they check, what is called impossible is, and nothing is left behind."""

from __future__ import annotations

import copy
import dataclasses
import hashlib
import itertools
import json
import multiprocessing
import os
import re
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Collection, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from ortools.sat.python import cp_model

from core import feasibility, forecast, jobs
from core.__main__ import main
from core.errors import Cancelled, Infeasible, TooRare
from core.feasibility import Inquiry, Verdict, diagnose, findings, stated
from core.files import open_sheet
from core.kinds import OutcomeKind
from core.planner import Ready, make_plan
from core.process import Rows
from core.rules import Case, Rule
from core.sheet import Sheet, read_sheet
from core.solver import Program, Solver
from core.statement import Statement
from tests.core.contradictions import CONTRADICTIONS, HIDDEN, RARE, Contradiction
from tests.core.draws import unbuilt
from tests.core.test_rule_contract import CASES
from tests.tools import Key, admissible, key_of, keys_of, no_files, passing, sheet_of, sheet_text, universe

ROOT = Path(__file__).parents[2]
AMPLE = 30.0


def judged(sheet: Sheet, seconds: float = AMPLE) -> Verdict:
    """Return the verdict on a sheet without starting a process."""
    *_, last = findings(sheet.kind, sheet.rules, seconds)
    return feasibility.judged(sheet, last, seconds)


def minimal(sheet: Sheet, conflict: Collection[str]) -> bool:
    """Return whether these rules are impossible together, and possible (by a witness that is checked) without any one."""
    numbers = [number for number, rule in enumerate(sheet.rules) if rule.id in conflict]
    solver = Solver(stated(sheet.kind, sheet.rules), time.monotonic() + AMPLE)
    if solver.solve(numbers)[0] != "impossible":
        return False
    for left_out in numbers:
        rest = [number for number in numbers if number != left_out]
        state, values = solver.solve(rest)
        if state != "possible":
            return False
        row = sheet.kind.row(np.array(values)[sheet.kind.variables()])
        assert passing([sheet.rules[number] for number in rest], row[None]).all(), "a witness that breaks a rule"
    return True


# -- what is stated is what is checked --------------------------------------------------------------------------


class Collect(cp_model.CpSolverSolutionCallback):
    """Collects the values of some variables in every solution."""

    def __init__(self, variables: Sequence[cp_model.IntVar]) -> None:
        super().__init__()
        self._variables = variables
        self.found: set[tuple[bool, ...]] = set()

    def on_solution_callback(self) -> None:
        self.found.add(tuple(map(self.boolean_value, self._variables)))


def stated_outcomes(kind: OutcomeKind, rules: Sequence[Rule]) -> set[Key]:
    """Return the key of every outcome that fits what kind and rules state."""
    statement, variables = stated(kind, rules), kind.variables()
    program = Program(statement.size, statement.said)
    collect = Collect(program.variables[: int(variables.max()) + 1])
    solver = cp_model.CpSolver()
    solver.parameters.num_workers = 1
    solver.parameters.enumerate_all_solutions = True
    assert solver.solve(program.model, collect) in (cp_model.OPTIMAL, cp_model.INFEASIBLE)
    return {key_of(kind.row(np.array(values)[variables])) for values in collect.found}


def _sheet(name: str, case: Case) -> Sheet:
    return sheet_of(case.units, case.outcome, [{"kind": name, **case.rule}])


@pytest.mark.parametrize(("name", "case"), CASES)
def test_a_rule_states_what_it_checks(name: str, case: Case) -> None:
    sheet = _sheet(name, case)
    assert stated_outcomes(sheet.kind, sheet.rules) == admissible(sheet)


@pytest.mark.parametrize(
    "outcome",
    [
        {"kind": "selection", "size": {"min": 1, "max": 3}},
        {"kind": "assignment", "places": [{"id": "p", "min": 1}, {"id": "q", "max": 2}, {"id": "r"}]},
        {"kind": "roster", "slots": ["s", "t"]},
        {"kind": "order"},
        {"kind": "pairing", "single": True},
        {"kind": "pairing", "single": True, "sides": "side"},
    ],
    ids=lambda outcome: "-".join(map(str, outcome.values())),
)
def test_a_kind_states_its_outcomes(outcome: dict[str, Any]) -> None:
    sheet = sheet_of([{"id": f"u{i}", "side": "xyxxy"[i]} for i in range(5)], outcome)
    rows = universe(sheet.kind)
    assert stated_outcomes(sheet.kind, []) == set(keys_of(rows))
    assert sheet.kind.row(used(sheet.kind, rows[0])).tolist() == rows[0].tolist()


def used(kind: OutcomeKind, row: Rows) -> Any:
    """Return which cells an outcome uses."""
    cells = np.zeros(kind.cells(), bool)
    if kind.name == "selection":
        cells[row[row < kind.units], 0] = True
    elif kind.name == "roster":
        cells[:] = row
    elif kind.name == "order":
        cells[row, np.arange(kind.units)] = True
    elif kind.name == "pairing":
        cells[np.arange(kind.units), np.where(row == np.arange(kind.units), kind.units, row)] = True
    else:
        cells[np.arange(kind.units), row] = True
    return cells


def test_a_rule_that_states_something_else_is_caught() -> None:
    """What the contract above is worth: a bound off by one, and nothing stated at all."""
    units = [{"id": f"u{i}"} for i in range(4)]
    sheet = sheet_of(units, {"kind": "selection"}, [{"kind": "quota", "min": 2}])

    def off_by_one(model: Statement) -> None:
        model.sum(((1, model.at(unit, 0)) for unit in range(4)), 1)

    for twin in (off_by_one, lambda _: None):
        rule = copy.copy(sheet.rules[0])
        rule.state = twin  # type: ignore[method-assign]
        assert stated_outcomes(sheet.kind, [rule]) > admissible(sheet)


# -- every case, possible and impossible ------------------------------------------------------------------------


def pinned(kind: OutcomeKind, row: Rows, ids: Sequence[str]) -> list[dict[str, Any]]:
    """Return rules that only this outcome meets, one for each cell."""
    word, rules = "with" if kind.name == "pairing" else kind.places.word, []
    for unit, place in np.argwhere(used(kind, row)).tolist():
        if kind.name == "selection":
            rules.append({"kind": "pin", "units": [ids[unit]]})
        elif kind.name == "pairing" and place == kind.units:
            rules.append({"kind": "bar", "units": [ids[unit]]})
        elif kind.name != "pairing" or unit < place:
            second = ids[place] if kind.name == "pairing" else kind.places.ids[place]
            rules.append({"kind": "pin", "cells": [{"unit": ids[unit], word: second}]})
    if kind.name in ("selection", "roster"):
        for unit, place in np.argwhere(~used(kind, row)).tolist():
            cell = {"cells": [{"unit": ids[unit], word: kind.places.ids[place]}]} if word else {"units": [ids[unit]]}
            rules.append({"kind": "bar", **cell})
    return rules


@pytest.mark.parametrize(("name", "case"), CASES)
def test_every_case_has_a_witness_and_a_contradiction(name: str, case: Case) -> None:
    sheet = _sheet(name, case)
    verdict = judged(sheet)
    assert verdict.state == "possible"
    assert verdict.witness is not None
    assert key_of(verdict.witness) in admissible(sheet)
    rows = universe(sheet.kind)
    broken = rows[~sheet.rules[0].check(rows)][-1]
    pins = pinned(sheet.kind, broken, sheet.frame.ids)
    sheet = sheet_of(case.units, case.outcome, [*pins, {"kind": name, **case.rule, "id": "the rule"}])
    verdict = judged(sheet)
    assert verdict.state == "impossible"
    assert verdict.witness is None
    assert verdict.minimal
    assert "the rule" in verdict.conflict
    # by brute force and the rules' own checks: it conflicts, and no rule of it can be left out
    conflict = [sheet.rule(id) for id in verdict.conflict]
    assert not passing(conflict, rows).any()
    for rule in conflict:
        assert passing([other for other in conflict if other is not rule], rows).any()


# -- contradictions and rare sheets -----------------------------------------------------------------------------


def test_contradictions_are_of_every_rule_and_kind() -> None:
    hidden = {rule["kind"] for sheet in CONTRADICTIONS for rule in sheet.rules if rule["id"].startswith(HIDDEN)}
    assert hidden == set(Rule.known)
    assert {sheet.outcome["kind"] for sheet in CONTRADICTIONS} == set(OutcomeKind.known)
    assert len(CONTRADICTIONS) >= 20
    assert all(len(sheet.rules) == 15 for sheet in CONTRADICTIONS)


@pytest.mark.parametrize("told", [pytest.param(told, id=told.name) for told in CONTRADICTIONS])
def test_a_hidden_contradiction_is_proved_and_named(
    told: Contradiction, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "sheet.toml"
    path.write_text(sheet_text(told.units, told.outcome, told.rules))
    began = time.monotonic()
    assert main(["plan", str(path)]) == 3
    assert time.monotonic() - began < 10
    lines = capsys.readouterr().err.splitlines()
    hidden = {rule["id"] for rule in told.rules if rule["id"].startswith(HIDDEN)}
    assert lines[0] == f"No outcome is possible: these {len(hidden)} rules cannot hold together."
    assert {line[2:].split(":")[0] for line in lines if line.startswith("  ")} == hidden
    assert minimal(sheet_of(told.units, told.outcome, told.rules), hidden)


@pytest.mark.parametrize("told", [pytest.param(told, id=told.name) for told in RARE])
def test_what_is_rare_is_never_called_impossible(told: Contradiction) -> None:
    sheet = sheet_of(told.units, told.outcome, told.rules)
    assert judged(sheet, 10).state == "possible"
    # whatever the time: too little of it makes nothing impossible
    for seconds in (0.0, 0.001, 0.01, 0.1):
        assert judged(sheet, seconds).state in ("possible", "unknown")


def changes(name: str) -> tuple[str, ...]:
    told = next(told for told in CONTRADICTIONS if told.name == name)
    return judged(sheet_of(told.units, told.outcome, told.rules)).changes


def test_the_least_change_is_told() -> None:
    assert changes("a slot of leaves") == (
        "hidden 0 needs at least 3 in slot s5; with the other rules only 2 can be had.",
    )
    assert changes("more hours than there is room") == (
        "hidden 0 allows at most 140.0 of hours; with the other rules at least 148.0 are needed.",
        "hidden 1 allows at most 140.0 of hours; with the other rules at least 148.0 are needed.",
    )
    assert changes("an odd number in each region") == (
        "hidden 1 allows at most 1 pair differing in country; with the other rules at least 2 are needed.",
    )
    assert changes("a team that cannot come") == (
        "hidden 0 needs at least 6 different values of team; with the other rules only 5 can be had.",
    )
    by_slots, by_units = changes("fewer duties than slots want")
    assert by_slots.startswith("Least change to hidden 0: at least 2 instead of 3 in slot s")
    assert by_units.startswith("Least change to hidden 1: at most 3 instead of 2 for u")


def test_a_second_contradiction_does_not_hide_the_least_change() -> None:
    units = [{"id": f"u{i}"} for i in range(4)]
    rules = [
        {"kind": "quota", "id": "three", "min": 3},
        {"kind": "bar", "units": ["u0", "u1"]},
        {"kind": "pin", "units": ["u2"]},
        {"kind": "bar", "units": ["u2"]},
    ]
    told = judged(sheet_of(units, {"kind": "selection"}, rules))
    assert told.minimal
    assert set(told.conflict) in ({"three", "bar 2"}, {"pin 3", "bar 4"})
    first = judged(sheet_of(units, {"kind": "selection"}, [*rules[2:], *rules[:2]]))
    both = {told.conflict: told.changes, first.conflict: first.changes}
    for conflict, said in both.items():
        expected = ("three needs at least 3; with the others named here only 2 can be had.",)
        assert said == (expected if "three" in conflict else ())


def test_one_rule_alone_can_be_impossible() -> None:
    units = [{"id": f"u{i}"} for i in range(4)]
    sheet = sheet_of(
        units, {"kind": "selection", "size": 2}, [{"kind": "quota", "max": 1}, {"kind": "quota", "min": 1}]
    )
    verdict = judged(sheet)
    assert (verdict.conflict, verdict.minimal) == (("quota 1",), True)
    assert verdict.changes == ("quota 1 allows at most 1; with the other rules at least 2 are needed.",)


# -- the process ------------------------------------------------------------------------------------------------

SMALL = sheet_of([{"id": f"u{i}"} for i in range(4)], {"kind": "selection"}, [{"kind": "quota", "min": 2}])


def hard_text() -> str:
    """Return a sheet that nobody decides soon: seven columns of numbers, half of each to be met exactly."""
    digests = [hashlib.sha256(bytes([i])).digest() for i in range(60)]
    units = [{"id": f"u{i}"} | {f"n{k}": digest[k] for k in range(7)} for i, digest in enumerate(digests)]
    halves = {f"n{k}": sum(unit[f"n{k}"] for unit in units) // 2 for k in range(7)}
    rules = [{"kind": "total", "column": column, "min": half, "max": half} for column, half in halves.items()]
    return sheet_text(units, {"kind": "selection"}, rules)


HARD = read_sheet(hard_text(), "sheet.toml", no_files)


def test_a_verdict_from_another_process() -> None:
    verdict = diagnose(SMALL)
    assert verdict.state == "possible"
    assert verdict.witness is not None
    assert passing(SMALL.rules, verdict.witness[None]).all()
    assert verdict.seconds > 0
    assert not multiprocessing.active_children()


def test_undecided_in_time() -> None:
    began = time.monotonic()
    verdict = diagnose(HARD, seconds=3.0)
    assert (verdict.state, verdict.witness, verdict.conflict, verdict.changes) == ("unknown", None, (), ())
    assert time.monotonic() - began < 8
    assert not multiprocessing.active_children()


@pytest.mark.parametrize("delay", [0.0, 2.0])
def test_cancelling_ends_it_at_once(delay: float) -> None:
    began = time.monotonic()

    def tick() -> None:
        if time.monotonic() > began + delay:
            raise Cancelled("Stopped.")

    with pytest.raises(Cancelled):
        diagnose(HARD, tick=tick)
    assert time.monotonic() - began < delay + 1
    assert not multiprocessing.active_children()


def test_a_process_that_is_killed_decides_nothing() -> None:
    with Inquiry(HARD) as inquiry:
        assert inquiry.verdict() is None
        os.kill(multiprocessing.active_children()[0].pid or 0, signal.SIGKILL)
        verdict = inquiry.wait(lambda: None, 10)
        assert verdict.state == "unknown"
        assert inquiry.verdict() is not None, "it does not go on being asked"


def test_the_process_ends_with_its_parent(tmp_path: Path) -> None:
    (tmp_path / "hard.toml").write_text(hard_text())
    code = (
        "import multiprocessing, pathlib\n"
        "from core.feasibility import Inquiry\n"
        "from core.files import open_sheet\n"
        "if __name__ == '__main__':\n"
        "    inquiry = Inquiry(open_sheet(pathlib.Path('hard.toml'), allow_outside=False))\n"
        "    inquiry.verdict(2.0)\n"
        "    print(multiprocessing.active_children()[0].pid, flush=True)\n"
        "    inquiry.wait(lambda: None)\n"
    )
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    with subprocess.Popen(
        [sys.executable, "-c", code], cwd=tmp_path, env=environment, stdout=subprocess.PIPE
    ) as parent:
        assert parent.stdout is not None
        child = int(parent.stdout.readline())
        parent.kill()
    end = time.monotonic() + 10
    while _is_alive(child) and time.monotonic() < end:
        time.sleep(0.05)
    assert not _is_alive(child)


def _is_alive(process: int) -> bool:
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    stat = Path(f"/proc/{process}/stat")
    return not stat.exists() or stat.read_text().rsplit(")", 1)[1].split()[0] != "Z"


class Silent:
    """States nothing."""

    def __call__(self, model: Statement) -> None:
        pass


class Broken:
    """Cannot state anything."""

    def __call__(self, model: Statement) -> None:
        raise ZeroDivisionError("a mistake in a rule")


def stating(sheet: Sheet, state: Callable[[Statement], None]) -> Sheet:
    """Return the sheet, its first rule stating something else."""
    rule = copy.copy(sheet.rules[0])
    rule.state = state  # type: ignore[method-assign]
    return dataclasses.replace(sheet, rules=(rule, *sheet.rules[1:]))


def test_what_goes_wrong_there_is_raised_here() -> None:
    with pytest.raises(ZeroDivisionError, match="a mistake in a rule"):
        diagnose(stating(SMALL, Broken()))
    assert not multiprocessing.active_children()


def test_a_witness_that_a_check_refuses_is_none() -> None:
    verdict = judged(stating(SMALL, Silent()))
    assert (verdict.state, verdict.witness) == ("unknown", None)


def test_what_is_too_large_is_not_decided(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(feasibility, "MOST_CELLS", 3)
    assert judged(SMALL).state == "unknown"
    units = [{"id": f"u{i}", "n": 10**17} for i in range(40)]
    sheet = sheet_of(units, {"kind": "selection", "size": 3}, [{"kind": "total", "column": "n", "max": 10**17}])
    monkeypatch.undo()
    assert judged(sheet).state == "unknown"


def test_a_set_that_is_not_proved_is_not_named() -> None:
    """Whenever the time runs out, what is named conflicts."""
    told = next(told for told in CONTRADICTIONS if told.name == "no gap left to stand in")
    sheet = sheet_of(told.units, told.outcome, told.rules)
    for seconds in (0.02, 0.05, 0.1, 0.2):
        verdict = judged(sheet, seconds)
        assert verdict.state in ("impossible", "unknown")
        numbers = [number for number, rule in enumerate(sheet.rules) if rule.id in verdict.conflict]
        if verdict.state == "impossible":
            solver = Solver(stated(sheet.kind, sheet.rules), time.monotonic() + AMPLE)
            assert solver.solve(numbers)[0] == "impossible"
            assert not verdict.minimal or minimal(sheet, verdict.conflict)
        else:
            assert not numbers


# -- planning and drawing ---------------------------------------------------------------------------------------


def rare_sheet(folder: Path) -> Path:
    told = RARE[0]
    path = folder / "rare.toml"
    path.write_text(sheet_text(told.units, told.outcome, told.rules))
    return path


@pytest.fixture
def nothing_built_in(monkeypatch: pytest.MonkeyPatch) -> None:
    """Let planning build in nothing and accept nothing in its pilot."""
    monkeypatch.setattr(forecast, "make_plan", lambda sheet, **_: unbuilt(sheet))


def test_a_doubtful_plan_gets_a_verdict_and_stays_as_it_is(tmp_path: Path, nothing_built_in: None) -> None:
    sheet = open_sheet(rare_sheet(tmp_path), allow_outside=False)
    made, verdict = forecast.planned(sheet, 1, 4.0)
    assert made.plan.digest == unbuilt(sheet).plan.digest
    assert verdict is not None
    assert verdict.state == "possible"
    assert forecast.forecast(made, verdict)["verdict"] == "possible but rare: an outcome was found without drawing"
    assert forecast.forecast(made, Verdict("unknown"))["verdict"].startswith("not decided: ")


def test_a_plan_without_doubt_starts_no_process(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(feasibility, "start", None)
    made, verdict = forecast.planned(SMALL, 1, 4.0)
    assert verdict is None
    assert made.plan.digest == make_plan(SMALL).plan.digest
    assert forecast.forecast(made)["verdict"] == "possible"


def test_the_limit_tells_what_is_known(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path, plan = rare_sheet(tmp_path), tmp_path / "plan.json"
    plan.write_text(json.dumps(unbuilt(open_sheet(path, allow_outside=False)).plan.to_json()))
    wish = jobs.Wish(path, (("", "123"),), tmp_path / "drawn", plan=plan, limit=2000)
    with pytest.raises(TooRare) as caught:
        jobs.draw_to_files(wish)
    told = str(caught.value)
    assert "There is one: it was found without drawing." in told
    assert "rarer than 1 in 542" in told
    assert caught.value.bound == pytest.approx(0.00184, abs=1e-5)
    assert re.search(r"Lifting rule total 1 would help most: about \d(\.\d+)? % of the proposals", told)
    monkeypatch.setattr(jobs, "decided", lambda *_: Verdict("unknown"))
    with pytest.raises(TooRare, match="Whether there is one at all is not decided."):
        jobs.draw_to_files(dataclasses.replace(wish, folder=tmp_path / "again"))
    monkeypatch.setattr(jobs, "decided", lambda *_: None)
    with pytest.raises(TooRare, match="There are outcomes: the pilot accepted some."):
        jobs.draw_to_files(dataclasses.replace(wish, folder=tmp_path / "once more"))


def impossible_sheet(folder: Path) -> Path:
    path = folder / "impossible.toml"
    units = [{"id": f"u{i}", "n": i} for i in range(6)]
    rules = [{"kind": "total", "column": "n", "min": 12}, {"kind": "quota", "id": "two", "max": 2}]
    path.write_text(sheet_text(units, {"kind": "selection"}, rules))
    return path


TOLD = """No outcome is possible: these 2 rules cannot hold together.
total 1 needs at least 12 of n; with the other rules only 9 can be had.
two allows at most 2; with the other rules at least 3 are needed."""


@pytest.mark.parametrize(
    "job", ["plan", "freeze", "chances", "draw --seed 1 --to drawn", "draw --seed 1 --plan plan.json"]
)
def test_every_job_that_plans_refuses_what_is_impossible(
    job: str,
    nothing_built_in: None,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    """Also where planning itself has found nothing out: the plan is one that builds in nothing."""
    monkeypatch.chdir(tmp_path)
    path = impossible_sheet(tmp_path)
    plan = unbuilt(open_sheet(path, allow_outside=False)).plan
    (tmp_path / "plan.json").write_text(json.dumps(plan.to_json()))
    name, *options = job.split()
    assert main([name, path.name, *options]) == 3
    assert capsys.readouterr().err.startswith(TOLD)
    assert sorted(found.name for found in tmp_path.iterdir()) == ["impossible.toml", "plan.json"]


def test_long_planning_ends_when_it_is_proved_in_vain(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def endless(sheet: Sheet, *, tick: Callable[[], None], **_: object) -> Ready:
        for _ in itertools.count():
            time.sleep(0.02)
            tick()
        raise AssertionError

    monkeypatch.setattr(forecast, "make_plan", endless)
    began = time.monotonic()
    with pytest.raises(Infeasible) as caught:
        forecast.planned(open_sheet(impossible_sheet(tmp_path), allow_outside=False), 1, 4.0)
    assert str(caught.value) == TOLD
    assert caught.value.rules == ("total 1", "two")
    assert caught.value.minimal
    assert time.monotonic() - began < 10
    assert not multiprocessing.active_children()


def test_the_planners_own_proof_stands_where_there_is_no_time_to_explain(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(forecast, "EXPLAINING", 0.0)
    with pytest.raises(Infeasible) as caught:
        forecast.planned(open_sheet(impossible_sheet(tmp_path), allow_outside=False), 1, 4.0)
    assert str(caught.value) == TOLD.splitlines()[0]


def test_of_two_proofs_the_smaller_one_is_told(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """What another process has found so far may name more rules than planning itself; then planning is believed."""
    verdict = Verdict("impossible", conflict=("total 1", "two"), minimal=False)
    monkeypatch.setattr(Inquiry, "wait", lambda *_: verdict)
    sheet = open_sheet(impossible_sheet(tmp_path), allow_outside=False)
    for rules, unsure in ((("total 1", "two"), False), (("total 1", "two", "a third"), True)):
        monkeypatch.setattr(forecast, "make_plan", Proving(rules))
        with pytest.raises(Infeasible) as caught:
            forecast.planned(sheet, 1, 4.0)
        assert caught.value.rules == ("total 1", "two")
        assert ("Perhaps not all of them are needed" in str(caught.value)) == unsure


@dataclasses.dataclass
class Proving:
    """A planner that finds everything impossible."""

    rules: tuple[str, ...]

    def __call__(self, *_: object, **__: object) -> Ready:
        raise Infeasible("No outcome is possible.", self.rules, self.rules)


def test_two_proofs_that_contradict_each_other_are_a_mistake_of_the_program(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(forecast, "make_plan", Proving(("quota 1",)))
    with pytest.raises(RuntimeError, match="proved impossible what is possible"):
        forecast.planned(SMALL, 1, 4.0)


def test_a_conflict_that_may_be_smaller_says_so(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr(Inquiry, "wait", lambda *_: Verdict("impossible", conflict=("total 1", "two"), minimal=False))
    monkeypatch.setattr(forecast, "make_plan", Proving(("total 1", "two", "a third")))
    assert main(["plan", str(impossible_sheet(tmp_path))]) == 3
    told = capsys.readouterr().err
    assert "Perhaps not all of them are needed for that" in told
    assert "Each of them could stay" not in told
