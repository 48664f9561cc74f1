"""Unit points, charts and signals on invented measurements with known truth."""

import json

import numpy as np
import pytest
import xarray as xr

from identkit.stages.drift_charts import (
    NEVER,
    ChartRules,
    chart_measured_again,
    chart_new_units,
)
from identkit.stages.drift_points import unit_points
from identkit.stages.drift_signals import (
    joint_first,
    lots_that_differ,
    not_held,
    signals,
    time_to_exit,
    units_apart,
)

MODES, QUANTITIES = ("M1", "M2", "M3"), ("modal_frequency", "damping_ratio", "residue")
VALUES = np.array([[1000.0, 0.02, 2e8], [3000.0, 0.015, -4e8], [7000.0, 0.01, 6e8]])
SLOPES = np.array([-2e-4, 3e-3, 1e-5])
SPREAD = np.array([0.006, 0.10, 0.06])
HEADS, TEMPERATURES = ("0", "1"), (10.0, 25.0, 50.0)


def correction():
    shape = (3, 3)
    dims = ("mode", "quantity")
    heads = np.stack([VALUES, VALUES * np.array([1.001, 1.02, 1.1])], axis=2)
    columns = {
        "value": VALUES,
        "temperature_slope": np.broadcast_to(SLOPES, shape),
        "temperature_slope_standard_error": np.full(shape, 1e-6),
        "position_slope": np.zeros(shape),
        "position_slope_standard_error": np.full(shape, np.nan),
        "unit_deviation": np.broadcast_to(SPREAD, shape),
        "head_deviation": np.broadcast_to(SPREAD / 4, shape),
        "residual_deviation": np.broadcast_to(SPREAD / 40, shape),
    }
    return xr.Dataset(
        {name: (dims, np.array(column)) for name, column in columns.items()}
        | {"head_value": ((*dims, "head"), heads)},
        coords={"mode": list(MODES), "quantity": list(QUANTITIES), "head": list(HEADS)},
        attrs={"reference_temperature": 25.0, "reference_position": float("nan")},
    )


def campaign(units=30, seed=0, effect=None, temperatures=TEMPERATURES, reach=None, **more):
    """Measurements of units whose unit effects are normal; `effect` (units, modes, quantities)."""
    generator = np.random.default_rng(seed)
    table = correction()
    drawn = generator.standard_normal((units, 3, 3)) * SPREAD
    drawn = drawn if effect is None else drawn + effect
    rows = []
    for unit in range(units):
        for h, head in enumerate(HEADS):
            of_head = generator.standard_normal((3, 3)) * SPREAD / 4
            for temperature in temperatures:
                step = drawn[unit] + of_head + SLOPES * (temperature - 25.0)
                step = step + generator.standard_normal((3, 3)) * SPREAD / 40
                typical = table["head_value"].values[:, :, h]
                value = typical * np.where(np.arange(3) < 2, np.exp(step), 1.0 + step)
                rows.append((unit, head, temperature, value))
    return measurements(rows, units, reach, **more)


def measurements(rows, units, reach=None, lots=6, first_day=0, names="U", excluded=()):
    count = len(rows)
    unit = np.array([row[0] for row in rows])
    start = np.datetime64("2026-01-01")
    dates = [str(start + np.timedelta64(int(first_day + u // lots * 7), "D")) for u in unit]
    text = {
        "response": [f"{names}{u}_{h}_{t:g}" for u, h, t, _ in rows],
        "measured_at": dates,
        "unit": [f"{names}{u:02d}" for u in unit],
        "lot": [chr(65 + u // lots) for u in unit],
        "head": [row[1] for row in rows],
        "excluded": ["cracked" if u in excluded else "" for u in unit],
        "labels": [json.dumps({})] * count,
    }
    known = np.full(units, 0.7) if reach is None else reach
    value = np.array([row[3] for row in rows])
    return xr.Dataset(
        {
            "value": (("measurement", "mode", "quantity"), value),
            "standard_error": (("measurement", "mode", "quantity"), np.abs(value) * 1e-4),
            "reach": ("measurement", known[unit]),
            "reach_frequency": ("measurement", np.full(count, 3000.0)),
            "in_set": ("measurement", np.zeros(count, dtype=bool)),
        },
        coords={
            "measurement": np.arange(count),
            "mode": list(MODES),
            "quantity": list(QUANTITIES),
            **{name: ("measurement", np.array(column)) for name, column in text.items()},
            "temperature": ("measurement", np.array([row[2] for row in rows])),
            "position": ("measurement", np.full(count, np.nan)),
            "addition": ("measurement", np.ones(count, dtype=np.int64)),
        },
    )


def shifted(units, mode, quantity, size, since, until=None):
    effect = np.zeros((units, 3, 3))
    effect[since:until, mode, quantity] = size
    return effect


def varied_reach(units, seed=21, slope=0.0):
    noise = 0.05 * np.random.default_rng(seed).standard_normal(units)
    return np.exp(-0.35 + noise + slope * np.arange(units))


def test_heads_and_temperatures_of_a_unit_are_one_point_at_the_reference():
    points = unit_points(campaign(units=6), correction())
    assert points.sizes["visit"] == 6
    assert (points["responses"].values == 6).all()
    part = unit_points(campaign(units=6, temperatures=(50.0,)), correction())
    # the same units, measured hot only: the slope takes the temperature out
    difference = points["deviation"].values[:, 0] - part["deviation"].values[:, 0]
    assert np.abs(difference).max() < 2 * SPREAD[0]
    assert abs(float(difference.mean())) < SPREAD[0] / 2


def test_the_error_of_the_slope_is_in_the_points_measured_elsewhere():
    table = correction()
    table["temperature_slope_standard_error"][:] = 1e-4
    hot = campaign(units=1, temperatures=(65.0,), names="H")
    both = xr.concat([campaign(units=5, temperatures=(25.0,)), hot], dim="measurement")
    error = np.sqrt(unit_points(both, table)["error_variance"].values[:, 0])
    assert error[-1] == pytest.approx(40.0 * 1e-4, rel=0.01)
    assert error[0] < 2e-4


def test_a_missing_head_does_not_move_a_unit_but_widens_it():
    whole = campaign(units=8)
    half = whole.isel(measurement=np.flatnonzero(whole["head"].values == "1"))
    one, other = unit_points(whole, correction()), unit_points(half, correction())
    assert np.abs(one["deviation"].values - other["deviation"].values)[:, 2].max() < SPREAD[2]
    np.testing.assert_allclose(
        other["sampling_variance"].values[:, 0], 2.0 * one["sampling_variance"].values[:, 0]
    )


def test_units_measured_again_are_visits_of_their_own():
    first = campaign(units=4, seed=1)
    again = campaign(units=2, seed=1, first_day=60)
    points = unit_points(xr.concat([first, again], dim="measurement"), correction())
    assert points["visit_number"].values.tolist() == [1, 1, 1, 1, 2, 2]
    assert points["unit"].values.tolist()[-2:] == ["U00", "U01"]


def test_what_the_set_leaves_out_makes_no_point():
    points = unit_points(campaign(units=5, excluded=(2,)), correction())
    assert "U02" not in points["unit"].values


def test_a_stable_process_is_quiet():
    for seed in range(3):
        data = campaign(units=40, seed=seed, reach=varied_reach(40, 30 + seed))
        charted = chart_new_units(unit_points(data, correction()), ChartRules())
        assert signals(charted) == []
        assert joint_first(charted) == NEVER
        assert units_apart(charted) == []


def test_a_lasting_shift_is_named_placed_and_sized():
    effect = shifted(60, 1, 0, 0.015, 30)
    data = campaign(units=60, seed=2, effect=effect, reach=varied_reach(60))
    found = signals(chart_new_units(unit_points(data, correction()), ChartRules()))
    assert [one.series for one in found] == ["M2 modal_frequency"]
    one = found[0]
    assert one.candidates[0] <= 30 <= one.candidates[1]
    assert one.until == NEVER
    assert one.lot == "F"
    assert one.after - one.before == pytest.approx(45.0, abs=12.0)
    assert one.deviations == pytest.approx(2.5, abs=0.8)


def test_a_lot_that_came_and_went_is_back():
    effect = shifted(36, 2, 2, 0.4, 18, 24)
    data = campaign(units=36, seed=3, effect=effect, reach=varied_reach(36))
    charted = chart_new_units(unit_points(data, correction()), ChartRules())
    one = signals(charted)[0]
    assert (one.series, one.since, one.until, one.lot) == ("M3 residue", 18, 24, "D")
    assert "lot" in one.charts
    assert {visit for visit, _ in units_apart(charted)} <= set(range(18, 24))


def test_a_slow_drift_is_found_by_the_sums():
    effect = np.zeros((90, 3, 3))
    effect[20:, 0, 0] = np.linspace(0.0, 0.025, 70)
    data = campaign(units=90, seed=4, effect=effect, reach=varied_reach(90))
    found = {
        one.series: one
        for one in signals(
            chart_new_units(unit_points(data, correction()), ChartRules(baseline_units=20))
        )
    }
    assert "M1 modal_frequency" in found
    assert found["M1 modal_frequency"].deviations > 1.0


def autocorrelated(units, memory, seed):
    generator = np.random.default_rng(seed)
    effect = np.zeros((units, 3, 3))
    level = 0.0
    for unit in range(units):
        level = memory * level + np.sqrt(1 - memory**2) * generator.standard_normal()
        effect[unit, 0, 0] = 0.02 * level
    return effect


def test_memory_is_modelled_and_said_not_alarmed():
    alarms = told = 0
    for seed in range(6):
        data = campaign(units=80, seed=seed, effect=autocorrelated(80, 0.85, seed), lots=1000)
        charted = chart_new_units(
            unit_points(data, correction()), ChartRules(baseline_units=25)
        ).isel(series=[0])
        alarms += bool(charted["first_signal"].values[0] != NEVER)
        told += bool(charted["autocorrelation_modelled"].values[0])
    assert told >= 4
    assert alarms <= 1


def test_known_error_of_a_noisy_unit_is_allowed_for():
    data = campaign(units=30, seed=5, reach=varied_reach(30))
    noisy = data["unit"].values == "U20"
    data["value"][noisy, 0, 0] = data["value"].values[noisy, 0, 0] * 1.05
    charted = chart_new_units(unit_points(data, correction()), ChartRules())
    assert 20 in [visit for visit, _ in units_apart(charted)]
    data["standard_error"][noisy, 0, 0] = 0.05 * 2.4 * 1000.0
    charted = chart_new_units(unit_points(data, correction()), ChartRules())
    assert signals(charted) == []


def test_units_measured_again_are_judged_by_their_own_change():
    first = campaign(units=14, seed=6)
    later = first.isel(measurement=np.flatnonzero(first["unit"].values < "U06")).copy(deep=True)
    later["measured_at"] = ("measurement", np.full(later.sizes["measurement"], "2026-09-01"))
    moved = later["unit"].values == "U03"
    later["value"][moved, 1, 0] = later["value"].values[moved, 1, 0] * 1.003
    points = unit_points(xr.concat([first, later], dim="measurement"), correction())
    again = chart_measured_again(points, ChartRules())
    found = signals(again)
    assert [one.series for one in found] == ["M2 modal_frequency"]
    assert str(again["unit"].values[found[0].since]) == "U03"
    # three thousandths is half a deviation between units: as a new unit nobody would see it
    assert signals(chart_new_units(points, ChartRules())) == []


def test_reach_of_units_the_set_was_made_from_is_not_charted():
    data = campaign(units=30, seed=7, reach=varied_reach(30))
    data["in_set"][:] = True
    charted = chart_new_units(unit_points(data, correction()), ChartRules())
    assert np.isnan(charted["deviation"].sel(series="reach").values).all()
    assert time_to_exit(charted) is None


def test_a_unit_outside_the_set_is_named():
    reach = varied_reach(20)
    reach[17] = 1.2
    assert not_held(unit_points(campaign(units=20, reach=reach), correction())) == [17]


def test_the_way_out_of_the_set_is_extrapolated_with_its_interval():
    data = campaign(units=48, seed=8, reach=varied_reach(48, seed=9, slope=0.004))
    points = unit_points(data, correction())
    charted = chart_new_units(points, ChartRules(baseline_units=24))
    found = time_to_exit(charted)
    assert found.believed
    # log reach -0.35 + 0.004 per unit, six units a week: 87.5 units, 14.6 weeks
    truth = float(points["time"].values[0]) + 7.0 * 87.5 / 6.0
    assert found.mean.low < truth < found.mean.high
    assert found.one_in_twenty.crossing < found.mean.crossing
    still = chart_new_units(
        unit_points(campaign(units=48, reach=varied_reach(48)), correction()), ChartRules()
    )
    assert not time_to_exit(still).believed


def test_a_lot_that_stands_apart_in_the_baseline_is_said():
    effect = shifted(24, 1, 1, 0.8, 6, 12)
    data = campaign(units=24, seed=10, effect=effect)
    charted = chart_new_units(unit_points(data, correction()), ChartRules(baseline_units=24))
    assert [(lot, series) for lot, series, _ in lots_that_differ(charted)][:1] == [
        ("B", "M2 damping_ratio")
    ]


def test_without_dates_units_stand_in_the_order_of_entry():
    data = campaign(units=5)
    data["measured_at"] = ("measurement", np.full(data.sizes["measurement"], ""))
    assert unit_points(data, correction()).attrs["ordered_by"] == "entry"
