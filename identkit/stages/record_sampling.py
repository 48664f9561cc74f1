"""From the response of samples to that of the plant: filter, hold, images and delay."""

from dataclasses import dataclass

import numpy as np

from identkit.errors import InputError, Problem
from identkit.methods.arrays import BoolArray, ComplexArray, FloatArray
from identkit.methods.hold_division import hold_response, image_bound
from identkit.methods.image_removal import remove_images
from identkit.methods.instrumental_response import EstimatedResponse
from identkit.settings_records import RecordSettings

WORST_NOISE_RATIO = 2.0
Filter = tuple[FloatArray, ComplexArray]


@dataclass(frozen=True)
class PlantModel:
    """The modal model that gives the images: [model] base and residues."""

    base: str = "pivot"
    residues: str = "real"


@dataclass(frozen=True)
class PlantEstimate:
    """A response with what stands between plant and samples taken out.

    Attributes
    ----------
    frequency
        (lines,) Hz, between 0 and half the sampling rate.
    response, variance
        (outputs, inputs, lines).
    image_error
        (outputs, inputs, lines) what images may still add to the response.
    usable
        (outputs, inputs, lines).
    coherence
        (outputs, lines).
    hold
        What was done about the hold.
    """

    frequency: FloatArray
    response: ComplexArray
    variance: FloatArray
    image_error: FloatArray
    usable: BoolArray
    coherence: FloatArray
    hold: str


def plant_estimate(
    estimate: EstimatedResponse,
    options: RecordSettings,
    model: PlantModel,
    anti_alias: Filter | None = None,
) -> PlantEstimate:
    """Take filter, hold, images and computational delay out of a response of samples.

    Raises
    ------
    InputError
        If the filter is not known over all lines.
    """
    edge = 0.5 / options.sample_period * (1.0 - 1e-9)
    lines = (estimate.frequency > 0.0) & (estimate.frequency < edge)
    frequency = estimate.frequency[lines]
    response = np.moveaxis(estimate.response[lines], 0, -1)
    variance = np.moveaxis(estimate.variance[lines], 0, -1)
    if anti_alias is not None:
        between = _interpolated(anti_alias, frequency)
        response, variance = response / between, variance / np.abs(between) ** 2
    usable = np.isfinite(response) & np.isfinite(variance) & (variance > 0.0)
    usable = usable & ~estimate.weak[lines]
    image, words = np.zeros(response.shape), "kept"
    if options.hold != "kept":
        response, variance, image, words = _without_hold(
            frequency, response, variance, usable, options, model, anti_alias is None
        )
        turn = np.exp(2j * np.pi * frequency * options.computational_delay)
        response = response * turn
        with np.errstate(invalid="ignore"):
            usable = usable & (image <= np.sqrt(variance))
    return PlantEstimate(
        frequency, response, variance, image, usable, estimate.coherence[lines].T, words
    )


def _without_hold(
    frequency: FloatArray,
    response: ComplexArray,
    variance: FloatArray,
    usable: BoolArray,
    options: RecordSettings,
    model: PlantModel,
    images_known: bool,
) -> tuple[ComplexArray, FloatArray, FloatArray, str]:
    """Divide the hold out and, where they can be known, take the images off, by channels."""
    hold_period = options.sample_period / options.drive_updates
    hold = hold_response(frequency, hold_period)
    divided, scatter = response / hold, variance / np.abs(hold) ** 2
    image = np.zeros(response.shape)
    modelled = options.hold == "modelled" and images_known and options.drive_updates == 1
    words = "divided"
    for place in np.ndindex(response.shape[:2]):
        good = usable[place]
        if not good.any():
            continue
        found = None
        if modelled:
            found = remove_images(
                frequency[good],
                response[place][good],
                variance[place][good],
                options.sample_period,
                base=model.base,
                residues=model.residues,
            )
        if found is not None and found.noise_ratio <= WORST_NOISE_RATIO:
            divided[place][good], image[place][good] = found.response, found.last_change
            words = "divided, images removed by a modal model"
        else:
            image[place][good] = image_bound(
                frequency[good], divided[place][good], options.sample_period, hold_period
            )
    return divided, scatter, image, words


def _interpolated(anti_alias: Filter, frequency: FloatArray) -> ComplexArray:
    known, response = anti_alias
    if frequency[0] < known[0] or frequency[-1] > known[-1]:
        found = f"the filter from {known[0]:g} to {known[-1]:g} Hz"
        expected = f"at least {frequency[0]:g} to {frequency[-1]:g} Hz"
        raise InputError(Problem("[records] anti_alias", found, expected))
    magnitude = np.interp(frequency, known, np.log(np.abs(response)))
    phase = np.interp(frequency, known, np.unwrap(np.angle(response)))
    return np.asarray(np.exp(magnitude + 1j * phase))
