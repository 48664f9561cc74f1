from dataclasses import replace

import numpy as np
import pytest

from identkit.errors import InputError
from identkit.forms.between_points import largest_ratio, peaks_above
from identkit.forms.comparison import CommonPart, PlantComparison
from identkit.forms.multiplicative import MULTIPLICATIVE, accepts, relative_errors
from identkit.forms.nominal_plant import NominalPlant
from identkit.methods.magnitude_weight import MagnitudeWeight
from identkit.methods.modal_model import ModalParameters, modal_response
from identkit.methods.resonance_grid import resonance_grid
from identkit.methods.state_space import frequency_response
from tests.methods.families import family, plant

BAND = (50.0, 22e3)


def weight(zeros: list[complex], poles: list[complex], gain: float) -> MagnitudeWeight:
    z, p = (2.0 * np.pi * np.array(roots, dtype=complex) for roots in (zeros, poles))
    return MagnitudeWeight(len(zeros), 0.0, 0.0, 0.0, 0.0, p, z, gain, 0)


def sample_weight() -> MagnitudeWeight:
    pair = 4000.0 * np.exp(1j * 1.9)
    other = 4500.0 * np.exp(1j * 1.8)
    return weight([-300.0, pair, pair.conjugate()], [-40e3, other, other.conjugate()], 8.0)


def test_nominal_matrices_have_the_nominal_response() -> None:
    nominal = NominalPlant(plant(), 3)
    grid = np.geomspace(*BAND, 500)
    found = frequency_response(nominal.realisation(), grid)[:, 0, 0]
    np.testing.assert_allclose(found, nominal.response(grid), rtol=1e-8)


def test_relative_errors_are_plain_ratios_with_exact_delays() -> None:
    nominal, plants = NominalPlant(plant(), 4), family(3, 1)
    grid = np.geomspace(*BAND, 50)
    found = relative_errors(grid, plants, nominal)
    centre = frequency_response(nominal.realisation(), grid)[:, 0, 0]
    for row, one in zip(found, plants, strict=True):
        np.testing.assert_allclose(row, modal_response(grid, one) / centre - 1.0, rtol=1e-5)


@pytest.mark.parametrize("base", ["pivot", "free", "none"])
def test_largest_ratio_against_a_dense_grid(base: str) -> None:
    common = CommonPart(NominalPlant(plant(base=base), 3), *BAND, MULTIPLICATIVE)
    weighting = sample_weight()
    dense = np.geomspace(*BAND, 40001)
    for one in family(6, 3, base=base):
        comparison = PlantComparison(one, common)
        ratio = comparison.ratio(dense, weighting)
        for start in (60.0, float(dense[np.argmax(ratio)])):
            found = largest_ratio(comparison, weighting, start)
            assert found.ratio >= ratio.max() * (1.0 - 1e-7)
            assert found.ratio == pytest.approx(ratio.max(), rel=1e-3)
            at = comparison.ratio(np.array([found.frequency]), weighting)[0]
            assert at == pytest.approx(found.ratio, rel=1e-12)


@pytest.mark.parametrize("level", [0.2, 1.0, 3.0])
def test_one_peak_for_every_interval_above_a_level(level: float) -> None:
    common = CommonPart(NominalPlant(plant(), 3), *BAND, MULTIPLICATIVE)
    weighting = sample_weight()
    dense = np.geomspace(*BAND, 60001)
    for one in family(6, 8):
        comparison = PlantComparison(one, common)
        above = comparison.ratio(dense, weighting) > level
        edges = np.flatnonzero(np.diff(np.concatenate([[0], above.astype(int), [0]])))
        peaks = np.array([p.frequency for p in peaks_above(comparison, weighting, level)])
        for first, last in edges.reshape(-1, 2):
            inside = (peaks >= dense[max(first - 1, 0)]) & (peaks <= dense[min(last, 60000)])
            assert inside.any()


def test_plant_equal_to_the_nominal_but_for_the_stand_in_of_its_delay() -> None:
    # What is left is the all-pass error of the nominal alone, far below the weight.
    common = CommonPart(NominalPlant(plant(), 5), *BAND, MULTIPLICATIVE)
    weighting = sample_weight()
    found = largest_ratio(PlantComparison(plant(), common), weighting, 1000.0)
    assert found.ratio < 1e-4


def test_right_half_plane_delay_and_overdamped_pivot_are_fine() -> None:
    odd = replace(plant(), delay=-2e-6, base_damping_ratio=1.0)
    common = CommonPart(NominalPlant(plant(), 3), *BAND, MULTIPLICATIVE)
    weighting = sample_weight()
    comparison = PlantComparison(odd, common)
    dense = np.geomspace(*BAND, 40001)
    found = largest_ratio(comparison, weighting, 100.0)
    assert found.ratio == pytest.approx(comparison.ratio(dense, weighting).max(), rel=1e-4)


def test_only_scalar_plants_are_accepted() -> None:
    accepts(1, 1)
    with pytest.raises(InputError, match="2 outputs and 1 inputs"):
        accepts(2, 1)


def hard_pair(rng: np.random.Generator) -> tuple[ModalParameters, ModalParameters]:
    """Return a nominal with up to 19 modes, damping down to 1e-4, and a plant near it."""
    modes = int(rng.integers(1, 20))
    frequency = np.sort(np.exp(rng.uniform(np.log(100.0), np.log(30e3), modes)))
    damping = 10.0 ** rng.uniform(-4.0, -1.0, modes)
    size = 10.0 ** rng.uniform(-2.0, 0.5, modes) * damping * frequency**2
    base = ("pivot", "none")[int(rng.integers(2))]
    centre = ModalParameters(
        frequency, damping, rng.normal(size=modes) * size, np.zeros(modes), base,
        base_frequency=60.0, base_damping_ratio=float(rng.uniform(0.1, 2.0)), base_residue=1e7,
        feedthrough=10.0 ** rng.uniform(-4.0, 0.0), delay=10.0 ** rng.uniform(-6.0, -4.2),
    )  # fmt: skip
    spread = 10.0 ** rng.uniform(-3.0, 0.0)
    near = replace(
        centre,
        modal_frequency=frequency * np.exp(0.02 * spread * rng.normal(size=modes)),
        residue=centre.residue * (1.0 + 0.2 * spread * rng.normal(size=modes)),
        delay=centre.delay * (1.0 + 0.1 * spread * rng.normal()),
    )
    return centre, near


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(6))
def test_hard_pairs_against_grids_that_resolve_every_resonance(seed: int) -> None:
    rng = np.random.default_rng(seed)
    for _ in range(60):
        centre, near = hard_pair(rng)
        common = CommonPart(NominalPlant(centre, int(rng.integers(1, 6))), *BAND, MULTIPLICATIVE)
        comparison, weighting = PlantComparison(near, common), sample_weight()
        zeros = common.roots.zeros
        zeros = zeros[np.isfinite(zeros) & (np.abs(zeros) > 0.0)]
        roots = [centre.modal_frequency, near.modal_frequency, np.abs(zeros) / (2.0 * np.pi)]
        widths = [centre.damping_ratio, near.damping_ratio, zeros.real / np.abs(zeros)]
        grid = resonance_grid(*BAND, np.concatenate(roots), np.concatenate(widths), share=0.05)
        ratio = comparison.ratio(grid, weighting)
        found = largest_ratio(comparison, weighting, float(rng.uniform(*BAND)))
        assert found.ratio >= ratio.max() * (1.0 - 1e-6)
