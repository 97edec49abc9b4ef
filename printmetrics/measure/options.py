"""What every kind of feature has in common in a recipe."""

from __future__ import annotations

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field, FiniteFloat, ValidationInfo, field_validator, model_validator

from printmetrics.quantities import CATALOGUE

Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]


class Limits(BaseModel):
    """Limits of one quantity, in its unit."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    lower: FiniteFloat | None = Field(None, description="Smallest value that conforms.")
    target: FiniteFloat | None = Field(None, description="Value aimed at; not judged.")
    upper: FiniteFloat | None = Field(None, description="Largest value that conforms.")

    @model_validator(mode="after")
    def _ordered(self) -> Limits:
        given = [v for v in (self.lower, self.target, self.upper) if v is not None]
        if not given:
            msg = "limits are empty; give lower, upper or target"
            raise ValueError(msg)
        if given != sorted(given):
            msg = f"limits are reversed: lower {self.lower}, target {self.target}, upper {self.upper}"
            raise ValueError(msg)
        return self


class FeatureOptions(BaseModel):
    """Keys shared by all kinds; a kind adds its own."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    name: str = Field(min_length=1, description="The feature's name, as in the tables.")
    kind: str = Field(description="What it is: one of the kinds.")
    region: tuple[FiniteFloat, FiniteFloat, Positive, Positive] | None = Field(
        None, description="x, y, width, height in um; default: the whole picture."
    )
    limits: dict[str, Limits] = Field(default_factory=dict, description="Limits by quantity.")

    @field_validator("limits")
    @classmethod
    def _limits_known(cls, limits: dict[str, Limits], info: ValidationInfo) -> dict[str, Limits]:
        known = CATALOGUE.get(info.data.get("kind", ""), {})
        for name in limits:
            if known and name not in known:
                from difflib import get_close_matches  # noqa: PLC0415  (only on the way to an error)

                near = get_close_matches(name, known, n=1)
                hint = f"; did you mean {near[0]!r}?" if near else f"; known: {', '.join(known)}"
                msg = f"unknown quantity {name!r} in the limits{hint}"
                raise ValueError(msg)
        return limits
