"""Solve a mixture: from any batch of parameters to a `Solution` with a status on every point.

In:  a `Mixture` (chemical potentials or fillings, temperatures or entropies), the ansatz.
Out: a `Solution`. No single bad point raises; it carries a status. Differentiable in every parameter.

Numbers pass through fixed batch sizes, so that a scan compiles once. Under jax.grad and friends the minimum is
found for the numbers behind the tracers, and two chord-Newton steps on the stationarity and target conditions
attach the derivatives: each step makes one more order of the implicit function exact.
"""

from typing import Any

import jax
import jax.numpy as jnp
import numpy as np

from gutz import limits, precision, sensitivity, targets
from gutz.ansatz import descent, gibbs, product
from gutz.batch import CUTOFF_WEIGHT
from gutz.compiled import compiled
from gutz.errors import InputError
from gutz.fock import local_space
from gutz.model import Mixture
from gutz.observables import observe
from gutz.order import by_dimension
from gutz.phases import Phase
from gutz.solution import Solution
from gutz.status import Status
from gutz.variables import ABSENT, VARIABLES

Array = Any

ANSATZE = ("product", "dressed")
"""Names accepted for `ansatz`."""

CUTOFF_LADDER = {1: (4, 6, 9, 14, 20, 30, 40), 2: (3, 4, 5, 6, 8, 10, 12)}
"""Cutoffs tried in turn when n_max is automatic; a short list, since each is one compilation."""

TOLERANCES = {"residual": descent.TOLERANCE, "target": targets.TARGET_TOLERANCE, "cutoff_weight": CUTOFF_WEIGHT}
"""What a converged point fulfils, for the record of a run."""

_NO_ENTROPY = 1e-9
"""Entropies below minus this are remarked on; rounding makes smaller ones."""

_CHORD_STEPS = 2


def solve(mixture: Mixture, ansatz: str = "product") -> Solution:
    """Minimise the variational free energy for every point of `mixture`.

    ansatz: "product" (Gutzwiller, an upper bound) or "dressed" (hopping to second order, which sees paired and
    counterflow order). Returns a Solution of the mixture's batch shape. Raises
    InputError for an unknown ansatz, or under jit where something is left automatic.
    """
    precision.check_double()
    if ansatz not in ANSATZE:
        raise InputError(f"ansatz is {ansatz!r}; it must be one of: {', '.join(ANSATZE)}")
    flat = mixture.flat()
    if ansatz == "dressed":
        sensitivity.check_first_order(flat)
    concrete = flat.map(_number_behind)
    if any(isinstance(v, jax.core.Tracer) for v in jax.tree.leaves(concrete)):
        outputs, fields = _solve_inside_jit(flat)
    else:
        values = concrete.map(np.asarray)
        outputs, fields = _solve_numbers(values, ansatz)
        if any(isinstance(v, jax.core.Tracer) for v in jax.tree.leaves(flat)):
            if ansatz == "product":
                outputs = _attach_derivatives(flat, values, outputs, fields)
            else:
                outputs = sensitivity.attach(flat, values, outputs, lambda near: _solve_numbers(near, ansatz)[0])
    shaped = {name: v.reshape(mixture.shape + v.shape[1:]) for name, v in outputs.items()}
    return Solution(mixture, shaped, fields.reshape(mixture.shape + fields.shape[1:]), ansatz)


def _number_behind(value: Array) -> Array:
    """The number a differentiation tracer stands for (inside jit and vmap there is none)."""
    return jax.lax.stop_gradient(value) if isinstance(value, jax.core.Tracer) else value


def _solve_numbers(mixture: Mixture, ansatz: str) -> tuple[dict[str, np.ndarray], np.ndarray]:
    """Choose the cutoff of every point, solve, and label."""
    size = mixture.shape[0]
    two = mixture.species == 2
    gone = limits.collapses(mixture.U, mixture.U12, mixture.n_max) if two else np.zeros(size, bool)
    staggers = _may_stagger(mixture) if ansatz == "dressed" else np.zeros(size, bool)
    collector = _Collector(mixture, ansatz, 2 if staggers.any() else mixture.sublattices)
    todo = np.flatnonzero(~gone)
    ladder = (mixture.n_max,) if mixture.n_max is not None else CUTOFF_LADDER[mixture.species]
    wanted = np.zeros(size) if mixture.n_max is not None else _expected_occupation(mixture)
    for step, n_max in enumerate(ladder):
        last = step == len(ladder) - 1
        now = todo if last else todo[wanted[todo] <= n_max - 2]
        for group in (now[~staggers[now]], now[staggers[now]]):
            if not group.size:
                continue
            sublattices = 2 if staggers[group[0]] else mixture.sublattices
            outputs, fields = targets.solve_points(mixture[group], n_max=n_max, ansatz=ansatz, sublattices=sublattices)
            collector.put(group, outputs, fields, n_max)
            full = np.zeros(group.size, bool) if last else outputs["cutoff_weight"] > CUTOFF_WEIGHT
            todo = np.union1d(np.setdiff1d(todo, group), group[full])
        if not todo.size:
            break
    return collector.finish(mixture, gone)


def _may_stagger(mixture: Mixture) -> np.ndarray:
    """Where the exchange favours sublattices that differ: z-Néel order of sites with one atom, checkerboard of pairs.

    Second order in the hopping: J_z > J_perp, with J_perp = 4 t1 t2/|U12| and J_z = 2 (t1² + t2²)/|U12| - 4 t1²/U1 -
    4 t2²/U2 (Kuklov and Svistunov, PRL 90, 100401 (2003), Duan, Demler, Lukin, PRL 91, 090402 (2003); from memory), at
    temperatures where that can order.
    """
    if mixture.species == 1 or mixture.sublattices == 2:
        return np.zeros(mixture.shape[0], bool)
    t, U, U12 = np.asarray(mixture.t), np.asarray(mixture.U), np.abs(np.asarray(mixture.U12))
    squares = (t**2).sum(-1)
    bound = U12 > 0
    per = 1.0 / np.where(bound, U12, 1.0)
    own = np.zeros_like(squares) if mixture.n_max == 1 else 4 * squares / np.maximum(U, 1e-300)
    zz = 2 * squares.sum(-1) * per - own.sum(-1)
    perp = 4 * (t[:, 0] * t[:, 1]).sum(-1) * per
    cold = np.ones(zz.shape, bool) if mixture.T is None else np.asarray(mixture.T) < 2 * zz
    return bound & cold & (zz > perp * (1 + 1e-9))


def _expected_occupation(mixture: Mixture) -> np.ndarray:
    """A cheap guess of the largest occupation that matters, to skip cutoffs that cannot do."""
    if mixture.filling is not None:
        return np.max(mixture.filling, -1)
    scale = np.maximum(mixture.U, 1e-12)
    return np.clip(np.max((mixture.mu + mixture.z_t) / scale, -1), 0.0, 1e3)


class _Collector:
    """Gathers groups of points with different cutoffs into whole arrays; points never put stay nan."""

    def __init__(self, mixture: Mixture, ansatz: str, sublattices: int) -> None:
        size = mixture.shape[0]
        lengths = {"species": mixture.species, "species_": mixture.species, "direction": mixture.dim}
        self.fields = np.zeros((size, sublattices, mixture.species))
        self.outputs: dict[str, np.ndarray] = {}
        for name, variable in VARIABLES.items():
            if name not in ABSENT[ansatz]:
                shape = (size, *(lengths[d] for d in variable.dims))
                fill = np.nan if variable.dtype == "float64" else 0
                self.outputs[name] = np.full(shape, fill, variable.dtype)

    def put(self, where: np.ndarray, outputs: dict[str, np.ndarray], fields: np.ndarray, n_max: int) -> None:
        self.fields[where] = fields
        for name, values in outputs.items():
            self.outputs[name][where] = values
        self.outputs["n_max"][where] = n_max

    def finish(self, mixture: Mixture, gone: np.ndarray) -> tuple[dict[str, np.ndarray], np.ndarray]:
        """Add labels and the remarks that follow from the parameters alone."""
        out = self.outputs
        if mixture.species == 2:
            demixing = (mixture.U12 > np.sqrt(mixture.U[:, 0] * mixture.U[:, 1])) & (mixture.n_max != 1)
            out["status"] = out["status"] | np.where(demixing, int(Status.DEMIXING), 0).astype(np.int32)
        with np.errstate(invalid="ignore"):
            negative = out["entropy"] < -_NO_ENTROPY
        out["status"] = out["status"] | np.where(negative, int(Status.NEGATIVE_ENTROPY), 0).astype(np.int32)
        out["status"] = np.where(gone, int(Status.COLLAPSE), out["status"]).astype(np.int32)
        # Where a superlattice makes the sublattices differ, their densities differ without any order.
        seen = out if mixture.sublattices == 1 else out | {"staggering": np.zeros_like(out["staggering"])}
        solved = ~gone
        found = by_dimension({name: values[solved] for name, values in seen.items()}, np.asarray(mixture.t)[solved])
        for name, values in found.items():
            out[name][solved] = values
        out["phase"][(out["status"] & int(Status.FILLING_GAP)) > 0] = Phase.SEPARATED
        out["phase"][gone] = Phase.COLLAPSE
        return out, self.fields


def _solve_inside_jit(mixture: Mixture) -> tuple[dict[str, Array], Array]:
    """Solve where no numbers can be looked at: everything automatic must have been fixed by the caller."""
    if mixture.n_max is None or mixture.mu is None or mixture.T is None:
        raise InputError(
            "n_max, mu and T must be given inside jax.jit or jax.vmap; an automatic cutoff, a filling or an "
            "entropy needs the numbers themselves"
        )
    raw = targets.solve_given(mixture, mixture.mu, mixture.T, n_max=mixture.n_max, sublattices=mixture.sublattices)
    outputs = dict(raw.outputs)
    outputs["status"] = raw.status
    outputs["n_max"] = jnp.full(raw.status.shape, mixture.n_max, jnp.int16)
    return outputs, raw.fields


def _attach_derivatives(
    mixture: Mixture, values: Mixture, outputs: dict[str, np.ndarray], fields: np.ndarray
) -> dict[str, Array]:
    """Outputs again, as functions of the traced parameters through the implicit functions x, mu and T."""
    n_max = int(outputs["n_max"].max())
    mu, T, x = (jnp.asarray(v) for v in (outputs["mu"], outputs["T"], fields))
    unknown = _unknowns(mixture)
    total, d_phi = _responses(values, mu, T, x, n_max=n_max)
    inverse = targets.constraint_inverse(values, np.asarray(total), unknown)
    traced = _implicit(mixture, values, mu, T, x, d_phi, inverse, n_max=n_max, unknown=unknown)
    return dict(outputs) | traced


@compiled(static=("n_max",))
def _responses(mixture: Mixture, mu: Array, T: Array, x: Array, *, n_max: int) -> tuple[Array, Array]:
    space = local_space(n_max, mixture.species)
    return observe(mixture, mu, T, x, space, differentiable=False)[1:]


@compiled(static=("n_max", "unknown"))
def _implicit(
    mixture: Mixture,
    values: Mixture,
    mu0: Array,
    T0: Array,
    x0: Array,
    d_phi: Array,
    inverse: Array | None,
    *,
    n_max: int,
    unknown: tuple[int, ...],
) -> dict[str, Array]:
    """Chord-Newton steps from the solution (x0, mu0, T0) of `values`, at the traced parameters of `mixture`.

    inverse: of the target conditions, see `targets.constraint_inverse`; d_phi: order parameters per (mu, T).
    """
    space = local_space(n_max, mixture.species)
    p0 = product.sites(values, mu0, T0, space, x0.shape[-2])
    h = product.hamiltonian(p0, x0, space)
    chi = gibbs.response(h, jnp.broadcast_to(p0.T[..., None], h.shape[:-2]), jnp.asarray(space.field))
    ordered = x0 != 0
    x, mu, T = x0, mu0 if mixture.mu is None else mixture.mu, T0 if mixture.T is None else mixture.T
    for _ in range(_CHORD_STEPS):
        p = product.sites(mixture, mu, T, space, x0.shape[-2])
        r = jnp.where(ordered, product.residual(p, x, space), 0.0)
        x = x + jnp.where(ordered, product.newton_step(p0, chi, r), 0.0)
        if unknown:
            now = observe(mixture, mu, T, x, space, differentiable=True)[0]
            dy = -jnp.einsum("pij,pj->pi", inverse, targets.mismatch(mixture, now))
            x = x + jnp.einsum("psay,py->psa", d_phi[..., jnp.array(unknown)], dy) * ordered
            mu, T = targets.moved(mu, T, dy, unknown, mixture.species)
    return observe(mixture, mu, T, x, space, differentiable=True)[0]


def _unknowns(mixture: Mixture) -> tuple[int, ...]:
    """Which of y = (mu_1, .., T) are solved for."""
    chemical = tuple(range(mixture.species)) if mixture.mu is None else ()
    return chemical + ((mixture.species,) if mixture.T is None else ())
