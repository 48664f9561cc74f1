"""Price without parts, against radii computed directly."""

from dataclasses import replace

import numpy as np
import pytest

from identkit.plant_set import fields as f
from identkit.plant_set.response import nominal_response, plant_response
from identkit.plant_set.schur import plant_matrices
from identkit.set_price import price_of_set
from identkit.stages.price import attribute_price


def radius(plant_set, plants):
    """Required radius of plants, at least the floor, by direct evaluation."""
    frequency = plant_set.radii.frequency
    nominal = nominal_response(plant_set, frequency)[0, 0]
    errors = [np.abs(plant_response(p, frequency)[0, 0] / nominal - 1) for p in plants]
    return np.maximum(np.max(errors, axis=0), plant_set.radii.floor)


def natural_limit(frequency, size):
    above = size > 1.0
    return np.min(frequency[above] / (size[above] ** 2 - 1.0) ** 0.25, initial=np.inf)


def part(table, kind, value=""):
    chosen = (table["part_kind"] == kind) & (table["part_value"] == value)
    assert int(chosen.sum()) == 1
    return table.isel(part=int(np.flatnonzero(chosen)[0]))


def test_everything_in_and_without_each_unit_and_temperature(small_set):
    table = attribute_price(small_set)
    frequency = small_set.radii.frequency
    cases = [("everything in", "", lambda labels: True)]
    cases += [("unit", u, lambda labels, u=u: labels["unit"] != u) for u in ("U0", "U1", "U2")]
    cases += [("temperature", "35", lambda labels: labels.get("temperature") != 35.0)]
    for kind, value, stays in cases:
        row = part(table, kind, value)
        kept = [plant for plant in small_set.plants if stays(plant.labels)]
        assert int(row["part_plants"]) == len(kept)
        required = radius(small_set, kept)
        assert float(row["peak_radius_db"]) == pytest.approx(20 * np.log10(required.max()))
        natural = natural_limit(frequency, required)
        # crossover by the definition, without zeros or delay it is a fixed share of w0
        share = float(row["allowed_crossover"]) / natural
        assert 0.5 < share <= np.sqrt(np.sqrt(2.0) - 1.0) * (1 + 1e-9)


def test_leaving_plants_out_never_lowers_the_bandwidth_and_bounds_the_weight_fitted(small_set):
    table = attribute_price(small_set)
    whole = float(table["allowed_crossover"][0])
    outs = table["part_kind"].isin(["unit", "head", "temperature"])
    assert (table["allowed_crossover"].where(outs, drop=True) >= whole * (1 - 1e-12)).all()
    assert price_of_set(small_set).bandwidth.crossover <= whole


def test_a_mode_that_alone_varies_is_the_whole_price(small_set, makers):
    centre = makers.nominal_plant()
    plants = []
    for k, shift in enumerate((0.97, 0.99, 1.0, 1.01, 1.02)):
        hertz = centre.modal_frequency * np.array([1.0, 1.0, shift, 1.0])
        plants.append(replace(centre, response=f"P{k}", modal_frequency=hertz))
    made = makers.make_set(plants, plant_matrices(centre), makers.lead_weight(1.0))
    # the maker names every place M1; without its line the modes are numbered
    table = attribute_price(replace(made, attribution=()))
    still = part(table, "mode's spread", "M3")
    assert float(still["peak_radius_db"]) == pytest.approx(20 * np.log10(made.radii.floor))
    other = part(table, "mode's spread", "M2")
    assert float(other["peak_radius_db"]) == pytest.approx(float(table["peak_radius_db"][0]))


def test_plants_left_out_of_the_set_do_not_count(small_set):
    worst = max(small_set.plants, key=lambda plant: plant.reach)
    measured = replace(
        small_set.certificate.measured, excluded=(f.Excluded(worst.response, "broken"),)
    )
    without = replace(small_set, certificate=replace(small_set.certificate, measured=measured))
    rest = [plant for plant in small_set.plants if plant is not worst]
    table = attribute_price(without)
    assert int(table["part_plants"][0]) == len(rest)
    expected = 20 * np.log10(radius(small_set, rest).max())
    assert float(table["peak_radius_db"][0]) == pytest.approx(expected)


@pytest.mark.parametrize(
    "change", [{"form": "parametric"}, {"time": f.TimeBase("sampled", 2e-5)}, {"plants": ()}]
)
def test_what_the_yardstick_does_not_cover_says_so(small_set, change):
    table = attribute_price(replace(small_set, **change))
    assert table.attrs["not_priced"]
    assert not table.data_vars


def test_the_other_forms_are_priced_too(small_set):
    for form in ("additive", "inverse-multiplicative"):
        table = attribute_price(replace(small_set, form=form))
        assert np.isfinite(table["peak_radius_db"]).all()
        assert (table["allowed_crossover"] >= 0.0).all()
