"""What the drift page is made from, and its words: verdict first."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta

import numpy as np
import xarray as xr

from identkit.report.numbers import counted, listed, number
from identkit.stages.drift_signals import Exit, Signal

_NAMES = {
    "modal_frequency": "modal frequency",
    "damping_ratio": "damping ratio",
    "reach": "reach",
}
_CHARTS = {
    "individuals": "single units",
    "lot": "the mean of its lot",
    "ewma": "the moving average",
    "cusum": "the cumulative sum",
}


@dataclass(frozen=True, eq=False)
class DriftInput:
    """Everything the drift page shows.

    Attributes
    ----------
    history
        Name of the history, no password in it.
    set_name
        The released set; empty where there is none.
    points
        All visits.
    charted, again
        New units and units measured again, on their charts; None without units of that kind.
    signals, again_signals
        What moved.
    joint_at
        First signal of the multivariate chart along the new units, -1 for none.
    outside
        Visits with a response outside the set.
    apart
        New units beyond the limit of an individual, with their series.
    exit
        Extrapolation of reach; None where there is none.
    left_out
        (response, reason) of measurements that are not charted.
    notes
        What else must be said.
    additions
        Numbers of the additions of this call; empty where nothing was added.
    """

    history: str
    set_name: str
    points: xr.Dataset
    charted: xr.Dataset | None
    again: xr.Dataset | None
    signals: Sequence[Signal]
    again_signals: Sequence[Signal]
    joint_at: int
    outside: Sequence[int]
    apart: Sequence[tuple[int, list[int]]]
    exit: Exit | None
    left_out: Sequence[tuple[str, str]]
    notes: Sequence[str]
    additions: Sequence[int]

    @property
    def is_judged(self) -> bool:
        """Whether any unit has been judged against a baseline."""
        return self.charted is not None and bool(self.charted["watched"].values.any())

    @property
    def signalled(self) -> bool:
        """Whether anything is no longer held, has moved in what was added, or is still off.

        A call that adds nothing judges the whole record.
        """
        moved = any(self.is_open(self.charted, one) for one in self.signals)
        again = any(self.is_open(self.again, one) for one in self.again_signals)
        return moved or again or self.joint_is_open or bool(self.outside)

    @property
    def joint_is_open(self) -> bool:
        """Whether the multivariate chart signals in what was added, or still."""
        if self.charted is None or self.joint_at < 0:
            return False
        beyond = self.charted["joint_signal"].values
        return bool(beyond[-1]) or self.is_new(self.charted, self.joint_at)

    def is_open(self, charted: xr.Dataset | None, one: Signal) -> bool:
        """Whether a series is still off, or was first seen so in what was added."""
        return charted is not None and (one.until < 0 or self.is_new(charted, one.seen_at))

    def is_new(self, charted: xr.Dataset, visit: int) -> bool:
        """Whether a visit was added by this call, or the call judges the whole record."""
        return not self.additions or int(charted["addition"].values[visit]) in self.additions


def drift_state(given: DriftInput) -> tuple[str, str]:
    """Return the state and one sentence: "signal", "no signal" or "baseline"."""
    units = given.points.sizes["visit"]
    moved = [one.series for one in given.signals if given.is_open(given.charted, one)]
    moved += [one.series for one in given.again_signals if given.is_open(given.again, one)]
    if given.outside:
        names = _units(given.points, given.outside)
        return "signal", f"The released set no longer holds {counted(len(names), 'unit')}"
    if moved:
        words = listed([series_words(name) for name in dict.fromkeys(moved)], 4)
        return "signal", f"{words} moved{_held_words(given)}"
    if given.joint_is_open:
        return "signal", f"The modal frequencies moved together{_held_words(given)}"
    if not given.is_judged:
        return "baseline", f"{counted(units, 'unit')} in the history: the baseline is being built"
    past = " in what was added" if given.signals or given.again_signals else ""
    return "no signal", f"Nothing moved beyond chance{past}{_held_words(given)}"


def drift_sentences(given: DriftInput) -> list[str]:
    """Return the verdict in sentences, what is acted on first."""
    sentences = [set_sentence(given)]
    for one in given.signals:
        assert given.charted is not None
        sentences.append(signal_sentence(given.charted, one))
    for one in given.again_signals:
        assert given.again is not None
        sentences.append(f"Units measured again: {signal_sentence(given.again, one)}")
    if given.joint_at >= 0:
        assert given.charted is not None
        unit = str(given.charted["unit"].values[given.joint_at])
        sentences.append(f"The modal frequencies taken together moved: seen at {unit}.")
    sentences += _exit_sentences(given.exit)
    sentences += _memory_sentences(given.charted)
    sentences += [limits_sentence(given), *given.notes]
    return [sentence for sentence in sentences if sentence]


def set_sentence(given: DriftInput) -> str:
    """Return whether the released set still holds, and who is out."""
    reach = given.points["largest_reach"].values
    if not np.isfinite(reach).any():
        return "No released set is known: give one with --set to have its reach judged."
    name = f"The released set {given.set_name}".strip()
    fresh = int(np.sum(np.isfinite(reach) & ~given.points["in_set"].values))
    if given.outside:
        names = listed(_units(given.points, given.outside))
        worst = number(float(reach[given.outside[0]]), 4)
        return f"{name} does not hold {names}: largest reach {worst}."
    judged = f"{fresh} of them not among those it was made from" if fresh else "all of them its own"
    visits = counted(int(np.isfinite(reach).sum()), "visit")
    largest = number(float(np.nanmax(reach)), 4)
    return f"{name} still holds every unit ({visits}, {judged}; largest {largest})."


def signal_sentence(charted: xr.Dataset, one: Signal) -> str:
    """Return which mode moved, since when, how much, and who saw it."""
    direction = "up" if one.deviations > 0 else "down"
    deviations = f"{number(abs(one.deviations), 2)} of its own standard deviations"
    moved = f"{series_words(one.series)} moved {direction} by {_amount(one)} ({deviations})"
    return f"{moved} since {_since(charted, one)}; {_seen(charted, one)}."


def series_words(series: str) -> str:
    """Return "M3 modal frequency" for a series."""
    mode, _, quantity = series.partition(" ")
    if not quantity:
        return series
    return f"{mode} {_NAMES.get(quantity, quantity.replace('_', ' '))}"


def limits_sentence(given: DriftInput) -> str:
    """Return on what the limits rest."""
    if given.charted is None:
        return ""
    limits = given.charted.attrs
    return (
        f"Limits of {int(limits['charts'])} charts together: at least "
        f"{limits['run_length']:g} units between false alarms on average, for independent "
        f"normal units; baseline of {int(limits['baseline_units'])} units."
    )


def date_of(days: float, dated: bool) -> str:
    """Return the date of days since 1970, or how many units that is."""
    if not np.isfinite(days):
        return "no date that can be told"
    if not dated:
        return f"unit number {days + 1.0:.0f}"
    try:
        return (datetime(1970, 1, 1) + timedelta(days=days)).date().isoformat()
    except OverflowError:
        return "beyond any calendar"


def _units(points: xr.Dataset, visits: Sequence[int]) -> list[str]:
    return list(dict.fromkeys(str(points["unit"].values[v]) for v in visits))


def _held_words(given: DriftInput) -> str:
    known = np.isfinite(given.points["largest_reach"].values).any()
    return "; the released set still holds every unit" if known else ""


def _amount(one: Signal) -> str:
    spread = one.deviations_standard_error / abs(one.deviations) if one.deviations else np.nan
    if one.quantity == "modal_frequency":
        step = abs(one.after - one.before)
        return (
            f"{number(step, 3)} ± {number(step * spread, 2)} Hz, from {number(one.before, 4)} to "
            f"{number(one.after, 4)} Hz"
        )
    relative = one.after / one.before - 1.0
    if one.quantity == "damping_ratio":
        return f"{number(abs(relative) * 100, 2)} %, to {number(one.after, 3)}"
    if one.quantity == "reach":
        return f"from {number(one.before, 3)} to {number(one.after, 3)}"
    return f"{number(abs(relative) * 100, 2)} %"


def _since(charted: xr.Dataset, one: Signal) -> str:
    unit, date = (str(charted[name].values[one.since]) for name in ("unit", "measured_at"))
    words = f"unit {unit}" + (f" ({date})" if date else "")
    first, last = one.candidates
    if last > first:
        names = charted["unit"].values.astype(str)
        words += f", with 95 % between {names[first]} and {names[last]}"
    if one.lot and np.isfinite(one.lot_probability):
        words += f", first changed unit in lot {one.lot} with {_sure(one.lot_probability)}"
    return words


def _sure(probability: float) -> str:
    return "more than 99.9 %" if probability > 0.999 else f"{100.0 * probability:.1f} %"


def _seen(charted: xr.Dataset, one: Signal) -> str:
    units = charted["unit"].values.astype(str)
    words = f"seen at {units[one.seen_at]} by {listed([_CHARTS[name] for name in one.charts])}"
    if one.until >= 0:
        words += f", back since {units[one.until]}"
    return words


def _exit_sentences(exit_: Exit | None) -> list[str]:
    if exit_ is None:
        return []
    if not exit_.believed:
        return [f"Reach shows no rising trend over {exit_.points} units: no exit is extrapolated."]
    mean, outer = exit_.mean, exit_.one_in_twenty
    return [
        f"Extrapolation, if the trend of {exit_.points} units goes on: one unit in twenty leaves "
        f"the set from {date_of(outer.crossing, exit_.dated)} on, the typical unit from "
        f"{date_of(mean.crossing, exit_.dated)} on (95 % from {date_of(mean.low, exit_.dated)} to "
        f"{date_of(mean.high, exit_.dated)})."
    ]


def _memory_sentences(charted: xr.Dataset | None) -> list[str]:
    if charted is None:
        return []
    modelled = np.flatnonzero(charted["autocorrelation_modelled"].values)
    if not modelled.size:
        return []
    words = [
        f"{series_words(str(charted['series'].values[k]))} "
        f"({number(float(charted['autocorrelation'].values[k]), 2)})"
        for k in modelled
    ]
    return [
        f"Neighbouring units are alike in {listed(words)} (lag-1 autocorrelation): there each unit "
        "is judged by what it adds to the one before, since limits for independent units would "
        "give false alarms."
    ]
