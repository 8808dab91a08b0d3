"""The command line: every job on a copy of a scenario, its exit codes, its JSON, and where it speaks."""

from __future__ import annotations

import csv
import json
import os
import re
import shutil
import subprocess
import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from core.__main__ import _Face, main
from core.engine import Progress

ROOT = Path(__file__).parents[2]
JOBS = ("plan", "draw", "chances", "check", "freeze", "verify", "explain")
SEED = ("--seed", "4 0 7 1 9")
BIG = 1 << 53


@dataclass(frozen=True)
class Said:
    """What a call said."""

    code: int
    out: str
    err: str

    @property
    def json(self) -> Any:
        """What stands on stdout, as JSON."""
        return json.loads(self.out)


Run = Callable[..., Said]


@pytest.fixture
def run(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Run:
    """Return a function that makes a call in a copy of a scenario; the first call chooses it."""

    def call(*words: str, scenario: str = "science_fair") -> Said:
        folder = tmp_path / "case"
        if not folder.exists():
            shutil.copytree(ROOT / "scenarios" / scenario, folder)
            monkeypatch.chdir(folder)
        code = main(words)
        out, err = capsys.readouterr()
        return Said(code, out, err)

    return call


def is_size(value: object) -> bool:
    """Return whether a number of outcomes is written as the description of the JSON says."""
    return (isinstance(value, int) and value <= BIG) or (isinstance(value, str) and int(value) > BIG)


def holds_forecast(told: dict[str, Any]) -> None:
    assert set(told) >= {"superset", "built_in", "checked", "pilot", "acceptance", "admissible", "verdict"}
    assert isinstance(told["superset"]["words"], list)
    assert is_size(told["superset"]["size"])
    assert set(told["pilot"]) >= {"proposals", "accepted"}
    low, estimate, high = (told["acceptance"][key] for key in ("low", "estimate", "high"))
    assert 0 <= low <= estimate <= high <= 1
    size = told["admissible"]
    assert set(size) == ({"exact", "size"} if size["exact"] else {"exact", "estimate", "low", "high"})
    assert all(is_size(value) for key, value in size.items() if key != "exact")


# --- the jobs ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("scenario", ["science_fair", "peer_reviews"])
def test_plan(scenario: str, run: Run) -> None:
    said = run("plan", "sheet.toml", "--json", scenario=scenario)
    assert (said.code, said.err) == (0, "")
    holds_forecast(said.json)


@pytest.mark.parametrize(("units", "size"), [(53, BIG), (54, str(2 * BIG))])
def test_sizes_beyond_what_json_readers_keep_are_text(units: int, size: object, tmp_path: Path, capsys: Any) -> None:
    listed = ", ".join(f'{{id = "{number}"}}' for number in range(units))
    path = tmp_path / "sheet.toml"
    path.write_text(f'format = 1\nframe = {{units = [{listed}]}}\noutcome = {{kind = "selection"}}\n')
    assert main(["plan", str(path), "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    holds_forecast(told)
    assert told["superset"]["size"] == told["admissible"]["size"] == size


def test_plan_in_words(run: Run) -> None:
    said = run("plan", "sheet.toml", "--to", "plan.json", scenario="peer_reviews")
    assert (said.code, said.err) == (0, "")
    lines = said.out.splitlines()
    assert lines[:2] == ["Peer reviews, this year's pairs", "24 units are joined in 12 pairs."]
    assert any(
        re.match(r"  near_level \((built in|checked)\): The two of each pair differ in level by at most 1\.", x)
        for x in lines
    )
    assert any(line.startswith("Admissible outcomes: ") for line in lines)
    assert lines[-1] == f"Plan digest: {run('plan', 'sheet.toml', '--json').json['plan_digest']}"
    assert json.loads(Path("plan.json").read_text())["outcomes"] == 1


def test_plan_tells_rules_that_are_off(run: Run) -> None:
    run("explain")
    path = Path("sheet.toml")
    path.write_text(path.read_text().replace('id = "guest"', 'id = "guest"\noff = true'))
    said = run("plan", "sheet.toml")
    assert "  guest (switched off): These are fixed: t10 at position 6.\n" in said.out


def test_notices_go_to_stderr(run: Run) -> None:
    run("explain")
    with Path("sheet.toml").open("a") as file:
        file.write('[[rule]]\nkind = "run"\nalike = "theme"\nmax = 9\n')
    said = run("plan", "sheet.toml")
    assert said.err == "Note: [[rule]] 5 (run): this run always holds: no more units than that are alike.\n"
    assert "Note" not in said.out


def test_draw_check_and_verify(run: Run) -> None:
    said = run("draw", "sheet.toml", *SEED, "--outcomes", "3", "--json")
    assert (said.code, said.err) == (0, "")
    told = said.json
    holds_forecast(told)
    assert set(told["ledger"]) >= {"proposed", "accepted", "rules"}
    assert all(set(rule) >= {"id", "first", "any", "alone"} for rule in told["ledger"]["rules"])
    assert told["ledger"]["accepted"] == 3
    assert (told["outcomes_file"], told["record"]) == ("drawn/outcomes.csv", "drawn/record.json")
    assert Path("drawn/outcomes.csv").read_text().startswith("outcome,unit,position\n1,")

    said = run("check", "sheet.toml", "drawn/outcomes.csv", "--json")
    assert said.code == 0
    assert {(rule["id"], rule["holds"]) for rule in said.json["rules"]} == {
        (id, True) for id in ("themes_change", "builds_on", "guest", "not_first")
    }
    assert all(rule["words"].endswith(".") for rule in said.json["rules"])

    said = run("verify", "drawn/record.json", "--json")
    assert said.code == 0
    assert said.json["verified"] is True
    assert said.json["outcomes"] == 3
    said = run("verify", "drawn/record.json", "--independent", "--json")
    assert said.code == 0
    assert said.json["verified"] is True
    assert all(set(finding) == {"part", "outcome", "holds", "words"} for finding in said.json["findings"])
    assert run("verify", "drawn/record.json").out.startswith("Verified: ")
    assert "BROKEN" not in run("verify", "drawn/record.json", "--independent").out


def test_draw_in_words(run: Run) -> None:
    said = run("draw", "sheet.toml", *SEED, "--to", "result", scenario="peer_reviews")
    assert (said.code, said.err) == (0, "")
    for words in (
        "Outcome (unit, partner)\n",
        "Proposals: ",
        "Admissible outcomes: ",
        "Cautions\n",
        "Outcomes: result/outcomes.csv\n",
        "Record: result/record.json\n",
    ):
        assert words in said.out
    assert sorted(path.name for path in Path("result").iterdir()) == ["outcomes.csv", "record.json"]
    drawn = Path("result/outcomes.csv").read_text().splitlines()[1:]
    assert all(f"  {' '.join(line.split(',')[1:])}\n" in said.out for line in drawn)


def test_the_same_seed_gives_the_same_outcome(run: Run) -> None:
    for folder, seed in (("a", "one"), ("b", "one"), ("c", "two")):
        assert run("draw", "sheet.toml", "--seed", seed, "--to", folder).code == 0
    one, again, other = (Path(folder, "outcomes.csv").read_bytes() for folder in "abc")
    assert one == again != other


def test_check_names_the_broken_rule_with_its_figure(run: Run) -> None:
    assert run("draw", "sheet.toml", *SEED, scenario="audit_vouchers").code == 0
    lines = Path("drawn/outcomes.csv").read_text().splitlines()
    drawn = {line.split(",")[1] for line in lines[1:]}
    listed = {row["voucher"]: row for row in csv.DictReader(Path("vouchers.csv").read_text().splitlines())}
    alike = [unit for unit, row in listed.items() if row["risk"] == listed["v0147"]["risk"]]
    spare = next(unit for unit in alike if unit not in drawn and unit != "v0063")
    assert {"v0001", "v0147"} <= drawn
    Path("outcome.csv").write_text("\n".join(lines).replace("v0147", spare) + "\n")
    said = run("check", "sheet.toml", "outcome.csv")
    assert said.code == 1
    broken = [line for line in said.out.splitlines() if line.startswith("BROKEN")]
    assert "BROKEN key_items: v0001 and v0147 are certainly drawn." in broken
    assert re.search(r"^(holds  |BROKEN )covered_amount: .* Found: \d+\.\d\d\.$", said.out, re.MULTILINE)
    assert re.search(
        r"^holds  risk_high: Between 8 and 12 units with risk high are drawn\. Found: \d+\.$", said.out, re.MULTILINE
    )
    assert re.search(rf"^{len(broken)} of 8 do(es)? not hold\.$", said.out, re.MULTILINE)

    told = run("check", "sheet.toml", "outcome.csv", "--json")
    assert told.code == 1
    assert [rule["id"] for rule in told.json["rules"] if not rule["holds"]] == [
        line.split()[1].rstrip(":") for line in broken
    ]


def test_check_of_several_outcomes_says_which(run: Run) -> None:
    run("draw", "sheet.toml", *SEED, "--outcomes", "2")
    text = Path("drawn/outcomes.csv").read_text()
    Path("outcome.csv").write_text(re.sub(r"^2,(\w+),12$", r"2,\1,11", text, flags=re.MULTILINE))
    said = run("check", "sheet.toml", "outcome.csv")
    assert said.code == 1
    assert "BROKEN outcome 2, order: Not an outcome: position 11 is taken twice.\n" in said.out
    assert said.out.count("holds  outcome 1, ") == 4


def test_chances(run: Run) -> None:
    said = run("chances", "sheet.toml", "--cells", "--pairs", "--json", scenario="peer_reviews")
    assert (said.code, said.err) == (0, "")
    told = said.json
    assert len(told["units"]) == 24
    for group, keys in (("units", {"id"}), ("cells", {"unit", "with"}), ("pairs", {"units"})):
        for chance in told[group]:
            assert set(chance) == {"chance", "exact", "low", "high"} | keys
            assert chance["low"] <= chance["chance"] <= chance["high"]
    assert run("chances", "sheet.toml").out.startswith("Peer reviews, this year's pairs\n")


def test_freeze_and_draw(run: Run) -> None:
    said = run("freeze", "sheet.toml", "--outcomes", "2", "--json")
    assert (said.code, said.err) == (0, "")
    assert re.fullmatch(r"[0-9a-f]{64}", said.json["digest"])
    assert said.json["readable"].replace(" ", "") == said.json["digest"][:16]
    assert said.json["entry"] == 1
    said = run("draw", "sheet.toml", *SEED)
    assert said.code == 0
    assert "Draw 1 of 1 from the draw book" in said.out
    assert run("draw", "sheet.toml", "--seed", "again", "--to", "second").code == 2, "a second draw needs a reason"
    said = run("draw", "sheet.toml", "--seed", "again", "--to", "second", "--reason", "the dice rolled off the table")
    assert said.code == 0
    assert "Draw 2 of 2 from the draw book" in said.out
    assert run("verify", "second/record.json").code == 0


def test_freeze_in_words(run: Run) -> None:
    out = run("freeze", "sheet.toml", scenario="peer_reviews").out
    assert re.search(r"^Digest: [0-9a-f]{64}$", out, re.MULTILINE)
    assert re.search(r"^To read aloud: ([0-9a-f]{4} ){3}[0-9a-f]{4}$", out, re.MULTILINE)


def test_an_impossible_sheet(run: Run) -> None:
    run("explain")
    with Path("sheet.toml").open("a") as file:
        file.write('[[rule]]\nid = "late"\nkind = "bar"\nunits = ["t10"]\nin = [6]\n')
    said = run("draw", "sheet.toml", *SEED)
    assert (said.code, said.out) == (3, "")
    assert said.err.startswith("No outcome is possible")
    assert "  late: t10 is not at position 6.\n" in said.err
    assert not Path("drawn").exists()


def test_a_changed_record(run: Run) -> None:
    run("draw", "sheet.toml", *SEED)
    path = Path("drawn/outcomes.csv")
    path.write_text(path.read_text().replace(",1\n", ",01\n", 1))
    said = run("verify", "drawn/record.json")
    assert (said.code, said.out) == (5, "")
    assert "outcomes.csv differs" in said.err
    said = run("verify", "drawn/record.json", "--independent")
    assert said.code == 5
    assert re.search(r"^BROKEN ", said.out, re.MULTILINE)


def test_explain(run: Run) -> None:
    assert run("explain", "quota").out.startswith("quota (rule)\n")
    assert run("explain").out.startswith("Kinds of outcome\n")
    assert run("explain", "quota", "--json").json == {"text": run("explain", "quota").out.rstrip("\n")}


# --- how it speaks ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("job", JOBS)
def test_help_of_each_job_has_an_example(job: str, capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as caught:
        main([job, "--help"])
    assert caught.value.code == 0
    out = capsys.readouterr().out
    assert f"Example: lotwright {job}" in " ".join(out.split())
    assert out.startswith(f"usage: lotwright {job} ")


@pytest.mark.parametrize("words", [[], ["--help"], ["-h"]])
def test_help(words: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as caught:
        main(words)
    assert caught.value.code == 0
    out = capsys.readouterr().out
    assert all(f"    {job} " in out for job in JOBS)
    assert "Example: lotwright " in out


@pytest.mark.parametrize("job", JOBS)
def test_the_example_of_each_job_is_a_call(job: str, capsys: pytest.CaptureFixture[str], run: Run) -> None:
    with pytest.raises(SystemExit):
        main([job, "--help"])
    example = " ".join(capsys.readouterr().out.split()).split("Example: lotwright ")[1]
    run("explain")
    if job in ("check", "verify"):
        run("draw", "sheet.toml", *SEED)
        shutil.copy("drawn/outcomes.csv", "outcome.csv")
    words = [word.strip("'") for word in re.findall(r"'[^']*'|\S+", example)]
    assert run(*words).code == 0


def test_as_a_module(tmp_path: Path) -> None:
    shutil.copytree(ROOT / "scenarios/peer_reviews", tmp_path / "case")
    done = subprocess.run(
        [sys.executable, "-m", "core", "draw", "sheet.toml", *SEED],
        cwd=tmp_path / "case",
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True,
        text=True,
        check=False,
    )
    assert (done.returncode, done.stderr) == (0, "")
    assert "Record: drawn/record.json\n" in done.stdout


def test_signs_that_the_terminal_cannot_show(tmp_path: Path) -> None:
    (tmp_path / "sheet.toml").write_text(
        'format = 1\nframe = {units = [{id = "\u00e9"}, {id = "\u4e2d"}]}\noutcome = {kind = "order"}\n',
        encoding="utf-8",
    )
    env = {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONIOENCODING": "ascii", "PYTHONUTF8": "0"}

    def said(*words: str) -> str:
        call = [sys.executable, "-m", "core", "chances", "sheet.toml", *words]
        return subprocess.run(call, cwd=tmp_path, env=env, capture_output=True, text=True, check=True).stdout

    assert "\\xe9" in said()
    assert [unit["id"] for unit in json.loads(said("--json"))["units"]] == ["\u00e9", "\u4e2d"]


@pytest.mark.parametrize("bar", [False, True])
def test_progress_goes_to_stderr(
    bar: bool, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    clock = [100.0]
    monkeypatch.setattr("core.__main__.time.monotonic", lambda: clock[0])
    face = _Face()
    face._bar = bar
    for accepted in range(0, 101, 10):
        face.progress(Progress(proposed=accepted * 2 + 1, accepted=accepted, wanted=100))
        clock[0] += 0.3
    out, err = capsys.readouterr()
    assert out == ""
    told = err.replace("\r", "\n").split("\n")
    assert len([line for line in told if line]) == (9 if bar else 2)
    assert "20 of 100 outcomes, 41 proposals, about 2 s left" in told[1 if bar else 0]
    assert err.startswith("\r####") == bar
