"""Local states of a solution, and the hopping with which their fluctuations travel.

In:  a `Solution` (product or dressed).
Out: `LocalSites` of every point: levels, occupations and operators of one site (or of both sublattices), and the
     hopping matrix of every direction.

In a state with single-particle order the hopping is t̃_a = J_a / (z φ_a), which makes the phase mode gapless by
construction (for the product ansatz t̃ = t up to the tolerance of the minimum). Without such order the hopping of a
dressed state is the one whose static response at k = 0 equals the curvature of the functional itself: with
F = F0 + J·A·J and φ = X·J, z t̃ = X^-1 (X - A) X^-1.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import jax
import jax.numpy as jnp
import numpy as np
from numpy.typing import NDArray

from gutz.ansatz import bond, dressed, families, gibbs, product, selection
from gutz.ansatz.families import Family, Plan
from gutz.errors import InputError
from gutz.fock import LocalSpace, local_space
from gutz.model import Mixture
from gutz.solution import Solution
from gutz.solver import solve

Floats = NDArray[np.float64]

ALIKE = 1e-9
"""Relative difference of two sublattices below which there is one."""

_KICK = 1e-4


@dataclass(frozen=True, eq=False)
class LocalSites:
    """The site (or both sublattices) of one point. S sublattices, d states, a species, D directions, m = 2 a.

    index: position in the flat solution. T: temperature. energy, weight: (S, d), levels from low to high. lower: b_a
    between levels, (S, a, d, d). kernel: static response kernel, (S, d, d). rho: density matrix in the Fock basis,
    (S, d, d). phi: <b_a>, (S, a). hopping: t̃ of every direction between (b_1, .., b_1†, ..), (D, m, m). ordered: has
    single-particle order, (a,). space: the local Fock space.
    """

    index: int
    T: float
    energy: Floats
    weight: Floats
    lower: Floats
    kernel: Floats
    rho: Floats
    phi: Floats
    hopping: Floats
    ordered: NDArray[np.bool_]
    space: LocalSpace

    @property
    def sublattices(self) -> int:
        """1, or 2 for a checkerboard."""
        return self.energy.shape[0]

    @property
    def species(self) -> int:
        """1 or 2."""
        return self.space.species

    @property
    def dim(self) -> int:
        """Number of directions."""
        return self.hopping.shape[0]

    @property
    def nambu(self) -> Floats:
        """(b_1, .., b_1†, ..) between levels, (S, m, d, d)."""
        return np.concatenate([self.lower, np.swapaxes(self.lower, -1, -2)], 1)


def local_sites(solution: Solution) -> list[LocalSites | None]:
    """Return the sites of every point of the flat solution, in order; None where there is no finite state.

    Raises InputError for a solution under jax tracing.
    """
    if any(isinstance(leaf, jax.core.Tracer) for leaf in jax.tree.leaves(solution)):
        raise InputError("solution is being traced by jax; fluctuations need its numbers")
    rank = len(solution.shape)
    outputs = {
        name: np.asarray(solution.outputs[name]).reshape((-1, *np.shape(solution.outputs[name])[rank:]))
        for name in ("free_energy", "n_max", "mu", "T")
    }
    mixture = solution.mixture.flat().map(np.asarray)
    fields = np.asarray(solution.fields).reshape((-1, *np.shape(solution.fields)[rank:]))
    good = np.isfinite(outputs["free_energy"])
    found: list[LocalSites | None] = [None] * good.size
    for n_max in np.unique(outputs["n_max"][good]).tolist():
        for cold in (True, False):
            index = np.flatnonzero(good & (outputs["n_max"] == n_max) & ((outputs["T"] == 0) == cold))
            if not index.size:
                continue
            mu, T = outputs["mu"][index], outputs["T"][index]
            part = mixture[index].replace(mu=mu, T=T, filling=None, entropy=None, n_max=n_max)
            build = _product if solution.ansatz == "product" else _dressed
            for sites in build(index, part, fields[index]):
                found[sites.index] = sites
    return found


def _product(index: NDArray[np.int64], mixture: Mixture, x: Floats) -> list[LocalSites]:
    space = local_space(_cutoff(mixture), mixture.species)
    p = product.sites(mixture, mixture.mu, mixture.T, space, x.shape[-2])
    h = np.asarray(product.hamiltonian(p, x, space))
    J = np.asarray(p.z_t)[:, None, :] * x[:, ::-1, :]
    return _sites(index, mixture, h, J, [None] * index.size, space)


def _dressed(index: NDArray[np.int64], mixture: Mixture, x: Floats) -> list[LocalSites]:
    """Find the trial fields again: a solution keeps the order parameters only."""
    sublattices, n_max = x.shape[-2], _cutoff(mixture)
    mu, T = np.asarray(mixture.mu), np.asarray(mixture.T)
    state = selection.minimise(mixture, mu, T, n_max, sublattices, np.broadcast_to(solve(mixture).fields, x.shape))
    names = dressed.NAMES[mixture.species]
    f = bond.frame(n_max, mixture.species, "full")
    p = dressed.sites(mixture, jnp.asarray(mu), jnp.asarray(T), n_max, sublattices)
    order = np.argsort(f.order)
    h = np.asarray(dressed.hamiltonian(p, jnp.asarray(state.fields), f, names))[..., order, :][..., order]
    J = state.fields[..., : mixture.species]
    curvature: list[Floats | None] = [None] * index.size
    plain = np.flatnonzero((state.lam > 0) & (state.family != Family.SINGLE))
    if plain.size:
        for n, A in zip(plain, _curvature(mixture[plain], state.fields[plain]), strict=True):
            curvature[n] = A
    return _sites(index, mixture, h, J, curvature, local_space(n_max, mixture.species))


def _cutoff(mixture: Mixture) -> int:
    assert mixture.n_max is not None
    return mixture.n_max


def _curvature(mixture: Mixture, fields: Floats) -> Floats:
    """A of F = F0 + J·A·J for uniform J, per site, by one small step (the gradient is odd in J); (N, a, a)."""
    species, size, n_max = mixture.species, len(fields), _cutoff(mixture)
    T = np.asarray(mixture.T)
    p = dressed.sites(mixture, mixture.mu, T, n_max, fields.shape[1])
    reach, cold = np.asarray(p.z_t).max(-1), bool(np.all(T == 0))
    step = np.maximum(_KICK * (reach if cold else np.minimum(reach, 10.0 * T)), 1e-12)
    plan = Plan("full", dressed.NAMES[species], (1.0,), n_max, species, cold)
    columns = []
    for a in range(species):
        kicked = fields.copy()
        kicked[..., a] += step[:, None]
        look = families.survey(p, kicked, np.ones(size), plan=plan)
        columns.append(0.5 * look.gradient[..., :species].sum(1) / step[:, None])
    A = np.stack(columns, -1)
    return 0.5 * (A + np.swapaxes(A, -1, -2))


def _sites(
    index: NDArray[np.int64],
    mixture: Mixture,
    h: Floats,
    J: Floats,
    curvature: Sequence[Floats | None],
    space: LocalSpace,
) -> list[LocalSites]:
    """Diagonalise the sites and choose the hopping."""
    T = np.asarray(mixture.T)
    lv = gibbs.levels(jnp.asarray(h), jnp.broadcast_to(jnp.asarray(T)[:, None], h.shape[:-2]))
    energy, vectors, weight = (np.asarray(v) for v in (lv.energy, lv.vectors, lv.weight))
    kernel = np.asarray(gibbs.response_kernel(lv))
    lower = np.swapaxes(vectors, -1, -2)[:, :, None] @ space.lower @ vectors[:, :, None]
    phi = np.einsum("nsaii,nsi->nsa", lower, weight)
    rho = (vectors * weight[..., None, :]) @ np.swapaxes(vectors, -1, -2)
    ordered = np.abs(J).max(1) > 0
    out = []
    for n, position in enumerate(index.tolist()):
        t = np.asarray(mixture.t)[n]
        # Sublattices that came out alike are one.
        kept = slice(1) if np.abs(h[n] - h[n, :1]).max() <= ALIKE * np.abs(h[n]).max() else slice(None)
        E, P, b, K, state, order = (v[n, kept] for v in (energy, weight, lower, kernel, rho, phi))
        hopping = _hopping(t, J[n, kept], order, ordered[n], curvature[n], b, K)
        out.append(LocalSites(position, float(T[n]), E, P, b, K, state, order, hopping, ordered[n], space))
    return out


def _hopping(
    t: Floats,
    J: Floats,
    phi: Floats,
    ordered: NDArray[np.bool_],
    curvature: Floats | None,
    lower: Floats,
    kernel: Floats,
) -> Floats:
    """Hopping of every direction in the basis (b_1, .., b_1†, ..), (D, m, m), from t (a, D), J and phi (S, a)."""
    species, dim = t.shape
    z_t = 2.0 * t.sum(-1)
    normal, anomalous = np.eye(species), np.zeros((species, species))
    if curvature is not None and np.all(z_t > 0):
        normal, anomalous = _from_curvature(curvature, lower, kernel, z_t)
    for a in np.flatnonzero(ordered & (z_t > 0)):
        # The sublattices may differ; the geometric mean keeps the phase mode gapless.
        normal[a, a] = np.sqrt(np.prod(np.abs(J[:, a] / phi[:, a])) ** (2 / len(J))) / z_t[a]
    root = np.sqrt(t.T)
    shape = root[:, :, None] * root[:, None, :]
    rows = np.concatenate([shape * normal, shape * anomalous], 2)
    return np.concatenate([rows, np.concatenate([shape * anomalous, shape * normal], 2)], 1)


def _from_curvature(A: Floats, lower: Floats, kernel: Floats, z_t: Floats) -> tuple[Floats, Floats]:
    """Factors on the bare hopping, normal and anomalous (a, a), from the curvature A and the response without φ."""
    field, other = lower + np.swapaxes(lower, -1, -2), lower - np.swapaxes(lower, -1, -2)
    X, Y = (0.5 * np.einsum("sij,saij,sbij->ab", kernel, Q, Q) / len(kernel) for Q in (field, other))
    inverse = np.linalg.inv(X)
    scaled = inverse @ (X - A) @ inverse / np.sqrt(z_t[:, None] * z_t[None, :])
    # Pair order mixes b_1 with b_2†, and its response turns sign between the two quadratures; anti-pair order mixes
    # b_1 with b_2, and does not.
    paired = X[0, -1] * Y[0, -1] < 0
    diagonal = np.diag(np.diag(scaled))
    return (diagonal, scaled - diagonal) if paired else (scaled, np.zeros_like(scaled))
