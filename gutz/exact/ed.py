"""Exact diagonalisation of one- and two-species lattice bosons on small clusters.

In:  a `LatticeModel`; atom numbers per species, or none for the grand-canonical state; a temperature.
Out: a `State` (pure or thermal) and its exact correlators and noise maps.
Particle numbers are conserved species by species, so every sector is a product of two one-species bases.
Correlators are normal-ordered before the cutoff n_max can spoil them: only annihilators act on the state.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import lru_cache
from itertools import product

import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray
from scipy.linalg import eigh
from scipy.sparse.linalg import eigsh
from scipy.special import logsumexp

from gutz.errors import InputError, ResourceError
from gutz.exact.lattice import Floats, LatticeModel

Numbers = tuple[int, ...]

SPARSE_LIMIT = 2_000_000
"""Largest sector for which `ground_state` is tried (states)."""
DENSE_LIMIT = 4_000
"""Largest sector that is diagonalised in full (states)."""
VECTOR_LIMIT = 100_000_000
"""Largest total size of all eigenvectors kept by `thermal` (numbers; 8 bytes each)."""

_DENSE_BELOW = 200
_NEGLIGIBLE_WEIGHT = 1e-18


@dataclass(frozen=True, eq=False)
class OneSpeciesBasis:
    """All occupations of the sites by a fixed number of atoms, in the order of their codes.

    `occupations` has shape (states, sites); `codes` reads each row as a number in base cutoff + 1.
    """

    cutoff: int
    occupations: NDArray[np.int64]
    codes: NDArray[np.int64]

    @property
    def size(self) -> int:
        """Number of states."""
        return len(self.codes)


@dataclass(frozen=True, eq=False)
class Block:
    """The part of a state within one sector.

    `weights` (kept,) sum, over all blocks, to 1; `vectors` has shape (size of basis 1, size of basis 2, kept)
    (one species: size of basis 2 = 1).
    """

    numbers: Numbers
    weights: Floats
    vectors: Floats


@dataclass(frozen=True, eq=False)
class State:
    """A pure (temperature 0) or thermal state of a model, extensive values, H including - sum mu n.

    `free_energy` is -T ln Xi (grand-canonical), -T ln Z_N (fixed numbers) or the energy (T = 0);
    `energy` = <H>; `entropy` in units of k_B.
    """

    model: LatticeModel
    temperature: float
    free_energy: float
    energy: float
    entropy: float
    blocks: tuple[Block, ...]

    @property
    def numbers(self) -> Floats:
        """Mean atom number per species, shape (species,)."""
        return np.sum([b.weights.sum() * np.array(b.numbers, dtype=float) for b in self.blocks], axis=0)

    @property
    def filling(self) -> Floats:
        """Mean occupation, shape (species, sites)."""
        return np.array([np.diag(one_body(self, a)) for a in range(self.model.species)])


@lru_cache(maxsize=256)
def count_states(sites: int, cutoff: int, atoms: int) -> int:
    """Number of ways to put `atoms` on `sites` with at most `cutoff` on each (no array is built)."""
    if atoms < 0:
        return 0
    ways = np.zeros(atoms + 1, dtype=object)
    ways[0] = 1
    for _ in range(sites):
        cumulative = np.cumsum(ways)
        shifted = np.concatenate([np.zeros(cutoff + 1, dtype=object), cumulative])[: atoms + 1]
        ways = cumulative - shifted
    return int(ways[atoms])


def _place_values(sites: int, cutoff: int) -> NDArray[np.int64]:
    """Value of one atom on each site in the code of a state."""
    if sites * np.log2(cutoff + 1) >= 63:
        raise ResourceError(
            f"cluster: {sites} sites with n_max = {cutoff} exceed a 63-bit state code; choose fewer sites."
        )
    return (cutoff + 1) ** np.arange(sites - 1, -1, -1, dtype=np.int64)


@lru_cache(maxsize=256)
def one_species_basis(sites: int, cutoff: int, atoms: int) -> OneSpeciesBasis:
    """Basis of one species at fixed atom number (built site by site, never through the full space)."""
    rows = np.zeros((1, 0), dtype=np.int64)
    left = np.array([atoms], dtype=np.int64)
    for site in range(sites):
        room = cutoff * (sites - site - 1)
        low = np.maximum(0, left - room)
        high = np.minimum(cutoff, left)
        choices = np.maximum(high - low + 1, 0)
        start = np.repeat(np.cumsum(choices) - choices, choices)
        occupation = np.repeat(low, choices) + np.arange(choices.sum()) - start
        rows = np.column_stack([np.repeat(rows, choices, axis=0), occupation])
        left = np.repeat(left, choices) - occupation
    return OneSpeciesBasis(cutoff, rows, rows @ _place_values(sites, cutoff))


@lru_cache(maxsize=4096)
def _annihilator(sites: int, cutoff: int, atoms: int, site: int) -> sp.csr_array:
    """b_site from `atoms` to `atoms` - 1, sparse (smaller basis, basis)."""
    basis = one_species_basis(sites, cutoff, atoms)
    smaller = one_species_basis(sites, cutoff, atoms - 1)
    occupation = basis.occupations[:, site]
    column = np.flatnonzero(occupation)
    row = np.searchsorted(smaller.codes, basis.codes[column] - _place_values(sites, cutoff)[site])
    return sp.csr_array((np.sqrt(occupation[column]), (row, column)), shape=(smaller.size, basis.size))


def _hopping_matrix(model: LatticeModel, species: int, basis: OneSpeciesBasis) -> sp.csr_array:
    """- sum_bonds t (b+_i b_j + h.c.) of one species in its own basis."""
    place = _place_values(model.cluster.sites, basis.cutoff)
    rows, columns, values = [], [], []
    for (i, j), t in zip(model.cluster.bonds, model.hopping[species], strict=True):
        n_i, n_j = basis.occupations[:, i], basis.occupations[:, j]
        column = np.flatnonzero((n_j > 0) & (n_i < basis.cutoff))
        columns.append(column)
        rows.append(np.searchsorted(basis.codes, basis.codes[column] + place[i] - place[j]))
        values.append(-t * np.sqrt(n_j[column] * (n_i[column] + 1.0)))
    if not rows:
        return sp.csr_array((basis.size, basis.size))
    one_way = sp.csr_array(
        (np.concatenate(values), (np.concatenate(rows), np.concatenate(columns))),
        shape=(basis.size, basis.size),
    )
    return sp.csr_array(one_way + one_way.T)


def _bases(model: LatticeModel, numbers: Numbers) -> list[OneSpeciesBasis]:
    return [
        one_species_basis(model.cluster.sites, cutoff, atoms)
        for cutoff, atoms in zip(model.cutoff, numbers, strict=True)
    ]


def _sector_size(model: LatticeModel, numbers: Numbers) -> int:
    sizes = [
        count_states(model.cluster.sites, cutoff, atoms) for cutoff, atoms in zip(model.cutoff, numbers, strict=True)
    ]
    return int(np.prod(np.array(sizes, dtype=object)))


def _refuse_above(limit: int, size: int, model: LatticeModel, numbers: Numbers, purpose: str) -> None:
    if size > limit:
        raise ResourceError(
            f"cluster: {model.cluster.sites} sites with N = {numbers}, n_max = {model.cutoff} have {size}"
            f" states, the limit for {purpose} is {limit};"
            " choose fewer sites, fewer atoms or a smaller n_max."
        )


def _checked_numbers(model: LatticeModel, N: int | Sequence[int]) -> Numbers:
    numbers = (int(N),) if isinstance(N, int | np.integer) else tuple(int(n) for n in N)
    if len(numbers) != model.species:
        raise InputError(f"N: got {N}, must be one atom number per species ({model.species}).")
    for atoms, cutoff in zip(numbers, model.cutoff, strict=True):
        if not 0 <= atoms <= cutoff * model.cluster.sites:
            raise InputError(
                f"N: got {atoms} atoms, must lie within 0..{cutoff * model.cluster.sites}"
                f" ({model.cluster.sites} sites, at most {cutoff} each)."
            )
    return numbers


def sectors(model: LatticeModel) -> Iterator[Numbers]:
    """All atom numbers the cluster can hold, as tuples with one entry per species."""
    return product(*(range(cutoff * model.cluster.sites + 1) for cutoff in model.cutoff))


def hamiltonian(model: LatticeModel, N: int | Sequence[int]) -> sp.csr_array:
    """Sparse H (with - sum mu n) in the sector with N atoms per species, shape (states, states).

    The state index runs over basis 1 (slow) and basis 2 (fast). Raises InputError for impossible numbers and
    ResourceError above SPARSE_LIMIT states.
    """
    numbers = _checked_numbers(model, N)
    _refuse_above(SPARSE_LIMIT, _sector_size(model, numbers), model, numbers, "a sparse Hamiltonian")
    bases = _bases(model, numbers)
    local = []
    for a, basis in enumerate(bases):
        n = basis.occupations
        local.append(0.5 * model.interaction[a] * (n * (n - 1)).sum(axis=1) - n @ model.potential[a])
    hops = [_hopping_matrix(model, a, basis) for a, basis in enumerate(bases)]
    if model.species == 1:
        return sp.csr_array(hops[0] + sp.diags_array(local[0]))
    cross = model.U12 * (bases[0].occupations @ bases[1].occupations.T)
    diagonal = (local[0][:, None] + local[1][None, :] + cross).ravel()
    eye = [sp.eye_array(basis.size, format="csr") for basis in bases]
    return sp.csr_array(sp.kron(hops[0], eye[1]) + sp.kron(eye[0], hops[1]) + sp.diags_array(diagonal))


def spectrum(model: LatticeModel, N: int | Sequence[int]) -> Floats:
    """All energies of one sector in rising order; raises ResourceError above DENSE_LIMIT states."""
    return _diagonalise(model, _checked_numbers(model, N))[0]


def _diagonalise(model: LatticeModel, numbers: Numbers) -> tuple[Floats, Floats]:
    _refuse_above(DENSE_LIMIT, _sector_size(model, numbers), model, numbers, "full diagonalisation")
    energies, vectors = eigh(hamiltonian(model, numbers).toarray())
    return energies, vectors


def _shaped(model: LatticeModel, numbers: Numbers, vectors: Floats) -> Floats:
    first = count_states(model.cluster.sites, model.cutoff[0], numbers[0])
    return vectors.reshape(first, -1, vectors.shape[-1])


def _lowest(model: LatticeModel, numbers: Numbers) -> tuple[float, Floats]:
    matrix = hamiltonian(model, numbers)
    if matrix.shape[0] <= _DENSE_BELOW:
        energies, vectors = eigh(matrix.toarray(), subset_by_index=[0, 0])
    else:
        # For t >= 0 the ground state has no sign changes, so a positive start vector always overlaps with it.
        start = np.ones(matrix.shape[0]) / np.sqrt(matrix.shape[0])
        energies, vectors = eigsh(matrix, k=1, which="SA", v0=start, tol=0)
    return float(energies[0]), vectors


def ground_state(model: LatticeModel, N: int | Sequence[int] | None = None) -> State:
    """Ground state at fixed atom numbers, or (N omitted) of all sectors at the model's mu.

    Where sectors or levels are degenerate this is one vector of the degenerate set (for t > 0 on a connected
    cluster the ground state of a sector is unique). The sparse solver runs to machine precision.
    Raises InputError for impossible numbers and ResourceError above SPARSE_LIMIT states.
    """
    candidates = sectors(model) if N is None else [_checked_numbers(model, N)]
    best: tuple[float, Numbers, Floats] | None = None
    for numbers in candidates:
        energy, vector = _lowest(model, numbers)
        if best is None or energy < best[0]:
            best = energy, numbers, vector
    assert best is not None
    energy, numbers, vector = best
    block = Block(numbers, np.ones(1), _shaped(model, numbers, vector))
    return State(model, 0.0, energy, energy, 0.0, (block,))


def thermal(model: LatticeModel, T: float, N: int | Sequence[int] | None = None) -> State:
    """Thermal state at T > 0 (units of the couplings): grand-canonical, or at fixed numbers if N is given.

    Every sector is diagonalised in full; levels with a weight below 1e-18 are left out of the correlators
    (not of the free energy). The cutoff n_max is part of the model: raise it until results stop moving.
    Raises InputError for T <= 0, ResourceError for a sector above DENSE_LIMIT or vectors above VECTOR_LIMIT.
    """
    if not (np.isfinite(T) and T > 0):
        raise InputError(f"T: got {T}, must be finite and above 0 (use ground_state for T = 0).")
    chosen = list(sectors(model)) if N is None else [_checked_numbers(model, N)]
    sizes = [_sector_size(model, numbers) for numbers in chosen]
    largest = int(np.argmax(np.array(sizes, dtype=float)))
    _refuse_above(DENSE_LIMIT, sizes[largest], model, chosen[largest], "full diagonalisation")
    total = sum(size**2 for size in sizes)
    if total > VECTOR_LIMIT:
        raise ResourceError(
            f"cluster: {model.cluster.sites} sites with n_max = {model.cutoff} need {total} eigenvector"
            f" entries, the limit is {VECTOR_LIMIT};"
            " choose fewer sites, a smaller n_max or fixed atom numbers."
        )
    solved = [_diagonalise(model, numbers) for numbers in chosen]
    levels = np.concatenate([energies for energies, _ in solved])
    log_sum = float(logsumexp(-levels / T))
    weights = np.exp(-levels / T - log_sum)
    energy = float(weights @ levels)
    free_energy = -T * log_sum
    blocks = []
    for numbers, (energies, vectors) in zip(chosen, solved, strict=True):
        weight = np.exp(-energies / T - log_sum)
        kept = weight > _NEGLIGIBLE_WEIGHT
        if kept.any():
            blocks.append(Block(numbers, weight[kept], _shaped(model, numbers, vectors[:, kept])))
    return State(model, T, free_energy, energy, (energy - free_energy) / T, tuple(blocks))


def _annihilate(model: LatticeModel, numbers: Numbers, vectors: Floats, a: int, site: int) -> Floats:
    """b_{a,site} on vectors of one sector, axis a, giving vectors of the sector with one atom less."""
    matrix = _annihilator(model.cluster.sites, model.cutoff[a], numbers[a], site)
    moved = np.moveaxis(vectors, a, 0)
    result = matrix @ moved.reshape(moved.shape[0], -1)
    return np.moveaxis(result.reshape(-1, *moved.shape[1:]), 0, a)


def _create(model: LatticeModel, numbers: Numbers, vectors: Floats, a: int, site: int) -> Floats:
    """b+_{a,site}, cut at n_max; safe only where a site above n_max has no partner (see `antipair`)."""
    matrix = _annihilator(model.cluster.sites, model.cutoff[a], numbers[a] + 1, site).T
    moved = np.moveaxis(vectors, a, 0)
    result = matrix @ moved.reshape(moved.shape[0], -1)
    return np.moveaxis(result.reshape(-1, *moved.shape[1:]), 0, a)


def _check_species(model: LatticeModel, *species: int) -> None:
    for a in species:
        if not 0 <= a < model.species:
            raise InputError(f"species: got {a}, must be within 0..{model.species - 1} (counted from 0).")


def _need_two(model: LatticeModel, name: str) -> None:
    if model.species != 2:
        raise InputError(f"{name}: the model has one species, pair and anti-pair correlators need two.")


def _gram(vectors: list[Floats]) -> Floats:
    flat = np.array([v.ravel() for v in vectors])
    return flat @ flat.T


def _weighted(block: Block) -> Floats:
    return block.vectors * np.sqrt(block.weights)


def one_body(state: State, a: int) -> Floats:
    """G[i, j] = <b+_i b_j> of species a (0 or 1), shape (sites, sites)."""
    model = state.model
    _check_species(model, a)
    sites = range(model.cluster.sites)
    result = np.zeros((len(sites), len(sites)))
    for block in state.blocks:
        if block.numbers[a] > 0:
            vectors = _weighted(block)
            result += _gram([_annihilate(model, block.numbers, vectors, a, j) for j in sites])
    return result


def pair(state: State) -> Floats:
    """<P+_i P_j> with P = b_1 b_2, shape (sites, sites); needs two species."""
    model = state.model
    _need_two(model, "pair")
    sites = range(model.cluster.sites)
    result = np.zeros((len(sites), len(sites)))
    for block in state.blocks:
        if min(block.numbers) > 0:
            once = [_annihilate(model, block.numbers, _weighted(block), 0, j) for j in sites]
            result += _gram([_annihilate(model, block.numbers, v, 1, j) for j, v in enumerate(once)])
    return result


def antipair(state: State) -> Floats:
    """<A+_i A_j> with A = b+_2 b_1, shape (sites, sites); its diagonal <n_1 (n_2 + 1)> is free of the cutoff.

    Off the diagonal the cutoff does no harm: a site raised above n_max would have no partner in the bra.
    """
    model = state.model
    _need_two(model, "antipair")
    sites = range(model.cluster.sites)
    result = np.zeros((len(sites), len(sites)))
    for block in state.blocks:
        n1, n2 = block.numbers
        if n1 > 0 and n2 < model.cutoff[1] * len(sites):
            once = [_annihilate(model, block.numbers, _weighted(block), 0, j) for j in sites]
            result += _gram([_create(model, block.numbers, v, 1, j) for j, v in enumerate(once)])
    diagonal = np.diag(density_density(state, 0, 1)) + state.filling[0]
    np.fill_diagonal(result, diagonal)
    return result


def density_density(state: State, a: int, b: int) -> Floats:
    """<n_ai n_bj>, shape (sites, sites), not normal-ordered (a = b, i = j gives <n^2>)."""
    model = state.model
    _check_species(model, a, b)
    result = np.zeros((model.cluster.sites, model.cluster.sites))
    for block in state.blocks:
        bases = _bases(model, block.numbers)
        probability = (block.vectors**2) @ block.weights
        n_a, n_b = bases[a].occupations, bases[b].occupations
        if a == b:
            result += (n_a.T * probability.sum(axis=1 - a)) @ n_b
        else:
            result += n_a.T @ (probability if a == 0 else probability.T) @ n_b
    return result


def four_body(state: State, a: int, b: int) -> Floats:
    """<b+_{a,i} b+_{b,k} b_{b,l} b_{a,j}>, shape (sites, sites, sites, sites) ordered [i, k, l, j]."""
    model = state.model
    _check_species(model, a, b)
    sites = model.cluster.sites
    total = np.zeros((sites**2, sites**2))
    for block in state.blocks:
        remaining = list(block.numbers)
        remaining[a] -= 1
        if min(remaining) < 0 or remaining[b] < 1:
            continue
        vectors = _weighted(block)
        once = [_annihilate(model, block.numbers, vectors, a, j) for j in range(sites)]
        twice = [_annihilate(model, tuple(remaining), v, b, site) for v in once for site in range(sites)]
        total += _gram(twice)
    return total.reshape(sites, sites, sites, sites).transpose(0, 1, 3, 2)


def _phases(model: LatticeModel, momenta: Floats | None) -> tuple[Floats, NDArray[np.complex128]]:
    """Chosen momenta (count, dimension), and exp(i k.(r_i - r_j)) / sites, shape (count, sites^2)."""
    k = model.cluster.momenta if momenta is None else np.asarray(momenta, dtype=float)
    positions = np.array(model.cluster.positions, dtype=float)
    if k.ndim != 2 or k.shape[1] != positions.shape[1]:
        raise InputError(f"momenta: got shape {k.shape}, must be (count, {positions.shape[1]}).")
    wave = np.exp(1j * k @ positions.T)
    return k, (wave[:, :, None] * wave.conj()[:, None, :]).reshape(len(k), -1) / model.cluster.sites


def momentum_distribution(state: State, a: int, momenta: Floats | None = None) -> Floats:
    """<n_a(k)> = sum_ij exp(i k.(r_i - r_j)) <b+_i b_j> / sites, shape (count,).

    `momenta` has shape (count, dimension), unit 1/lattice constant; omitted: the cluster's grid.
    """
    _, phases = _phases(state.model, momenta)
    return np.real(phases @ one_body(state, a).ravel())


def noise_map(state: State, a: int, b: int, momenta: Floats | None = None) -> Floats:
    """Normal-ordered noise map <b_a(k)+ b_b(k')+ b_b(k') b_a(k)> - <n_a(k)><n_b(k')>, shape (count, count).

    b(k) = sites^(-1/2) sum_j exp(-i k.r_j) b_j. The shot-noise term delta_ab delta_kk' <n_a(k)> is left out.
    Exact in the given state: a fixed-number state shows its fixed-number correlations.
    """
    _, phases = _phases(state.model, momenta)
    sites = state.model.cluster.sites
    correlator = four_body(state, a, b).transpose(0, 3, 1, 2).reshape(sites**2, sites**2)
    joint = np.real(phases @ correlator @ phases.T)
    singles = [momentum_distribution(state, species, momenta) for species in (a, b)]
    return joint - np.outer(singles[0], singles[1])
