"""Speed of the modal fit against scipy's Levenberg-Marquardt, one core, one run.

Same model (1200 points, 9 modes, delay, constant), same start, same final cost (1e-5 relative).
scipy gets the analytic Jacobian, from numpy and from our own compiled rows, parameters scaled to
order one, x_scale 1 and "jac", tolerances from 1e-4 to 1e-8; for every response the fastest of
these that reaches the cost is taken. A refinement of ours that misses the cost is charged the time
of scipy on top of its own.

Run: OMP_NUM_THREADS=1 python tests/benchmarks/fit_speed.py [RESPONSES]
"""

import json
import os
import platform
import statistics
import sys
import time
from pathlib import Path

for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[_name] = "1"

import numba  # noqa: E402
import numpy as np  # noqa: E402
import scipy  # noqa: E402
from scipy.optimize import least_squares  # noqa: E402

from identkit.methods.compiled_sums import derivative_rows, section_rows  # noqa: E402
from identkit.methods.modal_fit import fit_modal_model  # noqa: E402
from identkit.methods.modal_least_squares import refine_modal_model, starting_poles  # noqa: E402
from identkit.methods.modal_model import ModalParameters, modal_response  # noqa: E402
from identkit.methods.modal_problem import ModalProblem, ModelShape, times_jx  # noqa: E402
from identkit.methods.modal_solution import internal_covariance, scale_data, solve  # noqa: E402

POINTS, MODES, NOISE = 1200, 9, 0.03
EQUAL = 1e-5
TOLERANCES = (1e-4, 1e-5, 1e-6, 1e-8)
VARIANTS = [(c, s, t) for c in (False, True) for s in (1.0, "jac") for t in TOLERANCES]
REPORTS = Path(__file__).resolve().parents[2] / "reports"


def invented(rng):
    """One response with its true plant and a perturbed start."""
    frequency = np.geomspace(50.0, 22000.0, POINTS)
    while True:
        modal = np.sort(np.exp(rng.uniform(np.log(80.0), np.log(19000.0), MODES)))
        if np.all(np.diff(np.log(modal)) > 0.08):
            break
    damping = np.exp(rng.uniform(np.log(0.008), np.log(0.03), MODES))
    residue = (2 * np.pi * modal) ** 2 * rng.uniform(0.01, 0.2, MODES) * rng.choice([-1, 1], MODES)
    truth = ModalParameters(
        modal, damping, residue, np.zeros(MODES), "none", feedthrough=0.3, delay=1.1e-5
    )
    clean = modal_response(frequency, truth)
    variance = (NOISE * np.abs(clean)) ** 2 + (0.01 * NOISE) ** 2
    error = rng.standard_normal((2, POINTS)) * np.sqrt(variance / 2)
    start = ModalParameters(
        modal * np.exp(0.4 * damping * rng.standard_normal(MODES)),
        damping * np.exp(0.2 * rng.standard_normal(MODES)),
        residue * np.exp(0.1 * rng.standard_normal(MODES)),
        np.zeros(MODES),
        "none",
        feedthrough=0.25,
        delay=1.0e-5,
    )
    return frequency, clean + error[0] + 1j * error[1], variance, start


class PlainProblem:
    """All parameters at once for scipy: scaled to order one, analytic Jacobian."""

    def __init__(self, frequency, response, variance, start, compiled):
        self.data = scale_data(frequency, response, variance)
        self.start, self.compiled = start, compiled
        omega = 2 * np.pi * start.modal_frequency / self.data.reference
        self.unit = start.residue / self.data.reference**2
        self.x0 = np.concatenate(
            [
                [start.delay * self.data.reference, start.feedthrough],
                np.log(omega),
                np.log(start.damping_ratio),
                np.ones(MODES),
            ]
        )
        self.rows = np.empty((2 + 3 * MODES, 2 * POINTS))
        self.sections = np.empty((MODES, 2 * POINTS))
        self.slopes = np.empty((2 * MODES, 2 * POINTS))

    def split(self, point):
        """Delay, constant, stiffness, rate, residue."""
        natural = np.exp(point[2 : 2 + MODES])
        rate = 2 * natural * np.exp(point[2 + MODES : 2 + 2 * MODES])
        return point[0], point[1], natural**2, rate, self.unit * point[2 + 2 * MODES :]

    def residual(self, point):
        """Weighted residuals, real parts then imaginary parts, data turned by the delay."""
        delay, constant, stiffness, rate, residue = self.split(point)
        data = self.data
        self.fill_sections(stiffness, rate)
        model = residue @ self.sections
        model[:POINTS] += constant * data.weight
        self.model = model
        return model - data.rotated(delay)

    def fill_sections(self, stiffness, rate):
        """Weighted 1/D rows."""
        data = self.data
        if self.compiled:
            section_rows(data.x, data.weight, stiffness, rate, self.sections)
            return
        rows = data.weight / (stiffness[:, None] - data.x**2 + 1j * rate[:, None] * data.x)
        self.sections[:, :POINTS], self.sections[:, POINTS:] = rows.real, rows.imag

    def jacobian(self, point):
        """Derivatives of the residuals."""
        delay, constant, stiffness, rate, residue = self.split(point)
        data, rows = self.data, self.rows
        self.fill_sections(stiffness, rate)
        model = residue @ self.sections
        model[:POINTS] += constant * data.weight
        rows[0] = -times_jx(model, data.x)
        rows[1, :POINTS], rows[1, POINTS:] = data.weight, 0.0
        if self.compiled:
            zeros = np.zeros(MODES)
            derivative_rows(data.x, data.weight, stiffness, rate, residue, zeros, self.slopes)
            rows[2 : 2 + MODES] = self.slopes[0::2]
            rows[2 + MODES : 2 + 2 * MODES] = self.slopes[1::2]
        else:
            damping = 1j * rate[:, None] * data.x
            inverse = 1 / (stiffness[:, None] - data.x**2 + damping)
            common = -data.weight * residue[:, None] * inverse**2
            for first, part in (
                (2, common * (2 * stiffness[:, None] + damping)),
                (2 + MODES, common * damping),
            ):
                rows[first : first + MODES, :POINTS] = part.real
                rows[first : first + MODES, POINTS:] = part.imag
        rows[2 + 2 * MODES :] = self.sections * self.unit[:, None]
        return rows.T


def timed(work, repeats=3):
    """Shortest processor time of a few runs (others on the machine do not count), and result."""
    best, result = np.inf, None
    for _ in range(repeats):
        begin = time.thread_time()
        result = work()
        best = min(best, time.thread_time() - begin)
    return best, result


def ours(frequency, response, variance, start):
    """Refine from the start; residues come from the projection."""
    data = scale_data(frequency, response, variance)
    problem = ModalProblem(data, ModelShape("none", MODES))
    return solve(problem, starting_poles(start, data.reference))


def scipys(case, compiled, x_scale, tolerance):
    """Refine by scipy."""
    problem = PlainProblem(*case, compiled)
    return least_squares(
        problem.residual, problem.x0, problem.jacobian, method="lm", x_scale=x_scale,
        ftol=tolerance, xtol=tolerance, gtol=tolerance,
    )  # fmt: skip


def check_jacobian(case):
    """The Jacobian scipy gets agrees with finite differences."""
    for compiled in (False, True):
        problem = PlainProblem(*case, compiled)
        exact = problem.jacobian(problem.x0).copy()
        for k in range(exact.shape[1]):
            step = np.zeros_like(problem.x0)
            step[k] = 1e-6
            change = problem.residual(problem.x0 + step) - problem.residual(problem.x0 - step)
            # the delay turns the data; its derivative differs by a turn of the residual
            if k:
                assert np.allclose(change / 2e-6, exact[:, k], rtol=1e-4, atol=1e-3)


def measure(count):
    """Return the results as a dictionary; ours and scipy's runs alternate, response by response."""
    rng = np.random.default_rng(20)
    cases = [invented(rng) for _ in range(count)]
    check_jacobian(cases[0])
    ours(*cases[0])
    mine, theirs = [], []
    for case in cases:
        before = timed(lambda case=case: ours(*case), 3)
        theirs.append({v: timed(lambda c=case, v=v: scipys(c, *v), 6) for v in VARIANTS})
        after = timed(lambda case=case: ours(*case), 3)
        mine.append(min(before, after, key=lambda run: run[0]))
    best = [
        min(own.cost, *(2 * result.cost for _, result in runs.values()))
        for (_, own), runs in zip(mine, theirs, strict=True)
    ]
    missed = [own.cost > least * (1 + EQUAL) for (_, own), least in zip(mine, best, strict=True)]
    return {
        "machine": machine(),
        "case": {"points": POINTS, "modes": MODES, "responses": count, "noise": NOISE},
        "against_numpy_jacobian": against(theirs, False, mine, best, missed),
        "against_compiled_jacobian": against(theirs, True, mine, best, missed),
        "missed_cost": int(sum(missed)),
        "refine_milliseconds": 1e3 * statistics.median(t for t, _ in mine),
        "covariance_milliseconds": 1e3
        * statistics.median(timed(lambda s=s: internal_covariance(s))[0] for _, s in mine),
        **throughput(cases),
    }


def against(theirs, compiled, mine, best, missed):
    """Ratios to the fastest variant that reaches the cost, chosen afresh for every response."""
    times, chosen = [], []
    for runs, least in zip(theirs, best, strict=True):
        reached = {
            variant: t
            for variant, (t, result) in runs.items()
            if variant[0] == compiled and 2 * result.cost <= least * (1 + EQUAL)
        }
        if not reached:  # scipy missed everywhere: its slowest run is what it would take
            reached = {v: t for v, (t, _) in runs.items() if v == (compiled, "jac", TOLERANCES[-1])}
        chosen.append(min(reached, key=lambda v: reached[v]))
        times.append(reached[chosen[-1]])
    charged = [
        own + (other if miss else 0.0)
        for (own, _), other, miss in zip(mine, times, missed, strict=True)
    ]
    ratios = [other / own for other, own in zip(times, charged, strict=True)]
    names = [f"x_scale {v[1]}, tolerance {v[2]:g}" for v in chosen]
    return {
        "scipy_settings_most_often_fastest": max(set(names), key=names.count),
        "scipy_milliseconds": 1e3 * statistics.median(times),
        "ratio_median": statistics.median(ratios),
        "ratio_lowest": min(ratios),
        "ratio_of_totals": sum(times) / sum(charged),
    }


def throughput(cases):
    """Whole fits per second on one core, covariance included."""
    some = cases[: min(len(cases), 40)]
    fit_modal_model(*some[0][:3], base="none")
    refine_modal_model(*some[0])
    cold = [timed(lambda c=c: fit_modal_model(*c[:3], base="none"), 1) for c in some]
    warm = [timed(lambda c=c: refine_modal_model(*c), 1) for c in some]
    return {
        "cold_fits_per_second": len(some) / sum(t for t, _ in cold),
        "cold_right_number_of_modes": sum(
            int(fit.parameters.modal_frequency.size == MODES) for _, fit in cold
        ),
        "cold_of": len(some),
        "warm_fits_per_second": len(some) / sum(t for t, _ in warm),
    }


def machine():
    """Describe the machine and the versions."""
    model = platform.processor() or platform.machine()
    info = Path("/proc/cpuinfo")
    if info.exists():
        names = [line for line in info.read_text().splitlines() if line.startswith("model name")]
        model = names[0].split(":")[1].strip() if names else model
    return {
        "cpu": model,
        "cores": os.cpu_count(),
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scipy": scipy.__version__,
        "numba": numba.__version__,
        "blas_threads": 1,
    }


def as_text(result):
    """Return the report as Markdown."""
    lines = ["# Speed of the modal fit", "", "Written by `tests/benchmarks/fit_speed.py`.", ""]
    lines += [f"- {key}: {value}" for key, value in result["machine"].items()]
    lines += [
        "",
        f"{result['case']['responses']} responses, {POINTS} points, {MODES} modes, delay,",
    ]
    lines += [
        "constant; same start, same final cost within 1e-5; one core, processor time,",
        "shortest of 6 runs. Compiled kernels are loaded before.",
        "",
    ]
    lines += ["| scipy least_squares (lm) | scipy ms | ours ms | ratio median | lowest | totals |"]
    lines += ["|---|---|---|---|---|---|"]
    for key, name in (
        ("against_numpy_jacobian", "analytic Jacobian in numpy"),
        ("against_compiled_jacobian", "analytic Jacobian from our compiled rows"),
    ):
        row = result[key]
        lines.append(
            f"| {name}; mostly {row['scipy_settings_most_often_fastest']} | "
            f"{row['scipy_milliseconds']:.1f} | {result['refine_milliseconds']:.2f} | "
            f"{row['ratio_median']:.1f} | {row['ratio_lowest']:.1f} | "
            f"{row['ratio_of_totals']:.1f} |"
        )
    lines += ["", f"Missed the common cost: {result['missed_cost']}."]
    lines += [f"Covariance: {result['covariance_milliseconds']:.2f} ms."]
    lines += [
        f"Cold automatic fits: {result['cold_fits_per_second']:.0f} per second and core, "
        f"{result['cold_right_number_of_modes']} of {result['cold_of']} with the right number of "
        f"modes; warm refits with covariance: {result['warm_fits_per_second']:.0f}."
    ]
    return "\n".join(lines) + "\n"


def main():
    """Measure and write reports/benchmark_fit.json and .md."""
    result = measure(int(sys.argv[1]) if len(sys.argv) > 1 else 60)
    REPORTS.mkdir(exist_ok=True)
    (REPORTS / "benchmark_fit.json").write_text(json.dumps(result, indent=2) + "\n")
    (REPORTS / "benchmark_fit.md").write_text(as_text(result))
    sys.stdout.write(as_text(result))


if __name__ == "__main__":
    main()
