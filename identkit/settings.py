"""The study file a user writes: one model per table of ``study.toml``, every key with its meaning.

The text beside each key is what an error says was expected, and what the documentation prints.
"""

import hashlib
import json
from pathlib import Path
from typing import Annotated, Any, Literal, Self

from pydantic import (
    AfterValidator,
    BeforeValidator,
    Field,
    PrivateAttr,
    ValidationError,
    model_validator,
)

from identkit.errors import InputError
from identkit.settings_messages import problems_of, read_toml
from identkit.settings_records import RecordSettings
from identkit.settings_types import Count, NotNegative, Positive, Table, Text, as_tuple


def _increasing(pairs: tuple[tuple[float, float], ...]) -> tuple[tuple[float, float], ...]:
    frequencies = [frequency for frequency, _ in pairs]
    if any(b <= a for a, b in zip(frequencies, frequencies[1:], strict=False)):
        raise ValueError("frequencies must increase")
    return pairs


def _band_in_order(band: tuple[float, float]) -> tuple[float, float]:
    if band[0] >= band[1]:
        raise ValueError("the first must be below the second")
    return band


Finite = Annotated[float, Field(allow_inf_nan=False)]
Share = Annotated[float, Field(gt=0, lt=1)]
Band = Annotated[
    tuple[NotNegative, Positive], BeforeValidator(as_tuple), AfterValidator(_band_in_order)
]
_Pair = Annotated[tuple[Positive, Positive], BeforeValidator(as_tuple)]
Curve = Annotated[tuple[_Pair, ...], BeforeValidator(as_tuple), AfterValidator(_increasing)]
Mark = Literal["noise", "outlier", "too-few-points"]


class StudySettings(Table):
    """[study]: what the study is called and where its results go."""

    name: Text = Field(default="study", description="a name, as text")
    results: Text = Field(
        default="results", description="a folder inside the study's folder, as text"
    )
    seed: int = Field(default=1, ge=0, description="a whole number, 0 or more")


class NamedColumn(Table):
    """A column whose name does not carry its unit."""

    name: Text
    unit: str = ""


_COLUMN = 'a column name such as "Freq [kHz]", or {name = "Freq", unit = "kHz"}'
Column = Text | NamedColumn


class ColumnSettings(Table):
    """[responses.columns]: columns whose names or units differ from the defaults."""

    frequency: Column = Field(default="frequency_hz", description=_COLUMN)
    real: Column = Field(default="real", description=_COLUMN)
    imag: Column = Field(default="imag", description=_COLUMN)
    magnitude: Column = Field(default="magnitude", description=_COLUMN)
    magnitude_db: Column = Field(default="magnitude_db", description=_COLUMN)
    phase_deg: Column = Field(default="phase_deg", description=_COLUMN)
    phase_rad: Column = Field(default="phase_rad", description=_COLUMN)
    coherence: Column = Field(default="coherence", description=_COLUMN)
    variance: Column = Field(default="variance", description=_COLUMN)


class UnitSettings(Table):
    """[responses.units]: physical units of the plant's input and output, kept as given."""

    input: str = Field(default="", description='a unit as text, such as "A"')
    output: str = Field(default="", description='a unit as text, such as "um"')


class ResponseSettings(Table):
    """[responses]: the measured frequency responses."""

    files: Text | None = Field(
        default=None,
        description='a path pattern such as "bench/{unit}/H{head}_{temperature:g}C.csv"',
    )
    averages: float | None = Field(
        default=None,
        gt=1,
        allow_inf_nan=False,
        description="the number of averages, above 1 (the coherence of one average says nothing)",
    )
    band: Band | None = Field(
        default=None, description="two increasing frequencies in Hz, [low, high]"
    )
    sample_period: NotNegative = Field(
        default=0.0, description="seconds, 0 or more (0 = continuous)"
    )
    bad_files: Literal["stop", "skip"] = Field(default="stop", description='"stop" or "skip"')
    columns: ColumnSettings = ColumnSettings()
    units: UnitSettings = UnitSettings()


class ScreenSettings(Table):
    """[screen]: limits beyond which points and responses are marked, and marks that leave out."""

    coherence_limit: float = Field(
        default=0.5,
        ge=0,
        lt=1,
        description="a coherence from 0 to below 1; points below it are marked",
    )
    noise_limit: Positive = Field(
        default=0.3,
        description="a relative standard deviation above 0; a response whose median point is "
        "noisier is marked",
    )
    outlier_limit: Positive = Field(
        default=6.0,
        description="a number of robust standard deviations above 0; a response farther than "
        "this from its peers is marked",
    )
    fewest_points: Count = Field(
        default=50,
        description="a whole number, 1 or more; a response with fewer usable points is marked",
    )
    leave_out: Annotated[tuple[Mark, ...], BeforeValidator(as_tuple)] = Field(
        default=(), description='a list of the marks "noise", "outlier", "too-few-points"'
    )


class ModelSettings(Table):
    """[model]: the modal model every response is fitted with."""

    base: Literal["free", "pivot", "none"] = Field(
        default="pivot", description='"free", "pivot" or "none"'
    )
    modes: Literal["auto"] | Count = Field(
        default="auto", description='"auto" or a whole number, 1 or more'
    )
    delay: bool = Field(default=True, description="true or false")
    residues: Literal["real", "general", "auto"] = Field(
        default="real", description='"real", "general" or "auto"'
    )
    sharing: Literal["auto", "unit", "none"] = Field(
        default="auto", description='"auto", "unit" or "none"'
    )


class NominalSettings(Table):
    """[nominal]: how the one plant in the middle of the set is chosen."""

    choice: Literal["centre", "tightest"] = Field(
        default="centre", description='"centre" or "tightest"'
    )
    reference_temperature: Finite = Field(default=25.0, description="a temperature in degC")


class Exclusion(Table):
    """Responses left out of the bound: those that carry all of these labels, and why.

    A name alone stands for the one response of that name.
    """

    labels: dict[str, str | float] = Field(min_length=1)
    reason: str = ""

    @model_validator(mode="before")
    @classmethod
    def _from_labels(cls, value: Any) -> Any:
        if isinstance(value, str):
            return {"labels": {"response": value}}
        if isinstance(value, dict):
            labels = {name: label for name, label in value.items() if name != "reason"}
            return {"labels": labels, "reason": value.get("reason", "")}
        return value


class BoundSettings(Table):
    """[bound]: the form of the set, its weight, and what it is to hold."""

    form: Literal[
        "additive",
        "multiplicative",
        "input-multiplicative",
        "inverse-multiplicative",
        "parametric",
        "mixed",
        "auto",
    ] = Field(
        default="multiplicative",
        description='"additive", "multiplicative", "input-multiplicative", '
        '"inverse-multiplicative", "parametric", "mixed" or "auto"',
    )
    order: Literal["auto"] | Count = Field(
        default="auto", description='"auto" or a whole number, 1 or more'
    )
    profile: Curve = Field(
        default=((100.0, 1.0), (1000.0, 3.0)),
        description="pairs [Hz, allowed excess], both above 0, by increasing frequency",
    )
    cap: Curve = Field(
        default=(), description="pairs [Hz, largest weight], both above 0, by increasing frequency"
    )
    radius_floor: Positive = Field(default=0.02, description="a relative radius above 0")
    remove: Annotated[tuple[Literal["gain"], ...], BeforeValidator(as_tuple)] = Field(
        default=(), description='a list that is empty or holds "gain"'
    )
    holds: Literal["measured", "population"] = Field(
        default="measured", description='"measured" or "population"'
    )
    content: Share = Field(default=0.9, description="a share between 0 and 1")
    confidence: Share = Field(default=0.9, description="a probability between 0 and 1")
    exchangeable: Literal["unit", "lot"] = Field(default="unit", description='"unit" or "lot"')
    hold_out: float = Field(
        default=0.0, ge=0, lt=1, description="a share of the units, 0 to below 1"
    )
    factors: Literal["auto"] | Count = Field(
        default="auto", description='"auto" or a whole number, 1 or more'
    )
    split: str = Field(default="", description='a label such as "head", or "" for one set')
    exclude: Annotated[tuple[Exclusion, ...], BeforeValidator(as_tuple)] = Field(
        default=(),
        description='a list of response names or of labels with a reason, such as [{unit = "U13", '
        'reason = "cracked arm"}]',
    )


class ExportSettings(Table):
    """[export]: the set files to write."""

    formats: Annotated[tuple[Literal["json", "hdf5"], ...], BeforeValidator(as_tuple)] = Field(
        default=("json", "hdf5"), min_length=1, description='a list of "json" and "hdf5"'
    )
    period: NotNegative = Field(default=0.0, description="seconds, 0 or more (0 = continuous)")


class HistorySettings(Table):
    """[history]: the store of past results."""

    url: Text = Field(default="sqlite:///history.db", description="a database address")


class Settings(Table):
    """A whole study file, checked."""

    _path: Path = PrivateAttr(Path("study.toml"))

    study: StudySettings = StudySettings()
    responses: ResponseSettings = ResponseSettings()
    records: RecordSettings | None = None
    screen: ScreenSettings = ScreenSettings()
    model: ModelSettings = ModelSettings()
    nominal: NominalSettings = NominalSettings()
    bound: BoundSettings = BoundSettings()
    export: ExportSettings = ExportSettings()
    history: HistorySettings = HistorySettings()

    @property
    def path(self) -> Path:
        """The study file itself."""
        return self._path

    @property
    def folder(self) -> Path:
        """The folder the study file stands in, to which every path in it is relative."""
        return self.path.resolve().parent

    @classmethod
    def from_tables(cls, tables: dict[str, Any], *, path: Path | str, text: str = "") -> Self:
        """Check the tables of a study file.

        Parameters
        ----------
        tables
            The parsed file.
        path
            Where it stands, for messages and for paths relative to it.
        text
            The file as written, to name lines in messages.

        Raises
        ------
        InputError
            With one problem per wrong or unknown key.
        """
        try:
            checked = cls.model_validate(tables)
        except ValidationError as error:
            raise InputError(problems_of(error, cls, tables, str(path), text)) from None
        checked._path = Path(path)
        return checked


def load_settings(path: Path | str) -> Settings:
    """Read and check a study file.

    Raises
    ------
    InputError
        If the file is missing, is not TOML in UTF-8, or a key is unknown or wrong.
    """
    tables, text = read_toml(Path(path))
    return Settings.from_tables(tables, path=path, text=text)


def settings_digest(settings: Settings, *names: str) -> str:
    """Return a digest of some settings, for telling whether a stage must run again.

    Parameters
    ----------
    settings
        The study.
    names
        Tables ("model") or single keys ("bound.order"); none means all tables.
    """
    tables = settings.model_dump(mode="json")
    chosen = {name: _looked_up(tables, name) for name in names} if names else tables
    text = json.dumps(chosen, sort_keys=True, separators=(",", ":"))
    return hashlib.sha256(text.encode()).hexdigest()


def _looked_up(tables: dict[str, Any], name: str) -> Any:
    value: Any = tables
    for key in name.split("."):
        value = value[key]
    return value
