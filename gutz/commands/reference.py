"""`gutz reference make|list|verify`: quasi-exact chains to judge mean field by.

In:  a plan file, or the set that comes with gutz.
Out: the file of entries; tables or JSON about them.
"""

import time
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import filelock
import numpy as np
import xarray as xr

from gutz import console
from gutz.errors import InputError, OutputError
from gutz.phases import WORDS, Phase
from gutz.reference import make, plan, store, verify
from gutz.scan import document, paths
from gutz.scan.fields import suggestion

FILE = "references.nc"


def run_make(
    file: Path, out: str | None, only: Sequence[str], as_json: bool, quiet: bool, force: bool, debug: bool
) -> int:
    """Make the entries the plan lists and the file lacks; with --force, all of them anew."""
    chosen = plan.entries(document.read(file))
    if only:
        known = tuple(entry.name for entry in chosen)
        for name in only:
            if name not in known:
                raise InputError(f"--only {name}: is not an entry of {file.name}{suggestion(name, known)}")
        chosen = tuple(entry for entry in chosen if entry.name in only)
    folder = paths.output_folder(out if out is not None else file.stem)
    paths.make_folder(folder)
    path = paths.inside(folder, FILE)
    start = time.monotonic()
    with _locked(path):
        made, kept = make.make(chosen, path, notice=lambda words: console.note(words, quiet), renew=force)
    if as_json:
        console.write_json({"file": str(path), "made": made, "kept": kept})
    else:
        console.say(f"entries: {made} made, {kept} kept, in {console.duration(time.monotonic() - start)}: {path}")
    return 0


def run_list(file: Path | None, as_json: bool, debug: bool) -> int:
    """Print every entry: what it is, how good it is."""
    entries = store.read_all(file or store.STORED)
    records = [_record(name, dataset) for name, dataset in entries.items()]
    if as_json:
        console.write_json(records)
        return 0
    rows = [
        (
            r["name"], r["phase"], r["method"], " ".join(map(str, r["lengths"])) or "infinite",
            str(r["bond"]) if r["bond"] else "", console.number(r["energy"], 7), f"{r['energy_error']:.0e}",
            f"{r['discarded']:.0e}", f"{r['energy_variance']:.0e}",
        )
        for r in records
    ]  # fmt: skip
    console.table(("entry", "phase", "method", "sites", "bond", "energy/site", "error", "discarded", "variance"), rows)
    return 0


def run_verify(name: str | None, file: Path | None, seed: int | None, as_json: bool, debug: bool) -> int:
    """Recompute one entry's shortest chain; exit code 1 if a number does not come out again."""
    path = file or store.STORED
    chosen = name or verify.choose(store.read_all(path), seed)
    start = time.monotonic()
    checks = verify.verify(store.read(path, chosen))
    seconds = time.monotonic() - start
    passed = all(check.passed for check in checks)
    if as_json:
        found = [{"name": c.name, "deviation": c.deviation, "allowed": c.allowed, "passed": c.passed} for c in checks]
        console.write_json({"entry": chosen, "passed": passed, "checks": found})
    else:
        rows = [(c.name, f"{c.deviation:.1e}", f"{c.allowed:.0e}", "yes" if c.passed else "NO") for c in checks]
        console.table((chosen, "deviation per site", "allowed", "passed"), rows)
        console.say(f"{'all numbers came out again' if passed else 'NOT all numbers came out again'}, "
                    f"{console.duration(seconds)}")  # fmt: skip
    return 0 if passed else 1


def _locked(path: Path) -> Any:
    """Hold the file for one writer. Raises OutputError where another run has it."""
    lock = filelock.FileLock(path.with_name(path.name + ".lock"))
    try:
        lock.acquire(timeout=0)
    except filelock.Timeout:
        raise OutputError(f"{path.name} is being written by another run; wait for it or choose another --out") from None
    return lock


def _record(name: str, dataset: xr.Dataset) -> dict[str, Any]:
    entry = plan.restore(dataset.attrs["entry"])
    last = {
        key: float(np.ravel(dataset[key])[-1]) if key in dataset else 0.0 for key in ("discarded", "energy_variance")
    }
    return {
        "name": name,
        "phase": WORDS[Phase(int(dataset["phase"]))],
        "method": entry.method,
        "species": entry.species,
        "t": entry.t,
        "U": entry.U if entry.n_max > 1 else "hard core",
        "U12": entry.U12,
        "T": entry.T,
        "filling": dataset["filling"].values,
        "lengths": list(entry.lengths),
        "n_max": entry.n_max,
        "bond": 0 if entry.method in ("Bethe ansatz", "free fermions") else entry.bond,
        "energy": float(dataset["energy"]),
        "energy_error": float(dataset["energy_error"]),
        "cpu_seconds": dataset.attrs["cpu_seconds"],
        "gutz_version": dataset.attrs["gutz_version"],
        **last,
    }
