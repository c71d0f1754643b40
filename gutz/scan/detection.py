"""What a scan file asks to detect: cameras, layouts and the points or clouds to be photographed.

In:  a `Plan` whose file has [imaging]; values of its axes.
Out: `Camera`, `Layout`; samples along a row of temperatures.
"""

from collections.abc import Mapping, Sequence
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from gutz.errors import InputError
from gutz.imaging import cooling
from gutz.imaging.camera import RESONANT_LIGHT, Camera, resonant_cross_section
from gutz.imaging.detect import Layout, of_solution
from gutz.imaging.sample import Sample, of_cloud
from gutz.optics import OpticalLattice
from gutz.scan import clouds
from gutz.scan.chunk import mixture_of
from gutz.scan.imaging import ImagingSection
from gutz.scan.parameters import IMAGING
from gutz.scan.plan import Axis, Plan
from gutz.solver import solve
from gutz.units import PLANCK, to_si

Floats = NDArray[np.float64]

WARM = ("mixture.T", "mixture.entropy", "trap.T_over_Tc")
"""Axes that say how warm it is; a curve against temperature takes their place."""


class Row(NamedTuple):
    """Samples along temperatures (run's energy unit), with what else is known: arrays with a temperature each.

    phase: code, or -1 for clouds. status: bits.
    """

    T: Floats
    samples: list[Sample]
    entropy: Floats
    phase: NDArray[np.int64]
    status: NDArray[np.int64]
    notes: list[str]


def section(plan: Plan) -> ImagingSection:
    """The [imaging] section. Raises InputError where there is none."""
    if plan.spec.imaging is None:
        raise InputError("the file has no [imaging] section; give at least tof, the time of flight")
    return plan.spec.imaging


def given(plan: Plan, name: str, values: Mapping[str, float]) -> Any:
    """A value of [imaging], from the axis that sets it or from the file, in SI units. values: by axis name."""
    for axis in plan.axes:
        if axis.target.path == f"imaging.{name}" and axis.name in values:
            kind = axis.target.parameter.kind
            value = values[axis.name]
            return float(to_si(value, kind, axis.unit)) if kind in ("time", "length") else float(value)
    return getattr(section(plan), name)


def camera(plan: Plan, values: Mapping[str, float]) -> Camera:
    """The camera at one value of every axis. Raises InputError for a value out of range."""
    made = section(plan)
    photons, picture = given(plan, "photons", values), given(plan, "picture", values)
    return Camera(
        **{name: given(plan, name, values) for name in _PLAIN},
        photons=np.inf if photons is None else photons,
        picture=np.inf if picture is None else picture,
        cross_section=resonant_cross_section(made.light or RESONANT_LIGHT),
        detection=made.detection,
        flight=made.flight,
        light="xyz".index(made.along),
    )


_PLAIN = ("tof", "efficiency", "resolution", "pixel", "fluctuation", "jitter", "technical")


def layout(plan: Plan, values: Mapping[str, float]) -> Layout:
    """Masses, spacing, depths and size of the sample at one value of every axis."""
    made = section(plan)
    planes = made.planes if plan.spec.dim == 2 else 0
    sites = (made.sites[0], made.sites[1], float(planes) if planes else made.sites[2])
    if plan.spec.lattice is None:
        assert made.spacing is not None
        return Layout(np.broadcast_to(made.mass, 2), made.spacing, made.lattice_depth, sites, planes)
    picked = [np.array([values.get(axis.name, axis.values[0])]) for axis in plan.axes]
    found = plan.light(picked)
    assert found is not None
    mass = np.array([atom.mass for atom in found.atoms])
    return Layout(mass, found.spacing, _depths(found, mass), sites, planes)


def _depths(found: OpticalLattice, mass: Floats) -> Floats:
    """Depth in recoil energies per species and axis; of smooth confinement, the depth of wells of its frequency."""
    level = PLANCK * found.frequencies.reshape(-1, mass.size, 3)[0] / found.recoil[:, None]
    return np.maximum(found.depths.reshape(-1, mass.size, 3)[0], (0.5 * level) ** 2)


def row(plan: Plan, values: Mapping[str, float], T: Floats) -> Row:
    """Samples at temperatures T (run's energy unit) and one value of every other axis.

    Raises InputError where a value makes no sense.
    """
    made = layout(plan, values)
    cool = plan_without_warmth(plan)
    columns = [values.get(axis.name, float(axis.values[0])) for axis in cool.axes]
    if plan.spec.trap is not None:
        return _clouds(cool, columns, made, T)
    settings = cool.settings_at([np.full(T.size, value) for value in columns])
    mixture = mixture_of({**settings, "T": T, "entropy": None})
    solution = solve(mixture, ansatz=plan.spec.ansatz.kind)
    outputs = solution.outputs
    return Row(
        T, of_solution(solution, made), np.asarray(outputs["entropy_per_particle"]),
        np.asarray(outputs["phase"], np.int64), np.asarray(outputs["status"], np.int64), [],
    )  # fmt: skip


def plan_without_warmth(plan: Plan) -> Plan:
    """The plan without axes of temperature and entropy, at T = 0: the row brings its own temperatures."""
    axes = tuple(axis for axis in plan.axes if axis.target.path not in WARM)
    mixture = plan.spec.mixture.model_copy(update={"T": None, "entropy": None})
    trap = plan.spec.trap and plan.spec.trap.model_copy(update={"T_over_Tc": None, "interacting": False})
    return Plan(plan.spec.model_copy(update={"mixture": mixture, "trap": trap}), axes, (1,) * len(axes))


def _clouds(plan: Plan, columns: Sequence[float], made: Layout, T: Floats) -> Row:
    fixed = tuple(
        Axis(axis.name, axis.target, axis.unit, axis.words, np.array([value]))
        for axis, value in zip(plan.axes, columns, strict=True)
    )
    point = next(iter(clouds.points(Plan(plan.spec, fixed, plan.chunk)))).point
    found = cooling.at_temperatures(point.gas, point.trap, point.atoms, T)
    samples = [of_cloud(cloud, made.mass, made.spacing, made.depth, made.planes) for cloud in found]
    notes = list(dict.fromkeys(note for cloud in found for note in cloud.notes))
    return Row(
        T, samples, np.array([cloud.entropy_per_particle for cloud in found]), np.full(T.size, -1),
        np.array([int(cloud.status) for cloud in found]), notes,
    )  # fmt: skip


def imaging_axes(plan: Plan) -> list[Axis]:
    """Axes that change the picture only."""
    return [axis for axis in plan.axes if axis.target.path in IMAGING]
