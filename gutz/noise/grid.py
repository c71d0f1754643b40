"""The momentum grid of a finite lattice, and how entries of a map are addressed.

In:  numbers of sites per direction.
Out: momenta, index arithmetic, the base class of all maps with its lines, planes and full arrays.

Momenta are 2π m / L in units of 1/lattice constant; an index is a whole number per direction, counted modulo L.
Maps are normal-ordered: :C_ab:(k, k') = <b†_a(k) b†_b(k') b_b(k') b_a(k)> - <n_a(k)><n_b(k')>. The shot noise
δ_ab <n_a(k)> at k = k' is kept apart, since it exists at one pixel and not at its copies a reciprocal vector away.
"""

from abc import ABC, abstractmethod
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from gutz.errors import InputError, ResourceError

Floats = NDArray[np.float64]
Indices = NDArray[np.int64]

MAX_SITES = 40_000_000
"""Largest number of sites of a grid."""

MAX_ENTRIES = 40_000_000
"""Largest number of entries of one array handed out (8 bytes each)."""


class Grid(NamedTuple):
    """A periodic lattice of shape (L_x, ..), and its momenta."""

    shape: tuple[int, ...]

    @property
    def sites(self) -> int:
        """Number of sites, and of momenta."""
        return int(np.prod(self.shape))

    @property
    def dim(self) -> int:
        """Number of directions."""
        return len(self.shape)

    def indices(self) -> Indices:
        """Every index, (sites, dim), last direction fastest."""
        return np.stack(np.unravel_index(np.arange(self.sites), self.shape), -1)

    def momenta(self) -> Floats:
        """Every momentum, (sites, dim), from 0 to 2π."""
        return 2.0 * np.pi * self.indices() / np.array(self.shape)

    def flat(self, index: Indices) -> Indices:
        """Positions of indices (..., dim) in the flat order."""
        wrapped = np.mod(index, self.shape)
        return np.ravel_multi_index(tuple(np.moveaxis(wrapped, -1, 0)), self.shape)

    def negative(self) -> Indices:
        """Position of -k for every k."""
        return self.flat(-self.indices())

    def near(self, momentum: Sequence[float] | Floats) -> Indices:
        """Index of the grid momentum given, (dim,). Raises InputError for one that is not on the grid."""
        k = np.atleast_1d(np.asarray(momentum, float))
        if k.shape != (self.dim,):
            raise InputError(f"momentum has {k.size} components; it needs {self.dim}, one for each direction")
        steps = k * np.array(self.shape) / (2.0 * np.pi)
        whole = np.round(steps)
        if not np.all(np.isfinite(steps)) or np.any(np.abs(steps - whole) > 1e-6):
            raise InputError(
                f"momentum is {[float(f'{x:.6g}') for x in k]}; each component must be a multiple of 2 pi / L "
                f"with L = {list(self.shape)}"
            )
        return whole.astype(int)


def check_grid(shape: Sequence[int] | int, dim: int) -> Grid:
    """Read a size: one number for all directions, or one each. Raises InputError or ResourceError."""
    given = tuple(shape) if isinstance(shape, Sequence) else (shape,) * dim
    if len(given) != dim:
        raise InputError(f"size has {len(given)} entries; it needs {dim}, one for each direction of the lattice")
    for length in given:
        if isinstance(length, bool) or not isinstance(length, int | np.integer) or length < 2:
            raise InputError(f"size is {shape}; every length must be a whole number of at least 2 sites")
    count = 1
    for length in given:
        count *= int(length)
    if count > MAX_SITES:
        raise ResourceError(
            f"size: {' x '.join(map(str, given))} = {count:,} sites; at most {MAX_SITES:,} fit, choose a smaller size"
        )
    return Grid(tuple(int(length) for length in given))


class NoiseMap(ABC):
    """A correlation map on a grid that hands out entries on demand; never stored as a whole.

    grid: the momenta. mean: <n_a(k)>, (a, sites). species: 1 or 2.
    """

    grid: Grid
    mean: Floats

    @property
    def species(self) -> int:
        """1 or 2."""
        return len(self.mean)

    @abstractmethod
    def entries(self, a: int, b: int, k: Indices, k_: Indices) -> Floats:
        """:C_ab:(k, k') at indices k and k', (..., dim) each, broadcast; a, b counted from 0."""

    def _check_species(self, *labels: int) -> None:
        for label in labels:
            if isinstance(label, bool) or label not in range(self.species):
                raise InputError(f"species is {label!r}; it must be one of {list(range(self.species))}, counted from 0")

    def difference_line(self, a: int, b: int, Q: Indices) -> Floats:
        """C_ab(k, k + Q) for every k, (sites,). Q = 0 is the bunching and counterflow channel."""
        self._check_species(a, b)
        k = self.grid.indices()
        return self.entries(a, b, k, k + Q)

    def sum_line(self, a: int, b: int, Q: Indices) -> Floats:
        """C_ab(k, -k + Q) for every k, (sites,). Q = 0 is the pair channel."""
        self._check_species(a, b)
        k = self.grid.indices()
        return self.entries(a, b, k, Q - k)

    def plane(self, a: int, b: int, k_: Indices) -> Floats:
        """C_ab(k, k') for every k at one k', shape of the grid."""
        self._check_species(a, b)
        return self.entries(a, b, self.grid.indices(), k_).reshape(self.grid.shape)

    def full(self, a: int, b: int) -> Floats:
        """The whole map, (sites, sites). Raises InputError for a wrong species, ResourceError above `MAX_ENTRIES`."""
        self._check_species(a, b)
        refuse_above(self.grid.sites**2, "the whole map")
        k = self.grid.indices()
        return self.entries(a, b, k[:, None], k[None, :])

    def with_shot_noise(self, a: int, b: int) -> Floats:
        """The whole map plus δ_ab δ_kk' <n_a(k)>, (sites, sites)."""
        whole = self.full(a, b)
        if a == b:
            whole[np.diag_indices(self.grid.sites)] += self.mean[a]
        return whole


def refuse_above(entries: int, what: str) -> None:
    """Raise ResourceError where an array would have more than `MAX_ENTRIES` entries."""
    if entries > MAX_ENTRIES:
        raise ResourceError(
            f"{what} would have {entries:,} entries ({entries * 8 / 1e9:.3g} GB); at most {MAX_ENTRIES:,} are handed "
            "out, ask for lines or planes instead"
        )


def fixed_number(gain: Floats, variance: Floats) -> Floats:
    """Matrix W of the fixed-number correction C - Σ_cd g_ac(k) W_cd g_bd(k'), pseudo-inverse of Cov(N_a, N_b).

    gain is unused where the numbers do not fluctuate: the variance is then 0 within rounding of its own scale.
    """
    scale = np.abs(gain).sum((-1, -2)).max()
    if np.abs(variance).max() <= 1e-10 * max(scale, 1e-300):
        return np.zeros_like(variance)
    return np.asarray(np.linalg.pinv(variance, rcond=1e-10, hermitian=True), np.float64)
