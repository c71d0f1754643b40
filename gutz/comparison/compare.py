"""The comparison a user asks for, as one labelled dataset.

In:  nothing (the stored set), names of entries, a `Mixture`, or the dataset of a solved run.
Out: an xarray Dataset: errors, verdicts and flags per point, ansatz and observable.
"""

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gutz import __version__
from gutz.comparison import predictions, references, verdicts
from gutz.comparison.judge import NAMES, Estimate, Judgement, coherent_sites, flags, interpolate, judge
from gutz.comparison.observables import OBSERVABLES, predicted
from gutz.comparison.places import HARD_CORE, Places
from gutz.comparison.references import NEARBY, References
from gutz.errors import InputError
from gutz.model import Mixture
from gutz.phases import WORDS, Phase
from gutz.solution import Solution
from gutz.solver import ANSATZE, solve

Floats = NDArray[np.float64]


def compare(
    what: Mixture | Solution | xr.Dataset | str | Sequence[str] | None = None,
    *,
    ansatz: str | Sequence[str] = ANSATZE,
    references_file: Path | None = None,
) -> xr.Dataset:
    """Say which outputs of mean field to believe, against quasi-exact chains.

    what: None for the whole stored set; one or several names of stored entries; a mixture in one dimension (solved
    here) or its solution; the dataset of a finished run (`gutz.scan.open_run`). ansatz: "product", "dressed" or both;
    a solution or a run brings its own. references_file: another file of entries.

    At an entry errors are measured; elsewhere they are interpolated from the entries nearby, and nan where none is
    near (`distance` above 1). Raises InputError for mixtures that are not one-dimensional and unknown names,
    DataError for a damaged file.
    """
    names = (ansatz,) if isinstance(ansatz, str) else tuple(ansatz)
    for name in names:
        if name not in ANSATZE:
            raise InputError(f"ansatz is {name!r}; it must be one of: {', '.join(ANSATZE)}")
    every = references.load(references_file)
    kept = predictions.STORED if references_file is None else None
    if what is None or isinstance(what, str | list | tuple):
        return of_entries(every, None if what is None else [what] if isinstance(what, str) else list(what), names, kept)
    if isinstance(what, Mixture):
        _check_mixture(what)
        solutions = {name: solve(what.flat(), ansatz=name) for name in names}
        return _of_solutions(every, solutions, kept)
    if isinstance(what, Solution):
        _check_mixture(what.mixture)
        return _of_solutions(every, {what.ansatz: what}, kept)
    if isinstance(what, xr.Dataset):
        return _of_run(every, what, kept)
    raise InputError(f"what is of type {type(what).__name__}; it must be a mixture, a solution, a run or entry names")


def of_entries(
    every: dict[int, References], names: Sequence[str] | None, ansaetze: Sequence[str], kept: Path | None
) -> xr.Dataset:
    """Errors at stored entries, dims (entry, ansatz, observable)."""
    if names is not None:
        chosen = [references.find(every, name) for name in names]
    else:
        chosen = [(species, i) for species, some in every.items() for i in range(len(some.entries))]
    wanted = {species: sorted({i for s, i in chosen if s == species}) for species in every}
    parts = []
    for species, indices in wanted.items():
        if indices:
            some = every[species]
            picked = References(
                tuple(some.entries[i] for i in indices), tuple(some.datasets[i] for i in indices), some.places[indices]
            )
            parts.append(_entry_dataset(picked, {name: judge(picked, name, kept) for name in ansaetze}))
    return _described(xr.concat(parts, "entry", data_vars="all", coords="different", compat="equals", join="outer"))


def _entry_dataset(some: References, judged: dict[str, Judgement]) -> xr.Dataset:
    def stacked(name: str) -> NDArray[Any]:
        return np.stack([getattr(each, name) for each in judged.values()], axis=1)

    per = ("entry", "ansatz", "observable")
    data = {
        "error": (per, stacked("errors")),
        "verdict": (per, verdicts.verdict(stacked("errors"))),
        "reference": (per, stacked("reference")),
        "prediction": (per, stacked("predicted")),
        "overall_error": (per[:2], stacked("number")),
        "overall": (per[:2], stacked("verdict")),
        "flags": (per[:2], stacked("flags")),
        "coherent_sites": (per[:2], stacked("coherent_sites")),
        "mu": ("entry", [edges[0] for edges in map(_edges, some.datasets)]),
        "gap": ("entry", [edges[1] for edges in map(_edges, some.datasets)]),
    }
    coords = {
        "entry": some.names,
        "ansatz": list(judged),
        "observable": list(NAMES),
        **_parameters(some.places, "entry"),
    }
    return xr.Dataset(data, coords=coords)


def _parameters(places: Places, dim: str) -> dict[str, Any]:
    """Where points lie, as coordinates along `dim`: ratios to the hopping of species 1."""
    t = places.t[:, 0]
    strength = np.where(places.hard_core, np.inf, places.U[:, 0] / t)
    return {
        "species_count": (dim, np.full(places.size, places.species)),
        "U_over_t": (dim, strength),
        "U12_over_t": (dim, places.U12 / t),
        "t2_over_t": (dim, places.t[:, -1] / t),
        "T_over_t": (dim, places.T / t),
        "filling_1": (dim, places.filling[:, 0]),
        "filling_2": (dim, places.filling[:, 1] if places.species == 2 else np.full(places.size, np.nan)),
    }


def _edges(dataset: xr.Dataset) -> tuple[float, float]:
    """Middle and width of the range of mu in which a one-species chain holds its filling, over t; else nan.

    From the energies of one finite chain, so even a superfluid shows a width of order 1/sites.
    """
    if "changed_energy" not in dataset or dataset.sizes["species"] != 1:
        return float("nan"), float("nan")
    sites = dataset.sizes["k"] if "k" in dataset.sizes else int(dataset["length"].values[0])
    here = np.flatnonzero(dataset["length"].values == sites)[-1]
    base, (up, down) = float(dataset["total_energy"].values[here]), dataset["changed_energy"].values
    return float((up - down) / 2), float(up + down - 2 * base)


def _of_solutions(every: dict[int, References], solutions: dict[str, Solution], kept: Path | None) -> xr.Dataset:
    """Interpolated errors at the points of a mixture, dims (point, ansatz, observable)."""
    first = next(iter(solutions.values()))
    mixture = first.mixture
    size = int(np.prod(mixture.shape, dtype=int))
    noise = np.full(size, predictions.NOISE_SITES)
    found = {name: predictions.outputs(solution, noise) for name, solution in solutions.items()}
    t = np.asarray(mixture.t)[..., 0].reshape(size, mixture.species)
    U = np.asarray(mixture.U).reshape(size, mixture.species)
    U12 = np.asarray(mixture.U12).reshape(size)
    t = np.where(t > 0, t, np.nan)  # without hopping there is nothing near
    parts = []
    for name, outputs in found.items():
        T = np.asarray(solutions[name].T).reshape(size)
        hard = np.full(size, mixture.n_max == 1) | (U / t >= HARD_CORE).all(-1)
        places = Places(t, U, U12, outputs["filling"], T, hard)
        mu = np.asarray(solutions[name].mu).reshape(size, -1)[:, 0] / t[:, 0]
        parts.append(_point_dataset(every, places, name, outputs, kept).assign(mu=("point", mu)))
    return _described(
        xr.concat(parts, "ansatz", data_vars="minimal", coords="minimal", compat="override", join="override")
    )


def _point_dataset(
    every: dict[int, References], places: Places, ansatz: str, found: dict[str, NDArray[Any]], kept: Path | None
) -> xr.Dataset:
    """One ansatz at points: estimates where references are near, flags everywhere."""
    each = [{name: values[i] for name, values in found.items()} for i in range(places.size)]
    said = np.full((places.size, len(NAMES)), np.nan)
    for i, outputs in enumerate(each):
        for name, values in predicted(outputs, float(places.T[i])).items():
            said[i, NAMES.index(name)] = float(np.mean(values))
    if places.species in every:
        some = every[places.species]
        estimate = interpolate(places, some, judge(some, ansatz, kept))
        nearest = np.array(some.names)[estimate.nearest]
    else:
        estimate, nearest = _nothing(places.size), np.full(places.size, "")
    dims = ("point", "ansatz", "observable")
    length = [coherent_sites(outputs, float(T)) for outputs, T in zip(each, places.T, strict=True)]
    data = {
        "error": (dims, estimate.errors[:, None]),
        "error_lowest": (dims, estimate.lowest[:, None]),
        "error_highest": (dims, estimate.highest[:, None]),
        "verdict": (dims, verdicts.verdict(estimate.errors)[:, None]),
        "prediction": (dims, said[:, None]),
        "overall_error": (dims[:2], estimate.number[:, None]),
        "overall": (dims[:2], estimate.verdict[:, None]),
        "flags": (dims[:2], flags(each, places)[:, None]),
        "coherent_sites": (dims[:2], np.array(length)[:, None]),
        "distance": (dims[:2], estimate.distance[:, None]),
        "nearest": (dims[:2], nearest[:, None]),
    }
    coords = {"ansatz": [ansatz], "observable": list(NAMES), **_parameters(places, "point")}
    return xr.Dataset(data, coords=coords)


def _nothing(size: int) -> Estimate:
    blank = np.full((size, len(NAMES)), np.nan)
    none = np.full(size, np.nan)
    codes = np.full(size, verdicts.Verdict.NOT_JUDGED, dtype=np.int8)
    return Estimate(blank, blank, blank, none, codes, np.zeros(size, int), np.full(size, np.inf))


def _of_run(every: dict[int, References], run: xr.Dataset, kept: Path | None) -> xr.Dataset:
    """The points of a finished run, with the run's own axes in place of `point`."""
    _check_dimension(int(run.sizes.get("direction", 0)))
    axes = [str(axis) for axis in run.attrs.get("axes", ())]
    shape = tuple(run.sizes[axis] for axis in axes)
    size = int(np.prod(shape, dtype=int))

    def flat(name: str) -> NDArray[Any]:
        if name not in run:
            return np.full((size, *(run.sizes["species"] for _ in predictions.OUTPUTS.get(name, ()))), np.nan)
        own = [str(d) for d in run[name].dims if d not in axes]
        wide = run[name].broadcast_like(run["status"]).transpose(*axes, *own).values
        return np.asarray(wide, dtype=float).reshape(size, *wide.shape[len(axes) :])

    found = {
        name: flat(name)[..., 0] if "direction" in run.get(name, run["status"]).dims else flat(name)
        for name in predictions.OUTPUTS
    }
    species = run.sizes["species"]
    t = flat("t")
    t = t[..., 0] if "direction" in run["t"].dims else np.repeat(t.reshape(size, 1), species, 1)
    U = flat("U").reshape(size, -1) * np.ones((1, species))
    U12 = flat("U12") if species == 2 else np.zeros(size)
    t = np.where(t > 0, t, np.nan)  # without hopping there is nothing near
    places = Places(t, U, U12, found["filling"], flat("T"), flat("n_max") == 1)
    whole = _point_dataset(every, places, str(run.attrs.get("ansatz", ANSATZE[0])), found, kept)
    whole = whole.assign(mu=("point", flat("mu").reshape(size, -1)[:, 0] / t[:, 0]))
    # The run's axes return as dimensions of their own.
    index = np.unravel_index(np.arange(size), shape) if axes else ()
    folded = whole.assign_coords({axis: ("point", run[axis].values[i]) for axis, i in zip(axes, index, strict=True)})
    return _described(folded).assign_attrs(axes=axes)


def _check_mixture(mixture: Mixture) -> None:
    _check_dimension(mixture.dim)
    if mixture.sublattices > 1:
        raise InputError("offset is not 0; the references are chains without a superlattice, nothing can be compared")


def _check_dimension(dim: int) -> None:
    if dim != 1:
        raise InputError(f"dim = {dim}; the references are chains, so only one-dimensional mixtures can be compared")


def _described(dataset: xr.Dataset) -> xr.Dataset:
    """Units, long names and flag meanings on every variable."""
    codes = [verdicts.Verdict.NOT_JUDGED, *(v for v in verdicts.Verdict if v >= 0)]
    meaning = {
        "flag_values": [int(code) for code in codes],
        "flag_meanings": " ".join(verdicts.WORDS[code].replace(" ", "_") for code in codes),
    }
    bits = {
        "flag_masks": [int(bit) for bit in verdicts.Flag],
        "flag_meanings": " ".join(str(bit.name).lower() for bit in verdicts.Flag),
    }
    words: dict[str, tuple[str, dict[str, Any]]] = {
        "error": ("Relative error of mean field", {}),
        "error_lowest": ("Smallest error at a reference nearby", {}),
        "error_highest": ("Largest error at a reference nearby", {}),
        "overall_error": ("Mean error, each counted as at most 1", {}),
        "verdict": ("Verdict", meaning),
        "overall": ("Overall verdict", meaning),
        "flags": ("Doubts that need no reference", bits),
        "reference": ("Value of the reference", {"description": "energies in the unit of the entry"}),
        "prediction": ("Value of mean field", {"description": "energies in the unit of the entry or mixture"}),
        "mu": ("Chemical potential over t", {"description": "species 1; of a reference, the middle of its gap"}),
        "gap": ("Width of the gap in the chemical potential, finite chain, over t", {}),
        "distance": ("Distance to the nearest reference", {"description": f"none is near above {NEARBY:g}"}),
        "coherent_sites": ("Sites over which mean field's own stiffness keeps coherence above 1/e", {}),
        "nearest": ("Nearest reference", {}),
        "species_count": ("Number of species", {}),
        "U_over_t": ("On-site interaction over t", {"description": "infinite for hard-core species"}),
        "U12_over_t": ("Interspecies interaction over t", {}),
        "t2_over_t": ("Hopping of species 2 over that of species 1", {}),
        "T_over_t": ("Temperature over t", {}),
        "filling_1": ("Filling of species 1", {}),
        "filling_2": ("Filling of species 2", {}),
        "observable": ("Observable", {"units_of_values": "; ".join(f"{n}: {o.units}" for n, o in OBSERVABLES.items())}),
    }
    for name, (long_name, more) in words.items():
        if name in dataset.variables:
            dataset[name].attrs = {"long_name": long_name, "units": "1", **more}
    phases = "; ".join(f"{int(phase)}: {WORDS[phase]}" for phase in Phase)
    return dataset.assign_attrs(
        gutz_version=__version__,
        quantitative_below=verdicts.QUANTITATIVE,
        qualitative_below=verdicts.QUALITATIVE,
        phases=phases,
    )
