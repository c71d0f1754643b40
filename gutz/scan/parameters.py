"""Which parameters an axis can run over, how they are addressed, and how they are labelled.

In:  a dotted path such as "mixture.T", "mixture.mu.2" (second species), "lattice.depth.xy" (two directions).
Out: `Target`: the parameter, and the species and directions it touches.
"""

from typing import NamedTuple

from gutz.scan.fields import ENERGY_UNITS, nearest
from gutz.units import KINDS


class Parameter(NamedTuple):
    """One parameter. parts: which indices a path may add; kind: "energy", "depth", "length" or "number"."""

    words: str
    kind: str
    parts: tuple[str, ...] = ()
    lowest: float | None = None


PARAMETERS: dict[str, Parameter] = {
    "mixture.t": Parameter("Hopping", "energy", ("species", "direction"), 0.0),
    "mixture.U": Parameter("On-site interaction", "energy", ("species",), 0.0),
    "mixture.U12": Parameter("Interspecies interaction", "energy"),
    "mixture.mu": Parameter("Chemical potential", "energy", ("species",)),
    "mixture.filling": Parameter("Filling per species", "number", ("species",), 0.0),
    "mixture.T": Parameter("Temperature", "energy", (), 0.0),
    "mixture.entropy": Parameter("Entropy per particle", "number", (), 0.0),
    "mixture.offset": Parameter("Superlattice offset", "energy", ("species",)),
    "lattice.depth": Parameter("Lattice depth", "depth", ("species", "direction"), 0.0),
    "lattice.a11": Parameter("Scattering length 1-1", "length"),
    "lattice.a22": Parameter("Scattering length 2-2", "length"),
    "lattice.a12": Parameter("Scattering length 1-2", "length"),
    "trap.N": Parameter("Atoms", "number", ("species",), 0.0),
    "trap.frequency": Parameter("Trap frequency", "frequency", ("species", "direction"), 0.0),
    "trap.curvature": Parameter("Trap curvature", "number", ("species", "direction"), 0.0),
    "trap.T_over_Tc": Parameter("Initial T over T_c", "number", (), 0.0),
    "imaging.tof": Parameter("Time of flight", "time", (), 0.0),
    "imaging.efficiency": Parameter("Detection efficiency", "number", (), 0.0),
    "imaging.resolution": Parameter("Resolution (rms)", "length", (), 0.0),
    "imaging.pixel": Parameter("Pixel", "length", (), 0.0),
    "imaging.picture": Parameter("Side of the picture", "length", (), 0.0),
    "imaging.photons": Parameter("Photons per pixel", "number", (), 0.0),
    "imaging.fluctuation": Parameter("Fluctuation of the atom number", "number", (), 0.0),
    "imaging.jitter": Parameter("Shaking of the picture (rms)", "length", (), 0.0),
    "imaging.technical": Parameter("Technical factor", "number", (), 1.0),
    "imaging.shots": Parameter("Shots", "number", (), 1.0),
    "imaging.significance": Parameter("Significance", "number", (), 0.0),
}

IMAGING = {path: parameter for path, parameter in PARAMETERS.items() if path.startswith("imaging.")}
"""Parameters of the picture: they change no state, only what is seen of it."""

ABOVE_LOWEST = (
    "mixture.filling", "lattice.depth", "trap.N", "trap.frequency", "trap.curvature", "imaging.tof",
    "imaging.efficiency", "imaging.pixel", "imaging.picture", "imaging.photons", "imaging.significance",
)  # fmt: skip
"""Parameters that must exceed their lowest value."""

LENGTH_UNITS = tuple(KINDS["length"].units)


class Target(NamedTuple):
    """What an axis sets. species: 0-based indices, directions: 0-based indices; None means all there are."""

    path: str
    parameter: Parameter
    species: tuple[int, ...] | None
    directions: tuple[int, ...] | None

    def overlaps(self, other: "Target") -> bool:
        """True where two axes would set the same number."""
        if self.path != other.path:
            return False
        pairs = ((self.species, other.species), (self.directions, other.directions))
        return all(a is None or b is None or set(a) & set(b) for a, b in pairs)

    @property
    def whole(self) -> bool:
        """True where nothing of the parameter is left for the file to give."""
        return self.species is None and self.directions is None


def target(path: str) -> Target:
    """Read a dotted path. Raises ValueError whose text completes the sentence "<key> = <value>: ..."."""
    head, rest = ".".join(path.split(".")[:2]), path.split(".")[2:]
    if head not in PARAMETERS:
        near = nearest(path, tuple(PARAMETERS))
        hint = f'; did you mean "{near}"?' if near else f"; allowed are {', '.join(PARAMETERS)}"
        raise ValueError(f"is not a parameter an axis can run over{hint}")
    parameter = PARAMETERS[head]
    species: tuple[int, ...] | None = None
    directions: tuple[int, ...] | None = None
    for part in rest:
        if part in ("1", "2") and "species" in parameter.parts and species is None and directions is None:
            species = (int(part) - 1,)
        elif "direction" in parameter.parts and directions is None and _is_directions(part):
            directions = tuple("xyz".index(letter) for letter in part)
        else:
            raise ValueError(f"cannot be addressed further than {_addresses(head, parameter)}")
    return Target(head, parameter, species, directions)


def units_of(parameter: Parameter, in_lattice: bool) -> tuple[str, ...]:
    """Units an axis over this parameter may be given in; the first is the one meant where none is given."""
    if parameter.kind == "time":
        return ("ms", *(unit for unit in KINDS["time"].units if unit != "ms"))
    if parameter.kind == "length" and parameter in IMAGING.values():
        return ("um", *(unit for unit in LENGTH_UNITS if unit != "um"))
    if parameter.kind == "length":
        return ("a0", *(unit for unit in LENGTH_UNITS if unit != "a0"))
    if parameter.kind == "frequency":
        return tuple(KINDS["frequency"].units)
    if parameter.kind == "depth":
        return ("E_R",)
    if parameter.kind == "energy" and in_lattice:
        return ENERGY_UNITS
    return ()


def _is_directions(part: str) -> bool:
    return 0 < len(part) <= 3 and len(set(part)) == len(part) and set(part) <= set("xyz")


def _addresses(head: str, parameter: Parameter) -> str:
    ways = [head]
    if "species" in parameter.parts:
        ways.append(f"{head}.1")
    if "direction" in parameter.parts:
        ways += [f"{head}.xy", f"{head}.1.xy"]
    return " or ".join(ways)
