"""What rules and kinds mean, their keys and an example, as text for a person."""

from __future__ import annotations

from pydantic import Field

from core.errors import CallError
from core.frame import nearest
from core.kinds import OutcomeKind
from core.reading import Fields
from core.rules import Rule
from core.setting import RuleFields
from core.sheet import FrameFields, RecordFields, SheetFields


class WhereFields(Fields):
    """A condition on units; any column may be named, several at once."""

    any_column: str = Field(alias="COLUMN", description='a text, a number, a list ["A", "B"], or {min = 1, max = 9}')


_TABLES: dict[str, tuple[str, type[Fields], str]] = {
    "sheet": (
        "The whole file: what is drawn from, what one outcome is, and the rules.",
        SheetFields,
        'format = 1\ntitle = "Tests in May"\npurpose = "Who is tested in which week"',
    ),
    "frame": (
        "The list that is drawn from: a file beside the sheet, or lines written here. All is text until a rule needs a number.",
        FrameFields,
        '[frame]\nfile = "crew.csv"\nid = "badge"',
    ),
    "record": (
        "What the record of a draw says besides; without effect on the draw.",
        RecordFields,
        '[record]\nbasis = "Agreement of 3 March"\noperator = "safety office"\nscrutineer = "crew council"',
    ),
    "where": (
        "Which units a rule counts: a column and a text, a number, a list (any of them) or a range; several columns: all must fit.",
        WhereFields,
        'where = {dept = "deck"}\nwhere = {grade = ["A", "B"], amount = {min = 1000, max = 5000}}',
    ),
}


def explain(word: str | None) -> str:
    """Return the explanation of a rule or kind, or the list of all."""
    if word is None:
        return _all()
    if word in Rule.known:
        rule = Rule.known[word]
        applies = f"Applies to: {', '.join(rule.kinds)}."
        return _told(word, "rule", rule.meaning, applies, rule.Fields, rule.example)
    if word in OutcomeKind.known:
        kind = OutcomeKind.known[word]
        rules = ", ".join(name for name, rule in sorted(Rule.known.items()) if word in rule.kinds)
        return _told(word, "kind of outcome", kind.meaning, f"Rules: {rules}.", kind.Fields, kind.example)
    if word in _TABLES:
        meaning, fields, example = _TABLES[word]
        return _keys([f"{word} (table of the sheet)", meaning], fields, example)
    known = [*Rule.known, *OutcomeKind.known, *_TABLES]
    near = nearest(word, known)
    hint = f" Did you mean {near!r}?" if near else ""
    raise CallError(f"There is no rule or kind {word!r}.{hint} `lotwright explain` lists all.")


def _all() -> str:
    lines = ["Kinds of outcome"]
    lines += [f"  {name:<12}{kind.meaning}" for name, kind in sorted(OutcomeKind.known.items())]
    lines += ["", "Rules"]
    lines += [f"  {name:<12}{rule.meaning}" for name, rule in sorted(Rule.known.items())]
    lines += ["", "Tables of the sheet"]
    lines += [f"  {name:<12}{meaning}" for name, (meaning, _, _) in _TABLES.items()]
    return "\n".join([*lines, "", "More on one of them: lotwright explain WORD"])


def _keys(head: list[str], fields: type[Fields], example: str) -> str:
    lines = [*head, "", "Keys"]
    for name, info in fields.model_fields.items():
        must = " (must be given)" if info.is_required() else ""
        lines.append(f"  {info.alias or name:<12}{info.description}{must}")
    return "\n".join([*lines, "", "Example", *(f"  {line}" for line in example.splitlines())])


def _told(word: str, what: str, meaning: str, context: str, fields: type[Fields], example: str) -> str:
    common = RuleFields.model_fields if issubclass(fields, RuleFields) else {}
    lines = [f"{word} ({what})", meaning, context, "", "Keys", f'  {"kind":<12}"{word}" (must be given)']
    for name, info in fields.model_fields.items():
        if name not in common and name != "kind":
            must = " (must be given)" if info.is_required() else ""
            lines.append(f"  {info.alias or name:<12}{info.description}{must}")
    for name, info in common.items():
        if name != "kind":
            lines.append(f"  {name:<12}{info.description}")
    return "\n".join([*lines, "", "Example", *(f"  {line}" for line in example.splitlines())])
