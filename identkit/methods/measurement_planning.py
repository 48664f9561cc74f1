"""How much more information a measurement needs, from the Cramer-Rao bound of a first one.

The covariance of an efficient estimate is the inverse of the Fisher information, and that grows in
proportion to record length and to the square of the amplitude (S. M. Kay, Fundamentals of
Statistical Signal Processing: Estimation Theory, Prentice Hall 1993, chapters 3 and 15; R. Pintelon
and J. Schoukens, System Identification, Wiley 2012, chapter 5). So a first response with its
covariance tells what any other length and amplitude will give.
"""

import numpy as np

from identkit.methods.arrays import FloatArray
from identkit.methods.modal_model import ModalParameters, modal_derivatives, modal_response


def relative_deviation(
    frequency: FloatArray, parameters: ModalParameters, covariance: FloatArray, *, general: bool
) -> FloatArray:
    """Return the standard deviation of a modelled response over its magnitude.

    Parameters
    ----------
    frequency
        (points,) Hz.
    parameters
        The fitted plant.
    covariance
        (p, p) in the order of `parameter_names`.
    general
        Whether residue rates count as parameters.

    Returns
    -------
    FloatArray
        (points,) sqrt(E|error|^2) / |response|, which is the error of a relative radius there.
    """
    slopes = modal_derivatives(frequency, parameters, general=general)
    variance = np.einsum("ki,ij,kj->k", slopes, covariance, slopes.conj()).real
    magnitude = np.abs(modal_response(frequency, parameters))
    return np.asarray(np.sqrt(np.maximum(variance, 0.0)) / magnitude)


def needed_gain(achieved: FloatArray, wanted: float) -> float:
    """Return the factor on the information that brings every standard error to the wanted one."""
    known = achieved[np.isfinite(achieved)]
    return float(np.max((known / wanted) ** 2)) if known.size else np.nan


def line_spacing(modal_frequency: FloatArray, damping_ratio: FloatArray, lines: float = 8) -> float:
    """Return the spacing, Hz, that puts so many lines in the narrowest half-power bandwidth."""
    return float(np.min(2.0 * damping_ratio * modal_frequency) / lines)
