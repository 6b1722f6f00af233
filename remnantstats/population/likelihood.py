"""The marginal log-likelihood of rows, one formula for every outcome of one or two channels.

A star's true values are integrated out. For a debris host each channel is genuinely detected or not; a star without
debris is never genuinely detected. What is listed follows from that: a genuine detection is listed; a star not
genuinely detected is listed as detected with the false-positive probability, else as a limit. Every outcome is thus a
sum of positive terms, and no near-equal numbers are subtracted.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import product
from typing import NamedTuple

import numpy as np

from .families import Family
from .gaussian import Decision, HostState, Value
from .ops import Array, ArrayOps, log_normal_density
from .rows import DETECTED, LIMIT, UNOBSERVED, Block, ChannelRows

__all__ = ["Efficiency", "Probe", "SelectedTerms", "StarState", "log_host_terms", "log_likelihood_terms"]


class Efficiency(NamedTuple):
    """A channel's efficiency where it is itself inferred; arrays that broadcast with rows (and latent nodes)."""

    limit: Array
    width: Array
    log_ceiling: Array
    log_missed: Array


class Probe(NamedTuple):
    """A further, fictitious measurement of a channel's true value, by which expectations are worked out."""

    channel: str
    value: Value


@dataclass(frozen=True)
class StarState:
    """The population as the rows of one block see it.

    Attributes
    ----------
    log_f, log_no : array or None
        Log of the debris fraction, and of one minus it; `log_no` is None where the fraction is fixed at 1.
    host : HostState
        True values among hosts (those with warm dust, in two channels).
    log_d, log_no_dust : array or None
        Log of the share of hosts with warm dust, and of one minus it; None where that share is fixed at 1.
    efficiency : mapping of str to Efficiency
        Channels whose efficiency is inferred with the population.
    """

    log_f: Array
    log_no: Array | None
    host: HostState
    log_d: Array | None = None
    log_no_dust: Array | None = None
    efficiency: Mapping[str, Efficiency] = field(default_factory=dict)


class _Term(NamedTuple):
    """One positive term of a channel's genuine outcome."""

    log_coefficient: Array
    decision: Decision | None
    value: Value | None


class SelectedTerms(NamedTuple):
    """Log numerator and denominator of a selected star, to be integrated over latent covariates apart."""

    above: Array
    below: Array


def log_likelihood_terms(
    ops: ArrayOps, family: Family, block: Block, state: StarState
) -> Array | SelectedTerms:
    """Log-likelihood of each row of a block, at each node of a latent covariate.

    Parameters
    ----------
    ops : ArrayOps
        Array backend.
    family : Family
        Family of true values.
    block : Block
        Rows that share a formula.
    state : StarState
        Population as these rows see it.

    Returns
    -------
    array or SelectedTerms
        Shape of the rows (with the latent axis, where the state has one); for selected stars with a latent covariate
        numerator and denominator apart.
    """
    if block.selected_by:
        return _selected(ops, family, block, state)
    terms = [
        _hosts_and_others(ops, family, block, state, genuine) + factor for genuine, factor in _listings(block)
    ]
    return _log_sum(ops, terms)


def _listings(block: Block) -> Iterator[tuple[dict[str, str], Array]]:
    """Genuine outcomes of all channels that lead to the block's, each with the log factor of its listing."""
    options = {name: _listed(channel, block.outcome[name]) for name, channel in block.rows.channels.items()}
    for choice in product(*options.values()):
        genuine = {name: item[0] for name, item in zip(options, choice, strict=True)}
        yield genuine, sum(_column(factor, block) for _, factor in choice if factor is not None)


def log_host_terms(ops: ArrayOps, family: Family, block: Block, state: StarState, probe: Probe) -> Array:
    """Log-likelihood of each row were it a debris host, with a further measurement of one channel.

    Parameters
    ----------
    ops, family, block, state
        As for `log_likelihood_terms`.
    probe : Probe
        The further measurement; in the dust channel, only hosts with warm dust count.

    Returns
    -------
    array
        Shape of the rows; up to a factor that does not depend on the probe for selected stars.
    """
    selection = [_selection(block)] if block.selected_by and not block.same else []
    terms = [
        _log_sum(ops, _host_terms(ops, family, block, state, genuine, selection, probe)) + factor
        for genuine, factor in _listings(block)
    ]
    return _log_sum(ops, terms)


def _listed(channel: ChannelRows, outcome: str) -> list[tuple[str, Array | None]]:
    """Genuine outcomes that lead to a listed one, each with the log factor of the listing."""
    if outcome == UNOBSERVED:
        return [(UNOBSERVED, None)]
    spurious = bool(np.any(channel.false_positive > 0))
    if outcome == LIMIT:
        return [(LIMIT, np.log1p(-channel.false_positive) if spurious else None)]
    if outcome == DETECTED:
        return [(DETECTED, None)]
    return [(DETECTED, None), (LIMIT, channel.log_spurious)]


def _hosts_and_others(
    ops: ArrayOps, family: Family, block: Block, state: StarState, genuine: Mapping[str, str]
) -> Array:
    """Log probability (density) of a genuine outcome, over stars with debris and without."""
    terms = [state.log_f + term for term in _host_terms(ops, family, block, state, genuine, [])]
    if DETECTED not in genuine.values() and state.log_no is not None:
        terms.append(state.log_no)
    return _log_sum(ops, terms)


def _host_terms(
    ops: ArrayOps,
    family: Family,
    block: Block,
    state: StarState,
    genuine: Mapping[str, str],
    selection: Sequence[Decision],
    probe: Probe | None = None,
) -> list[Array]:
    """Terms of a genuine outcome of a debris host; a host without warm dust has no true value in the dust channel."""
    both = [_genuine(ops, block, state, name, outcome) for name, outcome in genuine.items()]
    terms = []
    needs_dust = genuine.get("excess") == DETECTED or any(item.channel == "excess" for item in selection)
    needs_dust = needs_dust or (probe is not None and probe.channel == "excess")
    split = len(state.host.mean) == 2 and state.log_d is not None
    for choice in product(*both):
        term = _integral(ops, family, state.host, genuine, choice, selection, probe)
        terms.append((state.log_d if split else 0.0) + term)
    if split and not needs_dust:
        alone = HostState(
            {"pollution": state.host.mean["pollution"]}, {"pollution": state.host.sd["pollution"]}, None, {}
        )
        rest = {"pollution": genuine["pollution"]}
        for part in _genuine(ops, block, state, "pollution", genuine["pollution"]):
            terms.append(state.log_no_dust + _integral(ops, family, alone, rest, (part,), selection, probe))
    return terms


def _integral(
    ops: ArrayOps,
    family: Family,
    host: HostState,
    genuine: Mapping[str, str],
    choice: Sequence[_Term],
    selection: Sequence[Decision],
    probe: Probe | None,
) -> Array:
    decisions = [term.decision for term in choice if term.decision is not None]
    values = {name: term.value for name, term in zip(genuine, choice, strict=True) if term.value is not None}
    coefficient = sum(term.log_coefficient for term in choice)
    if probe is not None:
        coefficient = coefficient + _add_probe(ops, values, probe)
    # decisions of one channel stand together: the trivariate form relies on it
    decisions = sorted([*selection, *decisions], key=lambda item: _order(item, [*selection, *decisions]))
    return coefficient + family.log_integral(ops, _needed(host, values, decisions), values, decisions)


def _add_probe(ops: ArrayOps, values: dict[str, Value], probe: Probe) -> Array:
    """Put a further measurement among the values; two of one channel become one, and the density of their gap."""
    own = values.get(probe.channel)
    if own is None:
        values[probe.channel] = probe.value
        return 0.0
    total = own.variance + probe.value.variance
    mean = (own.value * probe.value.variance + probe.value.value * own.variance) / total
    values[probe.channel] = Value(mean, own.variance * probe.value.variance / total)
    return log_normal_density(ops, own.value, probe.value.value, total)


def _order(decision: Decision, all_of_them: Sequence[Decision]) -> tuple[int, str]:
    count = sum(other.channel == decision.channel for other in all_of_them)
    return -count, decision.channel


def _needed(host: HostState, values: Mapping[str, Value], decisions: Sequence[Decision]) -> HostState:
    """The host state without a channel that nothing looks at."""
    used = set(values) | {decision.channel for decision in decisions}
    if len(host.mean) == 2 and len(used) == 1:
        name = next(iter(used))
        return HostState({name: host.mean[name]}, {name: host.sd[name]}, None, host.shape)
    return host


def _genuine(ops: ArrayOps, block: Block, state: StarState, name: str, outcome: str) -> list[_Term]:
    """Terms of one channel's genuine outcome for a host that has a true value in it."""
    channel = block.rows.channels[name]
    if outcome == UNOBSERVED:
        return [_Term(0.0, None, None)]
    limit, width, log_ceiling, log_missed = state.efficiency.get(name) or _given_efficiency(block, channel)
    if outcome == DETECTED:
        noise = channel.error**2 + channel.calibration**2
        value = Value(_column(channel.value, block), _column(noise, block))
        decision = None
        if block.decided[name] and channel.threshold_on == "true":
            decision = Decision(name, 1, 1.0, -limit, width**2)
        elif block.decided[name]:
            slope, offset, variance = (_column(part, block) for part in channel.decision)
            decision = Decision(name, 1, slope, offset, variance)
        return [_Term(log_ceiling, decision, value)]
    terms = [_Term(log_ceiling, Decision(name, -1, 1.0, -limit, width**2), None)]
    if log_missed is not None:
        terms.append(_Term(log_missed, None, None))
    return terms


def _log_ceiling(block: Block, channel: ChannelRows) -> Array:
    return _column(np.log(np.asarray(channel.ceiling)), block)


def _given_efficiency(block: Block, channel: ChannelRows) -> tuple[Array, Array, Array, Array | None]:
    """Midpoint, width, log of the ceiling and of one minus it, as the study gives them."""
    with np.errstate(divide="ignore"):
        log_missed = np.log1p(-np.asarray(channel.ceiling))
    missed = _column(log_missed, block) if np.any(channel.ceiling < 1) else None
    return _column(channel.limit, block), _column(channel.width, block), _log_ceiling(block, channel), missed


def _selected(ops: ArrayOps, family: Family, block: Block, state: StarState) -> Array | SelectedTerms:
    """Log-likelihood of stars in the sample because they were known to be polluted (or dusty).

    Conditioned on the observation that selected them. Where that observation is the tabulated one, its probability
    stands below the line and its outcome above.
    """
    selection = _selection(block)
    own = [] if block.same else [selection]
    # in the other channel spurious detections are possible; in the selecting one their probability is zero
    terms = [
        _log_sum(ops, _host_terms(ops, family, block, state, genuine, own)) + factor
        for genuine, factor in _listings(block)
    ]
    above = _log_sum(ops, terms)
    if block.same:
        above = above - _log_ceiling(block, block.rows.channels[block.selected_by])
    nothing = dict.fromkeys(block.outcome, UNOBSERVED)
    below = _log_sum(ops, _host_terms(ops, family, block, state, nothing, [selection]))
    if block.rows.latent is None:
        return above - below
    # both lines carry f, which cancels only where the star's own f is certain
    return SelectedTerms(state.log_f + above, state.log_f + below)


def _selection(block: Block) -> Decision:
    """The observation that put the block's stars in the sample."""
    channel = block.rows.channels[block.selected_by]
    limit, width = channel.selection_limit, channel.selection_width
    return Decision(block.selected_by, 1, 1.0, -_column(limit, block), _column(width**2, block))


def _column(x: Array, block: Block) -> Array:
    """A row array, shaped to go with the latent axis."""
    return x[:, None] if block.rows.latent is not None and np.ndim(x) else x


def _log_sum(ops: ArrayOps, terms: Sequence[Array]) -> Array:
    total = terms[0]
    for term in terms[1:]:
        total = ops.logaddexp(total, term)
    return total
