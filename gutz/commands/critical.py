"""`gutz critical`: critical temperature and entropy, at a point or along an axis.

In:  a scan file; which order; values for all axes but one. Its temperature or entropy is not used.
Out: a table or JSON; with --out a figure and `critical.nc`.
"""

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from gutz import console, plots
from gutz.commands.points import load, values
from gutz.errors import InputError
from gutz.phases import WORDS, Phase
from gutz.plots import critical as figure
from gutz.scan import export, paths
from gutz.scan.chunk import mixture_of
from gutz.scan.plan import Axis, Plan, check_names, check_physics
from gutz.status import UNTRUSTED, describe
from gutz.temperature import REASONS, CriticalTemperature, Reason, critical_temperature

NAME = "critical"
MOST_ROWS = 21
_SHOWN = ("T_c", "entropy_per_particle", "T_c_plain", "entropy_plain", "T_c_bare", "entropy_bare")


def run(
    file: Path,
    overrides: Sequence[str],
    at: Sequence[str],
    order: str,
    out: str | None,
    as_json: bool,
    quiet: bool,
    force: bool,
    debug: bool,
) -> int:
    """Compute, print, draw; exit code 1 if a number is not to be trusted."""
    document, full = load(file, overrides)
    check_physics(full)
    if order != "single" and full.spec.species == 1:
        raise InputError(f'--order {order}: needs two species; with one, use "single"')
    axis, columns = _line(full, values(at))
    found = critical_temperature(mixture_of(full.settings_at(columns)), order)  # type: ignore[arg-type]
    unit = full.energy_unit
    if as_json:
        console.write_json(_record(axis, found, order, unit))
    else:
        _print(axis, found, order, unit)
    if out is not None:
        _save(out, force, axis, found, order, full, document.name, quiet or as_json)
    return 1 if np.any(np.asarray(found.status) & int(UNTRUSTED)) else 0


def _line(full: Plan, at: dict[str, float]) -> tuple[Axis | None, list[np.ndarray]]:
    """The one axis to run along, and values for every axis; axes of temperature and entropy do not count."""
    check_names(full, at)
    warm = [axis.name for axis in full.axes if axis.target.path in ("mixture.T", "mixture.entropy")]
    free = [axis for axis in full.axes if axis.name not in at and axis.name not in warm]
    if len(free) > 1:
        example = " ".join(f"--at {axis.name}={axis.values[0]:g}" for axis in free[1:])
        raise InputError(f"critical temperatures run along one axis; give the others a value: {example}")
    axis = free[0] if free else None
    size = axis.values.size if axis else 1
    columns = [
        axis.values if axis and a.name == axis.name else np.full(size, at.get(a.name, float(a.values[0])))
        for a in full.axes
    ]
    return axis, columns


def _record(axis: Axis | None, found: CriticalTemperature, order: str, unit: str) -> dict[str, Any]:
    return {
        "order": order,
        "axis": None if axis is None else {"name": axis.name, "units": axis.unit, "values": axis.values.tolist()},
        "energy_unit": unit,
        **{name: np.atleast_1d(getattr(found, name)).tolist() for name in _SHOWN},
        "phase": [WORDS[Phase(int(p))] for p in np.atleast_1d(found.phase)],
        "reason": [REASONS.get(Reason(int(r)), "") for r in np.atleast_1d(found.reason)],
        "status": np.atleast_1d(found.status).tolist(),
    }


def _print(axis: Axis | None, found: CriticalTemperature, order: str, unit: str) -> None:
    size = np.atleast_1d(found.T_c).size
    chosen = np.unique(np.linspace(0, size - 1, min(size, MOST_ROWS)).round().astype(int))
    columns = {name: np.atleast_1d(getattr(found, name)) for name in (*_SHOWN, "phase", "reason")}
    rows: list[tuple[str, ...]] = []
    for i in chosen:
        reason = Reason(int(columns["reason"][i]))
        head = console.number(float(axis.values[i])) if axis else "the point"
        if reason:
            rows.append((head, "-", "-", "-", "-", REASONS[reason].split(";")[0]))
            continue
        numbers = [console.number(float(columns[name][i])) for name in ("T_c", "entropy_per_particle")]
        bare = [console.number(float(columns[name][i])) for name in ("T_c_bare", "entropy_bare")]
        rows.append((head, *numbers, *bare, WORDS[Phase(int(columns["phase"][i]))]))
    scale = f" ({unit})" if unit not in ("", "1") else ""
    heading = f"{axis.name} ({axis.unit})" if axis and axis.unit != "1" else axis.name if axis else ""
    console.table((heading, f"T_c{scale}", "S/N (k_B)", f"bare T_c{scale}", "bare S/N", "orders first"), rows)
    console.say("bare: mean field, dangerously optimistic; plan with the first two columns.")
    for code in sorted({int(code) for code in np.atleast_1d(found.status)}):
        for sentence in describe(code):
            console.note(f"note: at some of these, {sentence}", quiet=False)


def _save(
    out: str,
    force: bool,
    axis: Axis | None,
    found: CriticalTemperature,
    order: str,
    full: Plan,
    name: str,
    silent: bool,
) -> None:
    if axis is None:
        raise InputError("--out: a figure needs an axis to run along; leave one axis of the file without --at")
    folder = paths.results_folder(out, f"{NAME}.nc", force)
    paths.make_folder(folder)
    units = {**dict.fromkeys(_SHOWN, "k_B"), **dict.fromkeys(("T_c", "T_c_plain", "T_c_bare"), full.energy_unit)}
    data = {
        key: (axis.name, np.asarray(getattr(found, key)), {"units": units[key], "long_name": key.replace("_", " ")})
        for key in _SHOWN
    }
    for key in ("phase", "reason", "status"):
        data[key] = (axis.name, np.asarray(getattr(found, key)), {"units": "1", "long_name": key})
    coords = {axis.name: (axis.name, axis.values, {"units": axis.unit, "long_name": axis.words})}
    title = full.spec.output.title or name.removesuffix(".toml")
    dataset = xr.Dataset(
        data, coords=coords, attrs={"title": title, "order": order, "config_sha256": full.spec.sha256()}
    )
    export.write_netcdf(dataset, paths.inside(folder, f"{NAME}.nc"))
    made = plots.save(figure.draw(dataset), paths.inside(folder, NAME))
    console.note(f"in {folder}: {NAME}.nc, {', '.join(path.name for path in made)}", silent)
