"""The sheet: frame, kind and rules as the user states them, validated as a whole."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from pydantic import Field

from core import kinds
from core.errors import SheetError
from core.frame import Frame, Table, clean, frame_of
from core.kinds import OutcomeKind
from core.reading import Fields, OpenTable, Report, TableFile, read_toml, shown
from core.rules import Rule
from core.setting import Setting, with_article
from core.tables import inline_table

FORMAT = 1

kinds.load("core.kinds")
kinds.load("core.rules")


class FrameFields(Fields):
    """Keys of ``[frame]``."""

    file: str | None = Field(None, description="name of a file beside the sheet")
    units: list[dict[str, Any]] | None = Field(None, description='a list of tables such as {id = "p1", dept = "deck"}')
    id: str = Field("id", description="the column that names a unit")
    encoding: str = Field("utf-8", description="name of an encoding such as utf-8 or cp1252")
    separator: str = Field(",", description='"," or ";" or a tab')
    worksheet: str | None = Field(None, description="name of a worksheet of an .xlsx file")


class RecordFields(Fields):
    """Keys of ``[record]``: shown on the record, without effect on the draw."""

    basis: str = Field("", description="text: law, standard or agreement")
    operator: str = Field("", description="text: who draws")
    scrutineer: str = Field("", description="text: who watches")
    published: str = Field("", description="text: where the digest is published")
    seed_from: str = Field("", description="text: how the seed comes about")


class SheetFields(Fields):
    """Keys of the sheet."""

    format: int = Field(description=f"{FORMAT}")
    title: str = Field("", description="text")
    purpose: str = Field("", description="text")
    frame: dict[str, Any] = Field(description="a table [frame]")
    outcome: dict[str, Any] = Field(description="a table [outcome]")
    rule: list[dict[str, Any]] = Field(default_factory=list, description="tables [[rule]]")
    record: dict[str, Any] = Field(default_factory=dict, description="a table [record]")


@dataclass(frozen=True, eq=False)
class OffRule:
    """A rule that is kept in the sheet but not in force."""

    id: str
    kind: str
    note: str
    words: str


@dataclass(frozen=True, eq=False)
class Sheet:
    """A valid sheet. Made by `read_sheet`.

    Attributes
    ----------
    name, text
        The file's name and its whole text, as it was read.
    canonical
        The content of the sheet as JSON values: what the digest is made of.
    frame, kind, rules
        What is drawn from, what an outcome is, and the rules in force.
    off
        Rules that are not in force.
    tables
        Every list that was read, by its name.
    notices
        Remarks that do not stop the work.
    """

    name: str
    text: str
    title: str
    purpose: str
    record: RecordFields
    canonical: dict[str, Any]
    frame: Frame
    kind: OutcomeKind
    rules: tuple[Rule, ...]
    off: tuple[OffRule, ...]
    tables: Mapping[str, Table]
    notices: tuple[str, ...] = field(default=())

    @property
    def digest(self) -> str:
        """SHA-256 over the canonical content and the digests of all files, hexadecimal."""
        content = {"sheet": self.canonical, "files": {name: table.sha256 for name, table in self.tables.items()}}
        return digest_of(content)

    def rule(self, id: str) -> Rule:
        """Return the rule in force with this id."""
        return next(rule for rule in self.rules if rule.id == id)


def canonical_json(value: object) -> str:
    """Return JSON with sorted keys and no spaces: equal values give equal bytes."""
    return json.dumps(value, sort_keys=True, separators=(",", ":"), ensure_ascii=False)


def digest_of(value: object) -> str:
    """Return the SHA-256 of a JSON value in canonical form, hexadecimal."""
    return hashlib.sha256(canonical_json(value).encode()).hexdigest()


def read_sheet(text: str, name: str, open_table: OpenTable) -> Sheet:
    """Return the sheet that a TOML text states.

    Raises
    ------
    SheetError
        with all faults that could be found in one go.
    """
    report = Report(name, "")
    document = read_toml(text, name)
    if type(document.get("format")) is int and document["format"] != FORMAT:
        # what another format means nobody knows here, so no more faults are looked for
        report.fault("format", "this format is not known.", found=document["format"], allowed=str(FORMAT))
        raise SheetError(report.faults)
    fields = report.fields(SheetFields, document)
    tables: dict[str, Table] = {}
    opened = _opened_once(open_table, tables)
    # whatever is wrong at the top, the tables below are read all the same: all faults are told in one go
    told = document.get("record")
    record = report.at("[record]").fields(RecordFields, told if isinstance(told, dict) else {})
    frame, found_kind = None, None
    if isinstance(document.get("frame"), dict):
        frame = _frame(document["frame"], opened, report.at("[frame]"))
    if isinstance(document.get("outcome"), dict):
        found_kind = _kind(document["outcome"], frame, opened, report.at("[outcome]"))
    listed = document.get("rule", [])
    listed = [table for table in listed if isinstance(table, dict)] if isinstance(listed, list) else []
    read = _rules(listed, frame, found_kind, opened, report)
    if report.faults or fields is None or record is None or frame is None or found_kind is None:
        raise SheetError(report.faults)
    return Sheet(
        name=name,
        text=text,
        title=fields.title,
        purpose=fields.purpose,
        record=record,
        canonical=_canonical(document),
        frame=frame,
        kind=found_kind,
        rules=tuple(rule for rule in read if isinstance(rule, Rule)),
        off=tuple(rule for rule in read if isinstance(rule, OffRule)),
        tables=tables,
        notices=tuple(report.notices),
    )


def _opened_once(open_table: OpenTable, tables: dict[str, Table]) -> OpenTable:
    """Return an opener that reads each list once and enters it in `tables` by its name.

    A file that is read in two ways (two worksheets of a workbook, say) is entered once: its digest is over all of it.
    """
    known: dict[tuple[str | None, ...], Table] = {}

    def open_once(wanted: TableFile) -> Table:
        way = (wanted.file, wanted.encoding, wanted.separator, wanted.worksheet)
        if way not in known:
            known[way] = open_table(wanted)
            tables.setdefault(wanted.file, known[way])
        return known[way]

    return open_once


def _frame(table: Mapping[str, Any], open_table: OpenTable, report: Report) -> Frame | None:
    fields = report.fields(FrameFields, table)
    if fields is None:
        return None
    if (fields.file is None) == (fields.units is None):
        found = None if fields.file is None else "both"
        report.fault("file", "either file or units must be given.", found=found, allowed='file = "list.csv"')
        return None
    try:
        if fields.units is not None:
            rows = inline_table(f"{report.file}, {report.place}, units", fields.units)
        else:
            rows = open_table(TableFile(**fields.model_dump(exclude={"units"})))
        if clean(fields.id) not in rows.columns:
            report.fault(
                "id",
                "the list has no such column to take the ids from.",
                found=fields.id,
                allowed=", ".join(rows.columns),
                known=rows.columns,
            )
            return None
        return frame_of(rows, fields.id)
    except SheetError as error:
        report.take(error, "file")
        return None


def _kind(table: Mapping[str, Any], frame: Frame | None, open_table: OpenTable, report: Report) -> OutcomeKind | None:
    word = table.get("kind")
    known = sorted(OutcomeKind.known)
    if not isinstance(word, str) or word not in OutcomeKind.known:
        message = "this is no kind of outcome." if "kind" in table else "this key is missing."
        report.fault("kind", message, found=word, allowed=", ".join(known), known=known)
        return None
    kind = OutcomeKind.known[word]
    fields = report.fields(kind.Fields, table)
    if fields is None or frame is None:
        return None
    return kind.of(fields, frame, open_table, report)


def _rules(
    listed: list[dict[str, Any]],
    frame: Frame | None,
    kind: OutcomeKind | None,
    open_table: OpenTable,
    report: Report,
) -> list[Rule | OffRule]:
    found: list[Rule | OffRule] = []
    ids: set[str] = set()
    for number, table in enumerate(listed, 1):
        word = table.get("kind")
        at = report.at(f"[[rule]] {number} ({shown(word)})" if word and isinstance(word, str) else f"[[rule]] {number}")
        name = table.get("id", f"{word} {number}")
        if isinstance(name, str):
            if name in ids:
                at.fault("id", "another rule has this id.", found=name, allowed="an id that no other rule has")
            ids.add(name)
        rule = _rule(table, word, frame, kind, open_table, at)
        if rule is not None:
            rule.id = name
            rule.note = table.get("note", "")
            found.append(OffRule(rule.id, rule.name, rule.note, rule.words()) if table.get("off") else rule)
    return found


def _rule(
    table: Mapping[str, Any],
    word: object,
    frame: Frame | None,
    kind: OutcomeKind | None,
    open_table: OpenTable,
    report: Report,
) -> Rule | None:
    known = sorted(Rule.known)
    if not isinstance(word, str) or word not in Rule.known:
        message = "there is no such rule." if "kind" in table else "this key is missing."
        report.fault("kind", message, found=table.get("kind"), allowed=", ".join(known), known=known)
        return None
    rule = Rule.known[word]
    if kind is not None and kind.name not in rule.kinds:
        message = f"this rule is for {_either(rule.kinds)}, not for {with_article(kind.name)}."
        allowed = ", ".join(name for name in known if kind.name in Rule.known[name].kinds)
        report.fault("kind", message, found=word, allowed=allowed)
        return None
    fields = report.fields(rule.Fields, table)
    if fields is not None and fields.id is not None and not fields.id.strip():
        report.fault("id", "an id cannot be blank.")
        return None
    if fields is None or frame is None or kind is None:
        return None
    return rule.of(fields, Setting(frame, kind, open_table), report)


def _either(names: Sequence[str]) -> str:
    told = [with_article(name) for name in names]
    return f"{', '.join(told[:-1])} or {told[-1]}" if len(told) > 1 else told[0]


def _canonical(value: Any) -> Any:
    """Return TOML values as JSON values: numbers with decimals and dates become text."""
    if isinstance(value, dict):
        return {key: _canonical(item) for key, item in value.items()}
    if isinstance(value, list):
        return [_canonical(item) for item in value]
    if isinstance(value, bool | int | str):
        return value
    return str(value)
