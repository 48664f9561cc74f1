"""A controller designed on the demo's set file stabilises every true plant of the campaign.

The loop is shaped by hand (integrator, lead, roll-off) and its crossover is the highest at which
the set stays robustly stable: |W T| < 1 (Doyle and Stein 1981). python-control does the algebra.
"""

import numpy as np
import pytest

control = pytest.importorskip("control")

from identkit.methods.modal_model import ModalParameters  # noqa: E402
from identkit.methods.state_space import modal_realisation  # noqa: E402
from identkit.plant_set.files import load_set  # noqa: E402

pytestmark = pytest.mark.slow
BAND = np.geomspace(20.0, 40e3, 6000)


def shaped(crossover, gain):
    """Integrator to a tenth of the crossover, lead around it, second-order roll-off beyond."""
    w = 2 * np.pi * crossover
    s = control.tf("s")
    lead = (1 + 3 * s / w) / (1 + s / (3 * w))
    rolloff = 1 / (1 + 1.4 * s / (4 * w) + (s / (4 * w)) ** 2)
    return control.ss(gain * (1 + w / (10 * s)) * lead * rolloff)


def response(system):
    return np.asarray(system(2j * np.pi * BAND, squeeze=True))


def design(nominal, weight):
    """Return the fastest controller of the family with |W T| < 0.9 and a stable nominal loop."""
    plant, bound = response(nominal), np.abs(response(weight))
    best = None
    for crossover in np.geomspace(100.0, 2000.0, 25):
        raw = shaped(crossover, 1.0)
        at = int(np.argmin(np.abs(BAND - crossover)))
        controller = shaped(crossover, 1.0 / abs(plant[at] * response(raw)[at]))
        loop = plant * response(controller)
        robust = np.max(bound * np.abs(loop / (1 + loop))) < 0.9
        if robust and is_stable(nominal, controller):
            best = crossover, controller
    assert best is not None
    return best


def is_stable(plant, controller):
    return bool(np.max(control.feedback(plant * controller, 1).poles().real) < 0)


def true_plant(row):
    values = {
        key: np.array(value) if isinstance(value, list) else value
        for key, value in row["plant"].items()
    }
    built = modal_realisation(ModalParameters(**values), 6)
    return control.ss(built.A, built.B, built.C, built.D)


def test_it_stabilises_every_plant_of_the_campaign(demo):
    objects = load_set(demo.results / "set.json").to_control()
    crossover, controller = design(objects["nominal"], objects["left"])
    assert crossover > 300.0
    unstable = [
        name
        for name, row in demo.truth().items()
        if row["labels"]["unit"] != "U13" and not is_stable(true_plant(row), controller)
    ]
    assert not unstable


def test_it_stabilises_members_drawn_from_the_set(demo):
    plant_set = load_set(demo.results / "set.json")
    objects = plant_set.to_control()
    _, controller = design(objects["nominal"], objects["left"])
    for member in plant_set.sample(50, seed=3):
        drawn = member.state_space()
        assert is_stable(control.ss(drawn.A, drawn.B, drawn.C, drawn.D), controller)
