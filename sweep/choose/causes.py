"""What costs the worst place most: one cause taken away at a time, as a ratio of contrasts."""

from collections.abc import Sequence

from sweep.choose.candidates import Candidate, Pick
from sweep.choose.chances import TIE
from sweep.choose.evidence import Cause, LensView
from sweep.result import Limit

CAUSES: tuple[Cause, ...] = ("depth", "aberration", "diffraction", "sampling")


def limited_by(picked: Pick, candidates: Sequence[Candidate], lens: LensView | None) -> Limit | None:
    """What stands in the way of more contrast: a need that ruled out a sharper stop, else the costliest cause."""
    barred = ruled_out(picked, candidates)
    if barred is not None:
        return "exposure" if barred.setting.fails_exposure else "noise"
    losses = losses_at_worst(picked.best, lens)
    if not losses:
        return None
    costliest: Cause = max(losses, key=lambda cause: losses[cause])
    return costliest


def ruled_out(picked: Pick, candidates: Sequence[Candidate]) -> Candidate | None:
    """The sharpest readable stop that exposure or noise ruled out, where it is sharper by more than a tie.

    Where no stop keeps these needs it is the recommended one itself.
    """
    if picked.best.setting.fails:
        return picked.best
    barred = [c for c in candidates if c.readable and c.setting.fails]
    sharper = [c for c in barred if c.contrast > 0 and (1 - TIE) * c.contrast > picked.best.contrast]
    return max(sharper, key=lambda c: c.contrast, default=None)


def losses_at_worst(best: Candidate, lens: LensView | None) -> dict[Cause, float]:
    """The share of contrast at the worst place that each cause takes, 1 = all; empty without a lens model."""
    if lens is None or best.worst_place is None:
        return {}
    place = best.worst_place
    fitted = lens.contrast(best.index, place)
    return {cause: _loss(fitted, lens.contrast(best.index, place, without=cause)) for cause in CAUSES}


def _loss(fitted: float, without: float) -> float:
    """What a cause costs; a contrast that is lost or reversed has lost all."""
    if without == 0 or fitted / without <= 0:
        return 1.0
    return 1 - fitted / without
