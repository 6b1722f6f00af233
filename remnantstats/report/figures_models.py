"""Figures that set several models of one sample side by side."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from ..inference import Fit
from ..inference.compare import Comparison
from .facts import fraction_above
from .figures_fraction import above_grid
from .glossary import AXES
from .style import COLOURS, label_text, legend, on_axes, styled

__all__ = ["above_rows", "plot_models"]

STACKED = "stacked (models averaged by weight)"
_COLOURS = ("found", "limit", "ink", "prior")
_LINES = ("-", "--", "-.", ":")
_POINTS = 61


def above_rows(comparison: Comparison, channel: str, model: str = "stacked") -> pd.DataFrame:
    """Fractions of a channel above each threshold under one model, by rising threshold.

    Parameters
    ----------
    comparison : Comparison
    channel : {"pollution", "excess"}
    model : str
        A model's name, or "stacked".

    Returns
    -------
    pandas.DataFrame
        Rows of `comparison.above` with a column `threshold`.
    """
    table = comparison.above
    stem = "debris_fraction_above[" if channel == "pollution" else "dusty_fraction_above["
    if not len(table):
        return table.assign(threshold=[])
    rows = table[(table["model"] == model) & table["quantity"].str.startswith(stem)]
    label = rows["quantity"].str.slice(len(stem), -1)
    return rows.assign(threshold=label.astype(float)).sort_values("threshold", ignore_index=True)


@styled
def plot_models(fits: Sequence[Fit], comparison: Comparison, channel: str = "", ax: Axes | None = None) -> Axes:
    """Draw the fraction of systems above a threshold under each model, and under their stacked mixture.

    Parameters
    ----------
    fits : sequence of Fit
        Those compared.
    comparison : Comparison
    channel : {"pollution", "excess"}, optional
        Default the first in use.
    ax : matplotlib.axes.Axes, optional
        Default new axes.

    Returns
    -------
    matplotlib.axes.Axes
    """
    channel = channel or fits[0].problem.channels[0]
    ax = on_axes(ax, height=2.9)
    grids = [above_grid(fit, channel) for fit in fits]
    grid = np.linspace(min(item[0] for item in grids), max(item[-1] for item in grids), _POINTS)
    top = 0.0
    for at, fit in enumerate(fits):
        low, middle, high = np.quantile(fraction_above(fit, channel, grid), [0.1587, 0.5, 0.8413], axis=0)
        colour, line = COLOURS[_COLOURS[at % len(_COLOURS)]], _LINES[at % len(_LINES)]
        ax.fill_between(grid, low, high, color=colour, alpha=0.16, linewidth=0)
        for edge in (low, high):
            ax.plot(grid, edge, color=colour, linestyle=line, linewidth=0.5)
        weight = comparison.weights[fit.model.name]
        label = f"{label_text(fit.model.name)}, weight {weight:.2f}"
        ax.plot(grid, middle, color=colour, linestyle=line, label=label)
        top = max(top, float(high.max()))
    rows = above_rows(comparison, channel)
    if len(rows):
        points = rows["q50"].to_numpy()
        spread = np.abs([points - rows["q16"], rows["q84"] - points])
        ax.errorbar(
            rows["threshold"], points, yerr=spread, fmt="D", color=COLOURS["mark"], elinewidth=1.1, capsize=2.5,
            markersize=4.5, zorder=4, label=STACKED,
        )
        top = max(top, float(rows["q84"].max()))
    ax.set(
        xlabel=f"Threshold T, {AXES[channel].split(', ', 1)[1]}",
        ylabel="Fraction of stars above T",
        xlim=(grid[0], grid[-1]),
        ylim=(0, min(1.0, 1.1 * top)),
    )
    legend(ax)
    return ax
