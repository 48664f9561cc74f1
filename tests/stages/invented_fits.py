"""Fits of an invented campaign made from its truth, as if every response had been fitted."""

from dataclasses import dataclass

import numpy as np
import xarray as xr

from identkit.methods.modal_model import parameter_names
from identkit.outcomes import Outcome
from identkit.synthetic import InventedCampaign, response_name

CHANNEL = ("response", "mode", "output", "input")
SCALARS = ("delay", "feedthrough", "base_frequency", "base_damping_ratio", "base_residue")


@dataclass(frozen=True)
class FitErrors:
    """Relative standard errors of the invented fits, and how often they go wrong."""

    frequency: float = 2e-4
    damping: float = 0.02
    residue: float = 0.02
    scalar: float = 0.002
    missing: float = 0.0
    extra: float = 0.0


def invented_fits(campaign: InventedCampaign, errors: FitErrors, seed: int = 0) -> xr.Dataset:
    """Return a fits dataset: truth plus errors, some modes lost, some invented."""
    rng = np.random.default_rng(seed)
    rows = [_fit(response.plant, errors, rng) for response in campaign.responses]
    most = max(row[0].shape[1] for row in rows)
    names = parameter_names("pivot", most, general=False)
    values = np.full((len(rows), 3, most), np.nan)
    covariance = np.full((len(rows), len(names), len(names)), np.nan)
    for i, (modal, modal_error, _, scalar_error) in enumerate(rows):
        count = modal.shape[1]
        values[i, :, :count] = modal
        deviation = np.concatenate([scalar_error, modal_error.T.ravel()])
        covariance[i, : deviation.size, : deviation.size] = np.diag(deviation**2)
    scalars = np.array([row[2] for row in rows])
    return _dataset(campaign, names, values, scalars, covariance)


def _fit(plant, errors, rng):
    kept = rng.uniform(size=plant.modal_frequency.size) >= errors.missing
    truth = np.array([plant.modal_frequency, plant.damping_ratio, plant.residue])[:, kept]
    relative = np.array([errors.frequency, errors.damping, errors.residue])[:, None]
    error = np.abs(truth) * relative * rng.uniform(0.7, 1.4, truth.shape)
    modal = truth + error * rng.standard_normal(truth.shape)
    if rng.uniform() < errors.extra:
        noise = np.array([rng.uniform(300.0, 20000.0), rng.uniform(0.003, 0.03), 1e7])
        noise[2] *= rng.normal()
        modal = np.column_stack([modal, noise])
        error = np.column_stack([error, np.abs(noise) * [3e-3, 0.2, 0.2]])
    order = np.argsort(modal[0])
    scalar = np.array([getattr(plant, name) for name in SCALARS])
    scalar_error = np.abs(scalar) * errors.scalar
    scalar = scalar + scalar_error * rng.standard_normal(scalar.size)
    return modal[:, order], error[:, order], scalar, scalar_error


def _dataset(campaign, names, values, scalars, covariance):
    frequency, damping, residue = (values[:, k] for k in range(3))
    most = frequency.shape[1]
    deviation = np.sqrt(np.diagonal(covariance, axis1=1, axis2=2))
    place = [names.index(f"residue_{k + 1}") for k in range(most)]
    outcome = np.where(np.isfinite(frequency), Outcome.DONE, Outcome.NOT_FITTED)
    by_response = dict(zip(SCALARS, scalars.T, strict=True))
    channel_scalars = {"feedthrough", "base_residue"}
    responses = campaign.responses
    count = len(responses)
    return xr.Dataset(
        {
            "modal_frequency": (CHANNEL[:2], frequency),
            "damping_ratio": (CHANNEL[:2], damping),
            "residue": (CHANNEL, residue[:, :, None, None]),
            "residue_rate": (CHANNEL, np.where(np.isnan(residue), np.nan, 0.0)[:, :, None, None]),
            "mode_significance": (CHANNEL[:2], np.abs(residue) / deviation[:, place]),
            "mode_outcome": (CHANNEL[:2], outcome.astype(np.int8)),
            "fit_outcome": ("response", np.zeros(count, dtype=np.int8)),
            "noise_ratio": ("response", np.ones(count)),
            "usable_points": ("response", np.full(count, 1200)),
            "parameter_covariance": (("response", "parameter", "parameter_other"), covariance),
            **{
                name: (("response", "output", "input"), value[:, None, None])
                if name in channel_scalars
                else ("response", value)
                for name, value in by_response.items()
            },
        },
        coords={
            "response": [response_name(r.labels) for r in responses],
            "output": ["position"],
            "input": ["drive"],
            "mode": np.arange(1, most + 1),
            "parameter": list(names),
            "parameter_other": list(names),
            **{
                key: ("response", np.array([r.labels[key] for r in responses]))
                for key in responses[0].labels
            },
        },
        attrs={"base": "pivot", "residues": "real", "input_unit": "A", "output_unit": "um"},
    )
