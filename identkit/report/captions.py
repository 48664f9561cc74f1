"""What to look for in each picture, and on what it rests."""

from dataclasses import dataclass


@dataclass(frozen=True)
class Caption:
    """Words under a picture.

    Attributes
    ----------
    title
        What the picture shows.
    look
        What to look for.
    basis
        On what it rests.
    """

    title: str
    look: str
    basis: str


CAPTIONS = {
    "radius": Caption(
        "Required radius, its weight, and who sets it",
        "Where the weight passes 1 the plant is not known well enough to be controlled there. "
        "Where the filled radius stands well above the floor, another nominal could tighten the "
        "set; where it lies on the floor, only different plants could. The rows below name the "
        "unit that needs the largest radius at each frequency; rings mark where a plant touches "
        "the weight.",
        "Errors of the fitted plants against the exported nominal, at the bounding frequencies. "
        "The floor is the smallest enclosing disc, frequency by frequency: no nominal of any "
        "order needs less.",
    ),
    "reach": Caption(
        "Reach by frequency, one row per response",
        "Dark columns are frequencies where many plants use up the set; dark rows are plants that "
        "stand apart everywhere. A reach of 1 touches the weight; orange lies outside the set, "
        "which only plants left out of the bound may.",
        "Recomputed from the set file at the bounding frequencies. Each column shows the largest "
        "value within it, so no peak is averaged away.",
    ),
    "worst": Caption(
        "Ledger of reach by unit",
        "The units on top set the bound. One tick per response: a unit whose ticks spread "
        "depends on head or temperature, one whose ticks bunch near 1 is different as a whole.",
        "Reach of every plant over the band, from the set file.",
    ),
    "orders": Caption(
        "What a further order of the weight buys",
        "Past the chosen order the dots fall slowly: more states for the controller, little "
        "tighter set. A dot on its bar cannot be improved at that order.",
        "Excess is the largest ratio of weight to required radius times allowed profile. The bar "
        "is a proved lower limit from linear programming duality.",
    ),
    "modes": Caption(
        "Modal frequencies against temperature",
        "All panels share one scale, so wide panels are the uncertain modes. A group that stands "
        "off the line in one panel is a lot or head with a different mode; triangles at an edge "
        "lie beyond the scale.",
        "Maximum-likelihood fits with 95 % intervals (often shorter than the mark). The line and "
        "its band are the population's trend and ±2 sigma between plants, variance of the fits "
        "taken out.",
    ),
    "fits": Caption(
        "How well the modal model explains the responses",
        "Sound fits scatter around 1 inside the pale band. A whole unit above it has dynamics "
        "that the model misses, or a variance stated too small. In the lowest panel, clusters of "
        "red points show where the worst fit fails.",
        "Noise ratio is reduced chi-square against the stated variance. The bands hold 95 % of "
        "sound fits and of complex Gaussian residuals.",
    ),
    "responses": Caption(
        "All measured responses",
        "Bands that open around a resonance come from its frequency moving; bands that open over "
        "a wide stretch come from gain or from modes of changing sign. The single curve is the "
        "response with the largest reach.",
        "Usable measured points, as percentiles over responses at each frequency; phase is "
        "unwrapped around the nominal.",
    ),
    "screening": Caption(
        "What screening marked",
        "Marks that line up in a column or row point at a unit, a head or a temperature rather "
        "than at chance. White tiles were not measured or could not be read.",
        "Limits as in the study's [screen] settings. Marks drop nothing by themselves.",
    ),
}
