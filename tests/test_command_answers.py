"""The words of check and compare on small sets, and the pictures they write."""

import json
import re

import pytest

from identkit.command_answers import refuse_wrong_picture
from identkit.comparison_answer import compare_files
from identkit.controller_answer import check_files
from identkit.errors import InputError


@pytest.fixture(scope="module")
def set_file(small_set, tmp_path_factory):
    path = tmp_path_factory.mktemp("small") / "set.json"
    small_set.save(path)
    return path


def controller(folder, gain):
    path = folder / "loop.json"
    content = {"zeros": [-60.0], "poles": [0.0, -3e3], "gain": gain}
    path.write_text(json.dumps(content), encoding="utf-8")
    return path


def test_a_stable_loop_is_described_and_drawn(set_file, tmp_path):
    picture = tmp_path / "loop.svg"
    answer = check_files(set_file, controller(tmp_path, 20.0), picture)
    assert answer.holds
    assert "Nominal loop: stable" in answer.text
    assert re.search(
        r"Listed plants: (\d+) of \1 stable \(of the 8 the set was built on", answer.text
    )
    assert answer.text.splitlines()[-1] == f"Figure: {picture}"
    first = picture.read_bytes()
    check_files(set_file, controller(tmp_path, 20.0), picture)
    assert picture.read_bytes() == first


def test_an_unstable_nominal_loop_is_said_and_not_drawn(set_file, tmp_path):
    picture = tmp_path / "loop.svg"
    answer = check_files(set_file, controller(tmp_path, -1e4), picture)
    assert not answer.holds
    assert "Nominal loop: UNSTABLE" in answer.text
    assert "Answer: no, the nominal loop is unstable." in answer.text
    assert "No figure" in answer.text
    assert not picture.exists()


def test_two_sets_are_described_and_drawn(set_file, tmp_path):
    picture = tmp_path / "both.svg"
    answer = compare_files(set_file, set_file, picture)
    assert answer.holds
    assert "B in A: yes; reach of the whole set 1 at" in answer.text
    assert "Answer: each contains the other." in answer.text
    assert "reach of A in B" in picture.read_text(encoding="utf-8")


@pytest.mark.parametrize(("name", "said"), [("a.pdf", ".svg or .png"), ("no/a.svg", "folder")])
def test_wrong_pictures_are_refused_first(tmp_path, name, said):
    with pytest.raises(InputError, match=said):
        refuse_wrong_picture(tmp_path / name)
