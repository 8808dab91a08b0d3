"""Rules: conditions on outcomes. One file each; `load` finds them.

Every rule can `check` a batch of outcomes. Many can also be built into the superset: as parts of the state (`parts`),
as cells that may or must be used (`cells`), or in a roster as what one unit may do (`automaton`); then `labels` says
which units the rule tells apart. A rule knows the frame and the kind (through `core.setting`), never another rule.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray

from core.kinds import Members
from core.parts import Mask, Part, UnitAutomaton
from core.process import Rows
from core.reading import Report
from core.setting import RuleFields, Setting
from core.statement import Statement

SELECTION, ASSIGNMENT, ROSTER, ORDER, PAIRING = "selection", "assignment", "roster", "order", "pairing"


@dataclass(frozen=True)
class Case:
    """A small example of a rule: used by the tests of all rules alike.

    `units` is the list (inline), `outcome` the ``[outcome]`` table, `rule` the ``[[rule]]`` table.
    """

    units: tuple[dict[str, Any], ...]
    outcome: dict[str, Any]
    rule: dict[str, Any]


class Rule(ABC):
    """A condition on outcomes, read from one ``[[rule]]`` of the sheet.

    Class attributes: `name` is the word in the sheet, `kinds` the kinds it applies to, `meaning` a sentence, `example`
    TOML, `Fields` its keys. Instances carry `id` and `note`.
    """

    name: ClassVar[str]
    kinds: ClassVar[tuple[str, ...]]
    meaning: ClassVar[str]
    example: ClassVar[str]
    Fields: ClassVar[type[RuleFields]]
    known: ClassVar[dict[str, type[Rule]]] = {}
    id: str
    note: str

    def __init_subclass__(cls) -> None:
        """Register the rule under its name."""
        Rule.known[cls.name] = cls

    @classmethod
    @abstractmethod
    def of(cls, fields: Any, setting: Setting, report: Report) -> Rule | None:
        """Return the rule that the table states, or None after reporting what is wrong."""

    @classmethod
    @abstractmethod
    def cases(cls) -> Sequence[Case]:
        """Return small examples, at least one for each kind, that some outcomes meet and some do not."""

    @abstractmethod
    def check(self, rows: Rows) -> Mask:
        """Return which outcomes meet the rule: bool, shape (batch,). Row i of the answer depends on row i only."""

    @abstractmethod
    def state(self, model: Statement) -> None:
        """Say when the rule holds, about the cells of one outcome: exactly those outcomes that `check` passes."""

    @abstractmethod
    def words(self) -> str:
        """Return the rule as complete sentences."""

    def figure(self, row: Rows) -> str:
        """Return what was counted in one outcome, in words, or ""."""
        return ""

    def effort(self) -> int:
        """Return what a check costs, in passes over the outcome; for comparing only."""
        return 1

    # -- being built in ---------------------------------------------------------------------------------------

    def labels(self) -> list[NDArray[np.int64]]:
        """Return labels, each of shape (units,): units that differ in one of them are told apart by the parts."""
        return []

    def parts(self, members: Members) -> list[Part] | None:
        """Return the parts that hold the rule over these groups of units, or None if it can only be checked."""
        return None

    def weaker(self) -> Sequence[Rule]:
        """Return rules that every outcome meets that meets this one, and that are cheaper to build in; the strictest first.

        Their ids begin with this rule's id and "~". Building one in loses no admissible outcome; this rule is still checked.
        """
        return ()

    def counts_along(self) -> bool:
        """Return whether the rule is held by parts alone, so that it can also be built in for some states only."""
        return bool(self.labels()) and self.cells() is None and self.automaton() is None

    def cells(self) -> tuple[Mask, Mask] | None:
        """Return which cells the rule leaves open (may) and which it demands (must), or None."""
        return None

    def automaton(self) -> UnitAutomaton | None:
        """Return what the rule lets one unit do from slot to slot (rosters), or None."""
        return None


def heads(members: Members) -> NDArray[np.int64]:
    """Return the first unit of each group, which stands for all of it."""
    return np.array([int(m[0]) for m in members], np.int64)


def unit_groups(units: int, codes: NDArray[np.int64] | None) -> list[list[int]]:
    """Return the units of each value (negative: no value), or without values each unit on its own."""
    if codes is None:
        return [[unit] for unit in range(units)]
    return [np.flatnonzero(codes == value).tolist() for value in range(int(codes.max(initial=-1)) + 1)]
