"""Auditing new files that carry no variance: the answer and the table."""

import numpy as np
import pytest

from identkit.plant_set.files import load_set
from identkit.plant_set.response import plant_response
from identkit.set_audit import audit_files


@pytest.fixture
def write(tmp_path, makers, bounded_set_file):
    reach = [plant.reach for plant in load_set(bounded_set_file).plants]
    plant = makers.family(24)[int(np.argmin(reach))]

    def write(name, gain, points=300):
        frequency = np.geomspace(60.0, 19_000.0, points)
        noise = np.random.default_rng(1).standard_normal((2, points)) * 0.002
        measured = gain * plant_response(plant, frequency)[0, 0] * (1.0 + noise[0] + 1j * noise[1])
        path = tmp_path / name
        table = np.column_stack([frequency, measured.real, measured.imag])
        np.savetxt(path, table, delimiter=",", header="frequency_hz,real,imag", comments="")
        return path

    return write


def reaches(text, name):
    row = next(line for line in text.splitlines() if line.strip().startswith(name))
    return [float(word) for word in row.split() if "." in word]


def test_ten_times_the_gain_is_not_held(bounded_set_file, write):
    found = audit_files(bounded_set_file, [write("x10.csv", 10.0)])
    assert not found.held
    assert found.text.endswith("Answer: not held.")
    assert min(reaches(found.text, "x10")) > 3.0


def test_a_dozen_points_may_not_tell_but_their_plain_reach_is_shown(bounded_set_file, write):
    found = audit_files(bounded_set_file, [write("x10.csv", 10.0, 12)])
    assert not found.held
    assert min(reaches(found.text, "x10")) > 3.0


def test_a_good_response_is_held(bounded_set_file, write):
    found = audit_files(bounded_set_file, [write("good.csv", 1.0)])
    assert found.held, found.text
    assert min(reaches(found.text, "good")) > 0.01
