"""The ledger: intervals against published values and a second program, and counts against a direct recount."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pytest
from scipy.stats import binom, binomtest

from core.engine import SAMPLE, draw
from core.ledger import Count, Ledger, interval
from core.parts import Mask
from core.planner import Ready
from core.process import Rows
from core.proposals import Block, run_block
from core.record import admissible
from core.rules import Rule
from core.stream import Bits, make_key
from tests.core.draws import RARE, unbuilt
from tests.tools import sheet_of

KEY = make_key("test", "ledger")

# Upper limits in per cent for k = 0, 1, 2, 3 deviations in a sample of n, one-sided at the risk given: attribute sampling
# tables as auditors use them (AICPA Audit Guide "Audit Sampling"; Clopper-Pearson).
UPPER_LIMITS = [
    (25, 0.05, [11.3, 17.6, 23.1, 28.2]),
    (60, 0.05, [4.9, 7.7, 10.1, 12.4]),
    (60, 0.10, [3.8, 6.3, 8.6, 10.8]),
    (100, 0.05, [3.0, 4.7, 6.2, 7.6]),
]


@pytest.mark.parametrize(("size", "risk", "limits"), UPPER_LIMITS)
def test_upper_limits_are_the_published_ones(size: int, risk: float, limits: list[float]) -> None:
    """The tables round up or to the nearest tenth: either is accepted, no more."""
    for deviations, limit in enumerate(limits):
        upper = 100 * interval(deviations, size, 1 - 2 * risk)[1]
        assert limit - 0.1 < upper <= limit + 0.05, (size, deviations)


@pytest.mark.parametrize("level", [0.5, 0.95, 0.99, 1 - 1e-6])
def test_interval_is_that_of_scipy(level: float) -> None:
    for proposed in (1, 2, 7, 100, 12_345):
        for accepted in {0, 1, proposed // 3, proposed - 1, proposed}:
            theirs = binomtest(accepted, proposed).proportion_ci(level, method="exact")
            assert interval(accepted, proposed, level) == pytest.approx((theirs.low, theirs.high), rel=1e-9, abs=1e-12)


def test_interval_of_nothing_says_nothing() -> None:
    assert interval(0, 0) == (0.0, 1.0)
    assert Ledger().interval() == (0.0, 1.0)


@pytest.mark.parametrize("chance", [0.01, 0.3, 0.5])
def test_interval_covers_at_least_as_often_as_it_says(chance: float) -> None:
    """Exact: the chances of all results whose interval holds the true value are added up."""
    size = 40
    covered = 0.0
    for result in range(size + 1):
        low, high = interval(result, size, 0.9)
        if low <= chance <= high:
            covered += float(binom.pmf(result, size, chance))
    assert covered >= 0.9


# -- counts ---------------------------------------------------------------------------------------------------


class Given:
    """Stands for a diagram: proposals that are given, some of them refused by the last acceptance."""

    def __init__(self, rows: Rows, alive: Mask) -> None:
        self._rows, self._alive = rows, alive

    def propose(self, count: int, bits: Bits) -> tuple[Rows, Mask]:
        return self._rows[:count], self._alive[:count].copy()


def proposals(ready: Ready, key: bytes, blocks: int) -> tuple[Rows, Mask]:
    """Return the proposals of the first blocks, one after the other."""
    made = [ready.diagram.propose(ready.plan.block, Bits(key, block)) for block in range(blocks)]
    return np.concatenate([rows for rows, _ in made]), np.concatenate([alive for _, alive in made])


def recount(ready: Ready, rows: Rows, sampled: Mask) -> Ledger:
    """Return the ledger of proposals, each put to every check, counted one by one and plainly."""
    ledger = Ledger.over(rule.id for rule in ready.checks)
    for row, counted in zip(rows, sampled, strict=True):
        broken = [rule.id for rule in ready.checks if not rule.check(row[None])[0]]
        ledger.proposed += 1
        ledger.accepted += not broken
        ledger.sampled += int(counted)
        ledger.passed += int(counted and not broken)
        for turn, id in enumerate(broken):
            ledger.rules[id].first += turn == 0
            ledger.rules[id].any += int(counted)
            ledger.rules[id].alone += int(counted and len(broken) == 1)
    return ledger


def common(block: int) -> Ready:
    """Return a sheet with nothing built in, of which about one proposal in eight is accepted."""
    units = [{"id": f"u{i}", "dept": "aab"[i % 3], "pay": i} for i in range(12)]
    rules = [
        {"kind": "quota", "where": {"dept": "b"}, "min": 2},
        {"kind": "total", "column": "pay", "max": 26},
        {"kind": "apart", "units": ["u0", "u1", "u2"]},
    ]
    return unbuilt(sheet_of(units, {"kind": "selection", "size": 5}, rules), block=block)


@pytest.mark.parametrize("wanted", [1, 7, 50])
def test_counts_are_those_of_a_direct_recount(wanted: int) -> None:
    """A draw of several blocks, the last of them in part; of each block the first SAMPLE proposals are sampled."""
    ready = common(block=SAMPLE + 36)
    drawn = draw(ready, KEY, wanted)
    block, place = drawn.addresses[-1]
    total = block * ready.plan.block + place + 1
    rows, alive = proposals(ready, KEY, block + 1)
    assert alive.all()
    sampled = np.arange(total) % ready.plan.block < SAMPLE
    assert drawn.ledger == recount(ready, rows[:total], sampled)
    assert sum(count.any for count in drawn.ledger.rules.values()) > 0


@pytest.mark.parametrize("limit", [1, 63, 64, 65, 200, 640])
def test_at_a_limit_the_ledger_is_that_of_the_same_proposals_as_one_block(limit: int) -> None:
    ready = common(block=SAMPLE)
    drawn = draw(ready, KEY, 10**6, limit=limit)
    rows, alive = proposals(ready, KEY, -(-limit // SAMPLE))
    ids = [rule.id for rule in ready.checks]
    block = run_block(Given(rows, alive), ready.checks, Bits(KEY, 0), limit, limit)  # type: ignore[arg-type]
    assert drawn.ledger == block.ledger(ids)
    assert drawn.ledger.proposed == limit
    assert not drawn.complete
    assert (drawn.rows == block.rows).all()


def test_every_proposal_is_counted_once() -> None:
    ready = common(block=256)
    ledger = draw(ready, KEY, 300).ledger
    rejected = sum(count.first for count in ledger.rules.values())
    assert ledger.proposed == ledger.accepted + ledger.weighting + rejected
    assert ledger.accepted == 300


def test_ledger_ends_at_the_last_accepted_outcome() -> None:
    ready = common(block=128)
    for wanted in (1, 2, 30, 31, 32):
        drawn = draw(ready, KEY, wanted)
        block, place = drawn.addresses[-1]
        assert drawn.ledger.proposed == block * 128 + place + 1
        assert drawn.ledger.accepted == wanted == len(drawn.rows) == len(drawn.addresses)


def test_what_the_last_acceptance_refuses_is_weighting_and_nobody_elses() -> None:
    ready = common(block=64)
    rows, _ = ready.diagram.propose(64, Bits(KEY, 0))
    alive = np.arange(64) % 3 > 0
    block = run_block(Given(rows, alive), ready.checks, Bits(KEY, 0), 64, 64)  # type: ignore[arg-type]
    ledger = block.ledger([rule.id for rule in ready.checks])
    among = recount(ready, rows[alive], np.ones(int(alive.sum()), bool))
    assert ledger.weighting == int((~alive).sum()) > 0
    assert ledger.rules == among.rules
    assert ledger.accepted == among.accepted
    assert ledger.passed == among.passed
    assert ledger.proposed == 64 == ledger.accepted + ledger.weighting + sum(c.first for c in ledger.rules.values())


def test_what_a_rule_rejects_does_not_depend_on_the_order_of_checks() -> None:
    ready = common(block=SAMPLE)
    bits = [Bits(KEY, 0) for _ in range(2)]
    ids = [rule.id for rule in ready.checks]
    one = run_block(ready.diagram, ready.checks, bits[0], SAMPLE, SAMPLE).ledger(ids)
    other = run_block(ready.diagram, ready.checks[::-1], bits[1], SAMPLE, SAMPLE).ledger(ids[::-1])
    for id in ids:
        assert (one.rules[id].any, one.rules[id].alone) == (other.rules[id].any, other.rules[id].alone)
    assert [one.rules[id].first for id in ids] != [other.rules[id].first for id in ids]
    assert one.accepted == other.accepted


def test_lifted_is_the_acceptance_without_the_rule() -> None:
    """On the same proposals, so exactly."""
    ready = common(block=SAMPLE)
    rows, alive = proposals(ready, KEY, 1)
    ids = [rule.id for rule in ready.checks]
    ledger = run_block(Given(rows, alive), ready.checks, Bits(KEY, 0), SAMPLE, SAMPLE).ledger(ids)  # type: ignore[arg-type]
    for id in ids:
        others = [rule for rule in ready.checks if rule.id != id]
        assert ledger.lifted(id) == float(np.mean(passes(others, rows)))


def passes(rules: Sequence[Rule], rows: Rows) -> Mask:
    good = np.ones(len(rows), bool)
    for rule in rules:
        good &= rule.check(rows)
    return good


def test_a_block_cut_short_counts_its_head_only() -> None:
    fate = np.array([0, -1, 1, -2, -1, 0], np.int16)
    broken = np.array([[1, 0], [0, 0], [0, 1], [1, 1]], bool)
    block = Block(fate, np.zeros((2, 1)), broken)
    assert block.places().tolist() == [1, 4]
    assert block.ledger(["a", "b"], 3) == Ledger(3, 1, 0, 3, 1, {"a": Count(1, 1, 1), "b": Count(1, 1, 1)})
    # the fourth proposal was refused by the last acceptance: what it breaks is nobody's business
    assert block.ledger(["a", "b"]) == Ledger(6, 2, 1, 4, 1, {"a": Count(2, 1, 1), "b": Count(1, 1, 1)})


def test_adding_parts_gives_the_whole() -> None:
    whole = Ledger.over(["a"])
    whole.add(Ledger(5, 1, 1, 2, 0, {"a": Count(3, 2, 2)}))
    whole.add(Ledger(7, 2, 0, 2, 1, {"a": Count(5, 1, 1)}))
    assert whole == Ledger(12, 3, 1, 4, 1, {"a": Count(8, 3, 3)})
    assert whole.acceptance == 0.25
    assert whole.lifted("a") == 1.0
    assert Ledger.over(["a"]).lifted("a") is None


def test_size_of_the_admissible_set_lies_in_its_interval() -> None:
    """6 = 2 + 2 + 1 + 1 from four departments of five: 6 ways to say which give two, 10 x 10 x 5 x 5 to pick."""
    units = [{"id": f"u{i}", "dept": "abcd"[i % 4]} for i in range(20)]
    rule = {"kind": "quota", "per": "dept", "min": 1, "max": 2}
    ready = unbuilt(sheet_of(units, {"kind": "selection", "size": 6}, [rule]), block=256)
    exact = 6 * 10 * 10 * 5 * 5
    ledger = draw(ready, KEY, 400).ledger
    told = admissible(ready.plan, int(ready.diagram.weight), ledger)
    assert int(told["low"]) < exact < int(told["high"])
    assert abs(int(told["estimate"]) - exact) < exact / 4


def test_the_rare_sheet_is_rare() -> None:
    """Other tests rely on it: about one proposal in 1,200 is accepted."""
    ledger = draw(unbuilt(RARE, block=1024), KEY, 20).ledger
    assert 500 < 1 / ledger.acceptance < 3000
