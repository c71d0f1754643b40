"""One batch of points of the product ansatz from parameters to outputs, compiled once per batch size.

In:  a flat `Mixture`, chemical potentials, temperatures and a cutoff.
Out: converged fields, outputs and status bits of every point. No Python loop over points; usable inside jit.
"""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from gutz.ansatz import descent, gibbs, product
from gutz.ansatz.product import Sites
from gutz.compiled import compiled
from gutz.fock import LocalSpace, local_space
from gutz.model import Mixture
from gutz.observables import observe
from gutz.status import Status

Array = Any

LANES = 128
"""Eigenproblems worked on side by side: more do not fit the cache, fewer cost overhead (measured)."""

ZERO_FIELD = 1e-7
"""Fields that converge below this are zero: what is left of a decaying order."""

CUTOFF_WEIGHT = 1e-6
"""Weight of the highest occupation kept above which a point is marked."""

_KICK = 0.05


class Batch(NamedTuple):
    """fields: (point, sublattice, species); outputs: see `observe`; response and order_response likewise."""

    fields: Array
    outputs: dict[str, Array]
    response: Array
    order_response: Array
    status: Array


def solve_batch(mixture: Mixture, mu: Array, T: Array, *, n_max: int, sublattices: int) -> Batch:
    """Find the global minimum of every point and evaluate it.

    The stages are compiled separately, because the descents share one compilation.
    """
    fields, converged = global_minimum(mixture, mu, T, n_max=n_max, sublattices=sublattices)
    return evaluate(mixture, mu, T, fields, converged, n_max=n_max)


@compiled(static=("n_max",))
def evaluate(mixture: Mixture, mu: Array, T: Array, fields: Array, converged: Array, *, n_max: int) -> Batch:
    """Outputs, responses and status at given fields, block by block so that memory stays small."""
    space = local_space(n_max, mixture.species)
    size = mu.shape[0]
    lanes = min(size, LANES)
    blocks = size // lanes

    def split(v: Array) -> Array:
        return v.reshape((blocks, lanes, *v.shape[1:]))

    def join(v: Array) -> Array:
        return v.reshape((size, *v.shape[2:]))

    def one(block: Any) -> Any:
        mixture_block, mu_block, T_block, x_block = block
        return observe(mixture_block, mu_block, T_block, x_block, space, differentiable=False)

    given = jax.tree.map(lambda v: split(jnp.asarray(v)), (mixture, mu, T, fields))
    outputs, response, order_response = jax.tree.map(join, jax.lax.map(one, given))
    p = product.sites(mixture, mu, T, space, fields.shape[-2])
    status = _status(p, outputs, fields, converged, n_max)
    return Batch(fields, outputs, response, order_response, status)


def global_minimum(mixture: Mixture, mu: Array, T: Array, *, n_max: int, sublattices: int) -> tuple[Array, Array]:
    """Best of several descents and of the state without order; (point, sublattice, species), converged.

    Both species ordered, each alone ordered (the other then only labels blocks, which is cheap), none ordered.
    """
    p, start = _prepare(mixture, mu, T, n_max=n_max, sublattices=sublattices)
    size, species = start.shape[0], start.shape[-1]
    work = {"n_max": n_max, "lanes": min(size, LANES)}
    # Small things stay in numpy: every operation of jax outside a compiled stage would be compiled on its own.
    best = descent.descend(p, np.arange(size), start, np.asarray(size), **work)
    x, F, converged = best.x, best.free_energy, best.converged
    if species == 2:
        axis = descent.descend(*_each_alone(p, x, start), **work)
        x, F, converged, alone, todo, kicked, count = _take_alone(x, F, converged, axis)
        if isinstance(count, jax.core.Tracer) or int(count):
            joint = descent.descend(p, todo, kicked, count, **work)
            x, F = _take_joint(x, F, alone, todo, joint)
    return _with_normal(p, x, F, converged, n_max=n_max)


@compiled(static=("n_max", "sublattices"))
def _prepare(mixture: Mixture, mu: Array, T: Array, *, n_max: int, sublattices: int) -> tuple[Sites, Array]:
    space = local_space(n_max, mixture.species)
    p = product.sites(mixture, mu, T, space, sublattices)
    start = _large_fields(p, mixture, space)[:, None, :]
    return p, jnp.broadcast_to(start, (start.shape[0], sublattices, mixture.species))


@compiled()
def _each_alone(p: Sites, x: Array, start: Array) -> tuple[Sites, Array, Array, Array]:
    """Jobs in which only species 1 (first half of the queue) or only species 2 has fields; from x where it has any."""
    start = jnp.where(x > ZERO_FIELD, x, start)
    size, sublattices = p.energy.shape[:2]
    levels = round(p.energy.shape[-1] ** 0.5)
    second = p.energy.reshape(size, sublattices, levels, levels)
    energy = jnp.concatenate([jnp.swapaxes(second, -1, -2), second])
    one = Sites(energy, jnp.concatenate([p.z_t[:, :1], p.z_t[:, 1:]]), jnp.tile(p.T, 2))
    starts = jnp.concatenate([start[..., :1], start[..., 1:]])
    return one, jnp.arange(2 * size, dtype=jnp.int64), starts, jnp.asarray(2 * size, jnp.int64)


@compiled()
def _take_alone(x: Array, F: Array, converged: Array, axis: descent.Minimum) -> tuple[Array, ...]:
    """Replace minima by lower ones with one species alone, and ask whether the other joins in from there.

    Returns x, F, converged, where one species is alone, and the queue that asks: points, starts, count.
    """
    size = F.shape[0]
    alone = jnp.zeros(size, bool)
    for a in range(2):
        field, energy, settled = (v[a * size : (a + 1) * size] for v in (axis.x, axis.free_energy, axis.converged))
        lower = settled & (~converged | (energy < F - _tie(F)))
        zero = jnp.zeros_like(field)
        pair = [field, zero] if a == 0 else [zero, field]
        x = jnp.where(lower[:, None, None], jnp.concatenate(pair, -1), x)
        F = jnp.where(lower, energy, F)
        converged, alone = converged | lower, alone | lower
    todo = jnp.argsort(~alone)
    return x, F, converged, alone, todo, jnp.maximum(x, _KICK)[todo], alone.sum()


@compiled()
def _take_joint(x: Array, F: Array, alone: Array, todo: Array, joint: descent.Minimum) -> tuple[Array, Array]:
    lower = joint.converged & (joint.free_energy < F[todo] - _tie(F[todo])) & alone[todo]
    x = x.at[todo].set(jnp.where(lower[:, None, None], joint.x, x[todo]))
    return x, F.at[todo].set(jnp.where(lower, joint.free_energy, F[todo]))


@compiled(static=("n_max",))
def _with_normal(p: Sites, x: Array, F: Array, converged: Array, *, n_max: int) -> tuple[Array, Array]:
    """Compare with the state without order; fields that have decayed are set to exactly zero.

    On a tie of free energies the curvature of the normal state decides: just beyond an onset the gain in F is
    quadratic in the distance and drowns in rounding long before the order does.
    """
    x = jnp.where(jnp.abs(x).max(1, keepdims=True) < ZERO_FIELD, 0.0, x)
    without, chi = _without_order(p, local_space(n_max, p.z_t.shape[-1]))
    unstable = (product.softness(p, chi) > 1.0) & converged & (jnp.abs(x).max((-1, -2)) > 0)
    ordered = (F < without - _tie(without)) | (unstable & (F < without + _tie(without)))
    x = jnp.where(ordered[:, None, None], x, 0.0)
    return x, converged | ~ordered


def _tie(F: Array) -> Array:
    return descent.SLACK * (1.0 + jnp.abs(F))


def _large_fields(p: Sites, mixture: Mixture, space: LocalSpace) -> Array:
    """Start well inside the ordered side: the classical field of each species alone, kept within the cutoff.

    The factor of the second species avoids starting on the symmetric saddle of equal species.
    """
    U = jnp.maximum(mixture.U, 1e-3 * (mixture.z_t + jnp.abs(p.energy).max((-1, -2))[:, None] + 1e-300))
    mu = -(p.energy[:, 0, :] * jnp.asarray(_single_atom(space))[:, None, :]).sum(-1).T
    shared = jnp.maximum(mixture.U12, 0.0)[:, None] if space.species == 2 else 0.0
    classical = (mu + mixture.z_t) / (U + shared)
    return jnp.sqrt(jnp.clip(classical, 0.2, 0.6 * space.n_max)) * jnp.array([1.0, 0.9])[: space.species]


def _single_atom(space: LocalSpace) -> Array:
    """Picks the state with one atom of each species alone, shape (species, state)."""
    number = space.number
    return ((number.sum(0) == 1) & (number == 1)).astype(float)


def _without_order(p: Sites, space: LocalSpace) -> tuple[Array, Array]:
    """F and the response of the fields at zero fields, where the site is diagonal; no eigensolver needed."""
    order = jnp.argsort(p.energy, axis=-1)
    energy = jnp.take_along_axis(p.energy, order, -1)
    warm = p.T[:, None] > 0
    beta = gibbs.inverse(p.T[:, None])
    beta = jnp.broadcast_to(beta, energy.shape[:-1])
    excitation = energy - energy[..., :1]
    scale = jnp.maximum(jnp.abs(p.energy).max(-1, keepdims=True), 1e-300)
    cold = (excitation <= gibbs.DEGENERACY * scale).astype(float)
    boltzmann = jnp.where(warm[..., None], jnp.exp(-excitation * beta[..., None]), cold)
    total = boltzmann.sum(-1, keepdims=True)
    free_energy = energy[..., 0] - jnp.where(warm, p.T[:, None] * jnp.log(total[..., 0]), 0.0)
    unsorted = jnp.argsort(order, axis=-1)
    weight = jnp.take_along_axis(boltzmann / total, unsorted, -1)
    lv = gibbs.Levels(p.energy, p.energy, weight, free_energy, free_energy, beta)
    kernel = gibbs.response_kernel(lv)
    strength = jnp.asarray(space.field) ** 2
    chi = jnp.einsum("...ij,aij->...a", kernel, strength)
    return free_energy.mean(-1), chi[..., :, None] * jnp.eye(space.species)


def _status(p: Sites, outputs: dict[str, Array], fields: Array, converged: Array, n_max: int) -> Array:
    finite = jnp.isfinite(outputs["free_energy"])
    code = jnp.where(finite, 0, int(Status.NOT_FINITE))
    code = code | jnp.where(finite & ~converged, int(Status.NOT_CONVERGED), 0)
    if n_max > 1:
        # With n_max = 1 the top level is the hard core itself, not an approximation.
        code = code | jnp.where(outputs["cutoff_weight"] > CUTOFF_WEIGHT, int(Status.CUTOFF), 0)
    disordered = jnp.abs(fields).max((-1, -2)) == 0
    sorted_energy = jnp.sort(p.energy, axis=-1)
    scale = jnp.maximum(jnp.abs(p.energy).max((-1, -2)), 1e-300)
    gap = (sorted_energy[..., 1] - sorted_energy[..., 0]).min(-1)
    degenerate = (p.T == 0) & disordered & (gap <= gibbs.DEGENERACY * scale)
    return (code | jnp.where(degenerate, int(Status.DEGENERATE), 0)).astype(jnp.int32)
