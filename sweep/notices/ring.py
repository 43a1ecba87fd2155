"""Notices about the ring, by the light: where it stood at each stop, and whether it moved between frames."""

import itertools

import numpy as np

from sweep.light import Light
from sweep.notices.lamp import usual_ripple
from sweep.notices.thresholds import CERTAIN, FRAME_OFF_LN_LIGHT, RING_OFF_LN_N, SAME_LIGHT_LN_N
from sweep.notices.wording import mark
from sweep.readings import Sweep
from sweep.result import Note


def ring_notices(sweep: Sweep, light: Light) -> list[Note]:
    """Ring positions against the light: order, the same light twice, far from the mark, one frame off."""
    known = [k for k in range(len(sweep.stops)) if np.isfinite(light.f_number[k])]
    off = {k: float(np.log(light.f_number[k] / sweep.stops[k])) for k in known}
    out: list[Note] = []
    named: set[int] = set()
    for a, b in itertools.pairwise(known):
        step = float(np.log(light.f_number[b] / light.f_number[a]))
        wanted = float(np.log(sweep.stops[b] / sweep.stops[a]))
        sure = CERTAIN * float(np.hypot(light.ln_u[a], light.ln_u[b]))
        if step < -max(0.05, sure):
            named |= {a, b}
            out.append(
                Note(
                    "stop-order",
                    f"{mark(sweep.stops[b])} let more light through than {mark(sweep.stops[a])}: the labels are not in "
                    "the order of the light. Check the stop column of shots.csv against the ring.",
                )
            )
        elif abs(step) < min(SAME_LIGHT_LN_N, 0.3 * wanted):
            named |= {a, b}
            out.append(
                Note(
                    "light-unchanged",
                    f"{mark(sweep.stops[a])} and {mark(sweep.stops[b])} let the same light through (within "
                    f"{200 * abs(step):.1f} %): the ring was not turned, or files were mixed up. Take both again.",
                )
            )
    middle = float(np.median(list(off.values()))) if off else 0.0
    for k in known:
        if k in named or len(known) < 3:
            continue
        away = off[k] - middle
        if abs(away) > max(RING_OFF_LN_N, CERTAIN * float(light.ln_u[k])):
            out.append(
                Note(
                    "ring-off",
                    f"{mark(sweep.stops[k])}: by the light the ring stood at f/{sweep.stops[k] * np.exp(away):.3g}. "
                    "Come to the mark from the wide side and take this stop again.",
                )
            )
    return out


def stray_frame_notices(sweep: Sweep, light: Light) -> list[Note]:
    """Stops of which one frame caught another light than the rest: the ring moved in between."""
    usual = usual_ripple(light)
    out: list[Note] = []
    for k, stop in enumerate(sweep.stops):
        off = np.array([f.ln_off for f in light.frames if f.stop == k])
        if len(off) < 2:
            continue
        away = off - np.median(off) if len(off) > 2 else np.array([off[1] - off[0]])
        worst = float(away[np.argmax(np.abs(away))])
        rest = np.delete(off, int(np.argmax(np.abs(off - np.median(off))))) if len(off) > 2 else off[:1]
        if abs(worst) > max(FRAME_OFF_LN_LIGHT, 3.0 * float(np.ptp(rest)), 2.0 * CERTAIN * usual):
            out.append(
                Note(
                    "ring-off",
                    f"{mark(stop)}: one frame caught {100 * np.expm1(worst):+.0f} % light against the others of this "
                    "stop: the ring moved between frames. Take this stop again with the ring at rest.",
                )
            )
    return out
