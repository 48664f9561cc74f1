"""Windows for averaged spectra and their figures of merit (Harris 1978, corrected).

F. J. Harris, On the use of windows for harmonic analysis with the discrete Fourier transform,
Proc. IEEE 66(1), 1978. Two rows of its table are wrong as printed (A. H. Nuttall, IEEE Trans. ASSP
29(1), 1981, for the Blackman row), so every figure here is computed from the window itself.
Windows are sums of cosines in their periodic form: the sample after the last is the first again.
"""

from dataclasses import dataclass

import numpy as np

from identkit.methods.arrays import FloatArray

COEFFICIENTS = {
    "rectangular": (1.0,),
    "hann": (0.5, 0.5),
    "hamming": (0.54, 0.46),
    "blackman": (7938 / 18608, 9240 / 18608, 1430 / 18608),
    "blackman-harris": (0.35875, 0.48829, 0.14128, 0.01168),
}


@dataclass(frozen=True)
class WindowFigures:
    """Figures of merit of a window.

    Attributes
    ----------
    noise_bandwidth
        Equivalent noise bandwidth in lines.
    scallop_loss_db
        Loss half-way between two lines, dB.
    """

    noise_bandwidth: float
    scallop_loss_db: float


def window_samples(name: str, length: int) -> FloatArray:
    """Return a window in its periodic form.

    Parameters
    ----------
    name
        A key of `COEFFICIENTS`.
    length
        Samples, above 1.

    Raises
    ------
    ValueError
        If the window is unknown or has fewer than two samples.
    """
    if name not in COEFFICIENTS or length < 2:
        known = ", ".join(COEFFICIENTS)
        raise ValueError(f"found the window {name!r} of {length} samples; expected one of {known}")
    turn = 2.0 * np.pi * np.arange(length) / length
    terms = [
        (-1) ** k * coefficient * np.cos(k * turn)
        for k, coefficient in enumerate(COEFFICIENTS[name])
    ]
    return np.asarray(np.sum(terms, axis=0), dtype=float)


def window_figures(samples: FloatArray) -> WindowFigures:
    """Return noise bandwidth and scallop loss of a window."""
    total = samples.sum()
    half_line = np.exp(-1j * np.pi * np.arange(samples.size) / samples.size)
    loss = np.abs(np.sum(samples * half_line)) / total
    return WindowFigures(
        float(samples.size * np.sum(samples**2) / total**2), float(-20.0 * np.log10(loss))
    )


def overlap_correlation(samples: FloatArray, hop: int) -> float:
    """Return the correlation of the lines of two segments of white noise `hop` samples apart."""
    if hop >= samples.size:
        return 0.0
    shared = np.sum(samples[hop:] * samples[: samples.size - hop])
    return float(shared / np.sum(samples**2))


def effective_averages(samples: FloatArray, hop: int, segments: int) -> float:
    """Return how many independent averages overlapping segments are worth (Welch 1967).

    K / (1 + 2 sum_j (1 - j/K) rho_j^2), with rho_j the correlation of segments j hops apart
    (P. D. Welch, IEEE Trans. Audio and Electroacoustics 15(2), 1967).

    Parameters
    ----------
    samples
        The window.
    hop
        Samples from the start of one segment to the start of the next.
    segments
        Number of segments K.
    """
    apart = range(1, min(segments, -(-samples.size // hop)))
    doubled = sum((1.0 - j / segments) * overlap_correlation(samples, j * hop) ** 2 for j in apart)
    return segments / (1.0 + 2.0 * doubled)
