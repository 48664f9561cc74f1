"""Pictures of the set: radius, reach strip, ledger, orders."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose

from identkit.figures.frequency_axis import log_edges
from identkit.figures.order_tradeoff import OrderTradeoff, draw_order_tradeoff
from identkit.figures.radius import draw_radius, pick_radius
from identkit.figures.reach_strip import (
    binned_maximum,
    draw_reach_strip,
    pick_reach_strip,
    thinned_rows,
)
from identkit.figures.set_plants import reach_along
from identkit.figures.style import NARROW, WIDE
from identkit.figures.worst import draw_worst, pick_worst
from identkit.plant_set.fields import Excluded, FittedPlant, TimeBase


def test_reach_along_agrees_with_the_weight_that_was_fitted(study):
    contents = study.plant_set
    reach = reach_along(contents, contents.radii.frequency)
    largest = reach.max(axis=0) * contents.radii.weight_magnitude
    floored = np.maximum(largest * 1.02, 0.02)
    assert_allclose(floored, contents.radii.required_radius, rtol=1e-6)
    assert_allclose(reach.max(axis=1), [p.reach for p in contents.plants], rtol=1e-6)


def test_no_strip_where_reach_is_not_one_number_per_frequency(study):
    contents = study.plant_set
    sampled = replace(contents, time=TimeBase("sampled", 2e-5))
    assert reach_along(sampled, contents.radii.frequency) is None
    assert pick_reach_strip(replace(contents, form="parametric")) is None
    assert pick_reach_strip(replace(contents, plants=())) is None


def test_bins_keep_every_peak():
    frequency = np.geomspace(10.0, 1000.0, 997)
    values = np.random.default_rng(0).random((3, 997))
    values[1, 613] = 9.0
    edges, binned = binned_maximum(frequency, values, columns=60)
    assert edges.size == 61
    assert_allclose(binned.max(axis=1), values.max(axis=1))
    at = int(binned[1].argmax())
    assert edges[at] <= frequency[613] <= edges[at + 1]


def test_bins_without_points_repeat_the_nearest():
    frequency = np.array([1.0, 2.0, 900.0, 1000.0])
    _, binned = binned_maximum(frequency, np.array([[1.0, 2.0, 3.0, 4.0]]), columns=40)
    assert np.isfinite(binned).all()


def test_thinning_rows_keeps_the_largest():
    values = np.random.default_rng(1).random((1000, 5))
    rows, home = thinned_rows(values, most=90)
    assert rows.shape == (90, 5)
    assert_allclose(rows.max(axis=0), values.max(axis=0))
    assert home[0] == 0
    assert home[-1] == 89
    assert np.all(np.diff(home) >= 0)


def test_strip_rows_follow_units(study):
    modes = tuple(study.population["mode"].values.tolist())
    value = study.population["population_value"].sel(quantity="modal_frequency").values
    picked = pick_reach_strip(study.plant_set, mode_names=modes, mode_frequency=value)
    assert picked.units == tuple(f"U{k:02d}" for k in range(1, 7))
    assert picked.unit_starts.tolist() == [0, 4, 8, 12, 16, 20]
    assert picked.responses == 24
    for layout in (WIDE, NARROW):
        figure = draw_reach_strip(picked, layout)
        assert_allclose(figure.axes[1].images[0].get_array(), picked.reach)


def test_radius_names_units_by_share_of_the_band(study):
    picked = pick_radius(study.plant_set)
    owner = {p.response: p.labels["unit"] for p in study.plant_set.plants}
    named = [owner.get(name, "") for name in study.plant_set.radii.set_by]
    counts = [named.count(unit) for unit in picked.setters]
    assert counts == sorted(counts, reverse=True)
    shown = [picked.setters[at] if at >= 0 else "" for at in picked.setter]
    assert shown == named


def test_radius_draws_weight_over_radius(study):
    picked = pick_radius(study.plant_set)
    for layout in (WIDE, NARROW):
        figure = draw_radius(picked, layout)
        axes = figure.axes[1]
        weight = next(line for line in axes.lines if line.get_label() == "weight")
        assert_allclose(weight.get_ydata(), picked.weight)
        assert not any(line.get_label() == "not held" for line in axes.lines)


def test_radius_beyond_the_weight_is_marked(study):
    picked = pick_radius(study.plant_set)
    broken = replace(picked, weight=np.where(np.arange(240) == 90, 1e-3, picked.weight))
    axes = draw_radius(broken).axes[1]
    line = next(line for line in axes.lines if line.get_label() == "not held")
    assert_allclose(line.get_xdata(), picked.frequency[90])


def test_floor_is_drawn_only_when_known(study):
    frequency = np.geomspace(50.0, 22000.0, 60)
    picked = pick_radius(study.plant_set, floor_frequency=frequency, floor=np.full(60, 0.04))
    assert_allclose(picked.floor, 0.04)
    labels = [line.get_label() for line in draw_radius(picked).axes[1].lines]
    assert "floor for any nominal" in labels
    labels = [line.get_label() for line in draw_radius(pick_radius(study.plant_set)).axes[1].lines]
    assert "floor for any nominal" not in labels


def test_log_edges_lie_between_the_points():
    frequency = np.array([1.0, 10.0, 1000.0])
    assert_allclose(log_edges(frequency), [10**-0.5, 10**0.5, 100.0, 10000.0])


def test_ledger_is_sorted_and_complete(study):
    picked = pick_worst(study.plant_set)
    assert np.all(np.diff(picked.largest) <= 0.0)
    assert sum(reaches.size for reaches in picked.all_reaches) == 24
    top = max(study.plant_set.plants, key=lambda plant: plant.reach)
    assert picked.units[0] == top.labels["unit"]
    assert picked.condition[0] == f"head {top.labels['head']}, {top.labels['temperature']:g} °C"
    assert picked.frequency[0] == top.reach_frequency


def test_ledger_of_an_audit_puts_those_left_out_last(study):
    audit = study.audit.copy(deep=True)
    audit["fit_reach"].values[:2] = 5.0
    audit["excluded"].values[:2] = True
    picked = pick_worst(study.plant_set, audit=audit)
    assert picked.units[-1] == "U01"
    assert picked.left_out.tolist() == [False] * 6 + [True]
    assert picked.largest[-1] == 5.0
    figure = draw_worst(picked)
    words = [text.get_text() for text in figure.axes[1].texts]
    assert any("left out" in text for text in words)
    assert figure.axes[0].get_xlim()[1] < 5.0


def test_ledger_without_any_plant():
    assert pick_worst(None) is None


def test_long_ledgers_say_what_is_hidden(study):
    picked = pick_worst(study.plant_set)
    many = 90
    longer = replace(
        picked,
        units=tuple(f"U{k}" for k in range(many)),
        largest=np.linspace(1.0, 0.2, many),
        all_reaches=(picked.all_reaches[0],) * many,
        condition=("head 1",) * many,
        frequency=np.full(many, 5e3),
        mode=("M3",) * many,
        left_out=np.zeros(many, dtype=bool),
    )
    axes = draw_worst(longer, NARROW).axes[0]
    assert len(axes.get_yticks()) == 40
    assert axes.get_title(loc="left").endswith("of 90")


def test_orders_mark_the_chosen_one():
    picked = OrderTradeoff(np.arange(2, 7), np.array([9.0, 6, 4, 3, 2.5]), np.full(5, 2.0), 4)
    for layout in (WIDE, NARROW):
        axes = draw_order_tradeoff(picked, layout).axes[0]
        assert axes.get_title(loc="left") == "chosen: order 4, 4.00 dB"
        assert_allclose(axes.lines[0].get_ydata(), picked.excess)


@pytest.mark.parametrize("missing", ["unit", "head", "temperature"])
def test_missing_labels_do_not_stop_a_picture(study, missing):
    plants = tuple(
        replace(p, labels={k: v for k, v in p.labels.items() if k != missing})
        for p in study.plant_set.plants
    )
    assert all(isinstance(plant, FittedPlant) for plant in plants)
    contents = replace(study.plant_set, plants=plants)
    draw_worst(pick_worst(contents))
    draw_reach_strip(pick_reach_strip(contents))
    draw_radius(pick_radius(contents))


def test_strip_puts_plants_left_out_last_and_out_of_the_largest(study):
    contents = study.plant_set
    out = tuple(Excluded(p.response, "cracked") for p in contents.plants[:4])
    measured = replace(contents.certificate.measured, excluded=out)
    certificate = replace(contents.certificate, measured=measured)
    picked = pick_reach_strip(replace(contents, certificate=certificate))
    assert picked.units[-1] == "U01"
    assert picked.used_rows == 20
    picked.reach[20:] = 7.0
    figure = draw_reach_strip(picked)
    assert figure.axes[0].get_ylim()[1] < 2.0
    assert [text.get_text() for text in figure.axes[1].texts] == ["left out of the bound"]
