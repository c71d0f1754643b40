"""Luttinger parameters from what a chain shows: momentum distributions and noise peaks.

In:  n(k) or a channel of a noise map of a ring, on its own grid.
Out: `LuttingerFit`: exponent and parameter with a spread, and the range they were read from.

The Fourier transform of n(k), or of a channel over Q, is the correlator g(r) of <b>, <b_1 b_2> or <b_1† b_2>; in a
Luttinger liquid of length L it falls as [(L/π) sin(π r/L)]^-η with η = 1/(2K) (Haldane, Phys. Rev. Lett. 47, 1840
(1981)). Short rings have corrections of every kind: the spread over fit ranges is part of the answer, and a map
made by mean field has no Luttinger exponent of its own; there K = π sqrt(ρκ) from the solution is the better number.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from gutz.errors import InputError

Floats = NDArray[np.float64]

SHORTEST = 12
"""Sites a ring needs before an exponent is read from it."""


class LuttingerFit(NamedTuple):
    """K = 1/(2 exponent). spread: half the range of the exponent over fit ranges. first, last: distances of the fit.

    decays: False where the correlator does not fall as a power (long-range order, or a gap): K is then nan.
    """

    exponent: float
    K: float
    spread: float
    first: int
    last: int
    decays: bool


def correlator(distribution: Floats) -> Floats:
    """g(r), r = 0..L-1, from a distribution over the L momenta of a ring: n(k), or a channel over Q (times L)."""
    values = np.asarray(distribution, float)
    if values.ndim != 1 or values.size < SHORTEST:
        raise InputError(f"distribution has shape {values.shape}; it must be one ring of at least {SHORTEST} momenta")
    return np.fft.ifft(values).real


def fit(g: Floats, first: int = 2) -> LuttingerFit:
    """Fit the exponent of a correlator on a ring, (L,). first: nearest distance used.

    Raises InputError where fewer than three distances remain.
    """
    g = np.asarray(g, float)
    length = g.size
    last = length // 2
    if g.ndim != 1 or length < SHORTEST or not 1 <= first <= last - 3:
        raise InputError(f"first is {first} on a ring of {length} sites; it must leave at least three distances")
    exponents = []
    for begin in (first, first + 1, first + 2):
        r = np.arange(begin, last + 1)
        if r.size < 3 or np.any(g[r] <= 0):
            break
        chord = length / np.pi * np.sin(np.pi * r / length)
        exponents.append(-float(np.polyfit(np.log(chord), np.log(g[r]), 1)[0]))
    if not exponents:
        return LuttingerFit(np.nan, np.nan, np.nan, first, last, False)
    spread = 0.5 * (max(exponents) - min(exponents))
    decays = exponents[0] > 1e-3
    K = 1.0 / (2.0 * exponents[0]) if decays else np.nan
    return LuttingerFit(exponents[0], K, spread, first, last, decays)
