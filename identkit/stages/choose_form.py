"""Form "auto": bound in every form that fits, and keep the one that costs the least bandwidth."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr

from identkit.errors import InfeasibleError, InputError
from identkit.set_price import bandwidth_of_set
from identkit.stages.bound import bound_spread
from identkit.stages.export import SetOrigin, build_set

AUTO = "auto"
TRIED = ("multiplicative", "inverse-multiplicative", "additive")
"""Of equal price the first is taken. The input form of a scalar plant costs what the first does."""
EQUAL = 0.01


@dataclass(frozen=True)
class _Trial:
    """One form: its bound, or why there is none; what it allows, and whom it leaves out."""

    form: str
    bound: xr.Dataset | None
    crossover: float = np.nan
    missing: int = 0
    reason: str = ""


def bound_in_cheapest_form(
    modes: xr.Dataset,
    nominal: xr.Dataset,
    *,
    order: str | int = "auto",
    profile: Sequence[tuple[float, float]] = ((100.0, 1.0), (1000.0, 3.0)),
    cap: Sequence[tuple[float, float]] = (),
    radius_floor: float = 0.02,
    left_out: Mapping[str, str] | None = None,
    jobs: int = 1,
) -> xr.Dataset:
    """Bound as `bound_spread` does in every scalar form, and return the bound of least price.

    The price is the highest crossover of one standard loop that the finished set allows
    (`set_price`). A form that leaves out plants which another holds is not chosen, whatever its
    price; forms within 1 % count as equal, and the plainer one is taken.

    Parameters
    ----------
    modes, nominal, order, profile, cap, radius_floor, left_out, jobs
        As for `bound_spread`; a cap bounds |W| of every form alike, so that with a cap an additive
        weight is bounded in its own unit.

    Returns
    -------
    Dataset
        The bound chosen, with ``form_trial_crossover`` (Hz; NaN where there is none) and
        ``form_trial_left_out`` (plants that the form alone leaves out) along ``form_trial``, and
        the attribute ``form_rule``: why this form.

    Raises
    ------
    InfeasibleError, InputError
        If no form has a bound: that of the first form.
    """

    def bounded(form: str) -> xr.Dataset:
        return bound_spread(
            modes,
            nominal,
            form=form,
            order=order,
            profile=profile,
            cap=cap,
            radius_floor=radius_floor,
            left_out=left_out,
            jobs=jobs,
        )

    trials = [_Trial(TRIED[0], bounded(TRIED[0]))]
    for form in TRIED[1:]:
        try:
            trials.append(_Trial(form, bounded(form)))
        except (InfeasibleError, InputError) as error:
            trials.append(_Trial(form, None, reason=str(error)))
    origin = SetOrigin(radius_floor, tuple(cap))
    judged = _judged(trials, modes, nominal, origin)
    chosen = _cheapest(judged)
    assert chosen.bound is not None
    table = {
        "form_trial_crossover": ("form_trial", [trial.crossover for trial in judged]),
        "form_trial_left_out": ("form_trial", [trial.missing for trial in judged]),
    }
    names = {"form_trial": [trial.form for trial in judged]}
    return chosen.bound.assign(table).assign_coords(names).assign_attrs(form_rule=_rule(judged))


def _judged(
    trials: Sequence[_Trial], modes: xr.Dataset, nominal: xr.Dataset, origin: SetOrigin
) -> list[_Trial]:
    most = max(int(t.bound.attrs["held"]) for t in trials if t.bound is not None)
    judged = []
    for trial in trials:
        if trial.bound is None:
            judged.append(trial)
            continue
        crossover = bandwidth_of_set(build_set(nominal, trial.bound, modes, origin)).crossover
        missing = most - int(trial.bound.attrs["held"])
        judged.append(_Trial(trial.form, trial.bound, crossover, missing))
    return judged


def _cheapest(trials: Sequence[_Trial]) -> _Trial:
    open_to_all = [t for t in trials if t.bound is not None and not t.missing]
    best = max(trial.crossover for trial in open_to_all)
    enough = best * (1.0 - EQUAL)
    return next(trial for trial in open_to_all if trial.crossover >= enough)


def _rule(trials: Sequence[_Trial]) -> str:
    chosen = _cheapest(trials)
    others = [_against(trial) for trial in trials if trial is not chosen]
    return (
        f"Form {chosen.form} was chosen by price: on its set the standard second-order loop may "
        f"cross over at up to {_hertz(chosen.crossover)}, against {', '.join(others)}."
    )


def _against(trial: _Trial) -> str:
    if trial.bound is None:
        return f"no set in form {trial.form}"
    text = f"{_hertz(trial.crossover)} in form {trial.form}"
    return f"{text}, which leaves out {trial.missing} more plants" if trial.missing else text


def _hertz(crossover: float) -> str:
    if crossover <= 0.0:
        return "no frequency"
    return f"{crossover:.4g} Hz" if np.isfinite(crossover) else "any frequency"
