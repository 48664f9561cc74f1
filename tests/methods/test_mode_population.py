"""Population modes found from all responses together: close pairs, crossings, lots, losses."""

import numpy as np
import pytest

from identkit.methods import mode_population
from identkit.methods.mode_density import density_centres, split_by_density
from identkit.methods.mode_population import find_population_modes
from identkit.methods.mode_template import ModeTable
from identkit.methods.shifted_modes import pair_shifted_modes

UNPAIRED_COST = 10.0
FREQUENCY = np.array([800.0, 2000.0, 2060.0, 3300.0, 3430.0, 6000.0])  # pairs 3 % and 4 % apart
DAMPING = np.array([0.02, 0.010, 0.013, 0.02, 0.015, 0.01])
RESIDUE = np.array([1.0, 2.0, -1.5, 3.0, 2.0, -4.0])
HEAD_SIGN = np.array([[1, 1, 1, 1, 1, 1], [1, -1, 1, 1, -1, 1]])


def invented_table(
    rng,
    *,
    units=20,
    unit_spread=0.006,
    slope=(-2e-4,) * 6,
    temperatures=(10.0, 25.0, 50.0),
    missing=0.0,
    extra=0.0,
    lot_shift=0.0,
):
    """Return a table and, beside it, the true mode (or -1) of every entry."""
    rows, truth, labels = [], [], []
    for unit in range(units):
        of_unit = np.exp(unit_spread * rng.normal(size=6))
        for head in range(2):
            for temperature in temperatures:
                lot = unit % 4
                frequency = FREQUENCY * of_unit * np.exp(np.array(slope) * (temperature - 25.0))
                frequency[3] *= 1.0 + (lot_shift if lot == 2 else 0.0)
                frequency = frequency * np.exp(2e-4 * rng.normal(size=6))
                damping = DAMPING * np.exp(0.1 * rng.normal(size=6))
                residue = RESIDUE * HEAD_SIGN[head] * np.exp(0.08 * rng.normal(size=6))
                entry = np.array([frequency, damping, residue, np.arange(6)])
                entry = entry[:, rng.uniform(size=6) >= missing]
                if rng.uniform() < extra:
                    noise = [rng.uniform(500.0, 8000.0), 0.01, 0.1 * rng.normal(), -1]
                    entry = np.column_stack([entry, noise])
                entry = entry[:, np.argsort(entry[0])]
                rows.append(entry[:3])
                truth.append(entry[3])
                labels.append((temperature, head, lot))
    return _padded(rows, truth, np.array(labels))


def _padded(rows, truth, labels):
    most = max(row.shape[1] for row in rows)
    values = np.full((len(rows), 3, most), np.nan)
    true = np.full((len(rows), most), -2)
    for i, (row, name) in enumerate(zip(rows, truth, strict=True)):
        values[i, :, : row.shape[1]] = row
        true[i, : len(name)] = name
    zeros = np.zeros(values[:, 0].shape)
    table = ModeTable(
        np.log(values[:, 0]),
        np.log(values[:, 1]),
        values[:, 2, :, None],
        zeros + 2e-4,
        zeros + 0.02,
        zeros[:, :, None] + 0.02,
        labels[:, 0],
        labels[:, 1].astype(int),
        labels[:, 2].astype(int),
        2,
        4,
    )
    return table, true


def wrong_names(assigned, truth):
    """Return how many true modes have another's name and how many have none."""
    real = truth >= 0
    return int((real & (assigned >= 0) & (assigned != truth)).sum()), int(
        (real & (assigned < 0)).sum()
    )


@pytest.mark.parametrize("seed", range(5))
def test_close_pairs_with_sign_changes_are_never_swapped(seed):
    table, truth = invented_table(np.random.default_rng(seed), missing=0.05, extra=0.3)
    template, assigned = find_population_modes(table, share=0.5, unpaired_cost=UNPAIRED_COST)
    # the median of 20 units spread by 0.6 % is known to 0.17 % (one sigma)
    assert np.exp(template.log_frequency) == pytest.approx(FREQUENCY, rel=0.006)
    wrong, unnamed = wrong_names(assigned, truth)
    assert wrong == 0
    assert unnamed <= 3  # of about 680
    # a true extra is named only where the mode it stands for was lost nearby
    assert ((truth == -1) & (assigned >= 0)).sum() <= 2


@pytest.mark.parametrize("seed", range(5))
def test_modes_that_cross_with_temperature_keep_their_names(seed):
    # 2000 falls and 2060 rises: they stand in the other order at the coldest temperature
    slope = (-2e-4, -8e-4, 8e-4, -2e-4, -2e-4, -2e-4)
    table, truth = invented_table(
        np.random.default_rng(seed), slope=slope, temperatures=(-15.0, 10.0, 25.0, 50.0)
    )
    template, assigned = find_population_modes(table, share=0.5, unpaired_cost=UNPAIRED_COST)
    assert wrong_names(assigned, truth) == (0, 0)
    assert template.frequency_slope == pytest.approx(slope, abs=4e-5)
    cold = table.temperature < -10.0
    first = np.nanmean(np.where(truth[cold] == 1, table.log_frequency[cold], np.nan))
    second = np.nanmean(np.where(truth[cold] == 2, table.log_frequency[cold], np.nan))
    assert first > second  # the crossing is really there


def test_a_campaign_larger_than_the_sample_is_named_whole(monkeypatch):
    monkeypatch.setattr(mode_population, "_MOST_RESPONSES", 40)
    table, truth = invented_table(np.random.default_rng(7), missing=0.05, extra=0.3)
    _, assigned = find_population_modes(table, share=0.5, unpaired_cost=UNPAIRED_COST)
    wrong, unnamed = wrong_names(assigned, truth)
    assert wrong == 0
    assert unnamed <= 3


@pytest.mark.parametrize("shift", [0.03, -0.03, 0.06])
def test_a_mode_shifted_in_one_lot_keeps_its_name(shift):
    table, truth = invented_table(np.random.default_rng(1), lot_shift=shift)
    _, assigned = find_population_modes(table, share=0.5, unpaired_cost=UNPAIRED_COST)
    wrong, unnamed = wrong_names(assigned, truth)
    assert (wrong, unnamed) == (0, 0)


def test_a_tight_population_over_a_wide_temperature_range_is_not_split():
    # the frequencies at one temperature agree to 0.1 %, and temperature moves them by 12 %
    table, truth = invented_table(
        np.random.default_rng(2),
        unit_spread=0.001,
        slope=(-6e-4,) * 6,
        temperatures=(-60.0, -20.0, 25.0, 70.0, 125.0),
    )
    template, assigned = find_population_modes(table, share=0.5, unpaired_cost=UNPAIRED_COST)
    assert len(template.log_frequency) == 6
    assert wrong_names(assigned, truth) == (0, 0)


def test_a_mode_seen_too_rarely_is_not_one_of_the_population():
    table, truth = invented_table(np.random.default_rng(3))
    rare = (truth == 5) & (np.arange(len(truth)) % 3 > 0)[:, None]
    hidden = {
        name: np.where(rare if value.ndim == 2 else rare[:, :, None], np.nan, value)
        for name, value in vars(table).items()
        if getattr(value, "ndim", 0) > 1
    }
    fewer = ModeTable(**(vars(table) | hidden))
    template, assigned = find_population_modes(fewer, share=0.5, unpaired_cost=UNPAIRED_COST)
    assert len(template.log_frequency) == 5
    assert (assigned[(truth == 5) & ~rare] == -1).all()
    more, _ = find_population_modes(fewer, share=0.3, unpaired_cost=UNPAIRED_COST)
    assert len(more.log_frequency) == 6


def test_the_unit_of_frequency_and_residue_does_not_matter():
    table, _ = invented_table(np.random.default_rng(4), missing=0.05, extra=0.3)
    kilo = ModeTable(
        **(
            vars(table)
            | {
                "log_frequency": table.log_frequency - np.log(1e3),
                "residue": 1e-9 * table.residue,
                "residue_error": 1e-9 * table.residue_error,
            }
        )
    )
    _, one = find_population_modes(table, share=0.5, unpaired_cost=UNPAIRED_COST)
    _, other = find_population_modes(kilo, share=0.5, unpaired_cost=UNPAIRED_COST)
    assert (one == other).mean() > 0.999


def test_a_far_shift_is_paired_only_when_it_can_be_nothing_else():
    table, truth = invented_table(np.random.default_rng(5))
    moved = table.log_frequency.copy()
    moved[0, truth[0] == 5] -= 0.09
    moved[1, truth[1] == 5] -= 0.09
    residue = table.residue.copy()
    residue[1, truth[1] == 5] *= -1.0
    broken = ModeTable(**(vars(table) | {"log_frequency": moved, "residue": residue}))
    template, assigned = find_population_modes(broken, share=0.5, unpaired_cost=UNPAIRED_COST)
    assert assigned[0, truth[0] == 5] == -1
    named, shifted = pair_shifted_modes(broken, template, assigned)
    assert named[0, truth[0] == 5] == 5
    assert shifted[0].sum() == 1
    assert named[1, truth[1] == 5] == -1  # the residue has the other sign
    assert not shifted[2:].any()


def test_density_splits_only_at_empty_places():
    position = np.array([0.0, 0.001, 0.002, 0.1, 0.101])
    assert split_by_density(position, 0.004, 0.2).tolist() == [0, 0, 0, 1, 1]
    assert split_by_density(position, 0.1, 0.2).tolist() == [0] * 5
    assert split_by_density(np.zeros(0), 0.1, 0.2).size == 0


def test_density_counts_modes_that_overlap():
    rng = np.random.default_rng(6)
    first = 0.01 * rng.normal(size=200)
    second = first + 0.02 + 0.001 * rng.normal(size=200)
    owner = np.tile(np.arange(200), 2)
    centres = density_centres(np.concatenate([first, second]), owner, 200, 0.004, 0.3)
    assert centres == pytest.approx([0.0, 0.02], abs=0.003)


@pytest.mark.parametrize(("spread", "seed"), [(0.03, 0), (0.07, 0), (0.07, 2)])
def test_a_mode_without_errors_that_nearly_all_responses_show_is_found(spread, seed):
    """As of an ear heard from 72 directions: one mode within some per cent, no standard errors.

    A second fitted mode stands anywhere, and eight responses show nothing of the first.
    """
    rng = np.random.default_rng(seed)
    responses = 72
    first = 2200.0 * np.exp(spread * rng.normal(size=responses))
    first[::10] = np.nan
    second = rng.uniform(1200.0, 3900.0, responses)
    frequency = np.column_stack([first, second])
    damping = np.column_stack(
        [0.1 * np.exp(0.15 * rng.normal(size=responses)), rng.uniform(0.1, 0.5, responses)]
    )
    residue = np.column_stack(
        [np.exp(0.3 * rng.normal(size=responses)), rng.normal(size=responses)]
    )
    unknown = np.zeros((responses, 2))
    none = np.zeros(responses, dtype=int)
    table = ModeTable(
        np.log(frequency),
        np.log(damping),
        residue[:, :, None],
        unknown,
        unknown,
        unknown[:, :, None],
        none.astype(float),
        none,
        none,
        1,
        1,
    )
    template, assigned = find_population_modes(table, share=0.5, unpaired_cost=UNPAIRED_COST)
    assert len(template.log_frequency) == 1
    assert abs(template.log_frequency[0] - np.log(2200.0)) < 0.02
    assert (assigned[np.isfinite(first), 0] == 0).mean() > 0.9


@pytest.mark.parametrize("units", [2, 3])
def test_a_few_units_one_per_cent_apart_share_their_modes(units):
    rng = np.random.default_rng(units)
    table, _ = invented_table(rng, units=units, unit_spread=0.012, temperatures=(25.0,))
    one_head = table.rows(table.head == 0)
    template, assigned = find_population_modes(one_head, share=0.5, unpaired_cost=UNPAIRED_COST)
    assert len(template.log_frequency) == 6
    assert (np.sort(assigned, axis=1) == np.arange(6)).all()
