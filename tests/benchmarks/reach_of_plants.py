"""Reach by adaptive grids against the exact norm of slycot, plant by plant: time and agreement.

Run ``python tests/benchmarks/reach_of_plants.py``; prints time per plant of both in one run, their
ratio and the largest relative difference. 288 invented plants of nine modes, slycot does 12.
"""

import importlib.util
import sys
import time
from dataclasses import replace
from pathlib import Path

import control
import numpy as np

from identkit.plant_set.reach import reach_of_plants
from identkit.plant_set.schur import plant_matrices

SCALE = 2.0 * np.pi * 5000.0
SOME = 12


def makers():
    path = Path(__file__).parents[1] / "plant_set" / "makers.py"
    spec = importlib.util.spec_from_file_location("plant_set_makers", path)
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


def inverse(system):
    d = np.linalg.inv(system.D)
    return control.ss(system.A - system.B @ d @ system.C, system.B @ d, -d @ system.C, d)


def exact_norm(contents, plant):
    """Largest |P/P0 - 1| / |W| by SLICOT's AB13DD, time in units near the modes."""
    nominal, weight, own = (
        control.ss(part.A, part.B, part.C, part.D)
        for part in (contents.nominal, contents.weights.left, plant_matrices(plant))
    )
    error = (own - nominal) * inverse(nominal) * inverse(weight)
    scaled = control.ss(error.A / SCALE, error.B / SCALE, error.C, error.D)
    return control.linfnorm(scaled, tol=1e-10)[0]


def timed(work):
    start = time.perf_counter()
    value = work()
    return value, time.perf_counter() - start


def main():
    made = makers()
    plants = made.family(288, modes=9)
    nominal = made.plant_matrices(made.nominal_plant(modes=9))
    contents = made.make_set(plants[:8], nominal, made.lead_weight(1.0))
    contents = replace(contents, band=(1.0, 100_000.0))
    reach, grids = timed(lambda: reach_of_plants(contents, plants).value)
    norms, levels = timed(lambda: [exact_norm(contents, plant) for plant in plants[:SOME]])
    ours, theirs = grids / len(plants), levels / SOME
    worst = np.abs(reach[:SOME] / norms - 1.0).max()
    sys.stdout.write(
        f"adaptive grids {1e3 * ours:.2f} ms per plant ({grids:.2f} s for 288), slycot "
        f"{1e3 * theirs:.1f} ms, ratio {theirs / ours:.1f}, largest difference {worst:.1e}\n"
    )


if __name__ == "__main__":
    main()
