"""Kinds of values that the tables of a study file are made of."""

from typing import Annotated, Any

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field


def as_tuple(value: Any) -> Any:
    """Return a list of TOML as a tuple, anything else as it is."""
    return tuple(value) if isinstance(value, list) else value


Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
NotNegative = Annotated[float, Field(ge=0, allow_inf_nan=False)]
Count = Annotated[int, Field(ge=1)]
Text = Annotated[str, Field(min_length=1)]
Texts = Annotated[tuple[Text, ...], Field(min_length=1), BeforeValidator(as_tuple)]


class Table(BaseModel):
    """One table of the study file: fixed once read, strict in types, closed to unknown keys."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True)
