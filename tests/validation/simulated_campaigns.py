"""Invented campaigns whose truth is known, through the public functions to the statement.

Nothing is measured: the actuator, its four modes and its four kinds of population are made up.
"""

from dataclasses import asdict, dataclass

import numpy as np

from identkit import (
    bound_spread,
    choose_nominal,
    describe_population,
    fit_modes,
    pair_modes,
    screen,
    state_coverage,
)
from identkit.methods.modal_model import ModalParameters, modal_response
from identkit.plant_set.fields import FittedPlant
from identkit.stages.coverage import largest_reach_by_group
from identkit.stages.export import build_set
from identkit.stages.leave_one_out import leave_one_unit_out
from identkit.stages.model_coverage import model_statement, plants_inside
from identkit.stages.nominal import measured_lines
from identkit.stages.population_model import population_model
from identkit.stages.selection import HELD_OUT, held_out
from identkit.synthetic import InventedCampaign, InventedResponse, to_dataset

POPULATIONS = ("normal", "skewed", "lot-mixed", "slightly skewed")
UNITS, SHARE_HELD_OUT, POINTS = 24, 1.0 / 3.0, 250
BAND = (50.0, 15000.0)
CONTENT = CONFIDENCE = 0.9
FRESH = 2000
ORDER = 5

FREQUENCY = np.array([1240.0, 3420.0, 6310.0, 10650.0])
DAMPING = np.array([0.030, 0.022, 0.025, 0.020])
SHARE = np.array([0.05, -0.12, -0.40, -0.50])
BASE_FREQUENCY, BASE_DAMPING, BASE_RESIDUE, DELAY = 80.0, 0.4, 2.0e9, 1.0e-5
SPREAD = np.concatenate(
    [np.full(4, 0.008), np.full(4, 0.10), np.full(4, 0.06), [0.004, 0.03, 0.025]]
)
"""One sigma of log frequency, log damping, log residue of four modes; of the base and the gain."""
LOT_SIGNS = np.array([1, -1, 1, 1, 1, 1, -1, 1, -1, 1, 1, -1, 1, 1, 1.0])
LOT_SHARE = 0.9
"""Share of the variance that stands between both lots."""
AVERAGES, NOISE = 32, 0.02


@dataclass(frozen=True)
class CampaignOutcome:
    """What one campaign stated and what is true of its set.

    Attributes
    ----------
    population, seed
        Which campaign.
    true_content
        Share of the fresh units that the set holds.
    exact_content, exact_held, exact_units
        The statement from units held out.
    model_content, model_mean
        The statement from virtual units, and their mean share held.
    model_trusted, failed_checks
        Whether the checks let it stand, and which did not.
    left_out_held, left_out_units
        Leaving each unit out.
    """

    population: str
    seed: int
    true_content: float
    exact_content: float
    exact_held: int
    exact_units: int
    model_content: float
    model_mean: float
    model_trusted: bool
    failed_checks: tuple[str, ...]
    left_out_held: int
    left_out_units: int


def standardised(population: str, count: int, generator: np.random.Generator) -> np.ndarray:
    """Return (count, 15) unit effects of mean 0 and variance 1."""
    shape = (count, SPREAD.size)
    if population == "skewed":
        # exponential: skewness 2, and a hard end on one side
        return generator.standard_exponential(shape) - 1.0
    if population == "slightly skewed":
        # gamma of shape 4: skewness 1
        return (generator.standard_gamma(4.0, shape) - 4.0) / 2.0
    normal = generator.standard_normal(shape)
    if population == "lot-mixed":
        lot = np.where(generator.random(count) < 0.5, 1.0, -1.0)[:, None]
        return np.sqrt(LOT_SHARE) * lot * LOT_SIGNS + np.sqrt(1.0 - LOT_SHARE) * normal
    return normal


def draw_true_plants(
    population: str, count: int, generator: np.random.Generator
) -> list[ModalParameters]:
    """Draw units as they are, without noise."""
    effect = np.exp(SPREAD * standardised(population, count, generator))
    return [
        ModalParameters(
            modal_frequency=FREQUENCY * row[:4],
            damping_ratio=DAMPING * row[4:8],
            residue=SHARE * BASE_RESIDUE * row[8:12] * row[14],
            residue_rate=np.zeros(4),
            base="pivot",
            base_frequency=BASE_FREQUENCY * row[12],
            base_damping_ratio=BASE_DAMPING * row[13],
            base_residue=BASE_RESIDUE * row[14],
            feedthrough=-0.01 * row[14],
            delay=DELAY,
        )
        for row in effect
    ]


def measured(plants: list[ModalParameters], generator: np.random.Generator):
    """Return a responses dataset of the plants, one response per unit."""
    frequency = np.geomspace(*BAND, POINTS)
    responses = []
    for k, plant in enumerate(plants):
        truth = modal_response(frequency, plant)
        variance = (NOISE * np.abs(truth)) ** 2
        noise = generator.standard_normal((2, POINTS)) * np.sqrt(variance / 2.0)
        found = truth + noise[0] + 1j * noise[1]
        scatter = variance * generator.gamma(AVERAGES - 1, size=POINTS)
        coherence = np.abs(found) ** 2 / (np.abs(found) ** 2 + scatter)
        labels = {
            "unit": f"U{k + 1:02d}",
            "head": "0",
            "temperature": 25.0,
            "lot": "A",
            "measured_at": "2026-03-02",
        }
        responses.append(InventedResponse(labels, plant, found, coherence))
    data = to_dataset(InventedCampaign(frequency, AVERAGES, tuple(responses)))
    return data.drop_vars("lot")


def run_campaign(population: str, seed: int) -> CampaignOutcome:
    """Measure, fit, bound, state; then count fresh units."""
    generator = np.random.default_rng([seed, POPULATIONS.index(population)])
    responses = measured(draw_true_plants(population, UNITS, generator), generator)
    marks = screen(responses)
    fits = fit_modes(responses, marks, base="pivot", modes="auto", delay=True)
    modes = pair_modes(fits, responses, marks)
    kept_back = held_out(responses, {}, share=SHARE_HELD_OUT, seed=seed)
    out = dict.fromkeys(kept_back, HELD_OUT)
    population_found = describe_population(modes, leave_out=tuple(out))
    nominal = choose_nominal(modes, population_found, lines=measured_lines(responses), left_out=out)
    bound = bound_spread(modes, nominal, order=ORDER, left_out=out)
    plant_set = build_set(nominal, bound, modes)
    model = population_model(modes, population_found, leave_out=tuple(out))
    left_out = leave_one_unit_out(modes, nominal, bound, model)
    predicted = model_statement(
        plant_set, model, population_found, modes, left_out_reach=left_out.reach, seed=seed
    )
    stated = state_coverage(
        largest_reach_by_group(plant_set.plants, kept_back),
        content=CONTENT,
        confidence=CONFIDENCE,
        left_out=left_out,
        model=predicted,
    )
    fresh = [as_fitted(plant) for plant in draw_true_plants(population, FRESH, generator)]
    exact, by_model, tried = (stated[n] for n in ("exact", "model_based", "leave_one_out"))
    return CampaignOutcome(
        population,
        seed,
        float(plants_inside(plant_set, fresh).mean()),
        round(float(exact["content"]), 6),
        int(exact["held"]),
        int(exact["units"]),
        round(float(by_model["content"]), 6),
        round(float(by_model["expected"]), 6),
        bool(by_model["trusted"]),
        tuple(c["assumption"] for c in by_model["checks"] if not c["passed"]),
        int(tried["held"]),
        int(tried["units"]),
    )


def as_fitted(plant: ModalParameters) -> FittedPlant:
    """Return a true plant in the words of the set file."""
    return FittedPlant(
        response="fresh",
        modal_frequency=plant.modal_frequency,
        damping_ratio=plant.damping_ratio,
        residue=plant.residue[:, None, None],
        residue_rate=plant.residue_rate[:, None, None],
        base=plant.base,
        base_gain=np.zeros((1, 1)),
        base_frequency=plant.base_frequency,
        base_damping_ratio=plant.base_damping_ratio,
        base_residue=np.array([[plant.base_residue]]),
        feedthrough=np.array([[plant.feedthrough]]),
        delay=plant.delay,
    )


def plain(outcome: CampaignOutcome) -> dict[str, object]:
    """Return an outcome as it stands in the committed file."""
    return {**asdict(outcome), "failed_checks": list(outcome.failed_checks)}
