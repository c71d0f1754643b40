"""The clouds a scan file asks for: traps, atom numbers and entropies of every point, and the table of results.

In:  a `Plan` whose file has a [trap].
Out: points ready to be solved, and one dataset with a row per cloud. The axes are worked through in order, so that
     each cloud starts from its neighbour.
"""

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from scipy import constants

from gutz import attributes
from gutz.errors import InputError
from gutz.model import Mixture
from gutz.optics import HubbardParameters
from gutz.phases import WORDS, Phase
from gutz.scan.plan import Plan
from gutz.status import Status
from gutz.trap import initial
from gutz.trap.cloud import Cloud
from gutz.trap.geometry import Trap
from gutz.trap.loading import Margin, Point
from gutz.trap.local import LocalGas
from gutz.units import HBAR, PLANCK, to_si
from gutz.variables import ENERGY

FloatArray = NDArray[np.float64]

MOST_CLOUDS = 2000
"""Most clouds of one file: each takes a second or so."""

PHASES = tuple(phase for phase in Phase if phase not in (Phase.UNDECIDED, Phase.VACUUM, Phase.COLLAPSE))
"""Phases that the table has a column for; the word of `Phase.VACUUM` is the rest."""


@dataclass(frozen=True)
class CloudPoint:
    """One cloud asked for. values: of the axes; point: to be solved; lattice: its parameters or None.

    spacing: distance of sites in m, nan without lattice. initial: entropy per particle that follows from T_over_Tc.
    """

    values: tuple[float, ...]
    point: Point
    lattice: HubbardParameters | None
    spacing: float


def check(plan: Plan) -> None:
    """Refuse a file without [trap] or with too many clouds."""
    if plan.spec.trap is None:
        raise InputError("the file has no [trap] section; a cloud needs atom numbers and a trap")
    if plan.points > MOST_CLOUDS:
        raise InputError(f"the axes give {plan.points:,} clouds; at most {MOST_CLOUDS:,} are allowed")


def points(plan: Plan) -> Iterator[CloudPoint]:
    """Every cloud of the file, last axis fastest. Raises InputError where a value makes no sense."""
    check(plan)
    for index in np.ndindex(*plan.shape):
        yield _point(plan, tuple(float(axis.values[i]) for axis, i in zip(plan.axes, index, strict=True)))


def _point(plan: Plan, values: tuple[float, ...]) -> CloudPoint:
    picked = [np.array([v]) for v in values]
    lattice = plan.lattice(picked)
    settings = plan.settings(picked, lattice)
    T, entropy = settings["T"], settings["entropy"]
    made = {**settings, "mu": 0.0, "filling": None, "T": 0.0, "entropy": None}
    mixture = Mixture(**made).flat()
    species = plan.spec.species
    atoms = np.array([_value(plan, values, "trap.N", a) for a in range(species)])
    trap, frequency = _trap(plan, values, lattice)
    start = _value(plan, values, "trap.T_over_Tc")
    if start is not None:
        entropy = initial.mixture_entropy(
            start, atoms, frequency, _interaction(plan, values, lattice, atoms, frequency)
        )
    elif entropy is not None:
        entropy = float(np.ravel(entropy)[0])
    temperature = None if entropy is not None else 0.0 if T is None else float(np.ravel(T)[0])
    gas = LocalGas(mixture, plan.spec.ansatz.kind)
    spacing = plan.spec.lattice.wavelength / 2 if plan.spec.lattice and plan.spec.lattice.wavelength else math.nan
    return CloudPoint(values, Point(gas, trap, atoms, temperature, entropy), lattice, spacing)


def _value(plan: Plan, values: Sequence[float], path: str, species: int | None = None, axis: int | None = None) -> Any:
    """A value of [trap]: from the axis that sets it (in SI for frequencies), else from the file; None if neither."""
    for known, value in zip(plan.axes, values, strict=True):
        target = known.target
        if (
            target.path == path
            and (target.species is None or species in target.species)
            and (target.directions is None or axis in target.directions)
        ):
            return float(to_si(value, "frequency", known.unit)) if target.parameter.kind == "frequency" else value
    given: Any = getattr(plan.spec.trap, path.split(".")[1])
    if isinstance(given, tuple) and axis is not None:
        given = given[species] if isinstance(given[0], tuple) and species is not None else given
        return given[axis]
    return given[species] if isinstance(given, tuple) and species is not None else given


def _trap(plan: Plan, values: Sequence[float], lattice: HubbardParameters | None) -> tuple[Trap, FloatArray]:
    """The trap in sites and the run's energy unit, and the mean frequency of each species (1 without lattice)."""
    section, species = plan.spec.trap, plan.spec.species
    assert section is not None
    # Along a harmonic axis of the lattice nothing hops and there are no sites.
    sites = [d for d in range(plan.spec.dim)] if lattice is None else np.flatnonzero(lattice.t.reshape(-1, 3)[0] > 0)
    if section.box is not None:
        size = np.array([section.box[d] for d in sites])
        return Trap(np.zeros((species, len(sites))), np.zeros((species, len(sites))), size), np.ones(species)
    name = "trap.curvature" if lattice is None else "trap.frequency"
    found = np.array([[_given(plan, values, name, a, d) for d in range(3)] for a in range(species)])
    centre = np.zeros((species, 3))
    mean = np.ones(species)
    if lattice is not None:
        assert plan.spec.lattice is not None and plan.spec.lattice.wavelength is not None
        spacing = plan.spec.lattice.wavelength / 2
        mean = np.prod(found, axis=-1) ** (1 / 3)
        omega = 2 * math.pi * found
        if section.gravity is not None:
            down = "xyz".index(section.gravity)
            if down not in sites:
                raise InputError(f"trap.gravity points along {section.gravity}, where the lattice has no sites")
            centre[:, down] = -constants.g / omega[:, down] ** 2 / spacing
            centre[:, down] -= centre[0, down]
        found = 0.5 * _masses(plan, lattice)[:, None] * (omega * spacing) ** 2 / lattice.recoil[0]
    return Trap(found[:, sites], centre[:, sites]), mean


def _given(plan: Plan, values: Sequence[float], name: str, species: int, axis: int) -> float:
    value = _value(plan, values, name, species, axis)
    if value is None:
        raise InputError(f"{name} is given for some species or axes only; give it for all")
    return float(value)


def _masses(plan: Plan, lattice: HubbardParameters) -> FloatArray:
    """Masses in kg, from E_R = h²/(2 m lambda²)."""
    assert plan.spec.lattice is not None and plan.spec.lattice.wavelength is not None
    return np.asarray(PLANCK**2 / (2 * lattice.recoil * plan.spec.lattice.wavelength**2))


def _interaction(
    plan: Plan,
    values: Sequence[float],
    lattice: HubbardParameters | None,
    atoms: FloatArray,
    frequency: FloatArray,
) -> FloatArray:
    """Eta of each species in the initial gas; 0 without the interaction correction."""
    section = plan.spec.trap
    assert section is not None
    if not section.interacting or lattice is None:
        return np.zeros(len(atoms))
    masses = _masses(plan, lattice)
    eta = []
    for a, name in enumerate(("a11", "a22")[: len(atoms)]):
        length = getattr(plan.spec.lattice, name)
        for axis, value in zip(plan.axes, values, strict=True):
            if axis.target.path == f"lattice.{name}":
                length = float(to_si(value, "length", axis.unit))
        oscillator = math.sqrt(HBAR / (masses[a] * 2 * math.pi * frequency[a]))
        eta.append(initial.interaction_strength(float(atoms[a]), float(length), oscillator))
    return np.array(eta)


def table(
    plan: Plan, asked: Sequence[CloudPoint], clouds: Sequence[Cloud], margins: Sequence[Margin | None]
) -> xr.Dataset:
    """One row per cloud: T, mu, entropy, atoms and entropy by phase, centre, status; margins where computed.

    Dims: the file's axes, species, phase.
    """
    names = tuple(axis.name for axis in plan.axes)
    species, unit = plan.spec.species, plan.energy_unit
    rows: dict[str, list[Any]] = {}
    for point, cloud, margin in zip(asked, clouds, margins, strict=True):
        for name, value in _row(point, cloud, margin).items():
            rows.setdefault(name, []).append(value)
    data: dict[str, Any] = {}
    for name, (dims, units, words) in _COLUMNS.items():
        if name in names:
            continue  # an axis of this name holds the same numbers
        values = np.array(rows[name])
        shaped = values.reshape(plan.shape + values.shape[1:])
        data[name] = ((*names, *dims), shaped, {"units": attributes.with_energy(units, unit), "long_name": words})
    if "status" in data:
        data["status"][2].update(attributes.of_flags(Status, "Status"))
    coords: dict[str, Any] = {
        axis.name: (
            axis.name,
            axis.values,
            {"units": axis.unit, "long_name": axis.words, "parameter": axis.target.path},
        )
        for axis in plan.axes
    }
    coords["species"] = np.arange(1, species + 1)
    coords["phase"] = [WORDS[phase] for phase in PHASES]
    attrs = {
        "title": plan.spec.output.title,
        "axes": list(names),
        "ansatz": plan.spec.ansatz.kind,
        "dim": plan.spec.dim,
        "energy_unit": unit,
        "phonon_entropy": PHONONS[all(cloud.phonons is not None for cloud in clouds)],
        "wanted": plan.spec.trap.wanted or "" if plan.spec.trap else "",
    }
    return xr.Dataset(data, coords=coords, attrs=attrs)


PHONONS = {
    True: "included: one loop around the product state, at its density",
    False: "not included: the entropy is that of single sites, which is activated; a superfluid's phonons would take "
    "up entropy, and the lattice comes out hotter than it is",
}
"""What the entropy holds of the collective modes."""

_COLUMNS: dict[str, tuple[tuple[str, ...], str, str]] = {
    "temperature": ((), ENERGY, "Temperature"),
    "temperature_nK": ((), "nK", "Temperature"),
    "mu": (("species",), ENERGY, "Chemical potential at the bottom of the trap"),
    "atoms": (("species",), "1", "Atoms"),
    "entropy_per_particle": ((), "k_B", "Entropy per particle"),
    "fraction": (("phase",), "1", "Fraction of the atoms"),
    "entropy_share": (("phase",), "k_B", "Entropy per particle of the cloud"),
    "central_filling": (("species",), "1", "Highest filling"),
    "cutoff": ((), "1", "Occupation cutoff"),
    "error": ((), "1", "Estimated relative error from the nodes"),
    "status": ((), "1", "Status"),
    "critical_entropy": ((), "k_B", "Entropy per particle at which the wanted phase is gone"),
    "margin": ((), "k_B", "Heating margin per particle"),
}  # fmt: skip


def nanokelvin(point: CloudPoint, cloud: Cloud) -> float:
    """Temperature in nK; nan without a lattice."""
    return math.nan if point.lattice is None else cloud.T * float(point.lattice.recoil[0]) / constants.k * 1e9


def _row(point: CloudPoint, cloud: Cloud, margin: Margin | None) -> Mapping[str, Any]:
    by_phase, total = cloud.by_phase(), float(cloud.atoms.sum())
    zero = (np.zeros(1), 0.0)
    return {
        "temperature": cloud.T,
        "temperature_nK": nanokelvin(point, cloud),
        "mu": cloud.mu,
        "atoms": cloud.atoms,
        "entropy_per_particle": cloud.entropy_per_particle,
        "fraction": [float(by_phase.get(p, zero)[0].sum()) / total for p in PHASES],
        "entropy_share": [by_phase.get(p, zero)[1] / total for p in PHASES],
        "central_filling": cloud.average("filling").max(0),
        "cutoff": cloud.gas.n_max,
        "error": float(cloud.error.max()),
        "status": int(cloud.status),
        "critical_entropy": math.nan if margin is None else margin.critical_entropy,
        "margin": math.nan if margin is None else margin.margin,
    }
