"""`gutz boundary`: phase boundaries as curves, saved and drawn.

In:  a scan file; two of its axes, and values for the others.
Out: `boundary.nc` and a figure in the output folder; where that holds a run of the file, its phase figure anew with the
     curves on top. On stdout what was found, or JSON.
"""

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from gutz import console, plots
from gutz.boundary import KIND_WORDS, Kind
from gutz.commands.points import load, values
from gutz.errors import InputError
from gutz.phases import WORDS, Phase
from gutz.scan import edges, export, paths, store
from gutz.scan.plan import Plan, check_physics

NAME = "boundary"
DATA = f"{NAME}.nc"


def run(
    file: Path,
    overrides: Sequence[str],
    at: Sequence[str],
    axes: tuple[str, str] | None,
    nodes: int,
    straightness: float,
    out: str | None,
    as_json: bool,
    quiet: bool,
    force: bool,
    debug: bool,
) -> int:
    """Trace and draw; exit code 1 if points along the way were not to be trusted."""
    document, full = load(file, overrides)
    check_physics(full)
    held = values(at)
    names = axes or _first_two(full, held)
    folder = paths.results_folder(out or file.stem, DATA, force)
    found = edges.trace(full, document, names, held, nodes=nodes, straightness=straightness)
    paths.make_folder(folder)
    export.write_netcdf(found, paths.inside(folder, DATA))
    files = [DATA]
    figure = plots.draw(edges.raster(found), "phase", lines=found)
    files += [path.name for path in plots.save(figure, paths.inside(folder, NAME))]
    if store.exists(folder) and not held:
        files += _over_run(folder, full, found)
    if as_json:
        console.write_json(_record(found, files))
    else:
        _print(found, folder, files)
    return 1 if found.attrs["untrusted_solves"] else 0


def _first_two(full: Plan, held: dict[str, float]) -> tuple[str, str]:
    """The first two axes without a value."""
    free = [axis.name for axis in full.axes if axis.name not in held]
    if len(free) < 2:
        raise InputError(
            f"two axes are needed to trace boundaries; without a value there are: {', '.join(free) or 'none'}"
        )
    return free[0], free[1]


def _over_run(folder: Path, full: Plan, found: xr.Dataset) -> list[str]:
    """Draw the run of the same settings again, with the curves."""
    dataset = store.open_run(folder)
    if dataset.attrs["config_sha256"] != full.spec.sha256() or "phase" not in dataset:
        return []
    return [path.name for path in plots.save(plots.draw(dataset, "phase", lines=found), paths.inside(folder, "phase"))]


def _summary(found: xr.Dataset) -> list[dict[str, Any]]:
    x, y = found.attrs["boundary_axes"]
    parts = []
    for number in np.unique(found["curve"].values):
        part = found.isel(point=np.flatnonzero(found["curve"].values == number))
        kinds, counts = np.unique(part["kind"].values, return_counts=True)
        parts.append(
            {
                "phases": [WORDS[Phase(int(part[name].values[0]))] for name in ("phase_1", "phase_2")],
                "points": part.sizes["point"],
                "kinds": {Kind(int(k)).name.lower(): int(n) for k, n in zip(kinds, counts, strict=True)},
                x: [float(part[x].min()), float(part[x].max())],
                y: [float(part[y].min()), float(part[y].max())],
            }
        )
    return parts


def _record(found: xr.Dataset, files: list[str]) -> dict[str, Any]:
    return {
        "files": files,
        "curves": _summary(found),
        "solves": found.attrs["solves"],
        "untrusted": found.attrs["untrusted_solves"],
    }


def _print(found: xr.Dataset, folder: Path, files: list[str]) -> None:
    x, y = found.attrs["boundary_axes"]
    parts = _summary(found)
    rows = [
        (
            " | ".join(part["phases"]),
            str(part["points"]),
            ", ".join(f"{name.replace('_', ' ')} {count}" for name, count in part["kinds"].items()),
            " to ".join(console.number(v) for v in part[x]),
            " to ".join(console.number(v) for v in part[y]),
        )
        for part in parts
    ]
    if rows:
        console.table(("between", "points", "kind", x, y), rows)
        for kind in sorted({int(k) for k in found["kind"].values}):
            console.say(f"  {KIND_WORDS[Kind(kind)]}")
    else:
        console.say("no boundary: one phase fills the ranges of these axes, as far as the nodes can tell")
    console.say(
        f"{found.attrs['solves']:,} points solved; curves are located to {found.attrs['location']:g} of the ranges"
    )
    if found.attrs["untrusted_solves"]:
        console.say(f"{found.attrs['untrusted_solves']} of them are not to be trusted; hatched in the figure")
    console.say(f"in {folder}:")
    for name in files:
        console.say(f"  {name}")
