"""Starting point of the automatic fit: pole relocation, delay scan, forward selection.

Sources: as `pole_relocation`, `delay_scan` and `order_selection`.
"""

import numpy as np

from identkit.methods.arrays import FloatArray
from identkit.methods.compiled_sums import section_rows
from identkit.methods.delay_scan import scan_delay
from identkit.methods.modal_problem import (
    ModalProblem,
    ModelShape,
    Poles,
    ScaledData,
    fixed_columns,
    times_jx,
)
from identkit.methods.order_selection import forward_selection
from identkit.methods.order_settling import (
    WIDEST,
    Request,
    leading_first,
    mode_cap,
    mode_price,
)
from identkit.methods.pole_relocation import relocate_poles, starting_sections

START_SECTIONS = 24


def starting_point(data: ScaledData, request: Request) -> tuple[Poles, int, float]:
    """Return starting poles, their number of modes, and the noise scale of an over-ordered fit."""
    most = max(2, min(START_SECTIONS + (request.modes or 0), data.x.size // 6))
    stiffness, rate = starting_sections(data.x, most)
    delay, free = 0.0, request.base == "free"
    for iterations in (5, 3) if request.delay else (7,):
        stiffness, rate = relocate_poles(
            data, delay, stiffness, rate, double_integrator=free, iterations=iterations
        )
        rows = _pool(data, request, stiffness, rate, rates=False)
        if request.delay:
            delays, costs = scan_delay(data, rows)
            delay = float(delays[np.argmin(costs)])
    scale = _noise_scale(data, request, stiffness, rate, delay)
    chosen = _choose(data, request, stiffness, rate, delay, scale)
    natural = np.sqrt(stiffness[chosen])
    damping = rate[chosen] / (2.0 * natural)
    poles = Poles(delay, np.log(natural), np.log(damping))
    if request.base == "pivot":
        poles = _with_pivot(data, poles, stiffness[chosen], rate[chosen])
    return poles, poles.log_frequency.size - (request.base == "pivot"), scale


def _pool(
    data: ScaledData, request: Request, stiffness: FloatArray, rate: FloatArray, *, rates: bool
) -> FloatArray:
    sections = np.empty((stiffness.size, 2 * data.x.size))
    section_rows(data.x, data.weight, stiffness, rate, sections)
    parts = [fixed_columns(data, request.shape(0)), sections]
    return np.concatenate([*parts, times_jx(sections, data.x)] if rates else parts)


def _noise_scale(
    data: ScaledData, request: Request, stiffness: FloatArray, rate: FloatArray, delay: float
) -> float:
    """Residual variance, in units of the stated one, of all poles with general residues."""
    rows = _pool(data, request, stiffness, rate, rates=True)
    target = data.rotated(delay)
    answer = np.linalg.lstsq((rows / np.linalg.norm(rows, axis=1)[:, None]).T, target, rcond=1e-10)[
        0
    ]
    rows = rows / np.linalg.norm(rows, axis=1)[:, None]
    cost = float(np.sum((target - answer @ rows) ** 2))
    return max(1.0, cost / max(target.size - 2 * len(rows), 1))


def _choose(
    data: ScaledData,
    request: Request,
    stiffness: FloatArray,
    rate: FloatArray,
    delay: float,
    scale: float,
) -> list[int]:
    natural = np.sqrt(stiffness)
    usable = (rate < 2.0 * WIDEST * natural) & (natural < 1.3) & (natural > 0.3 * data.x[0])
    kept = np.flatnonzero(usable)
    rows = _pool(data, request, stiffness[kept], rate[kept], rates=request.general)
    forced = len(fixed_columns(data, request.shape(0)))
    groups = np.tile(np.arange(kept.size), 2 if request.general else 1)
    count = None if request.modes is None else request.modes + (request.base == "pivot")
    threshold = mode_price(request, data.x.size) * scale
    taken = forward_selection(
        rows, data.rotated(delay), forced, groups, threshold=threshold, count=count
    )
    return [int(kept[k]) for k in taken[: mode_cap(data.x.size)]]


def _with_pivot(data: ScaledData, poles: Poles, stiffness: FloatArray, rate: FloatArray) -> Poles:
    """Put the section that carries the low frequencies first; invent one if there is none."""
    if stiffness.size == 0:
        low = float(np.log(max(data.x[0] * 1.5, 1e-6)))
        return Poles(poles.delay, np.array([low]), np.array([np.log(0.4)]))
    shape = ModelShape("none", poles.log_frequency.size)
    state = ModalProblem(data, shape).linearise(poles)
    order = leading_first(state.coefficients[1:], poles)
    return Poles(poles.delay, poles.log_frequency[order], poles.log_damping[order])
