"""The check values of fixtures/references; its README says where each comes from."""

import json
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

FOLDER = Path(__file__).parent.parent / "fixtures" / "references"


def table(name: str) -> pd.DataFrame:
    """A CSV file with one header line."""
    return pd.read_csv(FOLDER / name)


def facts(name: str) -> dict[str, Any]:
    """A JSON file."""
    loaded: dict[str, Any] = json.loads((FOLDER / name).read_text(encoding="utf-8"))
    return loaded


def diffraction_mtf(s: ArrayLike) -> NDArray[np.float64]:
    """MTF of the perfect lens in focus, s in fractions of the cut-off: Goodman, Introduction to Fourier Optics."""
    s = np.minimum(np.asarray(s, dtype=np.float64), 1.0)
    return np.asarray(2.0 / np.pi * (np.arccos(s) - s * np.sqrt(1.0 - s * s)))
