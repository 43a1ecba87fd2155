"""Notices about the lens model: a focus that changed midway, readings that it does not describe."""

import numpy as np

from sweep.fit import LensFit
from sweep.notices.thresholds import CERTAIN, FOCUS_STEP_WAVES, MISFIT_CHI2, MISFIT_CONTRAST, SLIGHT_MISFIT
from sweep.notices.wording import mark
from sweep.outlook import Discrepancy
from sweep.readings import Sweep
from sweep.result import Note
from sweep.station import Station


def model_notices(fit: LensFit | None, discrepancy: Discrepancy, sweep: Sweep, station: Station) -> list[Note]:
    """A focus that changed midway, else a model that does not describe the readings, and where."""
    if fit is None:
        return []
    certain = [s for s in fit.focus_steps if abs(s.z) > 2.0 * CERTAIN and abs(s.waves) > FOCUS_STEP_WAVES]
    if certain:
        step = max(certain, key=lambda s: abs(s.z))
        return [
            Note(
                "focus-moved",
                f"From {mark(sweep.stops[step.stop])} on the focus lies {step.shift_mm:+.2g} mm elsewhere: the focus "
                "ring was touched. Lock it and take the sweep again.",
            )
        ]
    off = float(np.sqrt(np.mean(discrepancy.deviation**2))) if discrepancy.readings else 0.0
    if off < MISFIT_CONTRAST and (fit.reduced_chi2 < MISFIT_CHI2 or off < SLIGHT_MISFIT):
        return []
    worst = int(np.argmax(fit.misfit))
    view = fit.views[worst]
    return [
        Note(
            "model-misfit",
            f"The lens model is off the readings by {off:.3f} in contrast (reduced chi-square "
            f"{fit.reduced_chi2:.1f}), most at {mark(sweep.stops[view.stop])}, {station.targets[view.target].name}. "
            "Readings count for more than the model there; look for tilt, dirt, movement or processing.",
        )
    ]
