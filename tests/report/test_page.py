"""The page: complete, closed to the network, and in agreement with the results."""

import html
import re
import subprocess
import sys
import time
from dataclasses import replace

import pytest

from remnantstats.occurrence.settings import NO_BASIS
from remnantstats.report import AssumptionRow, collect_assumptions, write_report
from remnantstats.report.narrative import answer
from remnantstats.report.numbers import measure, row_measure

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
        for part in (row.name, row.description, row.basis):
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
        assert words[check.verdict] in text and check.message in text


@pytest.mark.parametrize(("source", "said"), [("dust_contents", "dusty fraction"), ("grouped_contents", "new group")])
def test_other_studies_have_their_page(request, tmp_path, source, said):
    contents = request.getfixturevalue(source)
    text = plain(write_report(contents, tmp_path).read_text(encoding="utf-8"))
    assert said in text
    assert "No mission is sized." in text
    if contents.prior is None:
        assert "this is where the inference ends" in text and "Rocky-system fraction" not in text


def test_the_page_is_quick_to_make_and_the_same_each_time(contents, tmp_path):
    start = time.process_time()
    first = write_report(contents, tmp_path / "a").read_bytes()
    spent = time.process_time() - start
    assert first == write_report(contents, tmp_path / "b").read_bytes()
    assert spent < 8  # about 2.5 s; other work on the same machine slows it


def test_importing_the_package_loads_no_matplotlib():
    code = "import sys, remnantstats, remnantstats.mission; assert 'matplotlib' not in sys.modules"
    subprocess.run([sys.executable, "-c", code], check=True)
