"""Whatever stands in a file: it is read, or refused in a sentence; never anything else."""

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from identkit import grids
from identkit.errors import InputError
from identkit.readers.campaign import read_responses
from identkit.settings import load_settings
from identkit.study import StudyFolder

FEW = settings(
    max_examples=200,
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
)
GOOD = b"# bench 7\nfrequency_hz;magnitude_db;phase_deg;coherence\n" + b"".join(
    b"%d,5;%d,25;-%d,5;0,9%d\n" % (100 + k, 40 - k, 3 * k, k % 10) for k in range(12)
)
STUDY = b"""[study]
name = "x"
[responses]
files = "{unit}.csv"
band = [50, 2e4]
[responses.columns]
frequency = { name = "Freq", unit = "kHz" }
[bound]
profile = [[100, 1.0], [1000, 3.0]]
exclude = [{ unit = "U1", reason = "cracked" }]
"""


def mutations(good):
    """Give files that were good once: pieces cut out, doubled, overwritten, put in."""
    place = st.integers(0, len(good))
    pieces = st.sampled_from(
        [
            b"",
            b",",
            b";",
            b"\n",
            b"\t",
            b"-",
            b"nan",
            b"1e999",
            b'"',
            b"#",
            b"\xff",
            b"\0",
            b"[",
            b"=",
        ]
        + [bytes([c]) for c in b"0 9.eE+_{}'x"]
    )

    def change(edits):
        data = good
        for start, length, piece in edits:
            data = data[:start] + piece + data[start + length :]
        return data

    edit = st.tuples(place, st.integers(0, 40), pieces)
    return st.lists(edit, min_size=1, max_size=4).map(change)


def refused_or_read(read):
    """Check that a reader gives a result or one sentence per problem."""
    try:
        return read()
    except InputError as error:
        problems = error.problems
    assert problems
    for problem in problems:
        assert "\n" not in str(problem)
        assert problem.place
        assert problem.found
        assert problem.expected
    return None


@FEW
@given(data=st.one_of(mutations(GOOD), st.binary(max_size=300)))
def test_a_text_file_is_read_or_refused(tmp_path, data):
    (tmp_path / "U1.csv").write_bytes(data)
    result = refused_or_read(lambda: read_responses("{unit}.csv", folder=tmp_path, averages=8))
    if result is not None:
        (part,) = grids.datasets(result)
        frequency = part["frequency"].values
        assert np.isfinite(part["frequency_response"].values).all()
        assert (part["frequency_response"].values != 0).all()
        assert (np.diff(frequency) > 0).all()
        assert frequency[0] > 0
        assert frequency.size >= 2
        if "frequency_response_variance" in part:
            variance = part["frequency_response_variance"].values
            assert (variance > 0).all()
            assert np.isfinite(variance).all()


def test_the_good_file_of_these_tests_is_good(tmp_path):
    (tmp_path / "U1.csv").write_bytes(GOOD)
    data = read_responses("{unit}.csv", folder=tmp_path, averages=8)
    assert data.sizes["frequency"] == 12
    assert data["frequency"].values[0] == 100.5


@FEW
@given(data=st.one_of(mutations(STUDY), st.binary(max_size=100)))
def test_a_study_file_is_read_or_refused(tmp_path, data):
    (tmp_path / "study.toml").write_bytes(data)
    refused_or_read(lambda: load_settings(tmp_path / "study.toml"))


@FEW
@given(pattern=st.text(alphabet="abU/{}:dgt.*[]\\ 1_", max_size=20))
def test_a_path_pattern_is_used_or_refused(tmp_path, pattern):
    (tmp_path / "U1.csv").write_bytes(GOOD)
    (tmp_path / "a").mkdir(exist_ok=True)
    (tmp_path / "a" / "U1.csv").write_bytes(GOOD)
    if not pattern.startswith(("/", "\\")):
        refused_or_read(lambda: read_responses(pattern, folder=tmp_path))


@settings(FEW, max_examples=60)
@given(share=st.floats(0, 1), flips=st.lists(st.tuples(st.floats(0, 1), st.integers(0, 255))))
def test_a_damaged_file_of_ours_is_read_or_refused(tmp_path_factory, share, flips):
    folder = tmp_path_factory.mktemp("damaged", numbered=True)
    (folder / "U1.csv").write_bytes(GOOD)
    grids.save(read_responses("{unit}.csv", folder=folder), folder / "r.nc")
    data = bytearray((folder / "r.nc").read_bytes())
    for place, value in flips[:5]:
        data[int(place * (len(data) - 1))] = value
    (folder / "r.nc").write_bytes(data[: int(share * len(data)) + 1])
    refused_or_read(lambda: read_responses("r.nc", folder=folder))


@FEW
@given(results=st.text(alphabet="ab./\\~ ", min_size=1, max_size=8))
def test_results_never_leave_the_studys_folder(tmp_path_factory, results):
    home = tmp_path_factory.mktemp("home", numbered=True) / "inner"
    home.mkdir()
    text = f"[study]\nresults = '{results}'"
    (home / "study.toml").write_text(text)
    study = refused_or_read(lambda: StudyFolder(load_settings(home / "study.toml")))
    assert [path.name for path in home.parent.iterdir()] == ["inner"]
    if study is not None:
        assert study.folder.is_relative_to(home.resolve())
        assert study.folder != home.resolve()


@pytest.mark.parametrize("kind", ["{unit}.csv", "{unit}.nc"])
def test_no_bad_file_hides_another(tmp_path, kind):
    names = [kind.replace("{unit}", f"U{k}") for k in range(5)]
    for name in names:
        (tmp_path / name).write_bytes(b"\x89HDF\r\n" if kind.endswith("nc") else b"a\n1\n")
    with pytest.raises(InputError) as caught:
        read_responses(kind, folder=tmp_path)
    assert [str(problem).split(":")[0].split(",")[0] for problem in caught.value.problems] == names
