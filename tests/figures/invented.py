"""Datasets of a small invented study, filled from its truth, for tests of figures and report."""

from dataclasses import replace

import numpy as np
import xarray as xr

from identkit.methods.magnitude_weight import fit_magnitude_weight
from identkit.methods.modal_model import ModalParameters, modal_response
from identkit.methods.state_space import frequency_response, modal_realisation
from identkit.plant_set import fields
from identkit.plants import plant_parameters
from identkit.synthetic import InventedBench, invent_campaign, to_dataset


def small_campaign(units=6, heads=2, temperatures=(10.0, 50.0), seed=3, points=300):
    return invent_campaign(
        seed=seed,
        units=units,
        heads=heads,
        temperatures=temperatures,
        bench=InventedBench(points=points),
    )


def responses_of(campaign):
    return to_dataset(campaign)


def screening_of(responses):
    shape = responses["frequency_response"].shape
    dims = ("response", "output", "input", "frequency")
    count = shape[0]
    low = responses["coherence"].values < 0.9
    marks = np.zeros((count, 3), dtype=bool)
    marks[1, 1] = True
    return xr.Dataset(
        {
            "usable_mask": (dims, ~low),
            "low_coherence_mask": (dims, low),
            "outside_band_mask": (dims, np.zeros(shape, dtype=bool)),
            "missing_mask": (dims, np.zeros(shape, dtype=bool)),
            "response_mark": (("response", "mark"), marks),
            "response_mark_value": (("response", "mark"), np.where(marks, 8.2, 0.1)),
            "response_mark_limit": (
                ("response", "mark"),
                np.broadcast_to([0.3, 6.0, 50.0], (count, 3)).copy(),
            ),
        },
        coords={**responses.coords, "mark": ["noise", "outlier", "too-few-points"]},
    )


def modes_of(campaign, responses):
    """Truth as paired modes: the first eight by name, the cracked unit's extra as E1."""
    plants = [r.plant for r in campaign.responses]
    count, modes = len(plants), 9

    def table(name):
        return np.array(
            [
                np.append(getattr(p, name), [np.nan] * (modes - len(getattr(p, name))))
                for p in plants
            ]
        )

    frequency, damping = table("modal_frequency"), table("damping_ratio")
    residue = table("residue")[:, :, None, None]
    scalar = {
        name: np.array([getattr(p, name) for p in plants])
        for name in ("base_frequency", "base_damping_ratio", "delay")
    }
    labels = {
        name: coordinate
        for name, coordinate in responses.coords.items()
        if coordinate.dims == ("response",)
    }
    two, four = ("response", "mode"), ("response", "mode", "output", "input")
    per_channel = ("response", "output", "input")
    generator = np.random.default_rng(0)
    return xr.Dataset(
        {
            "modal_frequency": (two, frequency),
            "modal_frequency_standard_error": (two, 3e-4 * frequency),
            "damping_ratio": (two, damping),
            "damping_ratio_standard_error": (two, 0.02 * damping),
            "residue": (four, residue),
            "residue_standard_error": (four, 0.02 * np.abs(residue)),
            "residue_rate": (four, np.where(np.isfinite(residue), 0.0, np.nan)),
            "mode_significance": (two, np.where(np.isfinite(frequency), 50.0, np.nan)),
            "mode_outcome": (two, np.where(np.isfinite(frequency), 0, 10).astype(np.int8)),
            "mode_in_population": ("mode", np.arange(modes) < 8),
            "base_frequency": ("response", scalar["base_frequency"]),
            "base_damping_ratio": ("response", scalar["base_damping_ratio"]),
            "base_residue": (
                per_channel,
                np.array([p.base_residue for p in plants])[:, None, None],
            ),
            "feedthrough": (per_channel, np.array([p.feedthrough for p in plants])[:, None, None]),
            "delay": ("response", scalar["delay"]),
            "noise_ratio": ("response", generator.normal(1.0, 0.03, count)),
            "fit_outcome": ("response", np.zeros(count, dtype=np.int8)),
        },
        coords={
            **labels,
            "mode": [*(f"M{k}" for k in range(1, 9)), "E1"],
            "output": ["position"],
            "input": ["drive"],
        },
        attrs={
            "base": "pivot",
            "residues": "real",
            "input_unit": "A",
            "output_unit": "um",
            "sample_period": 0.0,
            "variance_source": "coherence",
        },
    )


def population_of(modes):
    chosen = modes.isel(mode=slice(0, 8))
    quantities = ["modal_frequency", "damping_ratio", "residue"]
    residue = chosen["residue"].values[:, :, 0, 0]
    values = np.stack(
        [
            np.exp(np.log(chosen["modal_frequency"].values).mean(axis=0)),
            np.exp(np.log(chosen["damping_ratio"].values).mean(axis=0)),
            residue.mean(axis=0),
        ],
        axis=1,
    )
    dims = ("mode", "quantity")
    spread = np.tile([0.006, 0.1, 0.06], (8, 1))
    return xr.Dataset(
        {
            "population_value": (dims, values),
            "population_value_standard_error": (dims, np.abs(values) * 0.002),
            "temperature_slope": (dims, np.tile([-2e-4, 3e-3, 0.0], (8, 1))),
            "temperature_slope_standard_error": (dims, np.full((8, 3), 1e-5)),
            "unit_deviation": (dims, spread),
            "head_deviation": (dims, 0.4 * spread),
            "residual_deviation": (dims, 0.1 * spread),
            "fit_deviation": (dims, 0.05 * spread),
            "responses_found": ("mode", np.full(8, modes.sizes["response"])),
            "responses_missing": ("mode", np.zeros(8, dtype=int)),
        },
        coords={"mode": modes["mode"].values[:8], "quantity": quantities},
        attrs={"reference_temperature": 25.0, "base": "pivot"},
    )


def plant_set_of(modes, *, order=6, points=240, excluded=()):
    """A set around the mean plant of the invented modes, with a weight that holds them all."""
    names = [str(name) for name in modes["response"].values if str(name) not in dict(excluded)]
    used = modes.sel(response=names)
    plants = [plant_parameters(used, at) for at in range(len(names))]
    nominal = modal_realisation(_mean_plant(used), delay_order=2)
    frequency = np.geomspace(50.0, 22000.0, points)
    over = frequency_response(nominal, frequency).reshape(-1)
    error = np.array([np.abs(modal_response(frequency, p) / over - 1.0) for p in plants])
    radius = np.maximum(error.max(axis=0) * 1.02, 0.02)
    weight = fit_magnitude_weight(frequency, radius, order)
    fitted = tuple(_fitted(used, at, plant) for at, plant in enumerate(plants))
    return _set(nominal, weight, frequency, radius, error, fitted, excluded)


def _mean_plant(modes):
    chosen = modes.isel(mode=slice(0, 8)).mean("response")
    return ModalParameters(
        modal_frequency=chosen["modal_frequency"].values,
        damping_ratio=chosen["damping_ratio"].values,
        residue=chosen["residue"].values[:, 0, 0],
        residue_rate=np.zeros(8),
        base="pivot",
        base_frequency=float(chosen["base_frequency"]),
        base_damping_ratio=float(chosen["base_damping_ratio"]),
        base_residue=float(chosen["base_residue"].values[0, 0]),
        feedthrough=float(chosen["feedthrough"].values[0, 0]),
        delay=float(chosen["delay"]),
    )


def _fitted(modes, at, plant):
    one = modes.isel(response=at)
    labels = {
        name: one[name].item() for name in ("unit", "head", "temperature", "lot") if name in one
    }
    return fields.FittedPlant(
        response=str(one["response"].item()),
        labels=labels,
        modal_frequency=plant.modal_frequency,
        damping_ratio=plant.damping_ratio,
        residue=plant.residue[:, None, None],
        residue_rate=plant.residue_rate[:, None, None],
        base="pivot",
        base_gain=np.zeros((1, 1)),
        base_frequency=plant.base_frequency,
        base_damping_ratio=plant.base_damping_ratio,
        base_residue=np.array([[plant.base_residue]]),
        feedthrough=np.array([[plant.feedthrough]]),
        delay=plant.delay,
    )


def _set(nominal, weight, frequency, radius, error, plants, excluded):
    weight_matrices = fields.Matrices(*weight.state_space())
    magnitude = weight.magnitude(frequency)
    top = error.argmax(axis=0)
    set_by = tuple(plants[k].response if error[k, at] > 0.02 else "" for at, k in enumerate(top))
    reach = error / magnitude
    plants = tuple(
        replace(p, reach=float(r.max()), reach_frequency=float(frequency[r.argmax()]))
        for p, r in zip(plants, reach, strict=True)
    )
    first = sorted(plants, key=lambda p: -p.reach)[:4]
    certificate = fields.Certificate(
        measured=fields.Measured(
            held=len(plants),
            of=len(plants),
            setting=len(set(set_by) - {""}),
            excluded=tuple(fields.Excluded(*pair) for pair in excluded),
        ),
        between_grid=fields.BetweenGrid("exact norm", float(reach.max()), 1e-6),
        optimality=fields.Optimality(
            weight.excess_db, weight.floor_db, weight.gap_db, weight.order
        ),
        envelope=fields.Envelope(temperature=(10.0, 50.0)),
        audit=fields.AuditVerdict(passed=True),
    )
    empty = fields.Interconnection(*(np.zeros((0, 0)) for _ in range(4)))
    return fields.PlantSetFields(
        form="multiplicative",
        time=fields.TimeBase(),
        inputs=(fields.Channel("drive", "A"),),
        outputs=(fields.Channel("position", "um"),),
        band=(50.0, 22000.0),
        nominal=fields.Nominal(nominal.A, nominal.B, nominal.C, nominal.D),
        weights=fields.Weights(left=weight_matrices),
        parameters=(),
        interconnection=empty,
        plants=plants,
        radii=fields.Radii(frequency, radius, magnitude, set_by, np.ones(frequency.size), 0.02),
        certificate=certificate,
        attribution=tuple(
            fields.Attribution(p.response, p.reach_frequency, p.reach, "M5") for p in first
        ),
        provenance=fields.Provenance(versions={"identkit": "0.1.0"}, time="2026-05-01T10:00:00"),
    )


def audit_of(plant_set, modes):
    """An audit of the set: used plants held, the plants left out judged too."""
    used = {plant.response: plant for plant in plant_set.plants}
    excluded = {each.label: each.reason for each in plant_set.certificate.measured.excluded}
    names = [str(name) for name in modes["response"].values]
    reach = np.array([used[n].reach if n in used else 3.2 for n in names])
    frequency = np.array([used[n].reach_frequency if n in used else 6300.0 for n in names])
    labels = {k: v for k, v in modes.coords.items() if v.dims == ("response",)}
    held = np.where(reach <= 1.0, "held", "not held")
    columns = {
        "verdict": held,
        "fit_verdict": held,
        "fit_reach": reach,
        "fit_reach_frequency": frequency,
        "nearest_mode": np.full(len(names), "M4"),
        "raw_verdict": np.where(reach <= 1.0, "cannot tell", "not held"),
        "raw_reach": reach * 1.1,
        "raw_reach_frequency": frequency,
        "raw_reach_with_allowance": reach * 0.9,
        "raw_reach_with_allowance_frequency": frequency,
        "excluded": np.array([n in excluded for n in names]),
        "reason": np.array([excluded.get(n, "") for n in names]),
    }
    return xr.Dataset(
        {name: ("response", values) for name, values in columns.items()},
        coords=labels,
        attrs={"failed_checks": "[]"},
    )
