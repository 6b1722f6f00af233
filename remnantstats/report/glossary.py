"""What each reported quantity is, in plain words."""

from __future__ import annotations

from typing import NamedTuple

from ..inference import Fit
from ..population import parameters as names
from .numbers import plain
from .style import label_text

__all__ = [
    "AXES",
    "TERMS",
    "Term",
    "channel_noun",
    "define",
    "parameter_quantity",
    "short_label",
    "threshold_text",
]


class Term(NamedTuple):
    """A quantity explained.

    Parameters
    ----------
    label : str
        Short name for a reader.
    unit : str
        Unit; "share" for a pure fraction.
    meaning : str
        One sentence.
    """

    label: str
    unit: str
    meaning: str


#: axis label of each channel's value
AXES = {
    "pollution": "Accretion rate, $\\log_{10}$ (g s$^{-1}$)",
    "excess": "Dust luminosity, $\\log_{10}$ ($L_{\\rm dust}/L_{\\rm star}$)",
}
_NOUN = {"pollution": "accretion rate", "excess": "dust luminosity"}

_IN_FIGURES = {
    "share": "",
    "log₁₀ g/s": "$\\log_{10}$ g s$^{-1}$",
    "log₁₀ L_dust/L_star": "$\\log_{10}\\,L_{\\rm dust}/L_{\\rm star}$",
}

#: quantities without a label in brackets
TERMS = {
    "debris_fraction": Term(
        "Debris fraction", "share", "Share of white dwarfs that host rocky debris now, seen or not"
    ),
    "dusty_fraction": Term("Dusty fraction", "share", "Share of white dwarfs with warm dust now, seen or not"),
    "mean_log_accretion": Term(
        "Mean accretion rate", "log₁₀ g/s", "Mean of the log rates of all hosts, those below the limits included"
    ),
    "sd_log_accretion": Term("Spread of accretion rates", "dex", "Standard deviation of the hosts' log rates"),
    "mean_log_dust": Term(
        "Mean dust luminosity",
        "log₁₀ L_dust/L_star",
        "Mean of the log dust luminosities of all dusty systems, those below the limits included",
    ),
    "sd_log_dust": Term(
        "Spread of dust luminosities", "dex", "Standard deviation of the log dust luminosities, inclination included"
    ),
    "dust_share": Term("Share with warm dust", "share", "Share of debris hosts that also have warm dust"),
    "rate_dust_correlation": Term(
        "Rate–dust correlation", "", "Correlation of log rate and log dust luminosity among hosts with both"
    ),
    "group_sd": Term("Spread between groups", "logit", "Standard deviation of the groups' log-odds of debris"),
    "extrapolated_share": Term(
        "Extrapolated share",
        "share",
        "Share of the hosts below the depth that half the blind stars reached: known from the assumed shape alone",
    ),
    "tail_weight": Term("Tail weight", "", "Degrees of freedom of the Student-t distribution of log rates"),
    "tail_index": Term("Tail index", "per dex", "Steepness β of the power law in rate, density ∝ 10^(−βx)"),
    "rocky_system_fraction": Term(
        "Rocky-system fraction", "share", "Share of the progenitor stars that had a rocky planetary system"
    ),
    "retention": Term("Retention", "share", "Share of rocky systems that outlast the giant phases"),
    "delivery": Term("Delivery", "share", "Share of retained systems that feed their star now"),
    "earthlike": Term("Planet share", "share", "Share of rocky systems with the planet sought"),
    "earthlike_fraction": Term("Planet fraction", "share", "Share of stars with the planet sought"),
}


def channel_noun(channel: str) -> str:
    """Name what a channel measures: "accretion rate" or "dust luminosity"."""
    return _NOUN[channel]


def threshold_text(channel: str, value: float) -> str:
    """Write a threshold: ``10^7 g/s``, with the exponent raised."""
    raised = plain(value).translate(str.maketrans("0123456789−.", "⁰¹²³⁴⁵⁶⁷⁸⁹⁻·"))
    return f"10{raised} g/s" if channel == "pollution" else f"10{raised} L_star"


def define(fit: Fit, quantity: str) -> Term:
    """Explain a quantity as named in the outputs.

    Parameters
    ----------
    fit : Fit
    quantity : str
        A name of the summary or of the occurrence prior.

    Returns
    -------
    Term
    """
    if quantity in TERMS:
        term = TERMS[quantity]
        moves = quantity == "debris_fraction" and fit.problem.reference
        return term._replace(meaning=f"{term.meaning}, {_reference(fit)}") if moves else term
    stem, _, label = quantity.partition("[")
    label = label.removesuffix("]")
    return _labelled(fit, stem, label)


def _reference(fit: Fit) -> str:
    parts = [f"{name} = {value:.3g}".replace("-", "−") for name, value in fit.problem.reference.items()]
    return "at the mean of the blind stars (" + ", ".join(parts) + ")"


def _labelled(fit: Fit, stem: str, label: str) -> Term:
    if stem.endswith("_above"):
        channel = "pollution" if stem.startswith("debris") else "excess"
        at = threshold_text(channel, float(label))
        return Term(f"Fraction above {at}", "share", f"Share of all white dwarfs whose {_NOUN[channel]} exceeds {at}")
    first = fit.problem.channels[0]
    words = label.removeprefix("log_").replace("_", " ")
    per = "dex" if label.startswith("log_") else "unit"
    if stem == "fraction_slope":
        meaning = f"Change of the log-odds of debris per {per} of {words}"
        return Term(f"Fraction slope, {words}", f"logit per {per}", meaning)
    if stem == "rate_slope":
        meaning = f"Change of the mean log {_NOUN[first]} per {per} of {words}"
        return Term(f"Rate slope, {words}", f"dex per {per}", meaning)
    if stem == "fraction_offset":
        return Term(f"Fraction offset, {label}", "logit", f"Log-odds of debris of {label} stars less those of H stars")
    if stem == "rate_offset":
        return Term(f"Rate offset, {label}", "dex", f"Mean log {_NOUN[first]} of {label} stars less that of H stars")
    if stem == "group_fraction":
        who = "a group not yet seen" if label == "new group" else f"the group {label}"
        return Term(f"Fraction, {label}", "share", f"The same fraction in {who}")
    if stem in ("covariate_mean", "covariate_sd"):
        what = "Mean" if stem == "covariate_mean" else "Spread"
        return Term(f"{what} of {words}", "", f"{what} of the true {label} over the blind stars, less the reference")
    return Term(f"{stem} {label}".strip(), "", "A parameter of the population model")


def short_label(fit: Fit, quantity: str, between: str = " ") -> str:
    """Label for an axis: name and unit, in the figures' own notation."""
    term = define(fit, quantity)
    unit = _IN_FIGURES.get(term.unit, term.unit)
    return label_text(term.label, 40) + (f"{between}({unit})" if unit else "")


def parameter_quantity(fit: Fit, parameter: str) -> str:
    """Name under which a parameter is reported."""
    return fit.fraction if parameter == names.DEBRIS_FRACTION else parameter
