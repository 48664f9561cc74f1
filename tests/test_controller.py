"""Reading a designer's controller."""

import json

import numpy as np
import pytest

from identkit.controller import controller_from, read_controller
from identkit.errors import InputError
from identkit.methods.state_space import frequency_response

GRID = np.geomspace(1.0, 2e4, 60)
ROOTS = {
    "zeros": [-300.0, [-50.0, 900.0], [-50.0, -900.0]],
    "poles": [0.0, -4e4, [-1e3, 2e4], [-1e3, -2e4], -9.0],
    "gain": -2e9,
}


def value(content, s):
    def roots(name):
        return [complex(*r) if isinstance(r, list) else r for r in content[name]]

    top = np.prod([s - zero for zero in roots("zeros")], axis=0)
    bottom = np.prod([s - pole for pole in roots("poles")], axis=0)
    return content["gain"] * top / bottom


@pytest.mark.parametrize(
    "content",
    [
        ROOTS,
        {"zeros": [], "poles": [0.0, 0.0, 0.0], "gain": 3.0},
        {"zeros": [-1.0, -20.0, -30.0], "poles": [0.0, 0.0, -4e3], "gain": 0.1},
        {"zeros": [-1.0], "poles": [[-1.0, 5.0], [-1.0, -5.0]], "gain": 7.0},
        {"zeros": [[-1.0, 5.0], [-1.0, -5.0], -4.0], "poles": [0.0, -1e3, -2e3], "gain": 7.0},
    ],
)
def test_roots_become_matrices_of_the_same_response(content):
    controller = controller_from(content)
    s = 2j * np.pi * GRID
    ours = frequency_response(controller.system, GRID)[:, 0, 0]
    np.testing.assert_allclose(ours, value(content, s), rtol=1e-9)
    assert controller.system.states == len(content["poles"])


def test_a_gain_alone_is_a_controller():
    system = controller_from({"zeros": [], "poles": [], "gain": 2.5}).system
    assert system.states == 0
    assert system.D.item() == 2.5


def test_matrices_keep_their_response_and_period(tmp_path):
    path = tmp_path / "loop.json"
    content = {
        "A": [[-1.0, 1e6], [0.0, -2.0]],
        "B": [[0.0], [1.0]],
        "C": [[1.0, 0.0]],
        "D": [[0.5]],
        "period": 2e-5,
    }
    path.write_text(json.dumps(content), encoding="utf-8")
    controller = read_controller(path)
    assert controller.period == 2e-5
    assert controller.name == "loop"
    s = 2j * np.pi * GRID
    ours = frequency_response(controller.system, GRID)[:, 0, 0]
    np.testing.assert_allclose(ours, 0.5 + 1e6 / ((s + 1) * (s + 2)), rtol=1e-12)


def test_a_table_of_columns_says_the_same_as_json(tmp_path):
    path = tmp_path / "loop.csv"
    path.write_text(
        "# zeros and poles in rad/s\n"
        "zero_real, zero_imag, pole_real, pole_imag, gain\n"
        "-300, 0, 0, 0, -2e9\n-50, 900, -4e4, 0,\n-50, -900, -1e3, 2e4,\n,,-1e3,-2e4,\n,,-9,,\n",
        encoding="utf-8",
    )
    first, second = read_controller(path).system, controller_from(ROOTS).system
    np.testing.assert_allclose(
        frequency_response(first, GRID), frequency_response(second, GRID), rtol=1e-12
    )


@pytest.mark.parametrize(
    ("content", "said"),
    [
        ({}, "no field"),
        ([1.0], "object with named fields"),
        ({"A": [[1.0]], "B": [[1.0]]}, "A, B, C, D or zeros, poles, gain"),
        ({**ROOTS, "Gain": 1.0}, "unknown field 'Gain'"),
        ({**ROOTS, "poles": [-1.0, -2.0]}, "at most 2 zeros"),
        ({**ROOTS, "zeros": [[-1.0, 2.0]]}, "complex conjugate"),
        ({**ROOTS, "zeros": [[-1.0, 2.0], [-1.0, 2.0], [-1.0, -2.0]]}, "complex conjugate"),
        ({**ROOTS, "gain": "much"}, "a number"),
        ({**ROOTS, "period": -1.0}, "seconds, 0 or more"),
        ({"A": [[1.0, 2.0]], "B": [[1.0]], "C": [[1.0]], "D": [[1.0]]}, "a square matrix"),
        ({"A": [[1.0]], "B": [[1.0, 2.0]], "C": [[1.0]], "D": [[1.0]]}, "shape (1, 1)"),
        ({"A": [[float("nan")]], "B": [[1.0]], "C": [[1.0]], "D": [[1.0]]}, "finite"),
    ],
)
def test_wrong_content_is_one_clear_sentence(content, said):
    with pytest.raises(InputError, match="expected") as caught:
        controller_from(content, "c.json")
    message = str(caught.value)
    assert said in message
    assert message.startswith("c.json")
    assert len(message.splitlines()) == 1


@pytest.mark.parametrize(
    ("name", "text", "said"),
    [
        ("c.json", "{", "a JSON object"),
        ("c.csv", "a,b\n1,2\n", "the columns"),
        ("c.csv", "", "the columns"),
        ("c.csv", "zero_real,zero_imag,pole_real,pole_imag,gain\nx,0,1,0,1\n", "a number"),
    ],
)
def test_wrong_files_are_one_clear_sentence(tmp_path, name, text, said):
    path = tmp_path / name
    path.write_text(text, encoding="utf-8")
    with pytest.raises(InputError, match="expected") as caught:
        read_controller(path)
    assert said in str(caught.value)


def test_a_missing_file_and_bytes_that_are_no_text(tmp_path):
    with pytest.raises(InputError, match="no such file"):
        read_controller(tmp_path / "none.json")
    path = tmp_path / "c.json"
    path.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(InputError, match="no text"):
        read_controller(path)
