"""The exact engine's ten-schedule curve of the standard desk, for the benchmark script and to run on its own."""

import json
import sys
import time
from typing import Any

import numpy as np
from desk import desk

from hedgesim.engine.exact import ExactResult, exact
from hedgesim.engine.simulate import simulate

PATHS = 200_000


def exact_curve(threads: int | None = 2, tolerance: float = 1e-6, positions: int = 20) -> ExactResult:
    """Moments of the desk under its ten schedules: what is timed against `simulate` with 200,000 paths."""
    return exact(**desk(positions=positions), tolerance=tolerance, threads=threads)


def paths_for_the_same_error(result: ExactResult) -> float:
    """Paths that simulation needs for a standard error of the std as small as the largest estimated error here."""
    relative = result.error["std"] / result.figures.std
    # Var(std) / std^2 = (kurtosis - 1) / (4 n).
    return float(((result.figures.kurtosis - 1.0) / (4.0 * np.maximum(relative, 1e-12) ** 2)).min())


def _seconds(work: Any) -> float:
    start = time.perf_counter()
    work()
    return time.perf_counter() - start


def main() -> None:
    """Print the ratio, best of five, on the threads given as the first argument (default 2)."""
    threads = int(sys.argv[1]) if len(sys.argv) > 1 else 2
    result = exact_curve(threads)
    simulate(**desk(), count=2_048, threads=threads)
    ours = min(_seconds(lambda: exact_curve(threads)) for _ in range(5))
    theirs = min(_seconds(lambda: simulate(**desk(), count=PATHS, threads=threads)) for _ in range(5))
    row = {
        "threads": threads,
        "exact_seconds": ours,
        "simulate_seconds": theirs,
        "ratio": ours / theirs,
        "largest_relative_error_of_std": float((result.error["std"] / result.figures.std).max()),
        "paths_for_the_same_error": paths_for_the_same_error(result),
        "nodes": result.nodes.tolist(),
        "refinements": result.refinements.tolist(),
    }
    print(json.dumps(row, indent=2))


if __name__ == "__main__":
    main()
