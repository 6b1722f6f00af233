"""The page: complete, closed to the network, and in agreement with the results."""

import html
import re
import subprocess
import sys
from dataclasses import replace

import pytest

from remnantstats.occurrence.settings import NO_BASIS
from remnantstats.report import AssumptionRow, collect_assumptions, write_report
from remnantstats.report.narrative import answer, models_compared
from remnantstats.report.numbers import measure, number, row_measure, typeset

#: as in the fixtures
HOSTILE = "<script>alert('x')</script>\"$\\frac&"


@pytest.fixture(scope="module")
def page(contents, tmp_path_factory):
    return write_report(contents, tmp_path_factory.mktemp("report")).read_text(encoding="utf-8")


def plain(page):
    """The text that a reader sees."""
    body = re.sub(r"<(script|style).*?</\1>", " ", page, flags=re.S)
    return " ".join(html.unescape(re.sub(r"<[^>]+>", " ", body)).split())


def test_marks_stand_on_top_and_in_the_title(page, contents, failed_contents, tmp_path):
    assert "<title>[quick look]" in page
    assert page.index("Quick look: importance sampling") < page.index("The answer")
    failed = write_report(failed_contents, tmp_path).read_text(encoding="utf-8")
    assert "<title>[quick look, unreliable]" in failed
    assert "Unreliable: importance weights failed" in failed
    assert "✗ failed" in failed and "1 check failed" in failed


def test_every_assumption_is_shown_with_its_basis(page, contents):
    rows = collect_assumptions(contents)
    text = plain(page)
    for row in rows:
        for part in (row.name, typeset(row.description), typeset(row.basis)):
            assert " ".join(part.split()) in text
    by_name = {row.name: row.basis for row in rows}
    assert by_name["delivery"] == NO_BASIS
    assert by_name["retention"] == "an invented <b>engulfment</b> argument"
    assert {"debris_fraction", "completeness", "density", "pollution.width"} <= set(by_name)
    assert len({(row.enters, row.name) for row in rows}) == len(rows)


def test_further_assumptions_come_last(contents):
    extra = AssumptionRow("sample", "limits", "quoted at half efficiency")
    last = collect_assumptions(replace(contents, assumptions=(extra,)))[-1]
    assert last == extra._replace(basis=NO_BASIS)


def test_nothing_is_asked_of_the_network(page):
    for address in re.findall(r"(?:src|href|action|poster|srcset)\s*=\s*\"([^\"]*)\"", page):
        assert address.startswith(("data:", "#", "figures/")), address
    assert "http://" not in page and "https://" not in page
    assert "@import" not in page and "url(" not in page
    policy = re.search(r"Content-Security-Policy\" content=\"([^\"]*)\"", page)[1]
    assert "default-src &#39;none&#39;" in policy and "unsafe" not in policy
    assert not re.search(r"\sstyle=", page) and not re.search(r"\son[a-z]+=", page)


def test_hostile_names_are_text(page):
    assert HOSTILE in plain(page)
    assert "<script>alert" not in page
    assert page.count("<script") == 1 and "<b>engulfment" not in page


def test_figures_have_alternatives_and_files(contents, tmp_path):
    page = write_report(contents, tmp_path).read_text(encoding="utf-8")
    images = re.findall(r"<img [^>]*>", page)
    alternatives = [html.unescape(re.search(r'alt="([^"]*)"', image)[1]) for image in images]
    assert len(images) >= 11 and all(len(text) > 30 for text in alternatives)
    names = re.findall(r'href="figures/([a-z_]+)\.pdf"', page)
    assert len(names) == len(images)
    for name in names:
        assert (tmp_path / "figures" / f"{name}.pdf").read_bytes().startswith(b"%PDF")
        assert (tmp_path / "figures" / f"{name}.png").read_bytes().startswith(b"\x89PNG")


def test_numbers_in_the_text_are_the_summarys(page, contents):
    text = plain(page)
    table, prior, plan = contents.fit.table, contents.prior, contents.plan
    for row in table.itertuples():
        assert row_measure(row) in text, row.quantity
    for row in prior.summary().itertuples():
        assert row_measure(row) in text, row.quantity
    first, second, third = answer(contents)
    assert row_measure(next(table.itertuples())) in first
    assert measure(*prior.quantile([0.5, 0.1587, 0.8413], "earthlike_fraction")) in second
    assert f"{plan.needed(0.9)} targets for a chance of 90 %" in third
    assert "99 % is not reached by 60 targets" in third
    blind = contents.fit.stars.query("inclusion == 'blind'")
    found = int((blind["pollution"] == "detected").sum())
    assert f"Of {len(blind)} blind stars observed, {found} show debris" in first


def test_the_answer_comes_first_and_the_decision_is_left(page):
    order = [page.index(f'id="{name}"') for name in ("answer", "reasoning", "figures", "assumptions", "checks")]
    assert order == sorted(order)
    assert "left to those responsible" in plain(page)


def test_the_followup_list_states_its_order(page, contents):
    text = plain(page)
    assert "by falling chance of debris, then by rising sensitivity" in text
    stars = contents.fit.stars
    quiet = stars[(stars["pollution"] == "limit") & (stars["inclusion"] == "blind")]
    best = quiet.sort_values("debris_probability", ascending=False).iloc[0]
    assert best["star"] in text
    rows = re.search(r'id="table-followup".*?</table>', page, flags=re.S)[0].count("<tr>") - 1
    assert rows == 20


def test_checks_say_their_verdict_in_words(page, contents):
    text = plain(page)
    words = {"pass": "✓ passed", "warn": "! take note", "fail": "✗ failed"}
    for check in contents.fit.checks:
        assert words[check.verdict] in text and typeset(check.message) in text


@pytest.mark.parametrize(("source", "said"), [("dust_contents", "dusty fraction"), ("grouped_contents", "new group")])
def test_other_studies_have_their_page(request, tmp_path, source, said):
    contents = request.getfixturevalue(source)
    text = plain(write_report(contents, tmp_path).read_text(encoding="utf-8"))
    assert said in text
    assert "No mission is sized." in text
    if contents.prior is None:
        assert "this is where the inference ends" in text and "Rocky-system fraction" not in text


def test_models_compared(compared_contents, tmp_path):
    page = write_report(compared_contents, tmp_path).read_text(encoding="utf-8")
    text = plain(page)
    table, weights = compared_contents.comparison.table, compared_contents.comparison.weights
    best, second, stacked = table.itertuples()
    assert f"'{best.model}' predicts the sample best." in text
    gap, error = number(-second.elpd_difference, 1), number(second.difference_se, 1)
    assert f"'{second.model}' is behind by {gap} ± {error}" in text
    for name, weight in weights.items():
        assert f"'{name}' {number(weight)}" in text
    for row in (best, second, stacked):
        assert row_measure(row) in text
    assert "come from 'steady', the model that the study names first" in text
    assert 'href="#models"' in page
    assert page.index('id="figures"') < page.index('id="models"') < page.index('id="numbers"')
    assert (tmp_path / "figures" / "models.png").is_file() and (tmp_path / "figures" / "models.pdf").is_file()
    numbers = [int(item) for item in re.findall(r"<strong>Figure (\d+)\.", page)]
    assert numbers == list(range(1, len(numbers) + 1))
    assert "Yao, Vehtari" in text


def test_stacked_results_are_said_to_be_stacked(compared_contents, tmp_path):
    text = plain(write_report(replace(compared_contents, stacked=True), tmp_path).read_text(encoding="utf-8"))
    assert "The occurrence prior and all that follows from it come from the stacked fraction" in text


def test_close_models_are_not_ranked(compared_contents):
    comparison = compared_contents.comparison
    for gap, error, said in (
        (-3.0, 0.5, "too small to tell the two apart"),
        (-9.0, 6.0, "do not tell the two apart"),
        (-90.0, 6.0, "prefer the first"),
    ):
        table = comparison.table.copy()
        table.loc[1, ["elpd_difference", "difference_se"]] = gap, error
        table.loc[1, "stars_above_k"] = 3
        found = models_compared(replace(compared_contents, comparison=replace(comparison, table=table)))
        assert said in found[1]
        assert "provisional" in found[-1] and "3 stars" in found[-1]


def test_one_model_alone_has_no_section(page):
    assert 'id="models"' not in page and "#models" not in page and "Models compared" not in page


def test_negative_numbers_have_minus_signs(page):
    assert typeset("normal, mean -2.5, at (-0.1) and 1e-05, x=-.5") == "normal, mean −2.5, at (−0.1) and 1e−05, x=−.5"
    for kept in ("left-1", "2020-01-05", "Student-t", "Beta(1, 1)-like", "run-2", "a - 1", "0.2-0.4"):
        assert typeset(kept) == kept
    assert re.search(r"(mean |= |\()-\d", plain(page)) is None


def test_the_page_is_the_same_each_time(contents, tmp_path):
    first = write_report(contents, tmp_path / "a").read_bytes()
    assert first == write_report(contents, tmp_path / "b").read_bytes()


def test_importing_the_package_loads_no_matplotlib():
    code = "import sys, remnantstats, remnantstats.mission; assert 'matplotlib' not in sys.modules"
    subprocess.run([sys.executable, "-c", code], check=True)
