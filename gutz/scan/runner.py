"""Works through a scan: chunk by chunk, saved as it goes, stoppable and resumable.

In:  a scan file (or its text, checked), an output folder.
Out: `Outcome`, and the run on disk (`gutz.scan.store`).

One process computes here; anything with `submit` can take its place (`executor`), since a chunk is computed
by `compute_chunk(plan, index)`, a plain function of plain data. Only this process writes.
"""

import errno
import shutil
import signal
import threading
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, wait
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from types import FrameType
from typing import Any, Protocol

import numpy as np
import zarr
from filelock import FileLock, Timeout

from gutz.errors import InputError, OutputError, ResourceError
from gutz.scan import document, paths, schema, spec, store
from gutz.scan.chunk import compute_chunk
from gutz.scan.plan import Plan, check_physics, plan
from gutz.solver import TOLERANCES
from gutz.status import UNTRUSTED, Status

LOCK = ".lock"
DISK_MARGIN = 50_000_000
"""Bytes left free beside a run, for figures and the system."""

Progress = Callable[[int, int], None]
"""Called with the chunks done and the chunks there are."""

Notice = Callable[[str], None]
"""Called with a sentence for the person who waits."""


class Executor(Protocol):
    """Anything that can be handed work; `concurrent.futures` pools and their like."""

    def submit(self, function: Callable[..., Any], /, *args: Any) -> Future[Any]:
        """Start the call and return its future."""
        ...


class Here:
    """The executor that uses no other process: the call is made at once, in place."""

    def submit(self, function: Callable[..., Any], /, *args: Any) -> Future[Any]:
        """Make the call and return its finished future."""
        future: Future[Any] = Future()
        try:
            future.set_result(function(*args))
        except Exception as error:
            future.set_exception(error)
        return future


@dataclass(frozen=True)
class Outcome:
    """How a run went.

    folder: where it is. points: of the grid; computed: chunks computed this time, of `chunks`. remarks:
    points per status bit. untrusted: points whose numbers must not be used. stopped: the signal that ended
    it, 0 if none.
    """

    folder: Path
    points: int
    chunks: int
    computed: int
    remarks: dict[Status, int]
    untrusted: int
    stopped: int

    @property
    def exit_code(self) -> int:
        """What the command line returns: 0, 1 with untrusted points, 128 + signal when stopped."""
        return 128 + self.stopped if self.stopped else 1 if self.untrusted else 0


def run(
    path: str | Path,
    out: str | Path | None = None,
    *,
    overrides: Sequence[str] = (),
    resume: bool = False,
    force: bool = False,
    progress: Progress | None = None,
    notice: Notice | None = None,
    executor: Executor | None = None,
    in_flight: int = 1,
) -> Outcome:
    """Compute every point of a scan file and save it.

    out: output folder, default the file's name without ".toml", in the current folder. overrides: texts such
    as "mixture.T=0.1". resume: continue a stopped run. force: replace an existing one. progress: called after
    every chunk. notice: called with what to tell a person meanwhile. in_flight: chunks handed to the executor at once.
    Raises InputError (mistakes in the file), OutputError (output exists or is in use), DataError (existing run
    damaged), ResourceError (disk). At Ctrl-C or SIGTERM the chunk at work is finished and saved, and then
    `stopped` is set.
    """
    source = document.read(Path(path), overrides)
    full = plan(spec.check(source))
    if full.spec.trap is not None:
        raise InputError(f"{source.name}: has a [trap], which a scan does not solve; use: gutz cloud")
    if not full.axes:
        raise InputError(f"{source.name}: has no [axes.NAME] section; a scan needs one to five")
    check_physics(full)
    folder = paths.output_folder(str(out) if out is not None else Path(path).stem)
    paths.make_folder(folder)
    with _locked(folder):
        if force and not resume:
            store.remove(folder)
        _check_disk(folder, full)
        if resume and store.exists(folder):
            target = store.Store.reopen(folder, full)
        else:
            target = store.Store.create(folder, full, source, TOLERANCES)
        return _work(folder, full, target, progress, notice, executor or Here(), in_flight)


def _work(
    folder: Path,
    full: Plan,
    target: store.Store,
    progress: Progress | None,
    notice: Notice | None,
    executor: Executor,
    in_flight: int,
) -> Outcome:
    """Compute what is not done yet, in order, and write it as it comes."""
    todo = [index for index in full.indices() if not target.done(index)]
    total = int(np.prod(full.chunks))
    finished = total - len(todo)
    queue, pending = iter(todo), dict[Future[Any], tuple[int, ...]]()
    with _stoppable(notice) as stop:
        while True:
            while not stop and len(pending) < in_flight and (index := next(queue, None)) is not None:
                pending[executor.submit(compute_chunk, full, index)] = index
            if not pending:
                break
            for future in wait(pending, return_when=FIRST_COMPLETED).done:
                _write(target, pending.pop(future), future.result())
                finished += 1
                if progress:
                    progress(finished, total)
    if finished == total:
        target.finish()
    remarks, untrusted = _count(target)
    return Outcome(
        folder=folder,
        points=full.points,
        chunks=total,
        computed=finished - (total - len(todo)),
        remarks=remarks,
        untrusted=untrusted,
        stopped=stop[0] if stop and finished < total else 0,
    )


def _write(target: store.Store, index: tuple[int, ...], values: dict[str, Any]) -> None:
    try:
        target.write(index, values)
    except OSError as error:
        if error.errno in (errno.ENOSPC, errno.EDQUOT, errno.EFBIG):
            raise ResourceError(
                "the disk is full; what is done is kept: make room and continue with --resume"
            ) from None
        raise OutputError(f"the run cannot be written ({(error.strerror or 'disk error').lower()})") from None


def _count(target: store.Store) -> tuple[dict[Status, int], int]:
    """Points per status bit, and points not to be trusted, chunk by chunk to bound memory."""
    status = zarr.open_array(target.path / "status", mode="r")
    counts = dict.fromkeys((bit for bit in Status if bit), 0)
    untrusted = 0
    rows = max(1, status.chunks[0])
    for start in range(0, status.shape[0], rows):
        part = np.asarray(status[start : start + rows])
        part = part[part >= 0]
        untrusted += int(np.count_nonzero(part & int(UNTRUSTED)))
        for bit in counts:
            counts[bit] += int(np.count_nonzero(part & int(bit)))
    return {bit: count for bit, count in counts.items() if count}, untrusted


@contextmanager
def _locked(folder: Path) -> Iterator[None]:
    """Hold the folder for this run alone; the system frees the lock even if the process is killed."""
    path = paths.inside(folder, LOCK)
    lock = FileLock(path, timeout=0)
    try:
        lock.acquire()
    except Timeout:
        raise OutputError(f"{folder.name} is in use by another run; wait for it or choose another --out") from None
    except OSError as error:
        raise OutputError(f"{folder.name} cannot be locked ({(error.strerror or 'disk error').lower()})") from None
    try:
        yield
    finally:
        path.unlink(missing_ok=True)
        lock.release()


@contextmanager
def _stoppable(notice: Notice | None) -> Iterator[list[int]]:
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
            notice("stopping as soon as the chunk at work is saved; once more stops at once")

    before = {number: signal.signal(number, note) for number in (signal.SIGINT, signal.SIGTERM)}
    try:
        yield received
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def _check_disk(folder: Path, full: Plan) -> None:
    needed = schema.bytes_per_point(full) * full.points
    free = shutil.disk_usage(folder).free
    if needed + DISK_MARGIN > free:
        raise ResourceError(
            f"the run needs up to {needed / 1e6:,.0f} MB of disk and {free / 1e6:,.0f} MB are free; "
            "make room, use fewer points, or choose another --out"
        )
