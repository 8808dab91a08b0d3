"""What rules and kinds mean, their keys and an example, as text for a person."""

from __future__ import annotations

from core.errors import CallError
from core.frame import nearest
from core.kinds import OutcomeKind
from core.reading import Fields
from core.rules import Rule
from core.setting import RuleFields


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
    known = [*Rule.known, *OutcomeKind.known]
    near = nearest(word, known)
    hint = f" Did you mean {near!r}?" if near else ""
    raise CallError(f"There is no rule or kind {word!r}.{hint} `lotwright explain` lists all.")


def _all() -> str:
    lines = ["Kinds of outcome"]
    lines += [f"  {name:<12}{kind.meaning}" for name, kind in sorted(OutcomeKind.known.items())]
    lines += ["", "Rules"]
    lines += [f"  {name:<12}{rule.meaning}" for name, rule in sorted(Rule.known.items())]
    return "\n".join([*lines, "", "More on one of them: lotwright explain WORD"])


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
