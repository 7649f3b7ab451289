"""Pages of what needs no random numbers: exact figures beside simulated ones, laws, break-even premiums."""

import json
import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import report_builder
from report_sheets import CREATED, KINDS, SETTINGS, cells_of, faults, made, page_texts, plain_sheets, words_of

from hedgesim.experiment.run import run_file
from hedgesim.report.pack import build
from hedgesim.report.style import report_style
from hedgesim.report.view import view_of
from hedgesim.study import study
from hedgesim.study.findings import laws_off
from hedgesim.study.money import money, money_with_error


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


def test_a_choice_as_good_as_the_optimum_is_called_so_and_another_by_its_distance():
    done, sheets = exact_sheets("ten schedules")
    curve, best = done.exactness.curve, done.choice.chosen
    figures = done.exactness.agreement.figures
    more = -figures.mean_costs[best] + SETTINGS.cost_of_risk * figures.std[best] - curve.objective[curve.best]
    assert abs(more) > 0.01 * curve.objective[curve.best]
    told = f"{money(abs(more), currency='EUR')} {'more' if more > 0 else 'less'}"
    assert sheets["exact"].title.endswith(f"{done.schedules[best]}: {told}")
    level = replace(curve, objective=curve.objective + more * (1.0 + 1e-6))
    level = replace(done, exactness=replace(done.exactness, curve=level))
    with report_style():
        pages = build(view_of(level, made("ten schedules")[1].ledger), made("ten schedules")[1], created=CREATED)
    assert next(s for s in pages if s.name == "exact").title.endswith(f"{done.schedules[best]} is as good")


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
