"""Atoms: masses, and how strongly far-detuned light acts on them.

In:  `data/atoms.toml`, read once; a name such as "87Rb" or "Rb87"; a wavelength in m.
Out: frozen `Atom` records; the dipole polarisability from the two D lines (an estimate, see there).
     Never scattering lengths: they depend on state and field and are the user's input.
"""

import difflib
import functools
import math
import re
import tomllib
from dataclasses import dataclass
from importlib.resources import files
from numbers import Real

from scipy import constants

from gutz.errors import DataError, InputError
from gutz.units import ATOMIC_MASS

D_LINE_CLEARANCE = 0.05e-9
"""Light closer than this to a D line (m) is refused: hyperfine structure and heating rule there."""


@dataclass(frozen=True)
class Line:
    """One optical transition: vacuum wavelength (m) and absorption oscillator strength (number)."""

    wavelength: float
    strength: float


@dataclass(frozen=True)
class Atom:
    """One atom: name, mass (kg), its D1 and D2 lines (empty if not tabulated) and where the numbers are from.

    Raises:
        InputError: the mass is not positive and finite.
    """

    name: str
    mass: float
    lines: tuple[Line, ...] = ()
    source: str = "given by the user"

    def __post_init__(self) -> None:
        if not (isinstance(self.mass, Real) and 0 < self.mass < math.inf):
            raise InputError(f"mass of {self.name}: got {self.mass!r} kg, must be a finite number above 0.")

    def polarisability(self, wavelength: float) -> float:
        """Real dipole polarisability at a vacuum wavelength, in C²·m²/J (C·m²/V); positive means attracted.

        α(ω) = (e²/m_e) Σ f_i / (ω_i² − ω²) over the D1 and D2 lines; both the rotating and the
        counter-rotating term are in. Linear polarisation, so no vector shift. The core and higher
        lines are left out, which makes it a few per cent low far to the red, and shifts the wavelength
        where α vanishes between the lines by about 0.1 nm. Lorentz oscillator as in Grimm, Weidemüller,
        Ovchinnikov, Adv. At. Mol. Opt. Phys. 42, 95 (2000), section 2 (from memory).

        Raises:
            InputError: no lines known, wavelength not positive, or within 0.05 nm of a D line.
        """
        if not self.lines:
            known = ", ".join(name for name in atom_names() if atom(name).lines)
            raise InputError(
                f"atoms: {self.name} has no D lines in the table, so how strongly light holds it cannot "
                f"be estimated; give its depth yourself or use one of {known}."
            )
        check_wavelength(wavelength)
        for line in self.lines:
            if abs(wavelength - line.wavelength) < D_LINE_CLEARANCE:
                raise InputError(
                    f"wavelength: got {wavelength * 1e9:.7g} nm, must be at least "
                    f"{D_LINE_CLEARANCE * 1e9:g} nm from the {self.name} line at "
                    f"{line.wavelength * 1e9:.7g} nm."
                )
        light = (2 * math.pi * constants.c / wavelength) ** 2
        response = sum(
            line.strength / ((2 * math.pi * constants.c / line.wavelength) ** 2 - light) for line in self.lines
        )
        return constants.e**2 / constants.m_e * response


def check_wavelength(wavelength: float) -> None:
    """Refuse a vacuum wavelength (m) outside 100 nm to 100 µm, which is nearly always a slip of units.

    Raises:
        InputError: outside that range or not finite.
    """
    if not (isinstance(wavelength, Real) and 1e-7 <= wavelength <= 1e-4):
        raise InputError(f"wavelength: got {wavelength!r} m, must lie between 1e-07 and 0.0001 m (100 nm to 100 µm).")


def atom_names() -> tuple[str, ...]:
    """Names of all tabulated atoms, mass number first."""
    return tuple(_table())


def atom(name: str) -> Atom:
    """Look up an atom; "87Rb", "Rb87", "Rb-87" and lower case all work.

    Raises:
        InputError: unknown name; the nearest known one is suggested.
    """
    table = _table()
    match = re.fullmatch(r"\s*([0-9]*)[-\s]*([A-Za-z]+)[-\s]*([0-9]*)\s*", name) if len(name) <= 40 else None
    key = "" if match is None else f"{match[1] or match[3]}{match[2].capitalize()}"
    if match is not None and not (match[1] and match[3]) and key in table:
        return table[key]
    nearest = difflib.get_close_matches(key, table, n=1, cutoff=0.5)
    hint = f'; did you mean "{nearest[0]}"?' if nearest else "."
    shown = name if len(name) <= 40 else name[:40] + "…"
    raise InputError(f'atom: got "{shown}", must be one of {", ".join(table)} (or give the mass){hint}')


@functools.cache
def _table() -> dict[str, Atom]:
    """The table in file order."""
    try:
        raw = tomllib.loads(files("gutz").joinpath("data/atoms.toml").read_text(encoding="utf-8"))
        return {name: _atom(name, entry) for name, entry in raw.items()}
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise DataError(f"data/atoms.toml: cannot be read ({error}); reinstall gutz.") from error


def _atom(name: str, entry: dict[str, object]) -> Atom:
    lines = tuple(
        Line(_number(entry[f"{d}_nm"]) * 1e-9, _number(entry[f"{d}_f"])) for d in ("d1", "d2") if f"{d}_nm" in entry
    )
    return Atom(name, _number(entry["mass_u"]) * ATOMIC_MASS, lines, str(entry["source"]))


def _number(value: object) -> float:
    if not isinstance(value, float):
        raise TypeError(f"{value!r} is not a decimal number")
    return value
