"""Outcome codes of batched work: each owns what happened, the likely cause and what to try."""

from dataclasses import dataclass
from enum import IntEnum


class Outcome(IntEnum):
    """How the work on one element of a batch ended; stored as a small integer."""

    DONE = 0
    NOT_CONVERGED = 1
    SINGULAR_COVARIANCE = 2
    MODE_OUT_OF_BAND = 3
    TOO_FEW_POINTS = 4
    NO_MODES = 5
    NOT_FINITE = 6
    NOT_FITTED = 7
    MODE_LIMIT = 8
    MODE_MISSING = 10
    MODE_EXTRA = 11
    MODE_BELOW_SIGNIFICANCE = 12
    MODE_CROSSING = 13
    MODE_SHIFTED = 14


@dataclass(frozen=True)
class Advice:
    """What an outcome code means to the person who reads it."""

    happened: str
    cause: str
    try_next: str


ADVICE: dict[Outcome, Advice] = {
    Outcome.DONE: Advice("done", "", ""),
    Outcome.NOT_CONVERGED: Advice(
        "the fit did not settle within its iterations",
        "the response does not follow the modal model, or its variance is stated far too small",
        "look at the response; set [model] modes to a number, or try another base",
    ),
    Outcome.SINGULAR_COVARIANCE: Advice(
        "two parameters cannot be told apart from this response",
        "two modes closer than the frequency grid resolves, or a mode without data on it",
        "measure with a finer grid around the close pair, or ask for fewer modes",
    ),
    Outcome.MODE_OUT_OF_BAND: Advice(
        "a mode settled outside the measured band",
        "a resonance just beyond the band, or a slow trend taken for one",
        "widen the band, or read the mode as a correction of the response near the edge",
    ),
    Outcome.TOO_FEW_POINTS: Advice(
        "fewer usable points than the model has parameters",
        "most of the response was masked by screening, or the file is short",
        "measure more lines, widen [responses] band, or relax [screen]",
    ),
    Outcome.NO_MODES: Advice(
        "no mode stands out of the noise",
        "the response is noise, or its variance is stated far too large",
        "check excitation and sensor; compare the stated variance with repeats",
    ),
    Outcome.NOT_FINITE: Advice(
        "the response holds values that are not finite numbers",
        "a damaged file or a division by zero on the bench",
        "measure again or leave the response out",
    ),
    Outcome.NOT_FITTED: Advice(
        "the response was not fitted",
        "screening marked it and the settings leave such responses out",
        "see the reason in the screening table",
    ),
    Outcome.MODE_LIMIT: Advice(
        "the automatic number of modes reached its cap",
        "the response does not follow the modal model, or its variance is stated far too small",
        "compare the noise ratio with 1; set [model] modes to a number, or try general residues",
    ),
    Outcome.MODE_MISSING: Advice(
        "a mode of the population was not found in this response",
        "its residue is lost in the noise, or the mode is really absent",
        "average longer on this response; look at it beside its peers",
    ),
    Outcome.MODE_EXTRA: Advice(
        "a mode of this response belongs to no mode of the population",
        "a defect of this unit, or noise taken for a mode",
        "look at the response beside its peers; inspect the unit",
    ),
    Outcome.MODE_BELOW_SIGNIFICANCE: Advice(
        "the mode is kept but its interval is not reliable",
        "its residue is less than five standard errors",
        "average longer, or do not rest a decision on this value",
    ),
    Outcome.MODE_CROSSING: Advice(
        "two modes of this response stand in another order than in the population",
        "their frequencies move differently with temperature or between units",
        "none needed; check the pairing figure if the two look alike",
    ),
    Outcome.MODE_SHIFTED: Advice(
        "the mode stands far from where the population has it",
        "damage or another build of this unit; it is the only candidate left for the name",
        "inspect the unit; the mode is kept out of the population's spread",
    ),
}


def slug(code: int) -> str:
    """Return the word that stands for an outcome code in tables and CSV files."""
    return Outcome(code).name.lower().replace("_", "-")
