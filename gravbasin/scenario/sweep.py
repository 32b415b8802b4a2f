"""The [sweep] table: which fields vary, how their values are chosen, and what is kept of every case."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from gravbasin.scenario.base import Positive, Table

__all__ = ["Sweep", "SweptField"]

Number = Annotated[float, Field(allow_inf_nan=False)]

MOST_IN_MEMORY = 2_000_000
"""Latin-hypercube cases at most: unlike the other designs, theirs cannot be made piece by piece."""


class SweptField(Table):
    """One field that varies."""

    field: str = Field(min_length=1, description="dotted name of the field, e.g. crater.rim_diameter_km")
    values: tuple[bool | Number | str, ...] = Field((), description="the values to take, instead of low and high")
    low: Number | None = Field(None, description="least value of a range")
    high: Number | None = Field(None, description="largest value of that range")
    steps: int | None = Field(None, ge=2, le=100_000, description="values across the range, ends included (no sample)")
    scale: Literal["linear", "log"] = Field("linear", description="even spacing of the values, or of their logarithms")

    @model_validator(mode="after")
    def _one_way(self) -> SweptField:
        name = self.field
        if bool(self.values) == (self.low is not None or self.high is not None):
            raise ValueError(f"{name} needs either values or a range; give values = [...], or low and high")
        if self.values and (self.steps is not None or self.scale == "log"):
            raise ValueError(f"steps and scale of {name} belong to a range; drop them, or give low and high")
        if len(set(map(str, self.values))) < len(self.values):
            raise ValueError(f"values of {name} must differ from each other; drop the repeated ones")
        if self.values and len({isinstance(v, (str, bool)) for v in self.values}) > 1:
            raise ValueError(f"values of {name} must be all numbers or all words; sort them into two sweeps")
        if not self.values:
            if self.low is None or self.high is None or not self.low < self.high:
                raise ValueError(f"a range of {name} needs low below high; give both, ascending")
            if self.scale == "log" and self.low <= 0:
                raise ValueError(f"a log range of {name} must start above 0; raise low, or set scale = 'linear'")
        return self

    @property
    def count(self) -> int | None:
        """Number of listed values; None for a range without steps."""
        return len(self.values) or self.steps


class Sweep(Table):
    """Thousands of what-if cases about this scenario."""

    design: Literal["grid", "list", "sobol", "latin hypercube", "saltelli"] = Field(
        "grid",
        description="every combination of the values, values side by side, a Sobol or Latin-hypercube sample, or the "
        "sample that gives Sobol indices (Saltelli)",
    )
    fields: tuple[SweptField, ...] = Field(min_length=1, max_length=64, description="the fields that vary")
    cases: int | None = Field(
        None, ge=2, le=100_000_000, description="cases of a sample; base points of a saltelli sample (a power of two)"
    )
    draws: int = Field(
        0, ge=0, le=1000, description="draws of scatter per case; 0 takes the shape of every structure as known"
    )
    vanishing: bool = Field(True, description="find for every case the erosion at which it vanishes in the noise")
    profiles: bool = Field(False, description="keep the radial profile of every case")
    grids: bool = Field(False, description="keep the map of every case, deformation included")
    grid_step_km: Positive | None = Field(
        None, description="step of these maps, km; by default 1/40 of the largest diameter"
    )
    layers: int = Field(40, ge=20, le=400, description="layers of a case's section")
    rings: int = Field(
        80,
        ge=40,
        le=800,
        description="rings across the smallest structure; a sweep over sizes adds as many as it needs",
    )

    @model_validator(mode="after")
    def _whole(self) -> Sweep:
        names = [f.field for f in self.fields]
        if len(set(names)) < len(names):
            raise ValueError(f"every field may vary once, not {names}; drop the repeated ones")
        sampled = self.design not in ("grid", "list")
        if sampled != (self.cases is not None):
            rule = "needs" if sampled else "has its own number of"
            raise ValueError(f"a {self.design} design {rule} cases; {'give' if sampled else 'drop'} cases")
        if sampled and any(f.steps for f in self.fields):
            raise ValueError(f"a {self.design} design fills its ranges by itself; drop steps")
        if not sampled and any(f.count is None for f in self.fields):
            raise ValueError(f"a {self.design} design needs steps for every range; give steps, or values")
        if self.design == "list" and len({f.count for f in self.fields}) > 1:
            raise ValueError(
                f"a list needs as many values for every field, not {[f.count for f in self.fields]}; even them out"
            )
        if self.design in ("sobol", "saltelli") and self.cases and self.cases & (self.cases - 1):
            near = 2 ** (self.cases.bit_length())
            raise ValueError(
                f"cases of a {self.design} design must be a power of two, or it loses its balance; "
                f"take {near // 2} or {near}"
            )
        if self.design == "latin hypercube" and self.cases and self.cases > MOST_IN_MEMORY:
            raise ValueError(f"a latin hypercube holds {MOST_IN_MEMORY} cases at most; set design = 'sobol'")
        return self

    @property
    def size(self) -> int:
        """Number of cases."""
        counts = [f.count or 0 for f in self.fields]
        if self.design == "grid":
            total = 1
            for count in counts:
                total *= count
            return total
        if self.design == "list":
            return counts[0]
        return (self.cases or 0) * (len(self.fields) + 2 if self.design == "saltelli" else 1)
