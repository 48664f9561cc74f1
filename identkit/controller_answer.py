"""The answer of `identkit check` in words and as a picture."""

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from identkit.command_answers import Answer, refuse_wrong_picture, save_picture
from identkit.controller import read_controller
from identkit.controller_check import ControllerCheck, RobustStability, check_controller, size_at
from identkit.methods.feedback import bent
from identkit.methods.modal_model import TWO_PI
from identkit.methods.resonance_grid import resonance_grid
from identkit.methods.stability_margins import StabilityMargins
from identkit.plant_loops import PlantLoops
from identkit.plant_set.files import load_set
from identkit.plant_set.model import PlantSet
from identkit.plant_set.reach import Surroundings
from identkit.set_price import setters_between
from identkit.set_resonances import Resonances, resonances

if TYPE_CHECKING:
    from identkit.figures.robust_stability import LoopUnderWeight

CLOSED = {
    "multiplicative": "T",
    "input-multiplicative": "T",
    "additive": "C/(1 + P0 C)",
    "inverse-multiplicative": "1/(1 + P0 C)",
}
CAUTION = (
    "This is a computation on a set, no safety certificate: try a new controller with limits on "
    "drive and travel, and a way to stop."
)


def check_files(place: Path, controller: Path, figure: Path | None = None) -> Answer:
    """Check a controller file against a set file, and draw the picture that was asked for.

    Raises
    ------
    InputError
        If a file is missing or wrong, or the two do not fit each other.
    """
    if figure is not None:
        refuse_wrong_picture(figure)
    plant_set, read = load_set(place), read_controller(controller)
    check = check_controller(plant_set, read)
    text = describe_check(plant_set, check, f"{controller} on {place}")
    if figure is not None and check.robust is None:
        text += "\nNo figure: the closed loop of an unstable nominal loop has no response to draw."
    elif figure is not None:
        from identkit.figures.robust_stability import draw_loop_under_weight

        save_picture(draw_loop_under_weight(pick_loop(plant_set, check)), figure)
        text += f"\nFigure: {figure}"
    return Answer(text, check.holds)


def describe_check(plant_set: PlantSet, check: ControllerCheck, title: str) -> str:
    """Return what a controller does on a set, every claim with its basis."""
    known = resonances(plant_set)
    lines = [
        f"{title}: negative feedback, u = -C y",
        _nominal(check),
        *_margins(check),
        *_robust(plant_set, check, known),
        _loops("Listed plants", check.listed, known, _listed_basis(plant_set, check)),
        _loops("Virtual plants", check.virtual, known, "drawn at random from the set"),
        _answer(check),
        CAUTION,
    ]
    return "\n".join(line for line in lines if line)


def _nominal(check: ControllerCheck) -> str:
    word = "stable" if check.nominal_stable else "UNSTABLE"
    rate = f"rightmost pole at {check.decay:.4g} rad/s"
    return f"Nominal loop: {word} ({rate}, eigenvalues of the closed loop)"


def _margins(check: ControllerCheck) -> list[str]:
    if not check.nominal_stable:
        return []
    m = check.margins
    return [
        f"Margins of the nominal loop: {_gain(m)}; {_phase(m)};",
        f"  least distance to -1 {m.modulus:.4g} at {m.modulus_frequency:.5g} Hz; "
        f"disk margin {m.disk:.4g}; crossover {m.crossover:.5g} Hz",
    ]


def _gain(m: StabilityMargins) -> str:
    up = "any factor up"
    if np.isfinite(m.gain_up):
        level = 20.0 * np.log10(m.gain_up)
        up = f"gain x {m.gain_up:.4g} ({level:.2f} dB) at {m.gain_up_frequency:.5g} Hz"
    if m.gain_down <= 0.0:
        return up
    level = 20.0 * np.log10(m.gain_down)
    return f"{up}, x {m.gain_down:.4g} ({level:.2f} dB) at {m.gain_down_frequency:.5g} Hz"


def _phase(m: StabilityMargins) -> str:
    if not np.isfinite(m.phase):
        return "any phase (|L| is never 1)"
    return (
        f"phase {m.phase:.4g} deg at {m.phase_frequency:.5g} Hz, delay {1e6 * m.delay:.4g} us at "
        f"{m.delay_frequency:.5g} Hz"
    )


def _robust(plant_set: PlantSet, check: ControllerCheck, known: Resonances) -> list[str]:
    found, name = check.robust, CLOSED[plant_set.form]
    if found is None:
        return ["Robust stability: not asked, the nominal loop is unstable already"]
    where = f"{found.frequency:.5g} Hz, {known.nearest(found.frequency)}"
    low, high = plant_set.band
    if not low <= found.frequency <= high:
        where += f"; outside the band {low:g} to {high:g} Hz the set claims nothing"
    word = "holds for every plant of the set" if found.holds else "LOST"
    lines = [
        f"Robust stability: {word}; largest |W {name}| {found.peak:.4g} at {where}",
        f"  (all frequencies, by eigenvalues, relative tolerance {found.tolerance:.0e}; "
        f"below 1 is necessary and sufficient; the set may be scaled by up to {_largest(found)})",
    ]
    return lines + [_lost(plant_set, pair, known) for pair in found.lost]


def _largest(found: RobustStability) -> str:
    """Return the largest scaling of the set that the loop still stabilises."""
    return f"{1.0 / found.peak:.4g}" if found.peak > 0.0 else "any factor"


def _lost(plant_set: PlantSet, pair: tuple[float, float], known: Resonances) -> str:
    low, high = pair
    middle = low * high if low > 0.0 and np.isfinite(high) else max(low, 1e-9) ** 2
    at = float(np.sqrt(middle))
    who = setters_between(plant_set, low, high)
    return f"  lost from {low:.5g} to {high:.5g} Hz: {known.nearest(at)}{who}"


def _listed_basis(plant_set: PlantSet, check: ControllerCheck) -> str:
    count = 0 if check.listed is None else len(check.listed.names)
    held = plant_set.certificate.measured.of
    more = "" if count >= held else "; set.h5 lists all"
    return f"of the {held} the set was built on this file lists {count}{more}"


def _loops(title: str, loops: PlantLoops | None, known: Resonances, basis: str) -> str:
    if loops is None:
        return f"{title}: none"
    k, total = loops.worst, len(loops.names)
    unsettled = int(np.sum(~loops.settled))
    state = "" if loops.stable[k] else f", unstable (pole at {loops.decay[k]:+.4g} rad/s)"
    text = (
        f"{title}: {int(loops.stable.sum())} of {total} stable ({basis}); worst "
        f"{loops.names[k]}{state}, distance to -1 {loops.modulus[k]:.4g} at "
        f"{loops.frequency[k]:.5g} Hz, {known.nearest(float(loops.frequency[k]))}"
    )
    if unsettled:
        text += f"; {unsettled} not settled: the delay's all-pass is too coarse for so high a gain"
    return text


def _answer(check: ControllerCheck) -> str:
    if check.holds:
        return "Answer: every plant of the set is stabilised."
    if not check.nominal_stable:
        return "Answer: no, the nominal loop is unstable."
    if check.robust is not None and not check.robust.holds:
        every = check.listed is not None and bool(check.listed.stable.all())
        but = ", though all the listed ones are" if every else ""
        return f"Answer: no, robustness is lost: some plant of the set is not stabilised{but}."
    loops = [found for found in (check.listed, check.virtual) if found is not None]
    if any(not bool(found.stable.all()) for found in loops):
        return "Answer: no, a plant above is not stabilised although the set is: it lies outside."
    return "Answer: cannot be told for the plants not settled."


def pick_loop(plant_set: PlantSet, check: ControllerCheck) -> "LoopUnderWeight":
    """Return the curves of the picture over the band, and beyond where robustness is lost there."""
    from identkit.figures.robust_stability import LoopUnderWeight

    assert check.robust is not None
    around, known = Surroundings(plant_set), resonances(plant_set)
    low, high = around.band
    period = plant_set.time.period
    place = check.robust.frequency
    low = min(low, place) if place > 0.0 else low
    high = max(high, place) if period <= 0.0 else min(max(high, place), 0.4999 / period)
    poles = check.seen.poles() / TWO_PI
    ratio = np.abs(poles.real) / np.maximum(np.abs(poles), 1e-12)
    grid = resonance_grid(low, high, np.abs(poles), ratio)
    _, left, right = around.at(grid)
    limit = 1.0 / np.abs((left * right)[:, 0, 0])
    seen = size_at(check.seen, bent(grid, period))
    return LoopUnderWeight(
        frequency=grid,
        closed=seen * limit,
        closed_name=f"|{CLOSED[plant_set.form]}|",
        limit=limit,
        lost=check.robust.lost,
        peak=check.robust.peak,
        peak_frequency=place,
        band=plant_set.band,
        mode_names=tuple(known.names),
        mode_frequency=known.frequency,
    )
