"""The same cloud site by site, to see where local density fails.

In:  a solved `Cloud`.
Out: an xarray dataset with both on every site, and sentences on where they differ.

Local density knows nothing of neighbours: it has sharp borders where hopping leaks order across them, and it is wrong
where the trap changes much from site to site. Both are solved at the same chemical potentials and temperature.
"""

from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gutz.errors import InputError
from gutz.inhomogeneous import SiteStates, solve_sites
from gutz.phases import WORDS, Phase
from gutz.trap import profiles
from gutz.trap.cloud import Cloud

FloatArray = NDArray[np.float64]

MOST_SITES = 100_000
"""Most sites of a check; a cloud that is the same on both sides of its middle needs one side only."""

CLEAR = 0.05
"""Difference of a filling that is called a failure of local density on a site."""

_FILLED = 1e-4
_BEYOND = 2


def check(cloud: Cloud) -> xr.Dataset:
    """Solve the cloud site by site at its own mu and T, beside local density.

    Dims: the axes, species. Sites stand at half-odd distances from the middle; an axis along which all traps agree
    is given on one side only. Raises InputError for boxes, hot or huge clouds with more than `MOST_SITES` sites, the
    dressed ansatz (there is no site-resolved form of it), and coexisting phases.
    """
    _refuse(cloud)
    rows, mirrored = _grid(cloud)
    sites = int(np.prod([row.size for row in rows]))
    if sites > MOST_SITES:
        raise InputError(
            f"the cloud covers {sites:,} sites (one side of each symmetric axis); at most {MOST_SITES:,} are solved "
            "one by one: take fewer atoms or a tighter trap for the check"
        )
    mesh = np.stack(np.meshgrid(*rows, indexing="ij"), -1)
    potential = np.moveaxis(cloud.trap.potential(mesh), -1, 0)
    mixture = cloud.gas.mixture.replace(n_max=cloud.gas.n_max)
    found = solve_sites(mixture, potential, cloud.mu, cloud.T, mirrored=mirrored)
    local = profiles.at_sites(cloud, mesh, ("filling", "order_parameter"))
    return _dataset(cloud, rows, mirrored, found, local)


def _refuse(cloud: Cloud) -> None:
    if cloud.trap.size is not None:
        raise InputError("a box is uniform; there is nothing to check site by site")
    if cloud.gas.ansatz != "product":
        raise InputError(f"the ansatz is {cloud.gas.ansatz!r}; site by site there is the product ansatz only")
    if cloud.coexist:
        raise InputError("two phases coexist in this cloud; site by site, one of them would be found")


def _grid(cloud: Cloud) -> tuple[list[FloatArray], tuple[bool, ...]]:
    """Positions of the sites along each axis, and which axes are cut at the middle."""
    filled = cloud.average("filling") > _FILLED
    reach = np.where(filled, cloud.nodes.potential, 0.0).max(0)
    low, high = cloud.trap.extent(reach)
    centre = cloud.trap.centre
    rows: list[FloatArray] = []
    mirrored = []
    for axis in range(cloud.trap.axes):
        agree = bool(np.all(centre[:, axis] == centre[0, axis]))
        middle = float(centre[0, axis])
        above = int(np.ceil(high[axis] - middle)) + _BEYOND
        below = 0 if agree else int(np.ceil(middle - low[axis])) + _BEYOND
        rows.append(np.asarray(middle + np.arange(-below, above) + 0.5, float))
        mirrored.append(agree)
    return rows, tuple(mirrored)


def _dataset(
    cloud: Cloud,
    rows: list[FloatArray],
    mirrored: tuple[bool, ...],
    found: SiteStates,
    local: dict[str, NDArray[Any]],
) -> xr.Dataset:
    """Both descriptions and what sets them apart."""
    names = tuple(profiles.AXES[: len(rows)])
    filling = np.moveaxis(found.filling, 0, -1)
    order = np.moveaxis(found.order_parameter, 0, -1)
    copies = 2.0 ** sum(mirrored)
    difference = np.abs(filling - local["filling"])
    atoms = copies * filling.reshape(-1, filling.shape[-1]).sum(0)
    summed = copies * local["filling"].reshape(-1, filling.shape[-1]).sum(0)
    dims = (*names, "species")
    data = {
        "filling": (dims, filling, {"units": "1", "long_name": "Filling, site by site"}),
        "filling_local": (dims, local["filling"], {"units": "1", "long_name": "Filling, local density"}),
        "order_parameter": (dims, order, {"units": "1", "long_name": "Order parameter, site by site"}),
        "order_local": (dims, local["order_parameter"], {"units": "1", "long_name": "Order parameter, local density"}),
        "phase_local": (names, local["phase"], {"units": "1", "long_name": "Phase, local density"}),
    }
    coords: dict[str, Any] = {
        name: (name, row, {"units": "1", "long_name": f"Position along {name} in sites"})
        for name, row in zip(names, rows, strict=True)
    }
    coords["species"] = np.arange(1, filling.shape[-1] + 1)
    weight = filling.sum(-1)
    attrs = {
        "atoms": atoms.tolist(),
        "atoms_local": summed.tolist(),
        "largest_difference": float(difference.max()),
        "mean_difference": float((difference.sum(-1) * weight).sum() / max((weight * weight).sum(), 1e-300)),
        "share_failed": float((weight * (difference.max(-1) > CLEAR)).sum() / max(weight.sum(), 1e-300)),
        "converged": bool(found.converged),
        "steps": found.steps,
    }
    attrs["words"] = _words(attrs, difference, local["phase"], weight)
    return xr.Dataset(data, coords=coords, attrs=attrs)


def _words(attrs: dict[str, Any], difference: FloatArray, phase: NDArray[Any], weight: FloatArray) -> list[str]:
    """Where local density fails, in sentences."""
    apart = [
        f"species {a + 1}: {n:.6g} atoms site by site, {m:.6g} in local density"
        for a, (n, m) in enumerate(zip(attrs["atoms"], attrs["atoms_local"], strict=True))
    ]
    failed = (difference.max(-1) > CLEAR) & (weight > 0)
    words = [
        *apart,
        f"fillings differ by {attrs['largest_difference']:.2g} at most; {attrs['share_failed']:.1%} of the atoms stand "
        f"on sites where they differ by more than {CLEAR:g}",
    ]
    if failed.any():
        codes, counts = np.unique(phase[failed], return_counts=True)
        where = ", ".join(
            f"{WORDS[Phase(int(code))]} ({count / failed.sum():.0%})"
            for code, count in sorted(zip(codes, counts, strict=True), key=lambda pair: -pair[1])
        )
        words.append(f"these sites are, in local density: {where}")
    if not attrs["converged"]:
        words.append("the minimisation site by site did not reach its tolerance")
    return words
