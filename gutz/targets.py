"""Points set by filling or entropy instead of chemical potential or temperature.

In:  a flat `Mixture` of numbers with a fixed cutoff.
Out: outputs and fields of every point as numpy arrays, with status bits where a target cannot be met.

F is concave in (mu, T), so with fillings n* (and entropy per site S*) given, the point sought is the maximum of
F + mu n* + T S*: Newton steps with the exact response, inside a trust region, cannot get lost, and a kink at the
maximum is recognised as a jump between two phases. Entropy at given mu is bracketed in T.
"""

from collections.abc import Callable
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np

from gutz.batch import LANES, Batch, solve_batch
from gutz.dressed_batch import dress
from gutz.model import Mixture
from gutz.status import Status
from gutz.variables import VARIABLES

Array = Any
Numbers = dict[str, np.ndarray]

BATCH_SIZES = (8, 2 * LANES, 16 * LANES)
"""Every call is padded to one of these, so that few shapes are ever compiled."""

DIRECTED = tuple(name for name, variable in VARIABLES.items() if "direction" in variable.dims)
"""Outputs whose last axis is the direction."""

TARGET_TOLERANCE = 1e-10
"""Mismatch of filling (relative to 1 + n) and entropy per particle at which a target counts as met."""

PLATEAU_WIDTH_TOLERANCE = 1e-8
"""Change of filling that still counts as lying on a plateau."""

_MOST_STEPS = 80
_SMALLEST_REGION = 1e-12


def solve_given(mixture: Mixture, mu: Array, T: Array, *, n_max: int, sublattices: int) -> Batch:
    """Solve at given mu and T for a batch of any size, by padding it to whole blocks; works inside jit."""
    size = mixture.shape[0]
    padded = size if size <= LANES else -(-size // LANES) * LANES

    def pad(v: Array) -> Array:
        return jnp.concatenate([v, jnp.broadcast_to(v[-1:], (padded - size, *v.shape[1:]))])

    full = solve_batch(mixture.map(pad), pad(mu), pad(T), n_max=n_max, sublattices=sublattices)
    return jax.tree.map(lambda v: v[:size], full)


def solve_points(
    mixture: Mixture, *, n_max: int, ansatz: str, sublattices: int | None = None
) -> tuple[Numbers, np.ndarray]:
    """Solve a flat mixture of numbers, meeting its fillings and entropies. Returns outputs and fields.

    sublattices: 2 allows the two to differ; None takes what the mixture's offset asks for.
    """
    evaluate = Evaluator(mixture, n_max, ansatz, sublattices)
    size = mixture.shape[0]
    if mixture.filling is not None:
        mu, T, remark = _meet_fillings(mixture, evaluate)
    elif mixture.entropy is not None:
        mu = np.asarray(mixture.mu)
        T, remark = _meet_entropy(mixture, evaluate)
    else:
        mu, T, remark = np.asarray(mixture.mu), np.asarray(mixture.T), np.zeros(size, np.int32)
    result = evaluate(np.arange(size), mu, T)
    outputs = dict(result.outputs)
    outputs["status"] = (result.status | remark).astype(np.int32)
    return outputs, result.fields


class Evaluator:
    """Global solves of chosen points at trial values of mu and T, as numpy arrays, in padded batches."""

    def __init__(self, mixture: Mixture, n_max: int, ansatz: str, sublattices: int | None = None) -> None:
        # Missing directions are directions without hopping: one compilation serves 1D, 2D and 3D.
        missing = [(0, 0), (0, 0), (0, 3 - mixture.dim)]
        self.mixture = mixture.replace(filling=None, entropy=None, mu=None, T=None, t=np.pad(mixture.t, missing), dim=3)
        self.original = mixture
        self.n_max = n_max
        self.ansatz = ansatz
        self.sublattices = mixture.sublattices if sublattices is None else sublattices

    def __call__(self, where: np.ndarray, mu: np.ndarray, T: np.ndarray) -> Batch:
        """Solve points `where` at mu (len(where), species) and T (len(where),)."""
        starts = range(0, len(where), BATCH_SIZES[-1])
        pieces = [np.arange(begin, min(begin + BATCH_SIZES[-1], len(where))) for begin in starts]
        if len(pieces) == 1:
            return self._piece(where, mu, T, pieces[0])
        parts = [self._piece(where, mu, T, piece) for piece in pieces]
        return jax.tree.map(lambda *v: np.concatenate(v), *parts)

    def _piece(self, where: np.ndarray, mu: np.ndarray, T: np.ndarray, piece: np.ndarray) -> Batch:
        """Solve one padded batch."""
        padded = next(s for s in BATCH_SIZES if s >= piece.size)
        index = np.concatenate([piece, np.full(padded - piece.size, piece[-1])])
        chosen = self.mixture[where[index]]
        batch = solve_batch(chosen, mu[index], T[index], n_max=self.n_max, sublattices=self.sublattices)
        batch = jax.tree.map(lambda v: np.asarray(v)[: piece.size], batch)
        for name in DIRECTED:
            batch.outputs[name] = batch.outputs[name][..., : self.original.dim]
        if self.ansatz == "product":
            return batch
        chosen = self.original[where[piece]]
        return dress(chosen, mu[piece], T[piece], batch, n_max=self.n_max, sublattices=self.sublattices)


def _energy_scale(mixture: Mixture) -> np.ndarray:
    return np.maximum(np.max(mixture.U, -1), np.max(mixture.z_t, -1)) + 1e-300


def _first_mu(mixture: Mixture) -> np.ndarray:
    """Classical guess: interaction shift of the filling asked for, minus the kinetic gain."""
    n = np.asarray(mixture.filling)
    other = n[:, ::-1] if mixture.species == 2 else np.zeros_like(n)
    return mixture.U * (n - 0.5) + mixture.U12[:, None] * other - 0.5 * mixture.z_t


def _meet_fillings(mixture: Mixture, evaluate: Evaluator) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Maximise F + mu n* (+ T S*) over mu (and T). Returns mu, T and status bits."""
    size, species = mixture.shape[0], mixture.species
    n_goal = np.asarray(mixture.filling)
    scale = _energy_scale(mixture)
    with_T = mixture.T is None
    zero_entropy = np.zeros(size, bool)
    if with_T:
        S_goal = np.asarray(mixture.entropy) * n_goal.sum(-1)
        zero_entropy = S_goal == 0
        T = np.where(zero_entropy, 0.0, 0.1 * scale)
    else:
        S_goal, T = np.zeros(size), np.asarray(mixture.T, float).copy()
    mu = _first_mu(mixture)
    region = 0.5 * scale
    remark = np.zeros(size, np.int32)
    active = np.arange(size)
    best: dict[str, np.ndarray] = {}
    trial_mu, trial_T = mu.copy(), T.copy()
    for _ in range(_MOST_STEPS):
        now = evaluate(active, trial_mu[active], trial_T[active])
        y = np.concatenate([trial_mu[active], trial_T[active, None]], -1)
        free_T = with_T & ~zero_entropy[active]
        miss = np.concatenate(
            [
                n_goal[active] - now.outputs["filling"],
                np.where(free_T, S_goal[active] - now.outputs["entropy"], 0.0)[:, None],
            ],
            -1,
        )
        goal = np.concatenate([n_goal[active], S_goal[active, None]], -1)
        merit = now.outputs["free_energy"] + (y * goal).sum(-1)
        if not best:
            best = {
                "y": np.zeros((size, species + 1)),
                "miss": np.full((size, species + 1), np.inf),
                "merit": np.full(size, -np.inf),
                "response": np.zeros((size, species + 1, species + 1)),
            }
        rounding = 1e-12 * (1 + np.abs(merit))
        smaller = np.abs(miss).max(-1) < np.abs(best["miss"][active]).max(-1)
        climbs = merit > best["merit"][active] + rounding
        level = merit >= best["merit"][active] - rounding
        accept = climbs | (level & smaller)
        taken = active[accept]
        best["y"][taken], best["miss"][taken] = y[accept], miss[accept]
        best["merit"][taken], best["response"][taken] = merit[accept], now.response[accept]
        region[active] = np.where(accept, np.minimum(2 * region[active], 2 * scale[active]), region[active] / 4)

        tolerance = TARGET_TOLERANCE * (1 + goal)
        met = (np.abs(best["miss"][active]) <= tolerance).all(-1)
        stuck = ~met & (region[active] < _SMALLEST_REGION * scale[active])
        lost = ~met & (np.abs(best["y"][active]).max(-1) > 1e4 * scale[active])
        remark[active[stuck]] |= int(Status.FILLING_GAP)
        remark[active[lost]] |= int(Status.FILLING_UNREACHABLE)
        active = active[~(met | stuck | lost)]
        if not active.size:
            break
        free = np.append(np.ones(species, bool), with_T)
        step = _trust_step(best["response"][active], best["miss"][active], region[active], free)
        new = best["y"][active] + step
        # T stays positive: at most a factor 4 down at once.
        new[:, -1] = np.maximum(new[:, -1], 0.25 * best["y"][active][:, -1])
        trial_mu[active], trial_T[active] = new[:, :-1], new[:, -1]
    # What neither met its target nor collapsed onto a kink is close to one: say so rather than hide it.
    remark[active] |= int(Status.NOT_CONVERGED)
    mu, T = best["y"][:, :-1].copy(), best["y"][:, -1].copy()
    if with_T:
        frozen = ((remark & int(Status.FILLING_GAP)) > 0) & (T < 1e-6 * scale)
        remark[frozen] ^= int(Status.FILLING_GAP | Status.ENTROPY_UNREACHABLE)
    mu, plateau = _centre_plateaus(mixture, evaluate, mu, T, best["response"], remark)
    return mu, T, remark | np.where(plateau, int(Status.PLATEAU), 0).astype(np.int32)


def _trust_step(response: np.ndarray, miss: np.ndarray, region: np.ndarray, free: np.ndarray) -> np.ndarray:
    """Maximiser of the quadratic model within |step| <= region, by eigenvalues of the (positive) response.

    Only the unknowns marked in `free` move.
    """
    response = np.where(free[:, None] & free[None, :], response, np.eye(free.size))
    miss = np.where(free, miss, 0.0)
    curvature, vectors = np.linalg.eigh(0.5 * (response + np.swapaxes(response, -1, -2)))
    slope = np.einsum("pij,pi->pj", vectors, miss)
    safe = np.maximum(curvature, 1e-300)
    with np.errstate(over="ignore"):
        full = np.where(slope == 0, 0.0, slope / safe)
    full = np.where(np.isfinite(full), full, 0.0)
    limited = np.clip(full, -region[:, None], region[:, None])
    step: np.ndarray = np.einsum("pij,pj->pi", vectors, limited)
    return step


def _centre_plateaus(
    mixture: Mixture,
    evaluate: Evaluator,
    mu: np.ndarray,
    T: np.ndarray,
    response: np.ndarray,
    remark: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Where the filling does not change along a direction of mu, move to the middle of the plateau."""
    scale = _energy_scale(mixture)
    curvature, vectors = np.linalg.eigh(response[:, :-1, :-1])
    flat = (curvature[:, 0] * scale < PLATEAU_WIDTH_TOLERANCE) & (remark == 0)
    where = np.flatnonzero(flat)
    if not where.size:
        return mu, flat
    direction = vectors[where, :, 0]
    direction = direction * np.where(direction.sum(-1, keepdims=True) < 0, -1.0, 1.0)
    goal = np.asarray(mixture.filling)[where]
    ends = []
    for sign in (-1.0, 1.0):
        inside, outside = np.zeros(where.size), np.full(where.size, 4.0)
        for _ in range(40):
            middle = 0.5 * (inside + outside)
            trial = mu[where] + (sign * middle * scale[where])[:, None] * direction
            n = evaluate(where, trial, T[where]).outputs["filling"]
            still = np.abs(n - goal).max(-1) < PLATEAU_WIDTH_TOLERANCE
            inside, outside = np.where(still, middle, inside), np.where(still, outside, middle)
            if np.all(outside - inside < 1e-10):
                break
        ends.append(sign * inside * scale[where])
    mu = mu.copy()
    mu[where] += 0.5 * (ends[0] + ends[1])[:, None] * direction
    return mu, flat


def _meet_entropy(mixture: Mixture, evaluate: Evaluator) -> tuple[np.ndarray, np.ndarray]:
    """Find T at given mu where the entropy per particle is the one asked for, by bisection in log T."""
    size = mixture.shape[0]
    goal = np.asarray(mixture.entropy)
    mu = np.asarray(mixture.mu)
    scale = _energy_scale(mixture)

    def excess(where: np.ndarray, log_T: np.ndarray) -> np.ndarray:
        found: np.ndarray = evaluate(where, mu[where], np.exp(log_T)).outputs["entropy_per_particle"]
        return found - goal[where]

    everyone = np.arange(size)
    low, high = np.log(1e-7 * scale), np.log(10.0 * scale)
    below, above = excess(everyone, low), excess(everyone, high)
    remark = np.zeros(size, np.int32)
    zero = goal == 0
    log_T = np.where(above < 0, high, low)
    remark[~zero & ((above < 0) | (below > 0))] = int(Status.ENTROPY_UNREACHABLE)
    active = everyone[~zero & (remark == 0)]
    log_T, jumps = _bracketed_root(excess, active, low, high, below, above, log_T)
    remark[jumps] |= int(Status.ENTROPY_UNREACHABLE)
    return np.where(zero, 0.0, np.exp(log_T)), remark


def _bracketed_root(
    excess: Callable[[np.ndarray, np.ndarray], np.ndarray],
    active: np.ndarray,
    low: np.ndarray,
    high: np.ndarray,
    below: np.ndarray,
    above: np.ndarray,
    root: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Regula falsi with bisection whenever it stalls, for many points; also returns those with a jump instead."""
    low, high, below, above, root = (v.copy() for v in (low, high, below, above, root))
    jumps: list[np.ndarray] = []
    for step in range(200):
        if not active.size:
            break
        lo, hi, f_lo, f_hi = low[active], high[active], below[active], above[active]
        middle = 0.5 * (lo + hi)
        secant = hi - f_hi * (hi - lo) / np.where(f_hi == f_lo, 1.0, f_hi - f_lo)
        inside = (secant > lo) & (secant < hi) & (step % 3 != 0)
        trial = np.where(inside, secant, middle)
        f = excess(active, trial)
        root[active] = trial
        up = f > 0
        high[active], above[active] = np.where(up, trial, hi), np.where(up, f, f_hi)
        low[active], below[active] = np.where(up, lo, trial), np.where(up, f_lo, f)
        met = np.abs(f) <= TARGET_TOLERANCE
        narrow = ~met & (high[active] - low[active] < 1e-13 * np.maximum(1, np.abs(trial)))
        jumps.append(active[narrow & (np.abs(f) > 1e-6)])
        active = active[~(met | narrow)]
    return root, np.concatenate(jumps) if jumps else active


def mismatch(mixture: Mixture, outputs: dict[str, Array]) -> Array:
    """Conditions on (mu, T), zero where met: n - n* and S - s* sum(n); shape (point, unknown)."""
    parts = []
    if mixture.filling is not None:
        parts.append(outputs["filling"] - mixture.filling)
    if mixture.entropy is not None:
        wanted = mixture.entropy * outputs["filling"].sum(-1)
        parts.append((outputs["entropy"] - wanted)[:, None])
    return jnp.concatenate(parts, -1)


def constraint_inverse(mixture: Mixture, response: np.ndarray, unknown: tuple[int, ...]) -> Array | None:
    """Inverse of d mismatch / d(unknowns) at the solution; None where nothing is solved for.

    Pseudo-inverse: along a plateau nothing constrains mu, and mu then does not follow the parameters.
    """
    if not unknown:
        return None
    matrix = response.copy()
    if mixture.entropy is not None:
        per_particle = np.asarray(mixture.entropy)[:, None]
        matrix[:, -1, :] -= per_particle * matrix[:, :-1, :].sum(1)
    index = np.array(unknown)
    rows = index if mixture.filling is not None else np.array([matrix.shape[1] - 1])
    return jnp.asarray(np.linalg.pinv(matrix[:, rows][:, :, index], rcond=1e-12))


def moved(mu: Array, T: Array, dy: Array, unknown: tuple[int, ...], species: int) -> tuple[Array, Array]:
    """Apply a change of the unknowns to mu and T."""
    if 0 in unknown:
        mu = mu + dy[:, :species]
    if species in unknown:
        T = T + dy[:, -1]
    return mu, T
