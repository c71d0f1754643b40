"""What a checked scan file asks to compute: the grid, its chunks, the Hubbard parameters of any part of it.

In:  a `Spec`.
Out: `Plan`: axes with their values, chunks of bounded size, parameters of chosen points as numpy arrays,
     estimates of disk, memory and time, and the checks of physical sense that need the numbers themselves.
Free of jax, so that a file can be checked and estimated without loading the numerics.
"""

import math
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gutz import limits
from gutz.atoms import Atom, atom
from gutz.errors import InputError
from gutz.optics import Harmonic, HubbardParameters, OpticalLattice, StandingWave, hubbard_parameters
from gutz.scan import parameters
from gutz.scan.fields import RELATIVE_UNITS, Beam, Energy
from gutz.scan.parameters import Target
from gutz.scan.spec import AxisSection, LatticeSection, Spec
from gutz.units import BOLTZMANN, PLANCK, parse_quantity, to_si

Array = NDArray[np.float64]

CHUNK_POINTS = (256, 4096)
"""Most points in one chunk (one unit of work, one file per variable) of a small and of a large run. The solver
pads every call to one of these sizes, so others would waste its time."""
FEWEST_CHUNKS = 8
"""A run is large if it makes this many large chunks: stopping then loses little and progress is seen."""

CHECKED_POINTS = 200_000
"""The physics of larger grids is checked on a coarser grid with the same ends."""


@dataclass(frozen=True, eq=False)
class Axis:
    """One axis: name, what it sets, unit of its values, words for people, and the values, shape (n,)."""

    name: str
    target: Target
    unit: str
    words: str
    values: Array


@dataclass(frozen=True, eq=False)
class Plan:
    """A grid of points. chunk: points of one chunk along each axis."""

    spec: Spec
    axes: tuple[Axis, ...]
    chunk: tuple[int, ...]

    @property
    def shape(self) -> tuple[int, ...]:
        """Points along each axis; () for a single point."""
        return tuple(axis.values.size for axis in self.axes)

    @property
    def points(self) -> int:
        """Points of the whole grid."""
        return math.prod(self.shape)

    @property
    def chunks(self) -> tuple[int, ...]:
        """Chunks along each axis."""
        return tuple(-(-n // c) for n, c in zip(self.shape, self.chunk, strict=True))

    @property
    def energy_unit(self) -> str:
        """The unit of every stored energy: the label of [mixture], or E_R of the first species."""
        return "E_R" if self.spec.lattice else self.spec.mixture.unit

    def indices(self) -> Iterator[tuple[int, ...]]:
        """All chunks, in the order in which they are worked through."""
        return np.ndindex(*self.chunks)

    def region(self, index: Sequence[int]) -> tuple[slice, ...]:
        """Where a chunk lies in the grid; chunks at the end of an axis may be cut short."""
        return tuple(slice(i * c, min((i + 1) * c, n)) for i, c, n in zip(index, self.chunk, self.shape, strict=True))

    def picked(self, index: Sequence[int]) -> tuple[Array, ...]:
        """Axis values of a chunk, always `chunk` many per axis: short ones repeat their last value."""
        return tuple(
            axis.values[np.minimum(np.arange(i * c, (i + 1) * c), axis.values.size - 1)]
            for axis, i, c in zip(self.axes, index, self.chunk, strict=True)
        )

    def lattice(self, picked: Sequence[Array]) -> HubbardParameters | None:
        """Bands and Hubbard parameters (J) at the outer product of axis values; None without [lattice].

        Raises InputError where the lattice cannot be computed.
        """
        found = self.light(picked)
        return None if found is None else hubbard_parameters(found)

    def light(self, picked: Sequence[Array]) -> OpticalLattice | None:
        """The lattice itself at the outer product of axis values, as in `lattice`."""
        if self.spec.lattice is None:
            return None
        return _lattice(self.spec.lattice, self.spec.species, self._grids(picked))

    def settings(self, picked: Sequence[Array], found: HubbardParameters | None) -> dict[str, Any]:
        """Parameters at the outer product of axis values, ready for `gutz.Mixture(**settings)`.

        picked: one array of values per axis; found: `lattice(picked)`. Arrays have a dimension per axis.
        Raises InputError where a parameter is incomplete.
        """
        return _settings(self.spec, self._grids(picked), found)

    def settings_at(self, columns: Sequence[Array]) -> dict[str, Any]:
        """As `settings`, at single points: one array of values per axis, all of the same length.

        Raises InputError where the lattice or a parameter makes no sense.
        """
        grids = list(zip(self.axes, columns, strict=True))
        found = None
        if self.spec.lattice is not None:
            found = hubbard_parameters(_lattice(self.spec.lattice, self.spec.species, grids))
        return _settings(self.spec, grids, found)

    def _grids(self, picked: Sequence[Array]) -> list[tuple[Axis, Array]]:
        count = len(self.axes)
        return [
            (axis, values.reshape([-1 if i == k else 1 for k in range(count)]))
            for i, (axis, values) in enumerate(zip(self.axes, picked, strict=True))
        ]


def plan(spec: Spec) -> Plan:
    """Lay out the grid of a spec; a file without axes gives a plan of one point."""
    axes = tuple(_axis(name, section, spec) for name, section in spec.axes.items())
    return Plan(spec, axes, chunk_shape(tuple(axis.values.size for axis in axes)))


def check_names(full: Plan, values: Iterable[str]) -> list[str]:
    """The names of the axes, if all names given with --at are among them. Raises InputError for others."""
    names = [axis.name for axis in full.axes]
    for name in values:
        if name not in names:
            raise InputError(f"--at {name}: is not an axis of this file; its axes are {', '.join(names) or 'none'}")
    return names


def at(full: Plan, values: Mapping[str, float]) -> Plan:
    """One point of a plan. values: a number per axis name, on the grid or off it.

    Raises InputError for names that are no axes, axes without a value, or values an axis cannot take.
    """
    names = check_names(full, values)
    missing = [name for name in names if name not in values]
    if missing:
        example = " ".join(f"--at {axis.name}={axis.values[0]:g}" for axis in full.axes if axis.name in missing)
        raise InputError(f"the axes {', '.join(missing)} need a value each to choose one point: add {example}")
    axes = []
    for axis in full.axes:
        value, lowest = values[axis.name], axis.target.parameter.lowest
        if lowest is not None and value < lowest:
            raise InputError(f"--at {axis.name}: {value:g} is not allowed; it must be at least {lowest:g}")
        axes.append(Axis(axis.name, axis.target, axis.unit, axis.words, np.array([value])))
    return Plan(full.spec, tuple(axes), (1,) * len(axes))


def chunk_shape(shape: tuple[int, ...]) -> tuple[int, ...]:
    """Split a grid into even chunks: whole last axes together, neighbours side by side, sizes bounded."""
    points = math.prod(shape)
    small, large = CHUNK_POINTS
    room = large if points >= FEWEST_CHUNKS * large else small
    chunk: list[int] = []
    for n in reversed(shape):
        pieces = -(-n // max(1, min(n, room)))
        chunk.append(-(-n // pieces))
        room = max(1, room // chunk[-1])
    return tuple(reversed(chunk))


def check_physics(plan: Plan) -> None:
    """Refuse a grid none of whose points makes sense, or that the model forbids anywhere.

    Raises InputError naming the parameter. Grids of more than `CHECKED_POINTS` points are thinned first.
    """
    most = int(CHECKED_POINTS ** (1 / max(1, len(plan.axes))))
    picked = [axis.values[_thinned(axis.values.size, most)] for axis in plan.axes]
    found = plan.settings(picked, plan.lattice(picked))
    spec = plan.spec
    if found["n_max"] is not None:
        limits.check_n_max(found["n_max"], spec.species)
    for name in ("U", "filling"):
        for number, values in enumerate(found[name] or (), 1):
            limits.check_at_least(f"{name} of species {number}", np.asarray(values), 0.0)
    if found["n_max"] is not None and found["filling"] is not None:
        highest = max(float(np.max(values)) for values in found["filling"])
        if highest >= found["n_max"]:
            raise InputError(f"mixture.filling reaches {highest:g}; it must stay below n_max = {found['n_max']}")
    if spec.species == 2:
        U = np.stack(np.broadcast_arrays(*found["U"]), axis=-1)
        limits.check_not_all_collapsed(U, np.asarray(found["U12"]), found["n_max"])


def recoil_words(plan: Plan) -> str:
    """Say what the energy unit of a lattice run is in the laboratory's units; "" without [lattice]."""
    found = plan.lattice([axis.values[:1] for axis in plan.axes])
    if found is None:
        return ""
    recoil = float(found.recoil[0])
    return f"E_R = h x {recoil / PLANCK:.6g} Hz = k_B x {recoil / BOLTZMANN * 1e9:.6g} nK (species 1)"


def _thinned(size: int, most: int) -> NDArray[np.intp]:
    return np.unique(np.linspace(0, size - 1, min(size, max(2, most))).round().astype(np.intp))


def _axis(name: str, section: AxisSection, spec: Spec) -> Axis:
    target = parameters.target(section.parameter or "")
    if section.values is not None:
        values = np.array(section.values)
    elif section.spacing == "log":
        values = np.geomspace(section.start or 0.0, section.stop or 0.0, section.points or 0)
    else:
        values = np.linspace(section.start or 0.0, section.stop or 0.0, section.points or 0)
    kind = target.parameter.kind
    units = parameters.units_of(target.parameter, spec.lattice is not None)
    if kind == "energy" and spec.lattice is None:
        unit = spec.mixture.unit
    elif target.path == "mixture.entropy":
        unit = "k_B"
    else:
        unit = section.unit or (units[0] if units else "1")
    words = section.label or target.parameter.words
    if section.label is None and target.species is not None:
        words += f", species {target.species[0] + 1}"
    if section.label is None and target.directions is not None:
        words += " along " + " and ".join("xyz"[d] for d in target.directions)
    return Axis(name, target, unit, words, values)


def _settings(spec: Spec, grids: list[tuple[Axis, Array]], found: HubbardParameters | None) -> dict[str, Any]:
    """Lay axes over the file's values, convert energies to the run's unit, add the lattice's parameters."""
    mixture, species, dim = spec.mixture, spec.species, spec.dim
    unit = _EnergyUnits(found)

    def swept(path: str, index: int | None = None, direction: int | None = None) -> Any:
        axis, values = _swept(grids, path, index, direction)
        return unit.convert(values, axis.unit) if axis and axis.target.parameter.kind == "energy" else values

    def given(name: str, index: int) -> Any:
        value = getattr(mixture, name)
        if isinstance(value, tuple) and not isinstance(value, Energy):
            value = value[index]
        if isinstance(value, Energy):
            return unit.convert(np.float64(value.value), value.unit or spec_unit)
        return value

    def each(name: str) -> tuple[Any, ...] | None:
        parts = [swept(f"mixture.{name}", i) for i in range(species)]
        out = tuple(given(name, i) if part is None else part for i, part in enumerate(parts))
        if any(part is None for part in out):
            if all(part is None for part in out):
                return None
            raise InputError(f"mixture.{name} is given for one species only; give it for both")
        return out

    def single(name: str) -> Any:
        value = swept(f"mixture.{name}")
        return given(name, 0) if value is None else value

    spec_unit = "" if found is None else "E_R"
    settings: dict[str, Any] = {
        "mu": each("mu"),
        "filling": each("filling"),
        "T": single("T"),
        "entropy": single("entropy"),
        "offset": each("offset"),
        "dim": dim,
        "species": species,
        "n_max": mixture.n_max,
    }
    if found is not None:
        energies = found.energies_in("E_R")
        settings["t"] = tuple(tuple(energies["t"][..., i, d] for d in range(dim)) for i in range(species))
        settings["U"] = tuple(energies["U"][..., i] for i in range(species))
        settings["U12"] = energies.get("U12", 0.0)
    else:
        settings["t"] = tuple(
            tuple(_hopping(mixture.t, swept("mixture.t", i, d), i, d) for d in range(dim)) for i in range(species)
        )
        settings["U"] = each("U")
        settings["U12"] = single("U12")
    return settings


def _swept(
    grids: list[tuple[Axis, Array]], path: str, species: int | None = None, direction: int | None = None
) -> tuple[Axis | None, Any]:
    """The axis that sets this component of a parameter, and its values; (None, None) if there is none."""
    for axis, values in grids:
        t = axis.target
        if (
            t.path == path
            and (t.species is None or species in t.species)
            and (t.directions is None or direction in t.directions)
        ):
            return axis, values
    return None, None


def _hopping(given: Any, swept: Array | None, species: int, direction: int) -> Any:
    if swept is not None:
        return swept
    value = given[species] if isinstance(given, tuple) else given
    value = value[direction] if isinstance(value, tuple) else value
    if value is None:
        raise InputError("mixture.t is given for some species or directions only; give it for all")
    return value


class _EnergyUnits:
    """Converts energies to the unit of the run: the recoil energy with a lattice, nothing to do without."""

    def __init__(self, found: HubbardParameters | None) -> None:
        self._recoil = 1.0 if found is None else float(found.recoil[0])
        self._relative: dict[str, Any] = {}
        if found is not None:
            energies = found.energies_in("E_R")
            self._relative = {"E_R": 1.0}
            for i in range(energies["U"].shape[-1]):
                self._relative[f"U{i + 1}"] = energies["U"][..., i]
                self._relative[f"t{i + 1}"] = energies["t"][..., i, 0]

    def convert(self, values: Any, unit: str) -> Any:
        if not self._relative:
            return values
        if unit in RELATIVE_UNITS:
            if unit not in self._relative:
                raise InputError(f'"{unit}" is not a unit here, because there is one species; use U1 or t1')
            return values * self._relative[unit]
        return to_si(values, "energy", unit) / self._recoil


def _lattice(section: LatticeSection, species: int, grids: list[tuple[Axis, Array]]) -> OpticalLattice:
    """The lattice at all values of the axes that touch it."""

    def length(name: str) -> Any:
        axis, values = _swept(grids, f"lattice.{name}")
        return getattr(section, name) if axis is None else to_si(values, "length", axis.unit)

    def beam(index: int, direction: int) -> tuple[Any, str]:
        axis, values = _swept(grids, "lattice.depth", index, direction)
        if axis is not None:
            return values, "E_R"
        if section.depth is None:
            raise InputError("lattice.depth is given for some directions only; give it for all three")
        depth = section.depth if isinstance(section.depth[0], Beam) else section.depth[index]
        return depth[direction]

    axes: list[StandingWave | Harmonic] = []
    for direction in range(3):
        parts = [beam(i, direction) for i in range(1 if section.same_light else species)]
        kinds = {unit for _, unit in parts}
        if len(kinds) > 1:
            raise InputError("lattice.depth must be a depth or a frequency for both species alike along each axis")
        values = parts[0][0] if len(parts) == 1 else tuple(value for value, _ in parts)
        axes.append(StandingWave(values) if kinds == {"E_R"} else Harmonic(values))
    return OpticalLattice(
        wavelength=section.wavelength or 0.0,
        atoms=tuple(_atom(entry) for entry in section.atoms or ()),
        axes=tuple(axes),
        dim=section.dim,
        same_light=section.same_light,
        a11=length("a11"),
        a22=length("a22"),
        a12=length("a12"),
    )


def _atom(entry: str | tuple[str, str]) -> Atom:
    if isinstance(entry, str):
        return atom(entry)
    name, mass = entry
    return Atom(name, parse_quantity(mass, "mass", f"lattice.atoms, mass of {name}"))
