from dataclasses import replace

import numpy as np
import pytest

from identkit.errors import InfeasibleError, InputError
from identkit.forms.bounding import BoundOptions, bound_plants
from identkit.forms.comparison import CommonPart, PlantComparison
from identkit.forms.multiplicative import MULTIPLICATIVE
from identkit.forms.nominal_plant import NominalPlant
from identkit.forms.radius_curve import interpolated
from identkit.methods.magnitude_weight import fit_magnitude_weight
from identkit.methods.modal_model import ModalParameters
from tests.methods.families import family, plant

BAND = (50.0, 22e3)
PLANTS = family(12, 21)
COARSE = np.geomspace(*BAND, 300)


def common(scale: float = 1.0) -> CommonPart:
    nominal = scaled(plant(), scale, 1.0)
    return CommonPart(NominalPlant(nominal, 3), BAND[0] * scale, BAND[1] * scale, MULTIPLICATIVE)


def scaled(parameters: ModalParameters, time: float, unit: float) -> ModalParameters:
    """Return the same plant with frequencies times `time` and output in another unit."""
    return replace(
        parameters,
        modal_frequency=parameters.modal_frequency * time,
        residue=parameters.residue * time**2 * unit,
        base_frequency=parameters.base_frequency * time,
        base_residue=parameters.base_residue * time**2 * unit,
        feedthrough=parameters.feedthrough * unit,
        delay=parameters.delay / time,
    )


def largest_on(frequency: np.ndarray, magnitude: np.ndarray, part: CommonPart) -> float:
    class Plain:
        def magnitude(self, _: np.ndarray) -> np.ndarray:
            return magnitude

    return max(
        float(PlantComparison(one, part).ratio(frequency, Plain()).max())  # type: ignore[arg-type]
        for one in PLANTS
    )


def test_every_plant_is_held_between_the_points_and_one_touches() -> None:
    found = bound_plants(PLANTS, common(), COARSE, BoundOptions(order=6))
    dense = np.geomspace(*BAND, 60001)
    worst = largest_on(dense, found.weight.magnitude(dense), common())
    assert worst <= 1.0 + 1e-6
    assert max(peak.ratio for peak in found.peaks) == pytest.approx(1.0, abs=1e-9)
    assert found.tolerance < 1e-6
    assert found.weight.excess_db >= found.weight.floor_db
    assert found.weight.gap_db <= 0.02
    profile = interpolated(BoundOptions().profile, found.curve.frequency)
    excess = found.weight.magnitude(found.curve.frequency) / (found.curve.required * profile)
    assert 20.0 * np.log10(excess.max()) == pytest.approx(found.weight.excess_db, abs=1e-9)


def test_weight_from_the_same_points_alone_misses_peaks() -> None:
    found = bound_plants(PLANTS, common(), COARSE, BoundOptions(order=6))
    on_points = np.isin(found.curve.frequency, COARSE)
    radius = found.curve.required[on_points]
    alone = fit_magnitude_weight(
        COARSE, radius, 6, profile=interpolated(BoundOptions().profile, COARSE)
    )
    dense = np.geomspace(*BAND, 60001)
    assert largest_on(COARSE, alone.magnitude(COARSE), common()) <= 1.0 + 1e-9
    assert largest_on(dense, alone.magnitude(dense), common()) > 1.01
    assert found.rounds >= 1


def test_independent_of_units_and_of_the_number_of_threads() -> None:
    plain = bound_plants(PLANTS, common(), COARSE, BoundOptions(order=4))
    again = bound_plants(PLANTS, common(), COARSE, BoundOptions(order=4, jobs=3))
    np.testing.assert_array_equal(again.weight.poles, plain.weight.poles)
    assert again.peaks == plain.peaks
    kilo = common(1e-3)
    profile = [(0.1, 1.0), (1.0, 3.0)]
    other = bound_plants(
        [scaled(one, 1e-3, 1e6) for one in PLANTS],
        CommonPart(
            NominalPlant(scaled(plant(), 1e-3, 1e6), 3), kilo.low, kilo.high, MULTIPLICATIVE
        ),
        COARSE * 1e-3,
        BoundOptions(order=4, profile=profile),
    )
    assert other.weight.excess_db == pytest.approx(plain.weight.excess_db, abs=0.02)


def test_auto_order_keeps_the_whole_trade_off() -> None:
    found = bound_plants(PLANTS, common(), COARSE, BoundOptions())
    orders = [trial.order for trial in found.trials]
    assert orders == sorted(orders)
    assert found.weight.order in orders
    proved = [trial.excess_db for trial in found.trials if trial.excess_db < trial.floor_db + 0.1]
    assert len(proved) >= 6
    assert all(b <= a + 0.1 for a, b in zip(proved, proved[1:], strict=False))
    for trial in found.trials:
        assert trial.excess_db >= trial.floor_db - 1e-9


def test_radius_floor_holds_where_the_plants_agree() -> None:
    found = bound_plants([plant()], common(), COARSE, BoundOptions(order=0, radius_floor=0.05))
    assert np.all(found.curve.setter == -1)
    np.testing.assert_allclose(found.weight.magnitude(COARSE), 0.05, rtol=1e-9)
    assert found.peaks[0].ratio < 1.0


def test_cap_is_kept_or_refused_with_the_frequency() -> None:
    free = bound_plants(PLANTS, common(), COARSE, BoundOptions(order=8))
    at = free.curve.frequency
    low = at < 300.0
    ceiling = 1.05 * float(free.curve.required[low].max())
    options = BoundOptions(order=8, cap=[(290.0, ceiling), (400.0, 1e3)])
    capped = bound_plants(PLANTS, common(), COARSE, options)
    allowed = interpolated(options.cap, capped.curve.frequency)
    assert np.all(capped.weight.magnitude(capped.curve.frequency) <= allowed * (1.0 + 1e-9))
    assert max(peak.ratio for peak in capped.peaks) <= 1.0 + 1e-9
    with pytest.raises(InfeasibleError) as refused:
        bound_plants(PLANTS, common(), COARSE, replace(options, cap=[(100.0, 0.01)]))
    assert refused.value.frequency is not None


def test_delay_too_long_for_a_stand_in_is_refused() -> None:
    late = replace(plant(), delay=1e-3)
    with pytest.raises(InputError, match="rad at the band's edge"):
        bound_plants([late], common(), COARSE, BoundOptions(order=1))
