"""Run a small invented campaign to a set file: ``python small_study.py FOLDER``.

Sixteen responses of four units, one of them cracked and left out with its reason. With the name of
a form behind it, the study that stands in FOLDER is run again in that form.
"""

import sys
from pathlib import Path

from identkit.pipeline import run_study
from identkit.synthetic import Story, invent_campaign
from identkit.synthetic_files import write_campaign

STUDY = """
[responses]
files = "bench/lot-{lot}_{measured_at}/{unit}_H{head}_{temperature:g}C.csv"
averages = 32
band = [50, 22000]
[responses.columns]
frequency = "Freq [kHz]"
magnitude_db = "Gain [dB]"
phase_deg = "Phase [deg]"
coherence = "Coherence"
[responses.units]
input = "A"
output = "um"
[bound]
order = 8
exclude = [{ unit = "U04", reason = "cracked arm" }]
"""


def run(folder: Path) -> None:
    """Write the campaign, and run it up to its set files in ``results``."""
    campaign = invent_campaign(
        units=4, heads=2, temperatures=(25.0, 50.0), story=Story(cracked_unit="U04")
    )
    write_campaign(folder, campaign, bad_files=False)
    (folder / "study.toml").write_text(STUDY, encoding="utf-8")
    run_study(folder / "study.toml", until="export", jobs=1)


def run_again(folder: Path, form: str) -> None:
    """Bound the campaign of a study that was run before in another form."""
    study = STUDY.replace("[bound]", f'[bound]\nform = "{form}"')
    (folder / "study.toml").write_text(study, encoding="utf-8")
    run_study(folder / "study.toml", until="export", jobs=1)


if __name__ == "__main__":
    if len(sys.argv) > 2:
        run_again(Path(sys.argv[1]), sys.argv[2])
    else:
        run(Path(sys.argv[1]))
