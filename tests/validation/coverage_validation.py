"""Is the stated coverage true? Simulated campaigns through the public functions, counted.

Run ``python tests/validation/coverage_validation.py --campaigns 100`` from the top of the
repository: it goes on from what ``reports/coverage_validation.json`` holds and writes the summary
beside it. ``--first SEED`` starts at another seed, ``--seconds S`` stops after that time.
"""

import argparse
import json
import time
from collections import Counter
from pathlib import Path

from simulated_campaigns import (
    CONFIDENCE,
    FRESH,
    POPULATIONS,
    SHARE_HELD_OUT,
    UNITS,
    plain,
    run_campaign,
)

from identkit.atomic import write_text
from identkit.methods.tolerance_limits import binomial_interval

REPORTS = Path(__file__).parents[2] / "reports"
OUTCOMES = REPORTS / "coverage_validation.json"
SUMMARY = REPORTS / "coverage_validation.md"


def main() -> None:
    """Run what is missing and write both files after each round of populations."""
    asked = argparse.ArgumentParser(description=__doc__)
    asked.add_argument("--campaigns", type=int, default=100, help="of each population")
    asked.add_argument("--first", type=int, default=1)
    asked.add_argument("--seconds", type=float, default=float("inf"))
    asked.add_argument("--populations", nargs="+", default=POPULATIONS, choices=POPULATIONS)
    options = asked.parse_args()
    rows = json.loads(OUTCOMES.read_text(encoding="utf-8")) if OUTCOMES.exists() else []
    done = {(row["population"], row["seed"]) for row in rows}
    end = time.monotonic() + options.seconds
    for seed in range(options.first, options.first + options.campaigns):
        for population in options.populations:
            if (population, seed) not in done:
                rows.append(plain(run_campaign(population, seed)))
        lines = ",\n".join(json.dumps(row) for row in rows)
        write_text(OUTCOMES, f"[\n{lines}\n]\n")
        write_text(SUMMARY, summary(rows))
        if time.monotonic() > end:
            break


def summary(rows: list[dict]) -> str:
    """Return the counts as a page."""
    held_out = round(UNITS * SHARE_HELD_OUT)
    allowed = 100 * (1.0 - CONFIDENCE)
    parts = [
        "# Is the stated coverage true?",
        "",
        f"{len(rows)} simulated campaigns of invented plants (four modes, {UNITS} units measured "
        f"once, {UNITS - held_out} bound and {held_out} held out), each through marks, fit, "
        f"pairing, population, nominal, bound and statement. A statement is broken when the share "
        f"of {FRESH} fresh units that the set really holds is below the share stated with "
        f"{100 * CONFIDENCE:g} % confidence; that may happen in {allowed:g} % of campaigns. "
        "Intervals are exact binomial ones, 95 % (Clopper and Pearson 1934). Seeds and outcomes "
        "of every campaign: `coverage_validation.json`.",
        "",
        "| population | campaigns | true share, mean | exact: broken | stated, mean | "
        "model: broken where trusted | stated, mean | model: broken had all been trusted | "
        "not trusted | leave-one-out share, mean |",
        "|---|---|---|---|---|---|---|---|---|---|",
    ]
    parts += [_row(name, [r for r in rows if r["population"] == name]) for name in POPULATIONS]
    parts += ["", "## Checks that did not let the model's statement stand", ""]
    for name in POPULATIONS:
        chosen = [r for r in rows if r["population"] == name]
        counts = Counter(check for r in chosen for check in r["failed_checks"])
        told = ", ".join(f"{check}: {count}" for check, count in counts.most_common()) or "none"
        parts.append(f"- {name} ({len(chosen)}): {told}")
    return "\n".join([*parts, ""])


def _row(name: str, rows: list[dict]) -> str:
    if not rows:
        return f"| {name} | 0 |" + " |" * 8
    trusted = [r for r in rows if r["model_trusted"]]
    cells = [
        name,
        str(len(rows)),
        _mean(r["true_content"] for r in rows),
        _broken(rows, "exact_content"),
        _mean(r["exact_content"] for r in rows),
        _broken(trusted, "model_content"),
        _mean(r["model_content"] for r in trusted),
        _broken(rows, "model_content"),
        _share(len(rows) - len(trusted), len(rows)),
        _mean(r["left_out_held"] / r["left_out_units"] for r in rows),
    ]
    return "| " + " | ".join(cells) + " |"


def _mean(values) -> str:
    found = list(values)
    return f"{100 * sum(found) / len(found):.1f} %" if found else "-"


def _broken(rows: list[dict], stated: str) -> str:
    return _share(sum(r["true_content"] < r[stated] for r in rows), len(rows))


def _share(count: int, of: int) -> str:
    if not of:
        return "-"
    low, high = binomial_interval(count, of, 0.95)
    return f"{count} of {of} = {100 * count / of:.1f} % ({100 * low:.1f} to {100 * high:.1f})"


if __name__ == "__main__":
    main()
