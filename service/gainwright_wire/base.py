"""The common base of every wire model and the constrained scalars they share."""

from __future__ import annotations

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field

Finite = Annotated[float, Field(strict=True, allow_inf_nan=False, ge=-1e12, le=1e12)]
Positive = Annotated[float, Field(strict=True, ge=1e-9, allow_inf_nan=False, le=1e12)]
NonNegative = Annotated[float, Field(strict=True, ge=0, allow_inf_nan=False, le=1e12)]
Flag = Annotated[bool, Field(strict=True)]
"""True or false, never a word that might mean either: what is declared here can hurt somebody."""
Tag = Annotated[str, Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9._-]{0,63}$", examples=["TIC-201"])]
Site = Annotated[str, Field(pattern=r"^[a-z0-9][a-z0-9-]{0,31}$", examples=["local"])]
HIDDEN = r"\x7f-\x9f\u200b-\u200f\u202a-\u202e\u2060-\u2069\ufeff"
"""Characters that nobody sees: they make two names look alike, or one text read as another."""
_SEEN = rf"[^\x00-\x1f{HIDDEN}]"
ShortText = Annotated[str, Field(max_length=200, pattern=rf"^{_SEEN}*$")]
LongText = Annotated[str, Field(max_length=2000, pattern=rf"^[^\x00-\x08\x0b-\x1f{HIDDEN}]*$")]
Stated = Annotated[str, Field(max_length=200, pattern=rf"^{_SEEN}*[\p{{L}}\p{{N}}]{_SEEN}*$")]
"""A name or number that somebody stated: at least one letter or digit, nothing hidden."""


class Wire(BaseModel):
    """A closed, immutable document: an unknown field is an error that names it."""

    model_config = ConfigDict(extra="forbid", frozen=True, populate_by_name=True)


class Interval(Wire):
    """A value with its interval at the analysis's confidence."""

    value: Finite
    low: Finite
    high: Finite
