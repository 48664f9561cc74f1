from importlib.resources import files
from pathlib import Path

import pytest

from identkit.errors import InputError
from identkit.not_yet import refuse_unavailable
from identkit.settings import Exclusion, Settings, load_settings, settings_digest


@pytest.fixture
def written(tmp_path):
    def write(text):
        path = tmp_path / "study.toml"
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        return path

    return write


CONTRACT = """
[study]
name = "arm-assembly-b"
results = "results"
seed = 1
[responses]
files = "bench/{unit}/H{head}_{temperature:g}C.csv"
averages = 32
band = [50, 22000]
sample_period = 0
bad_files = "stop"
[responses.columns]
frequency = "Freq [kHz]"
real = {name = "Re", unit = "um/A"}
[responses.units]
input = "A"
output = "um"
[records]
files = "bench/{unit}_H{head}_{temperature:g}C.npz"
sample_period = 2e-5
excitation = "r"
drive = ["u1", "u2"]
position = "y"
method = "auto"
[screen]
[model]
base = "pivot"
modes = "auto"
delay = true
residues = "real"
sharing = "auto"
[nominal]
choice = "centre"
reference_temperature = 25
[bound]
form = "multiplicative"
order = "auto"
profile = [[100, 1.0], [1000, 3.0]]
cap = []
radius_floor = 0.02
remove = []
holds = "measured"
content = 0.9
confidence = 0.9
exchangeable = "unit"
hold_out = 0.0
factors = "auto"
split = ""
exclude = []
[export]
formats = ["json", "hdf5"]
period = 0
[history]
url = "sqlite:///history.db"
"""


def test_every_key_of_the_contract_is_understood(written):
    settings = load_settings(written(CONTRACT))
    assert settings.responses.band == (50.0, 22000.0)
    assert settings.records.drive == ("u1", "u2")
    assert settings.responses.columns.real.unit == "um/A"
    assert settings.bound.profile == ((100.0, 1.0), (1000.0, 3.0))


def test_an_empty_file_gives_the_defaults_of_the_contract(written):
    without = CONTRACT.split("[records]")[0] + "[screen]" + CONTRACT.split("[screen]")[1]
    given, default = load_settings(written(without)), load_settings(written(""))
    for name in ("model", "nominal", "bound", "export", "history", "screen"):
        assert getattr(given, name) == getattr(default, name), name


def test_paths_are_relative_to_the_study_file(written, tmp_path, monkeypatch):
    written("")
    monkeypatch.chdir(tmp_path)
    assert load_settings("study.toml").folder == tmp_path.resolve()


def test_a_byte_order_mark_is_passed_over(written):
    assert load_settings(written(b"\xef\xbb\xbf[study]\nname = 'x'")).study.name == "x"


@pytest.mark.parametrize(
    ("text", "place", "found", "expected"),
    [
        ("[study]\nnaem = 'x'", "[study] naem (line 2)", "'naem'", "nearest is 'name'"),
        ("[bonud]\norder = 4", "[bonud] (line 1)", "'bonud'", "nearest is 'bound'"),
        ("[responses.column]\n", "[responses] column (line 1)", "'column'", "is 'columns'"),
        ("[responses.columns]\nxyz = 'x'", "[responses.columns] xyz", "'xyz'", "known are freq"),
        ("[bound]\norder = 'four'", "[bound] order (line 2)", '"four"', '"auto" or a whole'),
        ("[bound]\norder = 0", "[bound] order", "found 0", '"auto" or a whole'),
        ("[model]\nmodes = true", "[model] modes", "found true", "whole number"),
        ("[model]\nmodes = 2.5", "[model] modes", "found 2.5", "whole number"),
        ("[model]\nbase = 'fixed'", "[model] base", '"fixed"', '"free", "pivot" or "none"'),
        ("[model]\ndelay = 1", "[model] delay", "found 1", "true or false"),
        ("[responses]\naverages = '32'", "[responses] averages", '"32"', "above 1"),
        ("[responses]\naverages = 1", "[responses] averages", "found 1", "above 1"),
        ("[responses]\nband = [500, 50]", "[responses] band", "[500, 50]", "below the second"),
        ("[responses]\nband = [500]", "[responses] band", "[500]", "two increasing"),
        ("[responses]\nband = [1, nan]", "[responses] band", "[1, nan]", "two increasing"),
        ("[responses]\nbad_files = 'go'", "[responses] bad_files", '"go"', '"stop" or "skip"'),
        ("[responses]\nsample_period = -1", "[responses] sample_period", "-1", "0 or more"),
        ("[bound]\nprofile = [[9, 1], [5, 2]]", "[bound] profile", "[[9, 1]", "increas"),
        ("[bound]\ncap = [[9, 0]]", "[bound] cap", "[[9, 0]]", "both above 0"),
        ("[bound]\ncap = [[9, 1, 2]]", "[bound] cap", "[[9, 1, 2]]", "pairs"),
        ("[bound]\nradius_floor = inf", "[bound] radius_floor", "inf", "above 0"),
        ("[bound]\ncontent = 1.0", "[bound] content", "1.0", "between 0 and 1"),
        ("[bound]\nhold_out = 1", "[bound] hold_out", "found 1", "0 to below 1"),
        ("[bound]\nexclude = 'U1'", "[bound] exclude", '"U1"', "a list"),
        ("[bound]\nexclude = [{reason = 'x'}]", "[bound] exclude", "reason", "a list"),
        ("[screen]\ncoherence_limit = 1", "[screen] coherence_limit", "1", "below 1"),
        ("[screen]\nleave_out = ['odd']", "[screen] leave_out", "['odd']", '"outlier"'),
        ("[export]\nformats = []", "[export] formats", "[]", '"json" and "hdf5"'),
        ("[records]\nfiles = 'x'", "[records] sample_period", "nothing", "seconds"),
        ("study = 3", "[study] (line 1)", "found 3", "a table"),
    ],
)
def test_a_wrong_key_is_one_clear_sentence(written, text, place, found, expected):
    path = written(text)
    with pytest.raises(InputError) as caught:
        load_settings(path)
    message = str(caught.value)
    assert len(caught.value.problems) == 1
    assert message.startswith(f"{path}, {place}")
    assert found in message.split("; expected ")[0]
    assert expected in message.split("; expected ")[1]


def test_all_wrong_keys_are_said_at_once(written):
    with pytest.raises(InputError) as caught:
        load_settings(written("[bound]\norder = 0\ncontent = 2\n[modle]\n[model]\nbase = 'x'"))
    assert len(caught.value.problems) == 4


@pytest.mark.parametrize(
    ("text", "found"),
    [
        (b"[study]\nname = \n", "line 2, column 8: found a mistake in TOML"),
        (b"[study]\nname = 'a'\nname = 'b'\n", "Cannot overwrite"),
        (b"[study]\nname = '\xe9'\n", "not UTF-8 in line 2"),
    ],
)
def test_what_is_no_toml_is_said_with_the_line(written, text, found):
    with pytest.raises(InputError, match=found):
        load_settings(written(text))


def test_a_missing_study_or_a_folder_in_its_place_is_said(tmp_path):
    with pytest.raises(InputError, match="no such file"):
        load_settings(tmp_path / "study.toml")
    with pytest.raises(InputError, match="found a folder"):
        load_settings(tmp_path)


def test_a_study_without_permission_is_said(written, monkeypatch):
    path = written("")

    def refuse(*args, **kwargs):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "read_bytes", refuse)
    with pytest.raises(InputError, match="no permission"):
        load_settings(path)


def test_exclusions_take_names_and_labels_with_a_reason(written):
    text = "[bound]\nexclude = ['U1/H0', {unit = 'U13', temperature = 5, reason = 'cracked'}]"
    assert load_settings(written(text)).bound.exclude == (
        Exclusion.model_validate("U1/H0"),
        Exclusion.model_validate({"unit": "U13", "temperature": 5, "reason": "cracked"}),
    )
    assert load_settings(written(text)).bound.exclude[1].reason == "cracked"


@pytest.mark.parametrize(
    "text",
    [
        "[records]\nfiles = 'x'\nsample_period = 1\nhold = 'kept'",
        "[responses]\nsample_period = 1e-4",
        "[model]\nsharing = 'unit'",
        "[bound]\nform = 'parametric'",
        "[bound]\nform = 'mixed'",
        "[bound]\nremove = ['gain']",
        "[bound]\nholds = 'population'",
        "[bound]\nsplit = 'head'",
        "[export]\nperiod = 1e-4",
        "[history]\nurl = 'postgresql://host/store'",
    ],
)
def test_what_is_not_built_yet_is_refused_and_not_ignored(written, text):
    with pytest.raises(InputError, match="not available in this version") as caught:
        refuse_unavailable(load_settings(written(text)))
    assert len(caught.value.problems) == 1


def test_the_file_to_start_from_is_valid_and_asks_for_nothing_unavailable():
    settings = load_settings(str(files("identkit") / "study_template.toml"))
    refuse_unavailable(settings)
    default = Settings()
    for name in ("screen", "model", "nominal", "bound", "export"):
        assert getattr(settings, name) == getattr(default, name), name
    assert settings.responses.files is not None


def test_a_digest_changes_with_what_it_covers_and_with_nothing_else(written):
    first = load_settings(written("[bound]\norder = 4\n"))
    same = load_settings(written("# a remark\n[bound]\norder = 4\n[study]\nname = 'y'"))
    other = load_settings(written("[bound]\norder = 5\n"))
    assert settings_digest(first, "bound") == settings_digest(same, "bound")
    assert settings_digest(first) != settings_digest(same)
    assert settings_digest(first, "bound") != settings_digest(other, "bound")
    assert settings_digest(first, "bound.cap") == settings_digest(other, "bound.cap")
    assert settings_digest(first, "bound.order") != settings_digest(other, "bound.order")


def test_a_digest_of_an_unknown_key_is_an_error():
    with pytest.raises(KeyError):
        settings_digest(Settings(), "bound.odrer")
