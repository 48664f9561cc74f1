"""What the population model says about the next unit, and whether it may be believed.

Populations that the measurements leave possible are drawn; from each, virtual units; the reach of
their plants from the set alone. The share held scatters between populations, which is what is not
known, and by counting, which is taken out (methods/beta_binomial.py); its lower quantile is stated.
That is a posterior predictive count: D. B. Rubin, "Bayesianly justifiable and relevant frequency
calculations for the applied statistician", Annals of Statistics 12 (1984) 1151-1172.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr

from identkit.methods.arrays import BoolArray, IntArray
from identkit.methods.beta_binomial import BetaShares, fit_beta_binomial
from identkit.methods.joint_normality import normality_test
from identkit.outcomes import Outcome
from identkit.plant_set.fields import FittedPlant, PlantSetFields
from identkit.plant_set.reach import Surroundings, reach_of_plants
from identkit.plant_set.stacked import stack
from identkit.stages.population_model import PopulationModel
from identkit.stages.virtual_units import draw_parameters, draw_plants

POPULATIONS = 60
UNITS_EACH = 40
UNITS_OF_MANY_CONDITIONS = 20
MANY_CONDITIONS = 5
POPULATIONS_AT_ONCE = 12
FEWEST_UNITS = 8
CHANCE = 0.05
"""Largest chance with which sound assumptions may fail the checks, all checks together."""
_CLEARLY_HELD = 0.95
_AT_ONCE = 96
METHOD = "virtual units drawn from the population model with its estimation uncertainty"
_ODD = (Outcome.MODE_SHIFTED, Outcome.MODE_EXTRA)


@dataclass(frozen=True)
class Check:
    """One assumption and whether the measurements speak against it."""

    name: str
    passed: bool
    finding: str


@dataclass(frozen=True)
class ModelStatement:
    """What the population model says.

    Attributes
    ----------
    shares
        Law of the share of units held, over the populations that are possible.
    units
        Units behind the model.
    virtual_units
        Units drawn.
    conditions
        Measured conditions (heads, temperatures, positions) of every unit.
    checks
        The assumptions, tested.
    """

    shares: BetaShares
    units: int
    virtual_units: int
    conditions: int
    checks: tuple[Check, ...]

    @property
    def trusted(self) -> bool:
        """Whether no check failed."""
        return all(check.passed for check in self.checks)


def model_statement(
    contents: PlantSetFields,
    model: PopulationModel,
    population: xr.Dataset,
    modes: xr.Dataset,
    *,
    left_out_reach: Mapping[str, float] | None = None,
    seed: int = 1,
) -> ModelStatement | None:
    """Return the share of units the set holds, by virtual units of the population model.

    Parameters
    ----------
    contents
        The set.
    model, population
        The population of the units behind it.
    modes
        Its paired modes, for what the model does not describe.
    left_out_reach
        Reach of every unit by `leave_one_unit_out`, to check against.
    seed
        Of the draws.

    Returns
    -------
    ModelStatement or None
        None where fewer than eight units were seen, or the plants are not scalar.

    Notes
    -----
    Unit effects are taken as normal with the estimated correlation, head effects as independent
    between quantities. The virtual units are measured at the conditions of the real ones.
    """
    scalar = contents.nominal.D.shape == (1, 1) and not contents.parameters
    if len(model.units) < FEWEST_UNITS or not scalar:
        return None
    generator = np.random.default_rng(seed)
    shrinkage = float(population["unit_effect_shrinkage"])
    each = UNITS_EACH if len(model.head) < MANY_CONDITIONS else UNITS_OF_MANY_CONDITIONS
    held = np.concatenate(
        [
            _held_counts(contents, model, each, shrinkage, generator)
            for _ in range(POPULATIONS // POPULATIONS_AT_ONCE)
        ]
    )
    shares = fit_beta_binomial(held, each)
    return ModelStatement(
        shares,
        len(model.units),
        POPULATIONS * each,
        len(model.head),
        _checks(model, population, modes, shares, left_out_reach or {}, seed),
    )


def _held_counts(
    contents: PlantSetFields,
    model: PopulationModel,
    units: int,
    shrinkage: float,
    generator: np.random.Generator,
) -> IntArray:
    """Return how many units of each of some possible populations the set holds."""
    plants: list[FittedPlant] = []
    for _ in range(POPULATIONS_AT_ONCE):
        drawn = draw_parameters(model, shrinkage, generator)
        plants += draw_plants(model, drawn, units, generator)
    inside = plants_inside(contents, plants).reshape(POPULATIONS_AT_ONCE, units, -1)
    return np.asarray(inside.all(axis=2).sum(axis=1), dtype=np.int64)


def plants_inside(contents: PlantSetFields, plants: Sequence[FittedPlant]) -> BoolArray:
    """Return whether the set holds each plant (reach at most 1).

    The set's own grid decides what is far out or well inside; the rest is searched in full. On
    that grid the reach of a plant was at most 1 % short of the full search.
    """
    around = Surroundings(contents)
    value = np.empty(len(plants))
    for start in range(0, len(plants), _AT_ONCE):
        some = stack(plants[start : start + _AT_ONCE])
        rows = np.arange(len(some.delay))
        grid = np.broadcast_to(around.common_grid, (rows.size, around.common_grid.size))
        response = some.response(rows, grid, around.period)
        value[start : start + rows.size] = around.reach_on_common_grid(response).max(axis=1)
    near = np.flatnonzero((value <= 1.0) & (value > _CLEARLY_HELD))
    value[near] = reach_of_plants(contents, [plants[int(k)] for k in near]).value
    return np.asarray(value <= 1.0, dtype=bool)


def _checks(
    model: PopulationModel,
    population: xr.Dataset,
    modes: xr.Dataset,
    shares: BetaShares,
    left_out: Mapping[str, float],
    seed: int,
) -> tuple[Check, ...]:
    # Each check may fail by chance; all together seldom (Bonferroni 1936).
    tests = [_normal(model, seed), _left_out(shares, left_out)]
    if "lot_chance" in population:
        tests.append(_lots(population))
    limit = CHANCE / len(tests)
    judged = [Check(name, not chance < limit, finding) for name, chance, finding in tests]
    return (*judged, _described(model, modes))


def _normal(model: PopulationModel, seed: int) -> tuple[str, float, str]:
    spreads = np.array([law.deviation[0] > law.fit_deviation for law in model.laws])
    chosen = np.flatnonzero(spreads)
    correlation = model.correlation[np.ix_(chosen, chosen)]
    found = normality_test(model.unit_effect[:, chosen], correlation, seed=seed)
    told = f"chance {found.probability:.2g}, by {found.statistic}" if found.statistic else "no test"
    return "unit effects are normal", found.probability, told


def _left_out(shares: BetaShares, left_out: Mapping[str, float]) -> tuple[str, float, str]:
    name = "the model agrees with leaving each unit out"
    if not left_out:
        return name, float("nan"), "not tried"
    trials = len(left_out)
    held = sum(1 for value in left_out.values() if value <= 1.0)
    few = shares.chance_of_at_most(held, trials)
    many = 1.0 - shares.chance_of_at_most(held - 1, trials)
    chance = min(1.0, 2.0 * min(few, many))
    expected = shares.mean * trials
    return name, chance, f"{held} of {trials} held, {expected:.1f} expected; chance {chance:.2g}"


def _lots(population: xr.Dataset) -> tuple[str, float, str]:
    name = "lots are alike"
    chance = population["lot_chance"].values
    if not np.isfinite(chance).any():
        return name, float("nan"), "too few units in a lot to tell"
    least_of_lot = np.where(np.isfinite(chance), chance, np.inf).min(axis=1)
    least, lot = float(least_of_lot.min()), str(population["lot"].values[least_of_lot.argmin()])
    return name, least, f"lot {lot} stands apart most; chance {least:.2g}"


def _described(model: PopulationModel, modes: xr.Dataset) -> Check:
    """Say whether all that was measured is of the kind the model draws."""
    names = modes["response"].values.astype(str)
    rows = np.isin(names, model.responses)
    outcome = modes["mode_outcome"].transpose("response", "mode").values[rows]
    odd = np.isin(outcome, [int(code) for code in _ODD])
    # Rates of residues have no law: virtual plants would be without them.
    rate = modes["residue_rate"].transpose("response", "mode", "output", "input").values[rows]
    odd = odd | np.any(np.nan_to_num(rate) != 0.0, axis=(2, 3))
    units = _units_of(np.asarray(odd.any(axis=1), dtype=bool), model)
    told = f"{units} of {len(model.units)} units show a mode that is shifted, extra or not real"
    return Check("the population's modes are all there is", units == 0, told)


def _units_of(rows: BoolArray, model: PopulationModel) -> int:
    unit: IntArray = model.design.unit
    return len(np.unique(unit[rows]))
