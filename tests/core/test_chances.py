"""Chances against brute force, published values, and samplers that are known to be biased.

Brute force lists every outcome of the kind, keeps those that pass each rule's `check`, and counts in the lines of
outcomes.csv; it shares no code with the exact pass through the diagram.
"""

from __future__ import annotations

import itertools
import json
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import Any

import numpy as np
import pytest
from scipy.stats import binom

from core import exactchances, samplechances
from core.chances import Chance, Chances, estimated, inclusion
from core.errors import CallError, Cancelled, Infeasible, TooRare
from core.exactchances import Known, known_chances
from core.kinds import OutcomeKind
from core.ledger import interval
from core.planner import Ready, make_plan
from core.process import Rows
from core.samplechances import Sample, Wanted
from core.sheet import Sheet
from core.stream import Bits, make_key
from core.supersets import arrangements, superset
from tests.tools import ALPHA, Row, passing, sheet_of, universe

BUDGET = 10_000_000

Means = dict[tuple[str, ...], Fraction]


def named(count: int, **columns: str) -> list[Row]:
    """Return units u0, u1, ...; each column is given as one letter per unit."""
    return [{"id": f"u{i}", **{name: letters[i] for name, letters in columns.items()}} for i in range(count)]


def built_in(stated: Sheet, arrangement: str | None = None) -> Ready:
    """Every rule built in, whatever a plan would do."""
    chosen = arrangement or arrangements(stated.kind)[0]
    return Ready(stated, make_plan(stated).plan, superset(stated.kind, stated.rules, chosen, budget=BUDGET), ())


def checked(stated: Sheet) -> Ready:
    """No rule built in."""
    diagram = superset(stated.kind, [], arrangements(stated.kind)[0], budget=BUDGET)
    return Ready(stated, make_plan(stated).plan, diagram, stated.rules)


# --- brute force ---------------------------------------------------------------------------------------------


def listing(stated: Sheet) -> list[list[tuple[str, ...]]]:
    """Return every admissible outcome as lines."""
    rows = universe(stated.kind)
    return [stated.kind.lines(row, stated.frame.ids) for row in rows[passing(stated.rules, rows)]]


def met(kind: str, lines: list[tuple[str, ...]], one: str, other: str) -> bool:
    if kind == "selection":
        return (one,) in lines and (other,) in lines
    if kind == "pairing":
        return (one, other) in lines or (other, one) in lines
    at: dict[str, set[str]] = {one: set(), other: set()}
    for unit, place in lines:
        if unit in at:
            at[unit].add(place)
    if kind == "order":
        return abs(int(next(iter(at[one]))) - int(next(iter(at[other])))) == 1
    return bool(at[one] & at[other])


def brute(stated: Sheet) -> tuple[Means, Means, Means]:
    """Return the chances (roster: expected duties) of units, cells and pairs."""
    kind, outcomes, ids = stated.kind, listing(stated), stated.frame.ids
    units: Counter[tuple[str, ...]] = Counter()
    cells: Counter[tuple[str, ...]] = Counter()
    pairs: Counter[tuple[str, ...]] = Counter()
    for lines in outcomes:
        for line in lines:
            if kind.name != "pairing":
                units[line[:1]] += 1
                cells[line] += 1
            elif line[1]:
                units.update([(line[0],), (line[1],)])
                cells[line] += 1
        pairs.update(two for two in itertools.combinations(ids, 2) if met(kind.name, lines, *two))

    def means(counts: Counter[tuple[str, ...]]) -> Means:
        return {name: Fraction(count, len(outcomes)) for name, count in counts.items()}

    return means(units), means(cells), means(pairs)


def values(chances: Sequence[Chance] | None) -> Means:
    """Return the exact values by name; all of them must be exact."""
    assert chances is not None
    found = {}
    for chance in chances:
        assert chance.exact is not None
        assert chance.low == chance.high == chance.estimate == float(chance.exact)
        found[chance.name] = chance.exact
    return found


def same(found: Sequence[Chance] | None, wanted: Means) -> None:
    assert {name: value for name, value in values(found).items() if value} == wanted


# --- small sheets of every kind ----------------------------------------------------------------------------

DEPTS = named(7, dept="aaabbcc")
TEAMS = named(6, team="aabbcc")
COSTS: list[Row] = [{"id": f"u{i}", "cost": cost} for i, cost in enumerate([1, 1, 1, 2, 2, 3])]
ROLES = named(6, role="xxxyyy", club="abcabc")
PLACES: list[Row] = [{"id": "p", "max": 3}, {"id": "q", "min": 1, "max": 4}, {"id": "r"}]
SLOTS: Row = {"kind": "roster", "slots": ["s1", "s2", "s3", "s4"]}
LEAVE: Row = {"kind": "bar", "cells": [{"unit": "u0", "slot": "s1"}, {"unit": "u1", "slot": "s2"}]}
TWO_A_SLOT: Row = {"kind": "quota", "per": "slot", "min": 1, "max": 2}

SHEETS: dict[str, Sheet] = {
    "selection, plain": sheet_of(named(6), {"kind": "selection", "size": 3}),
    "selection, any size": sheet_of(named(5), {"kind": "selection"}, [{"kind": "together", "pairs": [["u0", "u3"]]}]),
    "selection, quota": sheet_of(
        DEPTS, {"kind": "selection", "size": {"min": 2, "max": 4}}, [{"kind": "quota", "per": "dept", "max": 2}]
    ),
    "selection, total": sheet_of(
        COSTS, {"kind": "selection", "size": 3}, [{"kind": "total", "column": "cost", "min": 5}]
    ),
    "selection, apart and pinned": sheet_of(
        DEPTS,
        {"kind": "selection", "size": 3},
        [{"kind": "apart", "pairs": [["u1", "u4"], ["u4", "u6"]]}, {"kind": "pin", "units": ["u2"]}],
    ),
    "selection, needs": sheet_of(
        DEPTS, {"kind": "selection", "size": 4}, [{"kind": "needs", "if": ["u0"], "then": ["u3", "u4"]}]
    ),
    "assignment, plain": sheet_of(named(5), {"kind": "assignment", "places": PLACES}),
    "assignment, quota": sheet_of(
        TEAMS,
        {"kind": "assignment", "places": PLACES},
        [{"kind": "quota", "where": {"team": "a"}, "per": "place", "max": 1}],
    ),
    "assignment, apart and barred": sheet_of(
        TEAMS,
        {"kind": "assignment", "places": PLACES},
        [
            {"kind": "apart", "units": ["u0", "u2", "u4"]},
            {"kind": "bar", "cells": [{"unit": "u1", "place": "p"}, {"unit": "u3", "place": "p"}]},
        ],
    ),
    "assignment, total": sheet_of(
        COSTS,
        {"kind": "assignment", "places": ["p", "q"]},
        [{"kind": "total", "column": "cost", "per": "place", "min": 4}],
    ),
    "roster, loads": sheet_of(named(4), SLOTS, [{"kind": "load", "min": 1, "max": 2}, TWO_A_SLOT]),
    "roster, leave": sheet_of(
        named(4), SLOTS, [{"kind": "load", "min": 1, "max": 3}, {"kind": "spacing", "min": 2}, LEAVE]
    ),
    "roster, groups": sheet_of(
        named(4, team="aabb"),
        SLOTS,
        [
            {"kind": "quota", "where": {"team": "a"}, "per": "slot", "max": 1},
            TWO_A_SLOT,
            {"kind": "run", "duties": True, "max": 2},
        ],
    ),
    "roster, unequal loads": sheet_of(
        [{"id": f"u{i}", "days": days} for i, days in enumerate([1, 1, 2, 3])],
        SLOTS,
        [{"kind": "load", "max": {"column": "days"}, "min": {"column": "days"}}, TWO_A_SLOT],
    ),
    "roster, nobody in one slot": sheet_of(
        named(3), SLOTS, [{"kind": "bar", "units": ["u0", "u1", "u2"], "in": ["s2"]}, {"kind": "load", "min": 1}]
    ),
    "roster, pinned": sheet_of(
        named(3),
        SLOTS,
        [{"kind": "pin", "units": ["u0"]}, {"kind": "bar", "units": ["u2"]}, {"kind": "load", "min": 0, "max": 4}],
    ),
    "order, plain": sheet_of(named(5), {"kind": "order"}),
    "order, runs": sheet_of(TEAMS, {"kind": "order"}, [{"kind": "run", "alike": "team", "max": 1}]),
    "order, before and barred": sheet_of(
        named(5),
        {"kind": "order"},
        [{"kind": "before", "pairs": [["u0", "u1"]]}, {"kind": "bar", "cells": [{"unit": "u2", "position": 1}]}],
    ),
    "order, block": sheet_of(named(5), {"kind": "order"}, [{"kind": "together", "units": ["u0", "u2", "u3"]}]),
    "pairing, plain": sheet_of(named(6), {"kind": "pairing"}),
    "pairing, single": sheet_of(
        named(5, team="aabbb"), {"kind": "pairing", "single": True}, [{"kind": "differ", "column": "team"}]
    ),
    "pairing, apart": sheet_of(named(6), {"kind": "pairing"}, [{"kind": "apart", "units": ["u1", "u2", "u3"]}]),
    "pairing, apart in a chain": sheet_of(
        named(6), {"kind": "pairing"}, [{"kind": "apart", "pairs": [["u0", "u1"], ["u1", "u2"], ["u2", "u4"]]}]
    ),
    "pairing, sides": sheet_of(ROLES, {"kind": "pairing", "sides": "role"}, [{"kind": "differ", "column": "club"}]),
    "pairing, single of one side": sheet_of(
        named(5, role="xxxyy", team="abbab"),
        {"kind": "pairing", "sides": "role", "single": True},
        [{"kind": "mixed", "column": "team", "min": 1}],
    ),
}


@pytest.mark.parametrize(
    ("stated", "arrangement"),
    [
        pytest.param(stated, arrangement, id=f"{name}: {arrangement}")
        for name, stated in SHEETS.items()
        for arrangement in arrangements(stated.kind)
    ],
)
def test_exact_chances_equal_brute_force(stated: Sheet, arrangement: str) -> None:
    units, cells, pairs = brute(stated)
    kind = stated.kind.name
    found = inclusion(built_in(stated, arrangement), cells=True, pairs=kind != "roster")
    assert found.exact
    assert found.outcomes == 0
    if kind in ("assignment", "order"):
        units = {(id,): Fraction(1) for id in stated.frame.ids}
    same(found.units, units)
    if kind == "selection":
        assert found.cells is None
    else:
        same(found.cells, cells)
    if kind != "roster":
        same(found.pairs, pairs)


def test_the_small_sheets_have_groups_and_states_that_merge() -> None:
    """The table above tests sharing within groups and following units only if it has them."""
    for kind in ("selection", "assignment", "order", "pairing"):
        known = [
            known_chances(s.kind, built_in(s).diagram, pairs=True, tick=lambda: None)
            for s in SHEETS.values()
            if s.kind.name == kind
        ]
        assert any(k is not None and 1 < len(k.units) < len(k.of) for k in known), kind


def test_units_are_followed_where_states_merge(monkeypatch: pytest.MonkeyPatch) -> None:
    followed: list[int] = []
    plain = exactchances._followed

    def counting(*args: Any) -> list[int]:
        followed.append(args[2])
        return plain(*args)

    monkeypatch.setattr(exactchances, "_followed", counting)
    inclusion(built_in(SHEETS["roster, loads"]))
    assert not followed
    inclusion(built_in(SHEETS["roster, leave"]))
    assert len(followed) == 3


# --- published values ---------------------------------------------------------------------------------------

AUDIT = sheet_of(
    [
        {"id": f"v{i}", "book": book, "dept": dept}
        for i, (book, dept) in enumerate(zip([5, 8, 12, 20, 30, 45, 60, 100], "AAAABBCC", strict=True), 1)
    ],
    {"kind": "selection", "size": 4},
    [{"kind": "quota", "where": {"dept": "A"}, "max": 2}, {"kind": "total", "column": "book", "min": 120}],
)
PANEL = sheet_of(
    [
        {"id": "my", "sex": "m", "age": "young"},
        *({"id": f"mo{i}", "sex": "m", "age": "old"} for i in range(3)),
        *({"id": f"fy{i}", "sex": "f", "age": "young"} for i in range(2)),
        {"id": "fo", "sex": "f", "age": "old"},
    ],
    {"kind": "selection", "size": 2},
    [{"kind": "quota", "per": column, "min": 1, "max": 1} for column in ("sex", "age")],
)


def clusters(caliper: int) -> Sheet:
    """Four clusters in two arms of two; the means of the arms differ by at most `caliper`."""
    units = [{"id": f"c{size}", "size": size} for size in (25, 50, 60, 75)]
    arms = [{"id": arm, "min": 2, "max": 2} for arm in ("arm 1", "arm 2")]
    rule = {"kind": "total", "column": "size", "per": "place", "min": 105 - caliper, "max": 105 + caliper}
    return sheet_of(units, {"kind": "assignment", "places": arms}, [rule])


def test_audit_example() -> None:
    """Source: exact listing of the 41 selections."""
    found = inclusion(make_plan(AUDIT), pairs=True)
    assert [c.exact for c in found.units] == [Fraction(n, 41) for n in (15, 15, 17, 17, 20, 24, 25, 31)]
    assert sum(values(found.units).values()) == 4
    assert found.notes[:2] == (
        "Each outcome has the same chance; each unit does not.",
        "The chances sum to 4, the number of units drawn.",
    )
    assert "15/41 (0.366) (v1), the largest 31/41 (0.756) (v8): 2.07 times" in found.notes[2]
    assert "all 41 outcomes" in found.words


def test_panel_example() -> None:
    """Source: exact listing of the 7 panels."""
    found = inclusion(make_plan(PANEL))
    assert [c.exact for c in found.units] == [Fraction(n, 7) for n in (1, 2, 2, 2, 3, 3, 1)]
    assert not any("Caution" in note for note in found.notes)  # 3 times, not more


def test_round_of_sixteen() -> None:
    """Source: the draw of 2022/23, 3,876 pairings; winner C met runner-up A with chance 515/1292 (published 39.86 %)."""
    sides = {"w": "A1 B2 C3 D4 E4 F5 G4 H2", "r": "A4 B6 C1 D3 E1 F3 G3 H7"}
    units = [
        {"id": side + club[0], "side": side, "group": club[0], "country": club[1]}
        for side, clubs in sides.items()
        for club in clubs.split()
    ]
    rules = [{"kind": "differ", "column": column} for column in ("group", "country")]
    found = inclusion(built_in(sheet_of(units, {"kind": "pairing", "sides": "side"}, rules)), cells=True)
    assert values(found.cells)["wC", "rA"] == Fraction(515, 1292)
    assert len(found.cells or ()) == 64
    assert found.notes[0] == "Each outcome has the same chance; each pair does not."
    assert "The chances of all pairs sum to 8, the number of pairs." in found.notes


def test_certain_pairs_are_named() -> None:
    """Source: Moulton's table of four clusters: a caliper of 5 leaves two allocations."""
    found = inclusion(make_plan(clusters(5)), pairs=True)
    assert "Always together, in every outcome: c25 with c75, c50 with c60." in found.notes
    never = "Never together in any outcome: c25 with c50, c25 with c60, c50 with c75, c60 with c75."
    assert never in found.notes
    assert found.notes[0] == "Each outcome has the same chance, and here each unit has the same chance too."


def test_pairs_that_never_meet_are_named() -> None:
    """Source: the same table with a caliper of 20 leaves four allocations; and Aronow-Samii's example of six people."""
    found = inclusion(make_plan(clusters(20)), pairs=True)
    assert "Never together in any outcome: c25 with c50, c60 with c75." in found.notes
    assert not any("Always" in note for note in found.notes)
    people = [{"id": f"p{i}", "sex": "mmmmff"[i - 1], "side": "nnnsns"[i - 1]} for i in range(1, 7)]
    rules = [
        {"kind": "quota", "where": {"sex": "m"}, "min": 2, "max": 2},
        {"kind": "quota", "where": {"side": "n"}, "min": 2, "max": 2},
    ]
    six = inclusion(make_plan(sheet_of(people, {"kind": "selection", "size": 3}, rules)), pairs=True)
    assert {c.exact for c in six.units} == {Fraction(1, 2)}
    assert "Never together in any outcome: p4 with p6, p5 with p6." in six.notes


# --- estimates ------------------------------------------------------------------------------------------------


def covers(found: Sequence[Chance] | None, wanted: Means) -> bool:
    assert found is not None
    return all(c.low <= float(wanted.get(c.name, Fraction(0))) <= c.high for c in found)


def covers_all(found: Chances, stated: Sheet) -> bool:
    units, cells, pairs = brute(stated)
    if stated.kind.name in ("assignment", "order"):
        units = {(id,): Fraction(1) for id in stated.frame.ids}
    tables = [(found.units, units), (found.pairs, pairs)]
    if stated.kind.name != "selection":
        tables.append((found.cells, cells))
    return all(covers(chances, wanted) for chances, wanted in tables)


@pytest.fixture
def strict(monkeypatch: pytest.MonkeyPatch) -> None:
    """Intervals that a right sampler misses with a chance of at most ALPHA."""
    monkeypatch.setattr(samplechances, "LEVEL", 1 - ALPHA)


@pytest.mark.statistical
@pytest.mark.usefixtures("strict")
@pytest.mark.parametrize("name", [name for name, stated in SHEETS.items() if stated.rules])
def test_estimates_cover_the_exact_chances(name: str) -> None:
    stated = SHEETS[name]
    found = inclusion(checked(stated), cells=True, pairs=True, outcomes=1000)
    assert not found.exact
    assert found.outcomes == 1000
    assert all(c.exact is None for c in (found.cells or found.pairs or ()))
    assert covers_all(found, stated)


@dataclass(frozen=True)
class OneByOne:
    """Decides unit by unit (or place by place), each time evenly among what can still be completed: biased.

    `steps` turns an outcome's lines into its decisions in a fixed order.
    """

    stated: Sheet
    steps: Callable[[list[tuple[str, ...]]], tuple[str, ...]]

    def rows(self, count: int) -> Iterator[Rows]:
        outcomes = {self.steps(lines): lines for lines in listing(self.stated)}
        bits = Bits(make_key("twin", self.stated.digest), 0)
        for _ in range(count):
            left, depth = list(outcomes), 0
            while len(left) > 1:
                choices = sorted({steps[depth] for steps in left})
                chosen = choices[int(bits.below(np.array([len(choices)]))[0])]
                left = [steps for steps in left if steps[depth] == chosen]
                depth += 1
            yield self.row(outcomes[left[0]])

    def row(self, lines: list[tuple[str, ...]]) -> Rows:
        ids = self.stated.frame.ids
        row = self.stated.kind.read([(ids.index(line[0]), line[1] if len(line) > 1 else "") for line in lines], ids)
        assert not isinstance(row, str)
        return row[None]


def seconds(lines: list[tuple[str, ...]]) -> tuple[str, ...]:
    return tuple(line[1] for line in sorted(lines))


def drawn(lines: list[tuple[str, ...]]) -> tuple[str, ...]:
    return tuple("in" if (f"u{i}",) in lines else "out" for i in range(6))


def by_slot(lines: list[tuple[str, ...]]) -> tuple[str, ...]:
    return tuple("".join(sorted(unit for unit, slot in lines if slot == f"s{i}")) for i in range(1, 5))


TWINS = {
    "selection, total": drawn,
    "assignment, plain": seconds,
    "roster, unequal loads": by_slot,
    "order, before and barred": seconds,
    "pairing, apart in a chain": seconds,
}


@pytest.mark.usefixtures("strict")
@pytest.mark.parametrize("name", TWINS)
def test_intervals_miss_for_a_sampler_that_decides_one_by_one(name: str) -> None:
    twin = OneByOne(SHEETS[name], TWINS[name])
    found = estimated(twin.stated, twin.rows(4000), cells=True, pairs=True)
    assert found.outcomes == 4000
    assert not covers_all(found, twin.stated)


def test_limits_are_those_of_clopper_and_pearson() -> None:
    kind = SHEETS["selection, plain"].kind
    sample = Sample(kind, Wanted(units=True, cells=False, pairs=False))
    sample.add(np.tile(np.array([[0, 1, 2]], np.int32), (40, 1)))
    assert sample.intervals == 6
    counts = np.arange(41)[:, None]
    low, high = sample.bounds(counts)
    for count in range(41):
        expected = interval(count, 40, 1 - 0.05 / 6)
        assert (float(low[count, 0]), float(high[count, 0])) == pytest.approx(expected, rel=1e-9)
    for p in np.linspace(0.001, 0.999, 200):
        inside = (low[:, 0] <= p) & (p <= high[:, 0])
        assert binom.pmf(np.arange(41), 40, p)[inside].sum() >= 1 - 0.05 / 6


def test_intervals_count_all_that_is_reported() -> None:
    def intervals(name: str, *, cells: bool = False, pairs: bool = False) -> str:
        return inclusion(checked(SHEETS[name]), cells=cells, pairs=pairs, outcomes=200).words

    assert "all 7 intervals" in intervals("selection, quota")
    assert f"all {7 + 21} intervals" in intervals("selection, quota", pairs=True)
    assert f"all {6 * 3} intervals" in intervals("assignment, quota")
    assert f"all {4 * 4} intervals" in intervals("roster, loads")
    assert f"all {4 * 4 * 2} intervals" in intervals("roster, loads", cells=True)
    assert "all 9 intervals" in intervals("pairing, sides", cells=True, pairs=True)
    assert f"all {5 + 6} intervals" in intervals("pairing, single of one side", cells=True)


def test_estimates_depend_on_the_sheet_alone() -> None:
    ready = checked(SHEETS["selection, quota"])
    found = inclusion(ready, outcomes=300)
    assert inclusion(replace(ready, plan=replace(ready.plan, block=16)), outcomes=300) == found
    longer = inclusion(ready, outcomes=301)
    assert longer.outcomes == 301
    assert longer.units != found.units


def test_roster_pairs_are_estimated_beside_exact_units() -> None:
    stated = SHEETS["roster, leave"]
    found = inclusion(built_in(stated), cells=True, pairs=True, outcomes=2000)
    units, cells, pairs = brute(stated)
    same(found.units, units)
    same(found.cells, cells)
    assert not found.exact
    assert found.outcomes == 2000
    assert covers(found.pairs, pairs)
    assert any(note.startswith("Pairs are estimated") for note in found.notes)
    assert "all 6 intervals" in found.words


@pytest.mark.parametrize("name", ["selection, total", "assignment, quota", "order, runs"])
def test_pairs_are_estimated_where_counting_takes_too_long(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(exactchances, "MOST_STEPS", 1)
    found = inclusion(built_in(SHEETS[name]), pairs=True, outcomes=200)
    assert all(c.exact is not None for c in found.units)
    assert all(c.exact is None for c in found.pairs or ())
    assert any("too long" in note for note in found.notes)


def test_a_roster_is_estimated_where_following_takes_too_long(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(exactchances, "MOST_STEPS", 1)
    found = inclusion(built_in(SHEETS["roster, leave"]), outcomes=200)
    assert found.outcomes == 200
    assert found.units[0].exact is None


# --- words ------------------------------------------------------------------------------------------------


def test_sentence_is_said_only_where_it_is_true() -> None:
    equal = "Each outcome has the same chance, and here each unit has the same chance too."
    unequal = "Each outcome has the same chance; each unit does not."

    def sentence(name: str) -> str:
        return inclusion(built_in(SHEETS[name])).notes[0]

    assert {sentence(name) for name in SHEETS if name.endswith("plain")} == {equal}
    assert sentence("roster, loads") == equal
    assert sentence("selection, total") == unequal
    assert sentence("order, block") == unequal
    assert sentence("pairing, single") == unequal
    assert sentence("pairing, apart") == "Each outcome has the same chance; each pair does not."
    few = inclusion(checked(SHEETS["selection, quota"]), outcomes=100).notes[0]
    assert few == "Each outcome has the same chance; whether each unit has, too, this sample does not show."
    many = inclusion(checked(AUDIT), outcomes=4000).notes[0]
    assert many.startswith(unequal)
    assert "do not overlap" in many


def test_chances_of_0_and_1_are_named() -> None:
    stated = sheet_of(
        named(5),
        {"kind": "selection", "size": 3},
        [
            {"kind": "pin", "units": ["u1"]},
            {"kind": "bar", "units": ["u3", "u4"]},
            {"kind": "needs", "if": ["u1"], "then": ["u0"]},
        ],
    )
    found = inclusion(built_in(stated))
    assert "Never drawn in any outcome: u3, u4." in found.notes
    assert "Always drawn, in every outcome: u0, u1, u2." in found.notes
    seen = inclusion(checked(stated), outcomes=100).notes
    assert any(
        note.startswith("Never drawn in the 100 outcomes of the sample (true value at most 0.0") for note in seen
    )
    assert any(
        note.startswith("Always drawn in the 100 outcomes of the sample (true value at least 0.9") for note in seen
    )
    duties = inclusion(built_in(SHEETS["roster, pinned"]), cells=True).notes
    assert "Never on duty in any outcome: u2." in duties
    assert "Always on duty in every slot, in every outcome: u0." in duties
    assert "Always there, in every outcome: u0 in s1, u0 in s2, u0 in s3, u0 in s4." in duties


def test_long_lists_are_cut() -> None:
    stated = sheet_of(named(8), {"kind": "selection"}, [{"kind": "apart", "units": [f"u{i}" for i in range(6)]}])
    note = next(n for n in inclusion(built_in(stated), pairs=True).notes if n.startswith("Never together"))
    assert note.endswith("u2 with u5 and 3 more.")
    assert note.count(" with ") == 12


def test_caution_beyond_three_times() -> None:
    stated = sheet_of(COSTS, {"kind": "selection", "size": 2}, [{"kind": "total", "column": "cost", "min": 5}])
    notes = inclusion(built_in(stated)).notes
    assert any(note.startswith("Never drawn") for note in notes)
    assert not any(note.startswith("Caution") for note in notes)
    wide = sheet_of(COSTS, {"kind": "selection", "size": 3}, [{"kind": "total", "column": "cost", "min": 6}])
    assert any(
        note.startswith("Caution: these chances differ by more than a factor of 3")
        for note in inclusion(built_in(wide)).notes
    )


def test_json() -> None:
    found = inclusion(built_in(SHEETS["order, before and barred"]), pairs=True).to_json()
    assert json.loads(json.dumps(found)) == found
    assert found["units"][0] == {"id": "u0", "chance": 1.0, "exact": "1", "low": 1.0, "high": 1.0}
    assert found["cells"][0]["unit"] == "u0"
    assert found["cells"][0]["position"] == 1
    assert found["pairs"][0]["units"] == ["u0", "u1"]
    assert inclusion(built_in(AUDIT)).to_json()["units"][0]["exact"] == "15/41"
    assert inclusion(built_in(AUDIT)).to_json()["pairs"] is None
    assert inclusion(checked(AUDIT), outcomes=100).to_json()["units"][0]["exact"] is None
    for name, word in (("assignment, quota", "place"), ("roster, loads", "slot"), ("pairing, sides", "with")):
        assert word in inclusion(built_in(SHEETS[name]), cells=True).to_json()["cells"][0]
    huge = Chance(("u0",), Fraction(1, 10**5000), 0.0, 0.0, 0.0)
    assert huge.to_json()["exact"] == "1/1" + 5000 * "0"
    assert not huge.is_zero


# --- what can go wrong --------------------------------------------------------------------------------------


def test_too_rare() -> None:
    with pytest.raises(TooRare) as caught:
        inclusion(checked(AUDIT), limit=50)
    accepted = int(str(caught.value).split()[0])
    assert caught.value.bound == interval(accepted, 50)[1]
    assert inclusion(checked(AUDIT), limit=1000).outcomes < 1000


def test_calls_that_cannot_be_met() -> None:
    with pytest.raises(CallError, match="at least 100"):
        inclusion(checked(AUDIT), outcomes=99)
    many = sheet_of(named(2001), {"kind": "selection", "size": 2})
    with pytest.raises(CallError, match="2,001,000 pairs"):
        inclusion(make_plan(many), pairs=True)
    with pytest.raises(CallError, match="no outcome"):
        estimated(AUDIT, [])
    none = sheet_of(
        named(3),
        {"kind": "order"},
        [{"kind": "before", "pairs": [["u0", "u1"]]}, {"kind": "pin", "cells": [{"unit": "u1", "position": 1}]}],
    )
    empty = superset(none.kind, none.rules, "list", budget=BUDGET)
    with pytest.raises(Infeasible):
        inclusion(Ready(none, make_plan(AUDIT).plan, empty, ()))


def test_too_many_cells_are_left_out(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(samplechances, "MOST_LISTED", 10)
    found = inclusion(built_in(SHEETS["order, plain"]))
    assert found.cells is None
    assert any("too many cells" in note for note in found.notes)
    with pytest.raises(CallError, match="25 cells"):
        inclusion(built_in(SHEETS["order, plain"]), cells=True)


@pytest.mark.parametrize("ready", [built_in(AUDIT), checked(AUDIT)], ids=["exact", "estimated"])
def test_it_can_be_stopped(ready: Ready) -> None:
    def stop() -> None:
        raise Cancelled

    with pytest.raises(Cancelled):
        inclusion(ready, tick=stop)


@pytest.mark.parametrize("name", ["selection, plain", "assignment, plain", "pairing, plain"])
def test_wrong_counts_are_noticed(name: str) -> None:
    kind: OutcomeKind = SHEETS[name].kind
    known = known_chances(kind, built_in(SHEETS[name]).diagram, pairs=True, tick=lambda: None)
    assert isinstance(known, Known)
    with pytest.raises(ArithmeticError):
        exactchances._certify(kind, replace(known, units=[chance + Fraction(1, 100) for chance in known.units]))
