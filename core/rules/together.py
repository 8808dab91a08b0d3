"""Together: units that are drawn, placed, on duty, paired or lined up together or not at all."""

from __future__ import annotations

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
    SELECTION: "Either all of {group} are drawn or none.",
    ASSIGNMENT: "{group} are in the same place.",
    ROSTER: "In each slot either all of {group} are on duty or none.",
    ORDER: "{group} stand next to each other in one block.",
    PAIRING: "{group} are paired among themselves.",
}


class Together(Rule):
    """All units of a group together."""

    name = "together"
    kinds = (SELECTION, ASSIGNMENT, ROSTER, ORDER, PAIRING)
    meaning = (
        "The units of a group stay with each other: all drawn or none (selection), all in one place (assignment), in each "
        "slot all or none (roster), paired among themselves (pairing), in one unbroken block (order)."
    )
    example = '[[rule]]\nkind = "together"\nunits = ["p1", "p2", "p3"]'
    Fields = GroupFields

    def __init__(self, setting: Setting, groups: Sequence[Units], alike: str | None) -> None:
        self._setting, self._kind, self._groups, self._alike = setting, setting.kind, tuple(groups), alike

    @classmethod
    def of(cls, fields: Any, setting: Setting, report: Report) -> Together | None:
        """Read the groups."""
        groups = setting.groups(fields.units, fields.pairs, fields.file, fields.alike, report)
        if groups is None:
            return None
        if not groups:
            report.notice("this rule always holds: no two units are alike.")
        if setting.kind.name == PAIRING:
            odd = next((g for g in groups if len(g) % 2), None)
            if odd is not None:
                message = "this can never hold: an odd number of units cannot be paired among themselves."
                found = f"{len(odd)} units: {setting.unit_words(odd.tolist())}"
                report.fault(group_key(fields), message, found=found, allowed="groups of an even number")
                return None
        return cls(setting, groups, fields.alike)

    @classmethod
    def cases(cls) -> Sequence[Case]:
        """Return examples for each kind."""
        units = tuple({"id": f"u{i}", "team": "aabb"[i]} for i in range(4))
        pairs = {"pairs": [["u0", "u1"], ["u1", "u3"]]}
        return [
            Case(units, {"kind": "selection"}, {"pairs": [["u0", "u1"]]}),
            Case(units, {"kind": "selection"}, {"alike": "team"}),
            Case(units, {"kind": "assignment", "places": ["p", "q", "r"]}, pairs),
            Case(units, {"kind": "assignment", "places": ["p", "q"]}, {"alike": "team"}),
            Case(units[:3], {"kind": "roster", "slots": ["s", "t"]}, {"alike": "team"}),
            Case(units, {"kind": "order"}, pairs),
            Case(units, {"kind": "order"}, {"units": ["u0", "u2", "u3"]}),
            Case(units, {"kind": "pairing"}, {"pairs": [["u0", "u2"]]}),
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
        if name == SELECTION:
            good: Mask = np.isin(inside[rows].sum(axis=1), [0, len(group)])
        elif name == ROSTER:
            good = np.all(np.isin(rows[:, group].sum(axis=1), [0, len(group)]), axis=1)
        elif name == ASSIGNMENT:
            good = (rows[:, group] == rows[:, group[:1]]).all(axis=1)
        elif name == ORDER:
            member = inside[rows]
            last = member.shape[1] - 1 - member[:, ::-1].argmax(axis=1)
            good = last - member.argmax(axis=1) == len(group) - 1
        else:
            partner = rows[:, group]
            good = (inside[partner] & (partner != group)).all(axis=1)
        return good

    def effort(self) -> int:
        """One pass per group."""
        return max(1, len(self._groups))

    def state(self, model: Statement) -> None:
        """Say of each group that its units are everywhere the same, or in an order that they make a block."""
        places = range(len(self._kind.places.ids))
        for group in (units.tolist() for units in self._groups):
            if self._kind.name == PAIRING:
                for unit in group:
                    model.any_of(model.at(unit, partner) for partner in group if partner != unit)
            elif self._kind.name == ORDER:
                begins = [model.new() for _ in places[len(group) - 1 :]]
                model.exactly_one(begins)
                for place in places:
                    # a member stands here if the block begins here or a little earlier, and nobody of it otherwise
                    begun = begins[max(0, place - len(group) + 1) : place + 1]
                    terms = [*((1, model.at(unit, place)) for unit in group), *((-1, begin) for begin in begun)]
                    model.sum(terms, 0, 0)
            else:
                for place in places:
                    model.same([model.at(unit, place) for unit in group])

    def words(self) -> str:
        """Return for example "Either all of p1 and p2 are drawn or none."."""
        if self._alike is not None:
            words = _WORDS[self._kind.name].format(group=f"the units of each {self._alike}")
            return words[0].upper() + words[1:]
        told = [
            _WORDS[self._kind.name].format(group=self._setting.unit_words(group.tolist())) for group in self._groups
        ]
        return " ".join(told[:6]) + (f" The same for {len(told) - 6} more groups." if len(told) > 6 else "")

    def labels(self) -> list[NDArray[np.int64]]:
        """Units are told apart by their groups."""
        return [self._setting.group_labels(self._groups)] if self._kind.name != PAIRING else []

    def parts(self, members: Members) -> list[Part] | None:
        """Return one all-or-none count per group and place; for an order, blocks."""
        if self._kind.name == PAIRING:
            return []
        first = heads(members)
        parts: list[Part] = []
        for group in self._groups:
            inside = np.isin(first, group)
            if self._kind.name == ORDER:
                parts.append(_Block(inside, len(group)))
                continue
            for place in range(len(self._kind.places.ids)):
                weights = np.zeros((len(members), len(self._kind.places.ids)), np.int64)
                weights[:, place] = inside
                parts.append(Count(weights, None, None, either=len(group)))
        return parts

    def cells(self) -> tuple[Mask, Mask] | None:
        """In a pairing, close the pairs with others and being single."""
        if self._kind.name != PAIRING:
            return None
        may, must = open_table(self._kind)
        for group in self._groups:
            outside = np.ones(self._kind.units + 1, bool)
            outside[group] = False
            may[np.ix_(group, np.flatnonzero(outside))] = False
            may[np.ix_(np.flatnonzero(outside[:-1]), group)] = False
        return may, must


class _Block(Part):
    """Counts the units of a group placed so far; once begun, the block must be finished."""

    def __init__(self, inside: Mask, size: int) -> None:
        self._inside, self._size = inside.tolist(), size

    def concerns(self, event: Event) -> bool:
        """Every placing matters."""
        return True

    def step(self, event: Event, columns: Columns) -> tuple[Columns, Mask | None]:
        """Count a member; refuse others while the block is unfinished."""
        if self._inside[event.group]:
            return columns + 1, None
        return columns, (columns[0] == 0) | (columns[0] == self._size)
