"""How much work a scan is, before it starts: rough, from costs measured per point.

In:  a `Plan`.
Out: points, chunks, bytes of memory and disk, seconds of one core, and how many worker processes pay. Free of jax.
"""

import math
from typing import Any

from gutz.scan import schema
from gutz.scan.plan import Plan
from gutz.scan.workers import usable_cores

SECONDS_PER_POINT = 1.6e-3
"""A point with 25 states per site (two species, n_max = 4), measured on one core of a small cloud machine."""
STATES, GROWTH = 25, 3.5
"""How that grows with the states per site: a fit to 25, 36 and 49 states (1.6, 6 and 17 ms)."""
LEAST_SECONDS = 1e-3
AUTOMATIC = {1: 9, 2: 5}
"""Cutoff assumed where n_max is left automatic, by number of species."""
TARGET_FACTOR = 10.0
"""Points whose filling or entropy is given are solved about this many times."""
DRESSED_FACTOR = 12.0
"""How much longer a point of the dressed ansatz takes (16 states per site: 4.3 ms, measured)."""
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
WORTH_WORKERS_SECONDS = 20.0
"""Shorter runs are computed in place: loading the numerics once more takes a worker several seconds."""
LIMIT_SECONDS, LIMIT_FACTOR = 3600.0, 20.0
"""A chunk is given up after an hour and so many times what is expected of it."""


def estimate(full: Plan) -> dict[str, Any]:
    """Points, chunks, bytes of memory and disk, seconds of one core, worker processes `gutz scan` would use."""
    size = schema.bytes_per_point(full)
    workers = automatic_workers(full)
    return {
        "points": full.points,
        "chunks": math.prod(full.chunks),
        "memory_bytes": (1 + workers) * BASE_BYTES + max(1, workers) * WORKING_COPIES * size * math.prod(full.chunk),
        "disk_bytes": size * full.points,
        "seconds": START_SECONDS + seconds_per_point(full) * full.points,
        "workers": workers,
    }


def automatic_workers(full: Plan) -> int:
    """One process per usable core and no more than chunks; 0 (in place) where starting them would not pay."""
    if full.spec.trap is not None:
        return 0
    count = min(len(usable_cores()), math.prod(full.chunks))
    return count if count > 1 and seconds_per_point(full) * full.points > WORTH_WORKERS_SECONDS else 0


def time_limit(full: Plan) -> float:
    """Seconds after which a chunk is given up."""
    return LIMIT_SECONDS + LIMIT_FACTOR * seconds_per_point(full) * math.prod(full.chunk)


def seconds_per_point(full: Plan) -> float:
    """Seconds one point takes on one core."""
    spec = full.spec
    states = ((spec.mixture.n_max or AUTOMATIC[spec.species]) + 1) ** spec.species
    seconds = SECONDS_PER_POINT * (states / STATES) ** GROWTH
    seconds = max(LEAST_SECONDS, seconds * (DRESSED_FACTOR if spec.ansatz.kind == "dressed" else 1.0))
    targets = {axis.target.path for axis in full.axes} & {"mixture.filling", "mixture.entropy"}
    solved_for = spec.mixture.filling is not None or spec.mixture.entropy is not None or targets
    if spec.trap is not None:
        return seconds * CLOUD_POINTS * (MARGIN_FACTOR if spec.trap.wanted else 1.0)
    return seconds * (TARGET_FACTOR if solved_for else 1.0)
