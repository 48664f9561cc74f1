"""The answer of a command, and the picture it writes where the user asks."""

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from identkit.errors import InputError, Problem

if TYPE_CHECKING:
    from matplotlib.figure import Figure

SUFFIXES = (".svg", ".png")


@dataclass(frozen=True)
class Answer:
    """Words, and whether the answer is yes."""

    text: str
    holds: bool


def refuse_wrong_picture(path: Path) -> None:
    """Refuse a picture's path before any work is done for it.

    Raises
    ------
    InputError
        If its suffix is neither .svg nor .png, or its folder is not there.
    """
    if path.suffix.lower() not in SUFFIXES:
        raise InputError(Problem(str(path), f'a suffix "{path.suffix}"', "a .svg or .png file"))
    if not path.parent.is_dir():
        raise InputError(Problem(str(path), "no such folder", "a folder that exists"))


def save_picture(figure: "Figure", path: Path) -> None:
    """Write a picture, the same bytes for the same picture."""
    import matplotlib

    with matplotlib.rc_context({"svg.hashsalt": "identkit", "svg.fonttype": "none"}):
        metadata = {"Date": None} if path.suffix.lower() == ".svg" else {"Software": None}
        figure.savefig(path, dpi=160, metadata=metadata)
