import h5py
import numpy as np
import pytest

from identkit.errors import InputError
from identkit.readers.records import RecordFile

SIGNALS = np.random.default_rng(1).standard_normal((3, 1000))
NAMES = ("r", "u", "y")


def as_npz(path):
    np.savez(path, **dict(zip(NAMES, SIGNALS, strict=True)), sample_period=2e-5)


def as_npz_packed(path):
    np.savez_compressed(path, **dict(zip(NAMES, SIGNALS, strict=True)))


def as_hdf5(path):
    with h5py.File(path, "w") as store:
        for name, values in zip(NAMES, SIGNALS, strict=True):
            store[name] = values
        store.attrs["sample_period"] = 2e-5


def as_text(path):
    rows = "\n".join("; ".join(f"{value:.17g}" for value in row) for row in SIGNALS.T)
    path.write_text(f"# bench 3\nr; u; y\n{rows}\n", encoding="utf-8")


def as_blanks(path):
    rows = "\n".join("  ".join(f"{value:.17g}" for value in row) for row in SIGNALS.T)
    path.write_text(f"r  u  y\n{rows}\n", encoding="utf-8")


@pytest.fixture(
    params=[
        ("a.npz", as_npz),
        ("b.npz", as_npz_packed),
        ("c.h5", as_hdf5),
        ("d.csv", as_text),
        ("e.txt", as_blanks),
    ],
    ids=lambda p: p[0],
)
def file(request, tmp_path):
    name, write = request.param
    write(tmp_path / name)
    return RecordFile(tmp_path / name, f"bench/{name}")


def test_channels_come_in_the_order_asked_for(file):
    np.testing.assert_array_equal(file.whole(["y", "r"]), SIGNALS[[2, 0]])


def test_chunks_are_the_record_in_order(file):
    parts = list(file.chunks(NAMES, size=300))
    assert [part.shape for part in parts] == [(3, 300)] * 3 + [(3, 100)]
    np.testing.assert_array_equal(np.concatenate(parts, axis=1), SIGNALS)


def test_a_missing_channel_is_named_with_those_there(file):
    with pytest.raises(InputError, match=r"bench/.*: found no channel z; .*r, u, y"):
        file.whole(["r", "z"])


def test_a_stated_period_must_be_that_of_the_study(file):
    file.check_period(2e-5)
    if file.path.name in ("a.npz", "c.h5"):
        with pytest.raises(InputError, match=r"sample period 2e-05 s; expected 1e-05 s"):
            file.check_period(1e-5)


def refusal(path, write):
    write(path)
    with pytest.raises(InputError) as caught:
        RecordFile(path, "bench/x").whole(["u", "y"])
    return str(caught.value)


def test_pickled_objects_are_never_opened(tmp_path):
    values = {"u": np.array([{"a": 1}], dtype=object), "y": np.ones(1)}
    said = refusal(tmp_path / "x.npz", lambda path: np.savez(path, **values))
    assert said == "bench/x, channel u: found values of type object; expected real numbers"


def test_uneven_channels_are_refused(tmp_path):
    said = refusal(tmp_path / "x.npz", lambda path: np.savez(path, u=np.ones(5), y=np.ones(4)))
    assert said == "bench/x, channel y: found 4 samples; expected 5, as channel u has"


def test_a_table_is_no_channel(tmp_path):
    said = refusal(tmp_path / "x.npz", lambda path: np.savez(path, u=np.ones((5, 2)), y=np.ones(5)))
    assert "an array of shape (5, 2); expected one row" in said


@pytest.mark.parametrize("name", ["x.npz", "x.h5", "x.csv"])
def test_damaged_files_are_refused_in_one_sentence(tmp_path, name):
    said = refusal(tmp_path / name, lambda path: path.write_bytes(b"\x93broken\x00\xff" * 9))
    assert said.startswith("bench/x: found ")
    assert len(said.splitlines()) == 1


def test_a_file_cut_short_is_refused(tmp_path):
    def write(path):
        np.savez(path, u=SIGNALS[0], y=SIGNALS[1])
        path.write_bytes(path.read_bytes()[:5000])

    assert "cannot be read" in refusal(tmp_path / "x.npz", write)


def test_text_errors_name_line_and_column(tmp_path):
    said = refusal(tmp_path / "x.csv", lambda p: p.write_text("u,y\n1,2\n3,over\n"))
    assert said == 'bench/x, line 3, column "y": found "over"; expected a number'
    said = refusal(tmp_path / "x.csv", lambda p: p.write_text("u,y\n1,2\n3,4,5\n"))
    assert said == "bench/x, line 3: found 3 values; expected 2, as the header has"
    said = refusal(tmp_path / "x.csv", lambda p: p.write_text("1,2\n3,4\n"))
    assert "header row" in said


def test_missing_samples_are_dropouts(tmp_path):
    (tmp_path / "x.csv").write_text("u,y\n1,2\n,4\ninf,5\n")
    found = RecordFile(tmp_path / "x.csv", "x").whole(["u", "y"])
    np.testing.assert_array_equal(found, [[1, np.nan, np.nan], [2, 4, 5]])
