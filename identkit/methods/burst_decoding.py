"""Position from in-phase and quadrature servo bursts, and its non-linearity from a sweep.

Two triangular burst signals of period two tracks, half a track apart, give the position: the one
nearer to zero is in its linear range (common practice with quadrature bursts). Gain differences,
offsets and rounded corners leave a repeatable error that a sweep at even speed shows: every
position is then equally frequent, so the distribution found is the non-linearity (code density
test: J. Doernberg, H.-S. Lee and D. A. Hodges, IEEE J. Solid-State Circuits 19(6), 1984).
"""

import numpy as np

from identkit.methods.arrays import BoolArray, FloatArray

CYCLE = 2.0
"""Tracks after which the bursts repeat."""
NANOMETRES_PER_INCH = 25.4e6


def track_pitch(tracks_per_inch: float) -> float:
    """Return the distance of two tracks in nm."""
    return NANOMETRES_PER_INCH / tracks_per_inch


def servo_rate(sectors: int, spindle_speed: float) -> float:
    """Return position samples per second from servo sectors per turn and turns per minute."""
    return sectors * spindle_speed / 60.0


def bursts(position: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return ideal in-phase and quadrature bursts of a position in tracks; slopes are 1."""
    return _triangle(position), _triangle(position - 0.5)


def decode_bursts(in_phase: FloatArray, quadrature: FloatArray) -> FloatArray:
    """Return the position in tracks, from 0 to below 2, as far as bursts alone can tell.

    Parameters
    ----------
    in_phase, quadrature
        Zero at track centres and at track edges; slope 1 per track in their linear ranges.

    Notes
    -----
    Branches, each of half a track: in-phase about even and odd centres where it is the smaller of
    the two in magnitude, quadrature about the edges elsewhere.
    """
    by_centre = np.where(quadrature < 0.0, in_phase, 1.0 - in_phase)
    by_edge = np.where(in_phase > 0.0, 0.5 + quadrature, 1.5 - quadrature)
    central = np.abs(in_phase) <= np.abs(quadrature)
    return np.asarray(np.mod(np.where(central, by_centre, by_edge), CYCLE))


def follow_position(decoded: FloatArray, coarse: FloatArray | None = None) -> FloatArray:
    """Return positions beyond one cycle of the bursts.

    Parameters
    ----------
    decoded
        From `decode_bursts`.
    coarse
        Track numbers of the same samples, right to less than a track; without them the position is
        followed from sample to sample, which must lie less than one track apart, starting within
        one track of 0.
    """
    if coarse is not None:
        return np.asarray(decoded + CYCLE * np.round((coarse - decoded) / CYCLE))
    followed = np.unwrap(decoded, period=CYCLE)
    first = followed[np.isfinite(followed)][:1]
    return np.asarray(followed - (CYCLE * np.round(first / CYCLE) if first.size else 0.0))


def measure_linearity(sweep: FloatArray, knots: int = 128) -> FloatArray:
    """Return (2, knots + 1) decoded and true positions within one cycle from an even sweep.

    Parameters
    ----------
    sweep
        Decoded positions, 0 to below 2, of a sweep at even speed over many whole cycles.
    knots
        Points of the table.

    Raises
    ------
    ValueError
        If there are fewer than 50 samples per knot.
    """
    seen = np.sort(sweep[np.isfinite(sweep)])
    if seen.size < 50 * knots:
        raise ValueError(f"found {seen.size} samples; expected at least {50 * knots}")
    edges = np.linspace(0.0, CYCLE, knots + 1)
    below = np.searchsorted(seen, edges) / seen.size
    return np.stack([edges, CYCLE * below])


def linearised(decoded: FloatArray, table: FloatArray) -> FloatArray:
    """Return positions corrected by a table of `measure_linearity`."""
    return np.asarray(np.interp(decoded, table[0], table[1]))


def beyond_range(position: FloatArray, half_range: float) -> BoolArray:
    """Return which samples lie outside the linear range or are missing."""
    with np.errstate(invalid="ignore"):
        return np.asarray(~(np.abs(position) <= half_range))


def _triangle(position: FloatArray) -> FloatArray:
    turned = np.mod(position + 0.5, CYCLE)
    return np.asarray(np.where(turned < 1.0, turned - 0.5, 1.5 - turned))
