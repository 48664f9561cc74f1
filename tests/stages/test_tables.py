"""CSV tables: columns as promised, one row where there is something to say."""

import numpy as np
import pandas as pd
import pytest

from identkit.outcomes import Outcome
from identkit.stages.pair import pair_modes
from identkit.stages.population import describe_population
from identkit.stages.tables import fits_table, modes_table, population_table, write_table
from identkit.synthetic import Story, invent_campaign
from tests.stages.invented_fits import FitErrors, invented_fits

LABELS = ["unit", "head", "temperature", "lot", "measured_at"]


@pytest.fixture(scope="module")
def fits():
    campaign = invent_campaign(seed=1, units=8, story=Story("none", "none"))
    return invented_fits(campaign, FitErrors(missing=0.05, extra=0.3))


@pytest.fixture(scope="module")
def modes(fits):
    return pair_modes(fits)


def test_fits_have_one_row_per_response(fits):
    table = fits_table(fits)
    assert table.columns.tolist() == [
        "response",
        *LABELS,
        "delay_s",
        "base_frequency_hz",
        "base_damping_ratio",
        "base_residue",
        "feedthrough",
        "noise_ratio",
        "outcome",
    ]
    assert table["response"].tolist() == fits["response"].values.tolist()
    assert table["delay_s"].to_numpy() == pytest.approx(fits["delay"].values)
    assert set(table["outcome"]) == {"done"}


def test_modes_have_one_row_per_response_and_mode(modes):
    table = modes_table(modes)
    assert table.columns.tolist() == [
        "response",
        *LABELS,
        "mode",
        "modal_frequency_hz",
        "modal_frequency_hz_standard_error",
        "damping_ratio",
        "damping_ratio_standard_error",
        "residue",
        "residue_standard_error",
        "residue_rate",
        "significance",
        "outcome",
    ]
    inside = modes["mode_in_population"].values
    extra = int((modes["mode_outcome"] == Outcome.MODE_EXTRA).sum())
    assert len(table) == modes.sizes["response"] * inside.sum() + extra
    missing = table[table["outcome"] == "mode-missing"]
    assert missing["modal_frequency_hz"].isna().all()
    assert (table["outcome"] == "mode-extra").sum() == extra
    one = table[(table["mode"] == "M3") & (table["outcome"] == "done")].iloc[5]
    chosen = modes.sel(response=one["response"], mode="M3")
    assert one["modal_frequency_hz"] == float(chosen["modal_frequency"])
    assert one["residue"] == float(chosen["residue"].squeeze())
    assert one["unit"] == str(chosen["unit"].values)
    assert one["residue_rate"] == 0.0


def test_population_has_one_row_per_mode_and_quantity(modes):
    table = population_table(describe_population(modes))
    assert len(table) == 8 * 3 + 5
    row = table[(table["mode"] == "M2") & (table["quantity"] == "modal_frequency")].iloc[0]
    assert row["population_value"] == pytest.approx(3420.0, rel=0.01)
    assert row["responses_found"] + row["responses_missing"] == 96
    base = table[table["mode"] == "base"]["quantity"].tolist()
    assert base == ["base_frequency", "base_damping_ratio", "delay", "base_residue", "feedthrough"]


def test_matrix_plants_name_output_and_input(modes):
    two = modes.copy(deep=True)
    wide = {}
    for name in two.data_vars:
        if "output" in two[name].dims:
            wide[name] = two[name].isel(output=[0, 0])
    narrow = two.drop_vars(list(wide)).drop_vars("output")
    pair = narrow.assign(
        {name: value.assign_coords(output=["position", "velocity"]) for name, value in wide.items()}
    )
    table = modes_table(pair)
    assert table.columns.tolist()[6:9] == ["mode", "output", "input"]
    assert set(table["output"]) == {"position", "velocity"}
    assert len(fits_table(pair)) == 2 * modes.sizes["response"]


def test_tables_survive_the_file(modes, tmp_path):
    table = modes_table(modes)
    path = tmp_path / "modes.csv"
    write_table(table, path)
    again = pd.read_csv(path, dtype={"head": str, "unit": str})
    numbers = table.select_dtypes("number").columns
    assert np.array_equal(
        again[numbers].to_numpy(float), table[numbers].to_numpy(float), equal_nan=True
    )
    assert again["head"].tolist() == table["head"].tolist()
