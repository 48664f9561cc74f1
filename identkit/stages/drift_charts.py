"""Stage drift, second part: every series of unit points on its charts.

Points after the baseline are judged by those before them (`methods.recursive_residuals`), so limits
for known parameters hold whatever the length of the baseline; all limits come from one in-control
run length of the whole family (`methods.family_run_length`).
"""

from dataclasses import dataclass, replace

import numpy as np
import xarray as xr

from identkit.methods.arrays import BoolArray, FloatArray, IntArray
from identkit.methods.baseline_cleaning import clean_baseline
from identkit.methods.change_point import ChangePoint, change_point
from identkit.methods.cusum_chart import cusum
from identkit.methods.ewma_chart import ewma, ewma_deviation
from identkit.methods.family_run_length import ChartFamily, FamilyLimits, family_limits
from identkit.methods.lag_one_autocorrelation import Autocorrelation, lag_one_autocorrelation
from identkit.methods.multivariate_ewma_chart import multivariate_ewma
from identkit.methods.recursive_residuals import (
    baseline_scores,
    joint_scores,
    recursive_scores,
)
from identkit.methods.running_group_mean import running_group_scores
from identkit.stages.drift_points import REACH

NEVER = -1
MEMORY_CHANCE = 0.01  # below it points are taken to remember the one before
_AFTER_SIGNAL = 5  # points after a signal that help to place the change
CHARTS = ("individuals", "lot", "ewma", "cusum")


@dataclass(frozen=True)
class ChartRules:
    """How to chart.

    Attributes
    ----------
    run_length
        Points; in-control average run length of all charts together, at least.
    baseline_units
        Points of every series that make its baseline.
    """

    run_length: float = 500.0
    baseline_units: int = 12


@dataclass(frozen=True, eq=False)
class _Series:
    """One series: what goes in, and what the charts make of it."""

    values: FloatArray
    relative_variance: FloatArray
    baseline: BoolArray
    members: BoolArray
    memory: Autocorrelation
    lots: IntArray
    modelled: bool = False
    scores: FloatArray | None = None
    first: int = NEVER
    change: ChangePoint | None = None
    change_at: int = NEVER
    watched: BoolArray | None = None
    lot_scores: FloatArray | None = None


def chart_new_units(points: xr.Dataset, rules: ChartRules) -> xr.Dataset:
    """Chart the first visit of every unit.

    Parameters
    ----------
    points
        As made by `unit_points`; later visits of a unit are left to `chart_measured_again`.
    rules
        Run length and baseline.

    Returns
    -------
    Dataset
        The points, and along `visit, series`: score and lot_score (standard normal in control),
        ewma, cusum_up, cusum_down (since the baseline), in_baseline, in_reference, and the flags
        individuals_signal, lot_signal, ewma_signal, cusum_signal. Along `visit`: joint_statistic,
        joint_signal. Along `series`: first_signal and change_at (indices along `visit`, -1 for
        none), change_chance, reference_mean, point_deviation, shifted_mean, shifted_until,
        autocorrelation, autocorrelation_chance, autocorrelation_modelled. Along `visit, series`:
        change_probability. Limits as attributes.
    """
    points = points.isel(visit=np.flatnonzero(points["visit_number"].values == 1))
    names = points["series"].values.astype(str)
    frequencies = np.flatnonzero(points["quantity"].values == "modal_frequency")
    family = ChartFamily(len(names), len(frequencies) if len(frequencies) > 1 else 0)
    limits = family_limits(family, rules.run_length)
    variances, lots = _relative_variances(points), _lots(points)
    all_series = [
        _charted(points["deviation"].values[:, k], variances[:, k], lots, rules, limits, family)
        for k in range(len(names))
    ]
    joint = _joint(all_series, frequencies, limits, family)
    result = xr.merge([points, _columns(all_series, limits, family), joint], combine_attrs="drop")
    result.attrs = points.attrs | _attributes(limits, family, rules)
    return result


def chart_measured_again(points: xr.Dataset, rules: ChartRules) -> xr.Dataset:
    """Chart what changed in units between their first visit and later ones.

    The difference is judged against its known error: fits, slope, and the scatter within units.
    These points have a family of charts of their own, with the same run length.

    Returns
    -------
    Dataset
        Along `visit` (later visits only): as `chart_new_units`, the deviation being the
        difference from the unit's first visit.
    """
    units = points["unit"].values.astype(str)
    number = points["visit_number"].values
    first = {str(units[at]): int(at) for at in np.flatnonzero(number == 1)}
    later = np.flatnonzero(number > 1)
    before = np.array([first[str(units[at])] for at in later], dtype=int)
    kept = np.flatnonzero(points["quantity"].values != REACH)
    part = points.isel(visit=later, series=kept)
    start = points.isel(visit=before, series=kept)
    difference = part["deviation"].values - start["deviation"].values
    scatter = (
        part["residual_variance"].values
        * (1.0 / part["responses"].values + 1.0 / start["responses"].values)[:, None]
    )
    variance = part["error_variance"].values + start["error_variance"].values + scatter
    family = ChartFamily(len(kept))
    limits = family_limits(family, rules.run_length)
    scores = difference / np.sqrt(np.where(variance > 0.0, variance, np.nan))
    nobody = np.zeros(len(later), dtype=bool)
    none = Autocorrelation(float("nan"), 1.0, 0)
    no_lots = np.full(len(later), -1)
    blank = np.full(len(later), np.nan)
    all_series = []
    for k in range(len(kept)):
        one = _Series(difference[:, k], variance[:, k], nobody, nobody, none, no_lots)
        one = replace(one, scores=scores[:, k], lot_scores=blank)
        one = replace(one, watched=np.isfinite(scores[:, k]))
        all_series.append(_with_first(one, limits, family))
    part = part.assign(deviation=(("visit", "series"), difference))
    result = xr.merge([part, _columns(all_series, limits, family)], combine_attrs="drop")
    result.attrs = points.attrs | _attributes(limits, family, rules)
    return result


def _relative_variances(points: xr.Dataset) -> FloatArray:
    """Return the ratio of each point's variance to the usual one of its series."""
    spread = np.nan_to_num(points["unit_variance"].values)
    known = points["error_variance"].values + points["sampling_variance"].values
    total = spread + np.nan_to_num(known)
    usual = np.median(total, axis=0) if len(total) else np.ones(total.shape[1])
    return np.asarray(np.where(usual > 0.0, total / np.where(usual > 0.0, usual, 1.0), 1.0))


def _lots(points: xr.Dataset) -> IntArray:
    """Return the number of every point's lot; -1 without one."""
    names, number = np.unique(points["lot"].values.astype(str), return_inverse=True)
    return np.asarray(np.where(names[number] == "", -1, number), dtype=np.int64)


def _charted(
    values: FloatArray,
    variance: FloatArray,
    lots: IntArray,
    rules: ChartRules,
    limits: FamilyLimits,
    family: ChartFamily,
) -> _Series:
    """Chart one series; again with memory modelled where the points before a change show it."""
    known = np.isfinite(values)
    baseline = known & (np.cumsum(known) <= rules.baseline_units)
    members = np.zeros(len(values), dtype=bool)
    rows = np.flatnonzero(baseline)
    members[rows] = clean_baseline(values[rows], variance[rows])
    memory = lag_one_autocorrelation(np.where(members, values, np.nan))
    one = _Series(values, variance, baseline, members, memory, lots)
    one = _judged(replace(one, modelled=memory.chance < MEMORY_CHANCE), limits, family)
    if one.modelled or one.first == NEVER:
        return one
    before = np.arange(len(values)) < one.change_at
    memory = lag_one_autocorrelation(np.where(before & (members | ~baseline), values, np.nan))
    one = replace(one, memory=memory)
    if memory.chance >= MEMORY_CHANCE:
        return one
    return _judged(replace(one, modelled=True), limits, family)


def _judged(one: _Series, limits: FamilyLimits, family: ChartFamily) -> _Series:
    """Score every point, and once more with a reference that ends where the change begins."""
    everyone = np.ones(len(one.values), dtype=bool)
    one = _with_first(_scored(one, everyone), limits, family)
    if one.first == NEVER:
        return one
    one = _with_change(one)
    learns = np.arange(len(one.values)) < one.change_at
    return _scored(one, learns)


def _scored(one: _Series, learns: BoolArray) -> _Series:
    columns = [np.ones(len(one.values))]
    if one.modelled:
        columns.append(_previous(one.values))
    regressors = np.column_stack(columns)
    arguments = (one.values, regressors, one.relative_variance)
    later = recursive_scores(*arguments, one.members, learns)
    inside = baseline_scores(*arguments, one.members)
    scores = np.where(one.baseline, inside, later)
    watched = ~one.baseline & np.isfinite(scores)
    by_lot = running_group_scores(
        one.values,
        one.relative_variance,
        one.lots,
        one.members | (~one.baseline & learns),
        watched,
        max(1.0, one.memory.inflation) if one.modelled else 1.0,
    )
    return replace(one, scores=scores, watched=watched, lot_scores=by_lot)


def _previous(values: FloatArray) -> FloatArray:
    """Return the last finite value before each point."""
    before, last = np.full(len(values), np.nan), np.nan
    for at, value in enumerate(values):
        before[at] = last
        last = value if np.isfinite(value) else last
    return before


def _statistics(one: _Series, family: ChartFamily) -> tuple[FloatArray, FloatArray, FloatArray]:
    assert one.scores is not None
    assert one.watched is not None
    watched = np.where(one.watched, one.scores, np.nan)
    moving = ewma(watched, family.ewma_weight) / ewma_deviation(family.ewma_weight)
    return moving, *cusum(watched, family.cusum_reference)


def _signals(one: _Series, limits: FamilyLimits, family: ChartFamily) -> dict[str, BoolArray]:
    moving, up, down = _statistics(one, family)
    assert one.scores is not None
    assert one.lot_scores is not None
    assert one.watched is not None
    flags = {
        "individuals": np.abs(one.scores) > limits.individuals,
        "lot": np.abs(one.lot_scores) > limits.individuals,
        "ewma": np.abs(moving) > limits.ewma,
        "cusum": np.maximum(up, down) > limits.cusum,
    }
    return {name: np.asarray(flag & one.watched) for name, flag in flags.items()}


def _with_first(one: _Series, limits: FamilyLimits, family: ChartFamily) -> _Series:
    any_chart = np.any(list(_signals(one, limits, family).values()), axis=0)
    hits = np.flatnonzero(any_chart)
    return replace(one, first=int(hits[0]) if hits.size else NEVER)


def _with_change(one: _Series) -> _Series:
    """Place the change by the points up to the signal and those after it that are like it."""
    upto = np.arange(len(one.values)) <= _last_alike(one)
    used = np.flatnonzero(upto & np.isfinite(one.values) & (one.members | ~one.baseline))
    scaled = one.values[used] / np.sqrt(one.relative_variance[used])
    inflation = one.memory.inflation if one.modelled else 1.0
    found = change_point(scaled, max(1.0, inflation))
    baseline_end = int(np.flatnonzero(one.baseline)[-1])
    if found is None:
        return replace(one, change_at=one.first)
    probability = np.zeros(len(one.values))
    probability[used] = found.probability
    at = int(np.clip(used[found.first], baseline_end + 1, one.first))
    return replace(one, change=replace(found, probability=probability), change_at=at)


def _last_alike(one: _Series) -> int:
    """Return the last of a few points from the signal on that stand off to the same side."""
    assert one.scores is not None
    last, side = one.first, np.sign(one.scores[one.first])
    for at in range(one.first + 1, min(one.first + 1 + _AFTER_SIGNAL, len(one.values))):
        if np.isfinite(one.scores[at]):
            if side * one.scores[at] < 1.0:
                break
            last = at
    return last


def _joint(
    all_series: list[_Series], members: IntArray, limits: FamilyLimits, family: ChartFamily
) -> xr.Dataset:
    """Return the multivariate EWMA of the modal frequencies."""
    count = len(all_series[0].values)
    blank = {
        "joint_statistic": ("visit", np.full(count, np.nan)),
        "joint_signal": ("visit", np.zeros(count, dtype=bool)),
    }
    if not family.joint_series:
        return xr.Dataset(blank)
    chosen = [all_series[k] for k in members]
    values = np.stack([one.values for one in chosen], axis=1)
    variance = np.stack([one.relative_variance for one in chosen], axis=1)
    whole = np.isfinite(values).all(axis=1)
    baseline = whole & np.all([one.members for one in chosen], axis=0)
    judged = whole & ~np.any([one.baseline for one in chosen], axis=0)
    stops = [one.change_at for one in chosen if one.change_at != NEVER]
    learns = np.arange(count) < min(stops, default=count)
    scores = joint_scores(values, variance, baseline, learns)
    scores[~judged] = np.nan
    statistic = multivariate_ewma(scores, family.joint_weight)
    there = np.isfinite(scores).all(axis=1)
    return xr.Dataset(
        {
            "joint_statistic": ("visit", np.where(there, statistic, np.nan)),
            "joint_signal": ("visit", there & (statistic > limits.joint)),
        }
    )


def _columns(all_series: list[_Series], limits: FamilyLimits, family: ChartFamily) -> xr.Dataset:
    dims = ("visit", "series")
    columns: dict[str, list[FloatArray | BoolArray]] = {}
    numbers: dict[str, list[float]] = {}
    for one in all_series:
        moving, up, down = _statistics(one, family)
        flags = _signals(one, limits, family)
        assert one.scores is not None
        assert one.lot_scores is not None
        assert one.watched is not None
        probability = np.zeros(len(one.values)) if one.change is None else one.change.probability
        for name, column in {
            "score": one.scores,
            "lot_score": one.lot_scores,
            "watched": one.watched,
            "ewma": np.where(one.watched, moving, np.nan),
            "cusum_up": np.where(one.watched, up, np.nan),
            "cusum_down": np.where(one.watched, down, np.nan),
            "in_baseline": one.baseline,
            "in_reference": _reference(one),
            "change_probability": probability,
            **{f"{name}_signal": flag for name, flag in flags.items()},
        }.items():
            columns.setdefault(name, []).append(column)
        for name, number in _numbers(one).items():
            numbers.setdefault(name, []).append(number)
    return xr.Dataset(
        {name: (dims, np.stack(parts, axis=1)) for name, parts in columns.items()}
        | {name: ("series", np.array(parts)) for name, parts in numbers.items()}
    )


def _reference(one: _Series) -> BoolArray:
    """Return the points that the others are judged by."""
    later = ~one.baseline & np.isfinite(one.values)
    if one.change_at != NEVER:
        later &= np.arange(len(one.values)) < one.change_at
    return np.asarray(one.members | later)


def _numbers(one: _Series) -> dict[str, float]:
    reference = _reference(one)
    usable = one.values[reference]
    weight = 1.0 / one.relative_variance[reference]
    enough = len(usable) > 1
    mean = float(np.average(usable, weights=weight)) if enough else float("nan")
    square = float(np.sum(weight * (usable - mean) ** 2) / (len(usable) - 1)) if enough else np.nan
    return {
        "first_signal": one.first,
        "change_at": one.change_at,
        "change_chance": float("nan") if one.change is None else one.change.chance,
        "reference_mean": mean,
        "point_deviation": float(np.sqrt(square)),
        "autocorrelation": one.memory.value,
        "autocorrelation_chance": one.memory.chance,
        "autocorrelation_modelled": one.modelled,
    }


def _attributes(limits: FamilyLimits, family: ChartFamily, rules: ChartRules) -> dict[str, float]:
    return {
        "individuals_limit": limits.individuals,
        "ewma_limit": limits.ewma,
        "cusum_limit": limits.cusum,
        "joint_limit": limits.joint,
        "charts": family.charts,
        "run_length": rules.run_length,
        "run_length_each": limits.each,
        "baseline_units": rules.baseline_units,
        "ewma_weight": family.ewma_weight,
        "joint_weight": family.joint_weight,
        "cusum_reference": family.cusum_reference,
    }
