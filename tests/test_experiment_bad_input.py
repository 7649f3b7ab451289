"""Malformed experiments: the whole message, line and column included."""

import json
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from hedgesim.errors import ExperimentError, Problem
from hedgesim.experiment.loader import load_experiment
from hedgesim.experiment.nodes import compose

BASE = """\
title: Two calls
market:
  date: 2027-03-01
  rate: 3%
  underlyings:
    CORVANE: {spot: 100, mark_vol: 22%}
book:
  - {type: call, strike: 105, expiry: 63d, quantity: -500}
  - {type: put, strike: 95%, expiry: 2027-06-01, notional: 1e6}
paths:
  source: gbm
  realised_vol: 19%
  looks_per_day: 8
schedules:
  - {every: 1h}
  - {at: [open, close]}
costs: {half_spread: 2bp}
"""

PRICES = """\
title: On the price history
market:
  underlyings:
    CORVANE: {}
book:
  - {type: call, strike: 105%, expiry: 20/52, quantity: -500}
paths:
  source: prices
  file: closes.csv
  time: {column: week, unit: 1/52}
  series:
    CORVANE: {price: close, mark_vol: {column: iv, unit: percent}}
  inceptions: {every: 4 looks}
hedge: {remark: daily}
schedules:
  - {every: 1w}
"""

THREE = """\
title: Three underlyings
market:
  underlyings:
    CORVANE: {spot: 100, mark_vol: 22%}
    BELTON: {spot: 50, mark_vol: 30%}
    DARROW: {spot: 20, mark_vol: 25%}
  correlation:
    CORVANE: {BELTON: 90%, DARROW: 90%}
    BELTON: {DARROW: 70%}
book:
  - {underlying: CORVANE, type: call, strike: 105, expiry: 63d, quantity: -5}
  - {underlying: BELTON, type: call, strike: 55, expiry: 63d, quantity: -5}
  - {underlying: DARROW, type: put, strike: 19, expiry: 63d, quantity: 5}
paths: {source: gbm, realised_vol: {CORVANE: 20%, BELTON: 30%, DARROW: 25%}, looks: 63}
schedules:
  - {every: 1 look}
"""

PRICE_FILE = "week,close,iv\n0,100,22\n1,101,21\n"


def cases() -> list[object]:
    """Read blocks of: # name [valid experiment], - text replaced in it, + replacement, > each message after the file."""
    found = []
    for block in (Path(__file__).parent / "bad_input" / "experiments.txt").read_text().split("\n\n"):
        name, old, new, *expected = block.strip().split("\n")
        valid = {"[BASE]": BASE, "[PRICES]": PRICES, "[THREE]": THREE}[name.split()[-1]]
        old, new = (text[2:].encode().decode("unicode_escape") for text in (old, new))
        assert all(line.startswith("> ") for line in expected)
        found.append(pytest.param(valid, old, new, [line[2:] for line in expected], id=name[2:].rpartition(" ")[0]))
    return found


@pytest.fixture(autouse=True)
def _in_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    Path("closes.csv").write_text(PRICE_FILE)


def problems_of(content: str | bytes, *overrides: str) -> list[str]:
    Path("x.yaml").write_bytes(content if isinstance(content, bytes) else content.encode())
    with pytest.raises(ExperimentError) as caught:
        load_experiment("x.yaml", overrides)
    assert str(caught.value) == "\n".join(str(problem) for problem in caught.value.problems)
    return [str(problem) for problem in caught.value.problems]


@pytest.mark.parametrize("valid", [BASE, PRICES, THREE])
def test_the_experiments_that_the_cases_start_from_are_valid(valid: str) -> None:
    Path("x.yaml").write_text(valid)
    assert load_experiment("x.yaml").experiment.schedules


@pytest.mark.parametrize(("valid", "old", "new", "expected"), cases())
def test_a_malformed_experiment_is_told_where_and_why(valid: str, old: str, new: str, expected: list[str]) -> None:
    assert old in valid
    assert problems_of(valid.replace(old, new, 1)) == [f"x.yaml:{line}" for line in expected]


@pytest.mark.parametrize(
    ("content", "expected"),
    [
        pytest.param(b"", "x.yaml:1:1: the file is empty - begin with title: and market:", id="empty"),
        pytest.param(b"# nothing\n", "x.yaml:1:1: the file is empty - begin with title: and market:", id="comment"),
        pytest.param(b"- 1\n", "x.yaml:1:1: a list where keys are expected - begin with title: and market:", id="list"),
        pytest.param(b"title: a\nmarket: \xff\n", "x.yaml:2:9: not UTF-8 text - save the file in UTF-8", id="latin-1"),
        pytest.param("title: a\n".encode("utf-16"), "x.yaml:1:1: not UTF-8 text - save the file in UTF-8", id="utf-16"),
    ],
)
def test_a_file_that_is_no_mapping_of_text(content: bytes, expected: str) -> None:
    assert problems_of(content) == [expected]


def test_a_byte_order_mark_is_accepted() -> None:
    Path("x.yaml").write_bytes(b"\xef\xbb\xbf" + BASE.encode())
    assert load_experiment("x.yaml").experiment.title == "Two calls"


def test_a_file_that_does_not_exist_or_is_a_folder() -> None:
    for name, reason in (("nowhere.yaml", "no such file or directory"), (".", "is a directory")):
        with pytest.raises(ExperimentError) as caught:
            load_experiment(name)
        assert str(caught.value) == f"{name}: cannot be read ({reason}) - name an experiment file"


def test_a_file_larger_than_the_bound_is_not_read(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("hedgesim.experiment.loader.MOST_BYTES", 10)
    assert problems_of(BASE) == ["x.yaml: is larger than 0 MB - name an experiment file"]


scalars = st.one_of(
    st.none(),
    st.booleans(),
    st.integers(),
    st.floats(),
    st.text(max_size=8),
    st.sampled_from(["22%", "2bp", "1d", "4 looks", "20/0", "2027-01-01", "never", "mark", "prices", "closes.csv"]),
)
anything = st.recursive(
    scalars, lambda inner: st.lists(inner, max_size=2) | st.dictionaries(st.text(max_size=4), inner)
)


def places_in(data: Any, path: tuple[str | int, ...] = ()) -> list[tuple[str | int, ...]]:
    items = data.items() if isinstance(data, dict) else enumerate(data) if isinstance(data, list) else ()
    return [place for key, value in items for place in [(*path, key), *places_in(value, (*path, key))]]


@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)
@given(st.sampled_from([BASE, PRICES, THREE]), st.data())
def test_any_value_anywhere_loads_or_is_told_with_its_line(valid: str, data: st.DataObject) -> None:
    content = compose(valid, file="x.yaml").data
    *above, last = data.draw(st.sampled_from(places_in(content)))
    container = content
    for key in above:
        container = container[key]
    container[last] = data.draw(anything)
    Path("x.yaml").write_text(json.dumps(content), encoding="utf-8")
    found: tuple[Problem, ...] = ()
    try:
        load_experiment("x.yaml")
    except ExperimentError as error:
        found = error.problems
        told = bool(found)
    else:
        told = True
    assert told
    assert all(problem.message and (problem.line is not None or problem.file != "x.yaml") for problem in found)


def test_everything_wrong_is_reported_at_once_in_the_order_of_the_file() -> None:
    text = BASE.replace("rate: 3%", "rate: 3").replace("strike: 105", "strik: 105").replace("every: 1h", "every: 1x")
    assert problems_of(text, "study.confidence=95", "costs.per_unit=-1") == [
        "x.yaml:4:9: market.rate: 3 looks like a percentage - write 3%",
        "x.yaml:8:18: book.0.strik: unknown key 'strik' - did you mean 'strike'?",
        "x.yaml:15:13: schedules.0.every: unknown unit 'x' in '1x' - write a number with min, h, d, w or y, such as "
        "30min or 5d; a bare number or 20/52 is years",
        "--set costs.per_unit: -1 is out of range - write a number of at least 0",
        "--set study.confidence: 95 looks like a percentage - write 95%",
    ]


def test_sections_with_faults_do_not_hide_faults_between_sections() -> None:
    text = BASE.replace("rate: 3%", "rate: 3").replace("spot: 100, ", "").replace("[open, close]", "[open, noon]")
    assert problems_of(text.replace("realised_vol: 19%", "realised_vol: {BELTON: 19}")) == [
        "x.yaml:4:9: market.rate: 3 looks like a percentage - write 3%",
        "x.yaml:6:14: market.underlyings.CORVANE.spot: missing - price at inception, in currency",
        "x.yaml:12:17: paths.realised_vol: nothing for CORVANE - give every underlying",
        "x.yaml:12:18: paths.realised_vol.BELTON: unknown underlying 'BELTON' - market.underlyings has CORVANE",
        "x.yaml:12:26: paths.realised_vol.BELTON: 19 looks like a percentage - write 19%",
        "x.yaml:16:10: schedules.1.at: unknown value 'noon' - write open or close",
    ]


@pytest.mark.parametrize(
    ("override", "expected"),
    [
        ("costs.half_sprd=3bp", "--set costs.half_sprd: unknown key 'half_sprd' - did you mean 'half_spread'?"),
        ("costs", "--set costs: not path.to.key=value - write it as --set costs.half_spread=3bp"),
        ("=3", "--set : not path.to.key=value - write it as --set costs.half_spread=3bp"),
        ("book.2.quantity=1", "--set book.2.quantity: no item '2' in book - items are numbered 0 to 1"),
        ("book.one.quantity=1", "--set book.one.quantity: no item 'one' in book - items are numbered 0 to 1"),
        ("title.x=1", "--set title.x: title is 'Two calls', it has no keys - write --set title=value"),
        ("paths.seed=x", "--set paths.seed: 'x' is not a number - write a plain number"),
        ("costs={half_spread: 3}", "--set costs: costs.half_spread: 3 looks like basis points - write 3bp"),
        (
            "paths.horizon=[1",
            "--set paths.horizon: expected ',' or ']', but got '<stream end>' while parsing a flow sequence - check indentation, "
            "brackets, quotes and the colon after each key",
        ),
        ("paths.seed=", "--set paths.seed: empty - give a number or delete the line"),
        ("paths.seed=*a", "--set paths.seed: the alias *a is not accepted - write the value out"),
    ],
)
def test_a_wrong_override_is_told_by_its_path(override: str, expected: str) -> None:
    assert problems_of(BASE, override) == [expected]
