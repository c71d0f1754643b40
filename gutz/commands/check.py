"""`gutz check`: judge a file and estimate the work, without computing.

In:  a scan file.
Out: a short table, or JSON. Loads neither jax nor xarray.
"""

import math
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from gutz import console
from gutz.commands.points import load
from gutz.scan import schema
from gutz.scan.plan import Plan, check_physics

SECONDS_PER_POINT = 1.6e-3
"""A point with 25 states per site (two species, n_max = 4), measured on one core of a small cloud machine."""
STATES, GROWTH = 25, 3.5
"""How that grows with the states per site: a fit to 25, 36 and 49 states (1.6, 6 and 17 ms)."""
LEAST_SECONDS = 1e-3
AUTOMATIC = {1: 9, 2: 5}
"""Cutoff assumed where n_max is left automatic, by number of species."""
TARGET_FACTOR = 10.0
"""Points whose filling or entropy is given are solved about this many times."""
START_SECONDS = 30.0
"""Loading and compiling, the first time."""
CLOUD_POINTS = 4000
"""Local states solved for one cloud, the search for its chemical potentials and temperature included."""
MARGIN_FACTOR = 5.0
"""How much more a heating margin takes."""
BASE_BYTES = 600_000_000
"""Memory of the loaded program before the first point."""
WORKING_COPIES = 6
"""A chunk is held about this many times over while it is solved."""


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
    console.table((f"{source.name} is fine", "estimate"), rows)
    for remark in remarks:
        console.note(f"note: {remark}", quiet)
    return 0


def estimate(full: Plan) -> dict[str, Any]:
    """Points, chunks, bytes of memory and disk, seconds: rough, from measured costs per point."""
    size = schema.bytes_per_point(full)
    return {
        "points": full.points,
        "chunks": math.prod(full.chunks),
        "memory_bytes": BASE_BYTES + WORKING_COPIES * size * math.prod(full.chunk),
        "disk_bytes": size * full.points,
        "seconds": START_SECONDS + _seconds_per_point(full) * full.points,
    }


def _seconds_per_point(full: Plan) -> float:
    spec = full.spec
    states = ((spec.mixture.n_max or AUTOMATIC[spec.species]) + 1) ** spec.species
    seconds = max(LEAST_SECONDS, SECONDS_PER_POINT * (states / STATES) ** GROWTH)
    targets = {axis.target.path for axis in full.axes} & {"mixture.filling", "mixture.entropy"}
    solved_for = spec.mixture.filling is not None or spec.mixture.entropy is not None or targets
    if spec.trap is not None:
        return seconds * CLOUD_POINTS * (MARGIN_FACTOR if spec.trap.wanted else 1.0)
    return seconds * (TARGET_FACTOR if solved_for else 1.0)


def _cautions(full: Plan) -> list[str]:
    """What the lattice's corners deserve as a warning."""
    found = full.lattice([np.unique(axis.values[[0, -1]]) for axis in full.axes])
    return [] if found is None else [f"Somewhere in this file: {words}" for words in found.cautions]
