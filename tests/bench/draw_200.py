"""200 items, 30 drawn, quotas on region (5), risk (3) and department (4): planned and drawn, against propose-and-check in numpy.

Run: python tests/bench/draw_200.py. Both in one run, in processor time; the loop's time is extrapolated from ten seconds of it.
"""

import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[2]))

from core.engine import draw
from core.planner import make_plan
from core.sheet import Sheet, read_sheet
from core.stream import make_key

WANTED = 1000
QUOTAS = {"region": (5, 5, 7), "risk": (3, 10, 10), "department": (4, 6, 9)}


def columns() -> dict[str, np.ndarray]:
    """Invented attributes, fixed: a linear congruence spreads the values."""
    return {
        name: np.array([(i * 7919 + number * 104729 + i * i * 31) % 1009 % values for i in range(200)])
        for number, (name, (values, _, _)) in enumerate(QUOTAS.items())
    }


def sheet() -> Sheet:
    table = columns()
    units = ",\n".join(
        "{" + ", ".join([f'id = "i{i:03d}"', *(f'{c} = "{c}{table[c][i]}"' for c in table)]) + "}" for i in range(200)
    )
    rules = "".join(
        f'[[rule]]\nkind = "quota"\nper = "{c}"\nmin = {low}\nmax = {high}\n' for c, (_, low, high) in QUOTAS.items()
    )
    text = f'format = 1\n[frame]\nunits = [{units}]\n[outcome]\nkind = "selection"\nsize = 30\n{rules}'
    return read_sheet(text, "bench.toml", lambda wanted: (_ for _ in ()).throw(AssertionError(wanted)))


def plain_loop(seconds: float) -> tuple[int, int, float]:
    """Propose uniform subsets with numpy and check the quotas; return proposals, accepted, seconds."""
    generator = np.random.default_rng(1)  # noqa: NPY002 (the rival, not the program)
    table = columns()
    marks = [((table[c] == v), low, high) for c, (values, low, high) in QUOTAS.items() for v in range(values)]
    matrix = np.stack([mark for mark, _, _ in marks], axis=1).astype(np.float32)
    low = np.array([low for _, low, _ in marks])
    high = np.array([high for _, _, high in marks])
    proposals = accepted = 0
    began = time.process_time()
    while time.process_time() - began < seconds:
        picked = np.argpartition(generator.random((4096, 200), dtype=np.float32), 30, axis=1)[:, :30]
        inside = np.zeros((4096, 200), np.float32)
        np.put_along_axis(inside, picked, 1, axis=1)
        counts = inside @ matrix
        accepted += int(((counts >= low) & (counts <= high)).all(axis=1).sum())
        proposals += 4096
    return proposals, accepted, time.process_time() - began


def main() -> None:
    began = time.process_time()
    ready = make_plan(sheet(), outcomes=WANTED)
    planned = time.process_time() - began
    drawn = draw(ready, make_key("draw", ready.sheet.digest, [("", "bench")]), WANTED)
    ours = time.process_time() - began
    proposals, accepted, seconds = plain_loop(10.0)
    theirs = seconds * WANTED / max(1, accepted)
    print(
        f"built in: {', '.join(ready.plan.built_in)}; checked: {', '.join(ready.plan.checked)}; {ready.plan.edges:,} edges"
    )
    print(
        f"acceptance {drawn.ledger.acceptance:.3f}; plain loop {accepted / proposals:.2e} ({accepted} of {proposals:,})"
    )
    print(f"{WANTED:,} outcomes: ours {ours:.2f} s (planning {planned:.2f} s), plain loop {theirs:.1f} s")
    print(f"ratio {theirs / ours:.1f}")


if __name__ == "__main__":
    main()
