"""What is to be photographed: atoms, lattice, and how much order of each kind there is and where.

In:  a uniform solution and its size, or a cloud.
Out: `Sample`, a jax pytree of sums over the sites.

A picture needs little of the order itself: Σ_j |M_j|² and the size of the region. The three kinds of M are
<b_1 b_2> ("pair", peak at k' = -k), <b_1† b_2> ("antipair", peak at k' = k) and n_a (bunching, k' = k + G).
"""

from dataclasses import dataclass, field, replace
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np

from gutz.errors import InputError
from gutz.phases import ORDER_THRESHOLD
from gutz.trap.cloud import Cloud
from gutz.trap.geometry import sample_space
from gutz.trap.profiles import at_potential

Array = Any

CHANNELS = ("pair", "antipair")
NAMES = {"pair": "pair_order", "antipair": "antipair_order"}
"""The output that holds the local order of a channel."""
WHERE = {"pair": "k' = -k", "antipair": "k' = k"}


@jax.tree_util.register_dataclass
@dataclass(frozen=True)
class Region:
    """Sum and size of one kind of order M. total: Σ_j M_j². size, size2: rms radius in sites along x, y, z, weighted
    with M and with M², (axis,)."""

    total: Array
    size: Array
    size2: Array


@jax.tree_util.register_dataclass
@dataclass(frozen=True)
class Sample:
    """Atoms on a lattice, and their order. Mass in kg, spacing in m.

    atoms: N_a, (2,). depth: lattice depth in recoil energies along x, y, z, per species (2, axis). mass: (2,).
    regions: `Region` by channel ("pair", "antipair") and of the fillings ("1", "2").
    condensate: share of the atoms with <b_a> ≠ 0, (2,). planes: coherent only within planes across the light;
    otherwise in all three directions.
    """

    atoms: Array
    mass: Array
    spacing: Array
    depth: Array
    regions: dict[str, Region]
    condensate: Array
    planes: bool = field(default=False, metadata={"static": True})

    def peak(self, channel: str) -> Array:
        """Height of the peak of C_12/(n_1 n_2) averaged over the sample: Σ M² / Σ n_1 n_2, with Σ n² for the latter."""
        both = jnp.sqrt(self.regions["1"].total * self.regions["2"].total)
        return self.regions[channel].total / both


def check_lattice(mass: Array, spacing: float, depth: Array) -> None:
    """Refuse numbers without sense. Raises InputError."""
    for name, value in (("mass", mass), ("spacing", spacing), ("depth", depth)):
        if isinstance(value, jax.core.Tracer):
            continue
        numbers = np.asarray(value, float)
        if not (np.all(np.isfinite(numbers)) and np.all(numbers > 0)):
            raise InputError(f"{name} is {numbers.ravel()[0]:g}; it must be greater than 0")


def uniform(
    outputs: dict[str, Array], sites: tuple[float, float, float], mass: Array, spacing: Array, depth: Array,
    planes: int = 0, correlated: dict[str, Array] | None = None,
) -> Sample:  # fmt: skip
    """A box of equal sites. outputs: of one point (`gutz.variables`), no batch axes.

    sites: along x, y, z (along the light: the number of planes, where `planes` > 0 says that they are independent).
    correlated: order by channel in place of the outputs' own. Differentiable by jax. Raises InputError for a box below
    two sites across, or one species.
    """
    if np.shape(outputs["filling"])[-1] != 2:
        raise InputError("detection of pairs and anti-pairs needs two species; the solution has one")
    for number in sites:
        if not (np.isfinite(number) and number >= 1):
            raise InputError(f"sites is {number:g}; it must be at least 1 along every direction")
    check_lattice(mass, spacing, depth)
    count = float(np.prod(sites))
    radius = jnp.asarray(sites) / np.sqrt(12.0)
    filling = jnp.asarray(outputs["filling"])
    order = correlated if correlated is not None else local_order(outputs)
    regions = {name: Region(count * jnp.asarray(value) ** 2, radius, radius) for name, value in order.items()}
    for a in (0, 1):
        regions[str(a + 1)] = Region(count * filling[a] ** 2, radius, radius)
    condensate = jnp.asarray(outputs["condensate"]) / jnp.maximum(filling, 1e-300)
    return Sample(
        count * filling, _both(mass), jnp.asarray(spacing), _depths(depth), regions, condensate, planes=planes > 0
    )


def local_order(outputs: dict[str, Array]) -> dict[str, Array]:
    """Order of pairs and anti-pairs beyond the product of the species' own, M - φ_1 φ_2, where atoms do not condense.

    In a superfluid the peaks of C_12 come from fluctuations and not from a local average: 0 here (see
    `gutz.noise`). Last axis of `order_parameter` the species.
    """
    phi = jnp.abs(jnp.asarray(outputs["order_parameter"]))
    single = (phi > ORDER_THRESHOLD).any(-1)
    return {name: jnp.where(single, 0.0, jnp.abs(jnp.asarray(outputs[NAMES[name]]))) for name in CHANNELS}


def of_cloud(cloud: Cloud, mass: Array, spacing: float, depth: Array, planes: int = 0) -> Sample:
    """Order of a trapped cloud summed over its sites, in local density.

    planes: 0 for a cloud in three directions, else the number of equal planes. Raises InputError for one species or a
    cloud along one axis.
    """
    if cloud.gas.species != 2:
        raise InputError("detection of pairs and anti-pairs needs two species; the cloud has one")
    if cloud.trap.axes == 1:
        raise InputError("the cloud has sites along one axis only; detection needs a picture across two")
    check_lattice(mass, spacing, depth)
    names = ("filling", "order_parameter", "pair_order", "antipair_order")
    if cloud.nodes.line is not None:
        weight = cloud.nodes.weight
        values = {name: cloud.average(name) for name in names}
        square = _square_radii(cloud)
    else:
        reach = cloud.nodes.potential.max(0)
        points, each = sample_space(cloud.trap, reach)
        values = at_potential(cloud, cloud.trap.potential(points), names)
        weight = np.full(len(points), each)
        middle = (weight * values["filling"].sum(-1)) @ points / (weight @ values["filling"].sum(-1))
        square = (points - middle) ** 2
    order = {name: np.asarray(value) for name, value in local_order(values).items()}
    order |= {str(a + 1): values["filling"][:, a] for a in (0, 1)}
    copies = float(max(1, planes))
    regions = {name: _region(weight, m, square, copies) for name, m in order.items()}
    atoms = weight @ values["filling"]
    condensate = weight @ values["order_parameter"] ** 2 / np.maximum(atoms, 1e-300)
    return Sample(
        copies * atoms, _both(mass), jnp.asarray(spacing), _depths(depth), regions, condensate, planes=planes > 0
    )


def _square_radii(cloud: Cloud) -> np.ndarray:
    """Mean of x_i² over the sites at each node, (node, axis): on the surface of an ellipsoid, or a box."""
    axes = cloud.trap.axes
    if cloud.trap.size is not None:
        return np.broadcast_to(cloud.trap.size**2 / 12.0, (cloud.nodes.weight.size, axes))
    assert cloud.nodes.line is not None
    return cloud.nodes.line[:, None] / (axes * cloud.trap.curvature[0])


def _region(weight: np.ndarray, order: np.ndarray, square: np.ndarray, copies: float) -> Region:
    """Sums of one kind of order; size 1 site where there is none, so that nothing divides by 0."""
    radii = []
    for power in (1, 2):
        share = weight * order**power
        whole = share.sum()
        rms = np.sqrt(share @ square / whole) if whole > 0 else np.ones(square.shape[1])
        radii.append(np.pad(rms, (0, 3 - rms.size), constant_values=1.0))
    return Region(jnp.asarray(copies * weight @ order**2), jnp.asarray(radii[0]), jnp.asarray(radii[1]))


def _both(value: Array) -> Array:
    return jnp.broadcast_to(jnp.asarray(value, jnp.float64), (2,))


def _depths(value: Array) -> Array:
    return jnp.broadcast_to(jnp.asarray(value, jnp.float64), (2, 3))


def scaled(sample: Sample, channel: str, factor: Array) -> Sample:
    """The sample with Σ M² of one channel multiplied by `factor`."""
    region = sample.regions[channel]
    return replace(sample, regions={**sample.regions, channel: replace(region, total=region.total * factor)})
