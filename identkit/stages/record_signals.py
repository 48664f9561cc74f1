"""The signals of a record as the estimators want them: bursts decoded, runout out, doubt marked."""

from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np

from identkit.errors import InputError, Problem
from identkit.methods.arrays import FloatArray
from identkit.methods.burst_decoding import CYCLE, beyond_range, decode_bursts, track_pitch
from identkit.methods.repeatable_runout import TurnAverager, without_turn
from identkit.readers.records import CHUNK, RecordFile
from identkit.settings_records import RecordSettings

_HALF_TRACK = 0.5
_BLOCK = 4096


def names_of(channel: str | tuple[str, ...]) -> list[str]:
    """Return the names of one channel or several as a list."""
    return [channel] if isinstance(channel, str) else list(channel)


@dataclass(frozen=True)
class Channels:
    """Where the signals stand in a chunk: excitations first, then drives, then positions."""

    excitation: list[str]
    drive: list[str]
    position: list[str]
    from_bursts: bool

    @classmethod
    def of(cls, options: RecordSettings) -> "Channels":
        """Return the channels that a study names."""
        bursts = options.in_phase is not None and options.quadrature is not None
        return cls(
            names_of(options.excitation),
            names_of(options.drive),
            ["position"] if bursts else names_of(options.position),
            bursts,
        )

    @property
    def instruments(self) -> list[int]:
        """Places of the excitations."""
        return list(range(len(self.excitation)))

    @property
    def inputs(self) -> list[int]:
        """Places of the drives."""
        return [len(self.excitation) + k for k in range(len(self.drive))]

    @property
    def outputs(self) -> list[int]:
        """Places of the positions."""
        first = len(self.excitation) + len(self.drive)
        return [first + k for k in range(len(self.position))]

    @property
    def open_loop(self) -> bool:
        """Whether the drive is itself the excitation."""
        return self.excitation == self.drive


@dataclass
class Tally:
    """What is counted while a record goes by.

    Attributes
    ----------
    samples, dropouts, excursions, saturated
        Samples in all; without a number; beyond the linear range; with the drive at its limit.
    extremes
        Largest and smallest position of every chunk, and how often two in a row reach it.
    powers
        Variance of position over every 4096 samples.
    drive_peak
        Largest drive.
    position_peaks
        Largest position of every chunk, in the units in which its range is stated.
    """

    samples: int = 0
    dropouts: int = 0
    excursions: int = 0
    saturated: int = 0
    extremes: list[tuple[float, int]] = field(default_factory=list)
    powers: list[float] = field(default_factory=list)
    drive_peak: float = 0.0
    position_peaks: list[float] = field(default_factory=list)

    @property
    def position_peak(self) -> float:
        """Largest position of a typical chunk; the start, which still settles, is no measure."""
        return float(np.median(self.position_peaks)) if self.position_peaks else 0.0


class Signals:
    """The signals of one record file.

    Parameters
    ----------
    file
        The file.
    options
        Its channels, bursts, limits and spindle.
    """

    def __init__(self, file: RecordFile, options: RecordSettings) -> None:
        self.file, self.options = file, options
        self.channels = Channels.of(options)
        self.fast_drive: FloatArray | None = None
        self._turn: FloatArray | None = None
        if options.sectors is not None:
            averager = TurnAverager(len(self.channels.outputs), options.sectors)
            for chunk in self._decoded(self._position_names(), CHUNK, Tally()):
                averager.add(chunk)
            self._turn = averager.mean() if averager.turns >= 2 else None

    @property
    def runout(self) -> float:
        """Largest repeatable runout of any position channel, peak to peak; 0 where not asked."""
        return 0.0 if self._turn is None else float(np.ptp(self._turn, axis=1).max())

    def chunks(self, *, size: int = CHUNK, tally: Tally | None = None) -> Iterator[FloatArray]:
        """Give (excitations, drives, positions) by samples; NaN where position or record fails."""
        names = [*self.channels.excitation, *self.channels.drive]
        counted = tally or Tally()
        start = 0
        for whole in self._decoded([*names, *self._position_names()], size, counted):
            outer = len(names)
            chunk = whole
            if self._turn is not None:
                chunk = np.concatenate(
                    [whole[:outer], without_turn(whole[outer:], self._turn, start)]
                )
            self._count(whole, counted)
            start += chunk.shape[1]
            yield chunk

    def _position_names(self) -> list[str]:
        if self.channels.from_bursts:
            return [str(self.options.in_phase), str(self.options.quadrature)]
        return self.channels.position

    def _decoded(self, names: list[str], size: int, tally: Tally) -> Iterator[FloatArray]:
        """Give chunks with bursts turned into position and positions out of range into NaN."""
        outer = len(names) - len(self._position_names())
        last = np.zeros(1)
        for whole in self._read(names, size):
            position = whole[outer:]
            tally.dropouts += int(np.count_nonzero(np.isnan(whole).any(axis=0)))
            if self.channels.from_bursts:
                decoded = decode_bursts(position[0], position[1])
                decoded[~np.isfinite(position).all(axis=0)] = np.nan
                followed = _follow(decoded, last)
                last = np.concatenate([last, followed[np.isfinite(followed)]])[-1:]
                position = followed[None]
            yield np.concatenate([whole[:outer], self._in_range(position, tally)])

    def _read(self, names: list[str], size: int) -> Iterator[FloatArray]:
        """Give chunks of channels; of drives that are faster, the first value per sample.

        `fast_drive` then holds all drive values of the chunk given last.
        """
        updates, drives = self.options.drive_updates, self.channels.drive
        if updates == 1 or not set(drives) <= set(names):
            yield from self.file.chunks(names, size=size)
            return
        slow = [name for name in names if name not in drives]
        at = names.index(drives[0])
        fast_chunks = self.file.chunks(drives, size=updates * size)
        for chunk, fast in zip(self.file.chunks(slow, size=size), fast_chunks, strict=False):
            if fast.shape[1] != updates * chunk.shape[1]:
                found = f"drive and position of lengths that are not {updates} to 1"
                expected = "drive_updates values of the drive per position sample"
                raise InputError(Problem(self.file.place, found, expected))
            self.fast_drive = fast
            yield np.concatenate([chunk[:at], fast[:, ::updates], chunk[at:]])

    def _in_range(self, position: FloatArray, tally: Tally) -> FloatArray:
        options = self.options
        finite = np.abs(position[np.isfinite(position)])
        tally.position_peaks.append(float(np.max(finite, initial=0.0)))
        limit = options.linear_range
        if self.channels.from_bursts:
            limit = _HALF_TRACK if limit is None else limit
        if limit is not None:
            outside = beyond_range(position, limit) & np.isfinite(position)
            tally.excursions += int(np.count_nonzero(outside.any(axis=0)))
            position = np.where(outside, np.nan, position)
        if self.channels.from_bursts and options.tracks_per_inch is not None:
            position = position * track_pitch(options.tracks_per_inch)
        return position

    def _count(self, chunk: FloatArray, tally: Tally) -> None:
        tally.samples += chunk.shape[1]
        drive = np.abs(chunk[self.channels.inputs])
        peak = np.max(drive, initial=0.0, where=np.isfinite(drive))
        tally.drive_peak = max(tally.drive_peak, float(peak))
        if self.options.drive_limit is not None:
            tally.saturated += int(
                np.count_nonzero((drive >= 0.999 * self.options.drive_limit).any(axis=0))
            )
        position = chunk[self.channels.outputs[0]]
        good = position[np.isfinite(position)]
        if good.size:
            for extreme in (good.min(), good.max()):
                here = good == extreme
                runs = int(np.count_nonzero(here[1:] & here[:-1]))
                tally.extremes.append((float(extreme), runs))
        for k in range(0, position.size - _BLOCK + 1, _BLOCK):
            block = position[k : k + _BLOCK]
            if np.isfinite(block).all():
                tally.powers.append(float(np.var(block)))


def _follow(decoded: FloatArray, last: FloatArray) -> FloatArray:
    """Follow decoded positions on from the last one known, over samples that are missing."""
    good = np.isfinite(decoded)
    followed = np.full(decoded.shape, np.nan)
    followed[good] = np.unwrap(np.concatenate([last, decoded[good]]), period=CYCLE)[1:]
    return followed
