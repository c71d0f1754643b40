"""Sums over bosonic Matsubara frequencies as short weighted sums, at any T ≥ 0.

In:  a temperature, the smallest and largest energy scale of the summand.
Out: frequencies ω_j ≥ 0 and weights with  T Σ_n f(iω_n) ≈ static f(0) + Σ_j weight_j Re f(iω_j).

The summand must be even in its real part, fall as 1/ω² and have its singularities on the axis of real energies. At
T > 0 the first terms are summed one by one and the rest by the Euler-Maclaurin formula, whose integral runs on a
logarithmic scale; at T = 0 the whole sum is an integral, by the trapezoidal rule in log ω.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

_EXPLICIT = 24
_STEP = 0.3
_PANEL = 2.5
_GAUSS = 12
_BEYOND = 2e3
# Central differences of first and third derivative at a whole number, 6th and 4th order.
_FIRST = np.array([-1, 9, -45, 0, 45, -9, 1]) / 60.0
_THIRD = np.array([1, -8, 13, 0, -13, 8, -1]) / 8.0


class Nodes(NamedTuple):
    """omega, weight: (N, node); static: weight of the frequency zero, (N,), which is T."""

    omega: Floats
    weight: Floats
    static: Floats


def nodes(T: Floats, lowest: Floats, highest: Floats) -> Nodes:
    """Return nodes for N temperatures, all 0 or all above 0.

    lowest, highest: energies (N,) between which the singularities of the summand lie; the lowest matters at T = 0 only.
    """
    T = np.asarray(T, float)
    return _cold(lowest, highest) if np.all(T == 0) else _warm(T, highest)


def _cold(lowest: Floats, highest: Floats) -> Nodes:
    begin, end = np.log(1e-3 * lowest), np.log(1e4 * highest)
    count = int(np.ceil((end - begin).max() / _STEP)) + 1
    x = begin[:, None] + _STEP * np.arange(count)
    omega = np.exp(x)
    weight = _STEP * omega
    # The rest of both geometric series: constant summand below, 1/ω² above.
    weight[:, [0, -1]] *= 1.0 + 1.0 / np.expm1(_STEP)
    return Nodes(omega, weight / np.pi, np.zeros(len(x)))


def _warm(T: Floats, highest: Floats) -> Nodes:
    n = np.arange(1, _EXPLICIT + 4)
    weight = np.where(n < _EXPLICIT, 1.0, 0.0)
    weight[_EXPLICIT - 1] = 0.5
    weight[-7:] += -_FIRST / 12.0 + _THIRD / 720.0
    start = 2.0 * np.pi * T * _EXPLICIT
    reach = np.maximum(np.log(_BEYOND * highest / start), 2.0)
    panels = int(np.ceil(reach.max() / _PANEL))
    g, w = np.polynomial.legendre.leggauss(_GAUSS)
    u = ((np.arange(panels)[:, None] + 0.5 * (g + 1.0)) / panels).ravel()
    v = np.tile(0.5 * w / panels, panels)
    smooth = np.exp(reach[:, None] * u)
    integral = v * reach[:, None] * smooth * _EXPLICIT
    end = np.exp(reach)
    # Beyond the end the summand is c/ω²: its integral is the end point times the last value.
    omega = np.concatenate([2 * np.pi * T[:, None] * n, start[:, None] * smooth, (start * end)[:, None]], 1)
    every = np.concatenate([np.broadcast_to(weight, (len(T), n.size)), integral, (_EXPLICIT * end)[:, None]], 1)
    return Nodes(omega, 2.0 * T[:, None] * every, T)
