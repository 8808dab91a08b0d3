"""Reading a list of 1,000,000 lines: `frame_of(read_table(...))` against polars' own plain reading.

Run as ``python -m tests.bench.read_million`` from the project's folder, with ``--lines`` for another size and
``--variant`` for lists with padding, accents, quotes or other line ends. Both ways take turns in one process, so
that a slow moment of the machine meets both; the ratio is that of the fastest turns. Peak memory is that of a
process of its own that reads the list once. Exit code 1 if a bound is missed: 3 times, 2 GiB.
"""

from __future__ import annotations

import argparse
import hashlib
import multiprocessing
import resource
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import polars as pl

from core.frame import Frame, frame_of
from core.tables import read_table

MOST_TIMES = 3.0
MOST_GIB = 2.0
VARIANTS = ("plain", "padded", "accents", "cyrillic", "quoted", "crlf")


def make_list(path: Path, lines: int, variant: str) -> None:
    """Write an invented list of six columns, about 60 bytes a line."""
    name = {"accents": "Zo\u00eb Code", "cyrillic": "\u0418\u043c\u044f Code"}.get(variant, "Some Code")
    quote = '"' if variant == "quoted" else ""
    pad = " " if variant == "padded" else ""
    with path.open("w", encoding="utf-8", newline="\r\n" if variant == "crlf" else "\n") as out:
        out.write("badge,unit,amount,grade,name,voucher\n")
        for line in range(lines):
            number = int.from_bytes(hashlib.blake2b(line.to_bytes(8, "big"), digest_size=6).digest(), "big")
            out.write(
                f"{number % 900:03d}{line:07d},deck {number % 12:02d},{number % 10**7 / 100:.2f}{pad},"
                f"grade {number % 7},{quote}{name} {number % 997:05d}{quote},V{number % 10**12:012d}-{number % 89}\n"
            )


def timed(work: Callable[[], object]) -> tuple[float, float]:
    """Return seconds on the clock and seconds of processor time."""
    clock, processor = time.perf_counter(), time.process_time()
    work()
    return time.perf_counter() - clock, time.process_time() - processor


def ours(path: Path) -> Frame:
    """Read the list as the program does: digests, checks, cleaning, and the search for repeated ids."""
    return frame_of(read_table(path), "badge")


def plainly(path: Path) -> pl.DataFrame:
    """Read the list as the library does."""
    return pl.read_csv(path, infer_schema=False)


def peak_gib(path: Path) -> float:
    """Read the list once and return the peak memory of this process."""
    assert ours(path).size
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20


def main() -> int:
    """Run the comparison; return the exit code."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--lines", type=int, default=1_000_000)
    parser.add_argument("--turns", type=int, default=9)
    parser.add_argument("--variant", choices=VARIANTS, default="plain")
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "list.csv"
        make_list(path, options.lines, options.variant)
        size = path.stat().st_size / 1e6
        turns = [(timed(lambda: plainly(path)), timed(lambda: ours(path))) for _ in range(options.turns)]
        with multiprocessing.get_context("spawn").Pool(1) as pool:
            memory = pool.apply(peak_gib, (path,))
    plain, own = (tuple(map(min, zip(*column, strict=True))) for column in zip(*turns, strict=True))
    first = turns[0][1][0] / turns[0][0][0]
    print(f"{options.variant}: {options.lines:,} lines, {size:.0f} MB, fastest of {options.turns} turns")
    print(f"plain reading by polars : {plain[0]:.3f} s (processor {plain[1]:.3f} s)")
    print(f"read, checked, hashed   : {own[0]:.3f} s (processor {own[1]:.3f} s)")
    print(
        f"ratio                   : {own[0] / plain[0]:.2f} (processor {own[1] / plain[1]:.2f}, first turn {first:.2f})"
    )
    print(f"peak memory             : {memory:.2f} GiB")
    return 0 if own[0] <= MOST_TIMES * plain[0] and memory <= MOST_GIB else 1


if __name__ == "__main__":
    sys.exit(main())
