"""Leaving units out and virtual units, against doing it the long way."""

import json
from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest

from identkit.plant_set.reach import reach_of_plants
from identkit.stages import model_coverage
from identkit.stages.bound import bound_spread
from identkit.stages.coverage import cover
from identkit.stages.export import build_set
from identkit.stages.fit import fit_modes
from identkit.stages.leave_one_out import leave_one_unit_out
from identkit.stages.model_coverage import model_statement, plants_inside
from identkit.stages.nominal import choose_nominal, measured_lines
from identkit.stages.pair import pair_modes
from identkit.stages.population import describe_population
from identkit.stages.population_model import population_model
from identkit.stages.screen import screen
from identkit.stages.set_plants import set_plants
from identkit.stages.virtual_units import ParameterDraw, draw_parameters, draw_plants
from identkit.synthetic import InventedBench, Story, invent_campaign, to_dataset

ORDER = 6


@pytest.fixture(autouse=True)
def few_populations(monkeypatch):
    monkeypatch.setattr(model_coverage, "POPULATIONS", 12)


def bounded(modes, lines, out=()):
    """Return population, nominal, bound and set without some responses."""
    reasons = dict.fromkeys(out, "left out")
    population = describe_population(modes, leave_out=tuple(out))
    nominal = choose_nominal(modes, population, lines=lines, left_out=reasons)
    bound = bound_spread(modes, nominal, order=ORDER, left_out=reasons)
    return SimpleNamespace(
        population=population,
        nominal=nominal,
        bound=bound,
        plant_set=build_set(nominal, bound, modes),
        model=population_model(modes, population, leave_out=tuple(out)),
    )


@pytest.fixture(scope="module")
def campaign():
    invented = invent_campaign(
        units=9,
        heads=2,
        temperatures=(10.0, 40.0),
        bench=InventedBench(points=300),
        story=Story(odd_lot="", cracked_unit=""),
        seed=5,
    )
    responses = to_dataset(invented)
    marks = screen(responses)
    modes = pair_modes(fit_modes(responses, marks), responses, marks)
    lines = measured_lines(responses)
    return SimpleNamespace(modes=modes, lines=lines, **vars(bounded(modes, lines)))


def test_the_law_has_the_population_values(campaign):
    values = campaign.population["population_value"]
    for law in campaign.model.laws:
        place, quantity = law.name.split(":")
        if place == "base":
            expected = float(campaign.population[quantity])
        else:
            expected = float(values.sel(mode=place, quantity=quantity))
        effect = law.means.effects[law.columns]
        found = np.exp(effect.mean()) if law.logarithmic else (law.scale * effect).mean()
        assert found == pytest.approx(expected, rel=2e-5)


def test_conditions_are_those_measured(campaign):
    model = campaign.model
    found = set(zip(model.head.tolist(), (model.temperature + 25.0).tolist(), strict=True))
    assert found == {(0, 10.0), (0, 40.0), (1, 10.0), (1, 40.0)}


def test_a_unit_left_out_has_the_reach_that_the_long_way_gives(campaign):
    quick = leave_one_unit_out(campaign.modes, campaign.nominal, campaign.bound, campaign.model)
    assert len(quick.reach) == quick.units == 9
    assert quick.nominal_refitted
    unit = max(quick.reach, key=quick.reach.get)
    names = campaign.modes["response"].values.astype(str)
    mine = names[campaign.modes["unit"].values.astype(str) == unit]
    others = bounded(campaign.modes, campaign.lines, mine)
    plants = [p for p in set_plants(campaign.modes)[0] if p.response in mine]
    slow = reach_of_plants(others.plant_set, plants).value.max()
    assert slow > 1.0
    # both radii to one frequency grid: the bound adds its own points
    frequency = campaign.bound["frequency"].values
    needed = np.interp(
        frequency, others.bound["frequency"].values, others.bound["required_radius"].values
    )
    fall = 20.0 * np.log10(campaign.bound["required_radius"].values / needed)
    mean = np.trapezoid(fall, np.log(frequency)) / np.log(frequency[-1] / frequency[0])
    assert quick.relief_db[unit] == pytest.approx(mean, abs=0.05)
    # the weight is refitted on points only and to 0.1 dB, the variances are kept
    assert quick.reach[unit] == pytest.approx(slow, rel=0.05)


def test_a_searched_nominal_is_kept_and_said_so(campaign):
    searched = campaign.nominal.assign_attrs(choice="tightest")
    kept = leave_one_unit_out(campaign.modes, searched, campaign.bound, campaign.model)
    assert not kept.nominal_refitted


def test_virtual_units_have_the_spread_of_the_model(campaign):
    model = campaign.model
    deviation = np.array([law.deviation for law in model.laws])
    sure = ParameterDraw(
        tuple(law.means.effects for law in model.laws),
        deviation,
        np.linalg.cholesky(model.correlation),
    )
    plants = draw_plants(model, sure, 3000, np.random.default_rng(1))
    frequency = np.log([plant.modal_frequency for plant in plants])
    by_unit = frequency.reshape(3000, len(model.head), -1)
    laws = {law.name: law for law in model.laws}
    for m, mode in enumerate(model.modes):
        law = laws[f"{mode}:modal_frequency"]
        expected = np.sqrt(np.sum(law.deviation**2))
        np.testing.assert_allclose(by_unit[:, :, m].std(axis=0), expected, rtol=0.06)
        # conditions of one unit share its effect; temperatures of one head share the head's
        between = np.cov(by_unit[:, 0, m], by_unit[:, -1, m])[0, 1]
        assert between == pytest.approx(law.deviation[0] ** 2, rel=0.15, abs=2e-7)
        slope = law.means.effects[law.trend[0]]
        order = np.lexsort((model.temperature, model.head))
        means = by_unit[:, order, m].mean(axis=0)
        assert means[1] - means[0] == pytest.approx(30.0 * slope, abs=4 * expected / 3000**0.5)


def test_uncertain_parameters_scatter_as_their_errors_say(campaign):
    rng = np.random.default_rng(2)
    drawn = [draw_parameters(campaign.model, 0.5, rng) for _ in range(400)]
    value = campaign.population["population_value_standard_error"]
    for k, law in enumerate(campaign.model.laws[:3]):
        mean = np.array([d.effects[k][law.columns].mean() for d in drawn])
        quantity = law.name.split(":")[1]
        error = float(value.sel(mode=campaign.model.modes[0], quantity=quantity))
        size = float(campaign.population["population_value"].sel(mode="M1", quantity=quantity))
        # the deviations are drawn too, so the means scatter a little more (Student 1908)
        assert mean.std() == pytest.approx(abs(error / size), rel=0.35)
        assert mean.std() > 0.95 * abs(error / size)


def test_quick_sorting_agrees_with_the_full_reach(campaign):
    rng = np.random.default_rng(3)
    drawn = draw_parameters(campaign.model, 0.5, rng)
    plants = draw_plants(campaign.model, drawn, 60, rng)
    full = reach_of_plants(campaign.plant_set, plants).value <= 1.0
    np.testing.assert_array_equal(plants_inside(campaign.plant_set, plants), full)
    assert 0 < full.sum() < full.size


def test_a_wider_set_holds_more_virtual_units(campaign):
    radii = campaign.plant_set.weights.left
    wide = replace(
        campaign.plant_set,
        weights=replace(
            campaign.plant_set.weights, left=replace(radii, C=3.0 * radii.C, D=3.0 * radii.D)
        ),
    )
    arguments = (campaign.model, campaign.population, campaign.modes)
    narrow = model_statement(campaign.plant_set, *arguments)
    wider = model_statement(wide, *arguments)
    assert wider.shares.quantile(0.1) > narrow.shares.quantile(0.1)
    assert wider.shares.mean > 0.9


def test_lots_that_differ_void_the_model(campaign):
    chance = np.full((2, campaign.population.sizes["effect"]), 0.5)
    chance[1, 3] = 1e-5
    population = campaign.population.drop_dims("lot", errors="ignore").assign(
        lot_chance=(("lot", "effect"), chance)
    )
    population = population.assign_coords(lot=["A", "B"])
    found = model_statement(campaign.plant_set, campaign.model, population, campaign.modes)
    lots = next(check for check in found.checks if check.name == "lots are alike")
    assert not lots.passed
    assert "lot B" in lots.finding
    assert not found.trusted


def test_modes_without_a_law_void_the_model(campaign):
    rate = campaign.modes["residue_rate"].copy()
    assert model_statement(*described(campaign, campaign.modes)).checks[-1].passed
    rate[3, 1] = 2.0
    found = model_statement(*described(campaign, campaign.modes.assign(residue_rate=rate)))
    assert not found.checks[-1].passed
    assert "1 of 9 units" in found.checks[-1].finding


def described(campaign, modes):
    return campaign.plant_set, campaign.model, campaign.population, modes


def test_a_study_gets_every_statement(campaign):
    unit = campaign.modes["unit"].values.astype(str)
    names = campaign.modes["response"].values.astype(str)
    back = dict(zip(names[unit == "U09"].tolist(), unit[unit == "U09"].tolist(), strict=True))
    parts = bounded(campaign.modes, campaign.lines, tuple(back))
    said = cover(
        parts.plant_set,
        campaign.modes,
        parts.population,
        parts.nominal,
        parts.bound,
        held_out=back,
        left_out=tuple(back),
    )
    assert said["exact"]["units"] == 1
    assert said["leave_one_out"]["units"] == said["model_based"]["units"] == 8
    assert said["content"] == said["exact"]["content"]
    json.dumps(said, allow_nan=False)
    lots = cover(
        parts.plant_set, campaign.modes, parts.population, parts.nominal, parts.bound,
        held_out={}, left_out=tuple(back), exchangeable="lot",
    )  # fmt: skip
    assert lots["leave_one_out"] is lots["model_based"] is None
