import numpy as np
import pytest

from identkit.methods.series_sections import series_state_space
from identkit.methods.spectral_factor import factor_magnitude


def roots(rng, pairs, real):
    size = 10.0 ** rng.uniform(1.0, 5.0, pairs)
    damping = rng.uniform(0.002, 0.9, pairs)
    upper = size * (-damping + 1j * np.sqrt(1.0 - damping**2))
    return np.concatenate([upper, upper.conj(), -(10.0 ** rng.uniform(1.0, 5.0, real)) + 0.0j])


@pytest.mark.parametrize(
    ("poles", "zeros"), [((0, 0), (0, 0)), ((0, 1), (0, 1)), ((2, 1), (1, 3)), ((8, 0), (5, 6))]
)
def test_realisation_has_the_magnitude_poles_and_zeros(poles, zeros):
    rng = np.random.default_rng(poles[0])
    pole, zero, gain = roots(rng, *poles), roots(rng, *zeros), 0.37
    a, b, c, d = series_state_space(pole, zero, gain)
    order = pole.size
    assert a.shape == (order, order)
    assert d[0, 0] == pytest.approx(gain)
    omega = np.geomspace(1.0, 1e6, 60)
    identity = np.eye(order)
    response = np.array([(c @ np.linalg.solve(1j * w * identity - a, b) + d)[0, 0] for w in omega])
    expected = np.array(
        [gain * np.prod(np.append(1.0, (1j * w - zero) / (1j * w - pole))) for w in omega]
    )
    np.testing.assert_allclose(response, expected, rtol=1e-9)
    np.testing.assert_allclose(np.abs(response), factor_magnitude(omega, pole, zero, gain))
    if order:
        found = np.linalg.eigvals(a - b @ c / gain)
        assert all(np.abs(found - z).min() < 1e-6 * abs(z) for z in zero)


def test_states_are_scaled():
    rng = np.random.default_rng(3)
    a, b, c, _ = series_state_space(roots(rng, 6, 0), roots(rng, 6, 0), 2.0)
    largest = np.abs(np.linalg.eigvals(a)).max()
    assert np.abs(a).max() < 100.0 * largest
    assert np.abs(b).max() < 100.0 * largest**0.5
    assert np.abs(c).max() < 100.0 * largest**0.5
