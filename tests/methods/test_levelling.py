from dataclasses import replace

import numpy as np
import pytest

from identkit.methods.levelling import levelled_realisation, levelling
from identkit.methods.modal_model import modal_response
from identkit.methods.state_space import frequency_response
from tests.methods.families import plant

GRID = np.geomspace(30.0, 25e3, 400)


@pytest.mark.parametrize("base", ["free", "pivot", "none"])
def test_levelled_plant_is_factor_times_plant_without_delay(base: str) -> None:
    parameters = plant(np.random.default_rng(1), base)
    factor = levelling(parameters, 22e3)
    expected = modal_response(GRID, replace(parameters, delay=0.0))
    if factor is not None:
        expected = expected * factor(2j * np.pi * GRID)
    found = frequency_response(levelled_realisation(parameters, factor), GRID)[:, 0, 0]
    np.testing.assert_allclose(found, expected, rtol=1e-7)


def test_free_base_leaves_no_pole_at_rest() -> None:
    parameters = plant(base="free")
    system = levelled_realisation(parameters, levelling(parameters, 22e3))
    assert system.poles().real.max() < -1.0
    with pytest.raises(ValueError, match="found none"):
        levelled_realisation(parameters, None)
