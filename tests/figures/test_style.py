"""Palette and axes."""

import itertools

import numpy as np
import pytest
from matplotlib.colors import to_hex

from identkit.figures import style
from identkit.figures.frequency_axis import frequency_ticks

# Machado, Oliveira and Fernandes, IEEE Trans. Vis. Comput. Graph. 15(6), 2009, full severity;
# coefficients from memory.
VISIONS = {
    "normal": np.eye(3),
    "protan": [
        [0.152286, 1.052583, -0.204868],
        [0.114503, 0.786281, 0.099216],
        [-0.003882, -0.048116, 1.051998],
    ],
    "deutan": [
        [0.367322, 0.860646, -0.227968],
        [0.280085, 0.672501, 0.047413],
        [-0.011820, 0.042940, 0.968881],
    ],
    "tritan": [
        [1.255528, -0.076749, -0.178779],
        [-0.078411, 0.930809, 0.147602],
        [0.004733, 0.691367, 0.303900],
    ],
}
TO_XYZ = np.array(
    [
        [0.4124564, 0.3575761, 0.1804375],
        [0.2126729, 0.7151522, 0.0721750],
        [0.0193339, 0.1191920, 0.9503041],
    ]
)


def linear(colour):
    """Linear RGB of a hexadecimal sRGB colour (IEC 61966-2-1)."""
    channels = np.array([int(colour[at : at + 2], 16) for at in (1, 3, 5)]) / 255.0
    return np.where(channels <= 0.04045, channels / 12.92, ((channels + 0.055) / 1.055) ** 2.4)


def lab(rgb):
    """CIE L*a*b* of linear RGB under D65."""
    ratio = TO_XYZ @ np.clip(rgb, 0.0, 1.0) / [0.95047, 1.0, 1.08883]
    f = np.where(ratio > 0.008856, np.cbrt(ratio), 7.787 * ratio + 16.0 / 116.0)
    return np.array([116.0 * f[1] - 16.0, 500.0 * (f[0] - f[1]), 200.0 * (f[1] - f[2])])


def closest(colours, vision):
    places = [lab(np.asarray(vision) @ linear(colour)) for colour in colours]
    return min(np.linalg.norm(a - b) for a, b in itertools.combinations(places, 2))


@pytest.mark.outside
@pytest.mark.parametrize("vision", VISIONS)
def test_groups_are_told_apart_under_every_vision(vision):
    # A difference near 2.3 is just noticeable (common practice); small marks need far more.
    assert closest(style.GROUP_COLOURS, VISIONS[vision]) > 25.0
    assert closest(style.GROUP_COLOURS[:4], VISIONS[vision]) > 40.0
    assert closest((style.NOMINAL, style.WEIGHT, style.FLOOR), VISIONS[vision]) > 20.0


def test_reach_colours_darken_steadily():
    shades = [lab(linear(to_hex(style.REACH_COLOURS(at))))[0] for at in np.linspace(0, 1, 21)]
    assert np.all(np.diff(shades) < 0.0)
    assert shades[0] - shades[-1] > 60.0


def test_every_group_has_its_own_marker():
    assert len(set(style.GROUP_MARKERS)) == len(style.GROUP_COLOURS)
    assert style.group_style(8) == style.group_style(0)


@pytest.mark.parametrize(
    ("frequency", "text"),
    [(50.0, "50 Hz"), (999.0, "999 Hz"), (1240.3, "1.24 kHz"), (22000.0, "22 kHz")],
)
def test_frequencies_read_in_hertz_or_kilohertz(frequency, text):
    assert style.frequency_label(frequency) == text


def test_unknown_frequency_says_so():
    assert style.frequency_label(float("nan")) == "unknown frequency"


def test_frequency_ticks_are_one_two_five_within_the_band():
    assert frequency_ticks(50.0, 1000.0).tolist() == [50.0, 100.0, 200.0, 500.0, 1000.0]


def test_styles_of_a_drawing_do_not_leak():
    import matplotlib

    before = dict(matplotlib.rcParams)

    @style.in_house_style
    def draw(layout=style.WIDE):
        return matplotlib.rcParams["font.size"]

    assert draw(style.NARROW) == style.NARROW.font_size
    assert dict(matplotlib.rcParams) == before


def test_long_labels_lose_their_middle():
    assert style.clipped("U05") == "U05"
    assert style.clipped("lot-C_2026-04-06/U13_H0_10C", 12) == "lot-…_H0_10C"
    assert len(style.clipped("x" * 99, 10)) == 10
