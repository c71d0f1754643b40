"""Laws of decay on an open chain: algebraic against exponential, and number fluctuations.

In:  a correlator between sites about the middle of a chain, by span; number fluctuations left of a cut.
Out: exponents and lengths with errors; Luttinger parameters (1 for hard-core bosons, infinite for free ones).

On an open chain the algebraic law <b+_i b_j> ~ |i - j|^(-eta), eta = 1/(2K), becomes F^eta with
    F = sqrt(d(2 x_i) d(2 x_j)) / (d(x_i - x_j) d(x_i + x_j)),   d(x) = (2 (L+1)/pi) |sin(pi x / (2 (L+1)))|
(Cazalilla, J. Phys. B 37, S1 (2004), from memory; checked against free fermions in the tests), and the variance of
the atoms left of a cut at l grows as (K / 2 pi^2) ln sin(pi l / (L+1)).
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

_FIRST, _LAST = 4, 0.6
"""Spans that are fitted: from _FIRST to _LAST of the chain; shorter ones know the lattice, longer ones the ends."""

_FLOOR = 1e-9
"""Correlators below this are rounding or cut-off weight, and are not fitted."""


class Law(NamedTuple):
    """How a correlator falls: the exponent of the algebraic law with its error, the length of the exponential one."""

    exponent: float
    exponent_error: float
    decay_length: float
    algebraic: float


def law(values: Floats, sites: int, power: float = 0.5) -> Law:
    """Fit both laws to a correlator by span (1 .. sites - 1), and tell which fits better.

    The exponential law carries a factor r^-power: 1/2 for a gap, 0 for warmth. The exponent's error is the change
    between the nearer and the farther half of the spans. A correlator too small to fit is exponential, length nan.
    """
    span = np.arange(1, sites)
    used = (span >= _FIRST) & (span <= max(_LAST * sites, _FIRST + 3)) & (values > _FLOOR)
    if used.sum() < 4:
        return Law(np.nan, np.nan, np.nan, 0.0)
    r, log_value = span[used].astype(float), np.log(values[used])
    log_f = np.log(_conformal(span[used], sites))
    eta, rest_algebraic = _line(log_f, log_value)
    rate, rest_exponential = _line(r, log_value + power * np.log(r))
    half = len(r) // 2
    error = abs(_line(log_f[:half], log_value[:half])[0] - _line(log_f[half:], log_value[half:])[0])
    whole_window = used.sum() >= 0.8 * ((span >= _FIRST) & (span <= _LAST * sites)).sum()
    algebraic = rest_algebraic <= rest_exponential and whole_window
    length = -1 / rate if rate < 0 else np.inf
    return Law(float(eta), float(error), float(length), float(algebraic))


def luttinger(fluctuation: Floats, sites: int) -> float:
    """K (or an entry of its matrix) from the (co)variance of atoms left of every cut, shape (sites - 1,)."""
    cut = np.arange(1, sites)
    # Neighbouring cuts are averaged: fluctuations alternate where the filling is one half.
    smooth = (fluctuation[1:] + fluctuation[:-1]) / 2
    middle = (cut[1:] + cut[:-1]) / 2
    used = (middle >= sites / 6) & (middle <= 5 * sites / 6)
    slope, _ = _line(np.log(np.sin(np.pi * (middle[used] + 0.5) / (sites + 1))), smooth[used])
    return float(2 * np.pi**2 * slope)


def _conformal(span: NDArray[np.int64], sites: int) -> Floats:
    x = ((sites - 1 - span) // 2).astype(np.float64) + 1
    y = x + span

    def chord(z: Floats) -> Floats:
        return 2 * (sites + 1) / np.pi * np.abs(np.sin(np.pi * z / (2 * (sites + 1))))

    result: Floats = np.sqrt(chord(2 * x) * chord(2 * y)) / (chord(y - x) * chord(x + y))
    return result


def _line(x: Floats, y: Floats) -> tuple[float, float]:
    """Slope of the least-squares line, and the rms of what it leaves."""
    if len(x) < 2:
        return np.nan, np.nan
    columns = np.stack([x, np.ones_like(x)], axis=1)
    solution = np.linalg.lstsq(columns, y, rcond=None)[0]
    return float(solution[0]), float(np.sqrt(np.mean((columns @ solution - y) ** 2)))
