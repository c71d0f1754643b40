"""How the features of the noise picture change with temperature and dimension, in one call.

In:  one point of a mixture, temperatures, dimensions.
Out: an xarray.Dataset with axes dim and T: heights of every feature, condensate, exponents, validity.

Between dimensions the hopping of each bond stays, so a site of a chain has two neighbours and one of the cube six.
Heights are averages over k, which compare across dimensions as whole maps would not.
"""

from collections.abc import Sequence

import numpy as np
import xarray as xr

from gutz.errors import InputError
from gutz.model import Mixture
from gutz.noise.features import Feature, features, order_of
from gutz.noise.maps import maps, validity_attributes
from gutz.solver import solve

FEATURES = {
    "bunching": ("bunching", True),
    "own_pairing": ("pairing of one species", True),
    "negative_lines": ("negative lines", True),
    "condensate_peak": ("condensate peak of n(k)", True),
    "pair_peak": ("pairing between species", False),
    "counterflow_peak": ("counterflow peak", False),
}
"""Variable, name of the feature, and whether there is one for each species."""


def noise_series(
    mixture: Mixture,
    temperatures: Sequence[float],
    dims: Sequence[int] = (1, 2, 3),
    *,
    sites: int = 4096,
    ansatz: str = "dressed",
) -> xr.Dataset:
    """Features of one point at every temperature and dimension.

    mixture: one point with isotropic hopping; its T and dim are replaced. sites: about this many in every dimension, a
    whole number of them along each direction. Absent features have height 0. Raises InputError for a mixture of
    several points, hopping that depends on direction, or temperatures and dimensions that make no sense.
    """
    flat = mixture.flat()
    if flat.shape != (1,):
        raise InputError(f"mixture has the batch shape {mixture.shape}; a series needs one point")
    t = np.asarray(flat.t)[0]
    if np.any(t != t[:, :1]):
        raise InputError("t depends on the direction; a series over dimensions needs one value")
    T = np.asarray(temperatures, float)
    if T.ndim != 1 or T.size == 0 or not np.all(np.isfinite(T)) or np.any(T < 0):
        raise InputError(f"temperatures are {temperatures}; they must be a list of finite numbers of at least 0")
    if not dims or any(d not in (1, 2, 3) for d in dims):
        raise InputError(f"dims are {tuple(dims)}; they must be among 1, 2 and 3")
    species, shape = flat.species, (len(dims), T.size)
    data = {name: np.zeros((*shape, species) if own else shape) for name, (_, own) in FEATURES.items()}
    validity = np.full(shape, -1, np.int8)
    data["condensate"] = np.zeros((*shape, species))
    for row, dim in enumerate(dims):
        point = _in_dimension(flat, t[:, 0], T, dim)
        solution = solve(point, ansatz=ansatz)
        length = max(4, round(sites ** (1.0 / dim)))
        data["condensate"][row] = np.asarray(solution.condensate)
        for column, found in enumerate(maps(solution, length)):
            if found is None:
                continue
            made, validity[row, column] = found
            _enter(data, (row, column), features(made, order_of(solution, (column,))))
    out = xr.Dataset(coords={"dim": list(dims), "T": T, "species": np.arange(1, species + 1)})
    for name, values in data.items():
        words = {"units": "1", "long_name": name.replace("_", " ").capitalize()}
        out[name] = xr.Variable(("dim", "T", "species")[: values.ndim], values, words)
    out["validity"] = xr.Variable(("dim", "T"), validity, validity_attributes())
    return out.assign_attrs(ansatz=ansatz, sites=sites)


def _in_dimension(flat: Mixture, t: np.ndarray, T: np.ndarray, dim: int) -> Mixture:
    """The point at all temperatures, with the same hopping in `dim` directions."""

    def spread(v: np.ndarray | None) -> np.ndarray | None:
        return None if v is None else np.broadcast_to(np.asarray(v), (T.size, *np.shape(v)[1:]))

    wide = flat.map(spread)
    hopping = np.broadcast_to(t[None, :, None], (T.size, t.size, dim))
    return wide.replace(t=hopping, T=T, entropy=None, dim=dim)


def _enter(data: dict[str, np.ndarray], at: tuple[int, int], listed: list[Feature]) -> None:
    for name, (words, own) in FEATURES.items():
        for feature in listed:
            if feature.name == words:
                place = (*at, feature.species[0] - 1) if own else at
                # The condensate peak is a number of atoms; everything else compares to the densities.
                data[name][place] = feature.height if name == "condensate_peak" else feature.normalised
