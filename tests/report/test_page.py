"""The page: self-contained, escaped, complete."""

import re
from dataclasses import replace
from html.parser import HTMLParser

import numpy as np
import pytest

from identkit.outcomes import Outcome
from identkit.report import mode_tables
from identkit.report.page import CAUTIONS, ReportInput, write_report
from identkit.report.pictures import inline_svg

TOPICS = ("radius", "reach", "worst", "modes", "fits", "responses", "screening")
HOSTILE = '<script>alert("x")</script><img src=x onerror=alert(1)>&"\''


class Reader(HTMLParser):
    """Collects tags, ids and references of a page."""

    def __init__(self):
        super().__init__()
        self.tags, self.ids, self.references = [], [], []
        self.open = []

    def handle_starttag(self, tag, attributes):
        self.tags.append((tag, dict(attributes)))
        for name, value in attributes:
            if name == "id":
                self.ids.append(value)
            if name in ("href", "src", "xlink:href", "srcset", "action", "data", "poster"):
                self.references.append(value)

    @classmethod
    def of(cls, text):
        reader = cls()
        reader.feed(text)
        reader.close()
        return reader


def test_every_picture_is_written_in_both_formats(written):
    for topic in TOPICS:
        svg = written.folder / "figures" / f"{topic}.svg"
        png = written.folder / "figures" / f"{topic}.png"
        assert svg.read_text(encoding="utf-8").lstrip().startswith("<?xml")
        assert png.read_bytes().startswith(b"\x89PNG")
        assert f'id="figure-{topic}"' in written.text
    assert not list(written.folder.rglob("*.part*"))


def test_page_needs_nothing_from_outside(written):
    reader = Reader.of(written.text)
    assert not [tag for tag, _ in reader.tags if tag in ("script", "link", "iframe", "object")]
    for reference in reader.references:
        assert reference.startswith(("#", "data:image/png;base64,")), reference[:80]
    assert "http" not in re.sub(r"data:image/png;base64,[A-Za-z0-9+/=\s]*", "", written.text)
    assert "@import" not in written.text
    assert not re.search(r"url\((?!#)", written.text)


def test_ids_are_unique_and_every_reference_lands(written):
    reader = Reader.of(written.text)
    assert len(reader.ids) == len(set(reader.ids))
    targets = set(reader.ids)
    inner = [each[1:] for each in reader.references if each.startswith("#")]
    inner += re.findall(r"url\(#([^)]+)\)", written.text)
    assert inner
    assert not [each for each in inner if each not in targets]


def test_verdict_comes_before_everything_else(written):
    text = written.text
    assert text.index("Holds 20 of 20") < text.index("<figure")
    assert text.index('id="verdict"') < text.index('id="bound"') < text.index('id="cautions"')
    for caution in CAUTIONS:
        assert caution in text


def test_tables_tell_what_was_left_out_and_skipped(written):
    for words in (
        "unit U06: dropped on the floor",
        "bench/U01_H0.csv",
        "line 3: found a word",
        "Marked by screening",
        "Modes of the population",
        "Who sets the bound",
        "Of 24 responses: 20 held and 4 not held",
        "ab" * 32,
        "1.25 s",
    ):
        assert words in written.text, words


def test_pictures_carry_words_for_those_who_do_not_see_them(written):
    pictures = [given for tag, given in Reader.of(written.text).tags if tag == "svg"]
    assert len(pictures) == 2 * len(TOPICS)
    assert all(each["role"] == "img" and len(each["aria-label"]) > 20 for each in pictures)
    assert all("width" not in each and "viewbox" in each for each in pictures)


def test_size_stays_reasonable(written):
    assert len(written.text.encode()) < 3_000_000


def test_hostile_labels_are_shown_as_text(given, tmp_path):
    units = np.array([HOSTILE if u == "U02" else u for u in given.responses["unit"].values])

    def spoiled(data):
        return data.assign_coords(unit=("response", units))

    plants = tuple(
        replace(p, labels={**p.labels, "unit": HOSTILE}) if p.labels["unit"] == "U02" else p
        for p in given.plant_set.plants
    )
    hostile = replace(
        given,
        study_name=HOSTILE,
        responses=spoiled(given.responses).assign_attrs(
            output_unit=HOSTILE,
            skipped_files='[{"file": "<b>x</b>", "reason": "<script>1</script>"}]',
        ),
        screening=spoiled(given.screening),
        fits=spoiled(given.fits),
        modes=spoiled(given.modes),
        audit=spoiled(given.audit),
        plant_set=replace(given.plant_set, plants=plants),
        verdict=[HOSTILE],
        run={"inputs": {HOSTILE: {"sha256": HOSTILE}}, "version": HOSTILE},
    )
    text = write_report(hostile, tmp_path).read_text(encoding="utf-8")
    reader = Reader.of(text)
    assert not [tag for tag, _ in reader.tags if tag in ("script", "img", "b")]
    assert not [name for _, given in reader.tags for name in given if name.startswith("on")]
    assert "&lt;script&gt;" in text
    assert "<script" not in (tmp_path / "figures" / "worst.svg").read_text(encoding="utf-8")


def test_only_responses_still_make_a_page(given, tmp_path):
    page = write_report(ReportInput("bare", given.responses), tmp_path)
    text = page.read_text(encoding="utf-8")
    assert "no set was made" in text
    assert 'id="figure-responses"' in text
    assert 'id="bound"' not in text
    assert not (tmp_path / "figures" / "radius.svg").exists()


def test_pictures_of_an_earlier_run_do_not_linger(given, tmp_path):
    folder = tmp_path / "figures"
    folder.mkdir()
    (folder / "radius.svg").write_text("old", encoding="utf-8")
    write_report(ReportInput("bare", given.responses), tmp_path)
    assert not (folder / "radius.svg").exists()


def test_same_input_same_page(given, written, tmp_path):
    again = write_report(given, tmp_path).read_text(encoding="utf-8")
    assert again == written.text


def test_inline_svg_takes_out_what_a_page_must_not_have():
    document = (
        '<?xml version="1.0"?>\n<!DOCTYPE svg PUBLIC "x" "http://e.org">\n'
        '<svg xmlns:xlink="http://e.org/x" width="10pt" height="5pt" viewBox="0 0 10 5" '
        'xmlns="http://e.org/s"><metadata>http://m</metadata>'
        '<defs><style type="text/css">*{a:b}</style></defs>'
        '<clipPath id="p"/><g clip-path="url(#p)"><use xlink:href="#p"/></g></svg>'
    )
    found = inline_svg(document, "one", 'a "wide" <b>')
    assert found == (
        '<svg role="img" aria-label="a &quot;wide&quot; &lt;b&gt;" viewBox="0 0 10 5">'
        '<clipPath id="one-p"/><g clip-path="url(#one-p)"><use href="#one-p"/></g></svg>'
    )


def test_residue_of_a_mode_seen_with_opposite_signs(given):
    population = (
        given.population.copy(deep=True)
        .assign(
            head_value=(
                ("mode", "quantity", "head"),
                np.stack([np.full((8, 3), 4e8), np.full((8, 3), -6e8)], axis=-1),
            )
        )
        .assign_coords(head=["0", "1"])
    )
    population["population_value"].values[4, 2] = 1e6
    rows = mode_tables.population_table(replace(given, population=population)).rows
    assert rows[4][6] == "± 5.00×10⁸"


@pytest.mark.parametrize("code", [Outcome.NOT_CONVERGED, Outcome.TOO_FEW_POINTS])
def test_bad_fits_come_with_advice(given, code):
    fits = given.fits.copy(deep=True)
    fits["fit_outcome"].values[3] = code
    table = mode_tables.fit_outcome_table(replace(given, fits=fits))
    assert len(table.rows) == 1
    assert table.rows[0][0] == "U01, head 1, 50 °C"
    assert all(table.rows[0])


def test_long_tables_say_how_much_is_hidden(given):
    fits = given.fits.copy(deep=True)
    fits["fit_outcome"].values[:] = Outcome.NOT_CONVERGED
    many = replace(given, fits=fits.isel(response=np.tile(np.arange(24), 3)))
    table = mode_tables.fit_outcome_table(many)
    assert len(table.rows) == 40
    assert table.hidden == 32
