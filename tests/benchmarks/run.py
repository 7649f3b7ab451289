"""Times the engines against baselines in one run and prints the table of the README.

    python tests/benchmarks/run.py [--only NAME] [--json FILE]

Every figure is a ratio of best-of-three times taken in the same process, after compilation; each row says what was
divided by what. Nothing here is a test: a slow machine is slow in both parts of a ratio.
"""

import argparse
import json
import os
import platform
import resource
import subprocess
import sys
import time
from collections.abc import Callable
from typing import Any

import numpy as np
from desk import LOOKS, desk
from numpy_script import ledger

from hedgesim.engine.exact import exact
from hedgesim.engine.simulate import simulate

PATHS = 1_000_000
BASELINE_PATHS = 8192
# What a path and schedule keeps: its total.
TOTAL_BYTES = 8


def best(work: Callable[[], Any], repeats: int = 3) -> float:
    """Seconds of the fastest of `repeats` runs, after one to warm up."""
    work()
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return min(times)


def ours(case: dict[str, Any], paths: int, threads: int) -> float:
    """Nanoseconds a path and look of the full ledger, tables included."""
    return best(lambda: simulate(**case, count=paths, threads=threads)) / (paths * LOOKS) * 1e9


def numpy_ledger(case: dict[str, Any], paths: int) -> float:
    """Nanoseconds a path and look of the baseline."""
    return best(lambda: ledger(case, paths), repeats=2) / (paths * LOOKS) * 1e9


def numpy_normals() -> float:
    """Nanoseconds a standard normal of numpy's own fastest generator, into a buffer that stays in cache."""
    random, buffer = np.random.Generator(np.random.SFC64(7)), np.empty(4096)

    def draw() -> None:
        for _ in range(2000):
            random.standard_normal(out=buffer)

    return best(draw) / (2000 * len(buffer)) * 1e9


def desk_20() -> list[tuple[str, float, str, str]]:
    case = desk()
    mine, theirs = ours(case, PATHS, threads=2), numpy_ledger(case, BASELINE_PATHS)
    note = f"{theirs:.0f} against {mine:.2f} ns a path-look; {PATHS:,} and {BASELINE_PATHS:,} paths"
    return [("desk-20, 2 threads: speed-up over the numpy script, full ledger", theirs / mine, "60x", note)]


def desk_2000() -> list[tuple[str, float, str, str]]:
    case = desk(2000)
    mine, theirs = ours(case, PATHS, threads=2), numpy_ledger(case, 512)
    note = f"{theirs:.0f} against {mine:.2f} ns a path-look; {PATHS:,} and 512 paths"
    return [("desk-2000, 2 threads: speed-up over the numpy script, full ledger", theirs / mine, "6000x", note)]


def normals() -> list[tuple[str, float, str, str]]:
    mine, theirs = ours(desk(), PATHS, threads=1), numpy_normals()
    note = f"{mine:.2f} against {theirs:.2f} ns"
    return [("desk-20, 1 thread: time against numpy drawing the same normals", mine / theirs, "1.0x", note)]


def positions() -> list[tuple[str, float, str, str]]:
    few, many = ours(desk(), PATHS, threads=2), ours(desk(2000), PATHS, threads=2)
    note = f"{many:.2f} against {few:.2f} ns a path-look, {PATHS:,} paths"
    return [("2,000 positions against 20: time", many / few, "1.2x", note)]


def schedules() -> list[tuple[str, float, str, str]]:
    ten, forty = ours(desk(), PATHS // 2, threads=2), ours(desk(schedules=40), PATHS // 2, threads=2)
    note = f"{forty:.2f} against {ten:.2f} ns a path-look, {PATHS // 2:,} paths"
    return [("40 schedules against 10: time", forty / ten, "1.6x", note)]


def threads() -> list[tuple[str, float, str, str]]:
    one, two = ours(desk(), PATHS, threads=1), ours(desk(), PATHS, threads=2)
    return [("1 thread against 2: time", one / two, "1.9x", f"{one:.2f} against {two:.2f} ns a path-look")]


def exact_curve() -> list[tuple[str, float, str, str]]:
    case, tolerance, paths = desk(), 1e-6, 200_000
    curve = best(lambda: exact(**case, tolerance=tolerance, threads=2))
    sampled = best(lambda: simulate(**case, count=paths, threads=2))
    # A standard deviation from n paths is known to sqrt((kurtosis - 1) / 4 n) of itself.
    needed = (float(exact(**case).figures.kurtosis.max()) - 1.0) / (4.0 * tolerance**2)
    note = f"{curve:.2f} against {sampled:.2f} s; simulation would need {needed:.0e} paths for the same error"
    return [
        ("ten-schedule curve, exact at 1e-6 against simulate with 200,000 paths: time", curve / sampled, "0.5x", note)
    ]


def memory() -> list[tuple[str, float, str, str]]:
    peaks = [_peak(paths) for paths in (1_000_000, 10_000_000)]
    kept = 9_000_000 * 10 * TOTAL_BYTES
    grown = (peaks[1] - peaks[0]) / kept
    note = f"peak {peaks[0] / 2**20:,.0f} and {peaks[1] / 2**20:,.0f} MiB; 9 million paths keep {kept / 2**20:,.0f} MiB"
    return [("10 against 1 million paths: growth of peak memory over the totals kept", grown, "1.0x", note)]


def _peak(paths: int) -> int:
    """Peak resident bytes of a process that simulates `paths` paths."""
    code = (
        "import sys, resource; sys.path.insert(0, sys.argv[1]); from desk import desk;"
        "from hedgesim.engine.simulate import simulate; simulate(**desk(), count=int(sys.argv[2]), threads=2);"
        "print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024)"
    )
    here = os.path.dirname(os.path.abspath(__file__))
    done = subprocess.run([sys.executable, "-c", code, here, str(paths)], capture_output=True, check=True, text=True)
    return int(done.stdout)


BENCHMARKS: dict[str, Callable[[], list[tuple[str, float, str, str]]]] = {
    "desk-20": desk_20,
    "desk-2000": desk_2000,
    "normals": normals,
    "positions": positions,
    "schedules": schedules,
    "threads": threads,
    "exact": exact_curve,
    "memory": memory,
}


def main() -> None:
    """Run the benchmarks and print a table in Markdown."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--only", choices=sorted(BENCHMARKS), help="one benchmark instead of all")
    parser.add_argument("--json", metavar="FILE", help="also write the figures to FILE")
    arguments = parser.parse_args()
    print("| figure | measured | to reach | from |\n|---|---|---|---|", flush=True)
    rows = []
    for name in [arguments.only] if arguments.only else BENCHMARKS:
        for figure, ratio, target, note in BENCHMARKS[name]():
            print(f"| {figure} | {ratio:,.2f}x | {target} | {note} |", flush=True)
            rows.append({"benchmark": name, "figure": figure, "ratio": ratio, "to_reach": target, "note": note})
    machine = f"{os.cpu_count()} cores, Python {platform.python_version()}, numpy {np.__version__}"
    print(f"\n{machine}; peak of this process {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:,.0f} MiB")
    if arguments.json:
        with open(arguments.json, "w", encoding="utf-8") as file:
            json.dump({"machine": machine, "rows": rows}, file, indent=2)


if __name__ == "__main__":
    main()
