"""How the dressed functional is minimised: by families of trial fields, each followed from where it is sure.

In:  `dressed.Sites` of many points.
Out: the best trustworthy state of each point, its fields and remarks on it (`DressedMinimum`).

The functional is a truncated expansion: fields of different kinds switched on together can close a gap and let it run
to minus infinity. So each kind is minimised alone (single-particle, pair, anti-pair, none), the single-particle
family as a continuation in the strength λ of the bond term from the product minimum, and a state is accepted only

- if its bond term is small against the root mean square of the hopping on a bond (`DRESSING_LIMIT`),
- if the curvature in the single-particle fields is positive (for families without them),
- for the normal state: if it was already stable at λ = 0, or the single-particle order shrank to zero on the way to
  λ = 1. At low T it becomes stable a second time, spuriously, with a low free energy: that is never accepted.

Where no family is left, the product minimum is returned with `Status.FALLBACK`.
"""

from enum import IntEnum
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from gutz.ansatz import bond, dressed
from gutz.ansatz.dressed import Look, Sites
from gutz.compiled import compiled

Array = Any


class Family(IntEnum):
    """Kinds of trial fields."""

    NORMAL = 0
    SINGLE = 1
    PAIR = 2
    ANTIPAIR = 3


DRESSING_LIMIT = 0.5
"""|F_bond| / sqrt<V²> above which the second-order step is not taken (fallback to the product state)."""

DRESSING_LARGE = 0.25
"""The same ratio above which a point is marked as qualitative."""

ORDER_FLOOR = 1e-6
"""Averages below this, reached by the minimiser, are zero."""

SINGLE_FLOOR = 1e-3
"""Order parameter below which the single-particle family counts as having shrunk to zero; at T = 0 it approaches
pair and anti-pair states this way, since a vanishing field already picks the state among degenerate ones."""

MAX_STEPS = 48
CHUNK = 1024
LANES = 128
STAGES = {Family.SINGLE: (0.25, 0.5, 0.75, 1.0)}
KIND = {
    Family.NORMAL: "normal",
    Family.SINGLE: "full",
    Family.PAIR: "pair",
    Family.ANTIPAIR: "antipair",
}


class Plan(NamedTuple):
    """What is compiled for: everything but numbers."""

    kind: str
    names: tuple[str, ...]
    stages: tuple[float, ...]
    n_max: int
    species: int
    cold: bool
    nodes: int


class Reached(NamedTuple):
    """Per job. x: (job, sublattice, field); free_energy: (job,); converged: bool; steps: int."""

    x: Array
    free_energy: Array
    converged: Array
    steps: Array


class _Lanes(NamedTuple):
    job: Array
    stage: Array
    x: Array  # where the functional is evaluated next
    base_x: Array  # the lowest point of this stage
    base_F: Array
    base_g: Array
    hessian: Array
    radius: Array  # longest step, relative to the size of the fields
    steps: Array


def variants(family: Family, species: int, sublattices: int) -> tuple[tuple[str, ...], ...]:
    """Sets of trial fields to try for a family; names as in `bond.Frame.fields`.

    On two sublattices density fields come as total or difference, one of them at a time: a staggered field on a number
    that does not fluctuate costs nothing at low T, closes a gap, and would run away.
    """
    singles, densities = ("J1", "J2")[:species], ("nu1", "nu2")[:species]
    if family is Family.SINGLE:
        return (singles,)
    order = {Family.NORMAL: (), Family.PAIR: ("K",), Family.ANTIPAIR: ("M",)}[family]
    if sublattices == 1:
        return ((*order, *densities),)
    fits = {Family.PAIR: ("charge",), Family.ANTIPAIR: ("spin",)}
    return tuple((*order, name) for name in fits.get(family, ("charge", "spin")[:species]))


def spread(name: str, species: int) -> np.ndarray:
    """A trial field as a vector in the fields of `dressed.NAMES`."""
    out = np.zeros(len(dressed.NAMES[species]))
    if name in ("charge", "spin"):
        out[-species:] = (1.0, -1.0 if name == "spin" else 1.0)[:species]
    else:
        out[dressed.NAMES[species].index(name)] = 1.0
    return out


def makes_order(name: str) -> bool:
    """The field breaks a symmetry, so that its sign is a choice of phase and zero stays zero."""
    return name[0] in "JKM"


@compiled(static=("plan", "lanes"))
def descend(p: Sites, point: Array, start: Array, scale: Array, count: Array, *, plan: Plan, lanes: int) -> Reached:
    """Minimise from every start in a queue of jobs, stage by stage in λ; lanes that are done take the next job.

    point: index into p of each job, (job,). start: (job, sublattice, field); a single-particle, pair or anti-pair
    field that starts at exactly 0 stays 0. scale: natural size of each field of each job, same shape. count: jobs in
    use. Quasi-Newton steps (damped BFGS from the mean-field curvature), limited in length, never uphill.
    """
    f = bond.frame(plan.n_max, plan.species, plan.kind)
    jobs, sublattices, k = start.shape
    n = sublattices * k
    stages = jnp.asarray(plan.stages)
    may_start = np.tile([makes_order(name) for name in plan.names], sublattices)

    def load(job: Array) -> tuple[Sites, Array, Array]:
        safe = jnp.minimum(job, jobs - 1)
        i = point[safe]
        return Sites(*(v[i] for v in p)), start[safe].reshape(-1, n), scale[safe].reshape(-1, n)

    def fresh(job: Array, x: Array) -> _Lanes:
        size = job.shape[0]
        return _Lanes(
            job,
            jnp.zeros(size, jnp.int32),
            x,
            x,
            jnp.full(size, jnp.inf),
            jnp.zeros_like(x),
            jnp.broadcast_to(jnp.eye(n), (size, n, n)),
            jnp.full(size, 0.5),
            jnp.zeros(size, jnp.int32),
        )

    def body(carry: tuple[_Lanes, Array, Reached]) -> tuple[_Lanes, Array, Reached]:
        lane, head, out = carry
        here, x0, size = load(lane.job)
        free = ~(may_start & (x0 == 0.0))
        lam = stages[lane.stage]
        at = dressed.look(
            here, lane.x.reshape(-1, sublattices, k), lam, f=f, names=plan.names, cold=plan.cold, nodes=plan.nodes
        )
        F, g = at.free_energy, jnp.where(free, at.gradient.reshape(-1, n), 0.0)
        good = jnp.isfinite(F) & jnp.isfinite(g).all(-1)
        first = jnp.isinf(lane.base_F)
        ok = good & (first | (F <= lane.base_F + 1e-14 * (1.0 + jnp.abs(F))))

        model = _model_hessian(here, at.response, plan.names)
        updated = _bfgs(lane.hessian, lane.x - lane.base_x, g - lane.base_g)
        begin = first & (lane.stage == 0)
        B = jnp.where(first[:, None, None], lane.hessian, jnp.where(good[:, None, None], updated, lane.hessian))
        B = jnp.where(begin[:, None, None], model, B)
        both = free[:, :, None] & free[:, None, :]
        B = jnp.where(both, B, jnp.eye(n))
        curvature, axes = jnp.linalg.eigh(jnp.where(jnp.isfinite(B), B, jnp.eye(n)))
        # A direction whose curvature is lost in rounding (a Mott plateau) is flat: do not run along it.
        lost = 1e-12 * (1.0 + jnp.abs(F))[:, None] / (size**2).min(-1, keepdims=True)
        floor = jnp.maximum(1e-6 * jnp.abs(curvature).max(-1, keepdims=True), jnp.where(good[:, None], lost, 1.0))
        curvature = jnp.maximum(jnp.abs(curvature), floor)
        B = (axes * curvature[:, None, :]) @ jnp.swapaxes(axes, -1, -2)

        base_x = jnp.where(ok[:, None], lane.x, lane.base_x)
        base_F = jnp.where(ok, F, lane.base_F)
        base_g = jnp.where(ok[:, None], g, lane.base_g)
        along = (base_g[:, None, :] @ axes)[:, 0, :] / curvature
        step = -(axes @ along[:, :, None])[:, :, 0]
        predicted = -0.5 * (step * base_g).sum(-1)
        moved = (jnp.abs(lane.x - lane.base_x) / (jnp.abs(lane.base_x) + size)).max(-1)
        radius = jnp.where(ok, jnp.minimum(1.0, 2.0 * lane.radius), 0.25 * jnp.minimum(moved, lane.radius))
        wanted = (jnp.abs(step) / (jnp.abs(base_x) + size)).max(-1)
        step = step * jnp.minimum(1.0, radius / jnp.maximum(wanted, 1e-300))[:, None]

        last = lane.stage == len(plan.stages) - 1
        tight = (predicted <= 1e-16 * (1.0 + jnp.abs(base_F))) | (wanted <= 1e-9)
        settled = jnp.where(last, tight, wanted <= 1e-2) | (radius < 1e-9)
        settled = settled & jnp.isfinite(base_F)
        # Far outside the range of a second-order step there is no state to look for.
        lost_it = at.bond**2 > (4.0 * DRESSING_LIMIT) ** 2 * at.variance
        finished = (settled & last) | (lane.steps >= MAX_STEPS) | ~jnp.isfinite(base_F) | lost_it
        accepted = ~lost_it & (settled & last) | (
            ~lost_it & jnp.isfinite(base_F) & last & (predicted <= 1e-12 * (1.0 + jnp.abs(base_F)))
        )
        where = jnp.where(finished & (lane.job < count), lane.job, jobs)
        result = Reached(base_x.reshape(-1, sublattices, k), base_F, accepted, lane.steps)
        out = Reached(*(o.at[where].set(v, mode="drop") for o, v in zip(out, result, strict=True)))

        advance = settled & ~last
        going = _Lanes(
            lane.job,
            lane.stage + advance,
            jnp.where(advance[:, None], base_x, base_x + step),
            base_x,
            jnp.where(advance, jnp.inf, base_F),
            base_g,
            B,
            jnp.where(advance, 0.5, radius),
            lane.steps + 1,
        )
        rank = jnp.cumsum(finished) - 1
        job = jnp.where(finished, jnp.minimum(head + rank, jobs), lane.job)
        replaced = fresh(job, load(job)[1])

        def pick(new: Array, old: Array) -> Array:
            return jnp.where(finished.reshape((-1,) + (1,) * (old.ndim - 1)), new, old)

        return _Lanes(*(pick(a, b) for a, b in zip(replaced, going, strict=True))), head + finished.sum(), out

    def unfinished(carry: tuple[_Lanes, Array, Reached]) -> Array:
        return jnp.any(carry[0].job < count)

    line = jnp.arange(lanes)
    begin = fresh(line, load(line)[1])
    empty = Reached(start, jnp.full(jobs, jnp.inf), jnp.zeros(jobs, bool), jnp.zeros(jobs, jnp.int32))
    return jax.lax.while_loop(unfinished, body, (begin, jnp.asarray(lanes), empty))[2]


def _model_hessian(p: Sites, response: Array, names: tuple[str, ...]) -> Array:
    """Curvature of the first-order functional: X - X D X, with D the hopping between the fields J; (..., n, n)."""
    sublattices, k = response.shape[-3], response.shape[-1]
    n = sublattices * k
    X = jnp.zeros((*response.shape[:-3], n, n))
    D = jnp.zeros_like(X)
    for s in range(sublattices):
        X = X.at[..., s * k : (s + 1) * k, s * k : (s + 1) * k].set(response[..., s, :, :])
        for i, name in enumerate(names):
            if name.startswith("J"):
                partner = (sublattices - 1 - s) * k + i
                D = D.at[..., s * k + i, partner].set(0.5 * p.z_t[..., int(name[1]) - 1])
    return (X - X @ D @ X) / sublattices


def _bfgs(B: Array, s: Array, y: Array) -> Array:
    """Damped update (Powell 1978): stays positive definite whatever the curvature along s."""
    Bs = (B @ s[..., None])[..., 0]
    sBs, sy = (s * Bs).sum(-1), (s * y).sum(-1)
    theta = jnp.where(sy >= 0.1 * sBs, 1.0, 0.9 * sBs / jnp.where(sBs == sy, 1.0, sBs - sy))[..., None]
    r = theta * y + (1.0 - theta) * Bs
    sr = (s * r).sum(-1)
    usable = (sBs > 1e-280) & (sr > 1e-280)
    change = r[..., :, None] * r[..., None, :] / jnp.where(usable, sr, 1.0)[..., None, None]
    change = change - Bs[..., :, None] * Bs[..., None, :] / jnp.where(usable, sBs, 1.0)[..., None, None]
    return jnp.where(usable[..., None, None], B + change, B)


@compiled(static=("plan",))
def survey(p: Sites, x: Array, lam: Array, *, plan: Plan) -> Look:
    """One evaluation of the functional at given fields (all of `dressed.NAMES`, any kind)."""
    f = bond.frame(plan.n_max, plan.species, plan.kind)
    return dressed.look(p, x, lam, f=f, names=plan.names, cold=plan.cold, nodes=plan.nodes)


class Onset(NamedTuple):
    """Smallest curvature in the single-particle fields, relative to free response: 0 at the onset, < 0 unstable.

    dressed: at the λ given, product: at λ = 0; shape (...).
    """

    dressed: Array
    product: Array


@compiled(static=("plan",))
def onset(p: Sites, x: Array, lam: Array, *, plan: Plan) -> Onset:
    """Curvature in (J_1, J_2) of every sublattice at fixed other fields, both relative signs included.

    x: fields without single-particle part, (..., sublattice, field) in the order of `dressed.NAMES`.
    The gradient is odd in J, so one small step gives the second derivative to second order in the step.
    """
    f = bond.frame(plan.n_max, plan.species, "full")
    names = dressed.NAMES[plan.species]
    sublattices, species = x.shape[-2], plan.species
    step = 1e-4 * (p.z_t.max(-1) if plan.cold else jnp.minimum(p.z_t.max(-1), 10.0 * p.T))
    step = jnp.where(step > 0, step, 1e-4)
    # All directions in one batch, so that only one eigensolver call runs (see `bond.eigensystem`).
    n = sublattices * species
    kick = np.zeros((n, sublattices, len(names)))
    for column in range(n):
        kick[column, column // species, column % species] = 1.0
    moved = x + step[:, None, None] * jnp.asarray(kick)[:, None]
    many = Sites(*(jnp.tile(v, (n,) + (1,) * (v.ndim - 1)) for v in p))
    at = dressed.look(
        many, moved.reshape(-1, *x.shape[1:]), jnp.tile(lam, n), f=f, names=names, cold=plan.cold, nodes=plan.nodes
    )
    at = jax.tree_util.tree_map(lambda v: v.reshape(n, -1, *v.shape[1:]), at)
    H = jnp.moveaxis(at.gradient[..., :species].reshape(n, -1, n) / step[:, None], 0, -1)
    H = 0.5 * (H + jnp.swapaxes(H, -1, -2)) * sublattices
    chi = at.response[0, ..., :species, :species]
    X = jnp.zeros_like(H)
    D = jnp.zeros_like(H)
    for s in range(sublattices):
        X = X.at[..., s * species : (s + 1) * species, s * species : (s + 1) * species].set(chi[..., s, :, :])
        for a in range(species):
            D = D.at[..., s * species + a, (sublattices - 1 - s) * species + a].set(0.5 * p.z_t[..., a])
    root = jnp.linalg.cholesky(X)
    left = jax.scipy.linalg.solve_triangular(root, H, lower=True)
    scaled = jax.scipy.linalg.solve_triangular(root, jnp.swapaxes(left, -1, -2), lower=True)
    bare = jnp.eye(n) - jnp.swapaxes(root, -1, -2) @ D @ root
    both = jnp.linalg.eigvalsh(jnp.stack([scaled, bare]))[..., 0]
    return Onset(both[0], both[1])
