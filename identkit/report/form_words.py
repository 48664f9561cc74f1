"""What the form of a set asks of a loop, in words."""

import numpy as np

from identkit.figures.style import frequency_label
from identkit.methods.arrays import FloatArray
from identkit.plant_set.fields import PlantSetFields
from identkit.plant_set.response import nominal_response

LIMITS = {
    "multiplicative": ("its complementary sensitivity below 1", "|W T| < 1"),
    "input-multiplicative": ("its complementary sensitivity below 1", "|W T| < 1"),
    "additive": ("its complementary sensitivity T below 1", "|W T / P0| < 1"),
    "inverse-multiplicative": ("its sensitivity below 1", "|W S| < 1"),
}
"""What a loop must keep where the weight is above 100 %, and the condition behind it, by form."""


def limit_of_control(contents: PlantSetFields) -> str:
    """Return where the weight of a scalar set passes 100 %, and what a loop must keep there.

    An additive weight passes 100 % where it is as large as the nominal. Empty for other forms.
    """
    if contents.form not in LIMITS or not contents.is_scalar:
        return ""
    frequency = contents.radii.frequency
    above = np.flatnonzero(contents.radii.weight_magnitude >= whole(contents))
    size = "the size of the nominal" if contents.form == "additive" else "1 (100 %)"
    if not above.size:
        return f"The weight stays below {size} over the whole band."
    kept, condition = LIMITS[contents.form]
    return (
        f"The weight first passes {size} at {frequency_label(frequency[above[0]])}: a "
        f"loop that rests on this set alone must keep {kept} there ({condition}, Doyle and Stein "
        f"1981)."
    )


def whole(contents: PlantSetFields) -> FloatArray:
    """Return the radius of an error of 100 % at the frequencies of the radii, (points,)."""
    frequency = contents.radii.frequency
    if contents.form != "additive":
        return np.ones(frequency.size)
    return np.asarray(np.abs(nominal_response(contents, frequency)[0, 0]), dtype=float)


def radius_is_relative(contents: PlantSetFields | None) -> bool:
    """Tell whether the radius is the relative error that the pointwise floor is a floor of."""
    return contents is not None and contents.form in ("multiplicative", "input-multiplicative")
