"""Bad input through the command line: one clear sentence, exit 2, earlier results untouched.

The campaign under test is invented (identkit.synthetic); each case spoils one thing in a copy of a
finished study.
"""

import hashlib
import shutil

import numpy as np
import pytest

from identkit import synthetic
from identkit.cli import main

STUDY = """
[study]
name = "spoiled"

[responses]
files = "bench/{unit}_{temperature:g}C.csv"
averages = 32

[model]
modes = 3

[bound]
order = 4
"""
SPOILED = "bench/U02_25C.csv"
BOOKKEEPING = {"run.json", "identkit.log"}
LONGEST_SENTENCE = 400


def write_columns(path, table, header="frequency_hz,real,imag,coherence"):
    path.parent.mkdir(parents=True, exist_ok=True)
    np.savetxt(path, table, delimiter=",", header=header, comments="", fmt="%.10g")


def write_small_campaign(folder):
    campaign = synthetic.invent_campaign(
        seed=3,
        units=3,
        heads=1,
        temperatures=(25.0,),
        bench=synthetic.InventedBench(band=(50.0, 5500.0), points=120),
        story=synthetic.Story(odd_lot="", cracked_unit=""),
    )
    for response in campaign.responses:
        measured = response.frequency_response
        table = np.column_stack(
            [campaign.frequency, measured.real, measured.imag, response.coherence]
        )
        write_columns(folder / f"bench/{response.labels['unit']}_25C.csv", table)
    (folder / "study.toml").write_text(STUDY, encoding="utf-8")


@pytest.fixture(scope="module")
def finished(tmp_path_factory):
    """Return the folder of a study that has run to the end."""
    folder = tmp_path_factory.mktemp("finished")
    write_small_campaign(folder)
    with pytest.raises(SystemExit) as stop:
        main(["run", str(folder / "study.toml"), "--quiet", "--jobs", "1"])
    assert stop.value.code in (0, 1)
    return folder


@pytest.fixture
def study(finished, tmp_path):
    """Return a fresh copy of the finished study, to spoil."""
    folder = tmp_path / "study"
    shutil.copytree(finished, folder)
    return folder


def run(arguments, capsys):
    capsys.readouterr()
    with pytest.raises(SystemExit) as stop:
        main([str(argument) for argument in arguments])
    printed = capsys.readouterr()
    return stop.value.code, printed.out, printed.err


def digests(folder):
    return {
        str(path.relative_to(folder)): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(folder.rglob("*"))
        if path.is_file() and path.name not in BOOKKEEPING
    }


def assert_one_clear_sentence(error, *fragments):
    lines = [line for line in error.splitlines() if line.strip()]
    assert len(lines) == 1, error
    assert len(lines[0]) < LONGEST_SENTENCE, error
    assert "Traceback" not in error
    assert "found" in error
    assert "expected" in error
    for fragment in fragments:
        assert fragment in error


def assert_refused(study, capsys, *fragments):
    before = digests(study / "results")
    code, _, error = run(["run", study / "study.toml", "--quiet", "--jobs", "1"], capsys)
    assert_one_clear_sentence(error, *fragments)
    assert code == 2
    assert digests(study / "results") == before


def columns(study):
    return np.loadtxt(study / SPOILED, delimiter=",", skiprows=1)


def rewrite(study, table, **header):
    write_columns(study / SPOILED, table, **header)


def edit_line(study, number, change):
    lines = (study / SPOILED).read_text(encoding="utf-8").splitlines()
    lines[number] = change(lines[number])
    (study / SPOILED).write_text("\n".join(lines) + "\n", encoding="utf-8")


def drop_a_column(study):
    rewrite(study, columns(study)[:, :2], header="frequency_hz,real")


def text_in_a_number(study):
    edit_line(study, 7, lambda line: line.replace(line.split(",")[1], "overload"))


def not_a_number(study):
    edit_line(study, 7, lambda line: line.replace(line.split(",")[0], "nan"))


def infinite_value(study):
    edit_line(study, 7, lambda line: line.replace(line.split(",")[1], "inf"))


def a_cell_too_many(study):
    edit_line(study, 7, lambda line: line + ",1")


def a_cell_too_few(study):
    edit_line(study, 7, lambda line: line.rsplit(",", 2)[0])


def unsorted_frequencies(study):
    table = columns(study)
    table[[10, 11]] = table[[11, 10]]
    rewrite(study, table)


def duplicate_frequency(study):
    table = columns(study)
    table[11, 0] = table[10, 0]
    rewrite(study, table)


def negative_frequency(study):
    table = columns(study)
    table[0, 0] = -1.0
    rewrite(study, table)


def zero_magnitude(study):
    table = columns(study)
    table[10, 1:3] = 0.0
    rewrite(study, table)


def coherence_above_one(study):
    table = columns(study)
    table[10, 3] = 1.7
    rewrite(study, table)


def negative_coherence(study):
    table = columns(study)
    table[10, 3] = -0.1
    rewrite(study, table)


def negative_variance(study):
    table = columns(study)
    table[:, 3] = 1.0
    table[10, 3] = -1.0
    rewrite(study, table, header="frequency_hz,real,imag,variance")


def one_point(study):
    rewrite(study, columns(study)[:1])


def header_only(study):
    edit_line(study, 0, lambda line: line)
    rewrite(study, columns(study)[:0])


def no_bytes(study):
    (study / SPOILED).write_bytes(b"")


def wrong_encoding(study):
    text = (study / SPOILED).read_text(encoding="utf-8")
    (study / SPOILED).write_bytes(text.encode("utf-16"))


def binary_rubbish(study):
    (study / SPOILED).write_bytes(bytes(range(256)) * 20)


def same_column_twice(study):
    table = columns(study)
    rewrite(study, table, header="frequency_hz,real,real,coherence")


def wrong_temperature_in_the_name(study):
    (study / SPOILED).rename(study / "bench/U02_warmC.csv")


SPOILED_FILES = {
    drop_a_column: ("imag",),
    text_in_a_number: ("overload",),
    not_a_number: ("nan",),
    infinite_value: ("inf",),
    a_cell_too_many: (),
    a_cell_too_few: (),
    unsorted_frequencies: (),
    duplicate_frequency: (),
    negative_frequency: ("-1",),
    zero_magnitude: (),
    coherence_above_one: ("1.7",),
    negative_coherence: ("-0.1",),
    negative_variance: ("-1",),
    one_point: (),
    header_only: (),
    no_bytes: (),
    wrong_encoding: (),
    binary_rubbish: (),
    same_column_twice: ("real",),
}


@pytest.mark.parametrize("spoil", SPOILED_FILES, ids=lambda spoil: spoil.__name__)
def test_spoiled_text_file_is_named(study, capsys, spoil):
    spoil(study)
    assert_refused(study, capsys, "U02_25C.csv", *SPOILED_FILES[spoil])


def test_two_spoiled_files_give_two_sentences(study, capsys):
    text_in_a_number(study)
    shutil.copy(study / SPOILED, study / "bench/U03_25C.csv")
    code, _, error = run(["run", study / "study.toml", "--quiet"], capsys)
    assert code == 2
    assert "U02_25C.csv" in error
    assert "U03_25C.csv" in error


def test_empty_folder(study, capsys):
    shutil.rmtree(study / "bench")
    (study / "bench").mkdir()
    assert_refused(study, capsys, "bench/{unit}_{temperature:g}C.csv")


def test_missing_folder(study, capsys):
    shutil.rmtree(study / "bench")
    assert_refused(study, capsys, "bench")


def set_in_study(study, old, new):
    text = (study / "study.toml").read_text(encoding="utf-8")
    assert old in text
    (study / "study.toml").write_text(text.replace(old, new), encoding="utf-8")


def test_pattern_that_matches_nothing(study, capsys):
    set_in_study(study, "bench/{unit}", "bench/arm_{unit}")
    assert_refused(study, capsys, "bench/arm_{unit}_{temperature:g}C.csv")


def test_two_files_for_one_set_of_labels(study, capsys):
    shutil.copy(study / SPOILED, study / "bench/U02_25.0C.csv")
    assert_refused(study, capsys, "U02_25.0C.csv")


def test_truncated_netcdf(study, capsys):
    from identkit import grids

    grids.save(synthetic.to_dataset(small_campaign_in_memory()), study / "bench.nc")
    whole = (study / "bench.nc").read_bytes()
    (study / "bench.nc").write_bytes(whole[: len(whole) // 2])
    set_in_study(study, "bench/{unit}_{temperature:g}C.csv", "bench.nc")
    assert_refused(study, capsys, "bench.nc")


def small_campaign_in_memory():
    return synthetic.invent_campaign(units=2, heads=1, temperatures=(25.0,))


def test_netcdf_without_responses(study, capsys):
    from identkit import grids

    data = synthetic.to_dataset(small_campaign_in_memory())
    grids.save(data.drop_vars("frequency_response"), study / "bench.nc")
    set_in_study(study, "bench/{unit}_{temperature:g}C.csv", "bench.nc")
    assert_refused(study, capsys, "bench.nc", "frequency_response")


@pytest.mark.parametrize(
    ("old", "new", "fragments"),
    [
        ("order = 4", "ordre = 4", ("ordre", "order")),
        ("[bound]", "[bounds]", ("bounds", "bound")),
        ("order = 4", 'order = "four"', ("[bound] order", "four")),
        ("order = 4", "order = 0", ("[bound] order", "0")),
        ("order = 4", "order = ", ("line",)),
        ("averages = 32", "averages = 0", ("averages", "0")),
        ("averages = 32", "band = [5000, 50]", ("band", "5000")),
        ("averages = 32", "averages = 32\nband = [1e6, 2e6]", ("band",)),
        ('name = "spoiled"', 'name = "spoiled"\nresults = "../elsewhere"', ("elsewhere",)),
        ('name = "spoiled"', 'name = "spoiled"\nresults = "/elsewhere"', ("elsewhere",)),
        ("order = 4", "order = 4\nexclude = [{ unit = 'U99', reason = 'x' }]", ("U99",)),
        ("modes = 3", "modes = 3\nbase = 'hinge'", ("hinge", "pivot")),
        ("bench/{unit}", "bench/{unit", ("bench",)),
        ("bench/{unit}", "bench/{unit}_{unit}", ("unit",)),
    ],
)
def test_wrong_setting_is_named(study, capsys, old, new, fragments):
    set_in_study(study, old, new)
    assert_refused(study, capsys, *fragments)


def test_cap_that_no_weight_can_keep_is_named_with_its_place(study, capsys):
    set_in_study(study, "order = 4", "order = 4\ncap = [[100, 1e-9]]")
    code, _, error = run(["run", study / "study.toml", "--quiet", "--jobs", "1"], capsys)
    assert code == 2
    assert len(error.splitlines()) == 1
    assert "cap" in error
    assert "Hz" in error


def test_missing_study_file(study, capsys):
    code, _, error = run(["run", study / "absent.toml"], capsys)
    assert code == 2
    assert_one_clear_sentence(error, "absent.toml")


def test_results_folder_that_cannot_be_written(study, capsys):
    """A plain file stands where the folder should be: refused for every user, root included."""
    shutil.rmtree(study / "results")
    (study / "results").write_text("kept", encoding="utf-8")
    code, _, error = run(["run", study / "study.toml", "--quiet"], capsys)
    assert code == 2
    assert_one_clear_sentence(error, "results")
    assert (study / "results").read_text(encoding="utf-8") == "kept"


def test_good_again_goes_on_without_doing_anything_twice(study, capsys):
    """After a refusal and the file put right, finished stages are still good."""
    good = (study / SPOILED).read_bytes()
    before = digests(study / "results")
    text_in_a_number(study)
    assert_refused(study, capsys)
    (study / SPOILED).write_bytes(good)
    run(["run", study / "study.toml", "--quiet", "--jobs", "1"], capsys)
    after = digests(study / "results")
    assert {k: v for k, v in after.items() if k != "responses.nc"} == {
        k: v for k, v in before.items() if k != "responses.nc"
    }


def test_bad_file_is_skipped_when_asked_and_named(study, capsys):
    text_in_a_number(study)
    set_in_study(study, "averages = 32", 'averages = 32\nbad_files = "skip"')
    code, out, error = run(["run", study / "study.toml", "--quiet", "--jobs", "1"], capsys)
    assert code in (0, 1), error
    assert "U02_25C" in out


def test_audit_of_a_file_that_is_no_set(study, capsys):
    (study / "not_a_set.json").write_text('{"format": "something"}', encoding="utf-8")
    code, _, error = run(["audit", study / "not_a_set.json", study / SPOILED], capsys)
    assert code == 2
    assert_one_clear_sentence(error, "not_a_set.json")


def test_audit_of_a_response_that_is_not_there(study, capsys):
    code, _, error = run(["audit", study / "results/set.json", study / "absent.csv"], capsys)
    assert code == 2
    assert_one_clear_sentence(error, "absent.csv")


def test_show_of_a_file_of_no_known_kind(study, capsys):
    code, _, error = run(["show", study / SPOILED], capsys)
    assert code == 2
    assert "U02_25C.csv" in error
