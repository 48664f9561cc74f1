"""The loops that one controller makes with the plants of a set: poles, and distance to -1.

Stability is decided by closed-loop poles. A fitted plant's delay is not rational in continuous
time: its poles are those of the loop with a Pade all-pass, and they decide only where the error of
the all-pass leaves the winding number as it is, |L| |e^{-s tau} - pade| < |1 + L| on the axis
(Rouche's theorem; with it H. Nyquist, "Regeneration theory", Bell System Tech. J. 11, 1932). A
sampled plant has exact poles, its delay in whole and fractional periods: K. J. Astrom and
B. Wittenmark, *Computer-Controlled Systems*, 3rd ed., 1997, section 2.3.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.linalg import expm

from identkit.controller import Controller
from identkit.methods.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from identkit.methods.feedback import closed_loop_poles, is_stable, sampled_to_continuous
from identkit.methods.modal_model import TWO_PI
from identkit.methods.pade_delay import pade_matrices, pade_order, pade_response
from identkit.methods.state_space import StateSpace, series
from identkit.plant_set.fields import FittedPlant, Matrices, PlantSetFields
from identkit.plant_set.peaks import clustered, even_grid, highest
from identkit.plant_set.reach import Surroundings, folded
from identkit.plant_set.response import (
    balance,
    block_diagonal,
    delay_factor,
    evaluation_points,
    upper_lft,
)
from identkit.plant_set.sample import Member
from identkit.plant_set.schur import SchurResponse, plant_matrices, plant_poles
from identkit.plant_set.stacked import stack
from identkit.plant_set.zero_order_hold import split_delay

PLANTS_AT_ONCE = 24
DELAY_TOLERANCE = 1e-9
BEYOND = 3.0
FAR = 100.0
LOWEST_DISTANCE = 1e-12


@dataclass(frozen=True, eq=False)
class PlantLoops:
    """The loops of several plants with one controller.

    Attributes
    ----------
    names
        What each plant is called.
    stable
        (plants,) whether all closed-loop poles are stable.
    settled
        (plants,) whether that holds for the exact delay too.
    decay
        (plants,) largest real part of the closed-loop poles, rad/s (of ln(z)/period where sampled).
    modulus, frequency
        (plants,) least |1 + L|, and where, Hz.
    """

    names: tuple[str, ...]
    stable: BoolArray
    settled: BoolArray
    decay: FloatArray
    modulus: FloatArray
    frequency: FloatArray

    @property
    def worst(self) -> int:
        """Which plant is worst: unstable before stable, then the nearest to -1."""
        order = np.lexsort((self.modulus, self.stable))
        return int(order[0])


def continuous_image(system: Matrices | StateSpace, period: float) -> StateSpace:
    """Return a system as it is, or the bilinear image of a sampled one."""
    plain = StateSpace(system.A, system.B, system.C, system.D)
    return sampled_to_continuous(plain, period) if period > 0.0 else plain


def balanced(system: StateSpace) -> StateSpace:
    """Return a system with its states scaled to rows and columns of A of equal size."""
    even = balance(Matrices(system.A, system.B, system.C, system.D))
    return StateSpace(even.A, even.B, even.C, even.D)


def largest_real_part(poles: ComplexArray, period: float) -> float:
    """Return the largest real part (rad/s); of bilinear images, that of ln(z)/period."""
    if not poles.size:
        return -np.inf
    if period <= 0.0:
        return float(poles.real.max())
    z = (1.0 + 0.5 * period * poles) / (1.0 - 0.5 * period * poles)
    return float(np.log(np.maximum(np.abs(z), 1e-300)).max() / period)


def listed_loops(
    contents: PlantSetFields, controller: Controller, plants: Sequence[FittedPlant]
) -> PlantLoops:
    """Return the loops of fitted scalar plants with a controller of the same time base.

    Parameters
    ----------
    contents
        The set: its band, and what varies on which scale.
    controller
        u = -K y.
    plants
        At least one.
    """
    around = Surroundings(contents)
    pieces = [
        _some_loops(around, controller, plants[start : start + PLANTS_AT_ONCE])
        for start in range(0, len(plants), PLANTS_AT_ONCE)
    ]
    return PlantLoops(
        tuple(plant.response for plant in plants),
        *(np.concatenate(part) for part in zip(*pieces, strict=True)),
    )


def _some_loops(
    around: Surroundings, controller: Controller, plants: Sequence[FittedPlant]
) -> tuple[BoolArray, BoolArray, FloatArray, FloatArray, FloatArray]:
    period, top = around.period, _top(around)
    shared = np.unique(np.concatenate([around.common_grid, even_grid((around.band[0], top), 60)]))
    closed = [_closed(plant, controller, period, around.band[1]) for plant in plants]
    features = _padded(
        [
            np.concatenate([folded(plant_poles(plant), period), _as_sampled(poles, period)])
            for plant, (poles, _) in zip(plants, closed, strict=True)
        ],
        around.band[0],
    )
    own = clustered(features, (around.band[0], top))
    grid = np.sort(
        np.concatenate([np.broadcast_to(shared, (len(plants), shared.size)), own], axis=1), axis=1
    )
    stacked, respond = stack(plants), _controller_response(controller)

    def loop(row: IntArray, frequency: FloatArray) -> ComplexArray:
        plant = stacked.response(row, frequency, period)[..., 0, 0]
        return plant * respond(frequency.ravel()).reshape(frequency.shape)

    def nearness(row: IntArray, frequency: FloatArray) -> FloatArray:
        return 1.0 / _distance(loop(row, frequency[:, None])[:, 0])

    rows = np.arange(len(plants))
    values = loop(rows, grid)
    peak, frequency = highest(grid, 1.0 / _distance(values), nearness)
    orders = np.array([order for _, order in closed])
    settled = _settled(values, grid, plants, orders)
    stable = np.array([is_stable(poles) for poles, _ in closed])
    decay = np.array([largest_real_part(poles, period) for poles, _ in closed])
    return stable, settled, decay, 1.0 / peak, frequency


def _top(around: Surroundings) -> float:
    return FAR * around.band[1] if around.period <= 0.0 else 0.5 / around.period


def _distance(loop: ComplexArray) -> FloatArray:
    return np.asarray(np.maximum(np.abs(1.0 + loop), LOWEST_DISTANCE))


def _as_sampled(poles: ComplexArray, period: float) -> ComplexArray:
    if period <= 0.0:
        return poles
    z = (1.0 + 0.5 * period * poles) / (1.0 - 0.5 * period * poles)
    return np.asarray(np.log(np.where(np.abs(z) > 1e-9, z, 1e-9)) / period)


def _padded(features: list[ComplexArray], low: float) -> ComplexArray:
    upper = [found[found.imag >= 0.0] for found in features]
    table = np.full((len(upper), max(found.size for found in upper)), TWO_PI * low * (-0.1 + 1j))
    for row, found in enumerate(upper):
        table[row, : found.size] = found
    return table


def _controller_response(controller: Controller) -> Callable[[FloatArray], ComplexArray]:
    system = controller.system
    ready = SchurResponse(Matrices(system.A, system.B, system.C, system.D))

    def respond(frequency: FloatArray) -> ComplexArray:
        return ready(evaluation_points(frequency, controller.period))[:, 0, 0]

    return respond


def _closed(
    plant: FittedPlant, controller: Controller, period: float, high: float
) -> tuple[ComplexArray, int]:
    """Return the closed-loop poles, and the order of the all-pass that stands for the delay."""
    control = continuous_image(controller.system, period)
    matrices = plant_matrices(plant)
    if period > 0.0:
        held = held_plant(matrices, plant.delay, period)
        return closed_loop_poles(continuous_image(held, period), control), 0
    rational = continuous_image(matrices, 0.0)
    order = pade_order(TWO_PI * BEYOND * high * plant.delay, DELAY_TOLERANCE)
    if order:
        rational = series(rational, StateSpace(*pade_matrices(plant.delay, order)))
    return closed_loop_poles(rational, control), order


def held_plant(plant: Matrices, delay: float, period: float) -> Matrices:
    """Return the exact zero-order-hold equivalent of a scalar plant behind a delay.

    Parameters
    ----------
    plant
        Continuous, scalar.
    delay, period
        s.
    """
    whole, fraction = (float(part.item()) for part in split_delay(np.array([delay]), period))
    now = _step(plant, period - fraction)
    early = _step(plant, fraction)
    drift = now[0] @ early[0]
    late = fraction > 0.0
    taps = int(whole) + late
    states = plant.states
    # States: the plant's, then past inputs u[k-1] ... u[k-taps].
    a = np.zeros((states + taps, states + taps))
    b, c = np.zeros((states + taps, 1)), np.zeros((1, states + taps))
    a[:states, :states] = drift
    a[states + 1 :, states:-1] = np.eye(max(taps - 1, 0))
    c[:, :states] = plant.C
    d = np.zeros((1, 1))
    columns = [(int(whole), now[1])] + [(int(whole) + 1, now[0] @ early[1])] * late
    for tap, column in columns:
        if tap:
            a[:states, [states + tap - 1]] += column
        else:
            b[:states] += column
    if taps:
        b[states] = 1.0
        c[:, states + taps - 1] += plant.D[0, 0]
    else:
        d = plant.D.copy()
    return Matrices(a, b, c, d)


def _step(plant: Matrices, time: float) -> tuple[FloatArray, FloatArray]:
    """Return e^{At} and its integral times B."""
    states = plant.states
    both = np.zeros((states + 1, states + 1))
    both[:states, :states], both[:states, states:] = plant.A, plant.B
    moved = expm(both * time)
    return moved[:states, :states], moved[:states, states:]


def _settled(
    loop: ComplexArray, grid: FloatArray, plants: Sequence[FittedPlant], orders: IntArray
) -> BoolArray:
    """Say for which plants the error of the all-pass cannot change the winding number."""
    found = np.ones(len(plants), dtype=bool)
    for row, plant in enumerate(plants):
        if not orders[row]:
            continue
        phase = TWO_PI * grid[row] * plant.delay
        error = np.abs(np.exp(-1j * phase) - pade_response(phase, int(orders[row])))
        gap = np.abs(1.0 + loop[row]) - np.abs(loop[row]) * error
        # Beyond the grid the all-pass may be anything: the loop itself has to be small there.
        found[row] = bool(np.all(gap > 0.0) and abs(loop[row, -1]) < 0.5)
    return found


def virtual_loops(
    contents: PlantSetFields, controller: Controller, members: Sequence[Member]
) -> PlantLoops:
    """Return the loops of drawn members of a scalar set with a controller.

    Parameters
    ----------
    contents
        The set.
    controller
        u = -K y, of the same time base.
    members
        As `PlantSet.sample` draws them.
    """
    around, period = Surroundings(contents), contents.time.period
    control, respond = continuous_image(controller.system, period), _controller_response(controller)
    delay = contents.nominal.delay
    found = [_member_poles(member, control, period, delay, around.band[1]) for member in members]
    grid = np.unique(np.concatenate([around.common_grid, even_grid(around.band)]))
    controlled = respond(grid)
    loops = _member_responses(contents, members, grid) * controlled
    distance = _distance(loops)
    best = distance.argmin(axis=1)
    stable = np.array([is_stable(poles) for poles in found])
    return PlantLoops(
        tuple(f"virtual plant {k + 1}" for k in range(len(members))),
        stable,
        np.ones(len(members), dtype=bool),
        np.array([largest_real_part(poles, period) for poles in found]),
        distance[np.arange(len(members)), best],
        grid[best],
    )


def _member_responses(
    contents: PlantSetFields, members: Sequence[Member], frequency: FloatArray
) -> ComplexArray:
    """Return (members, points) responses; what stands around the blocks is evaluated once."""
    points = evaluation_points(frequency, contents.time.period)
    around = SchurResponse(contents.interconnection)(points)
    late = delay_factor(frequency, contents.nominal.delay)
    rows = []
    for member in members:
        blocks = [np.moveaxis(SchurResponse(block)(points), 0, -1) for block in member.delta]
        delta = np.moveaxis(block_diagonal(blocks), -1, 0)
        rows.append(upper_lft(around, delta)[:, 0, 0] * late)
    return np.array(rows)


def _member_poles(
    member: Member, control: StateSpace, period: float, delay: float, high: float
) -> ComplexArray:
    plant = continuous_image(member.state_space(), period)
    return closed_loop_poles(delayed(plant, delay, high), control)


def delayed(plant: StateSpace, delay: float, high: float) -> StateSpace:
    """Put the all-pass of a delay (s) behind a plant, good to 1e-9 up to three times `high` Hz."""
    if not delay:
        return plant
    order = pade_order(TWO_PI * BEYOND * high * delay, DELAY_TOLERANCE)
    return series(plant, StateSpace(*pade_matrices(delay, order)))
