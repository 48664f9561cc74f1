"""[records] of a study file: time records from which responses are estimated."""

from typing import Literal

from pydantic import Field

from identkit.settings_types import Count, NotNegative, Positive, Table, Text, Texts

METHODS = (
    "auto",
    "joint",
    "direct",
    "direct-input-noise",
    "multisine",
    "stepped-sine",
    "local-polynomial",
)
Method = Literal[
    "auto",
    "joint",
    "direct",
    "direct-input-noise",
    "multisine",
    "stepped-sine",
    "local-polynomial",
]
Window = Literal["rectangular", "hann", "hamming", "blackman", "blackman-harris"]

_CHANNELS = "a channel name, or a list of them"


class RecordSettings(Table):
    """[records]: channels, sampling and method of the time records."""

    files: Text = Field(description='a path pattern such as "bench/{unit}_H{head}.npz"')
    sample_period: Positive = Field(description="seconds, above 0")
    excitation: Text | Texts = Field(default="r", description=_CHANNELS)
    drive: Text | Texts = Field(default="u", description=_CHANNELS)
    position: Text | Texts = Field(default="y", description=_CHANNELS)
    method: Method = Field(
        default="auto", description="one of " + ", ".join(f'"{name}"' for name in METHODS)
    )
    window: Window = Field(
        default="hann",
        description='"rectangular", "hann", "hamming", "blackman" or "blackman-harris"',
    )
    overlap: float = Field(default=0.5, ge=0, lt=1, description="a share, 0 to below 1")
    resolution: Positive | None = Field(
        default=None, description="the distance of lines in Hz, above 0"
    )
    hold: Literal["modelled", "divided", "kept"] = Field(
        default="modelled", description='"modelled", "divided" or "kept"'
    )
    computational_delay: NotNegative = Field(default=0.0, description="seconds, 0 or more")
    drive_updates: Count = Field(
        default=1, description="a whole number, 1 or more: drive values per position sample"
    )
    anti_alias: Text | None = Field(
        default=None, description="a file with the response of the filter before the sampler"
    )
    frequency: Text | None = Field(
        default=None,
        description="the channel with the driven frequency of a stepped sine, Hz",
    )
    in_phase: Text | None = Field(default=None, description="a channel name")
    quadrature: Text | None = Field(default=None, description="a channel name")
    tracks_per_inch: Positive | None = Field(default=None, description="a number above 0")
    linear_range: Positive | None = Field(
        default=None, description="half the range in which position is linear, above 0"
    )
    second_opinion: bool = Field(default=False, description="true or false")
    drive_limit: Positive | None = Field(
        default=None, description="the largest drive the amplifier gives, above 0"
    )
    sectors: Count | None = Field(
        default=None, description="position samples per turn of the spindle, 1 or more"
    )
    spindle_speed: Positive | None = Field(
        default=None, description="turns of the spindle per minute, above 0"
    )
