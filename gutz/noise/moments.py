"""Local averages that noise correlations are made of: what one site says.

In:  density matrices of single sites in the Fock basis.
Out: `LocalMoments`: fields, densities and connected normal-ordered averages up to fourth order.

Words are always normal-ordered before the cutoff n_max can spoil them. Plain array arithmetic: numpy and jax
arrays pass alike, and jax can differentiate through.
"""

import math
from collections.abc import Iterator, Sequence
from functools import lru_cache
from itertools import combinations
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from gutz.fluctuations import LocalSites
from gutz.fock import LocalSpace

Array = Any
Word = tuple[int, ...]


class LocalMoments(NamedTuple):
    """Averages of one site, a species. Leading axes are those of the density matrices.

    phi: <b_a>, (..., a). density: <n_a>, (..., a). nu: <b_a† b_b>_c, (..., a, a). m: <b_a b_b>_c, (..., a, a). third:
    <b_a† b_b† b_b>_c, (..., a, a). kap: <b_a† b_b† b_b b_a>_c, (..., a, a). covariance: <n_a n_b> - <n_a><n_b>,
    (..., a, a). The index c marks cumulants.
    """

    phi: Array
    density: Array
    nu: Array
    m: Array
    third: Array
    kap: Array
    covariance: Array


def local_moments(rho: Array, space: LocalSpace) -> LocalMoments:
    """Averages in density matrices rho, (..., d, d), of the local space (Fock basis, unit trace)."""
    species = range(space.species)
    words, operators = _words(space)
    flat = (rho[..., None, :, :] * np.swapaxes(operators, -1, -2)).sum((-1, -2))
    mean = {word: flat[..., i] for i, word in enumerate(words)}

    def matrix(entry: Any) -> Array:
        rows = [[entry(a, b) for b in species] for a in species]
        return _stack([_stack(row, -1) for row in rows], -2)

    number = np.asarray(space.number)
    weight = rho[..., np.arange(space.size), np.arange(space.size)].real
    density = weight @ number.T
    squares = weight @ (number[:, None] * number[None, :]).reshape(-1, space.size).T
    squares = squares.reshape(*density.shape, space.species)
    return LocalMoments(
        _stack([mean[(_down(a),)] for a in species], -1),
        density,
        matrix(lambda a, b: _cumulant((_up(a), _down(b)), mean)),
        matrix(lambda a, b: _cumulant((_down(a), _down(b)), mean)),
        matrix(lambda a, b: _cumulant((_up(a), _up(b), _down(b)), mean)),
        matrix(lambda a, b: _cumulant((_up(a), _up(b), _down(b), _down(a)), mean).real),
        squares - density[..., :, None] * density[..., None, :],
    )


def of_sites(sites: LocalSites) -> LocalMoments:
    """Averages of every sublattice of a point, leading axis S."""
    return local_moments(sites.rho, sites.space)


def _stack(parts: Sequence[Array], axis: int) -> Array:
    if all(isinstance(part, np.ndarray | np.generic) for part in parts):
        return np.stack(parts, axis)
    # jax arrays bring their own stack; asked of the array itself, so that numpy users do not load jax here.
    return parts[0].__array_namespace__().stack(parts, axis)


def _down(a: int) -> int:
    return 2 * a


def _up(a: int) -> int:
    return 2 * a + 1


@lru_cache(maxsize=16)
def _words(space: LocalSpace) -> tuple[tuple[Word, ...], NDArray[np.float64]]:
    """All normal-ordered words that the cumulants need, and their matrices."""
    needed: set[Word] = set()
    for a in range(space.species):
        for b in range(space.species):
            for full in ((_up(a), _up(b), _down(b), _down(a)), (_down(a), _down(b))):
                for length in range(1, len(full) + 1):
                    needed |= set(combinations(full, length))
    words = tuple(sorted(needed))
    single = [matrix for b in space.lower for matrix in (b, b.T)]
    products = []
    for word in words:
        product = np.eye(space.size)
        for operator in word:
            product = product @ single[operator]
        products.append(product)
    return words, np.stack(products)


def _cumulant(word: Word, mean: dict[Word, Array]) -> Array:
    total: Array = 0.0
    for blocks in _partitions(tuple(range(len(word)))):
        term: Array = (-1.0) ** (len(blocks) - 1) * math.factorial(len(blocks) - 1)
        for block in blocks:
            term = term * mean[tuple(word[i] for i in block)]
        total = total + term
    return total


def _partitions(items: tuple[int, ...]) -> Iterator[list[tuple[int, ...]]]:
    """All ways to split items into blocks, the order inside each kept."""
    if not items:
        yield []
        return
    for length in range(len(items)):
        for rest in combinations(items[1:], length):
            left = tuple(i for i in items[1:] if i not in rest)
            for others in _partitions(left):
                yield [(items[0], *rest), *others]
