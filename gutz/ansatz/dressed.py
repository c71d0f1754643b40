"""The dressed functional: independent sites in trial fields, plus the second-order effect of the hopping.

In:  `Sites` (energies, hoppings, temperature) and trial fields of each sublattice.
Out: the free energy per site, its gradient in the fields, and the averages behind both.

    h_s = h0_s - sum_i x_si Q_i,   Q_i of: J_a (b_a + b_a†), K (b_1 b_2 + h.c.), M (b_1† b_2 + h.c.), nu_a n_a
    F   = mean over s of [F_tr(h_s) + sum_i x_si <Q_i>_s] - sum_a z t_a phi_Aa phi_Ba + λ sum_directions F_bond

A truncated expansion, so not an upper bound, and bounded below only near physical states: `families` says how to
minimise it. Second order in the hopping at fixed order parameters: effective-potential theory of dos Santos and
Pelster, Phys. Rev. A 79, 013614 (2009), here at any T ≥ 0 and with pair and anti-pair fields.
"""

from typing import Any, NamedTuple

import jax.numpy as jnp
import numpy as np

from gutz.ansatz import bond, gibbs, product
from gutz.ansatz.bond import Frame
from gutz.fock import local_space
from gutz.model import Mixture

Array = Any

NAMES = {1: ("J1", "nu1"), 2: ("J1", "J2", "K", "M", "nu1", "nu2")}
"""Trial fields in the order of the last axis of every array of fields, by number of species."""


class Sites(NamedTuple):
    """What the functional needs of a mixture.

    energy: (..., sublattice, state), in the order of the Fock space. z_t: (..., species). hop: sum over directions of
    t_a t_b, (..., species, species). T: (...).
    """

    energy: Array
    z_t: Array
    hop: Array
    T: Array


class Look(NamedTuple):
    """One evaluation. gradient, mean: (..., sublattice, field); response: d<Q_i>/dx_j, (..., sublattice, field, field).

    phi: (..., sublattice, species). bond, variance: value of the bond term and <V²>, summed over directions, (...).
    parts: see `bond.Bond`. in_energy: derivative in the energy of each basis state, in the order of the Fock space,
    (..., sublattice, state). in_T: derivative in the temperature at fixed fields, (...), 0 at T = 0.
    """

    free_energy: Array
    gradient: Array
    response: Array
    mean: Array
    phi: Array
    bond: Array
    variance: Array
    parts: Array
    in_energy: Array
    in_T: Array


def sites(mixture: Mixture, mu: Array, T: Array, n_max: int, sublattices: int) -> Sites:
    """Collect what the functional needs; mixture has one batch axis, mu (..., species), T (...)."""
    p = product.sites(mixture, mu, T, local_space(n_max, mixture.species), sublattices)
    t = jnp.asarray(mixture.t)
    return Sites(p.energy, p.z_t, (t[..., :, None, :] * t[..., None, :, :]).sum(-1), p.T)


def fields_of(f: Frame, names: tuple[str, ...]) -> np.ndarray:
    """Operators Q of the named trial fields in the frame's basis, shape (field, state, state)."""
    return np.stack([f.fields[name] for name in names])


def hamiltonian(p: Sites, x: Array, f: Frame, names: tuple[str, ...]) -> Array:
    """Trial Hamiltonian of every sublattice in the frame's basis, shape (..., sublattice, state, state)."""
    energy = p.energy[..., f.order]
    d = energy.shape[-1]
    coupled = (x @ fields_of(f, names).reshape(len(names), -1)).reshape(*energy.shape, d)
    return energy[..., :, None] * jnp.eye(d) - coupled


def free_energy(
    p: Sites,
    x: Array,
    lam: Array,
    *,
    f: Frame,
    names: tuple[str, ...],
    cold: bool,
    nodes: int,
    weight: Array | None = None,
) -> Array:
    """The same functional for jax to differentiate once, in the fields and in every parameter; shape (...).

    At a minimum, derivatives at fixed fields are the total ones (envelope theorem): entropy -dF/dT, filling -dF/dmu.
    weight: separate factors of anomalous and normal processes, default `hop` for both.
    """
    h = hamiltonian(p, x, f, names)
    T = jnp.broadcast_to(p.T[..., None], h.shape[:-2])
    trial = gibbs.free_energy(h, jnp.zeros_like(T) if cold else T)
    state = gibbs.state(h, jnp.zeros_like(T) if cold else T)
    mean = jnp.einsum("...ij,aij->...a", state, jnp.asarray(fields_of(f, names)))
    phi = jnp.einsum("...ij,aij->...a", state, jnp.asarray(f.lower))
    local = (trial + (x * mean).sum(-1)).mean(-1)
    condensed = (p.z_t[..., None, :] * phi * phi[..., ::-1, :]).sum(-1).mean(-1)
    weight = jnp.stack([p.hop, p.hop], axis=-3) if weight is None else weight
    return local - condensed + lam * bond.bond_energy(h, p.T, weight, f, cold, nodes)
