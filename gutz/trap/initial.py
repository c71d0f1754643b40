"""The gas before the lattice: entropy per particle of a trapped Bose gas from its temperature.

In:  T over T_c, atom numbers and mean trap frequencies, optionally scattering length over oscillator length.
Out: entropy per particle in k_B, and the way back.

Ideal gas below T_c in a harmonic trap: S/N = 4 zeta(4)/zeta(3) (T/T_c)³ (Bagnato, Pritchard, Kleppner, Phys. Rev. A
35, 4354 (1987)); above it the fugacity z solves g_3(z) = zeta(3) (T_c/T)³ and S/N = 4 g_4(z)/g_3(z) - log z. Repulsion
below T_c, to first order in eta = 1.57 (N^(1/6) a/a_ho)^(2/5): the energy of Giorgini, Pitaevskii, Stringari (J. Low
Temp. Phys. 109, 309 (1997)), E/(N T_c) = 3 zeta(4)/zeta(3) t⁴ + eta (1 - t³)^(2/5) (5 + 16 t³)/7, whose entropy
integral is closed: S/N = 4 zeta(4)/zeta(3) t³ + 3 eta t² (1 - t³)^(2/5).
"""

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.optimize import brentq
from scipy.special import zeta

from gutz.errors import InputError

FloatArray = NDArray[np.float64]

ZETA3, ZETA4 = float(zeta(3)), float(zeta(4))

SLOPE = 4.0 * ZETA4 / ZETA3
"""S/N of the ideal trapped gas at T_c, k_B."""

INTERACTING_RANGE = 0.85
"""T/T_c up to which the first-order interaction correction is used: closer to T_c it is singular."""

_TERMS = np.arange(1, 4001, dtype=float)


def _polylog(order: int, z: float) -> float:
    """Sum of z^k / k^order for 0 <= z <= 1; the tail is an integral."""
    last = _TERMS[-1] + 0.5
    tail = last ** (1 - order) / (order - 1) if z == 1.0 else 0.0
    return float((z**_TERMS / _TERMS**order).sum()) + tail


def ideal_entropy(t: ArrayLike) -> FloatArray:
    """S/N in k_B of the ideal gas in a harmonic trap at t = T/T_c, any t >= 0."""
    values = np.asarray(t, float)
    found = SLOPE * values**3
    above = values > 1
    if np.any(above):
        found = np.array(found)
        found[above] = [_thermal_entropy(float(v)) for v in np.atleast_1d(values)[np.atleast_1d(above)]]
    return np.asarray(found)


def _thermal_entropy(t: float) -> float:
    goal = ZETA3 / t**3
    z = brentq(lambda z: _polylog(3, z) - goal, 0.0, 1.0, xtol=1e-14)
    return 4.0 * _polylog(4, z) / _polylog(3, z) - math.log(z)


def interaction_strength(atoms: float, scattering_length: float, oscillator_length: float) -> float:
    """Eta = 1.57 (N^(1/6) a/a_ho)^(2/5), about 0.3 to 0.45 in experiments; 0 for a = 0. Lengths in one unit."""
    if scattering_length < 0:
        raise InputError(
            f"the scattering length of the initial gas is {scattering_length:g}; it must be at least 0 for the "
            "interaction correction"
        )
    return 1.57 * (atoms ** (1 / 6) * scattering_length / oscillator_length) ** 0.4


def trapped_entropy(t: float, eta: float = 0.0) -> float:
    """S/N in k_B at t = T/T_c with the first-order interaction correction (eta = 0: ideal gas).

    T_c is that of the ideal gas. Raises InputError where the correction does not hold.
    """
    if not t >= 0:
        raise InputError(f"T_over_Tc is {t:g}; it must be at least 0")
    if eta == 0:
        return float(ideal_entropy(np.array([t]))[0])
    if t > INTERACTING_RANGE:
        raise InputError(
            f"T_over_Tc is {t:g}; it must be at most {INTERACTING_RANGE:g} with the interaction correction, "
            "which diverges at T_c; leave the correction out (interacting = false) or start colder"
        )
    return SLOPE * t**3 + 3.0 * eta * t**2 * (1.0 - t**3) ** 0.4


def mixture_entropy(t_first: float, atoms: FloatArray, mean_frequency: FloatArray, eta: FloatArray) -> float:
    """S/N of both species together at the temperature T = t_first T_c of species 1.

    atoms, mean_frequency (geometric mean, any unit), eta: (species,). k_B T_c is proportional to frequency x N^(1/3).
    """
    scale = mean_frequency * np.cbrt(atoms)
    t = t_first * scale[0] / scale
    each = [trapped_entropy(float(t[a]), float(eta[a])) for a in range(len(atoms))]
    return float(np.dot(each, atoms) / atoms.sum())
