"""What may be listed has total probability one."""

from __future__ import annotations

from dataclasses import replace
from itertools import product
from typing import Any

import numpy as np
import pytest

from remnantstats.population.families import FAMILIES
from remnantstats.population.gaussian import HostState
from remnantstats.population.likelihood import StarState, log_likelihood_terms
from remnantstats.population.ops import NUMPY
from remnantstats.population.rows import DETECTED, DOUBTFUL, LIMIT, blocks
from remnantstats.sensitivity import ChannelSettings

KINDS = ["measured", "true"]


def state_of(rng: np.random.Generator, channels: int, d: float | None = None) -> StarState:
    """Random parameters; d = 1 is taken as fixed there."""
    f = rng.uniform(0.1, 0.9)
    mean = dict(zip(("pollution", "excess"), rng.normal(0, 0.4, 2), strict=True))
    sd = dict(zip(("pollution", "excess"), rng.uniform(0.4, 1.0, 2), strict=True))
    if channels == 1:
        host = HostState({"pollution": mean["pollution"]}, {"pollution": sd["pollution"]})
        return StarState(np.log(f), np.log1p(-f), host)
    d = rng.uniform(0.2, 0.9) if d is None else d
    share = (None, None) if d == 1 else (np.log(d), np.log1p(-d))
    return StarState(np.log(f), np.log1p(-f), HostState(mean, sd, rng.uniform(-0.9, 0.9)), *share)


def values_of(
    settings: ChannelSettings, e: float, limit: float, reach: float = 9.0, order: int = 16
) -> tuple[np.ndarray, np.ndarray]:
    """Nodes and weights over the values that may be tabulated, on panels that part at the limit."""
    low = limit if settings.threshold_on == "measured" and e == 0 else -reach
    edges = np.unique([*np.linspace(low, limit, 9), *np.linspace(limit, limit + reach, 13)])
    nodes, weights = np.polynomial.legendre.leggauss(order)
    width = np.diff(edges)[:, None]
    return (edges[:-1, None] + width * (nodes + 1) / 2).ravel(), (width * weights / 2).ravel()


def outcomes_of(kit: Any, settings: ChannelSettings, e: float, limit: float, **coarser: Any) -> tuple[Any, np.ndarray]:
    """One channel's rows for every node of a detection and for a limit, with their weights."""
    value, weight = values_of(settings, e, limit, **coarser)
    n, q = len(value) + 1, settings.false_positive
    rows = kit.channel_rows(
        n, LIMIT, settings, limit=limit, error=settings.width, calibration=e, value=np.append(value, np.nan)
    )
    listed = np.where((q > 0) & (value > limit), DOUBTFUL, DETECTED)
    return replace(rows, outcome=np.append(listed, LIMIT)), np.append(weight, 1.0)


def total(kit: Any, channels: dict[str, tuple[Any, np.ndarray]], state: StarState) -> float:
    """Sum over all outcomes of the likelihood times the weight."""
    names = list(channels)
    index = np.stack(np.meshgrid(*[np.arange(len(channels[name][1])) for name in names], indexing="ij")).reshape(
        len(names), -1
    )
    rows = {name: channels[name][0].take(index[i]) for i, name in enumerate(names)}
    weight = np.prod([channels[name][1][index[i]] for i, name in enumerate(names)], axis=0)
    result = 0.0
    for block in blocks(kit.plain_rows(rows)):
        terms = log_likelihood_terms(NUMPY, FAMILIES["normal"], block, state)
        result += float(np.exp(np.broadcast_to(terms, len(block.rows))) @ weight[block.rows.star])
    return result


@pytest.mark.parametrize(("kind", "ceiling", "q", "e"), list(product(KINDS, [1.0, 0.7], [0.0, 0.1], [0.0, 0.3])))
def test_one_channel(kit: Any, kind: str, ceiling: float, q: float, e: float) -> None:
    rng = np.random.default_rng([1, KINDS.index(kind), int(10 * ceiling), int(10 * q), int(10 * e)])
    for _ in range(3):
        settings = ChannelSettings(threshold_on=kind, ceiling=ceiling, false_positive=q, width=rng.uniform(0.1, 0.3))
        rows = outcomes_of(kit, settings, e, rng.normal(0, 0.6))
        assert total(kit, {"pollution": rows}, state_of(rng, 1)) == pytest.approx(1, abs=1e-9)


CASES = [(*kinds, e, d) for kinds in product(KINDS, KINDS) for e in (0.0, 0.25) for d in (None, 1.0)]


@pytest.mark.parametrize(("first", "second", "e", "d"), CASES)
def test_two_channels(kit: Any, first: str, second: str, e: float, d: float | None) -> None:
    """METHODS §4: the four listed outcomes integrate to one, with spurious ones and ceilings, for random parameters."""
    rng = np.random.default_rng([2, CASES.index((first, second, e, d))])
    channels = {}
    for name, kind in (("pollution", first), ("excess", second)):
        settings = ChannelSettings(
            threshold_on=kind, ceiling=rng.choice([1.0, 0.8]), false_positive=rng.choice([0.0, 0.08]),
            width=rng.uniform(0.15, 0.3),
        )  # fmt: skip
        channels[name] = outcomes_of(kit, settings, e, rng.normal(0, 0.5))
    assert total(kit, channels, state_of(rng, 2, d)) == pytest.approx(1, abs=1e-7)


@pytest.mark.parametrize("selected_by", ["pollution", "excess"])
def test_two_channels_of_selected_stars(kit: Any, selected_by: str) -> None:
    """Given the selection, the outcomes of a known star have total probability one."""
    rng = np.random.default_rng(3)
    other = {"pollution": "excess", "excess": "pollution"}[selected_by]
    settings = {
        selected_by: ChannelSettings(threshold_on="true", ceiling=0.8, width=0.2),
        other: ChannelSettings(ceiling=0.9, false_positive=0.1, width=0.2),
    }
    channels = {
        name: outcomes_of(kit, settings[name], 0.0, 0.2, reach=5.0, order=4) for name in ("pollution", "excess")
    }
    channels[selected_by][0].selection_limit[:] = 0.4
    state = state_of(rng, 2)
    names = list(channels)
    index = np.stack(np.meshgrid(*[np.arange(len(channels[n][1])) for n in names], indexing="ij")).reshape(2, -1)
    rows = {n: channels[n][0].take(index[i]) for i, n in enumerate(names)}
    weight = channels[names[0]][1][index[0]] * channels[names[1]][1][index[1]]
    found = 0.0
    for block in blocks(kit.plain_rows(rows, blind=False)):
        terms = log_likelihood_terms(NUMPY, FAMILIES["normal"], block, state)
        found += float(np.exp(terms) @ weight[block.rows.star])
    assert found == pytest.approx(1, abs=2e-5)


def test_channels_part_without_correlation(kit: Any) -> None:
    """ρ = 0, every star a host with warm dust: the joint likelihood is the product of two."""
    rng = np.random.default_rng(4)
    n = 40
    channels = {}
    for name, kind in (("pollution", "measured"), ("excess", "true")):
        settings = ChannelSettings(threshold_on=kind, ceiling=0.85, width=0.2)
        limit = rng.normal(0, 0.5, n)
        rows = kit.channel_rows(n, LIMIT, settings, limit=limit, value=limit + np.abs(rng.normal(0, 0.5, n)), error=0.2)
        channels[name] = replace(rows, outcome=rng.choice([LIMIT, DETECTED], n))
    mean, sd = {"pollution": 0.1, "excess": -0.2}, {"pollution": 0.8, "excess": 0.6}

    def evaluate(names: list[str], correlation: float | None) -> np.ndarray:
        host = HostState({k: mean[k] for k in names}, {k: sd[k] for k in names}, correlation)
        found = np.zeros(n)
        for block in blocks(kit.plain_rows({k: channels[k] for k in names})):
            found[block.rows.star] = log_likelihood_terms(NUMPY, FAMILIES["normal"], block, StarState(0.0, None, host))
        return found

    joint = evaluate(["pollution", "excess"], 0.0)
    np.testing.assert_allclose(joint, evaluate(["pollution"], None) + evaluate(["excess"], None), rtol=0, atol=1e-12)
