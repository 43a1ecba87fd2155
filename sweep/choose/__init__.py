"""Which stop, exposure and gain to use, how sure that is, and what stands in the way.

    evidence  the records that go in        between  the optimum between the marks
    settings  exposure, gain and noise      causes   what costs the contrast
    chances   the worst place, with draws   cures    what falls short and what would cure it
    candidates  the stops, and the order    focus    where to set the focus
    reasons   the answer in sentences       wording  numbers as people read them
    depths    the map over depth and stop, and the smallest detectable feature

See docs/choice.md for how each number is made. Pure and deterministic: the only randomness is in the draws given.
"""

from collections.abc import Sequence

from sweep.choose.between import between_marks, optimum_f_number
from sweep.choose.candidates import as_stop, candidates_of, pick
from sweep.choose.causes import limited_by, losses_at_worst
from sweep.choose.cures import shortfalls
from sweep.choose.depths import depth_map
from sweep.choose.evidence import Cause, DepthView, LensView, Outlook, Place, StopEvidence
from sweep.choose.focus import best_refocus
from sweep.choose.reasons import notes, reasons
from sweep.result import CameraNoise, Note, Recommendation, Stop
from sweep.station import Station

NOTHING_SOUND = (
    "No stop has a sound reading at every target, so none can be recommended; the warnings say what to take again."
)

__all__ = ["Cause", "DepthView", "LensView", "Outlook", "Place", "StopEvidence", "choose", "depth_map"]


def choose(
    station: Station,
    evidence: Sequence[StopEvidence],
    camera: CameraNoise,
    outlook: Outlook,
    lens: LensView | None,
) -> tuple[Recommendation, tuple[Stop, ...], tuple[Note, ...]]:
    """The stop to use, by the worst place, among those that keep exposure, gain and noise.

    `evidence` has one entry for each row of `outlook.contrast`; its order does not matter to the choice.
    Returns the recommendation (its `stop` None where no stop has a sound reading), every stop in the order given, and
    the warnings of the choice. `lens` is only asked for causes and cures.
    """
    if len(evidence) != outlook.contrast.shape[0]:
        raise ValueError(f"{len(evidence)} stops of evidence, {outlook.contrast.shape[0]} rows of contrast")
    candidates = candidates_of(station, evidence, camera, outlook)
    stops = tuple(as_stop(c) for c in candidates)
    # From here on widest first, so that nothing hangs on the order of the input.
    candidates = tuple(sorted(candidates, key=lambda c: (c.f_number, c.evidence.stop)))
    optimum = optimum_f_number(outlook)
    picked = pick(candidates)
    warned = notes(picked, candidates, station, camera, outlook)
    if picked is None:
        return Recommendation(None, None, None, False, None, None, optimum, (), (NOTHING_SOUND,)), stops, warned
    best = picked.best
    losses = losses_at_worst(best, lens)
    between = between_marks(best, candidates, station, camera, outlook)
    refocus = None
    if lens is not None and "contrast" not in best.why_not:
        refocus = best_refocus(lens, best.index, best.f_number, outlook.places, best.blur, station)
    recommendation = Recommendation(
        stop=best.evidence.stop,
        exposure_ms=best.setting.exposure_ms,
        gain_db=best.setting.gain_db,
        meets_need=best.meets_need,
        limited_by=limited_by(picked, candidates, lens),
        chance_best=best.chance_best,
        optimum_f_number=optimum,
        reasons=reasons(picked, candidates, station, losses, between, refocus),
        shortfalls=() if best.meets_need else shortfalls(picked, candidates, station, camera, outlook, lens),
    )
    return recommendation, stops, warned
