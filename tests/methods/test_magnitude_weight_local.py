"""The certified optimum against local optimisation of poles and zeros from many starts."""

import numpy as np
import pytest
from scipy.optimize import minimize

from identkit.methods.magnitude_weight import fit_magnitude_weight


def spread_db(parameters, log_omega, radius_db):
    """Excess of a weight with damped pairs, gain set so that it just covers.

    Parameters per section: log natural frequency and log damping ratio of pole and of zero.
    """
    magnitude_db = np.zeros(log_omega.size)
    for pole, pole_damping, zero, zero_damping in parameters.reshape(-1, 4):
        for sign, place, damping in ((1.0, zero, zero_damping), (-1.0, pole, pole_damping)):
            u = np.exp(2.0 * (log_omega - place))
            square = (1.0 - u) ** 2 + 4.0 * np.exp(2.0 * damping) * u
            magnitude_db = magnitude_db + sign * 10.0 * np.log10(square)
    difference = magnitude_db - radius_db
    return difference.max() - difference.min()


def best_of_local_fits(frequency, radius, sections, starts, seed):
    rng = np.random.default_rng(seed)
    log_omega, radius_db = np.log(frequency), 20.0 * np.log10(radius)
    ends = log_omega[[0, -1]]
    best = np.inf
    for _ in range(starts):
        places = rng.uniform(*ends, (sections, 2))
        damping = rng.uniform(-2.0, 0.5, (sections, 2))
        start = np.column_stack([places[:, 0], damping[:, 0], places[:, 1], damping[:, 1]]).ravel()
        local = minimize(
            spread_db, start, (log_omega, radius_db), "Nelder-Mead", options={"maxiter": 1500}
        )
        best = min(best, local.fun)
    return best


def target(name, frequency):
    if name == "kinked":
        return np.exp(np.interp(np.log(frequency), [2.0, 4.0, 6.0, 8.0, 10.0], [-3, 0, -1, 1, 0]))
    x = np.minimum(frequency * 2e-4, np.pi)
    return np.maximum(0.02, 2.0 * np.sin(x / 2.0))


@pytest.mark.parametrize(("name", "sections"), [("kinked", 1), ("kinked", 2), ("delay", 1)])
def test_never_above_the_best_of_twelve_local_fits(name, sections):
    frequency = np.geomspace(10.0, 2e4, 150)
    radius = target(name, frequency)
    weight = fit_magnitude_weight(frequency, radius, 2 * sections)
    local = best_of_local_fits(frequency, radius, sections, 12, seed=sections)
    assert weight.excess_db <= local + 0.02
    assert weight.floor_db <= local + 1e-9
