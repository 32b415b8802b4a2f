"""What every table of a scenario file shares: frozen, no unknown fields, the kinds of number."""

from __future__ import annotations

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field

__all__ = ["Azimuth", "Contrast", "Density", "NotNegative", "Positive", "Probability", "Table"]

Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
NotNegative = Annotated[float, Field(ge=0, allow_inf_nan=False)]
Density = Annotated[float, Field(gt=0, le=6000, allow_inf_nan=False)]
Contrast = Annotated[float, Field(ge=-2000, le=2000, allow_inf_nan=False)]
Azimuth = Annotated[float, Field(ge=0, le=360)]
Probability = Annotated[float, Field(gt=0, lt=1)]


class Table(BaseModel):
    """One table of a scenario file."""

    model_config = ConfigDict(frozen=True, extra="forbid", str_strip_whitespace=True)
