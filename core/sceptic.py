"""The second opinion: re-checks the outcomes of a record by plain means that share nothing with the engine.

It imports only the standard library and nothing else of core, so that a mistake in a rule, a kind or a reader
elsewhere cannot hide here as well. Re-checked are the digests of record, lists and outcomes, the text of the
sheet, the kind of every outcome and every rule in force; not re-checked are seed and plan (the replay does
that), graphs, and what worksheets contain (.xlsx: digest only). What cannot be re-checked is reported as not
holding, never passed over. GUARANTEE: exact; numbers are fractions, nothing is rounded before it is compared.
"""

from __future__ import annotations

import csv
import hashlib
import io
import json
import re
import tomllib
import unicodedata
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction
from pathlib import Path
from typing import Any

Row = dict[str, str]
Table = dict[str, Any]  # of a TOML or JSON text
Bounds = tuple[Fraction | None, Fraction | None]
# Who is at each location. Locations of an order are "1", "2", ..., in this order; a selection has the one
# location "". In a pairing each unit is at its partner, and those who stay single are at "".
Outcome = dict[str, set[str]]
Numbered = list[tuple[int, Outcome]]
Failures = Iterator[tuple[int, str]]  # number of an outcome that does not meet a rule, and what was counted

_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)", re.ASCII)
_DIGITS = 400  # longer numbers are refused: no list of amounts has them, and they would only cost time
# Per kind: the column of outcomes.csv that says where a unit is, and the keys of [outcome].
_COLUMN = dict(selection="", assignment="place", roster="slot", order="position", pairing="partner")
_KEYS = dict(selection="size", assignment="places", roster="slots", order="", pairing="sides single")


@dataclass(frozen=True)
class Finding:
    """What was found about one part of a record."""

    part: str  # record, sheet, file NAME, outcomes file, outcome count, frame, kind NAME, rule ID (KIND)
    outcome: int | None  # number (from 1) of the first outcome that does not hold, or None
    holds: bool  # True only if the part was re-checked completely and nothing was found against it
    words: str  # a sentence: what was counted, and on which outcome or on how many


class _Doubt(Exception):
    """A reason, in words, why a part does not hold or cannot be re-checked."""


@dataclass(frozen=True)
class _Case:
    """The sheet as an auditor reads it: `units` and `places` are the rows of units and locations by id."""

    kind: str
    folder: Path
    id_column: str
    columns: set[str]
    units: dict[str, Row]
    places: dict[str, Row]
    outcome: Table
    rules: list[Any]
    files: list[str]  # names of the lists read so far


def _need(condition: object, words: str) -> None:
    if not condition:
        raise _Doubt(words)


def _text(value: object) -> str:
    """Text of one TOML value, as it would stand in a CSV cell, trimmed and in Unicode NFC."""
    if isinstance(value, Decimal) and abs(value.adjusted()) <= _DIGITS:
        return format(value, "f")
    _need(type(value) in (str, int), f"{value!r} is neither a text nor a number")
    return unicodedata.normalize("NFC", str(value).strip())


def _number(value: object, what: str) -> Fraction:
    text = _text(value)
    _need(len(text) <= 2 * _DIGITS and _NUMBER.fullmatch(text), f"{what} is {text!r}, which is not a number")
    return Fraction(text)


def _keys(table: Any, keys: str, what: str) -> Table:
    """Return the table if it has no other keys: one that is not known here could change what is asked for."""
    _need(isinstance(table, dict), f"{what} is not a table")
    unknown = sorted(table.keys() - keys.split())
    _need(not unknown, f"{what} has keys that cannot be re-checked independently: {', '.join(unknown)}")
    return dict(table)


def _bytes(path: Path) -> bytes:
    _need(path.is_file(), f"{path.name} is missing or is not a file")  # a device could be read without end
    return path.read_bytes()


def _list(source: Table, folder: Path, files: list[str]) -> tuple[list[str], list[Row]]:
    """Header and lines of the CSV file that a table names; lines without any text are left out."""
    source = source["file"] if isinstance(source["file"], dict) else source  # {file = "x.csv", encoding = ...}
    name = str(source["file"])
    files.append(name)
    csv_file = not name.lower().endswith(".xlsx") and "worksheet" not in source
    _need(csv_file, f"{name} is a worksheet; what it contains is not re-checked independently")
    try:
        text = _bytes(folder / name).decode(source.get("encoding", "utf-8")).removeprefix("\ufeff")
        file = io.StringIO(text.replace("\r\n", "\n"), newline="")
        reader = csv.reader(file, delimiter=source.get("separator", ","), strict=True)
        lines = [line for line in ([_text(cell) for cell in cells] for cells in reader) if any(line)]
        header = lines[0] if lines else []
        rows = [dict(zip(header, line, strict=True)) for line in lines[1:]]
    except (LookupError, TypeError, ValueError, csv.Error) as error:
        raise _Doubt(f"{name} cannot be read as a list: {error}") from None
    _need(header and len(set(header)) == len(header), f"{name} has no header line, or names a column twice")
    return header, rows


def _lines(source: Any, what: str, folder: Path, files: list[str]) -> dict[str, Row]:
    """Lines by id of a file, or of a list in the sheet: ids, or tables."""
    table = source if isinstance(source, dict) else {"units": source}
    _keys(table, "units file id encoding separator worksheet", what)
    column = _text(table.get("id", "id"))
    _need(("file" in table) != ("units" in table), f"{what} needs one source: a file or a list")
    if "file" in table:
        header, rows = _list(table, folder, files)
    else:
        _need(isinstance(table["units"], list), f"{what} is missing or is not a list")
        entries = [entry if isinstance(entry, dict) else {column: entry} for entry in table["units"]]
        rows = [{_text(key): _text(cell) for key, cell in entry.items()} for entry in entries]
        header = [key for row in rows for key in row]
    found: dict[str, Row] = {}
    for row in rows:
        name = row.get(column, "")
        _need(name and name not in found, f"{what}: the id {name!r} in {column!r} is blank or occurs twice")
        found[name] = {key: row.get(key, "") for key in header}
    return found


def _read_sheet(text: str, folder: Path, files: list[str]) -> _Case | Finding:
    """Read the sheet and its lists; a Finding if that fails. The names of the lists are added to `files`."""
    part = "sheet"
    try:
        sheet = tomllib.loads(text.removeprefix("\ufeff"), parse_float=Decimal)
        _need(sheet.get("format") == 1, "only sheets of format 1 can be re-checked independently")
        rules, outcome, frame = sheet.get("rule", []), sheet.get("outcome", {}), sheet.get("frame", {})
        kind = outcome.get("kind")
        part = f"kind {kind}"
        _need(kind in _COLUMN, f"the outcome kind {kind!r} cannot be re-checked independently")
        _keys(outcome, f"kind {_KEYS[kind]}", "[outcome]")
        part = "frame"
        units = _lines(frame, "[frame]", folder, files)
        part = f"kind {kind}"
        places: dict[str, Row] = {"": {}} if kind == "selection" else {}
        if kind == "order":
            places = {str(position): {} for position in range(1, len(units) + 1)}
        elif kind in ("assignment", "roster"):
            places = _lines(outcome.get(_KEYS[kind]), _KEYS[kind], folder, files)
    except Exception as error:
        return _failed(part, error)
    id_column, columns = _text(frame.get("id", "id")), {column for row in units.values() for column in row}
    return _Case(kind, folder, id_column, columns, units, places, outcome, rules, files)


def _failed(part: str, error: Exception, outcome: int | None = None) -> Finding:
    """Whatever goes wrong while a part is re-checked counts against it: never a pass, never a traceback."""
    words = str(error) if isinstance(error, _Doubt) else f"{type(error).__name__}: {error}"
    return Finding(part, outcome, False, f"{f'Outcome {outcome}' if outcome else f'In the {part}'}: {words}.")


def _structure(case: _Case, rows: list[Row]) -> Outcome:
    """Read one outcome and check that it is of the stated kind."""
    column, pairing = _COLUMN[case.kind], case.kind == "pairing"
    cells = [(_text(row.get("unit", "")), _text(row.get(column, ""))) for row in rows]
    outcome: Outcome = {place: set() for place in ([""] if pairing else case.places)}
    for unit, place in cells:
        _need(unit in case.units, f"the unit {unit!r} is not in the frame")
        known = place == "" or place in case.units if pairing else place in case.places
        _need(known, f"unit {unit} has the {column} {place!r}, which the sheet does not know")
        outcome.setdefault(place, set()).add(unit)
        if pairing and place:
            outcome[unit] = {place}
    _need(len(set(cells)) == len(cells), "a line occurs twice")
    named = [unit for unit, _ in cells] + [place for _, place in cells if pairing and place]
    once = case.kind in ("selection", "roster") or sorted(named) == sorted(case.units)
    _need(once, f"{len(named)} names are not each of the {len(case.units)} units exactly once")
    if pairing:
        _check_sides(case, outcome)
    for place, limits in case.places.items():
        bounds = _bounds({key: limits.get(key) or None for key in ("min", "max")})
        if case.kind == "order":
            bounds = Fraction(1), Fraction(1)
        elif case.kind == "roster":  # columns of a slot are for rules to refer to
            bounds = None, None
        elif case.kind == "selection":
            size = case.outcome.get("size", {})
            size = size if isinstance(size, dict) else {"min": size, "max": size}
            bounds = _bounds(_keys(size, "min max", "size"))
        words = _outside(len(outcome[place]), bounds)
        _need(not words, f"number of units{f' at {column} {place}' if place else ''}: {words}")
    return outcome


def _check_sides(case: _Case, outcome: Outcome) -> None:
    """Check who may be paired with whom, and how many stay single."""
    uneven = len(case.units) % 2
    if "sides" in case.outcome:
        column = _column(case, case.outcome["sides"])
        sides = [row[column] for row in case.units.values()]
        _need(len(set(sides)) == 2 and "" not in sides, f"column {column!r} does not make two sides")
        uneven = abs(len(sides) - 2 * sides.count(sides[0]))
        for one, other in _pairs(outcome):
            _need(case.units[one][column] != case.units[other][column], f"{one} and {other} are on one side")
    allowed = uneven == 0 or (uneven == 1 and case.outcome.get("single") is True)
    _need(allowed, f"{uneven} units cannot be paired, which `single` does not allow")
    _need(len(outcome[""]) == uneven, f"{len(outcome[''])} units stay single, not {uneven}")


def _pairs(outcome: Outcome) -> list[tuple[str, str]]:
    """Pairs of a pairing, each once."""
    return [(unit, other) for unit, partner in outcome.items() if unit for other in partner if unit < other]


def _visits(outcome: Outcome, owners: dict[str, str]) -> dict[str, list[int]]:
    """Numbers of the locations (from 1, ascending) where each owner has a unit."""
    visits: dict[str, list[int]] = {owner: [] for owner in owners.values()}
    for number, members in enumerate(outcome.values(), start=1):
        for unit in members & owners.keys():
            visits[owners[unit]].append(number)
    return visits


def _known(names: Iterable[Any], known: dict[str, Row], what: str) -> list[str]:
    _need(not isinstance(names, str), f"{what} is not a list")
    texts = [_text(name) for name in names]
    for text in texts:
        _need(text in known, f"{what}: {text!r} is not a unit or location of the sheet")
    return texts


def _column(case: _Case, value: object) -> str:
    name = _text(value)
    _need(name in case.columns, f"the units have no column {name!r}")
    return name


def _amount(case: _Case, unit: str, column: str) -> Fraction:
    return _number(case.units[unit][column], f"column {column!r} of unit {unit}")


def _bounds(limits: Table, columns: Row | None = None) -> Bounds:
    """`min` and `max` of a table; `columns` are those that `{column = ...}` may refer to."""
    ends: list[Fraction | None] = []
    for value in (limits.get("min"), limits.get("max")):
        if isinstance(value, dict):  # a column that is not there is caught, as every mistake is
            value = (columns or {})[_text(_keys(value, "column", "a bound")["column"])]
        ends.append(None if value is None else _number(value, "a bound"))
    return ends[0], ends[1]


def _outside(count: Fraction | int, bounds: Bounds) -> str:
    """Return what is wrong with a count, or "" if it lies within its bounds."""
    low, high = bounds
    if (low is None or count >= low) and (high is None or count <= high):
        return ""
    texts = ["" if n is None else f"{Decimal(n.numerator) / n.denominator:f}" for n in (count, low, high)]
    return f"counted {texts[0]}, allowed {texts[1]}..{texts[2]}"


def _where(case: _Case, rule: Table) -> set[str]:
    """Units that meet every key of `where`; all units without it."""
    chosen = set(case.units)
    for key, wanted in rule.get("where", {}).items():
        column = _column(case, key)
        if isinstance(wanted, dict):
            bounds = _bounds(_keys(wanted, "min max", "where"))
            chosen = {unit for unit in chosen if not _outside(_amount(case, unit, column), bounds)}
        else:
            texts = {_text(entry) for entry in (wanted if isinstance(wanted, list) else [wanted])}
            chosen = {unit for unit in chosen if case.units[unit][column] in texts}
    return chosen


def _by_value(table: dict[str, Row], column: str) -> dict[str, set[str]]:
    """Ids by their value in a column; those without a value are left out."""
    groups: dict[str, set[str]] = {}
    for name, row in table.items():
        if row[column]:
            groups.setdefault(row[column], set()).add(name)
    return groups


def _groups(case: _Case, rule: Table) -> list[list[str]]:
    """Return the groups of units that a rule names, with the units of a pair in the order given."""
    given = rule.keys() & {"units", "pairs", "file", "alike"}
    _need(len(given) == 1, "the rule needs exactly one list of units")
    if "alike" in given:
        return [sorted(group) for group in _by_value(case.units, _column(case, rule["alike"])).values()]
    if "units" in given:
        return [_known(rule["units"], case.units, "units")]
    rows = _list(rule, case.folder, case.files)[1] if "file" in given else []
    entries = [list(row.values()) for row in rows] if "file" in given else rule["pairs"]
    pairs = [_known(entry, case.units, "pairs") for entry in entries]
    _need(all(len(pair) == 2 for pair in pairs), "an entry of the pairs does not name two units")
    return pairs


def _scopes(case: _Case, rule: Table) -> Iterator[tuple[str, set[str], set[str], Row | None]]:
    """Yield each count that is asked for: name, units, locations, and the row that bounds may refer to."""
    units, per = _where(case, rule), rule.get("per")
    _need(case.kind != "selection" or "in" not in rule, "a selection has no locations")
    listed = set(_known(rule.get("in", case.places), case.places, "in"))
    places = {place: row for place, row in case.places.items() if place in listed}
    if rule["kind"] == "load":
        for unit in sorted(units):
            yield f"slots of unit {unit}", {unit}, listed, case.units[unit]
    elif per is None:
        yield "over all", units, listed, None
    elif per == _COLUMN[case.kind] != "":
        for place, row in places.items():
            yield f"{per} {place}", units, {place}, row
    else:
        name = _text(per)
        of_units, of_places = name in case.columns, any(name in row for row in case.places.values())
        _need(of_units != of_places, f"per: {name!r} is not a column of the units or the locations alone")
        for value, members in _by_value(case.units if of_units else places, name).items():
            pair = (units & members, listed) if of_units else (units, members)
            yield f"{name} {value}", *pair, None


def _counted(case: _Case, rule: Table, outcomes: Numbered) -> Failures:
    """Quota and load: each unit counts one. Total: each counts its amount."""
    weight = dict.fromkeys(case.units, Fraction(1))
    if rule["kind"] == "total":
        column = _column(case, rule["column"])
        weight = {unit: _amount(case, unit, column) for unit in _where(case, rule)}
    scopes = [(name, units, places, _bounds(rule, row)) for name, units, places, row in _scopes(case, rule)]
    for number, outcome in outcomes:
        for name, units, places, bounds in scopes:
            count = sum(weight[unit] for place in places for unit in units & outcome[place])
            if words := _outside(count, bounds):
                yield number, f"{name}: {words}"


def _cells(case: _Case, rule: Table) -> tuple[list[str], list[str]]:
    """Return the units that pin or bar names, and the location of each cell; none if it names units only."""
    _need(len(rule.keys() & {"units", "cells", "file"}) == 1, "the rule needs one of units, cells and file")
    if "units" in rule:
        return _known(rule["units"], case.units, "units"), []
    key, name = "with" if case.kind == "pairing" else _COLUMN[case.kind], "unit"
    if "file" in rule:
        header, rows = _list(rule, case.folder, case.files)
        name = case.id_column if case.id_column in header else name
    else:
        header, rows = [key], [_keys(cell, f"unit {key}", "a cell") for cell in rule["cells"]]
    units = _known([row[name] for row in rows], case.units, "cells")
    if not key or key not in header:
        return units, []
    _need("in" not in rule, "cells do not go with `in`")
    known = case.units if case.kind == "pairing" else case.places
    return units, _known([row[key] for row in rows], known, "cells")


def _pinned(case: _Case, rule: Table, outcomes: Numbered) -> Failures:
    """Pin: named units or cells must be so. Bar: they must not."""
    units, cells = _cells(case, rule)
    pin, once = rule["kind"] == "pin", case.kind in ("assignment", "order")
    _need("in" not in rule or case.kind not in ("selection", "pairing"), "`in` does not go with this kind")
    _need(cells or "in" in rule or not once, "a list of units needs `in` here")
    places = _known(rule.get("in", case.places), case.places, "in")
    for number, outcome in outcomes:
        for index, unit in enumerate(units):
            if cells:
                wrong = (unit in outcome[cells[index]]) != pin
            elif case.kind == "pairing":
                wrong = (unit in outcome[""]) == pin
            else:  # a unit is in one place only, but may be on duty in every slot
                hits = [unit in outcome[place] for place in places]
                wrong = any(hits) if not pin else not any(hits) if once else not all(hits)
            if wrong:
                yield number, f"{unit}{f' with {cells[index]}' if cells else ''} breaks the {rule['kind']}"


def _grouped(case: _Case, rule: Table, outcomes: Numbered) -> Failures:
    """Apart: no two of a group meet. Together: all of it meet, or (selection, roster) none is there."""
    groups = [set(group) for group in _groups(case, rule) if len(set(group)) > 1]
    apart = rule["kind"] == "apart"
    for number, outcome in outcomes:
        at = _visits(outcome, {unit: unit for unit in case.units}) if case.kind == "order" else {}
        for group in groups:
            if case.kind == "order":
                line = sorted(at[unit][0] for unit in group)
                steps = [second - first for first, second in zip(line, line[1:], strict=False)]
                wrong = 1 in steps if apart else any(step != 1 for step in steps)
            elif case.kind == "pairing":  # a single unit has no entry of its own
                inside = [bool(outcome.get(unit, set()) & group) for unit in group]
                wrong = any(inside) if apart else not all(inside)
            else:
                counts = [len(group & members) for members in outcome.values()]
                wrong = any(count > 1 if apart else 0 < count < len(group) for count in counts)
            if wrong:
                yield number, f"{', '.join(sorted(group))} are not {rule['kind']}"


def _needs(case: _Case, rule: Table, outcomes: Numbered) -> Failures:
    cause, effect = (set(_known(rule[key], case.units, key)) for key in ("if", "then"))
    for number, outcome in outcomes:
        if cause <= outcome[""] and not effect <= outcome[""]:
            yield number, f"{', '.join(sorted(cause))} without {', '.join(sorted(effect - outcome['']))}"


def _distinct(case: _Case, rule: Table, outcomes: Numbered) -> Failures:
    column, low = _column(case, rule["column"]), _number(rule["min"], "min")
    for number, outcome in outcomes:
        for place, members in outcome.items():
            values = {case.units[unit][column] for unit in members} - {""}
            if words := _outside(len(values), (low, None)):
                yield number, f"values of {column}{f' at {place}' if place else ''}: {words}"


def _repeated(case: _Case, rule: Table, outcomes: Numbered) -> Failures:
    """Spacing and run: of units alike in an order, of the duties of each unit in a roster."""
    spacing = rule["kind"] == "spacing"
    _need(("alike" in rule) == (case.kind == "order"), "`alike` is needed in an order, and in no roster")
    duties = case.kind == "roster" and not spacing
    _need(rule.get("duties", False) is duties, "duties = true is needed for a run in a roster only")
    limit = _number(rule["min" if spacing else "max"], "the limit")
    _need(limit >= 1, "the limit has to be at least 1")
    owners = {unit: unit for unit in case.units}
    if case.kind == "order":
        groups = _by_value(case.units, _column(case, rule["alike"]))
        owners = {unit: value for value, group in groups.items() for unit in group}
    for number, outcome in outcomes:
        for name, visits in _visits(outcome, owners).items():
            length = 1
            for first, second in zip(visits, visits[1:], strict=False):
                length = length + 1 if second == first + 1 else 1
                if (second - first < limit) if spacing else (length > limit):
                    yield number, f"{name} is at number {first} and again at {second}, {length} in a row"


def _before(case: _Case, rule: Table, outcomes: Numbered) -> Failures:
    pairs = _groups(case, rule)
    for number, outcome in outcomes:
        at = _visits(outcome, {unit: unit for unit in case.units})
        for first, second in pairs:
            if at[first] >= at[second]:
                yield number, f"{first} stands at {at[first][0]} and {second} at {at[second][0]}"


def _compared(case: _Case, rule: Table, outcomes: Numbered) -> Failures:
    """Differ and agree: by value, or by the amount of the difference."""
    column = _column(case, rule["column"])
    bounds = _bounds({"min": rule.get("by_at_least"), "max": rule.get("by_at_most")})
    for number, outcome in outcomes:
        for one, other in _pairs(outcome):
            differ = case.units[one][column] != case.units[other][column]
            words = "" if differ == (rule["kind"] == "differ") else f"{column} does not {rule['kind']}"
            if bounds != (None, None):
                words = _outside(abs(_amount(case, one, column) - _amount(case, other, column)), bounds)
            if words:
                yield number, f"{one} with {other}: {words}"


def _mixed(case: _Case, rule: Table, outcomes: Numbered) -> Failures:
    column, bounds = _column(case, rule["column"]), _bounds(rule)
    for number, outcome in outcomes:
        pairs = [{case.units[unit][column] for unit in pair} for pair in _pairs(outcome)]
        if words := _outside(sum(len(values) == 2 for values in pairs), bounds):
            yield number, f"pairs that differ in {column}: {words}"


# Each rule: how it is checked, the kinds it is for, its keys.
_PLACED, _ANY = "selection assignment roster", "selection assignment roster order pairing"
_RULES: dict[str, tuple[Callable[[_Case, Table, Numbered], Failures], str, str]] = {
    "quota": (_counted, _PLACED, "where min max per in"),
    "total": (_counted, _PLACED, "column where min max per in"),
    "load": (_counted, "roster", "where min max"),
    "pin": (_pinned, _ANY, "units cells file in"),
    "bar": (_pinned, _ANY, "units cells file in"),
    "apart": (_grouped, _ANY, "units pairs file alike"),
    "together": (_grouped, _ANY, "units pairs file alike"),
    "needs": (_needs, "selection", "if then"),
    "distinct": (_distinct, "selection assignment", "column min"),
    "spacing": (_repeated, "roster order", "min alike"),
    "run": (_repeated, "roster order", "max alike duties"),
    "before": (_before, "order", "pairs file"),
    "differ": (_compared, "pairing", "column by_at_least by_at_most"),
    "agree": (_compared, "pairing", "column by_at_least by_at_most"),
    "mixed": (_mixed, "pairing", "column min max"),
}


def _check_rule(case: _Case, place: int, rule: Any, sound: Numbered, broken: int | None) -> Finding:
    """Check one rule on the outcomes of sound structure; `broken` is the first of the others."""
    table = rule if isinstance(rule, dict) else {}
    kind, part = str(table.get("kind")), f"rule {table.get('id', place)} ({table.get('kind')})"
    if table.get("off") is True:
        return Finding(part, None, True, "The rule is off, so it is not in force.")
    try:
        known = kind in _RULES and case.kind in _RULES[kind][1].split()
        _need(known, f"the rule {kind!r} cannot be re-checked independently for the kind {case.kind}")
        check, _, keys = _RULES[kind]
        for number, words in check(case, _keys(table, f"kind id note off empty {keys}", "the rule"), sound):
            return Finding(part, number, False, f"Outcome {number}: {words}.")
        _need(broken is None, f"outcome {broken} could not be checked, because its structure is broken")
    except Exception as error:
        return _failed(part, error)
    return Finding(part, None, True, f"The rule holds in each of {len(sound)} outcomes.")


def _check(case: _Case, numbered: Iterable[tuple[int, list[Row]]]) -> list[Finding]:
    sound, part = [], f"kind {case.kind}"
    broken: list[Finding] = []
    for number, rows in numbered:
        try:
            sound.append((number, _structure(case, rows)))
        except Exception as error:
            broken.append(_failed(part, error, number))
    first = [*broken, Finding(part, None, True, f"Each of {len(sound)} outcomes is of the {part}.")][0]
    return [first, *(_check_rule(case, *rule, sound, first.outcome) for rule in enumerate(case.rules, 1))]


def check_outcomes(sheet_text: str, folder: Path, outcomes: list[list[dict[str, str]]]) -> list[Finding]:
    """Check outcomes against a sheet, whose relative lists lie in `folder`; nothing else is read.

    An outcome is its lines, as in outcomes.csv ("outcome" may be left out). Findings: the kind (structure of
    every outcome), then each rule in the order of the sheet; or one alone, if the sheet or its list cannot be
    read. Exact. Never raises for a faulty sheet, list or outcome.
    """
    case = _read_sheet(sheet_text, folder, [])
    return [case] if isinstance(case, Finding) else _check(case, enumerate(outcomes, start=1))


def examine(record_path: Path, sheet_path: Path | None = None) -> list[Finding]:
    """Re-check a record (JSON) with its sheet, lists and outcomes.

    The outcomes lie beside the record. The sheet is the one given, else the one beside the record, else the
    one where the record says that it was; the rules are those of the text that the record keeps. Findings:
    record, sheet, each list, outcomes file, outcome count, kind, each rule. All hold if and only if all was
    re-checked and nothing differs. Never raises for missing, broken or altered files.
    """
    try:
        record, folder = json.loads(_bytes(record_path).decode("utf-8")), record_path.parent
        _need(record["format"] == "lotwright record 1", "the format is not 'lotwright record 1'")
        stated, sheet, outcomes = record.pop("digest", None), record["sheet"], record["outcomes"]
        path = sheet_path or folder / sheet["file"]
        path = path if sheet_path or path.is_file() else folder / sheet["path"]
        lists = {str(entry["name"]): entry["sha256"] for entry in record["files"]}
        name, text, count = str(outcomes["file"]), str(sheet["text"]), int(outcomes["count"])
        canonical = json.dumps(record, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
        sheet_digest = hashlib.sha256(text.encode("utf-8")).hexdigest()
        findings = [_same("record", stated, canonical.encode("utf-8")), _same("sheet", sheet_digest, path)]
    except Exception as error:
        return [_failed("record", error)]
    findings += [_same(f"file {file}", digest, path.parent / file) for file, digest in lists.items()]
    findings.append(_same("outcomes file", outcomes.get("sha256"), folder / name))
    case = _read_sheet(text, path.parent, [])
    if isinstance(case, Finding):
        return [*findings, case]
    try:
        numbered, words = _numbered(case, folder, name, count)
    except Exception as error:
        return [*findings, _failed("outcome count", error)]
    findings += [Finding("outcome count", None, True, words), *_check(case, numbered.items())]
    unlisted = sorted(set(case.files) - lists.keys())  # known only now, as rules read lists too
    return findings + [_failed(f"file {file}", _Doubt("the record holds no digest")) for file in unlisted]


def _same(part: str, stated: object, content: bytes | Path) -> Finding:
    try:
        data = content if isinstance(content, bytes) else _bytes(content)
        _need(hashlib.sha256(data).hexdigest() == stated, "it has changed, as its digest is another one")
    except Exception as error:
        return _failed(part, error)
    return Finding(part, None, True, f"The {part} is what the record states.")


def _numbered(case: _Case, folder: Path, name: str, count: int) -> tuple[dict[int, list[Row]], str]:
    """Lines of each outcome by its number, and the words for their count."""
    header, rows = _list({"file": name}, folder, [])
    right = header == ["outcome", "unit", *filter(None, [_COLUMN[case.kind]])]
    _need(right, f"the columns {', '.join(header)} are not those of the kind {case.kind}")
    found: dict[int, list[Row]] = {}
    for row in rows:
        number = int(row["outcome"])
        known = 1 <= number <= count and str(number) == row["outcome"]
        _need(known, f"there is an outcome {row['outcome']!r}, but the record counts {count}")
        found.setdefault(number, []).append(row)
    if len(found) == count:
        return found, f"The record and {name} count {count} outcomes."
    # An empty selection or roster has no line at all; the first outcome without lines stands for all of them.
    lost = next(number for number in range(1, count + 1) if number not in found)
    try:
        _structure(case, [])
    except _Doubt as doubt:
        raise _Doubt(f"outcome {lost} of {count} has no line in {name}, and {doubt}") from None
    return {**found, lost: []}, f"Outcomes without a line, such as {lost}, are empty, as the sheet allows."
