"""Correlators and noise maps of matrix-product states.

In:  a `TensorChain`: a ground state, or the purification of a thermal state.
Out: the same quantities as `ed`, with the same names, shapes and normal-ordering rules.
Operators start at a site and grow to the right, all starting points in one batch; noise maps join batches of
operator pairs from the left with batches of at most one operator from the right.
"""

from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from gutz.errors import InputError, ResourceError
from gutz.exact.lattice import Floats
from gutz.exact.mps_tensors import (
    Charge,
    GrownOperator,
    LocalSpace,
    SiteOperator,
    TensorChain,
    grow_left,
    grow_right,
    merge,
    overlap,
)

FOUR_BODY_LIMIT = 72
"""Most sites for which four-operator correlators are formed (72^4 numbers are 215 MB)."""


def _check_species(state: TensorChain, *species: int) -> None:
    for a in species:
        if not 0 <= a < state.space.species:
            raise InputError(f"species: got {a}, must be within 0..{state.space.species - 1} (counted from 0).")


def _need_two(state: TensorChain, name: str) -> None:
    if state.space.species != 2:
        raise InputError(f"{name}: the model has one species, pair and anti-pair correlators need two.")


def _two_point(state: TensorChain, first: SiteOperator, second: SiteOperator, same: SiteOperator) -> Floats:
    """<first_i second_j> for i < j and <same_i> on the diagonal; zero below it, shape (sites, sites)."""
    sites = len(state.tensors)
    result = np.zeros((sites, sites))
    grown: GrownOperator | None = None
    for j, (tensor, one) in enumerate(zip(state.tensors, state.identities, strict=True)):
        right = state.densities[j + 1]
        result[j, j] = overlap(grow_left(one, same, tensor), right)[0, 0]
        fresh = grow_left(one, first, tensor)
        if grown is None:
            grown = fresh
        else:
            result[:j, j] = overlap(grown, grow_right(right, second, tensor))[:, 0]
            grown = merge([grow_left(grown, state.space.identity, tensor), fresh])
    return result


def _mirrored(upper: Floats) -> Floats:
    return upper + np.triu(upper, 1).T


def filling(state: TensorChain) -> Floats:
    """Mean occupation, shape (species, sites)."""
    rows = []
    for a in range(state.space.species):
        number = state.space.number(a)
        rows.append(
            [
                overlap(grow_left(one, number, tensor), state.densities[j + 1])[0, 0]
                for j, (tensor, one) in enumerate(zip(state.tensors, state.identities, strict=True))
            ]
        )
    return np.array(rows)


def one_body(state: TensorChain, a: int) -> Floats:
    """G[i, j] = <b+_i b_j> of species a (0 or 1), shape (sites, sites)."""
    _check_species(state, a)
    lower = state.space.lower(a)
    return _mirrored(_two_point(state, lower.adjoint, lower, lower.adjoint @ lower))


def pair(state: TensorChain) -> Floats:
    """<P+_i P_j> with P = b_1 b_2, shape (sites, sites); needs two species."""
    _need_two(state, "pair")
    both = state.space.lower(1) @ state.space.lower(0)
    return _mirrored(_two_point(state, both.adjoint, both, both.adjoint @ both))


def antipair(state: TensorChain) -> Floats:
    """<A+_i A_j> with A = b+_2 b_1, shape (sites, sites); its diagonal is <n_1 (n_2 + 1)>."""
    _need_two(state, "antipair")
    first, second = state.space.lower(0), state.space.lower(1)
    exchange = second.adjoint @ first
    n = np.array(state.space.physical, dtype=float)
    same = state.space.diagonal(n[:, 0] * (n[:, 1] + 1))
    return _mirrored(_two_point(state, exchange.adjoint, exchange, same))


def density_density(state: TensorChain, a: int, b: int) -> Floats:
    """<n_ai n_bj>, shape (sites, sites), not normal-ordered (a = b, i = j gives <n^2>)."""
    _check_species(state, a, b)
    n_a, n_b = state.space.number(a), state.space.number(b)
    upper = _two_point(state, n_a, n_b, n_a @ n_b)
    if a == b:
        return _mirrored(upper)
    return upper + np.triu(_two_point(state, n_b, n_a, n_a @ n_b), 1).T


# --- four operators -----------------------------------------------------------------------------------------

_Places = tuple[int, ...]


def _product(space: LocalSpace, operators: list[SiteOperator], chosen: _Places) -> SiteOperator:
    result = space.identity
    for index in chosen:
        result = result @ operators[index]
    return result


class _LeftBatches:
    """All placements of at most two of the four operators left of a bond, in batches that grow site by site.

    `grown[places]` is a batch over the sites of the operators `places` (indices into the four);
    `sites[places]` holds those sites, shape (batch, len(places)).
    """

    def __init__(self, state: TensorChain, operators: list[SiteOperator]) -> None:
        self.state, self.operators = state, operators
        self.grown: dict[_Places, GrownOperator] = {}
        self.sites: dict[_Places, NDArray[np.int64]] = {}

    def advance(self, site: int, one: GrownOperator) -> None:
        """Include `site`; `one` is the identity left of it."""
        tensor, space = self.state.tensors[site], self.state.space
        grown, places_of = {}, {}
        for size in (2, 1):
            for places in combinations(range(4), size):
                parts, at = [], []
                for count in range(size + 1):
                    for here in combinations(places, count):
                        before = tuple(p for p in places if p not in here)
                        source = self.grown.get(before) if before else one
                        if source is None:
                            continue
                        parts.append(grow_left(source, _product(space, self.operators, here), tensor))
                        table = np.full((source.batch, size), site)
                        for column, p in enumerate(places):
                            if p in before:
                                table[:, column] = self.sites[before][:, before.index(p)]
                        at.append(table)
                grown[places] = merge(parts)
                places_of[places] = np.concatenate(at)
        self.grown, self.sites = grown, places_of


def _single_right(state: TensorChain, operator: SiteOperator) -> list[GrownOperator]:
    """Per bond c = 0..sites: the batch of `operator` at every site right of the bond, nearest site last."""
    sites = len(state.tensors)
    shift: Charge = tuple(-x for x in operator.shift)
    result = [GrownOperator(shift, 0, {})] * (sites + 1)
    for c in range(sites - 1, -1, -1):
        fresh = grow_right(state.densities[c + 1], operator, state.tensors[c])
        older = result[c + 1]
        parts = [grow_right(older, state.space.identity, state.tensors[c])] if older.batch else []
        result[c] = merge([*parts, fresh])
    return result


def four_body(state: TensorChain, a: int, b: int) -> Floats:
    """<b+_{a,i} b+_{b,k} b_{b,l} b_{a,j}>, shape (sites, sites, sites, sites) ordered [i, k, l, j].

    Every placement is counted at the site of its third operator from the left: at most two operators lie left
    of it and at most one right of it. Raises ResourceError above FOUR_BODY_LIMIT sites.
    """
    _check_species(state, a, b)
    sites = len(state.tensors)
    if sites > FOUR_BODY_LIMIT:
        raise ResourceError(
            f"cluster: {sites} sites need {sites}^4 four-operator terms, the limit is {FOUR_BODY_LIMIT}^4."
        )
    lower_a, lower_b = state.space.lower(a), state.space.lower(b)
    operators = [lower_a.adjoint, lower_b.adjoint, lower_b, lower_a]
    right = {p: _single_right(state, operators[p]) for p in range(4)}
    left = _LeftBatches(state, operators)
    result = np.zeros((sites,) * 4)
    for c, one in enumerate(state.identities):
        tensor = state.tensors[c]
        batches = {(): one, **left.grown}
        for before, source in batches.items():
            rest = tuple(p for p in range(4) if p not in before)
            for count in range(3 - len(before), len(rest) + 1):
                for here in combinations(rest, count):
                    after = tuple(p for p in rest if p not in here)
                    ahead = right[after[0]][c + 1] if after else state.densities[c + 1]
                    if ahead.batch == 0:
                        continue
                    site_operator = _product(state.space, operators, here)
                    values = overlap(source, grow_right(ahead, site_operator, tensor))
                    index: list[NDArray[np.int64] | int] = [c] * 4
                    for column, p in enumerate(before):
                        index[p] = left.sites[before][:, column, None]
                    if after:
                        index[after[0]] = np.arange(sites - 1, c, -1)[None, :]
                    result[tuple(index)] = values.reshape(np.broadcast_shapes(*(np.shape(x) for x in index)))
        left.advance(c, one)
    return result


def _phases(sites: int, momenta: Floats | None) -> NDArray[np.complex128]:
    """exp(i k (r_i - r_j)) / sites, shape (count, sites^2)."""
    k = 2 * np.pi * np.arange(sites) / sites if momenta is None else np.asarray(momenta, dtype=float).ravel()
    wave = np.exp(1j * np.outer(k, np.arange(sites)))
    pairs = np.einsum("ki,kj->kij", wave, wave.conj()).reshape(len(k), -1) / sites
    return pairs.astype(np.complex128)


def momentum_distribution(state: TensorChain, a: int, momenta: Floats | None = None) -> Floats:
    """<n_a(k)>, shape (count,); momenta in 1/lattice constant, omitted: 2 pi m / sites, m = 0..sites - 1."""
    return np.real(_phases(len(state.tensors), momenta) @ one_body(state, a).ravel())


def noise_map(state: TensorChain, a: int, b: int, momenta: Floats | None = None) -> Floats:
    """Normal-ordered noise map <b_a(k)+ b_b(k')+ b_b(k') b_a(k)> - <n_a(k)><n_b(k')>, shape (count, count).

    b(k) = sites^(-1/2) sum_j exp(-i k j) b_j; momenta as in `momentum_distribution`. The shot-noise term
    delta_ab delta_kk' <n_a(k)> is left out. Raises ResourceError above FOUR_BODY_LIMIT sites.
    """
    sites = len(state.tensors)
    phases = _phases(sites, momenta)
    correlator = four_body(state, a, b).transpose(0, 3, 1, 2).reshape(sites**2, sites**2)
    joint = np.real(phases @ correlator @ phases.T)
    singles = [momentum_distribution(state, species, momenta) for species in (a, b)]
    return joint - np.outer(singles[0], singles[1])
