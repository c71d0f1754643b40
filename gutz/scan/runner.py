"""Works through a scan: chunk by chunk, saved as it goes, stoppable and resumable.

In:  a scan file (or its text, checked), an output folder.
Out: `Outcome`, and the run on disk (`gutz.scan.store`).

A chunk is computed by `compute_chunk(plan, index)`, a plain function of plain data: in this process, in worker
processes or on a cluster (`gutz.scan.crew`). Only this process writes.
"""

import math
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
import zarr

from gutz.errors import GutzError, InputError
from gutz.scan import document, estimate, guard, paths, schema, spec, store
from gutz.scan.chunk import compute_chunk
from gutz.scan.cluster import PER_WORKER, Cluster
from gutz.scan.crew import Crew, Executor, Failed, Here, Others, results
from gutz.scan.document import Document
from gutz.scan.guard import Notice
from gutz.scan.plan import Plan, check_physics, plan
from gutz.scan.workers import Workers, peak_bytes
from gutz.solver import TOLERANCES
from gutz.status import UNTRUSTED, Status

Progress = Callable[[int, int], None]
"""Called with the chunks done and the chunks there are."""


@dataclass(frozen=True)
class Outcome:
    """How a run went.

    folder: where it is. points: of the grid; computed: chunks computed this time, of `chunks`. remarks:
    points per status bit. untrusted: points whose numbers must not be used. failed: chunks given up, and why; their
    points stay "not computed". stopped: the signal that ended it, 0 if none. workers: processes that computed, 0 for
    this one. peak_bytes: most memory held, workers of this machine included, 0 where the system does not tell.
    """

    folder: Path
    points: int
    chunks: int
    computed: int
    remarks: dict[Status, int]
    untrusted: int
    failed: tuple[tuple[tuple[int, ...], str], ...]
    stopped: int
    workers: int
    peak_bytes: int

    @property
    def exit_code(self) -> int:
        """What the command line returns: 0, 1 with untrusted points or failed chunks, 128 + signal when stopped."""
        return 128 + self.stopped if self.stopped else 1 if self.untrusted or self.failed else 0


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
    workers: int | None = 0,
    scheduler: str | None = None,
    limit: float | None = None,
) -> Outcome:
    """Compute every point of a scan file and save it.

    out: output folder, default the file's name without ".toml", in the current folder. overrides: texts such
    as "mixture.T=0.1". resume: continue a stopped run. force: replace an existing one. progress: called after
    every chunk. notice: called with what to tell a person meanwhile. workers: processes to compute in; 0 for none but
    this one, None for one per core where that pays (a script that asks for them needs the usual
    `if __name__ == "__main__":`). scheduler: address of a Dask scheduler whose workers compute instead. executor,
    in_flight: somebody else's executor instead, and chunks handed to it at once. limit: seconds a chunk may take in
    worker processes.
    Raises InputError (mistakes in the file), OutputError (output exists or is in use), DataError (existing run
    damaged), ResourceError (disk, or processes that keep dying). At Ctrl-C or SIGTERM what is at work is finished and
    saved, and then `stopped` is set.
    """
    source, full = load(path, overrides)
    folder = paths.output_folder(str(out) if out is not None else Path(path).stem)
    paths.make_folder(folder)
    pieces = math.prod(full.chunks)
    with (
        guard.locked(folder),
        guard.stoppable(notice) as stop,
        # First of all, so that a cluster that cannot be used leaves no run behind.
        crew_of(full, pieces, executor, in_flight, workers, scheduler) as crew,
    ):
        if force and not resume:
            store.remove(folder)
        guard.check_disk(folder, schema.bytes_per_point(full) * full.points)
        target = _opened(folder, full, source, resume)
        todo = [index for index in full.indices() if not target.done(index)]
        return _work(folder, full, target, todo, progress, stop, crew, limit or estimate.time_limit(full))


def _opened(folder: Path, full: Plan, source: Document, resume: bool) -> store.Store:
    """The run to continue, or a new one."""
    try:
        if resume and store.exists(folder):
            return store.Store.reopen(folder, full)
        return store.Store.create(folder, full, source, TOLERANCES)
    except GutzError:
        raise
    except OSError as error:
        raise guard.refusal(error) from None


def load(path: str | Path, overrides: Sequence[str]) -> tuple[Document, Plan]:
    """Read and check a file that is to be scanned. Raises InputError."""
    source = document.read(Path(path), overrides)
    full = plan(spec.check(source))
    if full.spec.trap is not None:
        raise InputError(f"{source.name}: has a [trap], which a scan does not solve; use: gutz cloud")
    if not full.axes:
        raise InputError(f"{source.name}: has no [axes.NAME] section; a scan needs one to five")
    check_physics(full)
    return source, full


@contextmanager
def crew_of(
    full: Plan,
    pieces: int,
    executor: Executor | None,
    in_flight: int,
    workers: int | None,
    scheduler: str | None,
) -> Iterator[Crew]:
    """Who computes: a cluster, a given executor, this process, or worker processes that end with the context."""
    count = min(pieces, estimate.automatic_workers(full) if workers is None else workers)
    if executor is not None:
        yield Others(executor, in_flight)
    elif scheduler is not None:
        with Cluster(scheduler) as cluster:
            yield cluster
    elif count == 0:
        yield Here()
    else:
        with Workers(count) as crew:
            yield crew


def memory_of(crew: Crew) -> tuple[int, int]:
    """Worker processes, and the most memory held by this process and those on this machine, bytes."""
    if isinstance(crew, Cluster):
        return crew.in_flight // PER_WORKER, peak_bytes()
    if isinstance(crew, Workers):
        return crew.in_flight, peak_bytes() + crew.peak_bytes()
    return 0, peak_bytes()


def _work(
    folder: Path,
    full: Plan,
    target: store.Store,
    todo: Sequence[tuple[int, ...]],
    progress: Progress | None,
    stop: list[int],
    crew: Crew,
    limit: float,
) -> Outcome:
    """Compute what is not done yet, and write it as it comes."""
    total = int(np.prod(full.chunks))
    finished = total - len(todo)
    # What a cluster's worker is at cannot be ended from here.
    limit = math.inf if isinstance(crew, Cluster) else limit
    failed: list[tuple[tuple[int, ...], str]] = []
    for index, values in results(crew, partial(compute_chunk, full), todo, stopped=lambda: bool(stop), limit=limit):
        if isinstance(values, Failed):
            failed.append((index, values.reason))
            continue
        _write(target, index, values)
        finished += 1
        if progress:
            progress(finished, total)
    if finished == total:
        target.finish()
    remarks, untrusted = _count(target)
    workers, memory = memory_of(crew)
    return Outcome(
        folder=folder,
        points=full.points,
        chunks=total,
        computed=finished - (total - len(todo)),
        remarks=remarks,
        untrusted=untrusted,
        failed=tuple(sorted(failed)),
        stopped=stop[0] if stop and finished + len(failed) < total else 0,
        workers=workers,
        peak_bytes=memory,
    )


def _write(target: store.Store, index: tuple[int, ...], values: dict[str, Any]) -> None:
    try:
        target.write(index, values)
    except OSError as error:
        raise guard.refusal(error) from None


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
