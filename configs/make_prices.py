"""Write the invented price history of the examples: daily closes of TESSOVAR and an implied vol, from a fixed seed.

The variance reverts to a mean that itself drifts between calm and stressed years, the implied vol stands a little above
the vol that follows, and a few days jump. No market or company is meant.
"""

import csv
from datetime import date, timedelta
from pathlib import Path

import numpy as np

SEED = 20200106
FIRST = date(2020, 1, 6)
SESSIONS = 1512
OUT = Path(__file__).with_name("tessovar_closes.csv")


def weekdays(first: date, count: int) -> list[date]:
    """The first `count` days from `first` on that are Monday to Friday."""
    days = (first + timedelta(days=n) for n in range(2 * count))
    return [day for day in days if day.weekday() < 5][:count]


def closes(random: np.random.Generator, count: int) -> tuple[np.ndarray, np.ndarray]:
    """Daily closes and implied vols (fractions a year)."""
    step = 1.0 / 252.0
    log_vol, level = np.log(0.19), np.log(0.19)
    price = np.empty(count)
    implied = np.empty(count)
    price[0] = 184.0
    for day in range(count):
        vol = float(np.exp(log_vol))
        # Implied vol looks a month ahead: half way back to the level, with a premium and the noise of a quote.
        implied[day] = np.exp(0.5 * (log_vol + level) + 0.15 + 0.02 * random.standard_normal())
        if day + 1 == count:
            break
        shock, other = random.standard_normal(2)
        jump = -0.035 * abs(random.standard_normal()) if random.random() < 0.008 else 0.0
        price[day + 1] = price[day] * np.exp((0.05 - 0.5 * vol * vol) * step + vol * np.sqrt(step) * shock + jump)
        log_vol += 6.0 * (level - log_vol) * step + 1.1 * np.sqrt(step) * (-0.65 * shock + 0.76 * other) - 2.0 * jump
        level += 1.0 * (np.log(0.19) - level) * step + 0.25 * np.sqrt(step) * random.standard_normal()
    return price, implied


def main() -> None:
    """Write `tessovar_closes.csv` beside this file."""
    price, implied = closes(np.random.default_rng(SEED), SESSIONS)
    with OUT.open("w", newline="", encoding="utf-8") as stream:
        writer = csv.writer(stream, lineterminator="\n")
        writer.writerow(["date", "close", "iv"])
        for day, close, vol in zip(weekdays(FIRST, SESSIONS), price, implied, strict=True):
            writer.writerow([day.isoformat(), f"{close:.2f}", f"{100.0 * vol:.2f}"])


if __name__ == "__main__":
    main()
