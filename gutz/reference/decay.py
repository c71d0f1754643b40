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
    """How a correlator falls: exponent of the algebraic law, length of the exponential one, whether the first fits."""

    exponent: float
    decay_length: float
    algebraic: float


def law(values: Floats, sites: int, power: float = 0.5) -> Law:
    """Fit both laws to a correlator by span (1 .. sites - 1), and tell which fits better.

    The exponential law carries a factor r^-power: 1/2 for a gap, 0 for warmth. Neighbouring spans are averaged, since
    correlators may alternate. A correlator too small to fit is exponential, length nan.
    """
    span = np.arange(1, sites)
    used = (span >= _FIRST) & (span <= max(_LAST * sites, _FIRST + 3)) & (values > _FLOOR)
    if used.sum() < 4:
        return Law(np.nan, np.nan, 0.0)
    r, log_value = span[used].astype(float), np.log(values[used])
    eta, rest_algebraic = _line(_smooth(np.log(_conformal(span[used], sites))), _smooth(log_value))
    rate, rest_exponential = _line(_smooth(r), _smooth(log_value + power * np.log(r)))
    whole_window = used.sum() >= 0.8 * ((span >= _FIRST) & (span <= _LAST * sites)).sum()
    algebraic = rest_algebraic <= rest_exponential and whole_window
    length = -1 / rate if rate < 0 else np.inf
    return Law(float(eta), float(length), float(algebraic))


def luttinger(fluctuation: Floats, sites: int, filling: float) -> float:
    """K (or an entry of its matrix) from the (co)variance of atoms left of every cut, shape (sites - 1,).

    The cuts of the middle two thirds are fitted. The ends bring ripples of wavevector 2 pi filling: both sides of the
    fit are averaged over one of their periods.
    """
    share = abs(filling - round(filling))
    period = round(1 / share) if share > 0.05 else 2
    window = np.ones(period) / period
    x = np.arange(1, sites) + 0.5
    rise = np.convolve(np.log(np.sin(np.pi * x / (sites + 1))), window, mode="valid")
    smooth = np.convolve(fluctuation, window, mode="valid")
    middle = np.convolve(x, window, mode="valid")
    used = np.abs(middle - (sites + 1) / 2) <= sites / 3
    slope, _ = _line(rise[used], smooth[used])
    return float(2 * np.pi**2 * slope)


def _smooth(values: Floats) -> Floats:
    """Means of neighbours."""
    return (values[1:] + values[:-1]) / 2


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
