"""Exact sizes of admissible sets against published values, with every rule built in.

Each case names the source of its value. OEIS = On-Line Encyclopedia of Integer Sequences; "from memory" where the
value was written down from memory and only confirmed by a second program. Run with `-s -n 0` to see what each diagram
cost. Every case must stay below `SECONDS` of processor time.
"""

from __future__ import annotations

import itertools
import json
import time
from collections import Counter
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import partial
from math import comb, factorial, prod
from typing import Any

import numpy as np
import pytest
from scipy.stats import mannwhitneyu

from core.reading import TableFile
from core.sheet import Sheet, read_sheet
from core.supersets import arrangements, superset
from core.supersets.diagram import Diagram
from core.tables import Table

SECONDS = 10.0
EDGES = 100_000_000

Row = dict[str, Any]
Pairs = list[list[str]]


def toml(value: object) -> str:
    if isinstance(value, dict):
        return "{" + ", ".join(f"{key} = {toml(item)}" for key, item in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(toml(item) for item in value) + "]"
    return json.dumps(value)


def no_files(wanted: TableFile) -> Table:
    raise AssertionError(f"no sheet of these tests reads a file, but one asks for {wanted.file}")


def sheet(units: Sequence[Row], outcome: Row, rules: Iterable[Row] = ()) -> Sheet:
    text = (
        f"format = 1\nframe = {toml({'units': list(units)})}\noutcome = {toml(outcome)}\nrule = {toml(list(rules))}\n"
    )
    return read_sheet(text, "sheet.toml", no_files)


def built(stated: Sheet, arrangement: str | None = None) -> Diagram:
    """All rules built in, in the first arrangement of the kind unless another is named; counted, and not slowly."""
    chosen = arrangement or arrangements(stated.kind)[0]
    begun = time.process_time()
    diagram = superset(stated.kind, stated.rules, chosen, budget=EDGES)
    building = time.process_time() - begun
    size = diagram.size
    seconds = time.process_time() - begun
    print(
        f"\n{stated.kind.name} of {stated.kind.units} units, {chosen}: {size:,} outcomes, {diagram.nodes:,} nodes, "
        f"{diagram.edges:,} edges ({diagram.tried:,} tried), {building:.2f} s to build, {seconds:.2f} s in all",
        end="",
    )
    assert seconds < SECONDS
    return diagram


def size(stated: Sheet) -> int:
    return built(stated).size


def numbered(count: int) -> list[Row]:
    return [{"id": f"u{i}"} for i in range(count)]


# --- tables with given margins -------------------------------------------------------------------------------


def margins(rows: Sequence[int], columns: Sequence[int]) -> Sheet:
    """Return a 0/1 table as a roster: rows are units, columns are slots."""
    return sheet(
        [{"id": f"r{i}", "sum": total} for i, total in enumerate(rows)],
        {"kind": "roster", "slots": [{"id": f"c{i}", "sum": total} for i, total in enumerate(columns)]},
        [
            {"kind": "load", "min": {"column": "sum"}, "max": {"column": "sum"}},
            {"kind": "quota", "per": "slot", "min": {"column": "sum"}, "max": {"column": "sum"}},
        ],
    )


def finches() -> Sheet:
    return margins(
        [14, 13, 14, 10, 12, 2, 10, 1, 10, 11, 6, 2, 17], [4, 4, 11, 10, 10, 8, 9, 10, 8, 9, 3, 10, 4, 7, 9, 3, 3]
    )


def duty_roster() -> Sheet:
    return sheet(
        numbered(30),
        {"kind": "roster", "slots": [f"s{i}" for i in range(12)]},
        [
            {"kind": "quota", "per": "slot", "min": 5, "max": 5},
            {"kind": "load", "min": 1, "max": 3},
            {"kind": "spacing", "min": 2},
        ],
    )


# --- orders and assignments ----------------------------------------------------------------------------------


def barred_order(count: int, shifts: Sequence[int]) -> Sheet:
    """Return orders in which unit i does not stand at position i + shift (cyclic)."""
    cells = [{"unit": f"u{i}", "position": (i + shift) % count + 1} for i in range(count) for shift in shifts]
    return sheet(numbered(count), {"kind": "order"}, [{"kind": "bar", "cells": cells}])


def barred_assignment(count: int, shifts: Sequence[int]) -> Sheet:
    """Return the same with places that take one unit each."""
    cells = [{"unit": f"u{i}", "place": f"p{(i + shift) % count}"} for i in range(count) for shift in shifts]
    places = [{"id": f"p{i}", "max": 1} for i in range(count)]
    return sheet(numbered(count), {"kind": "assignment", "places": places}, [{"kind": "bar", "cells": cells}])


def pairs_in_a_row(count: int, rule: Row) -> Sheet:
    units = [{"id": f"{pair}{half}", "pair": f"p{pair}"} for pair in range(count) for half in "ab"]
    return sheet(units, {"kind": "order"}, [{"alike": "pair", **rule}])


def grid(height: int, width: int) -> tuple[list[Row], Pairs]:
    units = [{"id": f"{r} {c}"} for r in range(height) for c in range(width)]
    down = [[f"{r} {c}", f"{r + 1} {c}"] for r in range(height - 1) for c in range(width)]
    right = [[f"{r} {c}", f"{r} {c + 1}"] for r in range(height) for c in range(width - 1)]
    return units, down + right


def lattice(things: int) -> tuple[list[Row], Pairs]:
    """All subsets of some things, as numbers in binary; each with the sets that have one thing more."""
    sets = range(2**things)
    larger = [[f"s{s}", f"s{s | 1 << t}"] for s in sets for t in range(things) if not s >> t & 1]
    return [{"id": f"s{s}"} for s in sets], larger


def linear_extensions(units: list[Row], pairs: Pairs) -> Sheet:
    return sheet(units, {"kind": "order"}, [{"kind": "before", "pairs": pairs}])


def latin(order: int) -> Sheet:
    """Return the cells of the square as units that go to symbols."""
    cells = [{"id": f"{r} {c}", "row": f"r{r}", "column": f"c{c}"} for r in range(order) for c in range(order)]
    rules = [{"kind": "apart", "alike": "row"}, {"kind": "apart", "alike": "column"}]
    return sheet(cells, {"kind": "assignment", "places": [f"p{s}" for s in range(order)]}, rules)


# --- selections ----------------------------------------------------------------------------------------------


def spread(count: int, drawn: int, *, ring: bool) -> Sheet:
    neighbours = [[f"u{i}", f"u{(i + 1) % count}"] for i in range(count if ring else count - 1)]
    return sheet(numbered(count), {"kind": "selection", "size": drawn}, [{"kind": "apart", "pairs": neighbours}])


def hard_squares(side: int) -> Sheet:
    units, neighbours = grid(side, side)
    return sheet(units, {"kind": "selection"}, [{"kind": "apart", "pairs": neighbours}] if neighbours else [])


def upward_closed(things: int) -> Sheet:
    units, larger = lattice(things)
    rules = [{"kind": "needs", "if": [small], "then": [large]} for small, large in larger]
    return sheet(units, {"kind": "selection"}, rules)


def hand(drawn: int, *rules: Row) -> Sheet:
    cards = [{"id": f"{suit}{rank}", "suit": suit, "rank": f"r{rank}"} for suit in "CDHS" for rank in range(2, 15)]
    return sheet(cards, {"kind": "selection", "size": drawn}, rules)


def exactly(count: int, **where: str) -> Row:
    return {"kind": "quota", "where": where, "min": count, "max": count}


def rank_sum(drawn: int, others: int, **bounds: int) -> Sheet:
    units = [{"id": f"u{rank}", "rank": rank} for rank in range(1, drawn + others + 1)]
    return sheet(units, {"kind": "selection", "size": drawn}, [{"kind": "total", "column": "rank", **bounds}])


def vouchers() -> Sheet:
    books = [5, 8, 12, 20, 30, 45, 60, 100]
    units = [{"id": f"v{i}", "book": book, "dept": "AAAABBCC"[i]} for i, book in enumerate(books)]
    rules = [
        {"kind": "quota", "where": {"dept": "A"}, "max": 2},
        {"kind": "total", "column": "book", "min": 120},
    ]
    return sheet(units, {"kind": "selection", "size": 4}, rules)


def panel() -> Sheet:
    units = [
        {"id": f"p{i}", "sex": sort[0], "age": sort[1]}
        for i, sort in enumerate(["My", "Mo", "Mo", "Mo", "Fy", "Fy", "Fo"])
    ]
    rules = [{"kind": "quota", "per": column, "min": 1} for column in ("sex", "age")]
    return sheet(units, {"kind": "selection", "size": 2}, rules)


# --- pairings ------------------------------------------------------------------------------------------------


def two_sides(count: int) -> Sheet:
    units = [{"id": f"{side}{i}", "side": side} for i in range(count) for side in "ab"]
    return sheet(units, {"kind": "pairing", "sides": "side"})


def coloured_board(side: int) -> list[Row]:
    return [
        {"id": f"{r} {c}", "row": r, "column": c, "colour": "dark" if (r + c) % 2 else "light"}
        for r in range(side)
        for c in range(side)
    ]


def dominoes(side: int) -> Sheet:
    """Squares of different colours no more than a row and a column apart are neighbours."""
    rules = [{"kind": "differ", "column": column, "by_at_most": 1} for column in ("row", "column")]
    return sheet(coloured_board(side), {"kind": "pairing", "sides": "colour"}, rules)


def dominoes_by_cells(side: int) -> Sheet:
    """Return the same with every pair of distant squares barred by name."""
    board = coloured_board(side)
    distant = [
        {"unit": one["id"], "with": other["id"]}
        for one, other in itertools.combinations(board, 2)
        if abs(one["row"] - other["row"]) + abs(one["column"] - other["column"]) > 1
    ]
    return sheet(board, {"kind": "pairing", "sides": "colour"}, [{"kind": "bar", "cells": distant}])


def clubs(*rules: Row) -> Sheet:
    """Round of 16 of 2022/23: letter = group, number = association."""
    winners = ["A1", "B2", "C3", "D4", "E4", "F5", "G4", "H2"]
    seconds = ["A4", "B6", "C1", "D3", "E1", "F3", "G3", "H7"]
    units = [
        {"id": f"{place} {code[0]}", "place": place, "group": code[0], "nation": f"n{code[1]}"}
        for place, codes in (("winner", winners), ("second", seconds))
        for code in codes
    ]
    differ = [{"kind": "differ", "column": "group"}, {"kind": "apart", "alike": "nation"}]
    return sheet(units, {"kind": "pairing", "sides": "place"}, [*differ, *rules])


# --- the group draw of 2022 ----------------------------------------------------------------------------------

POTS = (
    ["as", "eu", "sa", "eu", "sa", "eu", "eu", "eu"],
    ["na", "na", "eu", "eu", "eu", "eu", "eu", "sa"],
    ["af", "af", "af", "as", "as", "as", "eu", "eu"],
    ["af", "af", "na", "as", "sa", "eu", "as+sa", "na+oc"],
)
GROUPS = "ABCDEFGH"


def world_groups(*rules: Row) -> Sheet:
    """Pot 1, the host first, stands at groups A to H; "as+sa" counts for as and for sa."""
    units = [
        {"id": f"{pot} {seat}", "pot": f"pot {pot}", "zone": zone}
        for pot, zones in enumerate(POTS, 1)
        for seat, zone in enumerate(zones)
    ]
    zones = sorted({unit["zone"] for unit in units})
    stated = [exactly(1, pot=f"pot {pot}") | {"per": "place"} for pot in (1, 2, 3, 4)]
    for zone in ("af", "as", "na", "oc", "sa", "eu"):
        counted = [name for name in zones if zone in name.split("+")]
        bounds = {"min": 1, "max": 2} if zone == "eu" else {"max": 1}
        stated.append({"kind": "quota", "where": {"zone": counted}, "per": "place", **bounds})
    pins = [{"unit": f"1 {seat}", "place": group} for seat, group in enumerate(GROUPS)]
    stated.append({"kind": "pin", "cells": pins})
    return sheet(units, {"kind": "assignment", "places": list(GROUPS)}, [*stated, *rules])


# --- the cases -----------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Known:
    """One published size; `dear` names the arrangements in which the diagram takes longer than `SECONDS`."""

    name: str
    source: str
    expected: int
    stated: Callable[[], Sheet]
    dear: tuple[str, ...] = ()


def family(name: str, source: str, values: dict[Any, int], stated: Callable[[Any], Sheet]) -> list[Known]:
    return [Known(f"{name} {key}", source, value, partial(stated, key)) for key, value in values.items()]


MENAGE = {3: 1, 4: 2, 5: 13, 6: 80, 7: 579, 8: 4738, 10: 439_792}
NO_TWO_ALIKE = {2: 2, 3: 30, 4: 864, 5: 39_480, 6: 2_631_600}
LABELLED = {pairs: patterns * 2**pairs for pairs, patterns in NO_TWO_ALIKE.items()}
TWOS = {2: 1, 3: 6, 4: 90, 5: 2040, 6: 67_950, 7: 3_110_940, 8: 187_530_840}
HARD_SQUARES = {1: 2, 2: 7, 3: 63, 4: 1234, 5: 55_447, 6: 5_598_861, 7: 1_280_128_950, 8: 660_647_962_955}
DEDEKIND = {0: 2, 1: 3, 2: 6, 3: 20, 4: 168, 5: 7581, 6: 7_828_354}
LINES = [(2, 1), (5, 2), (7, 4), (12, 5), (30, 10), (100, 20)]
RINGS = [(4, 2), (7, 3), (12, 5), (30, 10), (100, 20)]

KNOWN = [
    Known("finch table", "Chen, Diaconis, Holmes, Liu 2005", 67_149_106_137_567_626, finches),
    *family("0/1 tables, sums 2,", "OEIS A001499 (from memory)", TWOS, lambda n: margins([2] * n, [2] * n)),
    Known("6 x 6, sums 3", "OEIS A058527 family", 297_200, lambda: margins([3] * 6, [3] * 6)),
    Known("8 x 8, sums 4", "McKay; OEIS A058527 family", 116_963_796_250, lambda: margins([4] * 8, [4] * 8)),
    Known("10 x 10, sums 5", "McKay", 6_736_218_287_430_460_752, lambda: margins([5] * 10, [5] * 10)),
    Known(
        "roster of 30 units and 12 slots",
        "two independent programs of our own",
        10214314065493035643627830151716123754157774361410208000,
        duty_roster,
    ),
    Known("derangements of 14", "OEIS A000166", 32_071_101_049, lambda: barred_order(14, [0])),
    *family("menage, order,", "OEIS A000179", MENAGE, lambda n: barred_order(n, [0, 1])),
    *family("menage, assignment,", "OEIS A000179", MENAGE, lambda n: barred_assignment(n, [0, 1])),
    *family(
        "no two alike (run), pairs:", "OEIS A114938", LABELLED, lambda k: pairs_in_a_row(k, {"kind": "run", "max": 1})
    ),
    *family("no two alike (apart), pairs:", "OEIS A114938", LABELLED, lambda k: pairs_in_a_row(k, {"kind": "apart"})),
    *family(
        "line",
        "Kaplansky 1943",
        {(n, k): comb(n - k + 1, k) for n, k in LINES},
        lambda nk: spread(*nk, ring=False),
    ),
    *family(
        "ring",
        "Kaplansky 1943",
        {(n, k): n * comb(n - k, k) // (n - k) for n, k in RINGS},
        lambda nk: spread(*nk, ring=True),
    ),
    *family("hard squares", "OEIS A006506", HARD_SQUARES, hard_squares),
    *family("Dedekind", "OEIS A000372 (5 and 6 from memory)", DEDEKIND, upward_closed),
    Known(
        "4 x 4 grid",
        "hook length formula: Frame, Robinson, Thrall 1954",
        24_024,
        lambda: linear_extensions(*grid(4, 4)),
    ),
    Known("2 x 8 grid", "Catalan number 8", 1430, lambda: linear_extensions(*grid(2, 8))),
    Known("subsets of 3 in order", "OEIS A046873", 48, lambda: linear_extensions(*lattice(3))),
    Known("subsets of 4 in order", "OEIS A046873", 1_680_384, lambda: linear_extensions(*lattice(4))),
    *family("Latin squares", "OEIS A002860", {3: 12, 4: 576}, latin),
    Known("Latin squares 5", "OEIS A002860", 161_280, lambda: latin(5), dear=("places, list",)),
    Known("dominoes, by differences", "Kasteleyn 1961; Temperley, Fisher 1961", 12_988_816, lambda: dominoes(8)),
    Known("dominoes, by cells", "Kasteleyn 1961; Temperley, Fisher 1961", 12_988_816, lambda: dominoes_by_cells(8)),
    *family(
        "pairing of 2 x",
        "(2n - 1)!!",
        {n: prod(range(1, 2 * n, 2)) for n in (1, 2, 3, 7, 50)},
        lambda n: sheet(numbered(2 * n), {"kind": "pairing"}),
    ),
    *family("pairing of two sides of", "n!", {n: factorial(n) for n in (1, 2, 5, 30)}, two_sides),
    Known(
        "hand 4, 4, 3, 2",
        "hypergeometric",
        11_404_407_300,
        lambda: hand(13, *(exactly(n, suit=s) for s, n in zip("CDHS", (4, 4, 3, 2), strict=True))),
    ),
    Known(
        "hand with 2 of each suit",
        "hypergeometric",
        408_563_048_608,
        lambda: hand(13, {"kind": "quota", "per": "suit", "min": 2}),
    ),
    Known(
        "five different ranks",
        "C(13, 5) 4^5",
        1_317_888,
        lambda: hand(5, {"kind": "distinct", "column": "rank", "min": 5}),
    ),
    Known("rank sum 105", "rank-sum null law, 10 and 10", 5448, lambda: rank_sum(10, 10, min=105, max=105)),
    Known("rank sum <= 78", "rank-sum null law, 10 and 10", 3996, lambda: rank_sum(10, 10, max=78)),
    Known("audit example", "exact listing of 70 selections", 41, vouchers),
    Known("panel example", "exact listing", 7, panel),
    Known("club pairings 2022/23", "published with the draw; listing of 8!", 3876, clubs),
    Known(
        "group draw 2022",
        "published as 1 in about 540 of 8!^3; recomputed",
        123_175_987_200,
        world_groups,
        ("list, places",),
    ),
]


CASES = [
    pytest.param(known, arrangement, id=f"{known.name}, {arrangement}")
    for known in KNOWN
    for arrangement in arrangements(known.stated().kind)
    if arrangement not in known.dear
]


@pytest.mark.parametrize(("known", "arrangement"), CASES)
def test_size_is_the_published_one(known: Known, arrangement: str) -> None:
    assert built(known.stated(), arrangement).size == known.expected, known.source


# --- chances, from sizes or from listing ---------------------------------------------------------------------


def listed_chances(stated: Sheet) -> list[Fraction]:
    """Chance of each unit, by listing all outcomes of a selection."""
    diagram = built(stated)
    drawn = Counter(unit for index in range(diagram.size) for unit in diagram.unrank(index).tolist())
    return [Fraction(drawn[unit], diagram.size) for unit in range(stated.kind.units)]


def test_chances_of_the_audit_example() -> None:
    """Exact listing of the 41 selections of 4 vouchers."""
    assert listed_chances(vouchers()) == [Fraction(times, 41) for times in (15, 15, 17, 17, 20, 24, 25, 31)]


def test_chances_of_the_panel_example() -> None:
    """Seven panels; the smallest case in which equal chances for all persons are out of reach."""
    one, two, three = (Fraction(times, 7) for times in (1, 2, 3))
    assert listed_chances(panel()) == [one, two, two, two, three, three, one]


def pair_chance(winner: str, second: str) -> Fraction:
    cell = {"kind": "pin", "cells": [{"unit": f"winner {winner}", "with": f"second {second}"}]}
    return Fraction(size(clubs(cell)), size(clubs()))


def test_chance_of_the_most_likely_club_pair_is_the_published_one() -> None:
    """Published: 39.86 % (1545 of 3,876) if all outcomes are equally likely."""
    assert pair_chance("C", "A") == Fraction(1545, 3876) == Fraction(515, 1292)


@pytest.mark.parametrize(("winner", "percent"), [("C", 18.11), ("A", 17.03), ("B", 11.20)])
def test_chances_of_other_club_pairs(winner: str, percent: float) -> None:
    """Recomputed; published by another analyst as 18.1 and 17 % for the first two."""
    assert round(100 * float(pair_chance(winner, "H")), 2) == percent


def test_chances_of_all_club_pairs_add_up() -> None:
    """Pairs that a rule bars have no chance, the others of one winner make 1."""
    for winner in GROUPS:
        chances = [pair_chance(winner, second) for second in GROUPS]
        assert sum(chances) == 1
        assert chances[GROUPS.index(winner)] == 0


def place_chance(unit: str, group: str) -> Fraction:
    cell = {"kind": "pin", "cells": [{"unit": unit, "place": group}]}
    return Fraction(size(world_groups(cell)), size(world_groups()))


def test_chance_that_the_host_meets_a_given_na_unit() -> None:
    """Recomputed as 2682/29701 = 9.03 %; published as about 1 in 11."""
    assert place_chance("2 0", "A") == place_chance("2 1", "A") == Fraction(2682, 29701)


def test_chance_that_the_na_unit_of_the_last_pot_meets_the_host() -> None:
    """Recomputed as 15.49 %; published as 15.4 %."""
    assert round(100 * float(place_chance("4 2", "A")), 2) == 15.49


def test_group_draw_is_one_of_532() -> None:
    """Recomputed; published as about 1 in 540 of all 8!^3 ways to place pots 2 to 4."""
    assert round(factorial(8) ** 3 / size(world_groups()), 2) == 532.15


@pytest.mark.parametrize(("drawn", "others"), [(1, 6), (3, 4), (6, 5), (9, 12), (10, 10)])
def test_rank_sums_have_their_null_law(drawn: int, others: int) -> None:
    """The tails of the rank-sum statistic as scipy computes them, at totals all over its range."""
    everything = comb(drawn + others, drawn)
    least = drawn * (drawn + 1) // 2
    for total in range(least, least + drawn * others + 1, max(1, drawn * others // 12)):
        one = built(rank_sum(drawn, others, min=total, max=total))
        ranks = 1 + one.unrank(one.size // 2)
        rest = np.setdiff1d(np.arange(1, drawn + others + 1), ranks)
        for alternative, bounds in (("less", {"max": total}), ("greater", {"min": total})):
            tail = mannwhitneyu(ranks, rest, alternative=alternative, method="exact").pvalue
            assert size(rank_sum(drawn, others, **bounds)) / everything == pytest.approx(tail, rel=1e-12)
