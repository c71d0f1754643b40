"""Which sites, which bonds, which couplings: the input of every quasi-exact solver.

In:  plain numbers and tuples.
Out: frozen `Cluster` and `LatticeModel`, checked once, here.

    H = - sum_<ij>,a t_a (b+_ia b_ja + h.c.) + sum_i,a U_a/2 n(n-1) + U12 sum_i n_i1 n_i2 - sum_i,a mu_ia n_ia

The bond list is literal: each entry adds its hopping term once; a pair listed twice hops twice as strongly.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from itertools import product

import numpy as np
from numpy.typing import ArrayLike, NDArray

from gutz.errors import InputError

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Cluster:
    """Sites on an integer grid and the bonds between them.

    `shape` is the box that holds the sites (its momenta are the grid of noise maps); `positions` has one
    integer vector per site; `bonds` lists pairs (i, j), i != j, each counted as often as it is listed.
    Raises InputError for a bond that leaves the cluster or joins a site to itself.
    """

    shape: tuple[int, ...]
    positions: tuple[tuple[int, ...], ...]
    bonds: tuple[tuple[int, int], ...]

    def __post_init__(self) -> None:
        for i, j in self.bonds:
            if not (0 <= i < self.sites and 0 <= j < self.sites) or i == j:
                raise InputError(f"bonds: got ({i}, {j}), must join two different sites out of 0..{self.sites - 1}.")

    @property
    def sites(self) -> int:
        """Number of sites."""
        return len(self.positions)

    @property
    def is_open_chain(self) -> bool:
        """Whether the bonds are exactly (i, i + 1), each once."""
        return sorted(self.bonds) == [(i, i + 1) for i in range(self.sites - 1)]

    @property
    def momenta(self) -> Floats:
        """Grid momenta 2 pi m / L of the box, shape (sites, dimension), m = 0..L-1, lattice constant 1."""
        axes = [2 * np.pi * np.arange(length) / length for length in self.shape]
        return np.array(list(product(*axes)), dtype=float)


def box(shape: Sequence[int], periodic: bool | Sequence[bool] = True) -> Cluster:
    """Hypercubic cluster; sites in row-major order, bonds grouped by site and then by direction.

    In a periodic direction every site is bound to its next neighbour, so a periodic length of 2 lists each
    bond twice (both neighbours of a site are the same site, as the lattice dispersion 2 cos k wants it);
    an open length of 2 lists it once. Raises InputError for a periodic length of 1.
    """
    lengths = tuple(int(length) for length in shape)
    wraps = (periodic,) * len(lengths) if isinstance(periodic, bool) else tuple(periodic)
    if not lengths or min(lengths) < 1:
        raise InputError(f"shape: got {tuple(shape)}, every length must be at least 1.")
    if len(wraps) != len(lengths):
        raise InputError(f"periodic: got {len(wraps)} flags for {len(lengths)} directions, must be one each.")
    if any(wrap and length == 1 for wrap, length in zip(wraps, lengths, strict=True)):
        raise InputError(f"shape: got {lengths}, a periodic direction needs at least 2 sites.")
    positions = tuple(product(*(range(length) for length in lengths)))
    index = {position: site for site, position in enumerate(positions)}
    bonds = []
    for site, position in enumerate(positions):
        for axis, (wrap, length) in enumerate(zip(wraps, lengths, strict=True)):
            step = position[axis] + 1
            if step < length or wrap:
                neighbour = (*position[:axis], step % length, *position[axis + 1 :])
                bonds.append((site, index[neighbour]))
    return Cluster(lengths, positions, tuple(bonds))


def chain(length: int) -> Cluster:
    """Open chain of `length` sites with length - 1 bonds."""
    return box((length,), periodic=False)


def ring(length: int) -> Cluster:
    """Periodic chain of `length` >= 2 sites with `length` bonds; on 2 sites the one pair is listed twice."""
    return box((length,), periodic=True)


@dataclass(frozen=True, eq=False)
class LatticeModel:
    """One- or two-species Bose-Hubbard model on a cluster; energies in any one unit.

    Args:
        cluster: sites and bonds.
        t: hopping, one entry per species; each entry a number or one number per bond.
        U: on-site interaction, one entry per species (ignored for a species with n_max = 1).
        U12: interaction between the species (ignored with one species).
        mu: chemical potential, one entry per species; each entry a number or one number per site.
        n_max: largest occupation of a site, one number or one per species.

    Raises InputError for wrong lengths and for values that are not finite.
    """

    cluster: Cluster
    t: Sequence[ArrayLike]
    U: Sequence[float]
    U12: float = 0.0
    mu: Sequence[ArrayLike] | None = None
    n_max: int | Sequence[int] = 3

    def __post_init__(self) -> None:
        if self.species not in (1, 2):
            raise InputError(f"t: got {self.species} entries, must be one per species (1 or 2 species).")
        # Read once, so that every mistake surfaces at construction.
        _ = self.hopping, self.interaction, self.potential, self.cutoff
        if not np.isfinite(self.U12):
            raise InputError(f"U12: got {self.U12}, must be finite.")

    @property
    def species(self) -> int:
        """Number of species, 1 or 2."""
        return len(self.t)

    @cached_property
    def hopping(self) -> Floats:
        """Hopping per species and bond, shape (species, bonds)."""
        return self._per_species("t", self.t, len(self.cluster.bonds), "bond")

    @cached_property
    def interaction(self) -> Floats:
        """On-site interaction per species, shape (species,)."""
        return self._per_species("U", self.U, 1, "species")[:, 0]

    @cached_property
    def potential(self) -> Floats:
        """Chemical potential per species and site, shape (species, sites)."""
        mu = (0.0,) * self.species if self.mu is None else self.mu
        return self._per_species("mu", mu, self.cluster.sites, "site")

    @cached_property
    def cutoff(self) -> tuple[int, ...]:
        """Largest occupation per species."""
        values = (self.n_max,) * self.species if isinstance(self.n_max, int) else tuple(self.n_max)
        if len(values) != self.species or min(values) < 1:
            raise InputError(f"n_max: got {self.n_max}, must be one whole number >= 1, or one per species.")
        return values

    def _per_species(self, name: str, values: Sequence[ArrayLike], count: int, what: str) -> Floats:
        if len(values) != self.species:
            raise InputError(f"{name}: got {len(values)} entries, must be one per species ({self.species}).")
        rows = np.empty((self.species, count))
        for row, value in zip(rows, values, strict=True):
            array = np.asarray(value, dtype=float)
            if array.shape not in ((), (count,)):
                raise InputError(
                    f"{name}: got shape {array.shape} for one species, must be one number or one per {what} ({count})."
                )
            if not np.all(np.isfinite(array)):
                raise InputError(f"{name}: got {value}, must be finite.")
            row[:] = array
        return rows
