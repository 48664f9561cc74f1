"""Set files under stress: any plants survive the round trip, any damage is refused in words."""

import copy
import json
from dataclasses import replace

import h5py
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from identkit.errors import InputError
from identkit.plant_set import fields as f
from identkit.plant_set import schema as schema_module
from identkit.plant_set.document import to_document
from identkit.plant_set.files import load_set, save_set
from identkit.plant_set.model import PlantSet

numbers = st.floats(allow_nan=False, allow_infinity=False, width=64)
words = st.text(
    st.characters(blacklist_categories=("Cs",), blacklist_characters="\x00"), max_size=8
)
labels = st.dictionaries(
    st.sampled_from(["unit", "head", "lot", "größe/µm"]), words.filter(bool), max_size=3
)


@st.composite
def plants(draw):
    modes = draw(st.integers(0, 3))

    def several(*shape):
        size = int(np.prod(shape))
        values = draw(st.lists(numbers, min_size=size, max_size=size))
        return np.array(values, dtype=float).reshape(shape)

    size = draw(st.integers(0, 2))
    base = draw(st.sampled_from(["free", "pivot", "none"]))
    zero = np.zeros((1, 1))
    return f.FittedPlant(
        response=draw(words.filter(bool)),
        modal_frequency=several(modes),
        damping_ratio=several(modes),
        residue=several(modes, 1, 1),
        residue_rate=several(modes, 1, 1),
        base=base,
        base_gain=several(1, 1) if base == "free" else zero,
        base_frequency=draw(st.floats(1e-3, 1e6)) if base == "pivot" else 0.0,
        base_damping_ratio=draw(numbers) if base == "pivot" else 0.0,
        base_residue=several(1, 1) if base == "pivot" else zero,
        feedthrough=several(1, 1),
        delay=draw(numbers),
        labels=draw(labels),
        covariance=f.Covariance(("a", "b")[:size], several(size, size)) if size else None,
        delta=several(draw(st.integers(0, 2))),
        reach=abs(draw(numbers)),
        reach_frequency=abs(draw(numbers)),
    )


@settings(
    max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(st.lists(plants(), max_size=4, unique_by=lambda plant: plant.response))
def test_any_plants_survive_both_formats(small_set, tmp_path, drawn):
    radii = replace(small_set.radii, set_by=tuple(p.response for p in drawn) * 300)
    radii = replace(radii, set_by=(radii.set_by + ("",) * 300)[:300])
    whole = PlantSet(**{**vars(small_set), "plants": tuple(drawn), "radii": radii})
    for name in ("set.json", "set.h5"):
        save_set(whole, tmp_path / name)
        loaded = to_document(load_set(tmp_path / name))
        # -0.0 and 0.0 are told apart, floats to the last bit.
        assert json.dumps(loaded, sort_keys=True) == json.dumps(to_document(whole), sort_keys=True)


def places(document, trail=()):
    """Every path to a value inside nested objects and lists."""
    if isinstance(document, dict):
        steps = list(document.items())
    else:
        steps = list(enumerate(document)) if isinstance(document, list) else []
    for key, value in steps:
        yield (*trail, key)
        yield from places(value, (*trail, key))


def refusal(path):
    """The message of the refusal; empty where the file loads; any other error passes through."""
    try:
        load_set(path)
    except InputError as error:
        return str(error)
    return ""


ODD_VALUES = [None, "x", -1, 1e300, True, [], {}, [[]], [["x"]], [1, [2]], {"a": 1}]


@pytest.mark.parametrize("validator", [True, False], ids=["with schema", "reader alone"])
def test_any_damage_to_a_field_is_refused_or_harmless(small_set, tmp_path, monkeypatch, validator):
    """Swap fields for odd values and drop them: words, never a traceback."""
    if not validator:
        monkeypatch.setattr(schema_module, "find_spec", lambda name: None)
    path = tmp_path / "set.json"
    save_set(replace(small_set, plants=small_set.plants[:2]), path)
    document = json.loads(path.read_text())
    everywhere = list(places(document))
    generator = np.random.default_rng(4)
    refused = 0
    for pick in generator.integers(0, len(everywhere), 250):
        damaged = copy.deepcopy(document)
        *trail, last = everywhere[pick]
        inside = damaged
        for key in trail:
            inside = inside[key]
        if generator.random() < 0.3:
            del inside[last]
        else:
            inside[last] = ODD_VALUES[generator.integers(len(ODD_VALUES))]
        path.write_text(json.dumps(damaged))
        refused += "set.json" in refusal(path)
    assert refused > 150


def test_any_cut_or_flipped_bytes_are_refused_or_harmless(small_set, tmp_path):
    generator = np.random.default_rng(6)
    for name in ("set.json", "set.h5"):
        path = tmp_path / name
        save_set(small_set, path)
        whole = path.read_bytes()
        refused = 0
        for _ in range(60):
            data = bytearray(whole)
            if generator.random() < 0.5:
                data = data[: generator.integers(len(data))]
            else:
                for at in generator.integers(0, len(data), 8):
                    data[at] = generator.integers(256)
            path.write_bytes(bytes(data))
            refused += bool(refusal(path))
        assert refused > 20


def test_labels_of_one_name_that_are_text_here_and_number_there_are_refused(small_set, tmp_path):
    first, second = small_set.plants[:2]
    mixed = (replace(first, labels={"lot": "A"}), replace(second, labels={"lot": 3.0}))
    whole = PlantSet(**{**vars(small_set), "plants": mixed})
    with pytest.raises(InputError, match="label lot"):
        save_set(whole, tmp_path / "set.h5")
    assert not (tmp_path / "set.h5").exists()


def test_a_group_of_hdf5_where_a_number_should_be(small_set, tmp_path):
    path = tmp_path / "set.h5"
    save_set(small_set, path)
    with h5py.File(path, "a") as file:
        del file["nominal/delay"]
        file.create_group("nominal/delay")
    with pytest.raises(InputError, match=r"nominal\.delay"):
        load_set(path)
