"""The command line: thin commands in the order of the work."""

import sys
import traceback
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

import click

from identkit.errors import IdentkitError

if TYPE_CHECKING:
    from identkit.pipeline import Run

STAGES = (
    "read",
    "estimate",
    "screen",
    "fit",
    "pair",
    "population",
    "nominal",
    "bound",
    "coverage",
    "audit",
    "export",
    "report",
)
NOT_HELD, WRONG_INPUT, FAULT, STOPPED = 1, 2, 3, 130


class _Commands(click.Group):
    """List commands in the order of the work, not of the alphabet."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(self.commands)


@click.group(cls=_Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="identkit")
def commands() -> None:
    """From measured frequency responses to a plant set that holds them."""


def _folder(**kwargs: bool) -> click.Path:
    return click.Path(file_okay=False, path_type=Path, **kwargs)


_SHARE = click.FloatRange(min=0.0, max=1.0, min_open=True)
_jobs = click.option(
    "--jobs", type=click.IntRange(min=1), help="Processes to use; default all cores."
)
_quiet = click.option("--quiet", is_flag=True, help="Print the verdict only.")


@commands.command()
@click.argument("folder", type=_folder(), default="identkit-demo")
@click.option("--records", is_flag=True, help="Closed-loop time records of an invented bench.")
@_jobs
@_quiet
def demo(folder: Path, records: bool, jobs: int | None, quiet: bool) -> None:
    """Write an invented campaign to FOLDER and run its study."""
    from identkit.demo import write_demo

    study = write_demo(folder, records=records)
    if not quiet:
        click.echo(f"Wrote an invented campaign and its study to {folder}")
    _finish(_run(study, jobs=jobs, quiet=quiet))


@commands.command()
@click.argument("folder", type=_folder())
def new(folder: Path) -> None:
    """Write a commented study.toml to FOLDER to start from."""
    from identkit.demo import write_template

    click.echo(f"Wrote {write_template(folder)}: set [responses] files, then run it")


@commands.command()
@click.argument("study", type=click.Path(dir_okay=False, path_type=Path))
@click.option("--until", type=click.Choice(STAGES), help="Stop after this stage.")
@click.option("--redo", type=click.Choice(STAGES), help="Do this stage and what follows again.")
@_jobs
@_quiet
def run(study: Path, until: str | None, redo: str | None, jobs: int | None, quiet: bool) -> None:
    """Run all stages of STUDY, resuming where results are still good."""
    _finish(_run(study, until=until, redo=redo, jobs=jobs, quiet=quiet))


@commands.command()
@click.argument("study", type=click.Path(dir_okay=False, path_type=Path))
@click.option("--frequency-error", type=_SHARE, default=1e-4, show_default=True, help="Relative.")
@click.option("--damping-error", type=_SHARE, default=0.02, show_default=True, help="Relative.")
@click.option("--radius-error", type=_SHARE, default=0.02, show_default=True, help="Relative.")
def plan(study: Path, frequency_error: float, damping_error: float, radius_error: float) -> None:
    """Say how long and how hard to excite the devices of STUDY to reach wanted errors."""
    from identkit.excitation import plan_excitation

    planned = plan_excitation(
        study, frequency=frequency_error, damping=damping_error, radius=radius_error
    )
    for sentence in planned.sentences:
        click.echo(sentence)


@commands.command()
@click.argument("file", type=click.Path(dir_okay=False, path_type=Path))
def show(file: Path) -> None:
    """Say what is inside a responses, modes or set file."""
    from identkit.show import describe

    click.echo(describe(file))


@commands.command()
@click.argument("plant_set", metavar="SET", type=click.Path(dir_okay=False, path_type=Path))
@click.argument(
    "responses", nargs=-1, required=True, metavar="RESPONSES...", type=click.Path(path_type=Path)
)
@click.option(
    "--study",
    type=click.Path(dir_okay=False, path_type=Path),
    help="Study file that names the columns and units of text files.",
)
def audit(plant_set: Path, responses: tuple[Path, ...], study: Path | None) -> None:
    """Say whether SET holds RESPONSES: files, or a results folder."""
    from identkit.set_audit import audit_files

    result = audit_files(plant_set, responses, study)
    click.echo(result.text)
    if not result.held:
        sys.exit(NOT_HELD)


_figure = click.option(
    "--figure",
    type=click.Path(dir_okay=False, path_type=Path),
    help="Draw the picture to this .svg or .png file.",
)


@commands.command()
@click.argument("plant_set", metavar="SET", type=click.Path(dir_okay=False, path_type=Path))
@click.argument("controller", type=click.Path(dir_okay=False, path_type=Path))
@_figure
def check(plant_set: Path, controller: Path, figure: Path | None) -> None:
    """Say what CONTROLLER does on SET: margins, robust stability, worst plants."""
    from identkit.controller_answer import check_files

    answer = check_files(plant_set, controller, figure)
    click.echo(answer.text)
    if not answer.holds:
        sys.exit(NOT_HELD)


@commands.command()
@click.argument("first", metavar="SET", type=click.Path(dir_okay=False, path_type=Path))
@click.argument("second", metavar="SET", type=click.Path(dir_okay=False, path_type=Path))
@_figure
def compare(first: Path, second: Path, figure: Path | None) -> None:
    """Say whether one SET contains the other, what changed and what it costs."""
    from identkit.comparison_answer import compare_files

    answer = compare_files(first, second, figure)
    click.echo(answer.text)
    if not answer.holds:
        sys.exit(NOT_HELD)


@commands.command()
@click.argument("history", metavar="HISTORY")
@click.argument("folders", nargs=-1, metavar="[FOLDER]...", type=_folder())
@click.option(
    "--set",
    "plant_set",
    type=click.Path(dir_okay=False, path_type=Path),
    help="Set file to release; default the one released before, or the first folder's.",
)
@click.option(
    "--run-length", type=float, help="Units between false alarms of all charts; default 500."
)
@click.option("--baseline", type=int, help="Units that make the baseline; default 12.")
@click.option("--report", type=_folder(), help="Folder for the page; default beside HISTORY.")
@_quiet
def drift(
    history: str,
    folders: tuple[Path, ...],
    plant_set: Path | None,
    run_length: float | None,
    baseline: int | None,
    report: Path | None,
    quiet: bool,
) -> None:
    """Add results folders to HISTORY (a file, folder or database URL), chart and judge."""
    from identkit.drift import track_drift

    result = track_drift(
        history,
        folders,
        plant_set=plant_set,
        run_length=run_length,
        baseline=baseline,
        report=report,
    )
    for sentence in result.verdict[: 1 if quiet else None]:
        click.echo(sentence)
    click.echo(f"Report: {result.report}")
    if result.signal:
        sys.exit(NOT_HELD)


def _run(
    study: Path,
    *,
    until: str | None = None,
    redo: str | None = None,
    jobs: int | None = None,
    quiet: bool = False,
) -> "Run":
    from identkit.pipeline import run_study
    from identkit.progress import bars

    with bars(quiet=quiet) as progress:
        return run_study(study, until=until, redo=redo, jobs=jobs, progress=progress)


def _finish(result: "Run") -> None:
    for sentence in result.verdict:
        click.echo(sentence)
    if result.report is not None:
        click.echo(f"Report: {result.report}")
    if not result.held:
        sys.exit(NOT_HELD)


def main(arguments: list[str] | None = None) -> None:
    """Run the command line; turn every error into its exit code.

    Parameters
    ----------
    arguments
        Words after the program's name; the process's own by default.
    """
    sys.exit(_exit_code(lambda: commands.main(arguments, standalone_mode=False)))


def _exit_code(command: Callable[[], object]) -> int:
    try:
        result = command()
    except click.exceptions.Exit as stop:
        return stop.exit_code
    except click.ClickException as error:
        error.show()
        return WRONG_INPUT
    except IdentkitError as error:
        click.echo(str(error), err=True)
        return WRONG_INPUT
    except (KeyboardInterrupt, click.Abort):
        click.echo("stopped; run the same command again to go on from here", err=True)
        return STOPPED
    except Exception:
        click.echo(f"internal fault; the traceback is in {_write_fault()}", err=True)
        return FAULT
    return result if isinstance(result, int) else 0


def _write_fault() -> Path:
    import tempfile

    with tempfile.NamedTemporaryFile(
        "w", prefix="identkit-fault-", suffix=".log", delete=False, encoding="utf-8"
    ) as log:
        traceback.print_exc(file=log)
    return Path(log.name)
