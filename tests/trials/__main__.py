"""The command: run a study over random draws, one row of a CSV file for each, and make its tables.

    python -m tests.trials readings --count 1000 --seed 1 --write

Rows are kept as they come, so that an interrupted study goes on where it stopped; draw number i of a seed is the same
whatever the count. `--write` puts the tables into docs/trials.md.
"""

import argparse
import sys
import tempfile
from pathlib import Path

import pandas as pd

from tests.trials import choice, readings, sound
from tests.trials.rows import collect
from tests.trials.tables import heading, put

STUDIES = {"readings": readings, "sound": sound, "choice": choice}
DOCUMENT = Path(__file__).parents[2] / "docs" / "trials.md"


def main() -> None:
    """Parse, run, show, write."""
    parser = argparse.ArgumentParser(prog="python -m tests.trials", description="Random trials against exact truth.")
    parser.add_argument("name", choices=STUDIES)
    parser.add_argument("--count", type=int, required=True, help="how many draws")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--write", action="store_true", help=f"put the tables into docs/{DOCUMENT.name}")
    asked = parser.parse_args()
    study = STUDIES[asked.name]
    kept = Path(tempfile.gettempdir()) / "sweep-trials" / f"{asked.name}-{asked.seed}.csv"
    collect(kept, asked.count, asked.seed, study.trial)
    rows = pd.read_csv(kept)
    rows = rows[rows.draw < asked.count]
    text = heading(asked.name, asked.count, asked.seed, rows) + "\n\n" + study.tables(rows)
    sys.stdout.write(text + "\n")
    if asked.write:
        put(DOCUMENT, asked.name, text)


if __name__ == "__main__":
    main()
