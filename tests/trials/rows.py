"""Rows of a study on disk: written as they come, and not made twice."""

import csv
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path

import numpy as np

Row = Mapping[str, object]


def collect(kept: Path, count: int, seed: int, trial: Callable[[np.random.Generator], Sequence[Row]]) -> None:
    """Run the draws below `count` that the CSV file does not hold yet; each one's rows are added to it at once."""
    kept.parent.mkdir(parents=True, exist_ok=True)
    done = _done(kept)
    for draw in range(count):
        if draw in done:
            continue
        began = time.perf_counter()
        rows = trial(np.random.default_rng([seed, draw]))
        seconds = round(time.perf_counter() - began, 2)
        _append(kept, [{"draw": draw, "seconds": seconds, **row} for row in rows])
        sys.stderr.write(f"\rdraw {draw + 1} of {count}, {seconds:.1f} s ")
    sys.stderr.write("\n")


def _done(kept: Path) -> set[int]:
    if not kept.exists():
        return set()
    with kept.open(encoding="utf-8", newline="") as file:
        return {int(row["draw"]) for row in csv.DictReader(file)}


def _append(kept: Path, rows: Sequence[Row]) -> None:
    new = not kept.exists()
    with kept.open("a", encoding="utf-8", newline="") as file:
        writer = csv.DictWriter(file, fieldnames=list(rows[0]))
        if new:
            writer.writeheader()
        writer.writerows(rows)
