"""The jobs that the command line and the window offer, each one function: from files to files."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from core.drawbook import DrawBook
from core.engine import Drawn, Progress, draw
from core.errors import BrokenSeal, CallError, TooRare
from core.feasibility import Inquiry, Verdict
from core.files import json_bytes, open_sheet, outcomes_bytes, read_json, read_outcomes, write_whole
from core.forecast import decided, planned
from core.journal import FileJournal
from core.ledger import Ledger, interval
from core.planner import Plan, Ready, Tick, ready
from core.record import (
    Party,
    broken_part,
    changed,
    changed_file,
    frozen_of,
    now,
    pilot_ledger,
    program,
    record_of,
)
from core.sheet import Sheet, canonical_json, digest_of
from core.stream import make_key
from core.supersets.diagram import OverBudget

JOURNAL = "draw.journal"
LARGEST_BLOCK = 1 << 16


def _go_on() -> None:
    """Do not stop."""


@dataclass(frozen=True)
class Wish:
    """What a draw is asked for; see the command line's `draw`."""

    sheet: Path
    parties: tuple[Party, ...]
    folder: Path
    outcomes: int | None = None
    plan: Path | None = None
    workers: int = 1
    limit: int | None = None
    reason: str = ""
    resume: bool = False
    memory: float = 4.0
    allow_outside: bool = False


# -- planning -------------------------------------------------------------------------------------------------------


def read_plan(path: Path) -> Plan:
    """Return the plan in a file."""
    try:
        return _plan_from(read_json(path, "plan"))
    except ValueError as error:
        raise CallError(f"{path.name} is no plan: {error}.") from None


def _plan_from(value: Any) -> Plan:
    """Return the plan that JSON values state; ValueError if they are none."""
    try:
        plan = Plan.from_json(value)
        pilot = pilot_ledger(plan)
    except KeyError as error:
        raise ValueError(f"it has no {error.args[0]}") from None
    except (TypeError, AttributeError, OverflowError) as error:
        raise ValueError(str(error)) from None
    if not 1 <= plan.block <= LARGEST_BLOCK:
        raise ValueError(f"its block must be from 1 to {LARGEST_BLOCK:,}; found {plan.block:,}")
    if not 0 <= pilot.accepted <= pilot.proposed:
        raise ValueError("its pilot accepted more than it proposed")
    if plan.size is not None and not (plan.size.isascii() and plan.size.isdecimal()):
        raise ValueError("its size is no number")
    return plan


def _built(sheet: Sheet, plan: Plan, tick: Tick) -> Ready:
    """Return a plan with its superset built again; ValueError naming what stands against it."""
    try:
        made = ready(sheet, plan, tick=tick)
    except (OverBudget, OverflowError):
        raise ValueError("its superset does not fit in the memory it names") from None
    if made.diagram.is_empty:
        raise ValueError("its built-in rules let no outcome through")
    return made


def _told_by_others(sheet: Sheet, plan: Plan, tick: Tick) -> Ready:
    """Return a plan that only its file vouches for, built again, and its size counted again; ValueError as `_built`."""
    made = _built(sheet, plan, tick)
    if plan.size is not None and int(plan.size) != made.diagram.size:
        raise ValueError("the size it states is not that of its superset")
    return made


def _read_and_built(sheet: Sheet, plan: Path, tick: Tick) -> Ready:
    """Return the plan in a file, its superset built again."""
    try:
        return _told_by_others(sheet, read_plan(plan), tick)
    except ValueError as error:
        raise CallError(f"{plan.name} cannot be used: {error}.") from None


# -- freezing -------------------------------------------------------------------------------------------------------


def frozen_path(sheet: Path) -> Path:
    """Return where a sheet's frozen state is kept."""
    return sheet.with_name(f"{sheet.stem}.frozen.json")


def book_of(sheet: Path) -> DrawBook:
    """Return the draw book of a sheet."""
    return DrawBook(sheet.with_name(f"{sheet.stem}.drawbook"))


def freeze(
    path: Path, *, outcomes: int = 1, memory: float = 4.0, allow_outside: bool = False, tick: Tick = _go_on
) -> dict[str, Any]:
    """Fix a sheet, its lists and its plan by their digest, with an entry in the draw book; return what was fixed.

    Freezing again what is frozen already changes nothing and is refused.
    """
    sheet = open_sheet(path, allow_outside=allow_outside)
    book = book_of(path)
    entries = book.entries()
    made, _ = planned(sheet, outcomes, memory, tick)
    content = frozen_of(sheet, made.plan)
    target = frozen_path(path)
    last = next((e["digest"] for e in reversed(entries) if e["event"] == "freeze"), None)
    # without its entry the file is what a freeze left that was killed: that is finished now
    kept = read_json(target, "frozen sheet").get("digest") if target.exists() else None
    if kept == content["digest"] == last:
        raise CallError(
            f"{path.name} is frozen already, with this very content. Draw from it, or edit the sheet first."
        )
    write_whole(target, json_bytes(content))
    entry = book.append(
        {"event": "freeze", "at": now(), "digest": content["digest"], "supersedes": last, "title": sheet.title}
    )
    return {**content, "entry": entry["entry"], "at": entry["at"], "ready": made}


@dataclass(frozen=True)
class _Frozen:
    digest: str
    plan: Plan
    at: str
    entry: int
    hash: str

    def to_json(self) -> dict[str, Any]:
        return {"digest": self.digest, "at": self.at, "entry": self.entry, "hash": self.hash}


def _frozen(path: Path, sheet: Sheet) -> _Frozen | None:
    """Return the frozen state of a sheet, or None if it is not frozen.

    Raises BrokenSeal if the sheet, a list, the frozen file or the draw book is not as it was.
    """
    target = frozen_path(path)
    freezes = [entry for entry in book_of(path).entries() if entry["event"] == "freeze"]
    if not target.exists():
        if freezes:
            raise BrokenSeal(
                "frozen file", f"The draw book says that {path.name} is frozen, but {target.name} is missing."
            )
        return None
    content = read_json(target, "frozen sheet")
    if digest_of({key: value for key, value in content.items() if key != "digest"}) != content.get("digest"):
        raise BrokenSeal("frozen file", f"{target.name} was changed.")
    if not freezes or freezes[-1]["digest"] != content["digest"]:
        raise BrokenSeal("draw book", f"The draw book has no entry for what {target.name} holds.")
    told = changed(content, sheet)
    if told:
        raise BrokenSeal(
            "frozen sheet",
            f"{told} Put it back as it was, or freeze the new version (lotwright freeze {path.name}).",
        )
    entry = freezes[-1]
    return _Frozen(content["digest"], Plan.from_json(content["plan"]), entry["at"], entry["entry"], entry["hash"])


# -- drawing --------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class Result:
    """A finished draw: its record, and where the files are."""

    record: dict[str, Any]
    sheet: Sheet
    ready: Ready
    drawn: Drawn
    outcomes_file: Path
    record_file: Path


def draw_to_files(
    wish: Wish,
    *,
    cancelled: Callable[[], bool] = lambda: False,
    on_progress: Callable[[Progress], None] = lambda _: None,
    tick: Tick = _go_on,
) -> Result:
    """Draw, and write outcomes.csv and record.json into the folder.

    Raises
    ------
    TooRare
        if the limit was reached first.
    Cancelled
        if it was stopped; `resume` goes on to the same bytes.
    """
    sheet = open_sheet(wish.sheet, allow_outside=wish.allow_outside)
    _refuse_finished(wish)
    frozen = _frozen(wish.sheet, sheet)
    outcomes = wish.outcomes or (frozen.plan.outcomes if frozen else 1)
    made, verdict = _ready(wish, sheet, frozen, outcomes, tick)
    key = make_key("draw", frozen.digest if frozen else sheet.digest, wish.parties)
    identity = {
        "plan": made.plan.digest,
        "key": hashlib.sha256(key).hexdigest(),
        "outcomes": outcomes,
    }
    journal, about = _begun(wish, frozen, identity)
    try:
        drawn = draw(
            made,
            key,
            outcomes,
            workers=wish.workers,
            limit=wish.limit,
            journal=journal,
            cancelled=cancelled,
            on_progress=on_progress,
        )
        if not drawn.complete:
            raise _too_rare(drawn, outcomes, verdict)
        record, data = _recorded(wish, made, drawn, frozen, about)
        write_whole(wish.folder / "outcomes.csv", data)
        write_whole(wish.folder / "record.json", json_bytes(record))
        if frozen is not None:
            _enter_drawn(book_of(wish.sheet), about["number"], record["digest"])
        journal.finish()
    except BaseException:
        journal.close()
        raise
    return Result(record, sheet, made, drawn, wish.folder / "outcomes.csv", wish.folder / "record.json")


def _enter_drawn(book: DrawBook, number: int, record: str) -> None:
    """Enter a finished draw; once, even if the program was killed after it did so and goes on with the draw."""
    if not any(entry["event"] == "drawn" and entry["record"] == record for entry in book.entries()):
        book.append({"event": "drawn", "at": now(), "draw": number, "record": record})


def _refuse_finished(wish: Wish) -> None:
    folder = wish.folder
    # with a journal beside it, the record is that of a draw that was killed at its very end
    if (folder / "record.json").exists() and not (wish.resume and (folder / JOURNAL).exists()):
        raise CallError(f"{folder} holds the record of an earlier draw. Choose another folder (--to).")
    if folder.exists() and not folder.is_dir():
        raise CallError(f"{folder} is a file, not a folder. Choose another folder (--to).")


def _ready(wish: Wish, sheet: Sheet, frozen: _Frozen | None, outcomes: int, tick: Tick) -> tuple[Ready, Verdict | None]:
    """Return the plan to draw by: made now, read or frozen; the verdict as `planned` gives it."""
    if frozen is None and wish.plan is None:
        return planned(sheet, outcomes, wish.memory, tick)
    made = _given(wish, sheet, frozen, outcomes, tick)
    with Inquiry(sheet) as inquiry:
        return made, decided(made, inquiry, tick)


def _given(wish: Wish, sheet: Sheet, frozen: _Frozen | None, outcomes: int, tick: Tick) -> Ready:
    """Return the plan that is frozen or in a file, its superset built again."""
    if frozen is None:
        assert wish.plan is not None
        return _read_and_built(sheet, wish.plan, tick)
    if wish.plan is not None and read_plan(wish.plan).digest != frozen.plan.digest:
        raise CallError("The sheet is frozen with another plan; leave out --plan.")
    if outcomes != frozen.plan.outcomes:
        raise CallError(f"The sheet is frozen for {frozen.plan.outcomes:,} outcomes. Found: --outcomes {outcomes:,}.")
    try:
        return _built(sheet, frozen.plan, tick)
    except ValueError as error:
        raise BrokenSeal("library versions", f"The frozen plan cannot be used here: {error}.") from None


def _begun(wish: Wish, frozen: _Frozen | None, identity: Mapping[str, Any]) -> tuple[FileJournal, dict[str, Any]]:
    """Open the journal and, for a frozen sheet, enter the draw in the draw book before it begins."""
    book = book_of(wish.sheet)
    draws = [entry for entry in book.entries() if entry["event"] == "draw"] if frozen else []
    path = wish.folder / JOURNAL
    entered = bool(draws) and draws[-1]["key"] == identity["key"]
    going_on = wish.resume and path.exists() and (entered or not frozen)
    number = len(draws) + (0 if going_on else 1)
    if frozen and not going_on and number > 1 and not wish.reason.strip():
        raise CallError(
            f"This is draw {number} from this draw book: say why the earlier one does not stand (--reason TEXT)."
        )
    try:
        wish.folder.mkdir(parents=True, exist_ok=True)
        journal = FileJournal(path, dict(identity), resume=wish.resume)
    except OSError as error:
        raise CallError(f"{wish.folder} cannot be written: {(error.strerror or str(error)).lower()}.") from None
    if frozen is None:
        return journal, {"number": 1, "of": 1, "reason": wish.reason or None, "at": now(), "entry": None}
    if going_on:
        entry = draws[-1]
    elif next(journal.blocks(), None) is not None:
        journal.close()
        raise CallError("The draw book's last draw is another one; this one cannot be gone on with.")
    else:
        content = {"event": "draw", "at": now(), "digest": frozen.digest, "key": identity["key"], "draw": number}
        try:
            entry = book.append({**content, "reason": wish.reason or None})
        except BaseException:
            journal.finish()
            raise
    about = {"number": number, "of": number, "reason": entry["reason"], "at": entry["at"]}
    return journal, {**about, "entry": {"entry": entry["entry"], "hash": entry["hash"]}}


def _recorded(
    wish: Wish, made: Ready, drawn: Drawn, frozen: _Frozen | None, about: Mapping[str, Any]
) -> tuple[dict[str, Any], bytes]:
    data = outcomes_bytes(made.sheet, drawn.rows)
    record = record_of(
        made,
        drawn,
        wish.parties,
        path=os.path.relpath(wish.sheet.resolve(), wish.folder.resolve()),
        outcomes_sha256=hashlib.sha256(data).hexdigest(),
        frozen=frozen.to_json() if frozen else None,
        draw=about,
    )
    return record, data


def _too_rare(drawn: Drawn, outcomes: int, verdict: Verdict | None) -> TooRare:
    ledger = drawn.ledger
    bound = interval(ledger.accepted, ledger.proposed)[1]
    told = [
        f"Stopped at the limit: {ledger.accepted:,} of {outcomes:,} outcomes accepted in {ledger.proposed:,} proposals.",
        f"An admissible outcome is rarer than 1 in {int(1 / bound):,} of the superset (97.5 % sure).",
        "" if ledger.accepted else _existence(verdict),
        _best_lifted(ledger),
        "Raise --limit and go on with --resume, give planning more (--outcomes), or loosen a rule.",
    ]
    return TooRare(" ".join(filter(None, told)), bound)


def _existence(verdict: Verdict | None) -> str:
    """Return whether there is an outcome although the draw accepted none."""
    if verdict is None:
        return "There are outcomes: the pilot accepted some."
    if verdict.state == "possible":
        return "There is one: it was found without drawing."
    return "Whether there is one at all is not decided."


def _best_lifted(ledger: Ledger) -> str:
    """Return which check keeps most outcomes away, as far as the ledger can tell."""
    lifted = {id: share for id in ledger.rules if (share := ledger.lifted(id))}
    if lifted:
        best = max(lifted, key=lifted.__getitem__)
        return (
            f"Lifting rule {best} would help most: about {100 * lifted[best]:.2g} % of the proposals would be accepted."
        )
    worst = max(ledger.rules, key=lambda id: ledger.rules[id].first, default="")
    return f"Most proposals were rejected first by rule {worst}." if worst else ""


# -- checking and verifying -----------------------------------------------------------------------------------------


def check(sheet_path: Path, outcome_path: Path, *, allow_outside: bool = False) -> list[dict[str, Any]]:
    """Return for each outcome in a file and each rule in force whether it holds."""
    sheet = open_sheet(sheet_path, allow_outside=allow_outside)
    told = []
    for name, row in read_outcomes(sheet, outcome_path):
        if isinstance(row, str):
            told.append({"outcome": name, "id": sheet.kind.name, "holds": False, "words": f"Not an outcome: {row}"})
            continue
        for rule in sheet.rules:
            holds = bool(rule.check(row[None])[0])
            figure = rule.figure(row)
            told.append({"outcome": name, "id": rule.id, "holds": holds, "words": rule.words(), "found": figure})
    return told


def find_sheet(record_path: Path, record: Mapping[str, Any], given: Path | None) -> Path:
    """Return where the sheet of a record is: given, beside the record, or where it was."""
    folder = record_path.resolve().parent
    places = [given] if given else [folder / record["sheet"]["file"], folder / record["sheet"]["path"]]
    for place in places:
        if place is not None and place.is_file():
            return place
    raise BrokenSeal("sheet", f"The sheet {record['sheet']['file']} is not there. Say where it is (--sheet PATH).")


def verify(
    record_path: Path,
    *,
    sheet_path: Path | None = None,
    workers: int = 1,
    allow_outside: bool = False,
    on_progress: Callable[[Progress], None] = lambda _: None,
    tick: Tick = _go_on,
) -> dict[str, Any]:
    """Replay a record and compare everything; return what was compared.

    Raises
    ------
    BrokenSeal
        naming the first part that differs: a part of the record, the sheet, a list, the draw book, the outcomes.
    """
    record = read_json(record_path, "record")
    part = broken_part(record)
    if part:
        raise BrokenSeal(part, f"The record was changed in the part {part!r}.")
    plan = _replayable(record)
    path = find_sheet(record_path, record, sheet_path)
    sheet = open_sheet(path, allow_outside=allow_outside)
    _compare_sheet(record, sheet)
    parties = [(party["name"], party["text"]) for party in record["seed"]["parties"]]
    digest = _compare_frozen(record, sheet, plan)
    key = make_key("draw", digest, parties)
    _compare_book(record, path, key)
    data = _outcomes_data(record_path, record)
    try:
        made = _told_by_others(sheet, plan, tick)
    except ValueError as error:
        raise BrokenSeal(
            "library versions", f"The plan cannot be replayed here: {error}. {_versions(record)}"
        ) from None
    drawn = draw(made, key, record["outcomes"]["count"], workers=workers, on_progress=on_progress)
    _compare_drawn(record, data, made, drawn)
    _compare_facts(record, made, drawn, parties)
    return {
        "record": record_path.name,
        "verified": True,
        "outcomes": record["outcomes"]["count"],
        "proposals": drawn.ledger.proposed,
        "frozen": record["frozen"] is not None,
        "draw": record["draw"]["number"],
        "versions": _versions(record),
    }


def _replayable(record: Mapping[str, Any]) -> Plan:
    """Return the plan of a record that says all that a replay reads; BrokenSeal if it does not."""
    try:
        sheet, outcomes, draws = record["sheet"], record["outcomes"], record["draw"]
        texts = [sheet["file"], sheet["path"], sheet["text"], outcomes["file"], outcomes["sha256"]]
        texts += [party[key] for party in record["seed"]["parties"] for key in ("name", "text")]
        texts += [text for file in record["files"] for text in (file["name"], file["sha256"], *file["blocks"])]
        numbers = [outcomes["count"], draws["number"]]
        if record["frozen"] is not None:
            texts += [record["frozen"]["digest"], record["frozen"]["at"], draws["entry"]["hash"]]
            numbers += [record["frozen"]["entry"], draws["entry"]["entry"]]
        good = all(isinstance(text, str) for text in texts) and all(isinstance(n, int) and n > 0 for n in numbers)
        good &= isinstance(record["program"], dict) and "ledger" in record
        plan = _plan_from(record["plan"])
    except (KeyError, TypeError, ValueError, AttributeError):
        good = False
    if not good:
        raise BrokenSeal("record", "The record does not say all that a replay needs.")
    return plan


def _compare_sheet(record: Mapping[str, Any], sheet: Sheet) -> None:
    if sheet.text != record["sheet"]["text"]:
        mine, theirs = sheet.text.splitlines(), record["sheet"]["text"].splitlines()
        pairs = zip([*mine, ""], [*theirs, ""], strict=False)
        line = next((i for i, (a, b) in enumerate(pairs, 1) if a != b), 1)
        raise BrokenSeal("rules", f"{sheet.name} is not the sheet that was drawn from: line {line} differs.")
    known = {file["name"]: file for file in record["files"]}
    for name, table in sheet.tables.items():
        told = changed_file(known.get(name), table)
        if told:
            part = "frame" if table is sheet.frame.table else f"list {name}"
            raise BrokenSeal(part, told)


def _compare_frozen(record: Mapping[str, Any], sheet: Sheet, plan: Plan) -> str:
    """Return the digest that the key was made from."""
    frozen = record["frozen"]
    if frozen is None:
        return sheet.digest
    if frozen_of(sheet, plan)["digest"] != frozen["digest"]:
        raise BrokenSeal("plan", "What was frozen is not what the record says was drawn from.")
    digest: str = frozen["digest"]
    return digest


def _compare_book(record: Mapping[str, Any], path: Path, key: bytes) -> None:
    """Compare what the record says of freezing and of the draw's number with the draw book."""
    frozen, told = record["frozen"], record["draw"]
    if frozen is None:
        return
    book = book_of(path)
    entries = book.entries()
    found = []
    for entry in (frozen, told["entry"]):
        number = entry["entry"]
        if number > len(entries) or entries[number - 1]["hash"] != entry["hash"]:
            raise BrokenSeal("draw book", f"{book.path.name} has no entry {number} as the record names it.")
        found.append(entries[number - 1])
    freezing, drawing = found
    if (freezing["event"], drawing["event"]) != ("freeze", "draw"):
        raise BrokenSeal("draw book", f"The entries of {book.path.name} that the record names tell of something else.")
    if drawing["key"] != hashlib.sha256(key).hexdigest():
        raise BrokenSeal("seed", f"{book.path.name} has another seed for this draw than the record.")
    if any(frozen[part] != freezing[part] for part in ("digest", "at")):
        raise BrokenSeal("frozen", f"{book.path.name} tells of another freezing than the record.")
    if (told["number"], told.get("reason"), told.get("at")) != tuple(drawing[p] for p in ("draw", "reason", "at")):
        raise BrokenSeal("draw", f"{book.path.name} tells of this draw's number, reason or time otherwise.")


def _outcomes_data(record_path: Path, record: Mapping[str, Any]) -> bytes:
    path: Path = record_path.resolve().parent / str(record["outcomes"]["file"])
    try:
        return path.read_bytes()
    except (OSError, ValueError):
        raise BrokenSeal("outcome", f"The file {path.name} beside the record cannot be read.") from None


def _compare_drawn(record: Mapping[str, Any], data: bytes, made: Ready, drawn: Drawn) -> None:
    replayed = outcomes_bytes(made.sheet, drawn.rows)
    if replayed != data:
        mine, theirs = replayed.decode().splitlines(), data.decode(errors="replace").splitlines()
        pairs = zip([*mine, "end"], [*theirs, "end"], strict=False)
        line = next((i for i, (a, b) in enumerate(pairs) if a != b), 0)
        number = mine[min(line, len(mine) - 1)].split(",")[0]
        raise BrokenSeal(
            f"outcome number {number}",
            f"{record['outcomes']['file']} differs from the replay in line {line + 1} (outcome {number}).",
        )


def _compare_facts(record: Mapping[str, Any], made: Ready, drawn: Drawn, parties: list[Party]) -> None:
    """Compare the figures of the record, part by part, with those of the replay."""
    again = record_of(
        made,
        drawn,
        parties,
        path=record["sheet"]["path"],
        outcomes_sha256=hashlib.sha256(outcomes_bytes(made.sheet, drawn.rows)).hexdigest(),
        frozen=record["frozen"],
        draw=record["draw"],
    )
    mine, theirs = _facts(again), _facts(record)
    for part, value in mine.items():
        if canonical_json(value) != canonical_json(theirs[part]):
            raise BrokenSeal(part, f"The part {part!r} of the record does not say what the replay gives.")


def _facts(record: Mapping[str, Any]) -> dict[str, Any]:
    """Return the parts of a record that any version must give alike: not its words, and no interval's last digit."""
    kept = {part: record.get(part) for part in ("files", "seed", "plan_digest", "outcomes")}
    for part, keys in _FACTS.items():
        value = record.get(part)
        told = value if isinstance(value, list) else [value]
        kept[part] = [{key: one.get(key) for key in keys} if isinstance(one, dict) else one for one in told]
    return kept


_FACTS = {
    "sheet": ("digest", "title", "purpose", "basis", "operator", "scrutineer", "published", "seed_from"),
    "frame": ("units", "id", "totals"),
    "rules": ("id", "kind", "treatment", "note"),
    "ledger": ("proposed", "accepted", "weighting", "sampled", "rules"),
    "admissible": ("exact", "size", "estimate"),
}


def _versions(record: Mapping[str, Any]) -> str:
    """Return in words how the versions here differ from those of the record."""
    here = program()
    told = [
        f"{name} {record['program'].get(name, 'unknown')} then, {value} here"
        for name, value in here.items()
        if record["program"].get(name) != value
    ]
    return f"Versions differ: {'; '.join(told)}." if told else "The versions are those of the record."
