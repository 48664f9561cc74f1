"""Progress bars for the terminal; stages only see a callable."""

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import TypeAlias

Progress: TypeAlias = Callable[[str], Callable[[int, int], None]]
"""Given a stage's name, gives what that stage calls with (done, total)."""


def silent(stage: str) -> Callable[[int, int], None]:
    """Return a progress callable that shows nothing."""
    return lambda done, total: None


@contextmanager
def bars(*, quiet: bool = False) -> Iterator[Progress]:
    """Give progress bars, one per stage, with the time that remains.

    Parameters
    ----------
    quiet
        Show nothing at all. Nothing is shown either where stderr is no terminal.
    """
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, TextColumn, TimeRemainingColumn
    from rich.progress import Progress as Bars

    console = Console(stderr=True)
    if quiet or not console.is_terminal:
        yield silent
        return
    columns = (
        TextColumn("{task.description:<11}"),
        BarColumn(),
        MofNCompleteColumn(),
        TimeRemainingColumn(),
    )
    with Bars(*columns, console=console) as shown:

        def begin(stage: str) -> Callable[[int, int], None]:
            task = shown.add_task(stage, total=None)
            return lambda done, total: shown.update(task, completed=done, total=total)

        yield begin
