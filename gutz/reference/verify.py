"""Recompute a stored entry in part, and tell whether the numbers come out again.

In:  a stored entry (checksum already found right).
Out: one `Check` per quantity: the largest deviation per site, and what is allowed.

Only the shortest chain is solved again, in the way it was first solved (same seed); a chain that is right there
and a checksum that matches leave little room for the longer ones to be wrong.
"""

from typing import NamedTuple

import numpy as np
import xarray as xr

from gutz.errors import InputError
from gutz.reference.measure import measure
from gutz.reference.plan import restore

TOLERANCE = {"total_energy": 1e-7}
"""Allowed deviation per site; sweeps stop at a relative energy change of 1e-8, and correlators are good to its root."""
_OTHERS = 2e-5

SMALL_SECONDS = 60.0
"""Entries that took less time in all are candidates for a random check."""

_IGNORED = ("discarded", "converged")


class Check(NamedTuple):
    """One recomputed quantity: its largest deviation from the stored one, per site, and the most allowed."""

    name: str
    deviation: float
    allowed: float

    @property
    def passed(self) -> bool:
        """Whether the number came out again."""
        return self.deviation <= self.allowed


def choose(entries: dict[str, xr.Dataset], seed: int | None = None) -> str:
    """Pick a small entry at random. Raises InputError if there is none."""
    small = [name for name, dataset in entries.items() if dataset.attrs["cpu_seconds"] <= SMALL_SECONDS]
    if not small:
        raise InputError(f"no entry took less than {SMALL_SECONDS:g} s; name the one to verify")
    return str(np.random.default_rng(seed).choice(small))


def verify(dataset: xr.Dataset) -> list[Check]:
    """Solve the shortest chain of the entry again and compare every sum (or every exact number)."""
    entry = restore(dataset.attrs["entry"])
    again = measure(entry, shortest=True)
    if "run" not in again.dims:
        return [_check(name, again[name].values, dataset[name].values, 1.0) for name in map(str, again.data_vars)]
    sites = float(entry.lengths[0])
    stored = dataset.isel(run=np.flatnonzero((dataset["length"] == sites) & (dataset["bond"] == entry.bond)))
    names = [str(name) for name in again.data_vars if "run" in again[name].dims and name not in _IGNORED]
    return [_check(name, again[name].values, stored[name].values, sites) for name in names]


def _check(name: str, again: object, stored: object, sites: float) -> Check:
    deviation = float(np.max(np.abs(np.asarray(again) - np.asarray(stored)))) / sites
    return Check(name, deviation, TOLERANCE.get(name, _OTHERS))
