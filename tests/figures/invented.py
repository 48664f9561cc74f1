"""Datasets of a small invented study, filled from its truth, for tests of figures and report."""

import numpy as np
import xarray as xr

from identkit.methods.modal_model import modal_response
from identkit.synthetic import invent_campaign, to_dataset


def small_campaign(units=6, heads=2, temperatures=(10.0, 50.0), seed=3, points=300):
    from identkit.synthetic import InventedBench

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


def relative_errors(campaign):
    """(responses, points) |P / P0 - 1| against the first plant of the campaign."""
    plants = np.array([modal_response(campaign.frequency, r.plant) for r in campaign.responses])
    nominal = plants[:: len(plants) // 5].mean(axis=0)
    return np.abs(plants / nominal - 1.0), nominal
