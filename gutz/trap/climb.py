"""Chemical potentials and temperature from atom numbers and entropy, by climbing a concave function.

In:  a function that sums the cloud at y = (mu_1, .., T): grand potential, (N_1, .., S), their derivatives.
Out: y where the sums meet the goal; at a jump between two clouds, the states on its sides and their shares.

The grand potential of the cloud is concave in y, so y is the maximum of Omega + y . goal. Newton steps inside a trust
region cannot get lost. Where two phases coexist the maximum is a kink: no y gives the numbers asked for, but a
mixture of the states found on its sides does (the lever rule). These shares come from non-negative least squares
over the points tried close by; the shortest combined mismatch is also the direction in which to go on climbing along a
ridge (Lemaréchal's bundle idea, common practice).
"""

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import nnls

FloatArray = NDArray[np.float64]

MOST_STEPS = 60
_SMALLEST_REGION = 1e-11
_SMALL_REGION = 1e-3
"""Steps below this, in units of the largest energy, mean that a kink is near."""
_BUNDLE = 8


class Sums(NamedTuple):
    """One trial cloud. potential: Omega; totals: (N_1, .., S); response: d totals / d y; states: the local states."""

    y: FloatArray
    potential: float
    totals: FloatArray
    response: FloatArray
    states: Any


class Climbed(NamedTuple):
    """shares: of `sides`, summing to 1; the first side is the best single point. miss: goal - totals of the mixture."""

    sides: tuple[Sums, ...]
    shares: FloatArray
    miss: FloatArray
    met: bool


def climb(
    sums: Callable[[FloatArray], Sums],
    start: FloatArray,
    goal: FloatArray,
    free: NDArray[np.bool_],
    tolerance: FloatArray,
    bearable: FloatArray,
    scale: float,
    lowest_T: float,
) -> Climbed:
    """Maximise Omega(y) + y . goal over the components of y marked `free`, until |miss| <= tolerance.

    Where steps have become small, |miss| <= bearable will do: one node has changed its phase at once. Steps are at
    most 2 scale. T, the last component, falls by a factor of 4 at most and not below `lowest_T`, where the climb ends
    if the entropy asked for is lower still.
    """
    best = sums(start)
    tried = [best]
    secant = np.zeros_like(best.response)
    region = 0.5 * scale
    for _ in range(MOST_STEPS):
        miss = _miss(best, goal, free)
        if region <= _SMALL_REGION * scale and np.all(np.abs(miss) <= bearable):
            return Climbed((best,), np.ones(1), miss, True)
        sides, shares, miss = _mixture(best, tried, goal, free, region, scale)
        if np.all(np.abs(miss) <= (tolerance if len(sides) == 1 else bearable)):
            return Climbed(sides, shares, miss, True)
        frozen = free[-1] and best.y[-1] <= 1.001 * lowest_T and miss[-1] < -bearable[-1]
        if frozen or region < _SMALLEST_REGION * scale:
            break
        # On a ridge each side alone may lack a species: only together do they know both directions.
        response = np.asarray(sum(x * s.response for x, s in zip(shares, sides, strict=True)))
        step = _trust_step(response + secant, miss, region, free, float(goal.max()) / scale)
        new = best.y + step
        if free[-1]:
            new[-1] = max(new[-1], 0.25 * best.y[-1], lowest_T)
        if np.array_equal(new, best.y):
            break
        trial = sums(new)
        tried.append(trial)
        gain = (trial.potential - best.potential) + float((new - best.y) @ goal)
        rounding = 1e-13 * (abs(best.potential) + float(np.abs(best.y * goal).sum()))
        closer = np.abs(_miss(trial, goal, free) / tolerance).max() < np.abs(_miss(best, goal, free) / tolerance).max()
        if gain > rounding or (gain >= -rounding and closer):
            secant = _secant(secant, best, trial, free)
            best, region = trial, min(2.0 * region, 2.0 * scale)
        else:
            region = min(region, float(np.abs(new - best.y).max())) / 4.0
    sides, shares, miss = _mixture(best, tried, goal, free, region, scale)
    return Climbed(sides, shares, miss, bool(np.all(np.abs(miss) <= bearable)))


def _miss(at: Sums, goal: FloatArray, free: NDArray[np.bool_]) -> FloatArray:
    return np.where(free, goal - at.totals, 0.0)


def _mixture(
    best: Sums, tried: list[Sums], goal: FloatArray, free: NDArray[np.bool_], region: float, scale: float
) -> tuple[tuple[Sums, ...], FloatArray, FloatArray]:
    """The best point, or, once the region is small, the mixture of points close to it that comes nearest the goal."""
    alone = (best,), np.ones(1), _miss(best, goal, free)
    if region > _SMALL_REGION * scale:
        return alone
    near = [s for s in tried if np.abs(s.y - best.y).max() <= 8.0 * region + 1e-9 * scale and s is not best][-_BUNDLE:]
    if not near:
        return alone
    sides = [best, *near]
    size = np.maximum(np.abs(goal), 1e-12)
    rows = np.stack([np.where(free, s.totals, 0.0) / size for s in sides], -1)
    heavy = 1e3
    matrix = np.concatenate([rows, np.full((1, len(sides)), heavy)])
    target = np.append(np.where(free, goal, 0.0) / size, heavy)
    shares, _ = nnls(matrix, target)
    shares = shares / shares.sum()
    # The best point stays in, so that it is the first side, if need be with no share.
    kept = np.flatnonzero((shares > 1e-9) | (np.arange(len(sides)) == 0))
    shares = shares[kept]
    chosen = tuple(sides[k] for k in kept)
    miss = np.where(free, goal - sum(x * s.totals for x, s in zip(shares, chosen, strict=True)), 0.0)
    if np.abs(miss / size).max() > 0.9 * np.abs(alone[2] / size).max():
        return alone
    return chosen, shares, miss


def _trust_step(
    response: FloatArray, miss: FloatArray, region: float, free: NDArray[np.bool_], natural: float
) -> FloatArray:
    """Maximiser of the quadratic model within the region, by eigenvalues of the response made positive.

    natural: size of a response, atoms per energy; much smaller ones are held back.
    """
    both = free[:, None] & free[None, :]
    matrix = np.where(both, 0.5 * (response + response.T), 0.0)
    # Variables differ in size by their atom numbers: scaled, so that no small cloud is lost beside a large one.
    size = np.sqrt(np.maximum(np.diagonal(matrix), 1e-6 * natural))
    size = np.where(free, size, 1.0)
    curvature, vectors = np.linalg.eigh(matrix / np.outer(size, size))
    slope = vectors.T @ (miss / size)
    step = vectors @ (slope / np.maximum(curvature, 1e-8 * max(curvature.max(), 1.0))) / size
    step = np.where(free, step, 0.0)
    return np.asarray(step * min(1.0, region / max(np.abs(step).max(), 1e-300)))


def _secant(secant: FloatArray, old: Sums, new: Sums, free: NDArray[np.bool_]) -> FloatArray:
    """Symmetric rank-one correction, so that mean response + secant reproduces the change of the totals just seen.

    It stands for what the nodes' own responses leave out: borders between phases that move, and, for the dressed
    ansatz, dn/dT.
    """
    dy = np.where(free, new.y - old.y, 0.0)
    change = np.where(free, new.totals - old.totals, 0.0) - (0.5 * (old.response + new.response) + secant) @ dy
    bottom = float(change @ dy)
    if abs(bottom) < 1e-8 * float(np.linalg.norm(change) * np.linalg.norm(dy)) or bottom == 0:
        return secant
    return np.asarray(secant + np.outer(change, change) / bottom)
