"""Shows how far a run is: a bar on a terminal, a line every tenth otherwise."""

import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager


@contextmanager
def progress(label: str, total: int, *, quiet: bool) -> Iterator[Callable[[int], None]]:
    """Give a function to call with the number of items done; writes to standard error."""
    if quiet:
        yield lambda done: None
    elif sys.stderr.isatty():
        with _bar(label, total) as advance:
            yield advance
    else:
        yield _lines(label, total)


@contextmanager
def _bar(label: str, total: int) -> Iterator[Callable[[int], None]]:
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

    columns = (
        TextColumn("{task.description}"),
        BarColumn(),
        TextColumn("{task.completed:,.0f} of {task.total:,.0f}"),
        TextColumn("{task.fields[rate]}"),
        TimeRemainingColumn(),
    )
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task(label, total=total, rate="")
        rate = _Rate()

        def advance(done: int) -> None:
            bar.update(task, completed=done, rate=f"{rate(done):,.0f} a second")

        yield advance


def _lines(label: str, total: int) -> Callable[[int], None]:
    rate, tenth = _Rate(), 0

    def advance(done: int) -> None:
        nonlocal tenth
        speed = rate(done)
        if done * 10 // total > tenth:
            tenth = done * 10 // total
            left = f", {speed:,.0f} a second, {(total - done) / speed:.0f} s left" if speed else ""
            print(f"{label}: {tenth * 10} %{left}", file=sys.stderr, flush=True)

    return advance


class _Rate:
    """Items a second since the first report: what comes before it is mostly compilation."""

    def __init__(self) -> None:
        self._first: tuple[float, int] | None = None

    def __call__(self, done: int) -> float:
        now = time.monotonic()
        if self._first is None:
            self._first = (now, done)
        start, already = self._first
        return (done - already) / (now - start) if now > start else 0.0
