"""The marginal log-likelihood of rows, one formula for every outcome of one or two channels.

A star's true values are integrated out. For a debris host each channel is genuinely detected or not; a star without
debris is never genuinely detected. What is listed follows from that: a genuine detection is listed; a star not
genuinely detected is listed as detected with the false-positive probability, else as a limit. Every outcome is thus a
sum of positive terms, and no near-equal numbers are subtracted.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import product
from typing import NamedTuple

import numpy as np

from .families import Family
from .gaussian import Decision, HostState, Value
from .ops import Array, ArrayOps
from .rows import DETECTED, LIMIT, UNOBSERVED, Block, ChannelRows

__all__ = ["SelectedTerms", "StarState", "log_likelihood_terms"]


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
    """

    log_f: Array
    log_no: Array | None
    host: HostState
    log_d: Array | None = None
    log_no_dust: Array | None = None


class _Term(NamedTuple):
    """One positive term of a channel's genuine outcome."""

    log_coefficient: float
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
) -> list[Array]:
    """Terms of a genuine outcome of a debris host; a host without warm dust has no true value in the dust channel."""
    both = [_genuine(block, name, outcome) for name, outcome in genuine.items()]
    terms = []
    needs_dust = genuine.get("excess") == DETECTED or any(item.channel == "excess" for item in selection)
    split = len(state.host.mean) == 2 and state.log_d is not None
    for choice in product(*both):
        terms.append((state.log_d if split else 0.0) + _integral(ops, family, state.host, genuine, choice, selection))
    if split and not needs_dust:
        alone = HostState(
            {"pollution": state.host.mean["pollution"]}, {"pollution": state.host.sd["pollution"]}, None, {}
        )
        rest = {"pollution": genuine["pollution"]}
        for term in _genuine(block, "pollution", genuine["pollution"]):
            terms.append(state.log_no_dust + _integral(ops, family, alone, rest, (term,), selection))
    return terms


def _integral(
    ops: ArrayOps,
    family: Family,
    host: HostState,
    genuine: Mapping[str, str],
    choice: Sequence[_Term],
    selection: Sequence[Decision],
) -> Array:
    decisions = [term.decision for term in choice if term.decision is not None]
    values = {name: term.value for name, term in zip(genuine, choice, strict=True) if term.value is not None}
    coefficient = sum(term.log_coefficient for term in choice)
    # decisions of one channel stand together: the trivariate form relies on it
    decisions = sorted([*selection, *decisions], key=lambda item: _order(item, [*selection, *decisions]))
    return coefficient + family.log_integral(ops, _needed(host, values, decisions), values, decisions)


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


def _genuine(block: Block, name: str, outcome: str) -> list[_Term]:
    """Terms of one channel's genuine outcome for a host that has a true value in it."""
    channel = block.rows.channels[name]
    if outcome == UNOBSERVED:
        return [_Term(0.0, None, None)]
    if outcome == DETECTED:
        noise = channel.error**2 + channel.calibration**2
        value = Value(_column(channel.value, block), _column(noise, block))
        decision = None
        if block.decided[name]:
            slope, offset, variance = (_column(part, block) for part in channel.decision)
            decision = Decision(name, 1, slope, offset, variance)
        return [_Term(float(np.log(channel.ceiling)), decision, value)]
    below = Decision(name, -1, 1.0, -_column(channel.limit, block), _column(channel.width**2, block))
    terms = [_Term(float(np.log(channel.ceiling)), below, None)]
    if channel.ceiling < 1:
        terms.append(_Term(float(np.log1p(-channel.ceiling)), None, None))
    return terms


def _selected(ops: ArrayOps, family: Family, block: Block, state: StarState) -> Array | SelectedTerms:
    """Log-likelihood of stars in the sample because they were known to be polluted (or dusty).

    Conditioned on the observation that selected them. Where that observation is the tabulated one, its probability
    stands below the line and its outcome above.
    """
    channel = block.rows.channels[block.selected_by]
    selection = Decision(
        block.selected_by,
        1,
        1.0,
        -_column(channel.selection_limit, block),
        _column(channel.selection_width**2, block),
    )
    own = [] if block.same else [selection]
    # spurious detections are possible in the other channel; in the selecting one their probability is zero
    above = _log_sum(
        ops,
        [
            _log_sum(ops, _host_terms(ops, family, block, state, genuine, own)) + factor
            for genuine, factor in _listings(block)
        ],
    )
    if block.same:
        above = above - float(np.log(channel.ceiling))
    nothing = dict.fromkeys(block.outcome, UNOBSERVED)
    below = _log_sum(ops, _host_terms(ops, family, block, state, nothing, [selection]))
    if block.rows.latent is None:
        return above - below
    # both lines carry f, which cancels only where the star's own f is certain
    return SelectedTerms(state.log_f + above, state.log_f + below)


def _column(x: Array, block: Block) -> Array:
    """A row array, shaped to go with the latent axis."""
    return x[:, None] if block.rows.latent is not None else x


def _log_sum(ops: ArrayOps, terms: Sequence[Array]) -> Array:
    total = terms[0]
    for term in terms[1:]:
        total = ops.logaddexp(total, term)
    return total
