"""What can go wrong, by meaning: each error carries its data as fields and says what to do next."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Fault:
    """One thing that is wrong with the input, and where.

    Attributes
    ----------
    message
        A complete sentence: what was found and why it cannot stand.
    file
        Name of the file as the user wrote it ("" for the call itself).
    place
        Where in the file: a table such as ``[[rule]] 3 (quota)``, or ``line 17, column amount``.
    key
        The key of the table that is at fault, or "".
    found
        The value that was found, as text, or "".
    allowed
        What is allowed there, in words, or "".
    nearest
        The nearest name that is known, if the name found is not, or "".
    """

    message: str
    file: str = ""
    place: str = ""
    key: str = ""
    found: str = ""
    allowed: str = ""
    nearest: str = ""

    def __str__(self) -> str:
        """Return the fault on one line: where, what, what is allowed, what may have been meant."""
        where = ", ".join(part for part in (self.file, self.place, self.key) if part)
        text = f"{where}: {self.message}" if where else self.message
        if self.found:
            text += f" Found: {self.found}."
        if self.allowed:
            text += f" Allowed: {self.allowed}."
        if self.nearest:
            text += f" Did you mean {self.nearest!r}?"
        return text


class LotwrightError(Exception):
    """Root of everything the program raises on purpose; `exit_code` is what the command line ends with."""

    exit_code = 2


class SheetError(LotwrightError):
    """The sheet or one of its files is wrong. All faults that were found are in `faults`."""

    def __init__(self, faults: list[Fault] | tuple[Fault, ...] | Fault) -> None:
        self.faults: tuple[Fault, ...] = (faults,) if isinstance(faults, Fault) else tuple(faults)
        super().__init__("\n".join(str(fault) for fault in self.faults))


class CallError(LotwrightError):
    """The call itself is wrong (an option, a seed, a folder that cannot be written)."""


class Infeasible(LotwrightError):
    """Proved: no outcome meets every rule. `rules` are the ids of a conflicting set, `words` their sentences.

    `minimal` is False if it was not decided whether each of them is needed.
    """

    exit_code = 3

    def __init__(
        self, message: str, rules: tuple[str, ...] = (), words: tuple[str, ...] = (), *, minimal: bool = True
    ) -> None:
        self.rules = rules
        self.words = words
        self.minimal = minimal
        super().__init__(message)


class TooRare(LotwrightError):
    """Not decided: stopped at a limit. `bound` is an upper bound on the acceptance (0.975 one-sided), or None."""

    exit_code = 4

    def __init__(self, message: str, bound: float | None = None) -> None:
        self.bound = bound
        super().__init__(message)


class BrokenSeal(LotwrightError):
    """A record does not verify, or a frozen file has changed. `part` names the first thing that differs."""

    exit_code = 5

    def __init__(self, part: str, message: str) -> None:
        self.part = part
        super().__init__(message)


class Cancelled(LotwrightError):
    """The user stopped the work; what was accepted so far is kept."""

    exit_code = 130
