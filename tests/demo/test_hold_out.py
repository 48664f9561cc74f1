"""A study with held-out units, from files to the coverage in its set file."""

import json

import pytest

from identkit.demo import write_template
from identkit.pipeline import run_study
from identkit.plant_set.files import load_set
from identkit.synthetic import InventedBench, Story, invent_campaign
from identkit.synthetic_files import write_campaign

pytestmark = pytest.mark.slow


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    folder = tmp_path_factory.mktemp("hold-out")
    quiet = Story(odd_lot="", cracked_unit="")
    bench = InventedBench(points=400)
    campaign = invent_campaign(
        units=12, heads=1, temperatures=(25.0,), bench=bench, story=quiet, seed=8
    )
    write_campaign(folder, campaign, bad_files=False)
    text = write_template(folder / "template").read_text(encoding="utf-8")
    pattern = "bench/lot-{lot}_{measured_at}/{unit}_H{head}_{temperature:g}C.csv"
    text = text.replace("bench/{unit}/H{head}_{temperature:g}C.csv", pattern)
    for key in ("averages", "frequency", "magnitude_db", "phase_deg"):
        text = text.replace(f"# {key} = ", f"{key} = ")
    text = text.replace('name = "Phase"', 'name = "Phase [deg]"').replace(
        '# coherence = "Coherence"', 'coherence = "Coherence"'
    )
    text = text.replace("content = 0.9", "content = 0.5\norder = 8", 1)
    text = text.replace('order = "auto"', "", 1).replace("hold_out = 0 ", "hold_out = 0.5 ")
    (folder / "study.toml").write_text(text, encoding="utf-8")
    return run_study(folder / "study.toml", jobs=1)


def test_the_statement_rests_on_the_held_out_units(run):
    coverage = json.loads((run.folder / "coverage.json").read_text(encoding="utf-8"))
    assert coverage["units"] == 6
    if coverage["held"] == 6:
        # Wilks 1941: all of n held gives (1 - confidence)**(1 / n)
        assert coverage["content"] == pytest.approx(0.1 ** (1 / 6))
    assert any("held-out" in line for line in run.verdict)


def test_the_set_says_so_and_names_who_was_held_out(run):
    certificate = load_set(run.folder / "set.json").certificate
    assert certificate.measured.of == 6
    reasons = {each.reason for each in certificate.measured.excluded}
    assert reasons == {"held out to state the coverage"}
    assert certificate.coverage is not None
    assert certificate.coverage.units == 6
