"""What fluctuations add to the thermodynamics of a solution: free energy, phonon entropy, depletion.

In:  a `Solution`, the number of sites per direction that regulates long waves.
Out: `OneLoop`, arrays of the solution's batch shape.

A product of sites has no phonons; here they are, to Gaussian order. In 1D, and in 2D at T > 0, the depletion of the
infinite system exceeds the density however weak the interaction: long waves destroy the order. On a lattice of
finite size the sum over momenta is finite; where it still exceeds the density, `exceeds` says so and the numbers
mean nothing.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from gutz.errors import InputError
from gutz.fluctuations.layer import GaussianLayer
from gutz.fluctuations.sites import local_sites
from gutz.solution import Solution

Floats = NDArray[np.float64]


class OneLoop(NamedTuple):
    """Per site, nan where a point has no finite state.

    free_energy: to be added to the solution's, (...). entropy: of the modes at fixed spectrum, in k_B, (...).
    depletion: atoms per site outside the condensate, (..., species). exceeds: depletion above the filling in some
    species, (...).
    """

    free_energy: Floats
    entropy: Floats
    depletion: Floats
    exceeds: NDArray[np.bool_]


def one_loop(solution: Solution, size: int = 24) -> OneLoop:
    """Fluctuations around every point of a solution, on a lattice of `size` sites per direction.

    Momenta lie between those of the periodic lattice, so that none has zero energy and sums converge fast with size. At
    T = 0 the entropy is 0. Raises InputError for a size below 2.
    """
    if isinstance(size, bool) or not isinstance(size, int | np.integer) or size < 2:
        raise InputError(f"size is {size}; it must be a whole number of at least 2 sites per direction")
    dim, species = solution.mixture.dim, solution.mixture.species
    axis = 2.0 * np.pi * (np.arange(size) + 0.5) / size
    k = np.stack(np.meshgrid(*([axis] * dim), indexing="ij"), -1).reshape(-1, dim)
    found = local_sites(solution)
    F, S, depletion = np.full(len(found), np.nan), np.full(len(found), np.nan), np.full((len(found), species), np.nan)
    for n, sites in enumerate(found):
        if sites is None:
            continue
        layer = GaussianLayer(sites)
        F[n], S[n] = layer.one_loop(k)
        normal = layer.correlations(k).normal
        depletion[n] = np.where(sites.ordered, np.diagonal(normal, axis1=1, axis2=2).mean(0), 0.0)
    shape = solution.shape
    depletion = depletion.reshape((*shape, species))
    exceeds = np.asarray((depletion > np.asarray(solution.filling)).any(-1), np.bool_)
    return OneLoop(F.reshape(shape), S.reshape(shape), depletion, exceeds)
