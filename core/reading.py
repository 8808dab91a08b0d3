"""Reading the tables of a sheet: every fault is collected with its place, none stops the reading of the rest."""

from __future__ import annotations

import json
import re
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from decimal import Decimal
from fractions import Fraction
from typing import Any, Protocol, TypeVar

from pydantic import BaseModel, ConfigDict, Field, ValidationError

from core.errors import Fault, SheetError
from core.frame import Table, nearest


class Fields(BaseModel):
    """The keys of one table of the sheet. Each field's description says what is allowed."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True, arbitrary_types_allowed=True)


class FromColumn(Fields):
    """A number that differs from place to place or unit to unit: ``{column = "need"}``."""

    column: str = Field(description="name of a column")


class TableFile(Fields):
    """A list in a file beside the sheet: ``{file = "slots.csv", id = "slot"}``."""

    file: str = Field(description="name of a file beside the sheet")
    id: str | None = Field(default=None, description="the column that names a line")
    encoding: str = Field(default="utf-8", description="name of an encoding")
    separator: str = Field(default=",", description='"," or ";" or a tab')
    worksheet: str | None = Field(default=None, description="name of a worksheet")


FieldsT = TypeVar("FieldsT", bound=Fields)
Number = int | Decimal
Bound = int | Decimal | FromColumn


class OpenTable(Protocol):
    """Opens a file of the sheet by its name; raises SheetError."""

    def __call__(self, wanted: TableFile) -> Table:
        """Return the table."""


@dataclass
class Report:
    """Where faults and notices about one table of the sheet are collected."""

    file: str
    place: str
    faults: list[Fault] = field(default_factory=list)
    notices: list[str] = field(default_factory=list)

    def at(self, place: str) -> Report:
        """Return a report on another table that collects into the same lists."""
        return Report(self.file, place, self.faults, self.notices)

    def line(self, table: Table, row: int, column: str = "") -> Report:
        """Return a report on one line of a list that collects into the same lists."""
        return Report(table.name, table.place(row, column), self.faults, self.notices)

    def fault(
        self, key: str, message: str, *, found: object = None, allowed: str = "", known: Sequence[str] = ()
    ) -> None:
        """Add a fault of this table; `known` are the names among which the one nearest to `found` is sought."""
        text = "" if found is None else shown(found) or '""'
        near = nearest(text, known) if known and text else ""
        self._add(Fault(message, self.file, self.place, one_line(key), text, allowed, near))

    def _add(self, fault: Fault) -> None:
        if fault not in self.faults:
            self.faults.append(fault)

    def notice(self, message: str) -> None:
        """Add a remark that does not stop the work."""
        self.notices.append(f"{self.place}: {message}")

    def take(self, error: SheetError, key: str = "", inside: str = "") -> None:
        """Add the faults of an error raised below, each once.

        Faults of the sheet itself get this table and `key` as their place: the key that names the list. So do faults of
        the keys that say how a list is read; they stand in this table itself, or in the table of the key `inside`.
        """
        for fault in error.faults:
            if fault.key in _READING_KEYS and not fault.place:
                whole = f"{inside}.{fault.key}" if inside else fault.key
                fault = replace(fault, file=self.file, place=self.place, key=whole)
            elif fault.file == self.file and not fault.place:
                fault = replace(fault, place=self.place, key=fault.key or key)
            self._add(fault)

    def fields(self, model: type[FieldsT], table: Mapping[str, Any]) -> FieldsT | None:
        """Return the table's keys as `model`, or None after adding one fault for each key that is wrong."""
        try:
            return model.model_validate(dict(table))
        except ValidationError as error:
            wrong: dict[str, str] = {}
            for item in error.errors(include_url=False, include_input=False):
                wrong.setdefault(str(item["loc"][0]) if item["loc"] else "", item["type"])
            for key, cause in wrong.items():
                self._wrong_key(model, table, key, cause)
            return None

    def _wrong_key(self, model: type[Fields], table: Mapping[str, Any], key: str, cause: str) -> None:
        known = {info.alias or name: info for name, info in model.model_fields.items()}
        allowed = (known[key].description or "") if key in known else ""
        if cause == "extra_forbidden" and key not in known:
            near = nearest(key, known)
            message = "there is no such key here."
            self._add(Fault(message, self.file, self.place, one_line(key), "", ", ".join(known), near))
        elif cause == "missing" and key not in table:
            self.fault(key, "this key is missing.", allowed=allowed)
        else:
            found = one_line(_as_toml(table.get(key)))
            self.fault(key, "this is not what is allowed here.", found=found, allowed=allowed)


# -- reading TOML ---------------------------------------------------------------------------------------------


def read_toml(text: str, name: str) -> dict[str, Any]:
    """Return what a TOML text holds; numbers with decimals as `Decimal`. A byte order mark before it is ignored.

    Raises
    ------
    SheetError
        for a text that is not TOML, naming its line; for values that nobody can have meant: more than 50 tables within
        each other, numbers of more than 1,000 digits.
    """
    long = _LONG_KEY.search(text)
    if long is not None:
        # its table would take minutes to build
        raise SheetError(Fault(_TOO_DEEP, name, f"line {text.count(chr(10), 0, long.start(1)) + 1}"))
    try:
        document = tomllib.loads(text.removeprefix("\ufeff"), parse_float=_decimal)
    except tomllib.TOMLDecodeError as error:
        raise SheetError(_syntax_fault(str(error), text, name)) from None
    except RecursionError:
        raise SheetError(Fault(_TOO_DEEP, name)) from None
    except ValueError:
        raise SheetError(Fault(_TOO_LONG, name)) from None
    _refuse_monsters(document, name)
    return document


def _decimal(text: str) -> Decimal:
    try:
        return Decimal(text)
    except ArithmeticError:
        raise ValueError from None


def _refuse_monsters(document: dict[str, Any], name: str) -> None:
    """Stop at what would break the reading further on, although TOML allows it."""
    level: list[Any] = [document]
    for _ in range(_DEEPEST):
        inside: list[Any] = []
        for value in level:
            if isinstance(value, dict):
                inside += value.values()
            elif isinstance(value, list):
                inside += value
            elif isinstance(value, int) and value.bit_length() > _LONGEST_BITS:
                raise SheetError(Fault(_TOO_LONG, name))
        level = inside
    if level:
        raise SheetError(Fault(_TOO_DEEP, name))


def _syntax_fault(error: str, text: str, name: str) -> Fault:
    words = next((plain for start, plain in _TOML_WORDS if error.startswith(start)), "")
    message = f"this is not TOML{': ' if words else ''}{words}."
    found = re.search(r"\(at line (\d+), column \d+\)$", error)
    if found is None:
        return Fault(message, name, "at the end")
    line = text.splitlines()[int(found[1]) - 1 : int(found[1])]
    return Fault(message, name, f"line {found[1]}", found=shown(line[0].strip()) if line else "")


_DEEPEST = 50
_LONGEST_BITS = 3322
_TOO_DEEP = "this is not a sheet: too many tables or lists stand within each other."
_TOO_LONG = "this is not a sheet: a number in it has more than 1,000 digits."
_LONG_KEY = re.compile(
    r"(?:^|[{,\[])[ \t]*((?:[\w-]+|\"[^\"\n]*\"|'[^'\n]*')(?:[ \t]*\.[ \t]*[\w-]+){50})", re.MULTILINE
)
_BARE = re.compile(r"[A-Za-z0-9_-]+")
_READING_KEYS = ("encoding", "separator", "worksheet")
_TOML_WORDS = (
    ("Cannot overwrite a value", "this key stands here for the second time"),
    ("Cannot declare", "this table stands in the sheet already"),
    ("Cannot mutate", "this table was finished further up"),
    ("Cannot redefine", "this table was finished further up"),
    ("Duplicate inline table key", "a key stands twice between { and }"),
    ("Illegal character '\\n'", 'a text ends on the line where it begins, so a closing " is missing'),
    ("Illegal character", "there is a control character in this line"),
    ("Found invalid character", "there is a control character in this line"),
    ("Unterminated string", "the quotation mark that closes a text is missing"),
    ("Unclosed array", "the ] that closes a list is missing"),
    ("Unclosed inline table", "the } that closes a table is missing"),
    ("Expected '=' after a key", "a line is either key = value or a [table]"),
    ("Expected newline or end of document", "there is more on this line than one key and its value"),
    ("Expected ']", "the name of a table stands in [ ], or [[ ]] where there may be several"),
    (
        "Invalid value",
        "there is no value that can be read (a text stands in quotation marks, true and false in small letters)",
    ),
    ("Invalid statement", "a line is either key = value or a [table]"),
    ("Invalid initial character", "a key consists of letters, digits, - and _, or stands in quotation marks"),
    ("Invalid date", "there is no such day or time"),
    ("Unescaped '\\'", "a backslash in a text must be doubled"),
)


# -- values ---------------------------------------------------------------------------------------------------


def shown(value: object) -> str:
    """Return a value as a person would write it in the sheet, on one line, shortened to 60 characters."""
    text = one_line(value if isinstance(value, str) else _as_toml(value))
    return text if len(text) <= 60 else text[:57] + "..."


def one_line(text: str) -> str:
    r"""Return text on one line: characters that cannot be printed are written as in ``\u000A``."""
    return text if text.isprintable() else "".join(c if c.isprintable() else f"\\u{ord(c):04X}" for c in text)


def _as_toml(value: object) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False)
    if isinstance(value, Mapping):
        names = [key if _BARE.fullmatch(key) else json.dumps(key, ensure_ascii=False) for key in value]
        return "{" + ", ".join(f"{k} = {_as_toml(v)}" for k, v in zip(names, value.values(), strict=True)) + "}"
    if isinstance(value, list | tuple):
        return f"[{', '.join(map(_as_toml, value))}]"
    if isinstance(value, Decimal) and not value.is_finite():
        return "nan" if value.is_nan() else "inf" if value > 0 else "-inf"
    return plain(value) or str(value)


def plain(value: object) -> str | None:
    """Return a text or number of the sheet as the text that a list would hold, or None if it is neither."""
    if isinstance(value, bool):
        return None
    if isinstance(value, str):
        return value
    if isinstance(value, Decimal):
        return format(value, "f") if value.is_finite() and abs(value.adjusted()) <= 40 else str(value)
    return str(value) if isinstance(value, int) else None


def scaled(value: Number, decimals: int, *, up: bool) -> int | None:
    """Return a number times 10^decimals as an integer, rounded up or down; None if it is none or beyond 10^18.

    Guarantee: exact; no digit of the number is lost before it is rounded.
    """
    number = Decimal(value)
    if not number.is_finite():
        return None
    if number and number.adjusted() < -60:
        # so near to 0 that only its sign matters
        return int(number > 0) if up else -int(number < 0)
    if number and number.adjusted() > 18:
        return None
    exact = Fraction(number) * 10**decimals if number else Fraction(0)
    whole = -(-exact.numerator // exact.denominator) if up else exact.numerator // exact.denominator
    return whole if abs(whole) <= 10**18 else None
