"""Readings -> lens model: one least-squares fit over the profiles of all stops, targets and patches.

    problem    the data, the parameters and what is known of them beforehand
    model      from parameters to transfer curves and their slopes
    residuals  model less data, what is linear projected out
    starts     where to begin
    solve      the fit
    fitted     the fitted lens

Edges enter with their spread functions, stars and bars with their amplitudes, the light with each ring position's
f-number. Levels, position and light gradient of an edge are linear and are projected out (variable projection, Golub
and Pereyra, SIAM J. Numer. Anal. 10, 413-432, 1973); the scale of a star or bar print is a parameter of its own. Weak
priors keep small what is small in a sound lens. The solver is MINPACK's Levenberg-Marquardt with the derivatives given.
"""

from sweep.fit.fitted import FocusStep, LensFit
from sweep.fit.model import Frequencies, Optics, transfer, transfer_slopes
from sweep.fit.problem import AmplitudeData, EdgeData, Problem, StopLight, View
from sweep.fit.solve import fit_lens

__all__ = [
    "AmplitudeData",
    "EdgeData",
    "FocusStep",
    "Frequencies",
    "LensFit",
    "Optics",
    "Problem",
    "StopLight",
    "View",
    "fit_lens",
    "transfer",
    "transfer_slopes",
]
