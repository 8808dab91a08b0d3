"""Can the rules hold at all? An outcome found without drawing, or a proof that there is none and a smallest conflict.

Kind and rules say what they mean (`core.statement`), a solver decides (`core.solver`). It runs in a process of its own, so
that it can be ended at once. The answer depends on a clock and so has no part in any plan or draw. What is called possible
has been passed by every rule's `check`; what is called impossible has been proved.
"""

from __future__ import annotations

import pickle
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from multiprocessing.connection import Connection
from multiprocessing.context import SpawnProcess
from typing import Self

import numpy as np

from core.children import start
from core.kinds import OutcomeKind
from core.process import Rows
from core.rules import Rule
from core.sheet import Sheet
from core.solver import Change, Solver, State, Values
from core.statement import Statement

SECONDS = 20.0
# Seconds by which an answer may be late before the process is ended.
GRACE = 2.0
# Seconds between two looks.
LOOK = 0.02
# More cells take longer to write down than anybody waits.
MOST_CELLS = 400_000
MOST_TOLD = 3


@dataclass(frozen=True, eq=False)
class Verdict:
    """Whether the rules of a sheet can hold together.

    Attributes
    ----------
    state
        "possible" (a witness is at hand), "impossible" (proved) or "unknown" (not decided in time).
    witness
        If possible: an outcome that every rule's check passes, as a row of the kind.
    conflict
        If impossible: ids of rules that cannot hold together.
    minimal
        Whether each rule of the conflict is needed, the others being possible without it. False: not decided in time.
    changes
        Sentences: how little the numbers of one of these rules would have to change.
    seconds
        How long it took; not part of any record.
    """

    state: State
    witness: Rows | None = None
    conflict: tuple[str, ...] = ()
    minimal: bool = False
    changes: tuple[str, ...] = ()
    seconds: float = 0.0


@dataclass(frozen=True)
class Finding:
    """What is known so far: values of all variables, or numbers of rules that conflict. The last finding says so."""

    state: State
    values: Values | None = None
    conflict: tuple[int, ...] = ()
    is_minimal: bool = False
    changes: tuple[str, ...] = ()
    is_last: bool = False


def diagnose(sheet: Sheet, *, seconds: float = SECONDS, tick: Callable[[], None] = lambda: None) -> Verdict:
    """Return whether the rules in force can hold together. `tick` is called often; if it raises, the work ends at once."""
    with Inquiry(sheet, seconds) as inquiry:
        return inquiry.wait(tick)


class Inquiry:
    """A verdict that another process looks for, from when it is first asked for; leaving the context ends it.

    Meanwhile this process may do something else.
    """

    def __init__(self, sheet: Sheet, seconds: float = SECONDS) -> None:
        self._sheet, self._seconds, self._began = sheet, seconds, 0.0
        self._finding = Finding("unknown")
        self._verdict: Verdict | None = None
        self._process: SpawnProcess | None = None
        self._pipe: Connection | None = None

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """End the process, done or not."""
        if self._process is not None and self._pipe is not None:
            self._process.kill()
            self._process.join()
            self._pipe.close()

    def wait(self, tick: Callable[[], None], most: float | None = None) -> Verdict:
        """Return the verdict, calling `tick` meanwhile; after `most` seconds, what is known by then."""
        end = time.monotonic() + (self._seconds + GRACE if most is None else most)
        while (verdict := self.verdict(LOOK)) is None:
            tick()
            if time.monotonic() > end:
                return self._judged_now()
        return verdict

    def verdict(self, wait: float = 0.0) -> Verdict | None:
        """Return the verdict, or None while it is being looked for; wait for it no longer than `wait` seconds."""
        if self._pipe is None:
            self._began = time.monotonic()
            self._process, self._pipe = start(_serve)
        if self._verdict is None:
            over = self._left() < -GRACE
            try:
                while not self._finding.is_last and self._pipe.poll(0 if over else wait):
                    self._take(self._pipe, self._pipe.recv())
            except (EOFError, OSError):  # the process was ended from outside: what it had found stands
                over = True
            if over or self._finding.is_last:
                self.close()
                self._verdict = self._judged_now()
        return self._verdict

    def _judged_now(self) -> Verdict:
        return judged(self._sheet, self._finding, time.monotonic() - self._began)

    def _left(self) -> float:
        return self._began + self._seconds - time.monotonic()

    def _take(self, pipe: Connection, message: Finding | Exception | None) -> None:
        if message is None:  # the process is ready
            pipe.send_bytes(pickle.dumps((self._sheet.kind, self._sheet.rules, self._left())))
        elif isinstance(message, Exception):
            raise message
        else:
            self._finding = message


def judged(sheet: Sheet, finding: Finding, seconds: float) -> Verdict:
    """Return the verdict that a finding makes; a witness is put to every rule's check before it counts."""
    verdict = Verdict(
        finding.state,
        conflict=tuple(sheet.rules[number].id for number in finding.conflict),
        minimal=finding.is_minimal,
        changes=finding.changes,
        seconds=seconds,
    )
    if finding.values is None:
        return verdict
    row = sheet.kind.row(np.array(finding.values)[sheet.kind.variables()])
    if all(bool(rule.check(row[None])[0]) for rule in sheet.rules):
        return replace(verdict, witness=row)
    return replace(verdict, state="unknown")


# -- in the other process -------------------------------------------------------------------------------------------


def _serve(pipe: Connection) -> None:
    """Answer one question, each time that more is known, or say what went wrong."""
    pipe.send(None)
    kind, rules, seconds = pickle.loads(pipe.recv_bytes())
    try:
        for finding in findings(kind, rules, seconds):
            pipe.send(finding)
    except MemoryError:
        return  # then it cannot be decided here
    except Exception as error:
        pipe.send(error)


def stated(kind: OutcomeKind, rules: Sequence[Rule]) -> Statement:
    """Return what the kind and these rules say; the speaker of a rule's sentences is its number in the list."""
    statement = Statement(kind.variables())
    kind.state(statement)
    for number, rule in enumerate(rules):
        statement.speaker = number
        rule.state(statement)
    return statement


def findings(kind: OutcomeKind, rules: Sequence[Rule], seconds: float) -> Iterator[Finding]:
    """Yield what is found, each time more than before."""
    deadline = time.monotonic() + seconds
    if np.prod(kind.cells()) > MOST_CELLS:
        yield Finding("unknown", is_last=True)
        return
    solver = Solver(stated(kind, rules), deadline)
    conflict = tuple(range(len(rules)))
    state, values = solver.solve(conflict)
    if state != "impossible":
        yield Finding(state, values, is_last=True)
        return
    yield Finding(state, conflict=conflict)
    conflict = solver.core(conflict)
    yield Finding(state, conflict=conflict)
    conflict, minimal = solver.smallest(conflict)
    found = Finding(state, conflict=conflict, is_minimal=minimal)
    yield found
    yield replace(found, changes=tuple(_changes(solver, conflict, rules)), is_last=True)


def _changes(solver: Solver, conflict: Sequence[int], rules: Sequence[Rule]) -> Iterator[str]:
    """Yield for each rule of the conflict, if there is one, the least change of its numbers that lets all rules hold.

    Where there are more conflicts than this one, it is the change that ends this one.
    """
    for turn, number in enumerate(conflict):
        share = 0.5 / (len(conflict) - turn)
        for others, words in ((range(len(rules)), "the other rules"), (conflict, "the others named here")):
            changes, alone = solver.least_change(number, others, share=share)
            if changes:
                beside = f" with {words}" if len(others) > 1 else ""
                yield _in_words(rules[number].id, changes, beside, alone=alone)
                break


def _in_words(rule: str, changes: Sequence[Change], beside: str, *, alone: bool) -> str:
    """Return the least change of a rule as a sentence."""
    if alone:
        change = changes[0]
        old, new = change.bounds()
        counted = " ".join(filter(None, [old, _counted(change, old)]))
        if change.is_least:
            return f"{rule} needs at least {counted};{beside} only {new} can be had."
        return f"{rule} allows at most {counted};{beside} at least {new} {'is' if new == '1' else 'are'} needed."
    told: dict[str, list[str]] = {}
    for change in changes:
        old, new = change.bounds()
        head = f"at {'least' if change.is_least else 'most'} {new} instead of {old}"
        told.setdefault(head, []).append(_counted(change, old))
    return f"Least change to {rule}: {_some([f'{head} {_some(counted)}'.strip() for head, counted in told.items()])}."


def _counted(change: Change, number: str) -> str:
    return (change.of.what or "").replace("{s}", "" if number == "1" else "s")


def _some(words: Sequence[str]) -> str:
    more = len(words) - MOST_TOLD
    return ", ".join(words[:MOST_TOLD]) + (f" and {more} more" if more > 0 else "")
