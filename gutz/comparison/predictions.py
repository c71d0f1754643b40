"""What mean field says at the places of the stored chains.

In:  `Places`, the name of an ansatz.
Out: the outputs a comparison needs, as plain arrays; and the file in which those for the stored set are kept.

Solving the whole set takes minutes on a cold machine, nearly all of it compilation, so the outputs are stored beside
the references, each with the identity of its entry and the version of gutz; what fits neither is solved afresh.
"""

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, Final

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gutz import __version__
from gutz.comparison.observables import peaks
from gutz.comparison.places import Places
from gutz.errors import OutputError
from gutz.model import Mixture
from gutz.noise import noise_map
from gutz.order import by_dimension
from gutz.reference.store import ENGINE
from gutz.scan.paths import replace_durably
from gutz.solution import Solution
from gutz.solver import ANSATZE, solve
from gutz.status import Status

Floats = NDArray[np.float64]

STORED: Final = Path(__file__).parent.parent / "data" / "predictions.nc"
"""Mean-field outputs of the stored set."""

OUTPUTS: dict[str, tuple[str, ...]] = {
    "energy": (),
    "entropy": (),
    "filling": ("species",),
    "number_variance": ("species", "species_"),
    "coherence": ("species",),
    "condensate": ("species",),
    "pair_order": (),
    "antipair_order": (),
    "exponent": ("species",),
    "exponent_pair": (),
    "exponent_antipair": (),
    "coherence_length": ("species",),
    "dressing": (),
    "bunching_peak": ("species",),
    "pair_peak": (),
    "antipair_peak": (),
    "phase": (),
    "status": (),
}
"""What is kept of a solution, along x, and its dimensions after the point."""

NOISE_SITES = 24
"""Length of the chain whose noise map is taken where no reference says otherwise."""

_N_MAX = {1: 12, 2: 4}
"""Cutoff of soft-core chains, by number of species; all stored fillings are below 1.3 per species (2 with one)."""

_LITTLE_WARMTH = 0.01
"""Temperature over t that stands for T = 0 where the ground state of a site is degenerate."""

_GAP_FILLING = 1e-3
"""A state at a jump in the filling that has the wanted filling to this accuracy keeps the label of its own order."""


def solve_places(places: Places, ansatz: str, noise: NDArray[np.int64]) -> dict[str, NDArray[Any]]:
    """Solve every point at its filling and temperature; arrays (points, ...) by the names of `OUTPUTS`.

    noise: length of the chain whose noise map each point is compared with, 0 for none, shape (points,).
    """
    found = {name: np.full((places.size, *(places.species for _ in dims)), np.nan) for name, dims in OUTPUTS.items()}
    known = _known_mu(places)
    todo = np.arange(places.size)
    for by_mu in (True, False):
        for hard in (True, False):
            where = todo[(places.hard_core[todo] == hard) & (np.isfinite(known[todo]) | (not by_mu))]
            if where.size:
                mixture = _mixture(places[where], known[where] if by_mu else None)
                solved = outputs(solve(mixture, ansatz=ansatz), noise[where], cold=places.T[where] == 0)
                for name, values in solved.items():
                    found[name][where] = values
        missed = np.abs(found["filling"] - places.filling).max(-1) > _GAP_FILLING
        todo = np.flatnonzero(missed | np.isnan(found["filling"]).any(-1))
    return found


def _known_mu(places: Places) -> Floats:
    """Chemical potential of both species where symmetry gives it, U12/2, else nan.

    Exact for hard-core species at half filling (particles against holes), and the middle of the plateau for like
    species with one atom per site; to search for it in a state that cannot be compressed only meets jumps.
    """
    if places.species == 1:
        return np.full(places.size, np.nan)
    half = (np.abs(places.filling - 0.5) < _GAP_FILLING).all(-1)
    alike = (places.t[:, 0] == places.t[:, 1]) & (places.U[:, 0] == places.U[:, 1]) & (places.U12 > 0)
    return np.where(half & (places.hard_core | alike), places.U12 / 2, np.nan)


def _mixture(places: Places, mu: Floats | None) -> Mixture:
    hard = bool(places.hard_core.all())
    # Hard-core species at half filling are degenerate at T = 0, as the solver's status says: a little warmth helps.
    T = np.maximum(places.T, _LITTLE_WARMTH * places.t.min(-1)) if hard and mu is not None else places.T
    return Mixture(
        t=tuple(places.t.T),
        U=0.0 if hard else tuple(places.U.T),
        U12=places.U12,
        mu=mu,
        filling=None if mu is not None else tuple(places.filling.T),
        T=T,
        dim=1,
        species=places.species,
        n_max=1 if hard else _N_MAX[places.species],
    )


def outputs(
    solution: Solution, noise: NDArray[np.int64], cold: NDArray[np.bool_] | None = None
) -> dict[str, NDArray[Any]]:
    """The kept outputs of a solution in one dimension, shape (points, ...); nan for what the ansatz lacks.

    noise: as in `solve_places`.
    A state at a jump in the filling that has the filling asked for is named by its order, not by the jump. cold: points
    whose order is to be read as at T = 0.
    """
    flat, lead = solution.mixture.flat(), len(solution.shape)
    given = {
        name: np.asarray(values).reshape(-1, *np.shape(values)[lead:]) for name, values in solution.outputs.items()
    }
    given |= _peaks(solution, noise)
    found = {name: given.get(name, np.full(flat.shape, np.nan)) for name in OUTPUTS}
    found["coherence"] = found["coherence"][..., 0]
    again = np.zeros(flat.shape, bool) if cold is None else cold & (given["T"] > 0)
    if flat.filling is not None:
        there = (np.abs(given["filling"] - np.asarray(flat.filling)) < _GAP_FILLING).all(-1)
        again |= there & ((given["status"] & int(Status.FILLING_GAP)) > 0)
    if again.any():
        some = {name: values[again] for name, values in given.items()}
        if cold is not None:
            some["T"] = np.where(cold[again], 0.0, some["T"])
        for name, values in by_dimension(some, np.asarray(flat.t)[again]).items():
            if name in found:
                found[name] = np.array(found[name])
                found[name][again] = values
    return {name: np.asarray(values, dtype=float) for name, values in found.items()}


def _peaks(solution: Solution, noise: NDArray[np.int64]) -> dict[str, NDArray[Any]]:
    """Peak weights of the noise maps of all points, by the names of `OUTPUTS`."""
    species, size = solution.mixture.species, noise.size
    found: dict[str, NDArray[Any]] = {"bunching_peak": np.full((size, species), np.nan)}
    found |= {name: np.full(size, np.nan) for name in ("pair_peak", "antipair_peak")}
    for sites in np.unique(noise[noise > 0]):
        at = np.flatnonzero(noise == sites)
        whole = noise_map(solution, size=int(sites), full=True)["noise"].values
        for name, values in peaks(whole.reshape(size, *whole.shape[-4:])[at]).items():
            found[name][at] = values
    return found


def write(path: Path, identities: Sequence[str], found: Mapping[str, Mapping[str, NDArray[Any]]]) -> None:
    """Keep outputs by ansatz of a list of entries, both species padded with nan. Raises OutputError."""
    names = [ansatz for ansatz in ANSATZE if ansatz in found]
    data = {
        name: (("ansatz", "entry", *dims), np.stack([np.asarray(found[ansatz][name]) for ansatz in names]))
        for name, dims in OUTPUTS.items()
    }
    dataset = xr.Dataset(data, coords={"ansatz": names, "entry": list(identities)})
    dataset = dataset.assign_attrs(gutz_version=__version__, energy_unit="that of each entry")
    temporary = path.with_name(path.name + ".partial")
    try:
        dataset.to_netcdf(temporary, engine=ENGINE)
        replace_durably(temporary, path)
    except OSError as error:
        raise OutputError(f"{path.name} cannot be written ({(error.strerror or 'disk error').lower()})") from None
    finally:
        temporary.unlink(missing_ok=True)


def stored(path: Path, ansatz: str) -> dict[str, dict[str, NDArray[Any]]]:
    """Kept outputs by identity of the entry; empty where there is no file, or one of another version or damaged."""
    if not path.exists():
        return {}
    try:
        with xr.open_dataset(path, engine=ENGINE) as opened:
            dataset = opened.load()
        if dataset.attrs.get("gutz_version") != __version__ or ansatz not in dataset["ansatz"].values:
            return {}
        chosen = dataset.sel(ansatz=ansatz)
        return {
            str(identity): {name: chosen[name].values[number] for name in OUTPUTS}
            for number, identity in enumerate(chosen["entry"].values)
        }
    except Exception:  # the HDF5 layer raises many kinds; what cannot be read is solved afresh
        return {}
