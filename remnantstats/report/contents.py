"""What a report is made from, and every assumption behind it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import NamedTuple

from ..inference import Fit
from ..inference.compare import Comparison
from ..mission import MissionSize
from ..occurrence import OccurrencePrior
from ..occurrence.settings import NO_BASIS, Assumption, TransferSettings
from ..population.distributions import describe
from ..population.quantities import Thresholds
from ..sensitivity import ChannelSettings
from .glossary import channel_noun

__all__ = ["AssumptionRow", "ReportContents", "collect_assumptions"]

#: shown for a setting that the study left as the package has it
DEFAULT = "the package's default"


class AssumptionRow(NamedTuple):
    """One assumption, as the report shows it.

    Parameters
    ----------
    enters : str
        Where in the chain it acts.
    name : str
        Its key in the study or model file.
    description : str
        What is assumed.
    basis : str
        Source or reason.
    """

    enters: str
    name: str
    description: str
    basis: str = ""


@dataclass(frozen=True)
class ReportContents:
    """Everything that a report shows.

    Parameters
    ----------
    title : str
        The study's own.
    fit : Fit
        The leading fit.
    prior : OccurrencePrior or None
        None where the study stops at the debris fraction.
    plan : MissionSize or None
        None where no mission is sized.
    thresholds : Thresholds
        Values above which the fraction is reported.
    channels : mapping of str to ChannelSettings
        How each channel in use decides.
    provenance : mapping of str to str
        Inputs with their hashes, versions, seed: shown as given, in order.
    marks : tuple of str
        What every output must carry; those of the fit, the prior and the plan are added.
    transfer : TransferSettings or None
        For the prior on the rocky-system fraction, drawn beside the result.
    assumptions : tuple of AssumptionRow
        Further assumptions, shown after those found in fit, channels, prior and plan.
    references : tuple of str
        Further sources, shown after those of the methods.
    comparison : Comparison or None
        Where the study names several models.
    fits : tuple of Fit
        Those compared, the leading fit first.
    stacked : bool
        Whether the fraction carried to planets is that of the stacked models.
    """

    title: str
    fit: Fit
    prior: OccurrencePrior | None = None
    plan: MissionSize | None = None
    thresholds: Thresholds = field(default_factory=Thresholds)
    channels: Mapping[str, ChannelSettings] = field(default_factory=dict)
    provenance: Mapping[str, str] = field(default_factory=dict)
    marks: tuple[str, ...] = ()
    transfer: TransferSettings | None = None
    assumptions: tuple[AssumptionRow, ...] = ()
    references: tuple[str, ...] = ()
    comparison: Comparison | None = None
    fits: tuple[Fit, ...] = ()
    stacked: bool = False

    @property
    def all_marks(self) -> tuple[str, ...]:
        """Every mark, each once."""
        found = [*self.marks, *self.fit.marks]
        found += self.prior.marks if self.prior is not None else ()
        found += self.plan.marks if self.plan is not None else ()
        return tuple(dict.fromkeys(found))


def collect_assumptions(contents: ReportContents) -> list[AssumptionRow]:
    """List every assumption in the order of the chain, each with its basis or the word that it has none.

    Parameters
    ----------
    contents : ReportContents

    Returns
    -------
    list of AssumptionRow
    """
    rows = []
    for channel, settings in contents.channels.items():
        rows += _selection(channel, settings)
    rows += _population(contents.fit)
    transfer = list(contents.prior.assumptions) if contents.prior is not None else []
    rows += [_carried("from remnants to planets", item) for item in transfer]
    if contents.plan is not None:
        rows += [_carried("mission", item) for item in contents.plan.assumptions if item not in transfer]
    rows += contents.assumptions
    return [row._replace(basis=row.basis.strip() or NO_BASIS) for row in rows]


def _carried(enters: str, item: Assumption) -> AssumptionRow:
    return AssumptionRow(enters, item.name, item.description, item.basis)


def _selection(channel: str, settings: ChannelSettings) -> list[AssumptionRow]:
    midpoint = settings.limit_efficiency is None
    efficiency = settings.ceiling / 2 if settings.limit_efficiency is None else settings.limit_efficiency
    kind = (
        "a star is detected when its noisy estimate crosses the limit"
        if settings.threshold_on == "measured"
        else "the chance of detection depends on the true value"
    )
    of_width = "noise at the limit" if settings.threshold_on == "measured" else "width of the efficiency curve"
    texts = {
        "threshold_on": f"{channel_noun(channel)}: {kind}",
        "limit_efficiency": f"a star whose true value equals its limit is detected with probability {efficiency:g}"
        + (", half the ceiling" if midpoint else ""),
        "width": f"{of_width} {settings.width:g} dex, where the table gives none of the star's own",
        "ceiling": f"best efficiency ever reached {settings.ceiling:g}",
        "false_positive": f"a star not genuinely detected is listed as detected with probability "
        f"{settings.false_positive:g}, where the table gives none of the star's own",
    }
    if settings.false_positive > 0:
        scale = f"{settings.spurious_scale:g} dex"
        texts["spurious_scale"] = f"spurious detections lie above the limit by a half-normal of {scale}"
    given = settings.model_fields_set
    return [
        AssumptionRow("detection", f"{channel}.{key}", text, NO_BASIS if key in given else DEFAULT)
        for key, text in texts.items()
    ]


def _population(fit: Fit) -> list[AssumptionRow]:
    file = fit.model.file
    words = {"normal": "normal in the logarithm", "student-t": "Student-t in the logarithm"}
    shape = words.get(file.family, file.family)
    rows = [
        AssumptionRow(
            "population",
            f"model {fit.model.name}",
            " ".join(f"{file.title}; values of the hosts: {shape}. {file.description}".split()),
            "the study's choice; below the limits the data do not test the shape",
        )
    ]
    rows += [
        AssumptionRow("population", item.name, f"prior: {describe(item.prior)}", item.prior.basis)
        for item in fit.problem.parameters
        if item.size == 1
    ]
    return rows
