"""The sheet of screening marks."""

import numpy as np
from numpy.testing import assert_allclose

from identkit.figures.screening import draw_screening, pick_screening
from identkit.figures.style import NARROW, WIDE


def test_tiles_count_responses_and_marks(study):
    picked = pick_screening(study.screening, study.responses)
    assert picked.units == tuple(f"U{k:02d}" for k in range(1, 7))
    assert picked.conditions[0] == "head 0, 10 °C"
    assert picked.present.shape == (6, 4)
    assert np.all(picked.present == 1)
    assert picked.marked.sum(axis=(1, 2)).tolist() == [0, 1, 0]
    # the second response is U01, head 0, 50 °C
    assert picked.marked[1, 0, picked.conditions.index("head 0, 50 °C")] == 1


def test_masked_share_is_the_mean_over_responses(study):
    picked = pick_screening(study.screening, study.responses)
    low = study.screening["low_coherence_mask"].values[:, 0, 0, :].mean(axis=0)
    assert_allclose(picked.masked_share[0], low)


def test_unread_tiles_stay_empty(study):
    kept = slice(1, None)
    picked = pick_screening(
        study.screening.isel(response=kept), study.responses.isel(response=kept)
    )
    assert picked.present[0, 0] == 0
    for layout in (WIDE, NARROW):
        figure = draw_screening(picked, layout)
        tiles = np.asarray(figure.axes[0].images[0].get_array().filled(np.nan))
        assert np.isnan(tiles).sum() == 1


def test_nothing_masked_needs_no_lower_panel(study):
    quiet = study.screening.copy(deep=True)
    quiet["low_coherence_mask"].values[:] = False
    assert len(draw_screening(pick_screening(quiet, study.responses)).axes) == 1


def test_many_units_show_marked_ones_first(study):
    count = study.responses.sizes["response"]
    units = np.array([f"X{k}" for k in range(count)])
    many = [
        data.assign_coords(unit=("response", units), response=units)
        for data in (study.screening, study.responses)
    ]
    import identkit.figures.screening as module

    before, module.MOST_UNITS = module.MOST_UNITS, 5
    try:
        picked = pick_screening(*many)
    finally:
        module.MOST_UNITS = before
    assert len(picked.units) == 5
    assert picked.hidden_units == count - 5
    assert "X1" in picked.units
