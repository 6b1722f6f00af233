"""How a channel decides "detected": the `[pollution]` and `[excess]` tables of the study file."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BeforeValidator, Field, model_validator

from ..fields import Settings

__all__ = ["ChannelSettings"]

_Number = Annotated[float, BeforeValidator(lambda value: float(value) if type(value) is int else value)]


class ChannelSettings(Settings):
    """Selection of one channel.

    Attributes
    ----------
    threshold_on : {"measured", "true"}
        Whether the noisy estimate crosses the limit, or the efficiency is one of the true value.
    limit_efficiency : float or None
        Probability of detecting a star whose true value equals its limit, in (0, ceiling); None: half the ceiling.
    width : float
        dex, > 0: of the efficiency curve ("true"), or of the noise at the limit ("measured").
    ceiling : float
        Best efficiency ever reached, in (0, 1].
    false_positive : float
        Probability, in [0, 1), that a star not genuinely detected is listed as detected.
    spurious_scale : float
        dex, > 0: half-normal scale by which a spurious detection lies above its limit.
    efficiency_table : str or None
        Injection–recovery counts instead of limit, width and ceiling; a path relative to the study file.
    """

    threshold_on: Literal["measured", "true"] = "measured"
    limit_efficiency: Annotated[_Number, Field(gt=0, lt=1)] | None = None
    width: Annotated[_Number, Field(gt=0, le=5)] = 0.15
    ceiling: Annotated[_Number, Field(gt=0, le=1)] = 1.0
    false_positive: Annotated[_Number, Field(ge=0, lt=1)] = 0.0
    spurious_scale: Annotated[_Number, Field(gt=0, le=5)] = 0.3
    efficiency_table: Annotated[str, Field(min_length=1)] | None = None

    @model_validator(mode="after")
    def _table_of_true_value(self) -> ChannelSettings:
        if self.efficiency_table is None:
            return self
        if self.threshold_on == "measured":
            raise ValueError(
                'threshold_on = "true" together with efficiency_table: injected signals give an efficiency of the true '
                "value"
            )
        given = {"limit_efficiency", "width", "ceiling"} & self.model_fields_set
        if given:
            raise ValueError(f"no {', '.join(sorted(given))} beside efficiency_table, which gives the curve itself")
        return self

    @model_validator(mode="after")
    def _below_ceiling(self) -> ChannelSettings:
        if self.limit_efficiency is not None and not self.limit_efficiency < self.ceiling:
            raise ValueError(
                f"limit_efficiency between 0 and the ceiling ({self.ceiling:g}), both excluded; "
                f"here {self.limit_efficiency:g}"
            )
        return self
