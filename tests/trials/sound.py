"""The study `sound`: sweeps with nothing wrong, and the warnings that came all the same."""

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd

from sweep.analyse import analyse
from sweep.cameras.simulated import render_sweep, station_truth
from sweep.result import NOTE_CODES
from tests.trials.stations import draw_station
from tests.trials.tables import share, table

LAYOUTS = ("mono", "bgr", "rggb", "grbg", "gbrg", "bggr")
LAYOUT_SHARES = (0.5, 0.2, 0.075, 0.075, 0.075, 0.075)


def trial(rng: np.random.Generator) -> Sequence[Mapping[str, object]]:
    """One sound sweep through the whole analysis."""
    layout = str(rng.choice(LAYOUTS, p=LAYOUT_SHARES))
    bit_depth = int(rng.choice([8, 10, 12]))
    response = ["linear", "srgb", 2.2][int(rng.choice(3, p=[0.7, 0.15, 0.15]))]
    frames = int(rng.integers(2, 9))
    station, sim = draw_station(rng, "edge", layout, bit_depth)  # type: ignore[arg-type]
    station = station.model_copy(update={"camera": station.camera.model_copy(update={"response": response})})
    truth = station_truth(station, sim)
    result = analyse(render_sweep(station, sim, rng, frames), station)
    worst = [t.worst_contrast for t in truth]
    best = int(np.argmax(worst))
    row = {
        "layout": layout,
        "bits": bit_depth,
        "response": response,
        "frames": frames,
        "codes": ";".join(sorted({note.code for note in result.warnings})),
        "texts": " // ".join(note.text for note in result.warnings if note.code not in TRUE_OR_SAID),
        "refused": sum(not r.ok for r in result.readings),
        "readings": len(result.readings),
        "best_at_end": best in (0, len(worst) - 1),
        "stop": result.recommendation.stop,
        "chi2": result.model.reduced_chi2,
    }
    return [row]


TRUE_OR_SAID = {
    "optimum-outside": "true where the best stop is at an end",
    "no-reading": "said of a stop that has no sound reading, which the choice does without",
    "edge-not-found": "said of an edge that is blurred beyond its region",
    "gain-spent": "said of the settings, no fault of the sweep",
}


def tables(rows: pd.DataFrame) -> str:
    """The share of sweeps that each code came in, apart where the code may be true."""
    codes = rows.codes.fillna("").str.split(";")
    lines: list[list[object]] = []
    for code in NOTE_CODES:
        has = codes.apply(lambda held, code=code: code in held)
        if code == "optimum-outside":
            lines.append([f"`{code}`, best stop inside", *_counted(has, ~rows.best_at_end)])
            lines.append([f"`{code}`, best stop at the end (true)", *_counted(has, rows.best_at_end)])
        elif has.any() or code not in TRUE_OR_SAID:
            said = f" ({TRUE_OR_SAID[code]})" if code in TRUE_OR_SAID else ""
            lines.append([f"`{code}`{said}", *_counted(has, pd.Series(True, rows.index))])
    seen = [line for line in lines if line[1] != 0]
    never = [str(line[0]) for line in lines if line[1] == 0]
    false = codes.apply(lambda held: any(c and c not in TRUE_OR_SAID for c in held))
    groups: list[list[object]] = []
    for name, part in [
        ("all", rows),
        *((str(layout), rows[rows.layout == layout]) for layout in ("mono", "bgr")),
        ("mosaic", rows[~rows.layout.isin(["mono", "bgr"])]),
        *((f"{bits} bit", rows[rows.bits == bits]) for bits in (8, 10, 12)),
        *(
            (f"response {response}", rows[rows.response.astype(str) == response])
            for response in ("linear", "srgb", "2.2")
        ),
        *((f"{low} to {high} frames a stop", rows[rows.frames.between(low, high)]) for low, high in ((2, 3), (4, 8))),
    ]:
        groups.append([name, len(part), share(int(false[part.index].sum()), len(part)), f"{part.chi2.median():.2f}"])
    refused, read = int(rows.refused.sum()), int(rows.readings.sum())
    limit = 100 * (1 - 0.025 ** (1 / len(rows)))
    return "\n\n".join(
        [
            table(["warning", "sweeps with it", "of", "% (95 % limits)"], seen or [["none", 0, len(rows), ""]]),
            f"Never, in {len(rows)} sweeps (95 % limits 0 to {limit:.2g} %): {', '.join(never)}.",
            table(["sweeps", "count", "% with any false warning (95 % limits)", "middle reduced chi-square"], groups),
            f"Readings refused: {share(refused, read)} % of {read}.",
        ]
    )


def _counted(has: pd.Series, among: pd.Series) -> tuple[int, int, str]:
    hits, count = int((has & among).sum()), int(among.sum())
    return hits, count, share(hits, count)
