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

INPUTS = ("t", "U", "U12", "cautions")
"""Variables of a run that no solver gives."""


def compute_chunk(full: Plan, index: Sequence[int]) -> dict[str, Any]:
    """Solve one chunk; arrays of the full chunk shape for every variable of the run."""
    mixture, given = parameters(full, index)
    values = {name: given[name] for name in INPUTS if name in given}
    names = [name for name in schema.layout(full) if name not in values]
    solution = solve(mixture, ansatz=full.spec.ansatz.kind)
    return values | {name: np.asarray(getattr(solution, name)) for name in names}


def parameters(full: Plan, index: Sequence[int]) -> tuple[Mixture, dict[str, Any]]:
    """The mixture of one chunk, and what is known of it without solving: inputs, cautions, mu and T where given."""
    picked = full.picked(index)
    found = full.lattice(picked)
    mixture = mixture_of(full.settings(picked, found))
    given: dict[str, Any] = {"t": mixture.t, "U": mixture.U, "U12": mixture.U12}
    if found is not None:
        given["cautions"] = np.broadcast_to(found.flags, mixture.shape)
    given |= {name: getattr(mixture, name) for name in ("mu", "T") if getattr(mixture, name) is not None}
    return mixture, {name: np.asarray(values) for name, values in given.items()}


def solve_points(full: Plan, points: Sequence[int]) -> dict[str, Any]:
    """Solve single points, named by their place in the grid (last axis fastest); arrays (n, ...) by name."""
    places = np.unravel_index(np.asarray(points), full.shape)
    columns = [axis.values[place] for axis, place in zip(full.axes, places, strict=True)]
    solution = solve(mixture_of(full.settings_at(columns)), ansatz=full.spec.ansatz.kind)
    names = [name for name in schema.layout(full) if name not in INPUTS]
    return {name: np.asarray(getattr(solution, name)) for name in names}


def mixture_of(settings: Mapping[str, Any]) -> Mixture:
    """Build the mixture of some points of a run from `Plan.settings`.

    The model refuses a mixture that collapses at every point; here that may be true of some points of many.
    """
    U12 = np.asarray(settings["U12"])
    mixture = Mixture(**{**settings, "U12": np.zeros(U12.shape)})
    return mixture.replace(U12=np.broadcast_to(U12, mixture.shape))
