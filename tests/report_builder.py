"""Ledgers of a small plain-numpy hedging simulation, for tests of the report: real paths, a real frequency law."""

from dataclasses import replace

import numpy as np
from scipy.special import ndtr

from hedgesim.engine.exact import ExactFigures
from hedgesim.engine.ledger import Ledger, Moments, Replicates, Story, Watch
from hedgesim.report.facts import OptionMark, RunFacts
from hedgesim.schedules import Compiled
from hedgesim.study.exactness import Agreement, BreakEven, Curve, Exactness, Gain, Sensitivity
from hedgesim.study.theory import Law

YEARS, SPOT, STRIKE, HEDGE_VOL, REALISED_VOL, UNITS, HALF_SPREAD = 0.25, 100.0, 102.0, 0.22, 0.20, -50_000.0, 2e-4


def _delta_gamma(x, tau):
    tau = np.maximum(tau, 1e-12)
    d1 = (np.log(x / STRIKE) + 0.5 * HEDGE_VOL**2 * tau) / (HEDGE_VOL * np.sqrt(tau))
    return ndtr(d1), np.exp(-0.5 * d1**2) / np.sqrt(2 * np.pi) / (x * HEDGE_VOL * np.sqrt(tau))


def _value(x, tau):
    if tau <= 0:
        return np.maximum(x - STRIKE, 0.0)
    d1 = (np.log(x / STRIKE) + 0.5 * HEDGE_VOL**2 * tau) / (HEDGE_VOL * np.sqrt(tau))
    return x * ndtr(d1) - STRIKE * ndtr(d1 - HEDGE_VOL * np.sqrt(tau))


def prices(looks, paths, rng):
    step = YEARS / looks
    z = rng.standard_normal((looks, paths))
    return SPOT * np.exp(
        np.vstack(
            [np.zeros((1, paths)), np.cumsum(REALISED_VOL * np.sqrt(step) * z - 0.5 * REALISED_VOL**2 * step, axis=0)]
        )
    )


def components(x, every, *, replayed=False):
    """Per-path components (component, path) of a short call hedged every `every` looks, and the trading totals."""
    looks = len(x) - 1
    step = YEARS / looks
    names = (
        ("vol_gap_seen", "lag", "remainder", "costs.spread")
        if replayed
        else ("vol_gap", "sampling", "lag", "remainder", "costs.spread")
    )
    out = {n: np.zeros(x.shape[1]) for n in names}
    held = np.zeros(x.shape[1])
    turnover = np.zeros(x.shape[1])
    for i in range(looks):
        delta, gamma = _delta_gamma(x[i], YEARS - i * step)
        if i % every == 0:
            turnover += np.abs(-UNITS * delta - held) * x[i]
            held = -UNITS * delta
        r2 = (x[i + 1] / x[i] - 1) ** 2
        g = UNITS * gamma * x[i] ** 2
        dx = x[i + 1] - x[i]
        if replayed:
            out["vol_gap_seen"] += 0.5 * g * (r2 - HEDGE_VOL**2 * step)
        else:
            out["vol_gap"] += 0.5 * g * (REALISED_VOL**2 - HEDGE_VOL**2) * step
            out["sampling"] += 0.5 * g * (r2 - REALISED_VOL**2 * step)
        out["lag"] += (held + UNITS * delta) * dx
        change = UNITS * (_value(x[i + 1], YEARS - (i + 1) * step) - _value(x[i], YEARS - i * step))
        out["remainder"] += change - UNITS * delta * dx - 0.5 * g * (r2 - HEDGE_VOL**2 * step)
    turnover += np.abs(held) * x[-1]
    out["costs.spread"] = -HALF_SPREAD * turnover
    return names, np.array([out[n] for n in names]), turnover


def ledger(every, *, paths=4000, looks=126, underlyings=("CORVANE",), replayed=False, seed=5):
    """Ledger of schedules trading every k looks for k in `every`."""
    rng = np.random.default_rng(seed)
    books = [prices(looks, paths, rng) for _ in underlyings]
    reference = list(every).index(1) if 1 in every else -1
    all_every = list(every) + ([1] if replayed and reference < 0 else [])
    detail, turnovers = [], []
    for k in all_every:
        made = [components(x, k, replayed=replayed) for x in books]
        names = made[0][0]
        detail.append(np.array([m[1] for m in made]))
        turnovers.append(sum(m[2].mean() for m in made))
    detail = np.array(detail)  # (schedule, underlying, component, path)
    schedules, width = len(all_every), len(underlyings) * len(names)
    flat = detail.reshape(schedules, width, paths)
    totals = flat.sum(axis=1)

    def moments(picks):
        mean = flat[:, :, picks].mean(axis=2)
        cov = np.zeros((schedules, width, width)) if len(picks) > 1 else np.full((schedules, width, width), np.nan)
        if len(picks) > 1:
            cov = np.array([np.cov(flat[s][:, picks]).reshape(width, width) for s in range(schedules)])
        return mean, cov

    mean, cov = moments(np.arange(paths))
    resamples = None
    if replayed:
        kind, count = "bootstrap", 99 if paths > 1 else 0
        resamples = rng.integers(0, paths, (count, paths))
        made = [moments(p) for p in resamples]
        factor = 1 / (count - 1) if count else 1.0
    else:
        kind, count = "jackknife", 32
        groups = np.arange(paths) % count
        made = [moments(np.flatnonzero(groups != g)) for g in range(count)]
        factor = (count - 1) / count
    replicates = Replicates(
        np.array([m for m, _ in made]).reshape(-1, schedules, width),
        np.array([c for _, c in made]).reshape(-1, schedules, width, width),
        factor,
        kind,
    )
    names_of = tuple(f"every {k} looks" if k > 1 else "every look" for k in all_every)
    nothing = np.zeros(schedules)
    return Ledger(
        engine="replay" if replayed else "simulate",
        schedules=names_of,
        underlyings=tuple(underlyings),
        components=names,
        count=paths,
        moments=Moments(mean, cov),
        replicates=replicates,
        totals=totals,
        trades=np.array([looks / k + 1 for k in all_every]),
        turnover=np.array(turnovers),
        reference=all_every.index(1) if 1 in all_every else -1,
        watch=Watch(paths, nothing, nothing, nothing, nothing),
        resamples=resamples,
        detail=detail,
    )


def scaled(book, factor):
    """The same ledger for a position `factor` times as large."""
    r = book.replicates
    return replace(
        book,
        moments=Moments(book.moments.mean * factor, book.moments.cov * factor**2),
        replicates=replace(r, mean=r.mean * factor, cov=r.cov * factor**2),
        totals=book.totals * factor,
        turnover=book.turnover * factor,
        detail=book.detail * factor,
    )


def compiled(every, looks=126):
    """What the schedules ask for, as `compile_schedules` would say."""
    flags = np.zeros((len(every), looks + 1), dtype=bool)
    for row, k in enumerate(every):
        flags[row, ::k] = True
    flags[:, -1] = True
    return Compiled(
        names=tuple(f"every {k} looks" if k > 1 else "every look" for k in every),
        trades_at=flags,
        intervals=np.array([-(-looks // k) for k in every]),
        interval_years=np.array([k * YEARS / looks for k in every]),
        equal=np.array([looks % k == 0 for k in every]),
    )


def story(label, path, *, every=2, looks=126, underlyings=1, seed=11):
    """One path explained, from its own prices."""
    rng = np.random.default_rng(seed)
    x = [prices(looks, path + 1, rng)[:, path : path + 1] for _ in range(underlyings)]
    t = np.linspace(0, YEARS, looks + 1)
    target, hedge = np.zeros((underlyings, looks + 1)), np.zeros((underlyings, looks + 1))
    lines = {n: np.zeros(looks + 1) for n in ("vol_gap", "sampling", "lag", "remainder", "costs")}
    step = YEARS / looks
    for u in range(underlyings):
        held = 0.0
        for i in range(looks):
            delta, gamma = _delta_gamma(x[u][i, 0], YEARS - t[i])
            target[u, i] = -UNITS * delta
            if i % every == 0:
                lines["costs"][i:] -= HALF_SPREAD * abs(target[u, i] - held) * x[u][i, 0]
                held = target[u, i]
            hedge[u, i] = held
            dx = x[u][i + 1, 0] - x[u][i, 0]
            r2, g = (dx / x[u][i, 0]) ** 2, UNITS * gamma * x[u][i, 0] ** 2
            lines["vol_gap"][i + 1 :] += 0.5 * g * (REALISED_VOL**2 - HEDGE_VOL**2) * step
            lines["sampling"][i + 1 :] += 0.5 * g * (r2 - REALISED_VOL**2 * step)
            lines["lag"][i + 1 :] += (held + UNITS * delta) * dx
            change = UNITS * (_value(x[u][i + 1, 0], YEARS - t[i + 1]) - _value(x[u][i, 0], YEARS - t[i]))
            lines["remainder"][i + 1 :] += change - UNITS * delta * dx - 0.5 * g * (r2 - HEDGE_VOL**2 * step)
        target[u, -1] = target[u, -2]
    lines["total"] = sum(lines.values())
    return Story(label, path, "every 2 looks", t, np.array([p[:, 0] for p in x]), hedge, target, lines)


def facts(book, **changes):
    """Run facts around a ledger."""
    n = len(book.underlyings)
    marks = tuple(OptionMark(u, STRIKE, YEARS) for u in range(n))
    made = RunFacts(
        title="Short-dated call book, quarter-end review",
        market_lines=("CORVANE: spot 100, yield 0 %, mark vol 22 %, hedge vol 22 %", "rate 0 %, business-252"),
        book_lines=("CORVANE call, strike 102, expiry 63d, quantity -500, multiplier 100",),
        method_lines=("GBM at realised vol 20 %; all P&L is discounted to the start date.",),
        versions={"hedgesim": "0.1.0", "numpy": np.__version__},
        seed=7,
        hashes={"experiment": "9f2c" * 16, "book": "77ab" * 16},
        experiment_name="demo",
        currency="EUR",
        stories=(story("an ordinary path", 3, underlyings=n), story("a bad path", 8, underlyings=n)),
        ledger=book,
        marks=(marks, marks),
        inceptions=tuple(f"inception {k}" for k in range(book.count)) if book.engine == "replay" else (),
    )
    return replace(made, **changes)


def laws(variance, cost):
    """Laws that hold and laws that do not: variance / N, a constant floor, cost x sqrt(N)."""
    many = ("geometric Brownian motion", "equal intervals of variance time", "many trades")
    one = (*many, "one option, held to expiry", "hedged at the realised vol")

    def over(n):
        return variance / np.asarray(n, dtype=float)

    reason = "the book has 4 different options, the law is for one"
    return (
        Law("granularity", "Bertsimas, Kogan and Lo (2000)", "discretisation", many, True, "", over),
        Law("square-root law", "Kamal and Derman (1999)", "discretisation", one, False, reason, None),
        Law(
            "two-term law",
            "granularity and its next term, derived",
            "discretisation",
            one,
            True,
            "",
            lambda n: over(n) * (1 - 0.3 / np.sqrt(n)),
        ),
        Law(
            "gamma of the inception",
            "Boyle and Emanuel (1980), N times their interval",
            "discretisation",
            (*many, "dollar gamma stays what it is at the inception"),
            True,
            "",
            lambda n: 1.004 * over(n),
        ),
        Law(
            "continuous hedging", "Ahmad and Wilmott (2005)", "floor", many[:1], True, "", lambda n: 0.0 * over(n) + 1e8
        ),
        Law("leading-order cost", "Leland (1985)", "cost", many, True, "", lambda n: cost * np.sqrt(n)),
    )


def exactness(done, *, looks=126, reason="", in_currency=False):
    """Stand-in for exact figures beside a simulated study, a little off it: what pages draw, not what is true."""
    d, f = done.distribution, done.frequency
    removable = done.variances.value.removable[f.rows]
    told = laws(float(np.mean(removable * f.trades)), float(np.mean(done.choice.mean_cost[f.rows] / np.sqrt(f.trades))))
    if reason:
        return Exactness(None, None, (), (), told, None, reason, 0.1)
    off = np.where(np.arange(len(d.mean)) % 2, 0.8, -1.6)
    mean, std = d.mean - off * d.mean_se, d.std + off * d.std_se
    floor, gross = done.variances.value.floor, done.variances.value.gross
    cost = -done.choice.mean_cost
    figures = ExactFigures(
        mean=mean,
        variance=std**2,
        third=0 * std,
        fourth=3 * std**4,
        mean_gross=mean - cost,
        variance_gross=gross,
        mean_floor=0 * mean,
        variance_floor=floor,
        mean_costs=cost,
        variance_costs=0 * std,
        covariance_gross_floor=floor,
        covariance_costs_gross=0 * std,
    )
    trades = np.unique(np.round(np.geomspace(1, looks, 30)).astype(np.int64))
    curve_removable = float(np.mean(removable * f.trades)) / trades
    curve_cost = told[-1].curve(trades)
    curve_std = np.sqrt(curve_removable + floor[0])
    known = done.settings.risk != "es975"
    risk = curve_std if done.settings.risk == "std" else curve_std**2
    objective = curve_cost + done.settings.cost_of_risk * risk if known else np.full(len(trades), np.nan)
    best = int(np.argmin(objective)) if known else -1
    changes = ("realised vol -2 points", "realised vol +2 points", "costs x 0.5", "costs x 2", "drift -5 points")
    return Exactness(
        agreement=Agreement(mean, std, 1e-6 * std, 1e-6 * std, off, -off, figures),
        curve=Curve(
            trades,
            curve_cost,
            curve_std,
            curve_removable + floor[0],
            np.full(len(trades), floor[0]),
            curve_removable,
            objective,
            best,
            "curve to 0.0001 of the standard deviation",
        ),
        sensitivities=tuple(Sensitivity(c, int(trades[best]), float(objective[best])) for c in changes)
        if known
        else (),
        break_even=tuple(
            BreakEven(
                name,
                np.nan if in_currency else -mean[k] * 1e-7,
                np.nan if in_currency else 0.22 - mean[k] * 1e-7,
                -mean[k],
                np.nan if in_currency or not known else (std[k] - mean[k]) * 1e-7,
                std[k] - mean[k] if known else np.nan,
                "in currency only: net vega is under a tenth of gross vega" if in_currency else "",
            )
            for k, name in enumerate(done.schedules)
        ),
        laws=told,
        gain=Gain(np.full((len(mean), 3), [1.4, 0.9, 2.1]), np.full((len(mean), 3), 0.1), "measured over 64 groups"),
        reason="",
        seconds=0.1,
    )
