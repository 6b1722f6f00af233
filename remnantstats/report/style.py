"""The look of the figures, and how they are saved."""

from __future__ import annotations

import functools
import io
import warnings
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

import matplotlib
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.backends.backend_pdf import FigureCanvasPdf
from matplotlib.figure import Figure

from ..files import write_bytes

__all__ = ["COLOURS", "HALF", "WIDE", "label_text", "legend", "new_figure", "on_axes", "save_figure", "styled"]

#: colours that stay apart in common colour blindness and in grey; shape and line style always differ as well
COLOURS = {
    "ink": "#1b2733",
    "found": "#0b5c8a",
    "limit": "#c2691d",
    "band": "#9fc3d8",
    "wide": "#d3e4ee",
    "prior": "#7a6a58",
    "mark": "#8a1c4a",
    "quiet": "#6a727a",
    "hatch": "#b9b2a6",
}
#: paper widths: half a page's, and a whole page's, in inches
HALF, WIDE = 85 / 25.4, 176 / 25.4
_DPI = 200

_LOOK: dict[Any, Any] = {
    # both families come with matplotlib: the same figure on every machine; the second lends the signs the first lacks
    "font.family": ["STIXGeneral", "DejaVu Sans"],
    "mathtext.fontset": "stix",
    "font.size": 9.5,
    "axes.labelsize": 9.5,
    "axes.titlesize": 9.5,
    "axes.titlelocation": "left",
    "legend.fontsize": 9,
    "xtick.labelsize": 9,
    "ytick.labelsize": 9,
    "axes.linewidth": 0.6,
    "axes.edgecolor": COLOURS["ink"],
    "axes.labelcolor": COLOURS["ink"],
    "text.color": COLOURS["ink"],
    "xtick.color": COLOURS["ink"],
    "ytick.color": COLOURS["ink"],
    "xtick.direction": "in",
    "ytick.direction": "in",
    "xtick.top": True,
    "ytick.right": True,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.major.size": 3,
    "ytick.major.size": 3,
    "xtick.minor.size": 1.5,
    "ytick.minor.size": 1.5,
    "legend.frameon": False,
    "legend.handlelength": 2.0,
    "legend.borderaxespad": 0.2,
    "legend.labelspacing": 0.3,
    "lines.linewidth": 1.3,
    "lines.markersize": 4.0,
    "hatch.linewidth": 0.4,
    "hatch.color": COLOURS["hatch"],
    "figure.facecolor": "white",
    "axes.facecolor": "white",
    "savefig.facecolor": "white",
    # outlines as drawn: subsetting whole fonts would take as long again as all the rest
    "pdf.fonttype": 3,
    "path.simplify": True,
    "axes.unicode_minus": True,
}

Plot = TypeVar("Plot", bound=Callable[..., Any])


def styled(function: Plot) -> Plot:
    """Run a function under the report's style, leaving the caller's own untouched."""

    @functools.wraps(function)
    def inner(*args: Any, **kwargs: Any) -> Any:
        with matplotlib.rc_context(_LOOK):
            return function(*args, **kwargs)

    return inner  # type: ignore[return-value]


@styled
def new_figure(width: float = HALF, height: float = 2.5) -> Figure:
    """Make an empty figure, sizes in inches, that keeps no global state."""
    figure = Figure(figsize=(width, height), layout="constrained")
    FigureCanvasAgg(figure)
    return figure


def on_axes(ax: Axes | None, width: float = HALF, height: float = 2.5) -> Axes:
    """Give the axes to draw on: those handed over, or new ones."""
    return new_figure(width, height).add_subplot() if ax is None else ax


def label_text(text: str, longest: int = 28) -> str:
    """Make a user's own word safe for a figure: no formulas, not too long."""
    short = text if len(text) <= longest else text[: longest - 1] + "…"
    return short.replace("$", r"\$")


def legend(ax: Axes, columns: int = 1) -> None:
    """Place the legend above the axes, where it can hide nothing."""
    made = ax.legend(loc="lower left", bbox_to_anchor=(0.0, 1.0), ncols=columns, columnspacing=1.2, handletextpad=0.5)
    for text in made.get_texts():
        text.set_linespacing(0.95)


@styled
def save_figure(figure: Figure, stem: Path) -> bytes:
    """Write a figure as PNG and as PDF; the same figure gives the same bytes.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
    stem : pathlib.Path
        The files without their endings.

    Returns
    -------
    bytes
        The PNG.
    """
    with warnings.catch_warnings():
        # a star's or a survey's name may hold signs that no font has; the page shows them
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        # straight to the canvas: Figure.savefig draws everything once more, to lay it out
        figure.set_dpi(_DPI)
        png, pdf = io.BytesIO(), io.BytesIO()
        canvas: Any = FigureCanvasAgg(figure)
        canvas.print_png(png, metadata={"Software": None})
        figure.set_layout_engine("none")
        canvas = FigureCanvasPdf(figure)
        canvas.print_pdf(pdf, metadata={"CreationDate": None, "Creator": "remnantstats", "Producer": None})
    write_bytes(stem.with_suffix(".png"), png.getvalue())
    write_bytes(stem.with_suffix(".pdf"), pdf.getvalue())
    return png.getvalue()
