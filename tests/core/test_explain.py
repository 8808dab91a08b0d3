"""What `lotwright explain` says: every rule and kind, all of its keys, and an example that is read without fault."""

from __future__ import annotations

import re

import pytest

import core.sheet  # noqa: F401 - registers all kinds and rules
from core.errors import CallError
from core.explain import explain
from core.kinds import OutcomeKind
from core.reading import Fields, Report, read_toml
from core.rules import Rule

WORDS = [*sorted(OutcomeKind.known), *sorted(Rule.known)]


def keys_of(fields: type[Fields]) -> list[str]:
    return [info.alias or name for name, info in fields.model_fields.items()]


def fields_of(word: str) -> type[Fields]:
    return Rule.known[word].Fields if word in Rule.known else OutcomeKind.known[word].Fields


def example_of(text: str) -> str:
    """Return the example in an explanation, without its indent."""
    return "\n".join(line.removeprefix("  ") for line in text.split("\nExample\n")[1].splitlines())


def test_no_word_means_both() -> None:
    assert len(WORDS) == len(set(WORDS))


@pytest.mark.parametrize("word", WORDS)
def test_every_key_is_explained(word: str) -> None:
    keys = explain(word).split("\nKeys\n")[1].split("\n\n")[0].splitlines()
    told = {line.split()[0]: line.split(maxsplit=1)[1] for line in keys}
    assert sorted(told) == sorted(keys_of(fields_of(word)))
    assert told["kind"] == f'"{word}" (must be given)'
    for name, info in fields_of(word).model_fields.items():
        assert (info.alias or name) == "kind" or told[info.alias or name].endswith(
            "(must be given)"
        ) == info.is_required()
    assert all(len(words) > 3 for words in told.values())


@pytest.mark.parametrize("word", WORDS)
def test_every_example_is_read(word: str) -> None:
    document = read_toml(example_of(explain(word)), "example")
    (key,) = document
    table = document[key][0] if key == "rule" else document[key]
    assert key == ("rule" if word in Rule.known else "outcome")
    assert table["kind"] == word
    report = Report("example", key)
    assert report.fields(fields_of(word), table) is not None, report.faults


@pytest.mark.parametrize("word", WORDS)
def test_it_says_what_goes_with_what(word: str) -> None:
    head = explain(word).split("\n\n")[0].splitlines()
    assert head[0] == f"{word} ({'rule' if word in Rule.known else 'kind of outcome'})"
    named = head[-1].split(": ")[1].rstrip(".").split(", ")
    if word in Rule.known:
        assert named == list(Rule.known[word].kinds)
    else:
        assert named == sorted(name for name, rule in Rule.known.items() if word in rule.kinds)


@pytest.mark.parametrize("word", WORDS)
def test_meanings_are_sentences(word: str) -> None:
    meaning = Rule.known[word].meaning if word in Rule.known else OutcomeKind.known[word].meaning
    assert re.fullmatch(r"[A-Z][^{}]*\.", meaning)
    assert meaning in explain(word)
    named = set(re.findall(r"`(\w+)`", meaning))
    assert named <= set(keys_of(fields_of(word)))


def test_the_list_of_all() -> None:
    lines = explain(None).splitlines()
    assert [line.split()[0] for line in lines if line.startswith("  ")] == [*WORDS, "sheet", "frame", "record", "where"]


@pytest.mark.parametrize(("word", "near"), [("qouta", "quota"), ("Roster", "roster"), ("zzz", "")])
def test_a_word_that_is_not_known(word: str, near: str) -> None:
    with pytest.raises(CallError) as caught:
        explain(word)
    assert str(caught.value).startswith(f"There is no rule or kind {word!r}.")
    assert (f"Did you mean {near!r}?" in str(caught.value)) == bool(near)
