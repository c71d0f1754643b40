"""Refines a scan where the phase changes, so that most of a dense grid need not be solved.

In:  a scan file with two or more axes, an output folder.
Out: `Refined`, and the dataset in `adaptive.nc`: the dense grid of the file, with `solved` saying which points were
     solved (the others are interpolated inside regions of one phase), and the list of those.

The first two axes are refined (`gutz.scan.quadtree`), for each point of the others. Only what has been solved is kept
between levels, and the rest follows from it, so that --resume needs nothing else.
"""

import math
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gutz.errors import InputError, OutputError
from gutz.scan import estimate, export, guard, paths, runner, schema, store
from gutz.scan.chunk import parameters, solve_points
from gutz.scan.cluster import Cluster
from gutz.scan.crew import Crew, Failed, results
from gutz.scan.document import Document
from gutz.scan.guard import Notice
from gutz.scan.plan import CHUNK_POINTS, Axis, Plan
from gutz.scan.quadtree import Tree
from gutz.scan.runner import Progress
from gutz.scan.spec import differences
from gutz.solver import TOLERANCES
from gutz.status import UNTRUSTED, Status

NAME = "adaptive.nc"
NODES = 17
"""Default points of the coarse grid along each refined axis: regions smaller than its cells can be missed."""
MOST_POINTS = 4_000_000
"""Largest dense grid: it is held in memory, about 1 kB per point."""
CHECKPOINT_SECONDS = 120.0
"""What has been solved is written at the end of every level, and after this long within one."""

Index = NDArray[np.int64]


@dataclass(frozen=True)
class Refined:
    """How it went.

    points: of the dense grid; solves: of those solved, `computed` of them this time. remarks, untrusted: over the dense
    grid. failed: words on points given up. stopped: signal that ended it, 0 if none. workers, peak_bytes: as in
    `runner.Outcome`.
    """

    folder: Path
    points: int
    solves: int
    computed: int
    remarks: dict[Status, int]
    untrusted: int
    failed: tuple[str, ...]
    stopped: int
    workers: int
    peak_bytes: int

    @property
    def exit_code(self) -> int:
        """0, 1 with points not to be trusted or given up, 128 + signal when stopped."""
        return 128 + self.stopped if self.stopped else 1 if self.untrusted or self.failed else 0


def run(
    path: str | Path,
    out: str | Path | None = None,
    *,
    overrides: Sequence[str] = (),
    nodes: int = NODES,
    resume: bool = False,
    force: bool = False,
    progress: Progress | None = None,
    notice: Notice | None = None,
    workers: int | None = 0,
    scheduler: str | None = None,
    limit: float | None = None,
) -> tuple[Refined, xr.Dataset]:
    """Solve the file's grid where phases change, fill the rest, save it and return it with how it went.

    nodes: points of the coarse grid along each of the first two axes. progress: called with points solved and points
    known to be needed so far. Other arguments and errors as in `runner.run`; InputError also for fewer than two axes
    or more than `MOST_POINTS` points.
    """
    source, full = runner.load(path, overrides)
    if len(full.axes) < 2:
        raise InputError(f"{source.name}: has one axis; refining needs two, use a plain scan")
    if full.points > MOST_POINTS:
        raise InputError(f"{source.name}: has {full.points:,} points; a refined grid has at most {MOST_POINTS:,}")
    if nodes < 2:
        raise InputError(f"nodes is {nodes}; it must be at least 2")
    folder = paths.output_folder(str(out) if out is not None else Path(path).stem)
    paths.make_folder(folder)
    with guard.locked(folder):
        file = paths.inside(folder, NAME)
        if file.exists() and not (resume or force):
            raise OutputError(
                f"{folder.name} holds {NAME} already; continue it with --resume or replace it with --force"
            )
        guard.check_disk(folder, schema.bytes_per_point(full) * full.points)
        grid = _Grid(full, source, nodes, file)
        if resume and file.exists():
            grid.restore()
        pieces = -(-grid.coarse() // CHUNK_POINTS[0])
        with (
            guard.stoppable(notice) as stop,
            runner.crew_of(full, max(1, pieces), None, 1, workers, scheduler) as crew,
        ):
            limit = math.inf if isinstance(crew, Cluster) else limit or estimate.time_limit(full)
            failed, computed = grid.refine(crew, stop, progress, limit)
            return _outcome(folder, grid, failed, computed, stop, crew), grid.dataset(not stop)


class _Grid:
    """All points of the dense grid: values where solved, and at which level."""

    def __init__(self, full: Plan, source: Document, nodes: int, file: Path) -> None:
        self._full, self._source, self._nodes, self._file = full, source, nodes, file
        lengths = schema.sizes(full)
        self._fields = schema.layout(full)
        self.values: dict[str, NDArray[Any]] = {
            name: np.full(tuple(lengths[d] for d in field.dims), field.fill, field.dtype)
            for name, field in self._fields.items()
        }
        self.level = np.full(full.shape, -1, np.int8)
        self._outer = list(np.ndindex(*full.shape[2:]))
        self._trees = [Tree((full.shape[0], full.shape[1]), nodes) for _ in self._outer]
        self._saved = time.monotonic()

    def coarse(self) -> int:
        """Points of the coarse grid."""
        return len(self._trees) * len(self._trees[0].corners())

    @property
    def solves(self) -> int:
        """Points solved."""
        return int(np.count_nonzero(self.level >= 0))

    def refine(
        self, crew: Crew, stop: list[int], progress: Progress | None, limit: float
    ) -> tuple[tuple[str, ...], int]:
        """Solve level by level and fill at the end. Returns words on what failed, and points computed."""
        failed: dict[int, str] = {}
        before = self.solves
        for level in range(64):
            wanted = np.setdiff1d(self._wanted(), [*failed])
            todo = wanted[self.level.ravel()[wanted] < 0]
            done = self.solves
            for piece, found in results(
                crew, partial(solve_points, self._full), _pieces(todo), stopped=lambda: bool(stop), limit=limit
            ):
                if isinstance(found, Failed):
                    failed |= dict.fromkeys(piece, f"{len(piece)} points: this piece {found.reason}")
                    continue
                self._put(np.array(piece), found, level)
                if progress:
                    progress(self.solves, done + todo.size)
                if time.monotonic() - self._saved > CHECKPOINT_SECONDS:
                    self.save(complete=False)
            if stop:
                break
            if todo.size:
                self.save(complete=False)
            if not self._divide():
                break
        if not stop:
            self._fill()
        self.save(complete=not stop)
        return tuple(sorted(set(failed.values()))), self.solves - before

    def save(self, complete: bool) -> None:
        """Write everything to the file, whole or not at all."""
        export.write_netcdf(self.dataset(complete), self._file)
        self._saved = time.monotonic()

    def dataset(self, complete: bool) -> xr.Dataset:
        """The dense grid as a run of `gutz.scan.open_run` would give it, with `solved` and the list of points."""
        axes = tuple(axis.name for axis in self._full.axes)
        index = np.flatnonzero(self.level >= 0)
        index = index[np.argsort(self.level.ravel()[index], kind="stable")]
        words = {"units": "1", "long_name": "Solved, not interpolated"}
        found: dict[str, Any] = {
            name: (field.dims, self.values[name], field.attributes) for name, field in self._fields.items()
        }
        found["solved"] = (axes, self.level >= 0, words)
        place = {"units": "1", "long_name": "Point solved", "description": "place in the grid, last axis fastest"}
        level = {"units": "1", "long_name": "Level at which it was solved", "description": "0: coarse grid"}
        found["point_index"] = ("point", index, place)
        found["point_level"] = ("point", self.level.ravel()[index], level)
        attributes = store.provenance(self._full, self._source, TOLERANCES) | {
            "adaptive_nodes": self._nodes,
            "complete": int(complete),
            "solves": index.size,
        }
        coordinates = {name: (name, values, words) for name, (values, words) in schema.coordinates(self._full).items()}
        return xr.Dataset(found, coordinates, attributes)

    def restore(self) -> None:
        """Take over what was solved before. Raises OutputError if that was with other settings."""
        found = export.read_netcdf(self._file)
        shown = self._file.parent.name
        changes = [*differences(str(found.attrs.get("config_json", "{}")), self._full.spec.canonical())]
        if int(found.attrs.get("adaptive_nodes", 0)) != self._nodes:
            changes.append(f"--nodes: {found.attrs.get('adaptive_nodes')} -> {self._nodes}")
        if changes:
            raise OutputError(
                f"{shown}/{NAME} has other settings ({'; '.join(changes[:5])}); "
                "choose another --out or replace it with --force"
            )
        index = found["point_index"].values
        self.level.flat[index] = found["point_level"].values
        solved = self.level >= 0
        for name, values in self.values.items():
            values[solved] = found[name].values[solved]

    def _wanted(self) -> Index:
        """Flat places of all points the cells rest on now."""
        places = [
            np.ravel_multi_index((*np.array(tree.corners()).T, *rest), self._full.shape)
            for tree, rest in zip(self._trees, self._outer, strict=True)
        ]
        return np.concatenate(places)

    def _put(self, index: Index, found: dict[str, NDArray[Any]], level: int) -> None:
        places = np.unravel_index(index, self._full.shape)
        for name, values in found.items():
            self.values[name][places] = values
        self.level[places] = level

    def _labels(self) -> NDArray[np.int64]:
        """What must not differ within a cell: phase, range of order, and whether numbers can be trusted."""
        bad = (self.values["status"] & int(UNTRUSTED)) != 0
        return self.values["phase"].astype(np.int64) * 64 + self.values["order_range"] * 2 + bad

    def _divide(self) -> bool:
        labels, known = self._labels(), self.level >= 0
        return any(
            [
                tree.divide(labels[:, :, *rest], known[:, :, *rest])
                for tree, rest in zip(self._trees, self._outer, strict=True)
            ]
        )

    def _fill(self) -> None:
        """Numbers at the points not solved; parameters that the file gives are exact everywhere."""
        known = self.level >= 0
        scales = [_scale(self._full, axis) for axis in self._full.axes[:2]]
        for name, values in self.values.items():
            for tree, rest in zip(self._trees, self._outer, strict=True):
                tree.fill(values[:, :, *rest], known[:, :, *rest], scales, flags=name == "status")
        filled = self.values["status"] != schema.NOT_COMPUTED
        for index in self._full.indices():
            region = self._full.region(index)
            inner = tuple(slice(0, part.stop - part.start) for part in region)
            for name, exact in parameters(self._full, index)[1].items():
                if name in self.values:
                    there = filled[region]
                    self.values[name][region][there] = exact[inner][there]


def _pieces(index: Index) -> Iterator[tuple[int, ...]]:
    """Points in pieces of the size the solver pads to."""
    for start in range(0, index.size, CHUNK_POINTS[0]):
        yield tuple(index[start : start + CHUNK_POINTS[0]].tolist())


def _scale(full: Plan, axis: Axis) -> NDArray[np.float64]:
    """Values in which numbers are taken to be linear between points."""
    return np.log(axis.values) if full.spec.axes[axis.name].spacing == "log" else axis.values


def _outcome(folder: Path, grid: _Grid, failed: tuple[str, ...], computed: int, stop: list[int], crew: Crew) -> Refined:
    status = grid.values["status"][grid.values["status"] != schema.NOT_COMPUTED]
    counts = {bit: int(np.count_nonzero(status & int(bit))) for bit in Status if bit}
    workers, memory = runner.memory_of(crew)
    return Refined(
        folder=folder,
        points=grid.level.size,
        solves=grid.solves,
        computed=computed,
        remarks={bit: count for bit, count in counts.items() if count},
        untrusted=int(np.count_nonzero(status & int(UNTRUSTED))),
        failed=failed,
        stopped=stop[0] if stop else 0,
        workers=workers,
        peak_bytes=memory,
    )
