"""Make the entries of a plan that a file does not hold yet, one after the other.

In:  entries of a plan, the path of the file.
Out: the file with every entry added as soon as it is done; stopping loses at most the one at work.
"""

import os
import time
from collections.abc import Callable, Sequence
from pathlib import Path

import xarray as xr

from gutz import __version__
from gutz.reference import bulk, store
from gutz.reference.measure import measure
from gutz.reference.plan import Entry, check_memory


def make(
    entries: Sequence[Entry],
    path: Path,
    *,
    notice: Callable[[str], None] = lambda words: None,
    renew: bool = False,
) -> tuple[int, int]:
    """Make what is missing; entries of the same name but other settings are made anew. Returns (made, kept).

    renew: make every entry anew. Raises ResourceError, before anything is computed, for an entry that does not
    fit in memory.
    """
    for entry in entries:
        check_memory(entry, free_memory())
    held = store.read_all(path) if path.exists() else {}
    made = 0
    for entry in entries:
        if not renew and entry.name in held and held[entry.name].attrs.get("identity") == entry.sha256():
            continue
        start = time.process_time()
        raw = measure(entry, notice)
        held[entry.name] = finish(entry, raw, time.process_time() - start)
        store.write_all(path, held)
        made += 1
    return made, len(entries) - made


def finish(entry: Entry, raw: xr.Dataset, seconds: float) -> xr.Dataset:
    """The entry as stored: measurements, bulk values, provenance (no host, user or path)."""
    whole = bulk.extrapolate(entry, raw)
    return whole.assign_attrs(
        entry=entry.canonical(), identity=entry.sha256(), gutz_version=__version__, cpu_seconds=round(seconds, 1)
    )


def free_memory() -> float:
    """Bytes of memory this machine has free; infinite where it does not tell."""
    try:
        return float(os.sysconf("SC_AVPHYS_PAGES") * os.sysconf("SC_PAGE_SIZE"))
    except (ValueError, OSError, AttributeError):
        return float("inf")
