"""Local Fock space of one lattice site: the states |n1, n2> with n_a = 0..n_max, and operators on them.

In:  the cutoff n_max and the number of species (1 or 2).
Out: plain numpy arrays, shape (state, state), real, built once per cutoff and shared read-only.
Species 1 is the slow index: state = n1 (n_max + 1) + n2.
"""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

Matrix = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class LocalSpace:
    """Operators of one site with at most `n_max` atoms of each of `species` species.

    lower: annihilators b_a, shape (species, state, state).
    number: occupations n_a of the basis states, shape (species, state).
    top: states in which some species sits at the cutoff, boolean, shape (state,).
    """

    n_max: int
    species: int
    lower: Matrix
    number: Matrix
    top: NDArray[np.bool_]

    @property
    def size(self) -> int:
        """Number of basis states, (n_max + 1) ** species."""
        return self.number.shape[1]

    @property
    def field(self) -> Matrix:
        """b_a + b_a†, what a real single-particle field couples to; shape (species, state, state)."""
        return self.lower + np.swapaxes(self.lower, -1, -2)

    @property
    def pair(self) -> Matrix:
        """b_1 b_2, shape (state, state)."""
        return self.lower[0] @ self.lower[1]

    @property
    def antipair(self) -> Matrix:
        """b_1† b_2, shape (state, state)."""
        return self.lower[0].T @ self.lower[1]


@lru_cache(maxsize=64)
def local_space(n_max: int, species: int) -> LocalSpace:
    """Return the local Fock space; cached, so identical calls share one object."""
    single = np.diag(np.sqrt(np.arange(1.0, n_max + 1)), 1)
    identity = np.eye(n_max + 1)
    occupation = np.arange(n_max + 1.0)
    if species == 1:
        lower = single[None]
        number = occupation[None]
    else:
        lower = np.stack([np.kron(single, identity), np.kron(identity, single)])
        number = np.stack([np.repeat(occupation, n_max + 1), np.tile(occupation, n_max + 1)])
    top = np.any(number == n_max, axis=0)
    for array in (lower, number, top):
        array.flags.writeable = False
    return LocalSpace(n_max=n_max, species=species, lower=lower, number=number, top=top)
