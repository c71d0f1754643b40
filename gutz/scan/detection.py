"""What a scan file asks to detect: cameras, layouts and the points or clouds to be photographed.

In:  a `Plan` whose file has [imaging]; values of its axes.
Out: `Camera`, `Layout`; samples along a row of temperatures.
"""

import math
from collections.abc import Mapping, Sequence
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from gutz.errors import InputError
from gutz.imaging import cooling
from gutz.imaging.camera import RESONANT_LIGHT, Camera, resonant_cross_section
from gutz.imaging.design import Knob, Samples
from gutz.imaging.detect import Layout, of_solution
from gutz.imaging.sample import Sample, of_cloud
from gutz.optics import OpticalLattice
from gutz.scan import clouds, fields, parameters
from gutz.scan.chunk import mixture_of
from gutz.scan.fields import Beam, Energy
from gutz.scan.imaging import ImagingSection
from gutz.scan.parameters import IMAGING
from gutz.scan.plan import Axis, Plan
from gutz.solver import solve
from gutz.units import PLANCK, from_si, to_si

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
        T, of_solution(solution, made, camera(plan, values)), np.asarray(outputs["entropy_per_particle"]),
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


ERRORS = {"lattice.depth": 0.02, "lattice.a11": 0.01, "lattice.a22": 0.01, "lattice.a12": 0.01, "mixture.T": 0.1}
"""Relative calibration errors (1 sigma) of the gas's settings, common in laboratories (common practice, no source)."""


def knobs(plan: Plan, text: str, at: Mapping[str, float]) -> tuple[list[Knob], Plan]:
    """Read "depth=8:20,tof" into knobs, and the plan with an axis for each setting of the gas, knobs last.

    Bounds not given are those of the file's axis over the setting. Raises InputError for unknown knobs or no bounds.
    """
    found: list[Knob] = []
    extended = [Axis(a.name, a.target, a.unit, a.words, np.array([at[a.name]])) for a in plan.axes]
    moved: list[Axis] = []
    for part in text.split(","):
        name, equals, bounds = (piece.strip() for piece in part.partition("="))
        axis = _knob_axis(plan, name)
        known = next((a for a in plan.axes if a.target == axis.target), None)
        if equals:
            low, high = _bounds(name, bounds)
        elif known is not None and known.values.size > 1:
            low, high = float(known.values.min()), float(known.values.max())
        else:
            raise InputError(
                f"--improve {name}: has no bounds; write {name}=low:high"
                + (f" in {axis.unit}" if axis.unit != "1" else "")
            )
        start = at[known.name] if known is not None else _start(plan, axis)
        if start is None:
            raise InputError(f"--improve {name}: the file gives no single value of {axis.target.path} to start from")
        camera_field = axis.target.path.partition(".")[2] if axis.target.path in IMAGING else ""
        kind = axis.target.parameter.kind
        si = float(to_si(1.0, kind, axis.unit)) if camera_field and kind in ("time", "length") else 1.0
        if any(knob.name == name for knob in found):
            raise InputError(f"--improve {name}: is named twice; name it once")
        found.append(Knob(name, low, high, start, axis.unit, si, camera_field))
        if not camera_field:
            extended = [a for a in extended if a.target != axis.target]
            moved.append(Axis(axis.name, axis.target, axis.unit, axis.words, np.array([start])))
    axes = (*(a for a in extended if not any(a.target.overlaps(m.target) for m in moved)), *moved)
    return found, Plan(plan.spec, axes, (1,) * len(axes))


def _knob_axis(plan: Plan, name: str) -> Axis:
    """An axis over the setting that a knob names: an axis of the file, or a parameter by its last word."""
    for axis in plan.axes:
        if name in (axis.name, axis.target.path):
            return axis
    paths = [path for path in parameters.PARAMETERS if name in (path, path.partition(".")[2])]
    sections = {"lattice": plan.spec.lattice, "trap": plan.spec.trap}
    paths = [p for p in paths if sections.get(p.partition(".")[0], plan.spec.mixture) is not None]
    follows = ("t", "U", "U12") if plan.spec.lattice is not None else ()
    if len(paths) != 1 or name in follows or paths[0] in ("imaging.shots", "imaging.significance"):
        words = sorted({path.partition(".")[2] for path in parameters.PARAMETERS})
        raise InputError(f"--improve {name[:40]}: is not a knob{fields.suggestion(name, tuple(words))}")
    target = parameters.target(paths[0])
    units = parameters.units_of(target.parameter, plan.spec.lattice is not None)
    unit = "nK" if target.parameter.kind == "energy" and plan.spec.lattice is not None else (units or ("1",))[0]
    return Axis(target.path.replace(".", "_"), target, unit, target.parameter.words, np.zeros(1))


def _bounds(name: str, text: str) -> tuple[float, float]:
    low, colon, high = text.partition(":")
    try:
        ends = float(low), float(high)
    except ValueError:
        ends = math.nan, math.nan
    if not colon or not all(map(math.isfinite, ends)):
        raise InputError(f"--improve {name}={text[:30]}: must be two numbers, for example {name}=5:25")
    return ends


def _start(plan: Plan, axis: Axis) -> float | None:
    """The file's own value of a setting, in the axis's unit; None where it is not one number."""
    home, _, name = axis.target.path.partition(".")
    value: Any = getattr(getattr(plan.spec, home), name)
    kind = axis.target.parameter.kind
    if isinstance(value, tuple) and value and all(part == value[0] for part in value):
        value = value[0] if kind == "depth" else value
    if isinstance(value, Beam):
        return value.value if value.unit == "E_R" else None
    if isinstance(value, Energy):
        return value.value if value.unit in (axis.unit, "") else None
    if not isinstance(value, int | float):
        return None
    return float(from_si(value, kind, axis.unit)) if kind in ("time", "length") else float(value)


def samples_of(plan: Plan, count: int) -> Samples:
    """A function that makes samples where the last `count` axes of the plan take given values."""

    def made(points: Floats) -> list[Sample]:
        fixed = [float(axis.values[0]) for axis in plan.axes[: len(plan.axes) - count]]
        columns = [np.full(len(points), value) for value in fixed] + [points[:, j] for j in range(count)]
        names = [axis.name for axis in plan.axes]
        layouts = [layout(plan, dict(zip(names, row_, strict=True))) for row_ in zip(*columns, strict=True)] or [
            layout(plan, {})
        ] * len(points)
        if plan.spec.trap is not None:
            return [_cloud_at(plan, [c[i] for c in columns], layouts[i]) for i in range(len(points))]
        mixture = mixture_of(plan.settings_at(columns))
        if mixture.shape != (len(points),):
            mixture = mixture.map(lambda v: np.broadcast_to(v, (len(points), *v.shape[len(mixture.shape) :])))
        return of_solution(solve(mixture, ansatz=plan.spec.ansatz.kind), layouts)

    return made


def _cloud_at(plan: Plan, columns: Sequence[float], made: Layout) -> Sample:
    """A cloud at the file's own temperature. Raises InputError where the file gives none."""
    fixed = tuple(
        Axis(axis.name, axis.target, axis.unit, axis.words, np.array([value]))
        for axis, value in zip(plan.axes, columns, strict=True)
    )
    point = next(iter(clouds.points(Plan(plan.spec, fixed, plan.chunk)))).point
    if point.T is None:
        raise InputError("--improve: a cloud needs mixture.T here; an entropy is not followed")
    found = cooling.at_temperatures(point.gas, point.trap, point.atoms, np.array([point.T]))[0]
    return of_cloud(found, made.mass, made.spacing, made.depth, made.planes)


def moved(plan: Plan, values: Sequence[float]) -> Plan:
    """The plan with its last axes at these values."""
    first = len(plan.axes) - len(values)
    axes = (
        *plan.axes[:first],
        *(
            Axis(a.name, a.target, a.unit, a.words, np.array([float(v)]))
            for a, v in zip(plan.axes[first:], values, strict=True)
        ),
    )
    return Plan(plan.spec, axes, plan.chunk)


def calibrated(plan: Plan) -> tuple[Samples, Floats, Floats]:
    """Samples where the settings of `ERRORS` take given values, their values in this plan, and their errors."""
    drawn: list[Axis] = []
    errors: list[float] = []
    for path, error in ERRORS.items():
        own = [axis for axis in plan.axes if axis.target.path == path]
        if not own and getattr(plan.spec, path.partition(".")[0]) is not None:
            axis = _knob_axis(plan, path)
            value = _start(plan, axis)
            own = [] if value is None else [Axis(axis.name, axis.target, axis.unit, axis.words, np.array([value]))]
        for axis in own:
            if axis.values[0] != 0:
                drawn.append(axis)
                errors.append(error)
    rest = tuple(axis for axis in plan.axes if axis not in drawn)
    whole = Plan(plan.spec, (*rest, *drawn), (1,) * (len(rest) + len(drawn)))
    return samples_of(whole, len(drawn)), np.array([float(axis.values[0]) for axis in drawn]), np.array(errors)
