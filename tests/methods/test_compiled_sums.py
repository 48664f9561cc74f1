"""Compiled rows against their numpy twins."""

import numpy as np
import pytest

from identkit.methods import compiled_sums as rows

pytest.importorskip("numba")
TIGHT = {"rtol": 1e-11, "atol": 1e-11}


@pytest.fixture
def case():
    rng = np.random.default_rng(5)
    x = np.geomspace(2e-3, 1.0, 301)
    natural = np.exp(rng.uniform(np.log(3e-3), 0.0, 6))
    damping = np.exp(rng.uniform(np.log(1e-3), np.log(0.8), 6))
    weight = rng.uniform(0.5, 2.0, x.size)
    return rng, x, weight, natural**2, 2 * damping * natural


def scaled(values):
    return values / np.max(np.abs(values), axis=-1, keepdims=True)


def test_section_rows(case):
    _, x, weight, stiffness, rate = case
    fast, plain = np.empty((6, 602)), np.empty((6, 602))
    rows.section_rows(x, weight, stiffness, rate, fast)
    rows.section_rows_numpy(x, weight, stiffness, rate, plain)
    np.testing.assert_allclose(scaled(fast), scaled(plain), **TIGHT)


def test_derivative_rows(case):
    rng, x, weight, stiffness, rate = case
    residue, slope = rng.standard_normal((2, 6))
    fast, plain = np.empty((12, 602)), np.empty((12, 602))
    rows.derivative_rows(x, weight, stiffness, rate, residue, slope, fast)
    rows.derivative_rows_numpy(x, weight, stiffness, rate, residue, slope, plain)
    np.testing.assert_allclose(scaled(fast), scaled(plain), **TIGHT)


def test_relocation_rows(case):
    rng, x, weight, stiffness, rate = case
    target = rng.standard_normal(x.size) + 1j * rng.standard_normal(x.size)
    fast, plain = np.empty((24, 602)), np.empty((24, 602))
    rows.relocation_rows(x, weight, target, stiffness, rate, fast)
    rows.relocation_rows_numpy(x, weight, target, stiffness, rate, plain)
    np.testing.assert_allclose(scaled(fast), scaled(plain), **TIGHT)


@pytest.mark.parametrize("with_rate", [False, True])
def test_window_gains(case, with_rate):
    rng, x, weight, stiffness, rate = case
    residual = rng.standard_normal(602)
    low = np.maximum(np.searchsorted(x, np.sqrt(stiffness)) - 20, 0)
    high = np.minimum(low + 40, x.size)
    fast, plain = np.empty(6), np.empty(6)
    rows.window_gains(x, weight, residual, stiffness, rate, low, high, with_rate, fast)
    rows.window_gains_numpy(x, weight, residual, stiffness, rate, low, high, with_rate, plain)
    np.testing.assert_allclose(fast, plain, rtol=1e-9)


def test_rows_are_the_terms_of_the_model(case):
    _, x, weight, stiffness, rate = case
    out = np.empty((6, 602))
    rows.section_rows(x, weight, stiffness, rate, out)
    s = 1j * x
    expected = weight / (s**2 + rate[2] * s + stiffness[2])
    np.testing.assert_allclose(out[2, :301] + 1j * out[2, 301:], expected, rtol=1e-10)


def test_whole_fit_is_the_same_without_compiled_rows(monkeypatch):
    from identkit.methods import modal_problem, order_selection, pole_relocation, starting_poles
    from identkit.methods.modal_fit import fit_modal_model
    from tests.methods.invented_plants import draw

    drawn = draw(np.random.default_rng(3), modes=4, points=400)
    fast = fit_modal_model(drawn.frequency, drawn.response, drawn.variance)
    for module in (modal_problem, order_selection, pole_relocation, starting_poles):
        for name in ("section_rows", "derivative_rows", "relocation_rows", "window_gains"):
            if hasattr(module, name):
                monkeypatch.setattr(module, name, getattr(rows, f"{name}_numpy"))
    plain = fit_modal_model(drawn.frequency, drawn.response, drawn.variance)
    for name in ("modal_frequency", "damping_ratio", "residue"):
        left, right = getattr(plain.parameters, name), getattr(fast.parameters, name)
        np.testing.assert_allclose(left, right, rtol=1e-6)
    size = np.sqrt(np.diag(fast.covariance))
    off = (plain.covariance - fast.covariance) / np.outer(size, size)
    np.testing.assert_allclose(off, 0.0, atol=1e-5)
