"""The review pack: every kind of run renders, nothing is clipped or overlaps, and the pages say what the study says."""

import math
import re
from dataclasses import replace
from itertools import combinations

import numpy as np
import pytest
import report_builder
from pypdf import PdfReader
from report_sheets import CREATED, KINDS, SETTINGS, faults, made, page_texts, plain_sheets, sheets_of, texts

from hedgesim.report import write_report
from hedgesim.report.facts import CAUTION
from hedgesim.report.pack import build
from hedgesim.report.style import COMPONENT, report_style, schedule_shades, share_with_error, whole_clauses
from hedgesim.report.view import view_of
from hedgesim.study import study
from hedgesim.study.findings import sentence
from hedgesim.study.money import money, money_with_error, percent


@pytest.mark.parametrize("kind", KINDS)
def test_no_text_is_clipped_or_overlaps(kind):
    sheets, found = plain_sheets(kind)
    assert [f"page {k}: {fault}" for k, page in enumerate(found, start=1) for fault in page] == []
    assert all(len(texts(sheet.figure)) > 5 for sheet in sheets)


def test_the_walker_sees_planted_faults():
    sheets, _ = sheets_of("one schedule")
    with report_style():
        figure = sheets[0].figure
        figure.text(0.5, 0.5, "one text", fontsize=9)
        figure.text(0.5, 0.5, "another text", fontsize=9)
        figure.text(0.98, 0.6, "a text that leaves the page", fontsize=9)
        figure.text(0.3, 0.4, "fine print", fontsize=5)
        found = faults(figure)
    assert any("'one text' and 'another text'" in fault for fault in found)
    assert any(fault.startswith("off the page: 'a text that") for fault in found)
    assert "too small: 'fine print'" in found


AWKWARD = {
    "shortfall under a limit that none meets": ({"risk": "es975", "limit": 1.0}, {}),
    "variance as risk": ({"risk": "variance", "cost_of_risk": 1e-6}, {}),
    "mean of the total": ({"mean": "total"}, {}),
    "costs only": ({"cost_of_risk": 0.0}, {}),
    "everything tied": ({"confidence": 0.999999999}, {}),
    "long texts": (
        {},
        {
            "title": "A very long title of an experiment that a desk wrote in a hurry before the quarter-end review, "
            * 3,
            "experiment_name": "an_experiment_with_a_long_file_name_that_goes_on_and_on",
            "cautions": tuple(
                f"Caution {k}: this input was assumed and nobody has checked it against a quote yet, so beware."
                for k in range(14)
            ),
            "book_lines": tuple(
                f"CORVANE call, strike {k}, expiry 63d, quantity -500, multiplier 100, $mark$ 22 %" for k in range(160)
            ),
            "currency": "ZAR",
        },
    ),
}


@pytest.mark.parametrize(
    ("kind", "case"),
    [
        *(("ten schedules", case) for case in AWKWARD if case != "everything tied"),
        *(("forty schedules", case) for case in ("everything tied", "long texts")),
    ],
)
def test_awkward_settings_and_texts_render_without_overlap(kind, case):
    changes, facts_changes = AWKWARD[case]
    _, found = sheets_of(kind, facts_changes=facts_changes, **changes)
    assert [f"page {k}: {fault}" for k, page in enumerate(found, start=1) for fault in page] == []


@pytest.mark.parametrize("scale", [1e-4, 1.0, 1e4, 1e9])
def test_amounts_of_any_size_render_without_overlap(scale):
    book = report_builder.scaled(report_builder.ledger([1, 2, 6, 21], paths=400), scale)
    results, facts = study(book, report_builder.compiled([1, 2, 6, 21]), SETTINGS), report_builder.facts(book)
    results = replace(results, exactness=report_builder.exactness(results))
    with report_style():
        pages = [faults(sheet.figure) for sheet in build(view_of(results, book), facts, created=CREATED)]
    assert [fault for page in pages for fault in page] == []


def test_long_schedule_names_render_without_overlap():
    names = (
        "at the open and at the close",
        "every 2 looks or when the delta is off by 5 %",
        "every 6 looks",
        "a rule with a name of remarkable length",
    )
    book = replace(report_builder.ledger([1, 2, 6, 21], paths=400), schedules=names)
    compiled = replace(report_builder.compiled([1, 2, 6, 21]), names=names)
    results = study(book, compiled, SETTINGS)
    results = replace(results, exactness=report_builder.exactness(results))
    with report_style():
        pages = [faults(s.figure) for s in build(view_of(results, book), report_builder.facts(book), created=CREATED)]
    assert [fault for page in pages for fault in page] == []


@pytest.mark.parametrize("kind", ["ten schedules", "price history", "one inception"])
def test_pdf_text_holds_the_finding_the_cautions_and_the_hash(tmp_path, kind):
    results, facts = made(kind)
    write_report(results, facts, tmp_path, created=CREATED)
    pages = page_texts(tmp_path)
    assert sentence(results) in pages[0]
    assert CAUTION in pages[0]
    assert all(facts.experiment_hash in page and "2027-03-01" in page for page in pages)
    assert all(f"page {k} of {len(pages)}" in page for k, page in enumerate(pages, start=1))
    whole = " ".join(pages)
    assert all(
        line in whole for line in (*facts.market_lines, *facts.book_lines, *facts.method_lines, f"seed: {facts.seed}")
    )
    assert all(digest in whole.replace(" ", "") for digest in facts.hashes.values())


def test_thousands_of_positions_are_listed_up_to_a_limit_that_is_stated(tmp_path):
    results, facts = made("one schedule")
    lines = tuple(f"CORVANE call, strike {k}, 5 % of $spot$" for k in range(10_000))
    write_report(results, replace(facts, book_lines=lines), tmp_path, created=CREATED)
    pages = page_texts(tmp_path)
    assert len(pages) < 16
    whole = " ".join(pages)
    assert all(line in whole for line in lines[:300])
    assert lines[300] not in whole
    assert "and 9,700 more positions" in whole


def test_pdf_has_a_title_a_subject_and_the_date_of_the_run(tmp_path):
    results, facts = made("one schedule")
    write_report(results, facts, tmp_path, created=CREATED)
    about = PdfReader(tmp_path / "report.pdf").metadata
    assert about.title == facts.title
    assert sentence(results) in about.subject
    assert about.creation_date == CREATED


@pytest.mark.parametrize(
    ("kind", "pages", "pictures"),
    [("ten schedules", 11, 9), ("forty schedules", 12, 9), ("price history", 10, 8), ("one inception", 6, 4)],
)
def test_pages_and_pictures(tmp_path, kind, pages, pictures):
    results, facts = made(kind)
    written = write_report(results, facts, tmp_path, created=CREATED)
    assert len(PdfReader(written[0]).pages) == pages
    assert sorted(written[1:]) == sorted((tmp_path / "figures").glob("*.png"))
    assert len(written) - 1 == pictures
    assert written[0].stat().st_size < 3e6
    assert all(path.read_bytes().startswith(b"\x89PNG") for path in written[1:])


def test_same_run_gives_the_same_bytes_whatever_the_readers_settings(tmp_path):
    import matplotlib

    results, facts = made("ten schedules")
    first = write_report(results, facts, tmp_path / "a", created=CREATED)
    with matplotlib.rc_context({"font.size": 20, "axes.facecolor": "red", "pdf.fonttype": 3}):
        second = write_report(results, facts, tmp_path / "b", created=CREATED)
    assert [p.name for p in first] == [p.name for p in second]
    assert all(a.read_bytes() == b.read_bytes() for a, b in zip(first, second, strict=True))


def test_another_date_changes_the_pdf(tmp_path):
    results, facts = made("one schedule")
    first = write_report(results, facts, tmp_path / "a", created=CREATED)[0].read_bytes()
    second = write_report(results, facts, tmp_path / "b", created=CREATED.replace(day=2))[0].read_bytes()
    assert first != second


@pytest.mark.parametrize("kind", ["ten schedules", "price history", "two underlyings"])
def test_key_table_shows_the_figures_of_the_study(kind):
    results, _ = made(kind)
    sheets, _ = plain_sheets(kind)
    cells = [t.get_text() for t in sheets[0].figure.texts if t.get_gid() == "cell"]
    d, c = results.distribution, results.choice
    for k, name in enumerate(results.schedules):
        row = cells[cells.index(name) : cells.index(name) + 7]
        assert row[2] == money(c.mean_cost[k])
        assert row[3] == money_with_error(d.std[k], d.std_se[k])
        assert row[4] == money(d.es975[k])
        assert row[6] == money(c.objective[k])
        if results.variances.removable_share_se[k] == 0.0:
            assert row[5] == percent(results.variances.removable_share[k])
            continue
        shown, error = re.fullmatch(r"(-?[0-9.]+) % \(\u00b1([0-9.]+) %\)", row[5]).groups()
        half = 0.5 * 10.0 ** -len(shown.partition(".")[2]) * (1 + 1e-9)
        assert float(shown) == pytest.approx(100 * results.variances.removable_share[k], abs=half)
        assert float(error) == pytest.approx(100 * results.variances.removable_share_se[k], abs=half)


@pytest.mark.parametrize(
    ("value", "error", "shown"),
    [
        (0.818, 0.0013, "81.8 % (\u00b10.1 %)"),
        (0.98774, 0.00003, "98.774 % (\u00b10.003 %)"),
        (0.3, 0.096, "30.0 % (\u00b19.6 %)"),
        (0.5, 1e-7, "50.0000 % (\u00b1< 0.0001 %)"),
        (0.5, 0.0, "50 %"),
        (0.5, math.nan, "50 %"),
    ],
)
def test_a_share_carries_its_error_to_a_figure_that_says_something(value, error, shown):
    assert share_with_error(value, error) == shown


def test_long_notes_lose_whole_clauses_and_say_so():
    assert whole_clauses("one; two; three.", 100) == "one; two; three."
    assert whole_clauses("one; two; three.", 8) == "one; two; more in findings.json."


def test_schedules_outside_the_law_are_grouped_by_reason():
    every = [5, 4, 8, 10, 126]
    results = study(report_builder.ledger(every, paths=400), report_builder.compiled(every), SETTINGS)
    note = view_of(results, report_builder.ledger(every, paths=400)).law_note
    assert "every 5 looks, every 4 looks, every 8 looks, every 10 looks - intervals do not divide the life" in note
    assert "every 126 looks - does not rebalance" in note


def test_marks_of_the_choice_stand_beside_the_right_schedules():
    results, _ = made("ten schedules")
    sheets, _ = plain_sheets("ten schedules")
    cells = [t.get_text() for t in sheets[0].figure.texts if t.get_gid() == "cell"]
    marked = {name: cells[cells.index(name) + 7] for name in results.schedules}
    assert [n for n, m in marked.items() if "chosen" in m] == [results.schedules[results.choice.chosen]]
    tied = {n for k, n in enumerate(results.schedules) if results.choice.tied[k] and k != results.choice.chosen}
    assert {n for n, m in marked.items() if "tied" in m} == tied


def test_stacked_variance_parts_add_up_to_the_variance_of_the_total():
    results, facts = made("ten schedules")
    view = view_of(results, facts.ledger)
    sheets, _ = plain_sheets("ten schedules")
    axes = next(s for s in sheets if s.name == "variance").figure.axes[0]
    heights = np.array(
        [[bar.get_height() for bar in group] for group in axes.containers if len(group) == len(view.names)]
    )
    np.testing.assert_allclose(heights.sum(axis=0), view.std**2, rtol=1e-6)


def test_covariance_bars_add_up_to_the_whole():
    sheets, _ = plain_sheets("two underlyings")
    axes = next(s for s in sheets if s.name == "shares").figure.axes[0]
    widths = np.array([[bar.get_width() for bar in group] for group in axes.containers])
    # Parts below a thousandth of the largest are not drawn.
    np.testing.assert_allclose(widths.sum(axis=0), 1.0, atol=5e-3)


def test_exceedance_curve_is_the_share_of_larger_losses():
    results, facts = made("ten schedules")
    view = view_of(results, facts.ledger)
    sheets, _ = plain_sheets("ten schedules")
    axes = next(s for s in sheets if s.name == "distribution").figure.axes[1]
    thickest = max(axes.lines, key=lambda line: line.get_linewidth())
    losses = -facts.ledger.totals[view.rows[view.best]]
    for x, p in np.column_stack(thickest.get_data())[::20]:
        assert (losses >= x).mean() == pytest.approx(p)


def test_history_pages_say_that_the_floor_is_unknown():
    sheets, _ = plain_sheets("price history")
    words = " ".join(t.get_text() for s in sheets for t in s.figure.texts)
    assert "the floor is unknown" in words
    assert any(s.name == "rolling" for s in sheets)


def test_hidden_reference_schedule_appears_nowhere_but_as_reference():
    sheets, _ = plain_sheets("price history, every look not asked for")
    cells = [t.get_text() for s in sheets for t in s.figure.texts if t.get_gid() == "cell"]
    assert "every look" not in cells
    axes = next(s for s in sheets if s.name == "variance").figure.axes[0]
    assert any("trading at every look" in t.get_text() for t in axes.get_legend().get_texts())


def _linear(colour):
    channel = np.array([int(colour[k : k + 2], 16) / 255 for k in (1, 3, 5)])
    return np.where(channel <= 0.04045, channel / 12.92, ((channel + 0.055) / 1.055) ** 2.4)


def _lab(linear):
    xyz = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]]) @ linear
    f = np.cbrt(np.maximum(xyz / np.array([0.9505, 1.0, 1.089]), 1e-6))
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


# Machado, Oliveira and Fernandes (2009), IEEE Transactions on Visualization and Computer Graphics 15, severity 1, on
# linear RGB (from memory).
_BLINDNESS = {
    "none": np.eye(3),
    "protan": np.array(
        [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]]
    ),
    "deutan": np.array(
        [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]]
    ),
}


@pytest.mark.parametrize("sight", _BLINDNESS)
def test_components_of_one_chart_can_be_told_apart(sight):
    together = [
        "premium_edge",
        "revaluation",
        "vol_gap",
        "vol_mark",
        "jump",
        "sampling",
        "lag",
        "remainder",
        "costs",
        "funding",
    ]
    stack = ["floor", "removable", "costs"], ["reference", "removable", "costs"]
    for names in (together, *stack):
        seen = {n: _lab(np.clip(_BLINDNESS[sight] @ _linear(COMPONENT[n]), 0, 1)) for n in names}
        for a, b in combinations(names, 2):
            # Ten is several times the just noticeable difference of about 2.3 (Mahy et al. 1994, from memory).
            assert math.dist(seen[a], seen[b]) > 10, (a, b)


@pytest.mark.parametrize("count", [1, 2, 10, 40])
def test_schedule_shades_darken_from_rare_to_frequent(count):
    luminance = [float(np.array([0.2126, 0.7152, 0.0722]) @ _linear(shade)) for shade in schedule_shades(count)]
    assert luminance == sorted(luminance, reverse=True)
    assert len(set(schedule_shades(count))) == count
    assert luminance[0] < 0.5  # legible on white
