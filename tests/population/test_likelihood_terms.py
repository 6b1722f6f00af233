"""Every outcome's closed form against integrals done by brute force, from the definitions of METHODS §§2–4."""

from __future__ import annotations

from itertools import product
from typing import Any

import numpy as np
import pytest
import scipy.special
from scipy.stats import norm

from remnantstats.population.families import FAMILIES
from remnantstats.population.gaussian import HostState
from remnantstats.population.likelihood import StarState, log_likelihood_terms
from remnantstats.population.ops import NUMPY
from remnantstats.population.rows import blocks
from remnantstats.sensitivity import ChannelSettings

NODES, WEIGHTS = np.polynomial.legendre.leggauss(200)
N = 3


class Channel:
    """One channel's probabilities given the true value, written out."""

    def __init__(self, settings: ChannelSettings, rows: Any, i: int) -> None:
        self.settings, self.c, self.q = settings, settings.ceiling, rows.false_positive[i]
        self.limit, self.width = rows.limit[i], rows.width[i]
        self.value, self.error, self.calibration = rows.value[i], rows.error[i], rows.calibration[i]
        self.selection, self.selection_width = rows.selection_limit[i], rows.selection_width[i]

    def seen(self, x: np.ndarray) -> np.ndarray:
        """Probability of a genuine detection."""
        return self.c * norm.cdf((x - self.limit) / self.width)

    def genuine(self, x: np.ndarray) -> np.ndarray:
        """Density of the tabulated value, genuinely detected."""
        s, e = self.error, self.calibration
        if self.settings.threshold_on == "true":
            return self.seen(x) * norm.pdf(self.value, x, np.hypot(s, e))
        if e == 0:
            return self.c * norm.pdf(self.value, x, s) * (self.value > self.limit)
        # the value on which the decision was taken, integrated over from the limit up
        top = max(self.limit, self.value) + 12 * e
        t = self.limit + (top - self.limit) * (NODES + 1) / 2
        weight = (top - self.limit) / 2 * WEIGHTS * norm.pdf(self.value, t, e)
        return self.c * norm.pdf(t, x[..., None], s) @ weight

    def spurious(self) -> float:
        """q times the density of a spurious value."""
        above, scale = self.value - self.limit, self.settings.spurious_scale
        return self.q * 2 * norm.pdf(above, scale=scale) if above > 0 else 0.0

    def selected(self, x: np.ndarray) -> np.ndarray:
        return norm.cdf((x - self.selection) / self.selection_width)

    def listed(self, outcome: str, x: np.ndarray | None) -> np.ndarray | float:
        """Probability (density) of what is listed, given the true value; None: there is none."""
        if outcome == "unobserved":
            return 1.0
        genuine = 0.0 if x is None else self.genuine(x)
        missed = 1.0 if x is None else 1 - self.seen(x)
        return missed * (1 - self.q) if outcome == "limit" else genuine + missed * self.spurious()


def grid(mean: float, sd: float, step: float = 0.03) -> np.ndarray:
    return np.arange(mean - 9 * sd, mean + 9 * sd, step)


def single(channel: Channel, outcome: str, f: float, mean: float, sd: float) -> float:
    """f ∫ p(x) listed(x) dx + (1 − f) listed(no debris)."""
    x = grid(mean, sd, 0.005)
    host = np.sum(norm.pdf(x, mean, sd) * channel.listed(outcome, x)) * 0.005
    return float(f * host + (1 - f) * channel.listed(outcome, None))


def double(x_: Channel, y_: Channel, outcome: tuple[str, str], theta: dict[str, float], select: str = "") -> float:
    """Two channels: f [d ∫∫ p(x, y) … + (1 − d) ∫ p(x) …] + (1 − f) …, or the same given a selection of hosts."""
    x, y = grid(theta["mx"], theta["sx"]), grid(theta["my"], theta["sy"])
    px, py = norm.pdf(x, theta["mx"], theta["sx"]), None
    slope = theta["rho"] * theta["sy"] / theta["sx"]
    py = norm.pdf(y, theta["my"] + slope * (x[:, None] - theta["mx"]), theta["sy"] * np.sqrt(1 - theta["rho"] ** 2))
    in_x, in_y = x_.listed(outcome[0], x) * np.ones_like(x), y_.listed(outcome[1], y) * np.ones_like(y)
    chosen_x = x_.selected(x) if select == "x" else np.ones_like(x)
    chosen_y = y_.selected(y) if select == "y" else np.ones_like(y)
    area = 0.03**2
    dusty = (px * in_x * chosen_x) @ py @ (in_y * chosen_y) * area
    bare = np.sum(px * in_x * chosen_x) * 0.03 * y_.listed(outcome[1], None) * (select != "y")
    host = theta["d"] * dusty + (1 - theta["d"]) * bare
    if not select:
        return float(theta["f"] * host + (1 - theta["f"]) * x_.listed(outcome[0], None) * y_.listed(outcome[1], None))
    below = theta["d"] * ((px * chosen_x) @ py @ chosen_y) * area
    below += (1 - theta["d"]) * np.sum(px * chosen_x) * 0.03 * (select != "y")
    return float(host / below)


def draw_rows(
    kit: Any, rng: np.random.Generator, outcome: str, settings: ChannelSettings, e: float, centre: float
) -> Any:
    """Random rows about a population's centre, doubtful only above their limit."""
    limit = centre + rng.normal(0, 0.8, N)
    value = limit + np.abs(rng.normal(0, 0.7, N)) if e == 0 or outcome == "doubtful" else limit + rng.normal(0, 0.5, N)
    detected = outcome in ("detected", "doubtful")
    return kit.channel_rows(
        N, outcome, settings, limit=limit, width=rng.uniform(0.1, 0.3, N),
        value=value if detected else np.nan, error=rng.uniform(0.1, 0.25, N), calibration=e,
        selection_limit=np.nan, false_positive=settings.false_positive if outcome != "detected" else 0.0,
    )  # fmt: skip


def evaluate(rows: Any, state: StarState) -> np.ndarray:
    (block,) = blocks(rows)
    return np.exp(log_likelihood_terms(NUMPY, FAMILIES["normal"], block, state))


def settings_of(kind: str, ceiling: float, q: float) -> ChannelSettings:
    return ChannelSettings(threshold_on=kind, ceiling=ceiling, false_positive=q)


KINDS = ["measured", "true"]


@pytest.mark.parametrize(
    ("kind", "ceiling", "outcome", "e"),
    list(product(KINDS, [1.0, 0.8], ["limit", "detected", "doubtful"], [0.0, 0.25])),
)
def test_one_channel(kit: Any, kind: str, ceiling: float, outcome: str, e: float) -> None:
    rng = np.random.default_rng([KINDS.index(kind), int(10 * ceiling), len(outcome), int(100 * e)])
    settings = settings_of(kind, ceiling, 0.07 if outcome != "detected" else 0.0)
    mean, sd, f = rng.normal(0, 0.5), rng.uniform(0.4, 1.2), rng.uniform(0.1, 0.9)
    channel = draw_rows(kit, rng, outcome, settings, e if outcome != "limit" else 0.0, mean)
    host = HostState({"pollution": np.float64(mean)}, {"pollution": np.float64(sd)})
    found = evaluate(kit.plain_rows({"pollution": channel}), StarState(np.log(f), np.log1p(-f), host))
    expected = [single(Channel(settings, channel, i), outcome, f, mean, sd) for i in range(N)]
    np.testing.assert_allclose(found, expected, rtol=1e-8)


def test_written_out() -> None:
    """P and G as METHODS §2 prints them, from the same integral that the likelihood uses."""
    from remnantstats.population.gaussian import Decision, Value, log_gaussian_integral

    mu, sigma, s, e, w, limit, value = 0.3, 0.8, 0.15, 0.2, 0.17, 0.1, 0.4
    host = HostState({"pollution": mu}, {"pollution": sigma})

    def integral(values: dict[str, Any], *decisions: Any) -> float:
        return float(np.exp(log_gaussian_integral(NUMPY, host, values, decisions)))

    above = Decision("pollution", 1, 1.0, -limit, w**2)
    assert integral({}, above) == pytest.approx(norm.cdf((mu - limit) / np.hypot(sigma, w)), rel=1e-13)
    v2 = 1 / (1 / sigma**2 + 1 / s**2)
    m = v2 * (mu / sigma**2 + value / s**2)
    true = norm.pdf(value, mu, np.hypot(sigma, s)) * norm.cdf((m - limit) / np.hypot(w, np.sqrt(v2)))
    assert integral({"pollution": Value(value, s**2)}, above) == pytest.approx(true, rel=1e-13)
    total = sigma**2 + s**2 + e**2
    shifted, variance = mu + (sigma**2 + s**2) / total * (value - mu), (sigma**2 + s**2) * e**2 / total
    measured = norm.pdf(value, mu, np.sqrt(total)) * norm.cdf((shifted - limit) / np.sqrt(variance))
    noise = s**2 + e**2
    decided = Decision("pollution", 1, e**2 / noise, value * s**2 / noise - limit, s**2 * e**2 / noise)
    assert integral({"pollution": Value(value, noise)}, decided) == pytest.approx(measured, rel=1e-13)


OUTCOMES = ["unobserved", "limit", "detected", "doubtful"]
PAIRS = [pair for pair in product(OUTCOMES, OUTCOMES) if pair != ("unobserved", "unobserved")]


def two_channels(kit: Any, seed: list[int], pair: tuple[str, str], e: float) -> tuple[Any, ...]:
    rng = np.random.default_rng(seed)
    kinds = [KINDS[i] for i in rng.integers(0, 2, 2)]
    ceilings = rng.choice([1.0, 0.75], 2)
    theta = {
        "mx": rng.normal(0, 0.3), "my": rng.normal(0, 0.3), "sx": rng.uniform(0.5, 1), "sy": rng.uniform(0.5, 1),
        "rho": rng.uniform(-0.8, 0.8), "f": rng.uniform(0.1, 0.9), "d": rng.uniform(0.2, 0.9),
    }  # fmt: skip
    settings, channels = [], {}
    for name, kind, ceiling, outcome, mean in zip(
        ("pollution", "excess"), kinds, ceilings, pair, (theta["mx"], theta["my"]), strict=True
    ):
        item = settings_of(kind, float(ceiling), 0.0 if outcome == "detected" else 0.06)
        settings.append(item)
        channels[name] = draw_rows(kit, rng, outcome, item, e if outcome not in ("limit", "unobserved") else 0.0, mean)
    host = HostState(
        {"pollution": theta["mx"], "excess": theta["my"]},
        {"pollution": theta["sx"], "excess": theta["sy"]},
        theta["rho"],
    )
    f, d = theta["f"], theta["d"]
    state = StarState(np.log(f), np.log1p(-f), host, np.log(d), np.log1p(-d))
    return rng, settings, channels, theta, state


@pytest.mark.parametrize("pair", PAIRS)
@pytest.mark.parametrize("e", [0.0, 0.2])
def test_two_channels(kit: Any, pair: tuple[str, str], e: float) -> None:
    for repeat in range(2):
        seed = [PAIRS.index(pair), int(10 * e), repeat]
        _, settings, channels, theta, state = two_channels(kit, seed, pair, e)
        found = evaluate(kit.plain_rows(channels), state)
        both = [
            [Channel(item, channels[name], i) for i in range(N)] for item, name in zip(settings, channels, strict=True)
        ]
        expected = [double(x, y, pair, theta) for x, y in zip(*both, strict=True)]
        np.testing.assert_allclose(found, expected, rtol=1e-8)


@pytest.mark.parametrize("pair", PAIRS)
@pytest.mark.parametrize("by", ["pollution", "excess"])
def test_selected_stars(kit: Any, pair: tuple[str, str], by: str) -> None:
    """Stars known for debris, selected by an observation of their own."""
    position = 0 if by == "pollution" else 1
    # such stars count as confirmed: nothing is doubtful in the channel that selected them
    pair = tuple("detected" if i == position and item == "doubtful" else item for i, item in enumerate(pair))
    for repeat in range(2):
        e = 0.2 * repeat
        seed = [100 + PAIRS.index(pair), position, repeat]
        rng, settings, channels, theta, state = two_channels(kit, seed, pair, e)
        chosen = channels[by]
        chosen.selection_limit[:] = theta["mx" if by == "pollution" else "my"] + rng.normal(0, 0.5, N)
        chosen.selection_width[:] = rng.uniform(0.1, 0.3, N)
        chosen.false_positive[:] = 0.0
        found = evaluate(kit.plain_rows(channels, blind=False), state)
        both = [
            [Channel(item, channels[name], i) for i in range(N)] for item, name in zip(settings, channels, strict=True)
        ]
        expected = [double(x, y, pair, theta, "xy"[position]) for x, y in zip(*both, strict=True)]
        np.testing.assert_allclose(found, expected, rtol=1e-7)


@pytest.mark.parametrize("e", [0.0, 0.2])
@pytest.mark.parametrize("ceiling", [1.0, 0.8])
def test_selected_by_the_tabulated_value(kit: Any, e: float, ceiling: float) -> None:
    """The row's own detection put the star in the sample: density of the value, given that it was seen."""
    rng = np.random.default_rng(5)
    settings = settings_of("measured", ceiling, 0.0)
    mean, sd = 0.2, 0.7
    channel = draw_rows(kit, rng, "detected", settings, e, mean)
    channel.selection_limit[:], channel.selection_width[:], channel.same[:] = channel.limit, channel.error, True
    channel.width[:] = channel.error
    host = HostState({"pollution": mean}, {"pollution": sd})
    found = evaluate(kit.plain_rows({"pollution": channel}, blind=False), StarState(np.log(0.3), np.log(0.7), host))
    x = grid(mean, sd, 0.005)
    for i in range(N):
        item = Channel(settings, channel, i)
        ratio = np.sum(norm.pdf(x, mean, sd) * item.genuine(x)) / np.sum(norm.pdf(x, mean, sd) * item.seen(x))
        assert found[i] == pytest.approx(ratio, rel=1e-8)
    if e == 0:
        # METHODS §2: N(x̂; μ, σ² + s²) / Φ((μ − L)/√(σ² + w²))
        spread = np.hypot(sd, channel.error)
        printed = norm.pdf(channel.value, mean, spread) / norm.cdf((mean - channel.limit) / spread)
        np.testing.assert_allclose(found, printed, rtol=1e-12)


def test_offsets_and_covariates(kit: Any) -> None:
    """Helium stars and stars of other ages carry their own log-odds and mean."""
    rng = np.random.default_rng(6)
    settings = {"pollution": ChannelSettings(width=0.2)}
    table = kit.design_table(rng, 60, settings, {})
    table["atmosphere"] = np.where(np.arange(60) % 3 == 0, "He", "H")
    model = kit.load_model("cooling-trend")
    truth = {
        "debris_fraction": 0.4, "mean_log_accretion": 7.6, "sd_log_accretion": 0.7,
        "fraction_slope[log_cooling_age]": 0.8, "rate_slope[log_cooling_age]": -0.5,
        "fraction_offset[He]": -0.7, "rate_offset[He]": 0.4,
    }  # fmt: skip
    table = kit.fill_in(rng, table, model, settings, truth, atmospheres=("H", "He"))
    assert set(table["pollution"]) == {"limit", "detected"}
    problem = kit.pose_table(table, model, settings, atmospheres=("H", "He"))
    found = np.exp(problem.pointwise(problem.theta(kit.vector(problem, truth)[None]))[0])
    age = np.log10(table["cooling_age"].to_numpy())
    z, helium = age - age.mean(), (table["atmosphere"] == "He").to_numpy()
    f = scipy.special.expit(np.log(0.4 / 0.6) + 0.8 * z - 0.7 * helium)
    mean = 7.6 - 0.5 * z + 0.4 * helium
    rows = problem.rows.channels["pollution"]
    for i in range(60):
        item = Channel(settings["pollution"], rows, i)
        assert found[i] == pytest.approx(single(item, str(table["pollution"][i]), f[i], mean[i], 0.7), rel=1e-8)


def test_covariate_with_errors(kit: Any) -> None:
    """A latent covariate enters through N(ẑ; z, s²) p(z), numerator and denominator apart for selected stars."""
    rng = np.random.default_rng(7)
    settings = {"pollution": ChannelSettings(width=0.2)}
    table = kit.design_table(rng, 24, settings, {"pollution": 6})
    table["cooling_age_err"] = 0.3 * table["cooling_age"]
    model = kit.load_model("cooling-trend")
    truth = {
        "debris_fraction": 0.5, "mean_log_accretion": 7.6, "sd_log_accretion": 0.7,
        "fraction_slope[log_cooling_age]": 0.8, "rate_slope[log_cooling_age]": -0.5,
        "covariate_mean[log_cooling_age]": 0.1, "covariate_sd[log_cooling_age]": 0.4,
    }  # fmt: skip
    table = kit.fill_in(rng, table, model, settings, truth)
    problem = kit.pose_table(table, model, settings)
    u = kit.vector(problem, truth)[None]
    found = np.exp(problem.pointwise(problem.theta(u))[0])
    latent, rows = problem.rows.latent, problem.rows.channels["pollution"]
    z = np.linspace(-3, 3, 241)
    for i in range(24):
        item = Channel(settings["pollution"], rows, i)
        weight = norm.pdf(latent.estimate[i], z, latent.error[i]) * norm.pdf(z, 0.1, 0.4)
        weight /= weight.sum()
        f = scipy.special.expit(0.8 * z)
        outcome = str(table["pollution"][i])
        if problem.rows.blind[i]:
            expected = sum(
                p * single(item, outcome, a, 7.6 - 0.5 * b, 0.7) for p, a, b in zip(weight, f, z, strict=True)
            )
        else:
            x = grid(7.6, 1.2, 0.02)
            p = norm.pdf(x, 7.6 - 0.5 * z[:, None], 0.7) * 0.02
            above = weight * f @ (p @ (item.selected(x) * item.listed(outcome, x)))
            expected = above / (weight * f @ (p @ item.selected(x)))
        # 11 Gauss–Hermite nodes stand for the star's own posterior of z
        assert found[i] == pytest.approx(expected, rel=1e-6)
