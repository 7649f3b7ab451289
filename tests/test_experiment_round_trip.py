"""An experiment written out loads to an equal one; defaults, overrides, digest and JSON Schema."""

import re
from pathlib import Path
from typing import Any

import pytest
import yaml
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from hedgesim.experiment.loader import dump_experiment, load_experiment
from hedgesim.experiment.schema import CostTerms, Experiment, by_underlying, json_schema
from hedgesim.experiment.values import Duration

DEMO = """\
title: Short-dated call book, quarter-end review
market:
  date: 2027-03-01               # optional; needed when expiries are dates
  day_count: business-252
  rate: 3%
  underlyings:
    CORVANE: {spot: 100, yield: 1%, mark_vol: 22%, hedge_vol: 22%}
book:
  - {underlying: CORVANE, type: call, strike: 105, expiry: 63d, quantity: -500, multiplier: 100}
paths:
  source: gbm
  realised_vol: 19%
  drift: 4%
  count: 200_000
  looks_per_day: 8
  overnight: 0%
  seed: 7
  horizon: null
hedge: {vol: mark, initial: 0}
schedules:
  - {every: 1h}
  - {every: never}
  - {every: 4 looks}
  - {at: [open, close]}
  - {trades: 12}
costs: {half_spread: 2bp, per_unit: 0.005, per_trade: 0}
study: {mean: costs, risk: std, cost_of_risk: 0.5, limit: null, confidence: 95%}
report: {currency: EUR}
"""
SHORTEST = """\
title: Shortest
market: {underlyings: {CORVANE: {spot: 100, mark_vol: 22%}}}
book: [{type: call, strike: 105, expiry: 0.25, quantity: -1}]
paths: {source: gbm, realised_vol: 19%, looks: 63}
schedules: [{every: 1 look}]
"""


@pytest.fixture
def demo(tmp_path: Path) -> Path:
    path = tmp_path / "demo.yaml"
    path.write_text(DEMO)
    return path


names = st.lists(st.from_regex(r"[A-Z][A-Z0-9.&/_-]{0,6}", fullmatch=True), min_size=1, max_size=3, unique=True)
vols = st.one_of(st.floats(0.001, 5), st.decimals(1, 500, places=2).map(lambda d: f"{d}%"))
rates = st.one_of(st.floats(-1, 1), st.decimals(-100, 100, places=3).map(lambda d: f"{d}%"))
sizes = st.one_of(st.floats(-1e9, -1e-3), st.floats(1e-3, 1e9), st.integers(1, 10**6))
costs = st.fixed_dictionaries(
    {}, optional={"half_spread": st.floats(0, 0.99), "per_unit": st.floats(0, 10), "per_trade": st.floats(0, 1e4)}
)
durations = st.one_of(
    st.floats(1e-3, 50),
    st.builds(lambda n, u: f"{n}{u}", st.integers(1, 500), st.sampled_from(["min", "h", "d", "w"])),
    st.builds(lambda n: f"{n}/52", st.integers(1, 52)),
)
# Words that look like other scalars, and marks that YAML gives a meaning.
titles = st.one_of(
    st.sampled_from(
        ["no", "null", "~", "9:30", "1e-4", "0123", "200_000", "- a", "a: b", "a #b", "<<", "{a}", "*a", "'"]
    ),
    st.text(st.characters(codec="utf-8"), min_size=1, max_size=200).filter(
        lambda t: t.isprintable() and bool(t.strip())
    ),
)


@st.composite
def schedules(draw: Any) -> list[dict[str, Any]]:
    rules = st.one_of(
        durations.map(lambda d: {"every": d}),
        st.integers(1, 500).map(lambda n: {"every": f"{n} looks"}),
        st.just({"every": "never"}),
        st.integers(1, 500).map(lambda n: {"trades": n}),
    )
    count = draw(st.integers(1, 4))
    return [{**draw(rules), "name": f"rule {i}"} for i in range(count)]


@st.composite
def experiments(draw: Any) -> dict[str, Any]:
    listed, gbm = draw(names), draw(st.booleans())
    series_marks = not gbm and draw(st.booleans())
    underlyings = {}
    for name in listed:
        one: dict[str, Any] = {"kind": draw(st.sampled_from(["spot", "future"]))}
        if one["kind"] == "spot":
            one["yield"] = draw(rates)
        if gbm:
            one["spot"] = draw(st.floats(1e-3, 1e6))
        if not series_marks:
            one["mark_vol"] = draw(vols)
        underlyings[name] = one
    market: dict[str, Any] = {"date": "2027-03-01", "rate": draw(rates), "underlyings": underlyings}
    if gbm and len(listed) > 1:
        # Small correlations are always possible together: the matrix is diagonally dominant.
        market["correlation"] = {
            a: {b: draw(st.floats(-0.4, 0.4)) for b in listed[i + 1 :]} for i, a in enumerate(listed[:-1])
        }
    book = []
    for name in listed:
        position = {
            "underlying": name,
            "type": draw(st.sampled_from(["call", "put"])),
            "strike": draw(st.one_of(st.floats(1e-3, 1e6), st.decimals(1, 300, places=2).map(lambda d: f"{d}%"))),
            "expiry": draw(st.one_of(durations, st.just("2027-06-01"))),
            "settlement": draw(st.sampled_from(["cash", "physical"])),
            draw(st.sampled_from(["quantity", "notional"])): draw(sizes),
        }
        if "quantity" in position and draw(st.booleans()):
            position["multiplier"] = draw(st.floats(1e-3, 1e4))
        position |= draw(st.fixed_dictionaries({}, optional={"premium": st.floats(0, 1e4), "hedge_vol": vols}))
        book.append(position)
    if gbm:
        paths: dict[str, Any] = {
            "source": "gbm",
            "realised_vol": draw(st.one_of(vols, st.fixed_dictionaries(dict.fromkeys(listed, vols)))),
            "drift": draw(rates),
            "count": draw(st.integers(2, 10**9)),
            "seed": draw(st.integers(0, 2**64 - 1)),
            draw(st.sampled_from(["looks", "looks_per_day"])): draw(st.integers(1, 1000)),
        }
    else:
        column: Any = {"column": "iv", "unit": "percent"}
        columns = {"price": "close"} | ({"mark_vol": column} if series_marks else {})
        paths = {
            "source": "prices",
            "file": "closes.csv",
            "time": draw(st.sampled_from(["date", {"column": "week", "unit": "1/52"}])),
            "series": dict.fromkeys(listed, columns),
            "inceptions": draw(st.sampled_from(["once", {"every": "1d"}, {"every": "4 looks"}])),
        }
    paths["horizon"] = draw(st.one_of(st.none(), durations))
    return {
        "title": draw(titles),
        "market": market,
        "book": book,
        "paths": paths,
        "hedge": {
            "vol": draw(st.one_of(st.just("mark"), vols)),
            "initial": draw(st.one_of(st.floats(-1e6, 1e6), st.fixed_dictionaries({listed[0]: st.floats(-1e6, 1e6)}))),
            "remark": "daily" if series_marks and draw(st.booleans()) else "inception",
        },
        "schedules": draw(schedules()),
        "costs": {**draw(costs), "by_underlying": {listed[-1]: draw(costs)}},
        "study": {"limit": draw(st.one_of(st.none(), st.floats(1e-3, 1e9))), "confidence": draw(st.floats(0.51, 0.99))},
        "report": {"currency": draw(st.from_regex("[A-Z]{3}", fullmatch=True))},
    }


@settings(suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow], deadline=None)
@given(data=experiments())
def test_an_experiment_written_out_loads_to_an_equal_one(data: dict[str, Any], tmp_path: Path) -> None:
    experiment = Experiment.model_validate(data)
    (tmp_path / "closes.csv").write_text("date,week,close,iv\n")
    (tmp_path / "x.yaml").write_bytes(dump_experiment(experiment).encode())
    again = load_experiment(tmp_path / "x.yaml").experiment
    assert again == experiment
    assert dump_experiment(again) == dump_experiment(experiment)


def test_the_written_experiment_states_every_default(tmp_path: Path) -> None:
    (tmp_path / "x.yaml").write_text(SHORTEST)
    written = dump_experiment(load_experiment(tmp_path / "x.yaml").experiment)
    assert yaml.load(written, Loader=yaml.BaseLoader) == {
        "title": "Shortest",
        "market": {
            "day_count": "business-252",
            "rate": "0",
            "session": "8h",
            "underlyings": {"CORVANE": {"kind": "spot", "spot": "100", "yield": "0", "mark_vol": "0.22"}},
            "correlation": {},
        },
        "book": [
            {
                "underlying": "CORVANE", "type": "call", "strike": "105", "expiry": "0.25y", "quantity": "-1",
                "multiplier": "1", "settlement": "cash",
            }
        ],
        "paths": {
            "source": "gbm", "realised_vol": "0.19", "drift": "0", "count": "100000", "looks": "63", "overnight": "0",
            "seed": "1", "horizon": "null",
        },
        "hedge": {"vol": "mark", "initial": "0", "remark": "inception"},
        "schedules": [{"name": "every 1 look", "every": "1 look"}],
        "costs": {"half_spread": "0", "per_unit": "0", "per_trade": "0", "by_underlying": {}},
        "study": {"mean": "costs", "risk": "std", "cost_of_risk": "0.5", "limit": "null", "confidence": "0.95",
                "tolerance": "1e-06",
            },
        "report": {"currency": "EUR"},
    }  # fmt: skip


def test_the_price_file_can_be_renamed_for_another_folder(tmp_path: Path) -> None:
    (tmp_path / "closes.csv").touch()
    (tmp_path / "x.yaml").write_text(
        SHORTEST.replace("spot: 100, ", "").replace(
            "{source: gbm, realised_vol: 19%, looks: 63}",
            "{source: prices, file: closes.csv, time: date, series: {CORVANE: {price: close}}}",
        )
    )
    loaded = load_experiment(tmp_path / "x.yaml")
    assert loaded.beside("closes.csv") == tmp_path / "closes.csv"
    renamed = yaml.load(dump_experiment(loaded.experiment, price_file="p/prices.csv"), Loader=yaml.BaseLoader)
    assert renamed["paths"]["file"] == "p/prices.csv"
    assert loaded.experiment.paths.file == "closes.csv"  # type: ignore[union-attr]


def test_schedules_are_named_by_their_rule(demo: Path) -> None:
    schedules = load_experiment(demo).experiment.schedules
    assert [s.name for s in schedules] == ["every 1h", "entry only", "every 4 looks", "at open and close", "12 trades"]


def test_costs_of_one_underlying_replace_only_the_terms_given(demo: Path) -> None:
    costs = load_experiment(demo, ["costs.by_underlying.CORVANE.half_spread=5bp"]).experiment.costs
    assert costs.of("CORVANE") == CostTerms(half_spread=0.0005, per_unit=0.005, per_trade=0.0)
    assert costs.of("BELTON") == CostTerms(half_spread=0.0002, per_unit=0.005, per_trade=0.0)


def test_a_value_for_all_is_spread_and_a_missing_name_is_zero() -> None:
    assert by_underlying(0.2, ("A", "B")) == {"A": 0.2, "B": 0.2}
    assert by_underlying({"B": 3.0}, ("A", "B")) == {"A": 0.0, "B": 3.0}


def test_overrides_replace_values_list_items_and_sections(demo: Path) -> None:
    overrides = [
        "book.0.quantity=-100", "market.rate=250bp", "paths.horizon=30d", "schedules=[{every: 2h}]", "paths.seed=0",
        "costs={per_trade: 1}", "costs.per_trade=2", "hedge.vol=realised", "market.underlyings.CORVANE.hedge_vol=",
    ]  # fmt: skip
    experiment = load_experiment(demo, overrides).experiment
    assert experiment.book[0].quantity == -100.0
    assert experiment.market.rate == 0.025
    assert experiment.paths.horizon == Duration(30.0, "d")
    assert [s.name for s in experiment.schedules] == ["every 2h"]
    assert experiment.paths.seed == 0  # type: ignore[union-attr]
    assert (experiment.costs.half_spread, experiment.costs.per_trade) == (0.0, 2.0)
    assert experiment.market.underlyings["CORVANE"].hedge_vol is None


def test_an_override_reaches_a_name_with_a_dot(demo: Path) -> None:
    demo.write_text(DEMO.replace("CORVANE", "CORV.A"))
    experiment = load_experiment(demo, ["market.underlyings.CORV.A.spot=101"]).experiment
    assert experiment.market.underlyings["CORV.A"].spot == 101.0


def test_the_digest_follows_the_file_the_book_and_the_overrides(tmp_path: Path) -> None:
    (tmp_path / "book.csv").write_text("type,strike,expiry,quantity\ncall,105,63d,-1\n")
    text = SHORTEST.replace("[{type: call, strike: 105, expiry: 0.25, quantity: -1}]", "book.csv")
    digests = []
    for content, overrides in ((text, ()), (text + "\n", ()), (text, ("paths.seed=1",)), (text, ("paths.seed=2",))):
        (tmp_path / "x.yaml").write_text(content)
        digests.append(load_experiment(tmp_path / "x.yaml", overrides).digest)
        assert load_experiment(tmp_path / "x.yaml", overrides).digest == digests[-1]
    (tmp_path / "x.yaml").write_text(text)
    (tmp_path / "book.csv").write_text("type,strike,expiry,quantity\ncall,105,63d,-2\n")
    digests.append(load_experiment(tmp_path / "x.yaml").digest)
    assert len(set(digests)) == 5
    assert all(re.fullmatch("[0-9a-f]{64}", digest) for digest in digests)


def test_a_later_stage_points_at_the_value_the_user_wrote(demo: Path) -> None:
    source = load_experiment(demo, ["paths.seed=3"]).source
    late = source.problem(("book", 0, "expiry"), "past the last look", "write an earlier expiry")
    assert str(late) == f"{demo}:9:60: book.0.expiry: past the last look - write an earlier expiry"
    assert str(source.problem(("paths", "seed"), "x")) == "--set paths.seed: x"
    assert str(source.problem(("market", "session"), "x")) == f"{demo}:2:1: market.session: x"
    assert str(source.problem((), "x")) == f"{demo}:1:1: x"


def models(schema: dict[str, Any]) -> list[dict[str, Any]]:
    return [schema, *(one for one in schema["$defs"].values() if "properties" in one)]


def test_every_key_of_the_json_schema_is_described() -> None:
    for model in models(json_schema()):
        for key, field in model["properties"].items():
            assert field.get("description"), (model["title"], key)


def resolve(schema: dict[str, Any], node: dict[str, Any]) -> list[dict[str, Any]]:
    """Follow references and alternatives to the plain schemas of a node."""
    if "$ref" in node:
        return resolve(schema, schema["$defs"][node["$ref"].rpartition("/")[2]])
    if "anyOf" in node:
        return [plain for one in node["anyOf"] for plain in resolve(schema, one)]
    return [node]


def accepts(schema: dict[str, Any], node: dict[str, Any], value: Any) -> bool:
    """Check a value by the keywords that decide on shape: type, properties, items, const, enum, pattern."""
    kinds = {"object": dict, "array": list, "string": str, "null": type(None), "number": int | float, "integer": int}
    for plain in resolve(schema, node):
        if "type" in plain and not isinstance(value, kinds[plain["type"]]):
            continue
        if value not in plain.get("enum", [value]) or value != plain.get("const", value):
            continue
        if isinstance(value, str) and not re.search(plain.get("pattern", ""), value):
            continue
        if isinstance(value, list) and not all(accepts(schema, plain.get("items", {}), item) for item in value):
            continue
        if isinstance(value, dict):
            fields, others = plain.get("properties", {}), plain.get("additionalProperties", {})
            if not set(plain.get("required", ())) <= value.keys() or (
                others is False and not value.keys() <= fields.keys()
            ):
                continue
            if not all(accepts(schema, fields.get(key, others or {}), one) for key, one in value.items()):
                continue
        return True
    return False


def test_the_json_schema_accepts_what_the_loader_accepts_and_refuses_wrong_keys_and_values() -> None:
    from hedgesim.experiment.nodes import compose

    schema = json_schema()
    for text in (
        DEMO,
        SHORTEST,
        SHORTEST.replace("[{type: call, strike: 105, expiry: 0.25, quantity: -1}]", "book.csv"),
    ):
        assert accepts(schema, schema, compose(text, file="x").data)
    for old, new in (
        ("spot:", "spott:"),
        ("22%", "x%"),
        ("type: call", "type: cal"),
        ("1 look", "1 lok"),
        ("title", "t"),
    ):
        assert not accepts(schema, schema, compose(SHORTEST.replace(old, new), file="x").data), new
