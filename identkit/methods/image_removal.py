"""A continuous response from a sampled one: images removed by means of a modal model.

Samples of a held plant carry, besides the hold, the plant's images above half the rate
(`hold_division`; K. J. Astrom and B. Wittenmark, Computer-Controlled Systems, Prentice Hall,
chapter 7). A modal model fitted to the response gives them exactly (`held_modal_model`); they are
subtracted, the model is fitted again, and so on until they stand still: a fixed-point iteration
whose error shrinks by the images' share each time. Only the images come from the model, so what it
misses in the response itself stays in the response.
"""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.held_modal_model import held_response
from identkit.methods.hold_division import hold_response, image_bound
from identkit.methods.modal_fit import fit_modal_model
from identkit.methods.modal_least_squares import ModalFit, refine_modal_model
from identkit.methods.modal_model import modal_response
from identkit.outcomes import Outcome

_ROUNDS = 8
_STILL = 0.1


@dataclass(frozen=True)
class WithoutImages:
    """A response free of hold and images.

    Attributes
    ----------
    response
        (lines,) as of the continuous plant, its delay still in it.
    last_change
        (lines,) by how much the last round still moved it: what is left of the images.
    noise_ratio
        Reduced chi^2 of the last fit; far above 1 the model, and so the images, are doubtful.
    """

    response: ComplexArray
    last_change: FloatArray
    noise_ratio: float


def remove_images(
    frequency: FloatArray,
    sampled: ComplexArray,
    variance: FloatArray,
    period: float,
    *,
    base: str = "pivot",
    residues: str = "real",
) -> WithoutImages | None:
    """Remove hold and images from the response of samples.

    Parameters
    ----------
    frequency
        (lines,) Hz, below half the sampling rate.
    sampled
        (lines,) response of the position samples to the drive samples.
    variance
        (lines,) E|error|^2 of it.
    period
        Of hold and sampler, s.
    base, residues
        As in `fit_modal_model`.

    Returns
    -------
    WithoutImages or None
        None where the model cannot be fitted.

    Notes
    -----
    Does not apply when the plant has resonances above half the sampling rate that are not small,
    or when the drive is updated more often than the position is sampled.
    """
    hold = hold_response(frequency, period)
    response, scatter = sampled / hold, variance / np.abs(hold) ** 2
    doubt = image_bound(frequency, response, period) ** 2
    fit = fit_modal_model(frequency, response, scatter + doubt, base=base, residues=residues)
    change = np.sqrt(doubt)
    for round_number in range(_ROUNDS):
        if not _usable(fit):
            return None
        images = held_response(frequency, fit.parameters, period) / hold
        without = sampled / hold - (images - modal_response(frequency, fit.parameters))
        change = np.abs(without - response)
        response = without
        if round_number > 1 and np.all(change**2 <= _STILL**2 * scatter):
            break
        if round_number < 2:
            fit = fit_modal_model(frequency, response, scatter, base=base, residues=residues)
        else:
            fit = refine_modal_model(frequency, response, scatter, fit.parameters)
    return WithoutImages(response, change, fit.noise_ratio)


def _usable(fit: ModalFit) -> bool:
    return fit.outcome in (Outcome.DONE, Outcome.SINGULAR_COVARIANCE, Outcome.MODE_LIMIT)
