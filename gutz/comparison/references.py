"""The stored chains as the comparison sees them: checked once, placed, looked up.

In:  a file of reference entries.
Out: `References`: entries, their datasets, their places; neighbours of any point with distances and weights.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gutz.comparison.places import Places, distances
from gutz.errors import InputError
from gutz.reference import store
from gutz.reference.plan import Entry, restore
from gutz.scan.fields import suggestion

Floats = NDArray[np.float64]

NEARBY = 1.0
"""Distance up to which a reference says something about a point."""

SAME = 1e-6
"""Distance below which a point is the reference's own."""


@dataclass(frozen=True, eq=False)
class References:
    """Entries of one number of species, with their datasets and places, in the same order."""

    entries: tuple[Entry, ...]
    datasets: tuple[xr.Dataset, ...]
    places: Places

    @property
    def names(self) -> list[str]:
        """Names, in order."""
        return [entry.name for entry in self.entries]

    @property
    def noise(self) -> NDArray[np.int64]:
        """Lengths of the chains whose noise maps are stored, 0 without one."""
        return np.array([entry.noise_length for entry in self.entries], dtype=np.int64)

    def weights(self, points: Places) -> tuple[Floats, Floats]:
        """Distances (points, entries), and weights 1/d^2 of those nearby, summing to 1; all nan with none nearby.

        A point that is a reference's own takes that one alone.
        """
        far = distances(points, self.places)
        inverse = np.where(far <= NEARBY, 1 / np.maximum(far, SAME) ** 2, 0.0)
        own = far <= SAME
        inverse = np.where(own.any(-1, keepdims=True), own, inverse)
        total = inverse.sum(-1, keepdims=True)
        return far, np.where(total > 0, inverse / np.where(total > 0, total, 1), np.nan)


def load(path: Path | None = None) -> dict[int, References]:
    """All stored entries by number of species. Raises DataError if the file or an entry is damaged."""
    held = store.read_all(path or store.STORED)
    pairs = [(restore(dataset.attrs["entry"]), dataset) for dataset in held.values()]
    found = {}
    for species in (1, 2):
        chosen = [(entry, dataset) for entry, dataset in pairs if entry.species == species]
        if chosen:
            entries = tuple(entry for entry, _ in chosen)
            datasets = tuple(dataset for _, dataset in chosen)
            found[species] = References(entries, datasets, places(entries, datasets))
    return found


def find(every: dict[int, References], name: str) -> tuple[int, int]:
    """Number of species and index of an entry. Raises InputError for an unknown name."""
    for species, some in every.items():
        if name in some.names:
            return species, some.names.index(name)
    known = tuple(other for some in every.values() for other in some.names)
    raise InputError(f'"{name}" is not a stored entry{suggestion(name, known)}; gutz reference list shows all')


def places(entries: Sequence[Entry], datasets: Sequence[xr.Dataset]) -> Places:
    """Where entries lie; the filling is the one asked for, or for thermal chains the one that came out."""
    filling = [
        np.array(entry.filling) if entry.filling else np.atleast_1d(dataset["filling"].values)
        for entry, dataset in zip(entries, datasets, strict=True)
    ]
    return Places(
        t=np.array([entry.t for entry in entries], dtype=float),
        U=np.array([entry.U for entry in entries], dtype=float),
        U12=np.array([entry.U12 for entry in entries], dtype=float),
        filling=np.array(filling, dtype=float),
        T=np.array([entry.T for entry in entries], dtype=float),
        hard_core=np.array([entry.n_max == 1 for entry in entries]),
    )
