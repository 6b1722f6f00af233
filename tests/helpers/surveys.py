"""Sample tables with known content, and the problems posed on them."""

from __future__ import annotations

import numpy as np
import pandas as pd
import scipy.special

from remnantstats.catalog import ChannelRules, RowRules, read_sample
from remnantstats.population import load_model, pose
from remnantstats.sensitivity import CHANNELS

#: a limit that nothing escapes
FAR_BELOW = {"pollution": -20.0, "excess": -30.0}
TYPICAL = {"pollution": (7.8, 0.6), "excess": (-2.5, 0.4)}


def counted_survey(detected, size, channel="pollution"):
    """`detected` of `size` stars, every limit far below the population."""
    mean, sd = TYPICAL[channel]
    value = CHANNELS[channel].value
    seen = np.arange(size) < detected
    values = np.random.default_rng(size).normal(mean, sd, size)
    return pd.DataFrame(
        {
            "star": [f"s{i}" for i in range(size)],
            "survey": "a",
            "atmosphere": "H",
            channel: np.where(seen, "detected", "limit"),
            value: np.where(seen, values, np.nan),
            f"{value}_err": np.where(seen, 0.15, np.nan),
            f"{value}_limit": FAR_BELOW[channel],
        }
    )


def only(channel):
    """Rules of a study with one channel."""
    return RowRules(**{name: ChannelRules() if name == channel else None for name in CHANNELS})


def drawn_survey(rng, fraction, mean, sd, limit, settings, calibration=0.0, noise=None):
    """A pollution survey drawn from METHODS §2 by hand, not by the package's simulator."""
    size, width = len(limit), settings.width
    noise = width if noise is None else noise
    host = rng.random(size) < fraction
    truth = rng.normal(mean, sd, size)
    seen = host & (rng.random(size) < settings.ceiling)
    if settings.threshold_on == "measured":
        noise = width
        decided = truth + noise * rng.normal(size=size)
        genuine, value = seen & (decided > limit), decided + calibration * rng.normal(size=size)
    else:
        genuine = seen & (rng.random(size) < scipy.special.ndtr((truth - limit) / width))
        value = truth + np.hypot(noise, calibration) * rng.normal(size=size)
    spurious = ~genuine & (rng.random(size) < settings.false_positive)
    above = limit + settings.spurious_scale * np.abs(rng.normal(size=size))
    listed = genuine | spurious
    return pd.DataFrame(
        {
            "star": [f"s{i}" for i in range(size)],
            "survey": "a",
            "atmosphere": "H",
            "pollution": np.where(listed, "detected", "limit"),
            "log_accretion": np.where(genuine, value, np.where(spurious, above, np.nan)),
            "log_accretion_err": np.where(listed, noise, np.nan),
            "log_accretion_calibration_err": np.where(listed, calibration, 0.0),
            "log_accretion_limit": limit,
        }
    )


def two_depths(rng, size, deep=6.8, shallow=8.3):
    """Limits of two depths, half of the stars each."""
    return np.where(rng.random(size) < 0.5, deep, shallow) + 0.1 * rng.normal(size=size)


def posed(table, settings, model="steady", **rules):
    """A model posed on a pollution table."""
    rule = ChannelRules(settings.threshold_on, spurious=settings.false_positive > 0, width=settings.width)
    sample = read_sample(table, rules=RowRules(pollution=rule, **rules))
    return pose(load_model(model) if isinstance(model, str) else model, sample, {"pollution": settings})
