"""Critical temperature of the ordinary superfluid, from the variational states themselves.

In:  a `Mixture` of numbers (its own T is not used).
Out: the highest temperature with single-particle order, dressed and product, with the entropy per particle there.

The order is looked for on a ladder of temperatures and the highest change bisected, so first-order melting is found as
well. In two dimensions the jump rule of Nelson and Kosterlitz decides (`gutz.order`); in one there is none.
"""

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np

from gutz.model import Mixture
from gutz.phases import ORDER_THRESHOLD, Phase, Range
from gutz.solution import Solution
from gutz.solver import solve
from gutz.status import UNTRUSTED, Status

Array = Any

_RUNGS = 12
_COLDEST = 0.03
"""Lowest temperature looked at, relative to the sum of all hopping."""
_PRECISION = 1e-5
_ORDERED = (Phase.SUPERFLUID, Phase.SUPERFLUID_1, Phase.SUPERFLUID_2, Phase.SUPERSOLID)


class Melting(NamedTuple):
    """Flat arrays (point,). T: 0 without order. phase: just below T. entropy, dressing, status: just above T."""

    T: np.ndarray
    entropy_per_particle: np.ndarray
    phase: np.ndarray
    dressing: np.ndarray
    status: np.ndarray


def melt(mixture: Mixture, ansatz: str, *, rule: bool = True) -> Melting:
    """Highest temperature with single-particle order of every point of a flat mixture.

    rule: apply the rule for the dimension (a plane's order ends before mean field's does). Temperatures are relative to
    five digits.
    """
    size = mixture.shape[0]
    base = mixture.replace(T=np.zeros(size), entropy=None)
    scale = np.maximum(np.asarray(mixture.z_t).max(-1), 1e-300)
    ladder = scale[:, None] * np.geomspace(_COLDEST, 4.0, _RUNGS)

    def look(where: np.ndarray, T: np.ndarray) -> tuple[np.ndarray, Solution]:
        found = solve(base[where].replace(T=T), ansatz)
        if rule:
            return np.isin(found.phase, _ORDERED) & (np.asarray(found.order_range) != Range.SHORT), found
        return (np.abs(found.order_parameter) > ORDER_THRESHOLD).any(-1), found

    everyone = np.arange(size)
    ordered = np.array([look(everyone, ladder[:, k])[0] for k in range(_RUNGS)]).T
    while ordered[:, -1].any() and ladder.shape[1] < 3 * _RUNGS:
        # Many weakly interacting atoms per site stay superfluid far above z t.
        ladder = np.concatenate([ladder, 2.0 * ladder[:, -1:]], axis=1)
        ordered = np.concatenate([ordered, look(everyone, ladder[:, -1])[0][:, None]], axis=1)
    some = ordered.any(-1) & ~ordered[:, -1]
    last = ordered.shape[1] - 1 - np.argmax(ordered[:, ::-1], axis=1)
    at = np.flatnonzero(some)
    low, high = ladder[at, last[at]], ladder[at, last[at] + 1]
    _bisect(lambda T: look(at, T)[0], low, high)
    T, entropy = np.zeros(size), np.zeros(size)
    phase, dressing = np.full(size, int(Phase.NORMAL)), np.zeros(size)
    status = np.where(ordered[:, -1], int(Status.NOT_CONVERGED), 0)
    if at.size:
        below, above = look(at, low)[1], look(at, high)[1]
        T[at] = 0.5 * (low + high)
        entropy[at] = above.entropy_per_particle
        phase[at] = below.phase
        status[at] |= np.asarray(above.status) & int(UNTRUSTED | Status.FALLBACK | Status.DRESSING_LARGE)
        if ansatz == "dressed":
            dressing[at] = above.dressing
    return Melting(T, entropy, phase, dressing, status)


def _bisect(ordered: Callable[[np.ndarray], np.ndarray], low: np.ndarray, high: np.ndarray) -> None:
    """Halve brackets in place until they are narrow."""
    while low.size and np.max((high - low) / high) > _PRECISION:
        middle = 0.5 * (low + high)
        below = ordered(middle)
        low[below], high[~below] = middle[below], middle[~below]
