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


class Point(NamedTuple):
    """One point of a curve; exactly one of T and entropy (per particle, k_B) is given."""

    gas: LocalGas
    trap: Trap
    atoms: FloatArray
    T: float | None
    entropy: float | None


def follow(points: Sequence[Point]) -> Iterator[Cloud]:
    """Solve the points in turn, each from its neighbour's chemical potentials and temperature.

    The guess is scaled with the largest energy of a site, which along a loading curve changes by orders.
    """
    last: Cloud | None = None
    for point in points:
        guess = None
        if last is not None and last.gas.species == point.gas.species:
            if not point.gas.fixed:
                point.gas.n_max = last.gas.n_max
            ratio = point.gas.scale / last.gas.scale
            T = max(last.T, 10.0 * COLDEST * last.gas.scale)
            guess = np.append((last.mu + 0.5 * last.gas.z_t) * ratio - 0.5 * point.gas.z_t, T * ratio)
        last = solve_cloud(point.gas, point.trap, point.atoms, T=point.T, entropy=point.entropy, guess=guess)
        yield last


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


def heating_margin(cloud: Cloud, phase: Phase) -> Margin:
    """Warm the cloud (or cool it, where the phase is absent) at fixed atom numbers until the phase goes (or comes).

    The entropy where the fraction of atoms in the phase crosses `PRESENT`, to 2 % in T. Raises InputError for vacuum.
    """
    if phase == Phase.VACUUM:
        raise InputError('the wanted phase is "vacuum"; it must be a phase that holds atoms')
    fraction, scale = cloud.fraction(phase), cloud.gas.scale
    if cloud.gas.ansatz == "product" and phase in (Phase.PAIRED, Phase.COUNTERFLOW):
        return Margin(
            phase, 0.0, np.nan, np.nan, np.nan, "the product ansatz cannot see this phase; use the dressed one"
        )
    present = fraction >= PRESENT
    start = max(cloud.T, COLDEST * scale)
    inner, outer = cloud, None
    factor = 1.6 if present else 1.0 / 1.6
    T = start
    while COLDEST * scale <= T * factor <= HOTTEST * scale:
        T *= factor
        trial = _at_T(inner, T)
        if (trial.fraction(phase) >= PRESENT) != present:
            outer = trial
            break
        inner = trial
    if outer is None:
        return _never(cloud, phase, fraction, present)
    while abs(np.log(outer.T / max(inner.T, 0.1 * COLDEST * scale))) > _ACCURACY:
        middle = _at_T(inner, float(np.sqrt(max(inner.T, 0.1 * COLDEST * scale) * outer.T)))
        if (middle.fraction(phase) >= PRESENT) == present:
            inner = middle
        else:
            outer = middle
    critical = 0.5 * (inner.entropy_per_particle + outer.entropy_per_particle)
    margin = critical - cloud.entropy_per_particle
    words = (
        f"the phase bears {margin:.3g} k_B per atom of heating before less than {PRESENT:.0%} of the atoms are in it"
        if present
        else f"the phase is absent; it appears when the entropy is lower by {-margin:.3g} k_B per atom"
    )
    return Margin(phase, fraction, critical, 0.5 * (inner.T + outer.T), margin, words)


def _at_T(near: Cloud, T: float) -> Cloud:
    guess = np.append(near.mu, T)
    return solve_cloud(near.gas, near.trap, near.atoms, T=T, guess=guess, tolerance=_MARGIN_TOLERANCE)


def _never(cloud: Cloud, phase: Phase, fraction: float, present: bool) -> Margin:
    if present:
        words = "the phase stays in the cloud up to the highest temperature tried"
        return Margin(phase, fraction, np.nan, np.nan, np.inf, words)
    words = "the phase appears at no temperature with these numbers and this trap"
    return Margin(phase, fraction, np.nan, np.nan, -np.inf, words)


def worst(clouds: Sequence[Cloud]) -> Status:
    """All remarks of a curve together."""
    code = Status.OK
    for cloud in clouds:
        code |= cloud.status
    return code
