"""The study `readings`: edges, stars and bars of known transfer, read by the tool's path from frames to readings."""

import math
from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd

from sweep.cameras.simulated import RenderedSweep
from sweep.figures import reading_of
from sweep.frames import Shot
from sweep.readings import measure_sweep
from sweep.result import Reading
from sweep.station import Camera, Lens, Need, Patch, Scene, Station, StationName, Target
from tests.trials.blur import FAMILIES, Blur, Floats, draw_blur, first_half
from tests.trials.patches import BLACK_DN, Look, bars, draw_look, edge, star, take
from tests.trials.tables import rms, share, table

STOPS = (2.0, 4.0, 8.0)
OBJECT_UM = 50.0
FINE = np.linspace(0, 1, 2001)
Row = Mapping[str, object]


def trial(rng: np.random.Generator) -> Sequence[Row]:
    """One patch: an edge at one stop, a star or bars at three."""
    kind = rng.choice(["edge", "star", "bars"], p=[0.6, 0.25, 0.15])
    return {"edge": _edge, "star": _star, "bars": _bars}[str(kind)](rng)


def _edge(rng: np.random.Generator) -> list[Row]:
    blur = draw_blur(rng, math.exp(rng.uniform(math.log(0.03), math.log(0.45))))
    upright = bool(rng.integers(2))
    across, along = int(rng.integers(40, 121)), int(rng.integers(60, 141))
    size = (across, along) if upright else (along, across)
    tilt = float(rng.choice([-1, 1]) * rng.uniform(2, 12))
    normal = math.radians((0 if upright else 90) + tilt + 180 * float(rng.integers(2)))
    bend = float(rng.choice([0.0, 1.0], p=[0.6, 0.4]) * rng.uniform(-0.5, 0.5))
    place = ((size[0] - 1) / 2 + rng.uniform(-2, 2), (size[1] - 1) / 2 + rng.uniform(-2, 2))
    look = draw_look(rng)
    patch = Patch(kind="edge", region=(0, 0, *size))
    feature = rng.uniform(0.05, 0.4)
    pictures = [edge(size, blur, normal, bend, place)]
    d, light = blur.step(normal)
    wide = float(np.interp(0.9, light, d) - np.interp(0.1, light, d))
    # The narrower side of the edge at its far end, against what the reading needs there.
    room = (across - 1) / 2 - 2 - along / 2 * abs(math.tan(math.radians(tilt)))
    (row,) = _read(patch, pictures, [blur], [blur.along(FINE, normal)], look, feature, rng)
    return [{**row, "room": room / wide, "bend_px": bend, "tilt_deg": tilt, "across_px": across, "along_px": along}]


def _star(rng: np.random.Generator) -> list[Row]:
    halves = [rng.uniform(0.2, 0.45), *np.exp(rng.uniform(math.log(0.05), math.log(0.4), 2))]
    blurs = [draw_blur(rng, float(half)) for half in halves]
    size = int(rng.integers(90, 161))
    cycles = int(rng.integers(16, 45))
    look = draw_look(rng)
    surround = bool(rng.random() < 0.7)
    stated = bool(rng.random() < 0.5) or not surround
    modulation = (look.light_dn - look.dark_dn) / (look.light_dn + look.dark_dn) if stated else 1.0
    rim = size / 2 - rng.uniform(6, 12) if surround else size
    centre = tuple(float(v) for v in (size - 1) / 2 + rng.uniform(-1.5, 1.5, 2))
    draw = star(size, cycles, rim, rng.uniform(0, 2 * math.pi), (centre[0], centre[1]))
    patch = Patch(kind="star", region=(0, 0, size, size), cycles=cycles, modulation=round(modulation, 4))
    curves = [blur.all_round(FINE) for blur in blurs]
    rows = _read(patch, [draw(blur) for blur in blurs], blurs, curves, look, rng.uniform(0.08, 0.4), rng)
    return [
        {**row, "room": None, "surround": surround, "stated": stated, "across_px": size, "along_px": cycles}
        for row in rows
    ]


def _bars(rng: np.random.Generator) -> list[Row]:
    blurs = [draw_blur(rng, float(half)) for half in (0.35, *np.exp(rng.uniform(math.log(0.08), math.log(0.4), 2)))]
    size = (int(rng.integers(50, 111)), int(rng.integers(50, 111)))
    side_px = (min(size) - 8) / 1.2  # of a set that stays inside when turned
    v = 1 / rng.uniform(4, side_px / 4.6)
    direction = math.radians(90 * int(rng.integers(2)) + float(rng.uniform(-12, 12)))
    look = draw_look(rng)
    modulation = (look.light_dn - look.dark_dn) / (look.light_dn + look.dark_dn)
    most = int(side_px * v + 0.5)
    dark_bars = most - (most % 2 == 0) if rng.integers(2) else None
    draw = bars(size, (v * math.cos(direction), v * math.sin(direction)), dark_bars)
    patch = Patch(kind="bars", region=(0, 0, *size), period_um=round(OBJECT_UM / v, 3), modulation=round(modulation, 4))
    curves = [blur.along(FINE, direction) for blur in blurs]
    rows = _read(patch, [draw(blur) for blur in blurs], blurs, curves, look, v, rng)
    return [
        {
            **row,
            "room": None,
            "surround": dark_bars is not None,
            "stated": True,
            "across_px": size[0],
            "along_px": size[1],
        }
        for row in rows
    ]


def _read(
    patch: Patch,
    pictures: Sequence[Floats],
    blurs: Sequence[Blur],
    curves: Sequence[Floats],
    look: Look,
    feature_cy_px: float,
    rng: np.random.Generator,
) -> list[Row]:
    """The pictures of a patch as one sweep, read; one row a stop, readings beside truth."""
    station = _station(patch, feature_cy_px)
    pattern = rng.standard_normal(pictures[0].shape)
    frames, shots = {}, []
    for stop, picture in zip(STOPS, pictures, strict=False):
        for number, frame in enumerate(take(picture, look, pattern, rng)):
            shots.append(Shot(f"f{stop:g}_{number}.png", stop, stop**2, 0.0, "target", len(shots)))
            frames[shots[-1].file] = frame
    sweep = measure_sweep(RenderedSweep(tuple(shots), frames, 12), station)
    read = [reading_of(sighting, station) for sighting in sweep.sightings]
    return [_row(r, blur, curve, look, feature_cy_px) for r, blur, curve in zip(read, blurs, curves, strict=True)]


def _station(patch: Patch, feature_cy_px: float) -> Station:
    return Station(
        station=StationName(name="one patch"),
        lens=Lens(focal_length_mm=16.0, stops=STOPS),
        camera=Camera(pixel_pitch_um=3.45, bit_depth=12, black_level_dn=BLACK_DN),
        scene=Scene(object_um_per_px=OBJECT_UM, wavelength_nm=530),
        targets=(Target(name="cap rim", depth_mm=0.0, patches=(patch,)),),
        need=Need(feature_um=OBJECT_UM / (2 * feature_cy_px), contrast=0.2, level=0.7, max_exposure_ms=100.0),
    )


def _row(read: Reading, blur: Blur, curve: Floats, look: Look, feature_cy_px: float) -> dict[str, object]:
    true = float(np.interp(feature_cy_px, FINE, curve))
    at_bars = read.kind == "bars"
    return {
        "kind": read.kind,
        "family": blur.family,
        "ok": read.ok,
        "why_not": ";".join(read.why_not),
        "true_half": first_half(FINE, curve),
        "half": read.mtf50_cy_px,
        "half_u": read.mtf50_cy_px_u,
        "feature_cy_px": feature_cy_px,
        "true_contrast": abs(true),
        "contrast": read.contrast_at_bars if at_bars else read.contrast_at_feature,
        "contrast_u": read.contrast_at_bars_u if at_bars else read.contrast_at_feature_u,
        "true_reversed": true < 0,
        "reversed": read.reversed,
        "snr_db": look.snr_db,
        "frames": look.frames,
        "ratio": look.light_dn / look.dark_dn,
        **dict.fromkeys(("room", "bend_px", "tilt_deg", "across_px", "along_px", "surround", "stated")),
    }


def tables(rows: pd.DataFrame) -> str:
    """Errors and uncertainties by kind and by circumstance; refusals."""
    rows = rows.assign(
        half_off=(rows.half / rows.true_half - 1) * 100,
        half_z=(rows.half - rows.true_half) / rows.half_u,
        contrast_off=rows.contrast - rows.true_contrast,
        contrast_z=(rows.contrast - rows.true_contrast) / rows.contrast_u,
    )
    edges = rows[rows.kind == "edge"]
    groups = [
        ("edges, all", edges),
        *((f"edges, {family}", edges[edges.family == family]) for family in FAMILIES),
        *(
            (f"edges, half modulation at {low:g} to {high:g} cycles/px", edges[edges.true_half.between(low, high)])
            for low, high in ((0.03, 0.08), (0.08, 0.2), (0.2, 0.5))
        ),
        *((f"edges, SNR {a} to {b} dB", edges[edges.snr_db.between(a, b)]) for a, b in ((20, 28), (28, 36), (36, 45))),
        ("edges, room of 1.5 spreads or less", edges[edges.room <= 1.5]),
        ("edges, room of more than 3 spreads", edges[edges.room > 3]),
        ("stars, all", rows[rows.kind == "star"]),
        ("stars, plain surround seen", rows[(rows.kind == "star") & (rows.surround == True)]),  # noqa: E712
        ("stars, modulation stated, no surround", rows[(rows.kind == "star") & (rows.surround == False)]),  # noqa: E712
        ("bars, all", rows[rows.kind == "bars"]),
    ]
    return "\n\n".join([_halves(groups), _contrasts(groups), _refused(rows), _signs(rows)])


def _halves(groups: Sequence[tuple[str, pd.DataFrame]]) -> str:
    lines = []
    for name, group in groups:
        known = group.dropna(subset=["half", "half_u", "true_half"])
        if len(known):
            z = known.half_z
            lines.append(
                [
                    name,
                    len(known),
                    f"{known.half_off.median():+.2f}",
                    f"{known.half_off.abs().median():.2f}",
                    f"{known.half_off.abs().quantile(0.95):.1f}",
                    rms(z),
                    share(int((z.abs() <= 2).sum()), len(z)),
                    f"{z.abs().max():.1f}",
                ]
            )
    head = [
        "half-modulation frequency",
        "readings",
        "bias %",
        "middle error %",
        "95 % below %",
        "rms error/u",
        "within 2u, %",
        "worst error/u",
    ]
    return table(head, lines)


def _contrasts(groups: Sequence[tuple[str, pd.DataFrame]]) -> str:
    lines = []
    for name, group in groups:
        known = group.dropna(subset=["contrast", "contrast_u"])
        if len(known):
            z = known.contrast_z
            lines.append(
                [
                    name,
                    len(known),
                    f"{known.contrast_off.median():+.4f}",
                    f"{known.contrast_off.abs().median():.4f}",
                    f"{known.contrast_off.abs().quantile(0.95):.3f}",
                    rms(z),
                    share(int((z.abs() <= 2).sum()), len(z)),
                    f"{z.abs().max():.1f}",
                ]
            )
    head = [
        "contrast (of 1)",
        "readings",
        "bias",
        "middle error",
        "95 % below",
        "rms error/u",
        "within 2u, %",
        "worst error/u",
    ]
    return table(head, lines)


def _refused(rows: pd.DataFrame) -> str:
    lines: list[list[object]] = []
    for kind, group in rows.groupby("kind"):
        refused = group[~group.ok]
        for codes, part in refused.groupby(refused.why_not.fillna("")):
            tight = f"{(part.room < 1.6).sum()}" if kind == "edge" else ""
            lines.append([f"{kind}, `{codes}`", share(len(part), len(group)), tight])
    return table(
        ["refused", "% of the readings", "of them with room for less than 1.6 spreads"], lines or [["none", 0, 0]]
    )


def _signs(rows: pd.DataFrame) -> str:
    known = rows[rows.ok & rows.contrast.notna() & (rows.kind != "bars")]
    clear = known[known.true_contrast > 4 * known.contrast_u]
    wrong = int((clear.true_reversed != clear.reversed).sum())
    return f"Reversed contrast told wrong, where it is clear of zero by 4u: {wrong} of {len(clear)} (edges and stars)."
