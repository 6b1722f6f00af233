"""Counts of a sample, and the depth of its limits."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

from .columns import CHANNELS, OUTCOMES
from .sample import Sample, require_channel

__all__ = ["census", "depth", "error_notes"]

_QUANTILES = {"q05": 0.05, "q16": 0.16, "q50": 0.50, "q84": 0.84, "q95": 0.95}
ALL_STARS = "(all)"


def census(sample: Sample) -> pd.DataFrame:
    """Count stars by survey, atmosphere, inclusion and outcome.

    Parameters
    ----------
    sample : Sample
        The sample.

    Returns
    -------
    pandas.DataFrame
        A row a combination that occurs: ``survey``, ``atmosphere``, ``inclusion``, ``stars``, and for each channel in
        use ``CHANNEL_detected``, ``CHANNEL_limit`` and ``CHANNEL_unobserved``.
    """
    keys = ["survey", "atmosphere", "inclusion"]
    counted = sample.table[keys].copy()
    counted["stars"] = 1
    for channel in sample.rules.channels:
        for outcome in OUTCOMES:
            counted[f"{channel}_{outcome}"] = (sample.table[channel] == outcome).astype(int)
    return counted.groupby(keys, sort=True).sum().reset_index()


def depth(sample: Sample, channel: str = "pollution", show: Sequence[float] = (7.0, 8.0)) -> pd.DataFrame:
    """Summarise how deep the limits of a channel reach.

    Parameters
    ----------
    sample : Sample
        The sample.
    channel : {"pollution", "excess"}, optional
        The channel.
    show : sequence of float, optional
        Log rates (log10 g/s) or log dust luminosities at which to count the stars that could have shown them.

    Returns
    -------
    pandas.DataFrame
        A row for all stars, named ``(all)``, then one a survey: ``survey``, ``observed``, ``without_limit``, the
        5, 16, 50, 84 and 95 % points of the limits in ``q05`` to ``q95``, and for each value of `show` the number of
        stars whose limit is at or below it, ``could_show_7`` and so on.

    Raises
    ------
    InputError
        Where there is no such channel.
    """
    require_channel(channel)
    seen = sample.table[sample.observed(channel)]
    groups = [(ALL_STARS, seen), *seen.groupby("survey", sort=True)]
    records = [{"survey": name} | _depth_of(group[CHANNELS[channel].limit], show) for name, group in groups]
    return pd.DataFrame(records)


def _depth_of(limits: pd.Series, show: Sequence[float]) -> dict[str, float]:
    """Depth of one group of observed stars."""
    known = limits.dropna().to_numpy()
    facts: dict[str, float] = {"observed": len(limits), "without_limit": len(limits) - len(known)}
    facts |= {name: float(np.quantile(known, at)) if len(known) else np.nan for name, at in _QUANTILES.items()}
    return facts | {f"could_show_{value:g}": int((known <= value).sum()) for value in show}


def error_notes(sample: Sample) -> list[str]:
    """Say which detections deserve a second look.

    Parameters
    ----------
    sample : Sample
        The sample.

    Returns
    -------
    list of str
        For each channel in use: detected stars whose error exceeds twice the width of their limit (dex), and detected
        stars without a limit.
    """
    notes = []
    for channel, rules in sample.rules.channels.items():
        names = CHANNELS[channel]
        found = sample.table[sample.table[channel] == "detected"]
        width = found[names.width].fillna(rules.width)
        wide = found.loc[found[names.error] > 2 * width, "star"].tolist()
        if wide:
            notes.append(
                f"{names.error} exceeds twice the width of the limit for {_listed(wide)}: "
                f"move the part that took no part in the decision to {names.calibration}"
            )
        bare = found.loc[found[names.limit].isna(), "star"].tolist()
        if bare:
            notes.append(
                f"no {names.limit} for {_listed(bare)}, all detected: completeness, depth bins and predictive checks "
                f"impute it"
            )
    return notes


def _listed(stars: list[str], shown: int = 5) -> str:
    """Name a few stars and count the rest."""
    if len(stars) == 1:
        return f"1 star ({stars[0]})"
    rest = f", and {len(stars) - shown} more" if len(stars) > shown else ""
    return f"{len(stars)} stars ({', '.join(stars[:shown])}{rest})"
