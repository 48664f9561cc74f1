"""Files that are replaced whole or not at all, so that an interruption never leaves half a file."""

import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path


@contextmanager
def replacing(path: Path | str) -> Iterator[Path]:
    """Give a temporary file in the same folder; put it in the place of `path` when all went well.

    Parameters
    ----------
    path
        The file to replace. It stays as it was if the body raises or is interrupted.
    """
    target = Path(path)
    temporary = target.with_name(f".{target.stem}.{os.getpid()}.part{target.suffix}")
    try:
        yield temporary
        temporary.replace(target)
    finally:
        temporary.unlink(missing_ok=True)


def write_text(path: Path | str, text: str) -> None:
    """Replace `path` by `text` in UTF-8."""
    with replacing(path) as temporary:
        temporary.write_text(text, encoding="utf-8", newline="\n")
