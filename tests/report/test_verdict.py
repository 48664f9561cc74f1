"""Sentences of the verdict from known inputs."""

from dataclasses import replace

import numpy as np

from identkit.outcomes import Outcome
from identkit.plant_set import fields
from identkit.report.page import ReportInput
from identkit.report.verdict import headline, short_verdict, verdict


def certificate_of(given, **changes):
    contents = given.plant_set
    certificate = replace(contents.certificate, **changes)
    return replace(given, plant_set=replace(contents, certificate=certificate))


def sentence(given, start):
    found = [each for each in verdict(given) if each.startswith(start)]
    assert len(found) == 1, verdict(given)
    return found[0]


def test_held_sentence_counts_everything(given):
    assert sentence(given, "Holds") == (
        "Holds 20 of 20 measured responses used (24 read, 1 file skipped as unusable: "
        "bench/U01_H0.csv; 4 left out, unit U06: dropped on the floor)."
    )
    assert headline(given).state == "held"
    assert headline(given).sentence == "The set holds all 20 measured responses that were used."


def test_reasons_that_name_no_unit_get_the_units(given):
    names = given.responses["response"].values.astype(str)
    measured = replace(
        given.plant_set.certificate.measured,
        excluded=(
            fields.Excluded(str(names[0]), "screening: noise"),
            fields.Excluded(str(names[9]), "screening: noise"),
        ),
    )
    text = sentence(certificate_of(given, measured=measured), "Holds")
    assert "2 left out of units U01 and U03, screening: noise" in text


def test_not_all_held_is_said_first(given):
    measured = replace(given.plant_set.certificate.measured, held=18)
    found = headline(certificate_of(given, measured=measured))
    assert found.state == "not held"
    assert found.sentence == "2 responses of 20 used lie outside the set."


def test_failed_audit_wins_over_counts(given):
    audit = fields.AuditVerdict(False, ("reach of U01 is 1.2",), forced=True)
    changed = certificate_of(given, audit=audit)
    assert headline(changed).state == "not held"
    assert sentence(changed, "The audit failed") == (
        "The audit failed: reach of U01 is 1.2. The set file was written all the same, as asked."
    )


def test_the_first_sentence_follows_the_audit(given):
    audit = fields.AuditVerdict(False, ("reach of U01 is 1.2",), forced=False)
    changed = certificate_of(given, audit=audit)
    for sentences in (verdict(changed), short_verdict(changed)):
        assert sentences[0].startswith("Not shown to hold the 20 measured responses used (24 read")
        assert sentences[0].endswith("the audit failed.")
        assert not any(each.startswith("Holds") for each in sentences)


def test_a_unit_that_is_only_a_number_is_called_a_unit(given):
    plants = tuple(
        replace(plant, labels=plant.labels | {"unit": str(plant.labels["unit"]).strip("U0")})
        for plant in given.plant_set.plants
    )
    entry = fields.Attribution(plants[0].response, 8263.0, 1.0, "M5")
    numbered = replace(given.plant_set, plants=plants, attribution=(entry,))
    text = sentence(replace(given, plant_set=numbered), "The bound is set")
    assert "touches the weight: unit 1 (head 0, 10 °C near 8.26 kHz, M5)." in text


def test_no_set_is_said_plainly(given):
    bare = ReportInput("s", given.responses)
    assert headline(bare).state == "no set"
    assert (
        verdict(bare)[0]
        == "24 responses read, 1 file skipped as unusable: bench/U01_H0.csv; no set was made."
    )
    assert any("nothing is claimed about the next unit" in each for each in verdict(bare))


def test_modes_sentence_carries_the_spread(given):
    text = sentence(given, "8 modes describe the population")
    spread = 100 * 0.006 * np.sqrt(1 + 0.4**2 + 0.1**2)
    assert f"{spread:.2f} % to {spread:.2f} %" in text


def test_odd_modes_name_their_unit(given):
    modes = given.modes.copy(deep=True)
    modes["modal_frequency"].values[8:12, 8] = 7150.0
    modes["mode_outcome"].values[8:12, 1] = Outcome.MODE_SHIFTED
    modes["mode_outcome"].values[8:12, 3] = Outcome.MODE_SHIFTED
    assert sentence(replace(given, modes=modes), "Inspect") == (
        "Inspect U03 (a mode near 7.15 kHz, in 4 of 4 responses, is not in the population; M2 and "
        "M4 stand far from the population's place)."
    )


def test_weight_sentence_carries_excess_floor_and_gap(given):
    best = fields.Optimality(excess_db=5.123, floor_db=5.113, gap_db=0.01, order=6)
    assert sentence(certificate_of(given, optimality=best), "Weight of order 6") == (
        "Weight of order 6 is within 0.010 dB of the best possible of that order: it exceeds the "
        "required radius times the allowed profile by at most 5.12 dB, against a proved floor of "
        "5.11 dB (linear programming)."
    )


def test_setters_are_named_by_unit_head_and_temperature(given):
    first, second = given.plant_set.plants[0], given.plant_set.plants[4]
    entries = (
        fields.Attribution(first.response, 8263.0, 1.0, "M5"),
        fields.Attribution(first.response, 90.0, 0.2, "M1"),
        fields.Attribution(second.response, 2200.0, 0.9999, "M2"),
        fields.Attribution(first.response, 1240.0, 0.999, "M1"),
    )
    changed = replace(given, plant_set=replace(given.plant_set, attribution=entries))
    assert sentence(changed, "The bound is set") == (
        "The bound is set at 3 frequencies, where a plant touches the weight: U01 (head 0, 10 °C "
        "near 1.24 kHz, M1; head 0, 10 °C near 8.26 kHz, M5) and U02 (head 0, 10 °C near 2.2 kHz)."
    )


def test_where_the_weight_passes_one(given):
    radii = given.plant_set.radii
    at = int(np.flatnonzero(radii.weight_magnitude >= 1.0)[0])
    text = sentence(given, "The weight first passes 1")
    assert f"{radii.frequency[at] / 1e3:.3g} kHz" in text
    low = replace(radii, weight_magnitude=np.full(radii.frequency.size, 0.5))
    changed = replace(given, plant_set=replace(given.plant_set, radii=low))
    assert sentence(changed, "The weight stays below 1")


def test_marks_that_stayed_in_the_bound_are_told(given):
    assert "1 response that stayed in the bound (1 as outlier)" in sentence(given, "Screening")
    marked = str(given.responses["response"].values[1])
    measured = replace(
        given.plant_set.certificate.measured, excluded=(fields.Excluded(marked, "outlier"),)
    )
    changed = certificate_of(given, measured=measured)
    assert not any(each.startswith("Screening") for each in verdict(changed))


def test_coverage_sentence_comes_from_the_stage_else_from_the_set(given):
    assert "Nothing is claimed about the next unit." in verdict(given)
    stated = fields.Coverage(0.88, 0.95, 24, "Wilks 1941", ())
    changed = replace(certificate_of(given, coverage=stated), coverage={})
    text = sentence(changed, "With 95 % confidence")
    assert "at least 88 % of all units (Wilks 1941, 24 units)" in text
    assert text.endswith("no safety certificate.")


def test_envelope_ends_the_verdict(given):
    assert verdict(given)[-1] == (
        "Everything is claimed from 50 Hz to 22 kHz and at the temperatures measured "
        "(10 to 50 °C); outside, nothing is."
    )
