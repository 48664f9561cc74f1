"""Files found by a path pattern whose fields are labels: ``bench/{unit}/H{head}.csv``.

A field never spans a ``/``; ``{temperature:g}`` asks for a number; ``{}`` stands for text that is
no label. Fields are matched by the `parse` library, one folder of the path at a time.
"""

import math
import os
import re
import string
from collections.abc import Iterator
from dataclasses import dataclass, field
from datetime import datetime
from functools import cached_property
from pathlib import Path
from typing import Any, TypeAlias

import parse

from identkit.errors import InputError, Problem

Label: TypeAlias = str | float

NUMBER_LABELS = ("temperature", "position")
TEXT_LABELS = ("unit", "head", "lot", "measured_at", "repeat", "fixture", "output", "input")
_TAKEN = ("response", "frequency", "source", "mode", "parameter", "frequency_response", "coherence")
_SUFFIXES = (".csv", ".txt", ".tsv", ".dat", ".nc", ".h5", ".hdf5", ".npz")


@dataclass(frozen=True)
class LabelledFile:
    """A file and what its path says of it.

    Attributes
    ----------
    path
        Where it stands.
    identity
        The path below the pattern's fixed part, without suffix; unique within a campaign.
    labels
        Text or numbers by name.
    """

    path: Path
    identity: str
    labels: dict[str, Label] = field(default_factory=dict)


@dataclass(frozen=True)
class CampaignFiles:
    """What a pattern finds: the files, and those that nearly match but carry a wrong label."""

    files: tuple[LabelledFile, ...]
    strays: tuple[tuple[Path, Problem], ...] = ()

    @property
    def paths(self) -> list[Path]:
        """Every file that counts, good or stray: what a change of the campaign is seen by."""
        return [file.path for file in self.files] + [path for path, _ in self.strays]


@dataclass(frozen=True)
class _Component:
    """One folder or file name of a pattern."""

    text: str

    @cached_property
    def pieces(self) -> list[tuple[str, str | None, str | None, str | None]]:
        return list(string.Formatter().parse(self.text))

    @cached_property
    def is_fixed(self) -> bool:
        return all(name is None for _, name, _, _ in self.pieces)

    @cached_property
    def fixed_name(self) -> str:
        return "".join(literal for literal, _, _, _ in self.pieces)

    @cached_property
    def parser(self) -> Any:
        return parse.compile(self.text, case_sensitive=True)

    @cached_property
    def outline(self) -> re.Pattern[str]:
        """The component with every field standing for any text."""
        parts = [
            re.escape(literal) + ("" if name is None else ".+")
            for literal, name, _, _ in self.pieces
        ]
        return re.compile("".join(parts))

    def match(self, name: str) -> dict[str, Any] | None:
        if self.is_fixed:
            return {} if name == self.fixed_name else None
        found = self.parser.parse(name)
        return None if found is None else dict(found.named)


class PathPattern:
    """A path pattern, checked.

    Parameters
    ----------
    text
        The pattern, with ``/`` between folders on every system.
    place
        What to call it in messages.

    Raises
    ------
    InputError
        If a field is malformed or its name is taken.
    """

    def __init__(self, text: str, place: str = "[responses] files") -> None:
        self.text = text
        self.place = place
        names = [part for part in text.replace("\\", "/").split("/") if part not in ("", ".")]
        self._absolute = text.startswith("/")
        self._components = [_Component(name) for name in names]
        self._check()

    @property
    def fields(self) -> tuple[str, ...]:
        """Names of the labels the pattern carries."""
        names = [name for part in self._components for _, name, _, _ in part.pieces if name]
        return tuple(dict.fromkeys(names))

    def find(self, folder: Path) -> CampaignFiles:
        """Return every file under `folder` that matches, in natural order.

        Raises
        ------
        InputError
            If nothing matches (with the nearest folder and a file in it), or if two files carry
            the same labels.
        """
        start = Path("/") if self._absolute else folder
        found: list[tuple[Path, list[str], dict[str, Any]]] = []
        strays: list[tuple[Path, Problem]] = []
        for path, names in self._candidates(start):
            labels = self._match(names)
            if labels is None:
                strays.append((path, self._stray(path, folder)))
            else:
                found.append((path, names, labels))
        files = self._labelled(found, strays, folder)
        if not files and not strays:
            raise InputError(self._nothing_found(start))
        _refuse_repeats(files, folder)
        return CampaignFiles(tuple(files), tuple(strays))

    def label(self, path: Path) -> dict[str, Label]:
        """Return the labels of a file given by hand; none if its path does not fit the pattern."""
        names = list(path.resolve().parts[-len(self._components) :])
        labels = self._match(names) if len(names) == len(self._components) else None
        return {} if labels is None else _checked_labels(labels, str(path))

    def identity(self, path: Path) -> str | None:
        """Return what a campaign calls a file given by hand; None if it does not fit."""
        names = list(path.resolve().parts[-len(self._components) :])
        if len(names) != len(self._components) or self._match(names) is None:
            return None
        return without_suffix(self._below_fixed(names), self.text)

    def _check(self) -> None:
        expected = 'fields such as {unit} or {temperature:g} in a path such as "bench/{unit}.csv"'
        if not self._components:
            raise InputError(Problem(self.place, f'"{self.text}"', expected))
        try:
            for component in self._components:
                _ = component.pieces, component.parser
        except (ValueError, NotImplementedError, parse.RepeatedNameError, re.error) as error:
            raise InputError(Problem(self.place, f'"{self.text}" ({error})', expected)) from None
        for name in self.fields:
            if not name.isidentifier():
                raise InputError(Problem(self.place, f"the field {{{name}}}", expected))
            if name in _TAKEN:
                found = f"the field {{{name}}}, a name the data itself uses"
                raise InputError(Problem(self.place, found, "a label of another name"))
        if "*" in self.text:
            raise InputError(Problem(self.place, f'"{self.text}"', "{} in place of *"))

    def _candidates(self, start: Path) -> Iterator[tuple[Path, list[str]]]:
        """Walk the folders that fit; give every file whose name has the pattern's outline."""
        level: list[tuple[Path, list[str]]] = [(start, [])]
        for component in self._components[:-1]:
            level = [step for folder, names in level for step in _folders(folder, names, component)]
        for folder, names in level:
            for entry in _entries(folder, self._components[-1]):
                if not entry.is_dir():
                    yield entry, [*names, entry.name]

    def _match(self, names: list[str]) -> dict[str, Any] | None:
        labels: dict[str, Any] = {}
        for component, name in zip(self._components, names, strict=True):
            found = component.match(name)
            if found is None or any(k in labels and labels[k] != v for k, v in found.items()):
                return None
            labels |= found
        return labels

    def _labelled(
        self,
        found: list[tuple[Path, list[str], dict[str, Any]]],
        strays: list[tuple[Path, Problem]],
        folder: Path,
    ) -> list[LabelledFile]:
        identities = _identities([self._below_fixed(names) for _, names, _ in found], self.text)
        files = []
        for (path, _, labels), identity in zip(found, identities, strict=True):
            try:
                checked = _checked_labels(labels, relative_to(path, folder))
                files.append(LabelledFile(path, identity, checked))
            except InputError as error:
                strays += [(path, problem) for problem in error.problems]
        return sorted(files, key=lambda file: natural_key(file.identity))

    def _below_fixed(self, names: list[str]) -> str:
        """Return the part of a path that varies over the campaign."""
        fixed = next(
            (k for k, part in enumerate(self._components) if not part.is_fixed),
            len(self._components) - 1,
        )
        return "/".join(names[fixed:])

    def _stray(self, path: Path, folder: Path) -> Problem:
        expected = f'a name that fits the pattern "{self.text}"'
        place = relative_to(path, folder)
        return Problem(place, "a name with a label of the wrong kind", expected)

    def _nothing_found(self, start: Path) -> Problem:
        folder = start
        for component in self._components[:-1]:
            if not component.is_fixed or not (folder / component.fixed_name).is_dir():
                break
            folder = folder / component.fixed_name
        what = _what_is_in(folder)
        found = f'no file that matches "{self.text}"; nearest existing folder {folder}: {what}'
        return Problem(self.place, found, "a pattern that matches at least one file")


def natural_key(text: str) -> list[tuple[int, int, str]]:
    """Return a key that sorts U2 before U10."""
    pieces = re.findall(r"\d+|\D+", text)
    return [(0, int(p), p) if p.isdigit() else (1, 0, p) for p in pieces]


def _folders(
    folder: Path, names: list[str], component: _Component
) -> Iterator[tuple[Path, list[str]]]:
    if component.is_fixed:
        inner = folder / component.fixed_name
        if inner.is_dir():
            yield inner, [*names, component.fixed_name]
        return
    for entry in _entries(folder, component):
        if entry.is_dir() and component.match(entry.name) is not None:
            yield entry, [*names, entry.name]


def _entries(folder: Path, component: _Component) -> list[Path]:
    """List what in a folder has the outline of a component; hidden files only when asked for."""
    if not folder.is_dir():
        return []
    hidden = component.text.startswith(".")
    return sorted(
        entry
        for entry in folder.iterdir()
        if component.outline.fullmatch(entry.name) and (hidden or not entry.name.startswith("."))
    )


def _what_is_in(folder: Path) -> str:
    """Say in a few words what a folder holds, with one file of measurements if there is any."""
    if not folder.is_dir():
        return "no such folder"
    if not any(folder.iterdir()):
        return "an empty folder"
    likely = (path for path in folder.rglob("*") if path.suffix.lower() in _SUFFIXES)
    example = next(likely, None)
    return f"for example {example}" if example else "no file of measurements in it"


def _identities(paths: list[str], pattern: str) -> list[str]:
    """Drop the suffix of every path, unless that makes two of them the same."""
    short = [without_suffix(path, pattern) for path in paths]
    return short if len(set(short)) == len(short) else paths


def without_suffix(path: str, pattern: str = "") -> str:
    """Drop a suffix that is one of a data file or that the pattern ends with; keep 25.5 whole."""
    suffix = Path(path).suffix
    known = suffix.lower() in _SUFFIXES or (suffix and pattern.endswith(suffix))
    return path.removesuffix(suffix) if known else path


def relative_to(path: Path, folder: Path) -> str:
    """Return a path as seen from a folder, with ``/`` between folders."""
    return Path(os.path.relpath(path, folder)).as_posix()


def _checked_labels(found: dict[str, Any], place: str) -> dict[str, Label]:
    return {name: checked_label(name, value, place) for name, value in found.items()}


def checked_label(name: str, value: Any, place: str) -> Label:
    """Return a label as the kind it must be: number, ISO date or text.

    Raises
    ------
    InputError
        If it cannot be that.
    """
    if name in NUMBER_LABELS:
        return _number(name, value, place)
    if name == "measured_at":
        return _date(value, place)
    if name not in TEXT_LABELS and isinstance(value, int | float):
        return _number(name, value, place)
    return str(value)


def _number(name: str, value: Any, place: str) -> float:
    try:
        number = float(value)
    except (TypeError, ValueError):
        number = math.nan
    if not math.isfinite(number):
        raise InputError(Problem(place, f"the label {name} {value!r}", "a number"))
    return number


def _date(value: Any, place: str) -> str:
    try:
        date = value if isinstance(value, datetime) else datetime.fromisoformat(str(value))
    except ValueError:
        expected = "an ISO date such as 2026-01-31"
        problem = Problem(place, f"the label measured_at {value!r}", expected)
        raise InputError(problem) from None
    text = date.isoformat()
    return text.removesuffix("T00:00:00")


def _refuse_repeats(files: list[LabelledFile], folder: Path) -> None:
    seen: dict[tuple[tuple[str, Label], ...], LabelledFile] = {}
    problems = []
    for file in files:
        labels = tuple(file.labels.items())
        first = seen.setdefault(labels, file)
        if first is not file:
            shown = ", ".join(f"{name} {value}" for name, value in labels) or "none"
            found = f"the same labels ({shown}) as {relative_to(first.path, folder)}"
            expected = "one file for each set of labels; mark re-measurements by {repeat}"
            problems.append(Problem(relative_to(file.path, folder), found, expected))
    if problems:
        raise InputError(problems)
