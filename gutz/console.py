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
from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn
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
def progress(words: str, quiet: bool) -> Iterator[Any]:
    """Yield a function (done, total) that shows how far the work is."""
    if quiet:
        yield None
    elif sys.stderr.isatty():
        columns = (TextColumn("{task.description}"), BarColumn(), TextColumn("{task.completed}/{task.total}"))
        with Progress(*columns, TimeRemainingColumn(), console=Console(stderr=True), transient=True) as bar:
            task = bar.add_task(words, total=None)
            yield lambda done, total: bar.update(task, completed=done, total=total)
    else:
        last = [time.monotonic()]

        def line(done: int, total: int) -> None:
            if time.monotonic() - last[0] >= LINE_EVERY:
                last[0] = time.monotonic()
                click.echo(f"{words}: {done} of {total} chunks done", err=True)

        yield line


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
