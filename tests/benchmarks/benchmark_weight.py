"""Certified magnitude weights against local optimisation of poles and zeros, in one run.

Usage: python tests/benchmarks/benchmark_weight.py; writes reports/benchmark_weight.json and .md.
The radii are invented: a delay, a family of six resonances (60 members), and a curve with kinks.
Local optimisation: scipy L-BFGS-B on a smoothed worst excess with analytic gradient, sharpened in
three stages, from twelve random starts; it knows the sections (pairs of poles and zeros) only.
"""

import json
import os
import platform
import time
from pathlib import Path

import numpy as np
import scipy
from scipy.optimize import minimize

from identkit.methods.magnitude_weight import fit_magnitude_weight
from identkit.methods.weight_order import choose_order

REPORTS = Path(__file__).resolve().parents[2] / "reports"
POINTS = 1500
STARTS = 12
LOCAL_ORDERS = (2, 4, 8, 12)
ORDERS = (1, 2, 3, 4, 6, 8, 10, 12, 16)


def delay(frequency):
    return np.maximum(0.02, 2.0 * np.sin(np.minimum(frequency * 1.9e-4, np.pi) / 2.0))


def resonances(frequency):
    rng = np.random.default_rng(0)
    natural = np.array([300.0, 900.0, 2400.0, 5200.0, 9000.0, 13000.0])
    damping = np.array([0.01, 0.008, 0.015, 0.005, 0.01, 0.02])
    share = np.array([0.1, 0.3, -0.2, 0.4, 0.3, 0.5])

    def plant(f, z, r):
        s = 1j * frequency[:, None]
        return 1.0 + (r * f**2 / (s**2 + 2.0 * z * f * s + f**2)).sum(1)

    def member():
        noise = rng.standard_normal((3, 6))
        f, z = natural * (1.0 + 0.01 * noise[0]), damping * np.exp(0.2 * noise[1])
        return plant(f, z, share * np.exp(0.1 * noise[2]))

    nominal = plant(natural, damping, share)
    return np.maximum(0.02, np.max([np.abs(member() / nominal - 1.0) for _ in range(60)], axis=0))


def kinks(frequency):
    knots = np.log([10.0, 60.0, 300.0, 2000.0, 5000.0, 3.2e4])
    return np.exp(np.interp(np.log(frequency), knots, [-3.5, -2.0, 0.5, -1.0, 1.5, 2.0]))


RADII = {"delay": delay, "resonances": resonances, "kinks": kinks}


def deviation_db(parameters, log_frequency, radius_db):
    """|W| / radius, dB, and its derivatives; log frequency and log damping of poles and zeros."""
    sections = parameters.reshape(-1, 2, 2)
    total, slopes = -radius_db, []
    for section in sections:
        for sign, (place, damping) in zip((-1.0, 1.0), section, strict=True):
            u, twice = np.exp(2.0 * (log_frequency - place)), 4.0 * np.exp(2.0 * damping)
            square = (1.0 - u) ** 2 + twice * u
            total = total + sign * 10.0 * np.log10(square)
            scale = sign * 10.0 / np.log(10.0) / square
            slopes.append(scale * (2.0 * (1.0 - u) - twice) * 2.0 * u)
            slopes.append(scale * 2.0 * twice * u)
    return total, np.array(slopes)


def smoothed(parameters, log_frequency, radius_db, sharpness):
    """Soft maximum minus soft minimum of the deviation, and its gradient."""
    value, slopes = deviation_db(parameters, log_frequency, radius_db)
    high, low = np.exp(sharpness * (value - value.max())), np.exp(sharpness * (value.min() - value))
    spread = value.max() - value.min() + np.log(high.sum() * low.sum()) / sharpness
    return spread, slopes @ (high / high.sum() - low / low.sum())


def local_fit(rng, sections, log_frequency, radius_db):
    place = rng.uniform(log_frequency[0], log_frequency[-1], (sections, 2))
    point = np.stack([place, rng.uniform(-4.0, 0.5, (sections, 2))], axis=2).ravel()
    ends = (log_frequency[0] - 3.0, log_frequency[-1] + 3.0)
    for sharpness in (1.0, 5.0, 25.0):
        found = minimize(
            smoothed,
            point,
            (log_frequency, radius_db, sharpness),
            "L-BFGS-B",
            jac=True,
            bounds=[ends, (-8.0, 2.0)] * (2 * sections),
            options={"maxiter": 400},
        )
        point = found.x
    value = deviation_db(point, log_frequency, radius_db)[0]
    return float(value.max() - value.min())


def clocked(action):
    begin = time.perf_counter()
    result = action()
    return result, time.perf_counter() - begin


def certified_rows(name, frequency, radius):
    rows = []
    for order in ORDERS:
        weight, seconds = clocked(lambda n=order: fit_magnitude_weight(frequency, radius, n))
        rows.append(
            {
                "radius": name,
                "order": order,
                "excess_db": weight.excess_db,
                "floor_db": weight.floor_db,
                "gap_db": weight.gap_db,
                "damping_cost_db": round(weight.damping_cost_db, 6),
                "programs": weight.programs,
                "seconds": seconds,
            }
        )
    return rows


def local_rows(name, frequency, radius):
    rows = []
    log_frequency, radius_db = np.log(frequency), 20.0 * np.log10(radius)
    for order in LOCAL_ORDERS:
        rng = np.random.default_rng(order)
        weight, certified = clocked(lambda n=order: fit_magnitude_weight(frequency, radius, n))
        found, local = clocked(
            lambda n=order, r=rng: [
                local_fit(r, n // 2, log_frequency, radius_db) for _ in range(STARTS)
            ]
        )
        rows.append(
            {
                "radius": name,
                "order": order,
                "certified_db": weight.excess_db,
                "best_local_db": min(found),
                "median_local_db": float(np.median(found)),
                "local_time_over_certified_time": local / certified,
            }
        )
    return rows


def table(rows):
    names = list(rows[0])
    lines = ["| " + " | ".join(names) + " |", "|" + "---|" * len(names)]
    for row in rows:
        cells = [f"{row[n]:.4g}" if isinstance(row[n], float) else str(row[n]) for n in names]
        lines.append("| " + " | ".join(cells) + " |")
    return "\n".join(lines)


def main():
    frequency = np.geomspace(10.0, 3.2e4, POINTS)
    radii = {name: radius(frequency) for name, radius in RADII.items()}
    certified = [row for name in radii for row in certified_rows(name, frequency, radii[name])]
    local = [row for name in radii for row in local_rows(name, frequency, radii[name])]
    trade_off = [
        {"radius": name, "chosen_order": choice.chosen.order, "seconds": seconds}
        for name in radii
        for choice, seconds in [clocked(lambda n=name: choose_order(frequency, radii[n]))]
    ]
    machine = {
        "processor": platform.machine(),
        "cores": os.cpu_count(),
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scipy": scipy.__version__,
        "points": POINTS,
    }
    result = {
        "machine": machine,
        "certified": certified,
        "trade_off_to_order_12": trade_off,
        "local": local,
    }
    (REPORTS / "benchmark_weight.json").write_text(json.dumps(result, indent=1) + "\n")
    parts = ["# Magnitude weight", ", ".join(f"{k} {v}" for k, v in machine.items())]
    parts += [
        "One run, BLAS on one thread, machine shared with other work; the radii are invented."
    ]
    parts += ["## Certified weights", table(certified)]
    parts += ["## Trade-off of all orders to 12", table(trade_off)]
    parts += [f"## Against {STARTS} local optimisations", table(local)]
    (REPORTS / "benchmark_weight.md").write_text("\n\n".join(parts) + "\n")


if __name__ == "__main__":
    main()
