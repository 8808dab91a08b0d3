"""What every rule promises, put to each case of each known rule; and saboteurs that break one promise each.

The promises are functions that raise AssertionError, so that a sabotaged rule can be put to all of them: each saboteur
must be caught by exactly the promise that it breaks. A new rule needs no change here: its `cases` are taken up.
"""

from __future__ import annotations

import copy
import pickle
import re
import tomllib
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import core.sheet  # noqa: F401 - registers all kinds and rules
from core.kinds import Members, OutcomeKind
from core.parts import Columns, Count, Event, Mask, Part, UnitAutomaton
from core.process import Rows
from core.rules import Case, Rule
from core.sceptic import check_outcomes
from core.sheet import Sheet
from tests.tools import Key, diagrams, is_bijection, key_of, keys_of, sheet_of, sheet_text, universe


@dataclass
class Stated:
    """A case as a sheet of one rule, with the universe of its kind; `rule` may be a saboteur."""

    case: Case
    sheet: Sheet
    rule: Rule
    rows: Rows

    @classmethod
    def of(cls, case: Case, name: str) -> Stated:
        sheet = sheet_of(case.units, case.outcome, [{"kind": name, **case.rule}])
        return cls(case, sheet, sheet.rules[0], universe(sheet.kind))

    def passed(self) -> set[Key]:
        return set(keys_of(self.rows[self.rule.check(self.rows)]))


_UNITS = tuple({"id": f"u{i}", "h": f"{i}.5", "days": i % 2} for i in range(3))
_SLOTS = {"kind": "roster", "slots": [{"id": "s", "need": 1}, {"id": "t", "need": 2}]}
_PLACES = {"kind": "assignment", "places": [{"id": "p", "need": 1}, {"id": "q", "need": 0}]}
# what the rules' own cases leave out: bounds that differ from place to place
MORE = {
    "quota": [
        Case(_UNITS, _SLOTS, {"per": "slot", "min": {"column": "need"}, "max": {"column": "need"}}),
        Case(_UNITS, _PLACES, {"per": "place", "min": {"column": "need"}}),
    ],
    "total": [Case(_UNITS, _SLOTS, {"column": "h", "per": "slot", "min": {"column": "need"}})],
    "load": [Case(_UNITS, _SLOTS, {"min": {"column": "days"}, "max": 1, "where": {"h": {"min": 1}}})],
}
CASES = [
    pytest.param(name, case, id=f"{name}-{case.outcome['kind']}-{number}")
    for name, rule in sorted(Rule.known.items())
    for number, case in enumerate([*rule.cases(), *MORE.get(name, [])])
]

# --- the promises --------------------------------------------------------------------------------------------


def passes_some_and_fails_some(stated: Stated) -> None:
    verdict = stated.rule.check(stated.rows)
    assert verdict.any(), "no outcome passes"
    assert not verdict.all(), "every outcome passes"


def judges_each_row_alone(stated: Stated) -> None:
    rule, rows = stated.rule, stated.rows
    untouched = rows.copy()
    verdict = rule.check(rows)
    assert verdict.shape == (len(rows),)
    assert verdict.dtype == bool
    assert rule.check(rows[:0]).shape == (0,), "an empty batch has an empty verdict"
    assert [bool(rule.check(row[None])[0]) for row in rows] == verdict.tolist(), "a row alone is judged otherwise"
    # a fixed order that brings every row into other company: multiples of a number prime to the length
    step = next(s for s in range(len(rows) // 2 + 1, 2 * len(rows) + 2) if np.gcd(s, len(rows)) == 1)
    shuffled = np.arange(len(rows)) * step % len(rows)
    for other in (np.arange(len(rows))[::-1], shuffled, np.repeat(shuffled, 2), shuffled[: len(rows) // 2]):
        assert (rule.check(rows[other]) == verdict[other]).all(), "other company, another verdict"
    assert (rows == untouched).all(), "a check must not change what it looks at"


def builds_in_what_it_checks(stated: Stated) -> None:
    """Hold what is built in against the check; a rule that can only be checked leaves the whole universe."""
    rule = stated.rule
    unbuilt = rule.cells() is None and rule.automaton() is None and rule.parts(_alone(stated.sheet.kind)) is None
    expected = set(keys_of(stated.rows)) if unbuilt else stated.passed()
    for arrangement, diagram in diagrams(stated.sheet, [rule]):
        assert diagram.size == len(expected), f"{arrangement}: {diagram.size} outcomes, not {len(expected)}"
        assert is_bijection(diagram, expected), f"{arrangement}: no bijection onto what the check passes"


def ranks_nothing_else(stated: Stated) -> None:
    for arrangement, diagram in diagrams(stated.sheet, [stated.rule]):
        inside = {key_of(diagram.unrank(index)) for index in range(diagram.size)}
        for row in stated.rows:
            if key_of(row) in inside:
                continue
            with pytest.raises(ValueError, match="this outcome"):
                raise AssertionError(f"{arrangement}: {row.tolist()} has the rank {diagram.rank(row)}")


def says_sentences(stated: Stated) -> None:
    words = stated.rule.words()
    ids = sorted(stated.sheet.frame.ids, key=len, reverse=True)
    assert words[0].isupper() or words.startswith(tuple(ids)), f"begins neither with a capital nor with an id: {words}"
    assert words.endswith("."), f"does not end as a sentence: {words}"
    assert not re.search(r"[{}]|None|  |\n|\.\.|\bnan\b|array|\[", words), f"unfinished words: {words}"
    assert words == words.strip()
    for row in (stated.rows[0], stated.rows[-1]):
        figure = stated.rule.figure(row)
        assert isinstance(figure, str)
        assert not re.search(r"[{}]|None|array|\[", figure), f"an unfinished figure: {figure}"
    assert isinstance(stated.rule.effort(), int)
    assert stated.rule.effort() >= 1


def spells_names_as_given(stated: Stated) -> None:
    """All names of the case are written as ZxxxZ: words may not show them in another case of letters."""
    renamed = Stated.of(_renamed(stated.case), stated.rule.name)
    told = renamed.rule.words() + " " + renamed.rule.figure(renamed.rows[0])
    assert re.findall(r"z\w+?z", told.lower()) == [found.lower() for found in re.findall(r"Z\w+?Z", told)], told


def travels(stated: Stated) -> None:
    """Worker processes get rules by pickle."""
    other = pickle.loads(pickle.dumps(stated.rule))
    assert (other.check(stated.rows) == stated.rule.check(stated.rows)).all()
    assert other.words() == stated.rule.words()


def second_implementation_agrees(stated: Stated) -> None:
    kind, case = stated.sheet.kind, stated.case
    text = sheet_text(case.units, case.outcome, [{"kind": stated.rule.name, **case.rule}])
    header = ("unit", "partner") if kind.name == "pairing" else kind.header
    for row, passed in zip(stated.rows, stated.rule.check(stated.rows).tolist(), strict=True):
        lines = [dict(zip(header, line, strict=True)) for line in kind.lines(row, stated.sheet.frame.ids)]
        of_kind, of_rule = check_outcomes(text, Path(), [lines])
        assert of_kind.holds, of_kind.words
        assert of_rule.holds == passed, f"{row.tolist()}: {of_rule.words}"


PROMISES = (
    passes_some_and_fails_some,
    judges_each_row_alone,
    builds_in_what_it_checks,
    ranks_nothing_else,
    says_sentences,
    spells_names_as_given,
    travels,
    second_implementation_agrees,
)


def _alone(kind: OutcomeKind) -> Members:
    return [np.array([unit]) for unit in range(kind.units)]


def _renamed(case: Case) -> Case:
    """Return the case with every id, column and value of the lists written as ZxxxZ."""
    kept = {"id", "min", "max", "need", "kind"}
    lists = [*case.units, *(p for key in ("places", "slots") for p in case.outcome.get(key, []))]
    words = {
        word
        for item in lists
        for word in ([*item, *item.values()] if isinstance(item, Mapping) else [item])
        if isinstance(word, str) and word and not re.fullmatch(r"-?[\d.]+", word)
    } - kept

    def told(value: Any) -> Any:
        if isinstance(value, Mapping):
            return {told(key): told(item) for key, item in value.items()}
        if isinstance(value, list | tuple):
            return [told(item) for item in value]
        return f"Z{value}Z" if isinstance(value, str) and value in words else value

    outcome = {
        key: told(value) if key in ("places", "slots", "sides") else value for key, value in case.outcome.items()
    }
    rule = {key: told(value) for key, value in case.rule.items()}
    return Case(tuple(told(unit) for unit in case.units), outcome, rule)


# --- kept by every rule --------------------------------------------------------------------------------------


@pytest.mark.parametrize("promise", PROMISES, ids=lambda promise: promise.__name__)
@pytest.mark.parametrize(("name", "case"), CASES)
def test_every_case_keeps_every_promise(name: str, case: Case, promise: Callable[[Stated], None]) -> None:
    promise(Stated.of(case, name))


@pytest.mark.parametrize("name", sorted(Rule.known))
def test_class_is_complete(name: str) -> None:
    rule = Rule.known[name]
    assert rule.__module__ == f"core.rules.{name}", "one file for each rule, of its name"
    assert set(rule.kinds) <= set(OutcomeKind.known)
    assert {case.outcome["kind"] for case in rule.cases()} == set(rule.kinds), "every kind that it names has a case"
    missing = [key for key, field in rule.Fields.model_fields.items() if not (field.description or "").strip()]
    assert not missing, "every key has a description"
    assert rule.meaning[0].isupper()
    assert rule.meaning.endswith(".")
    example = tomllib.loads(rule.example)["rule"]
    assert [table["kind"] for table in example] == [name]
    aliases = {field.alias or key for key, field in rule.Fields.model_fields.items()}
    assert set(example[0]) <= aliases, "the example uses known keys only"


def test_there_are_rules() -> None:
    """An empty folder of rules would keep every promise."""
    assert len(Rule.known) >= 15
    assert len(CASES) >= 50


# --- saboteurs: each breaks one promise ------------------------------------------------------------------------


def _broken(stated: Stated) -> list[str]:
    """Return the names of the promises that are broken."""
    broken = []
    for promise in PROMISES:
        try:
            promise(stated)
        except AssertionError:
            broken.append(promise.__name__)
    return broken


def _sabotaged(stated: Stated, **replaced: Callable[..., object]) -> Stated:
    """Return the case with methods of its rule replaced; the class, and so the list of known rules, stays as it is."""
    rule = copy.copy(stated.rule)
    for name, method in replaced.items():
        setattr(rule, name, method)
    return Stated(stated.case, stated.sheet, rule, stated.rows)


def _case(name: str, kind: str, number: int = 0) -> Stated:
    cases = [case for case in Rule.known[name].cases() if case.outcome["kind"] == kind]
    return Stated.of(cases[number], name)


@dataclass(frozen=True)
class LooseCount:
    """Parts of a rule, each count's upper bound raised by one; picklable, unlike a closure."""

    rule: Rule

    def __call__(self, members: Members) -> list[Part] | None:
        parts = self.rule.parts(members)
        for part in parts or []:
            assert isinstance(part, Count)
            if part._high is not None:
                part._high += 1
        return parts


class LateAutomaton(UnitAutomaton):
    """An automaton that counts duties from the second slot on."""

    def __init__(self, automaton: UnitAutomaton) -> None:
        self._automaton = automaton
        self.labels = automaton.labels

    def start(self, unit: int) -> int:
        return self._automaton.start(unit)

    def step(self, unit: int, state: int, slot: int, on: bool) -> int | None:
        return self._automaton.step(unit, state, slot, on) if slot else state

    def accepts(self, unit: int, state: int) -> bool:
        return self._automaton.accepts(unit, state)


@dataclass(frozen=True)
class Late:
    """Makes a late automaton; picklable."""

    rule: Rule

    def __call__(self) -> UnitAutomaton:
        automaton = self.rule.automaton()
        assert automaton is not None
        return LateAutomaton(automaton)


@dataclass(frozen=True)
class OpenCells:
    """Cells of a rule, all of them open."""

    rule: Rule

    def __call__(self) -> tuple[Mask, Mask]:
        cells = self.rule.cells()
        assert cells is not None
        return np.ones_like(cells[0]), np.zeros_like(cells[1])


@dataclass(frozen=True)
class Alone:
    """A check that lets a row pass that comes alone."""

    rule: Rule

    def __call__(self, rows: Rows) -> Mask:
        return self.rule.check(rows) | (len(rows) == 1)


@dataclass(frozen=True)
class OfTheFirst:
    """A check that judges as if the batch came in ascending order."""

    rule: Rule

    def __call__(self, rows: Rows) -> Mask:
        keys = keys_of(rows)
        return self.rule.check(rows)[np.array(sorted(range(len(keys)), key=keys.__getitem__), int)]


@dataclass(frozen=True)
class Vacuous:
    """A check that every outcome passes."""

    def __call__(self, rows: Rows) -> Mask:
        return np.ones(len(rows), bool)


@dataclass(frozen=True)
class Nothing:
    """A part of nothing."""

    def __call__(self, *ignored: object) -> list[Part]:
        return []


@dataclass(frozen=True)
class Says:
    """Words."""

    words: str

    def __call__(self) -> str:
        return self.words


class Forgetful(Part):
    """A part that stays alive whatever happens."""

    def concerns(self, event: Event) -> bool:
        return True

    def step(self, event: Event, columns: Columns) -> tuple[Columns, Mask | None]:
        return columns, None


def saboteurs() -> Iterator[tuple[str, Stated, list[str]]]:
    quota = _case("quota", "selection")
    load, differ = _case("load", "roster"), _case("differ", "pairing")
    nothing = {"parts": Nothing(), "labels": Nothing()}
    built = builds_in_what_it_checks.__name__
    yield "off by one part", _sabotaged(quota, parts=LooseCount(quota.rule)), [built]
    yield "late automaton", _sabotaged(load, automaton=Late(load.rule)), [built]
    yield "open cells", _sabotaged(differ, cells=OpenCells(differ.rule)), [built]
    yield "part without effect", _sabotaged(quota, parts=Nothing()), [built]
    alone = judges_each_row_alone.__name__
    yield "batch of one", _sabotaged(quota, check=Alone(quota.rule)), [alone]
    yield "order of the batch", _sabotaged(quota, check=OfTheFirst(quota.rule)), [alone]
    vacuous = _sabotaged(quota, check=Vacuous(), **nothing)
    yield "vacuous", vacuous, [passes_some_and_fails_some.__name__, second_implementation_agrees.__name__]
    sentences = says_sentences.__name__
    yield "no full stop", _sabotaged(quota, words=Says("At least 1 unit")), [sentences]
    yield "unfilled words", _sabotaged(quota, words=Says("At least {low} units.")), [sentences]
    yield "None in words", _sabotaged(quota, words=Says("At least None units.")), [sentences]


SABOTEURS = list(saboteurs())


@pytest.mark.parametrize(("stated", "expected"), [pytest.param(s, e, id=name) for name, s, e in SABOTEURS])
def test_a_saboteur_is_caught_by_exactly_the_promise_it_breaks(stated: Stated, expected: list[str]) -> None:
    assert _broken(stated) == expected


def test_cases_themselves_break_nothing() -> None:
    """What the saboteurs were made of is sound."""
    for stated in (_case("quota", "selection"), _case("load", "roster"), _case("differ", "pairing")):
        assert _broken(stated) == []


def test_a_part_that_lets_all_pass_is_caught() -> None:
    stated = _case("before", "order")
    sabotaged = _sabotaged(stated, parts=lambda _: [Forgetful()])
    with pytest.raises(AssertionError, match="outcomes, not"):
        builds_in_what_it_checks(sabotaged)


def test_words_in_small_letters_are_caught(monkeypatch: pytest.MonkeyPatch) -> None:
    stated = _case("quota", "selection", 1)
    words = type(stated.rule).words
    monkeypatch.setattr(type(stated.rule), "words", lambda self: words(self).capitalize())
    with pytest.raises(AssertionError):
        spells_names_as_given(stated)
