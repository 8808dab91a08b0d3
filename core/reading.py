"""Reading the tables of a sheet: every fault is collected with its place, none stops the reading of the rest."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from decimal import Decimal
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

    def fault(
        self, key: str, message: str, *, found: object = None, allowed: str = "", known: Sequence[str] = ()
    ) -> None:
        """Add a fault of this table; `known` are the names among which the nearest is sought."""
        text = "" if found is None else shown(found)
        near = nearest(text, known) if known and text else ""
        self.faults.append(Fault(message, self.file, self.place, key, text, allowed, near))

    def notice(self, message: str) -> None:
        """Add a remark that does not stop the work."""
        self.notices.append(f"{self.place}: {message}")

    def take(self, error: SheetError) -> None:
        """Add the faults of an error raised below."""
        self.faults.extend(error.faults)

    def fields(self, model: type[FieldsT], table: Mapping[str, Any]) -> FieldsT | None:
        """Return the table's keys as `model`, or None after adding one fault for each key that is wrong."""
        try:
            return model.model_validate(dict(table))
        except ValidationError as error:
            wrong: dict[str, str] = {}
            for item in error.errors():
                wrong.setdefault(str(item["loc"][0]) if item["loc"] else "", item["type"])
            for key, cause in wrong.items():
                self._wrong_key(model, table, key, cause)
            return None

    def _wrong_key(self, model: type[Fields], table: Mapping[str, Any], key: str, cause: str) -> None:
        known = {info.alias or name: info for name, info in model.model_fields.items()}
        if cause == "extra_forbidden" and key not in known:
            self.fault(key, "there is no such key here.", found=key, allowed=", ".join(known), known=tuple(known))
        elif cause == "missing" and key not in table:
            self.fault(key, "this key is missing.", allowed=known[key].description or "")
        else:
            description = known[key].description if key in known else ""
            self.fault(key, "this is not what is allowed here.", found=table.get(key), allowed=description or "")


def shown(value: object) -> str:
    """Return a value as a person would write it, shortened to 60 characters."""
    text = value if isinstance(value, str) else str(value)
    if isinstance(value, bool):
        text = str(value).lower()
    return text if len(text) <= 60 else text[:57] + "..."


def plain(value: object) -> str | None:
    """Return a text or number of the sheet as the text that a list would hold, or None if it is neither."""
    if isinstance(value, bool):
        return None
    if isinstance(value, str):
        return value
    if isinstance(value, int | Decimal):
        return str(value)
    return None
