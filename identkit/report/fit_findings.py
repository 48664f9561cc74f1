"""Sentences about how well the fits stand for the measurements."""

import numpy as np

from identkit.report.contents import ReportInput
from identkit.report.numbers import counted, percent

POORLY_EXPLAINED = 0.1
"""Relative rms rest of a response above which its fit is no stand-in for it."""
NOISE_RATIO = 2.0
"""Reduced chi^2 above which noise as stated does not account for the rest."""


def variance_sentence(given: ReportInput) -> str:
    """Say where the variance of the points came from when nobody stated it."""
    if given.fits is None or given.fits.attrs.get("variance_source") != "residuals":
        return ""
    return (
        "No variance of the points was given, so it was estimated from what the fits leave: error "
        "bars and noise allowances rest on the modal model."
    )


def poor_fits_sentence(given: ReportInput) -> str:
    """Warn where fits leave more of the responses than noise explains."""
    modes = given.modes
    if modes is None or "unexplained_share" not in modes or "noise_ratio" not in modes:
        return ""
    left, noise = modes["unexplained_share"].values, modes["noise_ratio"].values
    poor = (left > POORLY_EXPLAINED) & ~(noise <= NOISE_RATIO)
    if not poor.any():
        return ""
    worst = int(np.nanargmax(np.where(poor, left, np.nan)))
    return (
        f"{counted(int(poor.sum()), 'fit')} of {left.size} leave more than "
        f"{percent(POORLY_EXPLAINED)} of the response unexplained (rms; most, "
        f"{percent(float(left[worst]))}, {modes['response'].values[worst]}): the set holds the "
        f"fitted plants, so look at those fits before relying on it."
    )
