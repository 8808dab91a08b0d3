"""The engine: proposes block by block until enough outcomes are accepted. It knows no rule by name.

Block b reads the bits of block b only, and accepted outcomes are taken in the order of blocks and of places in a block,
never in the order of finishing; so the result depends on the plan and the key alone, not on workers or interruptions.
"""

from __future__ import annotations

import base64
import contextlib
import pickle
from collections.abc import Callable, Generator, Iterator
from dataclasses import dataclass
from multiprocessing.connection import Connection, wait
from multiprocessing.context import SpawnProcess
from typing import Any, Protocol, cast

import numpy as np

from core import children
from core.errors import CallError, Cancelled
from core.ledger import Count, Ledger
from core.planner import Ready
from core.process import Rows
from core.proposals import Block, run_block
from core.stream import Bits

# So many proposals of each block are put to every check, for the ledger's "any" and "alone".
SAMPLE = 64
# So many blocks per worker are made ahead of the one whose turn it is.
AHEAD = 3
# Seconds between two looks at `cancelled` while workers are busy.
LOOK = 0.02


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
        Asked between blocks, and while workers are busy.

    Raises
    ------
    Cancelled
        if `cancelled` says so or Ctrl-C was pressed; finished blocks are in the journal.
    CallError
        if a worker process was ended from outside; finished blocks are in the journal.
    """
    tray = _Tray(ready, wanted, limit)
    for entry in journal.blocks() if journal is not None else ():
        if not tray.restore(entry):
            break
    on_progress(tray.progress())
    blocks = _blocks(ready, key, tray, workers, cancelled)
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

    def restore(self, entry: dict[str, Any]) -> bool:
        """Add a block that was kept; return False, adding nothing, if it goes beyond the limit."""
        ledger = _unflat(entry["ledger"])
        if self._limit is not None and self._ledger.proposed + ledger.proposed > self._limit:
            return False
        rows = np.frombuffer(base64.b64decode(entry["rows"]), dtype=np.dtype(entry["type"])).reshape(entry["shape"])
        self._rows.append(rows)
        self._addresses += [(entry["block"], place) for place in entry["places"]]
        self._ledger.add(ledger)
        self.next_block = entry["block"] + 1
        return True

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


Job = tuple[Any, Any, bytes, int]


def _blocks(
    ready: Ready, key: bytes, tray: _Tray, workers: int, cancelled: Callable[[], bool]
) -> Generator[Block, None, None]:
    """Yield blocks in the order of their numbers, from the tray's next on."""
    job = (ready.diagram, ready.checks, key, ready.plan.block)
    number = tray.next_block
    if workers <= 1:
        while True:
            yield _one(job, number)
            number += 1
    with _started(job, workers) as pipes:
        given, found = number, dict[int, Block | Exception]()
        free = pipes * 2  # a worker has the next number before it is done with one
        while True:
            while number not in found:
                while free and given < number + AHEAD * workers:
                    free.pop().send(given)
                    given += 1
                for pipe in cast(list[Connection], wait(pipes, LOOK)):
                    made, block = pipe.recv()
                    found[made] = block
                    free.append(pipe)
                if cancelled():
                    raise Cancelled(tray.state())
            next_block = found.pop(number)
            if isinstance(next_block, Exception):
                raise next_block
            yield next_block
            number += 1


def _one(job: Job, number: int) -> Block:
    diagram, checks, key, size = job
    return run_block(diagram, checks, Bits(key, number), size, SAMPLE)


@contextlib.contextmanager
def _started(job: Job, count: int) -> Iterator[list[Connection]]:
    """Start worker processes; yield the pipe to each. At the end nobody waits for blocks that are not wanted any more."""
    packed = pickle.dumps(job)
    processes: list[SpawnProcess] = []
    pipes: list[Connection] = []
    try:
        for _ in range(count):
            process, pipe = children.start(_serve)
            processes.append(process)
            pipes.append(pipe)
        for pipe in pipes:
            pipe.send_bytes(packed)
        yield pipes
    except (EOFError, OSError):
        raise CallError(
            "A worker process could not be started or was ended from outside; often there is not enough memory for it. "
            "Finished blocks are kept: go on with --resume, and with fewer --workers."
        ) from None
    finally:
        for process in processes:
            process.kill()
        for process in processes:
            process.join()
        for pipe in pipes:
            pipe.close()


def _serve(pipe: Connection) -> None:
    """Make blocks in a worker process."""
    job: Job = pickle.loads(pipe.recv_bytes())
    while True:
        number = pipe.recv()
        pipe.send((number, _attempt(job, number)))


def _attempt(job: Job, number: int) -> Block | Exception:
    """Return the block, or what went wrong: raised in the parent, when it is the block's turn."""
    try:
        return _one(job, number)
    except Exception as error:
        return error
