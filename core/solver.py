"""Questions about a statement, put to a solver: OR-tools CP-SAT, which is imported nowhere else.

What is answered "impossible" has been proved. A question that takes too long is answered "unknown".
"""

from __future__ import annotations

import time
from collections.abc import Collection, Iterable, Sequence
from dataclasses import dataclass
from decimal import Decimal
from typing import TYPE_CHECKING, Literal

from core.statement import KIND, AnyOf, MostOne, Sentence, Statement, Sum

if TYPE_CHECKING:
    from ortools.sat.python.cp_model import Constraint, CpSolver, IntVar, LinearExpr

State = Literal["possible", "impossible", "unknown"]
Values = tuple[bool, ...]

# The solver's own numbers end at 2^63, and it wants some room.
_MOST = 1 << 60


@dataclass(frozen=True)
class Change:
    """A bound that moves by so much: the least number of a sum becomes smaller, or else its greatest number larger."""

    of: Sum
    is_least: bool
    by: int

    def bounds(self) -> tuple[str, str]:
        """Return the bound as it is and as it would be, in decimals."""
        old, sign = (self.of.low, -1) if self.is_least else (self.of.high, 1)
        assert old is not None
        before, after = (format(Decimal(n).scaleb(-self.of.decimals), "f") for n in (old, old + sign * self.by))
        return before, after

    def less(self) -> Sum:
        """Return the demand that a smaller move were enough."""
        if self.is_least:
            assert self.of.low is not None
            return Sum(KIND, self.of.terms, self.of.low - self.by + 1, None)
        assert self.of.high is not None
        return Sum(KIND, self.of.terms, None, self.of.high + self.by - 1)


class Solver:
    """Answers questions about one statement, all of them together before `deadline` (of `time.monotonic`).

    Each question may take a `share` of the time that is left.
    """

    def __init__(self, statement: Statement, deadline: float) -> None:
        self._statement, self._deadline = statement, deadline

    def solve(self, rules: Collection[int], *, share: float = 1.0) -> tuple[State, Values | None]:
        """Return whether the kind and these rules can hold together, and if so the values of all variables."""
        program = Program(self._statement.size, self._of(rules))
        state, solved = self._run(program, share)
        return state, None if solved is None else tuple(map(solved.boolean_value, program.variables))

    def core(self, rules: Collection[int]) -> tuple[int, ...]:
        """Return some of these rules, known to conflict, that conflict already; all of them where none stands out.

        Each rule is guarded by a literal that is assumed; the solver tells which assumptions its proof used. What it names
        is proved once more on its own, without guards.
        """
        program = Program(self._statement.size, self._of(rules), guarded=rules)
        state, solved = self._run(program, 0.25)
        found = program.blamed(solved) if state == "impossible" and solved is not None else tuple(rules)
        if len(found) < len(rules) and self.solve(found, share=0.5)[0] == "impossible":
            return found
        return tuple(rules)

    def smallest(self, conflict: Sequence[int]) -> tuple[tuple[int, ...], bool]:
        """Return a part of a conflict of which no rule can be left out, and whether that was decided for each of them."""
        kept, minimal = list(conflict), True
        for turn, rule in enumerate(conflict):
            rest = [other for other in kept if other != rule]
            state, _ = self.solve(rest, share=1 / (len(conflict) - turn))
            if state == "impossible":
                kept = rest
            minimal &= state != "unknown"
        return tuple(kept), minimal

    def least_change(self, rule: int, rules: Collection[int], *, share: float) -> tuple[list[Change], bool]:
        """Return how the numbers of one rule must move so that these rules can hold: none of them far, and few of them.

        An empty list if that does not help or was not found. Also return whether it is one number only that must move, and
        that far whatever becomes of the rule's others.
        """
        program = Program(self._statement.size, self._of(rules), relaxed=rule)
        changes: list[Change] = []
        for objective in program.moves():
            program.model.minimize(objective)
            state, solved = self._run(program, share / 3)
            if state != "possible" or solved is None:
                return [], False
            program.model.add(objective <= solved.value(objective))
            moved = [(of, is_least, solved.value(slack)) for of, is_least, slack in program.slacks]
            changes = [Change(of, is_least, by) for of, is_least, by in moved if by]
        if len(changes) != 1:
            return changes, False
        others = [sentence for sentence in self._of(rules) if not _gives_way(sentence, rule)]
        state, _ = self._run(Program(self._statement.size, [*others, changes[0].less()]), share / 3)
        return changes, state == "impossible"

    def _of(self, rules: Collection[int]) -> list[Sentence]:
        return [sentence for sentence in self._statement.said if sentence.speaker == KIND or sentence.speaker in rules]

    def _run(self, program: Program, share: float) -> tuple[State, CpSolver | None]:
        """Return the answer, and the solver if it came to one."""
        from ortools.sat.python import cp_model

        left = self._deadline - time.monotonic()
        if left <= 0 or program.too_large:
            return "unknown", None
        solver = cp_model.CpSolver()
        solver.parameters.max_time_in_seconds = left * share
        solver.parameters.random_seed = 0
        solver.parameters.num_workers = 1
        # cuts of all sorts: they prove at once what counting and parity forbid, where a search would never end
        solver.parameters.linearization_level = 2
        status = solver.solve(program.model)
        if status == cp_model.INFEASIBLE:
            return "impossible", solver
        # an objective makes FEASIBLE of what is not yet known to be the least
        return ("possible", solver) if status == cp_model.OPTIMAL else ("unknown", None)


class Program:
    """Sentences as a CP-SAT model.

    With `guarded` rules each of their sentences holds only if the rule's guard does, and all guards are assumed. With a
    `relaxed` rule its numbers may give way, as little as possible.
    """

    def __init__(
        self, size: int, said: Iterable[Sentence], *, guarded: Collection[int] = (), relaxed: int | None = None
    ) -> None:
        from ortools.sat.python.cp_model import CpModel

        self.model = CpModel()
        self.variables = [self.model.new_bool_var("") for _ in range(size)]
        # a literal, a variable's number or its complement, is a place of this list
        self._literals = [*self.variables, *(~variable for variable in reversed(self.variables))]
        self.model.add_bool_and(self._literals[~0])
        self._guards = {rule: self.model.new_bool_var("") for rule in guarded}
        self.model.add_assumptions(self._guards.values())
        self._relaxed = relaxed
        self.too_large = False
        self.slacks: list[tuple[Sum, bool, IntVar]] = []
        self._room = 0
        for sentence in said:
            self._add(sentence)

    def moves(self) -> list[LinearExpr]:
        """Return what is to be small, the first above all: how far the relaxed rule's numbers move at most, and in all."""
        from ortools.sat.python.cp_model import LinearExpr

        if not self.slacks:
            return []
        slacks = [slack for _, _, slack in self.slacks]
        furthest = self.model.new_int_var(0, self._room, "")
        for slack in slacks:
            self.model.add(slack <= furthest)
        return [furthest, LinearExpr.sum(slacks)]

    def blamed(self, solver: CpSolver) -> tuple[int, ...]:
        """Return the guarded rules that the proof of impossibility used."""
        used = set(solver.sufficient_assumptions_for_infeasibility())
        return tuple(rule for rule, guard in self._guards.items() if guard.index in used)

    def _add(self, sentence: Sentence) -> None:
        guard = self._guards.get(sentence.speaker)
        if isinstance(sentence, MostOne) and guard is None:
            self.model.add_at_most_one(self._literals[literal] for literal in sentence.literals)
            return
        if isinstance(sentence, AnyOf):
            constraint = self.model.add_bool_or(self._literals[literal] for literal in sentence.literals)
        else:
            if isinstance(sentence, MostOne):
                sentence = Sum(sentence.speaker, tuple((1, literal) for literal in sentence.literals), None, 1)
            constraint = self._add_sum(sentence)
        if guard is not None:
            constraint.only_enforce_if(guard)

    def _add_sum(self, said: Sum) -> Constraint:
        from ortools.sat.python.cp_model import LinearExpr

        factors = [factor for factor, _ in said.terms]
        least, most = sum(f for f in factors if f < 0), sum(f for f in factors if f > 0)
        self.too_large |= most - least >= _MOST
        low = min(least, least if said.high is None else said.high) if said.low is None else said.low
        high = max(most, low) if said.high is None else said.high
        total = LinearExpr.weighted_sum([self._literals[literal] for _, literal in said.terms], factors)
        if _gives_way(said, self._relaxed):
            for is_least, room in ((True, low - least), (False, most - high)):
                if room > 0:
                    self._room = max(self._room, room)
                    slack = self.model.new_int_var(0, room, "")
                    total += slack if is_least else -slack
                    self.slacks.append((said, is_least, slack))
        return self.model.add_linear_constraint(total, low, high)


def _gives_way(sentence: Sentence, rule: int | None) -> bool:
    """Return whether a sentence holds numbers of this rule that can be changed in the sheet."""
    return sentence.speaker == rule and isinstance(sentence, Sum) and sentence.what is not None
