"""From the initial gas into the lattice: clouds along a curve at given entropy, and how much heat an order bears.

In:  uniform gases and traps (one per point of the curve), atom numbers, entropies or temperatures.
Out: clouds, each started from its neighbour; `Margin`: the entropy at which a phase disappears from the cloud.

Loading is taken to be adiabatic: slow against every local relaxation, no heating, no loss, entropy conserved for both
species together.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from gutz.errors import InputError
from gutz.phases import Phase
from gutz.status import Status
from gutz.trap.cloud import COLDEST, Cloud, solve_cloud
from gutz.trap.geometry import Trap
from gutz.trap.local import LocalGas

FloatArray = NDArray[np.float64]

PRESENT = 0.01
"""Fraction of all atoms in a phase below which it counts as gone from the cloud."""

HOTTEST = 2.0
"""Temperature, in units of the largest energy of a site, up to which a phase is looked for."""

_MARGIN_TOLERANCE = 5e-3
_ACCURACY = 0.02
_MOST_TRIALS = 25


class Point(NamedTuple):
    """One point of a curve; exactly one of T and entropy (per particle, k_B) is given."""

    gas: LocalGas
    trap: Trap
    atoms: FloatArray
    T: float | None
    entropy: float | None


def follow(points: Sequence[Point]) -> Iterator[Cloud]:
    """Solve the points in turn, each from what its neighbours lead one to expect, on their nodes."""
    solved: list[Cloud] = []
    for point in points:
        guess, near = None, solved[-1] if solved and solved[-1].gas.species == point.gas.species else None
        if near is not None:
            if not point.gas.fixed:
                point.gas.n_max = max(point.gas.n_max, near.gas.n_max)
            guess = _scaled(near)
            if len(solved) > 1:
                guess = 2.0 * guess - _scaled(solved[-2])
            guess[-1] = max(guess[-1], 10.0 * COLDEST)
            guess *= point.gas.scale
            guess[:-1] -= 0.5 * point.gas.z_t
        solved = [
            *solved[-1:],
            solve_cloud(point.gas, point.trap, point.atoms, T=point.T, entropy=point.entropy, guess=guess, near=near),
        ]
        yield solved[-1]


def _scaled(cloud: Cloud) -> FloatArray:
    """(mu_1 + z t_1 / 2, .., T) in units of the largest energy of a site, which along a curve changes slowly."""
    return np.append(cloud.mu + 0.5 * cloud.gas.z_t, cloud.T) / cloud.gas.scale


@dataclass(frozen=True)
class Margin:
    """How much heat a phase bears. Entropies per particle in k_B.

    fraction: of all atoms in the phase now. critical_entropy, critical_T: where less than `PRESENT` of the atoms are
    left in it, nan if that is nowhere. margin: critical_entropy minus the cloud's entropy; negative where the cloud
    must be colder. words: what was found, for people.
    """

    phase: Phase
    fraction: float
    critical_entropy: float
    critical_T: float
    margin: float
    words: str


def heating_margin(cloud: Cloud, phase: Phase, hint: float | None = None) -> Margin:
    """Warm the cloud (or cool it, where the phase is absent) at fixed atom numbers until the phase goes (or comes).

    hint: the critical temperature expected, in units of the largest energy of a site (a neighbour's).
    Finds the entropy where the fraction of atoms in the phase crosses `PRESENT`, to 2 % in T. Raises InputError for
    vacuum.
    """
    if phase == Phase.VACUUM:
        raise InputError('the wanted phase is "vacuum"; it must be a phase that holds atoms')
    if cloud.gas.ansatz == "product" and phase in (Phase.PAIRED, Phase.COUNTERFLOW):
        words = "the product ansatz cannot see this phase; use the dressed one"
        return Margin(phase, 0.0, np.nan, np.nan, np.nan, words)
    fraction, coldest = cloud.fraction(phase), COLDEST * cloud.gas.scale
    present = fraction >= PRESENT
    trials = _bracket(cloud, phase, present, hint)
    if trials is None:
        return _never(phase, fraction, present)
    inner, outer = trials
    for _ in range(_MOST_TRIALS):
        low, high = np.log(max(inner.T, coldest)), np.log(max(outer.T, coldest))
        if abs(high - low) < _ACCURACY:
            break
        # The fraction falls nearly straight towards the end of the phase, and stays 0 behind it.
        ahead = inner.fraction(phase) - PRESENT
        behind = outer.fraction(phase) - PRESENT
        share = min(max(ahead / (ahead - behind), 0.1), 0.9) if ahead * behind < 0 else 0.5
        middle = _at_T(inner, float(np.exp(low + share * (high - low))))
        if (middle.fraction(phase) >= PRESENT) == present:
            inner = middle
        else:
            outer = middle
    last = _at_T(inner, float(np.sqrt(max(inner.T, coldest) * max(outer.T, coldest))), cloud.phonons is not None)
    critical = last.entropy_per_particle
    margin = critical - cloud.entropy_per_particle
    words = (
        f"it bears {margin:.3g} k_B per atom of heating before less than {PRESENT:.0%} of the atoms are in it"
        if present
        else f"it is absent, and appears when the entropy is lower by {-margin:.3g} k_B per atom"
    )
    return Margin(phase, fraction, critical, last.T, margin, words)


def _bracket(cloud: Cloud, phase: Phase, present: bool, hint: float | None) -> tuple[Cloud, Cloud] | None:
    """Two clouds between which the phase goes, the first like the cloud itself; None if it never does."""
    scale = cloud.gas.scale
    step = 1.5 if present else 1 / 1.5
    inner, T = cloud, max(cloud.T, COLDEST * scale)
    wished = None if hint is None else hint * scale
    if wished is not None and (wished > T) == present:
        T = wished * (0.95 if present else 1.05) / step
        step = 1.1 if present else 1 / 1.1
    while COLDEST * scale <= T * step <= HOTTEST * scale:
        T *= step
        trial = _at_T(inner, T)
        if (trial.fraction(phase) >= PRESENT) != present:
            return inner, trial
        inner = trial
        step = step**1.3
    return None


def _at_T(near: Cloud, T: float, phonons: bool = False) -> Cloud:
    """A cloud of other temperature. Collective modes do not change which phases there are, only the entropy."""
    guess, tolerance = np.append(near.mu, T), _MARGIN_TOLERANCE
    atoms = near.atoms
    return solve_cloud(near.gas, near.trap, atoms, T=T, guess=guess, near=near, tolerance=tolerance, phonons=phonons)


def _never(phase: Phase, fraction: float, present: bool) -> Margin:
    if present:
        words = "it stays in the cloud up to the highest temperature tried"
        return Margin(phase, fraction, np.nan, np.nan, np.inf, words)
    words = "it appears at no temperature with these numbers and this trap"
    return Margin(phase, fraction, np.nan, np.nan, -np.inf, words)


def worst(clouds: Sequence[Cloud]) -> Status:
    """All remarks of a curve together."""
    code = Status.OK
    for cloud in clouds:
        code |= cloud.status
    return code
