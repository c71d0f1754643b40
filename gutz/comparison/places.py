"""Where points lie among each other: parameters of chains made comparable, and distances between them.

In:  hoppings, interactions, fillings, temperatures of any number of points (one energy unit per point).
Out: `Places`, and distances in which 1 means "too far to say anything".

Each coordinate is divided by the step over which the answers of a chain change about as much as mean field is
wrong there (own choice, made by looking at the stored set):
    interaction      ln(1 + U/(4t)) / 0.4     (U above 100 t counts as 100 t: hard core)
    between species  U12 / (|U12| + 4 sqrt(t1 t2)) / 0.2  and  U12 / sqrt(U1 U2) / 0.3
    filling          n / 0.2 per species, and 1.5 between a whole total filling and any other
    hoppings         ln(t2/t1) / 0.7
    temperature      ln(1 + 5 T/t) / 0.6
"""

from dataclasses import dataclass
from typing import Any, Self

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

HARD_CORE = 100.0
"""U/t that stands for an interaction no two atoms overcome."""

WHOLE = 0.01
"""A total filling this close to a whole number counts as whole."""

_INTERACTION, _CROSS, _RATIO, _FILLING, _WHOLE_STEP, _HOPPING, _HEAT = 0.4, 0.2, 0.3, 0.2, 1.5, 0.7, 0.6


@dataclass(frozen=True, eq=False)
class Places:
    """Points of one number of species, in chains. t, U, filling: shape (points, species); U12, T: (points,).

    hard_core: whether a site holds at most one atom of each species, shape (points,).
    """

    t: Floats
    U: Floats
    U12: Floats
    filling: Floats
    T: Floats
    hard_core: NDArray[np.bool_]

    @property
    def species(self) -> int:
        """1 or 2."""
        return int(self.t.shape[-1])

    @property
    def size(self) -> int:
        """Number of points."""
        return int(self.t.shape[0])

    def __getitem__(self, index: Any) -> Self:
        return type(self)(*(getattr(self, name)[index] for name in ("t", "U", "U12", "filling", "T", "hard_core")))

    @property
    def commensurate(self) -> NDArray[np.bool_]:
        """Whether the total filling is a whole number of atoms per site."""
        total = self.filling.sum(-1)
        result: NDArray[np.bool_] = (np.abs(total - np.round(total)) < WHOLE) & (total > 0.5)
        return result

    def coordinates(self) -> Floats:
        """Scaled coordinates, shape (points, coordinates)."""
        strength = np.where(self.hard_core[:, None], HARD_CORE, np.minimum(self.U / self.t, HARD_CORE))
        mean_t = np.sqrt(self.t.prod(-1)) if self.species == 2 else self.t[:, 0]
        columns = [
            *(np.log1p(strength / 4) / _INTERACTION).T,
            *(self.filling / _FILLING).T,
            self.commensurate * _WHOLE_STEP,
            np.log1p(5 * self.T / mean_t) / _HEAT,
        ]
        if self.species == 2:
            own = np.sqrt((strength * self.t).prod(-1))
            columns += [
                self.U12 / (np.abs(self.U12) + 4 * mean_t) / _CROSS,
                np.clip(self.U12 / own, -1.5, 1.5) / _RATIO,
                np.log(self.t[:, 1] / self.t[:, 0]) / _HOPPING,
            ]
        return np.stack(columns, axis=-1)

    def swapped(self) -> Self:
        """The same points with the species' names exchanged."""
        flipped = {name: getattr(self, name)[:, ::-1] for name in ("t", "U", "filling")}
        return type(self)(flipped["t"], flipped["U"], self.U12, flipped["filling"], self.T, self.hard_core)


def distances(points: Places, others: Places) -> Floats:
    """Distance of every point to every other, shape (points, others); which species is called 1 does not matter."""
    mine = points.coordinates()

    def to(theirs: Floats) -> Floats:
        return np.linalg.norm(mine[:, None, :] - theirs[None, :, :], axis=-1)

    direct = to(others.coordinates())
    return direct if points.species == 1 else np.minimum(direct, to(others.swapped().coordinates()))
