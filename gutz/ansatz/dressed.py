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


def look(p: Sites, x: Array, lam: Array, *, f: Frame, names: tuple[str, ...], cold: bool, nodes: int) -> Look:
    """Evaluate functional and gradient; values only (see `free_energy` for jax derivatives).

    x: (..., sublattice, field) for the fields in `names`, which the frame must allow. lam: (...), strength of the bond
    term. cold: every T is 0, the ground state; otherwise every T must be > 0.
    """
    h = hamiltonian(p, x, f, names)
    lv = bond.levels(h, jnp.broadcast_to(p.T[..., None], h.shape[:-2]), f, cold=cold)
    deviation, phi = bond.deviations(lv, bond.to_levels(lv, f.lower, f))
    Q = _fields_in_levels(lv, deviation, phi, f, names)
    mean = jnp.einsum("...aii,...i->...a", Q, lv.weight)
    flat = Q.reshape(*Q.shape[:-2], -1)
    kernel = gibbs.response_kernel(lv)
    response = (kernel[..., None, :, :] * Q).reshape(flat.shape) @ jnp.swapaxes(flat, -1, -2)
    response = response - lv.inverse_temperature[..., None, None] * mean[..., :, None] * mean[..., None, :]

    sublattices = x.shape[-2]
    weight = lam[..., None, None, None] * jnp.stack([p.hop, p.hop], axis=-3)
    second = bond.bond(lv, deviation, weight, f, cold=cold, nodes=nodes)
    neighbour = p.z_t[..., None, :] * phi[..., ::-1, :]
    singles = [i for i, name in enumerate(names) if name.startswith("J")]
    molecular = jnp.zeros_like(x)
    for i in singles:
        molecular = molecular.at[..., i].set(neighbour[..., int(names[i][1]) - 1])
    first = (lv.free_energy + (x * mean).sum(-1) - 0.5 * (2.0 * neighbour * phi).sum(-1)).mean(-1)
    gradient = (response @ (x - molecular)[..., None])[..., 0] / sublattices
    gradient = gradient - (flat @ second.slope.reshape(*second.slope.shape[:-2], -1)[..., None])[..., 0]
    safe = jnp.where(lam > 0, lam, 1.0)
    return Look(
        first + second.value,
        gradient,
        response,
        mean,
        phi,
        second.value / safe,
        second.variance / safe,
        second.parts,
        *_in_parameters(lv, Q, x - molecular, second, p, f, cold=cold),
    )


def _in_parameters(
    lv: gibbs.Levels, Q: Array, mismatch: Array, second: bond.Bond, p: Sites, f: Frame, *, cold: bool
) -> tuple[Array, Array]:
    """Derivatives of F in the energies of the basis states, and in T, at fixed fields."""
    sublattices = mismatch.shape[-2]
    # d<Q>/dh = -K∘Q + <Q> P/T, summed with the mismatch of each field; the state itself is dF_tr/dh.
    R = (mismatch[..., None, None] * Q).sum(-3)
    occupied = lv.weight[..., :, None] * jnp.eye(R.shape[-1])
    average = lv.inverse_temperature * jnp.einsum("...ii,...i->...", R, lv.weight)
    shifted = (average[..., None, None] * occupied - gibbs.response_kernel(lv) * R) / sublattices + second.slope
    in_h = occupied / sublattices + shifted
    in_energy = ((lv.vectors @ in_h) * lv.vectors).sum(-1)[..., np.argsort(f.order)]
    if cold:
        return in_energy, jnp.zeros_like(second.value)
    # Averages depend on h/T only, and the bond term is homogeneous of degree -1 in (h, T).
    excitation = lv.energy - lv.energy.min(-1, keepdims=True)
    along_h = (jnp.diagonal(shifted, axis1=-2, axis2=-1) * excitation).sum((-1, -2))
    return in_energy, -lv.entropy.mean(-1) - (along_h + second.value) / p.T


def _fields_in_levels(lv: gibbs.Levels, deviation: Array, phi: Array, f: Frame, names: tuple[str, ...]) -> Array:
    """The Q_i in the basis of levels; those of J follow from b_a, which is there already."""
    out: list[Array] = []
    others = [name for name in names if not name.startswith("J")]
    rest = bond.to_levels(lv, fields_of(f, tuple(others)), f) if others else None
    for name in names:
        if name.startswith("J"):
            a = int(name[1]) - 1
            b = deviation[..., a, :, :] + phi[..., a, None, None] * jnp.eye(deviation.shape[-1])
            out.append(b + jnp.swapaxes(b, -1, -2))
        else:
            assert rest is not None
            out.append(rest[..., others.index(name), :, :])
    return jnp.stack(out, axis=-3)


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
