"""What a minimum of the product ansatz says: thermodynamics, number statistics, responses, stiffness.

In:  a mixture, its chemical potentials and temperatures, and the converged fields x (...., sublattice, species).
Out: the outputs named in `gutz.variables` (without phase, status and n_max), averaged over the sublattices.

Responses follow the minimum: with fields y = (mu_1, mu_2, T) and conjugates (n_1, n_2, S), the order parameters
move by d phi = (1 - chi_BB z t / 2)^-1 chi_By dy / 2, which is implicit differentiation of phi = x.
"""

from typing import Any

import jax.numpy as jnp

from gutz.ansatz import gibbs, product
from gutz.ansatz.product import Sites
from gutz.fock import LocalSpace
from gutz.model import Mixture

Array = Any


def observe(
    mixture: Mixture, mu: Array, T: Array, x: Array, space: LocalSpace, *, differentiable: bool
) -> tuple[dict[str, Array], Array, Array]:
    """All outputs at the fields x, the 3x3 (or 2x2) response d(n, S)/d(mu, T), and d phi / d(mu, T).

    `differentiable` chooses between one eigensystem shared by everything (values only) and the operations of
    `gutz.ansatz.gibbs`, which can be differentiated. The last array has shape (..., sublattice, species, y).
    """
    p = product.sites(mixture, mu, T, space, x.shape[-2])
    h = product.hamiltonian(p, x, space)
    T_site = jnp.broadcast_to(p.T[..., None], h.shape[:-2])
    if differentiable:
        trial, entropy, rho = gibbs.free_energy(h, T_site), gibbs.entropy(h, T_site), gibbs.state(h, T_site)
        chi = gibbs.response(h, T_site, _operators(h, T_site, space))
    else:
        lv = gibbs.levels(h, T_site)
        trial, entropy = lv.free_energy, lv.entropy
        rho = (lv.vectors * lv.weight[..., None, :]) @ jnp.swapaxes(lv.vectors, -1, -2)
        chi = gibbs.response_from_levels(lv, _operators_in_levels(lv, space))
    phi = product.order(rho, space)
    total, d_phi = _total_response(p, chi, space.species)
    out = _averages(mixture, mu, p, x, trial, entropy, rho, phi, space)
    out["compressibility"] = total[..., :-1, :-1]
    out["heat_capacity"] = p.T * total[..., -1, -1]
    return out, total, d_phi


def _averages(
    mixture: Mixture,
    mu: Array,
    p: Sites,
    x: Array,
    trial: Array,
    entropy: Array,
    rho: Array,
    phi: Array,
    space: LocalSpace,
) -> dict[str, Array]:
    """Everything that is an average in the state itself."""
    number = jnp.asarray(space.number)
    diagonal = jnp.diagonal(rho, axis1=-2, axis2=-1)
    density = diagonal @ number.T
    squares = jnp.einsum("...i,ai,bi->...ab", diagonal, number, number)
    covariance = squares - density[..., :, None] * density[..., None, :]
    filling = density.mean(-2)
    F = product.free_energy(p, x, trial, phi)
    S = entropy.mean(-1)
    bond = (phi * product.partner(phi)).mean(-2)
    directions = jnp.ones(mixture.t.shape[-1])
    # The offset of a superlattice is part of the energy; mu is what multiplies the total filling.
    out = {
        "mu": jnp.broadcast_to(mu, filling.shape),
        "T": jnp.broadcast_to(p.T, F.shape),
        "filling": filling,
        "free_energy": F,
        "energy": F + p.T * S + (mu * filling).sum(-1),
        "entropy": S,
        "entropy_per_particle": S / jnp.maximum(filling.sum(-1), 1e-300),
        "order_parameter": phi.mean(-2),
        "condensate": (phi**2).mean(-2),
        "number_variance": covariance.mean(-3),
        "coherence": bond[..., None] * directions,
        "stiffness": 2.0 * jnp.eye(space.species)[:, :, None] * (mixture.t * bond[..., None])[..., :, None, :],
        "staggering": 0.5 * (density[..., 0, :] - density[..., -1, :]),
        "cutoff_weight": diagonal[..., space.top].sum(-1).max(-1),
        "residual": jnp.abs(x - phi).max((-1, -2)),
    }
    if space.species == 2:
        out["pair_order"] = jnp.einsum("...ij,ij->...", rho, jnp.asarray(space.pair)).mean(-1)
        out["antipair_order"] = jnp.einsum("...ij,ij->...", rho, jnp.asarray(space.antipair)).mean(-1)
    else:
        out["pair_order"] = out["antipair_order"] = jnp.zeros(F.shape)
    return out


def _operators(h: Array, T: Array, space: LocalSpace) -> Array:
    """Fields b + b†, numbers, and h/T (which a change of T couples to); shape (..., operator, state, state)."""
    number = jnp.asarray(space.number)[:, :, None] * jnp.eye(space.size)
    fixed = jnp.concatenate([jnp.asarray(space.field), number])
    fixed = jnp.broadcast_to(fixed, h.shape[:-2] + fixed.shape)
    return jnp.concatenate([fixed, (h * gibbs.inverse(T)[..., None, None])[..., None, :, :]], axis=-3)


def _operators_in_levels(lv: gibbs.Levels, space: LocalSpace) -> Array:
    """As `_operators`, in the basis of levels, from one eigensystem."""
    V = lv.vectors
    transposed = jnp.swapaxes(V, -1, -2)[..., None, :, :]
    fields = transposed @ product.apply_fields(V, space)
    numbers = transposed @ (jnp.asarray(space.number)[:, :, None] * V[..., None, :, :])
    energy = (lv.energy - lv.energy[..., :1]) * lv.inverse_temperature[..., None]
    thermal = energy[..., :, None] * jnp.eye(energy.shape[-1])
    return jnp.concatenate([fields, numbers, thermal[..., None, :, :]], axis=-3)


def _total_response(p: Sites, chi: Array, species: int) -> tuple[Array, Array]:
    """d(n, S)/d(mu, T) with the order parameters following; and d phi/d(mu, T)."""
    field = chi[..., :species, :species]
    mixed = chi[..., :species, species:]
    own = chi[..., species:, species:]
    columns = [product.newton_step(p, field, -0.5 * mixed[..., :, :, y]) for y in range(mixed.shape[-1])]
    d_phi = jnp.stack(columns, axis=-1)
    J = p.z_t[..., None, :, None] * d_phi[..., ::-1, :, :]
    total = own + jnp.swapaxes(mixed, -1, -2) @ J
    return total.mean(-3), d_phi
