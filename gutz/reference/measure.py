"""Solve the chains of one entry and measure them.

In:  an `Entry` of a plan.
Out: raw measurements as an xarray Dataset: sums over each chain, correlators at the middle of the longest, noise map.

Sums over whole chains are kept because their differences between two lengths are free of what the ends do; see
`bulk`. Plain numpy; nothing here knows mean field.
"""

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np
import xarray as xr

from gutz.exact import LatticeModel, chain, chains, mps, mps_correlators, mps_thermal
from gutz.exact.lattice import Floats
from gutz.reference.plan import Entry

DISTANCES = 13
"""Correlators are summed over distances 0 .. DISTANCES - 1, or what the shortest chain holds."""

_TOLERANCE = 1e-8
_SWEEPS = 12


class _Run(NamedTuple):
    """One chain that is solved: its length and the most states kept."""

    length: int
    bond: int


class _Correlators(NamedTuple):
    """Matrices (site, site) of one chain; density is <n_ai n_bj>, shape (species, species, site, site)."""

    one_body: Floats
    pair: Floats | None
    antipair: Floats | None
    density: Floats


def measure(entry: Entry, notice: Callable[[str], None] = lambda words: None, *, shortest: bool = False) -> xr.Dataset:
    """Solve every chain of the entry. Energies in its unit; correlators in atoms and k_B.

    The shortest chain is solved a second time with half the states, so that the error of the cut is known; with
    `shortest` only that chain is solved, once. Raises InputError or ResourceError from the solvers.
    """
    if entry.method == "Bethe ansatz":
        return _bethe(entry)
    runs = [_Run(length, entry.bond) for length in entry.lengths[: 1 if shortest else None]]
    if entry.method != "free fermions" and not shortest:
        runs.insert(0, _Run(entry.lengths[0], max(2, entry.bond // 2)))
    distances = min(DISTANCES, entry.lengths[0] - 2)
    rows: list[dict[str, Any]] = []
    data: dict[str, Any] = {}
    for number, run in enumerate(runs):
        last = number == len(runs) - 1
        solved = _solve(entry, run.length, run.bond)
        if last and entry.method == "sweeps":
            data["energy_variance"] = ((), solved.state.variance)
        found = _correlators(entry, solved.state)
        rows.append(solved.numbers | _sums(found, distances))
        notice(f"{entry.name}: {run.length} sites, {run.bond} states: energy {solved.numbers['total_energy']:.8g}")
        if last:
            data |= _middle(found)
        if run.length == entry.noise_length and run.bond == entry.bond and not shortest:
            data |= _noise(entry, solved.state)
    for name in rows[0]:
        values = np.array([row[name] for row in rows])
        data[name] = (("run", *_SUM_DIMS.get(name, ())), values)
    if entry.gaps and not shortest:
        data |= _gaps(entry)
    coords = {
        "length": ("run", [run.length for run in runs]),
        "bond": ("run", [run.bond for run in runs]),
        "distance": np.arange(distances),
        "species": np.arange(1, entry.species + 1),
        "species_": np.arange(1, entry.species + 1),
    }
    return xr.Dataset(data, coords=coords)


_SUM_DIMS = {
    "atoms": ("species",),
    "sum_covariance": ("species", "species_"),
    "sum_one_body": ("species", "distance"),
    "sum_pair": ("distance",),
    "sum_antipair": ("distance",),
    "sum_density": ("species", "species_", "distance"),
}


class _Solved(NamedTuple):
    """State of one chain (kind depends on the method), and its plain numbers."""

    state: Any
    numbers: dict[str, Any]


def _model(entry: Entry, length: int) -> LatticeModel:
    mu = entry.mu if entry.T > 0 else None
    return LatticeModel(chain(length), t=entry.t, U=entry.U, U12=entry.U12, mu=mu, n_max=entry.n_max)


def _atoms(entry: Entry, length: int) -> tuple[int, ...]:
    return tuple(round(n * length) for n in entry.filling)


def _solve(entry: Entry, length: int, bond: int) -> _Solved:
    """Solve one chain by the entry's method."""
    model = _model(entry, length)
    numbers: dict[str, Any] = {"discarded": 0.0, "converged": 1}
    if entry.method == "free fermions":
        N = None if entry.T > 0 else _atoms(entry, length)[0]
        state: Any = chains.hard_core_chain(model, entry.T, N)
        atoms = np.array([state.filling.sum()])
    elif entry.method == "sweeps":
        state = mps.ground_state(
            model, _atoms(entry, length), max_bond=bond, tolerance=_TOLERANCE, max_sweeps=_SWEEPS, seed=0
        )
        numbers |= {"discarded": state.discarded, "converged": int(state.converged)}
        atoms = np.array(_atoms(entry, length), dtype=float)
    else:
        state = mps_thermal.thermal_state(model, entry.T, max_bond=bond)
        numbers |= {"discarded": state.discarded}
        atoms = mps_correlators.filling(state).sum(axis=1)
    if entry.T > 0:
        numbers |= {"total_entropy": state.entropy, "grand_potential": state.free_energy}
    with_mu = state.energy + (atoms @ np.array(entry.mu) if entry.T > 0 else 0.0)
    return _Solved(state, numbers | {"total_energy": float(with_mu), "atoms": atoms})


def _correlators(entry: Entry, state: Any) -> _Correlators:
    if entry.method == "free fermions":
        one = chains.hard_core_one_body(state.correlation)
        return _Correlators(one[None], None, None, chains.hard_core_density_density(state.correlation)[None, None])
    species = range(entry.species)
    one = np.array([mps_correlators.one_body(state, a) for a in species])
    density = np.array([[mps_correlators.density_density(state, a, b) for b in species] for a in species])
    two = entry.species == 2
    return _Correlators(
        one,
        mps_correlators.pair(state) if two else None,
        mps_correlators.antipair(state) if two else None,
        density,
    )


def _connected(found: _Correlators) -> Floats:
    """<n_ai n_bj> - <n_ai><n_bj>."""
    filling = np.array([np.diag(one) for one in found.one_body])
    return found.density - filling[:, None, :, None] * filling[None, :, None, :]


def _sums(found: _Correlators, distances: int) -> dict[str, Any]:
    """Sums over the chain at fixed distance; distance 0 of density is the number covariance."""
    density = _connected(found)
    both = (density + density.swapaxes(-1, -2)) / 2

    def along(matrix: Floats) -> Floats:
        return np.stack([np.trace(matrix, offset=r, axis1=-2, axis2=-1) for r in range(distances)], axis=-1)

    sums = {"sum_one_body": along(found.one_body), "sum_density": along(both)}
    sums["sum_covariance"] = sums["sum_density"][..., 0]
    if found.pair is not None and found.antipair is not None:
        sums |= {"sum_pair": along(found.pair), "sum_antipair": along(found.antipair)}
    return sums


def _middle(found: _Correlators) -> dict[str, Any]:
    """Correlators between sites about the middle, by span 1 .. L - 1; fluctuations of the atoms left of a cut."""
    sites = found.one_body.shape[-1]
    spans = np.arange(1, sites)
    left = (sites - 1 - spans) // 2
    other = (sites - 1 - spans) - left

    def middle(matrix: Floats) -> Floats:
        values: Floats = (matrix[..., left, left + spans] + matrix[..., other, other + spans]) / 2
        return values

    fluctuation = np.cumsum(np.cumsum(_connected(found), axis=-1), axis=-2)
    within = np.diagonal(fluctuation, axis1=-2, axis2=-1)[..., :-1]
    data: dict[str, Any] = {
        "profile": (("species", "site"), np.array([np.diag(one) for one in found.one_body])),
        "middle_one_body": (("species", "span"), middle(found.one_body)),
        "fluctuation": (("species", "species_", "span"), within),
        "span": ("span", spans),
    }
    if found.pair is not None and found.antipair is not None:
        data["middle_pair"] = ("span", middle(found.pair))
        data["middle_antipair"] = ("span", middle(found.antipair))
    return data


def _noise(entry: Entry, state: Any) -> dict[str, Any]:
    """Normal-ordered noise maps of all species pairs, and momentum distributions."""
    species = range(entry.species)
    maps = np.array([[mps_correlators.noise_map(state, 0, 0)]]) if entry.species == 1 else _two_maps(state)
    momentum = np.array([mps_correlators.momentum_distribution(state, a) for a in species])
    k = 2 * np.pi * np.arange(maps.shape[-1]) / maps.shape[-1]
    return {
        "noise": (("species", "species_", "k", "k_"), maps),
        "momentum": (("species", "k"), momentum),
        "k": k,
        "k_": k,
    }


def _two_maps(state: Any) -> Floats:
    same = [mps_correlators.noise_map(state, a, a) for a in range(2)]
    cross = mps_correlators.noise_map(state, 0, 1)
    return np.array([[same[0], cross], [cross.T, same[1]]])


def _gaps(entry: Entry) -> dict[str, Any]:
    """Energies of the noise map's chain with atoms added or taken away; `added` lists how many of each species."""
    length = entry.noise_length or entry.lengths[0]
    changes: list[tuple[int, ...]]
    if entry.species == 1:
        changes = [(1,), (-1,)]
    else:
        changes = [(1, 0), (-1, 0), (0, 1), (0, -1), (1, 1), (-1, -1), (1, -1), (-1, 1)]
    model, atoms = _model(entry, length), np.array(_atoms(entry, length))
    energies = [
        mps.ground_state(
            model, tuple(atoms + change), max_bond=entry.bond, tolerance=_TOLERANCE, max_sweeps=_SWEEPS
        ).energy
        for change in changes
    ]
    return {"changed_energy": ("change", np.array(energies)), "added": (("change", "species"), np.array(changes))}


def _bethe(entry: Entry) -> xr.Dataset:
    """Exact numbers of the infinite hard-core mixture at half filling, equal hopping (Lieb & Wu 1968)."""
    t = entry.t[0]
    step = 1e-4 * t
    rise = chains.mixture_energy(t, entry.U12 + step) - chains.mixture_energy(t, entry.U12 - step)
    data = {
        "exact_energy": chains.mixture_energy(t, entry.U12),
        "exact_gap": chains.mixture_gap(t, entry.U12),
        # dE/dU12 = <n_1 n_2> per site (Hellmann-Feynman).
        "exact_double": rise / (2 * step),
    }
    return xr.Dataset({name: ((), value) for name, value in data.items()})
