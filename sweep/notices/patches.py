"""Notices about patches that can't be read as what they should be, and prints that are not straight."""

from collections import defaultdict
from collections.abc import Sequence

from sweep.measure.edge import EdgeMeasure
from sweep.notices.thresholds import BENT_PX, RAGGED_PX
from sweep.notices.wording import listed, mark
from sweep.readings import Sweep
from sweep.result import NOTE_CODES, Note, Reading
from sweep.station import Station


def patch_notices(sweep: Sweep, readings: Sequence[Reading], station: Station) -> list[Note]:
    """Patches that could not be read as what they should be; bent or ragged edges; features beyond Nyquist."""
    by_code: dict[str, dict[tuple[int, int], list[float]]] = defaultdict(lambda: defaultdict(list))
    for s in sweep.sightings:
        for code in s.why_not:
            if code in ("edge-angle", "edge-not-found", "pattern-not-found"):
                by_code[code][s.site.target, s.site.patch].append(s.stop)
    out: list[Note] = []
    for code, places in by_code.items():
        for (target, patch), stops in places.items():
            where = f"{station.targets[target].name}, patch {patch} at {listed(mark(k) for k in stops)}"
            out.append(Note(code, f"{where}: {NOTE_CODES[code].meaning} {NOTE_CODES[code].remedy}"))
    edges: dict[tuple[int, int], list[EdgeMeasure]] = defaultdict(list)
    for s in sweep.sightings:
        if s.ok and s.edge is not None:
            edges[s.site.target, s.site.patch].append(s.edge)
    for (target, patch), seen in edges.items():
        sharp = min(seen, key=lambda e: e.spread_px)
        if sharp.ragged_px > RAGGED_PX or sharp.bend_px > BENT_PX:
            out.append(
                Note(
                    "edge-not-straight",
                    f"{station.targets[target].name}, patch {patch}: the edge wanders by {sharp.ragged_px:.2f} px and "
                    f"bows by {sharp.bend_px:.1f} px. {NOTE_CODES['edge-not-straight'].remedy}",
                )
            )
    beyond = [r.target for r in readings if "beyond-nyquist" in r.why_not]
    if beyond:
        out.append(
            Note(
                "beyond-nyquist",
                f"A feature of {station.need.feature_um:g} um is finer than two pixels a period at {listed(beyond)}. "
                "Use a larger magnification or smaller pixels.",
            )
        )
    return out
