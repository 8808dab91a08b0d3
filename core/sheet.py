"""The sheet: frame, kind and rules as the user states them, validated as a whole."""

from __future__ import annotations

import hashlib
import json
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from decimal import Decimal
from typing import Any

from pydantic import Field

from core import kinds
from core.errors import Fault, SheetError
from core.frame import Frame, Table, frame_of, nearest
from core.kinds import OutcomeKind
from core.reading import Fields, OpenTable, Report, TableFile
from core.rules import Rule
from core.setting import RuleFields, Setting
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
    try:
        document = tomllib.loads(text, parse_float=Decimal)
    except tomllib.TOMLDecodeError as error:
        raise SheetError(Fault(f"this is not TOML: {error}.", name)) from None
    except RecursionError:
        raise SheetError(Fault("this is not TOML: it is nested too deeply.", name)) from None
    fields = report.fields(SheetFields, document)
    if document.get("format") != FORMAT and isinstance(document.get("format"), int):
        report.fault("format", "this format is not known.", found=document["format"], allowed=str(FORMAT))
    if fields is None or report.faults:
        raise SheetError(report.faults)
    tables: dict[str, Table] = {}

    def open_once(wanted: TableFile) -> Table:
        if wanted.file not in tables:
            tables[wanted.file] = open_table(wanted)
        return tables[wanted.file]

    record = report.at("[record]").fields(RecordFields, fields.record)
    frame = _frame(fields.frame, open_once, report.at("[frame]"))
    found_kind = _kind(fields.outcome, frame, open_once, report.at("[outcome]"))
    read = _rules(fields.rule, frame, found_kind, open_once, report)
    if report.faults or record is None or frame is None or found_kind is None:
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


def _frame(table: Mapping[str, Any], open_table: OpenTable, report: Report) -> Frame | None:
    fields = report.fields(FrameFields, table)
    if fields is None:
        return None
    if (fields.file is None) == (fields.units is None):
        report.fault("file", "either file or units must be given.", allowed='file = "list.csv"')
        return None
    try:
        if fields.units is not None:
            return frame_of(inline_table("units", fields.units), fields.id)
        wanted = TableFile(
            file=fields.file or "",
            id=fields.id,
            encoding=fields.encoding,
            separator=fields.separator,
            worksheet=fields.worksheet,
        )
        return frame_of(open_table(wanted), fields.id)
    except SheetError as error:
        report.take(error)
        return None


def _kind(table: Mapping[str, Any], frame: Frame | None, open_table: OpenTable, report: Report) -> OutcomeKind | None:
    word = table.get("kind")
    known = sorted(OutcomeKind.known)
    if not isinstance(word, str) or word not in OutcomeKind.known:
        report.fault("kind", "this is no kind of outcome.", found=word, allowed=", ".join(known), known=known)
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
        at = report.at(f"[[rule]] {number} ({word})" if isinstance(word, str) else f"[[rule]] {number}")
        name = table.get("id", f"{word} {number}")
        if isinstance(name, str) and name in ids:
            at.fault("id", "another rule has this id.", found=name)
        rule = _rule(table, word, frame, kind, open_table, at)
        if rule is not None:
            rule.id = name
            rule.note = table.get("note", "")
            ids.add(name)
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
        report.fault("kind", "there is no such rule.", found=word, allowed=", ".join(known), known=known)
        return None
    rule = Rule.known[word]
    fields = report.fields(rule.Fields, table)
    if kind is not None and kind.name not in rule.kinds:
        report.fault("kind", f"{word} does not apply to a {kind.name}.", allowed=", ".join(rule.kinds))
        return None
    if fields is None or frame is None or kind is None:
        return None
    if isinstance(fields, RuleFields) and fields.id is not None and not fields.id.strip():
        report.fault("id", "an id cannot be blank.")
        return None
    return rule.of(fields, Setting(frame, kind, open_table), report)


def _canonical(value: Any) -> Any:
    """Return TOML values as JSON values: numbers with decimals and dates become text."""
    if isinstance(value, dict):
        return {key: _canonical(item) for key, item in value.items()}
    if isinstance(value, list):
        return [_canonical(item) for item in value]
    if isinstance(value, bool | int | str):
        return value
    return str(value)


def did_you_mean(word: str, known: list[str]) -> str:
    """Return the nearest known name as a question, or ""."""
    near = nearest(word, known)
    return f" Did you mean {near!r}?" if near else ""
