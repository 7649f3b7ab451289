"""A book in a CSV file: the same positions as inline, and every problem with its line and column name."""

from pathlib import Path

import pytest

from hedgesim.errors import ExperimentError
from hedgesim.experiment.loader import load_experiment
from hedgesim.experiment.schema import Position
from hedgesim.experiment.values import Duration, RelativeStrike

EXPERIMENT = """\
title: A book file
market:
  underlyings:
    CORVANE: {spot: 100, mark_vol: 22%}
book: book.csv
paths: {source: gbm, realised_vol: 19%, looks_per_day: 8}
schedules:
  - {every: 1h}
"""
HEADER = "underlying,type,strike,expiry,quantity,multiplier,mark_vol,premium\n"
ROW = "CORVANE,call,105,63d,-500,100,,\n"


@pytest.fixture(autouse=True)
def _in_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    Path("x.yaml").write_text(EXPERIMENT)


def problems_of(content: str | bytes, *overrides: str) -> list[str]:
    Path("book.csv").write_bytes(content if isinstance(content, bytes) else content.encode())
    with pytest.raises(ExperimentError) as caught:
        load_experiment("x.yaml", overrides)
    return [str(problem) for problem in caught.value.problems]


def book_of(content: str | bytes, *overrides: str) -> tuple[Position, ...]:
    Path("book.csv").write_bytes(content if isinstance(content, bytes) else content.encode())
    return load_experiment("x.yaml", overrides).experiment.book


def test_a_book_file_gives_the_positions_that_the_same_values_give_inline() -> None:
    rows = book_of(HEADER + ROW + ",put,95%,20/52,250,, 25% ,1.5\n")
    assert rows[0].strike == 105.0
    assert rows[0].mark_vol is None
    assert rows[1].underlying == "CORVANE"
    assert rows[1].strike == RelativeStrike(0.95)
    assert rows[1].expiry == Duration(20 / 52, "y")
    assert rows[1].multiplier == 1.0
    inline = (
        "book=[{underlying: CORVANE, type: call, strike: 105, expiry: 63d, quantity: -500, multiplier: 100},"
        "{type: put, strike: 95%, expiry: 20/52, quantity: 250, mark_vol: 25%, premium: 1.5}]"
    )
    assert load_experiment("x.yaml", [inline]).experiment.book == rows


def test_a_byte_order_mark_blank_lines_and_quotes_are_accepted() -> None:
    content = "\ufeff" + HEADER + "\r\n" + '"CORVANE",call,105,63d,"1_000",100,,\r\n,,,,,,,\r\n'
    (row,) = book_of(content)
    assert row.quantity == 1000.0


def test_the_file_stands_beside_the_experiment(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    Path("book.csv").write_text(HEADER + ROW)
    (tmp_path / "elsewhere").mkdir()
    monkeypatch.chdir(tmp_path / "elsewhere")
    assert len(load_experiment("../x.yaml").experiment.book) == 1


def test_an_override_changes_a_row_and_can_name_another_file() -> None:
    Path("other.csv").write_text(HEADER + ROW + ROW.replace("105", "110"))
    assert book_of(HEADER + ROW, "book.0.quantity=-7")[0].quantity == -7.0
    assert [row.strike for row in book_of(HEADER + ROW, "book=other.csv")] == [105.0, 110.0]
    assert problems_of(HEADER + ROW, "book.0.quantity=0") == [
        "--set book.0.quantity: 0 is not accepted - write a number other than 0"
    ]


def test_a_later_stage_can_point_at_a_cell() -> None:
    Path("book.csv").write_text(HEADER + ROW + ROW)
    source = load_experiment("x.yaml").source
    assert str(source.problem(("book", 1, "expiry"), "too late", "earlier")) == "book.csv:3: expiry: too late - earlier"
    assert str(source.problem(("book", 1, "premium"), "needed", "give one")) == "book.csv:3: premium: needed - give one"
    assert str(source.problem(("paths", "horizon"), "too late")) == "x.yaml:6:8: paths.horizon: too late"


SIMPLE = "type,strike,expiry,quantity\n"


@pytest.mark.parametrize(
    ("content", "expected"),
    [
        pytest.param(
            SIMPLE + "cal,105,63d,-500\nput,95%,63days,0\n",
            [
                "book.csv:2: type: unknown value 'cal' - did you mean 'call'?",
                "book.csv:3: expiry: unknown unit 'days' in '63days' - write 63d",
                "book.csv:3: quantity: 0 is not accepted - write a number other than 0",
            ],
            id="wrong cells in several rows",
        ),
        pytest.param(
            SIMPLE.replace("strike", "strik") + "call,105,63d,-500\nput,95%,63d,1\n",
            ["book.csv:1: strik: unknown column 'strik' - did you mean 'strike'?"],
            id="mistyped column, told once",
        ),
        pytest.param(
            "type,strike,expiry\ncall,105,63d\nput,95%,63d\n",
            ["book.csv:1: quantity: missing column - number of contracts, negative when short; or give notional"],
            id="missing column, told once",
        ),
        pytest.param(
            SIMPLE.replace("\n", ",trader\n") + "call,105,63d,-500,\n",
            [
                "book.csv:1: trader: unknown column 'trader' - the columns are underlying, type, strike, expiry, "
                "quantity, notional, multiplier, mark_vol, hedge_vol, premium, settlement"
            ],
            id="column that means nothing",
        ),
        pytest.param(
            SIMPLE.replace("quantity", "strike,quantity") + "call,105,63d,105,-500\n",
            ["book.csv:1: strike: column 'strike' twice - keep one of the two"],
            id="column twice",
        ),
        pytest.param(
            SIMPLE.replace("\n", ",\n") + "call,105,63d,-500,\n",
            ["book.csv:1: column 5 has no name - name it, or remove it"],
            id="column without a name",
        ),
        pytest.param(
            SIMPLE + "call,105,63d,-500,7\n",
            ["book.csv:2: 5 cells under 4 columns - remove cells, or name the columns"],
            id="row too long",
        ),
        pytest.param(
            SIMPLE + "call,,63d,-500\n",
            ["book.csv:2: strike: missing - a price above 0, or a percentage of the spot at inception such as 105%"],
            id="empty cell",
        ),
        pytest.param(
            SIMPLE + "call,105,63d\n",
            ["book.csv:2: quantity: missing - number of contracts, negative when short; or give notional"],
            id="row too short",
        ),
        pytest.param(
            SIMPLE.replace("quantity", "quantity,notional") + "call,105,63d,-500,1e6\n",
            ["book.csv:2: notional: given beside quantity - keep one of the two"],
            id="two sizes",
        ),
        pytest.param(
            SIMPLE.replace("type", "underlying,type") + "CORVANE,call,105,63d,1\nCORVAN,call,105,63d,1\n",
            ["book.csv:3: underlying: unknown underlying 'CORVAN' - did you mean 'CORVANE'?"],
            id="unknown underlying",
        ),
        pytest.param(
            SIMPLE.replace("\n", ",mark_vol\n") + "call,105,63d,1,22\n",
            ["book.csv:2: mark_vol: 22 looks like a percentage - write 22%"],
            id="vol as number of percent",
        ),
        pytest.param(
            SIMPLE + "call,105,2027-06-01,1\n",
            [
                "book.csv:2: expiry: the date 2027-06-01 needs the date of the inception - give market.date, "
                "or write a duration"
            ],
            id="date without a market date",
        ),
        pytest.param(
            SIMPLE + 'call,"105,63d,1\n',
            ["book.csv:2: not CSV (unexpected end of data) - close every quote, and put text with a comma in quotes"],
            id="open quote",
        ),
        pytest.param(
            SIMPLE + '\ncall,105,63d,"1\n"\nput,0,63d,1\n',
            ["book.csv:5: strike: 0 is not a strike - write a price above 0, or a percentage of the spot: 105%"],
            id="lines are counted through blank and quoted lines",
        ),
        pytest.param(
            SIMPLE, ["book.csv: no position in it - write a row for each position below the columns"], id="no row"
        ),
        pytest.param(
            "", ["book.csv: the file is empty - begin with the columns type, strike, expiry, quantity"], id="empty file"
        ),
        pytest.param(
            SIMPLE.encode() + b"call,105,63d,\xa31\n",
            ["book.csv:2: not UTF-8 text - save the file as CSV in UTF-8"],
            id="latin-1",
        ),
    ],
)
def test_a_malformed_book_is_told_where_and_why(content: str | bytes, expected: list[str]) -> None:
    assert problems_of(content) == expected


def test_problems_of_the_experiment_come_before_those_of_its_book() -> None:
    assert problems_of(SIMPLE + "call,0,63d,1\n", "study.confidence=95") == [
        "--set study.confidence: 95 looks like a percentage - write 95%",
        "book.csv:2: strike: 0 is not a strike - write a price above 0, or a percentage of the spot: 105%",
    ]


def test_a_book_file_that_is_not_there() -> None:
    with pytest.raises(ExperimentError) as caught:
        load_experiment("x.yaml")
    assert str(caught.value) == (
        "x.yaml:5:7: book: book.csv cannot be read (no such file or directory) - name a CSV file"
    )
