"""Figures that check the fitted model against the data."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.ticker import PercentFormatter

from ..inference import Fit
from .facts import blind_fraction, prior_detected
from .glossary import AXES, channel_noun
from .numbers import number
from .style import COLOURS, legend, on_axes, styled

__all__ = ["draw_prior_predictive", "plot_predictive", "plot_prior_predictive", "predictive_kinds"]

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


@styled
def plot_prior_predictive(fit: Fit, channel: str = "", ax: Axes | None = None) -> Axes:
    """Draw the share of stars detected in surveys drawn from the prior, with the observed share marked.

    Parameters
    ----------
    fit : Fit
    channel : {"pollution", "excess"}, optional
        Default the first in use.
    ax : matplotlib.axes.Axes, optional
        Default new axes.

    Returns
    -------
    matplotlib.axes.Axes
    """
    channel = channel or fit.problem.channels[0]
    return draw_prior_predictive(fit, channel, prior_detected(fit).get(channel, np.array([])), on_axes(ax))


@styled
def draw_prior_predictive(fit: Fit, channel: str, shares: npt.NDArray[np.float64], ax: Axes) -> Axes:
    """Draw shares simulated before."""
    ax.hist(
        shares, bins=np.linspace(0, 1, 21).tolist(), color=COLOURS["wide"], edgecolor=COLOURS["prior"], linewidth=0.8,
        label=f"{len(shares)} surveys drawn from the prior",
    )
    raw = blind_fraction(fit, channel)
    if raw.observed:
        ax.axvline(raw.value, color=COLOURS["mark"], linestyle=":", linewidth=1.5, label="this survey")
    ax.set(xlabel=f"Share of blind stars detected ({channel_noun(channel)})", ylabel="Surveys", xlim=(0, 1))
    ax.xaxis.set_major_formatter(PercentFormatter(1, decimals=0, symbol=" %"))
    legend(ax, 1)
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
