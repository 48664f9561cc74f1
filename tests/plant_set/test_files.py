import json
import subprocess
import sys
from dataclasses import replace

import h5py
import jsonschema
import numpy as np
import pytest

from identkit.errors import InputError
from identkit.plant_set import fields as f
from identkit.plant_set import schema as schema_module
from identkit.plant_set.document import from_document, to_document
from identkit.plant_set.files import load_set, save_set
from identkit.plant_set.model import PlantSet
from identkit.plant_set.plant_document import plant_to
from identkit.plant_set.schema import check_schema, schema


@pytest.fixture
def json_path(small_set, tmp_path):
    path = tmp_path / "set.json"
    save_set(small_set, path)
    return path


@pytest.fixture
def hdf5_path(small_set, tmp_path):
    path = tmp_path / "set.h5"
    save_set(small_set, path)
    return path


def test_schema_is_itself_valid():
    jsonschema.Draft202012Validator.check_schema(schema())


def test_hdf5_round_trip_is_exact(small_set, hdf5_path):
    assert to_document(load_set(hdf5_path)) == to_document(small_set)


def test_json_round_trip_is_exact_but_for_the_number_of_plants(small_set, json_path):
    written, loaded = to_document(small_set), to_document(load_set(json_path))
    listed = {plant["response"] for plant in loaded.pop("plants")}
    assert listed == {label for label in small_set.radii.set_by if label} | {
        small_set.attribution[0].label
    }
    written.pop("plants")
    assert loaded == written


def test_both_formats_agree_on_the_plants_they_share(json_path, hdf5_path):
    whole = {plant.response: plant for plant in load_set(hdf5_path).plants}
    for plant in load_set(json_path).plants:
        assert plant_to(plant) == plant_to(whole[plant.response])


def test_at_most_200_plants_in_json(small_set, tmp_path):
    names = [f"P{k}" for k in range(260)]
    plants = tuple(replace(small_set.plants[0], response=name, reach=0.5) for name in names)
    plants = (*plants[:-1], replace(plants[-1], reach=0.9))
    set_by = tuple((names * 2)[: small_set.radii.frequency.size])
    many = PlantSet(
        **{
            **vars(small_set),
            "plants": plants,
            "radii": replace(small_set.radii, set_by=set_by),
        }
    )
    save_set(many, tmp_path / "set.json")
    listed = [plant.response for plant in load_set(tmp_path / "set.json").plants]
    assert len(listed) == f.LISTED_AT_MOST
    assert listed[-1] == "P259"
    assert set(names[:40]) <= set(listed)


@pytest.mark.parametrize("base", ["free", "none"])
def test_other_bases_survive(small_set, make_family, tmp_path, base):
    plants = tuple(make_family(3, base=base))
    other = PlantSet(**{**vars(small_set), "plants": plants})
    save_set(other, tmp_path / "set.h5")
    assert to_document(load_set(tmp_path / "set.h5")) == to_document(other)


def test_a_missing_label_stays_missing(small_set, hdf5_path):
    for plant in load_set(hdf5_path).plants:
        index = int(plant.response[1]) * 2 + int(plant.response[-1])
        assert ("temperature" in plant.labels) == bool(index % 3)


def test_every_form_and_optional_field_is_allowed(small_set, tmp_path):
    certificate = replace(
        small_set.certificate,
        measured=f.Measured(7, 8, 5, (f.Excluded("U9/H0", "outlier"),)),
        coverage=f.Coverage(0.9, 0.9, 24, "held-out units", ("units are exchangeable",)),
        audit=f.AuditVerdict(False, ("one check failed",), True),
        envelope=f.Envelope({"lot": ("A", 3.0)}, (5.0, 55.0), (-1.0, 1.0)),
    )
    mixed = PlantSet(
        **{
            **vars(small_set),
            "form": "mixed",
            "certificate": certificate,
            "parameters": (f.RealFactor("gain", "actuator gain", 2.0, 0.3, "1"),),
            "weights": f.Weights(),
            "radii": replace(small_set.radii, ceiling=np.full(300, 4.0)),
            "plants": tuple(replace(p, delta=np.array([0.25])) for p in small_set.plants),
            "interconnection": two_blocks(),
        }
    )
    for name in ("set.json", "set.h5"):
        save_set(mixed, tmp_path / name)
        loaded = to_document(load_set(tmp_path / name))
        assert loaded["certificate"] == to_document(mixed)["certificate"]
        assert loaded["interconnection"] == to_document(mixed)["interconnection"]
        assert loaded["parameters"] == to_document(mixed)["parameters"]
        assert loaded["plants"][0]["delta"] == [0.25]


def two_blocks() -> f.Interconnection:
    blocks = (f.Block("real-repeated", 2, 2, "gain"), f.Block("complex-full", 1, 1))
    return f.Interconnection(
        np.array([[-1.0]]), np.ones((1, 4)), np.ones((4, 1)), np.zeros((4, 4)), blocks=blocks
    )


CHANGES = [
    ("format", lambda d: d.update(format="identkit-plant-set/2")),
    ("band", lambda d: d.update(band=[20.0, 10.0])),
    ("nominal.A", lambda d: d["nominal"]["A"].pop()),
    ("nominal.B[0]", lambda d: d["nominal"]["B"].__setitem__(0, ["x"])),
    ("weights.left", lambda d: d["weights"]["left"].pop("C")),
    ("radii.frequency", lambda d: d["radii"]["frequency"].reverse()),
    ("radii.required_radius", lambda d: d["radii"]["required_radius"].pop()),
    ("radii.set_by", lambda d: d["radii"]["set_by"].pop()),
    (
        "plants[0].modal_parameters",
        lambda d: d["plants"][0]["modal_parameters"].pop("base_residue"),
    ),
    (
        "plants[1].modal_parameters.damping_ratio",
        lambda d: d["plants"][1]["modal_parameters"]["damping_ratio"].pop(),
    ),
    ("plants[0].reach.value", lambda d: d["plants"][0]["reach"].update(value=-1.0)),
    ("certificate.measured.held", lambda d: d["certificate"]["measured"].update(held=1.5)),
    ("interconnection.D", lambda d: d["interconnection"]["blocks"].clear()),
    ("attribution[0]", lambda d: d["attribution"][0].update(colour="red")),
    ("provenance", lambda d: d["provenance"].pop("time")),
    ("time.domain", lambda d: d["time"].update(domain="weekly")),
    ("time.period", lambda d: d["time"].update(period=1e-5)),
    ("time.period", lambda d: d["time"].update(domain="sampled")),
]


@pytest.mark.parametrize(("field", "change"), CHANGES, ids=[name for name, _ in CHANGES])
def test_a_malformed_field_is_named(json_path, field, change):
    document = json.loads(json_path.read_text())
    change(document)
    json_path.write_text(json.dumps(document))
    with pytest.raises(InputError) as caught:
        load_set(json_path)
    assert field in str(caught.value)
    assert "set.json" in str(caught.value)


@pytest.mark.parametrize("contents", ['{"format": "something"}', '{"a": 1}', "[1, 2]"])
def test_a_file_that_is_no_set_is_refused_in_one_sentence(tmp_path, contents):
    (tmp_path / "other.json").write_text(contents)
    with pytest.raises(InputError, match="other.json: found") as caught:
        load_set(tmp_path / "other.json")
    assert len(caught.value.problems) == 1


def test_missing_fields_are_told_once(json_path):
    document = json.loads(json_path.read_text())
    for name in ("radii", "plants", "attribution"):
        document.pop(name)
    json_path.write_text(json.dumps(document))
    with pytest.raises(InputError, match="the fields") as caught:
        load_set(json_path)
    assert len(caught.value.problems) == 1


STRUCTURAL = [c for c in CHANGES if c[0] != "attribution[0]"]
STRUCTURAL = [c for c in STRUCTURAL if c[0] != "plants[0].reach.value"]


@pytest.mark.parametrize(("field", "change"), STRUCTURAL, ids=[name for name, _ in STRUCTURAL])
def test_the_reader_alone_names_it_too(json_path, monkeypatch, field, change):
    monkeypatch.setattr(schema_module, "find_spec", lambda name: None)
    document = json.loads(json_path.read_text())
    change(document)
    json_path.write_text(json.dumps(document))
    with pytest.raises(InputError) as caught:
        load_set(json_path)
    assert field.removesuffix("[0]") in str(caught.value)


def test_without_the_validator_check_schema_says_so(monkeypatch):
    monkeypatch.setattr(schema_module, "find_spec", lambda name: None)
    assert check_schema({"format": f.FORMAT}, "x") is False


def test_a_truncated_json_file_is_refused_with_its_line(json_path):
    text = json_path.read_text()
    json_path.write_text(text[: len(text) // 2])
    with pytest.raises(InputError, match=r"set\.json, line \d+: found"):
        load_set(json_path)


@pytest.mark.parametrize("word", ["NaN", "Infinity", "-Infinity"])
def test_json_with_a_non_finite_number_is_refused(json_path, word):
    text = json_path.read_text().replace('"delay": 0.0', f'"delay": {word}', 1)
    json_path.write_text(text)
    with pytest.raises(InputError, match=f"found {word}; expected finite"):
        load_set(json_path)


def test_a_truncated_hdf5_file_is_refused(hdf5_path):
    data = hdf5_path.read_bytes()
    hdf5_path.write_bytes(data[: len(data) // 2])
    with pytest.raises(InputError, match=r"set\.h5: found unreadable data"):
        load_set(hdf5_path)


@pytest.mark.parametrize(
    ("column", "value", "message"),
    [
        (
            "damping_ratio",
            np.ones(3),
            r"damping_ratio: found numbers of shape \(3,\); expected shape \(32,\)",
        ),
        ("delay", np.full(8, np.nan), "not finite"),
        ("mode_count", np.full(8, 3), "modal_frequency"),
        ("mode_count", np.full(8, 4.0), "mode_count: found other values; expected whole numbers"),
        ("delta_count", np.full(8, -1), "delta_count: found other values"),
        ("label_unit", np.zeros((8, 2)), "label_unit"),
        ("base", np.array([b"spring"] * 8), "base: found 'spring'; expected one of free"),
    ],
)
def test_hdf5_columns_that_do_not_add_up_are_named(hdf5_path, column, value, message):
    with h5py.File(hdf5_path, "a") as file:
        del file["plants"][column]
        file["plants"][column] = value
    with pytest.raises(InputError, match=message):
        load_set(hdf5_path)


def test_an_hdf5_group_where_a_column_should_be_is_refused(hdf5_path):
    with h5py.File(hdf5_path, "a") as file:
        del file["plants/delay"]
        file.create_group("plants/delay")
    with pytest.raises(InputError, match=r"set\.h5: found unreadable data"):
        load_set(hdf5_path)
    with h5py.File(hdf5_path, "a") as file:
        del file["plants"]
    with pytest.raises(InputError, match=r"plants\.response: found nothing"):
        load_set(hdf5_path)


def test_hdf5_without_a_column_or_with_nan_in_a_matrix(hdf5_path):
    with h5py.File(hdf5_path, "a") as file:
        file["nominal/A"][0, 0] = np.nan
    with pytest.raises(InputError, match=r"field nominal\.A: found a number that is not finite"):
        load_set(hdf5_path)
    with h5py.File(hdf5_path, "a") as file:
        file["nominal/A"][0, 0] = 0.0
        del file["plants/reach"]
    with pytest.raises(InputError, match=r"field plants\.reach: found nothing"):
        load_set(hdf5_path)


def test_other_files_are_refused(tmp_path):
    with pytest.raises(InputError, match="No such file"):
        load_set(tmp_path / "none.json")
    with pytest.raises(InputError, match="no file"):
        load_set(tmp_path / "none.h5")
    with pytest.raises(InputError, match=r"suffix '\.txt'; expected json"):
        load_set(tmp_path / "set.txt")
    (tmp_path / "set.json").write_text("[1, 2]")
    with pytest.raises(InputError, match="expected"):
        load_set(tmp_path / "set.json")


def test_a_broken_set_is_not_written_and_the_old_file_stays(small_set, json_path):
    before = json_path.read_bytes()
    radii = replace(small_set.radii, floor=float("nan"))
    with pytest.raises((InputError, ValueError)):
        save_set(PlantSet(**{**vars(small_set), "radii": radii}), json_path)
    assert json_path.read_bytes() == before
    assert [item.name for item in json_path.parent.iterdir()] == ["set.json"]


def test_the_reader_refuses_what_the_writer_would_not_write(small_set):
    document = to_document(small_set)
    document["nominal"]["D"] = [[1.0, 2.0]]
    with pytest.raises(InputError, match=r"nominal\.D: found .* shape \(1, 1\)"):
        from_document(document, "memory")


def test_loading_sampling_and_responding_need_numpy_only(json_path):
    code = f"""
import sys
class Refuse:
    def find_spec(self, name, path=None, target=None):
        if name.split(".")[0] in {{"scipy", "jsonschema", "h5py", "xarray", "cvxpy", "control"}}:
            raise ModuleNotFoundError(name)
sys.meta_path.insert(0, Refuse())
import importlib.util
import numpy as np
from identkit.plant_set import schema
schema.find_spec = lambda name: None
from identkit.plant_set.files import load_set
loaded = load_set({str(json_path)!r})
grid = np.array([100.0, 1000.0])
print(loaded.frequency_response(grid).shape, loaded.sample(1)[0].frequency_response(grid).shape)
print(len(loaded.plants))
"""
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    assert done.stdout.split("\n")[0] == "(1, 1, 2) (1, 1, 2)"
