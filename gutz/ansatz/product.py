"""The product (Gutzwiller) ansatz: independent sites in self-consistent fields, at any T ≥ 0.

In:  site energies, coordination-weighted hoppings z t, temperature, and the fields x (one per sublattice, species).
Out: the variational free energy per site (an upper bound), its stationarity residual and its curvature.

    h_s = h0_s - sum_a J_sa (b_a + b_a†),   J_sa = z t_a x_(other s)a,   stationary where x_sa = phi_sa = <b_a>_s
    F1  = mean over s of [F_tr(h_s) + 2 sum_a J_sa phi_sa] - sum_a z t_a phi_Aa phi_Ba

The bound is that of Gibbs and Bogoliubov; the method that of Rokhsar and Kotliar, PRB 44, 10328 (1991), and
Sheshadri et al., Europhys. Lett. 22, 257 (1993), extended to thermal states.
Shapes: batch (...), then sublattice (1 or 2), then species or state.
"""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp

from gutz.ansatz import gibbs
from gutz.fock import LocalSpace
from gutz.model import Mixture

Array = Any


class Sites(NamedTuple):
    """What the functional needs of a mixture. energy: (..., sublattice, state); z_t: (..., species); T: (...)."""

    energy: Array
    z_t: Array
    T: Array


def sites(mixture: Mixture, mu: Array, T: Array, space: LocalSpace, sublattices: int) -> Sites:
    """Interaction energies minus chemical potential of every basis state, per sublattice."""
    n = jnp.asarray(space.number)
    pairs = 0.5 * n * (n - 1.0)
    energy = (mixture.U[..., :, None] * pairs).sum(-2)
    if space.species == 2:
        energy = energy + mixture.U12[..., None] * (n[0] * n[1])
    signs = jnp.array([0.0]) if sublattices == 1 else jnp.array([-0.5, 0.5])
    site_mu = mu[..., None, :] - signs[:, None] * mixture.offset[..., None, :]
    per_site = energy[..., None, :] - (site_mu[..., :, None] * n).sum(-2)
    return Sites(per_site, mixture.z_t, jnp.asarray(T))


def partner(x: Array) -> Array:
    """Fields of the neighbouring sites: the other sublattice, or the same where there is only one."""
    return x[..., ::-1, :]


def fields_at(p: Sites, x: Array) -> Array:
    """J = z t x of the neighbours, shape (..., sublattice, species)."""
    return p.z_t[..., None, :] * partner(x)


def hamiltonian(p: Sites, x: Array, space: LocalSpace) -> Array:
    """Trial Hamiltonian of each site, shape (..., sublattice, state, state)."""
    coupled = jnp.einsum("...a,aij->...ij", fields_at(p, x), jnp.asarray(space.field))
    return p.energy[..., :, None] * jnp.eye(space.size) - coupled


def apply_fields(vectors: Array, space: LocalSpace) -> Array:
    """(b_a + b_a†) applied to every eigenvector, as shifts in the occupation: much cheaper than products."""
    levels_kept = space.n_max + 1
    root = jnp.sqrt(jnp.arange(1.0, levels_kept))
    grid = vectors.reshape(vectors.shape[:-2] + (levels_kept,) * space.species + vectors.shape[-1:])
    out = []
    for species in range(space.species):
        axis = species - space.species - 1
        weight = root.reshape((-1,) + (1,) * (-axis - 1))
        up = jax.lax.slice_in_dim(grid, 1, None, axis=axis % grid.ndim) * weight
        down = jax.lax.slice_in_dim(grid, 0, levels_kept - 1, axis=axis % grid.ndim) * weight
        edge = jnp.zeros_like(jax.lax.slice_in_dim(grid, 0, 1, axis=axis % grid.ndim))
        moved = jnp.concatenate([up, edge], axis) + jnp.concatenate([edge, down], axis)
        out.append(moved.reshape(vectors.shape))
    return jnp.stack(out, axis=-3)


def order(state: Array, space: LocalSpace) -> Array:
    """phi_a = <b_a> of each site, real; shape (..., sublattice, species)."""
    return 0.5 * jnp.einsum("...ij,aij->...a", state, jnp.asarray(space.field))


def free_energy(p: Sites, x: Array, trial: Array, phi: Array) -> Array:
    """Variational free energy per site from F_tr (`trial`, shape (..., sublattice)) and phi; shape (...)."""
    J = fields_at(p, x)
    local = trial + 2.0 * (J * phi).sum(-1)
    bond = (p.z_t[..., None, :] * phi * partner(phi)).sum(-1)
    return (local - bond).mean(-1)


def residual(p: Sites, x: Array, space: LocalSpace) -> Array:
    """x - phi(x), zero at a stationary point; shape as x."""
    h = hamiltonian(p, x, space)
    return x - order(gibbs.state(h, jnp.broadcast_to(p.T[..., None], h.shape[:-2])), space)


def softness(p: Sites, chi: Array) -> Array:
    """Largest eigenvalue of the field response per self-consistency loop; below 1 at a minimum, 1 at an onset.

    chi: static response of the fields b + b†, shape (..., sublattice, species, species). Returns shape (...).
    """
    X = _scaled(p, chi)
    loop = X[..., 0, :, :] if X.shape[-3] == 1 else X[..., 0, :, :] @ X[..., 1, :, :]
    largest = _largest_eigenvalue(loop)
    return largest if X.shape[-3] == 1 else jnp.sqrt(jnp.maximum(largest, 0.0))


def newton_step(p: Sites, chi: Array, r: Array) -> Array:
    """Change of x that removes the residual r to first order; shape as r (..., sublattice, species)."""
    root = jnp.sqrt(p.z_t)
    safe = jnp.where(root > 0, root, 1.0)
    X = _scaled(p, chi)
    y = r * root[..., None, :]
    species = r.shape[-1]
    if X.shape[-3] == 1:
        step = _solve(jnp.eye(species) - X[..., 0, :, :], -y[..., 0, :])[..., None, :]
    else:
        A, B = X[..., 0, :, :], X[..., 1, :, :]
        rhs = -y[..., 0, :] - (A @ y[..., 1, :, None])[..., 0]
        first = _solve(jnp.eye(species) - A @ B, rhs)
        second = -y[..., 1, :] + (B @ first[..., None])[..., 0]
        step = jnp.stack([first, second], axis=-2)
    return jnp.where(root[..., None, :] > 0, step / safe[..., None, :], -r)


def _scaled(p: Sites, chi: Array) -> Array:
    """sqrt(z t_a) chi_ab sqrt(z t_b) / 2, the symmetric form of d phi / d x."""
    root = jnp.sqrt(p.z_t)[..., None, :]
    return 0.5 * chi * root[..., :, None] * root[..., None, :]


def _largest_eigenvalue(M: Array) -> Array:
    """Of a 1x1 or 2x2 matrix with real eigenvalues."""
    if M.shape[-1] == 1:
        return M[..., 0, 0]
    half_trace = 0.5 * (M[..., 0, 0] + M[..., 1, 1])
    half_gap = 0.5 * (M[..., 0, 0] - M[..., 1, 1])
    return half_trace + jnp.sqrt(jnp.maximum(half_gap**2 + M[..., 0, 1] * M[..., 1, 0], 0.0))


def _solve(M: Array, v: Array) -> Array:
    """Solve M u = v for 1x1 or 2x2 matrices; a vanishing determinant is replaced by a tiny one."""
    if M.shape[-1] == 1:
        return v / _away_from_zero(M[..., 0])
    a, b, c, d = M[..., 0, 0], M[..., 0, 1], M[..., 1, 0], M[..., 1, 1]
    det = _away_from_zero(a * d - b * c)
    return jnp.stack([d * v[..., 0] - b * v[..., 1], a * v[..., 1] - c * v[..., 0]], axis=-1) / det[..., None]


def _away_from_zero(x: Array) -> Array:
    return jnp.where(jnp.abs(x) < 1e-14, jnp.where(x < 0, -1e-14, 1e-14), x)
