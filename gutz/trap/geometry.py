"""The shape of the trap: how many lattice sites lie at which potential.

In:  curvatures per site squared, centres of the species' traps, or a box.
Out: `Trap`; potentials at given sites; nodes in the potential with the number of sites each stands for.

A local-density cloud needs nothing else of the geometry: every sum over sites is a sum over nodes of (weight x
local value). Where both species feel the same potential up to a factor, the nodes lie on a line and their weights
are exact for functions linear between nodes; else they fill a plane (V1, V2) and the weights come from a fine sampling
of space. Free of jax.
"""

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from gutz.errors import InputError

FloatArray = NDArray[np.float64]

_UNIT_BALL = {1: 2.0, 2: math.pi, 3: 4.0 * math.pi / 3.0}

_SAME = 1e-9
"""Traps that differ by less than this relative amount are the same up to a factor."""

SAMPLES = 300_000
"""Most points of space sampled for clouds that need a plane of potentials."""


class Nodes(NamedTuple):
    """Potentials to solve at. potential: (node, species); weight: sites each node stands for, (node,).

    line: the potential of species 1 along the line, rising, or None for a plane; grid: for a plane, the two rows of
    potentials whose outer product holds the nodes, and where in it each node lies.
    """

    potential: FloatArray
    weight: FloatArray
    line: FloatArray | None
    grid: tuple[FloatArray, FloatArray, NDArray[np.intp]] | None


@dataclass(frozen=True, eq=False)
class Trap:
    """A harmonic trap or a box, in units of lattice sites and of one energy.

    curvature: V_a = sum_d curvature[a, d] (x_d - centre[a, d])², energy per site², shape (species, axis); zero in
        a box. m omega² spacing² / 2 in a laboratory.
    centre: centres in sites, (species, axis). size: sites along each axis of a box, (axis,), or None.
    Raises InputError for a trap that does not bind, or sizes below one site.
    """

    curvature: FloatArray
    centre: FloatArray
    size: FloatArray | None = None

    def __post_init__(self) -> None:
        if self.size is not None:
            if np.any(~(self.size >= 1)):
                raise InputError(
                    f"the size of the box is {np.min(self.size):g}; it must be at least 1 site along each axis"
                )
            return
        if np.any(~(self.curvature > 0)) or not np.all(np.isfinite(self.curvature)):
            worst = float(np.min(self.curvature))
            raise InputError(
                f"the curvature of the trap is {worst:g}; it must be greater than 0 along every axis for every "
                "species, or the cloud is not bound"
            )

    @property
    def species(self) -> int:
        """Number of species."""
        return int(self.curvature.shape[0])

    @property
    def axes(self) -> int:
        """Directions along which there are sites."""
        return int(self.curvature.shape[1])

    @property
    def ratio(self) -> FloatArray | None:
        """V_a / V_1 where the potentials are the same up to a factor, shape (species,); None where they are not."""
        factor = self.curvature / self.curvature[:1]
        aligned = np.allclose(factor, factor[:, :1], rtol=_SAME, atol=0.0)
        width = 1.0 / np.sqrt(self.curvature[:1])
        centred = np.all(np.abs(self.centre - self.centre[:1]) <= _SAME * width / np.max(width))
        return factor[:, 0] if aligned and centred else None

    def potential(self, sites: FloatArray) -> FloatArray:
        """Potential of each species at positions in sites, (..., axis) -> (..., species); 0 in a box."""
        if self.size is not None:
            return np.zeros((*sites.shape[:-1], self.species))
        away = sites[..., None, :] - self.centre
        return np.asarray((self.curvature * away**2).sum(-1))

    def sites_below(self, v: ArrayLike, species: int = 0) -> FloatArray:
        """Number of sites at which the potential of one species is below v, in the continuum limit."""
        product = math.sqrt(float(np.prod(self.curvature[species])))
        return np.asarray(_UNIT_BALL[self.axes] * np.maximum(v, 0.0) ** (self.axes / 2) / product)

    def radius(self, v: ArrayLike, axis: int, species: int = 0) -> FloatArray:
        """Distance in sites from the centre along an axis at which the potential of a species is v."""
        return np.asarray(np.sqrt(np.maximum(v, 0.0) / self.curvature[species, axis]))

    def extent(self, reach: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Lowest and highest coordinate along each axis of where V_a < reach_a for some species; (axis,) each."""
        if self.size is not None:
            return -0.5 * self.size, 0.5 * self.size
        half = np.sqrt(np.maximum(reach, 0.0)[:, None] / self.curvature)
        return (self.centre - half).min(0), (self.centre + half).max(0)


def box_nodes(trap: Trap) -> Nodes:
    """A box is one node."""
    assert trap.size is not None
    return Nodes(np.zeros((1, trap.species)), np.array([float(np.prod(trap.size))]), np.zeros(1), None)


def line_nodes(trap: Trap, v: FloatArray) -> Nodes:
    """Nodes at potentials v of species 1 (rising from 0), with weights exact for functions linear in between."""
    ratio = trap.ratio
    assert ratio is not None
    order = trap.axes / 2
    below = trap.sites_below(v)
    moment = below * v * order / (order + 1)
    sites, first = np.diff(below), np.diff(moment)
    width = np.diff(v)
    upper = (first - v[:-1] * sites) / width
    weight = np.zeros_like(v)
    weight[:-1] += sites - upper
    weight[1:] += upper
    return Nodes(v[:, None] * ratio, np.maximum(weight, 0.0), v, None)


def plane_nodes(trap: Trap, reach: FloatArray, steps: int) -> Nodes:
    """Nodes on a grid of steps x steps potentials from 0 to `reach` (species,), weights from sampled space.

    Space is sampled at midpoints; axes along which the centres agree are sampled on one side only. Each sample is
    shared out among the four nodes around it (bilinear). Where one species is beyond its reach its potential is
    held there: that species is absent, and the other does not see it.
    """
    points, each = sample_space(trap, reach)
    potential = trap.potential(points)
    inside = (potential < reach).any(-1)
    potential = np.minimum(potential[inside], reach)
    rows = (np.linspace(0.0, reach[0], steps), np.linspace(0.0, reach[1], steps))
    place = potential / reach * (steps - 1)
    low = np.minimum(place.astype(np.intp), steps - 2)
    up = place - low
    weight = np.zeros(steps * steps)
    for i in (0, 1):
        for j in (0, 1):
            share = (up[:, 0] if i else 1 - up[:, 0]) * (up[:, 1] if j else 1 - up[:, 1])
            weight += np.bincount((low[:, 0] + i) * steps + low[:, 1] + j, share, steps * steps)
    weight *= each
    index = np.flatnonzero(weight > 0)
    first, second = rows[0][index // steps], rows[1][index % steps]
    return Nodes(np.stack([first, second], -1), weight[index], None, (*rows, index))


def sample_space(trap: Trap, reach: FloatArray) -> tuple[FloatArray, float]:
    """Midpoints of cells that fill the cloud's bounding box, and the sites per sample."""
    low, high = trap.extent(reach)
    mirrored = np.all(trap.centre == trap.centre[:1], axis=0)
    low = np.where(mirrored, trap.centre[0], low)
    per_axis = int(SAMPLES ** (1.0 / trap.axes))
    rows = []
    for a, b in zip(low, high, strict=True):
        rows.append(a + (b - a) * (np.arange(per_axis) + 0.5) / per_axis)
    mesh = np.stack(np.meshgrid(*rows, indexing="ij"), -1).reshape(-1, trap.axes)
    cell = float(np.prod((high - low) / per_axis)) * 2.0 ** int(mirrored.sum())
    return mesh, cell
