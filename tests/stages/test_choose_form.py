"""Form "auto": each form is chosen where it is the cheapest, and the reason says so."""

from dataclasses import replace

import numpy as np
import pytest

from identkit.methods.modal_model import ModalParameters
from identkit.stages.bound import bound_spread
from identkit.stages.choose_form import TRIED, bound_in_cheapest_form
from identkit.stages.nominal import choose_nominal
from tests.methods.families import family, plant
from tests.stages.invented_modes import modes_dataset, population_dataset

LINES = np.geomspace(5.0, 10e3, 150)
EVEN = [(1.0, 1.0)]


def pivot(frequency: float, feedthrough: float = 0.0) -> ModalParameters:
    """Return a strongly damped low mode beside one weak high mode."""
    return ModalParameters(
        modal_frequency=np.array([3000.0]),
        damping_ratio=np.array([0.3]),
        residue=np.array([1e4]),
        residue_rate=np.zeros(1),
        base="pivot",
        base_frequency=frequency,
        base_damping_ratio=0.7,
        base_residue=1e6,
        feedthrough=feedthrough,
    )


def cheapest(plants: list[ModalParameters], centre: ModalParameters, top=10e3, **options: object):
    modes = modes_dataset(plants)
    lines = np.append(LINES, top)
    nominal = choose_nominal(modes, population_dataset(centre), lines=lines)
    return bound_in_cheapest_form(modes, nominal, **options), modes, nominal


def crossovers(bound) -> dict[str, float]:
    names = bound["form_trial"].values.tolist()
    return dict(zip(names, bound["form_trial_crossover"].values.tolist(), strict=True))


def test_stiffness_that_may_halve_is_cheapest_as_an_inverse_error() -> None:
    """At rest P0/P - 1 = w^2/w0^2 - 1 stays below 1, P/P0 - 1 passes it."""
    plants = [pivot(100.0 * share) for share in (0.6, 0.8, 1.0, 1.3)]
    bound, _, _ = cheapest(plants, pivot(100.0), order=4, profile=EVEN)
    assert bound.attrs["form"] == "inverse-multiplicative"
    found = crossovers(bound)
    assert found["multiplicative"] == 0.0
    assert found["inverse-multiplicative"] > 0.0
    assert bound.attrs["form_rule"].startswith("Form inverse-multiplicative was chosen by price")


def test_an_uncertain_direct_path_is_cheapest_as_a_constant_absolute_error() -> None:
    plants = [pivot(100.0, gain) for gain in (-0.02, 0.0, 0.02)]
    options = {"order": 0, "profile": EVEN, "radius_floor": 1e-4}
    bound, _, _ = cheapest(plants, pivot(100.0), **options)
    assert bound.attrs["form"] == "additive"
    np.testing.assert_allclose(bound["weight_magnitude"].values, 0.02, rtol=1e-6)


def test_where_modes_move_the_first_form_is_kept_as_it_is_bound_alone() -> None:
    bound, modes, nominal = cheapest(family(5, 5, spread=0.3), plant(), order=4)
    assert bound.attrs["form"] == "multiplicative"
    alone = bound_spread(modes, nominal, form="multiplicative", order=4)
    np.testing.assert_array_equal(bound["weight_pole"].values, alone["weight_pole"].values)
    found = crossovers(bound)
    assert list(found) == list(TRIED)
    assert found["multiplicative"] >= 0.99 * max(found.values())


def test_a_form_that_does_not_fit_or_leaves_plants_out_is_passed_over_and_said() -> None:
    free = [replace(one, base_gain=1e8) for one in family(5, 5, base="free")]
    bound, _, _ = cheapest(free, plant(base="free"), order=2)
    assert "no set in form additive" in bound.attrs["form_rule"]
    bound, _, _ = cheapest(family(6, 5), plant(), top=20e3, order=2)
    missing = dict(
        zip(bound["form_trial"].values, bound["form_trial_left_out"].values, strict=True)
    )
    assert missing == {"multiplicative": 0, "inverse-multiplicative": 3, "additive": 0}
    assert "which leaves out 3 more plants" in bound.attrs["form_rule"]
    assert bound.attrs["form"] != "inverse-multiplicative"


@pytest.mark.slow
def test_a_study_may_ask_for_it(results_in_form) -> None:
    text = (results_in_form("auto") / "certificate.json").read_text(encoding="utf-8")
    assert "was chosen by price" in text
