"""Second-order hopping term of a bond between two independent sites, by quadrature in imaginary time.

In:  trial Hamiltonians of one site (or of both sublattices), temperatures T ≥ 0, products of hoppings.
Out: F_bond = -1/2 ∫_0^β <V(τ) V(0)> dτ split by kind of process, its value and its derivative in the Hamiltonians.

    V = -sum_a t_a (δb†_a ⊗ δb_a + δb_a ⊗ δb†_a),   δb_a = b_a - <b_a>

With O running over (b_1, b_1†, b_2, b_2†) and C_AD(τ) = <O_A(τ) O_D†> the integrand is a sum of products of two
C, so no array larger than (state, state, time) appears. Time runs over Gauss-Legendre nodes on a scale that is
logarithmic from the inverse bandwidth to β/2; at T = 0 the integral over (0, ∞) is done in closed form,
1/(E_m + E_p - 2 E_0).
Derivatives are divided differences of exp(-τh), without poles at degenerate levels (Daleckii and Krein).
"""

from dataclasses import dataclass
from functools import lru_cache, partial
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from gutz.ansatz.gibbs import Levels
from gutz.errors import InputError
from gutz.fock import LocalSpace, Matrix, local_space

Array = Any

NODES = (
    (10.0, 11), (20.0, 13), (40.0, 15), (80.0, 17), (120.0, 18), (200.0, 19), (300.0, 20), (600.0, 23), (1e3, 25),
    (2e3, 28), (4e3, 31), (1e4, 35), (3e4, 40), (1e5, 45), (1e6, 56), (np.inf, 66),
)  # fmt: skip
"""Largest ratio of a site's bandwidth to T, and the number of nodes with which exp(-ωτ) is integrated to a relative
error below 1e-11 for every ω up to twice the bandwidth (up to 1e7 T; measured)."""

LINEAR_PART = 0.1
"""Inverse of the time, in units of 1/bandwidth, up to which nodes are spaced evenly; 0.1 needs fewest (measured)."""

COLD_DEGENERACY = 1e-7
WARM_DEGENERACY = 1e-6
_TINY = 1e-12

KINDS = ("full", "pair", "antipair", "normal")
SINGLE_FIELDS = {1: ("J1",), 2: ("J1", "J2")}


@dataclass(frozen=True, eq=False)
class Frame:
    """Basis of one site, ordered in blocks that the trial fields of one kind do not mix.

    kind: "full" (any field), "pair" (n1 - n2 conserved), "antipair" (n1 + n2 conserved), "normal" (diagonal).
    order: position in the Fock space of each basis state. blocks: sizes, in order. lower, number: as in `LocalSpace`,
    in this order. fields: what each trial field couples to, by name, (state, state);
    "charge" and "spin" are nu_1 + nu_2 and nu_1 - nu_2.
    combos: pairs (A, D) of rows of (b_1, b_1†, b_2, b_2†) whose correlation does not vanish, A ≤ D.
    partner: position in combos of (A†, D†). slot: (0 anomalous or 1 normal, species, species) of each combo.
    """

    kind: str
    space: LocalSpace
    order: np.ndarray
    blocks: tuple[int, ...]
    lower: Matrix
    number: Matrix
    fields: dict[str, Matrix]
    combos: np.ndarray
    partner: np.ndarray
    slot: np.ndarray

    def holds(self, name: str) -> bool:
        """The trial field connects states of one block only."""
        block = np.repeat(np.arange(len(self.blocks)), self.blocks)
        return not np.any(self.fields[name][block[:, None] != block])

    @property
    def diagonal(self) -> bool:
        """No field mixes any two basis states."""
        return max(self.blocks) == 1


@lru_cache(maxsize=64)
def frame(n_max: int, species: int, kind: str) -> Frame:
    """Return the basis for trial fields of one kind; cached."""
    space = local_space(n_max, species)
    n = space.number.astype(int)
    key = {
        "full": np.zeros(space.size, int),
        "pair": n[0] - n[-1] if species == 2 else n[0],
        "antipair": n.sum(0),
        "normal": np.arange(space.size),
    }[kind]
    order = np.argsort(key, kind="stable")
    blocks = tuple(int(c) for c in np.unique(key, return_counts=True)[1])
    pick = np.ix_(order, order)
    lower = np.stack([b[pick] for b in space.lower])
    number = space.number[:, order]
    fields = {name: space.field[a][pick] for a, name in enumerate(SINGLE_FIELDS[species])}
    if species == 2:
        fields["K"] = (space.pair + space.pair.T)[pick]
        fields["M"] = (space.antipair + space.antipair.T)[pick]
    for a in range(species):
        fields[f"nu{a + 1}"] = np.diag(number[a])
    fields["charge"], fields["spin"] = np.diag(number.sum(0)), np.diag(number[0] - number[-1])
    # b lowers and b† raises the block by `charge`; only operators of equal charge (and order) correlate.
    charge = [(1, -1, 1, -1), (1, -1, -1, 1)][kind == "pair"]
    combos = []
    for A in range(2 * species):
        for D in range(A, 2 * species):
            alike = {"full": True, "normal": A == D}.get(kind, charge[A] == charge[D])
            if alike:
                combos.append((A, D))
    dagger = [(min(A ^ 1, D ^ 1), max(A ^ 1, D ^ 1)) for A, D in combos]
    partner = np.array([combos.index(c) for c in dagger])
    slot = np.array([(int((A ^ D) % 2 == 0), A // 2, D // 2) for A, D in combos])
    return Frame(kind, space, order, blocks, lower, number, fields, np.array(combos), partner, slot)


def eigensystem(h: Array, f: Frame) -> tuple[Array, Array]:
    """Energies (in block order, not sorted) and eigenvectors of h given in the frame's basis."""
    if f.diagonal:
        energy = jnp.diagonal(h, axis1=-2, axis2=-1)
        return energy, jnp.broadcast_to(jnp.eye(h.shape[-1]), h.shape)
    if len(f.blocks) == 1:
        return tuple(jnp.linalg.eigh(h, symmetrize_input=False))
    ends = np.cumsum(f.blocks)
    starts = ends - np.array(f.blocks)
    energies: list[Array] = [jnp.zeros(0)] * len(f.blocks)
    strips: list[Array] = [jnp.zeros(0)] * len(f.blocks)
    wait = jnp.zeros(h.shape[:-2])
    for size in sorted(set(f.blocks)):
        which = [i for i, s in enumerate(f.blocks) if s == size]
        part = jnp.stack([h[..., starts[i] : ends[i], starts[i] : ends[i]] for i in which], axis=-3)
        if size == 1:
            energy, vectors = part[..., 0], jnp.ones_like(part)
        else:
            # One after the other: eigensolver calls that run at the same time can block each other for ever in
            # jax 0.10 on few cores (measured), so each waits for the one before through a number that is zero.
            part = part + wait[..., None, None, None]
            energy, vectors = jnp.linalg.eigh(part, symmetrize_input=False)
            wait = 0.0 * energy[..., 0, 0]
        for row, i in enumerate(which):
            pad = [(0, 0)] * (h.ndim - 1) + [(int(starts[i]), int(h.shape[-1] - ends[i]))]
            energies[i] = energy[..., row, :]
            strips[i] = jnp.pad(vectors[..., row, :, :], pad)
    return jnp.concatenate(energies, -1), jnp.concatenate(strips, -2)


def levels(h: Array, T: Array, f: Frame, *, cold: bool) -> Levels:
    """Levels and weights as `gibbs.levels`, unsorted; at T = 0 (cold) one lowest level carries all the weight."""
    energy, vectors = eigensystem(h, f)
    lowest = energy.min(-1, keepdims=True)
    if cold:
        weight = jax.nn.one_hot(jnp.argmin(energy, -1), energy.shape[-1], dtype=energy.dtype)
        nothing = jnp.zeros(energy.shape[:-1])
        return Levels(energy, vectors, weight, lowest[..., 0], nothing, nothing)
    beta = 1.0 / T
    excitation = energy - lowest
    boltzmann = jnp.exp(-excitation * beta[..., None])
    total = boltzmann.sum(-1)
    weight = boltzmann / total[..., None]
    entropy = beta * (weight * excitation).sum(-1) + jnp.log(total)
    return Levels(energy, vectors, weight, lowest[..., 0] - T * jnp.log(total), entropy, beta)


def to_levels(lv: Levels, operators: Array, f: Frame) -> Array:
    """Static operators (op, state, state) in the basis of levels, shape (..., op, state, state)."""
    ops = jnp.asarray(operators)
    if f.diagonal:
        return jnp.broadcast_to(ops, (*lv.energy.shape[:-1], *ops.shape))
    d = ops.shape[-1]
    right = ops.reshape(-1, d) @ lv.vectors
    right = right.reshape(*lv.vectors.shape[:-2], -1, d, d)
    return jnp.swapaxes(lv.vectors, -1, -2)[..., None, :, :] @ right


class Bond(NamedTuple):
    """The bond term. value, variance: (...); parts: (..., 2, species, species), anomalous and normal processes;
    slope: derivative of the value in h of each site, in its levels, (..., sublattice, state, state)."""

    value: Array
    variance: Array
    parts: Array
    slope: Array


def enough_nodes(ratio: float) -> int:
    """Number of quadrature nodes for sites whose bandwidth is at most `ratio` times T."""
    return next(count for limit, count in NODES if ratio <= limit)


def times(beta: Array, bandwidth: Array, nodes: int) -> tuple[Array, Array]:
    """Nodes and weights on (0, β/2), shape (..., node); the integrands decay no faster than exp(-2 bandwidth τ)."""
    x, w = np.polynomial.legendre.leggauss(nodes)
    u, w = 0.5 * (x + 1.0), 0.5 * w
    # τ = (β/2) sinh(c u)/sinh(c): linear at the smallest times, a constant number of nodes per decade beyond.
    c = jnp.arcsinh(1.0 + LINEAR_PART * beta * bandwidth)[..., None]
    tau = 0.5 * beta[..., None] * jnp.sinh(c * u) / jnp.sinh(c)
    return tau, 0.5 * beta[..., None] * c * jnp.cosh(c * u) / jnp.sinh(c) * w


class _Kernel(NamedTuple):
    """parts per combo; variance; sensitivities of the value to X and to the level energies, (..., s, c, m, n)."""

    per_combo: Array
    variance: Array
    to_product: Array
    to_late: Array
    to_early: Array
    to_partition: Array


def bond(lv: Levels, deviation: Array, weight: Array, f: Frame, *, cold: bool, nodes: int) -> Bond:
    """Evaluate the bond term and its derivative.

    lv: levels of each site, batch (..., sublattice). deviation: δb_a in levels, (..., sublattice, species, state,
    state). weight: factors t_a t_b summed over directions for anomalous and normal processes, (..., 2, species,
    species). Not to be differentiated by jax; see `bond_energy`.
    """
    d = deviation.shape[-1]
    ops = jnp.stack([deviation, jnp.swapaxes(deviation, -1, -2)], axis=-3)
    ops = ops.reshape(*deviation.shape[:-3], -1, d, d)
    first, second = f.combos[:, 0], f.combos[:, 1]
    X = ops[..., first, :, :] * ops[..., second, :, :]
    multiplicity = np.where(first == second, 1.0, 2.0)
    factor = multiplicity * weight[..., f.slot[:, 0], f.slot[:, 1], f.slot[:, 2]]
    kernel = _cold if cold else _warm
    k = kernel(lv, X, factor, multiplicity, f.partner, nodes)
    value = (k.per_combo * factor).sum(-1)

    spread = np.zeros((len(first), *weight.shape[-3:]))
    for row, (kind, a, b) in enumerate(f.slot):
        spread[row, kind, a, b] += 0.5 * multiplicity[row]
        spread[row, kind, b, a] += 0.5 * multiplicity[row]
    parts = jnp.einsum("...c,ckab->...kab", k.per_combo, jnp.asarray(spread))
    slope = _slope(lv, ops, k, f, cold=cold)
    return Bond(value, k.variance, parts, slope)


def _warm(lv: Levels, X: Array, factor: Array, multiplicity: np.ndarray, partner: np.ndarray, nodes: int) -> _Kernel:
    d = X.shape[-1]
    beta = lv.inverse_temperature[..., None, None]
    energy = lv.energy - lv.energy.min(-1, keepdims=True)
    width = energy.max((-1, -2))
    tau, w = times(lv.inverse_temperature[..., 0], width, nodes)
    tau_s = tau[..., None, None, :]
    late = jnp.exp(-energy[..., None] * tau_s)
    total = jnp.exp(-energy * beta[..., 0]).sum(-1)[..., None, None]
    early = jnp.exp(-energy[..., None] * (beta - tau_s)) / total
    W = (early[..., :, None, :] * late[..., None, :, :]).reshape(*energy.shape[:-1], d * d, -1)
    flat = X.reshape(*X.shape[:-2], d * d)
    C = flat @ W
    other = jnp.flip(C, axis=-3)[..., partner, :]
    per_combo = -(w[..., None, :] * C[..., 0, :, :] * other[..., 0, :, :]).sum(-1)
    equal_time = jnp.einsum("...cmn,...m->...c", X, lv.weight)
    variance = (factor * equal_time[..., 0, :] * jnp.flip(equal_time, -2)[..., 0, :][..., partner]).sum(-1)
    twice = 2.0 if X.shape[-4] == 1 else 1.0
    D = -twice * factor[..., None, :, None] * w[..., None, None, :] * other
    stacked = jnp.concatenate([D, tau_s * D, (beta - tau_s) * D], axis=-2)
    omega = jnp.einsum("...ct,...pt->...cp", stacked, W)
    omega = omega.reshape(*X.shape[:-3], 3, X.shape[-3], d, d)
    norm = (lv.inverse_temperature * (D * C).sum((-1, -2)))[..., None] * lv.weight
    return _Kernel(per_combo, variance, omega[..., 0, :, :, :], omega[..., 1, :, :, :], omega[..., 2, :, :, :], norm)


def _cold(lv: Levels, X: Array, factor: Array, multiplicity: np.ndarray, partner: np.ndarray, nodes: int) -> _Kernel:
    ground = lv.weight
    excited = 1.0 - ground
    x = jnp.einsum("...cmn,...m->...cn", X, ground) * excited[..., None, :]
    gap = lv.energy - lv.free_energy[..., None]
    total = gap[..., :, None] + jnp.flip(gap, -2)[..., None, :]
    possible = excited[..., :, None] * jnp.flip(excited, -2)[..., None, :]
    scale = jnp.maximum(gap.max(-1), 1e-300)[..., None, None]
    K = possible / jnp.maximum(total, _TINY * scale)
    other = jnp.flip(x, -3)[..., partner, :]
    reach = other @ jnp.swapaxes(K, -1, -2)
    per_combo = -(x * reach).sum(-1)[..., 0, :]
    equal_time = x.sum(-1)
    variance = (factor * equal_time[..., 0, :] * jnp.flip(equal_time, -2)[..., 0, :][..., partner]).sum(-1)
    twice = 2.0 if X.shape[-4] == 1 else 1.0
    amount = -twice * factor[..., None, :, None]
    row = ground[..., None, :, None]
    product = row * (amount * reach)[..., None, :]
    late = row * (amount * (other @ jnp.swapaxes(K * K, -1, -2)))[..., None, :]
    return _Kernel(per_combo, variance, product, late, -late, jnp.zeros_like(ground))


def _slope(lv: Levels, ops: Array, k: _Kernel, f: Frame, *, cold: bool) -> Array:
    """Symmetric matrix G with dF_bond = sum G dh, in levels; (..., sublattice, state, state)."""
    d = ops.shape[-1]
    combo = np.zeros((ops.shape[-3], ops.shape[-3]), int)
    share = np.zeros(combo.shape)
    for c, (i, j) in enumerate(f.combos):
        combo[i, j] = combo[j, i] = c
        share[i, j] = share[j, i] = 1.0 if i != j else 2.0

    def pull(sensitivity: Array) -> Array:
        """Derivative in each O, (..., op, state, state)."""
        present = share[:, :, None, None] * sensitivity[..., combo, :, :]
        return (present * ops[..., None, :, :, :]).sum(-3)

    def left(G: Array) -> Array:  # sum_A O_A^T G_A
        flat = ops.reshape(*ops.shape[:-3], -1, d)
        return jnp.swapaxes(flat, -1, -2) @ G.reshape(*G.shape[:-3], -1, d)

    def right(G: Array) -> Array:  # sum_A G_A O_A^T
        wide = jnp.swapaxes(G, -3, -2).reshape(*G.shape[:-3], d, -1)
        return wide @ jnp.swapaxes(jnp.swapaxes(ops, -3, -2).reshape(*ops.shape[:-3], d, -1), -1, -2)

    g = pull(k.to_product)
    turn = left(g) - right(g)
    gap = lv.energy[..., None, :] - lv.energy[..., :, None]
    if cold:
        close = jnp.abs(gap) <= COLD_DEGENERACY * jnp.abs(gap).max((-1, -2), keepdims=True)
        excited = 1.0 - lv.weight
        close = close & (excited[..., :, None] * excited[..., None, :] > 0) | jnp.eye(d, dtype=bool)
    else:
        close = jnp.abs(gap) * lv.inverse_temperature[..., None, None] <= WARM_DEGENERACY
    inside = -0.5 * (left(pull(k.to_late)) + right(pull(k.to_early)))
    inside = 0.5 * (inside + jnp.swapaxes(inside, -1, -2)) + k.to_partition[..., None, :] * jnp.eye(d)
    # Levels apart: the eigenvectors turn by dh_mn/(E_n - E_m). Levels together: exp(-τh) changes as exp(-τE) does.
    safe = jnp.where(close | (gap == 0), 1.0, gap)
    outside = 0.5 * (turn - jnp.swapaxes(turn, -1, -2)) / safe
    return jnp.where(close, inside, jnp.where(gap == 0, 0.0, outside))


@partial(jax.custom_jvp, nondiff_argnums=(3, 4, 5))
def bond_energy(h: Array, T: Array, weight: Array, f: Frame, cold: bool, nodes: int) -> Array:
    """The bond term as a function that jax can differentiate once, in h, T and weight.

    h: (..., sublattice, state, state) in the frame's basis, real symmetric. T: (...), > 0 unless `cold`, when it is
    ignored. weight: (..., 2, species, species). Returns (...). A second derivative raises InputError.
    """
    return _energy_and_slopes(h, T, weight, f, cold, nodes)[0]


@partial(jax.custom_jvp, nondiff_argnums=(3, 4, 5))
def _energy_and_slopes(
    h: Array, T: Array, weight: Array, f: Frame, cold: bool, nodes: int
) -> tuple[Array, Array, Array, Array]:
    lv = levels(h, jnp.broadcast_to(T[..., None], h.shape[:-2]), f, cold=cold)
    b = deviations(lv, to_levels(lv, f.lower, f))[0]
    out = bond(lv, b, weight, f, cold=cold, nodes=nodes)
    shifted = lv.energy - lv.energy.min(-1, keepdims=True)
    # F_bond is homogeneous of degree -1 in (h, T), which gives the derivative in T from the one in h.
    along_h = (jnp.diagonal(out.slope, axis1=-2, axis2=-1) * shifted).sum((-1, -2))
    in_T = jnp.zeros_like(along_h) if cold else -(out.value + along_h) / T
    slope = lv.vectors @ out.slope @ jnp.swapaxes(lv.vectors, -1, -2)
    return out.value, slope, in_T, out.parts


@bond_energy.defjvp
def _bond_energy_jvp(f: Frame, cold: bool, nodes: int, primals: Any, tangents: Any) -> Any:
    value, slope, in_T, parts = _energy_and_slopes(*primals, f, cold, nodes)
    dh, dT, dw = tangents
    return value, (slope * dh).sum((-1, -2, -3)) + in_T * dT + (parts * dw).sum((-1, -2, -3))


@_energy_and_slopes.defjvp
def _refuse(f: Frame, cold: bool, nodes: int, primals: Any, tangents: Any) -> Any:
    raise InputError(
        "a second derivative of the dressed free energy was asked for; jax gives first derivatives only, second ones "
        "come from gutz.ansatz.derived.observables"
    )


def deviations(lv: Levels, lower: Array) -> tuple[Array, Array]:
    """δb_a = b_a - <b_a> in levels, and <b_a>, from b_a in levels."""
    phi = jnp.einsum("...aii,...i->...a", lower, lv.weight)
    return lower - phi[..., None, None] * jnp.eye(lower.shape[-1]), phi
