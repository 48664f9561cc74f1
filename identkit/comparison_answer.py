"""The answer of `identkit compare` in words and as a picture."""

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from identkit.command_answers import Answer, refuse_wrong_picture, save_picture
from identkit.plant_set.files import load_set
from identkit.plant_set.model import PlantSet
from identkit.plant_set.reach import Surroundings
from identkit.set_comparison import (
    Containment,
    ListedReach,
    ModeChange,
    SetComparison,
    compare_sets,
    frequencies,
    reach_of_set,
)
from identkit.set_price import SetPrice, setters_between
from identkit.set_resonances import Resonances, resonances

if TYPE_CHECKING:
    from identkit.figures.set_comparison import SetsAlong

SHOWN = 6


def compare_files(first: Path, second: Path, figure: Path | None = None) -> Answer:
    """Compare two set files, and draw the picture that was asked for.

    Raises
    ------
    InputError
        If a file is missing or wrong, or the two cannot be compared.
    """
    if figure is not None:
        refuse_wrong_picture(figure)
    a, b = load_set(first), load_set(second)
    found = compare_sets(a, b)
    text = describe_comparison(a, b, found, (str(first), str(second)))
    if figure is not None:
        from identkit.figures.set_comparison import draw_sets

        save_picture(draw_sets(pick_sets(a, b, found)), figure)
        text += f"\nFigure: {figure}"
    return Answer(text, found.holds)


def describe_comparison(
    a: PlantSet, b: PlantSet, found: SetComparison, places: tuple[str, str]
) -> str:
    """Return what changed between two sets, every claim with its basis."""
    known_a, known_b = resonances(a), resonances(b)
    low, high = found.band
    lines = [
        f"A: {places[0]}, {a.form}",
        f"B: {places[1]}, {b.form}",
        f"Compared from {low:g} to {high:g} Hz, where both claim something (disc in disc at every "
        f"frequency, searched between the points too)",
        *_contained("B in A", found.b_in_a, b, known_b),
        *_contained("A in B", found.a_in_b, a, known_a),
        _listed("Plants listed in B, against A", found.listed_b, known_a),
        _listed("Plants listed in A, against B", found.listed_a, known_b),
        *_units(found),
        *_modes(found.modes),
        *_price(found.price_a, found.price_b),
        _answer(found),
    ]
    return "\n".join(line for line in lines if line)


def _contained(title: str, found: Containment, inner: PlantSet, known: Resonances) -> list[str]:
    if not np.isfinite(found.reach):
        return [f"{title}: no; another number of unstable poles, or members without bound"]
    word = "yes" if found.holds else "no"
    lines = [
        f"{title}: {word}; reach of the whole set {found.reach:.4g} at {found.frequency:.5g} Hz, "
        f"{known.nearest(found.frequency)}"
    ]
    for low, high in found.outside[:SHOWN]:
        at = float(np.sqrt(low * high))
        who = setters_between(inner, low, high)
        lines.append(f"  sticks out from {low:.5g} to {high:.5g} Hz, {known.nearest(at)}{who}")
    if len(found.outside) > SHOWN:
        lines.append(f"  and in {len(found.outside) - SHOWN} more intervals")
    return lines


def _listed(title: str, found: ListedReach, known: Resonances) -> str:
    if not found.names:
        return f"{title}: none listed"
    out = found.value > 1.0 + 1e-6
    k = int(np.argmax(found.value))
    text = (
        f"{title}: {int(np.sum(~out))} of {len(found.names)} held; farthest {found.names[k]}, "
        f"reach {found.value[k]:.4g} at {found.frequency[k]:.5g} Hz, "
        f"{known.nearest(float(found.frequency[k]))}"
    )
    return text + _units_out(found, out)


def _units_out(found: ListedReach, out: "np.ndarray[tuple[int, ...], np.dtype[np.bool_]]") -> str:
    worst: dict[str, float] = {}
    for unit, value, beyond in zip(found.units, found.value, out, strict=True):
        if beyond:
            worst[unit] = max(worst.get(unit, 0.0), float(value))
    if not worst:
        return ""
    ranked = sorted(worst.items(), key=lambda item: -item[1])
    named = ", ".join(f"{unit} ({value:.3g})" for unit, value in ranked[:SHOWN])
    more = f" and {len(ranked) - SHOWN} more" if len(ranked) > SHOWN else ""
    return f"; units beyond it: {named}{more}"


def _units(found: SetComparison) -> list[str]:
    pairs = (("B", found.new_units), ("A", found.gone_units))
    return [
        f"Units measured for {name} only: {', '.join(units[:12])}"
        f"{f' and {len(units) - 12} more' if len(units) > 12 else ''}"
        for name, units in pairs
        if units
    ]


def _modes(modes: tuple[ModeChange, ...]) -> list[str]:
    rows = [_mode(mode) for mode in modes]
    head = "Resonances of the nominals, A to B (spread: farthest listed plant from its nominal)"
    return [head, *rows] if rows else []


def _mode(mode: ModeChange) -> str:
    name = mode.name or f"{mode.frequency[0]:.5g} Hz"
    first, second = mode.frequency
    if not np.isfinite(second):
        return f"  {name}: {first:.5g} Hz, none within 12 % in B"
    shift = 100.0 * (second / first - 1.0)
    return (
        f"  {name}: {first:.5g} to {second:.5g} Hz ({shift:+.2f} %), damping ratio "
        f"{mode.damping_ratio[0]:.4f} to {mode.damping_ratio[1]:.4f}, spread "
        f"{_percent(mode.spread[0])} to {_percent(mode.spread[1])}"
    )


def _percent(share: float) -> str:
    return f"{100.0 * share:.2f} %" if np.isfinite(share) else "not known"


def _price(a: SetPrice | None, b: SetPrice | None) -> list[str]:
    if a is None or b is None:
        return ["Price: not compared (the yardstick covers stable scalar sets in continuous time)"]
    first, second = a.bandwidth.crossover, b.bandwidth.crossover
    change = f" ({100.0 * (second / first - 1.0):+.1f} %)" if first > 0.0 else ""
    return [
        f"Price, A to B: crossover that a standard second-order loop can reach {first:.4g} to "
        f"{second:.4g} Hz{change}, limited at {a.bandwidth.limited_at:.5g} and "
        f"{b.bandwidth.limited_at:.5g} Hz;",
        f"  weight of order {a.order} to {b.order}, largest {a.peak_db:.2f} to {b.peak_db:.2f} dB, "
        f"mean over log frequency {a.mean_db:.2f} to {b.mean_db:.2f} dB",
    ]


def _answer(found: SetComparison) -> str:
    if found.b_in_a.holds and found.a_in_b.holds:
        return "Answer: each contains the other."
    if found.b_in_a.holds:
        return "Answer: A contains B."
    if found.a_in_b.holds:
        return "Answer: B contains A."
    return "Answer: neither contains the other."


def pick_sets(a: PlantSet, b: PlantSet, found: SetComparison) -> "SetsAlong":
    """Return the curves of the picture over the common band."""
    from identkit.figures.set_comparison import SetsAlong

    grid = frequencies(a, b, found.band)
    first, second, known = Surroundings(a), Surroundings(b), resonances(a)
    weights = []
    for around in (first, second):
        _, left, right = around.at(grid)
        weights.append(np.abs((left * right)[:, 0, 0]))
    return SetsAlong(
        frequency=grid,
        weight_a=weights[0],
        weight_b=weights[1],
        b_in_a=reach_of_set(first, second, grid),
        a_in_b=reach_of_set(second, first, grid),
        names=("A", "B"),
        mode_names=tuple(known.names),
        mode_frequency=known.frequency,
    )
