"""The figures of a report, in order, each with its caption and the text that stands in for it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from matplotlib.figure import Figure

from ..inference import Fit
from . import captions
from .contents import ReportContents
from .facts import prior_detected
from .figures_checks import draw_prior_predictive, plot_predictive, predictive_kinds
from .figures_fraction import plot_fraction, plot_fraction_above, plot_groups, plot_parameters, shown_parameters
from .figures_mission import plot_chance, plot_distances, plot_occurrence, plot_yield
from .figures_models import plot_models
from .figures_sample import plot_completeness, plot_correction, plot_sample
from .style import HALF, WIDE, new_figure, styled

__all__ = ["MODELS", "Plate", "gallery"]

#: above so many stars the prior predictive surveys would take too long
_MANY = 20_000


@dataclass(frozen=True)
class Plate:
    """One figure of the report.

    Attributes
    ----------
    name : str
        File name without its ending.
    section : str
        Heading under which it stands.
    text : captions.Words
        Title, caption and alternative text.
    draw : callable
        Makes the figure.
    wide : bool
        Whether it takes the whole width of the page.
    """

    name: str
    section: str
    text: captions.Words
    draw: Callable[[], Figure]
    wide: bool = False


SEEN, OUT, PLANETS, CHECKS = "What was seen", "What is out there", "Planets and mission", "Model against data"
MODELS = "Models compared"


def gallery(contents: ReportContents) -> list[Plate]:
    """List the figures that the results allow, in the order of the page."""
    plates = _seen(contents) + _out_there(contents) + _planets(contents)
    return plates + _checks(contents) + _before(contents.fit) + _models(contents)


def _single(plot: Callable[..., Any], *args: Any, wide: bool = False, height: float = 2.5) -> Callable[[], Figure]:
    @styled
    def draw() -> Figure:
        figure = new_figure(WIDE if wide else HALF, height)
        plot(*args, ax=figure.add_subplot())
        return figure

    return draw


def _seen(contents: ReportContents) -> list[Plate]:
    fit, plates = contents.fit, []
    several = len(fit.problem.channels) > 1
    for channel in fit.problem.channels:
        end = f"_{channel}" if several else ""
        plates += [
            Plate(
                f"sample{end}", SEEN, captions.sample(fit, channel),
                _single(plot_sample, fit, channel, wide=True, height=2.9), True,
            ),
            Plate(
                f"correction{end}", SEEN, captions.correction(fit, channel),
                _single(plot_correction, fit, channel, wide=True, height=2.8), True,
            ),
            Plate(
                f"completeness{end}", SEEN, captions.completeness(fit, channel),
                _single(plot_completeness, fit, channel),
            ),
            Plate(
                f"fraction_above{end}", OUT, captions.above(fit, channel, contents.thresholds),
                _single(plot_fraction_above, fit, channel),
            ),
        ]
    # kind by kind: like figures of the two channels stand side by side
    count = len(plates) // len(fit.problem.channels)
    return [plate for kind in range(count) for plate in plates[kind::count]]


def _out_there(contents: ReportContents) -> list[Plate]:
    fit = contents.fit
    plates = [Plate("fraction", OUT, captions.fraction(fit), _single(plot_fraction, fit))]
    groups = captions.group_rows(fit)
    if len(groups):
        height = min(0.9 + 0.27 * len(groups), 8.0)
        draw = _single(plot_groups, fit, wide=True, height=height)
        plates.append(Plate("groups", OUT, captions.groups(fit), draw, True))
    if shown_parameters(fit):
        plates.append(Plate("parameters", OUT, captions.parameters(fit), lambda: _parameter_figure(fit), True))
    return plates


def _parameter_figure(fit: Fit) -> Figure:
    figure: Figure = np.ravel(plot_parameters(fit))[0].figure
    return figure


def _planets(contents: ReportContents) -> list[Plate]:
    plates = []
    prior, plan = contents.prior, contents.plan
    if prior is not None:
        before = None if contents.transfer is None else contents.transfer.prior
        text = captions.occurrence(prior, before)
        plates.append(Plate("occurrence", PLANETS, text, _single(plot_occurrence, prior, before)))
    if plan is not None:
        plates.append(Plate("chance", PLANETS, captions.chance_of_one(plan), _single(plot_chance, plan)))
        plates.append(Plate("yield", PLANETS, captions.planets_found(plan), _single(plot_yield, plan)))
        if len(plan.distances):
            plates.append(Plate("distances", PLANETS, captions.distances(plan), _single(plot_distances, plan)))
    return plates


def _checks(contents: ReportContents) -> list[Plate]:
    fit = contents.fit
    if not len(fit.predictive.counts):
        return []
    kinds = predictive_kinds(fit)

    @styled
    def draw() -> Figure:
        rows = -(-len(kinds) // 2)
        figure = new_figure(WIDE if len(kinds) > 1 else HALF, 2.5 * rows)
        places = np.ravel(figure.subplots(rows, min(2, len(kinds)), squeeze=False))
        for place, (channel, kind) in zip(places, kinds, strict=False):
            plot_predictive(fit, channel, kind, place)
        for place in places[len(kinds) :]:
            place.set_axis_off()
        return figure

    return [Plate("predictive", CHECKS, captions.predictive(fit), draw, len(kinds) > 1)]


def _before(fit: Fit) -> list[Plate]:
    """What the prior alone would expect to be detected."""
    if len(fit.stars) > _MANY:
        return []
    plates = []
    for channel, shares in prior_detected(fit).items():
        end = f"_{channel}" if len(fit.problem.channels) > 1 else ""
        draw = _single(draw_prior_predictive, fit, channel, shares)
        plates.append(Plate(f"prior_predictive{end}", CHECKS, captions.prior_predictive(fit, channel, shares), draw))
    return plates


def _models(contents: ReportContents) -> list[Plate]:
    comparison, fits = contents.comparison, contents.fits
    if comparison is None or len(fits) < 2:
        return []
    plates = []
    for channel in contents.fit.problem.channels:
        end = f"_{channel}" if len(contents.fit.problem.channels) > 1 else ""
        draw = _single(plot_models, fits, comparison, channel, height=2.9)
        plates.append(Plate(f"models{end}", MODELS, captions.models(fits, comparison, channel), draw))
    return plates
