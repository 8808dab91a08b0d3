"""One block of proposals: drawn from the superset, put to the checks, counted."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from core.ledger import Count, Ledger
from core.parts import Mask
from core.process import Rows
from core.rules import Rule
from core.stream import Bits
from core.supersets.diagram import Diagram

ACCEPTED, WEIGHTED = -1, -2


@dataclass(frozen=True, eq=False)
class Block:
    """What became of the proposals of a block.

    Attributes
    ----------
    fate
        int16, shape (proposals,): the number of the check that rejected first, ACCEPTED, or WEIGHTED (the last
        acceptance of the superset refused it).
    rows
        The accepted outcomes, in order.
    broken
        bool, shape (sampled, checks): the first `sampled` proposals against every check.
    """

    fate: NDArray[np.int16]
    rows: Rows
    broken: Mask

    def places(self) -> NDArray[np.int64]:
        """Return the places in the block of the accepted proposals."""
        return np.flatnonzero(self.fate == ACCEPTED)

    def ledger(self, ids: Sequence[str], upto: int | None = None) -> Ledger:
        """Return the counts of the first `upto` proposals (None: all)."""
        fate = self.fate[:upto]
        sample = min(len(self.broken), len(fate))
        real = fate[:sample] != WEIGHTED
        broken = self.broken[:sample][real]
        number = broken.sum(axis=1)
        rules = {
            id: Count(
                first=int((fate == check).sum()),
                any=int(broken[:, check].sum()),
                alone=int((broken[:, check] & (number == 1)).sum()),
            )
            for check, id in enumerate(ids)
        }
        return Ledger(
            proposed=len(fate),
            accepted=int((fate == ACCEPTED).sum()),
            weighting=int((fate == WEIGHTED).sum()),
            sampled=sample,
            passed=int((number == 0).sum()),
            rules=rules,
        )


def run_block(diagram: Diagram, checks: Sequence[Rule], bits: Bits, count: int, sample: int) -> Block:
    """Return the fate of `count` proposals made from these bits; the first `sample` are put to every check.

    Guarantee: accepted rows are independent and uniform over the outcomes of the diagram that pass all checks; whether
    proposal i is accepted depends on the block's bits only.
    """
    rows, alive = diagram.propose(count, bits)
    fate = np.full(count, ACCEPTED, np.int16)
    fate[~alive] = WEIGHTED
    sample = min(sample, count)
    broken = np.zeros((sample, len(checks)), bool)
    left = np.flatnonzero(alive)
    for number, check in enumerate(checks):
        # proposals of the sample go through every check, the others only while they are in
        sampled = np.flatnonzero(alive[:sample] & (fate[:sample] != ACCEPTED))
        asked = np.concatenate([sampled, left])
        if not asked.size:
            break
        verdict = check.check(rows[asked])
        failed = asked[~verdict]
        broken[failed[failed < sample], number] = True
        out = left[~verdict[len(sampled) :]]
        fate[out] = number
        left = left[verdict[len(sampled) :]]
    return Block(fate, rows[fate == ACCEPTED], broken)
