"""Which reference entries to make: a plan file, read and checked.

In:  a TOML file with one [[entry]] per chain (or, with `vary`, per family of chains) and [defaults] for all.
Out: a tuple of `Entry`, or one `InputError` sentence; `memory` foretells what an entry needs.

    [defaults]                  # any key of an entry but its name
    bond = 100
    [[entry]]
    name = "one-unit"           # becomes one-unit-2, one-unit-4 with vary
    species = 1
    vary = {U = [2.0, 4.0]}
    filling = 1.0
    lengths = [24, 32, 48]

The energies of an entry are in any one unit. Only one-dimensional chains are made here.
"""

import hashlib
import json
import re
from collections.abc import Iterator
from dataclasses import asdict, dataclass, fields
from typing import Any

from gutz.errors import InputError, ResourceError
from gutz.exact.mps_correlators import FOUR_BODY_LIMIT
from gutz.scan import fields as kinds
from gutz.scan.document import Document

METHODS = ("sweeps", "free fermions", "thermal sweeps", "Bethe ansatz")
"""How an entry is made: matrix-product ground states; exact hard-core chains; matrix-product thermal states; exact
results of the infinite hard-core mixture."""

MAX_LENGTH = 200
MAX_ENTRIES = 1000


@dataclass(frozen=True)
class Entry:
    """One chain: its couplings, and the sizes at which it is solved.

    t, U: per species, one energy unit; U is ignored where n_max = 1. filling: atoms per site of each species, so
    that filling times every length is whole (ground states); thermal chains take `mu` instead, per species.
    lengths: open chains solved, rising. bond: most states kept. noise_length: the chain whose noise map is kept,
    0 for none. gaps: whether energies with atoms added and taken away are kept (same chain, or the shortest).
    """

    name: str
    species: int
    t: tuple[float, ...]
    U: tuple[float, ...]
    U12: float
    T: float
    filling: tuple[float, ...]
    mu: tuple[float, ...]
    method: str
    lengths: tuple[int, ...]
    n_max: int
    bond: int
    noise_length: int
    gaps: bool

    def canonical(self) -> str:
        """The entry as JSON with sorted keys: its provenance, and the base of its identity."""
        return json.dumps(asdict(self), sort_keys=True, allow_nan=False)

    def sha256(self) -> str:
        """Identity of the entry: SHA-256 of `canonical()`."""
        return hashlib.sha256(self.canonical().encode()).hexdigest()

    @property
    def memory(self) -> float:
        """Bytes the entry needs at its largest, estimated: four-operator terms, or tensors and sides of the chain."""
        states = (self.n_max + 1) ** self.species
        doubled = states**2 if self.T > 0 else states
        # Two copies of the tensors and both stacks of sides; sectors hold about a fifth of the dense matrices.
        chain = 8.0 * max(self.lengths, default=0) * self.bond**2 * doubled * 4 / 5
        return max(chain, 4 * 8.0 * self.noise_length**4)


def entries(document: Document) -> tuple[Entry, ...]:
    """All entries of a plan in the order of the file. Raises InputError naming the entry and the key."""
    data = document.data
    for key in data:
        if key not in ("title", "defaults", "entry"):
            raise InputError(f"{document.name}: unknown section {kinds.shown(key)}; allowed are defaults, entry")
    defaults, listed = data.get("defaults", {}), data.get("entry", [])
    if not isinstance(defaults, dict) or not isinstance(listed, list) or not listed:
        raise InputError(f"{document.name}: needs at least one [[entry]]")
    made: list[Entry] = []
    for number, raw in enumerate(listed, 1):
        where = f"{document.name}: entry {number}"
        if not isinstance(raw, dict):
            raise InputError(f"{where}: must be a section, written [[entry]] on a line of its own")
        made += [_entry(single, where) for single in _varied({**defaults, **raw}, where)]
    names = [entry.name for entry in made]
    for name in names:
        if names.count(name) > 1:
            raise InputError(f'{document.name}: the name "{name}" is given twice; every entry needs its own')
    if len(made) > MAX_ENTRIES:
        raise InputError(f"{document.name}: holds {len(made)} entries, at most {MAX_ENTRIES} are allowed")
    return tuple(made)


def restore(text: str) -> Entry:
    """The entry whose `canonical` text this is (from a file whose checksum has been found right)."""
    values: dict[str, Any] = {
        key: tuple(value) if isinstance(value, list) else value for key, value in json.loads(text).items()
    }
    return Entry(**values)


def check_memory(entry: Entry, available: float) -> None:
    """Refuse an entry that does not fit. Raises ResourceError."""
    if entry.memory > available:
        raise ResourceError(
            f"{entry.name}: needs about {entry.memory / 1e9:.2g} GB, {available / 1e9:.2g} GB are free; "
            "choose a smaller bond, n_max or length"
        )


def _varied(raw: dict[str, Any], where: str) -> Iterator[dict[str, Any]]:
    """One raw entry per value of `vary`, each with the value in its name; the entry itself without it."""
    vary = raw.pop("vary", None)
    if vary is None:
        yield raw
        return
    if not isinstance(vary, dict) or len(vary) != 1:
        raise InputError(f"{where}: vary must be one key with a list of values, for example {{U = [2.0, 4.0]}}")
    ((key, values),) = vary.items()
    if key not in ("t", "U", "U12", "T", "filling", "mu") or not isinstance(values, list) or not values:
        raise InputError(f"{where}: vary holds {kinds.shown(key)}; it must be t, U, U12, T, filling or mu with a list")
    for value in values:
        shown = "_".join(f"{x:g}" for x in (value if isinstance(value, list) else [value]))
        yield {**raw, key: value, "name": f"{raw.get('name')}-{shown}"}


_DEFAULTS: dict[str, Any] = {
    "U": 0.0,
    "U12": 0.0,
    "T": 0.0,
    "filling": [],
    "mu": [],
    "method": "sweeps",
    "lengths": [],
    "n_max": 1,
    "bond": 100,
    "noise_length": 0,
    "gaps": False,
}


def _entry(raw: dict[str, Any], where: str) -> Entry:
    """Check one entry. Raises InputError with the first mistake."""
    known = tuple(field.name for field in fields(Entry))
    for key in raw:
        if key not in known:
            raise InputError(f"{where}: unknown key {kinds.shown(key)}{kinds.suggestion(key, known)}")
    given = {**_DEFAULTS, **raw}
    for key in ("name", "species", "t"):
        if key not in given:
            raise InputError(f"{where}: {key} is missing")
    if not isinstance(given["name"], str) or not re.fullmatch(r"[a-z0-9][a-zA-Z0-9_.-]{0,59}", given["name"]):
        raise InputError(f"{where}: name = {kinds.shown(given['name'])} must be letters, digits, - and . (at most 60)")
    where = f'{where} ("{given["name"]}")'
    species = _convert(where, "species", kinds.whole(1, 2), given["species"])

    def each(key: str, single: Any) -> tuple[float, ...]:
        if given[key] == []:
            return ()
        value = _convert(where, key, kinds.per_species(single), given[key])
        spread = value if isinstance(value, tuple) else (value,) * species
        if len(spread) != species:
            raise InputError(f"{where}: {key} has {len(spread)} values, must be one, or one per species ({species})")
        return tuple(spread)

    entry = Entry(
        name=given["name"],
        species=species,
        t=each("t", kinds.real(above=0.0)),
        U=each("U", kinds.real(0.0)),
        U12=_convert(where, "U12", kinds.real(), given["U12"]),
        T=_convert(where, "T", kinds.real(0.0), given["T"]),
        filling=each("filling", kinds.real(above=0.0)),
        mu=each("mu", kinds.real()),
        method=_convert(where, "method", kinds.one_of(*METHODS), given["method"]),
        lengths=_lengths(where, given["lengths"]),
        n_max=_convert(where, "n_max", kinds.whole(1, 12), given["n_max"]),
        bond=_convert(where, "bond", kinds.whole(2, 2000), given["bond"]),
        noise_length=_convert(where, "noise_length", kinds.whole(0, FOUR_BODY_LIMIT), given["noise_length"]),
        gaps=_convert(where, "gaps", kinds.flag, given["gaps"]),
    )
    _check_together(entry, where)
    return entry


def _convert(where: str, key: str, converter: Any, value: Any) -> Any:
    try:
        return converter(value)
    except ValueError as error:
        raise InputError(f"{where}: {key} = {kinds.shown(value)}: {error}") from None


def _lengths(where: str, value: Any) -> tuple[int, ...]:
    if not isinstance(value, list):
        raise InputError(f"{where}: lengths = {kinds.shown(value)}: must be a list of whole numbers")
    lengths = tuple(_convert(where, "lengths", kinds.whole(4, MAX_LENGTH), part) for part in value)
    if list(lengths) != sorted(set(lengths)):
        raise InputError(f"{where}: lengths = {value}: must rise, without repeats")
    return lengths


def _check_together(entry: Entry, where: str) -> None:
    """Rules between keys."""
    if entry.method == "Bethe ansatz":
        if entry.lengths or entry.species != 2 or entry.n_max != 1 or entry.T > 0 or entry.filling != (0.5, 0.5):
            raise InputError(
                f"{where}: the Bethe ansatz serves the infinite hard-core mixture at half filling: species = 2, "
                "n_max = 1, filling = 0.5, T = 0, no lengths"
            )
        return
    if len(entry.lengths) < 2:
        raise InputError(f"{where}: lengths has {len(entry.lengths)} values, must be at least two, to extrapolate")
    if (entry.method == "thermal sweeps") != (entry.T > 0) and entry.method != "free fermions":
        raise InputError(f"{where}: T = {entry.T:g}: must be above 0 for thermal sweeps, and 0 for sweeps")
    if entry.method == "free fermions" and (entry.species != 1 or entry.n_max != 1):
        raise InputError(f"{where}: free fermions serve one hard-core species: species = 1, n_max = 1")
    by_mu = entry.T > 0
    if bool(entry.mu) != by_mu or bool(entry.filling) == by_mu:
        raise InputError(f"{where}: give {'mu' if by_mu else 'filling'} alone for T = {entry.T:g}")
    for n in entry.filling:
        for length in entry.lengths:
            atoms = n * length
            if abs(atoms - round(atoms)) > 1e-9 or not 0 < round(atoms) <= entry.n_max * length:
                raise InputError(f"{where}: filling = {n:g} does not make a whole number of atoms on {length} sites")
    if entry.noise_length and (entry.noise_length not in entry.lengths or entry.method == "free fermions"):
        raise InputError(f"{where}: noise_length = {entry.noise_length} must be one of the lengths (not free fermions)")
