"""Quantities with units come in and go out here, and nowhere else.

In:  a number (in a declared unit) or text such as "12.5 nm", the kind of quantity, the field's name.
Out: a float in SI units; or, for people, text with a sensible prefix and four significant digits.

The table of units is closed: no expression is evaluated and no prefix is glued on at run time.
Constants are CODATA values as shipped with scipy. Temperatures convert to energies with k_B and
frequencies with h (not ħ), the habit of cold-atom laboratories: "1 kHz" of energy is h × 1 kHz.
"""

import difflib
import math
import re
import reprlib
from collections.abc import Mapping
from dataclasses import dataclass
from numbers import Real
from types import MappingProxyType
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray
from scipy import constants

from gutz.errors import InputError

Number = TypeVar("Number", float, NDArray[np.float64])

PLANCK: float = constants.h
HBAR: float = constants.hbar
BOLTZMANN: float = constants.k
ATOMIC_MASS: float = constants.atomic_mass
BOHR_RADIUS: float = constants.physical_constants["Bohr radius"][0]

_FREQUENCY = {"Hz": 1.0, "kHz": 1e3, "MHz": 1e6}
_TEMPERATURE = {"nK": 1e-9, "uK": 1e-6, "mK": 1e-3, "K": 1.0}


@dataclass(frozen=True)
class Kind:
    """One kind of quantity: `units` maps a unit to its size in SI, `default` is the SI unit's own name.

    `shown` lists the units that `format_quantity` chooses from, smallest first.
    """

    units: Mapping[str, float]
    default: str
    shown: tuple[str, ...]


def _kind(units: dict[str, float], default: str, shown: tuple[str, ...]) -> Kind:
    return Kind(MappingProxyType(units), default, shown)


KINDS: Mapping[str, Kind] = MappingProxyType(
    {
        "length": _kind(
            {"m": 1.0, "cm": 1e-2, "mm": 1e-3, "um": 1e-6, "nm": 1e-9, "pm": 1e-12, "a0": BOHR_RADIUS},
            "m",
            ("nm", "um", "mm", "m"),
        ),
        "mass": _kind({"kg": 1.0, "u": ATOMIC_MASS}, "kg", ("u",)),
        "energy": _kind(
            {
                "J": 1.0,
                **{unit: PLANCK * size for unit, size in _FREQUENCY.items()},
                **{unit: BOLTZMANN * size for unit, size in _TEMPERATURE.items()},
            },
            "J",
            ("Hz", "kHz", "MHz"),
        ),
        "temperature": _kind(_TEMPERATURE, "K", ("nK", "uK", "mK", "K")),
        "frequency": _kind(_FREQUENCY, "Hz", ("Hz", "kHz", "MHz")),
        "time": _kind({"s": 1.0, "ms": 1e-3, "us": 1e-6}, "s", ("us", "ms", "s")),
        "entropy": _kind({"J/K": 1.0, "k_B": BOLTZMANN}, "J/K", ("k_B",)),
        "number": _kind({"1": 1.0, "%": 1e-2}, "1", ("1",)),
    }
)
"""Every kind of quantity `gutz` knows; frequencies are cycles per second, never radians per second."""

# Both the Greek letter (U+03BC) and the micro sign (U+00B5) are on keyboards; inside it is always "u".
_MICRO = str.maketrans({"\u03bc": "u", "\u00b5": "u"})
_TEXT = re.compile(r"\s*([+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?)\s*(\S*)\s*")
_LONGEST_TEXT = 100
_LARGEST_SHOWN = 10**40
_SMALLEST = float(np.finfo(np.float64).tiny)


def parse_quantity(value: object, kind: str, field: str, unit: str | None = None) -> float:
    """Turn a number or a text with a unit into a float in SI units.

    Args:
        value: a real number, taken to be in `unit`; or text: a decimal number, then one unit of the kind.
        kind: a key of `KINDS`.
        field: name used in the message if something is wrong.
        unit: the unit of a bare number; None means the kind's SI unit.

    Returns:
        The value in the kind's SI unit (m, kg, J, K, Hz, s, J/K, 1); finite.

    Raises:
        InputError: not a number, not finite, unknown or wrong unit; the message names all that is allowed.
    """
    _units_of(kind, field)
    bare_unit = KINDS[kind].default if unit is None else unit
    if isinstance(value, str):
        number, given_unit = _split(value, kind, field, bare_unit)
        size = _size(given_unit or bare_unit, kind, field, value)
    elif isinstance(value, Real) and not isinstance(value, bool | np.bool_):
        number, size = _as_float(value, field), _size(bare_unit, kind, field, value)
    else:
        raise InputError(f"{field}: got {_shown(value)}, expected a {kind}: {_pattern(kind, bare_unit)}.")
    result = number * size
    if not math.isfinite(result):
        raise InputError(f"{field}: got {_shown(value)}, must be finite.")
    if number != 0 and abs(result) < _SMALLEST:
        raise InputError(f"{field}: got {_shown(value)}, too small to be told from zero.")
    return result


def to_si(value: Number, kind: str, unit: str) -> Number:
    """Convert numbers or arrays from `unit` to the kind's SI unit. Raises InputError for an unknown unit."""
    return value * _size(unit, kind, "unit", unit)


def from_si(value: Number, kind: str, unit: str) -> Number:
    """Convert numbers or arrays from the kind's SI unit to `unit`. Raises InputError for an unknown unit."""
    return value / _size(unit, kind, "unit", unit)


def format_quantity(value: float, kind: str, unit: str | None = None, digits: int = 4) -> str:
    """Write an SI value for people, e.g. 1.0642e-6 m as "1.064 µm".

    Args:
        value: in the kind's SI unit. A value that is not finite is written as "undefined" or "infinite".
        kind: a key of `KINDS`; energies are written as energy/h.
        unit: force this unit instead of choosing the prefix.
        digits: significant digits.

    Raises:
        InputError: unknown kind or unit.
    """
    units = _units_of(kind, "unit")
    if not math.isfinite(value):
        return "undefined" if math.isnan(value) else "infinite" if value > 0 else "-infinite"
    if unit is None:
        unit = KINDS[kind].shown[0]
        for candidate in KINDS[kind].shown[1:]:
            # Rounded first, so that 999.96 nm becomes 1 µm and not 1000 nm.
            if abs(float(f"{value / units[candidate]:.{digits}g}")) >= 1:
                unit = candidate
    number = f"{value / _size(unit, kind, 'unit', unit):.{digits}g}"
    if unit == "1":
        return number
    return f"{number} \u00b5{unit[1:]}" if unit in ("um", "uK", "us") else f"{number} {unit.translate(_MICRO)}"


def _split(text: str, kind: str, field: str, unit: str) -> tuple[float, str]:
    """Number and unit of a text; the unit is empty if there is none."""
    match = _TEXT.fullmatch(text) if len(text) <= _LONGEST_TEXT else None
    if match is None:
        pattern = _pattern(kind, unit)
        raise InputError(f"{field}: got {_shown(text)}, expected a {kind}: {pattern}.")
    return float(match[1]), match[2]


def _pattern(kind: str, unit: str) -> str:
    """What a quantity of this kind may look like."""
    if kind == "number":
        return 'a plain number or text such as "12 %"'
    units = ", ".join(KINDS[kind].units)
    return f'a number in {unit} or text such as "1.5 {unit}" (units: {units})'


def _as_float(value: Real, field: str) -> float:
    try:
        return float(value)
    except (OverflowError, ValueError, TypeError):
        raise InputError(f"{field}: got {_shown(value)}, must be finite.") from None


def _units_of(kind: str, field: str) -> Mapping[str, float]:
    if kind not in KINDS:
        raise InputError(f"{field}: got the kind {_shown(kind)}, must be one of {', '.join(KINDS)}.")
    return KINDS[kind].units


def _size(unit: str, kind: str, field: str, value: object) -> float:
    """Size of a unit in SI, or one sentence on which units a quantity of this kind may have."""
    units = _units_of(kind, field)
    name = unit.translate(_MICRO)
    if name in units:
        return units[name]
    by_folded = {known.casefold(): known for known in units}
    swapped = [known for known in by_folded if sorted(known) == sorted(name.casefold())]
    nearest = swapped or difflib.get_close_matches(name.casefold(), by_folded, n=1, cutoff=0.5)
    other = next((k for k, v in KINDS.items() if name in v.units), None)
    if other is not None:
        hint = f"{_shown(unit)} is a unit of {other}."
    elif nearest:
        hint = f'did you mean "{by_folded[nearest[0]]}"?'
    else:
        hint = f"{_shown(unit)} is not a unit known here."
    raise InputError(f"{field}: got {_shown(value)}, expected a {kind} in {', '.join(units)}; {hint}")


def _shown(value: object) -> str:
    """A short repr that cannot itself fail; texts in double quotes, like everywhere in the files."""
    if isinstance(value, int) and abs(value) > _LARGEST_SHOWN:
        return "a whole number of more than 40 digits"
    if isinstance(value, str) and len(value) <= _LONGEST_TEXT and value.isprintable():
        return f'"{value}"'
    return reprlib.repr(value)
