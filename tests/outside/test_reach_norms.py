"""Certified ratio of plant and weight against an independent library's norm of W^-1 (P-P0)/P0."""

from dataclasses import replace

import numpy as np
import pytest

from identkit.forms.between_points import largest_ratio
from identkit.forms.comparison import CommonPart, PlantComparison
from identkit.forms.multiplicative import MULTIPLICATIVE
from identkit.forms.nominal_plant import NominalPlant
from identkit.methods.magnitude_weight import MagnitudeWeight
from identkit.methods.modal_model import ModalParameters
from identkit.methods.state_space import (
    StateSpace,
    inverse,
    modal_realisation,
    negative,
    parallel,
    series,
)
from tests.methods.families import family, plant

pytestmark = pytest.mark.outside
WEIGHT = MagnitudeWeight(
    2, 0.0, 0.0, 0.0, 0.0,
    2.0 * np.pi * np.array([-9e3 + 3e3j, -9e3 - 3e3j]),
    2.0 * np.pi * np.array([-400.0 + 0j, -2e3]), 3.0, 0,
)  # fmt: skip


def invertible(parameters: ModalParameters) -> ModalParameters:
    """Give the plant a feedthrough large enough for a state-space inverse, and no delay."""
    return replace(parameters, feedthrough=2.0, delay=0.0)


@pytest.mark.parametrize("seed", range(4))
def test_largest_ratio_against_slycot(seed: int) -> None:
    slycot = pytest.importorskip("slycot")
    nominal = invertible(plant(base="none"))
    one = invertible(family(1, seed, base="none")[0])
    centre = modal_realisation(nominal)
    error = parallel([modal_realisation(one), negative(centre)])
    weight = StateSpace(*WEIGHT.state_space())
    whole = series(series(error, inverse(centre)), inverse(weight))
    states = whole.states
    expected, peak = slycot.ab13dd(
        "C", "I", "S", "D", states, 1, 1,
        whole.A, np.eye(states), whole.B, whole.C, whole.D, tol=1e-9,
    )  # fmt: skip
    common = CommonPart(NominalPlant(nominal, 0), 1.0, 1e6, MULTIPLICATIVE)
    comparison = PlantComparison(one, common)
    found = largest_ratio(comparison, WEIGHT, 1e3)
    assert found.ratio == pytest.approx(expected, rel=1e-6)
    assert 2.0 * np.pi * found.frequency == pytest.approx(peak, rel=1e-3)
