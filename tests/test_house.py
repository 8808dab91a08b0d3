"""The house itself: import contracts hold and bark, README and .ci/run say the same, nothing stands at the top that should not."""

import shutil
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
TOP = {"README.md", "DEVELOPERS.md", "LICENSE", "pyproject.toml", "core", "gui", "tests", "scenarios"}


def contracts(folder: Path) -> subprocess.CompletedProcess[str]:
    linter = Path(sys.executable).with_name("lint-imports")
    return subprocess.run([linter, "--no-cache"], cwd=folder, capture_output=True, text=True, check=False)


def test_contracts_hold() -> None:
    done = contracts(ROOT)
    assert done.returncode == 0, done.stdout


@pytest.mark.parametrize(
    ("file", "line"),
    [
        ("core/rules/quota.py", "from core import engine"),
        ("core/rules/quota.py", "from core.rules import total"),
        ("core/kinds/order.py", "from core.kinds import pairing"),
        ("core/kinds/order.py", "import core.supersets"),
        ("core/supersets/diagram.py", "import core.planner"),
        ("core/planner.py", "import core.engine"),
        ("core/planner.py", "import core.feasibility"),
        ("core/feasibility.py", "import ortools"),
        ("core/record.py", "import core.files"),
        ("core/jobs.py", "import gui"),
        ("core/stream.py", "import PySide6"),
        ("core/sceptic.py", "from core.rules import quota"),
        ("core/helpers.py", "VALUE = 1"),
    ],
)
def test_planted_breach_barks(tmp_path: Path, file: str, line: str) -> None:
    for name in ("core", "gui"):
        shutil.copytree(ROOT / name, tmp_path / name, ignore=shutil.ignore_patterns("__pycache__"))
    shutil.copy(ROOT / "pyproject.toml", tmp_path)
    target = tmp_path / file
    with target.open("a") as source:
        source.write(f"\n{line}\n")
    assert contracts(tmp_path).returncode != 0


def test_core_runs_without_a_window() -> None:
    code = (
        "import pkgutil, sys, importlib, core\n"
        "for found in pkgutil.walk_packages(core.__path__, 'core.'):\n"
        "    importlib.import_module(found.name)\n"
        "sys.exit(any('PySide' in name or name == 'gui' for name in sys.modules))"
    )
    assert subprocess.run([sys.executable, "-c", code], cwd=ROOT, check=False).returncode == 0


def test_ci_ends_with_the_test_command_of_the_readme() -> None:
    blocks = (ROOT / "README.md").read_text().split("```sh\n")
    command = blocks[2].split("\n```")[0]
    assert command.count("\n") == 0
    assert (ROOT / ".ci/run").read_text().splitlines()[-1] == command
    assert blocks[1].split("\n```")[0].count("\n") == 0


def test_top_level() -> None:
    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=False)
    if listed.returncode:
        pytest.skip("not a git checkout")
    tops = {name.split("/")[0] for name in listed.stdout.splitlines()}
    assert {name for name in tops if not name.startswith(".")} <= TOP
