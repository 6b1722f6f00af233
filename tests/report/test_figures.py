"""Each figure gives axes with labels, units and what it promises to show."""

import matplotlib
import numpy as np
import pytest
import scipy.stats
from matplotlib.axes import Axes

from remnantstats import report
from remnantstats.report.facts import (
    channel_fraction,
    depth_bins,
    fraction_above,
    median_depth,
    raw_fraction,
    sample_fraction,
)
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


def test_nothing_is_cut_off(contents, dust_contents, grouped_contents):
    for source in (contents, dust_contents, grouped_contents):
        for plate in gallery(source):
            figure = plate.draw()
            figure.canvas.draw()
            box, full = figure.get_tightbbox(), figure.get_size_inches()
            assert box.x0 > -0.02 and box.y0 > -0.02, plate.name
            assert box.x1 < full[0] + 0.02 and box.y1 < full[1] + 0.02, plate.name
