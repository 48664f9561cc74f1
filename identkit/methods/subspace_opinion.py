"""A second opinion on modes, from time records without a frequency-domain step.

Subspace identification (canonical variate analysis, Larimore 1990; see `subspace_worker`) on
several stretches of a record gives poles; those that recur in every stretch are modes, and their
scatter is the error. Disagreement with a modal fit is more than chance where it exceeds both errors
and what the method is biased by in a loop, for which half the half-power bandwidth is allowed.
"""

import subprocess
import sys
import tempfile
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from identkit.methods.arrays import BoolArray, FloatArray

STRETCHES = 3
_MOST_SAMPLES = 12_000
_FEWEST_SAMPLES = 2_000
_TIME_LIMIT = 60.0


@dataclass(frozen=True)
class SubspaceModes:
    """Modes that recur in every stretch of a record.

    Attributes
    ----------
    frequency
        (modes,) Hz, increasing.
    damping_ratio
        (modes,).
    frequency_error
        (modes,) standard error of the mean over stretches, Hz.
    """

    frequency: FloatArray
    damping_ratio: FloatArray
    frequency_error: FloatArray


def subspace_modes(
    drive: FloatArray,
    position: FloatArray,
    sample_period: float,
    *,
    order: int = 22,
    time_limit: float = _TIME_LIMIT,
) -> SubspaceModes | str:
    """Return the modes of a scalar plant from its records.

    Parameters
    ----------
    drive, position
        (samples,) without gaps.
    sample_period
        s.
    order
        States of the models.
    time_limit
        s, for every stretch.

    Returns
    -------
    SubspaceModes or str
        Or why there are none.

    Notes
    -----
    Each stretch is worked on in a process of its own that is ended at the time limit. In closed
    loop the modes are biased when the noise is strong.
    """
    length = min(drive.size // STRETCHES, _MOST_SAMPLES)
    if length < _FEWEST_SAMPLES:
        return f"records of {drive.size} samples are too short for it"
    found = []
    for k in range(STRETCHES):
        part = slice(k * length, (k + 1) * length)
        poles = _poles(drive[part], position[part], order, time_limit)
        if isinstance(poles, str):
            return poles
        found.append(_oscillating(poles, sample_period))
    return _recurring(found)


def disagrees(
    frequency: FloatArray, damping_ratio: FloatArray, error: FloatArray, opinion: SubspaceModes
) -> BoolArray:
    """Return which fitted modes the second opinion contradicts.

    Parameters
    ----------
    frequency, damping_ratio, error
        (modes,) of the fit; Hz and the standard error in Hz.
    opinion
        Of the same plant.

    Returns
    -------
    BoolArray
        True where its nearest mode lies farther off than three standard errors of both and half the
        half-power bandwidth, but within ten per cent; a mode it does not see is no contradiction.
    """
    if opinion.frequency.size == 0:
        return np.zeros(frequency.shape, dtype=np.bool_)
    apart = np.abs(frequency[:, None] - opinion.frequency)
    nearest = np.argmin(apart, axis=1)
    miss = np.take_along_axis(apart, nearest[:, None], axis=1)[:, 0]
    both = np.hypot(error, opinion.frequency_error[nearest])
    allowed = 3.0 * both + np.maximum(damping_ratio, opinion.damping_ratio[nearest]) * frequency
    return np.asarray((miss > allowed) & (miss < 0.1 * frequency))


def _poles(
    drive: FloatArray, position: FloatArray, order: int, time_limit: float
) -> np.ndarray | str:
    with tempfile.TemporaryDirectory() as folder:
        given, result = Path(folder) / "given.npz", Path(folder) / "poles.npy"
        scaled = [each - each.mean() for each in (drive, position)]
        scaled = [each / (np.std(each) or 1.0) for each in scaled]
        np.savez(given, allow_pickle=False, drive=scaled[0], position=scaled[1], order=order)
        command = [sys.executable, "-m", "identkit.methods.subspace_worker"]
        command += [str(given), str(result)]
        try:
            subprocess.run(command, capture_output=True, timeout=time_limit, check=False)
        except subprocess.TimeoutExpired:
            return f"no result within {time_limit:g} s"
        if not result.exists():
            return "the subspace package is not installed or failed on this record"
        return np.asarray(np.load(result, allow_pickle=False))


def _oscillating(poles: np.ndarray, sample_period: float) -> FloatArray:
    """Return (2, modes) frequency and damping ratio of stable oscillating poles."""
    good = poles[(poles.imag > 0.0) & (np.abs(poles) < 1.0)]
    s = np.log(good) / sample_period
    frequency = np.abs(s) / (2.0 * np.pi)
    order = np.argsort(frequency)
    return np.asarray(np.stack([frequency, -s.real / np.abs(s)])[:, order])


def _recurring(found: list[FloatArray]) -> SubspaceModes:
    """Keep the modes of the first stretch that every other stretch has within two per cent."""
    rows = []
    for frequency, damping in found[0].T:
        seen = [(frequency, damping)]
        for other in found[1:]:
            if other.shape[1] == 0:
                break
            near = int(np.argmin(np.abs(other[0] - frequency)))
            if abs(other[0, near] - frequency) < 0.02 * frequency:
                seen.append((other[0, near], other[1, near]))
        if len(seen) == len(found):
            values = np.array(seen)
            error = float(np.std(values[:, 0], ddof=1) / np.sqrt(len(found)))
            rows.append((values[:, 0].mean(), values[:, 1].mean(), error))
    table = np.array(rows).reshape(-1, 3).T
    return SubspaceModes(table[0], table[1], table[2])
