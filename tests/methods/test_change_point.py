import numpy as np
import pytest

from identkit.methods.change_point import change_point, mean_segments
from identkit.methods.lag_one_autocorrelation import lag_one_autocorrelation
from identkit.methods.trend_crossing import trend_crossing


def test_a_step_is_placed_and_its_confidence_set_covers():
    generator = np.random.default_rng(1)
    covered = 0
    for _ in range(200):
        values = generator.standard_normal(40)
        values[25:] += 1.5
        covered += 25 in change_point(values).confidence_set(0.9)
    assert 0.82 <= covered / 200 <= 0.99


def test_without_a_step_the_chance_is_a_bound():
    generator = np.random.default_rng(2)
    chances = [change_point(generator.standard_normal(30)).chance for _ in range(400)]
    assert np.mean(np.array(chances) < 0.05) <= 0.05 + 3 * np.sqrt(0.05 * 0.95 / 400)


def test_segments_of_a_lot_that_came_and_went():
    values = np.concatenate([np.zeros(12), np.full(8, 6.0), np.zeros(12)])
    values += 0.5 * np.random.default_rng(3).standard_normal(32)
    assert mean_segments(values, 0.01) == [(0, 12), (12, 20), (20, 32)]


def test_too_few_points_have_no_change():
    assert change_point(np.zeros(10)) is None
    assert change_point(np.array([1.0, 2.0, 3.0])) is None


@pytest.mark.parametrize(("memory", "found"), [(0.85, True), (0.0, False)])
def test_memory_is_told_from_independence(memory, found):
    generator = np.random.default_rng(4)
    values, hits = np.zeros(40), 0
    for _ in range(100):
        noise = generator.standard_normal(40)
        values[0] = noise[0]
        for at in range(1, 40):
            values[at] = memory * values[at - 1] + np.sqrt(1 - memory**2) * noise[at]
        hits += lag_one_autocorrelation(values).chance < 0.01
    assert hits > 90 if found else hits < 6


def test_a_trend_meets_its_level_where_it_should():
    generator = np.random.default_rng(5)
    time = np.linspace(0.0, 60.0, 30)
    covered = 0
    for _ in range(200):
        line = trend_crossing(
            time, -0.5 + 0.005 * time + 0.05 * generator.standard_normal(30), 0.0, confidence=0.9
        )
        covered += line.low <= 100.0 <= line.high
    assert 0.84 <= covered / 200 <= 0.96
    assert line.crossing == pytest.approx(100.0, abs=25.0)


def test_without_a_trend_nothing_is_foretold():
    values = np.random.default_rng(6).standard_normal(30) - 3.0
    line = trend_crossing(np.arange(30.0), values, 0.0)
    assert line.high == np.inf
    assert trend_crossing(np.zeros(5), np.arange(5.0), 0.0) is None
