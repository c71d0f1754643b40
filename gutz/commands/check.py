"""`gutz check`: judge a file and estimate the work, without computing.

In:  a scan file.
Out: a short table, or JSON. Loads neither jax nor xarray.
"""

import math
from collections.abc import Sequence
from pathlib import Path

import numpy as np

from gutz import console
from gutz.commands.points import load
from gutz.scan.estimate import estimate
from gutz.scan.plan import Plan, check_physics


def run(file: Path, overrides: Sequence[str], as_json: bool, quiet: bool, debug: bool) -> int:
    """Check the file and print the estimate; mistakes raise InputError."""
    source, full = load(file, overrides, clouds=True)
    check_physics(full)
    found = estimate(full)
    remarks = _cautions(full)
    if as_json:
        console.write_json({"file": source.name, "sha256": full.spec.sha256(), **found, "remarks": remarks})
        return 0
    axes = " x ".join(f"{axis.values.size} {axis.name}" for axis in full.axes) or "a single point"
    rows = [
        ("points", f"{full.points:,} ({axes})"),
        ("chunks", f"{found['chunks']:,} of up to {math.prod(full.chunk):,} points"),
        ("memory", f"about {console.size(found['memory_bytes'])}"),
        ("disk", f"at most {console.size(found['disk_bytes'])}"),
        ("time", f"roughly {console.duration(found['seconds'])} on one core, the first time"),
    ]
    if full.spec.trap is None:
        rows.append(("workers", _workers(found["workers"])))
    console.table((f"{source.name} is fine", "estimate"), rows)
    for remark in remarks:
        console.note(f"note: {remark}", quiet)
    return 0


def _workers(count: int) -> str:
    """Say how a scan would compute."""
    return f"{count} processes, one per core" if count else "none, it is short enough to compute in place"


def _cautions(full: Plan) -> list[str]:
    """What the lattice's corners deserve as a warning."""
    found = full.lattice([np.unique(axis.values[[0, -1]]) for axis in full.axes])
    return [] if found is None else [f"Somewhere in this file: {words}" for words in found.cautions]
