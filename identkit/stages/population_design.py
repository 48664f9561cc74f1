"""Labels into regressors: which units, heads, temperatures and positions a population has."""

from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from identkit.methods.arrays import BoolArray, FloatArray, IntArray
from identkit.stages.response_labels import NOT_LABELLED, text_label, unit_label

EVERY_HEAD = "all"
_LEAST_STEP = 0.5  # K: temperatures closer than this are one temperature


@dataclass(frozen=True)
class Design:
    """Design of the campaign.

    Attributes
    ----------
    unit, head_in_unit
        (responses,) integer labels of the nested deviations.
    units
        Names of the units, by label.
    head
        (responses,) index of the head's fixed effect.
    heads
        Names of the heads with a mean of their own, or "all".
    temperature, position
        (responses,) difference from the reference, and from the median position; None where
        there is no trend to estimate.
    notes
        What could not be told from these labels, one sentence each.
    """

    unit: IntArray
    head_in_unit: IntArray
    units: tuple[str, ...]
    head: IntArray
    heads: tuple[str, ...]
    temperature: FloatArray | None
    position: FloatArray | None
    notes: tuple[str, ...]


@dataclass(frozen=True)
class Regressors:
    """Fixed effects of some responses: head means first, then the trends that can be told.

    Attributes
    ----------
    matrix
        (responses, effects).
    heads, head_columns
        Heads that have a mean, and the column of each; one column for all where heads cannot
        be told apart.
    temperature, position
        Column of the trend, -1 where there is none.
    """

    matrix: FloatArray
    heads: IntArray
    head_columns: IntArray
    temperature: int
    position: int


def campaign_design(modes: xr.Dataset, reference_temperature: float) -> Design:
    """Return the design that the labels of a modes dataset allow."""
    notes: list[str] = []
    count = modes.sizes["response"]
    units, unit = _units(modes, notes)
    heads, head = np.array([EVERY_HEAD]), np.zeros(count, dtype=np.int64)
    within = np.zeros(count, dtype=np.int64)
    head_names = text_label([modes], "head")
    if head_names is not None:
        names, within = np.unique(head_names, return_inverse=True)
        if _shared(within, unit):
            heads, head = names, within
        else:
            notes.append("heads are not shared between units: no mean of their own")
    temperature = _trend(modes, "temperature", reference_temperature, notes)
    position = _trend(modes, "position", None, notes)
    pair = np.unique(np.stack([unit, within]), axis=1, return_inverse=True)[1].reshape(-1)
    names_of_heads = tuple(str(h) for h in heads)
    return Design(
        np.asarray(unit, dtype=np.int64),
        np.asarray(pair, dtype=np.int64),
        tuple(str(u) for u in units),
        np.asarray(head, dtype=np.int64),
        names_of_heads,
        temperature,
        position,
        tuple(notes),
    )


def regressors(design: Design, rows: BoolArray) -> Regressors:
    """Return the fixed effects that the chosen responses can carry.

    Trends that cannot be told from the head means in these rows are left out.
    """
    present = np.unique(design.head[rows])
    columns = [(design.head[rows] == h).astype(float) for h in present]
    head_columns = np.arange(len(present))
    if len(columns) >= rows.sum():
        columns, head_columns = [np.ones(int(rows.sum()))], np.zeros_like(head_columns)
    places = {"temperature": -1, "position": -1}
    for name, trend in (("temperature", design.temperature), ("position", design.position)):
        if trend is None or len(columns) + 1 >= rows.sum():
            continue
        scale = max(float(np.abs(trend).max()), 1e-300)
        trial = np.column_stack([*columns, trend[rows] / scale])
        if np.linalg.matrix_rank(trial, tol=1e-6 * np.sqrt(len(trial))) == trial.shape[1]:
            places[name] = len(columns)
            columns.append(trend[rows])
    return Regressors(
        np.column_stack(columns), present, head_columns, places["temperature"], places["position"]
    )


def _units(modes: xr.Dataset, notes: list[str]) -> tuple[NDArray[np.str_], IntArray]:
    """Return the names of the units and the unit of every response."""
    labels = unit_label([modes])
    if labels is None:
        notes.append("no unit label: every response is counted as a unit of its own")
        return modes["response"].values.astype(str), np.arange(modes.sizes["response"])
    plain = text_label([modes], "unit")
    lacking = 0 if plain is None else int(np.count_nonzero(plain == NOT_LABELLED))
    if lacking:
        notes.append(f"{lacking} responses have no unit label: each counts as a unit of its own")
    units, unit = np.unique(labels, return_inverse=True)
    return units, np.asarray(unit, dtype=np.int64)


def _shared(head: IntArray, unit: IntArray) -> bool:
    """Whether the same head name stands in two units or more, on average."""
    pairs = np.unique(np.stack([head, unit]), axis=1).shape[1]
    return bool(pairs >= 2 * len(np.unique(head)))


def _trend(
    modes: xr.Dataset, label: str, reference: float | None, notes: list[str]
) -> FloatArray | None:
    if label not in modes.coords or modes[label].dtype.kind not in "fiu":
        if label == "temperature":
            notes.append("no temperature label: no temperature trend")
        return None
    value = modes[label].values.astype(float)
    known = np.isfinite(value)
    if not known.any():
        notes.append(f"no known {label}: no {label} trend")
        return None
    filled = np.where(known, value, np.median(value[known]))
    if not known.all():
        notes.append(f"{label} missing in {int((~known).sum())} responses: the median stands in")
    least = _LEAST_STEP if label == "temperature" else 0.0
    if np.ptp(filled) <= least:
        notes.append(f"one {label} ({filled[0]:g}): no {label} trend")
        return None
    return filled - (reference if reference is not None else float(np.median(filled)))
