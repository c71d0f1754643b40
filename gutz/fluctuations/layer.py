"""Gaussian fluctuations around a solution: hopping between sites, exact local propagators on each.

In:  `LocalSites` of one point, momenta.
Out: equal-time averages G_ab(k) = <b†_a,k b_b,k> and F_ab(k) = <b_a,k b_b,-k>, the one-loop free energy and entropy.

With O = (b_1, .., b_1†, ..) and the connected local propagator g(iω) = -∫ dτ e^{iωτ} <O(τ) O†(0)>_c of each site,

    G_k(iω)^-1 = g(iω)^-1 - ε_k,   ε_k = -2 Σ_direction t̃_direction cos k_direction   (between the sublattices, if two)
    <O O†>_k   = local average - T Σ_n [G_k - g](iω_n),      F_loop = T Σ_n ½ ln det(1 - ε_k g(iω_n)) per momentum

This is the random-phase approximation for fluctuations on top of a product state of sites. A mode without restoring
force (k = 0 where a symmetry is broken) has no finite Gaussian average; there the local values stand.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from gutz.fluctuations.frequencies import Nodes, nodes
from gutz.fluctuations.sites import LocalSites

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Evaluation = Callable[[Floats], tuple[Floats, NDArray[np.bool_]]]

SOFT = 1e-9
"""Static restoring force, relative to the local one, below which a momentum has no finite Gaussian average."""

MANY = 400
"""More different hopping energies than this are interpolated."""

_CHEBYSHEV = 128
_CHUNK = 100_000
_TEMPERATURE_STEP = 1e-3


class Correlations(NamedTuple):
    """Equal-time averages at K momenta, connected (without the condensate).

    normal: G_ab(k) = <b†_a,k b_b,k>, (K, a, a). anomalous: F_ab(k) = <b_a,k b_b,-k>, (K, a, a). staggered and
    staggered_anomalous: <b†_a,k b_b,k+Q> and <b_a,k b_b,-k+Q> with Q = (π, ..), 0 on one sublattice. finite: False
    where a mode without restoring force leaves only the local value, (K,).
    """

    normal: Floats
    anomalous: Floats
    staggered: Floats
    staggered_anomalous: Floats
    finite: NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class GaussianLayer:
    """Fluctuations around one point of a solution; compute once, ask for any momenta."""

    sites: LocalSites

    @cached_property
    def scale(self) -> float:
        """Largest energy of a fluctuation, roughly."""
        s = self.sites
        width = float((s.energy.max(-1) - s.energy.min(-1)).max())
        return max(width + 2 * s.space.n_max * float(np.abs(s.hopping).sum((0, 1)).max()), 1e-300)

    @cached_property
    def nodes(self) -> Nodes:
        """Matsubara nodes at the point's temperature."""
        return self._nodes(self.sites.T)

    def _nodes(self, T: float) -> Nodes:
        scale = np.array([self.scale])
        return Nodes(*(v[0] for v in nodes(np.array([T]), 1e-5 * scale, scale)))

    @cached_property
    def static(self) -> Floats:
        """Local propagator at zero frequency, (S, m, m): minus the static susceptibility."""
        s = self.sites
        operators = s.nambu
        mean = np.einsum("saii,si->sa", operators, s.weight)
        full = np.einsum("sij,saij,sbij->sab", s.kernel, operators, operators, optimize=True)
        beta = 1.0 / s.T if s.T > 0 else 0.0
        return beta * mean[:, :, None] * mean[:, None, :] - full

    def dynamic(self, omega: Floats) -> Complexes:
        """Local propagator g(iω) for ω > 0, shape (node, S, m, m)."""
        s = self.sites
        operators = s.nambu
        m = operators.shape[1]
        out = np.empty((omega.size, s.sublattices, m, m), complex)
        for site in range(s.sublattices):
            occupied = s.weight[site][:, None] - s.weight[site][None, :]
            gap = s.energy[site][None, :] - s.energy[site][:, None]
            X = operators[site][:, None] * operators[site][None, :] * occupied
            used = np.abs(X).max((0, 1)) > 0
            pole = 1.0 / (1j * omega[:, None] - gap[used])
            out[:, site] = np.einsum("wp,abp->wab", pole, X[:, :, used], optimize=True)
        return out

    @cached_property
    def _dynamic(self) -> Complexes:
        return self.dynamic(self.nodes.omega)

    @cached_property
    def _local(self) -> tuple[Floats, Floats]:
        """Connected local <b†_a b_b> and <b_a b_b>, (S, a, a)."""
        s = self.sites
        b = s.space.lower
        normal = np.einsum("sij,aki,bkj->sab", s.rho, b, b, optimize=True)
        anomalous = np.einsum("sij,ajk,bki->sab", s.rho, b, b, optimize=True)
        phi = s.phi[:, :, None] * s.phi[:, None, :]
        return normal - phi, anomalous - phi

    @cached_property
    def _hopping_shape(self) -> tuple[Floats, Floats] | None:
        """Weights of the directions (D,) and one matrix (m, m) with t̃_direction = weight × matrix, if so."""
        flat = self.sites.hopping.reshape(self.sites.dim, -1)
        size = np.abs(flat).sum(1)
        if size.max() == 0.0:
            return np.ones(self.sites.dim), np.zeros_like(self.sites.hopping[0])
        matrix = flat[size.argmax()]
        weight = flat @ matrix / (matrix @ matrix)
        if np.abs(flat - weight[:, None] * matrix).max() > 1e-13 * np.abs(flat).max():
            return None
        return weight, matrix.reshape(self.sites.hopping[0].shape)

    def hopping_energy(self, k: Floats) -> Floats:
        """ε_k for momenta k (K, D) in 1/lattice constant; (K, m, m)."""
        return -2.0 * np.einsum("kd,dab->kab", np.cos(k), self.sites.hopping)

    def correlations(self, k: Floats) -> Correlations:
        """Averages at momenta k, (K, D). Many momenta are served by interpolation in the hopping energy."""
        change, finite = self._on_momenta(k, self._change)
        s = self.sites
        S, a = s.sublattices, s.species
        change = change.reshape(-1, S, 2 * a, S, 2 * a)
        local_normal, local_anomalous = self._local
        sign = np.array([1.0, -1.0])[:S] if S == 2 else np.zeros(1)

        def fold(row: slice, local: Floats) -> tuple[Floats, Floats]:
            block = change[:, :, row, :, a:]
            own = np.moveaxis(np.diagonal(block, axis1=1, axis2=3), -1, 1) + local
            return block.sum((1, 3)) / S + local.mean(0), np.einsum("s,ksab->kab", sign, own) / S

        normal, staggered = fold(slice(a, None), local_normal)
        anomalous, staggered_anomalous = fold(slice(0, a), local_anomalous)
        return Correlations(normal, anomalous, staggered, staggered_anomalous, finite)

    def _on_momenta(self, k: Floats, function: Evaluation) -> tuple[Floats, NDArray[np.bool_]]:
        """Evaluate function(ε) -> (values, finite) at momenta, each different ε once."""
        k = np.atleast_2d(np.asarray(k, float))
        shape = self._hopping_shape
        if shape is None:
            energy = self.hopping_energy(k)
            flat = np.round(energy.reshape(len(k), -1) / self.scale, 13)
            _, first, back = np.unique(flat, axis=0, return_index=True, return_inverse=True)
            values, finite = function(energy[first])
            return values[back.ravel()], finite[back.ravel()]
        weight, matrix = shape
        edge = 2.0 * np.abs(weight).sum()
        angle = np.arccos(np.clip(2.0 * np.cos(k) @ weight / edge, -1.0, 1.0))
        distinct, back = np.unique(np.round(angle, 12), return_inverse=True)
        back = back.ravel()

        def at(angles: Floats) -> tuple[Floats, NDArray[np.bool_]]:
            return function(-edge * np.cos(angles)[:, None, None] * matrix)

        if distinct.size <= MANY:
            values, finite = at(distinct)
            return values[back], finite[back]
        values, finite = self._interpolate(distinct, at)
        return values[back], finite[back]

    def _interpolate(self, angle: Floats, at: Evaluation) -> tuple[Floats, NDArray[np.bool_]]:
        """Chebyshev interpolation in the angle, with the divergence at the band's bottom (and top) taken out."""
        power = 1 if self.sites.T == 0 else 2
        two = self.sites.sublattices == 2

        def weight(x: Floats) -> Floats:
            return (np.sin(x) if two else np.sin(0.5 * x)) ** power

        node = np.cos(np.pi * (np.arange(_CHEBYSHEV) + 0.5) / _CHEBYSHEV)
        theta = 0.5 * np.pi * (node + 1.0)
        values = at(theta)[0]
        flat = values.reshape(_CHEBYSHEV, -1) * weight(theta)[:, None]
        order = np.arange(_CHEBYSHEV)
        transform = np.cos(np.outer(order, np.arccos(node))) * (2.0 / _CHEBYSHEV)
        transform[0] *= 0.5
        fitted = np.polynomial.chebyshev.chebval(2.0 * angle / np.pi - 1.0, transform @ flat).T
        ends = (angle < 1e-6) | (angle > np.pi - 1e-6)
        out = fitted / np.where(ends, 1.0, weight(angle))[:, None]
        out = out.reshape(-1, *values.shape[1:])
        finite = np.ones(angle.size, bool)
        if ends.any():
            out[ends], finite[ends] = at(angle[ends])
        return out, finite

    def _blocks(self, energy: Floats) -> Floats:
        """ε between the sublattices, (K, S m, S m)."""
        if self.sites.sublattices == 1:
            return energy
        nothing = np.zeros_like(energy)
        return np.concatenate([np.concatenate([nothing, energy], 2), np.concatenate([energy, nothing], 2)], 1)

    @staticmethod
    def _diagonal(g: Any) -> Any:
        """Local propagators (.., S, m, m) as one matrix (.., S m, S m)."""
        S, m = g.shape[-3], g.shape[-1]
        out = np.zeros((*g.shape[:-3], S, m, S, m), g.dtype)
        for s in range(S):
            out[..., s, :, s, :] = g[..., s, :, :]
        return out.reshape(*g.shape[:-3], S * m, S * m)

    def _change(self, energy: Floats) -> tuple[Floats, NDArray[np.bool_]]:
        """-T Σ_n [G_k - g], (K, S m, S m), zero where the static response diverges or is negative."""
        eps = self._blocks(energy)
        g0 = self._diagonal(self.static)
        finite = self.restoring_force(energy) > SOFT
        total = np.zeros(eps.shape)
        nodes = self.nodes
        size = max(1, _CHUNK // nodes.omega.size)
        g = self._diagonal(self._dynamic)
        one = np.eye(eps.shape[-1])
        for begin in range(0, len(eps), size):
            part = eps[begin : begin + size, None]
            ge = g @ part
            excess = np.linalg.solve(one - ge, ge @ g).real
            total[begin : begin + size] = -np.einsum("w,kwab->kab", nodes.weight, excess)
        if nodes.static > 0:
            ge = g0 @ eps
            safe = np.where(finite[:, None, None], one - ge, one)
            total -= nodes.static * np.linalg.solve(safe, ge @ g0)
        total[~finite] = 0.0
        return total, finite

    def restoring_force(self, energy: Floats) -> Floats:
        """Smallest eigenvalue of 1 + ε χ, χ the local static response: 0 for a gapless mode, < 0 unstable; (K,)."""
        chi = self._diagonal(-self.static)
        root = _root(chi)
        force = np.linalg.eigvalsh(np.eye(chi.shape[-1]) + root @ self._blocks(energy) @ root)
        return np.asarray(force[:, 0], np.float64)

    def one_loop(self, k: Floats) -> tuple[float, float]:
        """Free energy and entropy per site of the fluctuations, averaged over the momenta k (K, D).

        The entropy is that of the modes at fixed spectrum (S = Σ s(ω/T) for modes minus local excitations), 0 at T = 0.
        Momenta without restoring force are left out of the average.
        """
        T = self.sites.T
        F = self._loop(k, self.nodes, self._dynamic)
        if T == 0:
            return F, 0.0
        both = []
        for sign in (1.0, -1.0):
            shifted = self._nodes(T * (1.0 + sign * _TEMPERATURE_STEP))
            both.append(self._loop(k, shifted, self.dynamic(shifted.omega)))
        return F, -(both[0] - both[1]) / (2.0 * T * _TEMPERATURE_STEP)

    def _loop(self, k: Floats, nodes: Nodes, dynamic: Complexes) -> float:
        g, g0 = self._diagonal(dynamic), self._diagonal(self.static)

        def log_det(energy: Floats) -> tuple[Floats, NDArray[np.bool_]]:
            eps = self._blocks(energy)
            finite = self.restoring_force(energy) > SOFT
            one = np.eye(eps.shape[-1])
            out = np.zeros(len(eps))
            size = max(1, _CHUNK // nodes.omega.size)
            for begin in range(0, len(eps), size):
                det = np.linalg.det(one - g @ eps[begin : begin + size, None])
                out[begin : begin + size] = 0.5 * np.log(np.abs(det)) @ nodes.weight
            if nodes.static > 0:
                det = np.abs(np.linalg.det(one - g0 @ eps))
                out += 0.5 * nodes.static * np.log(np.where(finite, det, 1.0))
            out[~finite] = 0.0
            return out, finite

        values, finite = self._on_momenta(k, log_det)
        return float(values.sum() / max(int(finite.sum()), 1)) / self.sites.sublattices


def _root(chi: Floats) -> Floats:
    values, vectors = np.linalg.eigh(chi)
    return (vectors * np.sqrt(np.maximum(values, 0.0))) @ vectors.T
