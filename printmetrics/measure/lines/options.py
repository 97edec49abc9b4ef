"""What a recipe says about a set of lines."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import Field, FiniteFloat, ValidationInfo, field_validator, model_validator

from printmetrics.analysis.finding import MAX_TILT_DEG
from printmetrics.measure.options import FeatureOptions, Positive


class LinesOptions(FeatureOptions):
    """A feature of kind ``lines``."""

    kind: Literal["lines"] = Field(description="Printed lines.")
    ink: Literal["bright", "dark"] = Field(description="Ink brighter or darker than what surrounds it.")
    direction: Literal["auto", "horizontal", "vertical"] | Annotated[FiniteFloat, Field(ge=-180, le=180)] = Field(
        "auto", description="Which way the lines run: found by itself, along an axis, or degrees from +x towards +y."
    )
    centres: tuple[FiniteFloat, ...] | None = Field(
        None,
        min_length=1,
        description="Where the lines' centres are, in um across them, at the middle of the region; "
        "keeps L1, L2, L3 the same line.",
    )
    count: Annotated[int, Field(ge=1)] | None = Field(None, description="Expected number of lines.")
    edge_level: Annotated[float, Field(ge=0.1, le=0.9)] = Field(
        0.5, description="Where between dark (0) and bright (1) the edge is taken."
    )
    neck_length: Positive | None = Field(
        None,
        description="Local width is averaged over this length for width_min and width_max; default: 4 blur sigmas.",
    )

    @model_validator(mode="before")
    @classmethod
    def _count_is_a_limit(cls, data: Any) -> Any:  # noqa: ANN401  (whatever the recipe holds)
        """Let an expected number of lines limit their count, unless the recipe limits it otherwise."""
        if isinstance(data, dict):
            centres = data.get("centres")
            count = len(centres) if isinstance(centres, list | tuple) else data.get("count")
            limits = data.get("limits", {})
            if isinstance(count, int) and count > 0 and isinstance(limits, dict) and "line_count" not in limits:
                data = {**data, "limits": {**limits, "line_count": {"lower": count, "upper": count}}}
        return data

    @field_validator("direction")
    @classmethod
    def _near_an_axis(cls, direction: str | float) -> str | float:
        if not isinstance(direction, str) and abs((direction + 45) % 90 - 45) > MAX_TILT_DEG:
            msg = f"direction is {direction:g} degrees; lines are measured within {MAX_TILT_DEG:g} degrees of an axis"
            raise ValueError(msg)
        return direction

    @field_validator("centres")
    @classmethod
    def _rising(cls, centres: tuple[float, ...] | None) -> tuple[float, ...] | None:
        if centres is not None and list(centres) != sorted(set(centres)):
            msg = "centres must rise and not repeat"
            raise ValueError(msg)
        return centres

    @field_validator("count")
    @classmethod
    def _counts_the_centres(cls, count: int | None, info: ValidationInfo) -> int | None:
        centres = info.data.get("centres")
        if count is not None and centres is not None and count != len(centres):
            msg = f"count is {count} but {len(centres)} centres are given"
            raise ValueError(msg)
        return count

    @property
    def expected(self) -> int | None:
        """Number of lines promised, if any."""
        return self.count if self.centres is None else len(self.centres)
