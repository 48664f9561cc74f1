import pytest

from identkit.errors import InputError
from identkit.settings import load_settings
from identkit.stages.read import find_measurements, read

ROWS = "frequency_hz,real,imag\n100,1,2\n200,3,4\n300,5,6\n"


@pytest.fixture
def study(tmp_path):
    def make(text, *files):
        for name in files:
            (tmp_path / name).write_text(ROWS)
        (tmp_path / "study.toml").write_text(text)
        return load_settings(tmp_path / "study.toml")

    return make


def test_reads_what_the_study_names_from_wherever_it_is_run(study, tmp_path, monkeypatch):
    settings = study("[responses]\nfiles = '{unit}.csv'\nunits.output = 'um'", "U1.csv", "U2.csv")
    (tmp_path / "elsewhere").mkdir()
    monkeypatch.chdir(tmp_path / "elsewhere")
    data = read(settings)
    assert data["source"].values.tolist() == ["U1.csv", "U2.csv"]
    assert data.attrs["output_unit"] == "um"


def test_the_band_cuts_nothing(study):
    settings = study("[responses]\nfiles = '{unit}.csv'\nband = [150, 250]", "U1.csv")
    assert read(settings).sizes["frequency"] == 3


def test_files_found_before_are_not_looked_for_again(study, tmp_path):
    settings = study("[responses]\nfiles = '{unit}.csv'", "U1.csv")
    found = find_measurements(settings)
    (tmp_path / "U2.csv").write_text(ROWS)
    assert read(settings, found).sizes["response"] == 1
    assert read(settings).sizes["response"] == 2


def test_what_counts_as_input_includes_stray_files(study, tmp_path):
    settings = study("[responses]\nfiles = '{temperature:g}C.csv'", "5C.csv", "warmC.csv")
    assert sorted(path.name for path in find_measurements(settings).paths) == [
        "5C.csv",
        "warmC.csv",
    ]


def test_a_study_without_files_is_refused(study):
    with pytest.raises(InputError, match=r"study.toml, \[responses\] files: found nothing"):
        read(study(""))
