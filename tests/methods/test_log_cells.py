"""Cells of log frequency: averages, bridges and the ends of the range."""

import numpy as np
import pytest

from identkit.methods.log_cells import cell_means

EDGES = np.log(np.array([90.0, 110.0, 130.0, 150.0, 170.0, 190.0]))


def one(frequency, measured, variance=None, usable=None):
    measured = np.asarray(measured, dtype=complex)[None, None]
    variance = np.zeros(measured.shape) if variance is None else np.asarray(variance)[None, None]
    usable = np.ones(measured.shape, bool) if usable is None else np.asarray(usable)[None, None]
    curve, error = cell_means(np.asarray(frequency), measured, variance, usable, EDGES)
    return curve[0, 0], error[0, 0]


def test_points_of_a_cell_are_averaged_as_complex_numbers():
    curve, error = one([100.0, 105.0, 120.0], [2.0, 4.0, 1j], [0.02, 0.02, 0.08])
    assert curve[0] == pytest.approx(np.log(3.0))
    assert curve[1] == pytest.approx(1j * np.pi / 2.0)
    # total variances: half of each stands along the magnitude
    assert error[0] == pytest.approx(np.sqrt(0.02) / 2.0 / 3.0)
    assert error[1] == pytest.approx(0.2)


def test_empty_cells_are_bridged_inside_the_range_only():
    curve, _ = one([120.0, 160.0], [1.0, 2.0])
    assert np.isnan(curve[0])
    assert curve.real[1:4].tolist() == [0.0, 0.0, np.log(2.0)]
    assert np.isnan(curve.real[4])
    assert np.isnan(curve.imag[4])


def test_points_not_usable_count_for_nothing():
    curve, _ = one([100.0, 105.0, 120.0], [2.0, np.nan, 1.0], usable=[True, False, False])
    assert curve[0] == pytest.approx(np.log(2.0))
    assert np.isnan(curve[1:].real).all()
