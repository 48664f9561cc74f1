"""Stage drift, first part: measurements of one unit become one point, at one temperature.

Heads and temperatures of one unit are not independent, so they make one point: corrected to the
reference temperature with the slope of the population, taken against the mean of its head, averaged
over temperatures within heads, then over heads. What is known of the point's error (variance of the
fits, error of the slope, heads and temperatures that were not measured) travels with it.
"""

import json
from dataclasses import dataclass
from datetime import datetime

import numpy as np
import xarray as xr

from identkit.methods.arrays import BoolArray, FloatArray, IntArray

REACH = "reach"
VISIT_DAYS = 7.0
LOGARITHMIC = ("modal_frequency", "damping_ratio")
_LEAST_HEAD_SHARE = 0.25  # of the root mean square over heads; a smaller head is scaled by this
_CONDITION = ("repeat", "fixture")


@dataclass(frozen=True, eq=False)
class _Corrected:
    """(measurements, modes, quantities) at the reference, on the working scale."""

    deviation: FloatArray
    fit_variance: FloatArray


def unit_points(measurements: xr.Dataset, correction: xr.Dataset) -> xr.Dataset:
    """Return one point per visit of a unit to the bench, in the order of measurement.

    A visit ends when the same head, temperature and position (and `repeat` and `fixture`) come
    again, or after seven days. Measurements that their set leaves out make no point.

    Parameters
    ----------
    measurements
        Dims measurement, mode, quantity: value, standard_error; reach and labels.
    correction
        Dims mode, quantity, head: value, slopes, deviations, head_value; attribute
        reference_temperature.

    Returns
    -------
    Dataset
        Along `visit`: unit, lot, measured_at, time (days), visit_number (1 for a unit's first),
        responses, largest_reach, reach_frequency, in_set (whether the set was made from it: then
        its reach is no sample of what comes, and the deviation of reach is missing), addition.
        Along `visit, series`: deviation (log for frequency, damping ratio and reach; relative for
        residues), error_variance (fits and slope), sampling_variance (heads and temperatures not
        measured). Along `series`: mode, quantity, reference_value, unit_variance,
        residual_variance. Attribute ``ordered_by``: "measured_at", or "entry" where a date is
        missing.
    """
    kept = np.flatnonzero(measurements["excluded"].values == "")
    measurements = measurements.isel(measurement=kept)
    days = _days(measurements["measured_at"].values)
    dated = bool(np.isfinite(days).all())
    order = np.argsort(days, kind="stable") if dated else np.arange(len(days))
    measurements, days = measurements.isel(measurement=order), days[order]
    corrected = _correct(measurements, correction)
    visits = _visits(measurements, days if dated else np.zeros(len(days)))
    rows = [np.asarray(visit, dtype=np.int64) for _, visit in visits]
    points = xr.merge(
        [
            _labels(measurements, days, dated, visits),
            _reach(measurements, rows),
            _series(measurements, correction, corrected, rows),
        ],
        combine_attrs="drop",
    )
    points.attrs["ordered_by"] = "measured_at" if dated else "entry"
    return points


def _days(dates: FloatArray) -> FloatArray:
    """Return days since 1970 of ISO dates; NaN where a date is missing or none."""
    days = np.full(len(dates), np.nan)
    for at, date in enumerate(dates.astype(str)):
        try:
            moment = datetime.fromisoformat(str(date))
        except ValueError:
            continue
        days[at] = (moment.replace(tzinfo=None) - datetime(1970, 1, 1)).total_seconds() / 86400.0
    return days


def _correct(measurements: xr.Dataset, correction: xr.Dataset) -> _Corrected:
    value = measurements["value"].transpose("measurement", "mode", "quantity").values
    error = measurements["standard_error"].transpose("measurement", "mode", "quantity").values
    known = np.where(np.isfinite(error), error, 0.0)
    typical = _typical(measurements, correction)
    logarithmic = np.isin(correction["quantity"].values, LOGARITHMIC)
    positive = np.where(value > 0.0, value, np.nan)
    deviation = np.where(logarithmic, np.log(positive / typical), value / typical - 1.0)
    relative = np.where(logarithmic, known / positive, known / typical)
    for name in ("temperature", "position"):
        step = _step(measurements, correction, name)
        slope = np.nan_to_num(correction[f"{name}_slope"].values)
        deviation = deviation - step[:, None, None] * slope
    return _Corrected(deviation, relative**2)


def _step(measurements: xr.Dataset, correction: xr.Dataset, name: str) -> FloatArray:
    """Return the difference from the reference; 0 where it is not known."""
    reference = float(correction.attrs.get(f"reference_{name}", np.nan))
    return np.nan_to_num(measurements[name].values.astype(float) - reference)


def _typical(measurements: xr.Dataset, correction: xr.Dataset) -> FloatArray:
    """Return (measurements, modes, quantities) the value usual for each head; signed."""
    by_head = correction["head_value"].transpose("mode", "quantity", "head").values
    names = correction["head"].values.astype(str).tolist()
    overall = correction["value"].values
    whole = np.concatenate([by_head, overall[:, :, None]], axis=2)
    heads = measurements["head"].values.astype(str)
    place = np.array([names.index(h) if h in names else len(names) for h in heads], dtype=int)
    typical = np.moveaxis(whole[:, :, place], 2, 0)
    typical = np.where(np.isfinite(typical), typical, overall)
    size = np.sqrt(np.nanmean(whole**2, axis=2))
    least = np.where(np.isin(correction["quantity"].values, LOGARITHMIC), 0.0, _LEAST_HEAD_SHARE)
    sign = np.where(typical < 0.0, -1.0, 1.0)
    return np.asarray(sign * np.maximum(np.abs(typical), least * size))


def _visits(measurements: xr.Dataset, days: FloatArray) -> list[tuple[int, list[int]]]:
    """Return (number of the visit, its measurements), in the order of their first measurement."""
    units = measurements["unit"].values.astype(str)
    labels = [json.loads(text) for text in measurements["labels"].values]
    usable = np.isfinite(measurements["value"].values).any(axis=(1, 2))
    current: dict[str, tuple[int, list[int], set[tuple[str, ...]]]] = {}
    visits: list[tuple[int, list[int]]] = []
    for at in np.flatnonzero(usable):
        condition = (
            str(measurements["head"].values[at]),
            str(measurements["temperature"].values[at]),
            str(measurements["position"].values[at]),
            *(str(labels[at].get(name, "")) for name in _CONDITION),
        )
        number, rows, seen = current.get(str(units[at]), (0, [], set()))
        if not rows or condition in seen or days[at] - days[rows[0]] > VISIT_DAYS:
            number, rows, seen = number + 1, [], set()
            visits.append((number, rows))
        rows.append(int(at))
        seen.add(condition)
        current[str(units[at])] = (number, rows, seen)
    return visits


def _labels(
    measurements: xr.Dataset, days: FloatArray, dated: bool, visits: list[tuple[int, list[int]]]
) -> xr.Dataset:
    first = np.array([rows[0] for _, rows in visits], dtype=int)
    coords = {
        name: ("visit", measurements[name].values[first].astype(str))
        for name in ("unit", "lot", "measured_at")
    }
    additions = measurements["addition"].values
    time = days[first] if dated else np.arange(len(first), dtype=float)
    return xr.Dataset(
        {
            "visit_number": ("visit", np.array([number for number, _ in visits], dtype=int)),
            "responses": ("visit", np.array([len(rows) for _, rows in visits], dtype=int)),
            "time": ("visit", time),
            "addition": ("visit", np.array([additions[rows].max() for _, rows in visits], int)),
        },
        coords=coords,
    )


def _reach(measurements: xr.Dataset, rows: list[IntArray]) -> xr.Dataset:
    reach = measurements["reach"].values
    hertz = measurements["reach_frequency"].values
    largest = np.full(len(rows), np.nan)
    where = np.full(len(rows), np.nan)
    in_set = np.array([measurements["in_set"].values[m].any() for m in rows], dtype=bool)
    for at, members in enumerate(rows):
        if np.isfinite(reach[members]).any() or np.isinf(reach[members]).any():
            top = members[int(np.nanargmax(reach[members]))]
            largest[at], where[at] = reach[top], hertz[top]
    return xr.Dataset(
        {
            "largest_reach": ("visit", largest),
            "reach_frequency": ("visit", where),
            "in_set": ("visit", in_set),
        }
    )


def _series(
    measurements: xr.Dataset, correction: xr.Dataset, corrected: _Corrected, rows: list[IntArray]
) -> xr.Dataset:
    heads = measurements["head"].values.astype(str)
    steps = [_step(measurements, correction, name) for name in ("temperature", "position")]
    slope_errors = [
        np.nan_to_num(correction[f"{name}_slope_standard_error"].values)
        for name in ("temperature", "position")
    ]
    within = np.nan_to_num(correction["head_deviation"].values) ** 2
    residual = np.nan_to_num(correction["residual_deviation"].values) ** 2
    shape = (len(rows), *corrected.deviation.shape[1:])
    deviation, error, sampling = (np.full(shape, np.nan) for _ in range(3))
    usual = [np.array([float(step[m].mean()) for m in rows]) for step in steps]
    for at, members in enumerate(rows):
        share, count, seen = _shares(corrected.deviation[members], heads[members])
        deviation[at] = np.where(
            count > 0, np.nansum(share * corrected.deviation[members], axis=0), np.nan
        )
        error[at] = np.nansum(share**2 * corrected.fit_variance[members], axis=0)
        for mean, slope_error in zip(usual, slope_errors, strict=True):
            error[at] += ((mean[at] - np.median(mean)) * slope_error) ** 2
        sampling[at] = within / np.maximum(seen, 1) + residual / np.maximum(count, 1)
    modes, quantities = correction["mode"].values.astype(str), correction["quantity"].values
    reach = _reach(measurements, rows)
    fresh = reach["largest_reach"].where(~reach["in_set"])
    log_reach = np.log(fresh.where(fresh < np.inf).values)[:, None]
    zero = np.zeros_like(log_reach)
    flat = [a.reshape(len(rows), -1) for a in (deviation, error, sampling)]
    joined = [
        np.concatenate([a, b], axis=1) for a, b in zip(flat, (log_reach, zero, zero), strict=True)
    ]
    dims = ("visit", "series")
    names = [f"{mode} {quantity}" for mode in modes for quantity in quantities.astype(str)]
    unit_variance = np.nan_to_num(correction["unit_deviation"].values.ravel()) ** 2
    return xr.Dataset(
        {
            "deviation": (dims, joined[0]),
            "error_variance": (dims, joined[1]),
            "sampling_variance": (dims, joined[2]),
            "reference_value": ("series", np.append(correction["value"].values.ravel(), 1.0)),
            "unit_variance": ("series", np.append(unit_variance, np.nan)),
            "residual_variance": ("series", np.append(residual.ravel(), np.nan)),
        },
        coords={
            "series": [*names, REACH],
            "mode": ("series", [*np.repeat(modes, len(quantities)), ""]),
            "quantity": ("series", [*np.tile(quantities.astype(str), len(modes)), REACH]),
        },
    )


def _shares(values: FloatArray, heads: FloatArray) -> tuple[FloatArray, IntArray, IntArray]:
    """Return each measurement's share of the mean over heads, and how many there are of each."""
    there: BoolArray = np.isfinite(values)
    share = np.zeros(values.shape)
    seen = np.zeros(values.shape[1:], dtype=np.int64)
    for head in np.unique(heads):
        mine = there & (heads == head)[:, None, None]
        count = mine.sum(axis=0)
        share += mine / np.maximum(count, 1)
        seen += count > 0
    return share / np.maximum(seen, 1), there.sum(axis=0), seen
