"""Figures that check the fitted model against the data."""

from __future__ import annotations

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from ..inference import Fit
from .glossary import AXES, channel_noun
from .numbers import number
from .style import COLOURS, legend, on_axes, styled

__all__ = ["plot_predictive", "predictive_kinds"]

_JOINT = {
    ("detected", "detected"): "rate and dust",
    ("detected", "limit"): "rate alone",
    ("limit", "detected"): "dust alone",
    ("limit", "limit"): "neither",
}


def predictive_kinds(fit: Fit) -> list[tuple[str, str]]:
    """Channel and kind of each set of predictive counts, in order."""
    counts = fit.predictive.counts
    return list(dict.fromkeys(zip(counts["channel"], counts["kind"], strict=True)))


@styled
def plot_predictive(fit: Fit, channel: str = "", kind: str = "depth", ax: Axes | None = None) -> Axes:
    """Draw counts of stars beside those that surveys drawn from the fitted model give.

    Parameters
    ----------
    fit : Fit
    channel : {"pollution", "excess", "both"}, optional
        Default the first in use.
    kind : {"depth", "value", "joint"}, optional
        Detections by limit, detections by value, stars by outcome in both channels.
    ax : matplotlib.axes.Axes, optional
        Default new axes.

    Returns
    -------
    matplotlib.axes.Axes
    """
    channel = channel or fit.problem.channels[0]
    ax = on_axes(ax)
    counts = fit.predictive.counts
    rows = counts[(counts["channel"] == channel) & (counts["kind"] == kind)]
    place = np.arange(len(rows))
    low, middle, high = (rows[name].to_numpy(dtype=float) for name in ("q05", "expected", "q95"))
    ax.vlines(place, low, high, color=COLOURS["band"], linewidth=9, label="90 % of replicated surveys")
    ax.hlines(middle, place - 0.28, place + 0.28, color=COLOURS["found"], label="their mean")
    ax.plot(place, rows["observed"], "D", color=COLOURS["mark"], markersize=4.5, label="this survey")
    ax.set_xticks(place, [_tick(row, kind) for _, row in rows.iterrows()])
    ax.set(xlabel=_axis(channel, kind), xlim=(-0.6, len(rows) - 0.4))
    ax.set_ylabel("Stars" if kind == "joint" else "Detections")
    ax.set_ylim(0, 1.12 * max(1.0, float(np.max([high.max(initial=0), rows["observed"].max() if len(rows) else 0]))))
    ax.tick_params(axis="x", length=0, top=False)
    legend(ax, 2)
    return ax


def _axis(channel: str, kind: str) -> str:
    if kind == "joint":
        return "What was seen of the star"
    unit = AXES[channel].split(", ", 1)[1]
    return f"Limit, {unit}" if kind == "depth" else f"Measured {channel_noun(channel)}, {unit}"


def _tick(row: pd.Series, kind: str) -> str:
    if kind == "joint":
        return _JOINT[(str(row["low"]), str(row["high"]))].replace(" ", "\n", 1)
    low, high = float(row["low"]), float(row["high"])
    if not np.isfinite(low):
        return f"below\n{number(high)}"
    if not np.isfinite(high):
        return f"above\n{number(low)}"
    return f"{number(low)} to\n{number(high)}"
