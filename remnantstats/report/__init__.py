"""The report: figures, one function each returning axes, and the page that holds them."""

from __future__ import annotations

from .contents import AssumptionRow, ReportContents, collect_assumptions
from .figures_checks import plot_predictive, plot_prior_predictive
from .figures_fraction import plot_fraction, plot_fraction_above, plot_groups, plot_parameter, plot_parameters
from .figures_mission import plot_chance, plot_distances, plot_occurrence, plot_yield
from .figures_models import plot_models
from .figures_sample import plot_completeness, plot_correction, plot_sample
from .page import write_report

__all__ = [
    "AssumptionRow",
    "ReportContents",
    "collect_assumptions",
    "plot_chance",
    "plot_completeness",
    "plot_correction",
    "plot_distances",
    "plot_fraction",
    "plot_fraction_above",
    "plot_groups",
    "plot_models",
    "plot_occurrence",
    "plot_parameter",
    "plot_parameters",
    "plot_predictive",
    "plot_prior_predictive",
    "plot_sample",
    "plot_yield",
    "write_report",
]
