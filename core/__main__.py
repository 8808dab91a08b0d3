"""The command line: parses a call, does one job, prints its result. Results to stdout, progress and errors to stderr."""

from __future__ import annotations

import argparse
import contextlib
import io
import json
import os
import signal
import sys
import threading
import time
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any, NoReturn, TypeVar

from core.errors import CallError, Cancelled, Infeasible, LotwrightError

T = TypeVar("T")
PATIENCE = 0.12
DEBUG = "LOTWRIGHT_DEBUG"
_BUG = (
    "Something went wrong inside the program; this is its mistake, not yours ({}: {}).\n"
    f"Please report it, with the sheet if you can. With {DEBUG}=1 in the environment the place of the mistake is shown."
)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line; return the exit code.

    0 done; 1 `check`: a rule does not hold; 2 the sheet or call is wrong; 3 proved impossible; 4 stopped at a limit;
    5 a record does not verify or a frozen file has changed; 70 a mistake in the program; 130 cancelled.
    """
    face = _Face()
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            # a terminal that cannot show a sign gets its number instead of an error
            stream.reconfigure(errors="backslashreplace")
    try:
        call = _parsed(sys.argv[1:] if arguments is None else list(arguments))
        face.json = bool(getattr(call, "json", False))
        code: int = _interruptible(lambda: call.job(call, face), face)
        sys.stdout.flush()
    except LotwrightError as error:
        face.fail(error)
        code = error.exit_code
    except MemoryError:
        print("There is not enough memory for this. Lower --memory.", file=sys.stderr)
        code = 2
    except BrokenPipeError:
        _drop_output()
        code = 0
    except OSError as error:
        from core.files import cause

        if error.filename is None:
            _drop_output()
        print(f"{error.filename or 'The output'} cannot be read or written: {cause(error)}.", file=sys.stderr)
        code = 2
    except Exception as error:
        if DEBUG in os.environ:
            raise
        print(_BUG.format(type(error).__name__, error), file=sys.stderr)
        code = 70
    return code


def _drop_output() -> None:
    """Let what could not be written go, or it would fail a second time when the program ends."""
    with contextlib.suppress(OSError, ValueError):
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _interruptible(job: Callable[[], T], face: _Face) -> T:
    """Run the job in a thread, so that Ctrl-C is answered at once even in the middle of a long array operation."""
    outcome: list[T] = []
    error: list[BaseException] = []
    done = threading.Event()

    def work() -> None:
        try:
            outcome.append(job())
        except BaseException as raised:  # handed to the main thread, whatever it is
            error.append(raised)
        finally:
            done.set()

    threading.Thread(target=work, daemon=True).start()
    try:
        while not done.wait(0.05):  # not Thread.join: interrupted, it takes a running thread for a finished one
            pass
    except KeyboardInterrupt:
        signal.signal(signal.SIGINT, signal.SIG_IGN)  # one answer is enough
        face.cancel.set()
        if done.wait(PATIENCE) and error and isinstance(error[0], LotwrightError):
            raise error[0] from None
        face.fail(Cancelled("Stopped. What a draw had accepted is kept: give the same call again with --resume."))
        sys.stderr.flush()
        os._exit(Cancelled.exit_code)
    if error:
        raise error[0]
    return outcome[0]


class _Face:
    """How the command line speaks."""

    def __init__(self) -> None:
        self.json = False
        self.cancel = threading.Event()
        self._began: float | None = None
        self._told = 0.0
        self._bar = sys.stderr.isatty()

    def tick(self) -> None:
        """Stop the work if the user wishes it."""
        if self.cancel.is_set():
            raise Cancelled("Stopped.")

    def progress(self, done: Any) -> None:
        """Show counts, and a forecast of the time left, a few times a second at most."""
        moment = time.monotonic()
        if self._began is None:
            self._began = moment
        if not done.proposed or moment - self._began < 0.5:
            return
        if self._told and moment - self._told < (0.2 if self._bar else 2.0):
            return
        self._told = moment
        share = done.accepted / max(1, done.wanted)
        left = (moment - self._began) * (1 - share) / share if share else None
        text = f"{done.accepted:,} of {done.wanted:,} outcomes, {done.proposed:,} proposals"
        text += f", about {_duration(left)} left" if left is not None else ", none accepted yet"
        if self._bar:
            print(f"\r{'#' * int(20 * share):<20} {text}", end="", file=sys.stderr, flush=True)
        else:
            print(text, file=sys.stderr, flush=True)

    def show(self, value: object, lines: Sequence[str]) -> None:
        """Print a result: as JSON if that was asked for, else as lines."""
        if self._bar and self._told:
            print(file=sys.stderr)
        plain = "utf" not in (sys.stdout.encoding or "").lower()
        print(json.dumps(_safe(value), indent=1, ensure_ascii=plain) if self.json else "\n".join(lines))

    def remark(self, lines: Sequence[str]) -> None:
        """Print remarks on the sheet to stderr."""
        for line in lines:
            print(f"Note: {line}", file=sys.stderr)

    def fail(self, error: LotwrightError) -> None:
        """Print an error in words."""
        if self._bar and self._told:
            print(file=sys.stderr)
        print(error, file=sys.stderr)
        if isinstance(error, Infeasible):
            for id, words in zip(error.rules, error.words, strict=True):
                print(f"  {id}: {words}", file=sys.stderr)
            if len(error.rules) > 1 and error.minimal:
                print("Each of them could stay if one of the others were loosened or switched off.", file=sys.stderr)


def _safe(value: Any) -> Any:
    """Return JSON values with integers beyond 2^53 as text."""
    if isinstance(value, dict):
        return {key: _safe(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_safe(item) for item in value]
    if isinstance(value, int) and not isinstance(value, bool) and abs(value) > 1 << 53:
        return str(value)
    return value


def _duration(seconds: float) -> str:
    if seconds < 90:
        return f"{seconds:.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"


# -- jobs -----------------------------------------------------------------------------------------------------------
# Heavy modules are imported inside the jobs, so that --help answers at once.


def _plan(call: argparse.Namespace, face: _Face) -> int:
    from core.files import json_bytes, open_sheet, refuse_other, write_whole
    from core.forecast import forecast, planned

    if call.to is not None:
        refuse_other(call.to, "plan", "arrangement")
    sheet = open_sheet(call.sheet, allow_outside=call.allow_outside)
    face.remark(sheet.notices)
    made, verdict = planned(sheet, call.outcomes, call.memory, face.tick)
    if call.to is not None:
        write_whole(call.to, json_bytes(made.plan.to_json()))
    told = forecast(made, verdict)
    face.show(_numbers(told), _plan_lines(sheet, made, told))
    return 0


def _numbers(told: dict[str, Any]) -> dict[str, Any]:
    """Return a forecast with its sizes, which are kept as text, as integers."""

    def whole(table: dict[str, Any]) -> dict[str, Any]:
        return {key: int(v) if isinstance(v, str) and v.isdecimal() else v for key, v in table.items()}

    return {**told, "superset": whole(told["superset"]), "admissible": whole(told["admissible"])}


def _plan_lines(sheet: Any, made: Any, told: dict[str, Any]) -> list[str]:
    from core.record import treatment

    lines = [sheet.title or sheet.name, sheet.kind.words(), ""]
    for rule in sheet.rules:
        where = treatment(made.plan, rule.id)
        lines.append(f"  {rule.id} ({where}): {rule.words()}")
    lines += [f"  {rule.id} (switched off): {rule.words}" for rule in sheet.off]
    lines += ["", *made.plan.words, f"Superset: {made.plan.about} outcomes."]
    lines += _size_lines(told["admissible"])
    acceptance = told["acceptance"]
    if made.plan.checked:
        lines.append(
            f"Acceptance in the pilot: {acceptance['estimate']:.4g}, between {acceptance['low']:.4g} and "
            f"{acceptance['high']:.4g} (95 %); {_per_outcome(acceptance)}."
        )
    if told["verdict"] != "possible":
        lines.append(f"{told['verdict'].capitalize()}.")
    lines.append(f"Plan digest: {told['plan_digest']}")
    return lines


def _per_outcome(acceptance: dict[str, Any]) -> str:
    if not acceptance["estimate"]:
        return f"more than {1 / acceptance['high']:,.0f} proposals per outcome"
    return f"about {1 / acceptance['estimate']:,.3g} proposals per outcome"


def _size_lines(size: dict[str, Any]) -> list[str]:
    from core.planner import size_words

    if size["exact"]:
        count = int(size["size"])
        digits = f"; in digits {count}" if count >= 10**15 else ""
        lines = [f"Admissible outcomes: {size_words(count, exact=True)} (exact{digits})."]
        return [*lines, "There is only one admissible outcome: no randomness is left."] if count == 1 else lines
    low, high = size_words(int(size["low"]), exact=True), size_words(int(size["high"]), exact=True)
    if size["estimate"] == "0":
        return [f"Admissible outcomes: none was met in the pilot, so at most {high} (97.5 % sure)."]
    estimate = size_words(int(size["estimate"]), exact=True)
    return [f"Admissible outcomes: about {estimate}, between {low} and {high} (95 %)."]


def _draw(call: argparse.Namespace, face: _Face) -> int:
    from core import jobs
    from core.files import unique_parties
    from core.forecast import forecast

    wish = jobs.Wish(
        sheet=call.sheet,
        parties=tuple(unique_parties(call.seed)),
        folder=call.to,
        outcomes=call.outcomes,
        plan=call.plan,
        workers=call.workers,
        limit=call.limit,
        reason=call.reason,
        resume=call.resume,
        memory=call.memory,
        allow_outside=call.allow_outside,
    )
    result = jobs.draw_to_files(wish, cancelled=face.cancel.is_set, on_progress=face.progress, tick=face.tick)
    face.remark(result.sheet.notices)
    told = {
        **forecast(result.ready),
        "verdict": "possible",
        "ledger": result.record["ledger"],
        "admissible": result.record["admissible"],
        "outcomes_file": str(result.outcomes_file),
        "record": str(result.record_file),
    }
    face.show(_numbers(told), _draw_lines(result))
    return 0


def _draw_lines(result: Any) -> list[str]:
    record, sheet = result.record, result.sheet
    ledger = record["ledger"]
    lines = [sheet.title or sheet.name, sheet.kind.words(), ""]
    lines += _outcome_lines(sheet, result.drawn.rows)
    lines += ["", f"Proposals: {ledger['proposed']:,}; accepted: {ledger['accepted']:,}."]
    for rule in ledger["rules"]:
        sentence = sheet.rule(rule["id"]).words()
        lines.append(f"  rejected first by {rule['id']}: {rule['first']:,}  ({sentence})")
    lines += _size_lines(record["admissible"])
    number = record["draw"]
    if record["frozen"]:
        lines.append(f"Draw {number['number']} of {number['of']} from the draw book; frozen {record['frozen']['at']}.")
    lines += ["", "Cautions", *(f"  - {caution}" for caution in record["cautions"])]
    lines += ["", f"Outcomes: {result.outcomes_file}", f"Record: {result.record_file}"]
    return lines


def _outcome_lines(sheet: Any, rows: Any, most: int = 60) -> list[str]:
    """Return the first outcome, or its beginning."""
    lines = [" ".join(line) for line in sheet.kind.lines(rows[0], sheet.frame.ids)]
    head = f"Outcome 1 of {len(rows):,}" if len(rows) > 1 else "Outcome"
    rest = [f"  ... and {len(lines) - most:,} more lines in the file"] if len(lines) > most else []
    return [f"{head} ({', '.join(sheet.kind.header)})", *(f"  {line}" for line in lines[:most]), *rest]


def _chances(call: argparse.Namespace, face: _Face) -> int:
    from core.chances import inclusion
    from core.files import open_sheet
    from core.forecast import planned

    sheet = open_sheet(call.sheet, allow_outside=call.allow_outside)
    face.remark(sheet.notices)
    made, _ = planned(sheet, 10_000, call.memory, face.tick)
    told = inclusion(made, cells=call.cells, pairs=call.pairs, limit=call.limit, tick=face.tick)
    face.show(told.to_json(), _chance_lines(sheet, told))
    return 0


def _chance_lines(sheet: Any, told: Any, most: int = 40) -> list[str]:
    """Return the chances as lines: the largest first, of long lists only the ends."""
    lines = [sheet.title or sheet.name, sheet.kind.words(), "", told.words]
    for head, chances in (("Units", told.units), ("Cells", told.cells), ("Pairs", told.pairs)):
        if chances is None:
            continue
        ordered = sorted(chances, key=lambda chance: (-chance.estimate, chance.name))
        shown = ordered if len(ordered) <= most else [*ordered[: most // 2], None, *ordered[-most // 2 :]]
        lines += ["", head]
        for chance in shown:
            if chance is None:
                lines.append(f"  ... {len(ordered) - most:,} more (all of them with --json)")
                continue
            figure = f"{chance.estimate:.6g}"
            if chance.exact is not None and chance.exact.denominator > 1:
                figure += f"  = {chance.exact}" if len(str(chance.exact)) <= 24 else "  (exact)"
            elif chance.exact is None:
                figure += f"  between {chance.low:.4g} and {chance.high:.4g}"
            lines.append(f"  {' '.join(chance.name):<24}{figure}")
    return [*lines, "", *told.notes]


def _check(call: argparse.Namespace, face: _Face) -> int:
    from core import jobs

    told = jobs.check(call.sheet, call.outcome, allow_outside=call.allow_outside)
    several = len({item["outcome"] for item in told}) > 1
    lines = []
    for item in told:
        head = f"outcome {item['outcome']}, " if several else ""
        figure = f" Found: {item['found']}." if item.get("found") else ""
        lines.append(f"{'holds' if item['holds'] else 'BROKEN':<7}{head}{item['id']}: {item['words']}{figure}")
    broken = sum(not item["holds"] for item in told)
    lines.append(
        f"{broken} of {len(told)} do{'es' if broken == 1 else ''} not hold." if broken else "Every rule holds."
    )
    face.show({"rules": told}, lines)
    return 1 if broken else 0


def _freeze(call: argparse.Namespace, face: _Face) -> int:
    from core import jobs
    from core.record import readable, seed_advice

    content = jobs.freeze(
        call.sheet, outcomes=call.outcomes, memory=call.memory, allow_outside=call.allow_outside, tick=face.tick
    )
    made = content.pop("ready")
    face.remark(made.sheet.notices)
    told = {"digest": content["digest"], "readable": readable(content["digest"]), "entry": content["entry"]}
    lines = [
        f"Frozen {content['at']}: the sheet, its lists and the plan; outcomes planned for: {call.outcomes:,}.",
        f"Digest: {content['digest']}",
        f"To read aloud: {readable(content['digest'])}",
        f"Entry {content['entry']} of the draw book {jobs.book_of(call.sheet).path.name}.",
        f"Publish this digest before the seed is known; then draw with a seed from outside: {seed_advice(made)}.",
    ]
    face.show(told, lines)
    return 0


def _verify(call: argparse.Namespace, face: _Face) -> int:
    from core import jobs
    from core.files import read_record

    read_record(call.record)
    if call.independent:
        from core.sceptic import examine

        findings = examine(call.record, call.sheet)
        lines = [f"{'holds' if f.holds else 'BROKEN':<7}{f.part}: {f.words}" for f in findings]
        good = all(f.holds for f in findings)
        found = [{"part": f.part, "outcome": f.outcome, "holds": f.holds, "words": f.words} for f in findings]
        face.show({"verified": good, "findings": found}, lines)
        return 0 if good else 5
    told = jobs.verify(
        call.record,
        sheet_path=call.sheet,
        workers=call.workers,
        allow_outside=call.allow_outside,
        on_progress=face.progress,
        tick=face.tick,
    )
    lines = [
        f"Verified: the replay of {told['proposals']:,} proposals gives the same outcomes ({told['outcomes']:,}), "
        "byte for byte.",
        f"Draw {told['draw']} of a frozen sheet." if told["frozen"] else "The sheet was not frozen before this draw.",
        told["versions"],
    ]
    face.show(told, lines)
    return 0


def _explain(call: argparse.Namespace, face: _Face) -> int:
    from core import sheet  # noqa: F401  (loads kinds and rules)
    from core.explain import explain

    text = explain(call.word)
    face.show({"text": text}, [text])
    return 0


# -- the parser -----------------------------------------------------------------------------------------------------


class _Parser(argparse.ArgumentParser):
    """A parser whose errors are like all others: one sentence, no usage before it."""

    def error(self, message: str) -> NoReturn:
        """Raise what argparse found, in words."""
        for begin, words in (("argument ", ""), ("the following arguments are required: ", "This is missing: ")):
            if message.startswith(begin):
                message = words + message.removeprefix(begin)
        message = message.replace("expected one argument", "a value must follow")
        raise CallError(f"{message}. See: {self.prog} --help")


def _parsed(arguments: list[str]) -> argparse.Namespace:
    """Return the call; CallError if it is none, naming what is nearest to a word that is not known."""
    from core.frame import nearest

    parser, jobs = _parser()
    first = arguments[0] if arguments else "--help"
    if not first.startswith("-") and first not in jobs:
        raise CallError(_unknown("job", first, list(jobs), nearest(first, jobs), "lotwright"))
    call, rest = parser.parse_known_args(arguments or ["--help"])
    if rest or call.job is None:
        options = sorted(jobs[first]._option_string_actions) if first in jobs else ["--help"]
        word = rest[0].split("=")[0] if rest else first
        prog = f"lotwright {first}" if first in jobs else "lotwright"
        if not word.startswith("-"):
            raise CallError(f"There is a word too many. Found: {word}. See: {prog} --help")
        known = [option for option in options if option.startswith("--")]
        near = next((option for option in known if option.startswith(word)), nearest(word, known))
        raise CallError(_unknown("option", word, known, near, prog))
    return call


def _unknown(what: str, word: str, known: Sequence[str], near: str, prog: str) -> str:
    allowed = f" Allowed: {', '.join(known)}." if known else ""
    meant = f" Did you mean {near}?" if near else ""
    return f"There is no such {what}. Found: {word}.{allowed}{meant} See: {prog} --help"


def _parser() -> tuple[_Parser, dict[str, argparse.ArgumentParser]]:
    """Return the parser, and those of the jobs by name."""
    parser = _Parser(
        prog="lotwright",
        description="Draws one outcome out of all that satisfy the rules, each with exactly the same chance.",
        epilog="Example: lotwright draw sheet.toml --seed '4 0 7 1 9 3'",
        allow_abbrev=False,
    )
    parser.set_defaults(job=None)
    jobs = parser.add_subparsers(title="jobs", metavar="JOB")
    one = _adder(jobs)
    plan = one("plan", _plan, "forecast without drawing", "lotwright plan sheet.toml --outcomes 1000")
    _sheet(plan)
    plan.add_argument("--outcomes", type=_positive, default=1, metavar="N", help="how many outcomes are wanted")
    plan.add_argument("--to", type=Path, metavar="PLAN", help="write the plan to this file")
    draw = one("draw", _draw, "draw outcomes", "lotwright draw sheet.toml --seed '40719 33580' --to result")
    _sheet(draw)
    draw.add_argument(
        "--seed", action="append", default=[], metavar="TEXT", help="the public seed; several: NAME=TEXT each"
    )
    draw.add_argument("--outcomes", type=_positive, metavar="N", help="how many (default: 1, or as frozen)")
    draw.add_argument(
        "--to", type=Path, default=Path("drawn"), metavar="DIR", help="folder of the result (default: drawn)"
    )
    draw.add_argument("--plan", type=Path, metavar="PLAN", help="use this plan instead of planning")
    draw.add_argument("--workers", type=_positive, default=1, metavar="W", help="processes; the result is the same")
    draw.add_argument("--limit", type=_positive, metavar="PROPOSALS", help="stop after so many proposals")
    draw.add_argument("--reason", default="", metavar="TEXT", help="why a frozen sheet is drawn again")
    draw.add_argument("--resume", action="store_true", help="go on with an interrupted draw")
    chances = one("chances", _chances, "chances of every unit", "lotwright chances sheet.toml --pairs")
    _sheet(chances)
    chances.add_argument("--cells", action="store_true", help="also of each unit in each place")
    chances.add_argument("--pairs", action="store_true", help="also of each two units together")
    chances.add_argument("--limit", type=_positive, metavar="PROPOSALS", help="stop after so many proposals")
    check = one("check", _check, "does a given outcome meet each rule", "lotwright check sheet.toml outcome.csv")
    _sheet(check)
    check.add_argument("outcome", type=Path, metavar="OUTCOME", help="a file with the columns of outcomes.csv")
    freeze = one("freeze", _freeze, "fix sheet, lists and plan by their digest", "lotwright freeze sheet.toml")
    _sheet(freeze)
    freeze.add_argument("--outcomes", type=_positive, default=1, metavar="N", help="how many will be drawn")
    verify = one("verify", _verify, "replay a record", "lotwright verify drawn/record.json --independent")
    verify.add_argument("record", type=Path, metavar="RECORD")
    verify.add_argument("--sheet", type=Path, metavar="SHEET", help="where the sheet is, if not beside the record")
    verify.add_argument("--independent", action="store_true", help="re-check the outcomes by a second implementation")
    verify.add_argument("--workers", type=_positive, default=1, metavar="W", help="processes")
    _common(verify)
    explain = one("explain", _explain, "what a rule or a kind means", "lotwright explain quota")
    explain.add_argument("word", nargs="?", metavar="WORD", help="a rule or a kind of outcome")
    explain.add_argument("--json", action="store_true", help="print JSON")
    return parser, dict(jobs.choices)


def _adder(jobs: Any) -> Callable[[str, Callable[..., int], str, str], argparse.ArgumentParser]:
    def add(name: str, job: Callable[..., int], words: str, example: str) -> argparse.ArgumentParser:
        parser: argparse.ArgumentParser = jobs.add_parser(
            name, help=words, description=f"{words.capitalize()}.", epilog=f"Example: {example}", allow_abbrev=False
        )
        parser.set_defaults(job=job)
        return parser

    return add


def _sheet(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("sheet", type=Path, metavar="SHEET", help="a sheet (.toml)")
    parser.add_argument("--memory", type=_gibibytes, default=4.0, metavar="GiB", help="for planning (default: 4)")
    _common(parser)


def _common(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("--json", action="store_true", help="print JSON")
    parser.add_argument("--allow-outside", action="store_true", help="allow lists outside the sheet's folder")


def _positive(text: str) -> int:
    number = int(text) if text.isascii() and text.isdecimal() else 0
    if not 1 <= number <= 10**12:
        raise argparse.ArgumentTypeError(f"{text!r} is not an integer from 1 to 10^12")
    return number


def _gibibytes(text: str) -> float:
    try:
        number = float(text)
    except ValueError:
        number = 0.0
    if not 0.01 <= number <= 4096:
        raise argparse.ArgumentTypeError(f"{text!r} is not a number of GiB from 0.01 to 4096")
    return number


if __name__ == "__main__":
    sys.exit(main())
