"""What a dressed state says: thermodynamics, responses, coherence and stiffness, as derivatives of the functional.

In:  a flat `Mixture`, chemical potentials, temperatures and the `DressedMinimum` found there.
Out: `DressedObservables`, numpy arrays over the points.

First derivatives are taken by jax at fixed fields (envelope theorem: the fields are stationary). Second derivatives
add the response of the fields, dx/dy = -H^-1 ∂²F/∂x∂y, from central differences of exact gradients. The stiffness
has no such part: the functional is even in the twist at any fields.
"""

from functools import partial
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from gutz.ansatz import bond, dressed, families
from gutz.ansatz.dressed import Sites
from gutz.ansatz.families import Family
from gutz.ansatz.selection import DressedMinimum
from gutz.fock import LocalSpace, local_space
from gutz.model import Mixture

Array = Any


class DressedObservables(NamedTuple):
    """Per site, for N points. free_energy, entropy, energy, heat_capacity: (N,). filling: (N, species).

    number_covariance, compressibility: (N, species, species). coherence: <b†_ia b_ja> on a bond, (N, species,
    direction). stiffness: d2F/dtheta_a dtheta_b, (N, species, species, direction).
    """

    free_energy: Array
    entropy: Array
    energy: Array
    filling: Array
    number_covariance: Array
    compressibility: Array
    heat_capacity: Array
    coherence: Array
    stiffness: Array


class _Raw(NamedTuple):
    """The parameters the functional is differentiated in."""

    t: Array
    U: Array
    U12: Array
    mu: Array
    T: Array


def _functional(
    raw: _Raw, offset: Array, x: Array, lam: Array, space: LocalSpace, cold: bool, nodes: int
) -> tuple[Array, Sites]:
    names = dressed.NAMES[space.species]
    mixture = Mixture.__new__(Mixture)
    mixture._fill(
        dict(t=raw.t, U=raw.U, U12=raw.U12, mu=raw.mu, filling=None, T=raw.T, entropy=None, offset=offset),
        dim=raw.t.shape[-1],
        species=space.species,
        n_max=space.n_max,
    )
    p = dressed.sites(mixture, raw.mu, raw.T, space.n_max, x.shape[-2])
    f = bond.frame(space.n_max, space.species, "full")
    return dressed.free_energy(p, x, lam, f=f, names=names, cold=cold, nodes=nodes), p


@partial(jax.jit, static_argnames=("n_max", "cold", "nodes", "active"))
def _all(
    raw: _Raw, offset: Array, x: Array, lam: Array, *, n_max: int, cold: bool, nodes: int, active: tuple[int, ...]
) -> tuple[Array, _Raw, Array, Array, Array]:
    """F, its derivatives in the parameters, the bond parts, phi, and second derivatives in (fields, mu, T)."""
    space = local_space(n_max, raw.mu.shape[-1])
    names = dressed.NAMES[space.species]
    f = bond.frame(n_max, space.species, "full")

    def total(raw: _Raw, x: Array) -> tuple[Array, Array]:
        F, _ = _functional(raw, offset, x, lam, space, cold, nodes)
        return F.sum(), F

    gradient, F = jax.grad(total, has_aux=True)(raw, x)
    p = _functional(raw, offset, x, lam, space, cold, nodes)[1]
    at = dressed.look(p, x, lam, f=f, names=names, cold=cold, nodes=nodes)

    def slopes(raw: _Raw, x: Array) -> Array:
        """Derivatives in active fields of each sublattice, mu and T, in one row."""
        (g, gx), _ = jax.grad(total, argnums=(0, 1), has_aux=True)(raw, x)
        return jnp.concatenate([gx[..., active].reshape(x.shape[0], -1), g.mu, g.T[:, None]], -1)

    # Steps small against T and against the level spacings that matter.
    scale = jnp.max(raw.U, -1) + jnp.abs(raw.U12) + 2.0 * raw.t.sum((-1, -2))
    step = 2e-4 * (scale if cold else jnp.minimum(scale, raw.T))

    sublattices, k = x.shape[1:]
    fields = np.zeros((sublattices * len(active), sublattices, k))
    for row, (site, i) in enumerate((site, i) for site in range(sublattices) for i in active):
        fields[row, site, i] = 1.0
    n, a = len(fields), space.species
    dx = jnp.concatenate([jnp.asarray(fields), jnp.zeros((a + 1, sublattices, k))])
    dmu = jnp.eye(n + a + 1)[:, n : n + a]
    dT = (0.0 if cold else 1.0) * jnp.eye(n + a + 1)[:, -1]

    def column(direction: tuple[Array, Array, Array]) -> Array:
        ex, emu, eT = direction

        def at_step(c: Array) -> Array:
            e = c * step
            moved = raw._replace(mu=raw.mu + e[:, None] * emu, T=raw.T + e * eT)
            return slopes(moved, x + e[:, None, None] * ex)

        around = jax.lax.map(at_step, jnp.array([-2.0, -1.0, 1.0, 2.0]))
        return (around[0] - 8.0 * around[1] + 8.0 * around[2] - around[3]) / (12.0 * step[:, None])

    second = jnp.moveaxis(jax.lax.map(column, (dx, dmu, dT)), 0, -1)
    return F, gradient, at.parts, at.phi, second


def observables(
    mixture: Mixture, mu: Array, T: Array, n_max: int, sublattices: int, state: DressedMinimum
) -> DressedObservables:
    """Everything `DressedObservables` lists, for the states given; points may be of any family and T ≥ 0.

    mixture: flat, N points. mu: (N, species). T: (N,).
    """
    mu, T = np.asarray(mu, float), np.asarray(T, float)
    species, dim = mixture.species, mixture.dim
    N = T.size
    out = DressedObservables(*(np.zeros((N, *s)) for s in _shapes(species, dim)))
    family = np.where(state.lam > 0, state.family, len(Family))
    for cold in (False, True):
        for code in np.unique(family):
            group = np.flatnonzero(((T == 0) == cold) & (family == code))
            for begin in range(0, group.size, families.CHUNK):
                index = group[begin : begin + families.CHUNK]
                part = _chunk(mixture, mu, T, n_max, state, index, int(code), cold)
                for whole, piece in zip(out, part, strict=True):
                    whole[index] = piece[: index.size]
    return out


def _shapes(species: int, dim: int) -> list[tuple[int, ...]]:
    pair = (species, species)
    return [(), (), (), (species,), pair, pair, (), (species, dim), (*pair, dim)]


def _chunk(
    mixture: Mixture, mu: np.ndarray, T: np.ndarray, n_max: int, state: DressedMinimum,
    index: np.ndarray, code: int, cold: bool,
) -> DressedObservables:  # fmt: skip
    size = max(16, 1 << (index.size - 1).bit_length())
    at = np.concatenate([index, np.full(size - index.size, index[-1])])
    m = mixture[at]
    species = m.species
    names = dressed.NAMES[species]
    sublattices = state.fields.shape[1]
    family = Family.SINGLE if code == len(Family) else Family(code)
    used = families.names_of(family, species, sublattices)
    if code == len(Family):
        used = tuple(n for n in used if n.startswith("J"))
    active = tuple(names.index(n) for n in used)
    raw = _Raw(*(jnp.asarray(v) for v in (m.t, m.U, m.U12, mu[at], T[at])))
    width = np.asarray(m.U).max(-1) * n_max**2 * species + np.abs(m.U12) * n_max**2
    width = width + n_max * (np.abs(mu[at]).sum(-1) + 4 * np.asarray(m.t).sum((-1, -2)))
    nodes = 0 if cold else bond.enough_nodes(float((width / T[at]).max()))
    x, lam = jnp.asarray(state.fields[at]), jnp.asarray(state.lam[at])
    F, g, parts, phi, second = _all(
        raw, jnp.asarray(m.offset), x, lam, n_max=n_max, cold=cold, nodes=nodes, active=active
    )
    F, parts, phi, second = (np.asarray(v) for v in (F, parts, phi, second))
    filling, entropy = -np.asarray(g.mu), -np.asarray(g.T) * (not cold)
    covariance = np.zeros((size, species, species))
    for a in range(species):
        covariance[:, a, a] = 2.0 * np.asarray(g.U)[:, a] + filling[:, a] - filling[:, a] ** 2
    if species == 2:
        covariance[:, 0, 1] = covariance[:, 1, 0] = np.asarray(g.U12) - filling[:, 0] * filling[:, 1]
    reduced = _relaxed(second, len(active) * sublattices)
    t = np.asarray(m.t)
    stiffness = _stiffness(t, parts, (phi * phi[:, ::-1]).mean(1))
    return DressedObservables(
        F,
        entropy,
        F + T[at] * entropy + (mu[at] * filling).sum(-1),
        filling,
        covariance,
        -reduced[:, :species, :species],
        -T[at] * reduced[:, -1, -1],
        -0.5 * np.asarray(g.t),
        stiffness,
    )


def _relaxed(second: np.ndarray, n: int) -> np.ndarray:
    """Second derivatives in (mu, T) after the n fields have followed; flat directions do not move."""
    second = 0.5 * (second + np.swapaxes(second, -1, -2))
    H, mixed, rest = second[:, :n, :n], second[:, :n, n:], second[:, n:, n:]
    if n == 0:
        return rest
    size = np.abs(np.diagonal(H, axis1=-2, axis2=-1))
    size = np.sqrt(np.where(size > 0, size, 1.0))
    inverse = np.linalg.pinv(H / size[:, :, None] / size[:, None, :], rcond=1e-9, hermitian=True)
    scaled = mixed / size[:, :, None]
    return rest - np.swapaxes(scaled, -1, -2) @ inverse @ scaled


def _stiffness(t: np.ndarray, parts: np.ndarray, condensed: np.ndarray) -> np.ndarray:
    """Second derivative in the twist: t_a t_b [B+_ab cos(θa + θb) + B-_ab cos(θa - θb)] - 2 t_a φ_a² cos θa."""
    species, dim = t.shape[1:]
    out = np.zeros((t.shape[0], species, species, dim))
    for a in range(species):
        out[:, a, a] = 2.0 * t[:, a] * condensed[:, a, None] - 4.0 * t[:, a] ** 2 * parts[:, 0, a, a, None]
        for b in range(species):
            if b != a:
                both = 2.0 * t[:, a] * t[:, b]
                out[:, a, a] -= both * (parts[:, 0, a, b] + parts[:, 1, a, b])[:, None]
                out[:, a, b] = both * (parts[:, 1, a, b] - parts[:, 0, a, b])[:, None]
    return out
