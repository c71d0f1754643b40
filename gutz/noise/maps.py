"""From a solution to noise maps: which state, which companion, which grid; results as a labelled dataset.

In:  a `Solution`, a lattice size, what to look at (lines, planes, the whole map in 1D).
Out: `NoiseMap` objects that hand out entries on demand, and `noise_map`, an xarray.Dataset.
"""

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gutz.errors import InputError
from gutz.fluctuations import LocalSites, local_sites
from gutz.noise import recipes
from gutz.noise.features import order_of
from gutz.noise.grid import Floats, Grid, check_grid, refuse_above
from gutz.noise.moments import LocalMoments, of_sites
from gutz.noise.product import ProductMap
from gutz.noise.recipes import Validity
from gutz.noise.shapes import Reach, line_shape
from gutz.noise.uniform import BlendedMap
from gutz.solution import Solution
from gutz.solver import solve

AXES = ("k_x", "k_y", "k_z")

FULL_BELOW = 512
"""Sites of a chain up to which the whole map is part of the dataset."""

EXCHANGE_LIMITS = (0.04, 0.2)
"""z t / |U12| above which the map of a paired or counterflow state is fair, and qualitative (see docs/noise.md)."""


def maps(solution: Solution, size: int | Sequence[int] = 32) -> list[tuple[BlendedMap, Validity] | None]:
    """Return the map of every point of the flat solution with its validity; None where there is no finite state.

    size: sites per direction, one number or one each. A dressed solution is helped by the product state at the same
    filling, which is solved here. Raises InputError or ResourceError for a size that makes no sense or does not fit.
    """
    grid = check_grid(size, solution.mixture.dim)
    filling = _flat(solution, "filling")
    sites = local_sites(solution)
    companions: list[LocalSites | None] = [None] * len(sites)
    if solution.ansatz == "dressed":
        wanted = np.array([own is not None and not recipes.is_paired(own) for own in sites], bool)
        companions = _companions(solution, filling, wanted)
    exchange, trusted = _exchange(solution), np.asarray(solution.trusted).ravel()
    out: list[tuple[BlendedMap, Validity] | None] = []
    for n, (own, other) in enumerate(zip(sites, companions, strict=True)):
        if own is None:
            out.append(None)
            continue
        if own.sublattices == 2 and any(length % 2 for length in grid.shape):
            raise InputError(f"size is {size}; a checkerboard needs an even number of sites along each direction")
        made, validity = recipes.best(own, other, grid, filling[n])
        if recipes.is_paired(own):
            worse = sum(exchange[n] > limit for limit in EXCHANGE_LIMITS)
            validity = Validity(max(int(validity), worse))
        if not trusted[n]:
            validity = Validity.QUALITATIVE
        out.append((made, validity))
    return out


def _flat(solution: Solution, name: str) -> Floats:
    value = np.asarray(solution.outputs[name])
    return value.reshape((-1, *value.shape[len(solution.shape) :]))


def _companions(solution: Solution, filling: Floats, wanted: NDArray[np.bool_]) -> list[LocalSites | None]:
    """Product states at the fillings and temperatures found, where they are wanted and there are atoms."""
    mixture = solution.mixture.flat().map(np.asarray)
    usable = wanted & np.isfinite(filling).all(-1) & (filling > 1e-9).all(-1)
    if mixture.n_max is not None:
        usable &= (filling < mixture.n_max).all(-1)
    found: list[LocalSites | None] = [None] * len(filling)
    index = np.flatnonzero(usable)
    if index.size:
        T = _flat(solution, "T")[index]
        part = mixture[index].replace(mu=None, entropy=None, T=T, filling=filling[index])
        for n, sites in zip(index, local_sites(solve(part)), strict=True):
            found[n] = sites
    return found


def _exchange(solution: Solution) -> Floats:
    mixture = solution.mixture.flat().map(np.asarray)
    if mixture.species == 1:
        return np.zeros(mixture.shape)
    return np.asarray(mixture.z_t).max(-1) / np.maximum(np.abs(mixture.U12), 1e-300)


def cloud_map(solution: Solution, *, fixed: bool = True, refine: int = 1) -> ProductMap:
    """Map of an inhomogeneous cloud: the batch axes of the solution are the sites of the lattice.

    Each site is a product state of its own (local-density picture); the map is exact for it, with fixed numbers.
    refine: momenta between those of the lattice. Raises InputError where the batch does not fit the dimension, or
    where a site has no finite state.
    """
    grid = check_grid(solution.shape, solution.mixture.dim)
    states = local_sites(solution)
    if any(sites is None for sites in states):
        raise InputError("solution has sites without a finite state; a cloud needs one on every site")
    parts = [LocalMoments(*(np.asarray(v).mean(0) for v in of_sites(sites))) for sites in states if sites is not None]
    together = LocalMoments(*(np.stack(v).reshape(*grid.shape, *v[0].shape) for v in zip(*parts, strict=True)))
    return ProductMap(together, grid.shape, fixed=fixed, refine=refine)


def noise_map(
    solution: Solution,
    size: int | Sequence[int] = 32,
    *,
    full: bool | None = None,
    planes: Sequence[Sequence[float]] = (),
    dims: Sequence[str] | None = None,
    coords: Mapping[str, Any] | None = None,
) -> xr.Dataset:
    """Noise correlations of every point, normal-ordered, atom numbers fixed, as a Dataset.

    size: sites per direction. full: the whole map C_ab(k, k') (default: in 1D up to 512 sites). planes: momenta k'
    (on the grid, in 1/lattice constant) at which C_ab(k, k') is given for all k. dims, coords: as in
    `Solution.to_dataset`.

    Variables: momentum_distribution n_a(k); difference_line C_ab(k, k) and sum_line C_ab(k, -k);
    difference_correlation and sum_correlation, averages over k of C_ab(k, k + Q) and C_ab(k, -k + Q) for Q along x,
    what an averaging experiment sees (order peaks between the species with the height and width that fluctuations
    leave them in this dimension); noise, planes where asked; validity; phase, filling, condensate, T.

    Lines, planes and whole maps hold order peaks as sharp lines. Shot noise δ_ab n_a(k) at k = k' is not included: it
    exists at the same pixel only. Raises InputError, or ResourceError for what does not fit.
    """
    grid = check_grid(size, solution.mixture.dim)
    if full is None:
        full = grid.dim == 1 and grid.sites <= FULL_BELOW
    count = int(np.prod(solution.shape, dtype=int))
    refuse_above(count * 4 * (grid.sites**2 if full else grid.sites), "the dataset")
    at = [grid.near(plane) for plane in planes]
    species = solution.mixture.species
    K, L = grid.sites, grid.shape[0]
    shapes = {
        "momentum_distribution": (species, K),
        "difference_line": (species, species, K),
        "sum_line": (species, species, K),
        "difference_correlation": (species, species, L),
        "sum_correlation": (species, species, L),
    }
    if full:
        shapes["noise"] = (species, species, K, K)
    if planes:
        shapes["planes"] = (species, species, len(planes), K)
    data = {name: np.full((count, *shape), np.nan) for name, shape in shapes.items()}
    validity = np.full(count, -1, np.int8)
    along = np.zeros((L, grid.dim), int)
    along[:, 0] = np.arange(L)
    for n, found in enumerate(maps(solution, grid.shape)):
        if found is None:
            continue
        made, validity[n] = found
        row = {name: values[n] for name, values in data.items()}
        _fill(row, made, grid, grid.flat(along), at)
        if species == 2:
            _spread(row, solution, np.unravel_index(n, solution.shape) if solution.shape else (), grid)
    return _labelled(solution, grid, data, validity, planes, dims, coords)


def _fill(out: dict[str, Floats], made: BlendedMap, grid: Grid, along: np.ndarray, at: list[np.ndarray]) -> None:
    nowhere = np.zeros(grid.dim, int)
    out["momentum_distribution"][:] = made.mean
    for a in range(made.species):
        for b in range(made.species):
            out["difference_line"][a, b] = made.difference_line(a, b, nowhere)
            out["sum_line"][a, b] = made.sum_line(a, b, nowhere)
            out["difference_correlation"][a, b] = made.channel(a, b, 1)[1][along]
            out["sum_correlation"][a, b] = made.channel(a, b, -1)[1][along]
            if "noise" in out:
                out["noise"][a, b] = made.full(a, b)
            for row, k_ in enumerate(at):
                out["planes"][a, b, row] = made.plane(a, b, k_).ravel()


def _spread(out: dict[str, Floats], solution: Solution, point: tuple[Any, ...], grid: Grid) -> None:
    """Give the order peaks of the averages the shape that their decay of correlations asks for."""
    order = order_of(solution, point)
    channel = order.paired_channel
    if channel is None or order.decays[channel].reach is Reach.LONG:
        return
    name = {"pair": "sum_correlation", "antipair": "difference_correlation"}[channel]
    _, shape = line_shape(order.decays[channel], np.ones(grid.shape), refine=1)
    shape = np.roll(shape, -(grid.shape[0] // 2))
    for a, b in ((0, 1), (1, 0)):
        line = out[name][a, b]
        background = line[1:].mean()
        out[name][a, b] = np.where(np.arange(line.size) == 0, background, line) + (line[0] - background) * shape


_WORDS = {
    "momentum_distribution": ("Momentum distribution", "<n_a(k)>, sums to the atom number over the grid"),
    "difference_line": ("Correlation at k' = k", "C_ab(k, k), normal-ordered: bunching and counterflow channel"),
    "sum_line": ("Correlation at k' = -k", "C_ab(k, -k), normal-ordered: pair channel"),
    "difference_correlation": ("Mean correlation at k' = k + Q", "average over k, Q along x"),
    "sum_correlation": ("Mean correlation at k' = -k + Q", "average over k, Q along x"),
    "noise": ("Noise correlation", "C_ab(k, k'), normal-ordered, without the shot noise at k = k'"),
    "planes": ("Noise correlation at fixed k'", "C_ab(k, k') for all k"),
}


def _labelled(
    solution: Solution, grid: Grid, data: dict[str, Floats], validity: np.ndarray, planes: Sequence[Sequence[float]],
    dims: Sequence[str] | None, coords: Mapping[str, Any] | None,
) -> xr.Dataset:  # fmt: skip
    base = solution.to_dataset(dims, coords)
    kept = base[["phase", "status", "filling", "condensate", "pair_order", "antipair_order", "T"]]
    batch = tuple(str(d) for d in base["status"].dims)
    shape = solution.shape
    k_dims = ("k",) if grid.dim == 1 else AXES[: grid.dim]
    momenta = {
        name: xr.Variable(name, 2.0 * np.pi * np.arange(L) / L, {"units": "1 / a", "long_name": "Momentum"})
        for name, L in zip(k_dims, grid.shape, strict=True)
    }
    trailing = {
        "momentum_distribution": ("species", *k_dims),
        "difference_line": ("species", "species_", *k_dims),
        "sum_line": ("species", "species_", *k_dims),
        "difference_correlation": ("species", "species_", "Q"),
        "sum_correlation": ("species", "species_", "Q"),
        "noise": ("species", "species_", "k", "k_"),
        "planes": ("species", "species_", "plane", *k_dims),
    }
    out = kept.assign_coords(momenta)
    Q = 2.0 * np.pi * np.arange(grid.shape[0]) / grid.shape[0]
    out = out.assign_coords(Q=("Q", Q, {"units": "1 / a", "long_name": "Momentum transfer along x"}))
    if "noise" in data:
        out = out.assign_coords(k_=("k_", Q, {"units": "1 / a", "long_name": "Second momentum"}))
    species = solution.mixture.species
    sizes = {**out.sizes, "species": species, "species_": species, "plane": len(planes)}
    for name, values in data.items():
        lengths = [sizes[d] for d in trailing[name]]
        words, text = _WORDS[name]
        described = {"units": "1", "long_name": words, "description": text}
        out[name] = xr.Variable((*batch, *trailing[name]), values.reshape(*shape, *lengths), described)
    if planes:
        names = ("x", "y", "z")[: grid.dim]
        out = out.assign_coords(
            plane_momentum=(
                ("plane", "component"),
                np.asarray(planes, float).reshape(len(planes), -1),
                {"units": "1 / a"},
            ),
            component=("component", list(names)),
        )
    out["validity"] = xr.Variable(batch, validity.reshape(shape), validity_attributes())
    out.attrs.update(ansatz=solution.ansatz, size=list(grid.shape), shot_noise="not included")
    return out


def validity_attributes() -> dict[str, Any]:
    """Attributes of the variable validity, CF flags."""
    return {
        "units": "1",
        "long_name": "Validity of the map",
        "description": "expected relative error of a whole map: good below about 8 %, fair below about 20 %",
        "flag_values": [int(v) for v in Validity],
        "flag_meanings": " ".join(v.name.lower() for v in Validity),
    }
