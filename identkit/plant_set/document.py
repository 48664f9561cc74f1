"""A plant set as plain JSON values: writing, and reading with every shape checked."""

from collections.abc import Callable, Mapping
from dataclasses import fields
from typing import Any, TypeVar

import numpy as np

from identkit.plant_set.fields import (
    FORMAT,
    Attribution,
    AuditVerdict,
    BetweenGrid,
    Block,
    Certificate,
    Channel,
    Coverage,
    Envelope,
    Excluded,
    Extension,
    FurtherCeiling,
    Interconnection,
    Matrices,
    Measured,
    Nominal,
    Optimality,
    PlantSetFields,
    Provenance,
    Radii,
    RealFactor,
    TimeBase,
    Weights,
)
from identkit.plant_set.node import Node
from identkit.plant_set.plant_document import plant_from, plant_to

Document = dict[str, Any]
DOMAINS = ("continuous", "sampled")
Kind = TypeVar("Kind")


def to_document(contents: PlantSetFields) -> Document:
    """Return the set as JSON values, fields in the order of the schema."""
    return {
        "format": FORMAT,
        "form": contents.form,
        "time": plain(contents.time),
        "inputs": [plain(channel) for channel in contents.inputs],
        "outputs": [plain(channel) for channel in contents.outputs],
        "band": list(contents.band),
        "nominal": plain(contents.nominal),
        "weights": plain(contents.weights),
        "parameters": [plain(factor) for factor in contents.parameters],
        "interconnection": plain(contents.interconnection),
        "plants": [plant_to(plant) for plant in contents.plants],
        "radii": plain(contents.radii),
        "certificate": plain(contents.certificate),
        "attribution": [plain(line) for line in contents.attribution],
        "provenance": plain(contents.provenance),
    }


def plain(value: Any) -> Any:
    """Return dataclasses, arrays, tuples and mappings as JSON values; None fields are left out."""
    if isinstance(value, np.ndarray | np.generic):
        return value.tolist()
    if hasattr(value, "__dataclass_fields__"):
        items = {item.name: getattr(value, item.name) for item in fields(value)}
        return {name: plain(content) for name, content in items.items() if content is not None}
    if isinstance(value, Mapping):
        return {str(name): plain(content) for name, content in value.items()}
    if isinstance(value, list | tuple):
        return [plain(item) for item in value]
    return value


def from_document(document: Any, place: str) -> PlantSetFields:
    """Read a set from JSON values.

    Parameters
    ----------
    document
        What `to_document` returns.
    place
        File the document came from, for error messages.

    Raises
    ------
    InputError
        Where a field is missing, of the wrong kind, not finite, or of a shape that contradicts
        another field; the message names the field.
    """
    root = Node(document, place)
    root.expect(root.at("format").text() == FORMAT, "format", f"the text {FORMAT!r}")
    inputs, outputs = (_channels(root.at(name)) for name in ("inputs", "outputs"))
    shape = (len(outputs), len(inputs))
    weights = root.at("weights")
    return PlantSetFields(
        form=root.at("form").text(),
        time=_time(root.at("time")),
        inputs=inputs,
        outputs=outputs,
        band=root.at("band").span(),
        nominal=_nominal(root.at("nominal"), shape),
        weights=Weights(
            _optional(weights.maybe("left"), _square), _optional(weights.maybe("right"), _square)
        ),
        parameters=_factors(root.at("parameters")),
        interconnection=_interconnection(root.at("interconnection"), shape),
        plants=tuple(plant_from(node, shape) for node in root.at("plants").items()),
        radii=_radii(root.at("radii")),
        certificate=_certificate(root.at("certificate")),
        attribution=tuple(
            Attribution(
                node.at("label").text(),
                node.at("frequency").number(),
                node.at("reach").number(),
                node.at("mode").text(),
            )
            for node in root.at("attribution").items()
        ),
        provenance=_provenance(root.at("provenance")),
    )


def _time(node: Node) -> TimeBase:
    domain, period = node.at("domain").text(), node.at("period").number()
    node.expect(domain in DOMAINS, "domain", f"one of {', '.join(DOMAINS)}")
    wanted = "a period above 0 s" if domain == "sampled" else "0 for continuous time"
    node.expect((domain == "sampled") == (period > 0.0), "period", wanted)
    return TimeBase(domain, period)


def _channels(node: Node) -> tuple[Channel, ...]:
    return tuple(Channel(item.at("name").text(), item.at("unit").text()) for item in node.items())


def _matrices(node: Node, shape: tuple[int, int] | None) -> Matrices:
    feed = node.at("D").matrix(shape)
    outputs, inputs = feed.shape
    drift_node = node.at("A")
    states = len(drift_node.items())
    return Matrices(
        drift_node.matrix((states, states)),
        node.at("B").matrix((states, inputs)),
        node.at("C").matrix((outputs, states)),
        feed,
    )


def _nominal(node: Node, shape: tuple[int, int]) -> Nominal:
    return Nominal(**vars(_matrices(node, shape)), delay=node.at("delay").number())


def _square(node: Node) -> Matrices:
    matrices = _matrices(node, None)
    node.expect(matrices.D.shape[0] == matrices.D.shape[1], "D", "a square weight")
    return matrices


def _factors(node: Node) -> tuple[RealFactor, ...]:
    return tuple(
        RealFactor(
            item.at("name").text(),
            item.at("meaning").text(),
            item.at("centre").number(),
            item.at("half_range").number(),
            item.at("unit").text(),
        )
        for item in node.items()
    )


def _block(node: Node) -> Block:
    parameter = node.maybe("parameter")
    return Block(
        node.at("kind").text(),
        node.at("rows").whole(),
        node.at("columns").whole(),
        _optional(parameter, Node.text),
    )


def _interconnection(node: Node, shape: tuple[int, int]) -> Interconnection:
    blocks = tuple(_block(item) for item in node.at("blocks").items())
    # A block of Delta turns its columns (the interconnection's outputs) into its rows.
    expected = (
        shape[0] + sum(block.columns for block in blocks),
        shape[1] + sum(block.rows for block in blocks),
    )
    return Interconnection(**vars(_matrices(node, expected)), blocks=blocks)


def _radii(node: Node) -> Radii:
    frequency = node.at("frequency").vector()
    node.expect(bool(np.all(np.diff(frequency) > 0.0)), "frequency", "increasing frequencies")
    points = frequency.size
    set_by = node.at("set_by").texts()
    node.expect(len(set_by) == points, "set_by", f"{points} texts, one per frequency")
    ceiling = node.maybe("ceiling")
    return Radii(
        frequency,
        node.at("required_radius").vector(points),
        node.at("weight_magnitude").vector(points),
        set_by,
        node.at("allowed_excess").vector(points),
        node.at("floor").number(),
        None if ceiling is None else ceiling.vector(points),
        _optional(node.maybe("extension"), _extension),
        _optional(node.maybe("further_ceiling"), _further_ceiling),
    )


def _extension(node: Node) -> Extension:
    return Extension(
        node.at("factor").number(), node.at("frequency").vector(), node.at("at_infinity").flag()
    )


def _further_ceiling(node: Node) -> FurtherCeiling:
    frequency = node.at("frequency").vector()
    return FurtherCeiling(frequency, node.at("value").vector(frequency.size))


def _certificate(node: Node) -> Certificate:
    measured, grid, best = (node.at(k) for k in ("measured", "between_grid", "optimality"))
    return Certificate(
        measured=Measured(
            measured.at("held").whole(),
            measured.at("of").whole(),
            measured.at("setting").whole(),
            tuple(
                Excluded(item.at("label").text(), item.at("reason").text())
                for item in measured.at("excluded").items()
            ),
        ),
        between_grid=BetweenGrid(
            grid.at("method").text(), grid.at("worst").number(), grid.at("tolerance").number()
        ),
        optimality=Optimality(
            best.at("excess_db").number(),
            best.at("floor_db").number(),
            best.at("gap_db").number(),
            best.at("order").whole(),
        ),
        envelope=_envelope(node.at("envelope")),
        coverage=_optional(node.maybe("coverage"), _coverage),
        audit=_optional(node.maybe("audit"), _audit),
    )


def _optional(node: Node | None, read: Callable[[Node], Kind]) -> Kind | None:
    return None if node is None else read(node)


def _envelope(node: Node) -> Envelope:
    labels = node.at("labels")
    return Envelope(
        {name: tuple(i.label() for i in labels.at(name).items()) for name in labels.names()},
        _optional(node.maybe("temperature"), Node.span),
        _optional(node.maybe("position"), Node.span),
    )


def _coverage(node: Node) -> Coverage:
    return Coverage(
        node.at("content").number(),
        node.at("confidence").number(),
        node.at("units").whole(),
        node.at("method").text(),
        node.at("assumptions").texts(),
    )


def _audit(node: Node) -> AuditVerdict:
    return AuditVerdict(
        node.at("passed").flag(), node.at("failed").texts(), node.at("forced").flag()
    )


def _texts_by_name(node: Node) -> dict[str, str]:
    return {name: node.at(name).text() for name in node.names()}


def _provenance(node: Node) -> Provenance:
    return Provenance(
        _texts_by_name(node.at("input_digests")),
        _texts_by_name(node.at("versions")),
        node.at("settings").mapping(),
        node.at("time").text(),
    )
