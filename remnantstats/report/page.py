"""The report as one self-contained page."""

from __future__ import annotations

import base64
import hashlib
import itertools
import struct
from pathlib import Path
from typing import Any

import jinja2
from markupsafe import Markup

from ..files import make_folder, write_text
from .contents import ReportContents, collect_assumptions
from .gallery import MODELS, Plate, gallery
from .narrative import answer, chain, extrapolations, models_compared, notes, validity
from .numbers import count, number, typeset
from .rendering import save_plates
from .tables import (
    Cell,
    Table,
    checks_table,
    followup_table,
    mission_table,
    models_table,
    order_table,
    results_table,
)

__all__ = ["render_page", "write_report"]

#: what the methods rest on
_SOURCES = (
    "Selection effects and measurement error: Loredo 2004, astro-ph/0409387; Mandel, Farr & Gair 2019, "
    "MNRAS 486, 1086.",
    "Binomial intervals: Wilson 1927, J. Am. Stat. Assoc. 22, 209.",
    "Importance weights and leave-one-out influence: Vehtari, Simpson, Gelman, Yao & Gabry 2024, "
    "J. Mach. Learn. Res. 25, 72.",
)
_DISTANCES = "Nearest neighbours: Hertz 1909, Math. Ann. 67, 387; Chandrasekhar 1943, Rev. Mod. Phys. 15, 1."
_COMPANION = "Fraction without an assumed shape: Kaplan & Meier 1958, J. Am. Stat. Assoc. 53, 457."
_COMPARISON = (
    "Comparison of models: Vehtari, Gelman & Gabry 2017, Stat. Comput. 27, 1413; small differences: Sivula, Magnusson, "
    "Matamoros & Vehtari 2020, arXiv:2008.10296; stacking: Yao, Vehtari, Simpson & Gelman 2018, "
    "Bayesian Anal. 13, 917."
)
_SECTIONS = (
    ("reasoning", "How it follows"),
    ("figures", "Figures"),
    ("models", "Models"),
    ("numbers", "Numbers"),
    ("followup", "Stars to look at"),
    ("assumptions", "Assumptions"),
    ("checks", "Checks"),
    ("reach", "Limits"),
    ("provenance", "Provenance"),
)


def write_report(contents: ReportContents, folder: Path) -> Path:
    """Write `report.html`, and every figure as PNG and PDF under `figures/`.

    Parameters
    ----------
    contents : ReportContents
    folder : pathlib.Path
        Made where missing.

    Returns
    -------
    pathlib.Path
        The page. It needs no other file to be read, and asks the network for nothing.

    Raises
    ------
    InputError
        Where the files cannot be written.
    """
    make_folder(folder / "figures")
    plates = gallery(contents)
    images = save_plates(plates, folder / "figures")
    page = folder / "report.html"
    write_text(page, render_page(contents, plates, images))
    return page


def render_page(contents: ReportContents, plates: list[Plate], images: dict[str, bytes]) -> str:
    """Lay out the page.

    Parameters
    ----------
    contents : ReportContents
    plates : list of Plate
    images : dict of str to bytes
        The PNG of each plate, by its name.

    Returns
    -------
    str
        HTML.
    """
    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("remnantstats.report"), autoescape=True, undefined=jinja2.StrictUndefined,
        trim_blocks=True,
    )
    figures = _figures(plates, images)
    css, js = (_own(environment, name) for name in ("report.css", "report.js"))
    return environment.get_template("report.html.j2").render(
        css=css,
        js=js,
        policy=_policy(css, js),
        figures=[item for item in figures if item[0] != MODELS],
        model_figures=[figure for section, shown in figures if section == MODELS for figure in shown],
        sections=[item for item in _SECTIONS if item[0] != "models" or contents.comparison is not None],
        **_words(contents),
        **_tables(contents),
    )


def _own(environment: jinja2.Environment, name: str) -> Markup:
    """Style or script of the package itself, not to be escaped."""
    if environment.loader is None:
        raise ValueError("the environment has no loader")
    return Markup(environment.loader.get_source(environment, name)[0])


def _policy(css: str, js: str) -> str:
    """A content security policy that lets in our own style and script, images in the page, and nothing else."""
    style, script = (
        "'sha256-" + base64.b64encode(hashlib.sha256(text.encode()).digest()).decode() + "'" for text in (css, js)
    )
    return (
        f"default-src 'none'; img-src data:; style-src {style}; script-src {script}; base-uri 'none'; form-action "
        "'none'"
    )


def _words(contents: ReportContents) -> dict[str, Any]:
    fit, marks = contents.fit, contents.all_marks
    short = list(dict.fromkeys(mark.split(":")[0].strip() for mark in marks))
    return {
        "heading": (f"[{', '.join(short)}] " if short else "") + contents.title,
        "marks": marks,
        "model": fit.model.name,
        "many": len(fit.problem.channels) > 1,
        "stars": count(len(fit.stars), "star"),
        "prior": contents.prior is not None,
        "plan": contents.plan is not None,
        "answer": list(zip(("Fraction", "Planets", "Mission"), answer(contents), strict=True)),
        "chain": chain(contents),
        "extrapolations": extrapolations(contents),
        "compared": models_compared(contents),
        "validity": validity(contents),
        "notes": notes(contents),
        "verdict": _verdict(contents),
        "references": _references(contents),
    }


def _references(contents: ReportContents) -> tuple[str, ...]:
    far = contents.plan is not None and len(contents.plan.distances) > 0
    compared = (_COMPARISON,) if contents.comparison is not None else ()
    return (*_SOURCES, _COMPANION, *compared, *((_DISTANCES,) if far else ()), *contents.references)


def _verdict(contents: ReportContents) -> str:
    found = [check.verdict for check in contents.fit.checks]
    failed, noted = found.count("fail"), found.count("warn")
    if failed:
        return f"{count(failed, 'check')} failed: the results are unreliable, for the reasons given."
    quick = contents.fit.engine == "quick"
    engine = " This is a quick look; a full run repeats it with the engine of record." if quick else ""
    noted_text = f" {count(noted, 'point')} to take note of." if noted else ""
    return f"No check failed.{noted_text}{engine}"


def _tables(contents: ReportContents) -> dict[str, Table | None]:
    plan = contents.plan
    return {
        "results": results_table(contents),
        "models": None if contents.comparison is None else models_table(contents.fit, contents.comparison),
        "mission": None if plan is None else mission_table(plan),
        "order": None if plan is None else order_table(plan),
        "followup": followup_table(contents.fit),
        "assumptions": _assumption_table(contents),
        "checks": checks_table(contents.fit),
        "provenance": _provenance_table(contents),
    }


def _assumption_table(contents: ReportContents) -> Table:
    rows = [
        (Cell(row.name), Cell(row.enters, "", "word"), Cell(typeset(row.description)), Cell(typeset(row.basis)))
        for row in collect_assumptions(contents)
    ]
    caption = "Every assumption, in the order in which it enters."
    return Table("assumptions", caption, ("Assumption", "Enters at", "What is assumed", "Basis"), rows)


def _provenance_table(contents: ReportContents) -> Table:
    fit = contents.fit
    facts = {**contents.provenance}
    facts.setdefault("seed", str(fit.seed))
    facts["engine"] = "engine of record" if fit.engine == "full" else "quick engine"
    facts |= {f"time, {name}": f"{number(spent, 1)} s" for name, spent in fit.timings.items()}
    rows = [(Cell(name), Cell(text, "", "hash")) for name, text in facts.items()]
    return Table("provenance", "What the results were made from, and with what.", ("Item", "Value"), rows)


def _figures(plates: list[Plate], images: dict[str, bytes]) -> list[tuple[str, list[dict[str, Any]]]]:
    found, numbered = [], enumerate(plates, start=1)
    for section, items in itertools.groupby(numbered, key=lambda item: item[1].section):
        shown = [_figure(at, plate, images[plate.name]) for at, plate in items]
        _set_widths(shown)
        found.append((section, shown))
    return found


def _set_widths(shown: list[dict[str, Any]]) -> None:
    """Let a half-width figure without a neighbour have its caption at its side."""
    left = False
    for this, following in zip(shown, [*shown[1:], None], strict=True):
        if this["width_class"] == "wide" or left:
            left = False
        elif following is None or following["width_class"] == "wide":
            this["width_class"] = "alone"
        else:
            left = True


def _figure(at: int, plate: Plate, png: bytes) -> dict[str, Any]:
    # width and height stand at fixed places in the header of a PNG
    width, height = struct.unpack(">II", png[16:24])
    return {
        "name": plate.name,
        "number": at,
        "width_class": "wide" if plate.wide else "half",
        "data": base64.b64encode(png).decode(),
        "width": width,
        "height": height,
        **plate.text._asdict(),
        "end": "" if plate.text.title.endswith("?") else ".",
    }
