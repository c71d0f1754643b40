"""Minimisation of the product functional for many points and several starts at once.

In:  `Sites` of N points, and a queue of jobs (which point, which start).
Out: for each job the fields at the minimum reached, the free energy there, and whether it converged.

A fixed number of lanes works through the queue: a lane that is done takes the next job, so no lane waits for the
slowest one and one compilation serves any number of points. Each step costs one eigenproblem of the site.
Newton steps are taken where the curvature is positive and the free energy falls; otherwise the self-consistency
step x -> phi(x), which can only lower the free energy (F_tr is concave in the fields).
"""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp

from gutz.ansatz import gibbs, product
from gutz.ansatz.product import Sites
from gutz.compiled import compiled
from gutz.fock import LocalSpace, local_space

Array = Any

TOLERANCE = 1e-11
"""Residual |x - phi(x)| at which a point counts as converged (plus rounding of the thermal weights)."""

SLACK = 1e-12
"""A step may raise the free energy by this much, relative to 1 + |F|: rounding, and the choice of the state within
a manifold that is degenerate without fields, make smaller differences meaningless."""

MAX_STEPS = 120

_LARGEST_STEP = 1.0
_LAST_STEP = 1e-6
_SAFELY_CONVEX = 0.9


class Minimum(NamedTuple):
    """Per job. x: (job, sublattice, species); free_energy, residual, softness, steps: (job,); converged: bool."""

    x: Array
    free_energy: Array
    residual: Array
    softness: Array
    converged: Array
    steps: Array


class _Lanes(NamedTuple):
    job: Array
    x: Array  # where the functional is evaluated next
    best_x: Array
    best_F: Array
    best_phi: Array
    bold: Array  # the step to x was not a plain self-consistency step, so it may have to be taken back
    stretch: Array  # factor on the next self-consistency step
    steps: Array


class _Look(NamedTuple):
    free_energy: Array
    phi: Array
    chi: Array


def _look(p: Sites, x: Array, space: LocalSpace) -> _Look:
    """One evaluation: free energy, order parameters and field response from one eigensystem.

    p.energy: (lane, sublattice, block, state); the fields act within a block.
    """
    J = product.fields_at(p, x)
    coupled = jnp.einsum("...a,aij->...ij", J, jnp.asarray(space.field))
    h = p.energy[..., :, None] * jnp.eye(space.size) - coupled[..., None, :, :]
    lv = gibbs.block_levels(h, jnp.broadcast_to(p.T[..., None], h.shape[:-3]))
    in_levels = jnp.swapaxes(lv.vectors, -1, -2)[..., None, :, :] @ product.apply_fields(lv.vectors, space)
    mean = jnp.einsum("...kaii,...ki->...a", in_levels, lv.weight)
    weighted = gibbs.response_kernel(lv)[..., None, :, :] * in_levels
    chi = (weighted[..., :, None, :, :] * in_levels[..., None, :, :, :]).sum((-1, -2)).sum(-3)
    chi = chi - lv.inverse_temperature[..., None, None] * mean[..., :, None] * mean[..., None, :]
    phi = 0.5 * mean
    return _Look(product.free_energy(p, x, lv.free_energy, phi), phi, chi)


@compiled(static=("n_max", "lanes"))
def descend(p: Sites, point: Array, start: Array, count: Array, *, n_max: int, lanes: int) -> Minimum:
    """Minimise from every start in the queue.

    p: parameters of N points, with p.energy of shape (N, sublattice, state), or (N, sublattice, block, state)
    where only one species has fields and the other's occupation labels the blocks. point: index of the point of
    each job, (job,). start: (job, sublattice, species); a field that starts at exactly 0 stays 0. count: jobs in
    use, the rest of the queue is padding.
    """
    species = p.z_t.shape[-1]
    space = local_space(n_max, species)
    jobs = point.shape[0]
    if p.energy.ndim == 3:
        p = p._replace(energy=p.energy[:, :, None, :])
    norm = jnp.abs(p.energy).max((-1, -2, -3)) + p.z_t.sum(-1) * n_max
    rounding = jnp.where(p.T > 0, 4e-16 * norm / jnp.where(p.T > 0, p.T, 1.0), 0.0)
    tolerance = TOLERANCE + jnp.minimum(rounding, 1e-7)

    def load(job: Array) -> tuple[Sites, Array, Array]:
        safe = jnp.minimum(job, jobs - 1)
        i = point[safe]
        return Sites(p.energy[i], p.z_t[i], p.T[i]), start[safe], tolerance[i]

    def fresh(job: Array, x: Array) -> _Lanes:
        size = job.shape[0]
        return _Lanes(
            job,
            x,
            x,
            jnp.full(size, jnp.inf),
            x,
            jnp.zeros(size, bool),
            jnp.ones(size),
            jnp.zeros(size, jnp.int32),
        )

    def body(carry: tuple[_Lanes, Array, Minimum]) -> tuple[_Lanes, Array, Minimum]:
        lane, head, out = carry
        here, x0, tol = load(lane.job)
        free = x0 > 0
        look = _look(here, lane.x, space)
        phi = jnp.where(free, jnp.abs(look.phi), 0.0)
        slack = SLACK * (1.0 + jnp.abs(look.free_energy))
        better = look.free_energy <= lane.best_F + slack
        rejected = lane.bold & ~better

        r = jnp.where(free, lane.x - phi, 0.0)
        size = jnp.abs(r).max((-1, -2))
        soft = product.softness(here, look.chi)
        newton = jnp.clip(product.newton_step(here, look.chi, r), -_LARGEST_STEP, _LARGEST_STEP)
        # The functional is even in the fields, so a step across zero goes on at the mirror image, shortened.
        newton_x = jnp.where(free, jnp.where(lane.x + newton < 0, 0.01 * lane.x, lane.x + newton), 0.0)
        use_newton = (soft < 1.0) & ~rejected
        # Beyond an onset plain iteration grows the order by a factor close to 1 only: lengthen the step each time.
        stretched = jnp.where(free, jnp.abs(lane.x - lane.stretch[:, None, None] * r), 0.0)
        next_x = jnp.where(use_newton[:, None, None], newton_x, stretched)
        next_x = jnp.where(rejected[:, None, None], lane.best_phi, next_x)
        plain = ~use_newton & ~rejected
        stretch = jnp.where(plain, 2.0 * lane.stretch, 1.0)

        # A residual bounds the error in x only together with the curvature: ask the Newton step to be small too.
        step = jnp.abs(newton).max((-1, -2))
        settled = (size <= tol) & ((soft >= 1.0) | (step <= 1e3 * tol)) & ~rejected
        # Newton squares the error: a step this small lands on the minimum, there is no need to look again.
        last_step = use_newton & (soft < _SAFELY_CONVEX) & (step <= _LAST_STEP)
        settled = settled | last_step
        finished = settled | (lane.steps >= MAX_STEPS) | ~jnp.isfinite(look.free_energy)
        where = jnp.where(finished & (lane.job < count), lane.job, jobs)
        result = Minimum(
            jnp.where(last_step[:, None, None], newton_x, lane.x), look.free_energy, size, soft, settled, lane.steps
        )
        out = Minimum(*(o.at[where].set(v, mode="drop") for o, v in zip(out, result, strict=True)))

        rank = jnp.cumsum(finished) - 1
        job = jnp.where(finished, jnp.minimum(head + rank, jobs), lane.job)
        head = head + finished.sum()
        x_new = load(job)[1]
        keep = (better & ~rejected)[:, None, None]
        going = _Lanes(
            job,
            next_x,
            jnp.where(keep, lane.x, lane.best_x),
            jnp.where(better & ~rejected, look.free_energy, lane.best_F),
            jnp.where(keep, phi, lane.best_phi),
            use_newton | (plain & (lane.stretch > 1.0)),
            stretch,
            lane.steps + 1,
        )
        replaced = fresh(job, x_new)

        def pick(new: Array, old: Array) -> Array:
            return jnp.where(finished.reshape((-1,) + (1,) * (old.ndim - 1)), new, old)

        return _Lanes(*(pick(n, o) for n, o in zip(replaced, going, strict=True))), head, out

    def unfinished(carry: tuple[_Lanes, Array, Minimum]) -> Array:
        return jnp.any(carry[0].job < count)

    first = jnp.arange(lanes)
    lanes0 = fresh(first, load(first)[1])
    empty = jnp.full(jobs, jnp.inf)
    out0 = Minimum(start, empty, empty, empty, jnp.zeros(jobs, bool), jnp.zeros(jobs, jnp.int32))
    return jax.lax.while_loop(unfinished, body, (lanes0, jnp.asarray(lanes), out0))[2]
