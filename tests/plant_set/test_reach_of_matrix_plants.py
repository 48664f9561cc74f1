"""Reach of plants with several inputs and outputs, by form and shape."""

from dataclasses import replace

import numpy as np
import pytest

from identkit.errors import InputError
from identkit.plant_set import fields as f
from identkit.plant_set.claims import check_claims
from identkit.plant_set.interconnection import output_multiplicative
from identkit.plant_set.reach import Surroundings, reach_of_plants, reach_of_response
from identkit.plant_set.response import plant_response
from identkit.plant_set.sample import stack_diagonal, static
from identkit.plant_set.stacked import stack

BAND = (50.0, 20_000.0)
SHAPES = {
    "additive": [(2, 2), (2, 1), (1, 2)],
    "multiplicative": [(2, 2), (2, 1)],
    "input-multiplicative": [(2, 2), (1, 2)],
    "inverse-multiplicative": [(2, 2)],
}
CASES = [(form, shape) for form, shapes in SHAPES.items() for shape in shapes]


def matrix_plant(shape, seed, *, spread=0.01):
    """Three modes with rank-one residues, a pivot, and a feedthrough of full rank."""
    generator = np.random.default_rng(seed)
    mode_shapes = np.random.default_rng(100)
    outputs, inputs = shape
    left, right = (mode_shapes.uniform(0.3, 1.0, (3, n)) for n in shape)
    gain = 2.0e6 * (1.0 + spread * generator.standard_normal((3, 1, 1)))
    direct = 4e-3 * np.eye(outputs, inputs)
    return f.FittedPlant(
        response=f"P{seed}",
        modal_frequency=np.array([900.0, 3000.0, 8000.0])
        * np.exp(spread * generator.standard_normal(3)),
        damping_ratio=np.array([0.02, 0.015, 0.03]),
        residue=gain * left[:, :, None] * right[:, None, :],
        residue_rate=np.zeros((3, outputs, inputs)),
        base="pivot",
        base_gain=np.zeros(shape),
        base_frequency=80.0,
        base_damping_ratio=0.4,
        base_residue=1.0e6 * np.ones(shape),
        feedthrough=direct,
        delay=0.0,
    )


def state_space(plant):
    """A state space of a matrix plant, one pair of states per mode and input."""
    natural = 2 * np.pi * np.append(plant.modal_frequency, plant.base_frequency)
    loss = 2 * np.append(plant.damping_ratio, plant.base_damping_ratio) * natural
    residue = np.concatenate([plant.residue, plant.base_residue[None]])
    outputs, inputs = plant.feedthrough.shape
    pairs = []
    for w, c, r in zip(natural, loss, residue, strict=True):
        for column in range(inputs):
            drive = np.zeros((2, inputs))
            drive[1, column] = w
            seen = np.zeros((outputs, 2))
            seen[:, 0] = r[:, column] / w**2
            pairs.append(f.Matrices(np.array([[0, w], [-w, -c]]), drive, seen, None))
    drift = stack_diagonal(
        [replace(p, B=np.zeros((2, 0)), C=np.zeros((0, 2)), D=np.zeros((0, 0))) for p in pairs]
    ).A
    return f.Matrices(
        drift,
        np.vstack([p.B for p in pairs]),
        np.hstack([p.C for p in pairs]),
        plant.feedthrough,
    )


def first_order(gain, hertz):
    pole = 2 * np.pi * hertz
    return f.Matrices(
        np.array([[-pole]]), np.array([[pole]]), np.array([[-0.9 * gain]]), np.array([[gain]])
    )


def make(small_set, form, shape):
    outputs, inputs = shape
    nominal = state_space(matrix_plant(shape, 0, spread=0.0))
    rows, columns = {
        "additive": (outputs, inputs),
        "input-multiplicative": (inputs, inputs),
    }.get(form, (outputs, outputs))
    left = stack_diagonal([first_order(0.3 + 0.1 * k, 4000.0) for k in range(rows)])
    right = static(np.eye(columns) + 0.1)
    weights = f.Weights(left, right)
    return replace(
        small_set,
        form=form,
        inputs=tuple(f.Channel(f"u{k}", "A") for k in range(inputs)),
        outputs=tuple(f.Channel(f"y{k}", "um") for k in range(outputs)),
        nominal=f.Nominal(nominal.A, nominal.B, nominal.C, nominal.D),
        weights=weights,
        band=BAND,
    )


def test_stacked_plants_respond_like_each_alone():
    plants = [matrix_plant((2, 3), seed) for seed in range(3)]
    grid = np.geomspace(*BAND, 50)
    together = stack(plants).response(np.arange(3), np.broadcast_to(grid, (3, 50)))
    for row, plant in enumerate(plants):
        alone = np.moveaxis(plant_response(plant, grid), -1, 0)
        np.testing.assert_allclose(together[row], alone, rtol=1e-12)


@pytest.mark.parametrize(("form", "shape"), CASES)
def test_reach_is_the_supremum_of_the_pointwise_norm(small_set, form, shape):
    contents = make(small_set, form, shape)
    plants = [matrix_plant(shape, seed) for seed in (1, 2, 3)]
    reach = reach_of_plants(contents, plants)
    grid = np.geomspace(*BAND, 20_001)
    around = Surroundings(contents)
    for value, hertz, plant in zip(reach.value, reach.frequency, plants, strict=True):
        slow = around.reach_at(grid, np.moveaxis(plant_response(plant, grid), -1, 0))
        assert slow.max() <= value * (1 + 1e-9)
        assert value == pytest.approx(slow.max(), rel=1e-3)
        there = np.moveaxis(plant_response(plant, np.array([hertz])), -1, 0)
        assert around.reach_at(np.array([hertz]), there)[0] == pytest.approx(value, rel=1e-9)
        at_points = reach_of_response(contents, grid, plant_response(plant, grid))
        assert at_points.value[0] == pytest.approx(slow.max(), rel=1e-12)


@pytest.mark.parametrize(
    ("form", "shape"), [("multiplicative", (1, 2)), ("input-multiplicative", (2, 1))]
)
def test_a_form_that_cannot_describe_the_shape_is_refused(small_set, form, shape):
    contents = make(small_set, form, shape)
    with pytest.raises(InputError, match=f"form '{form}'"):
        reach_of_plants(contents, [matrix_plant(shape, 1)])


def test_members_of_a_matrix_set_have_reach_at_most_one(small_set):
    """Interconnection, sampling and reach written apart have to agree on what the set is."""
    contents = make(small_set, "multiplicative", (2, 2))
    around = output_multiplicative(contents.nominal, contents.weights.left, contents.weights.right)
    whole = replace(contents, interconnection=around, plants=())
    grid = np.geomspace(*BAND, 300)
    largest = []
    for member in whole.sample(30, seed=3):
        reach = reach_of_response(whole, grid, member.frequency_response(grid))
        largest.append(reach.value[0])
    assert max(largest) <= 1.0 + 1e-6
    assert max(largest) > 0.9


def test_a_free_base_set_stands_its_claims(makers):
    """Double integrators in plant and nominal divide out, down to rest."""
    nominal = makers.plant_matrices(makers.nominal_plant("free"))
    contents = makers.make_set(makers.family(6, base="free"), nominal, makers.lead_weight(1.0))
    assert check_claims(contents) == []
    from_rest = replace(contents, band=(0.0, 20_000.0))
    reach = reach_of_plants(from_rest, contents.plants)
    assert np.all(np.isfinite(reach.value))
    assert np.all(reach.value >= contents.reach().value * (1 - 1e-9))
