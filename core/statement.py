"""What kind and rules say about one outcome, as 0/1 variables and sums of integers: a language that belongs to no solver.

A kind says which variable stands for which cell (`OutcomeKind.variables`) and what makes cells an outcome (`state`); each rule
says when it holds (`Rule.state`). Who said what is kept, so that rules can be left out one by one.

A *literal* is the number of a variable, or its complement (``~number``) for "this is not so". Variable 0 is never true: it
stands for cells that cannot be.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Literal = int
NEVER: Literal = 0
KIND = -1


@dataclass(frozen=True)
class Sum:
    """The sum of coefficients times literals (true 1, false 0) lies within `low` and `high`, inclusive; None is no bound.

    `what` tells in words what is counted, with "{s}" for a plural, if the bounds are numbers of the sheet: "in slot w3",
    "pair{s} differing in country". They are then the sheet's numbers times 10^decimals. Else `what` is None.
    """

    speaker: int
    terms: tuple[tuple[int, Literal], ...]
    low: int | None
    high: int | None
    what: str | None = None
    decimals: int = 0


@dataclass(frozen=True)
class AnyOf:
    """At least one of the literals is true."""

    speaker: int
    literals: tuple[Literal, ...]


@dataclass(frozen=True)
class MostOne:
    """At most one of the literals is true."""

    speaker: int
    literals: tuple[Literal, ...]


Sentence = Sum | AnyOf | MostOne


class Statement:
    """What was said so far.

    Attributes
    ----------
    size
        Number of variables: cells, and what rules needed besides (`new`).
    said
        All sentences, in the order in which they were said.
    speaker
        Whose sentences come next: the number of a rule, or `KIND`.
    """

    def __init__(self, variables: NDArray[np.int64]) -> None:
        """Begin with the variables of the cells, numbered from 1: int64, shape `OutcomeKind.cells`."""
        self._cells: list[list[int]] = variables.tolist()
        self.size = int(variables.max(initial=0)) + 1
        self.said: list[Sentence] = []
        self.speaker = KIND

    def at(self, unit: int, place: int) -> Literal:
        """Return the literal of a cell: the unit is there (selection: place 0; pairing: has this partner, or is single)."""
        return self._cells[unit][place]

    def new(self) -> Literal:
        """Return a variable of the speaker's own."""
        self.size += 1
        return self.size - 1

    def sum(
        self,
        terms: Iterable[tuple[int, Literal]],
        low: int | None = None,
        high: int | None = None,
        *,
        what: str | None = None,
        decimals: int = 0,
    ) -> None:
        """Say that a sum lies within bounds; see `Sum`."""
        kept = tuple((factor, literal) for factor, literal in terms if factor and literal != NEVER)
        self.said.append(Sum(self.speaker, kept, low, high, what, decimals))

    def any_of(self, literals: Iterable[Literal]) -> None:
        """Say that at least one of the literals is true."""
        kept = tuple(literal for literal in literals if literal != NEVER)
        if ~NEVER not in kept:
            self.said.append(AnyOf(self.speaker, kept))

    def at_most_one(self, literals: Iterable[Literal]) -> None:
        """Say that at most one of the literals is true."""
        kept = tuple(literal for literal in literals if literal != NEVER)
        if len(kept) > 1:
            self.said.append(MostOne(self.speaker, kept))

    def exactly_one(self, literals: Iterable[Literal]) -> None:
        """Say that one of the literals is true and the others are not."""
        self.sum(((1, literal) for literal in literals), 1, 1)

    def must(self, literal: Literal) -> None:
        """Say that the literal is true."""
        self.any_of([literal])

    def implies(self, conditions: Sequence[Literal], consequence: Literal) -> None:
        """Say that the consequence is true if all conditions are."""
        self.any_of([*(~condition for condition in conditions), consequence])

    def same(self, literals: Sequence[Literal]) -> None:
        """Say that all literals are true or none."""
        for one, other in zip(literals, [*literals[1:], literals[0]], strict=True):
            self.implies([one], other)
