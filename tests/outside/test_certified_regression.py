"""Levenberg-Marquardt search against the certified values of NIST's reference datasets.

Source: NIST Statistical Reference Datasets, nonlinear regression (datasets/nist_strd). The values
are certified to eleven digits; eight are asked of parameters, six of standard deviations.
"""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from identkit.methods.levenberg_marquardt import least_squares

pytestmark = pytest.mark.outside
FOLDER = Path(__file__).parents[2] / "datasets" / "nist_strd"


def cubic_over_cubic(b, x):
    top = b[0] + b[1] * x + b[2] * x**2 + b[3] * x**3
    return top / (1 + b[4] * x + b[5] * x**2 + b[6] * x**3)


def enso(b, x):
    turn = 2 * np.pi * x
    return (
        b[0]
        + b[1] * np.cos(turn / 12)
        + b[2] * np.sin(turn / 12)
        + b[4] * np.cos(turn / b[3])
        + b[5] * np.sin(turn / b[3])
        + b[7] * np.cos(turn / b[6])
        + b[8] * np.sin(turn / b[6])
    )


MODELS = {
    "Thurber": cubic_over_cubic,
    "Hahn1": cubic_over_cubic,
    "Kirby2": lambda b, x: (b[0] + b[1] * x + b[2] * x**2) / (1 + b[3] * x + b[4] * x**2),
    "MGH09": lambda b, x: b[0] * (x**2 + x * b[1]) / (x**2 + x * b[2] + b[3]),
    "Eckerle4": lambda b, x: b[0] / b[1] * np.exp(-0.5 * ((x - b[2]) / b[1]) ** 2),
    "ENSO": enso,
}


@dataclass
class Certified:
    """One file: starts (2, p), parameters, standard deviations, sum of squares, data."""

    starts: np.ndarray
    parameters: np.ndarray
    deviations: np.ndarray
    sum_of_squares: float
    x: np.ndarray
    y: np.ndarray


def read(name):
    lines = (FOLDER / f"{name}.dat").read_text(encoding="ascii").splitlines()
    table = [line.split("=")[1].split() for line in lines[40:60] if line.strip().startswith("b")]
    table = np.array(table, dtype=float)
    total = next(line for line in lines if line.startswith("Residual Sum of Squares"))
    data = np.array([line.split() for line in lines[60:] if line.strip()], dtype=float)
    return Certified(
        table[:, :2].T, table[:, 2], table[:, 3], float(total.split(":")[1]), data[:, 1], data[:, 0]
    )


def complex_step(model, b, x):
    """Derivatives exact to rounding (Squire & Trapp, SIAM Review 40 (1998) 110-112)."""
    columns = []
    for k in range(b.size):
        moved = b.astype(complex)
        moved[k] += 1e-30j
        columns.append(model(moved, x).imag / 1e-30)
    return np.column_stack(columns)


@pytest.mark.parametrize("start", [0, 1])
@pytest.mark.parametrize("name", MODELS)
def test_reaches_certified_values(name, start):
    problem, model = read(name), MODELS[name]
    fit = least_squares(
        lambda b: problem.y - model(b, problem.x),
        lambda b: -complex_step(model, b, problem.x),
        problem.starts[start],
    )
    assert fit.converged
    np.testing.assert_allclose(fit.point, problem.parameters, rtol=1e-8)
    np.testing.assert_allclose(np.sqrt(np.diag(fit.covariance)), problem.deviations, rtol=1e-6)
    assert fit.cost == pytest.approx(problem.sum_of_squares, rel=1e-9)
