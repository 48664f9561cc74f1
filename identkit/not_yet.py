"""What a study file may ask for but this version cannot do."""

import json

from identkit.errors import InputError, Problem
from identkit.settings import HistorySettings, Settings

SCALAR_FORMS = ("multiplicative", "input-multiplicative", "additive", "inverse-multiplicative")


def refuse_unavailable(settings: Settings) -> None:
    """Refuse what the schema knows but this version cannot do yet; nothing is silently ignored.

    Raises
    ------
    InputError
        With one problem per key that asks for something not built yet.
    """
    problems = [
        Problem(f"{settings.path}, {place}", found, f"{expected}; not available in this version")
        for place, asked, found, expected in _not_yet(settings)
        if asked
    ]
    if problems:
        raise InputError(problems)


def _not_yet(settings: Settings) -> list[tuple[str, bool, str, str]]:
    """List every key that can ask for more than is built: place, asked, found, what is there."""
    responses, bound, export = settings.responses, settings.bound, settings.export
    model, nominal, history = settings.model, settings.nominal, settings.history
    ready = HistorySettings().url
    return [
        *_of_records(settings),
        _row("[responses] sample_period", responses.sample_period, 0.0),
        _row("[model] sharing", model.sharing, "auto", "none"),
        _row("[nominal] choice", nominal.choice, "centre", "tightest"),
        _row("[bound] form", bound.form, *SCALAR_FORMS, "auto"),
        _row("[bound] remove", list(bound.remove), []),
        _row("[bound] holds", bound.holds, "measured"),
        _row("[bound] factors", bound.factors, "auto"),
        _row("[bound] split", bound.split, ""),
        _row("[export] period", export.period, 0.0),
        _row("[history] url", history.url, ready),
    ]


def _of_records(settings: Settings) -> list[tuple[str, bool, str, str]]:
    """List what is missing behind time records: fits of sampled responses, and matrix plants."""
    records = settings.records
    if records is None:
        return []
    several = [
        name
        for name in ("drive", "position")
        if not isinstance(getattr(records, name), str) and len(getattr(records, name)) > 1
    ]
    return [
        _row("[records] hold", records.hold, "modelled", "divided"),
        *((f"[records] {name}", True, "several channels", "one channel") for name in several),
    ]


def _row(place: str, value: object, *ready: object) -> tuple[str, bool, str, str]:
    words = " or ".join(json.dumps(choice) for choice in ready)
    return place, value not in ready, json.dumps(value), words
