"""What a cloud looks like: local values anywhere in space, shells, profiles along the axes, column densities.

In:  a `Cloud`.
Out: arrays, `Shell`s, and xarray datasets for figures and for the detection of order.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gutz import attributes
from gutz.phases import WORDS, Phase
from gutz.trap.cloud import Cloud

FloatArray = NDArray[np.float64]

LOCAL = ("filling", "entropy", "order_parameter", "pair_order", "antipair_order", "number_variance")
"""Outputs given in space; pair and anti-pair order are the local <b_1 b_2> and <b_1† b_2>."""

AXES = ("x", "y", "z")


@dataclass(frozen=True)
class Shell:
    """A layer of one phase. inner, outer: radii in sites along each axis; atoms: (species,); entropy in k_B.

    whole: atoms per site of a Mott insulator, 0 for other phases.
    """

    phase: Phase
    whole: int
    inner: FloatArray
    outer: FloatArray
    atoms: FloatArray
    entropy: float

    @property
    def words(self) -> str:
        """The phase in words, a Mott insulator with its filling."""
        return WORDS[self.phase] + (f", {self.whole} per site" if self.whole else "")


def at_potential(cloud: Cloud, potential: FloatArray, names: Sequence[str] = LOCAL) -> dict[str, NDArray[Any]]:
    """Local values where the species' potentials are `potential` (..., species); beyond the cloud 0 and VACUUM.

    Numbers are linear between nodes, the phase is that of the nearest node. Returns arrays (..., [species]).
    """
    shape = potential.shape[:-1]
    flat = potential.reshape(-1, potential.shape[-1])
    index, share = _neighbours(cloud, flat)
    found: dict[str, NDArray[Any]] = {}
    for name in names:
        values = cloud.average(name)
        padded = np.concatenate([values, np.zeros_like(values[:1])])
        mixed = np.einsum("pk,pk...->p...", share, padded[index])
        found[name] = mixed.reshape(shape + mixed.shape[1:])
    codes = np.append(cloud.phases(), np.int8(Phase.VACUUM))
    nearest = np.take_along_axis(index, share.argmax(-1)[:, None], -1)[:, 0]
    found["phase"] = codes[nearest].reshape(shape)
    return found


def at_sites(cloud: Cloud, sites: FloatArray, names: Sequence[str] = LOCAL) -> dict[str, NDArray[Any]]:
    """Local values at positions in sites, (..., axis)."""
    return at_potential(cloud, cloud.trap.potential(sites), names)


def _neighbours(cloud: Cloud, potential: FloatArray) -> tuple[NDArray[np.intp], FloatArray]:
    """Nodes around each point and their shares, (point, corner); the index after the last node means vacuum."""
    nodes = cloud.nodes
    empty = nodes.weight.size
    if nodes.grid is None:
        assert nodes.line is not None
        v = potential[:, 0]
        if nodes.line.size == 1:
            return np.zeros((v.size, 1), np.intp), np.ones((v.size, 1))
        low = np.clip(np.searchsorted(nodes.line, v, side="right") - 1, 0, empty - 2)
        up = np.clip((v - nodes.line[low]) / (nodes.line[low + 1] - nodes.line[low]), 0.0, 1.0)
        index, share = np.stack([low, low + 1], -1), np.stack([1 - up, up], -1)
        index[v > nodes.line[-1]] = empty
        return index, share
    first, second, place = nodes.grid
    steps = first.size
    lookup = np.full(steps * steps, empty, np.intp)
    lookup[place] = np.arange(place.size)
    reach = np.array([first[-1], second[-1]])
    beyond = np.asarray((potential > reach).all(-1))
    spot = np.clip(potential / reach, 0.0, 1.0) * (steps - 1)
    low2 = np.minimum(spot.astype(np.intp), steps - 2)
    up2 = spot - low2
    index, share = np.empty((len(potential), 4), np.intp), np.empty((len(potential), 4))
    for k, (i, j) in enumerate(((0, 0), (0, 1), (1, 0), (1, 1))):
        index[:, k] = lookup[(low2[:, 0] + i) * steps + low2[:, 1] + j]
        share[:, k] = np.abs(1 - i - up2[:, 0]) * np.abs(1 - j - up2[:, 1])
    index[beyond] = empty
    # Corners that no sample of space touched hold nothing known: the others stand for them.
    known = np.where((index == empty) & ~beyond[:, None], 0.0, share)
    total = known.sum(-1, keepdims=True)
    return index, np.where(total > 0, known / np.where(total > 0, total, 1.0), share)


def shells(cloud: Cloud) -> list[Shell]:
    """Layers from the middle outwards; vacuum is left out.

    Only where all species feel the same potential up to a factor: other clouds have no radius, and give [].
    """
    if cloud.nodes.line is None:
        return []
    codes, v, w = cloud.phases(), cloud.nodes.line, cloud.nodes.weight
    atoms, entropy = w[:, None] * cloud.average("filling"), w * cloud.average("entropy")
    # Mott insulators of different filling are different shells.
    whole = np.where(codes == int(Phase.MOTT), np.rint(cloud.average("filling").sum(-1)), 0).astype(int)
    kinds = codes.astype(int) + 100 * whole
    starts = np.flatnonzero(np.diff(kinds, prepend=kinds[0] - 1))
    ends = np.append(starts[1:], codes.size)
    found = []
    for begin, end in zip(starts, ends, strict=True):
        if codes[begin] == int(Phase.VACUUM):
            continue
        low = 0.0 if begin == 0 else 0.5 * (v[begin - 1] + v[begin])
        high = v[-1] if end == codes.size else 0.5 * (v[end - 1] + v[end])
        found.append(
            Shell(
                Phase(int(codes[begin])),
                int(whole[begin]),
                _radii(cloud, low),
                _radii(cloud, high),
                atoms[begin:end].sum(0),
                float(entropy[begin:end].sum()),
            )
        )
    return found


def _radii(cloud: Cloud, v: float) -> FloatArray:
    if cloud.trap.size is not None:
        return 0.5 * cloud.trap.size if v > 0 else np.zeros(cloud.trap.axes)
    return np.array([float(cloud.trap.radius(v, axis)) for axis in range(cloud.trap.axes)])


def extent(cloud: Cloud) -> tuple[FloatArray, FloatArray]:
    """Lowest and highest coordinate of the cloud along each axis, in sites, where the filling exceeds 1e-3."""
    filling = cloud.average("filling")
    filled = filling > 1e-3
    reach = np.where(filled, cloud.nodes.potential, 0.0).max(0)
    return cloud.trap.extent(reach * 1.05 + 1e-12)


def profiles(cloud: Cloud, points: int = 241, energy_unit: str = "1") -> xr.Dataset:
    """Local values along each axis through the middle of the first species' trap.

    Dims: axis (x, y, z as far as there are sites), position (points per axis), species. `position` is in sites.
    """
    low, high = extent(cloud)
    if cloud.trap.size is not None:
        low, high = -0.5 * cloud.trap.size, 0.5 * cloud.trap.size
    count = cloud.trap.axes
    position = np.stack([np.linspace(a, b, points) for a, b in zip(low, high, strict=True)])
    sites = np.broadcast_to(cloud.trap.centre[0], (count, points, count)).copy()
    for axis in range(count):
        sites[axis, :, axis] = position[axis]
    found = at_sites(cloud, sites)
    coords: dict[str, Any] = {
        "axis": list(AXES[:count]),
        "species": np.arange(1, cloud.gas.species + 1),
        "position": (("axis", "point"), position, {"units": "1", "long_name": "Position in sites"}),
    }
    data: dict[str, Any] = {
        "potential": (
            ("axis", "point", "species"), cloud.trap.potential(sites),
            {"units": energy_unit, "long_name": "Trap potential"},
        )
    }  # fmt: skip
    data |= labelled(found, ("axis", "point"), energy_unit)
    return xr.Dataset(data, coords=coords, attrs=summary(cloud, energy_unit))


def labelled(found: Mapping[str, NDArray[Any]], dims: tuple[str, ...], energy_unit: str) -> dict[str, Any]:
    """Arrays of `at_sites` as dataset variables: `dims`, then what belongs to the variable."""
    rest: dict[str, tuple[str, ...]] = {
        "filling": ("species",), "order_parameter": ("species",), "number_variance": ("species", "species_"),
    }  # fmt: skip
    return {
        name: ((*dims, *rest.get(name, ())), values, attributes.of_output(name, energy_unit))
        for name, values in found.items()
    }


def column_density(cloud: Cloud, along: int = -1, points: int = 101) -> xr.Dataset:
    """Atoms per column of sites, summed along one axis: what absorption imaging sees in the trap.

    along: the axis of the light. Dims: species and one or two positions in sites.
    Raises nothing; a cloud along one axis only gives its whole number without position.
    """
    count = cloud.trap.axes
    along %= count
    low, high = extent(cloud)
    pad = 0.05 * (high - low)
    low, high = low - pad, high + pad
    rows, widths = [], np.empty(count)
    for axis in range(count):
        number = points if axis != along else 2 * points
        widths[axis] = (high[axis] - low[axis]) / number
        rows.append(low[axis] + widths[axis] * (np.arange(number) + 0.5))
    mesh = np.stack(np.meshgrid(*rows, indexing="ij"), -1)
    density = at_sites(cloud, mesh, ("filling",))["filling"]
    column = density.sum(along) * widths[along]
    names = [f"position_{AXES[a]}" for a in range(count) if a != along]
    coords: dict[str, Any] = {
        f"position_{AXES[a]}": (
            f"position_{AXES[a]}",
            rows[a],
            {"units": "1", "long_name": f"Position along {AXES[a]} in sites"},
        )
        for a in range(count)
        if a != along
    }
    coords["species"] = np.arange(1, cloud.gas.species + 1)
    attrs = {"units": "1", "long_name": f"Atoms per column of sites along {AXES[along]}"}
    return xr.Dataset({"column_density": ((*names, "species"), column, attrs)}, coords=coords)


def summary(cloud: Cloud, energy_unit: str) -> dict[str, Any]:
    """Numbers of the whole cloud as plain attributes."""
    by_phase = cloud.by_phase()
    total = float(cloud.atoms.sum())
    return {
        "atoms": cloud.atoms.tolist(),
        "T": cloud.T,
        "mu": cloud.mu.tolist(),
        "energy_unit": energy_unit,
        "entropy_per_particle": cloud.entropy_per_particle,
        "fractions": {WORDS[p]: float(a.sum()) / total for p, (a, _) in by_phase.items()},
        "entropies": {WORDS[p]: s / total for p, (_, s) in by_phase.items()},
        "error": float(cloud.error.max()),
        "status": int(cloud.status),
        "n_max": cloud.gas.n_max,
        "ansatz": cloud.gas.ansatz,
        "notes": list(cloud.notes),
    }


def section(cloud: Cloud, across: tuple[int, int], points: int = 201) -> xr.Dataset:
    """Phase and fillings in a plane through the middle of the first species' trap.

    across: the axes of the plane. Dims: two positions in sites, species.
    """
    low, high = extent(cloud)
    pad = 0.05 * (high - low)
    rows = [np.linspace(low[a] - pad[a], high[a] + pad[a], points) for a in across]
    sites = np.broadcast_to(cloud.trap.centre[0], (points, points, cloud.trap.axes)).copy()
    sites[..., across[0]], sites[..., across[1]] = rows[0][:, None], rows[1][None, :]
    found = at_sites(cloud, sites, ("filling",))
    names = tuple(f"position_{AXES[a]}" for a in across)
    coords: dict[str, Any] = {
        name: (name, row, {"units": "1", "long_name": f"Position along {name[-1]} in sites"})
        for name, row in zip(names, rows, strict=True)
    }
    coords["species"] = np.arange(1, cloud.gas.species + 1)
    return xr.Dataset(labelled(found, names, "1"), coords=coords)
