"""What all descriptions of files are made of: their base class and the kinds of their values."""

from __future__ import annotations

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field, StringConstraints

Name = Annotated[str, StringConstraints(pattern=r"^[A-Za-z][A-Za-z0-9_\-]{0,31}$")]
Formula = Annotated[str, StringConstraints(min_length=1, max_length=500)]
Text = Annotated[str, StringConstraints(min_length=1, max_length=2000)]
Finite = Annotated[float, Field(allow_inf_nan=False)]
Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
Celsius = Annotated[float, Field(ge=-5, le=60)]
Cpu = Annotated[int, Field(ge=0, le=1023)]


class Spec(BaseModel):
    """Base of all descriptions: no unknown keys, no later change."""

    model_config = ConfigDict(frozen=True, extra="forbid", str_strip_whitespace=True)
