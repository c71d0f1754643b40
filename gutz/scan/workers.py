"""Worker processes on this machine: one per core, single-threaded, gone as soon as this process is.

In:  how many; then calls of importable functions with plain data.
Out: `Workers`, an executor whose processes can all be killed and started anew, and the memory they took.

Processes are spawned, never forked (jax hangs in a forked child), and not threads (jax can lock up when two threads
run batched eigenproblems). Nothing numerical is imported here: a worker sets its limits before numpy and jax load.
"""

import os
import signal
import threading
import time
from collections.abc import Callable, Iterator
from concurrent.futures import Future, ProcessPoolExecutor
from contextlib import contextmanager
from multiprocessing import resource_tracker
from multiprocessing.context import SpawnContext, SpawnProcess
from multiprocessing.queues import SimpleQueue
from pathlib import Path
from types import TracebackType
from typing import Any

from gutz import cache

PARENT_CHECK_SECONDS = 0.5
"""How often a worker looks whether the process that started it is still there."""

_ONE_THREAD = {name: "1" for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")}
_HELD_BACK = {signal.SIGINT, signal.SIGTERM}


class Workers:
    """A pool of single-threaded processes; `renew` kills them all and starts over. Use it in a `with` statement."""

    def __init__(self, count: int) -> None:
        self.in_flight = count
        self._context = _Recording()
        self._pool = self._started()

    def submit(self, function: Callable[..., Any], /, *args: Any) -> Future[Any]:
        """Hand a call to a free process. Raises BrokenExecutor if one of them has died."""
        with _signals_held_back():
            return self._pool.submit(function, *args)

    def renew(self) -> None:
        """Kill every process, whatever it is at, and start anew; calls not finished are lost."""
        self._kill()
        self._pool = self._started()

    def check(self) -> None:
        """A process that died has told already: its calls fail with BrokenExecutor."""

    def peak_bytes(self) -> int:
        """Sum of the most memory each living process has held, 0 where the system does not tell."""
        return sum(peak_bytes(process.pid) for process in self._context.processes if process.is_alive())

    def pids(self) -> list[int]:
        """Process numbers of the living workers."""
        return [int(process.pid or 0) for process in self._context.processes if process.is_alive()]

    def __enter__(self) -> "Workers":
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if kind is None:
            self._pool.shutdown()
        else:
            self._kill()

    def _started(self) -> ProcessPoolExecutor:
        cores = usable_cores()
        numbers = self._context.SimpleQueue()
        for number in range(self.in_flight):
            numbers.put(cores[number % len(cores)])
        return ProcessPoolExecutor(
            self.in_flight, mp_context=self._context, initializer=_begin, initargs=(os.getpid(), numbers)
        )

    def _kill(self) -> None:
        for process in self._context.processes:
            # Not terminate: workers hold SIGTERM back, so that a signal to the whole group reaches them last.
            process.kill()
        self._pool.shutdown(cancel_futures=True)
        self._context.processes.clear()


def usable_cores() -> list[int]:
    """Numbers of the cores this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return sorted(os.sched_getaffinity(0))
    return list(range(os.cpu_count() or 1))


def peak_bytes(pid: int | None = None) -> int:
    """Most memory a process (default: this one) has held so far, in bytes; 0 where the system does not tell."""
    try:
        lines = Path("/proc", str(pid or "self"), "status").read_text().splitlines()
    except OSError:
        return 0
    return next((1024 * int(line.split()[1]) for line in lines if line.startswith("VmHWM:")), 0)


class _Recording(SpawnContext):
    """A spawn context that remembers its processes, since a pool does not tell which are its own."""

    def __init__(self) -> None:
        super().__init__()
        self.processes: list[SpawnProcess] = []

    def Process(self, *args: Any, **kwargs: Any) -> SpawnProcess:  # type: ignore[override]
        process = SpawnProcess(*args, **kwargs)
        self.processes.append(process)
        return process


@contextmanager
def _signals_held_back() -> Iterator[None]:
    """Processes started meanwhile never see Ctrl-C or SIGTERM: what to finish is for this process to decide."""
    # Before anything is held back, because its start lets signals through again.
    resource_tracker.ensure_running()
    before = signal.pthread_sigmask(signal.SIG_BLOCK, _HELD_BACK)
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)


def _begin(parent: int, cores: "SimpleQueue[int]") -> None:
    """First thing in a worker: one thread, one core, the cache of compiled code, and an eye on the parent."""
    os.environ.update(_ONE_THREAD)
    core = cores.get()
    if hasattr(os, "sched_setaffinity"):
        # The only way to keep jax to one core; it must happen before jax is loaded.
        os.sched_setaffinity(0, {core})
    cache.enable()
    threading.Thread(target=_leave_with, args=(parent,), daemon=True).start()


def _leave_with(parent: int) -> None:
    while os.getppid() == parent:
        time.sleep(PARENT_CHECK_SECONDS)
    os._exit(1)
