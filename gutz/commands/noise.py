"""`gutz noise`: what the noise picture of one point shows.

In:  a scan file, a value for each of its axes, the size of the lattice.
Out: a list of features for people or JSON; with --out, the dataset (netCDF) and a figure.
"""

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from gutz import console, plots
from gutz.commands.points import load, values
from gutz.errors import InputError, OutputError
from gutz.noise import Feature, Validity, features, maps, noise_map, order_of
from gutz.phases import WORDS, Phase
from gutz.plots.noise import draw
from gutz.scan import export, paths
from gutz.scan.chunk import mixture_of
from gutz.scan.plan import Plan, check_physics
from gutz.scan.plan import at as choose
from gutz.solution import Solution
from gutz.solver import solve
from gutz.status import UNTRUSTED, describe

NAME = "noise"
DATA = "noise.nc"

_GRADES = {
    Validity.GOOD: "whole maps like this one were right within about 8 % in the tests",
    Validity.FAIR: "whole maps like this one were right within about 20 % in the tests",
    Validity.QUALITATIVE: "the formulas are known to be off by more than 20 % here, or were never tested: shapes only",
}


def run(
    file: Path, overrides: Sequence[str], at: Sequence[str], size: str, out: str | None, log: bool, as_json: bool,
    quiet: bool, force: bool, debug: bool,
) -> int:  # fmt: skip
    """Compute the map of one point; exit code 1 if its numbers are not to be trusted."""
    lengths = read_size(size)
    _, full = load(file, overrides)
    point = choose(full, values(at))
    check_physics(point)
    picked = point.picked((0,) * len(point.axes))
    mixture = mixture_of(point.settings(picked, point.lattice(picked)))
    folder = _folder(out, force) if out else None
    solution = solve(mixture, ansatz=point.spec.ansatz.kind)
    first = (0,) * len(solution.shape)
    found = maps(solution, lengths)[0]
    status = int(np.asarray(solution.status)[first])
    if found is None:
        raise InputError("; ".join(describe(status)) or "the point has no finite state")
    made, validity = found
    listed = features(made, order_of(solution, first))
    files = _save(solution, lengths, point, folder, log) if folder else []
    if as_json:
        console.write_json(_record(solution, first, validity, listed, files))
    else:
        _print(solution, first, validity, listed, files)
    return 1 if status & UNTRUSTED or validity is Validity.QUALITATIVE else 0


def read_size(text: str) -> int | tuple[int, ...]:
    """Read "32" or "64x64x16". Raises InputError otherwise."""
    parts = text.lower().split("x")
    if not all(part.strip().isdigit() and len(part) < 9 for part in parts) or len(parts) > 3:
        raise InputError(
            f'--size {text[:40]}: must be a number of sites such as "32", or one per direction, "64x64x16"'
        )
    numbers = tuple(int(part) for part in parts)
    return numbers[0] if len(numbers) == 1 else numbers


def _folder(out: str, force: bool) -> Path:
    """Make the folder. Raises OutputError where it holds a map already."""
    folder = paths.results_folder(out, DATA, force)
    paths.make_folder(folder)
    return folder


def _save(solution: Solution, size: int | tuple[int, ...], point: Plan, folder: Path, log: bool) -> list[str]:
    """Write dataset and figure; return where they are."""
    dataset = noise_map(solution, size)
    dataset = dataset.isel({d: 0 for d in dataset["status"].dims})
    title = point.spec.output.title
    for axis in point.axes:
        unit = {"units": axis.unit, "long_name": axis.words}
        dataset = dataset.assign_coords({axis.name: ((), float(axis.values[0]), unit)})
    dataset.attrs["title"] = title
    export.write_netcdf(dataset, paths.inside(folder, DATA))
    try:
        made = plots.save(draw(dataset, title, log), paths.inside(folder, NAME))
    except OSError as error:
        raise OutputError(f"the figure cannot be written ({(error.strerror or 'disk error').lower()})") from None
    return [str(folder / DATA), *map(str, made)]


def _record(
    solution: Solution, first: tuple[int, ...], validity: Validity, listed: list[Feature], files: list[str]
) -> dict[str, Any]:
    status = int(np.asarray(solution.status)[first])
    return {
        "phase": WORDS[Phase(int(np.asarray(solution.phase)[first]))],
        "filling": np.asarray(solution.filling)[first],
        "condensate": np.asarray(solution.condensate)[first],
        "validity": validity.name.lower(),
        "trusted": not status & UNTRUSTED,
        "remarks": describe(status),
        "features": [feature._asdict() for feature in listed],
        "files": files,
    }


def _print(
    solution: Solution, first: tuple[int, ...], validity: Validity, listed: list[Feature], files: list[str]
) -> None:
    phase = WORDS[Phase(int(np.asarray(solution.phase)[first]))]
    rows = [
        (
            f.name, f"{f.species[0]}{f.species[1]}", f.where, console.number(f.height), console.number(f.normalised),
            console.number(f.width, 3), console.number(f.weight),
        )
        for f in listed
    ]  # fmt: skip
    console.table((phase, "species", "where", "height", "over n n", "width (1/a)", "weight"), rows)
    for name in dict.fromkeys(f.name for f in listed):
        feature = next(f for f in listed if f.name == name)
        console.say(f"{name}: {feature.meaning}")
    console.say(f"validity: {validity.name.lower()} - {_GRADES[validity]}")
    for path in files:
        console.say(path)
    for sentence in describe(int(np.asarray(solution.status)[first])):
        console.note(f"note: {sentence}", quiet=False)
