"""What the drift pictures pick, and that they draw in both layouts."""

import importlib.util
from pathlib import Path

import numpy as np
import pytest

from identkit.figures.drift_overview import draw_drift_overview, pick_drift_overview
from identkit.figures.drift_reach import draw_drift_reach, pick_drift_reach
from identkit.figures.drift_series import draw_drift_series, limit_shares, pick_drift_series
from identkit.figures.style import NARROW, WIDE
from identkit.stages.drift_charts import ChartRules, chart_new_units
from identkit.stages.drift_points import unit_points
from identkit.stages.drift_signals import signals, time_to_exit


@pytest.fixture(scope="module")
def invented():
    path = Path(__file__).parents[1] / "stages" / "test_drift.py"
    spec = importlib.util.spec_from_file_location("invented_drift", path)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def points(invented):
    effect = invented.shifted(40, 1, 0, 0.03, 24)
    reach = invented.varied_reach(40, slope=0.006)
    return unit_points(
        invented.campaign(units=40, effect=effect, reach=reach), invented.correction()
    )


@pytest.fixture(scope="module")
def charted(points):
    return chart_new_units(points, ChartRules())


def test_a_series_is_shown_in_its_own_unit_with_its_limits(charted):
    one = next(s for s in signals(charted) if s.series == "M2 modal_frequency")
    index = charted["series"].values.tolist().index(one.series)
    picked = pick_drift_series(charted, index, one.candidates, one.until)
    assert picked.low < 3000.0 < picked.high
    assert np.nanmax(picked.value[24:]) > picked.high
    assert picked.baseline.sum() == 12
    for layout in (WIDE, NARROW):
        assert draw_drift_series(picked, layout).get_axes()


def test_shares_pass_one_where_the_charts_signal(charted):
    for k in range(charted.sizes["series"]):
        shares = limit_shares(charted, k)
        names = {"individuals": "individual", "lot": "lot mean", "ewma": "moving average"}
        for name, shown in {**names, "cusum": "cumulative sum"}.items():
            signal = charted[f"{name}_signal"].values[:, k]
            watched = charted["watched"].values[:, k]
            np.testing.assert_array_equal(signal, watched & (shares[shown] > 1.0))


def test_the_overview_has_a_row_for_every_series_and_one_for_all(charted):
    picked = pick_drift_overview(charted)
    assert len(picked.rows) == charted.sizes["series"] + 1
    assert np.isnan(picked.share[0, :12]).all()
    for layout in (WIDE, NARROW):
        assert draw_drift_overview(picked, layout).get_axes()


def test_reach_shows_its_extrapolation(points, charted):
    picked = pick_drift_reach(points, time_to_exit(charted))
    assert picked.crossing[1] < picked.crossing[0] < picked.crossing[2]
    assert picked.trend.shape == (2, 4)
    for layout in (WIDE, NARROW):
        assert draw_drift_reach(picked, layout).get_axes()
    assert pick_drift_reach(points, None).trend is None
