"""One batch of points of the dressed ansatz: the product minimum, the families grown from it, their outputs.

In:  a flat `Mixture` of numbers, chemical potentials, temperatures, and the product result of the same points.
Out: a `Batch` of numpy arrays like that of the product ansatz. Fields are the order parameters phi.
"""

from typing import Any

import numpy as np

from gutz.ansatz import derived, selection
from gutz.batch import Batch
from gutz.model import Mixture
from gutz.status import Status

Array = Any

_FROM_PRODUCT = Status.CUTOFF | Status.NOT_FINITE
"""Remarks on the product minimum that hold for the dressed one too: it is grown from there in the same space."""


def dress(mixture: Mixture, mu: np.ndarray, T: np.ndarray, start: Batch, *, n_max: int, sublattices: int) -> Batch:
    """Minimise the dressed functional for points whose product minimum is `start`."""
    state = selection.minimise(mixture, mu, T, n_max, sublattices, start.fields)
    found = derived.observables(mixture, mu, T, n_max, sublattices, state)
    density = state.filling
    outputs = {
        "mu": mu,
        "T": T,
        "filling": found.filling,
        "free_energy": found.free_energy,
        "energy": found.energy,
        "entropy": found.entropy,
        "entropy_per_particle": found.entropy / np.maximum(found.filling.sum(-1), 1e-300),
        "heat_capacity": found.heat_capacity,
        "order_parameter": state.phi.mean(1),
        "condensate": (state.phi**2).mean(1),
        "pair_order": np.abs(state.pair).mean(1),
        "antipair_order": np.abs(state.antipair).mean(1),
        "number_variance": found.number_covariance,
        "compressibility": found.compressibility,
        "coherence": found.coherence,
        "stiffness": found.stiffness,
        "staggering": 0.5 * (density[:, 0] - density[:, -1]),
        "dressing": state.dressing,
        "cutoff_weight": start.outputs["cutoff_weight"],
    }
    fallback = (state.status & int(Status.FALLBACK)) > 0
    kept = np.where(fallback, start.status, start.status & int(_FROM_PRODUCT))
    response = np.zeros(start.response.shape)
    response[:, :-1, :-1] = found.compressibility
    warm = T > 0
    response[warm, -1, -1] = found.heat_capacity[warm] / T[warm]
    status = (state.status | kept).astype(np.int32)
    return Batch(state.phi, outputs, response, start.order_response, status)
