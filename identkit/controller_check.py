"""A designer's own controller against a set: margins, robust stability, the plants that come worst.

Robust stability: with the nominal loop stable, every plant of the set is stabilised if and only if
the closed loop as the block sees it, N, has a norm below 1 (J. C. Doyle and G. Stein, IEEE Trans.
Automat. Contr. 26(1), 1981; K. Zhou, J. C. Doyle and K. Glover, *Robust and Optimal Control*, 1996,
theorem 9.1). |N| is |W T| for multiplicative sets, |W C/(1 + P0 C)| for additive and |W S| for
inverse multiplicative ones.
"""

from dataclasses import dataclass

import numpy as np

from identkit.controller import Controller
from identkit.errors import InputError, Problem
from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.bounded_real_norm import band_norm, level_frequencies
from identkit.methods.feedback import bent, close_lower, is_stable, straightened
from identkit.methods.modal_model import TWO_PI
from identkit.methods.stability_margins import (
    StabilityMargins,
    loop_grid,
    margins_from_response,
    margins_of_loop,
)
from identkit.methods.state_space import StateSpace, frequency_response, series
from identkit.plant_loops import (
    PlantLoops,
    balanced,
    continuous_image,
    delayed,
    largest_real_part,
    listed_loops,
    virtual_loops,
)
from identkit.plant_set.model import PlantSet
from identkit.set_price import CONDITIONS

VIRTUAL = 100


@dataclass(frozen=True, eq=False)
class RobustStability:
    """Largest size of the loop as the block sees it.

    Attributes
    ----------
    peak, frequency
        Largest |N| over all frequencies, and where (Hz).
    tolerance
        No frequency exceeds peak (1 + tolerance).
    lost
        Intervals (Hz) in which |N| >= 1; empty where robust stability holds.
    """

    peak: float
    frequency: float
    tolerance: float
    lost: tuple[tuple[float, float], ...]

    @property
    def holds(self) -> bool:
        """Whether every plant of the set is stabilised."""
        return self.peak * (1.0 + self.tolerance) < 1.0


@dataclass(frozen=True, eq=False)
class ControllerCheck:
    """What a controller does on a set.

    Attributes
    ----------
    nominal_stable, decay
        Whether the nominal loop is stable, and the largest real part of its poles, rad/s.
    margins
        Of the nominal loop; margins of stability only where it is stable.
    robust
        None where the nominal loop is unstable.
    listed
        Loops of the plants listed in the set and not left out of it; None where there are none.
    virtual
        Loops of members drawn from the set; None where none were drawn.
    seen
        From the block's output to its input, rational, in continuous time (the bilinear image of a
        sampled set).
    """

    nominal_stable: bool
    decay: float
    margins: StabilityMargins
    robust: RobustStability | None
    listed: PlantLoops | None
    virtual: PlantLoops | None
    seen: StateSpace

    @property
    def holds(self) -> bool:
        """Whether nominal, robust, listed and virtual loops are all stable, delays included."""
        loops = [found for found in (self.listed, self.virtual) if found is not None]
        every = all(bool(np.all(found.stable & found.settled)) for found in loops)
        return self.nominal_stable and self.robust is not None and self.robust.holds and every


def check_controller(
    plant_set: PlantSet, controller: Controller, *, virtual: int = VIRTUAL, seed: int = 1
) -> ControllerCheck:
    """Say what a controller u = -K y does on the nominal and on every plant of a set.

    Parameters
    ----------
    plant_set
        Scalar, with one dynamic block.
    controller
        With the set's time base: continuous, or the set's period.
    virtual
        How many members of the set to draw and close the loop with.
    seed
        Of that draw.

    Raises
    ------
    InputError
        If the set has real factors or is no scalar one, the time bases differ, or the loop is not
        well posed.
    """
    _refuse(plant_set, controller)
    period, delay = plant_set.time.period, plant_set.nominal.delay
    control = continuous_image(controller.system, period)
    nominal = continuous_image(plant_set.nominal, period)
    poles, seen = _closed(plant_set, nominal, control)
    stable = is_stable(poles)
    out = {each.label for each in plant_set.certificate.measured.excluded}
    counted = [plant for plant in plant_set.plants if plant.response not in out]
    members = plant_set.sample(virtual, seed)
    return ControllerCheck(
        nominal_stable=stable,
        decay=largest_real_part(poles, period),
        margins=_margins(series(nominal, control), delay, period),
        robust=_robust(seen, period) if stable else None,
        listed=listed_loops(plant_set, controller, counted) if counted else None,
        virtual=virtual_loops(plant_set, controller, members) if members else None,
        seen=seen,
    )


def _closed(
    plant_set: PlantSet, nominal: StateSpace, control: StateSpace
) -> tuple[ComplexArray, StateSpace]:
    """Return the poles of the nominal loop, and the loop as the block sees it."""
    period, delay, high = plant_set.time.period, plant_set.nominal.delay, plant_set.band[1]
    around = continuous_image(plant_set.interconnection, period)
    if delay:
        around = _delay_behind(around, delay, high)
    try:
        poles = close_lower(delayed(nominal, delay, high), control).poles()
        return poles, balanced(close_lower(around, control))
    except np.linalg.LinAlgError as error:
        expected = "a loop gain other than -1 at infinite frequency"
        raise InputError(Problem("controller", "a loop not well posed", expected)) from error


def _delay_behind(around: StateSpace, delay: float, high: float) -> StateSpace:
    """Put the nominal's delay behind the plant's output, the last one."""
    none = np.zeros((0, 0))
    straight = StateSpace(none, np.zeros((0, 1)), np.zeros((1, 0)), np.ones((1, 1)))
    late = delayed(straight, delay, high)
    blocks = around.D.shape[0] - 1
    both = StateSpace(
        late.A,
        np.hstack([np.zeros((late.states, blocks)), late.B]),
        np.vstack([np.zeros((blocks, late.states)), late.C]),
        np.block([[np.eye(blocks), np.zeros((blocks, 1))], [np.zeros((1, blocks)), late.D]]),
    )
    return series(around, both)


def _margins(loop: StateSpace, delay: float, period: float) -> StabilityMargins:
    if period <= 0.0:
        return margins_of_loop(loop, delay)
    grid = straightened(loop_grid(loop), period)
    grid = np.unique(grid[grid < 0.5 / period * (1.0 - 1e-9)])

    def respond(frequency: FloatArray) -> ComplexArray:
        return np.asarray(frequency_response(loop, bent(frequency, period))[:, 0, 0])

    return margins_from_response(respond, grid)


def _robust(seen: StateSpace, period: float) -> RobustStability:
    found = band_norm(seen, 0.0, np.inf)
    place = float(straightened(np.array([found.frequency]), period)[0])
    lost = tuple(
        (float(low), float(high))
        for low, high in (straightened(np.array(pair), period) for pair in _above_one(seen))
    )
    return RobustStability(found.norm, place, found.tolerance, lost)


def _above_one(seen: StateSpace) -> list[tuple[float, float]]:
    """Return the intervals in which |N| >= 1, ends from the eigenvalues of a Hamiltonian."""
    if abs(abs(seen.D).max() - 1.0) < 1e-9:
        return []
    edges = level_frequencies(seen, 1.0)
    bounds = np.concatenate([[0.0], edges[edges > 0.0], [np.inf]])
    inside = np.where(np.isfinite(bounds[1:]), 0.5 * (bounds[1:] + bounds[:-1]), 2.0 * bounds[:-1])
    above = size_at(seen, np.maximum(inside, np.finfo(float).tiny)) >= 1.0
    found: list[tuple[float, float]] = []
    for low, high, over in zip(bounds[:-1], bounds[1:], above, strict=True):
        if not over:
            continue
        joined = bool(found) and found[-1][1] == low
        found[-1:] = [(found[-1][0], high)] if joined else [*found[-1:], (low, high)]
    return found


def size_at(seen: StateSpace, frequency: FloatArray) -> FloatArray:
    """Return |N| at (points,) Hz of its own (of the bilinear image where sampled)."""
    return np.asarray(np.linalg.norm(frequency_response(seen, frequency), 2, axis=(1, 2)))


def worst_block(check: ControllerCheck) -> StateSpace:
    """Return the smallest stable Delta that brings the nominal loop to the edge of stability.

    It is an all-pass times 1/peak with the phase that makes N Delta = 1 at the peak, as in the
    proof of the small-gain theorem (Zhou, Doyle and Glover 1996, theorem 9.1); scalar blocks, for
    the system `seen`.

    Raises
    ------
    ValueError
        If the nominal loop is unstable.
    """
    if check.robust is None:
        raise ValueError("the nominal loop is unstable: no block is needed")
    found = band_norm(check.seen, 0.0, np.inf)
    value = frequency_response(check.seen, np.array([found.frequency]))[0, 0, 0]
    angle = -float(np.angle(value))
    # sign * (a - s)/(a + s) has the angle -2 atan(omega/a) in (-pi, 0), plus pi where negative.
    sign = 1.0 if angle < 0.0 else -1.0
    lag = -(angle if angle < 0.0 else angle - np.pi)
    omega = TWO_PI * found.frequency
    if omega == 0.0 or lag < 1e-9:
        feed = np.array([[(1.0 if abs(angle) < 0.5 * np.pi else -1.0) / found.norm]])
        return StateSpace(np.zeros((0, 0)), np.zeros((0, 1)), np.zeros((1, 0)), feed)
    a = omega / np.tan(0.5 * lag)
    size = sign / found.norm
    return StateSpace(
        np.array([[-a]]),
        np.array([[np.sqrt(2.0 * a)]]),
        np.array([[size * np.sqrt(2.0 * a)]]),
        np.array([[-size]]),
    )


def _refuse(plant_set: PlantSet, controller: Controller) -> None:
    if plant_set.form not in CONDITIONS or len(plant_set.interconnection.blocks) != 1:
        expected = f"one of {', '.join(CONDITIONS)}"
        raise InputError(Problem("form of the set", repr(plant_set.form), expected))
    if not plant_set.is_scalar:
        found = f"{len(plant_set.outputs)} outputs and {len(plant_set.inputs)} inputs"
        raise InputError(Problem("set", found, "one output and one input"))
    if controller.system.D.shape != (1, 1):
        rows, columns = controller.system.D.shape
        found = f"{columns} inputs and {rows} outputs"
        raise InputError(Problem(controller.name, found, "one input and one output"))
    period = plant_set.time.period
    if abs(controller.period - period) > 1e-9 * period:
        found = f"a period of {controller.period:g} s" if controller.period else "continuous time"
        expected = f"the set's period of {period:g} s" if period else "continuous time, as the set"
        raise InputError(Problem(controller.name, found, expected))
    if period and plant_set.nominal.delay:
        found = f"a delay of {plant_set.nominal.delay:g} s outside a sampled nominal"
        raise InputError(Problem("nominal.delay", found, "0: the delay inside the matrices"))
