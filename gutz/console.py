"""What the command line prints: tables and JSON on standard output, notes and progress on standard error.

In:  numbers and words from the commands.
Out: text. Results go to stdout, everything else to stderr; a bar only on a terminal, else a line every 30 s.
"""

import json
import math
import sys
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from typing import Any

import click
import numpy as np
from rich import box
from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn
from rich.table import Table

LINE_EVERY = 30.0
PLAIN_WIDTH = 120


def note(words: str, quiet: bool) -> None:
    """Say something beside the results."""
    if not quiet:
        click.echo(words, err=True)


def say(words: str) -> None:
    """Print one line of results."""
    click.echo(words)


def write_json(result: Any) -> None:
    """Write one JSON value and nothing else; nan and infinity become null."""
    click.echo(json.dumps(_plain(result), indent=2, allow_nan=False))


def table(heads: Sequence[str], rows: Sequence[Sequence[str]]) -> None:
    """Print a table; first column left, the others right."""
    terminal = sys.stdout.isatty()
    console = Console(file=sys.stdout, highlight=False, width=None if terminal else PLAIN_WIDTH)
    made = Table(box=box.SIMPLE_HEAD if terminal else None, pad_edge=False, padding=(0, 1))
    for number, head in enumerate(heads):
        made.add_column(_unmarked(head), justify="left" if number == 0 else "right", overflow="fold")
    for row in rows:
        made.add_row(*map(_unmarked, row))
    console.print(made)


def number(value: float, digits: int = 5) -> str:
    """A number for people; nan is said in words."""
    if math.isnan(value):
        return "not defined"
    return f"{value:.{digits}g}"


def size(count: float) -> str:
    """A number of bytes for people."""
    for unit in ("B", "kB", "MB", "GB"):
        if count < 1000:
            return f"{count:.0f} {unit}" if unit == "B" else f"{count:.3g} {unit}"
        count /= 1000
    return f"{count:.3g} TB"


def duration(seconds: float) -> str:
    """A time span for people, rounded to what an estimate deserves."""
    if seconds < 90:
        return f"{max(1, round(seconds))} s"
    if seconds < 5400:
        return f"{round(seconds / 60)} min"
    return f"{seconds / 3600:.1f} h" if seconds < 172_800 else f"{seconds / 86_400:.1f} days"


@contextmanager
def progress(words: str, quiet: bool, points: int = 0, what: str = "chunks") -> Iterator[Any]:
    """Yield a function (done, total) that shows how far the work is, how fast it goes and how long it will take.

    points: of the whole work, where the rate is to be told in points. what: is counted. Where the total grows as the
    work goes on, no time is told.
    """
    if quiet:
        yield None
        return
    pace = _Pace(points)
    if sys.stderr.isatty():
        columns = (TextColumn("{task.description}"), BarColumn(), TextColumn("{task.completed}/{task.total}"))
        with Progress(*columns, TextColumn("{task.fields[pace]}"), console=Console(stderr=True), transient=True) as bar:
            task = bar.add_task(words, total=None, pace="")
            yield lambda done, total: bar.update(task, completed=done, total=total, pace=pace.words(done, total))
    else:
        last = [time.monotonic()]

        def line(done: int, total: int) -> None:
            found = pace.words(done, total)
            if time.monotonic() - last[0] >= LINE_EVERY:
                last[0] = time.monotonic()
                click.echo(", ".join(filter(None, (f"{words}: {done} of {total} {what} done", found))), err=True)

        yield line


class _Pace:
    """Rate and time left, from the first report on: what came before is loading and compiling."""

    def __init__(self, points: int) -> None:
        self._points = points
        self._first: tuple[int, float] | None = None
        self._total = 0
        self._grows = False

    def words(self, done: int, total: int) -> str:
        """Say both, or "" while there is nothing to judge by."""
        now = time.monotonic()
        self._grows, self._total = self._grows or 0 < self._total < total, total
        if self._first is None or done <= self._first[0]:
            self._first = self._first or (done, now)
            return ""
        per_second = (done - self._first[0]) / max(now - self._first[1], 1e-9)
        if self._grows:
            return f"{_rate(per_second)} per s"
        left = duration((total - done) / per_second)
        if not self._points:
            return f"{left} left"
        return f"{_rate(per_second * self._points / total)} points per s, {left} left"


def _rate(value: float) -> str:
    return f"{value:,.0f}" if value >= 10 else f"{value:.2g}"


def _unmarked(words: str) -> str:
    """Text that rich must not read as markup."""
    return words.replace("[", r"\[")


def _plain(value: Any) -> Any:
    """Numpy values as plain ones, numbers without a value as None."""
    if isinstance(value, dict):
        return {str(key): _plain(part) for key, part in value.items()}
    if isinstance(value, np.ndarray | list | tuple):
        return [_plain(part) for part in value]
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
