"""`gutz lattice`: what the light makes of the atoms, without solving anything.

In:  a scan file with a [lattice].
Out: a table of t, U, U12 and band gap against the file's lattice axis, or JSON; with --out a figure.
"""

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from gutz import console, plots
from gutz.commands.points import load, values
from gutz.errors import InputError, OutputError
from gutz.optics import HubbardParameters
from gutz.scan import paths
from gutz.scan.plan import Axis, Plan, check_names

MOST_ROWS = 21
UNITS = ("Hz", "kHz", "nK", "uK", "E_R", "U1")


def run(
    file: Path,
    overrides: Sequence[str],
    at: Sequence[str],
    unit: str,
    out: str | None,
    as_json: bool,
    quiet: bool,
    force: bool,
    debug: bool,
) -> int:
    """Print the Hubbard parameters; draw them where --out names a folder."""
    source, full = load(file, overrides, clouds=True)
    if full.spec.lattice is None:
        raise InputError(f"{source.name}: has no [lattice] section to compute Hubbard parameters from")
    if unit not in UNITS:
        raise InputError(f'--unit "{unit[:20]}" is not allowed; it must be one of {", ".join(UNITS)}')
    axis, picked = _choose(full, values(at))
    found = full.lattice(picked)
    assert found is not None
    columns = _columns(full, found, unit)
    if as_json:
        console.write_json(_record(axis, columns, unit, found))
    else:
        _print(axis, columns, unit)
        for words in found.cautions:
            console.note(f"note: somewhere in this table: {words[0].lower()}{words[1:]}", quiet)
    if out is not None:
        _figure(out, force, axis, columns, unit, source.name, quiet or as_json)
    return 0


def _choose(full: Plan, at: dict[str, float]) -> tuple[Axis | None, list[Any]]:
    """The one lattice axis to run along, and values for every axis: the others are held where --at says."""
    along = [a for a in full.axes if a.target.path.startswith("lattice.") and a.name not in at]
    check_names(full, at)
    if len(along) > 1:
        held = " ".join(f"--at {a.name}={a.values[0]:g}" for a in along[1:])
        raise InputError(f"the file has {len(along)} lattice axes; keep one and fix the others, for example {held}")
    picked = [a.values if a in along else np.array([at[a.name]]) if a.name in at else a.values[:1] for a in full.axes]
    return (along[0] if along else None), picked


def _columns(full: Plan, found: HubbardParameters, unit: str) -> dict[str, Any]:
    """Arrays by short name: hoppings (per direction where they differ), interactions, smallest gap."""
    energies = found.energies_in(unit)
    columns: dict[str, Any] = {}
    for i in range(full.spec.species):
        hopping = energies["t"][..., i, : full.spec.dim]
        if np.allclose(hopping, hopping[..., :1], rtol=1e-12):
            columns[f"t{i + 1}"] = hopping[..., 0]
        else:
            columns |= {f"t{i + 1} {'xyz'[d]}": hopping[..., d] for d in range(full.spec.dim)}
    for i in range(full.spec.species):
        columns[f"U{i + 1}"] = energies["U"][..., i]
    if "U12" in energies:
        columns["U12"] = energies["U12"]
    columns["gap"] = energies["band_gap"].min(axis=(-2, -1))
    length = max(np.size(values) for values in columns.values())
    return {name: np.broadcast_to(np.ravel(values), (length,)) for name, values in columns.items()}


def _record(axis: Axis | None, columns: dict[str, Any], unit: str, found: HubbardParameters) -> dict[str, Any]:
    record: dict[str, Any] = {
        "unit": unit,
        "recoil_hz": found.recoil_hz,
        "columns": columns,
        "remarks": found.cautions,
    }
    if axis is not None:
        record["axis"] = {
            "name": axis.name,
            "parameter": axis.target.path,
            "units": axis.unit,
            "values": axis.values,
        }
    return record


def _print(axis: Axis | None, columns: dict[str, Any], unit: str) -> None:
    count = len(next(iter(columns.values())))
    chosen = np.unique(np.linspace(0, count - 1, min(count, MOST_ROWS)).round().astype(int))
    ratio = columns["U1"] / next(iter(columns.values()))
    heads = [f"{axis.name} ({axis.unit})" if axis else "", *(f"{name} ({unit})" for name in columns), "U1/t1"]
    rows = [
        [
            console.number(float(axis.values[i])) if axis else "",
            *(console.number(float(v[i])) for v in columns.values()),
            console.number(float(ratio[i])),
        ]
        for i in chosen
    ]
    console.table(heads, rows)


def _figure(
    out: str, force: bool, axis: Axis | None, columns: dict[str, Any], unit: str, title: str, quiet: bool
) -> None:
    """Draw the columns against the axis."""
    if axis is None:
        raise InputError("--out needs an axis over the lattice in the file to draw along")
    folder = paths.output_folder(out)
    paths.make_folder(folder)
    target = paths.inside(folder, "lattice")
    if not force and any(target.with_name(f"lattice{ending}").exists() for ending in (".png", ".pdf")):
        raise OutputError(f"{folder.name} holds a figure of this name already; replace it with --force")
    figure = plots.parameters(axis.values, (axis.words, axis.unit), columns, unit, title)
    for path in plots.save(figure, target):
        console.note(f"written: {path}", quiet)
