"""Markdown tables, limits on shares, and the place in the document where a study's tables stand."""

from collections.abc import Sequence
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pandas as pd
from scipy.stats import beta, binom

from sweep import __version__

SURE = 0.01


def heading(name: str, count: int, seed: int, rows: pd.DataFrame) -> str:
    """One line that says how the tables under it came to be."""
    today = datetime.now(tz=UTC).date().isoformat()
    seconds = rows.drop_duplicates("draw").seconds.median()
    return (
        f"`python -m tests.trials {name} --count {count} --seed {seed} --write`: {rows.draw.nunique()} draws, "
        f"seed {seed}, {today}, version {__version__}; {seconds:.1f} s a draw (median, one process)."
    )


def table(head: Sequence[str], lines: Sequence[Sequence[object]]) -> str:
    """A Markdown table: text to the left, figures to the right."""
    cells = [[str(cell) for cell in line] for line in lines]
    aligned = ["---" if i == 0 else "---:" for i in range(len(head))]
    return "\n".join("| " + " | ".join(line) + " |" for line in [list(head), aligned, *cells])


def share(hits: int, count: int) -> str:
    """A share in percent with its 95 % limits by Clopper and Pearson, Biometrika 26, 404-413 (1934)."""
    if count == 0:
        return "-"
    low = 0.0 if hits == 0 else float(beta.ppf(0.025, hits, count - hits + 1))
    high = 1.0 if hits == count else float(beta.ppf(0.975, hits + 1, count - hits))
    return f"{100 * hits / count:.1f} ({100 * low:.1f} to {100 * high:.1f})"


def bounds(count: int, chance: float) -> tuple[int, int]:
    """Between which counts hits of a known chance stay, but for one time in a hundred."""
    return int(binom.ppf(SURE / 2, count, chance)), int(binom.ppf(1 - SURE / 2, count, chance))


def rms(values: pd.Series) -> str:
    """Root mean square of what there is."""
    known = values.dropna()
    return f"{np.sqrt((known**2).mean()):.2f}" if len(known) else "-"


def put(document: Path, name: str, text: str) -> None:
    """Replace what stands between a study's markers in the document."""
    begin, end = f"<!-- {name}: begin, made by command -->", f"<!-- {name}: end -->"
    whole = document.read_text(encoding="utf-8")
    before, _, rest = whole.partition(begin)
    _, found, after = rest.partition(end)
    if not found:
        raise SystemExit(f"{document}: no markers for {name!r}; add the lines {begin} and {end}.")
    document.write_text(f"{before}{begin}\n{text}\n{end}{after}", encoding="utf-8")
