"""A solver made of plain arithmetic, for tests of what happens around the solver.

Numbers depend on the parameters alone, so a run that was stopped and continued must equal one that was not.
It says nothing about physics; tests of physics use the real solver.
"""

import os
import signal
import time
from types import SimpleNamespace

import numpy as np

from gutz.limits import collapses
from gutz.phases import Phase
from gutz.status import Status
from gutz.variables import VARIABLES


def compute_chunk(full, index):
    """In a worker process: a chunk with this solver; the environment says which chunk misbehaves, and how."""
    from gutz.scan import chunk

    if os.environ.get("STANDIN_CRASH") == str(index):
        os.kill(os.getpid(), signal.SIGKILL)
    if os.environ.get("STANDIN_HANG") == str(index):
        time.sleep(1000)
    chunk.solve = solve
    return chunk.compute_chunk(full, index)


def solve(mixture, ansatz="product"):
    time.sleep(float(os.environ.get("STANDIN_SECONDS", "0")))
    sizes = {"species": mixture.species, "species_": mixture.species, "direction": mixture.dim}
    given = mixture.mu if mixture.mu is not None else mixture.filling
    seed = np.asarray(mixture.z_t).sum(-1) + np.asarray(given).sum(-1) + np.asarray(mixture.T)
    found = {}
    for number, (name, variable) in enumerate(VARIABLES.items(), 1):
        trailing = tuple(sizes[dim] for dim in variable.dims)
        parts = np.arange(1, 1 + int(np.prod(trailing, dtype=int))).reshape(trailing)
        values = np.sin(number * seed.reshape(seed.shape + (1,) * len(trailing)) * parts)
        found[name] = values.astype(variable.dtype)
    found["compressibility"] = np.full_like(found["compressibility"], np.nan)
    found["phase"] = np.where(seed > np.median(seed), Phase.SUPERFLUID, Phase.MOTT).astype(np.int8)
    found["status"] = np.where(np.sin(9 * seed) > 0.95, Status.NOT_CONVERGED, 0).astype(np.int32)
    if mixture.species == 2:
        gone = collapses(np.asarray(mixture.U), np.asarray(mixture.U12), mixture.n_max)
        found["status"] = np.where(gone, Status.COLLAPSE, found["status"]).astype(np.int32)
        found["phase"] = np.where(gone, Phase.COLLAPSE, found["phase"]).astype(np.int8)
    return SimpleNamespace(**found)
