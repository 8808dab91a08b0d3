"""The diagram holds exactly the admissible outcomes and gives each the same chance: by listing, on many small sheets.

Every kind with every rule it allows, and every pair of rules, over one small list per kind; then generated sheets. The
law is computed in fractions from `choose` and `acceptance`, the functions that a draw calls (`tests.tools.law_of`);
mutants of these must fail it. What follows the path, the choice of units (`lift`), is put through all answers that its
bits can give.
"""

from __future__ import annotations

import itertools
import pickle
from collections.abc import Callable, Iterator
from decimal import Decimal
from fractions import Fraction
from math import comb, factorial, prod
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from core.errors import SheetError
from core.kinds import OutcomeKind
from core.process import retrace
from core.rules import Rule
from core.sheet import Sheet
from core.stream import Bits
from core.supersets import arrangements, superset
from core.supersets.diagram import Diagram, OverBudget
from tests.tools import (
    Row,
    Verdict,
    admissible,
    chi_square,
    diagrams,
    events_of,
    is_bijection,
    is_uniform,
    key_of,
    keys_of,
    law_of,
    lifted,
    measured,
    outcomes_of,
    passing,
    pools_of,
    sheet_of,
    universe,
)

# --- one small list per kind, with columns that serve every rule -----------------------------------------------


def _units(count: int) -> list[Row]:
    return [
        {
            "id": f"u{i}",
            "dept": ["a", "a", "b", "b", "c", "", "a"][i],
            "pay": ["1.5", "0.25", "-2", "3", "0.75", "1", "2"][i],
            "level": [1, 3, 2, 1, 5, 4, 2][i],
            "role": "xyyxxyx"[i],
            "team": "ppqqppq"[i],
            "hue": "fgfhgfh"[i],
        }
        for i in range(count)
    ]


_PLACES = [{"id": "p", "max": 3, "zone": "n"}, {"id": "q", "min": 1, "zone": "n"}, {"id": "r", "zone": "s"}]
_SLOTS = [{"id": "s", "month": "m", "need": 1}, {"id": "t", "month": "m", "need": 2}, {"id": "w", "month": "k"}]
FRAMES: dict[str, tuple[list[Row], Row]] = {
    "selection": (_units(6), {"kind": "selection", "size": {"min": 1, "max": 4}}),
    "assignment": (_units(5), {"kind": "assignment", "places": _PLACES}),
    "roster": (_units(3), {"kind": "roster", "slots": _SLOTS}),
    "order": (_units(5), {"kind": "order"}),
    "pairing": (_units(6), {"kind": "pairing"}),
    "single": (_units(7), {"kind": "pairing", "single": True}),
    "sides": (_units(6), {"kind": "pairing", "sides": "role"}),
    "sides, single": (_units(7), {"kind": "pairing", "sides": "role", "single": True}),
}
_GROUPS: list[Row] = [{"pairs": [["u0", "u1"], ["u1", "u2"]]}, {"units": ["u0", "u2"]}, {"alike": "dept"}]
_PAIRED: list[Row] = [
    {"kind": "pin", "cells": [{"unit": "u3", "with": "u1"}]},
    {"kind": "bar", "cells": [{"unit": "u0", "with": "u1"}, {"unit": "u5", "with": "u2"}]},
    {"kind": "apart", "units": ["u0", "u2", "u4"]},
    {"kind": "apart", "alike": "dept"},
    {"kind": "together", "units": ["u0", "u1"]},
    {"kind": "differ", "column": "hue"},
    {"kind": "differ", "column": "pay", "by_at_least": Decimal("0.5")},
    {"kind": "agree", "column": "level", "by_at_most": 2},
    {"kind": "mixed", "column": "dept", "min": 3},
    {"kind": "mixed", "column": "team", "max": 1},
]
_SINGLE: list[Row] = [{"kind": "pin", "units": ["u0", "u1"]}, {"kind": "bar", "units": ["u4"]}]
RULES: dict[str, list[Row]] = {
    "selection": [
        {"kind": "quota", "where": {"dept": "a"}, "min": 1, "max": 1},
        {"kind": "quota", "per": "dept", "max": 1},
        {"kind": "total", "column": "pay", "min": Decimal("1.25")},
        {"kind": "total", "column": "pay", "where": {"dept": ["a", "b"]}, "min": -1, "max": 2},
        {"kind": "pin", "units": ["u1"]},
        {"kind": "bar", "units": ["u4", "u2"]},
        *({"kind": "apart", **groups} for groups in _GROUPS[::2]),
        *({"kind": "together", **groups} for groups in _GROUPS[1:]),
        {"kind": "needs", "if": ["u0"], "then": ["u3", "u5"]},
        {"kind": "needs", "if": ["u1", "u2"], "then": ["u4"]},
        {"kind": "distinct", "column": "dept", "min": 2},
    ],
    "assignment": [
        {"kind": "quota", "where": {"dept": "a"}, "per": "place", "max": 1},
        {"kind": "quota", "where": {"level": {"min": 2}}, "in": ["p", "q"], "min": 2},
        {"kind": "quota", "per": "zone", "max": 4, "min": 1},
        {"kind": "total", "column": "pay", "per": "place", "max": Decimal("3.5")},
        {"kind": "total", "column": "pay", "in": ["r"], "min": 0},
        {"kind": "pin", "units": ["u1", "u2"], "in": ["p", "r"]},
        {"kind": "pin", "cells": [{"unit": "u0", "place": "q"}]},
        {"kind": "bar", "units": ["u3"], "in": ["r"]},
        *({"kind": "apart", **groups} for groups in _GROUPS),
        *({"kind": "together", **groups} for groups in _GROUPS[1:]),
        {"kind": "distinct", "column": "role", "min": 1},
    ],
    "roster": [
        {"kind": "quota", "per": "slot", "min": 1, "max": 2},
        {"kind": "quota", "per": "month", "where": {"dept": "a"}, "max": 2},
        {"kind": "quota", "per": "slot", "in": ["s", "t"], "min": {"column": "need"}},
        {"kind": "total", "column": "pay", "per": "slot", "max": Decimal("1.5")},
        {"kind": "total", "column": "pay", "min": 1, "max": 3},
        {"kind": "load", "min": 1, "max": 2},
        {"kind": "load", "max": {"column": "level"}, "where": {"role": "x"}},
        {"kind": "pin", "units": ["u0"], "in": ["s", "w"]},
        {"kind": "pin", "cells": [{"unit": "u1", "slot": "t"}]},
        {"kind": "bar", "cells": [{"unit": "u2", "slot": "s"}, {"unit": "u0", "slot": "t"}]},
        *({"kind": "apart", **groups} for groups in _GROUPS[::2]),
        *({"kind": "together", **groups} for groups in _GROUPS[1:]),
        {"kind": "spacing", "min": 2},
        {"kind": "run", "max": 2, "duties": True},
    ],
    "order": [
        {"kind": "pin", "units": ["u1"], "in": [1, 3]},
        {"kind": "pin", "cells": [{"unit": "u3", "position": 2}]},
        {"kind": "bar", "cells": [{"unit": f"u{i}", "position": i + 1} for i in range(5)]},
        *({"kind": "apart", **groups} for groups in _GROUPS[::2]),
        *({"kind": "together", **groups} for groups in _GROUPS[:2]),
        {"kind": "spacing", "alike": "dept", "min": 3},
        {"kind": "spacing", "alike": "role", "min": 2},
        {"kind": "run", "alike": "role", "max": 1},
        {"kind": "run", "alike": "role", "max": 2},
        {"kind": "before", "pairs": [["u3", "u1"], ["u1", "u0"]]},
        {"kind": "before", "pairs": [["u0", "u4"]]},
    ],
    "pairing": [*_PAIRED, {"kind": "agree", "column": "team"}],
    "single": [*_PAIRED, *_SINGLE],
    "sides": _PAIRED,
    "sides, single": [*_PAIRED, *_SINGLE],
}


def _label(rule: Row) -> str:
    return "-".join([rule["kind"], *(key for key in rule if key not in ("kind", "min", "max", "column"))])


ALONE = [
    pytest.param(frame, (rule,), id=f"{frame}: {_label(rule)}") for frame, rules in RULES.items() for rule in rules
]
PAIRS = [
    pytest.param(frame, pair, id=f"{frame}: {' + '.join(map(_label, pair))}")
    for frame in ("selection", "assignment", "roster", "order", "pairing", "single")
    for pair in itertools.combinations(RULES[frame], 2)
]


def _sheet(frame: str, *rules: Row) -> Sheet:
    units, outcome = FRAMES[frame]
    return sheet_of(units, outcome, rules)


def _holds_exactly_and_evenly(sheet: Sheet) -> None:
    expected = admissible(sheet)
    for arrangement, diagram in diagrams(sheet):
        assert diagram.size == len(expected), f"{arrangement}: {diagram.size} outcomes, not {len(expected)}"
        assert is_bijection(diagram, expected), f"{arrangement}: no bijection"
        assert is_uniform(law_of(diagram), expected), f"{arrangement}: chances differ"


# --- what it holds, and the law --------------------------------------------------------------------------------


def test_every_rule_of_every_kind_is_in_the_list() -> None:
    """A new rule or kind must be added to RULES above."""
    listed = {(FRAMES[frame][1]["kind"], rule["kind"]) for frame, rules in RULES.items() for rule in rules}
    assert listed == {(kind, rule.name) for rule in Rule.known.values() for kind in rule.kinds}
    assert {kind for kind, _ in listed} == set(OutcomeKind.known)
    assert len(ALONE) >= 60
    assert len(PAIRS) >= 300


@pytest.mark.parametrize("frame", FRAMES)
def test_with_nothing_built_in_it_is_the_universe(frame: str) -> None:
    _holds_exactly_and_evenly(_sheet(frame))


@pytest.mark.parametrize(("frame", "rules"), ALONE)
def test_each_rule(frame: str, rules: tuple[Row, ...]) -> None:
    sheet = _sheet(frame, *rules)
    assert 0 < len(admissible(sheet)) < len(universe(sheet.kind)), "the sheet says nothing"
    _holds_exactly_and_evenly(sheet)


@pytest.mark.parametrize(("frame", "rules"), PAIRS)
def test_each_pair_of_rules(frame: str, rules: tuple[Row, ...]) -> None:
    _holds_exactly_and_evenly(_sheet(frame, *rules))


@pytest.mark.parametrize(("frame", "rules"), PAIRS[::7])
def test_checked_and_built_in_are_interchangeable(frame: str, rules: tuple[Row, ...]) -> None:
    """Nothing, one, the other, or both built in, the rest checked: the same set."""
    sheet = _sheet(frame, *rules)
    expected = admissible(sheet)
    for built_in in ((), sheet.rules[:1], sheet.rules[1:], sheet.rules):
        checked = [rule for rule in sheet.rules if rule not in built_in]
        for _, diagram in diagrams(sheet, built_in):
            if diagram.is_empty:
                assert not expected
                continue
            rows = np.stack([diagram.unrank(index) for index in range(diagram.size)])
            assert set(keys_of(rows[passing(checked, rows)])) == expected


# A rule all of whose units are barred is about nothing that a decision could change, but must still be held.
_DEAD = [
    ("selection", {"kind": "quota", "where": {"dept": "b"}, "min": 1}, {"kind": "bar", "units": ["u2", "u3"]}),
    ("selection", {"kind": "total", "column": "pay", "where": {"dept": "b"}, "min": 1}, {"units": ["u2", "u3"]}),
    ("selection", {"kind": "distinct", "column": "dept", "min": 1}, {"units": [f"u{i}" for i in range(5)]}),
    ("selection", {"kind": "bar", "units": ["u0"]}, {"units": [f"u{i}" for i in range(1, 6)]}),
    ("assignment", {"kind": "quota", "in": ["p"], "min": 1}, {"units": [f"u{i}" for i in range(5)], "in": ["p"]}),
    (
        "assignment",
        {"kind": "bar", "units": ["u0"], "in": ["q"]},
        {"units": [f"u{i}" for i in range(1, 5)], "in": ["q"]},
    ),
    (
        "assignment",
        {"kind": "distinct", "column": "role", "min": 1},
        {"units": [f"u{i}" for i in range(5)], "in": ["p"]},
    ),
    ("roster", {"kind": "quota", "per": "slot", "min": 1}, {"units": ["u0", "u1", "u2"], "in": ["s"]}),
    ("roster", {"kind": "total", "column": "pay", "per": "slot", "min": 1}, {"units": ["u0", "u1", "u2"], "in": ["w"]}),
    ("pairing", {"kind": "mixed", "column": "team", "min": 1}, {"kind": "agree", "column": "team"}),
]


@pytest.mark.parametrize(("frame", "rule", "other"), _DEAD)
def test_a_bound_on_what_is_barred_altogether_is_held(frame: str, rule: Row, other: Row) -> None:
    sheet = _sheet(frame, rule, {"kind": "bar", **other})
    assert not admissible(sheet)
    _holds_exactly_and_evenly(sheet)


@pytest.mark.parametrize("frame", FRAMES)
def test_law_of_the_diagram_is_the_law_listed_here(frame: str) -> None:
    """`Diagram.law` gives per path what `law_of` gives per outcome."""
    for rule in RULES[frame][:3]:
        for _, diagram in diagrams(_sheet(frame, rule)):
            law, listed = diagram.law(), law_of(diagram)
            assert sum(options for _, options, _ in law) == diagram.size == len(listed)
            for (events, options, chance), path in zip(law, diagram.paths(), strict=True):
                found = outcomes_of(diagram, path)
                assert events == events_of(diagram, path)
                assert options == len(found)
                assert {listed[key] for key in found} == {chance}


@pytest.mark.parametrize("frame", FRAMES)
def test_few_proposals_are_lost(frame: str) -> None:
    """The certificate promises that words below `surely` accept every path without loose edges, and a(p) <= 1."""
    for _, diagram in diagrams(_sheet(frame)):
        least = Fraction(diagram.surely, 1 << 64)
        assert 1 - Fraction(diagram.levels, 1 << 27) < least < 1
        assert least < sum(law_of(diagram).values()) <= 1
        assert all(least < diagram.acceptance(path) <= 1 for path in diagram.paths())


# --- generated sheets ------------------------------------------------------------------------------------------

DEPTS, PAYS = ("a", "b", "c", ""), ("0", "1", "-1", "2.5", "0.75", "-3.25", "10")


@st.composite
def _frame(draw: st.DrawFn, least: int, most: int, sides: bool = False) -> list[Row]:
    count = draw(st.integers(least, most))
    units = []
    for i in range(count):
        unit = {"id": f"u{i}", "dept": draw(st.sampled_from(DEPTS)), "pay": draw(st.sampled_from(PAYS))}
        unit |= {"level": draw(st.integers(0, 3)), "role": "xy"[i % 2] if sides else draw(st.sampled_from("xy"))}
        units.append(unit)
    return units


def _some(names: list[Any], least: int = 1) -> st.SearchStrategy[list[Any]]:
    return st.lists(st.sampled_from(names), min_size=min(least, len(names)), max_size=len(names), unique=True)


def _maybe(strategy: st.SearchStrategy[Any]) -> st.SearchStrategy[Any]:
    return st.none() | strategy


_WHERE = st.sampled_from(
    [None, {"dept": "a"}, {"dept": ["a", "b"]}, {"role": "x"}, {"level": {"min": 1}}, {"pay": {"max": 1}, "role": "y"}]
)
_AMOUNT = st.sampled_from([Decimal(text) for text in ("-3.5", "-1", "0", "0.75", "1", "2.2", "4")])
_FEW = st.integers(0, 3)


def _groups(ids: list[str]) -> st.SearchStrategy[Row]:
    return st.one_of(
        st.fixed_dictionaries({"units": _some(ids, 2)}),
        st.fixed_dictionaries({"pairs": st.lists(_some(ids, 2).map(lambda p: p[:2]), min_size=1, max_size=2)}),
        st.fixed_dictionaries({"alike": st.sampled_from(["dept", "role", "level"])}),
    )


def _of(kind: str, **keys: st.SearchStrategy[Any]) -> st.SearchStrategy[Row]:
    return st.fixed_dictionaries({"kind": st.just(kind), **keys})


def _rules(kind: str, ids: list[str], places: list[Any]) -> st.SearchStrategy[list[Row]]:
    """Return lists of one to five rules of a kind, with random bounds; some of them faulty."""
    groups = _groups(ids)
    per = {
        "selection": st.sampled_from([None, "dept"]),
        "assignment": st.sampled_from([None, "place", "zone", "dept"]),
        "roster": st.sampled_from([None, "slot", "zone", "role"]),
    }.get(kind, st.none())
    inside = st.none() if kind == "selection" else _maybe(_some(places))
    cell_word = {"assignment": "place", "roster": "slot", "order": "position", "pairing": "with"}.get(kind)
    units = _of("pin", units=_some(ids), **({"in": _some(places)} if kind in ("assignment", "order", "roster") else {}))
    known = [units.map(lambda rule: rule | {"kind": "bar"}), units]
    if cell_word:
        cells = st.lists(
            st.fixed_dictionaries({"unit": st.sampled_from(ids), cell_word: st.sampled_from(places or ids)}),
            min_size=1,
            max_size=3,
        )
        known += [_of("pin", cells=cells.map(lambda found: found[:1])), _of("bar", cells=cells)]
    known += [groups.map(lambda g: {"kind": "apart"} | g), groups.map(lambda g: {"kind": "together"} | g)]
    if kind in ("selection", "assignment", "roster"):
        known.append(_of("quota", where=_WHERE, per=per, min=_maybe(_FEW), max=_maybe(_FEW), **{"in": inside}))
        amounts = {"min": _maybe(_AMOUNT), "max": _maybe(_AMOUNT)}
        known.append(_of("total", column=st.just("pay"), where=_WHERE, per=per, **{"in": inside}, **amounts))
    if kind in ("selection", "assignment"):
        known.append(_of("distinct", column=st.sampled_from(["dept", "role"]), min=st.integers(1, 3)))
    if kind == "selection":
        known.append(_of("needs", **{"if": _some(ids).map(lambda f: f[:2]), "then": _some(ids).map(lambda f: f[:2])}))
    if kind == "roster":
        known += [_of("load", where=_WHERE, min=_maybe(_FEW), max=_maybe(_FEW)), _of("spacing", min=st.integers(1, 4))]
        known += [_of("load", max=st.just({"column": "level"}))]
        known.append(_of("run", max=st.integers(1, 2), duties=st.just(True)))
    if kind == "order":
        alike = st.sampled_from(["dept", "role", "level"])
        known += [_of("spacing", alike=alike, min=st.integers(1, 3)), _of("run", alike=alike, max=st.integers(1, 2))]
        known.append(_of("before", pairs=st.lists(_some(ids, 2).map(lambda p: p[:2]), min_size=1, max_size=3)))
    if kind == "pairing":
        column = {"column": st.sampled_from(["level", "role"])}
        near = {"column": st.sampled_from(["level", "pay"]), "by_at_most": _maybe(_FEW), "by_at_least": _maybe(_FEW)}
        known += [_of("differ", **column), _of("agree", **column), _of("differ", **near), _of("agree", **near)]
        known.append(_of("mixed", column=st.sampled_from(["dept", "role"]), min=_maybe(_FEW), max=_maybe(_FEW)))
    return st.lists(st.one_of(known), min_size=1, max_size=5)


@st.composite
def _generated(draw: st.DrawFn, kind: str) -> tuple[list[Row], Row, list[Row]]:
    sides = kind == "pairing" and draw(st.booleans())
    units = draw(_frame(*{"selection": (1, 6), "pairing": (2, 7), "roster": (1, 3)}.get(kind, (1, 5)), sides))
    outcome: Row = {"kind": kind}
    places: list[Any] = []
    if kind == "selection":
        size = st.integers(0, len(units))
        outcome["size"] = draw(st.one_of(st.none(), size, st.fixed_dictionaries({"min": size, "max": size})))
    elif kind in ("assignment", "roster"):
        places = ["p", "q", "r"][: draw(st.integers(1, 3))]
        limits = {"min": _maybe(_FEW), "max": _maybe(st.integers(1, 4))} if kind == "assignment" else {}
        table = [{"id": place, "zone": "n" if place == "p" else "s"} for place in places]
        outcome["places" if kind == "assignment" else "slots"] = [
            row | {key: value for key, value in draw(st.fixed_dictionaries(limits)).items()} for row in table
        ]
    elif kind == "order":
        places = list(range(1, len(units) + 1))
    else:
        outcome |= {"single": True, "sides": "role" if sides else None}
    return units, outcome, draw(_rules(kind, [unit["id"] for unit in units], places))


@pytest.mark.parametrize("kind", sorted(OutcomeKind.known))
def test_generated_sheets(kind: str) -> None:
    stated_rules: list[int] = []

    @settings(max_examples=150, suppress_health_check=[HealthCheck.filter_too_much, HealthCheck.too_slow])
    @given(_generated(kind))
    def run(stated: tuple[list[Row], Row, list[Row]]) -> None:
        units, outcome, listed = stated
        assume(_is_sound(units, outcome, []))
        rules = [rule for rule in listed if _is_sound(units, outcome, [rule])]
        stated_rules.append(len(rules))
        _holds_exactly_and_evenly(sheet_of(units, outcome, rules))

    run()
    assert sum(number >= 2 for number in stated_rules) >= 25, "too few of the generated sheets say something"


def _is_sound(units: list[Row], outcome: Row, rules: list[Row]) -> bool:
    try:
        sheet_of(units, outcome, rules)
    except SheetError:
        return False
    return True


# --- mutants: the law must fail ----------------------------------------------------------------------------------


def _some_diagrams() -> Iterator[tuple[Sheet, Diagram]]:
    """Yield a diagram of each kind in which some decision is open."""
    for frame in ("selection", "assignment", "roster", "order", "single"):
        sheet = _sheet(frame, RULES[frame][0])
        yield sheet, next(diagrams(sheet))[1]


def _law_holds(sheet: Sheet, diagram: Diagram) -> bool:
    """Return the verdict of the law test; a certificate that breaks is a failure as well."""
    try:
        return is_uniform(law_of(diagram), admissible(sheet))
    except ArithmeticError:
        return False


def test_the_mutants_are_made_of_sound_diagrams() -> None:
    assert all(_law_holds(sheet, diagram) for sheet, diagram in _some_diagrams())


@pytest.mark.parametrize("shift", [1, 1 << 40, 1 << 60], ids=["less for less or equal", "a little", "a lot"])
def test_mutant_choose(monkeypatch: pytest.MonkeyPatch, shift: int) -> None:
    """An edge taken for words up to and including its limit, or for words beyond it."""
    choose = Diagram.choose

    def shifted(self: Diagram, level: int, nodes: NDArray[np.int64], words: NDArray[np.uint64]) -> NDArray[np.int64]:
        moved = np.where(words >= np.uint64(shift), words - np.uint64(shift), np.uint64(0)) if words.size else words
        return choose(self, level, nodes, moved)

    for sheet, diagram in _some_diagrams():
        law = diagram.law()
        with monkeypatch.context() as patched:
            patched.setattr(Diagram, "choose", shifted)
            assert not _law_holds(sheet, diagram)
            assert diagram.law() != law, "`Diagram.law` does not ask `choose`"


def _open_edge(diagram: Diagram) -> tuple[int, int]:
    """Return an edge that is followed by another one of the same node."""
    for level in range(diagram.levels):
        source = diagram.links(level)[0]
        for edge in range(len(source) - 1):
            if source[edge] == source[edge + 1]:
                return level, edge
    raise AssertionError("no decision is open")


def _remembering(diagram: Diagram, level: int, edge: int, shift: int) -> Callable[[int, int], int]:
    """Return the widths as they were before the limit of this edge was lowered."""
    width, moved = diagram.width, {(level, edge): shift, (level, edge + 1): -shift}
    return lambda at, number: width(at, number) + moved.get((at, number), 0)


@pytest.mark.parametrize("known", [False, True], ids=["acceptance does not know", "acceptance knows"])
@pytest.mark.parametrize("shift", [1, 1 << 20, 1 << 50])
def test_mutant_limits(monkeypatch: pytest.MonkeyPatch, shift: int, known: bool) -> None:
    """A limit is moved. If the acceptance knows, it makes up for it or breaks off: never another law in silence."""
    for sheet, diagram in _some_diagrams():
        level, edge = _open_edge(diagram)
        diagram._layers[level].limits[edge] -= np.uint64(shift)
        with monkeypatch.context() as patched:
            if not known:
                patched.setattr(diagram, "width", _remembering(diagram, level, edge, shift))
                assert not _law_holds(sheet, diagram)
                continue
            try:
                law = law_of(diagram)
            except ArithmeticError:
                assert shift > 1 << 20, "the certificate has room for so little"
            else:
                assert is_uniform(law, admissible(sheet))


def _coarse(diagram: Diagram) -> None:
    """Round all shares to whole 64ths, at least one each, as far as there is room."""
    for level in range(diagram.levels):
        layer = diagram._layers[level]
        if layer.forced:
            continue
        for start, end in itertools.pairwise(layer.starts.tolist()):
            exact = [diagram.width(level, edge) for edge in range(start, end)]
            rounded = np.maximum(1, np.array([round(width / 2**58) for width in exact]))
            while rounded.sum() > 63:
                rounded[rounded.argmax()] -= 1
            layer.limits[start:end] = np.cumsum(rounded).astype(np.uint64) << np.uint64(58)


def test_mutant_without_acceptance(monkeypatch: pytest.MonkeyPatch) -> None:
    for sheet, diagram in _some_diagrams():
        if all(len(set(options)) == 1 for options in map(list, map(diagram.options, range(diagram.levels)))):
            continue
        _coarse(diagram)
        with monkeypatch.context() as patched:
            patched.setattr(diagram, "acceptance", lambda _: Fraction(1))
            assert not _law_holds(sheet, diagram)


def test_acceptance_makes_up_for_coarse_shares(monkeypatch: pytest.MonkeyPatch) -> None:
    """Given a constant small enough, the same coarse shares give a uniform law: it is the acceptance that does it."""
    for sheet, diagram in _some_diagrams():
        _coarse(diagram)
        monkeypatch.setattr(diagram, "weight", diagram.weight * 1000)
        assert _law_holds(sheet, diagram)


def test_mutant_options() -> None:
    """The diagram believes in one unit more to pick from than there is."""
    for sheet, diagram in _some_diagrams():
        level = next(
            at
            for at in range(diagram.levels)
            if any(diagram.process.levels[at].events[e].count for e in diagram.links(at)[2].tolist())
        )
        events = diagram.process.levels[level].events
        edge = next(e for e, event in enumerate(diagram.links(level)[2].tolist()) if events[event].count)
        diagram._layers[level].pool[edge] += 1
        assert not _law_holds(sheet, diagram)
        assert not is_bijection(diagram, admissible(sheet))
        assert not _pools_are_right(diagram)


def test_mutant_missing_outcome() -> None:
    """An edge is cut: all that goes through it is lost."""
    for sheet, diagram in _some_diagrams():
        expected = admissible(sheet)
        assert not is_uniform(law_of(diagram), expected | {(-1,)})
        assert not is_uniform(law_of(diagram), set(list(expected)[1:]))


# --- larger diagrams, by path: shares so small that their edges are loose ----------------------------------------


def _split(count: int) -> list[Row]:
    return [{"id": f"u{i}", "dept": "a" if i < count // 2 else "b"} for i in range(count)]


_HALF = {"kind": "quota", "where": {"dept": "a"}}
LARGE = [
    pytest.param(_split(90), {"kind": "selection", "size": 45}, [_HALF | {"max": 45}], comb(90, 45), id="selection"),
    pytest.param(
        _split(70), {"kind": "assignment", "places": ["p", "q"]}, [_HALF | {"min": 0}], 2**70, id="assignment"
    ),
    pytest.param(_split(60), {"kind": "roster", "slots": ["s"]}, [_HALF | {"min": 0}], 2**60, id="roster"),
    pytest.param(_split(8), {"kind": "order"}, [{"kind": "run", "alike": "dept", "max": 4}], factorial(8), id="order"),
    pytest.param(
        _split(50),
        {"kind": "pairing"},
        [{"kind": "mixed", "column": "dept", "max": 3}],
        sum(comb(25, k) ** 2 * factorial(k) * prod(range(1, 25 - k, 2)) ** 2 for k in (1, 3)),
        id="pairing",
    ),
]


@pytest.mark.parametrize(("units", "outcome", "rules", "size"), LARGE)
def test_law_of_large_groups(units: list[Row], outcome: Row, rules: list[Row], size: int) -> None:
    diagram = next(diagrams(sheet_of(units, outcome, rules)))[1]
    law = diagram.law()
    assert diagram.size == size == sum(options for _, options, _ in law)
    assert len({chance for _, _, chance in law}) == 1
    assert Fraction(1, 2) < law[0][2] * size <= 1


def test_more_events_at_a_level_than_16_bits_can_number(bits: Callable[[int], Bits]) -> None:
    sheet = sheet_of(({"id": f"u{i}"} for i in range(40_000)), {"kind": "selection", "size": 35_000})
    diagram = next(diagrams(sheet))[1]
    assert diagram.size == comb(40_000, 35_000)
    rows, _ = diagram.propose(2, bits(0))
    assert [len(set(row)) for row in rows.tolist()] == [35_000, 35_000]


def test_large_groups_have_loose_edges() -> None:
    """The case that needs exact fractions does occur above, and `propose` marks it."""
    diagram = next(diagrams(sheet_of(*LARGE[0].values[:3])))[1]
    narrow = [[w < 1 << 40 for w in measured(diagram, level)] for level in range(diagram.levels)]
    assert any(map(any, narrow))
    assert any(diagram.acceptance(path) * 2**64 < diagram.surely for path in diagram.paths())


def test_propose_marks_loose_paths(monkeypatch: pytest.MonkeyPatch, bits: Callable[[int], Bits]) -> None:
    """Coarse limits make many edges narrow, so that both kinds of path come up."""
    sheet = _sheet("selection")
    diagram = superset(sheet.kind, [sheet.rules, ()][1], "list", budget=10**6)
    # units told apart: 2 edges per node; every other node gets a first edge below 2^40
    for layer in diagram._layers:
        if not layer.forced:
            layer.limits[layer.starts[:-1]] = np.uint64(1 << 39)
            layer.loose = True
    seen: list[tuple[NDArray[np.int64], NDArray[np.bool_]]] = []
    monkeypatch.setattr(
        diagram, "accepts", lambda edges, loose, words, _: seen.append((edges, loose)) or np.zeros(len(words), bool)
    )
    words = Bits.words

    def small(self: Bits, count: int) -> NDArray[np.uint64]:
        """Make every third word so small that it meets a narrow edge."""
        found = words(self, count).copy()
        found[::3] >>= np.uint64(30)
        return found

    monkeypatch.setattr(Bits, "words", small)
    diagram.propose(600, bits(0))
    ((edges, loose),) = seen
    expected = [any(diagram.width(level, edge) < 1 << 40 for level, edge in enumerate(path)) for path in edges.tolist()]
    assert loose.tolist() == expected
    assert 0 < sum(expected) < len(expected)


# --- the last acceptance decides exactly -------------------------------------------------------------------------


class _Words:
    """Bits that hold the words given."""

    def __init__(self, *given: int) -> None:
        self.left = list(given)

    def words(self, count: int) -> NDArray[np.uint64]:
        taken, self.left = self.left[:count], self.left[count:]
        assert len(taken) == count, "more words were asked for than the decision needs"
        return np.array(taken, np.uint64)


def _wanted(chance: Fraction, words: list[int]) -> bool | None:
    """Return whether a number whose binary digits begin with these words is below `chance`; None if both are possible."""
    depth = 64 * len(words)
    number = sum(word << (depth - 64 * place) for place, word in enumerate(words, 1))
    if Fraction(number + 1, 1 << depth) <= chance:
        return True
    return False if Fraction(number, 1 << depth) >= chance else None


CHANCES = [
    Fraction(1),
    Fraction(1, 2),
    Fraction(2, 3),
    Fraction(1, 10**6),
    1 - Fraction(1, 3 << 60),
    Fraction(5, 2**64),
    Fraction(10**40 + 7, 2**140),
    Fraction(3, 2**130),
]


@pytest.mark.parametrize("chance", CHANCES, ids=str)
def test_undecided_words_are_decided_exactly(monkeypatch: pytest.MonkeyPatch, chance: Fraction) -> None:
    """With the fast branch off, the verdict is that of exact fractions, and hardly a word more is read than needed."""
    sheet = _sheet("selection")
    diagram = next(diagrams(sheet))[1]
    monkeypatch.setattr(Diagram, "surely", 0)
    monkeypatch.setattr(diagram, "acceptance", lambda _: chance)
    first, second = divmod(chance.numerator * 2**128 // chance.denominator, 2**64)
    tried = [[0], [2**64 - 1], *([word] for word in (first - 1, first, first + 1) if 0 <= word < 2**64)]
    undecided = 0
    for words in tried:
        stream = list(words)
        if _wanted(chance, stream) is None:
            undecided += 1
            for following in (0, max(second - 1, 0), min(second + 1, 2**64 - 1), 2**64 - 1):
                if _wanted(chance, [*stream, following]) is not None:
                    _decide(diagram, chance, [*stream, following])
            continue
        _decide(diagram, chance, stream)
    assert undecided or chance.denominator <= 2**64


def _decide(diagram: Diagram, chance: Fraction, words: list[int]) -> None:
    """Compare the verdict; a word more may be read where the digits so far are those of the chance."""
    given, edges, loose = _Words(*words[1:], 1), np.zeros((1, diagram.levels), np.int64), np.zeros(1, bool)
    verdict = diagram.accepts(edges, loose, np.array(words[:1], np.uint64), given)  # type: ignore[arg-type]
    assert bool(verdict[0]) == _wanted(chance, words), f"{words} against {chance}"
    assert len(given.left) in (0, 1)


@pytest.mark.parametrize("frame", FRAMES)
def test_fast_and_exact_branch_agree(monkeypatch: pytest.MonkeyPatch, bits: Callable[[int], Bits], frame: str) -> None:
    for _, diagram in diagrams(_sheet(frame, RULES[frame][0])):
        edges = np.array(diagram.paths(), np.int64)
        narrow = [[w < 1 << 40 for w in measured(diagram, level)] for level in range(diagram.levels)]
        loose = np.array([any(narrow[at][e] for at, e in enumerate(path)) for path in edges.tolist()])
        words = bits(0).words(len(edges)).copy()
        words[::2] = np.uint64(2**64 - 1)
        words[1::4] = np.uint64(diagram.surely - 1)
        fast = diagram.accepts(edges, loose, words, bits(1))
        with monkeypatch.context() as patched:
            patched.setattr(Diagram, "surely", 0)
            exact = diagram.accepts(edges, loose, words, bits(1))
        assert (fast == exact).all()


# --- pools and the choice of units -------------------------------------------------------------------------------


def _pools_are_right(diagram: Diagram) -> bool:
    """Return whether the pools that the diagram keeps are those of the process, on every path."""
    return all(
        [int(diagram.links(level)[3][edge]) for level, edge in enumerate(path)]
        == [pool for pool, _ in pools_of(diagram, events_of(diagram, path))]
        for path in diagram.paths()
    )


@pytest.mark.parametrize(("frame", "rules"), ALONE)
def test_pools_and_lift(frame: str, rules: tuple[Row, ...]) -> None:
    """The pools kept are those of the process; over all answers that bits can give, `lift` makes each choice alike often."""
    for _, diagram in diagrams(_sheet(frame, *rules)):
        assert _pools_are_right(diagram)
        paths = diagram.paths()
        for path in paths[:: max(1, len(paths) // 25)]:
            counts = lifted(diagram, events_of(diagram, path))
            assert set(counts) == set(outcomes_of(diagram, path))
            assert len(set(counts.values())) == 1, "some choices of units are likelier than others"


@pytest.mark.parametrize("frame", FRAMES)
def test_lift_with_nothing_built_in(frame: str) -> None:
    """Groups are largest here: no unit is told apart from another but by the kind."""
    for _, diagram in diagrams(_sheet(frame)):
        assert _pools_are_right(diagram)
        for path in diagram.paths():
            counts = lifted(diagram, events_of(diagram, path))
            assert set(counts) == set(outcomes_of(diagram, path))
            assert len(set(counts.values())) == 1


def test_a_lift_that_prefers_the_first_is_caught(monkeypatch: pytest.MonkeyPatch) -> None:
    """Twin: the first unit is put first wherever that changes the order of a shuffle."""
    diagram = next(diagrams(_sheet("order")))[1]
    lift = diagram.process.lift

    def repaired(events: NDArray[np.int32], bits: Bits) -> NDArray[Any]:
        rows = lift(events, bits)
        rows[:, :2] = np.sort(rows[:, :2], axis=1)
        return rows

    monkeypatch.setattr(diagram.process, "lift", repaired)
    counts = lifted(diagram, events_of(diagram, diagram.paths()[0]))
    assert set(counts) != set(outcomes_of(diagram, diagram.paths()[0]))


@pytest.mark.parametrize(("frame", "rules"), ALONE)
def test_lift_agrees_with_the_path(
    monkeypatch: pytest.MonkeyPatch, bits: Callable[[int], Bits], frame: str, rules: tuple[Row, ...]
) -> None:
    """What `lift` makes of a batch of paths leads back to the same paths, with choices in range, inside the set."""
    sheet = _sheet(frame, *rules)
    expected = admissible(sheet)
    for number, (_, diagram) in enumerate(diagrams(sheet)):
        lift, taken = diagram.process.lift, []
        monkeypatch.setattr(diagram.process, "lift", lambda e, b, lift=lift, taken=taken: taken.append(e) or lift(e, b))
        rows, alive = diagram.propose(64, bits(number))
        (events,) = taken
        assert alive.any()
        for row, path in zip(rows[alive], events[alive].tolist(), strict=True):
            found, choices = retrace(diagram.process, row)
            assert found == path
            options = [comb(pool, count) for pool, count in pools_of(diagram, path)]
            assert all(0 <= choice < number for choice, number in zip(choices, options, strict=True))
            assert key_of(row) in expected


def _level(diagram: Diagram) -> None:
    """Give each edge of a node the same share: one by one, looking ahead so as not to get stuck."""
    for layer in diagram._layers:
        if not layer.forced:
            number = np.diff(layer.starts)[layer.source]
            place = np.arange(len(number)) - layer.starts[layer.source] + 1
            shares = [(at << 64) // of - 1 for at, of in zip(place.tolist(), number.tolist(), strict=True)]
            layer.limits = np.array(shares, np.uint64)


@pytest.mark.statistical
@pytest.mark.parametrize(
    ("frame", "rule"), [("selection", 0), ("assignment", 0), ("roster", 5), ("order", 3), ("single", 8)]
)
def test_proposals_are_uniform(
    monkeypatch: pytest.MonkeyPatch, bits: Callable[[int], Bits], verdict: Verdict, frame: str, rule: int
) -> None:
    """Hypothesis: all admissible outcomes are equally likely. Twin: decided one by one with look-ahead."""
    sheet = _sheet(frame, RULES[frame][rule])
    expected = sorted(admissible(sheet))
    diagram = next(diagrams(sheet))[1]
    draws = 300 * len(expected)

    def counts(block: int) -> list[int]:
        rows, alive = diagram.propose(draws, bits(block))
        seen = dict.fromkeys(expected, 0)
        for key in keys_of(rows[alive]):
            seen[key] += 1
        return list(seen.values())

    verdict.fair(chi_square(counts(0)))
    _level(diagram)
    monkeypatch.setattr(diagram, "accepts", lambda edges, *_: np.ones(len(edges), bool))
    verdict.biased(chi_square(counts(1)))


# --- building ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("frame", FRAMES)
def test_budget_is_held_and_does_not_change_the_diagram(frame: str) -> None:
    sheet = _sheet(frame, RULES[frame][0])
    for arrangement in arrangements(sheet.kind):
        diagram = superset(sheet.kind, sheet.rules, arrangement, budget=10**6)
        assert diagram.edges <= diagram.tried
        again = superset(sheet.kind, sheet.rules, arrangement, budget=diagram.tried)
        assert again.digest == diagram.digest
        with pytest.raises(OverBudget):
            superset(sheet.kind, sheet.rules, arrangement, budget=diagram.tried - 1)


@pytest.mark.parametrize("frame", FRAMES)
def test_digest_holds_every_number_of_the_draw(frame: str) -> None:
    sheets = (_sheet(frame, rule) for rule in RULES[frame])
    sheet = next(sheet for sheet in sheets if len(next(diagrams(sheet))[1].paths()) > 1)
    for array in ("child", "event", "pool", "limits"):
        diagram, other = (next(diagrams(sheet))[1] for _ in range(2))
        level, edge = _open_edge(diagram)
        getattr(other._layers[level], array)[edge] += 1
        assert other.digest != diagram.digest


@pytest.mark.parametrize("frame", FRAMES)
def test_a_diagram_travels(bits: Callable[[int], Bits], frame: str) -> None:
    """Worker processes get it by pickle, and propose the same."""
    diagram = next(diagrams(_sheet(frame, RULES[frame][0])))[1]
    diagram.size  # noqa: B018 - what has been counted need not travel
    other = pickle.loads(pickle.dumps(diagram))
    assert (other.digest, other.size) == (diagram.digest, diagram.size)
    for mine, theirs in zip(diagram.propose(50, bits(0)), other.propose(50, bits(0)), strict=True):
        assert (mine == theirs).all()


def test_impossible_rules_leave_an_empty_diagram() -> None:
    for rules in (
        ({"kind": "pin", "units": ["u1"]}, {"kind": "bar", "units": ["u1"]}),
        ({"kind": "quota", "min": 4}, {"kind": "quota", "max": 3}),
    ):
        for _, diagram in diagrams(_sheet("selection", *rules)):
            assert diagram.is_empty
            assert diagram.size == 0
