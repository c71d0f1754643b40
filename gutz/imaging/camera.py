"""The camera and the expansion: everything between the lattice and the picture.

In:  numbers in SI units (metres, seconds, counts).
Out: `Camera`, checked and frozen; a jax pytree whose numbers can be differentiated.
"""

from dataclasses import dataclass, field, replace
from typing import Any, Self

import jax
import numpy as np
from scipy import constants

from gutz.errors import InputError

Number = Any

DETECTIONS = ("absorption", "counting")
FLIGHTS = ("free", "lens")
RESONANT_LIGHT = 780.241e-9
"""D2 line of 87Rb in m, whose resonant cross-section is the default."""


def resonant_cross_section(wavelength: float) -> float:
    """3 λ²/(2π) in m², of a closed two-level transition (textbook)."""
    return 3.0 * wavelength**2 / (2.0 * np.pi)


@jax.tree_util.register_dataclass
@dataclass(frozen=True, kw_only=True)
class Camera:
    """Expansion and picture. Lengths in m at the atoms, times in s.

    tof: time of flight. efficiency: share of the atoms detected, in (0, 1]. resolution: rms of the point spread.
    pixel: side of a pixel. picture: side of the square picture, inf for one that holds everything.
    photons: photons detected per pixel without atoms, inf for no photon noise (absorption only).
    cross_section: of the light, m². fluctuation: rms of the atom number from shot to shot, relative.
    jitter: rms of the picture's position from shot to shot, per axis. technical: measured over predicted noise, >= 1.
    detection: "absorption" (every atom smeared by the point spread) or "counting" (single atoms, misplaced by it).
    flight: "free", or "lens" (a matter-wave lens or any other true far field). light: axis of the light, 0 to 2.
    Raises InputError naming the field for anything out of range.
    """

    tof: Number
    efficiency: Number = 1.0
    resolution: Number = 3e-6
    pixel: Number = 3e-6
    picture: Number = np.inf
    photons: Number = np.inf
    cross_section: Number = resonant_cross_section(RESONANT_LIGHT)
    fluctuation: Number = 0.0
    jitter: Number = 0.0
    technical: Number = 1.0
    detection: str = field(default="absorption", metadata={"static": True})
    flight: str = field(default="free", metadata={"static": True})
    light: int = field(default=2, metadata={"static": True})

    def __post_init__(self) -> None:
        for name, (low, high, strict, rule) in _RANGES.items():
            value = getattr(self, name)
            if not isinstance(value, int | float | np.number) or isinstance(value, bool):
                continue  # under differentiation there is no number to judge
            above = value > low if strict else value >= low
            if not (above and value <= high):
                raise InputError(f"{name} is {value:g}; it must be {rule}")
        for name, allowed in (("detection", DETECTIONS), ("flight", FLIGHTS), ("light", (0, 1, 2))):
            if getattr(self, name) not in allowed:
                words = ", ".join(map(str, allowed))
                raise InputError(f"{name} is {getattr(self, name)!r}; it must be one of {words}")
        if _plain(self.pixel) and _plain(self.picture) and self.pixel > self.picture / FEWEST_PIXELS:
            raise InputError(
                f"pixel is {self.pixel * 1e6:g} um in a picture of {self.picture * 1e6:g} um; the picture must be at "
                f"least {FEWEST_PIXELS} pixels wide"
            )

    def with_(self, **changes: Any) -> Self:
        """A copy with some settings changed, checked again."""
        return replace(self, **changes)


FEWEST_PIXELS = 8
"""Pixels along a side below which there is no picture to correlate."""

_RANGES: dict[str, tuple[float, float, bool, str]] = {
    "tof": (0.0, 10.0, True, "greater than 0 and at most 10 s"),
    "efficiency": (0.0, 1.0, True, "greater than 0 and at most 1"),
    "resolution": (0.0, 1e-2, False, "from 0 to 1 cm"),
    "pixel": (0.0, 1e-2, True, "greater than 0 and at most 1 cm"),
    "picture": (0.0, np.inf, True, "greater than 0"),
    "photons": (0.0, np.inf, True, "greater than 0"),
    "cross_section": (0.0, 1e-6, True, "greater than 0 and at most 1e-6 m²"),
    "fluctuation": (0.0, 1.0, False, "from 0 to 1"),
    "jitter": (0.0, 1e-2, False, "from 0 to 1 cm"),
    "technical": (1.0, np.inf, False, "at least 1"),
}


def _plain(value: Any) -> bool:
    return isinstance(value, int | float | np.number)


def reciprocal_length(mass: Number, spacing: Number, tof: Number) -> Number:
    """2π ħ t / (m d): the picture's length of one reciprocal lattice vector, m."""
    return constants.h * tof / (mass * spacing)
