"""What tests share: small sheets, brute-force universes, the exact law of a diagram, and statistical verdicts.

Nothing here uses `core.process` or the diagram to list outcomes: universes come from itertools and the plain meaning of
a kind (how many units, places, sides), so that they can judge the diagram. `law_of` alone reads the diagram.
"""

from __future__ import annotations

import itertools
import json
from collections import Counter
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from decimal import Decimal
from fractions import Fraction
from math import comb, prod
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

from core.kinds import OutcomeKind
from core.parts import Mask
from core.process import Rows, lift_one
from core.reading import TableFile
from core.rules import Rule
from core.sheet import Sheet, read_sheet
from core.supersets import arrangements, superset
from core.supersets.diagram import Diagram
from core.tables import Table

Row = dict[str, Any]
Key = tuple[int, ...]

# A statistical test may fail by chance with at most this probability; together (union bound) at most 1e-6 per run.
ALPHA = 1e-8
MOST_VERDICTS = 100
# A twin with a known bias must miss by far more, so that it is caught in every run.
CAUGHT = 1e-20

# -- sheets ---------------------------------------------------------------------------------------------------


def toml(value: object) -> str:
    """Return a value as inline TOML; decimals stay decimals, keys with None are left out."""
    if isinstance(value, Mapping):
        return "{" + ", ".join(f"{json.dumps(k)} = {toml(v)}" for k, v in value.items() if v is not None) + "}"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(toml(item) for item in value) + "]"
    if isinstance(value, Decimal):
        return f"{value:f}" if "." in f"{value:f}" else f"{value:f}.0"
    return json.dumps(value, ensure_ascii=False)


def sheet_text(units: Iterable[Row], outcome: Row, rules: Iterable[Row] = ()) -> str:
    """Return the TOML text of a sheet with an inline list."""
    told = [f"{key} = {toml(value)}" for key, value in outcome.items() if value is not None]
    text = f"format = 1\n[frame]\nunits = {toml(list(units))}\n\n[outcome]\n" + "\n".join(told) + "\n"
    for rule in rules:
        lines = [f"{json.dumps(key)} = {toml(value)}" for key, value in rule.items() if value is not None]
        text += "\n[[rule]]\n" + "\n".join(lines) + "\n"
    return text


def no_files(wanted: TableFile) -> Table:
    """Refuse to open a list: an inline sheet has none."""
    raise AssertionError(f"an inline sheet asks for {wanted.file}")


def sheet_of(units: Iterable[Row], outcome: Row, rules: Iterable[Row] = ()) -> Sheet:
    """Return the sheet; raises SheetError as `read_sheet` does."""
    return read_sheet(sheet_text(units, outcome, rules), "sheet.toml", no_files)


# -- universes ------------------------------------------------------------------------------------------------


def universe(kind: OutcomeKind | Any) -> Rows:
    """Return every outcome of a kind, no rule applied, as rows in the kind's format; by brute force."""
    rows = list(_LISTED[kind.name](kind))
    if kind.name == "roster":
        return np.array(rows, bool).reshape(-1, kind.units, len(kind.places.ids))
    return np.array(rows, np.int32).reshape(len(rows), -1)


def _selections(kind: Any) -> Iterator[Sequence[int]]:
    longest = max(1, kind.most)
    for size in range(kind.least, kind.most + 1):
        for drawn in itertools.combinations(range(kind.units), size):
            yield (*drawn, *[kind.units] * (longest - size))


def _assignments(kind: Any) -> Iterator[Sequence[int]]:
    for row in itertools.product(range(len(kind.places.ids)), repeat=kind.units):
        counts = Counter(row)
        if all(kind.least[p] <= counts[p] <= kind.most[p] for p in range(len(kind.places.ids))):
            yield row


def _rosters(kind: Any) -> Iterator[Sequence[int]]:
    return itertools.product((0, 1), repeat=kind.units * len(kind.places.ids))


def _orders(kind: Any) -> Iterator[Sequence[int]]:
    return itertools.permutations(range(kind.units))


def _pairings(kind: Any) -> Iterator[Sequence[int]]:
    larger = None
    if kind.side is not None:
        ones = int(sum(kind.side))
        larger = int(2 * ones > kind.units)

    def matchings(left: list[int], singles: int) -> Iterator[dict[int, int]]:
        if not left:
            if not singles:
                yield {}
            return
        unit, rest = left[0], left[1:]
        if singles and (larger is None or kind.side[unit] == larger):
            for found in matchings(rest, 0):
                yield {**found, unit: unit}
        for partner in rest:
            if kind.side is None or kind.side[unit] != kind.side[partner]:
                for found in matchings([u for u in rest if u != partner], singles):
                    yield {**found, unit: partner, partner: unit}

    for found in matchings(list(range(kind.units)), int(kind.single)):
        yield [found[unit] for unit in range(kind.units)]


_LISTED: dict[str, Callable[[Any], Iterator[Sequence[int]]]] = {
    "selection": _selections,
    "assignment": _assignments,
    "roster": _rosters,
    "order": _orders,
    "pairing": _pairings,
}


def passing(rules: Iterable[Rule], rows: Rows) -> Mask:
    """Return which rows every rule's check passes."""
    good = np.ones(len(rows), bool)
    for rule in rules:
        good &= rule.check(rows)
    return good


def key_of(row: Rows) -> Key:
    """Return an outcome as something that can be compared and hashed."""
    return tuple(np.asarray(row).reshape(-1).astype(int).tolist())


def keys_of(rows: Rows) -> list[Key]:
    """Return each row's key."""
    flat = np.asarray(rows).reshape(len(rows), -1) if len(rows) else np.empty((0, 1))
    return list(map(tuple, flat.astype(int).tolist()))


def admissible(sheet: Sheet) -> set[Key]:
    """Return the keys of the outcomes that meet every rule, by listing the universe."""
    rows = universe(sheet.kind)
    return set(keys_of(rows[passing(sheet.rules, rows)]))


# -- diagrams -------------------------------------------------------------------------------------------------


def diagrams(sheet: Sheet, rules: Sequence[Rule] | None = None) -> Iterator[tuple[str, Diagram]]:
    """Yield the diagram of these rules (None: all) in each arrangement that the kind offers, with its name."""
    for arrangement in arrangements(sheet.kind):
        yield arrangement, superset(sheet.kind, sheet.rules if rules is None else rules, arrangement, budget=10**6)


def measured(diagram: Diagram, level: int) -> list[int]:
    """Return for each edge of a level how many of the 2^64 words lead to it: asked of `choose` itself.

    For all edges at once, the number of words that lead to an edge or to an earlier one is found bit by bit; words that
    lead nowhere count as beyond the last edge.
    """
    source = diagram.links(level)[0].astype(np.int64)
    edges = np.arange(len(source))

    def upto(words: NDArray[np.uint64]) -> Mask:
        chosen = diagram.choose(level, source, words)
        good: Mask = (chosen >= 0) & (chosen <= edges)
        return good

    number = np.zeros(len(edges), np.uint64)
    for bit in range(63, -1, -1):
        trial = number + np.uint64(1 << bit)
        number = np.where(upto(trial - np.uint64(1)), trial, number)
    whole = upto(np.full(len(edges), 2**64 - 1, np.uint64))
    ends = [(1 << 64) if w else int(n) for n, w in zip(number, whole, strict=True)]
    return [end - (ends[edge - 1] if edge and source[edge - 1] == source[edge] else 0) for edge, end in enumerate(ends)]


def law_of(diagram: Diagram) -> dict[Key, Fraction]:
    """Return the exact chance of every outcome of one proposal, listed choice by choice.

    The chance of a path is measured on `choose` and `acceptance`, the functions that the draw calls; the choices of units
    come from the process itself (its pools), not from the numbers that the diagram keeps of them. An outcome that comes
    about in two ways gets the sum.
    """
    widths = [measured(diagram, level) for level in range(diagram.levels)]
    law: dict[Key, Fraction] = {}
    for path in [] if diagram.is_empty else diagram.paths():
        chance = diagram.acceptance(path)
        for level, edge in enumerate(path):
            chance *= Fraction(widths[level][edge], 1 << 64)
        found = outcomes_of(diagram, path)
        for key in found:
            law[key] = law.get(key, Fraction(0)) + chance / len(found)
    return law


def outcomes_of(diagram: Diagram, path: Sequence[int]) -> list[Key]:
    """Return the outcomes of a path, one for each choice of units at each of its levels."""
    events = events_of(diagram, path)
    options = [comb(pool, count) for pool, count in pools_of(diagram, events)]
    choices = itertools.product(*(range(number) for number in options))
    return [key_of(lift_one(diagram.process, events, choice)) for choice in choices]


def events_of(diagram: Diagram, path: Sequence[int]) -> list[int]:
    """Return the numbers of the events of a path given as edges."""
    return [int(diagram.links(level)[2][edge]) for level, edge in enumerate(path)]


def pools_of(diagram: Diagram, events: Sequence[int]) -> list[tuple[int, int]]:
    """Return for each level of a path how many units there are to pick from, and how many are picked."""
    trace, pools = diagram.process.trace(), []
    for level, index in enumerate(events):
        event = diagram.process.levels[level].events[index]
        pool = trace.pool(level, event)
        pools.append((len(pool), event.count))
        trace.take(level, event, pool[: event.count])
    return pools


def is_uniform(law: Mapping[Key, Fraction], expected: set[Key]) -> bool:
    """Return whether the law gives one and the same chance to each of the expected outcomes, and none to others."""
    return set(law) == expected and len(set(law.values())) <= 1 and all(0 < p <= 1 for p in law.values())


def is_bijection(diagram: Diagram, expected: set[Key]) -> bool:
    """Return whether 0..size-1 are the expected outcomes, each once, with `rank` the inverse of `unrank`."""
    if diagram.size != len(expected):
        return False
    rows = [diagram.unrank(index) for index in range(diagram.size)]
    return set(map(key_of, rows)) == expected and all(diagram.rank(row) == i for i, row in enumerate(rows))


class ListedBits:
    """Bits that go through all possibilities instead of being random, to get the exact law of what consumes them.

    Every method answers a batch in which each row stands for one combination of all answers, each combination once.
    With `sizes` = () only one row can be answered, and the numbers of possible answers are noted in `asked`.
    """

    def __init__(self, sizes: Sequence[int] = ()) -> None:
        self.asked: list[int] = []
        self._sizes = list(sizes)

    @property
    def rows(self) -> int:
        """Number of combinations."""
        return prod(self._sizes)

    def _digit(self, options: int) -> NDArray[np.int64]:
        turn = len(self.asked)
        self.asked.append(options)
        if not self._sizes:
            return np.zeros(1, np.int64)
        assert self._sizes[turn] == options
        return np.arange(self.rows) // prod(self._sizes[:turn]) % options

    def below(self, bounds: NDArray[np.int64]) -> NDArray[np.int64]:
        assert (bounds == bounds[0]).all()
        return self._digit(int(bounds[0]))

    def shuffles(self, rows: int, size: int) -> NDArray[np.int64]:
        every = np.array(list(itertools.permutations(range(size))), np.int64)
        return every[self._digit(len(every))]

    def subsets(self, size: int, counts: NDArray[np.int64]) -> NDArray[np.int64]:
        assert (counts == counts[0]).all()
        every = list(itertools.combinations(range(size), int(counts[0])))
        return np.array(every, np.int64).reshape(len(every), -1)[self._digit(len(every))]


def lifted(diagram: Diagram, events: Sequence[int]) -> Counter[Key]:
    """Return how often each outcome comes out of `lift` for a path, over all answers that its bits can give."""
    path = np.array([events], np.int32)
    asking = ListedBits()
    diagram.process.lift(path, asking)  # type: ignore[arg-type]
    listing = ListedBits(asking.asked)
    rows = diagram.process.lift(np.repeat(path, listing.rows, axis=0), listing)  # type: ignore[arg-type]
    return Counter(keys_of(rows))


# -- statistics -----------------------------------------------------------------------------------------------


def chi_square(counts: Sequence[int], expected: Sequence[float] | None = None) -> float:
    """Return the p-value of Pearson's test of counts against expected ones (None: all equal).

    The chi-square law is the limit for large counts; with at least 100 expected in each cell its far tail is good enough
    for the limits used here.
    """
    seen = np.asarray(counts, np.float64)
    wanted = np.full(len(seen), seen.sum() / len(seen)) if expected is None else np.asarray(expected, np.float64)
    assert (wanted >= 100).all(), "too few draws for the chi-square law"
    return float(chi2.sf(((seen - wanted) ** 2 / wanted).sum(), len(seen) - 1))


class Verdict:
    """The one decision of a statistical test; `fair` fails with probability at most ALPHA where all is right."""

    def __init__(self) -> None:
        self._used = False

    def fair(self, p_value: float) -> None:
        """Decide that what was tested is fair. Once per test: two decisions would double the risk."""
        assert not self._used, "a statistical test decides once"
        self._used = True
        assert p_value >= ALPHA, f"p = {p_value:.3g} is below {ALPHA}"

    @staticmethod
    def biased(p_value: float) -> None:
        """Demand that a twin with a bias is caught without any doubt."""
        assert p_value < CAUGHT, f"the biased twin is not caught: p = {p_value:.3g}"
