"""An invented measuring campaign of an invented head-positioning actuator, with its truth.

Nothing here is measured. The actuator, its modes, the lots, the cracked unit and the bench are made
up so that the demo, the tests and the benchmarks have responses whose truth is known.
"""

from dataclasses import dataclass, replace

import numpy as np
import xarray as xr

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.modal_model import ModalParameters, modal_response

REFERENCE_TEMPERATURE = 25.0
HEAD_SIGNS = np.array([1.0, 1.0, -1.0, -1.0])
"""Upper and lower heads see sway on opposite sides of the neutral line."""


@dataclass(frozen=True)
class InventedMode:
    """Design values of one mode at the reference temperature.

    Attributes
    ----------
    frequency
        Hz.
    damping_ratio
        1.
    share
        Residue as a share of the base residue, mean over heads.
    frequency_slope
        Relative change of the frequency per K.
    damping_slope
        Relative change of the damping ratio per K.
    sway
        Share added for upper heads and taken off for lower ones.
    """

    frequency: float
    damping_ratio: float
    share: float
    frequency_slope: float
    damping_slope: float
    sway: float = 0.0


MODES = (
    InventedMode(1240.0, 0.022, 0.030, -1.2e-4, 2.0e-3),
    InventedMode(3420.0, 0.017, -0.075, -2.0e-4, 3.0e-3),
    InventedMode(4780.0, 0.014, 0.160, -2.6e-4, 3.0e-3),
    InventedMode(6310.0, 0.020, -0.420, -3.2e-4, 4.0e-3),
    InventedMode(8260.0, 0.015, 0.170, -2.2e-4, 3.0e-3, sway=0.070),
    InventedMode(10650.0, 0.016, -0.520, -1.8e-4, 2.0e-3),
    InventedMode(13900.0, 0.013, 0.050, -2.8e-4, 3.0e-3, sway=0.110),
    InventedMode(18400.0, 0.021, 0.640, -2.4e-4, 4.0e-3),
)
BASE_FREQUENCY, BASE_DAMPING_RATIO, BASE_RESIDUE = 72.0, 0.42, 2.6e9
DELAY = 11e-6
FEEDTHROUGH = -0.45 * BASE_RESIDUE / (2.0 * np.pi * 31000.0) ** 2


@dataclass(frozen=True)
class InventedSpread:
    """One-sigma relative spread of the population (delay in s)."""

    unit_frequency: float = 0.0060
    head_frequency: float = 0.0022
    unit_damping: float = 0.10
    head_damping: float = 0.05
    unit_residue: float = 0.06
    head_residue: float = 0.03
    unit_gain: float = 0.025
    unit_delay: float = 0.25e-6


@dataclass(frozen=True)
class InventedBench:
    """How the invented bench measures.

    Attributes
    ----------
    band
        Lowest and highest frequency, Hz; lines are spaced evenly in log frequency.
    points
        Number of lines.
    averages
        Number of averages behind every line.
    relative_noise
        Standard error of a line relative to the response.
    floor
        Standard error of a line however small the response, um/A.
    """

    band: tuple[float, float] = (50.0, 22000.0)
    points: int = 1200
    averages: int = 32
    relative_noise: float = 0.02
    floor: float = 5.0e-3


@dataclass(frozen=True)
class InventedResponse:
    """One response of the campaign: labels, true plant, what the bench recorded."""

    labels: dict[str, str | float]
    plant: ModalParameters
    frequency_response: ComplexArray
    coherence: FloatArray


@dataclass(frozen=True)
class InventedCampaign:
    """Everything the bench recorded and the truth behind it."""

    frequency: FloatArray
    averages: int
    responses: tuple[InventedResponse, ...]


@dataclass(frozen=True)
class Story:
    """What is odd in the campaign, by unit.

    Attributes
    ----------
    odd_lot
        Lot whose third mode stands higher and stronger.
    cracked_unit
        Unit whose arm is cracked.
    """

    odd_lot: str = "C"
    cracked_unit: str = "U13"
    odd_frequency: float = 1.030
    odd_residue: float = 1.5
    crack_frequency: float = 0.92


LOTS = ("A", "B", "C", "D")
LOT_DATES = ("2026-03-02", "2026-03-16", "2026-04-06", "2026-04-20")


def invent_campaign(
    *,
    seed: int = 1,
    units: int = 24,
    heads: int = 4,
    temperatures: tuple[float, ...] = (10.0, 25.0, 50.0),
    bench: InventedBench | None = None,
    spread: InventedSpread | None = None,
    story: Story | None = None,
) -> InventedCampaign:
    """Draw a population of units and measure every head at every temperature.

    Parameters
    ----------
    seed
        Of the random numbers; the same seed gives the same campaign.
    units, heads
        How many units, and how many heads each has.
    temperatures
        degC.
    bench, spread, story
        Noise and grid; one-sigma spread; what is odd. Defaults are the demo's.

    Returns
    -------
    InventedCampaign
        One response per unit, head and temperature, with its true plant.
    """
    bench = bench or InventedBench()
    story = story or Story()
    generator = np.random.default_rng(seed)
    frequency = np.geomspace(*bench.band, bench.points)
    responses = []
    for unit in range(units):
        for labels, plant in _unit_plants(
            unit, units, heads, temperatures, spread or InventedSpread(), story, generator
        ):
            measured, coherence = _measure(frequency, plant, bench, generator)
            responses.append(InventedResponse(labels, plant, measured, coherence))
    return InventedCampaign(frequency, bench.averages, tuple(responses))


def _unit_plants(
    unit: int,
    units: int,
    heads: int,
    temperatures: tuple[float, ...],
    spread: InventedSpread,
    story: Story,
    generator: np.random.Generator,
) -> list[tuple[dict[str, str | float], ModalParameters]]:
    name, lot = f"U{unit + 1:02d}", LOTS[unit * len(LOTS) // units]
    of_unit = _draw(generator, spread.unit_frequency, spread.unit_damping, spread.unit_residue)
    gain = float(np.exp(spread.unit_gain * generator.standard_normal()))
    delay = DELAY + spread.unit_delay * float(generator.standard_normal())
    plants: list[tuple[dict[str, str | float], ModalParameters]] = []
    for head in range(heads):
        of_head = _draw(generator, spread.head_frequency, spread.head_damping, spread.head_residue)
        sign = float(HEAD_SIGNS[head % len(HEAD_SIGNS)])
        for temperature in temperatures:
            labels: dict[str, str | float] = {
                "unit": name,
                "head": str(head),
                "temperature": float(temperature),
                "lot": lot,
                "measured_at": LOT_DATES[LOTS.index(lot)],
            }
            plant = _plant(of_unit * of_head, sign, temperature - REFERENCE_TEMPERATURE, delay)
            plant = _scaled(plant, gain)
            if lot == story.odd_lot:
                plant = _odd_third_mode(plant, story)
            if name == story.cracked_unit:
                plant = _cracked(plant, story)
            plants.append((labels, plant))
    return plants


def _draw(generator: np.random.Generator, *sigmas: float) -> FloatArray:
    """Return (3, modes) log-normal factors on frequency, damping and residue."""
    draws = generator.standard_normal((3, len(MODES)))
    return np.asarray(np.exp(np.array(sigmas)[:, None] * draws), dtype=float)


def _plant(
    factors: FloatArray, sign: float, temperature_step: float, delay: float
) -> ModalParameters:
    frequency = np.array(
        [m.frequency * (1.0 + m.frequency_slope * temperature_step) for m in MODES]
    )
    damping = np.array(
        [m.damping_ratio * (1.0 + m.damping_slope * temperature_step) for m in MODES]
    )
    residue = np.array([m.share + sign * m.sway for m in MODES]) * BASE_RESIDUE
    return ModalParameters(
        modal_frequency=frequency * factors[0],
        damping_ratio=damping * factors[1],
        residue=residue * factors[2],
        residue_rate=np.zeros(len(MODES)),
        base="pivot",
        base_frequency=BASE_FREQUENCY * (1.0 - 6e-4 * temperature_step),
        base_damping_ratio=BASE_DAMPING_RATIO * (1.0 - 2e-3 * temperature_step),
        base_residue=BASE_RESIDUE,
        feedthrough=FEEDTHROUGH,
        delay=delay,
    )


def _scaled(plant: ModalParameters, gain: float) -> ModalParameters:
    return replace(
        plant,
        residue=gain * plant.residue,
        base_residue=gain * plant.base_residue,
        feedthrough=gain * plant.feedthrough,
    )


def _odd_third_mode(plant: ModalParameters, story: Story) -> ModalParameters:
    frequency, residue = plant.modal_frequency.copy(), plant.residue.copy()
    frequency[2] *= story.odd_frequency
    residue[2] *= story.odd_residue
    return replace(plant, modal_frequency=frequency, residue=residue)


def _cracked(plant: ModalParameters, story: Story) -> ModalParameters:
    frequency, damping = plant.modal_frequency.copy(), plant.damping_ratio.copy()
    frequency[[1, 3]] *= story.crack_frequency
    damping[[1, 3]] *= 1.8
    extra = 0.12 * plant.base_residue
    return replace(
        plant,
        modal_frequency=np.append(frequency, 7150.0),
        damping_ratio=np.append(damping, 0.02),
        residue=np.append(plant.residue, extra),
        residue_rate=np.append(plant.residue_rate, 0.0),
    )


def _measure(
    frequency: FloatArray,
    plant: ModalParameters,
    bench: InventedBench,
    generator: np.random.Generator,
) -> tuple[ComplexArray, FloatArray]:
    """Return the averaged response and its coherence for a constant-amplitude excitation."""
    truth = modal_response(frequency, plant)
    variance = (bench.relative_noise * np.abs(truth)) ** 2 + bench.floor**2
    error = generator.standard_normal((2, frequency.size)) * np.sqrt(variance / 2.0)
    measured = truth + error[0] + 1j * error[1]
    # what is left of the output after the linear part, independent of the mean (Cochran 1934)
    scatter = variance * generator.gamma(bench.averages - 1, size=frequency.size)
    power = np.abs(measured) ** 2
    return measured, power / (power + scatter)


def to_dataset(campaign: InventedCampaign) -> xr.Dataset:
    """Return the campaign as a responses dataset, as if its files had been read."""
    responses = campaign.responses
    measured = np.array([r.frequency_response for r in responses])[:, None, None, :]
    coherence = np.array([r.coherence for r in responses])[:, None, None, :]
    dims = ("response", "output", "input", "frequency")
    variance = np.abs(measured) ** 2 * (1.0 - coherence) / (coherence * (campaign.averages - 1))
    labels = {
        key: ("response", np.array([r.labels[key] for r in responses]))
        for key in responses[0].labels
    }
    return xr.Dataset(
        {
            "frequency_response": (dims, measured),
            "frequency_response_variance": (dims, variance),
            "coherence": (dims, coherence),
            "averages": ("response", np.full(len(responses), campaign.averages)),
            "usable_mask": (dims, np.ones(measured.shape, dtype=bool)),
        },
        coords={
            "response": [response_name(r.labels) for r in responses],
            "output": ["position"],
            "input": ["drive"],
            "frequency": campaign.frequency,
            "source": ("response", [f"{response_name(r.labels)}.csv" for r in responses]),
            **labels,
        },
        attrs={
            "sample_period": 0.0,
            "hold": "zero-order",
            "input_unit": "A",
            "output_unit": "um",
            "variance_source": "coherence",
            "skipped_files": "[]",
        },
    )


FILE_PATTERN = "bench/lot-{lot}_{measured_at}/{unit}_H{head}_{temperature:g}C.csv"


def response_name(labels: dict[str, str | float]) -> str:
    """Return the path of a response below the bench folder, without its ending."""
    relative = FILE_PATTERN.format(**labels).removeprefix("bench/")
    return relative.removesuffix(".csv")
