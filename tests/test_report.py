"""The review pack: every kind of run renders, nothing is clipped or overlaps, and the pages say what the study says."""

import json
import math
import re
from dataclasses import replace
from datetime import UTC, datetime
from functools import lru_cache
from itertools import combinations
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import report_builder
from matplotlib.text import Text
from pypdf import PdfReader

from hedgesim.experiment.run import run_file
from hedgesim.report import write_report
from hedgesim.report.facts import CAUTION
from hedgesim.report.pack import build
from hedgesim.report.style import COMPONENT, report_style, schedule_shades, share_with_error, whole_clauses
from hedgesim.report.view import view_of
from hedgesim.study import Settings, study
from hedgesim.study.findings import laws_off, sentence
from hedgesim.study.money import money, money_with_error, percent

CREATED = datetime(2027, 3, 1, 17, 30, tzinfo=UTC)
KINDS = {
    "ten schedules": {"every": [1, 2, 3, 6, 9, 14, 21, 42, 63, 126]},
    "one schedule": {"every": [6]},
    "forty schedules": {"every": list(range(1, 41)), "paths": 1000},
    "price history": {"every": [1, 2, 3, 5, 10, 21, 63], "replayed": True, "paths": 120},
    "price history, every look not asked for": {"every": [2, 6, 21], "replayed": True, "paths": 60},
    "one inception": {"every": [1, 3, 21], "replayed": True, "paths": 1},
    "two underlyings": {"every": [1, 2, 6, 21, 63], "underlyings": ("CORVANE", "TESSOVAR"), "paths": 1500},
}
SETTINGS = Settings(
    mean="costs", risk="std", cost_of_risk=0.03, limit=None, confidence=0.95, years=0.25, currency="EUR"
)
_cache = {}


def made(kind, **changes):
    """Study and facts of one kind of run."""
    key = (kind, tuple(sorted(changes.items())))
    if key not in _cache:
        arguments = KINDS[kind]
        book = report_builder.ledger(**arguments)
        hidden = tuple(n for n in book.schedules if n == "every look" and 1 not in arguments["every"])
        settings = replace(SETTINGS, hidden=hidden, **changes)
        compiled = report_builder.compiled(arguments["every"])
        done = study(book, compiled, settings)
        if not arguments.get("replayed"):
            done = replace(done, exactness=report_builder.exactness(done))
        _cache[key] = done, report_builder.facts(book)
    return _cache[key]


def texts(figure):
    """Visible texts and their boxes in pixels; tick labels beyond the view limits are never drawn."""
    unseen = set()
    for axes in [*figure.axes, *(inset for outer in figure.axes for inset in outer.child_axes)]:
        for axis in (axes.xaxis, axes.yaxis):
            low, high = sorted(axis.get_view_interval())
            slack = 1e-9 * (high - low)
            for tick in [*axis.get_major_ticks(), *axis.get_minor_ticks()]:
                if not low - slack <= tick.get_loc() <= high + slack:
                    unseen |= {tick.label1, tick.label2}
    renderer = figure.canvas.get_renderer()
    shown = [t for t in figure.findobj(Text) if t.get_visible() and t.get_text().strip() and t not in unseen]
    return [(t, t.get_window_extent(renderer)) for t in shown]


def faults(figure):
    """Texts that leave the page or run into another."""
    figure.canvas.draw()
    found = []
    width, height = figure.bbox.width, figure.bbox.height
    boxes = texts(figure)
    for text, box in boxes:
        if box.x0 < 0 or box.y0 < 0 or box.x1 > width or box.y1 > height:
            found.append(f"off the page: {text.get_text()!r}")
        if text.get_gid() != "footer" and box.y0 < height * 11.5 / 210:
            found.append(f"in the footer: {text.get_text()!r}")
        if text.get_fontsize() < 8.5:
            found.append(f"too small: {text.get_text()!r}")
    # The box of a line reaches beyond its ink by the leading; a point of shared edge is no overlap.
    x0, y0, x1, y1 = np.array([box.extents for _, box in boxes]).T
    across = np.minimum.outer(x1, x1) - np.maximum.outer(x0, x0)
    down = np.minimum.outer(y1, y1) - np.maximum.outer(y0, y0)
    for a, b in np.argwhere(np.triu((across > 1.0) & (down > 2.0), k=1)):
        found.append(f"overlap: {boxes[a][0].get_text()!r} and {boxes[b][0].get_text()!r}")
    return found


def sheets_of(kind, *, facts_changes=None, **changes):
    """Pages of one kind of run, each with its faults."""
    results, facts = made(kind, **changes)
    facts = replace(facts, **(facts_changes or {}))
    with report_style():
        sheets = build(view_of(results, facts.ledger), facts, created=CREATED)
        return sheets, [faults(sheet.figure) for sheet in sheets]


@lru_cache
def plain_sheets(kind):
    return sheets_of(kind)


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
    with report_style():
        pages = [
            faults(s.figure)
            for s in build(view_of(study(book, compiled, SETTINGS), book), report_builder.facts(book), created=CREATED)
        ]
    assert [fault for page in pages for fault in page] == []


def exact_sheets(kind, *, settings=SETTINGS, **changes):
    """Pages of a run beside a changed stand-in for its exact figures, by name."""
    _, facts = made(kind)
    compiled = report_builder.compiled(KINDS[kind]["every"])
    done = study(facts.ledger, compiled, settings)
    done = replace(done, exactness=report_builder.exactness(done, **changes))
    with report_style():
        sheets = build(view_of(done, facts.ledger), facts, created=CREATED)
        assert [fault for sheet in sheets for fault in faults(sheet.figure)] == []
    return done, {sheet.name: sheet for sheet in sheets}


def cells_of(sheet):
    return [t.get_text() for t in sheet.figure.texts if t.get_gid() == "cell"]


def words_of(sheet):
    return " ".join(t.get_text() for t in sheet.figure.texts)


def test_the_table_of_differences_shows_simulated_and_exact_figures_and_scores():
    results, _ = made("ten schedules")
    sheets, _ = plain_sheets("ten schedules")
    sheet = next(s for s in sheets if s.name == "exact")
    cells, agreement, d = cells_of(sheet), results.exactness.agreement, results.distribution
    shown = [name for name in results.schedules if name in cells]
    assert len(shown) >= 6
    assert results.schedules[results.choice.chosen] in shown
    scales = {"": 1.0, "k": 1e3, "m": 1e6}
    for k, name in enumerate(results.schedules):
        if name not in shown:
            continue
        row = cells[cells.index(name) : cells.index(name) + 7]
        assert row[1] == money_with_error(d.mean[k], d.mean_se[k])
        assert row[4] == money_with_error(d.std[k], d.std_se[k])
        for cell, value, error in ((row[2], agreement.mean[k], d.mean_se[k]), (row[5], agreement.std[k], d.std_se[k])):
            number, letter = re.fullmatch(r"(-?[0-9.]+)([km]?)", cell).groups()
            assert abs(float(number) * scales[letter] - value) <= 0.1 * error
        assert float(row[3]) == pytest.approx(agreement.z_mean[k], abs=0.05)
        assert float(row[6]) == pytest.approx(agreement.z_std[k], abs=0.05)


def test_exact_charts_draw_the_curve_with_its_optimum_and_the_schedules():
    results, _ = made("ten schedules")
    sheets, _ = plain_sheets("ten schedules")
    objective, cost = next(s for s in sheets if s.name == "exact").figure.axes[:2]
    curve = results.exactness.curve
    drawn = [np.column_stack(line.get_data()) for line in objective.lines]
    assert any(np.array_equal(xy, np.column_stack([curve.trades, curve.objective])) for xy in drawn)
    at_best = [[curve.trades[curve.best], curve.objective[curve.best]]]
    assert any(np.array_equal(xy, at_best) for xy in drawn)
    for k, n in zip(results.frequency.rows, results.frequency.trades, strict=True):
        assert any(np.array_equal(xy, [[n, results.choice.objective[k]]]) for xy in drawn)
    drawn = [np.column_stack(line.get_data()) for line in cost.lines]
    assert any(np.array_equal(xy, np.column_stack([curve.trades, curve.mean_cost])) for xy in drawn)
    law = results.exactness.laws[-1]
    assert any(len(xy) > 1 and np.allclose(law.curve(xy[:, 0]), xy[:, 1], rtol=1e-12) for xy in drawn)


def test_the_frequency_chart_draws_the_exact_curve_and_the_laws_that_hold():
    results, _ = made("ten schedules")
    sheets, _ = plain_sheets("ten schedules")
    axes = next(s for s in sheets if s.name == "variance").figure.axes[1]
    names = [t.get_text() for t in axes.get_legend().get_texts()]
    # Laws that are one line to the eye have one entry; one that does not hold has none.
    assert names == [
        "exact, without noise",
        "simulated \u00b1 1 se; open: not in the fit",
        "fitted law",
        "granularity and 1 alike",
        "two-term law",
    ]
    lines = {line.get_label(): np.column_stack(line.get_data()) for line in axes.lines}
    curve = results.exactness.curve
    exact = lines["exact, without noise"]
    np.testing.assert_array_equal(exact[:, 0], curve.trades)
    ratio = exact[:, 1] / curve.removable
    np.testing.assert_allclose(ratio, ratio[0], rtol=1e-12)
    for label, law in ((names[3], results.exactness.laws[0]), (names[4], results.exactness.laws[2])):
        np.testing.assert_allclose(lines[label][:, 1], law.curve(lines[label][:, 0]) * ratio[0], rtol=1e-12)
    known = results.frequency.law.removable(lines["fitted law"][:, 0]) * ratio[0]
    np.testing.assert_allclose(lines["fitted law"][:, 1], known, rtol=1e-12)


def test_laws_stand_beside_their_ratio_and_those_not_met_beside_the_reason():
    results, _ = made("ten schedules")
    sheets, _ = plain_sheets("ten schedules")
    sheet = next(s for s in sheets if s.name == "exact")
    cells, off = cells_of(sheet), laws_off(results)
    for law in results.exactness.laws:
        if law.holds:
            assert cells[cells.index(law.name) + 2] == f"{off[law.name]:.3f}"
    assert "square-root law" not in cells
    assert "square-root law - the book has 4 different options, the law is for one" in words_of(sheet)


@pytest.mark.parametrize("in_currency", [False, True])
def test_break_even_premiums_are_shown_in_vol_points_or_in_currency_only(in_currency):
    done, sheets = exact_sheets("ten schedules", in_currency=in_currency)
    sheet = sheets["break_even"]
    cells = cells_of(sheet)
    for row in done.exactness.break_even:
        shown = cells[cells.index(row.schedule) + 1 :]
        if in_currency:
            assert shown[:2] == [money(row.amount), money(row.cushion_amount)]
        else:
            vol, points, amount, cushion, cushion_amount = shown[:5]
            assert float(vol.removesuffix(" %")) == pytest.approx(100 * row.sold_vol, abs=0.005001)
            assert float(points) == pytest.approx(100 * row.vol_shift, abs=0.005001)
            assert float(cushion) == pytest.approx(100 * row.cushion, abs=0.005001)
            assert (amount, cushion_amount) == (money(row.amount), money(row.cushion_amount))
    assert ("In currency only: net vega" in words_of(sheet)) == in_currency
    ends = np.concatenate([c.get_offsets()[:, 0] for c in sheet.figure.axes[0].collections])
    told = done.exactness.break_even
    pairs = [(r.amount, r.cushion_amount) if in_currency else (100 * r.vol_shift, 100 * r.cushion) for r in told]
    np.testing.assert_allclose(np.sort(ends), np.sort(np.ravel(pairs)), rtol=1e-12)


def test_gain_of_exact_scaling_is_told_also_where_it_does_harm():
    _, sheets = exact_sheets("ten schedules")
    words = words_of(sheets["break_even"])
    assert "1.40 (\u00b10.10) for p01, 0.90 (\u00b10.10) for p05, 2.10 (\u00b10.10) for ES 97.5 %" in words
    assert "below 1 it does harm" in words


def test_a_reason_stands_in_the_place_of_exact_figures():
    reason = "the exact engine needs uncorrelated underlyings; simulate answers for correlated ones"
    _, sheets = exact_sheets("two underlyings", reason=reason)
    assert "break_even" not in sheets
    assert sheets["exact"].title == f"No exact figures: {reason}"
    assert "granularity" in cells_of(sheets["exact"])
    names = [t.get_text() for t in sheets["variance"].figure.axes[1].get_legend().get_texts()]
    assert "exact, without noise" not in names
    assert "two-term law" in names


@pytest.mark.parametrize(
    "changes",
    [{"risk": "es975"}, {"risk": "variance", "cost_of_risk": 1e-6}, {"mean": "total"}, {"cost_of_risk": 0.0}],
    ids=str,
)
@pytest.mark.parametrize("kind", ["ten schedules", "one schedule"])
def test_exact_pages_under_other_risks_and_means(kind, changes):
    done, sheets = exact_sheets(kind, settings=replace(SETTINGS, **changes))
    curve = done.exactness.curve
    if changes.get("risk") == "es975":
        assert "is off by more than 1.6 standard errors" in sheets["exact"].title
        assert "Where the optimum moves" not in words_of(sheets["exact"])
    else:
        assert f"{curve.trades[curve.best]:,} equal interval" in sheets["exact"].title


def test_pages_of_a_real_run_show_the_figures_of_its_tables(tmp_path):
    # Enough paths for the gain of exact scaling to be measured.
    path = Path(__file__).parents[1] / "configs" / "demo.yaml"
    folder = run_file(path, out=tmp_path / "demo", overrides=["paths.count=13000"], quiet=True)
    pages = page_texts(folder)
    curve, level = pd.read_csv(folder / "curve.csv"), pd.read_csv(folder / "break_even.csv").set_index("schedule")
    found = json.loads((folder / "findings.json").read_text())
    best = found["choice"]["schedule"]
    page = next(p for p in pages if "What the exact engine says" in p)
    trades = int(curve.N[curve.objective.idxmin()])
    assert (
        f"{trades} equal intervals are best at an objective of {money(curve.objective.min(), currency='EUR')}" in page
    )
    for moved in found["exact"]["sensitivities"]:
        assert f"{moved['change']} {moved['trades']} {money(moved['objective'])}" in page
    for law in found["exact"]["laws"]:
        if law["holds"]:
            assert f"{law['law_over_found_for_the_choice']:.3f}" in page
    page = next(p for p in pages if "the book breaks even" in p)
    assert f"at {100 * level.sold_vol[best]:.2f} % vol, {100 * abs(level.vol_shift[best]):.2f} points below" in page
    gained = found["exact"]["effective_paths_gained_by_exact_scaling"]["schedules"][best]
    assert all(f"{figure['value']:.2f} (\u00b1{figure['se']:.2f})" in page for figure in gained.values())
    whole = " ".join(pages)
    assert "realised vol 19%" in whole
    assert "strike 105," in whole


@pytest.mark.parametrize("kind", ["price history", "one inception"])
def test_price_histories_have_no_exact_pages(kind):
    sheets, _ = plain_sheets(kind)
    assert not {"exact", "break_even"} & {s.name for s in sheets}


def page_texts(folder):
    """Text of each page of the PDF, white space evened out."""
    return [re.sub(r"\s+", " ", page.extract_text()) for page in PdfReader(folder / "report.pdf").pages]


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
