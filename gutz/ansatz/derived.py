"""What a dressed state says: thermodynamics, responses, coherence and stiffness, as derivatives of the functional.

In:  a flat `Mixture`, chemical potentials, temperatures and the `DressedMinimum` found there.
Out: `DressedObservables`, numpy arrays over the points.

First derivatives are taken at fixed fields (envelope theorem: the fields are stationary). Second derivatives
add the response of the fields, dx/dy = -H^-1 ∂²F/∂x∂y, from central differences of exact gradients. The stiffness
has no such part: the functional is even in the twist at any fields.
"""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from gutz.ansatz import bond, dressed, families
from gutz.ansatz.dressed import Sites
from gutz.ansatz.families import Family, Plan
from gutz.ansatz.selection import DressedMinimum
from gutz.compiled import compiled
from gutz.fock import local_space
from gutz.model import Mixture

Array = Any


_SPIN = len(Family) + 1


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


@compiled(static=("plan",))
def _responses(p: Sites, number: Array, x: Array, lam: Array, along: Array, *, plan: Plan) -> Array:
    """Second derivatives of F in (directions `along` of the fields, mu, T); along: (n, sublattice, field)."""
    f = bond.frame(plan.n_max, plan.species, "full")
    n, a = along.shape[0], plan.species

    def slopes(energy: Array, T: Array, x: Array) -> Array:
        at = dressed.look(
            p._replace(energy=energy, T=T), x, lam, f=f, names=plan.names, cold=plan.cold, nodes=plan.nodes
        )
        in_mu = -jnp.einsum("...si,ai->...a", at.in_energy, number)
        fields = jnp.einsum("...sk,nsk->...n", at.gradient, along)
        return jnp.concatenate([fields, in_mu, at.in_T[:, None]], -1)

    kick = jnp.concatenate([along, jnp.zeros((a + 1, *along.shape[1:]))])
    unit = np.eye(n + a + 1)
    in_T = unit[:, -1] * (0.0 if plan.cold else 1.0)
    # Small against T, or against the level spacings.
    width = p.energy.max((-1, -2)) - p.energy.min((-1, -2)) + p.z_t.sum(-1)
    step = 2e-4 * (0.1 * width if plan.cold else jnp.minimum(0.1 * width, p.T))

    def column(direction: tuple[Array, Array, Array]) -> Array:
        ex, emu, eT = direction

        def at_step(c: Array) -> Array:
            e = c * step
            energy = p.energy - e[:, None, None] * (emu @ number)
            return slopes(energy, p.T + e * eT, x + e[:, None, None] * ex)

        around = jax.lax.map(at_step, jnp.array([-2.0, -1.0, 1.0, 2.0]))
        return (around[0] - 8.0 * around[1] + 8.0 * around[2] - around[3]) / (12.0 * step[:, None])

    columns = jax.lax.map(column, (kick, jnp.asarray(unit[:, n : n + a]), jnp.asarray(in_T)))
    return jnp.moveaxis(columns, 0, -1)


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
    if species == 2 and sublattices == 2:
        # Normal states carry total or difference fields (`families.variants`): a code of its own for the latter.
        nu = state.fields[..., -2:]
        spin = np.abs(nu[..., 0] - nu[..., 1]).max(-1) > np.abs(nu.sum(-1)).max(-1)
        family = np.where((family == Family.NORMAL) & spin, _SPIN, family)
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
    family = Family.SINGLE if code == len(Family) else Family(code % _SPIN)
    used = families.variants(family, species, sublattices)[1 if code == _SPIN else 0]
    along = np.zeros((sublattices, len(used), sublattices, len(names)))
    for site in range(sublattices):
        along[site, :, site] = [families.spread(name, species) for name in used]
    along = along.reshape(-1, sublattices, len(names))
    p = dressed.sites(m, jnp.asarray(mu[at]), jnp.asarray(T[at]), n_max, sublattices)
    energy = np.asarray(p.energy)
    width = energy.max((-1, -2)) - energy.min((-1, -2)) + 2 * n_max * np.asarray(p.z_t).sum(-1)
    nodes = 0 if cold else bond.enough_nodes(float((width / T[at]).max()))
    plan = Plan("full", names, (1.0,), n_max, species, cold, nodes)
    x, lam = jnp.asarray(state.fields[at]), jnp.asarray(state.lam[at])
    look = jax.tree_util.tree_map(np.asarray, jax.block_until_ready(families.survey(p, x, lam, plan=plan)))
    number = local_space(n_max, species).number
    second = np.asarray(_responses(p, jnp.asarray(number), x, lam, jnp.asarray(along), plan=plan))

    F, entropy = look.free_energy, -look.in_T
    # Derivatives in the energy of a basis state are corrected occupations; averages of number operators follow.
    filling = np.einsum("nsi,ai->na", look.in_energy, number)
    squares = np.einsum("nsi,ai,bi->nab", look.in_energy, number, number)
    covariance = squares - filling[:, :, None] * filling[:, None, :]
    t = np.asarray(m.t)
    condensed = (look.phi * look.phi[:, ::-1]).mean(1)
    hopping = np.einsum("nab,nbd->nad", look.parts.sum(1), t)
    coherence = condensed[:, :, None] - np.asarray(lam)[:, None, None] * hopping
    reduced = _relaxed(second, len(along))
    stiffness = _stiffness(t, look.parts * np.asarray(lam)[:, None, None, None], condensed)
    return DressedObservables(
        F,
        entropy,
        F + T[at] * entropy + (mu[at] * filling).sum(-1),
        filling,
        covariance,
        -reduced[:, :species, :species],
        -T[at] * reduced[:, -1, -1],
        coherence,
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
