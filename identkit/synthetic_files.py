"""The invented campaign as files: what the bench would have written, and the truth beside it."""

import json
from dataclasses import asdict
from pathlib import Path

import numpy as np

from identkit.methods.arrays import FloatArray
from identkit.synthetic import FILE_PATTERN, InventedCampaign, InventedResponse, response_name


def write_campaign(folder: Path, campaign: InventedCampaign, *, bad_files: bool = True) -> None:
    """Write the campaign as the bench would: one CSV file per response, and the truth beside it.

    Parameters
    ----------
    folder
        Receives ``bench/`` and ``truth.json``; made if it does not exist.
    campaign
        What to write.
    bad_files
        Spoil three files the way benches do: cut short, text in a number, impossible coherence.
    """
    for response in campaign.responses:
        path = folder / FILE_PATTERN.format(**response.labels)
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(_csv_text(campaign.frequency, response), encoding="utf-8")
    if bad_files:
        _spoil(folder, campaign)
    (folder / "truth.json").write_text(_truth_text(campaign), encoding="utf-8")


def _csv_text(frequency: FloatArray, response: InventedResponse) -> str:
    magnitude = 20.0 * np.log10(np.abs(response.frequency_response))
    phase = np.degrees(np.angle(response.frequency_response))
    rows = zip(frequency, magnitude, phase, response.coherence, strict=True)
    lines = ["Freq [kHz],Gain [dB],Phase [deg],Coherence"]
    lines += [f"{f / 1e3:.8f},{m:.6f},{p:.5f},{c:.9f}" for f, m, p, c in rows]
    return "\n".join(lines) + "\n"


def _spoil(folder: Path, campaign: InventedCampaign) -> None:
    count = len(campaign.responses)
    cut, text, impossible = (
        folder / FILE_PATTERN.format(**campaign.responses[at].labels)
        for at in (count // 11, count // 2 + 1, count - 7)
    )
    cut.write_text(cut.read_text(encoding="utf-8")[:31], encoding="utf-8")
    lines = text.read_text(encoding="utf-8").splitlines()
    lines[10] = lines[10].replace(lines[10].split(",")[1], "overload")
    text.write_text("\n".join(lines) + "\n", encoding="utf-8")
    lines = impossible.read_text(encoding="utf-8").splitlines()
    lines[20] = ",".join([*lines[20].split(",")[:3], "1.7"])
    impossible.write_text("\n".join(lines) + "\n", encoding="utf-8")


def _truth_text(campaign: InventedCampaign) -> str:
    rows = []
    for response in campaign.responses:
        plant = {
            key: value.tolist() if isinstance(value, np.ndarray) else value
            for key, value in asdict(response.plant).items()
        }
        rows.append(
            {"response": response_name(response.labels), "labels": response.labels, "plant": plant}
        )
    return json.dumps({"invented": True, "responses": rows}, indent=1)
