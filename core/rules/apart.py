"""Apart: units that may not be drawn, placed, on duty, paired or next to each other together."""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from core.cellrules import open_table
from core.kinds import Members
from core.parts import Columns, Count, Event, Mask, Part
from core.process import Rows
from core.reading import Report
from core.rules import ASSIGNMENT, ORDER, PAIRING, ROSTER, SELECTION, Case, Rule, heads
from core.setting import GroupFields, Setting, Units, group_key
from core.statement import Statement

_WORDS = {
    SELECTION: "At most one of {group} is drawn.",
    ASSIGNMENT: "No two of {group} are in the same place.",
    ROSTER: "No two of {group} are on duty in the same slot.",
    ORDER: "No two of {group} stand next to each other.",
    PAIRING: "No two of {group} are paired with each other.",
}
_ALIKE = {
    SELECTION: "At most one unit of each {column} is drawn.",
    ASSIGNMENT: "No two units with the same {column} are in the same place.",
    ROSTER: "No two units with the same {column} are on duty in the same slot.",
    ORDER: "No two units with the same {column} stand next to each other.",
    PAIRING: "No two units with the same {column} are paired with each other.",
}


class Apart(Rule):
    """Of each group no two units together."""

    name = "apart"
    kinds = (SELECTION, ASSIGNMENT, ROSTER, ORDER, PAIRING)
    meaning = (
        "The units of a group are kept from each other: at most one is drawn (selection), no two in one place "
        "(assignment), in one slot (roster), in one pair (pairing) or next to each other (order)."
    )
    example = '[[rule]]\nkind = "apart"\npairs = [["p1", "p2"], ["p3", "p7"]]'
    Fields = GroupFields

    def __init__(self, setting: Setting, groups: Sequence[Units], alike: str | None) -> None:
        self._setting, self._kind, self._groups, self._alike = setting, setting.kind, tuple(groups), alike

    @classmethod
    def of(cls, fields: Any, setting: Setting, report: Report) -> Apart | None:
        """Read the groups."""
        groups = setting.groups(fields.units, fields.pairs, fields.file, fields.alike, report)
        if groups is None:
            return None
        if not groups:
            report.notice("this rule always holds: no two units are alike.")
        places = len(setting.kind.places.ids)
        largest = max((len(g) for g in groups), default=0)
        if setting.kind.name == ASSIGNMENT and largest > places:
            group = next(g for g in groups if len(g) == largest)
            message = f"this can never hold: {largest} units cannot all be in different places."
            found = setting.unit_words(group.tolist())
            report.fault(group_key(fields), message, found=found, allowed=f"groups of at most {places}")
            return None
        return cls(setting, groups, fields.alike)

    @classmethod
    def cases(cls) -> Sequence[Case]:
        """Return examples for each kind."""
        units = tuple({"id": f"u{i}", "team": "aabb"[i]} for i in range(4))
        pairs = {"pairs": [["u0", "u1"], ["u1", "u3"]]}
        return [
            Case(units, {"kind": "selection", "size": 2}, pairs),
            Case(units, {"kind": "selection"}, {"alike": "team"}),
            Case(units, {"kind": "assignment", "places": ["p", "q", "r"]}, pairs),
            Case(units, {"kind": "assignment", "places": ["p", "q", "r"]}, {"units": ["u0", "u2", "u3"]}),
            Case(units[:3], {"kind": "roster", "slots": ["s", "t"]}, {"alike": "team"}),
            Case(units, {"kind": "order"}, pairs),
            Case(units, {"kind": "order"}, {"alike": "team"}),
            Case(units, {"kind": "pairing"}, pairs),
        ]

    def check(self, rows: Rows) -> Mask:
        """Look at every group."""
        good = np.ones(len(rows), bool)
        for group in self._groups:
            good &= self._check_group(rows, group)
        return good

    def _check_group(self, rows: Rows, group: Units) -> Mask:
        name = self._kind.name
        inside = np.zeros(self._kind.units + 1, bool)
        inside[group] = True
        good: Mask
        if name == SELECTION:
            good = inside[rows].sum(axis=1) <= 1
        elif name == ROSTER:
            good = (rows[:, group].sum(axis=1) <= 1).all(axis=1)
        elif name == ASSIGNMENT:
            places = np.sort(rows[:, group], axis=1)
            good = np.asarray((places[:, 1:] > places[:, :-1]).all(axis=1), bool)
        elif name == ORDER:
            member = inside[rows]
            good = np.logical_not((member[:, 1:] & member[:, :-1]).any(axis=1))
        else:
            partner = rows[:, group]
            good = ~(inside[partner] & (partner != group)).any(axis=1)
        return good

    def effort(self) -> int:
        """One pass per group."""
        return max(1, len(self._groups))

    def state(self, model: Statement) -> None:
        """Say of each group that at most one is anywhere."""
        places = range(len(self._kind.places.ids))
        for group in (units.tolist() for units in self._groups):
            if self._kind.name == PAIRING:
                for unit, partner in itertools.combinations(group, 2):
                    model.must(~model.at(unit, partner))
            elif self._kind.name == ORDER:
                for place in places[:-1]:
                    model.at_most_one(model.at(unit, p) for unit in group for p in (place, place + 1))
            else:
                for place in places:
                    model.at_most_one(model.at(unit, place) for unit in group)

    def words(self) -> str:
        """Return for example "No two of p1 and p2 are in the same place."."""
        if self._alike is not None:
            return _ALIKE[self._kind.name].format(column=self._alike)
        told = [
            _WORDS[self._kind.name].format(group=self._setting.unit_words(group.tolist())) for group in self._groups
        ]
        return " ".join(told[:6]) + (f" The same for {len(told) - 6} more groups." if len(told) > 6 else "")

    def labels(self) -> list[NDArray[np.int64]]:
        """Units are told apart by their groups."""
        return [self._setting.group_labels(self._groups)] if self._kind.name != PAIRING else []

    def parts(self, members: Members) -> list[Part] | None:
        """Return one count per group and place; for an order, the memory of who stands before."""
        if self._kind.name == PAIRING:
            return []
        first = heads(members)
        if self._kind.name == ORDER:
            return [_Neighbours(self._setting.group_labels(self._groups)[first], self._groups, first)]
        parts: list[Part] = []
        spread = self._kind.name == ASSIGNMENT
        for group in self._groups:
            inside = np.isin(first, group).astype(np.int64)
            for place in range(len(self._kind.places.ids)):
                weights = np.zeros((len(members), len(self._kind.places.ids)), np.int64)
                weights[:, place] = inside
                # the others of the group need a place each, so few places can do without one of it
                parts.append(Count(weights, len(group) - len(self._kind.places.ids) + 1 if spread else None, 1))
        return parts

    def cells(self) -> tuple[Mask, Mask] | None:
        """In a pairing, close the pairs."""
        if self._kind.name != PAIRING:
            return None
        may, must = open_table(self._kind)
        for group in self._groups:
            may[np.ix_(group, group)] = False
        return may, must


class _Neighbours(Part):
    """Remembers to which groups the last placed unit belongs."""

    def __init__(self, labels: NDArray[np.int64], groups: Sequence[Units], first: NDArray[np.int64]) -> None:
        self._labels = labels.tolist()
        belongs = [{g for g, group in enumerate(groups) if unit in group} for unit in first.tolist()]
        of_label = dict(zip(self._labels, belongs, strict=True))
        self._forbidden = {
            label: [other for other, groups_of in of_label.items() if groups_of & mine]
            for label, mine in of_label.items()
        }

    def concerns(self, event: Event) -> bool:
        """Every placing changes who stands before."""
        return True

    def step(self, event: Event, columns: Columns) -> tuple[Columns, Mask | None]:
        """Refuse neighbours of one group."""
        label = self._labels[event.group]
        forbidden = self._forbidden[label]
        return np.full_like(columns, label), ~np.isin(columns[0], forbidden) if forbidden else None
