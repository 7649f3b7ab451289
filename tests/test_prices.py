"""Price files read into clocks, days and prices; malformed files in test_prices_bad_input.py."""

import runpy
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from hedgesim.paths.prices import SeriesColumns, read_prices

CONFIGS = Path(__file__).parents[1] / "configs"


def read(tmp_path, text: str, *, day_count: str = "business-252", unit: float | None = None, **columns):
    file = tmp_path / "prices.csv"
    file.write_text(text, encoding="utf-8")
    series = columns or {"A": SeriesColumns("close")}
    return read_prices(file, time="time", time_unit_years=unit, series=series, day_count=day_count)


def test_business_days_count_rows_and_not_the_calendar(tmp_path):
    h = read(tmp_path, "time,close\n2024-01-05,100\n2024-01-08,101\n2024-01-09,102\n")
    assert h.clock.tolist() == [0.0, 1.0, 2.0]
    assert h.t.tolist() == [0.0, 1 / 252, 2 / 252]
    assert h.s.tolist() == h.t.tolist()
    assert h.is_open.all()
    assert h.is_close.all()
    assert h.label == ("2024-01-05", "2024-01-08", "2024-01-09")
    assert h.line.tolist() == [2, 3, 4]
    assert np.diff(h.date).tolist() == [3, 1]
    assert h.price.tolist() == [[100.0, 101.0, 102.0]]
    assert h.mark_vol is None
    assert h.notes == ()


def test_calendar_days_count_weekends(tmp_path):
    h = read(tmp_path, "time,close\n2024-01-05,100\n2024-01-08,101\n2024-01-09,102\n", day_count="act-365")
    assert h.clock.tolist() == [0.0, 3.0, 4.0]
    assert h.t.tolist() == [0.0, 3 / 365, 4 / 365]


INTRADAY = (
    "time,close\n"
    "2024-01-05T10:00,100\n2024-01-05T13:00,101\n2024-01-05T16:00,102\n"
    "2024-01-08T10:00,103\n2024-01-08T12:00,104\n2024-01-08T14:00,105\n2024-01-08T16:00,106\n"
    "2024-01-09T13:00,107\n"
)


def test_rows_of_a_business_day_divide_it_and_its_close_is_a_whole_day(tmp_path):
    h = read(tmp_path, INTRADAY)
    assert h.clock.tolist() == [0.0, 0.5, 1.0, 1.25, 1.5, 1.75, 2.0, 3.0]
    assert np.flatnonzero(h.is_open).tolist() == [0, 3, 7]
    assert np.flatnonzero(h.is_close).tolist() == [2, 6, 7]


def test_a_history_that_begins_at_a_close_starts_its_clock_there(tmp_path):
    h = read(tmp_path, "time,close\n2024-01-05T16:00,102\n2024-01-08T10:00,103\n2024-01-08T16:00,106\n")
    assert h.clock.tolist() == [0.0, 0.5, 1.0]
    assert h.is_close.tolist() == [True, False, True]


def test_calendar_timestamps_are_elapsed_time(tmp_path):
    h = read(tmp_path, INTRADAY, day_count="act-365")
    assert h.clock == pytest.approx([0, 3 / 24, 6 / 24, 3, 3 + 2 / 24, 3 + 4 / 24, 3 + 6 / 24, 4 + 3 / 24])
    assert h.t == pytest.approx(h.clock / 365)
    assert np.flatnonzero(h.is_close).tolist() == [2, 6, 7]


@pytest.mark.parametrize("zone", ["Z", "+00:00", "-05:00"])
def test_one_zone_keeps_the_local_day(tmp_path, zone):
    text = f"time,close\n2024-01-05 23:30:00{zone},100\n2024-01-06 00:30:00{zone},101\n"
    h = read(tmp_path, text, day_count="act-365")
    assert h.is_close.tolist() == [True, True]
    assert h.clock == pytest.approx([0.0, 1 / 24])


@pytest.mark.parametrize("day_count", ["business-252", "act-365"])
def test_numbers_are_elapsed_units_under_both_day_counts(tmp_path, day_count):
    h = read(tmp_path, "time,close\n3,100\n4,101\n6,102\n", unit=1 / 52, day_count=day_count)
    assert h.t == pytest.approx([0.0, 1 / 52, 3 / 52])
    assert h.clock == pytest.approx(h.t * (252 if day_count == "business-252" else 365))
    assert h.is_close.all()
    assert h.date is None


def test_numbers_within_days_close_at_whole_days(tmp_path):
    rows = "".join(f"{n / 4},100\n" for n in range(9))
    h = read(tmp_path, "time,close\n" + rows, unit=1 / 252)
    assert np.flatnonzero(h.is_close).tolist() == [0, 4, 8]
    assert np.flatnonzero(h.is_open).tolist() == [0, 1, 5]


def test_mark_vols_are_scaled_and_empty_ones_stay_open(tmp_path):
    h = read(
        tmp_path,
        "time,a,b,iv\n2024-01-05,100,7,22\n2024-01-08,101,8,\n",
        A=SeriesColumns("a"),
        B=SeriesColumns("b", "iv", 0.01),
    )
    assert h.names == ("A", "B")
    assert h.price.tolist() == [[100.0, 101.0], [7.0, 8.0]]
    assert np.isnan(h.mark_vol[0]).all()
    assert h.mark_vol[1, 0] == 0.22
    assert np.isnan(h.mark_vol[1, 1])
    assert h.mark_vol_column == (None, "iv")


def test_byte_order_mark_blank_lines_spaces_and_quotes_are_read(tmp_path):
    h = read(tmp_path, '\ufefftime , close\n\n2024-01-05,"100.5"\n,\n2024-01-08, 1.01e2\n')
    assert h.price.tolist() == [[100.5, 101.0]]
    assert h.line.tolist() == [3, 5]


def test_arrays_are_read_only(tmp_path):
    h = read(tmp_path, "time,close\n2024-01-05,100\n2024-01-08,101\n")
    for array in (h.t, h.s, h.clock, h.price, h.is_open, h.is_close, h.line, h.date):
        assert not array.flags.writeable


def test_long_gap_between_dates_is_a_note(tmp_path):
    h = read(tmp_path, "time,close\n2024-01-04,100\n2024-01-05,100\n2024-01-11,101\n2024-01-12,101\n")
    assert h.notes == ("1 interval is longer than 5 calendar days; the longest is 6, from 2024-01-05 to 2024-01-11",)


def test_a_weekend_and_a_holiday_are_no_gap(tmp_path):
    assert read(tmp_path, "time,close\n2024-03-27,1\n2024-03-28,1\n2024-04-02,1\n2024-04-03,1\n").notes == ()


def test_long_interval_between_numbers_is_a_note(tmp_path):
    h = read(tmp_path, "time,close\n0,1\n1,1\n2,1\n5,1\n6,1\n10,1\n11,1\n", unit=1 / 52)
    assert h.notes == ("1 interval is longer than 3 units; the longest is 4, from 6 to 10",)


def test_long_interval_within_a_day_is_a_note_and_the_night_is_none(tmp_path):
    times = [f"2024-01-0{d}T{h}" for d in (4, 5) for h in ("10:00", "10:30", "11:00", "11:30", "15:00", "15:30")]
    h = read(tmp_path, "time,close\n" + "".join(f"{t},1\n" for t in times))
    assert h.notes == (
        "2 intervals are longer than 90 minutes within a day; "
        "the longest is 210, from 2024-01-04T11:30 to 2024-01-04T15:00",
    )


def test_fractions_read_in_per_cent_are_a_note(tmp_path):
    h = read(
        tmp_path, "time,close,iv\n2024-01-05,100,0.22\n2024-01-08,101,0.25\n", A=SeriesColumns("close", "iv", 0.01)
    )
    assert h.notes == ("column 'iv' is read in per cent, and no vol exceeds 0.25%",)


def test_reading_prices_loads_no_heavy_module(tmp_path):
    (tmp_path / "p.csv").write_text("time,close\n2024-01-05,100\n2024-01-08,101\n")
    code = (
        "import sys\n"
        "from hedgesim.paths.prices import SeriesColumns, read_prices\n"
        "import hedgesim.engine.inceptions\n"
        "read_prices('p.csv', time='time', time_unit_years=None, series={'A': SeriesColumns('close')}, day_count='act-365')\n"
        "print([m for m in ('numba', 'pandas', 'matplotlib', 'scipy.stats') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=tmp_path, capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_example_prices_are_what_their_generator_writes(tmp_path):
    made = runpy.run_path(str(CONFIGS / "make_prices.py"))
    made["main"].__globals__["OUT"] = tmp_path / "again.csv"
    made["main"]()
    committed = CONFIGS / "tessovar_closes.csv"
    assert (tmp_path / "again.csv").read_bytes() == committed.read_bytes()
    h = read_prices(
        committed,
        time="date",
        time_unit_years=None,
        series={"TESSOVAR": SeriesColumns("close", "iv", 0.01)},
        day_count="business-252",
    )
    assert h.rows == 1512
    assert h.notes == ()
    assert h.label[0] == "2020-01-06"
