"""Figures of what was observed and what could have been seen."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.ticker import PercentFormatter

from ..inference import Fit
from ..sensitivity import CHANNELS
from .facts import channel_fraction, depth_bins
from .glossary import AXES, channel_noun
from .numbers import number
from .style import COLOURS, WIDE, legend, on_axes, styled

__all__ = ["plot_completeness", "plot_correction", "plot_sample"]

FloatArray = npt.NDArray[np.float64]
#: more points than this are drawn as an image inside the vector file
_MANY = 3000
#: candidates for the horizontal axis of the sample, best first: column, label, scale
_ACROSS = (
    ("teff", "Effective temperature (K)", "linear"),
    ("cooling_age", "Cooling age (Gyr)", "log"),
    ("distance", "Distance (pc)", "linear"),
)


def across(fit: Fit) -> tuple[FloatArray, str, str]:
    """What the sample is spread along: values, label, scale.

    Temperature where at least half the stars have one, else cooling age, else distance, else the order of the table.
    """
    table = fit.sample.table
    for column, label, scale in _ACROSS:
        if column in table:
            values = table[column].to_numpy(dtype=float)
            if np.isfinite(values).mean() >= 0.5:
                return values, label, scale
    return np.arange(1, len(table) + 1, dtype=float), "Star, in the order of the table", "linear"


@styled
def plot_sample(fit: Fit, channel: str = "", ax: Axes | None = None) -> Axes:
    """Draw each star's measured value, or the limit where nothing was seen.

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
    ax = on_axes(ax, WIDE, 3.1)
    names, stars = CHANNELS[channel], fit.stars
    x, label, scale = across(fit)
    found = (stars[channel] == "detected").to_numpy()
    limited = (stars[channel] == "limit").to_numpy()
    value = stars[names.value].to_numpy(dtype=float)
    limit = stars[f"{names.value}_limit_50"].to_numpy(dtype=float)
    many = len(stars) > _MANY
    ax.scatter(
        x[limited], limit[limited], s=15, marker="v", facecolors="none", edgecolors=COLOURS["limit"], linewidths=0.7,
        label=f"nothing seen: limit ({limited.sum()})", rasterized=many,
    )
    if not many:
        _error_bars(ax, fit, channel, x, found)
    ax.scatter(
        x[found], value[found], s=15, marker="o", color=COLOURS["found"], label=f"detected ({found.sum()})",
        rasterized=many, linewidths=0,
    )
    _mark_known(ax, fit, x, np.where(found, value, limit), found | limited)
    ax.set(xlabel=label, ylabel=AXES[channel], xscale=scale)
    legend(ax, 3)
    return ax


def _error_bars(ax: Axes, fit: Fit, channel: str, x: FloatArray, found: npt.NDArray[np.bool_]) -> None:
    names, table = CHANNELS[channel], fit.sample.table
    calibration = table[names.calibration].fillna(0).to_numpy(dtype=float)
    error = np.hypot(table[names.error].to_numpy(dtype=float), calibration)
    value = table[names.value].to_numpy(dtype=float)
    ax.errorbar(
        x[found], value[found], yerr=error[found], fmt="none", ecolor=COLOURS["found"], elinewidth=0.6, alpha=0.7
    )


def _mark_known(ax: Axes, fit: Fit, x: FloatArray, y: FloatArray, use: npt.NDArray[np.bool_]) -> None:
    known = (fit.stars["inclusion"] != "blind").to_numpy() & use
    if known.any():
        ax.scatter(
            x[known], y[known], s=42, marker="s", facecolors="none", edgecolors=COLOURS["ink"], linewidths=0.8,
            label=f"chosen for known debris ({known.sum()})",
        )


@styled
def plot_completeness(fit: Fit, channel: str = "", ax: Axes | None = None) -> Axes:
    """Draw the share of hosts that the sample would have shown, against their true value.

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
    ax = on_axes(ax)
    table = fit.completeness[fit.completeness["quantity"] == CHANNELS[channel].value]
    value = table["value"].to_numpy()
    low, mean, high = (table[name].to_numpy() for name in ("lowest", "efficiency", "highest"))
    ax.fill_between(value, low, high, color=COLOURS["wide"], linewidth=0, label="10 to 90 % of the stars")
    ax.plot(value, mean, color=COLOURS["found"], label="mean")
    moving = (mean > 0.002 * max(mean.max(), 1e-9)) & (mean < 0.998 * mean.max())
    if moving.any():
        ax.set_xlim(value[moving][0] - 0.3, value[moving][-1] + 0.3)
    ax.set(xlabel=f"True {AXES[channel][0].lower()}{AXES[channel][1:]}", ylabel="Chance of detection", ylim=(0, 1.02))
    ax.yaxis.set_major_formatter(PercentFormatter(1, decimals=0, symbol=" %"))
    legend(ax, 2)
    return ax


@styled
def plot_correction(fit: Fit, channel: str = "", ax: Axes | None = None) -> Axes:
    """Draw the raw fraction by depth beside what the fitted model expects there, and the corrected fraction.

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
    ax = on_axes(ax, WIDE, 3.0)
    bins = depth_bins(fit, channel)
    low5, low, middle, high, high95 = np.quantile(channel_fraction(fit, channel), [0.05, 0.1587, 0.5, 0.8413, 0.95])
    ax.axhspan(low5, high95, color=COLOURS["wide"], linewidth=0, label="corrected fraction, 68 and 90 %")
    ax.axhspan(low, high, color=COLOURS["band"], linewidth=0)
    ax.axhline(middle, color=COLOURS["found"], linewidth=1.0)
    if len(bins):
        _draw_bins(ax, bins)
    tops = [high95, *bins["raw_high"], *bins["expected_high"]] if len(bins) else [high95]
    ax.set(
        xlabel=f"Smallest {channel_noun(channel)} that could be seen, {AXES[channel].split(', ', 1)[1]}; deepest first",
        ylabel="Share of stars",
        ylim=(0, min(1.0, 1.12 * max(tops))),
    )
    ax.yaxis.set_major_formatter(PercentFormatter(1, decimals=0, symbol=" %"))
    legend(ax, 3)
    return ax


def _draw_bins(ax: Axes, bins: pd.DataFrame) -> None:
    place = np.arange(len(bins))
    raw, expected = bins["raw"].to_numpy(dtype=float), bins["expected"].to_numpy(dtype=float)
    ax.errorbar(
        place - 0.09, raw, yerr=np.abs([raw - bins["raw_low"], bins["raw_high"] - raw]), fmt="o",
        color=COLOURS["ink"], elinewidth=0.9, capsize=2, label="detected, as counted",
    )
    ax.errorbar(
        place + 0.09, expected, yerr=np.abs([expected - bins["expected_low"], bins["expected_high"] - expected]),
        fmt="D", markerfacecolor="white", color=COLOURS["limit"], elinewidth=0.9, markersize=4.5,
        label="detections the model expects",
    )
    ticks = [
        f"{number(row.low)} to {number(row.high)}\n{row.found} of {row.stars} stars" for row in bins.itertuples()
    ]
    ax.set_xticks(place, ticks)
    ax.set_xlim(-0.6, len(bins) - 0.4)
    ax.tick_params(axis="x", length=0, top=False)
