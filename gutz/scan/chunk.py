"""The numbers of one chunk of a scan: what a worker computes, without any file.

In:  a `Plan` and which chunk of it.
Out: arrays by name, ready to be stored; nothing of the store is loaded, so that one point comes fast.
"""

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from gutz.model import Mixture
from gutz.scan import schema
from gutz.scan.plan import Plan
from gutz.solver import solve


def compute_chunk(full: Plan, index: Sequence[int]) -> dict[str, Any]:
    """Solve one chunk; arrays of the full chunk shape for every variable of the run."""
    picked = full.picked(index)
    found = full.lattice(picked)
    mixture = mixture_of(full.settings(picked, found))
    values: dict[str, Any] = {"t": mixture.t, "U": mixture.U, "U12": mixture.U12}
    if found is not None:
        values["cautions"] = np.broadcast_to(found.flags, mixture.shape)
    names = [name for name in schema.layout(full) if name not in values]
    solution = solve(mixture, ansatz=full.spec.ansatz.kind)
    return values | {name: np.asarray(getattr(solution, name)) for name in names}


def mixture_of(settings: Mapping[str, Any]) -> Mixture:
    """Build the mixture of some points of a run from `Plan.settings`.

    The model refuses a mixture that collapses at every point; here that may be true of some points of many.
    """
    U12 = np.asarray(settings["U12"])
    mixture = Mixture(**{**settings, "U12": np.zeros(U12.shape)})
    return mixture.replace(U12=np.broadcast_to(U12, mixture.shape))
