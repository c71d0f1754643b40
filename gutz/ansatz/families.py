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

import numpy as np

from gutz.ansatz import bond, dressed, evaluate
from gutz.ansatz.dressed import Look, Sites

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

PAIR_FLOOR = 1e-5
"""Average of b_1 b_2 + h.c. (or b_1† b_2 + h.c.) below which a pair (or anti-pair) family counts as normal: the order
decays slowly, and its rest must not let a normal state in that the rules above exclude."""

SINGLE_FLOOR = 1e-3
"""Order parameter below which the single-particle family counts as having shrunk to zero; at T = 0 it approaches
pair and anti-pair states this way, since a vanishing field already picks the state among degenerate ones."""

MAX_STEPS = 48

BEATEN = 1000.0
"""A descent ends early where another family has a free energy lower by this many times the gain still expected."""

QUICK, CAREFUL = (0.5, 1.0), (0.25, 0.5, 0.75, 1.0)
"""Values of λ on the way of the single-particle family. Where the quick way, which also extrapolates from stage to
stage, ends in an ordered state with little dressing, it is the careful one's (at all of 6600 random points)."""

LAST_STEP = 1e-7
"""A step this small, relative to the size of the fields, is taken without looking again."""

KIND = {
    Family.NORMAL: "normal",
    Family.SINGLE: "full",
    Family.PAIR: "pair",
    Family.ANTIPAIR: "antipair",
}


class Plan(NamedTuple):
    """Everything but numbers. nodes: least number of time nodes, more are taken where the temperature asks for
    them. extrapolate: from one stage to the next."""

    kind: str
    names: tuple[str, ...]
    stages: tuple[float, ...]
    n_max: int
    species: int
    cold: bool
    nodes: int = 0
    extrapolate: bool = False


class Reached(NamedTuple):
    """Per job. x, mean (of what the fields couple to): (job, sublattice, field); phi: (job, sublattice, species);
    free_energy, dressing: (job,); converged: bool; steps: int."""

    x: Array
    mean: Array
    phi: Array
    free_energy: Array
    dressing: Array
    converged: Array
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


def descend(p: Sites, point: Array, start: Array, scale: Array, *, plan: Plan, ceiling: Array | None = None) -> Reached:
    """Minimise from every start, stage by stage in λ; jobs that are done drop out.

    point: index into p of each job, (job,). start: (job, sublattice, field); a single-particle, pair or anti-pair
    field that starts at exactly 0 stays 0. scale: natural size of each field of each job, same shape.
    ceiling: free energies above which the result does not matter, (job,).
    Quasi-Newton steps (damped BFGS from the mean-field curvature), limited in length, never uphill.
    """
    f = bond.frame(plan.n_max, plan.species, plan.kind)
    jobs, sublattices, k = start.shape
    n = sublattices * k
    p = evaluate.pick(evaluate.numbers(p), np.asarray(point))
    size = np.asarray(scale, float).reshape(jobs, n)
    may_start = np.tile([makes_order(name) for name in plan.names], sublattices)
    x = np.array(start, float).reshape(jobs, n)
    nothing = np.zeros(jobs)
    out = Reached(
        x.reshape(start.shape).copy(), np.zeros(start.shape), np.zeros((jobs, sublattices, plan.species)),
        nothing + np.inf, nothing.copy(), nothing > 0, nothing.astype(int),
    )  # fmt: skip
    job = _Jobs(np.arange(jobs), x, ~(may_start & (x == 0.0)), p, size, plan)
    job.ceiling = np.full(jobs, np.inf) if ceiling is None else np.asarray(ceiling, float)
    while job.index.size:
        lam = np.asarray(plan.stages)[job.stage]
        at = evaluate.look(
            job.sites, job.x.reshape(-1, sublattices, k), lam, f=f, names=plan.names, cold=plan.cold,
            energies=False, nodes=plan.nodes,
        )  # fmt: skip
        finished, accepted = job.step(at, plan)
        if finished.any():
            done = job.index[finished]
            found = (
                job.base_x.reshape(-1, sublattices, k), job.base_mean, job.base_phi, job.base_F, job.base_dressing,
                accepted, job.steps,
            )  # fmt: skip
            for whole, piece in zip(out, found, strict=True):
                whole[done] = piece[finished]
            job.keep(~finished)
    return out


class _Jobs:
    """The minimisations under way, one row each. x: where the functional is looked at next. base_x, base_F, and so on:
    the lowest point of this stage. last_x: the end of the stage before. radius: longest step, relative to the size of
    the fields."""

    def __init__(self, index: Array, x: Array, free: Array, sites: Sites, size: Array, plan: Plan) -> None:
        jobs, n = x.shape
        self.index, self.x, self.free, self.sites, self.size = index, x, free, sites, size
        self.stage, self.steps = np.zeros(jobs, int), np.zeros(jobs, int)
        self.last_x, self.base_x, self.base_F, self.base_g = (
            x.copy(),
            x.copy(),
            np.full(jobs, np.inf),
            np.zeros((jobs, n)),
        )
        shape = (jobs, sites.energy.shape[1])
        self.base_mean, self.base_phi = np.zeros((*shape, len(plan.names))), np.zeros((*shape, plan.species))
        self.base_dressing, self.ceiling = np.zeros(jobs), np.full(jobs, np.inf)
        self.hessian, self.radius = np.broadcast_to(np.eye(n), (jobs, n, n)).copy(), np.full(jobs, 0.5)

    def keep(self, which: Array) -> None:
        """Forget the others."""
        for name, value in vars(self).items():
            setattr(self, name, evaluate.pick(value, which) if name == "sites" else value[which])

    def step(self, at: Look, plan: Plan) -> tuple[Array, Array]:
        """Take in one look and choose the next place; returns which jobs are finished and which of them converged."""
        n = self.x.shape[1]
        F, g = at.free_energy, np.where(self.free, at.gradient.reshape(-1, n), 0.0)
        good = np.isfinite(F) & np.isfinite(g).all(-1)
        first = np.isinf(self.base_F)
        ok = good & (first | (F <= self.base_F + 1e-14 * (1.0 + np.abs(F))))
        curvature, axes = self._curvature(at, g, F, good, first, plan.names)
        base_x = np.where(ok[:, None], self.x, self.base_x)
        base_F = np.where(ok, F, self.base_F)
        base_g = np.where(ok[:, None], g, self.base_g)
        self.base_mean = np.where(ok[:, None, None], at.mean, self.base_mean)
        self.base_phi = np.where(ok[:, None, None], at.phi, self.base_phi)
        self.base_dressing = np.where(ok, dressing(at), self.base_dressing)
        along = (base_g[:, None, :] @ axes)[:, 0, :] / curvature
        step = -(axes @ along[:, :, None])[:, :, 0]
        predicted = -0.5 * (step * base_g).sum(-1)
        moved = (np.abs(self.x - self.base_x) / (np.abs(self.base_x) + self.size)).max(-1)
        radius = np.where(ok, np.minimum(1.0, 2.0 * self.radius), 0.25 * np.minimum(moved, self.radius))
        wanted = (np.abs(step) / (np.abs(base_x) + self.size)).max(-1)
        step = step * np.minimum(1.0, radius / np.maximum(wanted, 1e-300))[:, None]

        last = self.stage == len(plan.stages) - 1
        tight = (predicted <= 1e-16 * (1.0 + np.abs(base_F))) | (wanted <= LAST_STEP)
        settled = np.where(last, tight, wanted <= 1e-2) | (radius < 1e-9)
        settled &= np.isfinite(base_F)
        # Far outside the range of a second-order step there is no state to look for.
        lost_it = at.bond**2 > (4.0 * DRESSING_LIMIT) ** 2 * at.variance
        beaten = ok & last & (base_F - BEATEN * np.maximum(predicted, 0.0) > self.ceiling)
        finished = (settled & last) | (self.steps >= MAX_STEPS) | ~np.isfinite(base_F) | lost_it | beaten
        nearly = np.isfinite(base_F) & last & (predicted <= 1e-12 * (1.0 + np.abs(base_F)))
        accepted = ~lost_it & ((settled & last) | nearly | beaten)

        advance = settled & ~last
        self.x = np.where(advance[:, None], self._ahead(base_x, plan), base_x + step)
        self.last_x = np.where(advance[:, None], base_x, self.last_x)
        self.stage += advance
        base_x = np.where((finished & accepted & (wanted <= LAST_STEP))[:, None], base_x + step, base_x)
        self.base_x, self.base_g, self.base_F = base_x, base_g, np.where(advance & ~finished, np.inf, base_F)
        self.radius = np.where(advance, 0.5, radius)
        self.steps += ~finished
        return finished, accepted

    def _ahead(self, x: Array, plan: Plan) -> Array:
        """Where the next stage begins: at this one's end, or on the line from the one before, short of zero."""
        if not plan.extrapolate:
            return x
        lam = np.array([0.0, *plan.stages, plan.stages[-1]])
        ratio = (lam[self.stage + 2] - lam[self.stage + 1]) / (lam[self.stage + 1] - lam[self.stage])
        ahead = x + ratio[:, None] * (x - self.last_x)
        return np.where(ahead * x > 0.25 * x * x, ahead, 0.5 * x)

    def _curvature(
        self, at: Look, g: Array, F: Array, good: Array, first: Array, names: tuple[str, ...]
    ) -> tuple[Array, Array]:
        """Update the Hessian; returns its eigenvalues, made positive, and axes."""
        n = self.x.shape[1]
        updated = _bfgs(self.hessian, self.x - self.base_x, g - self.base_g)
        B = np.where((good & ~first)[:, None, None], updated, self.hessian)
        begin = first & (self.stage == 0)
        if begin.any():
            B = np.where(begin[:, None, None], _model_hessian(self.sites, at.response, names), B)
        B = np.where(self.free[:, :, None] & self.free[:, None, :], B, np.eye(n))
        curvature, axes = np.linalg.eigh(np.where(np.isfinite(B), B, np.eye(n)))
        # A direction whose curvature is lost in rounding (a Mott plateau) is flat: do not run along it.
        lost = 1e-12 * (1.0 + np.abs(F))[:, None] / (self.size**2).min(-1, keepdims=True)
        floor = np.maximum(1e-6 * np.abs(curvature).max(-1, keepdims=True), np.where(good[:, None], lost, 1.0))
        curvature = np.maximum(np.abs(curvature), floor)
        self.hessian = (axes * curvature[:, None, :]) @ np.swapaxes(axes, -1, -2)
        return curvature, axes


def _hopping(p: Sites, names: tuple[str, ...], sublattices: int) -> Array:
    """What couples the fields J of neighbours in the first-order functional, (point, n, n)."""
    k = len(names)
    D = np.zeros((len(p.T), sublattices * k, sublattices * k))
    for s in range(sublattices):
        for i, name in enumerate(names):
            if name.startswith("J"):
                D[:, s * k + i, (sublattices - 1 - s) * k + i] = 0.5 * p.z_t[:, int(name[1]) - 1]
    return D


def _on_diagonal(blocks: Array) -> Array:
    """One matrix from those of the sublattices, (point, sublattice, k, k) to (point, n, n)."""
    points, sublattices, k = blocks.shape[:3]
    X = np.zeros((points, sublattices * k, sublattices * k))
    for s in range(sublattices):
        X[:, s * k : (s + 1) * k, s * k : (s + 1) * k] = blocks[:, s]
    return X


def _model_hessian(p: Sites, response: Array, names: tuple[str, ...]) -> Array:
    """Curvature of the first-order functional: X - X D X, with D the hopping between the fields J; (point, n, n)."""
    sublattices = response.shape[1]
    X = _on_diagonal(response)
    return (X - X @ _hopping(p, names, sublattices) @ X) / sublattices


def _bfgs(B: Array, s: Array, y: Array) -> Array:
    """Damped update (Powell 1978): stays positive definite whatever the curvature along s."""
    Bs = (B @ s[..., None])[..., 0]
    sBs, sy = (s * Bs).sum(-1), (s * y).sum(-1)
    theta = np.where(sy >= 0.1 * sBs, 1.0, 0.9 * sBs / np.where(sBs == sy, 1.0, sBs - sy))[..., None]
    r = theta * y + (1.0 - theta) * Bs
    sr = (s * r).sum(-1)
    usable = (sBs > 1e-280) & (sr > 1e-280)
    change = r[..., :, None] * r[..., None, :] / np.where(usable, sr, 1.0)[..., None, None]
    change = change - Bs[..., :, None] * Bs[..., None, :] / np.where(usable, sBs, 1.0)[..., None, None]
    return np.where(usable[..., None, None], B + change, B)


def survey(p: Sites, x: Array, lam: Array, *, plan: Plan) -> Look:
    """One evaluation of the functional at given fields (those in plan.names)."""
    f = bond.frame(plan.n_max, plan.species, plan.kind)
    return evaluate.look(
        evaluate.numbers(p), np.asarray(x, float), np.asarray(lam, float), f=f, names=plan.names, cold=plan.cold,
        nodes=plan.nodes,
    )  # fmt: skip


def dressing(look: Look) -> Array:
    """|F_bond| / sqrt<V²> on a bond, (point,)."""
    root = np.sqrt(np.where(look.variance > 0, look.variance, 1.0))
    return np.where(look.variance > 0, -look.bond / root, 0.0)


class Onset(NamedTuple):
    """Smallest curvature in the single-particle fields, relative to free response: 0 at the onset, < 0 unstable.

    dressed: at the λ given, product: at λ = 0; shape (point,).
    """

    dressed: Array
    product: Array


def onset(p: Sites, x: Array, lam: Array, *, plan: Plan) -> Onset:
    """Curvature in (J_1, J_2) of every sublattice at fixed other fields, both relative signs included.

    x: fields without single-particle part, (point, sublattice, field) in the order of `dressed.NAMES`.
    The gradient is odd in J, so one small step gives the second derivative to second order in the step.
    """
    f = bond.frame(plan.n_max, plan.species, "full")
    names = dressed.NAMES[plan.species]
    p, x, lam = evaluate.numbers(p), np.asarray(x, float), np.asarray(lam, float)
    sublattices, species = x.shape[-2], plan.species
    step = 1e-4 * (p.z_t.max(-1) if plan.cold else np.minimum(p.z_t.max(-1), 10.0 * p.T))
    step = np.where(step > 0, step, 1e-4)
    n = sublattices * species
    H, X = np.empty((len(x), n, n)), np.empty(0)
    for column in range(n):
        moved = x.copy()
        moved[:, column // species, column % species] += step
        at = evaluate.look(p, moved, lam, f=f, names=names, cold=plan.cold, energies=False, nodes=plan.nodes)
        H[:, :, column] = at.gradient[..., :species].reshape(-1, n) / step[:, None]
        if column == 0:
            X = _on_diagonal(at.response[..., :species, :species])
    H = 0.5 * (H + np.swapaxes(H, -1, -2)) * sublattices
    D = _hopping(p, names[:species], sublattices)
    size, axes = np.linalg.eigh(X)
    size = np.sqrt(np.maximum(size, 1e-300))[:, None, :]
    turned = np.swapaxes(axes, -1, -2)
    scaled = (turned @ H @ axes) / size / np.swapaxes(size, -1, -2)
    bare = np.eye(n) - (turned @ D @ axes) * size * np.swapaxes(size, -1, -2)
    both = np.linalg.eigvalsh(np.stack([scaled, bare]))[..., 0]
    return Onset(both[0], both[1])
