"""The same units measured quietly and loudly: the population must come out the same."""

import numpy as np
import pytest
import simulated_campaigns as simulated

from identkit import describe_population, fit_modes, pair_modes, screen


def described(noise, monkeypatch):
    monkeypatch.setattr(simulated, "NOISE", noise)
    plants = simulated.draw_true_plants("normal", 16, np.random.default_rng(4))
    responses = simulated.measured(plants, np.random.default_rng(5))
    marks = screen(responses)
    fits = fit_modes(responses, marks, base="pivot", modes="auto", delay=True)
    return describe_population(pair_modes(fits, responses, marks))


@pytest.mark.slow
def test_one_and_eight_percent_noise_give_one_spread(monkeypatch):
    quiet, loud = described(0.01, monkeypatch), described(0.08, monkeypatch)
    assert quiet.sizes["mode"] == loud.sizes["mode"] == 4
    spread = {name: data["unit_deviation"].values for name, data in (("1", quiet), ("8", loud))}
    noise = {name: data["fit_deviation"].values for name, data in (("1", quiet), ("8", loud))}
    # eight times the noise: without taking it out, the loud spread would be the root sum of both
    assert np.median(noise["8"] / noise["1"]) == pytest.approx(8.0, rel=0.15)
    # how far both may differ: what the loud measurement adds to the error of a deviation
    allowed = 3.0 * noise["8"] / np.sqrt(2.0 * 15)
    loudest = np.hypot(spread["1"], noise["8"])
    assert np.all(np.abs(spread["8"] - spread["1"]) < allowed + 0.02 * spread["1"])
    # where noise is a good part of what is seen, the difference is told from not taking it out
    noisy = noise["8"] > 0.5 * spread["1"]
    assert noisy.any()
    off = np.abs(spread["8"] - spread["1"])[noisy]
    assert np.median(off) < np.median(np.abs(loudest - spread["1"])[noisy])
