"""Modal frequencies against temperature."""

import numpy as np
from numpy.testing import assert_allclose

from identkit.figures.mode_map import draw_mode_map, pick_mode_map
from identkit.figures.style import NARROW, WIDE


def test_deviations_are_percent_of_the_population_value(study):
    picked = pick_mode_map(study.modes, study.population)
    value = study.population["population_value"].sel(quantity="modal_frequency").values
    truth = study.modes["modal_frequency"].values[:, :8]
    assert picked.modes == tuple(f"M{k}" for k in range(1, 9))
    assert_allclose(picked.deviation, 100 * (truth / value - 1))
    assert_allclose(picked.half_interval, 100 * 1.96 * 3e-4 * truth / value)
    assert_allclose(picked.slope, -0.02)
    assert_allclose(picked.spread, 100 * 0.006 * np.sqrt(1 + 0.4**2 + 0.1**2))


def test_one_panel_per_mode_on_one_scale(study):
    picked = pick_mode_map(study.modes, study.population)
    for layout in (WIDE, NARROW):
        figure = draw_mode_map(picked, layout)
        panels = [axes for axes in figure.axes if axes.axison]
        assert len(panels) == 8
        assert len({axes.get_ylim() for axes in panels}) == 1
        assert panels[2].get_title(loc="left").startswith("M3")


def test_points_beyond_the_scale_stand_at_its_edge_and_are_named(study):
    picked = pick_mode_map(study.modes, study.population)
    picked.deviation[5, 1] = -40.0
    figure = draw_mode_map(picked)
    texts = [text.get_text() for text in figure.axes[1].texts]
    assert texts == [f"{picked.names[5].split(',')[0]}: -40.0 %"]
    assert figure.axes[1].get_ylim()[0] > -40.0


def test_every_response_is_drawn_once(study):
    picked = pick_mode_map(study.modes, study.population)
    figure = draw_mode_map(picked)
    drawn = [y for line in figure.axes[0].lines[1:] for y in line.get_ydata()]
    assert_allclose(sorted(drawn), sorted(picked.deviation[:, 0]))


def test_no_temperature_falls_back_to_order(study):
    modes = study.modes.drop_vars("temperature")
    figure = draw_mode_map(pick_mode_map(modes, study.population))
    assert figure.get_supxlabel() == "responses in order"
