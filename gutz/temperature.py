"""Critical temperature and entropy of pairs and anti-pairs (from the exchange between sites), and of single atoms.

In:  a `Mixture` (batched; its own T and entropy are not used) and the order, "pair", "antipair" or "single".
Out: `CriticalTemperature`: T_c and entropy per particle there, cruder estimates beside them, and what
orders first.

The curvature of the exchange functional (`gutz.pseudospin`) at zero order, 1 - a/T + b/T², is the start of
the series of the inverse susceptibility. That vanishes as a power gamma > 1 of the distance to T_c, while a
polynomial can only cross zero or graze it. So in three dimensions the series is matched to (1 + B/T)(1 -
T_c/T)^-gamma with the published gamma of the universality class (the biased extrapolation of series
analysis); the plain root stays beside it. In two dimensions the jump rule of Nelson and Kosterlitz (PRL 39,
1201 (1977)) holds with the stiffness of spin waves, screened by vortex pairs; staggered order there is an
Ising transition. In one dimension there is none.
"""

from dataclasses import dataclass
from enum import IntEnum
from functools import partial
from typing import Any, Literal, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from gutz import pseudospin
from gutz.errors import InputError
from gutz.exchange import STATES, ExchangeCouplings, Order, bond_operator, exchange_couplings
from gutz.melting import melt
from gutz.model import Mixture
from gutz.phases import Phase
from gutz.status import Status

Array = Any

GAMMA = {"xy": 1.3178, "heisenberg": 1.396, "ising": 1.2371, "ising_plane": 1.75}
"""Susceptibility exponents of the universality classes (Pelissetto and Vicari, Phys. Rep. 368, 549
(2002))."""

HOPPING_LIMIT = 0.2
"""z t / gap above which single atoms may order before pairs or anti-pairs do; measured with the dressed
ansatz."""

SECOND_ORDER_LIMIT = 0.45
"""b/a² of the expansion above which it is called large: isotropic lattices near half filling have 0.2 to
0.35."""

LEAST_ENTROPY = 0.25
"""Critical entropy over that of free sites below which its series is called too short (dilute pairs)."""

FEWEST_DIRECTIONS = 2.2
"""(sum J)²/sum J² in three dimensions below which a point is called quasi two- or one-dimensional
(isotropic: 3)."""

_BATCH = 256
"""Points solved at once; bounds the memory of large batches."""

_PHASES: dict[str, tuple[Phase, Phase, Phase]] = {
    "antipair": (Phase.COUNTERFLOW, Phase.NEEL, Phase.SEPARATED),
    "pair": (Phase.PAIRED, Phase.DENSITY_WAVE, Phase.SEPARATED),
}
"""Names of transverse order, staggered and uniform imbalance of the pseudo-spins."""


class Reason(IntEnum):
    """Why T_c is 0; the integer values never change meaning."""

    ORDERED = 0
    ONE_DIMENSION = 1
    SYMMETRY = 2
    FILLING = 3
    UNBOUND = 4
    POLARISED = 5
    COLLAPSE = 6
    NO_ORDER = 7


REASONS: dict[Reason, str] = {
    Reason.ONE_DIMENSION: "one dimension has no order at T > 0; the coherence length is coherence_scale / T",
    Reason.SYMMETRY: "in two dimensions an order with full rotation symmetry has no T_c > 0",
    Reason.FILLING: "the filling (or mu) is not that of sites with one atom (antipair) or with equal fillings "
    "below 1 (pair), on which the exchange acts",
    Reason.UNBOUND: "U12 does not bind: the states that exchange are not the lowest ones",
    Reason.POLARISED: "all sites hold the same state, or nothing hops: there is no exchange to order them",
    Reason.COLLAPSE: "the mixture collapses",
    Reason.NO_ORDER: "single atoms do not order at any temperature looked at",
}


@jax.tree_util.register_dataclass
@dataclass(frozen=True)
class CriticalTemperature:
    """Onset of order, arrays of the batch's shape. Temperatures in the mixture's energy unit, entropies in
    k_B.

    T_c, entropy_per_particle: best estimate (errors of published cases: see `critical_temperature`).
    T_c_plain, entropy_plain: the same level without extrapolation (3D) or vortices (2D).
    T_c_bare, entropy_bare: mean field of the exchange.
    coherence_scale: coherence length times temperature in one dimension, sites times energy; 0 elsewhere.
    phase: which order comes first on cooling, `gutz.phases.Phase`. dimension: directions with exchange.
    reason: why T_c is 0 (`Reason`). status: `gutz.status.Status`. gap, validity: of `exchange_couplings`.
    """

    T_c: Array
    entropy_per_particle: Array
    T_c_plain: Array
    entropy_plain: Array
    T_c_bare: Array
    entropy_bare: Array
    coherence_scale: Array
    phase: Array
    dimension: Array
    reason: Array
    status: Array
    gap: Array
    validity: Array

    @property
    def notes(self) -> tuple[str, ...]:
        """Every reason that occurs in the batch, in words."""
        return tuple(REASONS[Reason(r)] for r in np.unique(np.asarray(self.reason)) if r)


def critical_temperature(mixture: Mixture, order: Order | Literal["single"] = "antipair") -> CriticalTemperature:
    """T_c and entropy per particle of paired, counterflow ("antipair") or ordinary ("single") superfluid order.

    For pairs and anti-pairs: where J_z dominates, the density wave of pairs, the z-Néel state or phase separation is
    the first order, and its temperature is given; `phase` says which. Anti-pairs need one atom per site, pairs equal
    fillings below 1; with mu given instead, the imbalance is that of leading order. Raises InputError for one species
    or an unknown order.

    Errors against published values, one atom per site, 3D: T_c 2 % for Delta from 0 to 1 and 5 % at -1, entropy 18 % or
    better; 2D, Delta = 0: T_c 2 %, entropy 5 %. Rougher: hopping that differs much between directions, dilute pairs
    (both flagged), and staggered order in 2D (T_c 6 % low and entropy half the exact one in the Ising limit).

    "single": the highest T with single-particle order in the dressed state, `T_c_bare` in the product state; gap is 0
    and validity the dressing there. One atom per site in 3D, against Monte Carlo: T_c 17 to 21 % high at U/t = 5 to 20
    (bare: 50 to 60 %). Not differentiable, and not for use inside jax.jit.
    """
    if order == "single":
        return _single(mixture)
    c = exchange_couplings(mixture, order)
    imbalance, inside = _imbalance(mixture, c, order)
    lead = len(mixture.shape)
    flat = (bond_operator(mixture, STATES[order]), c.perp, c.zz, imbalance)
    points = _batched(_dimensions(c), *(x.reshape((-1, *x.shape[lead:])) for x in flat))
    return _named(mixture, c, points, imbalance, inside, order)


def _single(mixture: Mixture) -> CriticalTemperature:
    """Melting of the ordinary superfluid, dressed, and bare (product)."""
    if any(isinstance(v, jax.core.Tracer) for v in jax.tree.leaves(mixture)):
        raise InputError(
            'order is "single", which needs numbers; call critical_temperature outside jax.jit and jax.grad'
        )
    flat = mixture.flat().map(np.asarray)
    dimension = (np.asarray(flat.t) > 0).any(-2).sum(-1)
    best, bare = melt(flat, "dressed"), melt(flat, "product")
    plain = melt(flat, "dressed", rule=False) if (dimension == 2).any() else best
    limited = np.asarray(flat.U12) < -np.sqrt(np.asarray(flat.U).prod(-1)) if flat.species == 2 else np.zeros(1, bool)
    collapsed = limited & (flat.n_max != 1)
    reason = np.where(best.T > 0, Reason.ORDERED, np.where(dimension <= 1, Reason.ONE_DIMENSION, Reason.NO_ORDER))
    reason = np.where(collapsed, Reason.COLLAPSE, reason)
    shape = mixture.shape

    def shaped(values: Array, dtype: str = "float64") -> Array:
        return np.asarray(values, dtype).reshape(shape)

    zero = np.zeros(best.T.shape)
    return CriticalTemperature(
        T_c=shaped(best.T),
        entropy_per_particle=shaped(best.entropy_per_particle),
        T_c_plain=shaped(plain.T),
        entropy_plain=shaped(plain.entropy_per_particle),
        T_c_bare=shaped(bare.T),
        entropy_bare=shaped(bare.entropy_per_particle),
        coherence_scale=shaped(zero),
        phase=shaped(best.phase, "int8"),
        dimension=shaped(dimension, "int8"),
        reason=shaped(reason, "int8"),
        status=shaped(best.status | np.where(collapsed, int(Status.COLLAPSE), 0), "int32"),
        gap=shaped(zero),
        validity=shaped(best.dressing),
    )


@partial(jax.jit, static_argnames="order")
def _named(
    mixture: Mixture, c: ExchangeCouplings, points: "_Point", imbalance: Array, inside: Array, order: Order
) -> CriticalTemperature:
    """Put reasons, statuses and names to the numbers; entropies per particle instead of per site."""
    r = {name: value.reshape(mixture.shape) for name, value in points._asdict().items()}
    soft = mixture.n_max != 1
    collapsed = soft & (mixture.U12 < -jnp.sqrt(mixture.U[..., 0] * mixture.U[..., 1]))
    reason = jnp.where(inside, r["reason"], int(Reason.FILLING))
    reason = jnp.where(c.gap > 0, reason, int(Reason.UNBOUND))
    reason = jnp.where(collapsed, int(Reason.COLLAPSE), reason)
    foreign = jnp.isin(reason, jnp.array([Reason.FILLING, Reason.UNBOUND, Reason.COLLAPSE]))
    atoms = 1.0 if order == "antipair" else jnp.maximum(1.0 + 2.0 * imbalance, 1e-12)
    kept = {n: jnp.where(reason == 0, r[n], 0.0) for n in ("T_c", "T_c_plain", "T_c_bare")}
    entropies = {n: jnp.where(reason == 0, r[n] / atoms, 0.0) for n in ("entropy", "entropy_plain", "entropy_bare")}
    table = jnp.array(_PHASES[order])
    phase = jnp.where(foreign, int(Phase.UNDECIDED), jnp.where(reason == 0, table[r["kind"]], int(Phase.NORMAL)))
    return CriticalTemperature(
        entropy_per_particle=entropies.pop("entropy"),
        coherence_scale=jnp.where(foreign, 0.0, r["coherence_scale"]),
        phase=phase.astype(jnp.int8),
        dimension=r["dimension"].astype(jnp.int8),
        reason=reason.astype(jnp.int8),
        status=_status(mixture, c, kept["T_c"], reason, collapsed, r["large"]),
        gap=c.gap,
        validity=c.validity,
        **kept,
        **entropies,
    )


@partial(jax.jit, static_argnames="order")
def _imbalance(mixture: Mixture, c: ExchangeCouplings, order: Order) -> tuple[Array, Array]:
    """Average Sz of a site, and whether the sites are filled as the exchange needs; shapes (...)."""
    if mixture.filling is not None:
        n = jnp.asarray(mixture.filling)
        if order == "antipair":
            return 0.5 * (n[..., 0] - n[..., 1]), jnp.abs(n.sum(-1) - 1.0) < 1e-6
        inside = (jnp.abs(n[..., 0] - n[..., 1]) < 1e-6) & (n[..., 0] < 1.0)
        return n.mean(-1) - 0.5, inside
    assert mixture.mu is not None
    mu, U12 = jnp.asarray(mixture.mu), jnp.asarray(mixture.U12)
    pair = U12 - mu.sum(-1)
    double = jnp.asarray(mixture.U) - 2.0 * mu
    hard = mixture.n_max == 1
    if order == "antipair":
        field = mu[..., 0] - mu[..., 1]
        ground = -mu.max(-1)
        others = [jnp.zeros_like(pair), pair] + ([] if hard else [double[..., 0], double[..., 1]])
    else:
        field = -pair
        ground = jnp.minimum(0.0, pair)
        others = [-mu[..., 0], -mu[..., 1]] + ([] if hard else [double.sum(-1) + 4.0 * U12])
    inside = (jnp.stack(others) > ground).all(0)
    # Leading order, the same at T_c and in the ground state: field = 2 m sum(J + J_z).
    perp, zz = c.perp.sum(-1), c.zz.sum(-1)
    scale = 2.0 * (jnp.maximum(perp, zz) + zz)
    field = field - 2.0 * c.field.sum(-1)
    balanced = jnp.where(scale > 0, field / jnp.where(scale > 0, scale, 1.0), 0.5 * jnp.sign(field))
    return jnp.clip(balanced, -0.5, 0.5), inside


class _Point(NamedTuple):
    """One point before units and names; `kind` indexes `_PHASES`."""

    T_c: Array
    entropy: Array
    T_c_plain: Array
    entropy_plain: Array
    T_c_bare: Array
    entropy_bare: Array
    coherence_scale: Array
    kind: Array
    dimension: Array
    reason: Array
    large: Array


def _dimensions(c: ExchangeCouplings) -> tuple[bool, bool]:
    """Whether some point exchanges in three directions, and in two: what has to be compiled and computed."""
    strength = jnp.maximum(jnp.abs(c.perp), jnp.abs(c.zz))
    directions = strength.shape[-1]
    if isinstance(strength, jax.core.Tracer):
        return directions == 3, directions >= 2
    count = np.asarray(_count(strength))
    return bool((count == 3).any()), bool((count == 2).any())


def _count(strength: Array) -> Array:
    """Number of directions with exchange, shape (...)."""
    return (strength > 1e-12 * strength.max(-1, keepdims=True)).sum(-1)


def _batched(which: tuple[bool, bool], *points: Array) -> _Point:
    """All points of a flat batch; large batches in equal slices, so that one compiled slice serves them."""
    size = points[0].shape[0]
    slices = -(-size // _BATCH)
    if slices <= 1:
        return _solve(which, *points)
    padding = slices * _BATCH - size
    padded = [jnp.concatenate([x, jnp.repeat(x[-1:], padding, axis=0)]) for x in points]
    parts = [_solve(which, *(x[i * _BATCH : (i + 1) * _BATCH] for x in padded)) for i in range(slices)]
    return jax.tree_util.tree_map(lambda *x: jnp.concatenate(x)[:size], *parts)


@partial(jax.jit, static_argnums=0)
def _solve(which: tuple[bool, bool], *points: Array) -> _Point:
    return jax.vmap(partial(_point, which))(*points)


def _point(which: tuple[bool, bool], bond: Array, perp: Array, zz: Array, imbalance: Array) -> _Point:
    strength = jnp.maximum(jnp.abs(perp), jnp.abs(zz))
    largest = strength.max()
    unit = jnp.where(largest > 0, largest, 1.0)
    dimension = _count(strength)
    alive = (largest > 0) & (jnp.abs(imbalance) < 0.5 - 1e-9)
    m = jnp.where(alive, imbalance, 0.0)
    by_size = jnp.argsort(-strength)
    perp_, zz_ = perp[by_size] / unit, zz[by_size] / unit
    # Where nothing orders, an innocent bond stands in, so that no derivative is undefined.
    spare = jnp.asarray(_XY_BOND)
    safe = jnp.where(alive & (dimension > 0), bond / unit, spare)
    o = pseudospin.onset(safe, m)
    absent = (*[jnp.asarray(0.0)] * 6, jnp.asarray(0), jnp.asarray(False))
    space = _space(o, perp_, zz_, m) if which[0] else absent
    plane = _plane(o, perp_[:2], zz_[:2], m) if which[1] else absent
    pick = [jnp.where(dimension >= 3, x, y) for x, y in zip(space, plane, strict=True)]
    T, S, T_plain, S_plain, T_bare, S_bare, kind, large = pick
    symmetric = (dimension == 2) & (T <= 0)
    reason = jnp.where(symmetric, int(Reason.SYMMETRY), int(Reason.ORDERED))
    reason = jnp.where(dimension == 1, int(Reason.ONE_DIMENSION), reason)
    reason = jnp.where(alive, reason, int(Reason.POLARISED))
    chain = jnp.where(alive & (dimension == 1), pseudospin.chain_scale(perp_[0], zz_[0], m), 0.0)
    return _Point(
        T_c=T * unit,
        entropy=S,
        T_c_plain=T_plain * unit,
        entropy_plain=S_plain,
        T_c_bare=T_bare * unit,
        entropy_bare=S_bare,
        coherence_scale=chain * unit,
        kind=kind.astype(jnp.int32),
        dimension=jnp.where(largest > 0, dimension, 0),
        reason=reason,
        large=large & (reason == 0) & (dimension >= 3),
    )


_SPIN_FLIP = np.zeros((4, 4))
_SPIN_FLIP[1, 2] = _SPIN_FLIP[2, 1] = 0.5
_XY_BOND = -_SPIN_FLIP


def _space(o: pseudospin.Onset, perp: Array, zz: Array, m: Array) -> tuple[Array, ...]:
    """Three dimensions: the highest of the three instabilities."""
    gamma = _gamma(perp, zz, m)
    T = pseudospin.extrapolated(o.slope, o.curvature, gamma)
    kind = jnp.argmax(T)
    plain = pseudospin.plain_root(o.slope, o.curvature)[kind]
    bare = o.slope[kind]
    best = T[kind]
    strength = jnp.maximum(jnp.abs(perp), jnp.abs(zz))
    flat = strength.sum() ** 2 < FEWEST_DIRECTIONS * (strength**2).sum()
    entropy = _entropy(o, best, o.third)
    large = flat | (o.curvature[kind] > SECOND_ORDER_LIMIT * bare**2) | (entropy < LEAST_ENTROPY * o.entropy)
    return (
        best,
        entropy,
        plain,
        _entropy(o, plain, 0.0),
        bare,
        o.entropy,
        kind,
        large,
    )


def _gamma(perp: Array, zz: Array, m: Array) -> Array:
    """Exponent of each instability, shape (3,): crosses over smoothly to Heisenberg's towards |Delta| = 1."""
    xy, ising = jnp.abs(perp).sum(), jnp.abs(zz).sum()
    ratio = jnp.minimum(xy, ising) / jnp.maximum(jnp.maximum(xy, ising), 1e-300)
    # With an imbalance the rotation symmetry is gone, whatever Delta.
    mix = ratio**2 * (1.0 - 4.0 * m**2)
    near, far = GAMMA["heisenberg"], jnp.array([GAMMA["xy"], GAMMA["ising"], GAMMA["ising"]])
    return far + (near - far) * mix


def _entropy(o: pseudospin.Onset, T: Array, third: Array | float) -> Array:
    safe = jnp.where(T > 0, T, 1.0)
    S = o.entropy - 0.5 * o.second / safe**2 + third / (3.0 * safe**3)
    return jnp.where(T > 0, jnp.maximum(S, 0.0), 0.0)


def _plane(o: pseudospin.Onset, perp: Array, zz: Array, m: Array) -> tuple[Array, ...]:
    """Two dimensions: jump rule for transverse order, Ising transition for staggered or uniform imbalance."""
    stable = pseudospin.transverse_stable(perp, zz, m)
    both = stable & (perp.min() > 0)
    J = jnp.where(both, perp, 1.0)
    Jz = jnp.where(both, zz, 0.0)
    jump = pseudospin.jump_temperature(J, Jz, m, pseudospin.VORTEX_SCREENING)
    plain = pseudospin.jump_temperature(J, Jz, m, 1.0)
    bare, bare_entropy = pseudospin.bare_jump(J, m)
    xy = (
        jump,
        pseudospin.waves(J, Jz, m, jump).entropy,
        plain,
        pseudospin.waves(J, Jz, m, plain).entropy,
        bare,
        bare_entropy,
        jnp.asarray(0),
        jnp.asarray(False),
    )
    ising = _plane_ising(o, perp, zz)
    return tuple(jnp.where(both, x, y) for x, y in zip(xy, ising, strict=True))


def _plane_ising(o: pseudospin.Onset, perp: Array, zz: Array) -> tuple[Array, ...]:
    """Ising transition in a plane; fades logarithmically towards |Delta| = 1, where the symmetry forbids it.

    1/T = 1/T_Ising + log(1/(1 - 1/Delta²))/(4 pi rho), rho = J_perp/4: the scale where the anisotropy cuts
    the two-dimensional rotator's flow (Nelson and Pelcovits, PRB 16, 2191 (1977)) sets the second term; an
    interpolation.
    """
    T = pseudospin.extrapolated(o.slope, o.curvature, jnp.asarray(GAMMA["ising_plane"]))[1:]
    kind = jnp.argmax(T)
    best = T[kind]
    ratio = jnp.minimum(jnp.abs(perp).sum() / jnp.maximum(jnp.abs(zz).sum(), 1e-300), 1.0)
    open_ = (ratio < 1.0 - 1e-9) & (best > 0)
    cut = -jnp.log1p(-(jnp.where(open_, ratio, 0.0) ** 2))
    stiffness = jnp.pi * jnp.where(open_, jnp.abs(perp).mean(), 0.0)
    inverse = 1.0 / jnp.where(open_, best, 1.0)
    inverse = inverse + jnp.where(stiffness > 0, cut / jnp.where(stiffness > 0, stiffness, 1.0), 0.0)
    T_c = jnp.where(open_, 1.0 / inverse, 0.0)
    plain = pseudospin.plain_root(o.slope, o.curvature)[1:][kind]
    return (
        T_c,
        jnp.where(open_, pseudospin.gapped_entropy(perp, zz, jnp.where(open_, T_c, 1.0)), 0.0),
        plain,
        _entropy(o, plain, 0.0),
        o.slope[1:][kind],
        o.entropy,
        kind + 1,
        jnp.asarray(False),
    )


def _status(mixture: Mixture, c: ExchangeCouplings, T: Array, reason: Array, collapsed: Array, large: Array) -> Array:
    hopping = 2.0 * jnp.asarray(mixture.t).sum(-1).max(-1)
    ordered = reason == int(Reason.ORDERED)
    strong = ordered & (large | (hopping > HOPPING_LIMIT * c.gap))
    soft = mixture.n_max != 1
    demixed = soft & (mixture.U12 > jnp.sqrt(mixture.U[..., 0] * mixture.U[..., 1]))
    bits = (
        jnp.where(strong, int(Status.DRESSING_LARGE), 0)
        | jnp.where(demixed, int(Status.DEMIXING), 0)
        | jnp.where(collapsed, int(Status.COLLAPSE), 0)
        | jnp.where(jnp.isfinite(T), 0, int(Status.NOT_FINITE))
    )
    return bits.astype(jnp.int32)
