"""Pairing: the same mode keeps its name across all responses.

Every response's fitted modes are assigned to population modes at minimum cost; missing, extra,
shifted and crossing modes are reported, never forced.
"""

import numpy as np
import xarray as xr

from identkit.batch import Progress
from identkit.errors import InputError, Problem
from identkit.grids import Gridded
from identkit.methods.arrays import BoolArray, FloatArray, IntArray
from identkit.methods.mode_assignment import UNPAIRED, crossing_modes
from identkit.methods.mode_population import find_population_modes, found_share
from identkit.methods.mode_template import ModeTable, ModeTemplate
from identkit.methods.shifted_modes import pair_shifted_modes
from identkit.methods.template_assignment import assign_all, expected_log_frequency
from identkit.outcomes import Outcome
from identkit.stages.mode_tables import CHANNEL_DIMS, mode_errors, mode_table
from identkit.stages.unexplained import unexplained_share
from identkit.stages.warm_refit import WarmRefit, find_missing_modes, refit_unexplained

PER_MODE = ("modal_frequency", "damping_ratio", "mode_significance")
PER_CHANNEL = ("residue", "residue_rate")


def pair_modes(
    fits: xr.Dataset,
    responses: Gridded | None = None,
    screening: Gridded | None = None,
    *,
    share: float = 0.5,
    unpaired_cost: float = 10.0,
    reference_temperature: float | None = None,
    delay: bool = True,
    jobs: int = 1,
    progress: Progress | None = None,
) -> xr.Dataset:
    """Name every fitted mode after a mode of the population (Kuhn 1955, Munkres 1957).

    The cost of a pair is the scaled difference of log frequency (temperature trend and lot taken
    out), log damping and signed residue of the head, with bounded growth; a mode may stay
    unpaired on either side at `unpaired_cost`. The population's modes come from the fits
    themselves (methods/mode_population.py). Where the responses are given, those that lack a
    mode are refined once more from the population and keep what then stands out of the noise;
    those that their fit does not explain are refined first from the best fit of the others.

    Parameters
    ----------
    fits
        Fitted modes, dims response, mode, output, input, parameter, parameter_other.
    responses, screening
        What was fitted, for the warm refit; none is made without responses.
    share
        A mode belongs to the population when it is found in at least this share of the
        responses of the head that shows it best.
    unpaired_cost
        Cost of one unpaired mode; a pair costing more than twice this is not made. Six spreads
        off in one quantity cost 11.5.
    reference_temperature
        degC at which the order of the names M1, M2 ... is taken; the responses' median when None.
    delay, jobs, progress
        As in `fit_modes`, for the warm refit.

    Returns
    -------
    Dataset
        As `fits`, with modes named M1, M2 ... by population frequency and E1, E2 ... for extra
        ones; ``mode_in_population``, ``mode_outcome``, ``mode_position``, standard errors,
        ``mode_share``, ``mode_expected_frequency``, ``mode_found_warm_mask`` and, where the
        responses are given, ``unexplained_share``. For scalar plants
        base, delay and covariance are those of the refit where one was kept.

    Raises
    ------
    InputError
        If there is no response.

    Notes
    -----
    A campaign may have no population mode at all: base, feedthrough and delay are a plant too.

    Outcomes: DONE, MODE_MISSING, MODE_EXTRA, MODE_SHIFTED (far from where the population has it,
    but the only candidate), MODE_CROSSING, MODE_BELOW_SIGNIFICANCE, MODE_OUT_OF_BAND.
    """
    refit = None if responses is None else WarmRefit(responses, screening, delay, jobs, progress)
    if refit is not None:
        fits = refit_unexplained(fits, refit)
    table = _checked_table(fits)
    template, assigned = find_population_modes(
        table,
        share=share,
        unpaired_cost=unpaired_cost,
        reference_temperature=reference_temperature,
    )
    named = pair_shifted_modes(table, template, assigned)[0]
    gained = np.zeros((len(assigned), len(template.log_frequency)), dtype=bool)
    if refit is not None:
        fits, gained = find_missing_modes(fits, table, template, named, refit, unpaired_cost)
        table = mode_table(fits)
        assigned = assign_all(table, template, unpaired_cost)
        left = unexplained_share(fits, refit.responses, screening)
        fits = fits.assign(unexplained_share=("response", left))
    paired = name_modes(fits, table, template, assigned)
    warm = np.zeros(paired["modal_frequency"].shape, dtype=bool)
    warm[:, : gained.shape[1]] = gained
    return paired.assign(mode_found_warm_mask=(("response", "mode"), warm))


def name_modes(
    fits: xr.Dataset, table: ModeTable, template: ModeTemplate, assigned: IntArray
) -> xr.Dataset:
    """Return the modes dataset for an assignment of fitted modes to population modes."""
    modes = len(template.log_frequency)
    share = found_share(table, assigned, modes)
    assigned, shifted = pair_shifted_modes(table, template, assigned)
    assigned = _add_extra(table, assigned, modes)
    columns = int(max(assigned.max(initial=-1) + 1, modes))
    position = _positions(assigned, columns)
    paired = _reordered(fits, position)
    in_population = np.arange(columns) < modes
    names = [f"M{k + 1}" for k in range(modes)] + [f"E{k + 1}" for k in range(columns - modes)]
    outcome, crossing = _outcomes(fits, paired, position, in_population, shifted, assigned)
    expected = np.full((len(position), columns), np.nan)
    expected[:, :modes] = np.exp(expected_log_frequency(table, template))
    paired = paired.assign(
        mode_outcome=(("response", "mode"), outcome),
        mode_position=(("response", "mode"), position),
        mode_crossing_mask=(("response", "mode"), crossing),
        mode_in_population=("mode", in_population),
        mode_share=("mode", np.concatenate([share, np.full(columns - modes, np.nan)])),
        mode_expected_frequency=(("response", "mode"), expected),
    )
    return paired.assign_coords(mode=np.array(names, dtype=str))


def _checked_table(fits: xr.Dataset) -> ModeTable:
    if fits.sizes["response"] == 0:
        raise InputError(Problem("fits", "no response", "at least one fitted response"))
    return mode_table(fits)


def _add_extra(table: ModeTable, assigned: IntArray, modes: int) -> IntArray:
    """Give unpaired modes columns of their own; neighbours within 2 % share one."""
    left = np.isfinite(table.log_frequency) & (assigned == UNPAIRED)
    rows, places = np.nonzero(left)
    order = np.argsort(table.log_frequency[rows, places], kind="stable")
    result = assigned.copy()
    column, start, taken = modes - 1, -np.inf, set[int]()
    for row, place in zip(rows[order], places[order], strict=True):
        here = float(table.log_frequency[row, place])
        if here - start > 0.02 or int(row) in taken:
            column, start, taken = column + 1, here, set()
        taken.add(int(row))
        result[row, place] = column
    return result


def _positions(assigned: IntArray, columns: int) -> IntArray:
    """Return (responses, columns) place of each named mode in the response's own fit."""
    position = np.full((len(assigned), columns), UNPAIRED, dtype=np.int64)
    rows, places = np.nonzero(assigned != UNPAIRED)
    position[rows, assigned[rows, places]] = places
    return position


def _reordered(fits: xr.Dataset, position: IntArray) -> xr.Dataset:
    """Return the fits with their mode dimension in the named order, errors beside."""
    errors = mode_errors(fits)
    kept = fits.drop_vars([n for n in fits.variables if "mode" in fits[n].dims])
    rows = np.arange(len(position))[:, None]
    empty = position == UNPAIRED

    def pick(values: FloatArray) -> FloatArray:
        if values.shape[1] == 0:
            return np.full((*position.shape, *values.shape[2:]), np.nan)
        taken = values[rows, np.maximum(position, 0)].astype(float)
        taken[empty] = np.nan
        return taken

    for name in PER_MODE:
        if name in fits:
            values = pick(fits[name].transpose("response", "mode").values)
            kept[name] = (("response", "mode"), values)
    for name in PER_CHANNEL:
        if name in fits:
            kept[name] = (CHANNEL_DIMS, pick(fits[name].transpose(*CHANNEL_DIMS).values))
    for name, values in errors.items():
        dims = CHANNEL_DIMS if values.ndim == 4 else CHANNEL_DIMS[:2]
        kept[f"{name}_standard_error"] = (dims, pick(values))
    return kept


def _outcomes(
    fits: xr.Dataset,
    paired: xr.Dataset,
    position: IntArray,
    in_population: BoolArray,
    shifted: BoolArray,
    assigned: IntArray,
) -> tuple[IntArray, BoolArray]:
    """Return one outcome per response and mode, the gravest that applies, and the crossings."""
    outcome = np.full(position.shape, int(Outcome.DONE), dtype=np.int8)
    frequency = paired["modal_frequency"].values
    crossing = np.zeros(position.shape, dtype=bool)
    for i, row in enumerate(frequency):
        crossing[i, crossing_modes(np.where(in_population, row, np.nan))] = True
    outcome[crossing] = Outcome.MODE_CROSSING
    rows, places = np.nonzero(shifted)
    outcome[rows, assigned[rows, places]] = Outcome.MODE_SHIFTED
    outcome[:, ~in_population] = Outcome.MODE_EXTRA
    if "mode_outcome" in fits and fits.sizes["mode"]:
        own = fits["mode_outcome"].transpose("response", "mode").values
        carried = own[np.arange(len(position))[:, None], np.maximum(position, 0)]
        grave = (carried != Outcome.DONE) & in_population & (position != UNPAIRED)
        outcome = np.where(grave, carried, outcome)
    absent = position == UNPAIRED
    outcome = np.where(absent & in_population, np.int8(Outcome.MODE_MISSING), outcome)
    # An extra mode that a response does not have is nothing to report.
    outcome = np.where(absent & ~in_population, np.int8(Outcome.DONE), outcome)
    return np.asarray(outcome.astype(np.int8)), crossing
