"""What a command prints: result tables and where the files are."""

from __future__ import annotations

from typing import Any

import pandas as pd
from rich import box
from rich.console import Console
from rich.table import Table
from rich.text import Text

from .catalog import Sample, census, depth, error_notes
from .inference import Fit
from .mission import MissionSize
from .study import RunResult
from .study_file import Study

__all__ = ["show_calibration", "show_plan", "show_result", "show_sample"]

_SIGNS = {"pass": "ok", "warn": "NOTE", "fail": "FAIL"}


def _console() -> Console:
    console = Console(highlight=False)
    # piped output has no width of its own: tables then take what they need
    return console if console.is_terminal else Console(highlight=False, width=140)


def _table(frame: pd.DataFrame, title: str) -> Table:
    table = Table(title=Text(title), box=box.SIMPLE, title_justify="left", pad_edge=False)
    for name in frame.columns:
        number = pd.api.types.is_numeric_dtype(frame[name])
        long = not number and frame[name].astype(str).str.len().max() > 40
        heading = Text(str(name).replace("_", " ") if title == "Census" else str(name))
        table.add_column(heading, justify="right" if number else "left", overflow="fold", no_wrap=not long)
    for row in frame.itertuples(index=False):
        table.add_row(*[Text(_cell(value)) for value in row])
    return table


def _cell(value: Any) -> str:
    if isinstance(value, float):
        return "" if pd.isna(value) else f"{value:.4g}"
    return "" if value is None or value is pd.NA else str(value)


def show_sample(study: Study, sample: Sample) -> None:
    """Print the census of a sample and the depth of its limits."""
    console = _console()
    console.print(Text(f"{study.file.title}: {len(sample)} stars", style="bold"))
    console.print(_table(census(sample), "Census"))
    for channel in study.channels:
        show = (7.0, 8.0) if channel == "pollution" else (-3.0, -2.0)
        unit = "log10 g/s" if channel == "pollution" else "log10 L_dust/L_star"
        title = f"Depth of the {channel} limits ({unit}); could_show_T counts stars whose limit is at or below T"
        console.print(_table(depth(sample, channel, show), title))
    for note in [*sample.notes, *error_notes(sample)]:
        console.print(Text(f"note: {note}"))
    if len(sample.rejected):
        columns = ["file", "row", "star", "column", "found", "fault"]
        console.print(_table(sample.rejected[columns], f"Rejected rows ({sample.rejected['row'].nunique()})"))
    else:
        console.print(Text("no rows rejected"))


def show_result(result: RunResult) -> None:
    """Print the result of a run."""
    console = _console()
    fit = result.fit
    console.print()
    for mark in result.marks:
        console.print(Text(f"MARKED {mark}", style="bold"))
    console.print(Text(_headline(fit)))
    columns = ["quantity", "q50", "q16", "q84", "q05", "q95"]
    shown = fit.table[columns].rename(columns={"q50": "median"})
    console.print(_table(shown, f"{result.study.file.title} — model '{fit.model.name}', {len(result.sample)} stars"))
    if result.comparison is not None:
        columns = ["model", "elpd", "elpd_difference", "difference_se", "weight", "worst_k", "q16", "q50", "q84"]
        title = f"Models compared by leave-one-out; {fit.fraction} under each and stacked (models averaged by weight)"
        console.print(_table(result.comparison.table[columns], title))
    checks = pd.DataFrame([{"check": c.name, "verdict": _SIGNS[c.verdict], "finding": c.message} for c in fit.checks])
    console.print(_table(checks, "Checks"))
    if result.prior is not None:
        names = {"rocky_system_fraction", "earthlike_fraction"}
        table = result.prior.summary()
        table = table[table["quantity"].isin(names)][["quantity", "q50", "q16", "q84", "q05", "q95"]]
        console.print(_table(table.rename(columns={"q50": "median"}), "Occurrence prior"))
    if result.plan is not None:
        show_plan(result.plan)
    for note in fit.notes:
        console.print(Text(f"note: {note}"))
    report = next((path for path in result.files if path.name == "report.html"), None)
    console.print(Text(f"report:  {report}" if report else f"outputs: {result.folder}"))


def _headline(fit: Fit) -> str:
    row = fit.table.iloc[0]
    table = fit.sample.table
    listed = table.loc[table["inclusion"] == "blind", fit.problem.channels[0]]
    seen, observed = int((listed == "detected").sum()), int((listed != "unobserved").sum())
    word = "dust" if fit.fraction == "dusty_fraction" else "debris"
    return (
        f"{seen} of {observed} blind observed stars are listed as detected; corrected for each star's own limit, the "
        f"fraction with {word} is {row.q50:.3f} (68 %: {row.q16:.3f} to {row.q84:.3f})."
    )


def show_plan(plan: MissionSize) -> None:
    """Print the sizing table of a mission."""
    console = _console()
    console.print(_table(plan.needs, "Targets needed for at least one planet sought"))
    if plan.distances is not None and len(plan.distances):
        console.print(_table(plan.distances, "Distance to the k-th nearest host [pc]"))
    for note in plan.notes:
        console.print(Text(f"note: {note}"))


def show_calibration(report: Any, folder: Any) -> None:
    """Print the coverage of a model's intervals."""
    console = _console()
    title = f"{report.surveys} surveys of {report.stars} stars, model '{report.model}'; refused {report.refused}"
    console.print(_table(report.coverage(), title))
    console.print(Text(f"outputs: {folder}"))
