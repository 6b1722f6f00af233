"""What a study asks of each row of its sample."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

__all__ = ["ChannelRules", "RowRules"]


@dataclass(frozen=True)
class ChannelRules:
    """How one channel decides "detected".

    Parameters
    ----------
    threshold_on : {"measured", "true"}
        Whether the noisy estimate crosses the limit, or an efficiency acts on the true value.
    spurious : bool
        Whether the study allows spurious detections for every star.
    width : float
        Width of the limits, dex, positive; a star's own width column goes before it.
    midpoint_shift : float
        Distance, in widths, from the threshold itself up to the limit as quoted.
    counted : bool
        An injection–recovery table stands for the limits, which the rows then need not have.
    """

    threshold_on: Literal["measured", "true"] = "measured"
    spurious: bool = False
    width: float = 0.15
    midpoint_shift: float = 0.0
    counted: bool = False


@dataclass(frozen=True)
class RowRules:
    """What a study asks of each row.

    Parameters
    ----------
    pollution, excess : ChannelRules or None
        The channels in use; the columns of an unused channel are only checked for type and range.
    atmospheres : tuple of str
        The atmospheres that the study admits.
    covariates : tuple of str
        Columns that every row must fill with a valid number.
    groups : str or None
        Column that every row must fill with a label.
    """

    pollution: ChannelRules | None = ChannelRules()
    excess: ChannelRules | None = None
    atmospheres: tuple[str, ...] = ("H", "He")
    covariates: tuple[str, ...] = ()
    groups: str | None = None

    @property
    def channels(self) -> dict[str, ChannelRules]:
        """The channels in use, by name."""
        named = {"pollution": self.pollution, "excess": self.excess}
        return {name: channel for name, channel in named.items() if channel is not None}
