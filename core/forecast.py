"""A plan in words and figures, made under watch: whether the rules can hold at all is found out beside it."""

from __future__ import annotations

import time
from typing import Any

from core.errors import Infeasible
from core.feasibility import Inquiry, Verdict
from core.planner import Ready, Tick, make_plan
from core.record import admissible, pilot_ledger
from core.sheet import Sheet

# After so many seconds of planning it is asked, beside it, whether the rules can hold at all.
PATIENCE = 1.0
# Where planning itself has proved that they cannot, so many seconds may go into saying why.
EXPLAINING = 5.0


def forecast(made: Ready, verdict: Verdict | None = None) -> dict[str, Any]:
    """Return a plan as the command line's JSON; `verdict` as `planned` gives it."""
    plan, ledger = made.plan, pilot_ledger(made.plan)
    low, high = ledger.interval()
    exact = not plan.checked
    return {
        "superset": {"words": list(plan.words), "size": plan.size, "about": plan.about},
        "built_in": list(plan.built_in),
        "checked": list(plan.checked),
        "pilot": {"proposals": ledger.proposed, "accepted": ledger.accepted, "rules": plan.pilot["rules"]},
        "acceptance": {"estimate": 1.0, "low": 1.0, "high": 1.0}
        if exact
        else {"estimate": ledger.acceptance, "low": low, "high": high},
        "admissible": admissible(plan, int(made.diagram.weight)),
        "verdict": _verdict_words(made, verdict),
        "plan_digest": plan.digest,
    }


def _verdict_words(made: Ready, verdict: Verdict | None) -> str:
    if not _is_doubtful(made):
        return "possible"
    if verdict is not None and verdict.state == "possible":
        return "possible but rare: an outcome was found without drawing"
    return "not decided: nothing was accepted in the pilot, and no outcome was found without drawing"


def _is_doubtful(made: Ready) -> bool:
    """Return whether the plan leaves open that there may be no outcome at all."""
    return bool(made.plan.checked) and not made.plan.pilot["accepted"]


def planned(sheet: Sheet, outcomes: int, memory: float, tick: Tick = lambda: None) -> tuple[Ready, Verdict | None]:
    """Return the sheet's plan, and if nothing was accepted in its pilot, whether the rules can hold at all.

    The verdict depends on a clock, so it is no part of the plan: all that it can do is to end the work.

    Raises
    ------
    Infeasible
        if it is proved that they cannot.
    """
    began = time.monotonic()
    with Inquiry(sheet) as inquiry:

        def look() -> None:
            tick()
            if time.monotonic() > began + PATIENCE:
                _refuse(sheet, inquiry.verdict())

        try:
            made = make_plan(sheet, outcomes=outcomes, memory=memory, tick=look)
        except Infeasible as proof:
            verdict = inquiry.wait(tick, EXPLAINING) if proof.rules else Verdict("unknown")
            if verdict.state == "possible":
                raise RuntimeError("planning proved impossible what is possible") from proof
            if verdict.minimal or len(verdict.conflict) < len(proof.rules):
                _refuse(sheet, verdict)
            raise
        return made, decided(made, inquiry, tick)


def decided(made: Ready, inquiry: Inquiry, tick: Tick) -> Verdict | None:
    """Return whether the rules can hold at all, if the plan leaves that open; Infeasible if they cannot."""
    if not _is_doubtful(made):
        return None
    verdict = inquiry.wait(tick)
    _refuse(made.sheet, verdict)
    return verdict


def _refuse(sheet: Sheet, verdict: Verdict | None) -> None:
    """Raise what was proved, if it was proved that the rules cannot hold together."""
    if verdict is None or verdict.state != "impossible":
        return
    number = len(verdict.conflict)
    what = "this rule can never hold" if number == 1 else f"these {number} rules cannot hold together"
    unsure = "" if verdict.minimal else " Perhaps not all of them are needed for that; there was no time to find out."
    lines = [f"No outcome is possible: {what}.{unsure}", *verdict.changes]
    words = tuple(sheet.rule(id).words() for id in verdict.conflict)
    raise Infeasible("\n".join(lines), verdict.conflict, words, minimal=verdict.minimal)
