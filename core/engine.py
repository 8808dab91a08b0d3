"""The engine: proposes block by block until enough outcomes are accepted. It knows no rule by name.

Block b reads the bits of block b only, and accepted outcomes are taken in the order of blocks and of places in a block,
never in the order of finishing; so the result depends on the plan and the key alone, not on workers or interruptions.
"""

from __future__ import annotations

import base64
import contextlib
import multiprocessing
import os
import pickle
import signal
import threading
from collections import deque
from collections.abc import Callable, Generator, Iterator
from concurrent.futures import Future, ProcessPoolExecutor
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np

from core.errors import Cancelled
from core.ledger import Count, Ledger
from core.planner import Ready
from core.process import Rows
from core.proposals import Block, run_block
from core.stream import Bits

# So many proposals of each block are put to every check, for the ledger's "any" and "alone".
SAMPLE = 64
AHEAD = 3


@dataclass(frozen=True)
class Progress:
    """How far a draw is: counts so far."""

    proposed: int
    accepted: int
    wanted: int


@dataclass(frozen=True, eq=False)
class Drawn:
    """The accepted outcomes of a draw.

    Attributes
    ----------
    rows
        Outcomes in order, as rows of the kind.
    addresses
        (block, place in block) of each.
    ledger
        Counts up to the last accepted outcome, or up to where the draw stopped.
    complete
        Whether as many outcomes as wanted were accepted.
    """

    rows: Rows
    addresses: tuple[tuple[int, int], ...]
    ledger: Ledger
    complete: bool


class Journal(Protocol):
    """Keeps finished blocks, so that an interrupted draw can go on."""

    def blocks(self) -> Iterator[dict[str, Any]]:
        """Return what was kept, block by block from 0."""

    def keep(self, entry: dict[str, Any]) -> None:
        """Keep a finished block."""


def draw(
    ready: Ready,
    key: bytes,
    wanted: int,
    *,
    workers: int = 1,
    limit: int | None = None,
    journal: Journal | None = None,
    cancelled: Callable[[], bool] = lambda: False,
    on_progress: Callable[[Progress], None] = lambda _: None,
) -> Drawn:
    """Return `wanted` outcomes, each uniform over the admissible ones and independent of the others.

    Parameters
    ----------
    key
        From `core.stream.make_key`.
    workers
        Processes; the result is the same for any number.
    limit
        Largest number of proposals; the draw stops there, complete or not.
    journal
        Where finished blocks are kept, and where an earlier attempt is read from.
    cancelled
        Asked between blocks.

    Raises
    ------
    Cancelled
        if `cancelled` says so or Ctrl-C was pressed; finished blocks are in the journal.
    """
    tray = _Tray(ready, wanted, limit)
    for entry in journal.blocks() if journal is not None else ():
        tray.restore(entry)
    on_progress(tray.progress())
    blocks = _blocks(ready, key, tray, workers)
    try:
        while not tray.full():
            if cancelled():
                raise Cancelled(tray.state())
            block = next(blocks)
            if tray.add(block) and journal is not None:
                journal.keep(tray.entry(block))
            on_progress(tray.progress())
    except KeyboardInterrupt:
        raise Cancelled(tray.state()) from None
    finally:
        blocks.close()
    return tray.drawn()


class _Tray:
    """Collects blocks in order."""

    def __init__(self, ready: Ready, wanted: int, limit: int | None) -> None:
        self._ids = [rule.id for rule in ready.checks]
        self._wanted, self._limit = wanted, limit
        self._size = ready.plan.block
        self._ledger = Ledger.over(self._ids)
        self._rows: list[Rows] = []
        self._addresses: list[tuple[int, int]] = []
        self.next_block = 0

    def full(self) -> bool:
        return len(self._addresses) >= self._wanted or (
            self._limit is not None and self._ledger.proposed >= self._limit
        )

    def add(self, block: Block) -> bool:
        """Add the next block; return whether all of it counts (only then can it be kept)."""
        places = block.places()
        upto = len(block.fate)
        if self._limit is not None:
            upto = min(upto, self._limit - self._ledger.proposed)
        missing = self._wanted - len(self._addresses)
        places = places[places < upto]
        if len(places) >= missing:
            places = places[:missing]
            upto = int(places[-1]) + 1 if missing else 0
        self._ledger.add(block.ledger(self._ids, upto))
        self._rows.append(block.rows[: len(places)])
        self._addresses += [(self.next_block, place) for place in places.tolist()]
        self.next_block += 1
        return upto == len(block.fate) and not self.full()

    def entry(self, block: Block) -> dict[str, Any]:
        """Return a block as JSON values."""
        rows = np.ascontiguousarray(block.rows)
        return {
            "block": self.next_block - 1,
            "places": block.places().tolist(),
            "rows": base64.b64encode(rows.tobytes()).decode(),
            "type": rows.dtype.str,
            "shape": list(rows.shape),
            "ledger": _flat(block.ledger(self._ids)),
        }

    def restore(self, entry: dict[str, Any]) -> None:
        """Add a block that was kept."""
        rows = np.frombuffer(base64.b64decode(entry["rows"]), dtype=np.dtype(entry["type"])).reshape(entry["shape"])
        self._rows.append(rows)
        self._addresses += [(entry["block"], place) for place in entry["places"]]
        self._ledger.add(_unflat(entry["ledger"]))
        self.next_block = entry["block"] + 1

    def progress(self) -> Progress:
        return Progress(self._ledger.proposed, len(self._addresses), self._wanted)

    def state(self) -> str:
        return (
            f"{len(self._addresses):,} of {self._wanted:,} outcomes accepted after {self._ledger.proposed:,} proposals."
        )

    def drawn(self) -> Drawn:
        rows: Rows = np.concatenate(self._rows) if self._rows else np.empty((0, 1), np.int32)
        return Drawn(rows, tuple(self._addresses), self._ledger, len(self._addresses) >= self._wanted)


def _flat(ledger: Ledger) -> dict[str, Any]:
    return {
        "counts": [ledger.proposed, ledger.accepted, ledger.weighting, ledger.sampled, ledger.passed],
        "rules": {id: [c.first, c.any, c.alone] for id, c in ledger.rules.items()},
    }


def _unflat(value: dict[str, Any]) -> Ledger:
    proposed, accepted, weighting, sampled, passed = value["counts"]
    rules = {id: Count(*counts) for id, counts in value["rules"].items()}
    return Ledger(proposed, accepted, weighting, sampled, passed, rules)


def _blocks(ready: Ready, key: bytes, tray: _Tray, workers: int) -> Generator[Block, None, None]:
    """Yield blocks in the order of their numbers, from the tray's next on."""
    job = (ready.diagram, ready.checks, key, ready.plan.block)
    number = tray.next_block
    if workers <= 1:
        while True:
            yield _one(job, number)
            number += 1
    context = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(workers, context, _begin, (pickle.dumps(job),)) as pool:
        waiting: deque[Future[Block]] = deque()
        try:
            while True:
                while len(waiting) < AHEAD * workers:
                    waiting.append(pool.submit(_worker, number))
                    number += 1
                yield waiting.popleft().result()
        finally:
            pool.shutdown(wait=True, cancel_futures=True)


Job = tuple[Any, Any, bytes, int]
_job: Job | None = None


def _one(job: Job, number: int) -> Block:
    diagram, checks, key, size = job
    return run_block(diagram, checks, Bits(key, number), size, SAMPLE)


def _begin(packed: bytes) -> None:
    """Prepare a worker process: it leaves Ctrl-C to its parent, and ends when its parent does."""
    global _job
    with contextlib.suppress(ValueError):
        signal.signal(signal.SIGINT, signal.SIG_IGN)
    parent = multiprocessing.parent_process()
    if parent is not None:
        threading.Thread(target=_end_with, args=(parent,), daemon=True).start()
    _job = pickle.loads(packed)


def _end_with(parent: Any) -> None:
    parent.join()
    os._exit(1)


def _worker(number: int) -> Block:
    assert _job is not None
    return _one(_job, number)
