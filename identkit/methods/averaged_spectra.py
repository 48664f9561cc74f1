"""Averaged spectra of several channels from overlapping windowed segments (Welch 1967).

P. D. Welch, The use of fast Fourier transform for the estimation of power spectra: a method based
on time averaging over short, modified periodograms, IEEE Trans. Audio and Electroacoustics 15(2),
1967. Records are taken in chunks of any size, so memory does not grow with their length, and
several records of one device are averaged together.
"""

from dataclasses import dataclass

import numpy as np
from scipy.fft import rfft

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.line_correlation import line_correlation
from identkit.methods.spectral_windows import effective_averages, window_samples

_SAMPLES_AT_ONCE = 1 << 16


@dataclass(frozen=True)
class AveragedSpectra:
    """One-sided spectral densities of several channels.

    Attributes
    ----------
    frequency
        (lines,) Hz, from 0 to half the sampling rate.
    density
        (lines, channels, channels) E[X_i conj(X_j)], unit_i unit_j / Hz; Hermitian.
    segments
        Number of segments averaged.
    averages
        What they are worth as independent ones.
    correlation
        Of the errors of neighbouring lines, by line distance, starting with 1.
    """

    frequency: FloatArray
    density: ComplexArray
    segments: int
    averages: float
    correlation: FloatArray


class SpectrumAverager:
    """Average the spectra of records that come in chunks.

    Parameters
    ----------
    channels
        Number of channels.
    segment
        Samples per segment, 4 or more.
    sample_period
        s.
    window
        A name of `spectral_windows`.
    overlap
        Share of a segment that the next one repeats, 0 to below 1.

    Notes
    -----
    Segments with a sample that is no finite number are left out and counted in `left_out`.
    """

    def __init__(
        self,
        channels: int,
        segment: int,
        sample_period: float,
        *,
        window: str = "hann",
        overlap: float = 0.5,
    ) -> None:
        if segment < 4 or not 0.0 <= overlap < 1.0:
            found = f"segments of {segment} samples overlapping by {overlap}"
            raise ValueError(f"found {found}; expected 4 samples or more and 0 to below 1")
        self.segment = segment
        self.hop = max(1, round(segment * (1.0 - overlap)))
        self.sample_period = sample_period
        self.window = window_samples(window, segment)
        self._sum = np.zeros((channels, channels, segment // 2 + 1), dtype=complex)
        self._rest = np.empty((channels, 0))
        self._counts = [0]
        self.left_out = 0

    def add(self, chunk: FloatArray) -> None:
        """Take (channels, samples) that follow on those added before."""
        joined = np.concatenate([self._rest, chunk], axis=1) if self._rest.size else chunk
        count = max(0, (joined.shape[1] - self.segment) // self.hop + 1)
        if not count:
            self._rest = np.array(joined)
            return
        views = np.lib.stride_tricks.sliding_window_view(joined, self.segment, axis=1)
        at_once = max(1, _SAMPLES_AT_ONCE // self.segment)
        for start in range(0, count, at_once):
            stop = min(count, start + at_once)
            self._add_segments(views[:, start * self.hop : (stop - 1) * self.hop + 1 : self.hop])
        self._rest = np.array(joined[:, count * self.hop :])

    def end_record(self) -> None:
        """Say that the next chunk begins another record; the rest of this one is left out."""
        self._rest = self._rest[:, :0]
        self._counts.append(0)

    def result(self) -> AveragedSpectra:
        """Return the spectra averaged so far.

        Raises
        ------
        ValueError
            If no record was as long as one segment.
        """
        counts = [count for count in self._counts if count]
        total = sum(counts)
        if not total:
            raise ValueError(f"found no whole segment of {self.segment} samples")
        worth = [effective_averages(self.window, self.hop, count) for count in counts]
        spread = sum(count**2 / each for count, each in zip(counts, worth, strict=True))
        return AveragedSpectra(
            np.asarray(np.fft.rfftfreq(self.segment, self.sample_period), dtype=float),
            self._density(total),
            total,
            total**2 / spread,
            line_correlation(self.window, self.hop, max(counts)),
        )

    def _add_segments(self, segments: FloatArray) -> None:
        """Add (channels, segments, samples), each without its mean."""
        mean = segments.mean(axis=-1, keepdims=True)
        good = np.isfinite(mean).all(axis=(0, 2))
        if not good.all():
            segments, mean = segments[:, good], mean[:, good]
            self.left_out += int(np.count_nonzero(~good))
        self._counts[-1] += segments.shape[1]
        tapered = segments - mean
        tapered *= self.window
        lines = rfft(tapered, axis=-1, overwrite_x=True)
        conjugate = lines.conj()
        for i in range(lines.shape[0]):
            for j in range(i + 1):
                self._sum[i, j] += np.einsum("kl,kl->l", lines[i], conjugate[j])

    def _density(self, total: int) -> ComplexArray:
        below = np.tril_indices(self._sum.shape[0], -1)
        whole = self._sum.copy()
        whole[below[1], below[0]] = whole[below].conj()
        one_sided = np.full(self.segment // 2 + 1, 2.0)
        one_sided[0] = 1.0
        if self.segment % 2 == 0:
            one_sided[-1] = 1.0
        scale = one_sided * self.sample_period / (total * np.sum(self.window**2))
        return np.asarray(np.moveaxis(whole * scale, -1, 0))


def averaged_spectra(
    record: FloatArray,
    sample_period: float,
    segment: int,
    *,
    window: str = "hann",
    overlap: float = 0.5,
) -> AveragedSpectra:
    """Return the averaged spectra of one record of (channels, samples); see `SpectrumAverager`.

    Raises
    ------
    ValueError
        If the record is shorter than one segment or an option is out of range.
    """
    averager = SpectrumAverager(
        record.shape[0], segment, sample_period, window=window, overlap=overlap
    )
    averager.add(record)
    return averager.result()
