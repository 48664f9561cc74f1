"""Turn 72 measured head-related impulse responses into frequency responses; see README.md.

Usage: python extract.py FILE, where FILE is MIT_KEMAR_normal_pinna.sofa of Debian's libmysofa1.
"""

import sys
from pathlib import Path

import h5py
import numpy as np
import xarray as xr

EAR = 0
BAND_HZ = (200.0, 12000.0)
ATTRIBUTES = {
    "title": "Head-related responses of a KEMAR mannequin, left ear, horizontal plane",
    "source": "W. G. Gardner and K. D. Martin, HRTF measurements of a KEMAR, MIT Media Lab, 1994",
    "licence": "Copyright 1994 MIT Media Laboratory; free use provided the authors are cited",
    "input_unit": "1",
    "output_unit": "1",
    "sample_period": 0.0,
}


def horizontal_plane(path: Path) -> tuple[np.ndarray, np.ndarray, float]:
    """Return azimuths (degrees, increasing), impulse responses and the sample rate (Hz)."""
    with h5py.File(path) as file:
        position = file["SourcePosition"][...]
        chosen = np.flatnonzero(position[:, 1] == 0.0)
        chosen = chosen[np.argsort(position[chosen, 0])]
        impulse = file["Data.IR"][...][chosen, EAR]
        return position[chosen, 0], impulse, float(file["Data.SamplingRate"][0])


def to_dataset(azimuth: np.ndarray, impulse: np.ndarray, rate: float) -> xr.Dataset:
    """Return the responses inside the band in the project's layout."""
    frequency = np.fft.rfftfreq(impulse.shape[1], 1.0 / rate)
    inside = (frequency >= BAND_HZ[0]) & (frequency <= BAND_HZ[1])
    response = np.fft.rfft(impulse, axis=1)[:, inside]
    names = [f"azimuth_{angle:03.0f}" for angle in azimuth]
    return xr.Dataset(
        {
            "frequency_response": (
                ("response", "output", "input", "frequency"),
                response[:, None, None],
            )
        },
        coords={
            "response": names,
            "azimuth": ("response", azimuth, {"units": "degree"}),
            "output": ["left_ear"],
            "input": ["source"],
            "frequency": ("frequency", frequency[inside], {"units": "Hz"}),
        },
        attrs=ATTRIBUTES,
    )


def main(source: Path, target: Path) -> None:
    """Write the extract."""
    data = to_dataset(*horizontal_plane(source))
    data.to_netcdf(
        target / "horizontal_left.nc",
        engine="h5netcdf",
        encoding={"frequency_response": {"zlib": True, "complevel": 9, "shuffle": True}},
    )


if __name__ == "__main__":
    main(Path(sys.argv[1]), Path(__file__).parent)
