"""Warm refit: looks again for the population modes that a response lacks.

A response that lacks a mode is refined once more from its own modes with the population's guess of
the missing one added. The mode is kept when it stands out of the noise and is still the same
mode; otherwise the response keeps its first fit. A response that its fit does not explain at all is
refined before that from the best fit of the others.
"""

from dataclasses import dataclass

import numpy as np
import xarray as xr

from identkit.batch import Progress
from identkit.grids import Gridded
from identkit.methods.arrays import BoolArray, IntArray
from identkit.methods.modal_model import ModalParameters
from identkit.methods.mode_assignment import UNPAIRED
from identkit.methods.mode_template import ModeTable, ModeTemplate
from identkit.methods.template_assignment import assign_all, expected_log_frequency
from identkit.outcomes import Outcome
from identkit.plants import MOST_UNEXPLAINED, plant_parameters
from identkit.stages.fit import refit_modes
from identkit.stages.mode_tables import mode_table
from identkit.stages.unexplained import unexplained_share

SCALARS = (
    "delay",
    "feedthrough",
    "base_gain",
    "base_frequency",
    "base_damping_ratio",
    "base_residue",
)
WARM_SIGNIFICANCE = 4.0
"""Residue over its standard error that a mode found by name must reach to be kept."""


@dataclass(frozen=True)
class WarmRefit:
    """How to refit: the data and the model's options.

    Attributes
    ----------
    responses, screening
        What was fitted.
    delay
        Whether the delay is free.
    jobs, progress
        As in the fit stage.
    """

    responses: Gridded
    screening: Gridded | None = None
    delay: bool = True
    jobs: int = 1
    progress: Progress | None = None


def refit_unexplained(fits: xr.Dataset, refit: WarmRefit) -> xr.Dataset:
    """Refit responses that their fits do not explain from the fit that explains its own best.

    The search of a cold fit can end in a poor local minimum (of the delay above all) that the fit
    of a sister does not share. A refit is kept where it leaves less of the response and no more
    than `MOST_UNEXPLAINED`.
    """
    share = unexplained_share(fits, refit.responses, refit.screening)
    poor = np.flatnonzero(share > MOST_UNEXPLAINED)
    if poor.size == 0 or not (share <= MOST_UNEXPLAINED).any():
        return fits
    start = plant_parameters(fits, int(np.nanargmin(share)))
    names = fits["response"].values[poor]
    refits = refit_modes(
        refit.responses,
        {str(name): start for name in names},
        refit.screening,
        delay=refit.delay,
        residues=str(fits.attrs.get("residues", "real")),
        jobs=refit.jobs,
        progress=refit.progress,
    ).sel(response=names)
    left = unexplained_share(refits, refit.responses, refit.screening)
    better = (left < share[poor]) & (left <= MOST_UNEXPLAINED)
    return _replace(fits, refits.isel(response=np.flatnonzero(better)))


def find_missing_modes(
    fits: xr.Dataset,
    table: ModeTable,
    template: ModeTemplate,
    assigned: IntArray,
    refit: WarmRefit,
    unpaired_cost: float,
) -> tuple[xr.Dataset, IntArray]:
    """Refit responses with missing modes from the population.

    Parameters
    ----------
    fits, table, template, assigned
        Fits and their pairing.
    refit
        Data and options.
    unpaired_cost
        As in `assign_modes`; the mode found must still pair with the one looked for.

    Returns
    -------
    tuple
        The fits with the refits that were kept, and which modes each response was given:
        (responses, modes) bool.
    """
    missing = missing_modes(assigned, len(template.log_frequency))
    gained = np.zeros(missing.shape, dtype=bool)
    wanted = missing & _can_start(fits)[:, None] & np.isfinite(template.log_damping)
    # Twice: the second round asks only for the modes that the first found significant.
    for _ in range(2):
        rows = np.flatnonzero(wanted.any(axis=1))
        if rows.size == 0:
            break
        starts = {
            str(fits["response"].values[i]): _start(fits, table, template, wanted[i], i)
            for i in rows.tolist()
        }
        refits = refit_modes(
            refit.responses,
            starts,
            refit.screening,
            delay=refit.delay,
            residues=str(fits.attrs.get("residues", "real")),
            jobs=refit.jobs,
            progress=refit.progress,
        ).sel(response=fits["response"].values[rows])
        found = _found(refits, template, table.rows(_mask(rows, len(missing))), unpaired_cost)
        found &= wanted[rows]
        whole = (found == wanted[rows]).all(axis=1) & (refits["fit_outcome"].values == Outcome.DONE)
        fits = _replace(fits, refits.isel(response=np.flatnonzero(whole)))
        gained[rows[whole]] = found[whole]
        wanted = np.zeros(missing.shape, dtype=bool)
        wanted[rows[~whole]] = found[~whole]
    return fits, gained


def missing_modes(assigned: IntArray, modes: int) -> BoolArray:
    """Return (responses, modes) whether a response lacks a population mode."""
    missing = np.ones((len(assigned), modes), dtype=bool)
    rows, places = np.nonzero(assigned != UNPAIRED)
    missing[rows, assigned[rows, places]] = False
    return missing


def _can_start(fits: xr.Dataset) -> BoolArray:
    """Whether a response has a fit to start from: not where every parameter is missing."""
    names = [name for name in SCALARS if name in fits]
    values = [fits[name].values.reshape(fits.sizes["response"], -1) for name in names]
    return np.asarray(np.isfinite(np.concatenate(values, axis=1)).all(axis=1))


def _mask(rows: IntArray, size: int) -> BoolArray:
    mask = np.zeros(size, dtype=bool)
    mask[rows] = True
    return mask


def _start(
    fits: xr.Dataset, table: ModeTable, template: ModeTemplate, wanted: BoolArray, i: int
) -> ModalParameters:
    """Return the response's own fit with the population's guess of the wanted modes added."""
    own = fits.isel(response=i)
    known = np.isfinite(own["modal_frequency"].values)
    one = np.arange(len(table.head)) == i
    frequency = np.exp(expected_log_frequency(table.rows(one), template)[0, wanted])
    # A head that never showed the mode has no residue to start from; residues are solved for.
    residue = np.nan_to_num(template.residue[table.head[i], wanted, 0])
    base = str(fits.attrs["base"])
    scalars = [name for name in SCALARS if name in fits]
    rate = own["residue_rate"].values[known, 0, 0]
    return ModalParameters(
        modal_frequency=np.concatenate([own["modal_frequency"].values[known], frequency]),
        damping_ratio=np.concatenate(
            [own["damping_ratio"].values[known], np.exp(template.log_damping[wanted])]
        ),
        residue=np.concatenate([own["residue"].values[known, 0, 0], residue]),
        residue_rate=np.concatenate([rate, np.zeros(int(wanted.sum()))]),
        base=base,
        **{name: float(own[name].values.reshape(-1)[0]) for name in scalars},
    )


def _found(
    refits: xr.Dataset, template: ModeTemplate, rows: ModeTable, unpaired_cost: float
) -> BoolArray:
    """Return (responses, modes) whether a refit shows a mode by name and out of the noise."""
    table = mode_table(refits, rows)
    assigned = assign_all(table, template, unpaired_cost)
    significance = refits["mode_significance"].transpose("response", "mode").values
    found = np.zeros((len(assigned), len(template.log_frequency)), dtype=bool)
    at, places = np.nonzero((assigned != UNPAIRED) & (significance >= WARM_SIGNIFICANCE))
    found[at, assigned[at, places]] = True
    return found


def _replace(fits: xr.Dataset, refits: xr.Dataset) -> xr.Dataset:
    """Return the fits with some responses replaced, widened to the larger number of modes."""
    if refits.sizes["response"] == 0:
        return fits
    wide = fits if fits.sizes["mode"] >= refits.sizes["mode"] else refits
    parts = [_widen(part, wide) for part in (fits, refits)]
    order = fits["response"].values
    kept = parts[0].sel(response=~np.isin(order, parts[1]["response"].values))
    shared = [name for name in kept.data_vars if name in parts[1]]
    joined = xr.concat(
        [kept[shared], parts[1][shared]], "response", join="exact", combine_attrs="override"
    )
    return joined.sel(response=order).assign_attrs(fits.attrs)


def _widen(part: xr.Dataset, wide: xr.Dataset) -> xr.Dataset:
    """Return a dataset on the modes and parameters of the wider one, nothing in new places."""
    codes = {
        name: int(Outcome.NOT_FITTED) if name == "mode_outcome" else UNPAIRED
        for name in part.data_vars
        if part[name].dtype.kind in "iu" and "mode" in part[name].dims
    }
    return part.reindex(
        mode=wide["mode"],
        parameter=wide["parameter"],
        parameter_other=wide["parameter_other"],
        fill_value={name: np.nan for name in part.data_vars} | codes,
    )
