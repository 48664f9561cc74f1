import sys

import numpy as np
import pytest

from identkit.errors import InputError


def test_python_control_objects_have_the_same_response(small_set):
    parts = small_set.to_control()
    assert set(parts) == {"nominal", "interconnection", "left", "right"}
    grid = np.geomspace(60.0, 15_000.0, 20)
    response = parts["nominal"](2j * np.pi * grid)
    np.testing.assert_allclose(response, small_set.frequency_response(grid)[0, 0], rtol=1e-9)
    around = parts["interconnection"](2j * np.pi * grid)
    np.testing.assert_allclose(around[1, 1], response, rtol=1e-9)
    assert np.all(np.abs(around[0, 0]) < 1e-12)
    assert parts["nominal"].isctime()


def test_without_python_control_the_error_says_so(small_set, monkeypatch):
    monkeypatch.setitem(sys.modules, "control", None)
    with pytest.raises(InputError, match="python-control"):
        small_set.to_control()
