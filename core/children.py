"""Processes beside this one: each is spoken to through a pipe of its own, does not hear Ctrl-C and ends with its parent.

They share nothing, so each can be ended at any moment, and nothing is left behind if it is the program itself that is ended.
"""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import signal
import threading
from collections.abc import Callable, Iterator
from multiprocessing import resource_tracker
from multiprocessing.connection import Connection
from multiprocessing.context import SpawnProcess


def start(work: Callable[[Connection], None]) -> tuple[SpawnProcess, Connection]:
    """Start a process that does `work` (a function of a module) with its end of a pipe; return it and this end."""
    context = multiprocessing.get_context("spawn")
    mine, theirs = context.Pipe()
    process = context.Process(target=_live, args=(work, theirs), daemon=True)
    try:
        with _deaf():
            process.start()
    except BaseException:
        mine.close()
        raise
    finally:
        theirs.close()
    return process, mine


def _live(work: Callable[[Connection], None], pipe: Connection) -> None:
    with contextlib.suppress(ValueError):
        signal.signal(signal.SIGINT, signal.SIG_IGN)
    threading.Thread(target=_end_with_parent, daemon=True).start()
    with contextlib.suppress(EOFError, OSError):  # the parent is gone
        work(pipe)


def _end_with_parent() -> None:
    parent = multiprocessing.parent_process()
    if parent is not None:
        parent.join()
        os._exit(1)


@contextlib.contextmanager
def _deaf() -> Iterator[None]:
    """Start processes that do not hear Ctrl-C, not even while they begin: answering it is left to their parent."""
    if not hasattr(signal, "pthread_sigmask"):
        yield
        return
    resource_tracker.ensure_running()  # to start it later would undo what follows
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)
