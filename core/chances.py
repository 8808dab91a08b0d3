"""Chances: how likely each unit, each cell and each pair is, when every admissible outcome has the same chance.

Exact (`core.exactchances`) where every rule is built in and the diagram can be counted; otherwise estimated from
accepted outcomes, with intervals that hold all together (`core.samplechances`).
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction
from typing import Any

import numpy as np

from core.errors import CallError, Infeasible, TooRare
from core.exactchances import MOST_STEPS, Known, known_chances
from core.kinds import OutcomeKind
from core.kinds.selection import Selection
from core.ledger import interval
from core.planner import MOST_EDGES_COUNTED, Ready, pilot_block, size_words
from core.process import Rows
from core.proposals import run_block
from core.samplechances import LEVEL, MOST_LISTED, Counts, Sample, Wanted, possible_pairs, varies
from core.sheet import Sheet
from core.stream import Bits, make_key
from core.supersets.diagram import Diagram

FEWEST = 100
MANY_TIMES = 3
NAMED, UNITS_NAMED = 12, 100

Tick = Callable[[], None]


@dataclass(frozen=True, slots=True)
class Chance:
    """One chance (in a roster, for a unit: an expected number of duties).

    Attributes
    ----------
    name
        Of whom: (unit,), (unit, place) or (unit, unit).
    exact
        The exact value, or None where it is estimated.
    estimate, low, high
        The value as a float and its interval; both ends are the value itself where it is exact.

    Guarantee: exact, or an interval that holds together with all others of its table (`Chances.words` says how surely).
    """

    name: tuple[str, ...]
    exact: Fraction | None
    estimate: float
    low: float
    high: float

    @property
    def is_zero(self) -> bool:
        """Whether the value is 0 exactly, or was never seen in the sample."""
        return self.estimate == 0 if self.exact is None else self.exact == 0

    def is_top(self, top: int) -> bool:
        """Return whether the value is `top` exactly, or was always seen in the sample."""
        return self.estimate == top if self.exact is None else self.exact == top

    def to_json(self) -> dict[str, Any]:
        """Return the value as JSON values; the exact value as text such as "15/41"."""
        text = None if self.exact is None else _digits(self.exact)
        return {"chance": self.estimate, "exact": text, "low": self.low, "high": self.high}


@dataclass(frozen=True)
class Chances:
    """The chances of a sheet's units, and of its cells and pairs where they were asked for.

    Attributes
    ----------
    words
        What the numbers mean and how they were found.
    exact
        Whether every number is exact; each `Chance` says it for itself.
    units, cells, pairs
        In the order of the list and of the places. Of pairs each is given once; in a pairing only those that its sides
        allow.
    outcomes
        How many outcomes the estimates rest on; 0 if there are none.
    notes
        What to know about them, in sentences.
    word
        What a cell joins the unit with: "slot", "place", "position", "with", or "" in a selection.

    Guarantee: exact where `exact` says so; estimated otherwise.
    """

    words: str
    exact: bool
    units: tuple[Chance, ...]
    cells: tuple[Chance, ...] | None
    pairs: tuple[Chance, ...] | None
    outcomes: int
    notes: tuple[str, ...]
    word: str = ""

    def to_json(self) -> dict[str, Any]:
        """Return the chances as JSON values."""

        def other(name: str) -> str | int:
            return int(name) if self.word == "position" else name

        cells = [{"unit": c.name[0], self.word: other(c.name[1]), **c.to_json()} for c in self.cells or ()]
        pairs = [{"units": list(c.name), **c.to_json()} for c in self.pairs or ()]
        return {
            "words": self.words,
            "exact": self.exact,
            "outcomes": self.outcomes,
            "units": [{"id": c.name[0], **c.to_json()} for c in self.units],
            "cells": None if self.cells is None else cells,
            "pairs": None if self.pairs is None else pairs,
            "notes": list(self.notes),
        }


def inclusion(
    ready: Ready,
    *,
    cells: bool = False,
    pairs: bool = False,
    outcomes: int = 10_000,
    limit: int | None = None,
    tick: Tick = lambda: None,
) -> Chances:
    """Return the chances of the units of a planned sheet.

    Guarantee: exact if nothing is left to check and the diagram can be counted; what is not exact then (the pairs of a
    roster, and pairs that would take too many steps) and everything otherwise is estimated, with simultaneous
    intervals, and says so. The bits of the estimates have a key of their own, so the result depends on the plan alone.

    Parameters
    ----------
    cells, pairs
        Whether to give them too; cells of assignments and orders are given anyway.
    outcomes
        How many accepted outcomes an estimate rests on.
    limit
        Largest number of proposals for them.
    tick
        Called often; may raise to stop the work.

    Raises
    ------
    TooRare
        if fewer than 100 outcomes are accepted within the limit.
    CallError
        if there are too many cells or pairs to list, or too few outcomes are asked for.
    """
    wanted = Wanted.of(ready.sheet.kind, cells=cells, pairs=pairs)
    known: Known | None = None
    if ready.diagram.is_empty:
        raise Infeasible("No outcome is possible, so nothing has a chance.")
    if not ready.checks and ready.diagram.edges <= MOST_EDGES_COUNTED:
        known = known_chances(ready.sheet.kind, ready.diagram, pairs=pairs, tick=tick)
    sample: Sample | None = None
    if known is None or (wanted.pairs and known.pairs is None):
        if outcomes < FEWEST:
            raise CallError(f"Chances are estimated from at least {FEWEST} outcomes; {outcomes} were asked for.")
        sample = Sample(ready.sheet.kind, wanted if known is None else Wanted(False, False, True))
        for rows in _outcomes(ready, outcomes, limit, tick):
            sample.add(rows)
    return _Account(ready.sheet, wanted, known, sample, ready.diagram).chances()


def estimated(sheet: Sheet, batches: Iterable[Rows], *, cells: bool = False, pairs: bool = False) -> Chances:
    """Return chances estimated from outcomes that are given, in batches of rows.

    Guarantee: estimated; the intervals hold if the outcomes are independent and each uniform over the admissible ones.
    """
    wanted = Wanted.of(sheet.kind, cells=cells, pairs=pairs)
    sample = Sample(sheet.kind, wanted)
    for rows in batches:
        sample.add(rows)
    return _Account(sheet, wanted, None, sample, None).chances()


def _outcomes(ready: Ready, wanted: int, limit: int | None, tick: Tick) -> Iterator[Rows]:
    """Yield the first `wanted` accepted outcomes, block by block."""
    key = make_key("chances", ready.sheet.digest)
    size = pilot_block(ready.sheet)
    proposed = accepted = block = 0
    while accepted < wanted and (limit is None or proposed < limit):
        tick()
        count = size if limit is None else min(size, limit - proposed)
        rows = run_block(ready.diagram, ready.checks, Bits(key, block), count, 0).rows[: wanted - accepted]
        proposed, accepted, block = proposed + count, accepted + len(rows), block + 1
        if len(rows):
            yield rows
    if accepted < FEWEST:
        bound = interval(accepted, proposed)[1]
        raise TooRare(
            f"{accepted} of {proposed:,} proposals were accepted, too few to estimate chances from ({FEWEST} are needed). "
            f"At most {bound:.3g} of all proposals are acceptable: raise the limit, or let the plan build in more rules.",
            bound,
        )


# -- the account --------------------------------------------------------------------------------------------------

_MEANING = {
    "selection": "The chance of a unit is that of being drawn.",
    "roster": "The figure of a unit is its expected number of duties, which may be above 1.",
    "assignment": "Every unit is placed, so its own chance is 1; a cell is the chance that it goes to that place.",
    "order": "Every unit is placed, so its own chance is 1; a cell is the chance that it stands at that position.",
    "pairing": "The chance of a unit is that of having a partner.",
}
_CELL = {
    "roster": " A cell is the chance that the unit is on duty in that slot.",
    "pairing": " A cell is the chance that the two are partners.",
}
_PAIR = {
    "selection": " A pair is the chance that both are drawn.",
    "roster": " A pair is the chance that both are on duty in at least one same slot.",
    "assignment": " A pair is the chance that both go to the same place.",
    "order": " A pair is the chance that the two stand next to each other.",
    "pairing": " A pair is the chance that the two are partners.",
}
_UNIT_ENDS = {"selection": "drawn", "roster": "on duty", "pairing": "paired"}
_JOINED = {"roster": "in", "assignment": "in", "order": "at position", "pairing": "with"}


@dataclass(frozen=True)
class _Account:
    """Puts tables and sentences together."""

    sheet: Sheet
    wanted: Wanted
    known: Known | None
    sample: Sample | None
    diagram: Diagram | None

    @property
    def kind(self) -> OutcomeKind:
        return self.sheet.kind

    def chances(self) -> Chances:
        """Return the whole."""
        if self.known is None and not (self.sample and self.sample.size):
            raise CallError("There is no outcome to estimate chances from.")
        units = self._units()
        pairs = self._pairs() if self.wanted.pairs or (self.wanted.cells and self.kind.name == "pairing") else None
        cells = pairs if self.kind.name == "pairing" else self._cells()
        return Chances(
            words=self._words(),
            exact=self.sample is None,
            units=units,
            cells=cells if self.wanted.cells else None,
            pairs=pairs if self.wanted.pairs else None,
            outcomes=0 if self.sample is None else self.sample.size,
            notes=tuple(self._notes(units, cells, pairs)),
            word="with" if self.kind.name == "pairing" else self.kind.places.word,
        )

    def _estimated(self, names: Sequence[tuple[str, ...]], counts: Counts) -> tuple[Chance, ...]:
        """Return one chance per name, each the sum of its row of counts, shape (names, terms)."""
        assert self.sample is not None
        low, high = (side.sum(axis=1).tolist() for side in self.sample.bounds(counts))
        estimate = (counts.sum(axis=1) / self.sample.size).tolist()
        return tuple(Chance(name, None, *numbers) for name, *numbers in zip(names, estimate, low, high, strict=True))

    def _units(self) -> tuple[Chance, ...]:
        names = [(id,) for id in self.sheet.frame.ids]
        if self.known is not None:
            return _exact_chances(names, self.known.of.tolist(), self.known.units)
        if self.sample is None or self.sample.units is None:
            return _exact_chances(names, [0] * len(names), [Fraction(1)])
        return self._estimated(names, self.sample.units)

    def _cells(self) -> tuple[Chance, ...] | None:
        if not self.wanted.cells:
            return None
        ids, places = self.sheet.frame.ids, self.kind.places.ids
        names = [(unit, place) for unit in ids for place in places]
        if self.known is not None:
            of = (self.known.of[:, None] * len(places) + np.arange(len(places))).ravel().tolist()
            return _exact_chances(names, of, [chance for row in self.known.cells for chance in row])
        assert self.sample is not None
        assert self.sample.cells is not None
        return self._estimated(names, self.sample.cells.reshape(-1, 1))

    def _pairs(self) -> tuple[Chance, ...]:
        ids = self.sheet.frame.ids
        one, other = np.nonzero(np.triu(possible_pairs(self.kind), 1))
        names = [(ids[i], ids[j]) for i, j in zip(one.tolist(), other.tolist(), strict=True)]
        if self.known is not None and self.known.pairs is not None:
            of = self.known.of[one] * len(self.known.units) + self.known.of[other]
            return _exact_chances(names, of.tolist(), [chance for row in self.known.pairs for chance in row])
        assert self.sample is not None
        assert self.sample.pairs is not None
        return self._estimated(names, self.sample.pairs[one, other][:, None])

    def _words(self) -> str:
        words = _MEANING[self.kind.name]
        if self.wanted.cells:
            words += _CELL.get(self.kind.name, "")
        if self.wanted.pairs and not (self.wanted.cells and self.kind.name == "pairing"):
            words += _PAIR[self.kind.name]
        if self.known is not None and self.diagram is not None:
            pairs = "" if self.sample is None else ", except for pairs"
            words += f" Exact: counted over all {size_words(self.diagram.size, exact=True)} outcomes{pairs}."
        if self.sample is not None:
            told = "Estimated" if self.known is None else "Pairs are estimated"
            words += (
                f" {told} from {self.sample.size:,} outcomes: all {self.sample.intervals:,} intervals hold together with "
                f"a probability of at least {100 * LEVEL:.0f} % (Clopper-Pearson, Bonferroni)."
            )
            if self.sample.units is not None and self.kind.name == "roster":
                words += " That of expected duties is the sum of those of the chances of at least 1, 2, ... duties."
        return words

    # -- notes ----------------------------------------------------------------------------------------------------

    def _notes(
        self, units: tuple[Chance, ...], cells: tuple[Chance, ...] | None, pairs: tuple[Chance, ...] | None
    ) -> Iterator[str]:
        name = self.kind.name
        columns = _columns(cells, len(self.kind.places.ids)) if name != "pairing" else []
        yield self._sentence(units, columns, pairs)
        yield from self._sums(units, pairs)
        placed = columns if name in ("assignment", "order") else [units]
        compared = [pairs or units] if name == "pairing" else placed
        yield from self._spread(compared)
        if varies(self.kind):
            top = len(self.kind.places.ids) if name == "roster" else 1
            word, always = _UNIT_ENDS[name], " in every slot" if name == "roster" else ""
            yield from self._ends(units, f"never {word}", f"always {word}{always}", UNITS_NAMED, top)
        if cells is not None and name != "pairing":
            yield from self._ends(cells, "never there", "always there", NAMED)
        if pairs is not None:
            yield from self._ends(pairs, "never together", "always together", NAMED)
        if self.known is not None and self.sample is not None:
            cause = "two units would have to be followed" if name == "roster" else f"more than {MOST_STEPS:,} steps"
            yield f"Pairs are estimated, because exact counting would take too long ({cause})."
        if cells is None and name in ("assignment", "order"):
            yield f"There are too many cells to list (more than {MOST_LISTED:,}), so they are left out."

    def _sentence(
        self, units: Sequence[Chance], columns: Sequence[Sequence[Chance]], pairs: Sequence[Chance] | None
    ) -> str:
        """Return what can be said about the chances of outcomes and of units."""
        differ = "Each outcome has the same chance; each unit does not."
        pairs_differ = "Each outcome has the same chance; each pair does not."
        if self.known is not None:
            rows = self.known.cells or [[] for _ in self.known.units]
            if len({(chance, *row) for chance, row in zip(self.known.units, rows, strict=True)}) > 1:
                return differ
            if self.kind.name == "pairing" and self._pairs_differ():
                return pairs_differ
            return "Each outcome has the same chance, and here each unit has the same chance too."
        shown = " (The sample shows it: there are intervals that do not overlap.)"
        if any(_apart(column) for column in (units, *columns)):
            return differ + shown
        if self.kind.name == "pairing" and pairs is not None and _apart(pairs):
            return pairs_differ + shown
        return "Each outcome has the same chance; whether each unit has, too, this sample does not show."

    def _pairs_differ(self) -> bool:
        assert self.known is not None
        assert self.known.pairs is not None
        one, other = np.nonzero(np.triu(possible_pairs(self.kind), 1))
        of = self.known.of
        classes = np.unique(of[one] * len(self.known.units) + of[other])
        return len({self.known.pairs[c // len(self.known.units)][c % len(self.known.units)] for c in classes}) > 1

    def _sums(self, units: Sequence[Chance], pairs: Sequence[Chance] | None) -> Iterator[str]:
        """Yield sums of chances against what an outcome holds."""
        if self.known is not None:
            sizes = np.bincount(self.known.of).tolist()
            total = _figure(sum((n * c for n, c in zip(sizes, self.known.units, strict=True)), Fraction(0)))
        else:
            total = f"{sum(c.estimate for c in units):.6g}"
        if isinstance(self.kind, Selection):
            fixed = self.kind.least == self.kind.most
            yield f"The chances sum to {total}, the {'number' if fixed else 'expected number'} of units drawn."
        elif self.kind.name == "roster":
            yield f"The expected duties of all units sum to {total}, the expected number of duties of an outcome."
        elif self.kind.name == "assignment":
            yield "The chances of a unit over all places sum to 1."
        elif self.kind.name == "order":
            yield "The chances of a unit over all positions sum to 1, and so do those of a position over all units."
        elif pairs is not None:
            yield f"The chances of all pairs sum to {self.kind.units // 2:,}, the number of pairs."

    def _spread(self, compared: Sequence[Sequence[Chance]]) -> Iterator[str]:
        """Yield the smallest and largest of the chances above 0, where they lie furthest apart."""
        widest: tuple[Chance, Chance] | None = None
        for column in compared:
            positive = [c for c in column if not c.is_zero]
            if positive:
                ends = min(positive, key=lambda c: c.estimate), max(positive, key=lambda c: c.estimate)
                if widest is None or _ratio(ends) > _ratio(widest):
                    widest = ends
        if widest is None or (self.known is not None and _ratio(widest) == 1):
            return
        low, high = widest
        what = "expected number of duties" if self.kind.name == "roster" else "chance"
        zero = " above 0" if any(c.is_zero for column in compared for c in column) else ""
        told = (f"{self._value(end)} ({self._name(end)})" for end in (low, high))
        yield f"The smallest {what}{zero} is {next(told)}, the largest {next(told)}: {float(_ratio(widest)):,.2f} times."
        if _ratio(widest) > MANY_TIMES:
            yield f"Caution: these chances differ by more than a factor of {MANY_TIMES}; look whether the rules mean that."

    def _ends(self, chances: Sequence[Chance], never: str, always: str, most: int, top: int = 1) -> Iterator[str]:
        """Name what is in no outcome and what is in every one."""
        for words, found, side in (
            (never, [c for c in chances if c.is_zero], "at most {:.3g}"),
            (always, [c for c in chances if c.is_top(top)], "at least {:.3g}"),
        ):
            if not found:
                continue
            where = " in any outcome" if words is never else ", in every outcome"
            if found[0].exact is None:
                bound = max(c.high for c in found) if words is never else min(c.low for c in found)
                sample = 0 if self.sample is None else self.sample.size
                where = f" in the {sample:,} outcomes of the sample (true value {side.format(bound)})"
            more = f" and {len(found) - most:,} more" if len(found) > most else ""
            yield f"{words.capitalize()}{where}: {', '.join(self._name(c) for c in found[:most])}{more}."

    def _name(self, chance: Chance) -> str:
        if len(chance.name) == 1:
            return chance.name[0]
        ids = self.kind.places.ids
        joined = _JOINED.get(self.kind.name, "with") if chance.name[1] in ids else "with"
        return f"{chance.name[0]} {joined} {chance.name[1]}"

    def _value(self, chance: Chance) -> str:
        return f"about {chance.estimate:.3g}" if chance.exact is None else _figure(chance.exact)


def _exact_chances(
    names: Sequence[tuple[str, ...]], of: Sequence[int], values: Sequence[Fraction]
) -> tuple[Chance, ...]:
    about = [float(value) for value in values]
    return tuple(Chance(name, values[i], about[i], about[i], about[i]) for name, i in zip(names, of, strict=True))


def _columns(cells: Sequence[Chance] | None, places: int) -> list[Sequence[Chance]]:
    return [] if cells is None else [cells[place::places] for place in range(places)]


def _apart(chances: Sequence[Chance]) -> bool:
    """Return whether two intervals do not overlap."""
    return max((c.low for c in chances), default=0.0) > min((c.high for c in chances), default=1.0)


def _ratio(ends: tuple[Chance, Chance]) -> Fraction:
    low, high = (Fraction(c.estimate) if c.exact is None else c.exact for c in ends)
    return high / low


def _figure(value: Fraction) -> str:
    """Return "4", "15/41 (0.366)", or four digits where the fraction is long."""
    if value.denominator == 1:
        return f"{value.numerator:,}"
    short = max(value.numerator, value.denominator) < 10**6
    return f"{value} ({float(value):.3g})" if short else f"{float(value):.4g}"


def _digits(value: Fraction) -> str:
    """Return the fraction as text; `str` of an integer refuses more than some thousand digits."""
    top, bottom = (format(Decimal(n), "f") for n in value.as_integer_ratio())
    return top if bottom == "1" else f"{top}/{bottom}"
