"""The record of a draw: everything from which a stranger can replay it, as JSON values. No files are touched here."""

from __future__ import annotations

import math
import platform
from collections.abc import Mapping, Sequence
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from typing import Any

from core.engine import Drawn
from core.frame import Table
from core.ledger import Ledger
from core.planner import Plan, Ready
from core.sheet import Sheet, digest_of

FORMAT = "lotwright record 1"
FROZEN_FORMAT = "lotwright frozen 1"
MARGIN_BITS = 64
ALGORITHMS = {
    "key": "SHA-256 over length-prefixed UTF-8 (NFC) texts: 'lotwright stream 1', 'draw', digest, then name and text of "
    "each party in the order of the names",
    "bits": "ChaCha20 keystream (RFC 8439), nonce = number of the block, counter from 0",
    "integers": "multiply and reject (Lemire 2019)",
    "superset": "layered diagram with exact counts; last acceptance by exact fractions",
    "rejection": "blocks of equal size, accepted proposals in the order of block and place",
}
Party = tuple[str, str]


def now() -> str:
    """Return the time in UTC, ISO 8601."""
    return datetime.now(UTC).isoformat(timespec="seconds")


def program() -> dict[str, str]:
    """Return the versions of what the bytes of a draw depend on."""
    names = ("lotwright", "numpy", "cryptography", "polars")
    return {"python": platform.python_version(), **{name: _version(name) for name in names}}


def _version(name: str) -> str:
    try:
        return version(name)
    except PackageNotFoundError:
        return "not installed"


# -- seeds ----------------------------------------------------------------------------------------------------------


def seed_bits(parties: Sequence[Party]) -> float:
    """Return how many bits the seed texts can carry at most: length times log2 of the smallest usual alphabet.

    Guarantee: an upper bound for texts whose signs were chosen evenly and independently (20 decimal dice: 66.4); a text
    made up by a person carries less.
    """
    return sum(_text_bits(text) for _, text in parties)


def _text_bits(text: str) -> float:
    signs = [sign for sign in text if not sign.isspace() and sign not in ",;.-_/"]
    alphabet = 0
    for test, size in ((str.isdecimal, 10), (str.islower, 26), (str.isupper, 26)):
        if any(test(sign) for sign in signs):
            alphabet += size
    if any(not (s.isdecimal() or s.islower() or s.isupper()) for s in signs):
        alphabet += 32
    return len(signs) * math.log2(alphabet) if alphabet else 0.0


def needed_bits(size: int) -> float:
    """Return log2 of the number of outcomes: what a seed must carry for every outcome to be possible."""
    return size.bit_length() - 1 + math.log2(size / (1 << (size.bit_length() - 1))) if size > 0 else 0.0


def seed_advice(ready: Ready) -> str:
    """Return in words how long a seed is advised for the outcomes of a plan."""
    size = admissible(ready.plan, int(ready.diagram.weight))
    bits = needed_bits(int(size.get("size") or size["high"])) + MARGIN_BITS
    return f"at least {bits:.0f} bits, as {math.ceil(bits / math.log2(10))} throws of a ten-sided die carry"


# -- sizes ----------------------------------------------------------------------------------------------------------


def admissible(plan: Plan, weight: int, drawn: Ledger | None = None) -> dict[str, Any]:
    """Return the number of admissible outcomes: exact, or an estimate with its 95 % interval; integers as text.

    Estimated from the plan's pilot, or from a draw that was asked for more outcomes than the pilot accepted. A draw stops
    at its last outcome (inverse sampling): there (r - 1) / (N - 1) is unbiased, and the Clopper-Pearson interval still
    covers (its lower end is exact, its upper end conservative).
    """
    size = int(plan.size) if plan.size is not None else weight
    if plan.size is not None and not plan.checked:
        return {"exact": True, "size": plan.size}
    ledger = pilot_ledger(plan)
    accepted, proposed = ledger.accepted, ledger.proposed
    if drawn is not None and drawn.accepted > max(1, accepted):
        ledger = drawn
        accepted, proposed = drawn.accepted - 1, drawn.proposed - 1
    low, high = ledger.interval()
    scale = 10**15
    return {
        "exact": False,
        "estimate": str(size * accepted // max(1, proposed)),
        "low": str(size * math.floor(low * scale) // scale),
        "high": str(-(-size * math.ceil(high * scale) // scale)),
    }


def pilot_ledger(plan: Plan) -> Ledger:
    """Return the plan's pilot as a ledger."""
    ledger = Ledger.over(rule["id"] for rule in plan.pilot["rules"])
    ledger.proposed = ledger.sampled = int(plan.pilot["proposals"])
    ledger.accepted = ledger.passed = int(plan.pilot["accepted"])
    for rule in plan.pilot["rules"]:
        ledger.rules[rule["id"]].any = int(rule["any"])
        ledger.rules[rule["id"]].alone = int(rule["alone"])
    return ledger


# -- freezing -------------------------------------------------------------------------------------------------------


def files_of(tables: Mapping[str, Table]) -> list[dict[str, Any]]:
    """Return name, digest and digests per 1,000 lines of every list."""
    return [
        {"name": name, "sha256": table.sha256, "lines": len(table), "blocks": list(table.blocks)}
        for name, table in tables.items()
    ]


def frozen_of(sheet: Sheet, plan: Plan) -> dict[str, Any]:
    """Return what freezing fixes: canonical sheet, lists and plan, and the digest over them."""
    content = {
        "format": FROZEN_FORMAT,
        "sheet": sheet.canonical,
        "files": files_of(sheet.tables),
        "plan": plan.to_json(),
    }
    return {**content, "digest": digest_of(content)}


def changed(frozen: Mapping[str, Any], sheet: Sheet) -> str:
    """Return a sentence naming the first thing that is no longer as it was frozen, or ""."""
    if frozen["sheet"] != sheet.canonical:
        parts = sorted(set(frozen["sheet"]) | set(sheet.canonical))
        part = next(p for p in parts if frozen["sheet"].get(p) != sheet.canonical.get(p))
        return f"{sheet.name} has changed since it was frozen, in {part}."
    known = {file["name"]: file for file in frozen["files"]}
    for name, table in sheet.tables.items():
        told = changed_file(known.get(name), table)
        if told:
            return told
    return ""


def changed_file(known: Mapping[str, Any] | None, table: Table) -> str:
    """Return a sentence naming where a list differs from the one that is known, or ""."""
    if known is None:
        return f"{table.name} was not there before."
    if known["sha256"] == table.sha256:
        return ""
    blocks = known["blocks"]
    for number, digest in enumerate(table.blocks):
        if number >= len(blocks) or digest != blocks[number]:
            return f"{table.name} has changed, in lines {1000 * number + 1} to {1000 * number + 1000}."
    return f"{table.name} has changed: it ends earlier, after line {1000 * len(table.blocks)} at the latest."


def readable(digest: str) -> str:
    """Return a digest to be read aloud: four groups of four signs."""
    return " ".join(digest[i : i + 4] for i in range(0, 16, 4))


# -- the record -----------------------------------------------------------------------------------------------------


def cautions(sheet: Sheet, *, frozen: bool, number: int, bits: float, needed: float, outcomes: int = 1) -> list[str]:
    """Return the cautions that apply to a draw, in words."""
    kind = sheet.kind.name
    told = [
        "Results support a professional's judgement; they do not replace an auditor, statistician, medical review or legal "
        "adviser where one is required.",
        "Every admissible outcome has the same chance; single people or items may not. `lotwright chances` shows theirs.",
        "The rules are yours. A rule aimed at particular people can make an equal draw unjust or unlawful.",
    ]
    if kind in ("selection", "roster"):
        told.append(
            "Whether people may be selected for tests at all, how often and by what method depends on local law and "
            "agreements; check before use."
        )
    back = [rule.id for rule in sheet.rules if kind == "roster" and rule.name in ("load", "spacing", "run")]
    if back:
        told.append(
            "Some regimes require the same chance at every selection. Rules that look back at earlier selections may not be "
            f"allowed; this roster's look-back rules: {', '.join(back)}."
        )
    if kind == "selection":
        told.append(
            "Usual error formulas assume unrestricted sampling; with rules in force use the chances given here or ask a "
            "statistician. Replaced items change the chances."
        )
    told.append(
        f"The statement of equal chance rests on the seed: the sheet {'was' if frozen else 'was not'} frozen before the draw; "
        f"the seed text carries at most {bits:.1f} bits, the set of outcomes needs {needed:.1f}."
    )
    if bits < needed + MARGIN_BITS:
        told.append(
            f"The seed is short: at least {needed + MARGIN_BITS:.0f} bits are advised here "
            f"({math.ceil((needed + MARGIN_BITS) / math.log2(10))} throws of a ten-sided die)."
        )
    if frozen:
        told.append(f"Repeating a draw until it suits destroys its meaning. This is draw {number} of {number}.")
    else:
        told.append("Repeating a draw until it suits destroys its meaning. This draw is not in a draw book.")
    if outcomes > 1:
        told.append(f"{outcomes:,} outcomes were drawn independently of each other; the same outcome can occur twice.")
    told += [
        "Personal data: load the least needed, use codes, keep the key apart. Do not put health results here.",
        "For blinded studies do not publish rules or list before allocation; publish the digest.",
    ]
    return told


def treatment(plan: Plan, id: str) -> str:
    """Return how the plan treats a rule, in words."""
    if id in plan.built_in:
        return "built in"
    if any(form.startswith(f"{id}~") for form in plan.built_in):
        return "built in, partly"
    if any(id == part for part, _ in plan.partly):
        return "built in, partly" if id in plan.checked else "built in"
    return "checked"


def rules_of(sheet: Sheet, plan: Plan) -> list[dict[str, Any]]:
    """Return every rule in words and how it is treated."""
    told = [
        {
            "id": rule.id,
            "kind": rule.name,
            "words": rule.words(),
            "treatment": treatment(plan, rule.id),
            "note": rule.note,
        }
        for rule in sheet.rules
    ]
    return told + [
        {"id": rule.id, "kind": rule.kind, "words": rule.words, "treatment": "off", "note": rule.note}
        for rule in sheet.off
    ]


def record_of(
    ready: Ready,
    drawn: Drawn,
    parties: Sequence[Party],
    *,
    path: str,
    outcomes_sha256: str,
    frozen: Mapping[str, Any] | None,
    draw: Mapping[str, Any],
) -> dict[str, Any]:
    """Return the record of a draw.

    `path` leads from the record to the sheet; `frozen` holds digest, time and entry of the freeze, or is None; `draw`
    holds number, of, reason and time.
    """
    sheet, plan = ready.sheet, ready.plan
    size = admissible(plan, int(ready.diagram.weight), drawn.ledger)
    needed = needed_bits(int(size.get("size") or size["high"]))
    bits = seed_bits(parties)
    record: dict[str, Any] = {
        "format": FORMAT,
        "program": program(),
        "algorithms": ALGORITHMS,
        "sheet": {
            "file": sheet.name,
            "path": path,
            "digest": sheet.digest,
            "text": sheet.text,
            "title": sheet.title,
            "purpose": sheet.purpose,
            **sheet.record.model_dump(),
        },
        "files": files_of(sheet.tables),
        "frame": {
            "units": sheet.frame.size,
            "id": sheet.frame.id,
            "order": "as in the list",
            "normalisation": "white space around cells removed, Unicode NFC",
            "totals": sheet.frame.totals(),
        },
        "outcome": sheet.kind.words(),
        "rules": rules_of(sheet, plan),
        "seed": {
            "parties": [{"name": name, "text": text} for name, text in parties],
            "bits": round(bits, 1),
            "needed": round(needed, 1),
            "from": sheet.record.seed_from,
        },
        "frozen": None if frozen is None else dict(frozen),
        "plan": plan.to_json(),
        "plan_digest": plan.digest,
        "draw": dict(draw),
        "ledger": drawn.ledger.to_json(),
        "admissible": size,
        "outcomes": {
            "file": "outcomes.csv",
            "sha256": outcomes_sha256,
            "count": len(drawn.addresses),
            "addresses": [list(address) for address in drawn.addresses],
        },
        "cautions": cautions(
            sheet,
            frozen=frozen is not None,
            number=int(draw["number"]),
            bits=bits,
            needed=needed,
            outcomes=len(drawn.addresses),
        ),
    }
    return sealed(record)


def sealed(record: Mapping[str, Any]) -> dict[str, Any]:
    """Return the record with the digest of each part and one over all."""
    parts = {key: value for key, value in record.items() if key not in ("digests", "digest")}
    whole = {**parts, "digests": {key: digest_of(value) for key, value in parts.items()}}
    return {**whole, "digest": digest_of(whole)}


def broken_part(record: Mapping[str, Any]) -> str:
    """Return the name of the first part of a record that does not fit its digest, or ""."""
    digests = record.get("digests")
    if not isinstance(digests, Mapping):
        return "digests"
    for key, value in record.items():
        if key not in ("digests", "digest") and digest_of(value) != digests.get(key):
            return str(key)
    missing = set(digests) - set(record)
    if missing:
        return str(min(missing))
    whole = {key: value for key, value in record.items() if key != "digest"}
    return "" if digest_of(whole) == record.get("digest") else "digest"
