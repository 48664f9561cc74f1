"""One fitted plant as JSON values, and back."""

from typing import Any

import numpy as np

from identkit.plant_set.fields import Covariance, FittedPlant, FloatArray
from identkit.plant_set.node import Node

BASES = ("free", "pivot", "none")


def plant_to(plant: FittedPlant) -> dict[str, Any]:
    """Return a plant as JSON values."""
    document: dict[str, Any] = {
        "response": plant.response,
        "labels": dict(plant.labels),
        "modal_parameters": _modal_parameters(plant),
        "delay": plant.delay,
    }
    if plant.covariance is not None:
        document["covariance"] = {
            "parameters": list(plant.covariance.parameters),
            "matrix": plant.covariance.matrix.tolist(),
        }
    document["delta"] = plant.delta.tolist()
    document["reach"] = {"value": plant.reach, "frequency": plant.reach_frequency}
    return document


def _modal_parameters(plant: FittedPlant) -> dict[str, Any]:
    arrays = ("modal_frequency", "damping_ratio", "residue", "residue_rate")
    document: dict[str, Any] = {name: getattr(plant, name).tolist() for name in arrays}
    document["base"] = plant.base
    if plant.base == "free":
        document["base_gain"] = plant.base_gain.tolist()
    if plant.base == "pivot":
        document["base_frequency"] = plant.base_frequency
        document["base_damping_ratio"] = plant.base_damping_ratio
        document["base_residue"] = plant.base_residue.tolist()
    document["feedthrough"] = plant.feedthrough.tolist()
    return document


def plant_from(node: Node, shape: tuple[int, int]) -> FittedPlant:
    """Read a plant; `shape` is (outputs, inputs).

    Raises
    ------
    InputError
        Where a field is missing, of the wrong kind or shape; the message names it.
    """
    modal = node.at("modal_parameters")
    frequency = modal.at("modal_frequency").vector()
    base = modal.at("base").text()
    modal.expect(base in BASES, "base", f"one of {', '.join(BASES)}")
    by_mode = (frequency.size, *shape)
    labels = node.at("labels")
    reach = node.at("reach")
    return FittedPlant(
        response=node.at("response").text(),
        modal_frequency=frequency,
        damping_ratio=modal.at("damping_ratio").vector(frequency.size),
        residue=modal.at("residue").matrices(by_mode),
        residue_rate=modal.at("residue_rate").matrices(by_mode),
        base=base,
        **_base(modal, base, shape),
        feedthrough=modal.at("feedthrough").matrix(shape),
        delay=node.at("delay").number(),
        labels={name: labels.at(name).label() for name in labels.names()},
        covariance=_covariance(node.maybe("covariance")),
        delta=node.at("delta").vector(),
        reach=reach.at("value").number(),
        reach_frequency=reach.at("frequency").number(),
    )


def _base(modal: Node, base: str, shape: tuple[int, int]) -> dict[str, Any]:
    empty: FloatArray = np.zeros(shape)
    pivot = base == "pivot"
    return {
        "base_gain": modal.at("base_gain").matrix(shape) if base == "free" else empty,
        "base_frequency": modal.at("base_frequency").number() if pivot else 0.0,
        "base_damping_ratio": modal.at("base_damping_ratio").number() if pivot else 0.0,
        "base_residue": modal.at("base_residue").matrix(shape) if pivot else empty,
    }


def _covariance(node: Node | None) -> Covariance | None:
    if node is None:
        return None
    names = node.at("parameters").texts()
    return Covariance(names, node.at("matrix").matrix((len(names), len(names))))
