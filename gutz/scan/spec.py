"""What a scan file says, checked: sections [mixture] [lattice] [trap] [imaging] [ansatz] [axes] [output].

In:  a `Document` (text of a TOML file, overrides).
Out: a frozen `Spec`, or one `InputError` that lists every mistake, one sentence each, with its line.
Only the file is judged here; what the numbers mean together for the physics is judged in `gutz.scan.plan`.
Free of jax. pydantic lives in this file and goes no further.
"""

import hashlib
import json
import math
from collections.abc import Callable, Iterator
from typing import Annotated, Any, NamedTuple

from pydantic import BaseModel, ConfigDict, PlainValidator, ValidationError

from gutz.errors import InputError
from gutz.phases import WORDS, Phase
from gutz.scan import fields, imaging, parameters
from gutz.scan.document import Document
from gutz.scan.fields import Beam, Energy, Per
from gutz.scan.imaging import ImagingSection
from gutz.variables import ABSENT, VARIABLES

ANSAETZE = tuple(ABSENT)
MAX_AXES = 5
MAX_AXIS_POINTS = 10_000_000
MAX_POINTS = 100_000_000

GIVEN_BY_AXIS = ("t", "U", "U12", "T", "mu")
"""Names an axis may share with an input of the same name: the coordinate then stands for the variable."""

_RESERVED = frozenset((*VARIABLES, "t", "U", "U12", "species", "species_", "direction", "cautions"))


class _Section(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class MixtureSection(_Section):
    """[mixture]: Hubbard parameters and state of the gas; without [lattice], energies in one chosen unit."""

    unit: Annotated[str, PlainValidator(fields.text)] = "1"
    t: Annotated[Per | None, PlainValidator(fields.per_direction(fields.real(0.0)))] = None
    U: Annotated[Per | None, PlainValidator(fields.per_species(fields.real(0.0)))] = None
    U12: Annotated[float, PlainValidator(fields.real())] = 0.0
    mu: Annotated[Any, PlainValidator(fields.per_species(fields.energy()))] = None
    filling: Annotated[Per | None, PlainValidator(fields.per_species(fields.real(above=0.0)))] = None
    T: Annotated[Energy | None, PlainValidator(fields.energy(0.0))] = None
    entropy: Annotated[float | None, PlainValidator(fields.real(0.0))] = None
    offset: Annotated[Any, PlainValidator(fields.per_species(fields.energy()))] = Energy(0.0, "")
    dim: Annotated[int, PlainValidator(fields.whole(1, 3))] = 3
    species: Annotated[int, PlainValidator(fields.whole(1, 2))] = 2
    n_max: Annotated[int | None, PlainValidator(fields.whole(1, 40))] = None


class _AtomSection(_Section):
    name: Annotated[str, PlainValidator(fields.text)]
    mass: Annotated[str, PlainValidator(fields.text)]


def _atoms(value: Any) -> tuple[str | tuple[str, str], ...]:
    """Convert one or two atoms: a name from the table, or {name = "...", mass = "86.9 u"}."""
    rule = 'must be a list of one or two names such as "87Rb", or {name = "X", mass = "86.9 u"}'
    if not isinstance(value, list) or not 1 <= len(value) <= 2:
        raise ValueError(rule)
    atoms: list[str | tuple[str, str]] = []
    for part in value:
        if isinstance(part, dict):
            try:
                given = _AtomSection(**part)
            except (ValidationError, TypeError):
                raise ValueError(rule) from None
            atoms.append((given.name, given.mass))
        elif isinstance(part, str):
            atoms.append(fields.text(part))
        else:
            raise ValueError(rule)
    return tuple(atoms)


class LatticeSection(_Section):
    """[lattice]: laser light and atoms, from which t, U and U12 follow."""

    atoms: Annotated[tuple[str | tuple[str, str], ...] | None, PlainValidator(_atoms)] = None
    wavelength: Annotated[float | None, PlainValidator(fields.length)] = None
    depth: Annotated[Any, PlainValidator(fields.beams)] = None
    same_light: Annotated[bool, PlainValidator(fields.flag)] = False
    a11: Annotated[float | None, PlainValidator(fields.length)] = None
    a22: Annotated[float | None, PlainValidator(fields.length)] = None
    a12: Annotated[float | None, PlainValidator(fields.length)] = None
    dim: Annotated[int, PlainValidator(fields.whole(1, 3))] = 3


WANTED = tuple(WORDS[phase] for phase in Phase if phase not in (Phase.UNDECIDED, Phase.VACUUM, Phase.COLLAPSE))
"""Phases that can be looked for in a cloud."""


class TrapSection(_Section):
    """[trap]: atom numbers and what holds them; the chemical potentials follow."""

    N: Annotated[Per | None, PlainValidator(fields.per_species(fields.real(above=0.0)))] = None
    frequency: Annotated[Any, PlainValidator(fields.per_axis(fields.frequency))] = None
    curvature: Annotated[Any, PlainValidator(fields.per_axis(fields.real(above=0.0)))] = None
    box: Annotated[tuple[float, ...] | None, PlainValidator(fields.box)] = None
    gravity: Annotated[str | None, PlainValidator(fields.one_of("x", "y", "z"))] = None
    T_over_Tc: Annotated[float | None, PlainValidator(fields.real(0.0))] = None
    interacting: Annotated[bool, PlainValidator(fields.flag)] = False
    wanted: Annotated[str | None, PlainValidator(fields.one_of(*WANTED))] = None


class AnsatzSection(_Section):
    """[ansatz]: what is minimised."""

    kind: Annotated[str, PlainValidator(fields.one_of(*ANSAETZE))] = "product"


def _parameter(value: Any) -> str:
    path = fields.text(value)
    parameters.target(path)
    return path


class AxisSection(_Section):
    """[axes.NAME]: one axis of the scan, evenly spaced or listed."""

    parameter: Annotated[str | None, PlainValidator(_parameter)] = None
    start: Annotated[float | None, PlainValidator(fields.real())] = None
    stop: Annotated[float | None, PlainValidator(fields.real())] = None
    points: Annotated[int | None, PlainValidator(fields.whole(2, MAX_AXIS_POINTS))] = None
    spacing: Annotated[str, PlainValidator(fields.one_of("linear", "log"))] = "linear"
    values: Annotated[tuple[float, ...] | None, PlainValidator(fields.values)] = None
    unit: Annotated[str | None, PlainValidator(fields.text)] = None
    label: Annotated[str | None, PlainValidator(fields.text)] = None

    @property
    def size(self) -> int:
        """Number of points along this axis."""
        return len(self.values) if self.values is not None else self.points or 0


class OutputSection(_Section):
    """[output]: words and pictures; nothing here changes a number."""

    title: Annotated[str, PlainValidator(fields.text)] = ""
    figures: Annotated[
        tuple[str, ...], PlainValidator(fields.several_of(*(name for name in VARIABLES if name != "status")))
    ] = ("phase", "condensate", "filling")


class Spec(_Section):
    """A whole checked scan file."""

    mixture: MixtureSection = MixtureSection()
    lattice: LatticeSection | None = None
    trap: TrapSection | None = None
    imaging: ImagingSection | None = None
    ansatz: AnsatzSection = AnsatzSection()
    axes: dict[str, AxisSection] = {}
    output: OutputSection = OutputSection()

    @property
    def species(self) -> int:
        """Number of species, from the atoms of a lattice or from [mixture]."""
        return len(self.lattice.atoms or ()) if self.lattice else self.mixture.species

    @property
    def dim(self) -> int:
        """Number of directions of the lattice problem."""
        return self.lattice.dim if self.lattice else self.mixture.dim

    @property
    def points(self) -> int:
        """Number of points of the whole grid."""
        return math.prod(axis.size for axis in self.axes.values())

    def canonical(self) -> str:
        """The checked settings with defaults filled in, as JSON with sorted keys: equal runs, equal texts."""
        return json.dumps(self.model_dump(), sort_keys=True, ensure_ascii=True, allow_nan=False)

    def sha256(self) -> str:
        """Identity of the run: SHA-256 of `canonical()`."""
        return hashlib.sha256(self.canonical().encode()).hexdigest()


class Mistake(NamedTuple):
    """One mistake: the key it belongs to, and the sentence about it."""

    key: str
    words: str


_SECTIONS: dict[str, type[BaseModel]] = {
    "mixture": MixtureSection,
    "lattice": LatticeSection,
    "trap": TrapSection,
    "imaging": ImagingSection,
    "ansatz": AnsatzSection,
    "axes": AxisSection,
    "output": OutputSection,
}


def check(document: Document) -> Spec:
    """Check a document. Raises InputError listing every mistake found, with line numbers where known."""
    mistakes = [*_of_structure(document.data)]
    spec = None
    if not mistakes:
        try:
            spec = Spec(**document.data)
        except ValidationError as error:
            mistakes += _of_values(error, document.data)
        missing = [*_of_presence(document.data), *_of_axes_presence(document.data.get("axes", {}))]
        mistakes += [m for m in missing if m.key not in {key for key, _ in mistakes}]
    if spec is not None and not mistakes:
        mistakes += [*_of_combination(spec)]
    if mistakes or spec is None:
        raise InputError(_report(document, mistakes))
    return spec


def _report(document: Document, mistakes: list[Mistake]) -> str:
    lines = []
    for key, words in mistakes:
        place = document.where(key)
        lines.append(f"{key} ({place}): {words}" if place else f"{key}: {words}")
    if len(lines) == 1:
        return f"{document.name}: {lines[0]}"
    return f"{document.name}: {len(lines)} mistakes, nothing was computed\n  " + "\n  ".join(lines)


def _of_structure(data: dict[str, Any]) -> Iterator[Mistake]:
    """Sections that are unknown, or are not sections."""
    for name, value in data.items():
        shown = fields.shown(name).strip('"')
        if name not in _SECTIONS:
            home = _home(name)
            hint = f"; it belongs in [{home}]" if home else _hint(name, tuple(_SECTIONS))
            kind = "section" if isinstance(value, dict) else "key outside any section"
            yield Mistake(shown, f"unknown {kind}{hint}")
        elif not isinstance(value, dict):
            yield Mistake(name, f"must be a section, written [{name}] on a line of its own")
    axes = data.get("axes", {})
    if isinstance(axes, dict):
        for name, value in axes.items():
            shown = fields.shown(name).strip('"')
            if not isinstance(value, dict):
                yield Mistake(f"axes.{shown}", f"must be a section of its own, [axes.{shown}]")
        if len(axes) > MAX_AXES:
            yield Mistake("axes", f"there are {len(axes)} axes; at most {MAX_AXES} are allowed")


def _of_values(error: ValidationError, data: dict[str, Any]) -> Iterator[Mistake]:
    """Turn pydantic's findings into sentences of our own."""
    for finding in error.errors(include_url=False):
        parts = [fields.shown(part).strip('"') for part in finding["loc"]]
        key = ".".join(parts)
        if finding["type"] == "extra_forbidden":
            section = _SECTIONS[parts[0]]
            known = tuple(section.model_fields)
            home = _home(parts[-1])
            near = fields.nearest(parts[-1], known)
            hint = f"; it belongs in [{home}]" if home and home != parts[0] else _hint(parts[-1], known)
            yield Mistake(key, f"unknown key{_hint(parts[-1], known) if near and not home else hint}")
        else:
            reason = finding.get("ctx", {}).get("error", finding["msg"])
            yield Mistake(key, _verb(fields.shown(finding["input"]), str(reason)))


def _verb(value: str, reason: str) -> str:
    """Join a value and a rule: "must ..." needs a pause, "holds ..." names the value itself."""
    if reason.startswith("holds"):
        return reason
    return f"{value} is not allowed; it {reason}" if reason.startswith("must") else f"{value} {reason}"


def _hint(word: str, known: tuple[str, ...]) -> str:
    near = fields.nearest(word, known)
    return f'; did you mean "{near}"?' if near else f"; allowed are {', '.join(known)}"


def _home(word: str) -> str | None:
    """The section a key would be right in, if there is exactly one other."""
    homes = [name for name, section in _SECTIONS.items() if word in section.model_fields and name != "axes"]
    return homes[0] if len(homes) == 1 else None


def _of_presence(data: dict[str, Any]) -> Iterator[Mistake]:
    """What must be there, and what must not be there twice; judged by keys alone."""
    mixture, axes, lattice = data.get("mixture", {}), data.get("axes", {}), data.get("lattice")
    swept = {str(axis.get("parameter", "")) for axis in axes.values()}

    def given(key: str) -> bool:
        section, name = key.split(".")
        return name in data.get(section, {}) or key in swept

    def touched(key: str) -> bool:
        return given(key) or any(path.startswith(key + ".") for path in swept)

    if touched("mixture.mu") and touched("mixture.filling"):
        yield Mistake("mixture", "both mu and filling are given; give exactly one")
    if touched("mixture.T") and touched("mixture.entropy"):
        yield Mistake("mixture", "both T and entropy are given; give at most one")
    if not all(_is_parameter(path) for path in swept if path):
        return  # what seems to be missing may be what the misspelt axis was meant to give
    if "trap" in data:
        yield from _of_trap_presence(data, touched)
    elif not touched("mixture.mu") and not touched("mixture.filling"):
        yield Mistake("mixture", "neither mu nor filling is given; give exactly one")
    yield from (Mistake(*found) for found in imaging.of_presence(data, given))
    if lattice is None:
        for name in ("t", "U"):
            if not given(f"mixture.{name}") and not all(f"mixture.{name}.{i}" in swept for i in (1, 2)):
                yield Mistake(f"mixture.{name}", "is missing; give it, or a [lattice] that it follows from")
    else:
        for name in ("t", "U", "U12", "dim", "species", "unit"):
            if name in mixture:
                yield Mistake(f"mixture.{name}", "must be left out, because it follows from [lattice]")
        atoms = lattice.get("atoms", [None])
        pair = ("a22", "a12") if isinstance(atoms, list) and len(atoms) == 2 else ()
        for name in ("atoms", "wavelength", "depth", "a11", *pair):
            if not given(f"lattice.{name}"):
                yield Mistake(f"lattice.{name}", "is missing")
        for name in ("a22", "a12"):
            if not pair and touched(f"lattice.{name}"):
                yield Mistake(f"lattice.{name}", "must be left out, because there is one species")


def _of_trap_presence(data: dict[str, Any], touched: Callable[[str], bool]) -> Iterator[Mistake]:
    """A trap gives atom numbers in place of chemical potentials, and one way of holding them."""
    for name in ("mu", "filling", "offset"):
        if touched(f"mixture.{name}"):
            yield Mistake(f"mixture.{name}", "must be left out, because [trap] gives atom numbers")
    if not touched("trap.N"):
        yield Mistake("trap.N", "is missing; give the atoms of each species")
    shape, other = ("frequency", "curvature") if "lattice" in data else ("curvature", "frequency")
    if touched(f"trap.{other}"):
        where = "with" if "lattice" in data else "without"
        yield Mistake(f"trap.{other}", f"must be left out {where} [lattice]; give trap.{shape}")
    elif touched(f"trap.{shape}") == touched("trap.box"):
        yield Mistake("trap", f"holds nothing: give either {shape} or box, and not both")
    given = [name for name in ("mixture.T", "mixture.entropy", "trap.T_over_Tc") if touched(name)]
    if len(given) > 1:
        yield Mistake(given[-1], f"must be left out where {given[0]} is given")


def _is_parameter(path: str) -> bool:
    try:
        parameters.target(path)
    except ValueError:
        return False
    return True


def _of_axes_presence(axes: dict[str, Any]) -> Iterator[Mistake]:
    """An axis needs its parameter, and either a range or values."""
    for axis_name, axis in axes.items():
        key = f"axes.{axis_name}"
        if "parameter" not in axis:
            yield Mistake(f"{key}.parameter", 'is missing; name what the axis runs over, such as "mixture.T"')
        for name in ("start", "stop", "points", "spacing"):
            if "values" in axis and name in axis:
                yield Mistake(f"{key}.{name}", "must be left out where values are listed")
            elif "values" not in axis and name not in axis and name != "spacing":
                yield Mistake(f"{key}.{name}", "is missing; give start, stop and points, or values")


def _of_combination(spec: Spec) -> Iterator[Mistake]:
    """Values that are each allowed but do not fit together."""
    targets: dict[str, parameters.Target] = {}
    for name, axis in spec.axes.items():
        key = f"axes.{name}"
        found = parameters.target(axis.parameter or "")
        for other, earlier in targets.items():
            if found.overlaps(earlier):
                yield Mistake(f"{key}.parameter", f"{axis.parameter} is already set by axes.{other}")
        targets[name] = found
        yield from _of_axis(spec, name, axis, found)
    if spec.points > MAX_POINTS:
        yield Mistake("axes", f"together give {spec.points:,} points; at most {MAX_POINTS:,} are allowed")
    yield from _of_lengths(spec)
    yield from _of_trap(spec)
    yield from (Mistake(*found) for found in imaging.of_combination(spec))
    yield from _of_units(spec)


def _of_axis(spec: Spec, name: str, axis: AxisSection, found: parameters.Target) -> Iterator[Mistake]:
    key = f"axes.{name}"
    if not name.isidentifier() or not name.isascii() or len(name) > 40 or name.startswith("_"):
        yield Mistake(key, "the name of an axis must be a word of letters, digits and underscores, at most 40")
    elif name in _RESERVED and not (name in GIVEN_BY_AXIS and found.path == f"mixture.{name}" and found.whole):
        yield Mistake(key, f'"{name}" is the name of an output; call the axis something else')
    section = found.path.split(".")[0]
    if section != "mixture" and getattr(spec, section) is None:
        yield Mistake(f"{key}.parameter", f"{axis.parameter} needs a [{section}] section")
    if spec.lattice is not None and found.path in ("mixture.t", "mixture.U", "mixture.U12"):
        yield Mistake(
            f"{key}.parameter",
            f"{axis.parameter} follows from [lattice]; run over lattice.depth, lattice.a12, ...",
        )
    if found.path == "lattice.depth" and found.species and spec.lattice and spec.lattice.same_light:
        yield Mistake(f"{key}.parameter", f"{axis.parameter} cannot be set for one species where same_light = true")
    if found.species is not None and max(found.species) >= spec.species:
        yield Mistake(f"{key}.parameter", f"{axis.parameter} names species 2, but there is one species")
    top = 3 if found.path in ("lattice.depth", "trap.frequency", "trap.curvature") else spec.dim
    if found.directions is not None and max(found.directions) >= top:
        yield Mistake(f"{key}.parameter", f"{axis.parameter} names a direction beyond dim = {spec.dim}")
    allowed = parameters.units_of(found.parameter, spec.lattice is not None)
    if axis.unit is not None and axis.unit not in allowed:
        rule = f"must be one of {', '.join(allowed)}" if allowed else "must be left out for this parameter"
        yield Mistake(f"{key}.unit", f'"{axis.unit}" is not allowed; it {rule}')
    if axis.unit is None and found.parameter.kind == "energy" and spec.lattice is not None:
        yield Mistake(f"{key}.unit", f'is missing; say in which unit {axis.parameter} is counted, for example "nK"')
    ends = axis.values or (axis.start, axis.stop)
    low = min(end for end in ends if end is not None)
    if axis.values is None and axis.start == axis.stop:
        yield Mistake(f"{key}.stop", f"{axis.stop:g} is not allowed; it must differ from start")
    if axis.spacing == "log" and low <= 0:
        yield Mistake(f"{key}.start", f"{low:g} is not allowed; it must be greater than 0 for log spacing")
    elif found.parameter.lowest is not None:
        strict = found.path in parameters.ABOVE_LOWEST
        if low < found.parameter.lowest or (strict and low == 0):
            rule = "greater than 0" if strict else f"at least {found.parameter.lowest:g}"
            yield Mistake(key, f"starts or ends at {low:g}; {axis.parameter} must be {rule}")


def _of_lengths(spec: Spec) -> Iterator[Mistake]:
    """Lists must have one entry per species, and one per direction inside."""
    species, dim = spec.species, spec.dim
    for name in ("t", "U", "mu", "filling", "offset"):
        value = getattr(spec.mixture, name)
        if isinstance(value, tuple) and not isinstance(value, Energy):
            if len(value) != species:
                yield Mistake(f"mixture.{name}", f"has {len(value)} entries; it must have {species}, one per species")
            elif name == "t" and any(isinstance(part, tuple) and len(part) != dim for part in value):
                yield Mistake("mixture.t", f"must have {dim} directions for each species, as dim = {dim}")
    if spec.lattice is not None and spec.lattice.depth is not None:
        nested = not isinstance(spec.lattice.depth[0], Beam)
        if nested and species != len(spec.lattice.depth):
            yield Mistake("lattice.depth", "must be one depth or [x, y, z], because there is one species")
        if nested and spec.lattice.same_light:
            yield Mistake("lattice.depth", "must be the first species' alone where same_light = true")
    if spec.lattice is not None and spec.lattice.same_light and species != 2:
        yield Mistake("lattice.same_light", "must be false or left out, because there is one species")
    if species == 1 and (spec.mixture.U12 != 0 or any(a.parameter == "mixture.U12" for a in spec.axes.values())):
        yield Mistake("mixture.U12", "must be left out, because there is one species")


def _of_trap(spec: Spec) -> Iterator[Mistake]:
    """Values of [trap] that do not fit the species or the lattice."""
    trap, species = spec.trap, spec.species
    if trap is None:
        return
    if isinstance(trap.N, tuple) and len(trap.N) != species:
        yield Mistake("trap.N", f"has {len(trap.N)} entries; it must have {species}, one per species")
    for name in ("frequency", "curvature"):
        value = getattr(trap, name)
        if isinstance(value, tuple) and isinstance(value[0], tuple) and len(value) != species:
            yield Mistake(f"trap.{name}", f"has {len(value)} lists; it must have {species}, one per species")
    if trap.gravity is not None and (spec.lattice is None or trap.box is not None or species == 1):
        yield Mistake("trap.gravity", "must be left out but for two species in a [lattice] with trap.frequency")
    swept = {axis.parameter for axis in spec.axes.values()}
    starts = trap.T_over_Tc is not None or "trap.T_over_Tc" in swept
    if starts and trap.box is not None:
        yield Mistake("trap.T_over_Tc", "must be left out with a box; give mixture.entropy")
    if trap.interacting and (not starts or spec.lattice is None):
        yield Mistake("trap.interacting", "must be left out but with [lattice] and trap.T_over_Tc")


def _of_units(spec: Spec) -> Iterator[Mistake]:
    """With a lattice every energy needs a unit; without one there is only the run's own."""
    for name in ("mu", "T", "offset"):
        value = getattr(spec.mixture, name)
        parts = (value,) if isinstance(value, Energy) else value or ()
        for part in parts:
            if spec.lattice is None and part.unit:
                yield Mistake(
                    f"mixture.{name}",
                    f'"{part.value:g} {part.unit}" is not allowed; without [lattice] it must be a number',
                )
            elif spec.lattice is not None and not part.unit and part.value != 0:
                yield Mistake(f"mixture.{name}", f'{part.value:g} needs a unit, for example "5 nK" or "0.1 U1"')


def differences(old: str, new: str) -> Iterator[str]:
    """Say setting by setting how two canonical texts differ, as "key: old -> new"."""
    before, after = _flat(json.loads(old)), _flat(json.loads(new))
    for key in sorted(before.keys() | after.keys()):
        a, b = before.get(key), after.get(key)
        if a != b:
            yield f"{key}: {fields.shown(a)} -> {fields.shown(b)}"


def _flat(data: Any, key: str = "") -> dict[str, Any]:
    if not isinstance(data, dict):
        return {key: data}
    flat: dict[str, Any] = {}
    for name, value in data.items():
        flat |= _flat(value, f"{key}.{name}" if key else name)
    return flat
