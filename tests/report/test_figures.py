"""Each figure gives axes with labels, units and what it promises to show."""

import time
from dataclasses import replace

import matplotlib
import numpy as np
import pytest
import scipy.stats
from matplotlib.axes import Axes

from remnantstats import report
from remnantstats.inference.companion import fraction_above_steps
from remnantstats.report import gallery as gallery_module
from remnantstats.report.facts import (
    blind_fraction,
    channel_fraction,
    companion,
    depth_bins,
    fraction_above,
    median_depth,
    prior_detected,
    raw_fraction,
    sample_fraction,
)
from remnantstats.report.figures_models import STACKED, above_rows
from remnantstats.report.gallery import gallery
from remnantstats.report.style import label_text, save_figure


def text_of(ax):
    found = [item.get_text() for item in ax.get_figure().findobj(matplotlib.text.Text)]
    return " | ".join(found)


def test_the_sample_tells_detections_from_limits_by_shape(fit):
    ax = report.plot_sample(fit)
    assert isinstance(ax, Axes)
    assert ax.get_xlabel() == "Effective temperature (K)"
    assert "g s$^{-1}$" in ax.get_ylabel()
    shapes = {len(item.get_paths()[0].vertices) for item in ax.collections if item.get_offsets().size > 2}
    assert len(shapes) >= 2
    limits = int((fit.stars["pollution"] == "limit").sum())
    assert f"nothing seen: limit ({limits})" in text_of(ax)
    assert "chosen for known debris (6)" in text_of(ax)


@pytest.mark.parametrize("name", ["plot_completeness", "plot_correction", "plot_fraction", "plot_fraction_above"])
@pytest.mark.parametrize("source", ["contents", "dust_contents", "grouped_contents"])
def test_both_channels_are_drawn_with_units(request, name, source):
    fit = request.getfixturevalue(source).fit
    ax = getattr(report, name)(fit)
    assert ax.get_xlabel() and ax.get_ylabel()
    unit = "L_{\\rm dust}" if fit.fraction == "dusty_fraction" else "g s$^{-1}$"
    assert unit in ax.get_xlabel() or ax.get_xlabel() in ("Debris fraction", "Dusty fraction")


def test_a_sample_without_temperatures_is_spread_along_what_it_has(dust_contents, grouped_contents):
    assert report.plot_sample(dust_contents.fit).get_xlabel() == "Distance (pc)"
    assert report.plot_sample(grouped_contents.fit).get_xlabel() == "Star, in the order of the table"


def test_the_correction_shows_counts_by_depth(fit):
    bins = depth_bins(fit, "pollution")
    raw = sample_fraction(fit, "pollution")
    assert 4 <= len(bins) <= 5
    assert bins["stars"].sum() == raw.observed == int((fit.stars["inclusion"] == "blind").sum())
    assert bins["found"].sum() == raw.found
    assert np.all(np.diff(bins["middle"]) > 0)
    # two depths: the deep half shows several times more
    assert bins["raw"].iloc[0] > 2 * bins["raw"].iloc[-1]
    inside = (bins["expected_low"] <= bins["raw"]) & (bins["raw"] <= bins["expected_high"])
    assert inside.sum() >= len(bins) - 1
    assert f"{bins['found'].iloc[0]} of {bins['stars'].iloc[0]} stars" in text_of(report.plot_correction(fit))


def test_raw_intervals_are_wilsons():
    raw = raw_fraction(7, 40)
    z = scipy.stats.norm.ppf(0.5 + 0.6827 / 2)
    centre = (7 + z**2 / 2) / (40 + z**2)
    half = z / (40 + z**2) * np.sqrt(7 * 33 / 40 + z**2 / 4)
    assert (raw.low, raw.high) == pytest.approx((centre - half, centre + half), rel=1e-9)
    assert np.isnan(raw_fraction(0, 0).value)


def test_the_curve_agrees_with_the_summary(fit):
    drawn = np.median(fraction_above(fit, "pollution", [6.0, 7.0, 8.0]), axis=0)
    for value, middle in zip((6, 7, 8), drawn, strict=True):
        row = fit.table[fit.table["quantity"] == f"debris_fraction_above[{value}]"].iloc[0]
        assert middle == pytest.approx(row["q50"], abs=0.25 * row["sd"])
    assert channel_fraction(fit, "pollution").mean() == pytest.approx(fit.draws("debris_fraction").mean())


def test_the_extrapolated_part_is_hatched_and_named(fit):
    ax = report.plot_fraction_above(fit)
    hatched = [patch for patch in ax.patches if patch.get_hatch()]
    assert hatched and "extrapolated" in text_of(ax)
    assert hatched[0].get_x() + hatched[0].get_width() == pytest.approx(median_depth(fit, "pollution"))


@pytest.mark.parametrize("source", ["contents", "dust_contents"])
def test_the_companion_is_drawn_from_the_deepest_limit_up(request, source):
    fit = request.getfixturevalue(source).fit
    channel = fit.problem.channels[0]
    ax = report.plot_fraction_above(fit)
    steps = companion(fit, channel)
    line = next(item for item in ax.lines if item.get_label().startswith("Kaplan–Meier"))
    assert line.get_drawstyle() == "steps-post" and line.get_linewidth() < 1
    assert list(line.get_xdata()[:-1]) == list(steps["value"])
    assert list(line.get_ydata()[:-1]) == list(steps["fraction"])
    stars = fit.stars[(fit.stars["inclusion"] == "blind") & (fit.stars[channel] == "limit")]
    own = fit.problem.rows.channels[channel].limit[stars.index]
    assert line.get_xdata()[0] == pytest.approx(own.min())
    whole = fraction_above_steps(fit.problem, channel)
    assert whole["value"].iloc[-len(steps) :].tolist() == steps["value"].tolist()
    assert "limits as left-censored" in text_of(ax)


def test_the_prior_expects_what_simulation_gives(contents, dust_contents):
    for source in (contents, dust_contents):
        fit = source.fit
        start = time.process_time()
        shares = prior_detected(fit)[fit.problem.channels[0]]
        assert time.process_time() - start < 2  # about 0.2 s
        assert shares.shape == (200,) and shares.min() >= 0 and shares.max() <= 1
        # uniform prior of the fraction: no more than the hosts, half the stars on average, can be seen
        assert 0.05 < shares.mean() < 0.55 and shares.std() > 0.1
        np.testing.assert_array_equal(shares, prior_detected(fit)[fit.problem.channels[0]])
        ax = report.plot_prior_predictive(fit)
        raw = blind_fraction(fit, fit.problem.channels[0])
        marked = next(line for line in ax.lines if line.get_label() == "this survey")
        assert set(marked.get_xdata()) == {raw.value}
        assert sum(patch.get_height() for patch in ax.patches) == 200


def test_the_prior_is_not_simulated_for_very_many_stars(contents):
    stars = contents.fit.stars
    many = stars.iloc[np.arange(20_001) % len(stars)].reset_index(drop=True)
    assert any(plate.name == "prior_predictive" for plate in gallery(contents))
    assert gallery_module._before(replace(contents.fit, stars=many)) == []


def test_models_are_told_apart_by_line_and_colour(compared_contents):
    fits, comparison = compared_contents.fits, compared_contents.comparison
    ax = report.plot_models(fits, comparison)
    for fit in fits:
        assert f"{fit.model.name}, weight {comparison.weights[fit.model.name]:.2f}" in text_of(ax)
    curves = [line for line in ax.lines if "weight" in line.get_label()]
    assert len({line.get_linestyle() for line in curves}) == len({line.get_color() for line in curves}) == 2
    assert STACKED in text_of(ax)
    rows = above_rows(comparison, "pollution")
    points = next(line for line in ax.lines if line.get_marker() == "D")
    assert list(points.get_xdata()) == list(rows["threshold"]) and list(points.get_ydata()) == list(rows["q50"])
    first = curves[0]
    at_seven = np.interp(7.0, first.get_xdata(), first.get_ydata())
    steady = above_rows(comparison, "pollution", "steady").set_index("threshold")["q50"]
    assert at_seven == pytest.approx(steady[7], abs=0.01)


def test_needed_numbers_are_marked_and_the_unreachable_said(contents):
    ax = report.plot_chance(contents.plan)
    for row in contents.plan.needs.itertuples():
        assert (f"{row.n_targets} for {100 * row.success:g} %" in text_of(ax)) == bool(row.reached)
    assert "99 %: not reached" in text_of(ax)
    styles = {line.get_linestyle() for line in ax.lines}
    assert {"-", "--"} <= styles


def test_planets_and_mission(contents):
    ax = report.plot_occurrence(contents.prior, contents.transfer.prior)
    assert ax.get_xlabel() == "Rocky-system fraction"
    assert "Beta(" in text_of(ax) and "before" in text_of(ax)
    assert report.plot_yield(contents.plan).get_ylabel() == "Planets found"
    ax = report.plot_distances(contents.plan)
    assert "(pc)" in ax.get_ylabel() and "Aperture (m)" in text_of(ax)


def test_parameters_stand_beside_their_priors(fit):
    axes = report.plot_parameters(fit)
    drawn = [ax for ax in axes.flat if ax.lines]
    assert len(drawn) == len(fit.problem.free)
    for ax in drawn:
        assert {"-", "--"} <= {line.get_linestyle() for line in ax.lines}
        assert ax.get_xlabel()


def test_groups_are_drawn_with_hostile_names(grouped_contents, tmp_path):
    ax = report.plot_groups(grouped_contents.fit)
    assert any("<script>" in item.get_text() for item in ax.get_yticklabels())
    assert save_figure(ax.get_figure(), tmp_path / "groups").startswith(b"\x89PNG")


def test_formulas_in_names_are_not_read(tmp_path):
    assert label_text("$\\frac") == "\\$\\frac"


@pytest.mark.parametrize("kind", ["depth", "value"])
def test_predictive_counts(fit, kind):
    ax = report.plot_predictive(fit, "pollution", kind)
    rows = fit.predictive.counts.query("kind == @kind")
    shown = next(line for line in ax.lines if line.get_marker() == "D")
    assert list(shown.get_ydata()) == list(rows["observed"])


def test_the_same_figure_gives_the_same_bytes(fit, tmp_path):
    for run in ("a", "b"):
        save_figure(report.plot_fraction(fit).get_figure(), tmp_path / run)
    for ending in (".png", ".pdf"):
        first, second = ((tmp_path / run).with_suffix(ending).read_bytes() for run in ("a", "b"))
        assert first == second
    assert b"CreationDate" not in first


def test_the_users_own_style_stays(fit):
    before = dict(matplotlib.rcParams)
    report.plot_fraction(fit)
    assert dict(matplotlib.rcParams) == before


def test_nothing_is_cut_off(contents, dust_contents, grouped_contents, compared_contents):
    for source in (contents, dust_contents, grouped_contents, compared_contents):
        for plate in gallery(source):
            figure = plate.draw()
            figure.canvas.draw()
            box, full = figure.get_tightbbox(), figure.get_size_inches()
            assert box.x0 > -0.02 and box.y0 > -0.02, plate.name
            assert box.x1 < full[0] + 0.02 and box.y1 < full[1] + 0.02, plate.name
