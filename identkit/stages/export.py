"""Stage export: the plant set out of nominal, bound and modes; draft, then files after the audit.

What is written is what was bound: matrices of the nominal and of the weight as the bound used them.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from platform import python_version
from typing import Any

import numpy as np
import xarray as xr

from identkit.errors import InputError, Problem
from identkit.forms.catalogue import form_named
from identkit.methods.radius_problem import TWO_PI, radius_problem
from identkit.plant_set import fields as f
from identkit.plant_set.claims import ROUNDING
from identkit.plant_set.document import plain
from identkit.plant_set.json_file import write_json
from identkit.plant_set.model import PlantSet
from identkit.plant_set.reach import reach_of_plants
from identkit.plant_set.sample import static
from identkit.stages.audit import run_verdict
from identkit.stages.set_plants import labels_of, set_plants

OUTSIDE_FACTOR = 10.0
LIBRARIES = ("identkit", "numpy", "scipy", "xarray")
SET_FILES = {"json": "set.json", "hdf5": "set.h5"}
NOT_IN_ENVELOPE = ("source", "measured_at", "repeat", "fixture")


@dataclass(frozen=True)
class SetOrigin:
    """What the set file says of where it came from, and of the settings its radii rest on.

    Attributes
    ----------
    radius_floor, cap
        As in [bound].
    settings
        All settings of the study as plain values.
    input_digests
        Digest by file.
    time
        ISO 8601; now by default.
    """

    radius_floor: float = 0.02
    cap: Sequence[tuple[float, float]] = ()
    settings: Mapping[str, Any] = field(default_factory=dict)
    input_digests: Mapping[str, str] = field(default_factory=dict)
    time: str = field(default_factory=lambda: datetime.now(UTC).isoformat(timespec="seconds"))


def build_set(
    nominal: xr.Dataset, bound: xr.Dataset, modes: xr.Dataset, origin: SetOrigin | None = None
) -> PlantSet:
    """Put the set together from the datasets of the stages.

    Parameters
    ----------
    nominal, bound
        As `choose_nominal` and `bound_spread` wrote them.
    modes
        The fits that were bound.
    origin
        Settings and provenance.

    Returns
    -------
    PlantSet
        With all plants of finite reach, held or excluded; not audited yet.

    Raises
    ------
    InputError
        If the form has no export yet.
    """
    origin = SetOrigin() if origin is None else origin
    form = form_named(str(bound.attrs["form"]))
    centre = f.Nominal(**vars(_matrices(nominal, "nominal")))
    left, right = _matrices(bound, "weight"), static(np.eye(centre.D.shape[0]))
    low, high = (float(hertz) for hertz in bound.attrs["band"])
    contents = PlantSet(
        form=form.name,
        time=f.TimeBase(),
        inputs=_channels(modes, "input"),
        outputs=_channels(modes, "output"),
        band=(low, high),
        nominal=centre,
        weights=f.Weights(left, right),
        parameters=(),
        interconnection=form.interconnection(centre, left, right),
        plants=(),
        radii=_radii(bound, origin),
        certificate=_certificate(bound, modes),
        attribution=_attribution(bound),
        provenance=_provenance(origin),
    )
    return replace(contents, plants=_plants(contents, modes))


def finished_set(
    draft: PlantSet,
    audited: xr.Dataset,
    coverage: Mapping[str, Any] | None = None,
    *,
    forced: bool = False,
) -> PlantSet:
    """Return the draft with the verdict of its audit and the statement of coverage in it.

    Parameters
    ----------
    draft
        The set that was audited.
    audited
        As `audit` returned it.
    coverage
        As `state_coverage` returned it; nothing is claimed where its content is None.
    forced
        Whether the set is to be written although the audit failed.
    """
    stated = None
    if coverage is not None and coverage.get("content") is not None:
        stated = f.Coverage(
            float(coverage["content"]),
            float(coverage["confidence"]),
            int(coverage["units"]),
            str(coverage["method"]),
            tuple(str(line) for line in coverage["assumptions"]),
        )
    verdict = run_verdict(audited, forced=forced)
    certificate = replace(draft.certificate, coverage=stated, audit=verdict)
    return replace(draft, certificate=certificate)


def write_set_files(
    final: PlantSet, folder: Path, formats: Sequence[str] = ("json", "hdf5")
) -> tuple[Path, ...]:
    """Write the set files, or take away old ones where the audit failed and nothing is forced.

    Parameters
    ----------
    final
        As `finished_set` returned it.
    folder
        Where ``set.json`` and ``set.h5`` stand.
    formats
        "json" and "hdf5".

    Returns
    -------
    tuple of Path
        The files written; none where the audit failed.

    Raises
    ------
    InputError
        If the set was not audited, or a format is unknown.
    """
    verdict = final.certificate.audit
    if verdict is None:
        raise InputError(Problem("certificate.audit", "nothing", "a set that was audited"))
    for name in SET_FILES.values():
        (folder / name).unlink(missing_ok=True)
    if not (verdict.passed or verdict.forced):
        return ()
    written = []
    for format in formats:
        path = folder / SET_FILES.get(format, f"set.{format}")
        final.save(path, format)
        written.append(path)
    return tuple(written)


def write_certificate(
    final: PlantSet, path: Path, verdict: Sequence[str], written: Sequence[Path]
) -> None:
    """Write ``certificate.json``: what is claimed, the verdict in words, the set files written.

    Parameters
    ----------
    final
        As `finished_set` returned it.
    path
        Where to.
    verdict
        Sentences for people.
    written
        The set files.
    """
    audited = final.certificate.audit
    document = {
        "held": audited is not None and audited.passed,
        "verdict": list(verdict),
        "set_files": [item.name for item in written],
        "form": final.form,
        "band": list(final.band),
        "certificate": plain(final.certificate),
    }
    write_json(document, path)


def _matrices(data: xr.Dataset, name: str) -> f.Matrices:
    return f.Matrices(*(np.asarray(data[f"{name}_{part}"].values, dtype=float) for part in "ABCD"))


def _channels(modes: xr.Dataset, dim: str) -> tuple[f.Channel, ...]:
    unit = str(modes.attrs.get(f"{dim}_unit", ""))
    names = modes[dim].values if dim in modes.coords else [dim] * modes.sizes[dim]
    return tuple(f.Channel(str(name), unit) for name in names)


def _radii(bound: xr.Dataset, origin: SetOrigin) -> f.Radii:
    frequency = np.asarray(bound["frequency"].values, dtype=float)
    required = np.asarray(bound["required_radius"].values, dtype=float)
    allowed = np.asarray(bound["allowed_excess"].values, dtype=float)
    ceiling = None
    if origin.cap:
        known, values = np.array(origin.cap, dtype=float).T
        ceiling = np.interp(np.log(frequency), np.log(known), values)
    return f.Radii(
        frequency,
        required,
        np.asarray(bound["weight_magnitude"].values, dtype=float),
        tuple(str(name) for name in bound["radius_setter"].values),
        allowed,
        origin.radius_floor,
        ceiling,
        extension_of(frequency, required, allowed, ceiling),
    )


def extension_of(
    frequency: f.FloatArray,
    required: f.FloatArray,
    allowed: f.FloatArray,
    ceiling: f.FloatArray | None,
) -> f.Extension:
    """Return where outside the points a weight is kept as well (`methods.radius_problem`)."""
    problem = radius_problem(
        frequency,
        required,
        0,
        profile=allowed,
        cap=ceiling,
        ceiling=None,
        outside_factor=OUTSIDE_FACTOR,
    )
    hertz = problem.omega[np.isfinite(problem.omega)] / TWO_PI
    outside = (hertz < frequency[0] * (1 - 1e-9)) | (hertz > frequency[-1] * (1 + 1e-9))
    return f.Extension(OUTSIDE_FACTOR, hertz[outside], bool(np.isinf(problem.omega).any()))


def _certificate(bound: xr.Dataset, modes: xr.Dataset) -> f.Certificate:
    used = np.asarray(bound["response_used"].values, dtype=bool)
    names, reasons = bound["response"].values, bound["exclusion_reason"].values
    tolerance = float(bound["between_grid_tolerance"])
    held = bound["reach"].values[used] <= 1.0 + ROUNDING + tolerance
    return f.Certificate(
        measured=f.Measured(
            held=int(held.sum()),
            of=int(used.sum()),
            setting=len({str(name) for name in bound["radius_setter"].values} - {""}),
            excluded=tuple(
                f.Excluded(str(name), str(reason))
                for name, reason in zip(names[~used], reasons[~used], strict=True)
            ),
        ),
        between_grid=f.BetweenGrid(
            str(bound.attrs["between_grid_method"]), float(bound["between_grid_worst"]), tolerance
        ),
        optimality=f.Optimality(
            float(bound["excess_db"]),
            float(bound["floor_db"]),
            float(bound["gap_db"]),
            int(bound["weight_order"]),
        ),
        envelope=_envelope([row for row, u in zip(labels_of(modes), used, strict=True) if u]),
    )


def _envelope(rows: Sequence[Mapping[str, str | float]]) -> f.Envelope:
    """Return what was measured: the span of temperature and position, the values of the rest."""
    seen: dict[str, set[str | float]] = {}
    for row in rows:
        for name, value in row.items():
            seen.setdefault(name, set()).add(value)
    spans = {
        name: (float(min(map(float, seen[name]))), float(max(map(float, seen[name]))))
        for name in ("temperature", "position")
        if name in seen
    }
    labels = {
        name: tuple(sorted(values, key=lambda value: (isinstance(value, str), value)))
        for name, values in seen.items()
        if name not in spans and name not in NOT_IN_ENVELOPE
    }
    return f.Envelope(labels, spans.get("temperature"), spans.get("position"))


def _attribution(bound: xr.Dataset) -> tuple[f.Attribution, ...]:
    """Return the intervals that a plant sets, those nearest the weight first."""
    names = ("interval_response", "interval_frequency", "interval_reach", "interval_mode")
    lines = [
        f.Attribution(str(label), float(frequency), float(reach), str(mode))
        for label, frequency, reach, mode in zip(*(bound[n].values for n in names), strict=True)
        if str(label)
    ]
    return tuple(sorted(lines, key=lambda line: -line.reach))


def _provenance(origin: SetOrigin) -> f.Provenance:
    versions = {name: version(name) for name in LIBRARIES} | {"python": python_version()}
    return f.Provenance(origin.input_digests, versions, origin.settings, origin.time)


def _plants(contents: f.PlantSetFields, modes: xr.Dataset) -> tuple[f.FittedPlant, ...]:
    """Return all plants with the reach that the file's own numbers give.

    The bound proves that no plant reaches beyond 1; how far a plant inside reaches is sought
    exactly here only. A plant of infinite reach (another number of unstable poles) has no place in
    the file, which holds no infinite number; it is named among the excluded.
    """
    plants, _ = set_plants(modes)
    own = reach_of_plants(contents, plants)
    return tuple(
        replace(plant, reach=float(value), reach_frequency=float(hertz))
        for plant, value, hertz in zip(plants, own.value, own.frequency, strict=True)
        if np.isfinite(value)
    )
