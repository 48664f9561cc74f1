import numpy as np
import pytest

from identkit.errors import InputError
from identkit.readers.columns import column_choices
from identkit.readers.text import read_text
from identkit.settings import ColumnSettings, UnitSettings

FREQUENCY = np.array([100.0, 200.0, 400.0])
RESPONSE = np.array([1 + 2j, -3.5 + 0.25j, 1e-9 - 4e-12j])


@pytest.fixture
def read(tmp_path):
    def reader(text, averages=None, name="a.csv", **columns):
        path = tmp_path / name
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        choices = column_choices(ColumnSettings(**columns), UnitSettings())
        return read_text(path, choices, averages, "a.csv")

    return reader


def rows(delimiter, header="frequency_hz,real,imag", response=RESPONSE):
    lines = [header.replace(",", delimiter)]
    lines += [
        delimiter.join(repr(float(x)) for x in (f, h.real, h.imag))
        for f, h in zip(FREQUENCY, response, strict=True)
    ]
    return "\n".join(lines) + "\n"


@pytest.mark.parametrize("delimiter", [",", ";", "\t", " ", "   ", ", ", " ; "])
def test_every_delimiter_gives_the_same_numbers_to_the_last_digit(read, delimiter):
    measured = read(rows(delimiter))
    np.testing.assert_array_equal(measured.frequency, FREQUENCY)
    np.testing.assert_array_equal(measured.response, RESPONSE)


@pytest.mark.parametrize(
    "change",
    [
        lambda text: "\ufeff" + text,
        lambda text: text.replace("\n", "\r\n"),
        lambda text: text.replace("\n", "\r"),
        lambda text: text.rstrip("\n"),
        lambda text: text + "\n\n  \n,,\n",
        lambda text: "# taken by hand, ünder glass\n\n" + text,
        lambda text: text.replace("200.0", "# a remark\n200.0"),
        lambda text: "#" + text,
        lambda text: "# a remark\n# " + text,
        lambda text: text.replace("real", '"real"').replace("-3.5", '"-3.5"'),
        lambda text: text.replace("frequency_hz", "Frequency_Hz"),
        lambda text: text.replace("real,imag", " real , imag "),
        lambda text: text.replace("\n", ",ok\n").replace("imag,ok", "imag,state"),
        lambda text: text.replace("\n", ",\n"),
    ],
)
def test_what_the_trade_writes_around_the_numbers_is_understood(read, change):
    measured = read(change(rows(",")))
    np.testing.assert_array_equal(measured.frequency, FREQUENCY)
    np.testing.assert_array_equal(measured.response, RESPONSE)


@pytest.mark.parametrize("delimiter", [";", "\t", " "])
def test_decimal_commas_are_understood_where_the_comma_separates_nothing(read, delimiter):
    header, *values = rows(delimiter).splitlines()
    measured = read("\n".join([header, *(line.replace(".", ",") for line in values)]))
    np.testing.assert_array_equal(measured.response, RESPONSE)


def test_decimal_commas_between_commas_are_refused(read):
    with pytest.raises(InputError, match="line 2: found 6 values; expected 3, as the header"):
        read("frequency_hz,real,imag\n100,0,1,0,2,0\n")


def test_columns_may_stand_in_any_order_beside_others(read):
    text = "remark,imag,frequency_hz,real\nbad,2,100,1\nworse,3,200,4\n"
    np.testing.assert_array_equal(read(text).response, [1 + 2j, 4 + 3j])


@pytest.mark.parametrize(
    ("header", "values", "columns"),
    [
        ("magnitude,phase_deg", (2.0, 30.0), {}),
        ("magnitude,phase_rad", (2.0, np.pi / 6), {}),
        ("magnitude_db,phase_deg", (20 * np.log10(2.0), 30.0), {}),
        ("magnitude_db,phase_rad", (20 * np.log10(2.0), np.pi / 6), {}),
        ("Mag [dB],phase_deg", (20 * np.log10(2.0), 30.0), {"magnitude": "Mag [dB]"}),
        (
            "Mag,P",
            (20 * np.log10(2.0), 30.0),
            {"magnitude": {"name": "Mag", "unit": "dB"}, "phase_deg": "P"},
        ),
    ],
)
def test_magnitude_and_phase_give_the_complex_response(read, header, values, columns):
    line = ",".join(repr(float(value)) for value in values)
    measured = read(f"frequency_hz,{header}\n1,{line}\n2,{line}\n", **columns)
    np.testing.assert_allclose(measured.response, 2 * np.exp(1j * np.pi / 6), rtol=1e-15)


@pytest.mark.parametrize(
    ("column", "factor"),
    [
        ("Freq [kHz]", 1e3),
        ("Freq (kHz)", 1e3),
        ("w [rad/s]", 1 / (2 * np.pi)),
        ("f [mHz]", 1e-3),
        ("f [MHz]", 1e6),
        ({"name": "f", "unit": "kHz"}, 1e3),
        ("f", 1.0),
    ],
)
def test_frequency_comes_in_hz_whatever_its_unit(read, column, factor):
    name = column["name"] if isinstance(column, dict) else column
    measured = read(f"{name},real,imag\n1,1,1\n2,1,1\n", frequency=column)
    np.testing.assert_allclose(measured.frequency, [factor, 2 * factor], rtol=1e-15)


def test_a_blank_inside_a_name_is_kept_before_its_unit(read):
    measured = read("Freq [kHz] real imag\n1 1 1\n2 1 1\n", frequency="Freq [kHz]")
    np.testing.assert_array_equal(measured.frequency, [1e3, 2e3])


def test_a_line_at_rest_is_left_out_and_counted(read):
    measured = read("frequency_hz,magnitude_db,phase_deg\n0,-inf,nan\n1,0,0\n2,0,0\n")
    assert measured.rest_lines == 1
    np.testing.assert_array_equal(measured.frequency, [1.0, 2.0])


def test_variance_goes_before_coherence_and_coherence_needs_averages(read):
    text = "frequency_hz,real,imag,coherence{}\n1,3,4,0.5{}\n2,3,4,0.8{}\n"
    plain, both = text.replace("{}", ""), text.replace("{}", ",variance", 1).replace("{}", ",7")
    assert read(plain).variance is None
    assert read(plain).variance_source == "residuals"
    known = read(plain, averages=11)
    assert known.variance_source == "coherence"
    np.testing.assert_allclose(known.variance, [25 * 0.1, 25 * 0.25 / 10])
    assert read(both, averages=11).variance_source == "measured"
    np.testing.assert_array_equal(read(both, averages=11).variance, [7.0, 7.0])


def test_the_slow_path_reads_what_the_fast_one_does(read):
    """A value that only the slow path understands leaves all others as they were."""
    fast, slow = read(rows(",")), read(rows(",").replace("200.0", "２００.0"))
    with pytest.raises(ValueError, match="could not convert"):
        np.loadtxt(["２００.0"])
    np.testing.assert_array_equal(slow.frequency, fast.frequency)
    np.testing.assert_array_equal(slow.response, fast.response)


GOOD = "frequency_hz,real,imag\n100,1,2\n200,3,4\n"


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        (b"", "a.csv: found an empty file; expected a text file in UTF-8 with a header row"),
        (b"  \n\n", "a.csv: found an empty file"),
        (b"# nothing\n# else\n", "a.csv: found only comments"),
        (b"frequency_hz,real,imag\n", "a.csv: found a header row without values"),
        (b"100,1,2\n200,3,4\n", "a.csv, line 1: found numbers; expected a header row"),
        (b"frequency_hz,real,imag\n100,1,2\n", "a.csv: found 1 point above 0 Hz; expected at"),
        (b"frequency_hz,real,imag\n0,1,2\n5,1,2\n", "a.csv: found 1 point above 0 Hz"),
        (GOOD.encode("utf-16"), "a.csv: found the wrong encoding (UTF-16)"),
        (b"PK\x03\x04\0\0", "a.csv: found binary data"),
        (
            "frequency_hz,real,imag,T °C\n1,2,3,4\n".encode("latin-1"),
            "a.csv, line 1: found the wrong encoding (byte 0xb0 is not UTF-8)",
        ),
        (
            b"freq_hz,real,imag\n1,2,3\n",
            'a.csv, line 1: found the columns "freq_hz", "real", "imag"; expected also '
            '"frequency_hz" (nearest is "freq_hz")',
        ),
        (
            b"frequency_hz,real\n1,2\n",
            'found the columns "frequency_hz", "real"; expected also "imag"',
        ),
        (b"frequency_hz,gain\n1,2\n", 'expected also "real" and "imag", or magnitude and phase'),
        (
            b"frequency_hz,magnitude,phase\n1,2,3\n",
            '"magnitude", "phase"; expected also "phase_deg" (nearest is "phase")',
        ),
        (
            b"frequency_hz,real,imag,Real\n1,2,3,4\n",
            'a.csv, line 1: found the column "real" more than once',
        ),
        (
            GOOD.replace("3,4", "three,4").encode(),
            'a.csv, line 3, column "real": found "three"; expected a number',
        ),
        (GOOD.replace("3,4", ",4").encode(), 'line 3, column "real": found "nothing"'),
        (GOOD.replace("3,4", "1_000,4").encode(), 'line 3, column "real": found "1_000"'),
        (GOOD.replace("3,4", "3").encode(), "line 3: found 2 values; expected 3"),
        (GOOD.replace("3,4", "3,4,5").encode(), "line 3: found 4 values; expected 3"),
        (GOOD.replace("3,4", "nan,4").encode(), 'line 3, column "real": found nan'),
        (GOOD.replace("3,4", "3,-inf").encode(), 'line 3, column "imag": found -inf'),
        (GOOD.replace("200", "inf").encode(), 'line 3, column "frequency_hz": found inf'),
        (GOOD.replace("200", "1e999").encode(), 'line 3, column "frequency_hz": found inf'),
        (GOOD.replace("200", "50").encode(), "line 3: found the frequency 50 Hz after 100 Hz"),
        (
            GOOD.replace("200", "100").encode(),
            "line 3: found the frequency 100 Hz after 100 Hz; expected every frequency once",
        ),
        (GOOD.replace("100", "-1").encode(), "line 2: found the frequency -1 Hz"),
        (GOOD.replace("3,4", "0,0").encode(), "line 3: found the response 0; expected a resp"),
        (
            b"frequency_hz,magnitude,phase_deg\n1,1,0\n2,-1,0\n",
            'line 3, column "magnitude": found -1; expected a number, 0 or more',
        ),
        (
            b"frequency_hz,magnitude_db,phase_deg\n1,1,0\n2,99999,0\n",
            "line 3: found the response inf",
        ),
        (
            b"frequency_hz,real,imag,coherence\n1,1,0,1\n\n2,1,1,1.02\n",
            "line 4: found the coherence 1.02; expected a coherence from 0 to 1",
        ),
        (
            b"frequency_hz,real,imag,coherence\n1,1,0,-0.1\n2,1,1,1\n",
            "line 2: found the coherence -0.1",
        ),
        (
            b"# x\nfrequency_hz,real,imag,variance\n1,1,0,1\n2,1,1,-1\n",
            "line 4: found the variance -1; expected a variance above 0",
        ),
        (
            b"0,1,1\nfrequency_hz,real,imag\n0,1,1\n1,2,2\n",
            "a.csv, line 1: found numbers; expected a header row",
        ),
        (
            b"frequency_hz,real,imag,variance\n1,1,0,1\n2,1,1,0\n",
            "line 3: found the variance 0; expected a variance above 0",
        ),
    ],
)
def test_a_bad_file_is_one_sentence_with_its_line(read, text, sentence):
    with pytest.raises(InputError) as caught:
        read(text)
    assert len(caught.value.problems) == 1
    assert sentence in str(caught.value)


def test_a_column_the_user_named_must_be_there(read):
    with pytest.raises(InputError, match='expected also "Coh"'):
        read(GOOD, coherence="Coh")
    with pytest.raises(InputError, match='expected also "Gain" and "phase_deg"'):
        read(GOOD, magnitude="Gain")


@pytest.mark.parametrize(
    ("make", "found"),
    [
        (lambda path: path.mkdir(), "Is a directory"),
        (lambda path: path.symlink_to(path.parent / "gone"), "No such file"),
        (lambda path: path.symlink_to(path), "Too many levels"),
    ],
)
def test_what_cannot_be_read_says_why(tmp_path, make, found):
    make(tmp_path / "a.csv")
    choices = column_choices(ColumnSettings(), UnitSettings())
    with pytest.raises(InputError, match=f"a.csv: found a file that cannot be read .{found}"):
        read_text(tmp_path / "a.csv", choices, None, "a.csv")


@pytest.mark.parametrize(
    ("columns", "units", "message"),
    [
        ({"frequency": "F [furlong]"}, {}, r'\] frequency: found the unit "furlong"; expected one'),
        ({"phase_deg": "P [rad]"}, {}, r'phase_deg: found the unit "rad"; expected deg'),
        ({"phase_rad": "P [deg]"}, {}, r'phase_rad: found the unit "deg"; expected rad'),
        ({"magnitude_db": "M [um/A]"}, {}, r'magnitude_db: found the unit "um/A"; expected dB'),
        (
            {"magnitude": "M [nm/A]"},
            {"input": "A", "output": "um"},
            r'magnitude: found the unit "nm/A"; expected "um/A", as \[responses.units\] says',
        ),
    ],
)
def test_a_unit_that_cannot_be_is_refused_before_any_file(columns, units, message):
    with pytest.raises(InputError, match=message):
        column_choices(ColumnSettings(**columns), UnitSettings(**units))
