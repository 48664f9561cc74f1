"""Stage drift, third part: what the charts say, in the words of those who must act on it."""

from dataclasses import dataclass

import numpy as np
import xarray as xr

from identkit.methods.arrays import FloatArray
from identkit.methods.change_point import mean_segments
from identkit.methods.trend_crossing import TrendCrossing, trend_crossing
from identkit.stages.drift_charts import CHARTS, NEVER
from identkit.stages.drift_points import LOGARITHMIC, REACH

ROUNDING = 1e-6
_BELIEVED = 0.01
_LEAST_FOR_TREND = 6
ONE_IN_TWENTY = 1.645


@dataclass(frozen=True)
class Signal:
    """One series that moved.

    Attributes
    ----------
    series, mode, quantity
        Which.
    charts
        Which charts signalled.
    seen_at, since
        Index along `visit` of the first signal, and of the first point after the change.
    until
        Index of the first point that is back, -1 where it is not.
    candidates
        (first, last) index of the points that may be the first after the change, 95 %.
    lot, lot_probability
        Lot that most likely holds the first changed unit; empty without lots.
    before, after
        Natural units at the reference temperature.
    deviations
        The change in standard deviations of a point.
    deviations_standard_error
        Standard error of that, by the scatter of the points.
    """

    series: str
    mode: str
    quantity: str
    charts: tuple[str, ...]
    seen_at: int
    since: int
    until: int
    candidates: tuple[int, int]
    lot: str
    lot_probability: float
    before: float
    after: float
    deviations: float
    deviations_standard_error: float


@dataclass(frozen=True)
class Exit:
    """When reach is extrapolated to 1.

    Attributes
    ----------
    mean, one_in_twenty
        Crossing of the mean of log reach, and of what one unit in twenty exceeds.
    points
        Units it rests on.
    believed
        Whether the trend rises more than chance explains.
    dated
        Whether time is in days; else in units made.
    """

    mean: TrendCrossing
    one_in_twenty: TrendCrossing
    points: int
    believed: bool
    dated: bool


def signals(charted: xr.Dataset) -> list[Signal]:
    """Return every series that signalled, the largest change first.

    Parameters
    ----------
    charted
        As made by `chart_new_units` or `chart_measured_again`.
    """
    found = [
        _signal(charted, k)
        for k in range(charted.sizes["series"])
        if charted["first_signal"].values[k] != NEVER
    ]
    return sorted(found, key=lambda one: -abs(one.deviations))


def joint_first(charted: xr.Dataset) -> int:
    """Return the first visit at which the multivariate chart signals, -1 for none."""
    if "joint_signal" not in charted:
        return NEVER
    hits = np.flatnonzero(charted["joint_signal"].values)
    return int(hits[0]) if hits.size else NEVER


def not_held(points: xr.Dataset) -> list[int]:
    """Return the visits with a response outside the released set."""
    reach = points["largest_reach"].values
    outside = np.flatnonzero(reach > 1.0 + ROUNDING)
    return [int(k) for k in outside[np.argsort(-reach[outside])]]


def units_apart(charted: xr.Dataset) -> list[tuple[int, list[int]]]:
    """Return visits that single out of their series, with those series, the farthest first."""
    score = charted["score"].values
    beyond = np.abs(score) > charted.attrs["individuals_limit"]
    rows = [
        (int(v), np.flatnonzero(beyond[v]).tolist()) for v in np.flatnonzero(beyond.any(axis=1))
    ]
    return sorted(rows, key=lambda row: -float(np.max(np.abs(score[row[0]][row[1]]))))


def lots_that_differ(charted: xr.Dataset) -> list[tuple[str, str, float]]:
    """Return (lot, series, chance) where a lot of the baseline stands apart from its rest.

    Student's t of the lot against the other baseline points; the chance is multiplied by the
    number of lots and series compared (Bonferroni).
    """
    from scipy.stats import ttest_ind

    lots = charted["lot"].values.astype(str)
    values = charted["deviation"].values
    inside = charted["in_baseline"].values & np.isfinite(values)
    series = charted["series"].values.astype(str)
    found = []
    for k, name in enumerate(series):
        names = np.unique(lots[inside[:, k]])
        # With two lots there is one comparison, and no telling which of them is the odd one.
        for lot in names if len(names) > 2 else names[1:]:
            mine, rest = (values[inside[:, k] & side, k] for side in (lots == lot, lots != lot))
            if len(mine) > 1 and len(rest) > 1 and np.ptp(rest) > 0.0:
                chance = float(ttest_ind(mine, rest).pvalue) * len(series) * len(names)
                if chance < _BELIEVED:
                    found.append((str(lot), str(name), chance))
    return sorted(found, key=lambda one: one[2])


def time_to_exit(charted: xr.Dataset, confidence: float = 0.95) -> Exit | None:
    """Extrapolate the trend of log reach over time to a reach of 1.

    Units from which the set was made do not count. None for fewer than six units or one date.
    """
    at = int(np.flatnonzero(charted["quantity"].values == REACH)[0])
    values = charted["deviation"].values[:, at]
    used = np.isfinite(values)
    if used.sum() < _LEAST_FOR_TREND:
        return None
    time = charted["time"].values[used]
    memory = float(charted["autocorrelation"].values[at])
    modelled = bool(charted["autocorrelation_modelled"].values[at])
    inflation = max(1.0, (1.0 + memory) / (1.0 - memory)) if modelled else 1.0
    crossings = [
        trend_crossing(
            time, values[used], 0.0, confidence=confidence, margin=margin, inflation=inflation
        )
        for margin in (0.0, ONE_IN_TWENTY)
    ]
    mean, outer = crossings
    if mean is None or outer is None:
        return None
    dated = charted.attrs["ordered_by"] == "measured_at"
    return Exit(mean, outer, int(used.sum()), mean.rising_chance < 0.025, dated)


def natural(charted: xr.Dataset, series: int, deviation: FloatArray | float) -> FloatArray:
    """Return deviations on the working scale of a series in its natural unit."""
    reference = float(charted["reference_value"].values[series])
    logarithmic = str(charted["quantity"].values[series]) in (*LOGARITHMIC, REACH)
    scale = np.exp(deviation) if logarithmic else 1.0 + np.asarray(deviation)
    return np.asarray(reference * scale, dtype=float)


def _signal(charted: xr.Dataset, k: int) -> Signal:
    one = charted.isel(series=k)
    values = one["deviation"].values
    since, seen = int(one["change_at"]), int(one["first_signal"])
    since = seen if since == NEVER else since
    until = _until(one, since)
    stop = until if until != NEVER else len(values)
    shifted = values[since:stop][np.isfinite(values[since:stop])]
    mean, deviation = float(one["reference_mean"]), float(one["point_deviation"])
    if not np.isfinite(mean):  # measured again: against no change, in known standard errors
        mean, deviation = 0.0, float(np.nanmedian(np.abs(values / one["score"].values)))
    points = int(one["in_reference"].values.sum())
    error = np.sqrt(1.0 / max(len(shifted), 1) + (1.0 / points if points else 0.0))
    charts = tuple(name for name in CHARTS if one[f"{name}_signal"].values.any())
    first, last, lot, share = _place(charted, one, since)
    return Signal(
        str(one["series"].values),
        str(one["mode"].values),
        str(one["quantity"].values),
        charts,
        seen,
        since,
        until,
        (first, last),
        lot,
        share,
        float(natural(charted, k, mean)),
        float(natural(charted, k, float(shifted.mean()))),
        (float(shifted.mean()) - mean) / deviation,
        float(error),
    )


def _until(one: xr.Dataset, since: int) -> int:
    """Return where the series came back to within a standard deviation, -1 where it did not."""
    values = one["deviation"].values
    rows = np.flatnonzero(np.isfinite(values))
    rows = rows[rows >= since]
    segments = mean_segments(values[rows], _BELIEVED)
    if len(segments) < 2:
        return NEVER
    mean, deviation = float(one["reference_mean"]), float(one["point_deviation"])
    for start, stop in segments[1:]:
        if abs(float(values[rows[start:stop]].mean()) - mean) < deviation and stop == len(rows):
            return int(rows[start])
    return NEVER


def _place(charted: xr.Dataset, one: xr.Dataset, since: int) -> tuple[int, int, str, float]:
    """Return the range that holds the change with 95 % and the most likely lot."""
    probability = one["change_probability"].values
    if probability.sum() <= 0.0:
        return since, since, str(charted["lot"].values[since]), float("nan")
    order = np.argsort(probability)[::-1]
    enough = order[: int(np.searchsorted(np.cumsum(probability[order]), 0.95)) + 1]
    lots = charted["lot"].values.astype(str)
    shares = {str(lot): float(probability[lots == lot].sum()) for lot in np.unique(lots)}
    lot = max(shares, key=lambda name: shares[name])
    return int(enough.min()), int(enough.max()), lot, shares[lot]
