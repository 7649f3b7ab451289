"""Runs one experiment end to end: engine, study, explained paths, tables, findings, report."""

import hashlib
import json
import platform
import sys
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from hedgesim import __version__
from hedgesim.engine.ledger import Ledger, Story
from hedgesim.engine.replay import replay_laid
from hedgesim.engine.simulate import simulate
from hedgesim.engine.story import story
from hedgesim.experiment.folder import FINDINGS, refuse_foreign, refuse_unwritable, replaced_at_once
from hedgesim.experiment.ledgerfile import write_ledger
from hedgesim.experiment.loader import Loaded, dump_experiment, load_experiment
from hedgesim.experiment.progress import progress
from hedgesim.experiment.resolve import (
    Replay,
    Simulation,
    market_lines,
    replay_lines,
    resolve,
    simulation_lines,
)
from hedgesim.kernels.jit import compiled_before
from hedgesim.schedules import Compiled
from hedgesim.study import Settings, Study, study
from hedgesim.study.distribution import distribution
from hedgesim.study.exactness import CURVE_TOLERANCE, Exactness, exactness
from hedgesim.study.findings import headline, sentence
from hedgesim.study.projection import visible
from hedgesim.study.tables import (
    break_even_table,
    breakdown_table,
    curve_table,
    exact_columns,
    frequency_table,
    price_of_risk_table,
    schedules_table,
    write_tables,
)

if TYPE_CHECKING:
    import pandas as pd

    from hedgesim.report.facts import OptionMark, RunFacts

_VERSIONED = ("numpy", "numba", "scipy", "pandas", "matplotlib")


@dataclass(frozen=True)
class Result:
    """An experiment that was run.

    Attributes
    ----------
    loaded : the experiment and where it came from
    plan : what the engine read
    ledger : P&L components of the paths
    study : everything computed over the ledger
    seconds : wall-clock time by stage
    """

    loaded: Loaded
    plan: Simulation | Replay
    ledger: Ledger
    study: Study
    seconds: dict[str, float]

    @property
    def sentence(self) -> str:
        """The finding in one sentence."""
        return sentence(self.study)

    @property
    def findings(self) -> dict[str, Any]:
        """Headline figures with units and errors."""
        return headline(self.study)

    @property
    def schedules(self) -> "pd.DataFrame":
        """A row per schedule, as in schedules.csv."""
        return schedules_table(self.study, exact=exact_columns(self.study))

    @property
    def breakdown(self) -> "pd.DataFrame":
        """A row per schedule, underlying and component, as in breakdown.csv."""
        return breakdown_table(self.study)

    @property
    def frequency(self) -> "pd.DataFrame":
        """A row per time-based schedule, as in frequency.csv."""
        return frequency_table(self.study, exact=exact_columns(self.study))

    @property
    def price_of_risk(self) -> "pd.DataFrame":
        """A row per efficient schedule, as in price_of_risk.csv."""
        return price_of_risk_table(self.study)

    @property
    def curve(self) -> "pd.DataFrame":
        """A row per number of equal hedge intervals, without random numbers, as in curve.csv."""
        return curve_table(self.study)

    @property
    def break_even(self) -> "pd.DataFrame":
        """A row per schedule with the premiums at which it breaks even, as in break_even.csv."""
        return break_even_table(self.study)


def run_experiment(
    loaded: Loaded,
    *,
    threads: int | None = None,
    detail: bool = False,
    advance: Callable[[int], None] | None = None,
    plan: Simulation | Replay | None = None,
) -> Result:
    """Run a loaded experiment in memory.

    Parameters
    ----------
    loaded : from `load_experiment`
    threads : worker threads, default one a core; results do not depend on it
    detail : keep every component of every path
    advance : called with the number of paths done
    plan : from `resolve`, when already made

    Raises
    ------
    ExperimentError
        when the experiment cannot be laid out
    """
    start = time.monotonic()
    plan = plan or resolve(loaded)
    resolved = time.monotonic()
    if isinstance(plan, Simulation):
        ledger = simulate(
            market=plan.market,
            book=plan.book,
            grid=plan.grid,
            compiled=plan.compiled,
            source=plan.source,
            costs=plan.costs,
            count=plan.count,
            threads=threads,
            detail=detail,
            progress=advance,
        )
    else:
        ledger = replay_laid(plan.laid, costs=plan.costs, seed=plan.seed, threads=threads)
        if advance is not None:
            advance(ledger.count)
    simulated = time.monotonic()
    settings = _settings(loaded, plan, ledger)
    without_noise = _exactness(ledger, plan, settings, threads) if isinstance(plan, Simulation) else None
    if without_noise is not None and without_noise.reason:
        plan = replace(plan, notes=(*plan.notes, f"exact figures are missing - {without_noise.reason}"))
    told = time.monotonic()
    done = study(ledger, _compiled(plan), settings, exactness=without_noise)
    seconds = {
        "prepare": resolved - start,
        "engine": simulated - resolved,
        **({"exact": told - simulated} if without_noise is not None else {}),
        "study": time.monotonic() - told,
    }
    return Result(loaded=loaded, plan=plan, ledger=ledger, study=done, seconds=seconds)


def run_file(
    path: Path,
    *,
    out: Path | None = None,
    overwrite: bool = False,
    threads: int | None = None,
    overrides: Sequence[str] = (),
    ledger: bool = False,
    quiet: bool = False,
) -> Path:
    """Run an experiment file and write its result folder.

    Parameters
    ----------
    path : the YAML file
    out : result folder, default reports/NAME for NAME.yaml
    overwrite : results of another experiment in that folder may be replaced
    threads : worker threads, default one a core
    overrides : `path.to.key=value` each
    ledger : also write every component of every path
    quiet : no progress, no summary

    Returns
    -------
    The result folder

    Raises
    ------
    ExperimentError
        when the input is wrong; nothing is written
    RunError
        when the results cannot be written
    """
    loaded = load_experiment(path, overrides)
    folder = out if out is not None else Path("reports") / path.stem
    plan = resolve(loaded)
    hashes = _hashes(loaded, plan)
    # Before the work, not after it.
    refuse_unwritable(folder)
    refuse_foreign(folder, digest=hashes["experiment"], overwrite=overwrite)
    count = plan.count if isinstance(plan, Simulation) else len(plan.laid.inceptions)
    label = "paths" if isinstance(plan, Simulation) else "inceptions"
    if not quiet and not compiled_before():
        print("compiling, once for this version: about half a minute", file=sys.stderr, flush=True)
    with progress(label, count, quiet=quiet) as advance:
        result = run_experiment(loaded, threads=threads, detail=ledger, advance=advance, plan=plan)
    with replaced_at_once(folder) as fresh:
        _write(result, fresh, folder, hashes=hashes, ledger=ledger)
    if not quiet:
        for line in summary(result):
            print(line)
    return folder


def summary(result: Result) -> list[str]:
    """The finding and the schedules in a dozen lines."""
    frame = result.schedules
    cash = result.loaded.experiment.report.currency
    # A single life has an outcome and no spread.
    shown = {"std": "std", "es975": "ES 97.5 %"} if result.study.choice.comparable else {"mean": "P&L"}
    shown = {"cost_mean": "cost", **shown}
    heads = "".join(f"{f'{head} {cash}':>15}" for head in shown.values())
    lines = [result.sentence, "", f"{'schedule':<20}{'trades':>9}{heads}"]
    for _, row in frame.iterrows():
        cells = "".join(f"{row[name]:>15,.0f}" for name in shown)
        lines.append(f"{row['schedule']:<20}{row['trades']:>9.1f}{cells}")
    lines += [f"warning: {text}" for text in result.study.warnings]
    lines += [f"note: {text}" for text in result.plan.notes]
    return [*lines, ""]


def _compiled(plan: Simulation | Replay) -> Compiled:
    return plan.compiled if isinstance(plan, Simulation) else plan.laid.inceptions[0].compiled


def _settings(loaded: Loaded, plan: Simulation | Replay, ledger: Ledger) -> Settings:
    wanted = loaded.experiment.study
    if isinstance(plan, Simulation):
        years = float(plan.grid.t[-1])
        steps = np.diff(plan.grid.s)
        hidden: tuple[str, ...] = ()
    else:
        years = float(np.mean([life.grid.t[-1] for life in plan.laid.inceptions]))
        steps = np.diff(plan.laid.inceptions[0].grid.s)
        hidden = ledger.schedules[-1:] if plan.laid.reference_added else ()
    return Settings(
        mean=wanted.mean,
        risk=wanted.risk,
        cost_of_risk=wanted.cost_of_risk,
        limit=wanted.limit,
        confidence=wanted.confidence,
        years=years,
        currency=loaded.experiment.report.currency,
        hidden=hidden,
        equal_looks=bool(np.ptp(steps) <= 1e-6 * steps.mean()),
        tolerance=wanted.tolerance,
    )


def _exactness(ledger: Ledger, plan: Simulation, settings: Settings, threads: int | None) -> Exactness:
    shown = visible(ledger, settings.hidden)
    return exactness(
        ledger,
        shown,
        distribution(ledger, shown),
        market=plan.market,
        book=plan.book,
        grid=plan.grid,
        compiled=plan.compiled,
        source=plan.source,
        costs=plan.costs,
        settings=settings,
        threads=threads,
    )


def _hashes(loaded: Loaded, plan: Simulation | Replay) -> dict[str, str]:
    """Digest of every input; `experiment` covers them all."""
    inputs = {"experiment file": loaded.digest}
    if isinstance(plan, Replay):
        inputs["price file"] = hashlib.sha256(plan.price_file.read_bytes()).hexdigest()
    whole = hashlib.sha256("".join(inputs.values()).encode()).hexdigest()
    return {"experiment": whole, **inputs}


def _write(result: Result, fresh: Path, folder: Path, *, hashes: dict[str, str], ledger: bool) -> None:
    from hedgesim.report.pack import write_report

    start = time.monotonic()
    created = datetime.now(UTC).replace(microsecond=0)
    price_file = None
    if isinstance(result.plan, Replay):
        # The folder may be anywhere: the price file is named in full, so that experiment.yaml reruns.
        price_file = str(result.plan.price_file.resolve())
    write_tables(result.study, fresh, exact=exact_columns(result.study))
    (fresh / "experiment.yaml").write_text(
        dump_experiment(result.loaded.experiment, price_file=price_file), encoding="utf-8"
    )
    write_report(result.study, _facts(result, hashes), fresh, created=created)
    if ledger:
        write_ledger(result.ledger, result.study.schedules, fresh)
    seconds = result.seconds | {"report": time.monotonic() - start}
    found = {
        "title": result.loaded.experiment.title,
        **result.findings,
        "day_std_and_residual_delta_paths": result.ledger.watch.paths,
        "versions": _versions(),
        "seed": _seed(result.plan),
        "hashes": hashes,
        "created": created.isoformat(),
        "seconds": {stage: round(value, 3) for stage, value in seconds.items()},
        "notes": list(result.plan.notes),
    }
    text = json.dumps(found, indent=2, ensure_ascii=False, allow_nan=False)
    (fresh / FINDINGS).write_text(text + "\n", encoding="utf-8")


def _versions() -> dict[str, str]:
    return {
        "hedgesim": __version__,
        "python": platform.python_version(),
        **{name: version(name) for name in _VERSIONED},
    }


def _seed(plan: Simulation | Replay) -> int:
    return plan.source.seed if isinstance(plan, Simulation) else plan.seed


def _facts(result: Result, hashes: dict[str, str]) -> "RunFacts":
    from hedgesim.report.facts import RunFacts

    experiment, plan = result.loaded.experiment, result.plan
    cash = experiment.report.currency
    stories, marks = _stories(result)
    if isinstance(plan, Simulation):
        market = [*market_lines(plan.market, plan.book, cash), *simulation_lines(plan)]
        inceptions: tuple[str, ...] = ()
    else:
        first = plan.laid.inceptions[0]
        market = [*replay_lines(plan), f"at the first inception, {first.label}:"]
        market += market_lines(first.market, first.book, cash)
        inceptions = tuple(life.label for life in plan.laid.inceptions)
    return RunFacts(
        title=experiment.title,
        market_lines=tuple(market),
        book_lines=tuple(_book_lines(result)),
        method_lines=tuple(_method_lines(result)),
        versions=_versions(),
        seed=_seed(plan),
        hashes=hashes,
        experiment_name=result.loaded.path.stem,
        currency=cash,
        stories=stories,
        ledger=result.ledger,
        cautions=tuple(result.study.warnings) + tuple(plan.notes),
        marks=marks,
        inceptions=inceptions,
    )


def _book_lines(result: Result) -> list[str]:
    lines = []
    for row in result.loaded.experiment.book:
        size = (
            f"{row.quantity:+,.10g} x {row.multiplier:g}" if row.notional is None else f"notional {row.notional:+,.10g}"
        )
        own = "".join(
            f", {label} {value:.4g}"
            for label, value in (("mark", row.mark_vol), ("hedge", row.hedge_vol), ("premium", row.premium))
            if value is not None
        )
        settled = ", physical" if row.settlement == "physical" else ""
        strike = f"{row.strike:.10g}" if isinstance(row.strike, float) else str(row.strike)
        lines.append(f"{row.underlying} {row.type} strike {strike}, expiry {row.expiry}, {size}{own}{settled}")
    return lines


def _method_lines(result: Result) -> list[str]:
    ledger, experiment = result.ledger, result.loaded.experiment
    costs = experiment.costs
    lines = [
        f"costs: half-spread {costs.half_spread * 1e4:g} bp, {costs.per_unit:g} a unit, {costs.per_trade:g} a ticket"
        + ("; other terms for single underlyings" if costs.by_underlying else ""),
        f"hedge vol: {experiment.hedge.vol}; re-marked: {experiment.hedge.remark}",
        "P&L is discounted to the inception; entry and final unwinding of the hedge cost like any other trade",
    ]
    if ledger.engine == "simulate":
        lines += [
            "paths: exact log steps of geometric Brownian motion; all schedules are hedged on the same paths",
            f"errors: delete-one-group jackknife, {len(ledger.replicates.mean)} groups of paths, paired by schedule",
            "book: piecewise-quintic tables in log price, delta certified to 1e-6 of the gross delta",
            _exact_line(result.study),
        ]
    else:
        lines += [
            "paths: the prices as given; closed forms at every look",
            f"errors: stationary block bootstrap over inceptions, {len(ledger.replicates.mean)} resamples"
            if ledger.count > 1
            else "errors: none, as there is one life",
        ]
    lives = "paths" if ledger.engine == "simulate" else "inceptions"
    if ledger.count > 1:
        lines.append(f"residual delta and daily P&L: from the first {ledger.watch.paths:,} {lives}")
    return lines


def _exact_line(study: Study) -> str:
    if study.exactness is None or study.exactness.agreement is None:
        return "exact engine: no figures; simulation alone"
    closest = max(study.settings.tolerance, CURVE_TOLERANCE)
    return (
        f"exact engine: mean and std of every schedule to {study.settings.tolerance:g} of the std, without random "
        f"numbers; its curve to {closest:g}"
    )


def _stories(result: Result) -> tuple[tuple[Story, Story], "tuple[tuple[OptionMark, ...], ...]"]:
    """The path whose total is the median, and the one at the 1 % quantile, under the chosen schedule."""
    ledger, plan = result.ledger, result.plan
    name = result.study.schedules[result.study.choice.chosen]
    schedule = ledger.schedules.index(name)
    totals = ledger.totals[schedule]
    order = np.argsort(totals, kind="stable")
    wanted = (("an ordinary path: the median P&L", 0.5), ("a bad path: the 1 % quantile of P&L", 0.01))
    if ledger.count == 1:
        wanted = (("the one path", 0.5), ("the one path", 0.5))
    told, marks = [], []
    for label, level in wanted:
        path = int(order[int(level * (len(order) - 1))])
        told.append(_tell(plan, schedule, path, label))
        marks.append(_marks(plan, path))
    return (told[0], told[1]), tuple(marks)


def _tell(plan: Simulation | Replay, schedule: int, path: int, label: str) -> Story:
    if isinstance(plan, Simulation):
        price = plan.source.prices(plan.market, plan.grid, first_path=path, count=1)[:, :, 0]
        return story(
            plan.book,
            plan.market,
            plan.grid,
            plan.compiled,
            schedule,
            plan.costs,
            price,
            label=label,
            path=path,
            variance=plan.source.variance(plan.grid),
        )
    life = plan.laid.inceptions[path]
    mark_path, hedge_path = plan.laid.vol_paths(path)
    return story(
        life.book,
        life.market,
        life.grid,
        life.compiled,
        schedule,
        plan.costs,
        life.price,
        label=f"{label} (inception {life.label})",
        path=path,
        mark_path=mark_path,
        hedge_path=hedge_path,
    )


def _marks(plan: Simulation | Replay, path: int) -> "tuple[OptionMark, ...]":
    from hedgesim.report.facts import OptionMark

    book = plan.book if isinstance(plan, Simulation) else plan.laid.inceptions[path].book
    return tuple(
        OptionMark(underlying=int(u), strike=float(k), expiry_years=float(t))
        for u, k, t in zip(book.underlying, book.strike, book.expiry_t, strict=True)
    )
