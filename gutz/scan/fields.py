"""What a single value in a scan file may be: a number, a list per species, a quantity, a short text.

In:  a raw TOML value.
Out: a plain Python value (float, tuple, `Energy`, str), or a ValueError whose text completes the sentence
     "<key> = <value>: ...". Nothing here knows which section or key the value belongs to.
"""

import math
from collections.abc import Callable
from typing import Any, NamedTuple

from gutz.errors import InputError
from gutz.units import KINDS, parse_quantity

MAX_TEXT = 120
MAX_VALUES = 100_000

RELATIVE_UNITS = ("U1", "U2", "t1", "t2", "E_R")
"""Units of energy that depend on the lattice: interactions, hoppings along x, recoil of the first species."""

ENERGY_UNITS = (*KINDS["energy"].units, *RELATIVE_UNITS)

Per = float | tuple[float, ...] | tuple[tuple[float, ...], ...]
"""One number, one per species, or one per species and direction."""


class Energy(NamedTuple):
    """An energy as written: a number and a unit; the unit is "" for a plain number."""

    value: float
    unit: str


class Beam(NamedTuple):
    """What confines one axis: a lattice depth (unit "E_R", recoil energies) or a frequency (unit "Hz")."""

    value: float
    unit: str


def real(lowest: float | None = None, above: float | None = None) -> Callable[[Any], float]:
    """Return a converter for a finite number, at least `lowest` or greater than `above`."""
    rule = "must be a finite number"
    if lowest is not None:
        rule += f", at least {lowest:g}"
    if above is not None:
        rule += f", greater than {above:g}"

    def convert(value: Any) -> float:
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise ValueError(rule)
        try:
            number = float(value)
        except OverflowError:
            raise ValueError(rule) from None
        if not math.isfinite(number):
            raise ValueError(rule)
        if (lowest is not None and number < lowest) or (above is not None and number <= above):
            raise ValueError(rule)
        return number

    return convert


def whole(lowest: int, highest: int) -> Callable[[Any], int]:
    """Return a converter for a whole number within bounds."""

    def convert(value: Any) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or not lowest <= value <= highest:
            raise ValueError(f"must be a whole number from {lowest:,} to {highest:,}")
        return value

    return convert


def per_species(single: Callable[[Any], Any]) -> Callable[[Any], Any]:
    """Return a converter for one value, or a list of two (one per species)."""

    def convert(value: Any) -> Any:
        if not isinstance(value, list):
            return single(value)
        if not 1 <= len(value) <= 2:
            raise ValueError("must be one value, or a list of one per species")
        return tuple(single(part) for part in value)

    return convert


def per_direction(single: Callable[[Any], Any]) -> Callable[[Any], Any]:
    """Return a converter for one value, one per species, or [[x, y, z], [x, y, z]] for both."""

    def directions(value: Any) -> Any:
        if not isinstance(value, list):
            return single(value)
        if not 1 <= len(value) <= 3:
            raise ValueError("must have at most three directions per species")
        return tuple(single(part) for part in value)

    return per_species(directions)


def per_axis(single: Callable[[Any], Any]) -> Callable[[Any], Any]:
    """Return a converter for one value, [x, y, z] for every species, or [[x, y, z], [x, y, z]] per species."""
    rule = "must be one value, a list [x, y, z], or [[x, y, z], [x, y, z]] where each species has its own"

    def row(value: Any) -> tuple[Any, ...]:
        if len(value) != 3 or any(isinstance(part, list) for part in value):
            raise ValueError(rule)
        return tuple(single(part) for part in value)

    def convert(value: Any) -> Any:
        if not isinstance(value, list):
            return single(value)
        if value and all(isinstance(part, list) for part in value):
            if len(value) > 2:
                raise ValueError(rule)
            return tuple(row(part) for part in value)
        return row(value)

    return convert


def frequency(value: Any) -> float:
    """Convert a trap frequency given as text with a unit, into Hz (cycles per second)."""
    if not isinstance(value, str):
        raise ValueError('needs a unit, for example "60 Hz"')
    try:
        found = parse_quantity(value, "frequency", "")
    except InputError:
        units = ", ".join(KINDS["frequency"].units)
        raise ValueError(f"must be a number and one of the units {units}") from None
    if not found > 0:
        raise ValueError("must be greater than 0: a trap without frequency does not bind")
    return found


def box(value: Any) -> tuple[float, ...]:
    """Convert the sides of a box: one number of sites, or [x, y, z]."""
    side = real(lowest=1.0)
    if not isinstance(value, list):
        return (side(value),) * 3
    if len(value) != 3:
        raise ValueError("must be one number of sites, or a list [x, y, z]")
    return tuple(side(part) for part in value)


def energy(lowest: float | None = None) -> Callable[[Any], Energy]:
    """Return a converter for an energy: a plain number, or text such as "5 nK" or "0.1 U1"."""
    number = real(lowest)

    def convert(value: Any) -> Energy:
        if not isinstance(value, str):
            return Energy(number(value), "")
        amount, _, unit = value.strip().partition(" ")
        unit = unit.strip()
        if unit in RELATIVE_UNITS:
            return Energy(number(_decimal(amount)), unit)
        if unit == "":
            raise ValueError('needs a unit, for example "5 nK" or "0.1 U1"')
        try:
            parse_quantity(value, "energy", "")
        except InputError:
            raise ValueError(f"must be a number and one of the units {', '.join(ENERGY_UNITS)}") from None
        return Energy(number(_decimal(amount)), unit)

    return convert


def beam(value: Any) -> Beam:
    """Convert the depth of one axis: a number of recoil energies, or a frequency such as "20 kHz"."""
    rule = 'must be a number of recoil energies, or a trap frequency such as "20 kHz" for smooth confinement'
    if not isinstance(value, str):
        try:
            return Beam(real(above=0.0)(value), "E_R")
        except ValueError:
            raise ValueError(f"{rule}, greater than 0") from None
    try:
        return Beam(parse_quantity(value, "frequency", ""), "Hz")
    except InputError:
        raise ValueError(rule) from None


def beams(value: Any) -> tuple[Beam, ...] | tuple[tuple[Beam, ...], ...]:
    """Convert depths: one for all three axes, [x, y, z], or [[x, y, z], [x, y, z]] per species."""
    if not isinstance(value, list):
        return (beam(value),) * 3
    if value and all(isinstance(part, list) for part in value):
        if len(value) != 2 or any(len(part) != 3 for part in value):
            raise ValueError("must be [[x, y, z], [x, y, z]] where each species has its own")
        return tuple(tuple(beam(part) for part in species) for species in value)
    if len(value) != 3 or any(isinstance(part, list) for part in value):
        raise ValueError("must be one depth for all three axes, or a list [x, y, z]")
    return tuple(beam(part) for part in value)


def length(value: Any) -> float:
    """Convert a length given as text with a unit, into metres."""
    if not isinstance(value, str):
        raise ValueError('needs a unit, for example "100.4 a0" or "1064 nm"')
    try:
        return parse_quantity(value, "length", "")
    except InputError:
        raise ValueError(f"must be a number and one of the units {', '.join(KINDS['length'].units)}") from None


def quantity(value: Any, kind: str, example: str) -> float:
    """Convert a quantity given as text with a unit, into SI."""
    if not isinstance(value, str):
        raise ValueError(f'needs a unit, for example "{example}"')
    try:
        return parse_quantity(value, kind, "")
    except InputError:
        raise ValueError(f"must be a number and one of the units {', '.join(KINDS[kind].units)}") from None


def text(value: Any) -> str:
    """Convert a short one-line text meant for people."""
    if not isinstance(value, str) or len(value) > MAX_TEXT or not value.isprintable():
        raise ValueError(f"must be a text of at most {MAX_TEXT} characters on one line")
    return value


def one_of(*words: str) -> Callable[[Any], str]:
    """Return a converter that accepts one of a few words."""

    def convert(value: Any) -> str:
        if value not in words or not isinstance(value, str):
            raise ValueError(f"must be {_or(words)}")
        return value

    return convert


def several_of(*words: str) -> Callable[[Any], tuple[str, ...]]:
    """Return a converter for a list of known words, each at most once."""

    def convert(value: Any) -> tuple[str, ...]:
        if not isinstance(value, list) or not 1 <= len(value) <= len(words):
            raise ValueError(f"must be a list of {_or(words)}")
        for part in value:
            if part not in words:
                hint = suggestion(part, words) or f"; allowed are {', '.join(words)}"
                raise ValueError(f"holds {shown(part)}, which is not known{hint}")
        if len(set(value)) < len(value):
            raise ValueError("must not name anything twice")
        return tuple(value)

    return convert


def values(value: Any) -> tuple[float, ...]:
    """Convert a list of axis values: finite, two or more, in rising or falling order."""
    if not isinstance(value, list) or not 2 <= len(value) <= MAX_VALUES:
        raise ValueError(f"must be a list of 2 to {MAX_VALUES:,} numbers")
    numbers = tuple(real()(part) for part in value)
    steps = [b - a for a, b in zip(numbers, numbers[1:], strict=False)]
    if not (all(step > 0 for step in steps) or all(step < 0 for step in steps)):
        raise ValueError("must be in rising or falling order, without repeats")
    return numbers


def flag(value: Any) -> bool:
    """Convert true or false."""
    if not isinstance(value, bool):
        raise ValueError("must be true or false")
    return value


def nearest(word: str, known: tuple[str, ...] | list[str]) -> str | None:
    """The known word fewest edits away, if that is a plausible slip; None otherwise.

    An edit is one letter added, dropped, changed or two neighbours swapped; capitals count half.
    """
    if not known:
        return None
    cost = {candidate: _edits(word[:60], candidate) for candidate in known}
    best = min(cost, key=lambda candidate: cost[candidate])
    return best if cost[best] <= max(1.0, len(best) / 2.5) else None


def suggestion(word: Any, known: tuple[str, ...]) -> str:
    """Words to append to a message: '; did you mean "x"?', or nothing."""
    near = nearest(word, known) if isinstance(word, str) else None
    return f'; did you mean "{near}"?' if near else ""


def shown(value: Any) -> str:
    """A value as the file would write it, cut to a readable length."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, int) and abs(value) >= 10**20:
        return "a huge number"
    words = f'"{value}"' if isinstance(value, str) else str(value)
    words = words if words.isprintable() else repr(words)
    return words if len(words) <= 40 else words[:37] + "..."


def _decimal(amount: str) -> float:
    try:
        return float(amount)
    except ValueError:
        raise ValueError('must be a number and a unit, for example "5 nK" or "0.1 U1"') from None


def _or(words: tuple[str, ...]) -> str:
    quoted = [f'"{word}"' for word in words]
    return quoted[0] if len(quoted) == 1 else f"{', '.join(quoted[:-1])} or {quoted[-1]}"


def _edits(a: str, b: str) -> float:
    """Edit distance with swaps of neighbours (optimal string alignment)."""
    rows = [[float(j) for j in range(len(b) + 1)]]
    for i, x in enumerate(a, 1):
        row = [float(i)]
        for j, y in enumerate(b, 1):
            change = 0.0 if x == y else 0.5 if x.casefold() == y.casefold() else 1.0
            cost = min(rows[i - 1][j] + 1, row[j - 1] + 1, rows[i - 1][j - 1] + change)
            if i > 1 and j > 1 and x == b[j - 2] and a[i - 2] == y:
                cost = min(cost, rows[i - 2][j - 2] + 1)
            row.append(cost)
        rows.append(row)
    return rows[-1][-1]
