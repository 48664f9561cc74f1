"""Time records from text, NetCDF-4/HDF5 and .npz files, channel by channel, in chunks.

A record is never held whole by the reader, so its length is not bounded by memory. Nothing is ever
unpickled. Samples that are no finite number stand for dropouts and are passed on as NaN.
"""

import warnings
import zipfile
from collections.abc import Iterator, Sequence
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Any

import h5py
import numpy as np
import pandas as pd

from identkit.errors import InputError, Problem
from identkit.methods.arrays import FloatArray
from identkit.readers.netcdf import SUFFIXES as HDF5_SUFFIXES

CHUNK = 1 << 17
_PERIOD = "sample_period"
_DELIMITERS = ("\t", ";", ",")
_EXPECTED = "a record in text, NetCDF-4/HDF5 or .npz"


@dataclass(frozen=True)
class RecordFile:
    """One file of channels.

    Attributes
    ----------
    path
        The file.
    place
        What to call it in messages.
    """

    path: Path
    place: str

    def chunks(self, names: Sequence[str], *, size: int = CHUNK) -> Iterator[FloatArray]:
        """Give (channels, samples) in order.

        Raises
        ------
        InputError
            If the file cannot be read, a channel is missing, is no row of numbers, or has another
            length than the first.
        """
        kind = self.path.suffix.lower()
        read = _npz if kind == ".npz" else _hdf5 if kind in HDF5_SUFFIXES else _text
        try:
            for chunk in read(self, names, size):
                yield np.where(np.isfinite(chunk), chunk, np.nan)
        except (OSError, zipfile.BadZipFile, EOFError, KeyError) as error:
            words = str(error).strip("'\"").splitlines() or [type(error).__name__]
            found = f"a file that cannot be read ({getattr(error, 'strerror', None) or words[0]})"
            raise InputError(Problem(self.place, found, _EXPECTED)) from None

    def samples(self, name: str) -> int:
        """Return the length of a channel; errors as in `chunks`."""
        return sum(chunk.shape[1] for chunk in self.chunks([name], size=1 << 20))

    def whole(self, names: Sequence[str]) -> FloatArray:
        """Return (channels, samples) of the whole record; errors as in `chunks`."""
        return np.concatenate(list(self.chunks(names)), axis=1)

    def check_period(self, sample_period: float) -> None:
        """Refuse a file that states another sample period than the study.

        Raises
        ------
        InputError
            If the two differ by more than one part in a million.
        """
        stated = _stated_period(self.path)
        if stated is not None and abs(stated / sample_period - 1.0) > 1e-6:
            found, expected = (
                f"the sample period {stated:g} s",
                f"{sample_period:g} s, as the study",
            )
            raise InputError(Problem(self.place, found, expected))


def _npz(file: RecordFile, names: Sequence[str], size: int) -> Iterator[FloatArray]:
    with ExitStack() as stack:
        archive = stack.enter_context(zipfile.ZipFile(file.path))
        there = [name.removesuffix(".npy") for name in archive.namelist()]
        _refuse_missing(file, names, there)
        members = [stack.enter_context(archive.open(f"{name}.npy")) for name in names]
        kinds = [_npy_header(file, name, m) for name, m in zip(names, members, strict=True)]
        _refuse_uneven(file, names, [length for _, length in kinds])
        left = kinds[0][1]
        while left > 0:
            count = min(size, left)
            yield np.stack(
                [_npy_values(m, kind, count) for m, (kind, _) in zip(members, kinds, strict=True)]
            )
            left -= count


def _npy_header(file: RecordFile, name: str, member: IO[bytes]) -> tuple[np.dtype[Any], int]:
    version = np.lib.format.read_magic(member)
    read = (
        np.lib.format.read_array_header_1_0
        if version == (1, 0)
        else np.lib.format.read_array_header_2_0
    )
    shape, _, kind = read(member)
    _refuse_no_row(file, name, shape, kind)
    return kind, int(shape[0])


def _npy_values(member: IO[bytes], kind: np.dtype[Any], count: int) -> FloatArray:
    data = member.read(count * kind.itemsize)
    if len(data) < count * kind.itemsize:
        raise EOFError("cut short")
    return np.frombuffer(data, kind).astype(float)


def _hdf5(file: RecordFile, names: Sequence[str], size: int) -> Iterator[FloatArray]:
    with h5py.File(file.path, "r") as store:
        there = [name for name, item in store.items() if isinstance(item, h5py.Dataset)]
        _refuse_missing(file, names, there)
        channels = [store[name] for name in names]
        for name, channel in zip(names, channels, strict=True):
            _refuse_no_row(file, name, channel.shape, channel.dtype)
        _refuse_uneven(file, names, [channel.shape[0] for channel in channels])
        for start in range(0, channels[0].shape[0], size):
            stop = start + size
            yield np.stack([channel[start:stop].astype(float) for channel in channels])


def _text(file: RecordFile, names: Sequence[str], size: int) -> Iterator[FloatArray]:
    header, delimiter = _text_header(file)
    _refuse_missing(file, names, header)
    try:
        parts = pd.read_csv(
            file.path,
            sep=delimiter or r"\s+",
            index_col=False,
            comment="#",
            skipinitialspace=True,
            dtype=dict.fromkeys(names, np.float64),
            chunksize=size,
            encoding="utf-8-sig",
        )
        while True:
            with warnings.catch_warnings():
                warnings.simplefilter("error", pd.errors.ParserWarning)
                part = next(parts, None)
            if part is None:
                return
            yield part[list(names)].to_numpy(dtype=float).T
    except (ValueError, pd.errors.ParserWarning) as error:
        raise InputError(_wrong_line(file, names, header, delimiter, error)) from None


def _text_header(file: RecordFile) -> tuple[list[str], str | None]:
    try:
        with file.path.open(encoding="utf-8-sig") as lines:
            header = next((line for line in lines if line.strip() and line[0] != "#"), "")
    except UnicodeDecodeError:
        raise InputError(Problem(file.place, "the wrong encoding", "text in UTF-8")) from None
    delimiter = next((mark for mark in _DELIMITERS if mark in header), None)
    names = [name.strip().strip('"') for name in header.split(delimiter)]
    if not header or all(_is_number(name) for name in names):
        found = "an empty file" if not header else "numbers in the first row"
        raise InputError(Problem(file.place, found, "a header row with channel names"))
    return names, delimiter


def _wrong_line(
    file: RecordFile,
    names: Sequence[str],
    header: list[str],
    delimiter: str | None,
    error: Exception,
) -> Problem:
    """Find the first line that is wrong."""
    wanted = {name: header.index(name) for name in names}
    with file.path.open(encoding="utf-8-sig", errors="replace") as lines:
        kept = ((k, line) for k, line in enumerate(lines, 1) if line.strip() and line[0] != "#")
        next(kept)
        for number, line in kept:
            values = [value.strip() for value in line.split("#")[0].split(delimiter)]
            if len(values) > len(header):
                expected = f"{len(header)}, as the header has"
                return Problem(f"{file.place}, line {number}", f"{len(values)} values", expected)
            for name, column in wanted.items():
                value = values[column] if column < len(values) else ""
                if value and not _is_number(value):
                    where = f'{file.place}, line {number}, column "{name}"'
                    return Problem(where, f'"{value}"', "a number")
    return Problem(file.place, f"a file that cannot be read ({error})", "rows of numbers")


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def _refuse_missing(file: RecordFile, names: Sequence[str], there: Sequence[str]) -> None:
    missing = [name for name in names if name not in there]
    if missing:
        shown = ", ".join(there[:12]) or "none"
        found = f"no channel {', '.join(missing)}"
        raise InputError(Problem(file.place, found, f"one of the channels it has ({shown})"))


def _refuse_no_row(
    file: RecordFile, name: str, shape: tuple[int, ...], kind: np.dtype[Any]
) -> None:
    place = f"{file.place}, channel {name}"
    if kind.kind not in "fiub":
        raise InputError(Problem(place, f"values of type {kind}", "real numbers"))
    if len(shape) != 1 or shape[0] == 0:
        raise InputError(Problem(place, f"an array of shape {shape}", "one row of samples"))


def _refuse_uneven(file: RecordFile, names: Sequence[str], lengths: Sequence[int]) -> None:
    for name, length in zip(names, lengths, strict=True):
        if length != lengths[0]:
            place = f"{file.place}, channel {name}"
            expected = f"{lengths[0]}, as channel {names[0]} has"
            raise InputError(Problem(place, f"{length} samples", expected))


def _stated_period(path: Path) -> float | None:
    """Return the sample period a file states itself, or None."""
    try:
        if path.suffix.lower() == ".npz":
            with np.load(path, allow_pickle=False) as archive:
                return float(archive[_PERIOD]) if _PERIOD in archive.files else None
        if path.suffix.lower() in HDF5_SUFFIXES:
            with h5py.File(path, "r") as store:
                found = store.attrs.get(_PERIOD, store.get(_PERIOD))
                return None if found is None else float(np.asarray(found).reshape(-1)[0])
    except (OSError, ValueError, TypeError, zipfile.BadZipFile, IndexError):
        return None  # what is wrong with the file is said when its channels are read
    return None
