"""What protects a run while it works: its folder is locked, a signal stops it between two pieces, a full disk is told.

In:  the output folder.
Out: context managers, and sentences for what the system refuses.
"""

import errno
import json
import os
import shutil
import signal
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import datetime
from pathlib import Path
from types import FrameType

from filelock import FileLock, Timeout

from gutz.errors import OutputError, ResourceError
from gutz.scan import paths

LOCK, OWNER = ".lock", ".lock.owner"
DISK_MARGIN = 50_000_000
"""Bytes left free beside a run, for figures and the system."""

Notice = Callable[[str], None]
"""Called with a sentence for the person who waits."""


@contextmanager
def locked(folder: Path) -> Iterator[None]:
    """Hold the folder for this run alone; the system frees the lock even if the process is killed.

    Raises OutputError if another run holds it, naming that run.
    """
    path, owner = paths.inside(folder, LOCK), paths.inside(folder, OWNER)
    lock = FileLock(path, timeout=0)
    try:
        lock.acquire()
    except Timeout:
        raise OutputError(
            f"{folder.name} is in use by another run{_words(owner)}; wait for it or choose another --out"
        ) from None
    except OSError as error:
        raise OutputError(f"{folder.name} cannot be locked ({(error.strerror or 'disk error').lower()})") from None
    try:
        _sign(owner)
        yield
    finally:
        owner.unlink(missing_ok=True)
        path.unlink(missing_ok=True)
        lock.release()


@contextmanager
def stoppable(notice: Notice | None) -> Iterator[list[int]]:
    """A list that receives the signal at the first Ctrl-C or SIGTERM; a second one interrupts at once."""
    received: list[int] = []
    if threading.current_thread() is not threading.main_thread():
        yield received
        return

    def note(number: int, frame: FrameType | None) -> None:
        if received:
            raise KeyboardInterrupt
        received.append(number)
        if notice:
            notice("stopping as soon as what is at work is saved; once more stops at once")

    before = {number: signal.signal(number, note) for number in (signal.SIGINT, signal.SIGTERM)}
    try:
        yield received
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def check_disk(folder: Path, needed: int) -> None:
    """Raise ResourceError unless so many bytes, and a margin, are free."""
    free = shutil.disk_usage(folder).free
    if needed + DISK_MARGIN > free:
        raise ResourceError(
            f"the run needs up to {needed / 1e6:,.0f} MB of disk and {free / 1e6:,.0f} MB are free; "
            "make room, use fewer points, or choose another --out"
        )


def refusal(error: OSError) -> Exception:
    """The error to raise for a write that the system refused."""
    if error.errno in (errno.ENOSPC, errno.EDQUOT, errno.EFBIG):
        return ResourceError("the disk is full; what is done is kept: make room and continue with --resume")
    return OutputError(f"the run cannot be written ({(error.strerror or 'disk error').lower()})")


def _sign(owner: Path) -> None:
    """Say who holds the lock; only words for others depend on it, so failing to is no reason to stop."""
    try:
        owner.write_text(json.dumps({"pid": os.getpid(), "since": datetime.now().strftime("%Y-%m-%d %H:%M:%S")}))
    except OSError:
        owner.unlink(missing_ok=True)


def _words(owner: Path) -> str:
    """Describe who holds the lock, as far as it is known."""
    try:
        found = json.loads(owner.read_text())
        return f" (process {int(found['pid'])}, since {str(found['since'])[:19]})"
    except (OSError, ValueError, KeyError, TypeError):
        return ""
