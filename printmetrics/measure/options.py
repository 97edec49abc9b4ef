"""What every kind of feature has in common in a recipe."""

from __future__ import annotations

from typing import Annotated

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, FiniteFloat, ValidationInfo, model_validator

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
        given = {name: value for name, value in self if value is not None}
        if not given:
            msg = "limits are empty; give lower, upper or target"
            raise ValueError(msg)
        if list(given.values()) != sorted(given.values()):
            msg = f"limits are reversed: {', '.join(f'{name} {value:g}' for name, value in given.items())}"
            raise ValueError(msg)
        return self


def _known(name: str, info: ValidationInfo) -> str:
    """Refuse a name that is no quantity of the feature's kind."""
    known = CATALOGUE.get(info.data.get("kind", ""), {})
    if known and name not in known:
        from difflib import get_close_matches  # noqa: PLC0415  (only on the way to an error)

        near = get_close_matches(name, known, n=1)
        hint = f"did you mean {near[0]!r}?" if near else f"known: {', '.join(known)}"
        msg = f"unknown quantity; {hint}"
        raise ValueError(msg)
    return name


class FeatureOptions(BaseModel):
    """Keys shared by all kinds; a kind adds its own."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    name: str = Field(min_length=1, description="The feature's name, as in the tables.")
    kind: str = Field(description="What it is: one of the kinds.")
    region: tuple[FiniteFloat, FiniteFloat, Positive, Positive] | None = Field(
        None, description="x, y, width, height in um; default: the whole picture."
    )
    limits: dict[Annotated[str, AfterValidator(_known)], Limits] = Field(
        default_factory=dict, description="Limits by quantity."
    )
