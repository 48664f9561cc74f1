"""An invented test bench that takes closed-loop time records of the invented actuator.

Nothing here is measured. Bench, controller, spindle and noise are made up, so that records exist
whose truth is known: the plant behind its hold is simulated exactly, in a loop with a controller
at the servo rate, with repeatable runout, windage and sensor noise; the position is recorded as
quantised in-phase and quadrature bursts.
"""

from dataclasses import dataclass, field

import numpy as np
from scipy.signal import lfilter

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.burst_decoding import bursts, servo_rate, track_pitch
from identkit.methods.held_modal_model import HeldPoles, held_poles
from identkit.methods.modal_model import ModalParameters, modal_response
from identkit.methods.schroeder_multisine import multisine, schroeder_phases


@dataclass(frozen=True)
class InventedRecorder:
    """How the invented bench holds the head, excites it and records.

    Attributes
    ----------
    sectors, spindle_speed
        Position samples per turn, and turns per minute.
    tracks_per_inch
        Of the position reference.
    turns
        Turns per period of the multisine.
    periods
        Periods recorded, the first of which still settles.
    lines
        About how many lines the multisine has; those on turn harmonics are left out.
    band
        Hz, of the multisine.
    motion
        Root-mean-square motion that the excitation is aimed at, nm.
    windage, sensor_noise
        Standard deviations, nm.
    runout
        Standard deviation of the repeatable runout, nm.
    steps_per_track
        Of the converter behind the bursts.
    crossover
        Of the loop, Hz.
    """

    sectors: int = 420
    spindle_speed: float = 7200.0
    tracks_per_inch: float = 300_000.0
    turns: int = 20
    periods: int = 9
    lines: int = 900
    band: tuple[float, float] = (60.0, 23_000.0)
    motion: float = 5.0
    windage: float = 1.0
    sensor_noise: float = 0.5
    runout: float = 2.0
    steps_per_track: int = 2048
    crossover: float = 500.0

    @property
    def period(self) -> float:
        """Sample period, s."""
        return 1.0 / servo_rate(self.sectors, self.spindle_speed)


@dataclass(frozen=True)
class InventedRecord:
    """What the bench recorded: excitation and drive in A, bursts in tracks."""

    excitation: FloatArray
    drive: FloatArray
    in_phase: FloatArray
    quadrature: FloatArray


@dataclass(frozen=True)
class Loop:
    """A linear loop as parallel first-order sections, x+ = pole x + b [r, w, n].

    Attributes
    ----------
    pole
        (states,) of the closed loop.
    into
        (states, 3) from excitation, windage at the position, and sensor noise.
    out
        (2, states) to drive and measured position.
    direct
        (2, 3) straight through.
    """

    pole: ComplexArray
    into: ComplexArray
    out: ComplexArray
    direct: FloatArray

    def response_to(self, signals: FloatArray) -> FloatArray:
        """Return (2, samples): drive and measured position, from rest."""
        total = self.direct @ signals
        for pole, into, out in zip(self.pole, self.into, self.out.T, strict=True):
            driven = into @ signals
            delayed = np.concatenate([[0.0], driven[:-1]])
            total = total + np.real(out[:, None] * lfilter([1.0], [1.0, -pole], delayed))
        return np.asarray(total)

    def position_per_excitation(
        self, frequency: FloatArray, recorder: "InventedRecorder"
    ) -> ComplexArray:
        """Return the response of position to excitation, nm/A."""
        z = np.exp(2j * np.pi * frequency * recorder.period)[:, None]
        return np.asarray(np.sum(self.out[1] * self.into[:, 0] / (z - self.pole), axis=1))


@dataclass
class _Matrices:
    """A loop put together: states of plant, one-sample memory of the drive, controller."""

    plant: HeldPoles
    numerator: FloatArray
    denominator: FloatArray
    size: int = field(init=False)

    def __post_init__(self) -> None:
        self.size = self.plant.pole.size + 1 + self.denominator.size - 1


def invented_controller(
    plant: ModalParameters, crossover: float, period: float
) -> tuple[FloatArray, FloatArray]:
    """Return numerator and denominator in z^-1 of a lag-lead controller for one plant.

    An integrator with its zero a tenth of the crossover, and a lead of ratio 9 about it, each held
    by the bilinear rule; the gain makes the loop cross over where asked.
    """
    zeros = -2.0 * np.pi * crossover * np.array([0.1, 1.0 / 3.0])
    poles = np.array([-1e-6, -2.0 * np.pi * crossover * 3.0])
    step = 0.5 * period
    numerator = np.real(np.poly((1.0 + step * zeros) / (1.0 - step * zeros)))
    denominator = np.real(np.poly((1.0 + step * poles) / (1.0 - step * poles)))
    z = np.exp(2j * np.pi * crossover * period)
    at = np.polyval(numerator, z) / np.polyval(denominator, z)
    gain = 1.0 / np.abs(at * modal_response(np.array([crossover]), plant)[0])
    return np.asarray(gain * numerator), np.asarray(denominator)


def invented_loop(plant: ModalParameters, recorder: InventedRecorder) -> Loop:
    """Return the closed loop u = r - C y, y = P u + windage + noise, for one plant.

    Raises
    ------
    ValueError
        If the loop is unstable, or the plant's delay is no fraction of a sample.
    """
    held = held_poles(plant, recorder.period)
    if held.whole_periods != 0 or held.direct != 0.0:
        raise ValueError("found a delay of no fraction of a sample; expected 0 < delay < period")
    numerator, denominator = invented_controller(plant, recorder.crossover, recorder.period)
    parts = _Matrices(held, numerator, denominator)
    transition, into, out, direct = _closed(parts)
    pole, vectors = np.linalg.eig(transition)
    if np.max(np.abs(pole)) >= 1.0:
        raise ValueError("found an unstable loop; expected a lower crossover")
    turned = np.asarray(np.linalg.solve(vectors, into), dtype=complex)
    return Loop(pole, turned, np.asarray(out @ vectors, dtype=complex), direct)


def _closed(
    parts: _Matrices,
) -> tuple[ComplexArray, ComplexArray, ComplexArray, FloatArray]:
    """Return the loop's matrices; plant and windage make y, which with noise is measured."""
    held, size = parts.plant, parts.size
    plant, memory = held.pole.size, held.pole.size
    control = slice(memory + 1, size)
    gain = parts.numerator[0]
    tail = parts.numerator[1:] - parts.denominator[1:] * gain
    measure = np.zeros(size, dtype=complex)
    measure[:plant] = held.residue
    measure[memory] = held.direct_before
    drive = -gain * measure
    drive[control] -= np.eye(tail.size)[0]
    transition = np.zeros((size, size), dtype=complex)
    transition[:plant, :plant] = np.diag(held.pole)
    transition[:plant, memory] = held.before
    shift = np.eye(tail.size, k=1)
    transition[control, control] = shift - np.outer(parts.denominator[1:], np.eye(tail.size)[0])
    into_drive = np.zeros(size, dtype=complex)
    into_drive[:plant] = held.now
    into_drive[memory] = 1.0
    into_control = np.zeros(size, dtype=complex)
    into_control[control] = tail
    transition += np.outer(into_drive, drive) + np.outer(into_control, measure)
    # u = drive.x + r - gain (w + n); measured = measure.x + w + n
    direct = np.array([[1.0, -gain, -gain], [0.0, 1.0, 1.0]])
    into = np.outer(into_drive, direct[0]) + np.outer(into_control, direct[1])
    return transition, into, np.stack([drive, measure]), direct


def invented_excitation(plant: ModalParameters, recorder: InventedRecorder) -> FloatArray:
    """Return one period of a multisine with about the same motion, and low peaks, for one plant.

    Made once for the plant as designed, it serves all devices.
    """
    samples = recorder.sectors * recorder.turns
    resolution = 1.0 / (samples * recorder.period)
    wanted = np.geomspace(*recorder.band, recorder.lines) / resolution
    lines = np.unique(np.round(wanted).astype(int))
    # runout repeats every turn: its harmonics are left to it
    lines = lines[lines % recorder.turns != 0]
    moves = invented_loop(plant, recorder).position_per_excitation(lines * resolution, recorder)
    phase = schroeder_phases(np.ones(lines.size), lines) - np.angle(moves)
    each = recorder.motion * np.sqrt(2.0 / lines.size)
    return multisine(lines, each / np.abs(moves), samples, phase)


def invent_record(
    plant: ModalParameters,
    excitation: FloatArray,
    recorder: InventedRecorder,
    generator: np.random.Generator,
) -> InventedRecord:
    """Record one device of the invented bench.

    Parameters
    ----------
    plant
        The device, nm/A.
    excitation
        One period, A.
    recorder
        The bench.
    generator
        Of the random numbers.

    Returns
    -------
    InventedRecord
        All channels at the servo rate.
    """
    loop = invented_loop(plant, recorder)
    excitation = np.tile(excitation, recorder.periods)
    windage = lfilter([0.3], [1.0, -0.7], generator.standard_normal(excitation.size))
    windage *= recorder.windage / np.std(windage)
    turn = generator.standard_normal(recorder.sectors)
    turn = recorder.runout * turn / np.std(turn)
    runout = np.tile(turn, recorder.turns * recorder.periods)
    noise = recorder.sensor_noise * generator.standard_normal(excitation.size)
    drive, position = loop.response_to(np.stack([excitation, windage + runout, noise]))
    tracks = position / track_pitch(recorder.tracks_per_inch)
    step = 1.0 / recorder.steps_per_track
    in_phase, quadrature = (np.round(burst / step) * step for burst in bursts(tracks))
    return InventedRecord(excitation, drive, in_phase, quadrature)
