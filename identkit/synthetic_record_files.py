"""Records of the invented bench as files, and the truth beside them."""

import json
from dataclasses import asdict, replace
from pathlib import Path

import numpy as np

from identkit.methods.modal_model import ModalParameters
from identkit.synthetic import (
    FILE_PATTERN,
    InventedBench,
    InventedCampaign,
    InventedResponse,
    invent_campaign,
    response_name,
)
from identkit.synthetic_records import (
    InventedRecord,
    InventedRecorder,
    invent_record,
    invented_excitation,
)

RECORD_PATTERN = FILE_PATTERN.removesuffix(".csv") + ".npz"
_NANOMETRES = 1e3


def invent_bench_campaign(*, units: int = 8, heads: int = 2, seed: int = 1) -> InventedCampaign:
    """Draw the devices that the invented bench records, at two temperatures, in um/A."""
    return invent_campaign(
        seed=seed,
        units=units,
        heads=heads,
        temperatures=(25.0, 50.0),
        bench=InventedBench(points=2),
    )


def recorded_plant(response: InventedResponse) -> ModalParameters:
    """Return a device as the bench sees it, in nm/A."""
    plant = response.plant
    return replace(
        plant,
        residue=_NANOMETRES * plant.residue,
        base_residue=_NANOMETRES * plant.base_residue,
        feedthrough=_NANOMETRES * plant.feedthrough,
    )


def write_records(
    folder: Path,
    campaign: InventedCampaign,
    *,
    recorder: InventedRecorder | None = None,
    seed: int = 1,
    bad_files: bool = True,
) -> None:
    """Write one record per device, head and temperature, and the truth beside them.

    Parameters
    ----------
    folder
        Receives ``bench/`` and ``truth.json``; made if it does not exist.
    campaign
        Devices to record.
    recorder
        The bench; the demo's by default.
    seed
        Of its noise.
    bad_files
        Cut one record short.
    """
    recorder = recorder or InventedRecorder()
    generator = np.random.default_rng(seed)
    first = recorded_plant(campaign.responses[0])
    excitation = invented_excitation(first, recorder).astype(np.float32).astype(float)
    rows = []
    for response in campaign.responses:
        plant = recorded_plant(response)
        path = folder / RECORD_PATTERN.format(**response.labels)
        path.parent.mkdir(parents=True, exist_ok=True)
        _save(path, invent_record(plant, excitation, recorder, generator), recorder)
        rows.append(_truth(response, plant))
    if bad_files:
        at = campaign.responses[len(campaign.responses) // 3]
        cut = folder / RECORD_PATTERN.format(**at.labels)
        cut.write_bytes(cut.read_bytes()[:60_000])
    text = json.dumps({"invented": True, "responses": rows}, indent=1)
    (folder / "truth.json").write_text(text, encoding="utf-8")


def _save(path: Path, record: InventedRecord, recorder: InventedRecorder) -> None:
    np.savez_compressed(
        path,
        allow_pickle=False,
        excitation=record.excitation.astype(np.float32),
        drive=record.drive.astype(np.float32),
        burst_n=record.in_phase.astype(np.float32),
        burst_q=record.quadrature.astype(np.float32),
        sample_period=recorder.period,
    )


def _truth(response: InventedResponse, plant: ModalParameters) -> dict[str, object]:
    values = {
        key: value.tolist() if isinstance(value, np.ndarray) else value
        for key, value in asdict(plant).items()
    }
    return {"response": response_name(response.labels), "labels": response.labels, "plant": values}
