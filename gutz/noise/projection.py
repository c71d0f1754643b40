"""Exact projection of a product state on fixed atom numbers, for lattices too small for the closed correction.

In:  local density matrices of every site, target numbers.
Out: the normal-ordered map and momentum distributions in P_N ρ P_N / tr(P_N ρ).

A projector is a finite Fourier sum over twists exp(iθ·N), each of which leaves a product state; twisted
averages are not complex conjugates of each other, so every operator keeps its place.
"""

from collections.abc import Sequence
from itertools import product
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gutz.errors import InputError, ResourceError
from gutz.fock import LocalSpace
from gutz.noise.grid import Floats, Grid
from gutz.noise.uniform import Background, Line, UniformMap

Complexes = NDArray[np.complex128]
Blocks = list[tuple[int, ...]]

MAX_WORK = 2_000_000_000
"""Largest number of elementary steps, twists × sites^4 × pairs."""

MAX_TWISTS = 200_000
"""Largest number of twists for a uniform state."""


def projected(rho: NDArray[Any], shape: tuple[int, ...], numbers: tuple[int, ...], space: LocalSpace) -> "Projected":
    """Project. rho: (sites, d, d), sites of the grid in flat order. numbers: one per species.

    Raises InputError where the state has no weight at these numbers, ResourceError where the lattice is too large.
    """
    grid = Grid(shape)
    sites, species = grid.sites, space.species
    if len(numbers) != species or rho.shape[0] != sites:
        raise InputError(
            f"numbers: got {numbers} for {rho.shape[0]} sites; one per species and {sites} sites are needed"
        )
    angles = space.n_max * sites + 1
    work = angles**species * sites**4 * species**2
    if work > MAX_WORK:
        raise ResourceError(f"projection: {sites} sites need {work:.2g} steps, at most {MAX_WORK:.2g} are allowed")
    theta = 2.0 * np.pi * np.arange(angles) / angles
    twists = np.array(list(product(theta, repeat=species)))
    phase: Complexes = np.exp(1j * twists @ space.number)
    turned = rho[None] * phase[:, None, None, :]
    z = np.trace(turned, axis1=-2, axis2=-1)
    weight = np.exp(-1j * twists @ np.array(numbers, float)) / angles**species
    total = (weight * z.prod(1)).sum().real
    if total <= 1e-280:
        raise InputError(f"numbers: got {numbers}; the state has no weight there")
    scaled = turned / np.where(np.abs(z) > 0, z, 1.0)[..., None, None]
    weight = weight * z.prod(1) / total
    return Projected(grid, space, scaled, weight)


class Projected:
    """A projected product state; see `projected`."""

    def __init__(self, grid: Grid, space: LocalSpace, rho: Complexes, weight: Complexes) -> None:
        self.grid, self.space, self._rho, self._weight = grid, space, rho, weight

    def _mean(self, *operators: NDArray[np.float64]) -> Complexes:
        """Local average of a product of operators for every twist and site, (twist, site)."""
        word = operators[0]
        for operator in operators[1:]:
            word = word @ operator
        return np.einsum("tsij,ji->ts", self._rho, word)

    def one_body(self, a: int) -> Complexes:
        """<b†_ai b_aj>, (site, site), Hermitian."""
        b = self.space.lower[a]
        up, down, both = self._mean(b.T), self._mean(b), self._mean(b.T, b)
        out = np.einsum("t,ti,tj->ij", self._weight, up, down)
        np.fill_diagonal(out, self._weight @ both)
        return out

    def mean(self, a: int) -> Floats:
        """<n_a(k)>, (sites,)."""
        wave = self._wave()
        return np.einsum("kij,ij->k", wave, self.one_body(a)).real

    def _wave(self) -> Complexes:
        position = self.grid.indices()
        phase = np.exp(1j * self.grid.momenta() @ position.T)
        return np.asarray(phase[:, :, None] * phase.conj()[:, None, :] / self.grid.sites, np.complex128)

    def full(self, a: int, b: int) -> Floats:
        """:C_ab:(k, k') of the projected state, (sites, sites)."""
        n = self.grid.sites
        operators = (self.space.lower[a].T, self.space.lower[b].T, self.space.lower[b], self.space.lower[a])
        four = np.zeros((n,) * 4, complex)
        position = np.arange(n)
        # Operators on the same site act together: one term for each way to share sites (15 of them).
        for blocks in _groupings(4):
            means = [self._mean(*(operators[i] for i in block)) for block in blocks]
            letters = "ijkl"[: len(blocks)]
            term = np.einsum("t," + ",".join(f"t{x}" for x in letters) + "->" + letters, self._weight, *means)
            mesh = np.meshgrid(*([position] * len(blocks)), indexing="ij")
            apart = np.ones(term.shape, bool)
            for i in range(len(blocks)):
                for j in range(i):
                    apart &= mesh[i] != mesh[j]
            owner = [next(n for n, block in enumerate(blocks) if i in block) for i in range(4)]
            four[tuple(mesh[o][apart] for o in owner)] += term[apart]
        wave = self._wave().reshape(n, n * n)
        correlator = four.transpose(0, 3, 1, 2).reshape(n * n, n * n)
        joint = (wave @ correlator @ wave.T).real
        return joint - np.outer(self.mean(a), self.mean(b))


def _groupings(count: int) -> list[Blocks]:
    """All partitions of 0..count-1 into blocks with the order inside kept."""
    if count == 0:
        return [[]]
    out = []
    for blocks in _groupings(count - 1):
        out.append([*blocks, (count - 1,)])
        for i in range(len(blocks)):
            out.append([*blocks[:i], (*blocks[i], count - 1), *blocks[i + 1 :]])
    return out


def projected_uniform(
    rho: NDArray[Any], shape: tuple[int, ...], numbers: tuple[int, ...], space: LocalSpace
) -> UniformMap:
    """As `projected` for the same local state rho (d, d) on every site; cheap for hundreds of sites.

    Averages then depend only on which of the four operators share a site, so the twists are summed once for each of
    the 15 ways, and the Fourier sums are known in closed form.
    """
    grid = Grid(shape)
    sites, species = grid.sites, space.species
    angles = space.n_max * sites + 1
    if angles**species > MAX_TWISTS:
        raise ResourceError(
            f"projection: {sites} sites need {angles**species:,} twists, at most {MAX_TWISTS:,} are allowed"
        )
    theta = 2.0 * np.pi * np.arange(angles) / angles
    twists = np.array(list(product(theta, repeat=species)))
    phase = np.exp(1j * twists @ space.number)
    z = phase @ np.diagonal(rho)
    unit = np.exp(-1j * twists @ np.array(numbers, float)) / angles**species
    total = (unit * z**sites).sum()
    if not total.real > 1e-280:
        raise InputError(f"numbers: got {numbers}; the state has no weight there")

    def average(words: Blocks, operators: Sequence[NDArray[np.float64]]) -> complex:
        """Mean of one operator product per site, on different sites; operators named by position."""
        term = unit * z ** (sites - len(words)) / total
        for word in words:
            matrix = np.eye(space.size)
            for i in word:
                matrix = matrix @ operators[i]
            term = term * (phase @ np.einsum("ij,ji->i", rho, matrix))
        return complex(term.sum())

    k_zero = (grid.indices() == 0).all(1).astype(float)
    basis = np.stack([np.ones(grid.sites), k_zero])
    core = np.zeros((species, species, 2, 2))
    bunch, pair = np.zeros((2, species, species, grid.sites))
    mean = np.zeros((species, grid.sites))
    for a in range(species):
        b = space.lower[a]
        own, apart = average([(0, 1)], (b.T, b)).real, average([(0,), (1,)], (b.T, b)).real
        mean[a] = own - apart + apart * sites * k_zero
    for a in range(species):
        for b in range(species):
            operators = (space.lower[a].T, space.lower[b].T, space.lower[b], space.lower[a])
            values = [(blocks, average(blocks, operators).real) for blocks in _groupings(4)]
            for blocks, strength in _unrestricted(values):
                _place(blocks, strength * float(sites) ** (len(blocks) - 2), core[a, b], bunch[a, b], pair[a, b])
    core -= np.einsum("ar,bs->abrs", *(2 * [np.stack([mean[:, -1], mean[:, 0] - mean[:, -1]], -1)]))
    zero = np.zeros(grid.dim, int)
    lines = [Line(1, zero, bunch), Line(-1, zero, pair)]
    return UniformMap(grid, mean, lines, Background(basis, core), fixed=False)


def _unrestricted(values: list[tuple[Blocks, float]]) -> list[tuple[Blocks, float]]:
    """Write averages that depend on which positions coincide as a sum over 'these coincide, whatever else does'."""
    known: list[tuple[Blocks, float]] = []
    for blocks, value in sorted(values, key=lambda pair: -len(pair[0])):
        finer = sum(c for other, c in known if all(any(set(o) <= set(block) for block in blocks) for o in other))
        known.append((blocks, value - finer))
    return known


def _place(blocks: list[tuple[int, ...]], strength: float, core: Floats, bunch: Floats, pair: Floats) -> None:
    """Add the Fourier sum of one coincidence: each block fixes its total momentum to zero."""
    # Momenta entering at the four operators, as multiples of (k, k').
    momentum = np.array([(1, 0), (0, 1), (0, -1), (-1, 0)])
    total = [tuple(momentum[list(block)].sum(0)) for block in blocks]
    conditions = {t if t > (0, 0) else (-t[0], -t[1]) for t in total if t != (0, 0)}
    if not conditions:
        core[0, 0] += strength
    elif conditions == {(1, 0)}:
        core[1, 0] += strength
    elif conditions == {(0, 1)}:
        core[0, 1] += strength
    elif conditions == {(1, 1)}:
        pair += strength
    elif conditions == {(1, -1)}:
        bunch += strength
    else:
        core[1, 1] += strength
