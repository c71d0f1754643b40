"""`gutz compare`: which outputs of mean field to believe in one dimension, with the numbers behind it.

In:  nothing, names of stored chains, a point of a scan file, or the folder of a finished run.
Out: tables or JSON; with --out a dataset (netCDF) and the figure of the stored set.
"""

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from gutz import console, plots
from gutz.commands.points import load, values
from gutz.comparison import verdicts
from gutz.comparison.compare import compare
from gutz.comparison.observables import OBSERVABLES
from gutz.comparison.references import NEARBY
from gutz.comparison.verdicts import Verdict
from gutz.errors import InputError, OutputError
from gutz.model import Mixture
from gutz.phases import WORDS, Phase
from gutz.plots import comparison as figure
from gutz.scan import export, open_run, paths
from gutz.scan.plan import at as choose
from gutz.scan.plan import check_physics

NETCDF, FIGURE = "compare.nc", "compare"


def run(
    target: Path | None,
    overrides: Sequence[str],
    at: Sequence[str],
    entry: Sequence[str],
    references: Path | None,
    out: str | None,
    as_json: bool,
    quiet: bool,
    force: bool,
    debug: bool,
) -> int:
    """Compare and print; exit code 1 if a chosen point is wrong with every ansatz, or has no reference nearby."""
    if target is not None and entry:
        raise InputError("a file or folder and --entry exclude each other; give one of them")
    folder = _folder(out, force) if out is not None else None
    overview = target is None and not entry
    found = compare(_what(target, overrides, at, entry), references_file=references)
    if as_json:
        console.write_json(_record(found))
    elif overview:
        _print_overview(found)
    elif "entry" in found.dims:
        for name in found["entry"].values:
            _print_entry(found.sel(entry=name))
    else:
        _print_points(found)
    if folder is not None:
        stored = found if overview else compare(references_file=references)
        _save(found, stored, folder, quiet)
    if overview:
        return 0
    best = found["overall"].where(found["overall"] >= 0, Verdict.WRONG).min("ansatz")
    return 1 if bool((best == Verdict.WRONG).any()) else 0


def _what(target: Path | None, overrides: Sequence[str], at: Sequence[str], entry: Sequence[str]) -> Any:
    """What the user pointed at, as `compare` takes it."""
    if target is None:
        if overrides or at:
            raise InputError("--set and --at need a scan file to change")
        return list(entry) or None
    if target.is_dir():
        return open_run(target)
    _, full = load(target, overrides)
    if full.axes and not at:
        raise InputError(
            f"{target.name} has axes ({', '.join(axis.name for axis in full.axes)}); choose a point with --at, or run "
            "gutz scan and name its folder here"
        )
    point = choose(full, values(at))
    check_physics(point)
    picked = [axis.values for axis in point.axes]
    return Mixture(**point.settings(picked, point.lattice(picked)))


def _folder(out: str, force: bool) -> Path:
    folder = paths.output_folder(out)
    if not force and any((folder / name).exists() for name in (NETCDF, f"{FIGURE}.png", f"{FIGURE}.pdf")):
        raise OutputError(f"{folder.name} holds a comparison already; choose another --out, or --force to replace it")
    paths.make_folder(folder)
    return folder


def _save(found: xr.Dataset, stored: xr.Dataset, folder: Path, quiet: bool) -> None:
    export.write_netcdf(found, paths.inside(folder, NETCDF))
    try:
        made = plots.save(figure.draw(stored, None if found is stored else found), paths.inside(folder, FIGURE))
    except OSError as error:
        raise OutputError(f"the figure cannot be written ({(error.strerror or 'disk error').lower()})") from None
    for name in (NETCDF, *(path.name for path in made)):
        console.note(f"written: {folder / name}", quiet)


def _print_overview(found: xr.Dataset) -> None:
    """One line per entry, then one per observable."""
    rows = []
    for name in found["entry"].values:
        one = found.sel(entry=name)
        cells = [_cell(float(one["overall_error"].sel(ansatz=a)), int(one["overall"].sel(ansatz=a)))
                 for a in one["ansatz"].values]  # fmt: skip
        rows.append((str(name), _phase(float(one["reference"].isel(ansatz=0).sel(observable="phase"))), *cells))
    console.table(("stored chain", "phase", *map(str, found["ansatz"].values)), rows)
    console.say("")
    rows = []
    for name, observable in OBSERVABLES.items():
        row = [observable.words]
        for a in found["ansatz"].values:
            codes = found["verdict"].sel(observable=name, ansatz=a).values
            counts = [int((codes == v).sum()) for v in (Verdict.QUANTITATIVE, Verdict.QUALITATIVE, Verdict.WRONG)]
            row.append(" / ".join(map(str, counts)) if sum(counts) else "not judged")
        rows.append(tuple(row))
    heads = [f"{a}: quantitative / qualitative / wrong" for a in found["ansatz"].values]
    console.table(("observable", *heads), rows)
    console.say(_thresholds())


def _print_entry(one: xr.Dataset) -> None:
    """Values side by side for one stored chain."""
    rows = []
    ansaetze = [str(a) for a in one["ansatz"].values]
    for name, observable in OBSERVABLES.items():
        reference = float(one["reference"].isel(ansatz=0).sel(observable=name))
        if not np.isfinite(reference):
            continue
        cells = [_value(name, reference)]
        for a in ansaetze:
            said, error, code = (one[key].sel(ansatz=a, observable=name).item() for key in
                                 ("prediction", "error", "verdict"))  # fmt: skip
            cells += [_value(name, said), _cell(error, int(code))]
        rows.append((observable.words, *cells))
    heads = [head for a in ansaetze for head in (a, "error, verdict")]
    console.table((str(one["entry"].item()), "reference", *heads), rows)
    for a in ansaetze:
        number, code = float(one["overall_error"].sel(ansatz=a)), int(one["overall"].sel(ansatz=a))
        console.say(f"{a}: overall {_cell(number, code)}")
        _print_flags(a, int(one["flags"].sel(ansatz=a)), float(one["coherent_sites"].sel(ansatz=a)))


def _print_points(found: xr.Dataset) -> None:
    """Estimates at points that are not references: one table for one point, a summary for many."""
    ansaetze = [str(a) for a in found["ansatz"].values]
    if found.sizes["point"] > 1:
        _print_many(found, ansaetze)
        return
    one = found.isel(point=0)
    rows = []
    for name, observable in OBSERVABLES.items():
        cells = []
        for a in ansaetze:
            at = one.sel(ansatz=a, observable=name)
            error, low, high = (float(at[key]) for key in ("error", "error_lowest", "error_highest"))
            spread = f" ({low:.0%} to {high:.0%})" if np.isfinite(error) else ""
            cells += [_value(name, float(at["prediction"])), _cell(error, int(at["verdict"])) + spread]
        if any(np.isfinite(float(one[key].sel(ansatz=a, observable=name))) for a in ansaetze
               for key in ("prediction", "error")):  # fmt: skip
            rows.append((observable.words, *cells))
    console.table(("the point", *[head for a in ansaetze for head in (a, "error nearby, verdict")]), rows)
    for a in ansaetze:
        at = one.sel(ansatz=a)
        distance = float(at["distance"])
        if distance > NEARBY:
            console.say(
                f"{a}: no reference nearby (the nearest, {at['nearest'].item()}, is at distance {distance:.2f}; "
                f"above {NEARBY:g} it says nothing): not judged"
            )
        else:
            number, code = float(at["overall_error"]), int(at["overall"])
            console.say(
                f"{a}: overall {_cell(number, code)}; nearest reference {at['nearest'].item()} at {distance:.2f}"
            )
        _print_flags(a, int(at["flags"]), float(at["coherent_sites"]))


def _print_many(found: xr.Dataset, ansaetze: list[str]) -> None:
    total = found.sizes["point"]
    rows = []
    for code in (Verdict.QUANTITATIVE, Verdict.QUALITATIVE, Verdict.WRONG, Verdict.NOT_JUDGED):
        words = "no reference nearby" if code == Verdict.NOT_JUDGED else verdicts.WORDS[code]
        rows.append((words, *[f"{int((found['overall'].sel(ansatz=a) == code).sum())} of {total}" for a in ansaetze]))
    console.table(("points", *ansaetze), rows)
    for a in ansaetze:
        bits = found["flags"].sel(ansatz=a).values
        for flag, sentence in verdicts.SENTENCES.items():
            count = int(((bits & int(flag)) > 0).sum())
            if count:
                console.say(f"{a}: {count} of {total} points: {sentence}")


def _print_flags(ansatz: str, bits: int, sites: float) -> None:
    for flag, sentence in verdicts.SENTENCES.items():
        if bits & int(flag):
            number = ""
            if flag == verdicts.Flag.DEPLETION_DIVERGES and np.isfinite(sites) and sites > 0:
                number = f" ({sites:.3g} sites)"
            console.say(f"  {ansatz}: {sentence}{number}")


def _cell(error: float, code: int) -> str:
    if code == Verdict.NOT_JUDGED or np.isnan(error):
        return verdicts.WORDS[Verdict.NOT_JUDGED]
    shown = "over 1000 %" if error > 10 else "below 0.1 %" if error < 1e-3 else f"{100 * error:.2g} %"
    shown = f"{100 * error:.0f} %" if 1 <= error <= 10 else shown
    return f"{shown} {verdicts.WORDS[Verdict(code)]}"


def _value(name: str, value: float) -> str:
    if name == "phase":
        return _phase(value)
    if np.isnan(value):
        return ""
    return "none" if np.isinf(value) else console.number(value, 4)


def _phase(value: float) -> str:
    return WORDS[Phase(int(value))] if np.isfinite(value) else ""


def _thresholds() -> str:
    return (
        f"quantitative: error up to {verdicts.QUANTITATIVE:.0%}; qualitative: up to {verdicts.QUALITATIVE:.0%}; wrong: "
        "above. Overall: mean error, each counted as at most 100 %; wrong if the phase or half of the observables are."
    )


def _record(found: xr.Dataset) -> dict[str, Any]:
    """The dataset as plain data: coordinates, then variables with dimensions."""
    return {
        "attributes": dict(found.attrs),
        "coordinates": {str(name): {"dims": list(map(str, c.dims)), "values": c.values.tolist()}
                        for name, c in found.coords.items()},
        "variables": {str(name): {"dims": list(map(str, v.dims)), "units": v.attrs.get("units", "1"),
                                  "values": v.values.tolist()} for name, v in found.data_vars.items()},
    }  # fmt: skip
