"""What a rule is stated about: the frame and the kind, and the ways in which a sheet points into them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from decimal import Decimal
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from core.errors import Fault, SheetError
from core.frame import Frame, Table, clean
from core.kinds import OutcomeKind
from core.parts import Mask
from core.reading import Bound, Fields, FromColumn, Number, OpenTable, Report, TableFile, plain, shown

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

    units: list[str | int] | None = Field(None, description="a list of two or more units")
    pairs: list[list[str | int]] | None = Field(None, description='a list of pairs such as [["p1", "p2"]]')
    file: TableFile | str | None = Field(None, description="a file with two columns of units")
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
        found: list[int] = []
        good = True
        for name in names:
            text = plain(name)
            index = self.frame.index(text) if text is not None else None
            if index is None:
                known = self.frame.ids if self.frame.size <= 20_000 else ()
                report.fault(key, "there is no such unit in the list.", found=name, known=known)
                good = False
            elif index in found:
                report.fault(key, "this unit is named twice.", found=name)
                good = False
            else:
                found.append(index)
        if good and not found:
            report.fault(key, "no unit is named.", allowed="at least one")
            good = False
        return np.array(found, np.int64) if good else None

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
        listed = wanted if isinstance(wanted, list) else [wanted]
        texts = [plain(value) for value in listed]
        if not texts or any(text is None for text in texts):
            report.fault("where", f"{column} is compared with what is no value.", found=wanted, allowed=_SELECTOR)
            return None
        codes, values = self.frame.codes(column)
        cleaned = {clean(text) for text in texts if text is not None}
        hits = np.array([value in cleaned for value in values], bool)
        return hits[codes]

    def _between(self, column: str, wanted: dict[str, Any], report: Report) -> Mask | None:
        bounds = [wanted.get("min"), wanted.get("max")]
        numbers = all(b is None or isinstance(b, int | Decimal) and not isinstance(b, bool) for b in bounds)
        if not wanted or set(wanted) - {"min", "max"} or not numbers:
            report.fault("where", f"{column} has a range that cannot be read.", found=wanted, allowed=_SELECTOR)
            return None
        try:
            amounts = self.frame.amounts(column)
        except SheetError as error:
            report.take(error)
            return None
        low, high = (None if b is None else Decimal(b).scaleb(amounts.decimals) for b in bounds)
        mask = np.ones(self.frame.size, bool)
        if low is not None:
            mask &= amounts.values >= _whole(low, up=True)
        if high is not None:
            mask &= amounts.values <= _whole(high, up=False)
        return mask

    def has_column(self, column: str, key: str, report: Report) -> bool:
        """Return whether the list has this column, reporting it if not."""
        if column in self.frame.columns:
            return True
        known = self.frame.columns
        report.fault(key, "the list has no such column.", found=column, allowed=", ".join(known), known=known)
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
            report.fault("", "one of these must be given.", found=given or None, allowed="units, pairs, file or alike")
            return None
        if units is not None:
            group = self.units(units, "units", report)
            if group is not None and len(group) < 2:
                report.fault("units", "a single unit has nobody to be with.", found=units, allowed="two or more")
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
        key = "pairs" if file is None else "file"
        if file is not None:
            table = self.table(file, "file", report)
            if table is None:
                return None
            if len(table.columns) != 2:
                report.fault("file", f"{table.name} must have two columns.", found=", ".join(table.columns))
                return None
            pairs = list(zip(*(table.text(column) for column in table.columns), strict=True))
        assert pairs is not None
        found = []
        for pair in pairs:
            if len(pair) != 2:
                report.fault(key, "a pair has two units.", found=pair, allowed='["a", "b"]')
                return None
            both = self.units(pair, key, report)
            if both is not None:
                found.append(both)
        if not pairs:
            report.fault(key, "there is no pair.", allowed="at least one")
        return found if found and len(found) == len(pairs) else None

    def table(self, file: TableFile | str, key: str, report: Report) -> Table | None:
        """Open a file of the sheet."""
        try:
            return self.open_table(TableFile(file=file) if isinstance(file, str) else file)
        except SheetError as error:
            report.take(error)
            return None

    # -- places -----------------------------------------------------------------------------------------------

    def in_places(self, names: Sequence[object] | None, key: str, report: Report) -> tuple[int, ...] | None:
        """Return the numbers of named places; all if none are named; None after reporting a fault."""
        places = self.kind.places
        if names is None:
            return tuple(range(len(places.ids)))
        if not places.word:
            report.fault(key, f"a {self.kind.name} has no places.", found=names)
            return None
        found = []
        for name in names:
            text = plain(name)
            number = places.ids.index(text) if text in places.ids else None
            if number is None or number in found:
                message = (
                    f"this {places.word} is named twice." if number in found else f"there is no such {places.word}."
                )
                report.fault(key, message, found=name, allowed=_some(places.ids), known=places.ids)
                return None
            found.append(number)
        if not found:
            report.fault(key, f"no {places.word} is named.", allowed="at least one")
            return None
        return tuple(found)

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
            report.fault("per", f"both the list and the {kinds_places.word}s have this column.", found=per)
            return None
        if of_places and kinds_places.table is not None:
            texts = kinds_places.table.text(per)
            values = dict.fromkeys(texts[p] for p in places if texts[p])
            return [(f"{per} {v}", units, tuple(p for p in places if texts[p] == v)) for v in values]
        if of_units:
            codes, values_of_units = self.frame.codes(per)
            return [(f"{per} {v}", units & (codes == i), inside) for i, v in enumerate(values_of_units) if v]
        word = [kinds_places.word] if kinds_places.word else []
        known = [*word, *kinds_places.columns, *self.frame.columns]
        report.fault("per", "there is no such column.", found=per, allowed=", ".join(known), known=known)
        return None

    def bound(
        self, bound: Bound | None, key: str, place: int | None, decimals: int, report: Report
    ) -> int | None | str:
        """Return a bound as an integer scaled by 10^decimals; "" after reporting a fault."""
        if isinstance(bound, FromColumn):
            table = self.kind.places.table
            if place is None or table is None or bound.column not in table.columns:
                allowed = f"a number, or a column of the {self.kind.places.word}s where each is counted on its own"
                report.fault(key, "this column cannot be used here.", found=bound.column, allowed=allowed)
                return ""
            text = table.text(bound.column)[place]
            try:
                value: Number = Decimal(text)
            except ArithmeticError:
                report.fault(key, f"{table.place(place, bound.column)} of {table.name} is no number.", found=text)
                return ""
        elif bound is None:
            return None
        else:
            value = bound
        scaled = Decimal(value).scaleb(decimals) if Decimal(value).is_finite() else Decimal("0.5")
        if not Decimal(value).is_finite() or abs(scaled) > 10**18:
            report.fault(key, "this number is too large.", found=bound, allowed="up to 18 digits")
            return ""
        return _whole(scaled, up=key == "min")

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


def _whole(value: Decimal, *, up: bool) -> int:
    floor = int(value // 1) if value >= 0 or value == value // 1 else int(value // 1) - 1
    return floor + 1 if up and value != floor else floor


def _some(names: Sequence[str]) -> str:
    return ", ".join(names[:12]) + (", ..." if len(names) > 12 else "")


def where_words(selector: Where | None) -> str:
    """Return a ``where`` in words: "dept deck and amount from 1000"."""
    told = []
    for column, wanted in (selector or {}).items():
        if isinstance(wanted, dict):
            low, high = wanted.get("min"), wanted.get("max")
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


def scope_words(setting: Setting, scopes: Sequence[Scope], per: str | None, what: str, decimals: int = 0) -> str:
    """Return the sentence of a quota or total.

    `what` follows the bounds, with "{s}" for the plural: "unit{s} with dept deck", "of amount".
    """

    def amount(bound: int | None) -> str | None:
        return None if bound is None else format(Decimal(bound).scaleb(-decimals), "f")

    def told(scope: Scope) -> str:
        low, high = amount(scope.low), amount(scope.high)
        plural = "" if (high if high is not None else low) == "1" else "s"
        return f"{bounds_words(low, high)} {what.replace('{s}', plural)}"

    places = setting.kind.places
    sentences = [told(scope) for scope in scopes]
    if per is None:
        verb = "are drawn" if "{s}" in what else "is drawn"
        if scopes[0].places is None:
            if setting.kind.name == "roster":
                return f"All slots together have {sentences[0]}."
            return f"{sentences[0][0].upper()}{sentences[0][1:]} {verb}."
        names = _some([places.ids[p] for p in scopes[0].places])
        return f"{places.word.capitalize()} {names}: {sentences[0]}{' together' if len(scopes[0].places) > 1 else ''}."
    if len(set(sentences)) == 1:
        some = f" of {_some([s.words.removeprefix(per + ' ') for s in scopes])}"
        every = len(scopes) == len(places.ids) if per == places.word else True
        return f"Each {per}{'' if every else some} has {sentences[0]}."
    return f"{'; '.join(f'{s.words} has {t}' for s, t in zip(scopes, sentences, strict=True))}.".capitalize()
