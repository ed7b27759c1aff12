"""The common base of every wire model and the constrained scalars they share."""

from __future__ import annotations

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field

Finite = Annotated[float, Field(strict=True, allow_inf_nan=False, ge=-1e12, le=1e12)]
Positive = Annotated[float, Field(strict=True, gt=0, allow_inf_nan=False, le=1e12)]
NonNegative = Annotated[float, Field(strict=True, ge=0, allow_inf_nan=False, le=1e12)]
Flag = Annotated[bool, Field(strict=True)]
"""True or false, never a word that might mean either: what is declared here can hurt somebody."""
Tag = Annotated[str, Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9._-]{0,63}$", examples=["TIC-201"])]
Site = Annotated[str, Field(pattern=r"^[a-z0-9][a-z0-9-]{0,31}$", examples=["local"])]
_NO_NUL = r"^[^\x00]*$"
"""PostgreSQL keeps no text with a NUL in it."""
ShortText = Annotated[str, Field(max_length=200, pattern=_NO_NUL)]
LongText = Annotated[str, Field(max_length=2000, pattern=_NO_NUL)]


class Wire(BaseModel):
    """A closed, immutable document: an unknown field is an error that names it."""

    model_config = ConfigDict(extra="forbid", frozen=True, populate_by_name=True)


class Interval(Wire):
    """A value with its interval at the analysis's confidence."""

    value: Finite
    low: Finite
    high: Finite
