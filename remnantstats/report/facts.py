"""Numbers that sentences, tables and figures share, each computed here once."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import scipy.special
import scipy.stats

from ..inference import Fit
from ..inference.companion import fraction_above_steps
from ..inference.design import survey_design
from ..inference.predictive import replicate
from ..population import parameters as names
from ..population.quantities import log_share_above, median_limit
from ..population.rows import DETECTED, DOUBTFUL, LIMIT
from ..sensitivity import CHANNELS

__all__ = [
    "RawFraction",
    "blind_fraction",
    "channel_fraction",
    "companion",
    "density",
    "depth_bins",
    "fraction_above",
    "median_depth",
    "population",
    "prior_detected",
    "raw_fraction",
    "reference_noun",
    "smallest_seen",
]

FloatArray = npt.NDArray[np.float64]
#: central interval whose ends a summary calls q16 and q84
CENTRAL = 0.6827
_CURVE_DRAWS = 1000
_BINS = 5
_PRIOR_DRAWS = 200
#: stars that replicated surveys of the prior hold at most: enough for a share
_PRIOR_STARS = 2000


@dataclass(frozen=True)
class RawFraction:
    """Detections counted, nothing corrected.

    Attributes
    ----------
    found, observed : int
        Blind stars detected, and observed.
    low, high : float
        Ends of the 68 % Wilson interval; NaN where none was observed.
    """

    found: int
    observed: int
    low: float
    high: float

    @property
    def value(self) -> float:
        """The share detected."""
        return self.found / self.observed if self.observed else float("nan")


def raw_fraction(found: int, observed: int) -> RawFraction:
    """Count as a fraction, with the 68 % interval of Wilson (1927, J. Am. Stat. Assoc. 22, 209)."""
    if not observed:
        return RawFraction(0, 0, float("nan"), float("nan"))
    interval = scipy.stats.binomtest(found, observed).proportion_ci(CENTRAL, method="wilson")
    return RawFraction(found, observed, float(interval.low), float(interval.high))


def blind_observed(fit: Fit, channel: str) -> npt.NDArray[np.bool_]:
    """Stars that a channel observed and that were not chosen for known debris."""
    stars = fit.stars
    return np.asarray((stars["inclusion"] == "blind") & (stars[channel] != "unobserved"))


def reference_stars(fit: Fit, channel: str) -> npt.NDArray[np.bool_]:
    """Blind observed stars to which the fraction refers: helium stars that have offsets of their own are left out."""
    use = blind_observed(fit, channel)
    if fit.problem.has(names.fraction_offset()):
        use = use & np.asarray(fit.stars["atmosphere"] != "He")
    return use


def reference_noun(fit: Fit) -> str:
    """What those stars are called: "blind star", or "blind hydrogen star" where helium stars have offsets."""
    return "blind hydrogen star" if fit.problem.has(names.fraction_offset()) else "blind star"


def sample_fraction(fit: Fit, channel: str, where: npt.NDArray[np.bool_] | None = None) -> RawFraction:
    """Raw fraction over the reference stars, or over the blind observed stars in `where`."""
    use = reference_stars(fit, channel) if where is None else blind_observed(fit, channel) & where
    return raw_fraction(int((fit.stars[channel][use] == "detected").sum()), int(use.sum()))


def blind_fraction(fit: Fit, channel: str) -> RawFraction:
    """Raw fraction over all blind observed stars."""
    return sample_fraction(fit, channel, np.ones(len(fit.stars), dtype=bool))


def channel_fraction(fit: Fit, channel: str) -> FloatArray:
    """Posterior draws of the fraction that a channel could show at any depth; shape (S,)."""
    fraction = fit.draws(fit.fraction)
    if channel == "excess" and fit.problem.has(names.DUST_SHARE):
        fraction = fraction * fit.draws(names.DUST_SHARE)
    return fraction


def median_depth(fit: Fit, channel: str) -> float:
    """Limit that half the blind observed stars reached (log10); below it a result is extrapolated."""
    return median_limit(replace(fit.problem, channels=(channel,)))


def population(fit: Fit, most: int = _CURVE_DRAWS) -> dict[str, Any]:
    """Posterior draws of the population's parameters, evenly thinned to at most `most`, as the model reads them."""
    theta: dict[str, Any] = {}
    for item in fit.problem.parameters:
        if item.size > 1:
            continue
        draws = fit.draws(fit.fraction if item.name == names.DEBRIS_FRACTION else item.name)
        draws = draws[:: max(1, -(-len(draws) // most))]
        theta[item.name] = draws
        if item.support == "unit":
            theta[names.logit_of(item.name)] = scipy.special.logit(np.clip(draws, 1e-15, 1 - 1e-15))
    return theta


def fraction_above(fit: Fit, channel: str, values: npt.ArrayLike) -> FloatArray:
    """Posterior draws of the fraction of systems above each value; shape (S, len(values)).

    Parameters
    ----------
    fit : Fit
    channel : {"pollution", "excess"}
    values : array_like
        log10 of the channel's quantity.
    """
    theta = population(fit)
    fraction = theta[names.DEBRIS_FRACTION]
    if channel == "excess" and fit.problem.has(names.DUST_SHARE):
        fraction = fraction * theta[names.DUST_SHARE]
    grid = np.atleast_1d(np.asarray(values, dtype=float))
    share = np.stack([np.exp(log_share_above(fit.problem, theta, channel, float(value))) for value in grid], axis=-1)
    return np.asarray(fraction[:, None] * np.broadcast_to(share, (len(fraction), len(grid))))


def depth_bins(fit: Fit, channel: str) -> pd.DataFrame:
    """Raw and expected detections by depth.

    Parameters
    ----------
    fit : Fit
    channel : {"pollution", "excess"}

    Returns
    -------
    pandas.DataFrame
        A row a bin of reference stars, deepest first: `low`, `middle`, `high` (limits, log10), `stars`, `found`,
        `raw`, `raw_low`, `raw_high` (68 % Wilson), `expected`, `expected_low`, `expected_high` (posterior predictive
        mean, 5 and 95 %: the fraction that the fitted model expects to be listed as detected).
    """
    limit = fit.stars[f"{CHANNELS[channel].value}_limit_50"].to_numpy(dtype=float)
    use = reference_stars(fit, channel) & np.isfinite(limit)
    if not use.any():
        return pd.DataFrame(columns=["low", "middle", "high", "stars", "found", "raw", "expected"])
    edges = np.unique(np.quantile(limit[use], np.linspace(0, 1, _BINS + 1)))
    place = np.clip(np.searchsorted(edges, limit, side="right") - 1, 0, max(len(edges) - 2, 0))
    replicated = np.asarray(fit.posterior["posterior_predictive"][f"{channel}_detected"])
    replicated = replicated.reshape(-1, replicated.shape[-1])
    rows = []
    for index in range(max(len(edges) - 1, 1)):
        inside = use & (place == index)
        if inside.any():
            rows.append(_depth_row(fit, channel, inside, limit[inside], replicated[:, inside].mean(axis=1)))
    return pd.DataFrame(rows)


def _depth_row(
    fit: Fit, channel: str, inside: npt.NDArray[np.bool_], limit: FloatArray, expected: FloatArray
) -> dict[str, float]:
    raw = sample_fraction(fit, channel, inside)
    low, high = np.quantile(expected, [0.05, 0.95])
    return {
        "low": float(limit.min()),
        "middle": float(np.median(limit)),
        "high": float(limit.max()),
        "stars": raw.observed,
        "found": raw.found,
        "raw": raw.value,
        "raw_low": raw.low,
        "raw_high": raw.high,
        "expected": float(expected.mean()),
        "expected_low": float(low),
        "expected_high": float(high),
    }


def companion(fit: Fit, channel: str) -> pd.DataFrame:
    """Non-parametric fraction above each value, from the deepest limit upwards, over the reference stars.

    Parameters
    ----------
    fit : Fit
    channel : {"pollution", "excess"}

    Returns
    -------
    pandas.DataFrame
        `value` (log10), `fraction`, `low`, `high` (95 % pointwise); each fraction holds up to the next value. Empty
        where nothing was detected.
    """
    rows = fit.problem.rows.take(np.flatnonzero(reference_stars(fit, channel)))
    own = rows.channels[channel]
    table = fraction_above_steps(replace(fit.problem, rows=rows), channel)
    undetected = own.limit[(own.outcome == LIMIT) & np.isfinite(own.limit)]
    if not len(table) or not undetected.size:
        return table
    return table[table["value"] >= undetected.min() - 1e-9].reset_index(drop=True)


def prior_detected(fit: Fit) -> dict[str, FloatArray]:
    """Share of the blind observed stars that surveys drawn from the prior list as detected, by channel; shape (200,).

    Of a large sample, stars evenly spread over the table stand for all.
    """
    problem = fit.problem
    rng = np.random.default_rng([fit.seed, 17])
    prior = [
        item.unconstrain(item.sample_prior(rng, _PRIOR_DRAWS * item.size)).reshape(_PRIOR_DRAWS, item.size)
        for item in problem.free
    ]
    design = survey_design(problem, fit.seed)
    blind = np.flatnonzero(design.rows.blind)
    chosen = blind[:: max(1, -(-len(blind) // _PRIOR_STARS))]
    if not prior or not chosen.size:
        return {}
    part = replace(design, rows=design.rows.take(chosen))
    theta = problem.theta(np.concatenate(prior, axis=1))
    found = {}
    for name, item in replicate(rng, problem, part, theta).items():
        detected = np.isin(item.outcome, (DETECTED, DOUBTFUL)).sum(axis=1)
        observed = (detected + (item.outcome == LIMIT).sum(axis=1)).astype(float)
        if observed.all():
            found[name] = detected / observed
    return found


def smallest_seen(fit: Fit, channel: str, share: float = 0.5) -> float:
    """Smallest tabulated value at which the sample's mean detection efficiency reaches `share`; NaN if never."""
    table = fit.completeness
    rows = table[(table["quantity"] == CHANNELS[channel].value) & (table["efficiency"] >= share)]
    return float(rows["value"].min()) if len(rows) else float("nan")


def efficiency_at(fit: Fit, channel: str, value: float) -> float:
    """Sample-mean detection efficiency at a value."""
    table = fit.completeness[fit.completeness["quantity"] == CHANNELS[channel].value]
    return float(np.interp(value, table["value"], table["efficiency"]))


def density(draws: FloatArray) -> tuple[FloatArray, FloatArray] | None:
    """Smooth density of draws within their own range; None where they do not vary.

    Returns
    -------
    tuple of ndarray
        Grid and density.
    """
    # a kept routine, which corrects for the ends of the range; imported here for start-up time alone
    from arviz_stats.base import array_stats

    finite = draws[np.isfinite(draws)]
    if finite.size < 10 or np.ptp(finite) == 0:
        return None
    grid, values, _ = array_stats.kde(finite, grid_len=256)
    return np.asarray(grid), np.asarray(values)
