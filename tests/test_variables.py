from importlib.resources import files

import numpy as np
import pytest
import xarray as xr

from identkit.errors import InputError, MissingStageError
from identkit.grids import datasets, load
from identkit.pipeline import run_study
from identkit.synthetic import InventedBench, invent_campaign
from identkit.synthetic_files import write_campaign
from identkit.variables import FILES, LABELS, VARIABLES, check, file_format_page


def fits():
    return xr.Dataset(
        {
            "modal_frequency": (("response", "mode"), np.ones((2, 3))),
            "fit_outcome": ("response", np.zeros(2, dtype=np.int8)),
        },
        coords={"response": ["a", "b"]},
    )


def test_what_is_there_passes():
    check(fits(), ["modal_frequency", "fit_outcome", "response"], stage="fit", asked_by="pair")


def test_a_missing_variable_names_the_stage_to_run():
    with pytest.raises(MissingStageError, match="run the fit stage first") as caught:
        check(fits(), ["delay"], stage="fit", asked_by="pair")
    assert caught.value.needed == "fit"
    assert "pair" in str(caught.value)
    assert "delay" in str(caught.value)


def test_wrong_dimensions_are_refused():
    turned = fits().transpose("mode", "response")
    with pytest.raises(InputError, match=r"modal_frequency: found .*'mode', 'response'"):
        check(turned, ["modal_frequency"], stage="fit", asked_by="pair")


@pytest.mark.parametrize("values", [np.array(["1", "2"]), np.array([1.5, 2.0])])
def test_the_wrong_kind_is_refused(values):
    wrong = fits().assign(fit_outcome=("response", values))
    with pytest.raises(InputError, match="whole numbers"):
        check(wrong, ["fit_outcome"], stage="fit", asked_by="pair")


@pytest.mark.parametrize("stage", VARIABLES)
def test_every_variable_stands_once_per_file_and_says_what_it_is(stage):
    names = [variable.name for variable in VARIABLES[stage]]
    assert len(set(names)) == len(names)
    for variable in VARIABLES[stage]:
        assert variable.meaning.endswith("."), variable.name
        assert bool(variable.unit) == (variable.kind in ("number", "complex")), variable.name


def test_the_page_has_every_file_and_every_variable():
    page = file_format_page()
    for stage, variables in VARIABLES.items():
        assert FILES.get(stage, stage) in page
        for variable in (*variables, *LABELS):
            assert f"`{variable.name}`" in page
    rows = [line.replace(r"\|", "") for line in page.splitlines() if line.startswith("|")]
    assert {line.count("|") for line in rows} == {6}


def unregistered(data, stage):
    """Return what is wrong with the variables of a stage, against the dictionary."""
    known = {variable.name: variable for variable in (*LABELS, *VARIABLES[stage])}
    needed = {variable.name for variable in VARIABLES[stage] if not variable.optional}
    there = {str(name) for name in data.variables}
    for name in there & set(known):
        check(data, [name], stage=stage, asked_by="test")
    return sorted(there - set(known)), sorted(needed - there)


@pytest.mark.slow
def test_every_stage_writes_what_the_dictionary_says(tmp_path):
    """A small invented campaign, read from files and taken through all stages."""
    bench = InventedBench(points=400)
    write_campaign(tmp_path, invent_campaign(units=4, heads=2, bench=bench), bad_files=False)
    columns = files("identkit").joinpath("demo_study.toml").read_text(encoding="utf-8")
    study = tmp_path / "study.toml"
    study.write_text(columns.split("exclude =")[0], encoding="utf-8")
    run = run_study(study, jobs=1)
    for stage in VARIABLES:
        for part in datasets(load(run.folder / FILES[stage])):
            assert unregistered(part, stage) == ([], []), stage
