"""Tables of the drift page, and the rows for a quality group's own systems."""

import numpy as np
import pandas as pd
import xarray as xr

from identkit.report.drift_contents import DriftInput, series_words
from identkit.report.numbers import listed, number
from identkit.report.table import Table, table_of
from identkit.stages.drift_charts import CHARTS
from identkit.stages.drift_signals import Signal, natural

_CHARTS = {"individuals": "single", "lot": "lot mean", "ewma": "average", "cusum": "sum"}
_UNIT_COLUMNS = (
    ("unit", "text"),
    ("lot", "text"),
    ("measured", "text"),
    ("largest reach", "number"),
    ("why", "text"),
)


def pull_table(given: DriftInput) -> Table | None:
    """Return the units to pull: outside the set, or apart from all others."""
    reasons: dict[int, list[str]] = {}
    numbers = np.flatnonzero(given.points["visit_number"].values == 1)
    for visit in given.outside:
        hertz = float(given.points["reach_frequency"].values[visit])
        where = f" at {number(hertz, 4)} Hz" if np.isfinite(hertz) else ""
        reasons.setdefault(visit, []).append(f"outside the set{where}")
    for at, series in given.apart:
        assert given.charted is not None
        score = given.charted["score"].values[at]
        words = [
            f"{series_words(str(given.charted['series'].values[k]))} "
            f"{'+' if score[k] > 0 else '−'}{number(abs(float(score[k])), 2)} σ"
            for k in series
        ]
        reasons.setdefault(int(numbers[at]), []).append(listed(words, 4))
    rows = [
        (
            *(str(given.points[name].values[v]) or "–" for name in ("unit", "lot", "measured_at")),
            number(float(given.points["largest_reach"].values[v]), 4),
            "; ".join(why),
        )
        for v, why in reasons.items()
    ]
    note = (
        "Outside the set, or beyond the limit of a single unit; σ is the standard normal score of "
        "the unit against those before it."
    )
    return table_of("Units to pull", _UNIT_COLUMNS, rows, note)


def moved_table(given: DriftInput) -> Table | None:
    """Return what moved, with its size and place."""
    rows = []
    for charted, signals, kind in (
        (given.charted, given.signals, ""),
        (given.again, given.again_signals, "measured again"),
    ):
        rows += [_moved_row(charted, one, kind) for one in signals if charted is not None]
    columns = (
        ("series", "text"),
        ("since", "text"),
        ("until", "text"),
        ("before", "number"),
        ("after", "number"),
        ("own deviations", "number"),
        ("charts", "text"),
    )
    note = (
        "Values at the reference temperature; residues relative to their usual size. The change is "
        "in standard deviations of a unit of that series."
    )
    return table_of("What moved", columns, rows, note)


def _moved_row(charted: xr.Dataset, one: Signal, kind: str) -> tuple[str, ...]:
    units = charted["unit"].values.astype(str)
    before, after = one.before, one.after
    if one.quantity.startswith("residue"):
        before, after = 1.0, one.after / one.before
    unit = " Hz" if one.quantity == "modal_frequency" else ""
    return (
        series_words(one.series),
        units[one.since],
        units[one.until] if one.until >= 0 else "still",
        f"{number(before, 4)}{unit}",
        f"{number(after, 4)}{unit}",
        f"{number(one.deviations, 2)} ± {number(one.deviations_standard_error, 1)}",
        ", ".join(_CHARTS[name] for name in one.charts) + (f" ({kind})" if kind else ""),
    )


def series_table(given: DriftInput) -> Table | None:
    """Return every series with its baseline, memory and largest use of a limit."""
    if given.charted is None:
        return None
    charted, limits = given.charted, given.charted.attrs
    rows = []
    for k, name in enumerate(charted["series"].values.astype(str)):
        one = charted.isel(series=k)
        watched = one["watched"].values
        if not one["in_baseline"].values.any():
            continue
        cells = [
            np.abs(one["score"].values) / limits["individuals_limit"],
            np.abs(one["lot_score"].values) / limits["individuals_limit"],
            np.abs(one["ewma"].values) / limits["ewma_limit"],
            np.fmax(one["cusum_up"].values, one["cusum_down"].values) / limits["cusum_limit"],
        ]
        out = int(np.sum(one["in_baseline"].values & ~one["in_reference"].values))
        used = [float(np.nanmax(np.where(watched, c, np.nan), initial=0.0)) for c in cells]
        memory = number(float(one["autocorrelation"]), 2)
        rows.append(
            (
                series_words(name),
                number(100 * float(one["point_deviation"]), 3),
                str(out),
                memory + (" modelled" if bool(one["autocorrelation_modelled"]) else ""),
                *(number(value, 2) for value in used),
            )
        )
    columns = (
        ("series", "text"),
        ("unit deviation, %", "number"),
        ("left out of baseline", "number"),
        ("lag-1 autocorrelation", "number"),
        ("single", "number"),
        ("lot mean", "number"),
        ("moving average", "number"),
        ("cumulative sum", "number"),
    )
    note = "The last four columns: largest share of its limit that each statistic has used."
    return table_of("Every series and its charts", columns, rows, note, most=80)


def left_out_table(given: DriftInput) -> Table | None:
    """Return measurements that are in the history but not charted."""
    rows = [(response, reason) for response, reason in given.left_out]
    return table_of("Not charted", (("response", "text"), ("reason", "text")), rows)


def points_frame(given: DriftInput) -> pd.DataFrame:
    """Return one row per visit and series, for other systems."""
    frames = [
        _frame(part, kind)
        for part, kind in ((given.charted, "new"), (given.again, "measured-again"))
        if part is not None and part.sizes["visit"]
    ]
    return pd.concat(frames, ignore_index=True) if frames else pd.DataFrame()


def _frame(charted: xr.Dataset, kind: str) -> pd.DataFrame:
    frames = []
    for k in range(charted.sizes["series"]):
        one = charted.isel(series=k)
        deviation = one["deviation"].values
        value = natural(charted, k, deviation) if kind == "new" else np.full(len(deviation), np.nan)
        columns = {
            "unit": one["unit"].values,
            "lot": one["lot"].values,
            "measured_at": one["measured_at"].values,
            "visit": one["visit_number"].values,
            "kind": kind,
            "mode": str(one["mode"].values),
            "quantity": str(one["quantity"].values),
            "value": value,
            "deviation": deviation,
            "known_standard_error": np.sqrt(one["error_variance"].values),
            "phase": np.where(one["in_baseline"].values, "baseline", "watched"),
            "in_reference": one["in_reference"].values,
        }
        for name in ("score", "lot_score", "ewma", "cusum_up", "cusum_down"):
            columns[name] = one[name].values
        for name in CHARTS:
            columns[f"{name}_signal"] = one[f"{name}_signal"].values
        columns |= {
            "individuals_limit": charted.attrs["individuals_limit"],
            "ewma_limit": charted.attrs["ewma_limit"],
            "cusum_limit": charted.attrs["cusum_limit"],
            "largest_reach": one["largest_reach"].values,
        }
        frames.append(pd.DataFrame(columns).loc[np.isfinite(deviation)])
    joined: pd.DataFrame = pd.concat(frames, ignore_index=True)
    return joined


def signals_frame(given: DriftInput) -> pd.DataFrame:
    """Return one row per series that moved."""
    rows = []
    for charted, signals, kind in (
        (given.charted, given.signals, "new"),
        (given.again, given.again_signals, "measured-again"),
    ):
        for one in signals:
            assert charted is not None
            units = charted["unit"].values.astype(str)
            rows.append(
                {
                    "kind": kind,
                    "mode": one.mode,
                    "quantity": one.quantity,
                    "charts": " ".join(one.charts),
                    "since_unit": units[one.since],
                    "since": str(charted["measured_at"].values[one.since]),
                    "seen_unit": units[one.seen_at],
                    "until_unit": units[one.until] if one.until >= 0 else "",
                    "lot": one.lot,
                    "lot_probability": one.lot_probability,
                    "before": one.before,
                    "after": one.after,
                    "deviations": one.deviations,
                    "deviations_standard_error": one.deviations_standard_error,
                }
            )
    names = list(rows[0]) if rows else ["kind", "mode", "quantity", "charts", "since_unit"]
    return pd.DataFrame(rows, columns=pd.Index(names))
