"""The results folder of a study: one set of files per stage, replaced atomically, resumed by key.

A stage's key is a digest of the code, of the settings the stage depends on, of the keys of the
stages before it and, where it reads measured files, of their contents. A stage whose key is
recorded and whose files stand as they were written is current and need not run again.

>>> with StudyFolder(load_settings("study.toml")) as study:          # doctest: +SKIP
...     read = study.stage("read", settings=("responses",), inputs=files, files=("responses.nc",))
...     if not read.current:
...         with read.work():
...             save(responses, read.path("responses.nc"))
...     fit = study.stage("fit", settings=("model",), after=("read",), files=("fits.nc",))

`Stage.work` first strikes the stage from ``run.json`` and enters it again, with its time, only
after the body has ended well and every file is there. So an interruption at any moment (Ctrl-C
included) leaves finished stages finished and the interrupted one to be done again; what it has put
in its `Stage.parts_folder` stays for the next run as long as the key is the same.
"""

import hashlib
import json
import logging
import os
import platform
import shutil
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from datetime import UTC, datetime
from functools import cache
from importlib import metadata
from pathlib import Path
from types import TracebackType
from typing import Any, Self

from identkit.atomic import write_text
from identkit.errors import InputError, MissingStageError, Problem
from identkit.settings import Settings, settings_digest

RUN_FORMAT = "identkit-run/1"
LOGGER = logging.getLogger("identkit")

_LIBRARIES = ("numpy", "scipy", "xarray", "h5netcdf", "pandas", "cvxpy", "numba")


class StudyFolder:
    """The results folder of one study, opened for a run.

    Parameters
    ----------
    settings
        The study; its results folder must lie inside the folder of the study file.

    Raises
    ------
    InputError
        If the results folder would lie outside the study's folder or cannot be written.
    """

    def __init__(self, settings: Settings) -> None:
        self.settings = settings
        self.folder = _results_folder(settings)
        _make_writable(self.folder)
        self._stages: dict[str, Stage] = {}
        self._record = _read_record(self.folder / "run.json")
        self._log: logging.Handler | None = None

    def __enter__(self) -> Self:
        handler = logging.FileHandler(self.folder / "identkit.log", encoding="utf-8")
        handler.setFormatter(logging.Formatter("%(asctime)s %(levelname)s %(message)s"))
        LOGGER.addHandler(handler)
        LOGGER.setLevel(logging.INFO)
        self._log = handler
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        if self._log is not None:
            LOGGER.removeHandler(self._log)
            self._log.close()
            self._log = None

    def path(self, name: str) -> Path:
        """Return where a file of the results folder stands."""
        return self.folder / name

    def stage(
        self,
        name: str,
        *,
        files: Sequence[str],
        settings: Sequence[str] = (),
        after: Sequence[str] = (),
        inputs: Sequence[Path] = (),
    ) -> "Stage":
        """Declare a stage and learn whether it must run.

        Parameters
        ----------
        name
            The stage, as ``--until`` takes it.
        files
            What it writes, relative to the results folder.
        settings
            Tables ("model") or keys ("bound.order") it depends on.
        after
            Stages it reads from; they must have been declared before.
        inputs
            Measured files it reads; their contents count.

        Raises
        ------
        MissingStageError
            If a stage in `after` was not declared.
        """
        for needed in after:
            if needed not in self._stages:
                raise MissingStageError(needed, name)
        parts = [name, code_version()]
        parts += [settings_digest(self.settings, *settings)] if settings else []
        parts += [self._stages[needed].key for needed in after]
        parts += [self._inputs_digest(inputs)] if inputs else []
        stage = Stage(self, name, _digest(parts), tuple(files), tuple(after))
        self._stages[name] = stage
        return stage

    def forget(self, name: str) -> None:
        """Strike a stage and everything that follows from it, so that they run again."""
        stages = self._record["stages"]
        struck = {name}
        grown = True
        while grown:
            more = {k for k, v in stages.items() if struck & set(v["after"])} - struck
            struck |= more
            grown = bool(more)
        for each in struck:
            stages.pop(each, None)
        self._write_record()

    @property
    def input_digest(self) -> str:
        """Digest of the names and contents of all measured files of this study."""
        return _digest([f"{name}:{entry['sha256']}" for name, entry in self._inputs.items()])

    @property
    def record(self) -> dict[str, Any]:
        """What ``run.json`` holds: versions, digests, timings per stage."""
        return self._record

    @property
    def _inputs(self) -> dict[str, Any]:
        return dict(sorted(self._record["inputs"].items()))

    def _inputs_digest(self, inputs: Sequence[Path]) -> str:
        """Digest the input files, reading again only those whose size or time has changed."""
        known = self._record["inputs"]
        seen: dict[str, Any] = {}
        for path in inputs:
            name = _relative(path, self.settings.folder)
            seen[name] = _input_entry(path, known.get(name))
        self._record["inputs"] = seen
        return self.input_digest

    def _write_record(self) -> None:
        tables = self.settings.model_dump()
        self._record.update(
            format=RUN_FORMAT,
            study=self.settings.study.name,
            version=code_version(),
            python=platform.python_version(),
            libraries=library_versions(),
            settings={name: settings_digest(self.settings, name) for name in tables},
        )
        write_text(self.folder / "run.json", json.dumps(self._record, indent=1))


@dataclass
class Stage:
    """One stage of a study: whether it is current, where its files go, and the record of its work.

    Attributes
    ----------
    key
        Digest of everything the stage depends on.
    files
        What it writes, relative to the results folder.
    after
        Stages it reads from.
    """

    study: StudyFolder
    name: str
    key: str
    files: tuple[str, ...]
    after: tuple[str, ...]
    seconds: float = field(default=0.0, init=False)

    @property
    def current(self) -> bool:
        """Whether the recorded key is this one and every file stands as it was written."""
        entry = self.study.record["stages"].get(self.name)
        if entry is None or entry["key"] != self.key:
            return False
        known = entry["files"]
        return all(_same_file(self.path(name), known.get(name)) for name in self.files)

    def path(self, name: str) -> Path:
        """Return where one of the stage's files stands."""
        return self.study.folder / name

    @property
    def parts_folder(self) -> Path:
        """A folder for finished chunks of a long stage, kept until the stage is done."""
        folder = self.study.folder / "parts" / f"{self.name}-{self.key[:16]}"
        folder.mkdir(parents=True, exist_ok=True)
        return folder

    @contextmanager
    def work(self) -> Iterator["Stage"]:
        """Do the stage inside this block; it is recorded when the block ends well.

        Raises
        ------
        FileNotFoundError
            If the block ended without writing a file the stage declared.
        """
        stages = self.study.record["stages"]
        stages.pop(self.name, None)
        self.study._write_record()
        LOGGER.info("%s: start", self.name)
        start = time.perf_counter()
        try:
            yield self
        except BaseException as error:
            LOGGER.info("%s: not finished (%s)", self.name, type(error).__name__)
            raise
        self.seconds = time.perf_counter() - start
        stages[self.name] = self._entry()
        self.study._write_record()
        self._drop_parts()
        LOGGER.info("%s: done in %.2f s", self.name, self.seconds)

    def _entry(self) -> dict[str, Any]:
        return {
            "key": self.key,
            "after": list(self.after),
            "files": {name: _file_entry(self.path(name)) for name in self.files},
            "seconds": round(self.seconds, 4),
            "finished": datetime.now(UTC).isoformat(timespec="seconds"),
        }

    def _drop_parts(self) -> None:
        parts = self.study.folder / "parts"
        for folder in parts.glob(f"{self.name}-*"):
            shutil.rmtree(folder, ignore_errors=True)
        if parts.is_dir() and not any(parts.iterdir()):
            parts.rmdir()


@cache
def code_version() -> str:
    """Return the version of the package and a digest of its files."""
    package = Path(__file__).parent
    digest = hashlib.sha256()
    for path in sorted(package.rglob("*")):
        if path.suffix in (".py", ".json", ".html", ".css", ".toml"):
            digest.update(path.relative_to(package).as_posix().encode())
            digest.update(path.read_bytes())
    return f"{_version('identkit')}+{digest.hexdigest()[:12]}"


@cache
def library_versions() -> dict[str, str]:
    """Return the versions of the libraries that numbers depend on; "" where not installed."""
    return {name: _version(name) for name in _LIBRARIES}


def _version(name: str) -> str:
    try:
        return metadata.version(name)
    except metadata.PackageNotFoundError:
        return ""


def _results_folder(settings: Settings) -> Path:
    home = settings.folder
    folder = (home / settings.study.results).resolve()
    if folder == home or not folder.is_relative_to(home):
        place = f"{settings.path}, [study] results"
        expected = "a folder of its own inside the folder of the study file"
        raise InputError(Problem(place, f'"{settings.study.results}"', expected))
    return folder


def _make_writable(folder: Path) -> None:
    probe = folder / ".writable"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        probe.touch()
        probe.unlink()
    except (FileExistsError, NotADirectoryError):
        found = "a file where the folder should be"
    except PermissionError:
        found = "no permission to write"
    except OSError as error:
        found = error.strerror or type(error).__name__
    else:
        return
    raise InputError(Problem(str(folder), found, "a results folder that can be written"))


def _read_record(path: Path) -> dict[str, Any]:
    """Read ``run.json``; one that is missing or damaged counts as no stage done."""
    try:
        record = json.loads(path.read_text(encoding="utf-8"))
        usable = record["format"] == RUN_FORMAT and isinstance(record["stages"], dict)
    except FileNotFoundError:
        usable = False
    except (OSError, ValueError, KeyError, TypeError):
        LOGGER.warning("%s is damaged: every stage is done again", path.name)
        usable = False
    if not usable:
        return {"format": RUN_FORMAT, "inputs": {}, "stages": {}}
    record.setdefault("inputs", {})
    return dict(record)


def _input_entry(path: Path, known: dict[str, Any] | None) -> dict[str, Any]:
    try:
        return _known_or_read(path, known)
    except OSError as error:
        # The read stage says what is wrong with the file; here it only must not look unchanged.
        return {"size": -1, "modified_ns": -1, "sha256": f"unreadable: {error.strerror}"}


def _known_or_read(path: Path, known: dict[str, Any] | None) -> dict[str, Any]:
    status = path.stat()
    if known and (known["size"], known["modified_ns"]) == (status.st_size, status.st_mtime_ns):
        return known
    return _file_entry(path)


def _file_entry(path: Path) -> dict[str, Any]:
    """Return size, time and digest of a file."""
    status = path.stat()
    with path.open("rb") as file:
        digest = hashlib.file_digest(file, "sha256").hexdigest()
    return {"size": status.st_size, "modified_ns": status.st_mtime_ns, "sha256": digest}


def _relative(path: Path, folder: Path) -> str:
    return Path(os.path.relpath(path, folder)).as_posix()


def _same_file(path: Path, known: Any) -> bool:
    """Whether a results file has the contents that were written; its time may differ (a copy)."""
    if not path.is_file() or not isinstance(known, dict):
        return False
    if path.stat().st_size != known.get("size"):
        return False
    return bool(_file_entry(path)["sha256"] == known.get("sha256"))


def _digest(parts: Sequence[str]) -> str:
    return hashlib.sha256("\n".join(parts).encode()).hexdigest()
