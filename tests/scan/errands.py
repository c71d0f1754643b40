"""Errands for worker processes in tests; light imports, so that a process starts in a fraction of a second."""

import os
import signal
import time
from pathlib import Path


def double(piece):
    return 2 * piece[0]


def slowly(piece):
    time.sleep(0.2)
    return 2 * piece[0]


def where(piece):
    time.sleep(0.2)
    return os.getpid(), sorted(os.sched_getaffinity(0)), os.environ["OMP_NUM_THREADS"], signal.pthread_sigmask(0, [])


def crash_at_two(piece):
    """Piece 2 takes its process down, always."""
    time.sleep(0.05)
    if piece == (2,):
        os.kill(os.getpid(), signal.SIGKILL)
    return 2 * piece[0]


def crash_always(piece):
    os.kill(os.getpid(), signal.SIGKILL)


def never_at_two(piece):
    """Piece 2 does not come back."""
    if piece == (2,):
        time.sleep(1000)
    return 2 * piece[0]


def wrong(piece):
    raise ZeroDivisionError("a mistake in the function")


def long_with_note(folder, piece):
    """Leave the process's number, then take long."""
    Path(folder, str(os.getpid())).touch()
    time.sleep(1000)
