import json

import numpy as np
import pytest

from identkit import grids
from identkit.errors import InputError
from identkit.readers.campaign import read_responses
from identkit.variables import check

PATTERN = "bench/{unit}/H{head}_{temperature:g}C.csv"


def write(
    path, frequency=(100.0, 200.0, 300.0), scale=1.0, header="frequency_hz,real,imag", **more
):
    path.parent.mkdir(parents=True, exist_ok=True)
    columns = [",".join([header, *more])]
    for f in frequency:
        values = [f, scale, -scale * f, *more.values()]
        columns.append(",".join(repr(float(value)) for value in values))
    path.write_text("\n".join(columns))


@pytest.fixture
def campaign(tmp_path):
    for u in (1, 2, 10):
        for head in (0, 1):
            write(tmp_path / f"bench/U{u}/H{head}_25C.csv", scale=u + 0.1 * head)
    return tmp_path


def test_a_campaign_becomes_the_dataset_of_the_contract(campaign):
    data = read_responses(PATTERN, folder=campaign, units={"input": "A", "output": "um"})
    check(data, ["frequency_response", "frequency", "unit"], stage="read", asked_by="test")
    assert data["response"].values.tolist() == [
        f"U{u}/H{h}_25C" for u in (1, 2, 10) for h in (0, 1)
    ]
    assert data["unit"].values.tolist() == ["U1", "U1", "U2", "U2", "U10", "U10"]
    assert data["head"].values.tolist() == ["0", "1"] * 3
    assert data["source"].values[0] == "bench/U1/H0_25C.csv"
    assert data["temperature"].dtype == np.float64
    expected = np.array([1.1, -1.1j * 200]).sum()
    assert data["frequency_response"].values[1, 0, 0, 1] == expected
    assert data.attrs["output_unit"] == "um"
    assert data.attrs["sample_period"] == 0.0
    assert json.loads(data.attrs["skipped_files"]) == []


def test_labels_the_path_does_not_carry_are_not_invented(campaign):
    data = read_responses("bench/{unit}/H0_25C.csv", folder=campaign)
    assert "head" not in data.coords
    assert "temperature" not in data.coords


def test_two_grids_stand_apart_in_the_order_first_seen(campaign):
    write(campaign / "bench/U2/H0_25C.csv", frequency=(100.0, 200.0, 300.0000001))
    first, second = grids.datasets(read_responses(PATTERN, folder=campaign))
    assert first.sizes["response"] == 5
    assert second["response"].values.tolist() == ["U2/H0_25C"]
    assert second.attrs == first.attrs


def test_progress_counts_every_file(campaign):
    seen = []
    read_responses(PATTERN, folder=campaign, progress=lambda *step: seen.append(step))
    assert seen == [(k, 6) for k in range(1, 7)]


def test_all_bad_files_are_named_at_once(campaign):
    write(campaign / "bench/U1/H0_25C.csv", frequency=(200.0, 100.0))
    (campaign / "bench/U2/H1_25C.csv").write_text("")
    (campaign / "bench/U2/H1_warmC.csv").write_text("")
    with pytest.raises(InputError) as caught:
        read_responses(PATTERN, folder=campaign)
    lines = sorted(str(caught.value).splitlines())
    assert len(lines) == 3
    assert lines[0].startswith("bench/U1/H0_25C.csv, line 3: found the frequency 100 Hz")
    assert lines[1].startswith("bench/U2/H1_25C.csv: found an empty file")
    assert lines[2].startswith("bench/U2/H1_warmC.csv: found a name with a label")


def test_bad_files_may_be_skipped_and_are_recorded(campaign):
    write(campaign / "bench/U1/H0_25C.csv", frequency=(200.0, 100.0))
    (campaign / "bench/U2/H1_warmC.csv").write_text("")
    data = read_responses(PATTERN, folder=campaign, bad_files="skip")
    assert data["response"].values[0] == "U1/H1_25C"
    assert data.sizes["response"] == 5
    skipped = json.loads(data.attrs["skipped_files"])
    assert [entry["file"] for entry in skipped] == [
        "bench/U2/H1_warmC.csv",
        "bench/U1/H0_25C.csv",
    ]
    assert skipped[1]["reason"] == (
        "line 3: found the frequency 100 Hz after 200 Hz; expected increasing frequencies"
    )


def test_skipping_everything_is_refused(tmp_path):
    write(tmp_path / "U1.csv", frequency=(1.0,))
    with pytest.raises(InputError, match="U1.csv: found 1 point"):
        read_responses("{unit}.csv", folder=tmp_path, bad_files="skip")


def test_files_whose_variance_is_known_otherwise_are_named(campaign):
    write(campaign / "bench/U1/H0_25C.csv", variance=0.5)
    with pytest.raises(InputError) as caught:
        read_responses(PATTERN, folder=campaign)
    assert str(caught.value) == (
        "bench/U1/H0_25C.csv: found a variance of its own; expected neither variance nor coherence "
        "with averages, as most files have"
    )


def test_coherence_without_averages_is_kept_and_gives_no_variance(tmp_path):
    write(tmp_path / "U1.csv", coherence=0.9)
    data = read_responses("{unit}.csv", folder=tmp_path)
    assert "frequency_response_variance" not in data
    assert (data["coherence"] == 0.9).all()
    assert data.attrs["variance_source"] == "residuals"
    known = read_responses("{unit}.csv", folder=tmp_path, averages=9)
    assert known.attrs["variance_source"] == "coherence"
    assert (known["frequency_response_variance"] > 0).all()


def test_files_by_hand_are_named_below_the_folder_they_share(campaign):
    files = [campaign / "bench/U1/H0_25C.csv", campaign / "bench/U2/H1_25C.csv"]
    data = read_responses(files, folder=campaign, pattern=PATTERN)
    assert data["response"].values.tolist() == ["U1/H0_25C", "U2/H1_25C"]
    assert data["head"].values.tolist() == ["0", "1"]
    plain = read_responses(files, folder=campaign)
    assert "unit" not in plain.coords


def test_a_point_in_the_name_of_a_file_by_hand_is_no_suffix(tmp_path):
    write(tmp_path / "H0_25.5")
    write(tmp_path / "H0_30.5.csv")
    data = read_responses([tmp_path / "H0_25.5", tmp_path / "H0_30.5.csv"], folder=tmp_path)
    assert data["response"].values.tolist() == ["H0_25.5", "H0_30.5"]


def test_the_same_file_twice_by_hand_is_refused(campaign):
    file = campaign / "bench/U1/H0_25C.csv"
    with pytest.raises(InputError, match="the name more than once"):
        read_responses([file, file], folder=campaign)


def test_no_file_at_all_is_refused():
    with pytest.raises(InputError, match="an empty list"):
        read_responses([])


def test_text_and_our_own_files_may_stand_side_by_side(campaign):
    data = read_responses(PATTERN, folder=campaign)
    (campaign / "mixed").mkdir()
    grids.save(data.isel(response=[0]), campaign / "mixed" / "U7.nc")
    write(campaign / "mixed" / "U8.csv")
    both = read_responses("mixed/{unit}.{}", folder=campaign)
    assert both["unit"].values.tolist() == ["U7", "U8"]
    assert both["response"].values.tolist() == ["U7", "U8"]


def test_several_channels_are_refused_and_not_mixed_up(tmp_path):
    write(tmp_path / "U1_y1.csv")
    write(tmp_path / "U1_y2.csv")
    with pytest.raises(InputError, match="y1, y2; expected one output; plants of several channels"):
        read_responses("{unit}_{output}.csv", folder=tmp_path)


def test_a_channel_named_by_the_path_is_the_channel(tmp_path):
    write(tmp_path / "U1_y1.csv")
    data = read_responses("{unit}_{output}.csv", folder=tmp_path)
    assert data["output"].values.tolist() == ["y1"]
    assert data["input"].values.tolist() == ["input"]


def test_wrong_options_are_refused_by_name():
    with pytest.raises(InputError, match=r"\[responses\] averages: found 1"):
        read_responses("x.csv", averages=1)
    with pytest.raises(InputError, match="'freq'.*nearest is 'frequency'"):
        read_responses("x.csv", columns={"freq": "f"})


@pytest.mark.parametrize(("unit", "factor"), [("kHz", 1e-3), ("rad/s", 2 * np.pi)])
def test_the_unit_of_frequency_changes_nothing_else(campaign, unit, factor):
    """Hz or kHz, the same measurement gives the same responses to rounding."""
    plain = read_responses("bench/{unit}/H0_25C.csv", folder=campaign)
    for path in campaign.glob("bench/*/H0_25C.csv"):
        header, *lines = path.read_text().splitlines()
        scaled = [[float(v) for v in line.split(",")] for line in lines]
        rewritten = [f"{f * factor!r},{a!r},{b!r}" for f, a, b in scaled]
        path.write_text("\n".join([header.replace("frequency_hz", f"f [{unit}]"), *rewritten]))
    other = read_responses(
        "bench/{unit}/H0_25C.csv", folder=campaign, columns={"frequency": f"f [{unit}]"}
    )
    np.testing.assert_allclose(other["frequency"], plain["frequency"], rtol=1e-14)
    np.testing.assert_array_equal(other["frequency_response"], plain["frequency_response"])
