import pytest

from identkit.errors import InputError
from identkit.readers.path_pattern import PathPattern, natural_key

PATTERN = "bench/{unit}/H{head}_{temperature:g}C.csv"


@pytest.fixture
def campaign(tmp_path):
    def make(*names):
        for name in names:
            path = tmp_path / name
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_text("x")
        return tmp_path

    return make


def labels_of(pattern, folder):
    return {file.identity: file.labels for file in PathPattern(pattern).find(folder).files}


def test_labels_come_from_the_path(campaign):
    folder = campaign("bench/U07/H2_25C.csv", "bench/U07/H2_-10.5C.csv")
    assert labels_of(PATTERN, folder) == {
        "U07/H2_-10.5C": {"unit": "U07", "head": "2", "temperature": -10.5},
        "U07/H2_25C": {"unit": "U07", "head": "2", "temperature": 25.0},
    }


def test_order_is_the_natural_one(campaign):
    folder = campaign(*(f"bench/U{k}/H0_5C.csv" for k in (10, 9, 1, 100)))
    found = [file.identity for file in PathPattern(PATTERN).find(folder).files]
    assert found == ["U1/H0_5C", "U9/H0_5C", "U10/H0_5C", "U100/H0_5C"]


def test_a_field_never_spans_a_folder(campaign):
    folder = campaign("bench/a/b/H0_5C.csv", "bench/a/H0_5C.csv", "bench/H0_5C.csv")
    assert list(labels_of(PATTERN, folder)) == ["a/H0_5C"]


def test_fixed_parts_are_taken_word_for_word(campaign):
    folder = campaign("be[n]ch/{x}/U1.csv", "be[n]ch/{x}/U1xcsv", "ben/{x}/U2.csv")
    assert list(labels_of("be[n]ch/{{x}}/{unit}.csv", folder)) == ["U1"]


def test_case_counts(campaign):
    assert list(labels_of("H{head}.csv", campaign("H1.csv", "h2.csv", "H3.CSV"))) == ["H1"]


def test_the_same_field_twice_must_agree(campaign):
    folder = campaign("U1/U1_a.csv", "U1/U2_b.csv")
    found = PathPattern("{unit}/{unit}_{lot}.csv").find(folder)
    assert [file.identity for file in found.files] == ["U1/U1_a"]
    assert [path.name for path, _ in found.strays] == ["U2_b.csv"]


def test_labels_of_the_users_own_are_text_or_numbers(campaign):
    folder = campaign("U1_s07_3.5mm.csv")
    labels = labels_of("{unit}_s{shift}_{gap:g}mm.csv", folder)["U1_s07_3.5mm"]
    assert labels == {"unit": "U1", "shift": "07", "gap": 3.5}


def test_reserved_labels_have_their_kind_whatever_the_field_says(campaign):
    folder = campaign("U7_H02_25_3.csv")
    labels = labels_of("U{unit:d}_H{head:d}_{temperature}_{position}.csv", folder)
    assert labels == {
        "U7_H02_25_3": {"unit": "7", "head": "2", "temperature": 25.0, "position": 3.0}
    }


@pytest.mark.parametrize(
    ("written", "read"),
    [("2026-01-31", "2026-01-31"), ("20260131", "2026-01-31"), ("2026-W05-6", "2026-01-31")],
)
def test_dates_are_iso_dates(campaign, written, read):
    folder = campaign(f"U1_{written}.csv")
    assert [v["measured_at"] for v in labels_of("{unit}_{measured_at}.csv", folder).values()] == [
        read
    ]


@pytest.mark.parametrize(
    ("pattern", "name", "found"),
    [
        ("{unit}_{temperature}C.csv", "U1_hotC.csv", "temperature 'hot'"),
        ("{unit}_{temperature:g}C.csv", "U1_nanC.csv", "temperature nan"),
        ("{unit}_{measured_at}.csv", "U1_31.1.2026.csv", "measured_at '31.1.2026'"),
        ("{unit}_{temperature:g}C.csv", "U1_hotC.csv", "a label of the wrong kind"),
    ],
)
def test_a_file_with_a_wrong_label_is_a_stray_and_not_lost(campaign, pattern, name, found):
    result = PathPattern(pattern).find(campaign(name, "U2_2026-01-01.csv", "U2_5C.csv"))
    assert [file.path.name[:2] for file in result.files] == ["U2"]
    strays = [str(problem) for path, problem in result.strays if path.name == name]
    assert len(strays) == 1
    assert strays[0].startswith(name)
    assert found in strays[0]


def test_unnamed_fields_are_no_labels(campaign):
    folder = campaign("run-1/U1.csv", "run-2/U2.csv")
    assert labels_of("{}/{unit}.csv", folder) == {
        "run-1/U1": {"unit": "U1"},
        "run-2/U2": {"unit": "U2"},
    }


def test_two_files_with_the_same_labels_are_both_named(campaign):
    folder = campaign("a/U1_5C.csv", "b/U1_5.0C.csv", "b/U2_5C.csv")
    with pytest.raises(InputError) as caught:
        PathPattern("{}/{unit}_{temperature:g}C.csv").find(folder)
    message = str(caught.value)
    assert len(caught.value.problems) == 1
    assert "b/U1_5.0C.csv: found the same labels (unit U1, temperature 5.0) as a/U1_5C.csv" in (
        message
    )


def test_hidden_files_and_folders_of_the_files_name_are_passed_over(campaign):
    folder = campaign("U1.csv", "._U1.csv", ".U2.csv", "U3.csv/inner.txt")
    assert list(labels_of("{unit}.csv", folder)) == ["U1"]


def test_one_file_without_labels(campaign):
    assert labels_of("data/only.csv", campaign("data/only.csv")) == {"only": {}}


def test_files_that_differ_in_suffix_alone_keep_it(campaign):
    folder = campaign("U1.csv", "U1.txt")
    assert sorted(labels_of("{unit}.{kind}", folder)) == ["U1.csv", "U1.txt"]


def test_a_point_in_a_label_is_no_suffix(campaign):
    assert list(labels_of("H{head}_{temperature:g}", campaign("H0_25.5"))) == ["H0_25.5"]


def test_a_pattern_may_lead_out_of_the_folder_or_start_at_the_root(campaign, tmp_path):
    campaign("data/U1.csv", "study/x")
    assert list(labels_of("../data/{unit}.csv", tmp_path / "study")) == ["U1"]
    assert list(labels_of(f"{tmp_path.as_posix()}/data/{{unit}}.csv", tmp_path / "study")) == ["U1"]


@pytest.mark.parametrize(
    ("made", "pattern", "said"),
    [
        ("bench/U1/H0_5.csv", PATTERN, "nearest existing folder {}/bench: for example {}/bench/U1"),
        ("bench/U1/H0_5C.csv", "banch/{unit}/H{head}_5C.csv", "existing folder {}: for example"),
        ("bench/x/notes", "bench/{unit}.csv", "existing folder {}/bench: no file of measurements"),
    ],
)
def test_a_pattern_that_matches_nothing_says_what_is_there(campaign, made, pattern, said):
    folder = campaign(made)
    with pytest.raises(InputError, match="no file that matches") as caught:
        PathPattern(pattern).find(folder)
    assert said.replace("{}", str(folder)) in str(caught.value)


def test_an_empty_folder_is_said(tmp_path):
    (tmp_path / "bench").mkdir()
    with pytest.raises(InputError, match="bench: an empty folder"):
        PathPattern(PATTERN).find(tmp_path)


@pytest.mark.parametrize(
    ("pattern", "found"),
    [
        ("", '""'),
        ("bench/{unit", "expected '}'"),
        ("bench/unit}.csv", "Single '}'"),
        ("bench/{unit:zz}.csv", "format spec 'zz'"),
        ("bench/{a b}.csv", "a b"),
        ("bench/{a.b}.csv", "a.b"),
        ("bench/{a[0]}.csv", "a[0]"),
        ("bench/{unit}_{unit:d}.csv", "unit"),
        ("bench/{frequency}.csv", "a name the data itself uses"),
        ("bench/{unit}/*.csv", "*"),
    ],
)
def test_a_malformed_pattern_is_one_clear_sentence(pattern, found):
    with pytest.raises(InputError, match=r"\[responses\] files: found") as caught:
        PathPattern(pattern)
    assert found in str(caught.value)
    assert "\n" not in str(caught.value)


def test_files_given_by_hand_get_their_labels_where_the_pattern_fits(tmp_path):
    pattern = PathPattern(PATTERN)
    fitting = tmp_path / "bench" / "U7" / "H1_5C.csv"
    assert pattern.label(fitting) == {"unit": "U7", "head": "1", "temperature": 5.0}
    assert pattern.label(tmp_path / "other.csv") == {}


def test_natural_order_puts_numbers_by_value():
    assert sorted(["a10b", "a9b", "a", "a9", "10", "b1"], key=natural_key) == [
        "10",
        "a",
        "a9",
        "a9b",
        "a10b",
        "b1",
    ]
