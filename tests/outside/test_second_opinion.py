"""Modes by the subspace package sippy-unipi against the known plant of the invented bench."""

import importlib.util

import numpy as np
import pytest

from identkit.methods.burst_decoding import decode_bursts, follow_position
from identkit.methods.subspace_opinion import SubspaceModes, disagrees, subspace_modes
from identkit.synthetic_record_files import invent_bench_campaign, recorded_plant
from identkit.synthetic_records import InventedRecorder, invent_record, invented_excitation

pytestmark = pytest.mark.outside

needs_package = pytest.mark.skipif(
    importlib.util.find_spec("sippy_unipi") is None, reason="sippy-unipi is not installed"
)


@needs_package
@pytest.mark.slow
def test_it_finds_the_modes_of_the_bench_and_contradicts_only_wrong_ones():
    plant = recorded_plant(invent_bench_campaign(units=1, heads=1).responses[0])
    recorder = InventedRecorder()
    excitation = invented_excitation(plant, recorder)
    record = invent_record(plant, excitation, recorder, np.random.default_rng(1))
    position = follow_position(decode_bursts(record.in_phase, record.quadrature))
    start = excitation.size
    found = subspace_modes(record.drive[start:], position[start:], recorder.period)
    assert isinstance(found, SubspaceModes)
    # the first mode hardly shows; all others must
    for frequency in plant.modal_frequency[1:]:
        assert np.min(np.abs(found.frequency - frequency)) < 0.02 * frequency
    error = 1e-4 * plant.modal_frequency
    ratio = plant.damping_ratio
    assert not disagrees(plant.modal_frequency, ratio, error, found).any()
    wrong = plant.modal_frequency.copy()
    wrong[4] *= 1.06
    assert disagrees(wrong, ratio, error, found).tolist() == [False] * 4 + [True] + [False] * 3


def test_short_records_are_refused():
    assert "too short" in subspace_modes(np.ones(100), np.ones(100), 1e-4)


@needs_package
def test_the_time_limit_holds():
    noise = np.random.default_rng(1).standard_normal((2, 30_000))
    assert subspace_modes(*noise, 1e-4, time_limit=0.05) == "no result within 0.05 s"


@needs_package
def test_a_record_it_fails_on_is_said():
    assert "failed" in subspace_modes(np.full(9000, np.nan), np.full(9000, np.nan), 1e-4)


def test_a_mode_it_does_not_see_is_no_contradiction():
    opinion = SubspaceModes(np.array([5000.0]), np.array([0.02]), np.array([1.0]))
    seen = disagrees(np.array([1000.0, 5300.0]), np.full(2, 0.02), np.ones(2), opinion)
    assert seen.tolist() == [False, True]
    none = SubspaceModes(*[np.zeros(0)] * 3)
    assert not disagrees(np.array([1000.0]), np.array([0.1]), np.ones(1), none).any()
