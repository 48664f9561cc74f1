"""Forms of scalar sets through the stages: who is a member, what the set says of itself."""

from dataclasses import replace

import numpy as np
import pytest
import xarray as xr

from identkit.errors import InputError
from identkit.methods.modal_model import ModalParameters
from identkit.plant_set.claims import check_claims
from identkit.plant_set.reach import reach_of_plants
from identkit.plant_set.sample import draw_members
from identkit.report.form_words import limit_of_control
from identkit.stages.bound import bound_spread
from identkit.stages.export import build_set
from identkit.stages.nominal import choose_nominal
from identkit.stages.set_plants import set_plants
from tests.methods.families import family, plant
from tests.stages.invented_modes import modes_dataset, population_dataset

LINES = np.geomspace(50.0, 22e3, 200)
FORMS = ("multiplicative", "input-multiplicative", "additive", "inverse-multiplicative")


def one_mode(damping_of_zeros: float) -> ModalParameters:
    """Return a mode at 1 kHz beside a direct path: zeros at 1.4 kHz, damped as asked."""
    natural = 2000.0 * np.pi
    zero = 1.4 * natural
    return ModalParameters(
        modal_frequency=np.array([1000.0]),
        damping_ratio=np.array([0.05]),
        residue=np.array([zero**2 - natural**2]),
        residue_rate=np.array([2.0 * damping_of_zeros * zero - 2.0 * 0.05 * natural]),
        base="none",
        feedthrough=1.0,
    )


TURNING = [one_mode(0.05), one_mode(0.06), one_mode(-0.05)]


def stages(plants: list[ModalParameters], centre: ModalParameters, form: str):
    modes = modes_dataset(plants)
    nominal = choose_nominal(modes, population_dataset(centre), lines=LINES)
    return {"nominal": nominal, "bound": bound_spread(modes, nominal, form=form, order=4)}, modes


@pytest.fixture(scope="module", params=FORMS)
def made(request):
    data, modes = stages(family(6, 5, spread=0.3), plant(), request.param)
    return build_set(**data, modes=modes)


def test_sets_of_every_form_bear_out_their_claims(made) -> None:
    assert check_claims(made) == []
    assert made.certificate.measured.held == made.certificate.measured.of == 6
    reach = reach_of_plants(made, made.plants).value
    assert reach.max() == pytest.approx(1.0, abs=1e-6)
    assert made.weights.right.states == 0


def test_members_have_the_unstable_poles_of_the_nominal(made) -> None:
    for member in draw_members(made, 12, seed=3):
        assert np.linalg.eigvals(member.state_space().A).real.max() < 0.0


def test_words_name_the_condition_of_the_form(made) -> None:
    text = limit_of_control(made)
    condition = {"additive": "|W T / P0| < 1", "inverse-multiplicative": "|W S| < 1"}
    assert condition.get(made.form, "|W T| < 1") in text


@pytest.mark.parametrize("form", ["multiplicative", "additive"])
def test_zeros_across_the_axis_do_no_harm_to_direct_forms(form: str) -> None:
    data, _ = stages(TURNING, one_mode(0.05), form)
    assert data["bound"]["response_used"].values.all()


def test_inverse_forms_leave_out_what_turns_around_zero() -> None:
    data, modes = stages(TURNING, one_mode(0.05), "inverse-multiplicative")
    bound: xr.Dataset = data["bound"]
    assert bound["response_used"].values.tolist() == [True, True, False]
    assert "around zero" in str(bound["exclusion_reason"].values[2])
    contents = build_set(**data, modes=modes)
    assert [each.label for each in contents.certificate.measured.excluded] == ["r02"]
    reach = reach_of_plants(contents, set_plants(modes)[0]).value
    assert np.isfinite(reach[:2]).all()
    assert np.isinf(reach[2])


def test_additive_sets_of_free_plants_are_refused() -> None:
    free = [replace(one, base="free", base_gain=1e8) for one in family(3, 5, base="free")]
    with pytest.raises(InputError, match="infinite at rest"):
        stages(free, plant(base="free"), "additive")
