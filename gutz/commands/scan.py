"""`gutz scan`: a whole file, saved and drawn.

In:  a scan file, an output folder.
Out: the run (`data.zarr`, or `adaptive.nc` when refined), figures, on wish one netCDF file; on stdout, where they are
     and how it went.
"""

import time
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import xarray as xr

from gutz import console, plots
from gutz.errors import OutputError
from gutz.scan import adaptive, export, paths, runner, store
from gutz.scan.adaptive import Refined
from gutz.scan.runner import Outcome
from gutz.status import SENTENCES

NETCDF = "data.nc"


def run(
    file: Path,
    overrides: Sequence[str],
    out: str | None,
    resume: bool,
    netcdf: bool,
    workers: int | None,
    scheduler: str | None,
    chunk_limit: float | None,
    as_json: bool,
    quiet: bool,
    force: bool,
    debug: bool,
) -> int:
    """Run the scan; the exit code says whether every point can be trusted, or what stopped it."""
    start = time.monotonic()
    points = runner.load(file, overrides)[1].points
    with console.progress(file.stem, quiet, points) as progress:
        outcome = runner.run(
            file, out, overrides=overrides, resume=resume, force=force, progress=progress,
            notice=lambda words: console.note(words, quiet), workers=workers, scheduler=scheduler,
            limit=chunk_limit,
        )  # fmt: skip
    files = [store.NAME]
    if not outcome.stopped:
        dataset = store.open_run(outcome.folder)
        files += _draw(outcome.folder, dataset)
        if netcdf:
            export.write_netcdf(dataset, paths.inside(outcome.folder, NETCDF))
            files.append(NETCDF)
    if as_json:
        console.write_json(_record(outcome, files))
    else:
        _print(outcome, files, time.monotonic() - start)
    return outcome.exit_code


def run_adaptive(
    file: Path,
    overrides: Sequence[str],
    out: str | None,
    resume: bool,
    nodes: int | None,
    workers: int | None,
    scheduler: str | None,
    chunk_limit: float | None,
    as_json: bool,
    quiet: bool,
    force: bool,
    debug: bool,
) -> int:
    """Refine where phases change; the exit code says whether every point can be trusted."""
    start = time.monotonic()
    with console.progress(file.stem, quiet, what="points needed so far") as progress:
        outcome, dataset = adaptive.run(
            file, out, overrides=overrides, nodes=nodes or adaptive.NODES, resume=resume, force=force,
            progress=progress, notice=lambda words: console.note(words, quiet), workers=workers, scheduler=scheduler,
            limit=chunk_limit,
        )  # fmt: skip
    files = [adaptive.NAME]
    if not outcome.stopped:
        files += _draw(outcome.folder, dataset)
    if as_json:
        console.write_json(_refined_record(outcome, files))
    else:
        _print_refined(outcome, files, time.monotonic() - start)
    return outcome.exit_code


def _draw(folder: Path, dataset: xr.Dataset) -> list[str]:
    """Draw the figures the file asks for; return their names."""
    names = dataset.attrs["figures"]
    made: list[str] = []
    for name in names:
        if name not in dataset:
            continue  # an axis of this name stands in for the variable
        try:
            made += [path.name for path in plots.save(plots.draw(dataset, name), paths.inside(folder, name))]
        except OSError as error:
            raise OutputError(
                f"the figure of {name} cannot be written ({(error.strerror or 'disk error').lower()})"
            ) from None
    return made


def _refined_record(outcome: Refined, files: Sequence[str]) -> dict[str, Any]:
    return _common_record(outcome, files) | {"solves": outcome.solves, "failed": list(outcome.failed)}


def _common_record(outcome: Outcome | Refined, files: Sequence[str]) -> dict[str, Any]:
    """What both kinds of scan report alike."""
    return {
        "folder": str(outcome.folder),
        "files": list(files),
        "points": outcome.points,
        "computed": outcome.computed,
        "untrusted": outcome.untrusted,
        "stopped": bool(outcome.stopped),
        "workers": outcome.workers,
        "peak_bytes": outcome.peak_bytes,
        "remarks": {str(bit.name).lower(): count for bit, count in outcome.remarks.items()},
    }


def _print_refined(outcome: Refined, files: Sequence[str], seconds: float) -> None:
    """Say how it went and where everything is."""
    console.say(
        f"{outcome.solves:,} of {outcome.points:,} points solved ({outcome.solves / outcome.points:.1%}), "
        f"{outcome.computed:,} of them in these {console.duration(seconds)}{_crew(outcome)}"
    )
    for words in outcome.failed:
        console.say(f"  {words}; try --resume")
    _print_rest(outcome, files)


def _print_rest(outcome: Outcome | Refined, files: Sequence[str]) -> None:
    for bit, count in outcome.remarks.items():
        console.say(f"  {count:,} points: {SENTENCES[bit]}")
    if outcome.stopped:
        console.say("stopped; what is done is saved: run the same command with --resume to continue")
    console.say(f"in {outcome.folder}:")
    for name in files:
        console.say(f"  {name}")


def _crew(outcome: Outcome | Refined) -> str:
    """Who computed and how much memory that took."""
    words = f" by {outcome.workers} processes" if outcome.workers else ""
    return words + (f", {console.size(outcome.peak_bytes)} of memory at most" if outcome.peak_bytes else "")


def _record(outcome: Outcome, files: Sequence[str]) -> dict[str, Any]:
    failed = [{"chunk": list(index), "reason": reason} for index, reason in outcome.failed]
    return _common_record(outcome, files) | {"chunks": outcome.chunks, "failed": failed}


def _print(outcome: Outcome, files: Sequence[str], seconds: float) -> None:
    """Say how it went and where everything is."""
    console.say(
        f"{outcome.points:,} points, {outcome.computed} of {outcome.chunks} chunks computed "
        f"in {console.duration(seconds)}{_crew(outcome)}"
    )
    for index, reason in outcome.failed:
        console.say(f"  chunk {'/'.join(map(str, index))} {reason}; its points are not computed: try --resume")
    _print_rest(outcome, files)
