"""What a draw gives is uniform over the admissible outcomes, kind by kind; and the usual ways to spoil that are seen.

The law of a diagram is tested exactly elsewhere, without a p-value. Here whole draws are judged: superset, checks, blocks,
the order in which outcomes are taken, and the rule by which a draw stops. Each test decides once at level ALPHA; the
number of draws comes from its power: an effect of size w (w^2 = K x sum of (p - 1/K)^2) escapes at most once in 10,000.
Every twin below spoils a draw in a way that programs of this sort are known for, with as many draws, and must be caught.
"""

from __future__ import annotations

import os
from collections import Counter
from collections.abc import Callable, Iterable, Iterator

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.stats import chi2, ncx2

from core.engine import draw
from core.planner import Ready, make_plan
from core.proposals import run_block
from core.sheet import Sheet
from core.stream import Bits, make_key
from tests.conftest import SEED
from tests.core.draws import unbuilt
from tests.tools import ALPHA, Key, Row, Verdict, admissible, chi_square, keys_of, sheet_of, universe

MISSED = 1e-4

# Book values and departments of the worked example of an audit: 41 of 70 samples of 4 are admissible.
_VOUCHERS: list[Row] = [
    {"id": f"v{i}", "value": value, "dept": dept}
    for i, (value, dept) in enumerate(zip((5, 8, 12, 20, 30, 45, 60, 100), "AAAABBCC", strict=True))
]
_SIX: list[Row] = [{"id": f"u{i}", "dept": "aabbcc"[i], "rank": i} for i in range(6)]

SHEETS: dict[str, tuple[int, Sheet]] = {
    "selection": (
        41,
        sheet_of(
            _VOUCHERS,
            {"kind": "selection", "size": 4},
            [
                {"kind": "quota", "where": {"dept": "A"}, "max": 2},
                {"kind": "total", "column": "value", "min": 120},
            ],
        ),
    ),
    "assignment": (
        # 6!/(2!2!2!) = 90 ways to fill three places of two; without a pair of one department in a place: 48
        48,
        sheet_of(
            _SIX,
            {"kind": "assignment", "places": [{"id": p, "min": 2, "max": 2} for p in "pqr"]},
            [{"kind": "apart", "alike": "dept"}],
        ),
    ),
    "roster": (
        # one of three on duty in the second slot: 3 x 3 x 3; two of them: 3 x 1 x 1
        30,
        sheet_of(
            _SIX[:3],
            {"kind": "roster", "slots": ["s1", "s2", "s3"]},
            [{"kind": "quota", "per": "slot", "min": 1, "max": 2}, {"kind": "spacing", "min": 2}],
        ),
    ),
    "order": (
        # two a, two b, one c: 48 orders without neighbours alike, in half of them u0 before u1
        24,
        sheet_of(
            _SIX[:5],
            {"kind": "order"},
            [{"kind": "run", "alike": "dept", "max": 1}, {"kind": "before", "pairs": [["u0", "u1"]]}],
        ),
    ),
    "pairing": (
        # eight in four pairs: 105; with nobody of their own department 60
        60,
        sheet_of(
            [{"id": f"u{i}", "dept": "aabbccdd"[i]} for i in range(8)],
            {"kind": "pairing"},
            [{"kind": "differ", "column": "dept"}],
        ),
    ),
}


@pytest.fixture
def key(request: pytest.FixtureRequest) -> bytes:
    """Return the key of a test's own."""
    return make_key("test", os.environ.get(SEED, ""), [("test", request.node.nodeid)])


def enough(cells: int, effect: float) -> int:
    """Return how many draws make Pearson's test at level ALPHA miss an effect of this size with chance MISSED."""
    bound = chi2.isf(ALPHA, cells - 1)
    needed = brentq(lambda size: ncx2.cdf(bound, cells - 1, size) - MISSED, 1, 10_000)
    return max(100 * cells, int(np.ceil(needed / effect**2)))


def counted(sheet: Sheet, keys: Iterable[Key]) -> list[int]:
    """Return how often each admissible outcome came; nothing else may have come."""
    counts = Counter(keys)
    wanted = sorted(admissible(sheet))
    assert set(counts) <= set(wanted)
    return [counts[outcome] for outcome in wanted]


def test_number_of_draws_comes_from_power() -> None:
    """Values of a second program: 105, 139, 220 and 496 for 6, 24, 120 and 1,000 outcomes and an effect of 1."""
    for cells, size in ((6, 105), (24, 139), (120, 220), (1000, 496)):
        assert enough(cells, 0.01) == pytest.approx(size * 10_000, rel=0.01)
    assert enough(1000, 1.0) == 100_000, "the law of the statistic needs a hundred draws for each outcome"


@pytest.mark.parametrize("name", SHEETS)
def test_the_sheets_have_so_many_outcomes(name: str) -> None:
    number, sheet = SHEETS[name]
    assert len(admissible(sheet)) == number


# -- draws ----------------------------------------------------------------------------------------------------


@pytest.mark.statistical
@pytest.mark.parametrize("plan", ["planned", "everything checked"])
@pytest.mark.parametrize("name", SHEETS)
def test_a_draw_is_uniform(name: str, plan: str, key: bytes, verdict: Verdict) -> None:
    """An effect of 0.1 is seen: one outcome in ten with chances 1.35 times those of the rest, for example."""
    number, sheet = SHEETS[name]
    wanted = enough(number, 0.1)
    ready = make_plan(sheet, outcomes=wanted) if plan == "planned" else unbuilt(sheet, block=512)
    verdict.fair(chi_square(counted(sheet, keys_of(draw(ready, key, wanted).rows))))


@pytest.mark.statistical
def test_the_first_outcome_of_a_draw_is_uniform_over_seeds(key: bytes, verdict: Verdict) -> None:
    """Most draws stop after one outcome: the rule by which they stop must not prefer any."""
    number, sheet = SHEETS["selection"]
    ready = unbuilt(sheet, block=16)
    keys = (make_key("draw", key.hex(), [("", str(turn))]) for turn in range(enough(number, 0.2)))
    verdict.fair(chi_square(counted(sheet, [keys_of(draw(ready, one, 1).rows)[0] for one in keys])))


# -- twins ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", SHEETS)
def test_twin_that_repairs_by_the_nearest_outcome_is_caught(name: str, key: bytes) -> None:
    """A proposal that breaks a rule is changed as little as possible until it breaks none."""
    number, sheet = SHEETS[name]
    wanted = enough(number, 0.1)
    everything = keys_of(universe(sheet.kind))
    good = np.array(sorted(admissible(sheet)))
    nearest = {one: tuple(good[(good != np.array(one)).sum(axis=1).argmin()].tolist()) for one in everything}
    proposed, _ = unbuilt(sheet).diagram.propose(wanted, Bits(key, 0))
    Verdict.biased(chi_square(counted(sheet, [nearest[one] for one in keys_of(proposed)])))


def test_twin_that_repairs_by_exchange_is_caught(key: bytes) -> None:
    """A unit that is in and one that is out change places, at random, until the rules hold."""
    number, sheet = SHEETS["selection"]
    bits = Bits(key, 1)
    good = admissible(sheet)
    rows = unbuilt(sheet).diagram.propose(enough(number, 0.1), Bits(key, 0))[0].tolist()
    repaired = []
    for row in rows:
        while tuple(row) not in good:
            out = [unit for unit in range(len(_VOUCHERS)) if unit not in row]
            leaves, comes = bits.below(np.array([len(row), len(out)])).tolist()
            row = sorted([*(unit for unit in row if unit != row[leaves]), out[comes]])
        repaired.append(tuple(row))
    Verdict.biased(chi_square(counted(sheet, repaired)))


def first_of_blocks(ready: Ready, bits: Callable[[int], Bits]) -> Iterator[Key]:
    """Yield the first accepted outcome of each block that has one."""
    block = 0
    while True:
        made = run_block(ready.diagram, ready.checks, bits(block), ready.plan.block, 0)
        if len(made.rows):
            yield keys_of(made.rows)[0]
        block += 1


def test_twin_that_takes_the_worker_that_finishes_first_is_caught(key: bytes) -> None:
    """Two workers, one block each, half of the outcomes take longer to check: the quick half gets 3/4 instead of 1/2."""
    number, sheet = SHEETS["selection"]
    slow = set(sorted(admissible(sheet))[number // 2 :])
    finished = first_of_blocks(unbuilt(sheet, block=16), lambda block: Bits(key, block))
    taken = []
    for _ in range(enough(number, 0.2)):
        race = [next(finished), next(finished)]
        taken.append(race[race[0] in slow and race[1] not in slow])
    Verdict.biased(chi_square(counted(sheet, taken)))


def test_the_same_blocks_in_their_order_are_not_caught(key: bytes) -> None:
    """The twins above and below fail for what they do with the blocks, not for the blocks: their own control.

    Decides nothing about the draw (that is done above); with its fixed blocks it is not random.
    """
    number, sheet = SHEETS["selection"]
    fixed = make_key("test", "control")
    finished = first_of_blocks(unbuilt(sheet, block=16), lambda block: Bits(fixed, block))
    taken = [next(finished) for _ in range(enough(number, 0.2))]
    assert chi_square(counted(sheet, taken)) > ALPHA


def test_twin_that_reseeds_each_block_from_a_small_number_is_caught(key: bytes) -> None:
    """Block seeds of 8 bits: after some hundred blocks nothing new comes, however many are drawn."""
    number, sheet = SHEETS["selection"]

    def reseeded(block: int) -> Bits:
        small = int(Bits(key, block).words(1)[0]) & 0xFF
        return Bits(make_key("test", str(small)), 0)

    finished = first_of_blocks(unbuilt(sheet, block=16), reseeded)
    Verdict.biased(chi_square(counted(sheet, [next(finished) for _ in range(enough(number, 0.2))])))


class ModuloBits(Bits):
    """Bounded integers by the remainder of a 4-bit word: the small ones come more often."""

    def below(self, bounds: NDArray[np.int64]) -> NDArray[np.int64]:
        flat = bounds.reshape(-1)
        words = (self.words(flat.size) & np.uint64(15)).astype(np.int64)
        return (words % flat).reshape(bounds.shape)


def test_twin_with_modulo_bias_is_caught(key: bytes) -> None:
    number, sheet = SHEETS["selection"]
    ready = unbuilt(sheet)
    made = run_block(ready.diagram, ready.checks, ModuloBits(key, 0), 2 * enough(number, 0.1), 0)
    Verdict.biased(chi_square(counted(sheet, keys_of(made.rows))))


def test_twin_that_stops_when_it_likes_what_it_sees_is_caught(key: bytes) -> None:
    """Drawn again, once, whenever the outcome is one of the dearer half: what a reason for every further draw is for."""
    number, sheet = SHEETS["selection"]
    values = np.array([unit["value"] for unit in _VOUCHERS])
    ready = unbuilt(sheet, block=512)
    outcomes = keys_of(draw(ready, key, 2 * enough(number, 0.1)).rows)
    middle = float(np.median([values[list(one)].sum() for one in sorted(admissible(sheet))]))
    pairs = zip(outcomes[::2], outcomes[1::2], strict=True)
    kept = [second if values[list(first)].sum() > middle else first for first, second in pairs]
    Verdict.biased(chi_square(counted(sheet, kept)))
