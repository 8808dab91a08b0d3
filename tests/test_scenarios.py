"""Every shipped scenario: its expected figures, its whole job from freeze to verify, and its sealed record."""

import json
import shutil
from fractions import Fraction
from pathlib import Path

import pytest

from core import jobs
from core.files import open_sheet
from core.forecast import forecast
from core.planner import make_plan
from core.sceptic import examine
from core.supersets import superset

ROOT = Path(__file__).parents[1]
CASES = sorted(path.parent.name for path in (ROOT / "scenarios").glob("*/sheet.toml"))
GOLDEN = ROOT / "tests" / "golden"
SEED = (("", "3 1 4 1 5 9 2 6 5 3 5 8 9 7 9 3 2 3 8 4"),)
# what differs from run to run, by nature
PASSING = ("program", "digests", "digest")


def expected(case: str) -> dict:
    return json.loads((ROOT / "scenarios" / case / "expected.json").read_text())


@pytest.mark.parametrize("case", CASES)
def test_expected_figures(case: str) -> None:
    """Sizes that a separate program found by its own counting (standard library, not part of this project)."""
    sheet = open_sheet(ROOT / "scenarios" / case / "sheet.toml")
    figures = expected(case)
    assert sheet.frame.size == figures["units"]
    assert not sheet.notices
    for name, size in figures["sizes"].items():
        built_in = [rule for rule in sheet.rules if rule.id in figures["sets"][name]]
        diagram = superset(sheet.kind, built_in, figures["arrangement"], budget=10**7)
        assert str(diagram.size) == size, name
    ready = make_plan(sheet)
    told = forecast(ready)["admissible"]
    low, high = (Fraction(bound) for bound in figures["admissible"])
    if told["exact"]:
        assert low <= int(told["size"]) <= high
    else:
        assert int(told["low"]) <= high
        assert int(told["high"]) >= low


@pytest.mark.parametrize("case", CASES)
def test_whole_job(case: str, tmp_path: Path) -> None:
    folder = tmp_path / case
    shutil.copytree(ROOT / "scenarios" / case, folder)
    jobs.freeze(folder / "sheet.toml")
    result = jobs.draw_to_files(jobs.Wish(folder / "sheet.toml", SEED, tmp_path / "drawn"))
    assert jobs.verify(result.record_file)["verified"]
    assert all(finding.holds for finding in examine(result.record_file))
    assert all(item["holds"] for item in jobs.check(folder / "sheet.toml", result.outcomes_file))
    assert result.record["draw"]["number"] == 1
    assert any("judgement" in caution for caution in result.record["cautions"])


@pytest.mark.parametrize("case", CASES)
def test_sealed_record_replays(case: str, request: pytest.FixtureRequest, tmp_path: Path) -> None:
    """The record made once, kept in tests/golden, still replays byte for byte; rewritten only by --update-golden."""
    sheet = ROOT / "scenarios" / case / "sheet.toml"
    if request.config.getoption("--update-golden"):
        shutil.rmtree(GOLDEN / case, ignore_errors=True)
        jobs.draw_to_files(jobs.Wish(sheet, SEED, GOLDEN / case, outcomes=3))
    assert jobs.verify(GOLDEN / case / "record.json", sheet_path=sheet)["verified"]
    assert all(finding.holds for finding in examine(GOLDEN / case / "record.json", sheet))
    for workers in (1, 2):
        again = jobs.draw_to_files(jobs.Wish(sheet, SEED, tmp_path / f"{workers}", outcomes=3, workers=workers))
        kept = json.loads((GOLDEN / case / "record.json").read_text())
        assert again.outcomes_file.read_bytes() == (GOLDEN / case / "outcomes.csv").read_bytes()
        for part in set(kept) - set(PASSING) - {"sheet", "draw"}:
            assert again.record[part] == kept[part], part
