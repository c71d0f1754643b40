"""What survives from tubes to planes to the cube: one point with its neighbours switched on one direction at a time.

In:  a `Mixture` of one point.
Out: `Ladder`: product and dressed results on every rung, and at the end z -> infinity.

A rung has hopping t along x, r t along y, and s t along z with r, s from 0 to 1; everything else stays. The dressed
term is of order (z t)²/z, so at fixed z t the product ansatz is the limit z -> infinity, and the difference between
the two is the method's own estimate of its error.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gutz.errors import InputError
from gutz.model import Mixture
from gutz.solution import Solution
from gutz.solver import solve

Array = NDArray[np.float64]

STEPS = 5
"""Rungs from one whole dimension to the next."""


@dataclass(frozen=True)
class Ladder:
    """Results on all rungs. dimension: 1 + r + s, (n,). weights: hopping along x, y, z relative to t, (n, 3).

    product, dressed: solutions with batch shape (n,). difference: name -> largest |dressed - product| over the entries
    of one point, (n,).
    """

    dimension: Array
    weights: Array
    product: Solution
    dressed: Solution
    difference: dict[str, Array]


COMPARED = ("free_energy", "order_parameter", "filling", "entropy", "number_variance", "coherence")
"""Outputs whose difference is listed."""


def climb(mixture: Mixture, steps: int = STEPS) -> Ladder:
    """Solve one point from one to three dimensions.

    mixture: a single point; its hopping along x is the t of every direction. steps: rungs per dimension. Raises
    InputError for a batch, or fewer than one step.
    """
    if int(np.prod(mixture.shape, dtype=int)) != 1:
        raise InputError(f"mixture has {int(np.prod(mixture.shape, dtype=int))} points; a ladder is climbed from one")
    if steps < 1:
        raise InputError(f"steps is {steps}; it must be at least 1")
    part = np.linspace(0.0, 1.0, steps + 1)
    first = np.stack([np.ones_like(part), part, np.zeros_like(part)], -1)
    second = np.stack([np.ones_like(part), np.ones_like(part), part], -1)[1:]
    weights = np.concatenate([first, second])
    one = mixture.flat().map(np.asarray)
    along_x = np.asarray(one.t)[0, :, 0]
    many = one.map(lambda v: np.repeat(v, len(weights), axis=0))
    many = many.replace(t=along_x[None, :, None] * weights[:, None, :], dim=3)
    found = {ansatz: solve(many, ansatz) for ansatz in ("product", "dressed")}
    difference = {name: _apart(found["product"], found["dressed"], name) for name in COMPARED}
    return Ladder(weights.sum(-1), weights, found["product"], found["dressed"], difference)


def _apart(one: Solution, other: Solution, name: str) -> Array:
    a, b = (np.asarray(getattr(s, name), float) for s in (one, other))
    return np.abs(a - b).reshape(len(a), -1).max(-1)


def whole(ladder: Ladder) -> dict[int, int]:
    """Rungs with one, two and three equal directions: dimension -> index."""
    return {d: int(np.argmin(np.abs(ladder.dimension - d))) for d in (1, 2, 3)}


def to_records(ladder: Ladder, words: Any) -> list[dict[str, Any]]:
    """Plain data, rung by rung; words(phase, order_range) names a phase."""
    rows: list[dict[str, Any]] = []
    for i, dimension in enumerate(ladder.dimension):
        row: dict[str, Any] = {"dimension": float(dimension), "hopping": ladder.weights[i].tolist()}
        for ansatz in ("product", "dressed"):
            s: Solution = getattr(ladder, ansatz)
            row[ansatz] = {
                "phase": words(int(s.phase[i]), int(s.order_range[i])),
                "order_parameter": np.asarray(s.order_parameter[i]).tolist(),
                "pair_order": float(s.pair_order[i]),
                "antipair_order": float(s.antipair_order[i]),
                "free_energy": float(s.free_energy[i]),
                "filling": np.asarray(s.filling[i]).tolist(),
                "entropy_per_particle": float(s.entropy_per_particle[i]),
                "status": int(s.status[i]),
            }
        row["dressing"] = float(ladder.dressed.dressing[i])
        row["difference"] = {name: float(values[i]) for name, values in ladder.difference.items()}
        rows.append(row)
    return rows
