"""Every data set says where it comes from, under which licence, how it was taken; stays small."""

import shutil
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from identkit import synthetic
from identkit.grids import load
from identkit.pipeline import run_study

DATASETS = Path(__file__).parents[1] / "datasets"
FOLDERS = sorted(path for path in DATASETS.iterdir() if path.is_dir())
LARGEST_FILE, LARGEST_WHOLE = 400_000, 1_500_000


def kept_files(folder):
    return [path for path in folder.rglob("*") if path.is_file() and "results" not in path.parts]


@pytest.mark.parametrize("folder", FOLDERS, ids=lambda folder: folder.name)
def test_page_states_source_licence_and_recipe(folder):
    page = (folder / "README.md").read_text(encoding="utf-8").lower()
    if "invented" in page.splitlines()[0]:
        assert "nothing here is measured" in page
    else:
        assert "source" in page
        assert "licence" in page or "public domain" in page
        assert "taken" in page


def test_front_page_lists_every_folder():
    page = (DATASETS / "README.md").read_text(encoding="utf-8")
    rows = [line.split("`")[1] for line in page.splitlines() if line.startswith("| `")]
    assert sorted(rows) == [folder.name for folder in FOLDERS]


def test_everything_stays_small():
    sizes = {path: path.stat().st_size for path in kept_files(DATASETS)}
    assert max(sizes.values()) <= LARGEST_FILE
    assert sum(sizes.values()) <= LARGEST_WHOLE


def test_invented_campaign_is_the_one_the_generator_draws():
    """Same seed, same numbers: the file is not a leftover of an older invention."""
    kept = load(DATASETS / "demo_campaign" / "responses.nc")
    campaign = synthetic.invent_campaign(
        seed=7,
        units=6,
        heads=2,
        temperatures=(15.0, 45.0),
        bench=synthetic.InventedBench(points=300),
        story=synthetic.Story(odd_lot="", cracked_unit=""),
    )
    drawn = np.array([response.frequency_response for response in campaign.responses])
    np.testing.assert_allclose(kept["frequency_response"].values[:, 0, 0], drawn, rtol=1e-12)


@pytest.mark.slow
def test_ready_made_study_runs_and_finds_what_was_invented(tmp_path):
    shutil.copytree(DATASETS / "demo_campaign", tmp_path / "demo", ignore=ignore_results)
    result = run_study(tmp_path / "demo" / "study.toml", jobs=1)
    assert result.held
    modes = pd.read_csv(result.folder / "modes.csv")
    found = modes[modes["mode"].str.startswith("M") & (modes["outcome"] == "done")]
    assert found.groupby("mode").size().to_dict() == {f"M{k}": 24 for k in range(1, 9)}
    middle = found.groupby("mode")["modal_frequency_hz"].median()
    invented = [mode.frequency for mode in synthetic.MODES]
    np.testing.assert_allclose(middle, invented, rtol=0.02)


def ignore_results(folder, names):
    return [name for name in names if name == "results"]
