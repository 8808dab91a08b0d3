"""Rules built in for some states only: no admissible outcome is lost, none comes twice, all have the same chance."""

import itertools
import sys

import numpy as np
import pytest

from core.sheet import Sheet
from core.supersets import arrangements, superset
from core.supersets.diagram import Diagram, OverBudget
from tests.core.test_superset_contract import FRAMES, RULES, Row, _label, _sheet
from tests.tools import admissible, is_bijection, is_uniform, keys_of, law_of, passing, universe

WIDTHS = (1, 2, 5, 20)
# rules held by parts: the others (cells, automata) are built in as a whole or not at all
ALONG = [(frame, rule) for frame in FRAMES for rule in RULES[frame] if _sheet(frame, rule).rules[0].counts_along()]
PAIRS = [
    pytest.param(frame, pair, id=f"{frame}: {' then '.join(map(_label, pair))}")
    for frame in FRAMES
    for pair in itertools.permutations(RULES[frame], 2)
    if (RULES[frame].index(pair[0]) + RULES[frame].index(pair[1])) % 5 == 0 and (frame, pair[1]) in ALONG
]


def held(diagram: Diagram) -> set[bytes]:
    """Return the outcomes of a diagram, listed by their numbers."""
    return set(keys_of(np.array([diagram.unrank(index) for index in range(diagram.size)])))


def is_sound(sheet: Sheet, diagram: Diagram, least: set[bytes], most: set[bytes]) -> bool:
    """All of `least` and nothing outside `most`, each once, all with the same chance."""
    found = held(diagram)
    return least <= found <= most and is_bijection(diagram, found) and is_uniform(law_of(diagram), found)


@pytest.mark.parametrize("width", WIDTHS)
@pytest.mark.parametrize(("frame", "rule"), ALONG, ids=[f"{frame}: {_label(rule)}" for frame, rule in ALONG])
def test_one_rule_partly(frame: str, rule: Row, width: int) -> None:
    sheet = _sheet(frame, rule)
    least, most = admissible(sheet), set(keys_of(universe(sheet.kind)))
    arrangement = arrangements(sheet.kind)[0]
    diagram = superset(sheet.kind, [], arrangement, partly=[(sheet.rules[0], width)], budget=10**6)
    assert is_sound(sheet, diagram, least, most)
    if not diagram.forgetful:
        assert held(diagram) == least


@pytest.mark.parametrize(("frame", "rules"), PAIRS)
def test_one_rule_built_in_another_partly(frame: str, rules: tuple[Row, ...]) -> None:
    sheet = _sheet(frame, *rules)
    whole, part = sheet.rules
    rows = universe(sheet.kind)
    least, most = admissible(sheet), set(keys_of(rows[passing([whole], rows)]))
    for arrangement in arrangements(sheet.kind):
        for width in (1, 3, 10**6):
            diagram = superset(sheet.kind, [whole], arrangement, partly=[(part, width)], budget=10**6)
            if diagram.is_empty:
                assert not least
                continue
            assert is_sound(sheet, diagram, least, most)
            if width == 10**6:
                assert diagram.size == len(least), "an unlimited width forgets nothing"


@pytest.mark.parametrize("frame", FRAMES)
def test_two_rules_partly(frame: str) -> None:
    along = [rule for name, rule in ALONG if name == frame]
    for first, second in zip(along, along[1:], strict=False):
        sheet = _sheet(frame, first, second)
        partly = [(rule, 3) for rule in sheet.rules]
        diagram = superset(sheet.kind, [], arrangements(sheet.kind)[-1], partly=partly, budget=10**6)
        if diagram.is_empty:
            assert not admissible(sheet)
        else:
            assert is_sound(sheet, diagram, admissible(sheet), set(keys_of(universe(sheet.kind))))


def test_forgetting_that_drops_is_caught(monkeypatch: pytest.MonkeyPatch) -> None:
    """A twin that lets a node that has forgotten die as if it remembered."""
    caught = 0
    monkeypatch.setattr(
        sys.modules["core.supersets.refine"],
        "_remembering",
        lambda forgotten, rest, fine: (
            np.concatenate([forgotten[None], rest]),
            np.ones(rest.shape[1], bool) if fine is None else fine,
        ),
    )
    for frame, rule in ALONG:
        sheet = _sheet(frame, rule)
        arrangement = arrangements(sheet.kind)[0]
        diagram = superset(sheet.kind, [], arrangement, partly=[(sheet.rules[0], 1)], budget=10**6)
        most = set(keys_of(universe(sheet.kind)))
        caught += diagram.is_empty or not is_sound(sheet, diagram, admissible(sheet), most)
    assert caught > 10


def test_budget_is_held() -> None:
    sheet = _sheet("selection", RULES["selection"][0])
    with pytest.raises(OverBudget):
        superset(sheet.kind, [], "list", partly=[(sheet.rules[0], 5)], budget=3)
