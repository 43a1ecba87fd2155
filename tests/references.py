"""The check values of fixtures/references; its README says where each comes from."""

import json
from pathlib import Path
from typing import Any

import pandas as pd

FOLDER = Path(__file__).parent.parent / "fixtures" / "references"


def table(name: str) -> pd.DataFrame:
    """A CSV file with one header line."""
    return pd.read_csv(FOLDER / name)


def facts(name: str) -> dict[str, Any]:
    """A JSON file."""
    loaded: dict[str, Any] = json.loads((FOLDER / name).read_text(encoding="utf-8"))
    return loaded
