"""The ledger: how many proposals were made, and which rule rejected how many."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import Any

WEIGHTING = "weighting"


def interval(accepted: int, proposed: int, level: float = 0.95) -> tuple[float, float]:
    """Return the Clopper-Pearson interval of a probability.

    Guarantee: covers the true value with at least `level` where `proposed` was fixed beforehand (Clopper and Pearson 1934),
    and also where it ended at the last acceptance wanted. With nothing proposed: (0, 1).
    """
    from scipy.special import betaincinv  # imported where used: a slow import

    alpha = 1 - level
    low = float(betaincinv(accepted, proposed - accepted + 1, alpha / 2)) if accepted else 0.0
    high = float(betaincinv(accepted + 1, proposed - accepted, 1 - alpha / 2)) if accepted < proposed else 1.0
    return low, high


@dataclass
class Count:
    """Rejections by one rule.

    `first`: it was the first of the plan's checks to reject, of all proposals. `any`: it rejects, whatever the others
    do; `alone`: it rejects and no other does; both of the sampled proposals only.
    """

    first: int = 0
    any: int = 0
    alone: int = 0


@dataclass
class Ledger:
    """Counts of a draw, or of part of one.

    `sampled` proposals were put to every check (the rest stopped at the first that rejected); `lifted` is derived: what
    the acceptance would be without a rule.
    """

    proposed: int = 0
    accepted: int = 0
    weighting: int = 0
    sampled: int = 0
    passed: int = 0
    rules: dict[str, Count] = field(default_factory=dict)

    @classmethod
    def over(cls, ids: Iterable[str]) -> Ledger:
        """Return an empty ledger of these checks."""
        return cls(rules={id: Count() for id in ids})

    def add(self, other: Ledger) -> None:
        """Add the counts of another part of the same draw."""
        self.proposed += other.proposed
        self.accepted += other.accepted
        self.weighting += other.weighting
        self.sampled += other.sampled
        self.passed += other.passed
        for id, count in other.rules.items():
            mine = self.rules.setdefault(id, Count())
            mine.first += count.first
            mine.any += count.any
            mine.alone += count.alone

    @property
    def acceptance(self) -> float:
        """Accepted per proposal (0 if nothing was proposed)."""
        return self.accepted / self.proposed if self.proposed else 0.0

    def interval(self, level: float = 0.95) -> tuple[float, float]:
        """Return the Clopper-Pearson interval of the acceptance."""
        return interval(self.accepted, self.proposed, level)

    def lifted(self, id: str) -> float | None:
        """Return the acceptance if this check were lifted, from the sample; None without a sample."""
        return (self.passed + self.rules[id].alone) / self.sampled if self.sampled else None

    def to_json(self) -> dict[str, Any]:
        """Return the ledger as the record and the command line show it."""
        low, high = self.interval()
        return {
            "proposed": self.proposed,
            "accepted": self.accepted,
            "acceptance": {"estimate": self.acceptance, "low": low, "high": high},
            "weighting": self.weighting,
            "sampled": self.sampled,
            "rules": [
                {"id": id, "first": c.first, "any": c.any, "alone": c.alone, "lifted": self.lifted(id)}
                for id, c in self.rules.items()
            ],
        }
