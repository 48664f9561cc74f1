"""Lines of a stepped-sine test by least squares on whole dwells (sine fit of IEEE Std 1057).

With the frequency known, sine, cosine and offset are linear in the record (the three-parameter sine
fit of IEEE Std 1057). Each dwell is cut in blocks after it has settled; blocks take the place of
the periods of `multisine_average`, which gives response and variance line by line.
"""

import numpy as np

from identkit.methods.arrays import ComplexArray, FloatArray


def dwells(frequency: FloatArray) -> list[tuple[int, int]]:
    """Return (start, stop) of every stretch over which the driven frequency stays the same.

    Stretches at zero or at no finite frequency, where nothing is driven, are left out.
    """
    edges = np.flatnonzero(np.diff(frequency) != 0.0) + 1
    bounds = [0, *edges.tolist(), frequency.size]
    return [
        (start, stop)
        for start, stop in zip(bounds[:-1], bounds[1:], strict=True)
        if frequency[start] > 0.0 and np.isfinite(frequency[start])
    ]


def sine_phasors(
    signals: FloatArray, frequency: float, sample_period: float, *, blocks: int = 8
) -> ComplexArray:
    """Return phasors of several channels in each block of one dwell.

    Parameters
    ----------
    signals
        (channels, samples) of the settled part of a dwell.
    frequency
        Hz.
    sample_period
        s.
    blocks
        Blocks to cut it into; fewer when a block would hold less than two cycles.

    Returns
    -------
    ComplexArray
        (channels, blocks), amplitude and phase e^{+jwt} from the start of the dwell.

    Raises
    ------
    ValueError
        If the dwell is too short for two blocks of two cycles.
    """
    cycle = 1.0 / (frequency * sample_period)
    blocks = min(blocks, int(signals.shape[1] // max(2.0 * cycle, 8.0)))
    if blocks < 2:
        found = f"a dwell of {signals.shape[1] / cycle:.3g} cycles at {frequency:g} Hz"
        raise ValueError(f"found {found}; expected at least 4 and 16 samples")
    samples = signals.shape[1] // blocks
    turn = 2.0 * np.pi * frequency * sample_period * np.arange(samples)
    basis = np.stack([np.cos(turn), -np.sin(turn), np.ones(samples)], axis=1)
    shaped = signals[:, : blocks * samples].reshape(-1, samples).T
    found_parts = np.linalg.lstsq(basis, shaped, rcond=None)[0]
    phasor = (found_parts[0] + 1j * found_parts[1]).reshape(-1, blocks)
    started = np.exp(-2j * np.pi * frequency * sample_period * samples * np.arange(blocks))
    return np.asarray(phasor * started)
