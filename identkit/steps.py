"""What each stage of a study reads, writes and depends on, in order.

To add a stage: a function that takes `Work`, and its line in `STEPS`.
"""

import json
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from functools import cached_property, partial
from typing import Any

import xarray as xr

from identkit.atomic import write_text
from identkit.grids import Gridded, load, save
from identkit.plant_set.files import load_set
from identkit.plant_set.model import PlantSet
from identkit.readers.campaign import CampaignFiles
from identkit.report.contents import ReportInput
from identkit.report.verdict import short_verdict
from identkit.settings import Settings
from identkit.stages.export import SetOrigin, build_set
from identkit.stages.read import READ_SETTINGS, read
from identkit.stages.selection import HELD_OUT, held_out, left_out
from identkit.study import Stage, StudyFolder


@dataclass
class Work:
    """What a step works on: the settings, its stage, and the results so far."""

    study: StudyFolder
    stage: Stage
    found: CampaignFiles
    jobs: int
    progress: Callable[[int, int], None]
    kept: dict[str, Any] = field(default_factory=dict)

    @property
    def settings(self) -> Settings:
        """The study's settings."""
        return self.study.settings

    def gridded(self, name: str) -> Gridded:
        """Return the labelled data of a results file, read once per run."""
        if name not in self.kept:
            self.kept[name] = load(self.study.path(name))
        data: Gridded = self.kept[name]
        return data

    def dataset(self, name: str) -> xr.Dataset:
        """Return the labelled data of a results file that has no frequency grid of its own."""
        data = self.gridded(name)
        assert isinstance(data, xr.Dataset)
        return data

    def json(self, name: str) -> dict[str, Any]:
        """Return the contents of a JSON results file."""
        contents: dict[str, Any] = json.loads(self.study.path(name).read_text(encoding="utf-8"))
        return contents

    def save(self, data: Gridded, name: str) -> None:
        """Write labelled data to a results file and keep it for the steps that follow."""
        save(data, self.stage.path(name))
        self.kept[name] = data

    @cached_property
    def excluded(self) -> dict[str, str]:
        """Responses the settings leave out for good, with reasons."""
        return left_out(
            self.gridded("responses.nc"),
            self.gridded("screening.nc"),
            exclude=[(rule.labels, rule.reason) for rule in self.settings.bound.exclude],
            leave_out=self.settings.screen.leave_out,
        )

    @cached_property
    def held_out(self) -> dict[str, str]:
        """Unit (or lot) of every response kept from nominal and bound to state the coverage."""
        bound = self.settings.bound
        return held_out(
            self.gridded("responses.nc"),
            self.excluded,
            share=bound.hold_out,
            seed=self.settings.study.seed,
            by=bound.exchangeable,
        )

    @property
    def left_out(self) -> dict[str, str]:
        """Everything nominal and bound do not see, with reasons."""
        return self.excluded | dict.fromkeys(self.held_out, HELD_OUT)


@dataclass(frozen=True)
class Step:
    """One stage as the pipeline sees it."""

    name: str
    work: Callable[[Work], None]
    files: tuple[str, ...]
    after: tuple[str, ...] = ()
    settings: tuple[str, ...] = ()


def _read(work: Work) -> None:
    """Read measured responses, or estimate them where the study has time records instead."""
    records, model = work.settings.records, work.settings.model
    if records is None:
        work.save(read(work.settings, work.found, work.progress), "responses.nc")
        return
    from identkit.stages.estimate import estimate_campaign
    from identkit.stages.record_sampling import PlantModel

    estimated = estimate_campaign(
        work.found,
        records,
        work.settings.responses,
        folder=work.settings.folder,
        model=PlantModel(model.base, model.residues),
        jobs=work.jobs,
        progress=work.progress,
    )
    work.save(estimated, "responses.nc")


def _screen(work: Work) -> None:
    from identkit.stages.screen import screen

    limits = work.settings.screen.model_dump(exclude={"leave_out"})
    marked = screen(work.gridded("responses.nc"), band=work.settings.responses.band, **limits)
    work.save(marked, "screening.nc")


def _fit(work: Work) -> None:
    from identkit.stages.fit import fit_modes
    from identkit.stages.tables import fits_table, write_table

    model = work.settings.model.model_dump(exclude={"sharing"})
    fits = fit_modes(
        work.gridded("responses.nc"),
        work.gridded("screening.nc"),
        **model,
        jobs=work.jobs,
        progress=work.progress,
    )
    work.save(fits, "fits.nc")
    write_table(fits_table(fits), work.stage.path("fits.csv"))


def _pair(work: Work) -> None:
    from identkit.stages.pair import pair_modes
    from identkit.stages.tables import modes_table, write_table

    modes = pair_modes(
        work.dataset("fits.nc"),
        work.gridded("responses.nc"),
        work.gridded("screening.nc"),
        reference_temperature=work.settings.nominal.reference_temperature,
        delay=work.settings.model.delay,
        jobs=work.jobs,
        progress=work.progress,
    )
    work.save(modes, "modes.nc")
    write_table(modes_table(modes), work.stage.path("modes.csv"))


def _population(work: Work) -> None:
    from identkit.stages.population import describe_population
    from identkit.stages.tables import population_table, write_table

    population = describe_population(
        work.dataset("modes.nc"),
        reference_temperature=work.settings.nominal.reference_temperature,
        leave_out=tuple(work.left_out),
    )
    work.save(population, "population.nc")
    write_table(population_table(population), work.stage.path("population.csv"))


def _nominal(work: Work) -> None:
    from identkit.stages.nominal import choose_nominal, measured_lines

    nominal = choose_nominal(
        work.dataset("modes.nc"),
        work.dataset("population.nc"),
        choice=work.settings.nominal.choice,
        band=work.settings.responses.band,
        lines=measured_lines(work.gridded("responses.nc")),
        left_out=work.left_out,
        radius_floor=work.settings.bound.radius_floor,
    )
    work.save(nominal, "nominal.nc")


def _bound(work: Work) -> None:
    from identkit.stages.bound import bound_spread
    from identkit.stages.choose_form import AUTO, bound_in_cheapest_form

    options = work.settings.bound
    in_form = partial(bound_spread, form=options.form)
    bound = (bound_in_cheapest_form if options.form == AUTO else in_form)(
        work.dataset("modes.nc"),
        work.dataset("nominal.nc"),
        order=options.order,
        profile=options.profile,
        cap=options.cap,
        radius_floor=options.radius_floor,
        left_out=work.left_out,
        jobs=work.jobs,
    )
    work.save(bound, "bound.nc")
    draft = build_set(
        work.dataset("nominal.nc"), bound, work.dataset("modes.nc"), _origin(work.study)
    )
    draft.save(work.stage.path("draft.h5"))


def _origin(study: StudyFolder) -> SetOrigin:
    settings = study.settings
    return SetOrigin(
        radius_floor=settings.bound.radius_floor,
        cap=settings.bound.cap,
        settings=settings.model_dump(mode="json"),
        input_digests={name: entry["sha256"] for name, entry in study.record["inputs"].items()},
    )


def _coverage(work: Work) -> None:
    from identkit.stages.coverage import cover

    asked = work.settings.bound
    coverage = cover(
        load_set(work.study.path("draft.h5")),
        work.dataset("modes.nc"),
        work.dataset("population.nc"),
        work.dataset("nominal.nc"),
        work.dataset("bound.nc"),
        held_out=work.held_out,
        left_out=work.left_out,
        content=asked.content,
        confidence=asked.confidence,
        exchangeable=asked.exchangeable,
        radius_floor=asked.radius_floor,
        seed=work.settings.study.seed,
    )
    write_text(work.stage.path("coverage.json"), json.dumps(coverage, indent=1))


def _audit(work: Work) -> None:
    from identkit.stages.audit import audit, audit_table
    from identkit.stages.tables import write_table

    audited = audit(
        load_set(work.study.path("draft.h5")),
        work.dataset("modes.nc"),
        work.gridded("responses.nc"),
        work.gridded("screening.nc"),
    )
    work.save(audited, "audit.nc")
    write_table(audit_table(audited), work.stage.path("audit.csv"))


def _export(work: Work) -> None:
    from identkit.stages.export import finished_set, write_certificate, write_set_files

    coverage = work.json("coverage.json")
    draft = load_set(work.study.path("draft.h5"))
    final = finished_set(draft, work.dataset("audit.nc"), coverage)
    written = write_set_files(final, work.study.folder, work.settings.export.formats)
    sentences = short_verdict(_report_input(work, final))
    write_certificate(final, work.stage.path("certificate.json"), sentences, written)


def _report(work: Work) -> None:
    from identkit.report.page import write_report
    from identkit.stages.export import finished_set
    from identkit.stages.price import attribute_price

    draft = load_set(work.study.path("draft.h5"))
    final = finished_set(draft, work.dataset("audit.nc"), work.json("coverage.json"))
    work.save(attribute_price(final), "price.nc")
    given = replace(_report_input(work, final), price=work.dataset("price.nc"))
    write_report(given, work.study.folder)


def _report_input(work: Work, plant_set: PlantSet) -> ReportInput:
    return ReportInput(
        study_name=work.settings.study.name,
        responses=work.gridded("responses.nc"),
        screening=work.gridded("screening.nc"),
        fits=work.dataset("fits.nc"),
        modes=work.dataset("modes.nc"),
        population=work.dataset("population.nc"),
        nominal=work.dataset("nominal.nc"),
        bound=work.dataset("bound.nc"),
        audit=work.dataset("audit.nc"),
        plant_set=plant_set,
        coverage=work.json("coverage.json"),
        run=work.study.record,
    )


STEPS = (
    Step("read", _read, ("responses.nc",), (), READ_SETTINGS),
    Step("screen", _screen, ("screening.nc",), ("read",), ("responses.band", "screen")),
    Step("fit", _fit, ("fits.nc", "fits.csv"), ("read", "screen"), ("model",)),
    Step(
        "pair",
        _pair,
        ("modes.nc", "modes.csv"),
        ("read", "screen", "fit"),
        ("nominal.reference_temperature", "model.delay"),
    ),
    Step(
        "population",
        _population,
        ("population.nc", "population.csv"),
        ("pair", "screen"),
        (
            "nominal.reference_temperature",
            "bound.exclude",
            "bound.hold_out",
            "bound.exchangeable",
            "screen.leave_out",
            "study.seed",
        ),
    ),
    Step(
        "nominal",
        _nominal,
        ("nominal.nc",),
        ("read", "pair", "population"),
        ("nominal", "responses.band", "bound.radius_floor"),
    ),
    Step("bound", _bound, ("bound.nc", "draft.h5"), ("pair", "nominal"), ("bound",)),
    Step(
        "coverage",
        _coverage,
        ("coverage.json",),
        ("screen", "pair", "population", "nominal", "bound"),
        ("bound.content", "bound.confidence", "study.seed"),
    ),
    Step("audit", _audit, ("audit.nc", "audit.csv"), ("read", "screen", "pair", "bound")),
    Step("export", _export, ("certificate.json",), ("coverage", "audit"), ("export",)),
    Step("report", _report, ("report.html", "price.nc"), ("export",), ("study.name",)),
)
