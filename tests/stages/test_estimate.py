"""Records of the invented bench against its known plants, and what is refused or marked."""

import json
from dataclasses import replace

import numpy as np
import pytest
from scipy.signal import lfilter

from identkit.errors import InputError
from identkit.grids import load, save
from identkit.methods.held_modal_model import held_response
from identkit.methods.modal_model import modal_response
from identkit.methods.schroeder_multisine import multisine
from identkit.stages.estimate import estimate_responses
from identkit.stages.record_screening import method_sentences, record_sentences
from identkit.synthetic import InventedBench, invent_campaign
from identkit.synthetic_records import (
    InventedRecorder,
    invent_record,
    invented_excitation,
    invented_loop,
)

RECORDER = InventedRecorder(lines=1200)
BENCH = {
    "sample_period": RECORDER.period,
    "in_phase": "n",
    "quadrature": "q",
    "tracks_per_inch": 3e5,
    "sectors": 420,
    "spindle_speed": 7200.0,
}


def plants(units=2):
    campaign = invent_campaign(
        units=units, heads=1, temperatures=(25.0,), bench=InventedBench(points=2)
    )
    return [
        replace(
            each.plant,
            residue=1e3 * each.plant.residue,
            base_residue=1e3 * each.plant.base_residue,
            feedthrough=1e3 * each.plant.feedthrough,
        )
        for each in campaign.responses
    ]


@pytest.fixture(scope="module")
def bench(tmp_path_factory):
    """Two devices, two experiments each, as files; and their plants by name."""
    folder, generator = tmp_path_factory.mktemp("bench"), np.random.default_rng(3)
    devices = plants()
    one = invented_excitation(devices[0], RECORDER).astype(np.float32).astype(float)
    for unit, plant in enumerate(devices):
        for experiment in range(2):
            record = invent_record(plant, one, RECORDER, generator)
            np.savez(
                folder / f"U{unit}_{experiment}.npz",
                r=record.excitation.astype(np.float32),
                u=record.drive.astype(np.float32),
                n=record.in_phase.astype(np.float32),
                q=record.quadrature.astype(np.float32),
            )
    return folder, {f"U{k}": plant for k, plant in enumerate(devices)}


def scaled_errors(estimated, truth):
    """|error|^2 over variance at usable points, one response after the other."""
    found = []
    for k, name in enumerate(estimated["unit"].values):
        use = estimated["usable_mask"].values[k, 0, 0]
        error = estimated["frequency_response"].values[k, 0, 0] - truth(str(name))
        variance = estimated["frequency_response_variance"].values[k, 0, 0]
        found.append((np.abs(error) ** 2 / variance)[use])
    return np.concatenate(found)


@pytest.mark.slow
def test_estimates_agree_with_the_plants_within_their_error(bench, tmp_path):
    """Mean of 2 x about 700 scaled squared errors is 1; no image is left at any line."""
    folder, devices = bench
    estimated = estimate_responses("U{unit}_{experiment}.npz", folder=folder, **BENCH)
    estimated = estimated.assign_coords(unit=("response", ["U0", "U1"]))
    frequency = estimated["frequency"].values
    errors = scaled_errors(estimated, lambda name: modal_response(frequency, devices[name]))
    assert errors.size > 1300
    assert errors.mean() == pytest.approx(1.0, abs=0.12)
    assert errors[-100:].mean() == pytest.approx(1.0, abs=0.4)
    assert set(estimated["estimator"].values) == {"multisine"}
    assert set(estimated["hold_treatment"].values) == {"divided, images removed by a modal model"}
    assert estimated.attrs["output_unit"] == "nm"
    assert estimated.attrs["sample_period"] == 0.0
    assert estimated["averages"].values.min() > 10
    assert list(estimated["response"].values) == ["0", "1"]
    save(estimated, tmp_path / "responses.nc")
    assert load(tmp_path / "responses.nc").equals(estimated)


def test_the_response_of_the_samples_can_be_kept(bench):
    folder, devices = bench
    found = estimate_responses(folder / "U0_0.npz", hold="kept", **BENCH)
    found = found.assign_coords(unit=("response", ["U0"]))
    frequency = found["frequency"].values
    exact = held_response(frequency, devices["U0"], RECORDER.period)
    assert scaled_errors(found, lambda _: exact).mean() == pytest.approx(1.0, abs=0.15)
    assert found.attrs["sample_period"] == RECORDER.period


def test_without_a_model_lines_with_images_are_not_used(bench):
    folder, devices = bench
    found = estimate_responses(folder / "U1_0.npz", hold="divided", **BENCH)
    found = found.assign_coords(unit=("response", ["U1"]))
    frequency = found["frequency"].values
    truth = modal_response(frequency, devices["U1"])
    used = found["usable_mask"].values[0, 0, 0]
    assert not used[frequency > 20_000.0].any()
    assert 0.3 < used.mean() < 0.95
    # what the bound lets through is no more than the error again
    assert scaled_errors(found, lambda _: truth).mean() < 2.0


def test_runout_is_taken_out(bench):
    folder, _ = bench
    found = estimate_responses(folder / "U0_0.npz", hold="kept", **BENCH)
    assert found["runout"].values[0] > 8.0
    assert found["runout_harmonic"].values.sum() > 0


def test_any_number_of_jobs_gives_the_same_numbers(bench):
    folder, _ = bench
    files = sorted(folder.glob("U*_0.npz"))
    one = estimate_responses(files, hold="kept", **BENCH)
    two = estimate_responses(files, hold="kept", jobs=2, **BENCH)
    assert one.equals(two)


PERIOD = 1e-4


def loop(seed=1, samples=40_000, noise=0.3, drive_noise=0.0):
    generator = np.random.default_rng(seed)
    r, v = generator.standard_normal((2, samples)) * np.array([[1.0], [noise]])
    driven = r.copy()
    driven[1:] -= 0.4 * v[:-1]
    u = lfilter([1.0, -0.5], [1.0, -0.1], driven)
    return {"r": r, "u": u, "y": lfilter([1.0], [1.0, -0.5], u) + v}


def sampled(frequency):
    return 1.0 / (1.0 - 0.5 * np.exp(-2j * np.pi * frequency * PERIOD))


def estimate(tmp_path, signals, **options):
    np.savez(tmp_path / "a.npz", **signals)
    chosen = {"sample_period": PERIOD, "hold": "kept", **options}
    return estimate_responses(tmp_path / "a.npz", **chosen)


def mean_scaled_error(found):
    error = found["frequency_response"].values[0, 0, 0] - sampled(found["frequency"].values)
    variance = found["frequency_response_variance"].values[0, 0, 0]
    return np.nanmean(np.abs(error) ** 2 / variance)


@pytest.mark.parametrize(
    ("options", "method", "reason"),
    [
        ({}, "joint", "does not repeat"),
        ({"excitation": "u"}, "direct", "no loop"),
        ({"resolution": 1.0}, "local-polynomial", "too short"),
        ({"method": "local-polynomial"}, "local-polynomial", "asked for"),
    ],
)
def test_the_method_is_chosen_and_the_reason_kept(tmp_path, options, method, reason):
    found = estimate(tmp_path, loop(), **options)
    assert found["estimator"].values[0] == method
    assert reason in str(found["estimator_reason"].values[0])
    assert method_sentences(found) == [f"1 by {method}: {found['estimator_reason'].values[0]}"]
    if method != "direct":
        assert 0.7 < mean_scaled_error(found) < 1.5


def test_a_stepped_sine_with_its_frequency_channel(tmp_path):
    driven = np.repeat(np.array([200.0, 777.0, 1500.0, 3210.0]), 4000)
    time = np.arange(driven.size) * PERIOD
    u = np.cos(2 * np.pi * driven * time)
    y = lfilter([1.0], [1.0, -0.5], u) + 0.1 * np.random.default_rng(2).standard_normal(u.size)
    found = estimate(tmp_path, {"u": u, "y": y, "f": driven}, excitation="u", frequency="f")
    assert found["estimator"].values[0] == "stepped-sine"
    np.testing.assert_allclose(found["frequency"].values, [200.0, 777.0, 1500.0, 3210.0])
    assert mean_scaled_error(found) < 6.0


def test_a_drive_faster_than_the_position(tmp_path):
    """Four drive values per sample: the low lines of the fast drive are the input."""
    fast = PERIOD / 4
    lines = np.arange(5, 100)
    u = np.tile(multisine(lines, np.ones(lines.size), 4000), 6)
    pole = np.exp(-2 * np.pi * 500.0 * fast)
    y = lfilter([0.0, 1.0 - pole], [1.0, -pole], u)[::4]
    signals = {"u": u, "r": u[::4], "y": y + 1e-3 * np.random.default_rng(4).standard_normal(6000)}
    found = estimate(tmp_path, signals, drive_updates=4)
    z = np.exp(2j * np.pi * found["frequency"].values * fast)
    truth = (1.0 - pole) / (z - pole)
    assert found["estimator"].values[0] == "multisine"
    assert np.abs(found["frequency_response"].values[0, 0, 0] / truth - 1.0).max() < 0.02


def test_the_direct_estimate_is_refused_where_its_bias_exceeds_its_error(tmp_path):
    with pytest.raises(InputError, match=r"a closed loop, in which the direct estimate is off by"):
        estimate(tmp_path, loop(noise=1.5, samples=200_000), method="direct", resolution=50.0)
    open_loop = loop(noise=0.0)
    open_loop["y"] = open_loop["y"] + 0.1 * np.random.default_rng(5).standard_normal(40_000)
    assert estimate(tmp_path, open_loop, method="direct")["estimator"].values[0] == "direct"


def test_a_known_filter_is_divided_out(tmp_path):
    signals = loop(noise=0.05)
    signals["y"] = lfilter([0.6], [1.0, -0.4], signals["y"])
    frequency = np.linspace(0.0, 5000.0, 2001)
    response = 0.6 / (1.0 - 0.4 * np.exp(-2j * np.pi * frequency * PERIOD))
    rows = [f"{f},{h.real},{h.imag}" for f, h in zip(frequency[1:], response[1:], strict=True)]
    (tmp_path / "filter.csv").write_text("frequency_hz,real,imag\n" + "\n".join(rows))
    found = estimate(tmp_path, signals, anti_alias="filter.csv", folder=tmp_path)
    ratio = found["frequency_response"].values[0, 0, 0] / sampled(found["frequency"].values)
    assert np.abs(np.nanmedian(ratio) - 1.0) < 0.01


def test_gaps_and_excursions_are_left_out_with_their_segments_and_said(tmp_path):
    signals = loop()
    signals["y"][1000:1020] = np.nan
    signals["y"][20_000:20_100] += 50.0
    found = estimate(tmp_path, signals, linear_range=20.0, resolution=50.0)
    marks = dict(zip(found["record_check"].values, found["record_value"].values[0], strict=True))
    assert marks["dropouts"] == pytest.approx(20 / 40_000)
    assert marks["excursions"] == pytest.approx(100 / 40_000)
    assert 0.0 < marks["left-out"] < 0.05
    assert 0.7 < mean_scaled_error(found) < 1.4
    said = record_sentences(found)
    assert any("0.05% of the samples are missing" in sentence for sentence in said)
    assert any("beyond the linear range" in sentence for sentence in said)


def test_saturation_clipping_and_shocks_are_marked(tmp_path):
    signals = loop()
    signals["u"] = np.clip(signals["u"], -1.5, 1.5)
    signals["y"] = np.clip(signals["y"], -2.0, 2.0)
    signals["y"][30_000:34_096] *= 4.0
    found = estimate(tmp_path, signals, drive_limit=1.5)
    marked = found["record_check"].values[found["record_mark"].values[0]]
    assert {"saturation", "non-stationary"} <= set(marked)
    signals["y"] = np.clip(loop()["y"], -2.0, 2.0)
    found = estimate(tmp_path, signals)
    assert "clipping" in found["record_check"].values[found["record_mark"].values[0]]


def test_a_good_record_has_no_mark(tmp_path):
    assert record_sentences(estimate(tmp_path, loop(), drive_limit=10.0, linear_range=20.0)) == []


def test_bad_records_are_named_or_skipped(tmp_path):
    np.savez(tmp_path / "U1.npz", **loop())
    np.savez(tmp_path / "U2.npz", r=np.ones(5), u=np.ones(5))
    (tmp_path / "U3.npz").write_bytes(b"broken")
    options = {"folder": tmp_path, "sample_period": PERIOD, "hold": "kept"}
    with pytest.raises(InputError) as caught:
        estimate_responses("{unit}.npz", **options)
    assert [p.place for p in caught.value.problems] == ["U2.npz", "U3.npz"]
    found = estimate_responses("{unit}.npz", bad_files="skip", **options)
    assert list(found["unit"].values) == ["U1"]
    skipped = json.loads(found.attrs["skipped_files"])
    assert [each["file"] for each in skipped] == ["U2.npz", "U3.npz"]
    assert "no channel y" in skipped[0]["reason"]


@pytest.mark.parametrize(
    ("options", "said"),
    [
        ({"in_phase": "n"}, r"\[records\] quadrature: found nothing"),
        ({"sectors": 420, "spindle_speed": 7200.0}, r"10000 samples per second; expected 50400"),
        ({"drive": ["u", "r"]}, "1 excitations for 2 drives"),
        ({"method": "multisine"}, "no period; expected an excitation"),
        ({"method": "stepped-sine"}, "frequency channel"),
        ({"drive_updates": 4}, "drive_updates = 4 with the method"),
        ({"resolution": 0.01, "method": "joint"}, "no whole segment"),
        ({"method": "best"}, "one of"),
    ],
)
def test_options_that_cannot_be_met_are_said(tmp_path, options, said):
    with pytest.raises(InputError, match=said):
        estimate(tmp_path, loop(samples=4000), **options)


def test_a_matrix_plant_from_its_records(tmp_path):
    generator = np.random.default_rng(7)
    gain = np.array([[1.0, -0.5], [0.3, 2.0]])
    u = generator.standard_normal((2, 60_000))
    y = gain @ u + 0.1 * generator.standard_normal((2, 60_000))
    names = ["u1", "u2"]
    signals = {"u1": u[0], "u2": u[1], "y1": y[0], "y2": y[1]}
    found = estimate(tmp_path, signals, excitation=names, drive=names, position=["y1", "y2"])
    assert found["frequency_response"].shape[1:3] == (2, 2)
    mean = np.nanmean(found["frequency_response"].values[0], axis=-1)
    np.testing.assert_allclose(mean, gain, atol=0.01)


def test_the_invented_loop_is_stable_and_its_simulation_exact():
    """Position over drive of the simulated loop is the held plant."""
    device = plants(1)[0]
    recorder = InventedRecorder()
    loop_ = invented_loop(device, recorder)
    assert np.abs(loop_.pole).max() < 1.0
    samples = 1 << 15
    pulse = np.zeros((3, samples))
    pulse[0, 0] = 1.0
    drive, position = loop_.response_to(pulse)
    frequency = np.fft.rfftfreq(samples, recorder.period)[1:-1]
    ratio = np.fft.rfft(position)[1:-1] / np.fft.rfft(drive)[1:-1]
    expected = held_response(frequency, device, recorder.period)
    np.testing.assert_allclose(ratio, expected, rtol=1e-6)
