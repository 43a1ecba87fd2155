"""The study `choice`: how often the recommended stop is right, what a wrong one costs, and what the chances are worth.

Beside the tool's choice stand rules that people use, on the same sweeps; these are given the stops that keep exposure
and gain, so that sharpness alone is compared.
"""

import itertools
import json
from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd

from sweep.analyse import analyse
from sweep.cameras.simulated import TrueStop
from sweep.cameras.simulated_draw import Kind
from sweep.result import Result
from sweep.station import Station
from tests.trials.effects import EFFECTS, Case, draw_case, take_sweep, usable
from tests.trials.rules import RULES, chosen_by_rules
from tests.trials.stations import draw_station
from tests.trials.tables import bounds, rms, share, table

KINDS: tuple[Kind, ...] = ("edge", "star", "bars")
TIE = 0.01
LIMIT_SLACK = 0.02
BINS = (0.0, 0.6, 0.8, 0.95, 0.995, 1.0)


def trial(rng: np.random.Generator) -> Sequence[Mapping[str, object]]:
    """One sweep, analysed, and judged by the truth; the rules beside it."""
    kind = KINDS[int(rng.choice(3, p=[0.7, 0.2, 0.1]))]
    station, sim = draw_station(rng, kind, "mono", int(rng.choice([8, 10, 12])))
    case = draw_case(_stated_prints(station, sim.prints), sim, kind, rng)
    frames = int(rng.integers(2, 9))
    sweep = take_sweep(case, frames, rng)
    truth = case.truth()
    result = analyse(sweep, case.stated)
    rules = chosen_by_rules(case, truth, sweep, usable(case, truth), rng)
    judged = {f"rule {name}": _lost(case, truth, stop) for name, stop in rules.items()}
    row = {"kind": kind, "effect": case.effect, "frames": frames, "bits": case.stated.camera.bit_depth}
    return [{**row, **_judged(case, truth, result), **judged}]


def _stated_prints(station: Station, prints: Sequence[Sequence[object]]) -> Station:
    """The station with the modulation of its stars' and bars' prints stated."""
    targets = []
    for target, own in zip(station.targets, prints, strict=True):
        patches = tuple(
            patch.model_copy(update={"modulation": round((p.light - p.dark) / (p.light + p.dark), 3)})  # type: ignore[attr-defined]
            if patch.kind in ("star", "bars")
            else patch
            for patch, p in zip(target.patches, own, strict=True)
        )
        targets.append(target.model_copy(update={"patches": patches}))
    return station.model_copy(update={"targets": tuple(targets)})


def _lost(case: Case, truth: Sequence[TrueStop], stop: float | None) -> float | None:
    """Worst contrast given away by a stop against the best usable one."""
    if stop is None:
        return None
    worst = [true.worst_contrast for true in truth]
    place = case.stated.lens.stops.index(stop)
    best = max(w for w, yes in zip(worst, usable(case, truth, -LIMIT_SLACK), strict=True) if yes)
    return max(best - worst[place], 0.0)


def _judged(case: Case, truth: Sequence[TrueStop], result: Result) -> dict[str, object]:
    """The result against the truth: loss, need, chances, contrasts of every stop in units of u."""
    stop = result.recommendation.stop
    need = case.stated.need
    places = {true.stop: true for true in truth}
    off = [
        (s.worst_contrast - places[s.stop].worst_contrast, s.worst_contrast_u)
        for s in result.stops
        if s.worst_contrast is not None and s.worst_contrast_u is not None
    ]
    meant = places[stop] if stop is not None else None
    kept = meant is not None and usable(case, truth, LIMIT_SLACK)[case.stated.lens.stops.index(meant.stop)]
    best = max(t.worst_contrast for t, yes in zip(truth, usable(case, truth, -LIMIT_SLACK), strict=True) if yes)
    return {
        "stop": stop,
        "best": best,
        "contrast": meant.worst_contrast if meant is not None else None,
        "loss": _lost(case, truth, stop),
        "kept_limits": kept,
        "need": need.contrast,
        "passes": result.recommendation.meets_need,
        "chance_best": result.recommendation.chance_best,
        "off": json.dumps([round(o, 5) for o, _ in off]),
        "u": json.dumps([round(u, 6) for _, u in off]),
        "chi2": result.model.reduced_chi2,
        "codes": ";".join(sorted({note.code for note in result.warnings})),
    }


def _right(loss: pd.Series, best: pd.Series) -> pd.Series:
    return loss.notna() & (loss <= TIE * best + 1e-9)


def tables(rows: pd.DataFrame) -> str:
    """Choice, contrasts, chances, and the rules."""
    rows = rows.assign(right=_right(rows.loss, rows.best), codes=rows.codes.fillna(""))
    plain = rows[rows.effect == "none"]
    groups = [
        ("all", rows),
        ("nothing the model lacks", plain),
        *((effect, rows[rows.effect == effect]) for effect in EFFECTS[1:]),
        *((f"{kind}s" if kind != "bars" else kind, rows[rows.kind == kind]) for kind in KINDS),
        *((f"{low} to {high} frames a stop", rows[rows.frames.between(low, high)]) for low, high in ((2, 3), (4, 8))),
    ]
    groups = [(name, part) for name, part in groups if len(part)]
    return "\n\n".join([_choices(groups), _coverage(groups), _chances(rows), _rules(rows)])


def _choices(groups: Sequence[tuple[str, pd.DataFrame]]) -> str:
    lines = []
    for name, part in groups:
        passed = part[part.passes.astype(bool)]
        false = (passed.contrast < passed.need) | ~passed.kept_limits.astype(bool)
        lines.append(
            [
                name,
                len(part),
                share(int(part.right.sum()), len(part)),
                int(part.stop.isna().sum()),
                f"{part.loss.mean():.4f}",
                f"{part.loss.max():.3f}",
                f"{int(false.sum())} of {len(passed)}",
            ]
        )
    head = ["sweeps", "count", "right stop, %", "no answer", "mean loss", "largest loss", "false passes"]
    return table(head, lines)


def _coverage(groups: Sequence[tuple[str, pd.DataFrame]]) -> str:
    lines = []
    for name, part in groups:
        off = np.array([v for text in part.off for v in json.loads(text)])
        u = np.array([v for text in part.u for v in json.loads(text)])
        told = u > 0
        z = pd.Series(off[told] / u[told])
        misfit = part.codes.str.split(";").apply(lambda held: "model-misfit" in held)
        lines.append(
            [
                name,
                len(z),
                f"{np.median(np.abs(off)):.4f}",
                f"{np.abs(off).max():.3f}",
                share(int((z.abs() <= 2).sum()), len(z)),
                rms(z),
                share(int(misfit.sum()), len(part)),
            ]
        )
    head = [
        "worst contrast of every stop",
        "stops",
        "middle error",
        "largest",
        "within 2u, %",
        "rms error/u",
        "`model-misfit`, % of sweeps",
    ]
    return table(head, lines)


def _chances(rows: pd.DataFrame) -> str:
    known = rows.dropna(subset=["chance_best"])
    lines: list[list[object]] = []
    for low, high in itertools.pairwise(BINS):
        part = known[(known.chance_best >= low) & ((known.chance_best < high) | (high == 1.0))]
        if len(part):
            mean = float(part.chance_best.mean())
            least, most = bounds(len(part), mean)
            hits = int(part.right.sum())
            verdict = "within" if least <= hits <= most else "outside"
            lines.append(
                [
                    f"{low:g} to {high:g}",
                    len(part),
                    f"{mean:.3f}",
                    f"{hits / len(part):.3f}",
                    hits,
                    f"{least} to {most}",
                    verdict,
                ]
            )
    return table(["chance_best", "sweeps", "mean", "right", "hits", "hits expected (99 %)", ""], lines)


def _rules(rows: pd.DataFrame) -> str:
    lines: list[list[object]] = [
        [
            "this tool",
            share(int(rows.right.sum()), len(rows)),
            f"{rows.loss.mean():.4f}",
            f"{rows.loss.quantile(0.95):.3f}",
            f"{rows.loss.max():.3f}",
        ]
    ]
    for name, what in RULES.items():
        loss = rows[f"rule {name}"]
        right = _right(loss, rows.best)
        lines.append(
            [
                f"{name}: {what}",
                share(int(right.sum()), len(rows)),
                f"{loss.mean():.4f}",
                f"{loss.quantile(0.95):.3f}",
                f"{loss.max():.3f}",
            ]
        )
    return table(["rule", "right stop, %", "mean loss", "95 % below", "largest"], lines)
