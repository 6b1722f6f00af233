"""Figures of what is out there: the fraction, the rates, every parameter beside its prior."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from ..inference import Fit
from ..population import parameters as names
from ..population.parameters import Parameter
from .facts import companion, density, fraction_above, median_depth, sample_fraction
from .glossary import AXES, define, parameter_quantity, short_label
from .style import COLOURS, WIDE, label_text, legend, new_figure, on_axes, styled

__all__ = [
    "above_grid",
    "plot_fraction",
    "plot_fraction_above",
    "plot_groups",
    "plot_parameter",
    "plot_parameters",
    "shown_parameters",
]

FloatArray = npt.NDArray[np.float64]
_POINTS = 61
STEPS = "Kaplan–Meier,\nlimits as left-censored"
_LEVELS = (0.05, 0.1587, 0.5, 0.8413, 0.95)


def draw_posterior(ax: Axes, draws: FloatArray, label: str = "posterior") -> float:
    """Draw a posterior density, filled, with its median; give the density's top."""
    smooth = density(draws)
    if smooth is None:
        ax.axvline(float(np.median(draws)), color=COLOURS["found"], label="fixed")
        return 1.0
    grid, height = smooth
    ax.fill_between(grid, height, color=COLOURS["wide"], linewidth=0)
    ax.plot(grid, height, color=COLOURS["found"], label=label)
    low, middle, high = np.quantile(draws, [0.1587, 0.5, 0.8413])
    inside = (grid >= low) & (grid <= high)
    ax.fill_between(grid[inside], height[inside], color=COLOURS["band"], linewidth=0)
    ax.plot([middle, middle], [0, np.interp(middle, grid, height)], color=COLOURS["found"], linewidth=0.8)
    return float(height.max())


def draw_prior(ax: Axes, prior: Any, grid: FloatArray, label: str = "prior") -> None:
    """Draw a prior density over a grid: a distribution, or draws from one."""
    if isinstance(prior, np.ndarray):
        smooth = density(prior)
        if smooth is not None:
            ax.plot(*smooth, color=COLOURS["prior"], linestyle="--", label=label)
    elif prior.is_fixed:
        ax.axvline(prior.value, color=COLOURS["prior"], linestyle="--", label=f"{label} (fixed)")
    elif prior.family == "draws":
        draw_prior(ax, prior.sample(np.random.default_rng(0), 20_000), grid, label)
    else:
        with np.errstate(divide="ignore"):
            ax.plot(grid, np.exp(prior.logpdf(grid)), color=COLOURS["prior"], linestyle="--", label=label)


def densities(ax: Axes) -> None:
    """Finish axes that hold densities."""
    ax.set_ylim(bottom=0)
    ax.set_yticks([])
    ax.xaxis.set_major_locator(MaxNLocator(5, prune=None))


@styled
def plot_fraction(fit: Fit, ax: Axes | None = None) -> Axes:
    """Draw posterior and prior of the fraction, with the raw fraction marked.

    Parameters
    ----------
    fit : Fit
    ax : matplotlib.axes.Axes, optional
        Default new axes.

    Returns
    -------
    matplotlib.axes.Axes
    """
    ax = on_axes(ax)
    draws = fit.draws(fit.fraction)
    top = draw_posterior(ax, draws)
    grid = np.linspace(0.001, 0.999, 400)
    prior = fit.problem.parameter(names.DEBRIS_FRACTION).prior
    if not prior.is_fixed:
        draw_prior(ax, prior, grid)
    raw = sample_fraction(fit, fit.problem.channels[0])
    if raw.observed:
        ax.axvline(raw.value, color=COLOURS["mark"], linestyle=":", linewidth=1.5, label="as counted")
        ax.axvspan(raw.low, raw.high, color=COLOURS["mark"], alpha=0.12, linewidth=0)
    ax.set(xlabel=short_label(fit, fit.fraction), ylabel="Probability density", xlim=(0, 1), ylim=(0, 1.08 * top))
    densities(ax)
    legend(ax, 3)
    return ax


def above_grid(fit: Fit, channel: str) -> FloatArray:
    """Thresholds that cover the population and the limits of a channel."""
    mean, sd = (np.median(fit.draws(f"{kind}_{_value(channel)}")) for kind in ("mean", "sd"))
    depth = median_depth(fit, channel)
    reach = [mean - 2.5 * sd, mean + 2.5 * sd] + ([depth - 0.5, depth + 0.5] if np.isfinite(depth) else [])
    low, high = (4.0, 12.0) if channel == "pollution" else (-6.0, 0.0)
    return np.linspace(max(min(reach), low), min(max(reach), high), _POINTS)


def _value(channel: str) -> str:
    return "log_accretion" if channel == "pollution" else "log_dust"


@styled
def plot_fraction_above(fit: Fit, channel: str = "", ax: Axes | None = None) -> Axes:
    """Draw the fraction of systems above a threshold, against the threshold.

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
    grid = above_grid(fit, channel)
    low5, low, middle, high, high95 = np.quantile(fraction_above(fit, channel, grid), _LEVELS, axis=0)
    ax.fill_between(grid, low5, high95, color=COLOURS["wide"], linewidth=0, label="90 % interval")
    ax.fill_between(grid, low, high, color=COLOURS["band"], linewidth=0, label="68 % interval")
    ax.plot(grid, middle, color=COLOURS["found"], label="median")
    steps = companion(fit, channel)
    if len(steps):
        ax.step(
            [*steps["value"], max(grid[-1], steps["value"].iloc[-1])], [*steps["fraction"], steps["fraction"].iloc[-1]],
            where="post", color=COLOURS["mark"], linewidth=0.8, zorder=1.9, label=STEPS,
        )
    depth = median_depth(fit, channel)
    if np.isfinite(depth) and depth > grid[0]:
        ax.axvspan(
            grid[0], depth, facecolor="none", edgecolor=COLOURS["hatch"], hatch="////", linewidth=0,
            label="extrapolated",
        )
        ax.axvline(depth, color=COLOURS["quiet"], linewidth=0.7, linestyle="-.")
    ax.set(
        xlabel=f"Threshold T, {AXES[channel].split(', ', 1)[1]}",
        ylabel="Fraction of stars above T",
        xlim=(grid[0], grid[-1]),
        ylim=(0, min(1.0, 1.1 * max(high95.max(), _highest(steps, grid)))),
    )
    legend(ax, 2)
    return ax


def _highest(steps: pd.DataFrame, grid: FloatArray) -> float:
    """Highest step that lies within the grid."""
    return float(steps["fraction"][steps["value"] <= grid[-1]].max()) if len(steps) else 0.0


def shown_parameters(fit: Fit) -> tuple[Parameter, ...]:
    """Free parameters that are drawn: every scalar one."""
    return tuple(item for item in fit.problem.free if item.size == 1)


@styled
def plot_parameter(fit: Fit, name: str, ax: Axes | None = None) -> Axes:
    """Draw posterior and prior of one parameter.

    Parameters
    ----------
    fit : Fit
    name : str
        As in the model file.
    ax : matplotlib.axes.Axes, optional
        Default new axes.

    Returns
    -------
    matplotlib.axes.Axes
    """
    ax = on_axes(ax, height=2.0)
    quantity = parameter_quantity(fit, name)
    draws = fit.draws(quantity)
    prior = fit.problem.parameter(name).prior
    top = draw_posterior(ax, draws)
    low, high = np.quantile(draws, [0.0005, 0.9995])
    room = 0.6 * (high - low) or 0.5
    least, most = fit.problem.parameter(name).bounds
    view = max(low - room, least), min(high + room, most)
    grid = np.linspace(view[0], view[1], 402)[1:-1]
    draw_prior(ax, prior, grid)
    ax.set(xlabel=short_label(fit, quantity, "\n"), xlim=view, ylim=(0, 1.1 * top))
    densities(ax)
    return ax


@styled
def plot_parameters(fit: Fit, figure: Figure | None = None) -> npt.NDArray[Any]:
    """Draw posterior and prior of every free parameter, side by side.

    Parameters
    ----------
    fit : Fit
    figure : matplotlib.figure.Figure, optional
        An empty one; default new.

    Returns
    -------
    ndarray of matplotlib.axes.Axes
    """
    shown = shown_parameters(fit)
    columns = min(3, max(len(shown), 1))
    rows = -(-len(shown) // columns) or 1
    figure = new_figure(WIDE, 0.35 + 1.75 * rows) if figure is None else figure
    axes = figure.subplots(rows, columns, squeeze=False)
    for place, item in zip(axes.flat, shown, strict=False):
        plot_parameter(fit, item.name, place)
    for place in axes.flat[len(shown) :]:
        place.set_axis_off()
    if shown:
        legend(axes.flat[0], 2)
    return np.asarray(axes)


@styled
def plot_groups(fit: Fit, ax: Axes | None = None) -> Axes:
    """Draw the fraction of each group beside what was counted there.

    Parameters
    ----------
    fit : Fit
        Of a model with groups, or one that admits He stars.
    ax : matplotlib.axes.Axes, optional
        Default new axes.

    Returns
    -------
    matplotlib.axes.Axes
    """
    rows = fit.table[fit.table["quantity"].str.startswith("group_fraction[")]
    ax = on_axes(ax, WIDE, 0.9 + 0.27 * len(rows))
    places = np.arange(len(rows))[::-1]
    middle = rows["q50"].to_numpy()
    for ends, width in ((("q05", "q95"), 0.8), (("q16", "q84"), 2.6)):
        ax.hlines(places + 0.1, rows[ends[0]], rows[ends[1]], color=COLOURS["found"], linewidth=width)
    ax.plot(middle, places + 0.1, "o", color=COLOURS["found"], label="corrected, 68 and 90 %")
    labels = [define(fit, name).label.removeprefix("Fraction, ") for name in rows["quantity"]]
    raws = [group_raw(fit, label) for label in labels]
    seen = [(place, raw) for place, raw in zip(places, raws, strict=True) if raw is not None and raw.observed]
    if seen:
        at = np.array([place for place, _ in seen]) - 0.15
        value = np.array([raw.value for _, raw in seen])
        spread = np.abs([value - [raw.low for _, raw in seen], np.array([raw.high for _, raw in seen]) - value])
        ax.errorbar(
            value, at, xerr=spread, fmt="D", markerfacecolor="white", color=COLOURS["mark"], elinewidth=0.9,
            capsize=2, label="as counted, 68 %",
        )
    ax.set_yticks(places, [label_text(label) for label in labels])
    ax.set(xlabel=short_label(fit, fit.fraction), xlim=(0, 1), ylim=(-0.6, len(rows) - 0.4))
    ax.tick_params(axis="y", length=0)
    legend(ax, 2)
    return ax


def group_raw(fit: Fit, label: str) -> Any:
    """Raw fraction of a group's blind stars; None for a group that is not in the sample."""
    labels = list(fit.problem.groups)
    if label in labels:
        inside = np.asarray(fit.problem.rows.group) == labels.index(label)
        if len(inside) != len(fit.stars):
            return None
    elif label == "He":
        inside = (fit.stars["atmosphere"] == "He").to_numpy()
    else:
        return None
    return sample_fraction(fit, fit.problem.channels[0], inside)
