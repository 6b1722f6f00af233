"""Figures of planets and missions."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.ticker import FuncFormatter, MaxNLocator, PercentFormatter
from scipy.stats import beta as beta_law

from ..mission import MissionSize
from ..occurrence import OccurrencePrior
from .figures_fraction import densities, draw_posterior, draw_prior
from .glossary import TERMS
from .style import COLOURS, legend, on_axes, styled

__all__ = ["plot_chance", "plot_distances", "plot_occurrence", "plot_yield"]

#: more targets than this are drawn on a logarithmic axis
_LONG = 20


@styled
def plot_occurrence(
    prior: OccurrencePrior, before: Any = None, quantity: str = "rocky_system_fraction", ax: Axes | None = None
) -> Axes:
    """Draw what the remnants say of an occurrence rate, with the fitted Beta distribution.

    Parameters
    ----------
    prior : OccurrencePrior
    before : Distribution, optional
        Prior on the quantity before these data.
    quantity : {"rocky_system_fraction", "earthlike_fraction"}, optional
    ax : matplotlib.axes.Axes, optional
        Default new axes.

    Returns
    -------
    matplotlib.axes.Axes
    """
    ax = on_axes(ax)
    draws = prior.values(quantity)
    grid = np.linspace(0.001, 0.999, 400)
    top = draw_posterior(ax, draws, "given the remnants")
    if before is not None:
        draw_prior(ax, before, grid, "before")
    fitted = prior.beta if quantity == "rocky_system_fraction" else prior.earthlike_beta
    if fitted is not None:
        label = f"Beta({fitted.alpha:.3g}, {fitted.beta:.3g})"
        height = beta_law.pdf(grid, fitted.alpha, fitted.beta)
        ax.plot(grid, height, color=COLOURS["mark"], linestyle=":", label=label)
        # a Beta density may rise without end at 0 or 1
        top = float(np.clip(height.max(), top, 1.6 * top))
    ax.set(xlabel=TERMS[quantity].label, ylabel="Probability density", xlim=(0, 1), ylim=(0, 1.12 * top))
    densities(ax)
    legend(ax, 2)
    return ax


@styled
def plot_chance(plan: MissionSize, ax: Axes | None = None) -> Axes:
    """Draw the chance of at least one planet against the number of targets.

    Parameters
    ----------
    plan : MissionSize
    ax : matplotlib.axes.Axes, optional
        Default new axes.

    Returns
    -------
    matplotlib.axes.Axes
    """
    ax = on_axes(ax)
    table = plan.table
    number, chance = table["n_targets"].to_numpy(), table["p_at_least_one"].to_numpy()
    ax.plot(
        number, table["p_at_least_one_naive"], color=COLOURS["limit"], linestyle="--", linewidth=0.9,
        label="at the mean rate (promises too much)",
    )
    ax.plot(number, chance, color=COLOURS["found"], label="averaged over the prior")
    _targets_axis(ax, number)
    _mark_needed(ax, plan)
    ax.set(ylabel="Chance of at least one", ylim=(0, 1.09))
    ax.set_yticks(np.linspace(0, 1, 6))
    ax.yaxis.set_major_formatter(PercentFormatter(1, decimals=0, symbol=" %"))
    legend(ax)
    return ax


def _mark_needed(ax: Axes, plan: MissionSize) -> None:
    first, last = int(plan.table["n_targets"].iloc[0]), int(plan.table["n_targets"].iloc[-1])
    paper = {"facecolor": "white", "edgecolor": "none", "pad": 1.0}
    for turn, row in enumerate(row for row in plan.needs.itertuples() if row.reached):
        at = int(row.n_targets)
        ax.plot([first, at, at], [row.success, row.success, 0], color=COLOURS["quiet"], linewidth=0.6, linestyle=":")
        ax.plot([at], [row.success], "o", color=COLOURS["found"], markersize=4)
        # staggered, so that levels close to each other stay legible
        ax.annotate(
            f"{at:,} for {100 * row.success:g} %", (at, 0.03 + 0.36 * (turn % 2)), xytext=(-2, 0),
            textcoords="offset points", rotation=90, ha="right", va="bottom", bbox=paper,
        )
    missed = [f"{100 * row.success:g} %" for row in plan.needs.itertuples() if not row.reached]
    if missed:
        ax.text(
            0.03, 0.78, f"{' and '.join(missed)}: not reached\nby {last:,} targets", transform=ax.transAxes, ha="left",
            va="top", color=COLOURS["mark"], bbox=paper, linespacing=1.0,
        )


@styled
def plot_yield(plan: MissionSize, ax: Axes | None = None) -> Axes:
    """Draw the number of planets found against the number of targets.

    Parameters
    ----------
    plan : MissionSize
    ax : matplotlib.axes.Axes, optional
        Default new axes.

    Returns
    -------
    matplotlib.axes.Axes
    """
    ax = on_axes(ax)
    table = plan.table
    number = table["n_targets"].to_numpy()
    ax.fill_between(number, table["q05"], table["q95"], color=COLOURS["wide"], linewidth=0, label="5 to 95 %")
    ax.step(number, table["q50"], where="mid", color=COLOURS["found"], linestyle="--", linewidth=0.9, label="median")
    ax.plot(number, table["expected"], color=COLOURS["found"], label="expected")
    ax.set(xlabel="Targets observed", ylabel="Planets found", xlim=(number[0] - 0.5, number[-1]))
    ax.set_ylim(bottom=0)
    ax.yaxis.set_major_locator(MaxNLocator(6, integer=True))
    legend(ax, 3)
    return ax


def _targets_axis(ax: Axes, number: Any) -> None:
    if number[-1] > _LONG:
        ax.set_xscale("log")
        ax.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:,.0f}"))
        ax.set_xlim(1, number[-1])
    else:
        ax.set_xlim(0, number[-1])
    ax.set_xlabel("Targets observed")


@styled
def plot_distances(plan: MissionSize, ax: Axes | None = None) -> Axes:
    """Draw the distances to the nearest hosts, with the aperture they ask for where it is known.

    Parameters
    ----------
    plan : MissionSize
        Sized with a density of candidate stars.
    ax : matplotlib.axes.Axes, optional
        Default new axes.

    Returns
    -------
    matplotlib.axes.Axes
    """
    ax = on_axes(ax)
    table = plan.distances
    k, low, middle, high = (table[name].to_numpy(dtype=float) for name in ("k", "q05", "q50", "q95"))
    top = 1.15 * float(np.max([*high[np.isfinite(high)], *middle[np.isfinite(middle)], 1e-9]))
    ends = np.where(np.isfinite(high), high, top)
    known = np.isfinite(middle)
    ax.vlines(k, np.minimum(low, top), ends, color=COLOURS["found"], linewidth=1.0, label="5 to 95 %")
    ax.plot(k[known], middle[known], "o", color=COLOURS["found"], label="median")
    if not np.isfinite(high).all():
        open_ended = ~np.isfinite(high)
        ax.plot(k[open_ended], ends[open_ended], "^", color=COLOURS["mark"], label="no upper end")
    ax.set(xlabel="Nearest hosts, in order", ylabel="Distance (pc)", xlim=(0.5, k[-1] + 0.5), ylim=(0, top * 1.02))
    ax.set_xticks(k)
    ax.tick_params(axis="x", top=False)
    metres = table["aperture_q50"].to_numpy(dtype=float)
    scale = metres[known] / middle[known]
    if scale.size and np.isfinite(scale[0]):
        ax.tick_params(axis="y", right=False)
        side = ax.secondary_yaxis("right", functions=(lambda d: d * scale[0], lambda m: m / scale[0]))
        side.set_ylabel("Aperture (m)")
    legend(ax, 3)
    return ax
