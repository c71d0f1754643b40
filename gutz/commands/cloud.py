"""`gutz cloud`: what a trap makes of a file: shells, temperature, entropy, loading curve, heating margin.

In:  a scan file with a [trap].
Out: one cloud in detail where --at fixes every axis, else a row per cloud; JSON; with --out numbers and figures.
"""

import dataclasses
import re
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from gutz import console, plots
from gutz.commands.points import load, values
from gutz.errors import InputError, OutputError
from gutz.phases import WORDS, Phase
from gutz.plots import cloud as figures
from gutz.scan import clouds, export, paths
from gutz.scan.clouds import CloudPoint
from gutz.scan.plan import Axis, Plan, check_names, check_physics
from gutz.status import SENTENCES, UNTRUSTED, Status, describe
from gutz.trap import loading, profiles
from gutz.trap.cloud import Cloud
from gutz.trap.loading import Margin
from gutz.trap.sites import check

NETCDF, PROFILES, SITES = "clouds.nc", "profiles.nc", "sites.nc"
_PHONONS = {True: "phonon entropy to one loop", False: "phonon entropy not included"}
LEAST_SHARE = 5e-4
"""Phases with fewer of the atoms are not listed."""


def run(
    file: Path,
    overrides: Sequence[str],
    at: Sequence[str],
    sites: bool,
    out: str | None,
    as_json: bool,
    quiet: bool,
    force: bool,
    debug: bool,
) -> int:
    """Solve the clouds and print them; exit code 1 if any is not to be trusted."""
    source, full = load(file, overrides, clouds=True)
    clouds.check(full)
    chosen = _fixed(full, values(at))
    if sites and chosen.points > 1:
        held = " ".join(f"--at {axis.name}={axis.values[0]:g}" for axis in chosen.axes if axis.values.size > 1)
        raise InputError(f"--sites solves one cloud at a time; choose it, for example {held}")
    check_physics(chosen)
    folder = None if out is None else _folder(out, force)
    asked = list(clouds.points(chosen))
    solved: list[Cloud] = []
    margins: list[Margin | None] = []
    hint: float | None = None
    wanted = full.spec.trap.wanted if full.spec.trap else None
    phase = next((p for p in Phase if WORDS[p] == wanted), None)
    with console.progress(f"{source.name}, clouds", quiet or as_json) as progress:
        for cloud in loading.follow([point.point for point in asked]):
            solved.append(cloud)
            margins.append(None if phase is None else loading.heating_margin(cloud, phase, hint))
            if margins[-1] is not None and np.isfinite(margins[-1].critical_T):
                hint = margins[-1].critical_T / cloud.gas.scale
            if progress:
                progress(len(solved), len(asked))
    resolved = check(solved[0]) if sites else None
    table = clouds.table(chosen, asked, solved, margins)
    if as_json:
        console.write_json(
            _record(table, asked, solved, margins) | ({} if resolved is None else {"sites": resolved.attrs})
        )
    elif len(solved) == 1:
        _print_one(chosen, asked[0], solved[0], margins[0])
    else:
        _print_many(chosen, table, phase)
    for words in () if resolved is None or as_json else resolved.attrs["words"]:
        console.say(f"site by site: {words}")
    _notes(solved, quiet)
    if folder is not None:
        if resolved is not None:
            export.write_netcdf(resolved, paths.inside(folder, SITES))
            console.note(f"written: {folder / SITES}", quiet or as_json)
        for path in _write(folder, chosen, table, asked, solved):
            console.note(f"written: {path}", quiet or as_json)
    return 1 if loading.worst(solved) & UNTRUSTED else 0


def _fixed(full: Plan, at: dict[str, float]) -> Plan:
    """The plan with the axes named in --at held at their values."""
    check_names(full, at)
    axes = []
    for axis in full.axes:
        lowest = axis.target.parameter.lowest
        if axis.name in at and lowest is not None and at[axis.name] < lowest:
            raise InputError(f"--at {axis.name}: {at[axis.name]:g} is not allowed; it must be at least {lowest:g}")
        row = np.array([at[axis.name]]) if axis.name in at else axis.values
        axes.append(Axis(axis.name, axis.target, axis.unit, axis.words, row))
    return dataclasses.replace(full, axes=tuple(axes), chunk=(1,) * len(axes))


def _folder(out: str, force: bool) -> Path:
    folder = paths.output_folder(out)
    paths.make_folder(folder)
    if not force and any((folder / name).exists() for name in (NETCDF, PROFILES, "cloud.png", "loading.png")):
        raise OutputError(f"{folder.name} holds clouds already; replace them with --force")
    return folder


def _print_one(plan: Plan, asked: CloudPoint, cloud: Cloud, margin: Margin | None) -> None:
    """One cloud: what it is, its shells, its phases."""
    unit = "" if plan.energy_unit == "1" else plan.energy_unit
    where = ", ".join(f"{axis.name} = {console.number(v)}" for axis, v in zip(plan.axes, asked.values, strict=True))
    number = console.number
    rows = [
        ("Temperature", number(cloud.T), unit),
        ("Entropy per particle", number(cloud.entropy_per_particle), "k_B"),
        ("of it, collective modes", number(_collective(cloud)), "k_B"),
        ("Atoms", "  ".join(number(float(n), 6) for n in cloud.atoms), ""),
        ("Chemical potential", "  ".join(number(float(m)) for m in cloud.mu), unit),
        ("Highest filling", "  ".join(number(float(n), 4) for n in cloud.average("filling").max(0)), ""),
        ("Occupation cutoff", str(cloud.gas.n_max), ""),
        ("Error from the nodes", f"{float(cloud.error.max()):.1e}", "relative"),
    ]
    if asked.lattice is not None:
        nano = float(clouds.nanokelvin(asked, cloud))
        rows.insert(1, ("", number(nano), "nK"))
    console.table((where or "the cloud", "value", "unit"), rows)
    total = float(cloud.atoms.sum())
    layers = profiles.shells(cloud)
    if layers:
        micro = asked.spacing * 1e6
        heads = ["shell", "from", "to (sites along x)", *(["to (um)"] if np.isfinite(micro) else [])]
        heads += [f"N{k + 1}" for k in range(cloud.gas.species)] + ["share", "S/N share"]
        lines = []
        for layer in layers:
            if layer.atoms.sum() < LEAST_SHARE * total:
                continue
            far = [number(float(layer.outer[0]) * micro, 3)] if np.isfinite(micro) else []
            lines.append(
                [
                    layer.words, number(float(layer.inner[0]), 3), number(float(layer.outer[0]), 3), *far,
                    *(number(float(n), 4) for n in layer.atoms), f"{layer.atoms.sum() / total:.1%}",
                    number(layer.entropy / total, 3),
                ]
            )  # fmt: skip
        console.table(heads, lines)
    else:
        lines = [
            [WORDS[p], *(number(float(n), 4) for n in a), f"{a.sum() / total:.1%}", number(s / total, 3)]
            for p, (a, s) in cloud.by_phase().items()
            if a.sum() >= LEAST_SHARE * total
        ]
        console.table(["phase", *(f"N{k + 1}" for k in range(cloud.gas.species)), "share", "S/N share"], lines)
    if margin is not None:
        console.say(f"{WORDS[margin.phase]}: {margin.fraction:.1%} of the atoms; {margin.words}")


def _collective(cloud: Cloud) -> float:
    """Entropy per particle of the collective modes; nan where not included."""
    if cloud.phonons is None:
        return float("nan")
    return float(cloud.nodes.weight @ cloud.phonons) / float(cloud.atoms.sum())


def _print_many(plan: Plan, table: xr.Dataset, phase: Phase | None) -> None:
    """A row per cloud: axes, T, entropy, filling, shares of the phases that occur."""
    flat = table.stack(cloud=table.attrs["axes"])
    kelvin = np.isfinite(flat["temperature_nK"].values).all()
    words = [str(w) for w in table["phase"].values]
    shares = flat["fraction"].transpose("cloud", "phase").values
    shown = [k for k in range(len(words)) if shares[:, k].max() > LEAST_SHARE]
    unit = "nK" if kelvin else plan.energy_unit
    heads = [*table.attrs["axes"], f"T ({unit})" if unit != "1" else "T", "S/N (k_B)", "n (middle)"]
    heads += [words[k] for k in shown] + (["margin (k_B)"] if phase is not None else [])
    rows = []
    for i in range(flat.sizes["cloud"]):
        one = flat.isel(cloud=i)
        axes = [console.number(float(one[name].values), 4) for name in table.attrs["axes"]]
        T = float(one["temperature_nK" if kelvin else "temperature"].values)
        line = [*axes, console.number(T, 4), console.number(float(one["entropy_per_particle"].values), 4)]
        line.append("  ".join(console.number(float(n), 3) for n in one["central_filling"].values))
        line += [f"{shares[i, k]:.1%}" for k in shown]
        if phase is not None:
            line.append(console.number(float(one["margin"].values), 3))
        rows.append(line)
    console.table(heads, rows)


def _notes(solved: Sequence[Cloud], quiet: bool) -> None:
    """Everything said about some cloud, each sentence once with its count."""
    counts: dict[str, int] = {}
    for cloud in solved:
        # The cutoff is judged for the atoms as a whole, which the cloud's own words say.
        for words in (*describe(int(cloud.status & ~Status.CUTOFF)), *cloud.notes):
            # Numbers differ from cloud to cloud: the first stands for all.
            key = next((known for known in counts if _wordy(known) == _wordy(words)), words)
            counts[key] = counts.get(key, 0) + 1
    for words, count in counts.items():
        console.note(f"note: {words}" if len(solved) == 1 else f"note, {count} of {len(solved)}: {words}", quiet)
    if any(cloud.T > 0 and cloud.phonons is None for cloud in solved):
        console.note(f"note: phonon entropy {clouds.PHONONS[False]}", quiet)


def _wordy(sentence: str) -> str:
    """A sentence without its numbers."""
    return re.sub(r"[0-9][0-9.e+-]*", "", sentence)


def _record(
    table: xr.Dataset, asked: Sequence[CloudPoint], solved: Sequence[Cloud], margins: Sequence[Margin | None]
) -> dict[str, Any]:
    return {
        "axes": {name: table[name].values for name in table.attrs["axes"]},
        "energy_unit": table.attrs["energy_unit"],
        "phonon_entropy": table.attrs["phonon_entropy"],
        "clouds": [
            {
                **profiles.summary(cloud, table.attrs["energy_unit"]),
                "remarks": [SENTENCES[bit] for bit in Status if bit and cloud.status & bit],
                "shells": [
                    {
                        "phase": WORDS[layer.phase], "atoms_per_site": layer.whole, "inner": layer.inner,
                        "outer": layer.outer, "atoms": layer.atoms, "entropy": layer.entropy,
                    }
                    for layer in profiles.shells(cloud)
                ],
                "margin": None if margin is None else dataclasses.asdict(margin) | {"phase": WORDS[margin.phase]},
            }
            for _, cloud, margin in zip(asked, solved, margins, strict=True)
        ],
    }  # fmt: skip


def _write(
    folder: Path, plan: Plan, table: xr.Dataset, asked: Sequence[CloudPoint], solved: Sequence[Cloud]
) -> list[Path]:
    """Numbers of all clouds, profiles and cross-section of the middle one, the curve along a single axis."""
    made = [paths.inside(folder, NETCDF), paths.inside(folder, PROFILES)]
    export.write_netcdf(table, made[0])
    middle = len(solved) // 2
    cloud = solved[middle]
    profile = profiles.profiles(cloud, energy_unit=plan.energy_unit)
    export.write_netcdf(profile, made[1])
    where = ", ".join(
        f"{axis.name} = {console.number(v, 4)}{'' if axis.unit == '1' else ' ' + axis.unit}"
        for axis, v in zip(plan.axes, asked[middle].values, strict=True)
    )
    heat = f"S/N = {cloud.entropy_per_particle:.3g} k_B"
    if asked[middle].lattice is not None:
        heat += f", T = {clouds.nanokelvin(asked[middle], cloud):.3g} nK"
    small = f"{plan.spec.ansatz.kind} ansatz, local density, {heat}, {_PHONONS[cloud.phonons is not None]}"
    axes = cloud.trap.axes
    plane = None if axes < 2 else profiles.section(cloud, (0, axes - 1))
    columns = None if axes < 2 else profiles.column_density(cloud, along=1 if axes == 3 else -1)
    if axes == 2:
        columns = None
    title = ", ".join(part for part in (plan.spec.output.title, where) if part)
    made += plots.save(figures.cross_section(profile, plane, columns, title, small), paths.inside(folder, "cloud"))
    long = [axis.name for axis in plan.axes if axis.values.size > 1]
    if len(long) == 1:
        curve = table.isel({axis.name: 0 for axis in plan.axes if axis.values.size == 1})
        facts = f"{plan.spec.ansatz.kind} ansatz, local density, adiabatic, {_PHONONS[solved[0].phonons is not None]}"
        made += plots.save(figures.loading(curve, long[0], facts), paths.inside(folder, "loading"))
    return made
