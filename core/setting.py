"""What a rule is stated about: the frame and the kind, and the ways in which a sheet points into them."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from decimal import Decimal
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from core.errors import Fault, SheetError
from core.frame import Amounts, Frame, Table, clean, listed
from core.kinds import OutcomeKind
from core.parts import Mask
from core.reading import Bound, Fields, FromColumn, OpenTable, Report, TableFile, plain, scaled, shown
from core.statement import Literal, Statement

Units = NDArray[np.int64]
Where = dict[str, Any]


class RuleFields(Fields):
    """Keys that every rule may carry."""

    kind: str = Field(description="the name of a rule")
    id: str | None = Field(None, description="a short name of your own for this rule")
    note: str | None = Field(None, description="text: why the rule is there")
    off: bool = Field(False, description="true: kept in the sheet but not in force")
    empty: bool = Field(False, description="true: a `where` that matches nobody is meant")


class GroupFields(RuleFields):
    """Keys of a rule on groups of units."""

    units: list[str | int] | None = Field(None, description='a list of two or more units such as ["p1", "p2"]')
    pairs: list[list[str | int]] | None = Field(None, description='a list of pairs such as [["p1", "p2"]]')
    file: TableFile | str | None = Field(None, description='a file with two columns of units: "pairs.csv"')
    alike: str | None = Field(None, description="a column: units with the same value belong together")


@dataclass(frozen=True, eq=False)
class Scope:
    """What one count of a rule looks at.

    Attributes
    ----------
    where
        In words, after "In all" and the like: "slot w14", "dept deck", or "" for all.
    units
        bool, shape (units,).
    places
        Numbers of the places, or None for all.
    low, high
        Inclusive bounds, or None.
    """

    words: str
    units: Mask
    places: tuple[int, ...] | None
    low: int | None
    high: int | None


@dataclass(frozen=True, eq=False)
class Setting:
    """A frame, a kind over it, and the files beside the sheet."""

    frame: Frame
    kind: OutcomeKind
    open_table: OpenTable

    def __reduce__(self) -> tuple[Any, ...]:
        """Leave the open files behind: a rule that has been read needs none of them in another process."""
        return Setting, (self.frame, self.kind, _closed)

    # -- units ------------------------------------------------------------------------------------------------

    def units(self, names: Sequence[object], key: str, report: Report) -> Units | None:
        """Return the indices of named units; None after reporting unknown or repeated names."""
        found: dict[int, None] = {}
        before = len(report.faults)
        for name in names:
            index = self.unit(name, key, report)
            if index is not None and index in found:
                report.fault(key, "this unit is named twice.", found=name)
            elif index is not None:
                found[index] = None
            if stopped(report, key, before):
                break
        if not names:
            report.fault(key, "no unit is named.", allowed="at least one")
        return np.array(list(found), np.int64) if len(report.faults) == before else None

    def unit(self, name: object, key: str, report: Report) -> int | None:
        """Return the index of a named unit; None after reporting an unknown name."""
        text = plain(name)
        index = self.frame.index(text) if text is not None else None
        if index is None:
            known = self.frame.ids if self.frame.size <= _MOST_NAMES else ()
            found = "a blank" if text is not None and not text.strip() else name
            allowed = f"the ids of the list, in its column {self.frame.id}"
            report.fault(key, "there is no such unit in the list.", found=found, allowed=allowed, known=known)
        return index

    def where(self, selector: Where | None, report: Report, *, empty: bool) -> Mask | None:
        """Return which units a ``where`` selects: bool, shape (units,)."""
        mask = np.ones(self.frame.size, bool)
        if selector is None:
            return mask
        good = True
        for column, wanted in selector.items():
            part = self._matching(column, wanted, report)
            if part is None:
                good = False
            else:
                mask &= part
        if good and not mask.any() and not empty:
            report.fault(
                "where",
                "no unit of the list matches.",
                found=where_words(selector),
                allowed="something that matches, or empty = true if this is meant",
                known=self._values(selector),
            )
            return None
        return mask if good else None

    def _values(self, selector: Where) -> Sequence[str]:
        column = next(iter(selector), "")
        return [f"{column} {value}" for value in self.frame.codes(column)[1][:1000]]

    def _matching(self, column: str, wanted: object, report: Report) -> Mask | None:
        if not self.has_column(column, "where", report):
            return None
        if isinstance(wanted, dict):
            return self._between(column, wanted, report)
        choices = wanted if isinstance(wanted, list) else [wanted]
        texts = [plain(value) for value in choices]
        if not texts or any(text is None for text in texts):
            message = f"{column} must be compared with texts or numbers."
            report.fault("where", message, found=wanted, allowed=_SELECTOR)
            return None
        codes, values = self.frame.codes(column)
        cleaned = {clean(text) for text in texts if text is not None}
        hits = np.array([value in cleaned for value in values], bool)
        return hits[codes]

    def _between(self, column: str, wanted: dict[str, Any], report: Report) -> Mask | None:
        unknown = [key for key in wanted if key not in ("min", "max")]
        if unknown or not wanted:
            message = f"the range of {column} needs min or max{' and nothing else' if unknown else ''}."
            found = unknown[0] if unknown else wanted
            report.fault("where", message, found=found, allowed=_SELECTOR, known=("min", "max"))
            return None
        numbers = [b for b in wanted.values() if isinstance(b, int | Decimal) and not isinstance(b, bool)]
        if len(numbers) < len(wanted) or any(scaled(b, 0, up=True) is None for b in numbers):
            message = f"the range of {column} needs numbers."
            report.fault("where", message, found=wanted, allowed="numbers of up to 18 digits")
            return None
        if len(wanted) == 2 and wanted["min"] > wanted["max"]:
            report.fault("where", f"the range of {column} is empty: min is above max.", found=wanted)
            return None
        amounts = self.amounts(column, "where", report)
        if amounts is None:
            return None
        mask = np.ones(self.frame.size, bool)
        if "min" in wanted:
            mask &= amounts.values >= _beyond(scaled(wanted["min"], amounts.decimals, up=True), wanted["min"])
        if "max" in wanted:
            mask &= amounts.values <= _beyond(scaled(wanted["max"], amounts.decimals, up=False), wanted["max"])
        return mask

    def amounts(self, column: str, key: str, report: Report) -> Amounts | None:
        """Return a column as numbers; None after reporting that the key needs numbers, and which lines have none."""
        if not self.has_column(column, key, report):
            return None
        try:
            return self.frame.amounts(column)
        except SheetError as error:
            numeric = [name for name in self.frame.columns if name != self.frame.id and self.frame.is_number(name)]
            allowed = f"a column of numbers ({listed(numeric)})" if numeric else "a column of numbers"
            report.fault(key, "not every line has a number in this column.", found=column, allowed=allowed)
            report.take(error)
            return None

    def has_column(self, column: str, key: str, report: Report) -> bool:
        """Return whether the list has this column, reporting it if not."""
        if column in self.frame.columns:
            return True
        known = self.frame.columns
        report.fault(key, "the list has no such column.", found=column, allowed=listed(known), known=known)
        return False

    def values(self, column: str, key: str, report: Report) -> tuple[NDArray[np.int64], tuple[str, ...]] | None:
        """Return each unit's value of a column as a code (-1 for blank) and the values."""
        if not self.has_column(column, key, report):
            return None
        codes, values = self.frame.codes(column)
        kept = [i for i, value in enumerate(values) if value]
        renumber = np.full(len(values), -1, np.int64)
        renumber[kept] = np.arange(len(kept))
        return renumber[codes], tuple(values[i] for i in kept)

    # -- groups and pairs of units ----------------------------------------------------------------------------

    def groups(
        self,
        units: Sequence[object] | None,
        pairs: Sequence[Sequence[object]] | None,
        file: TableFile | str | None,
        alike: str | None,
        report: Report,
    ) -> list[Units] | None:
        """Return groups of two or more units, stated in exactly one of four ways."""
        given = [k for k, v in (("units", units), ("pairs", pairs), ("file", file), ("alike", alike)) if v is not None]
        if len(given) != 1:
            one_of(("units", "pairs", "file", "alike"), given, report)
            return None
        if units is not None:
            group = self.units(units, "units", report)
            if group is not None and len(group) < 2:
                report.fault("units", "a group has two units at least.", found=units, allowed="two or more")
                return None
            return None if group is None else [group]
        if alike is not None:
            found = self.values(alike, "alike", report)
            if found is None:
                return None
            by_value = [np.flatnonzero(found[0] == code).astype(np.int64) for code in range(len(found[1]))]
            return [group for group in by_value if len(group) > 1]
        return self.pairs(pairs, file, report)

    def pairs(
        self, pairs: Sequence[Sequence[object]] | None, file: TableFile | str | None, report: Report
    ) -> list[Units] | None:
        """Return pairs of units, inline or from the two columns of a file."""
        lines, table = pairs or [], None
        if file is not None:
            table = self.table(file, "file", report)
            if table is None:
                return None
            if len(table.columns) != 2:
                message = f"{table.name} must have two columns of units."
                report.fault("file", message, found=", ".join(table.columns))
                return None
            lines = list(zip(*(table.text(column) for column in table.columns), strict=True))
        found: list[Units] = []
        before = len(report.faults)
        for row, pair in enumerate(lines):
            at, key = (report, "pairs") if table is None else (report.line(table, row), "")
            if len(pair) != 2:
                report.fault("pairs", "a pair has two units.", found=pair, allowed='["p1", "p2"]')
            else:
                both = self.units(pair, key, at)
                found += [] if both is None else [both]
            if stopped(report, "pairs" if table is None else "file", before):
                break
        if not lines:
            report.fault("pairs", "there is no pair.", allowed="at least one")
        return found if len(report.faults) == before else None

    def table(self, file: TableFile | str, key: str, report: Report) -> Table | None:
        """Open a file of the sheet."""
        try:
            return self.open_table(TableFile(file=file) if isinstance(file, str) else file)
        except SheetError as error:
            report.take(error, key, inside=key)
            return None

    # -- places -----------------------------------------------------------------------------------------------

    def in_places(self, names: Sequence[object] | None, key: str, report: Report) -> tuple[int, ...] | None:
        """Return the numbers of named places; all if none are named; None after reporting a fault."""
        if names is None:
            return tuple(range(len(self.kind.places.ids)))
        if not self.kind.places.word:
            report.fault(key, f"{with_article(self.kind.name)} has no places.", found=names)
            return None
        before = len(report.faults)
        found: dict[int, None] = {}
        for name in names:
            number = self.in_place(name, key, report)
            if number is not None and number in found:
                report.fault(key, f"this {self.kind.places.word} is named twice.", found=name)
            elif number is not None:
                found[number] = None
            if stopped(report, key, before):
                break
        if not names:
            report.fault(key, f"no {self.kind.places.word} is named.", allowed="at least one")
        return tuple(found) if len(report.faults) == before else None

    def in_place(self, name: object, key: str, report: Report) -> int | None:
        """Return the number of a named place; None after reporting an unknown name."""
        places = self.kind.places
        text = plain(name)
        text = None if text is None else clean(text)
        if text in places.ids:
            return places.ids.index(text)
        numbered = places.table is None
        allowed = f"1 to {len(places.ids)}" if numbered else listed(places.ids, 12)
        known = () if numbered else places.ids[:_MOST_NAMES]
        found = "a blank" if text == "" else name
        report.fault(key, f"there is no such {places.word}.", found=found, allowed=allowed, known=known)
        return None

    def scopes(
        self,
        units: Mask,
        per: str | None,
        names: Sequence[object] | None,
        low: Bound | None,
        high: Bound | None,
        report: Report,
        *,
        decimals: int = 0,
    ) -> list[Scope] | None:
        """Return the counts that a quota or total makes, each with its bounds scaled by 10^decimals."""
        places = self.in_places(names, "in", report)
        if places is None:
            return None
        bases = self._bases(units, per, places, names is not None, report)
        if bases is None:
            return None
        scopes = []
        single = per is not None and per == self.kind.places.word
        for words, mask, numbers in bases:
            place = numbers[0] if single and numbers is not None else None
            bounds = [self.bound(b, k, place, decimals, report) for b, k in ((low, "min"), (high, "max"))]
            if any(isinstance(bound, str) for bound in bounds):
                return None
            least, most = bounds
            assert not isinstance(least, str)
            assert not isinstance(most, str)
            scopes.append(Scope(words, mask, numbers, least, most))
        return scopes

    def _bases(
        self, units: Mask, per: str | None, places: tuple[int, ...], named: bool, report: Report
    ) -> list[tuple[str, Mask, tuple[int, ...] | None]] | None:
        kinds_places = self.kind.places
        inside = places if named else None
        if per is None:
            return [("", units, inside)]
        if kinds_places.word and per == kinds_places.word:
            return [(f"{kinds_places.word} {kinds_places.ids[p]}", units, (p,)) for p in places]
        of_places, of_units = per in kinds_places.columns, per in self.frame.columns
        if of_places and of_units:
            message = f"both the list and the {kinds_places.word}s have this column, so it is not clear which is meant."
            report.fault("per", message, found=per, allowed="a column that only one of them has")
            return None
        if of_places and kinds_places.table is not None:
            texts = kinds_places.table.text(per)
            values = dict.fromkeys(texts[p] for p in places if texts[p])
            return [(f"{per} {v}", units, tuple(p for p in places if texts[p] == v)) for v in values]
        if of_units:
            codes, values_of_units = self.frame.codes(per)
            return [(f"{per} {v}", units & (codes == i), inside) for i, v in enumerate(values_of_units) if v]
        word = [kinds_places.word] if kinds_places.word else []
        known = list(dict.fromkeys([*word, *kinds_places.columns, *self.frame.columns]))
        report.fault("per", "there is no such column.", found=per, allowed=listed(known), known=known)
        return None

    def bound(
        self, bound: Bound | None, key: str, place: int | None, decimals: int, report: Report
    ) -> int | None | str:
        """Return a bound as an integer scaled by 10^decimals; "" after reporting a fault."""
        if bound is None:
            return None
        if not isinstance(bound, FromColumn):
            whole = scaled(bound, decimals, up=key == "min")
            if whole is None:
                report.fault(key, "this number is too large, or none.", found=bound, allowed="up to 18 digits")
            return "" if whole is None else whole
        word, table = self.kind.places.word, self.kind.places.table
        columns = () if table is None else table.columns
        if place is None or table is None or bound.column not in columns:
            allowed = f'with per = "{word}" a column of the {word}s ({listed(columns)})' if columns else "a number"
            message = "this column cannot be used here."
            report.fault(key, message, found=bound.column, allowed=allowed, known=columns if place is not None else ())
            return ""
        text = table.text(bound.column)[place]
        whole = scaled(Decimal(text), decimals, up=key == "min") if _NUMBER.fullmatch(text) else None
        if whole is None:
            at = report.line(table, place, bound.column)
            at.fault("", f"this is no number, and {report.place} needs one.", found=text or "a blank")
        return "" if whole is None else whole

    def group_labels(self, groups: Sequence[Units]) -> NDArray[np.int64]:
        """Return a label per unit: equal for units that belong to the same of these groups."""
        belongs: dict[int, tuple[int, ...]] = {}
        for number, group in enumerate(groups):
            for unit in group.tolist():
                belongs[unit] = (*belongs.get(unit, ()), number)
        labels = np.zeros(self.frame.size, np.int64)
        known: dict[tuple[int, ...], int] = {}
        for unit, numbers in belongs.items():
            labels[unit] = known.setdefault(numbers, len(known) + 1)
        return labels

    def unit_words(self, units: Sequence[int]) -> str:
        """Return units in words: "p1, p2 and 3 more"."""
        told = [self.frame.ids[unit] for unit in units[:12]]
        if len(units) > 12:
            return ", ".join(told) + f" and {len(units) - 12} more"
        return ", ".join(told[:-1]) + f" and {told[-1]}" if len(told) > 1 else told[0]


def _closed(wanted: TableFile) -> Table:
    raise SheetError(Fault("files cannot be opened any more.", wanted.file))


_SELECTOR = "a text, a number, a list of them, or {min = 1, max = 9}"
_NUMBER = re.compile(r"[+-]?(?:[0-9]+(?:\.[0-9]+)?|\.[0-9]+)")
_MOST_NAMES = 2000
_MOST_FAULTS = 20


def stopped(report: Report, key: str, before: int) -> bool:
    """Return whether so many faults were added since there were `before` that the rest is not worth looking at."""
    if len(report.faults) - before < _MOST_FAULTS:
        return False
    report.fault(key, "there may be more faults like these; the reading of this key stopped here.")
    return True


def one_of(keys: Sequence[str], given: Sequence[str], report: Report) -> None:
    """Report that exactly one of the keys must be given."""
    allowed = f"{', '.join(keys[:-1])} or {keys[-1]}"
    if given:
        report.fault(given[1], "only one of these may be given.", found=" and ".join(given), allowed=allowed)
    else:
        report.fault("", "one of these keys must be given.", allowed=allowed)


def group_key(fields: GroupFields) -> str:
    """Return the key in which a rule's groups are stated."""
    return next((key for key in ("units", "pairs", "file", "alike") if getattr(fields, key) is not None), "")


def with_article(word: str) -> str:
    """Return "a roster", "an order"."""
    return f"{'an' if word[0] in 'aeiou' else 'a'} {word}"


def _beyond(bound: int | None, number: Decimal | int) -> int:
    """Return a bound, or one beyond every amount in place of one that is too large."""
    return bound if bound is not None else 2**62 * (1 if number > 0 else -1)


def _some(names: Sequence[str]) -> str:
    return ", ".join(names[:12]) + (", ..." if len(names) > 12 else "")


def where_words(selector: Where | None) -> str:
    """Return a ``where`` in words: "dept deck and amount from 1000"."""
    told = []
    for column, wanted in (selector or {}).items():
        if isinstance(wanted, dict):
            low, high = (None if b is None else shown(b) for b in (wanted.get("min"), wanted.get("max")))
            bounds = [f"from {low}" if low is not None else "", f"up to {high}" if high is not None else ""]
            told.append(f"{column} {' '.join(b for b in bounds if b)}")
        elif isinstance(wanted, list):
            told.append(f"{column} {' or '.join(shown(w) for w in wanted)}")
        else:
            told.append(f"{column} {shown(wanted)}")
    return " and ".join(told)


def bounds_words(low: str | None, high: str | None) -> str:
    """Return bounds in words: "exactly 5", "between 3 and 5", "at least 3", "at most 5"."""
    if low is not None and low == high:
        return f"exactly {low}"
    if low is not None and high is not None:
        return f"between {low} and {high}"
    return f"at least {low}" if low is not None else f"at most {high}"


def scope_terms(
    kind: OutcomeKind, scope: Scope, weights: NDArray[Any], model: Statement
) -> Iterator[tuple[int, Literal]]:
    """Yield what a scope adds up: each unit's weight, in each of the scope's places."""
    places = range(len(kind.places.ids)) if scope.places is None else scope.places
    for unit in np.flatnonzero(weights).tolist():
        for place in places:
            yield int(weights[unit]), model.at(unit, place)


def scope_words(setting: Setting, scopes: Sequence[Scope], per: str | None, what: str, decimals: int = 0) -> str:
    """Return the sentence of a quota or total.

    `what` follows the bounds, with "{s}" for the plural: "unit{s} with dept deck", "of amount".
    """

    def amount(bound: int | None) -> str | None:
        return None if bound is None else format(Decimal(bound).scaleb(-decimals), "f")

    def one(scope: Scope) -> bool:
        return (scope.high if scope.high is not None else scope.low) == 1

    def told(scope: Scope) -> str:
        plural = "" if one(scope) else "s"
        return f"{bounds_words(amount(scope.low), amount(scope.high))} {what.replace('{s}', plural)}"

    places = setting.kind.places
    sentences = [told(scope) for scope in scopes]
    if per is None:
        verb = "is drawn" if "{s}" not in what or one(scopes[0]) else "are drawn"
        if scopes[0].places is None:
            if places.word:
                return f"All {places.word}s together have {sentences[0]}."
            return f"{sentences[0][0].upper()}{sentences[0][1:]} {verb}."
        names = _some([places.ids[p] for p in scopes[0].places])
        return f"{places.word.capitalize()} {names}: {sentences[0]}{' together' if len(scopes[0].places) > 1 else ''}."
    if len(set(sentences)) == 1:
        some = f" of {_some([s.words.removeprefix(per + ' ') for s in scopes])}"
        every = len(scopes) == len(places.ids) if per == places.word else True
        return f"Each {per}{'' if every else some} has {sentences[0]}."
    several = "; ".join(f"{s.words} has {t}" for s, t in zip(scopes, sentences, strict=True))
    return f"{several[0].upper()}{several[1:]}."
