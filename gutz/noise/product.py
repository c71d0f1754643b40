"""Noise maps of product states: any local density matrix on every site, in a trap or not, exactly.

In:  `LocalMoments` of every site of a grid.
Out: `ProductMap`: O(1) per entry after a dozen Fourier transforms.

Normal-ordered cumulants of different sites vanish, so cumulants of b_a(k) are Fourier sums of local ones. The
correction for fixed atom numbers (Lebowitz, Percus and Verlet, Phys. Rev. 153, 250 (1967)) takes out what is only the
spread of N in the product state; after it every row sums to zero, shot noise included.
"""

import numpy as np
from numpy.typing import NDArray

from gutz.errors import InputError
from gutz.noise.grid import Floats, Grid, Indices, NoiseMap, fixed_number
from gutz.noise.moments import LocalMoments

Complexes = NDArray[np.complex128]


class ProductMap(NoiseMap):
    """Map of a product state with one local state per site; `fixed` takes out the spread of the numbers."""

    def __init__(self, moments: LocalMoments, shape: tuple[int, ...], *, fixed: bool = True, refine: int = 1) -> None:
        """Transform once.

        moments: leading axes `shape` (one local state per site), or none (the same everywhere). refine: momenta between
        those of the lattice, this many per step (free space around the cloud; no periodic copies are assumed).
        Raises InputError where the leading axes are neither.
        """
        lead = np.shape(moments.density)[:-1]
        if lead not in ((), shape):
            raise InputError(f"moments: got leading axes {lead}; they must be {shape}, one state per site, or none")
        species = np.shape(moments.density)[-1]
        self.sites_grid = Grid(shape)
        self.grid = Grid(tuple(refine * length for length in shape))
        norm = self.sites_grid.sites

        def field(values: object, rank: int) -> Complexes:
            array = np.asarray(values)
            array = np.broadcast_to(array, (*shape, *array.shape[len(lead) :]))
            return np.moveaxis(array, range(len(shape), len(shape) + rank), range(rank))

        def transform(values: Complexes) -> Complexes:
            axes = tuple(range(-len(shape), 0))
            return np.fft.fftn(values, self.grid.shape, axes).reshape(*values.shape[: -len(shape)], -1)

        def backward(values: Complexes) -> Complexes:
            return np.conj(transform(np.conj(values)))

        phi, nu, m = field(moments.phi, 1), field(moments.nu, 2), field(moments.m, 2)
        third, kap = field(moments.third, 2), field(moments.kap, 2)
        self._Phi, self._M, self._N = transform(phi), transform(m), backward(nu)
        self._T = backward(third)
        sites = tuple(range(2, 2 + len(shape)))
        self._K = kap.sum(sites)
        self._norm = norm
        own = np.stack([nu[a, a].real for a in range(species)])
        self.mean = (own.reshape(species, -1).sum(1)[:, None] + np.abs(self._Phi) ** 2) / norm
        self._gain = np.zeros((species, species, self.grid.sites))
        self._weight = np.zeros((species, species))
        if fixed:
            mixed = backward(third + np.conj(m) * phi[None] + nu * np.conj(phi)[None])
            local = kap + 2.0 * np.real(np.swapaxes(third, 0, 1) * phi[None]) + np.abs(m) ** 2 + np.abs(nu) ** 2
            self._gain = local.sum(sites)[..., None] + 2.0 * np.real(self._Phi[:, None] * mixed)
            self._gain = self._gain / norm
            self._gain[range(species), range(species)] += self.mean
            covariance = field(moments.covariance, 2).real.sum(sites)
            self._weight = fixed_number(self._gain, covariance)

    def entries(self, a: int, b: int, k: Indices, k_: Indices) -> Floats:
        """See `NoiseMap.entries`."""
        at, at_ = self.grid.flat(k), self.grid.flat(k_)
        total, apart = self.grid.flat(k + k_), self.grid.flat(k - k_)
        Phi, Phi_ = self._Phi[a][at], self._Phi[b][at_]
        M, N = self._M[a, b][total], self._N[a, b][apart]
        out = self._K[a, b] + np.abs(M) ** 2 + np.abs(N) ** 2
        out = out + 2.0 * np.real(self._T[a, b][at] * Phi) + 2.0 * np.real(self._T[b, a][at_] * Phi_)
        out = out + 2.0 * np.real(np.conj(M) * Phi * Phi_ + N * Phi * np.conj(Phi_))
        left, right = self._gain[a][:, at], self._gain[b][:, at_]
        return out / self._norm**2 - np.einsum("c...,cd,d...->...", left, self._weight, right)
