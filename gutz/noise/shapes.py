"""Shapes of order peaks: by dimension, temperature and cloud; and what the picture does to them.

In:  how correlations fall off (from a solution, or given); cloud profiles; momenta.
Out: line shapes P(q) and their widths, the Wannier envelope, blurred lines.

    P(q) = (1/Ns) Σ_r e^{iqr} g(r) × overlap(r),   overlap(r) = Σ_j A_j A_j+r / Σ_j A_j² of the cloud with itself

    g = 1 (3D, and 2D at T = 0), r^-η (2D at T > 0, 1D at T = 0), exp(-r/ξ) (1D at T > 0), with the exponents and
    lengths of `gutz.order`.
"""

from dataclasses import dataclass
from enum import Enum
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gutz.errors import InputError
from gutz.solution import Solution

Floats = NDArray[np.float64]

CHANNELS = ("1", "2", "pair", "antipair")
"""Order parameters <b_1>, <b_2>, <b_1 b_2>, <b_1† b_2>."""


class Reach(Enum):
    """How correlations of an order parameter fall off."""

    LONG = "long"
    POWER = "power"
    EXPONENTIAL = "exponential"


@dataclass(frozen=True)
class Decay:
    """Fall-off of one channel. value: exponent of r^-value (POWER), length in sites (EXPONENTIAL), 0 (LONG)."""

    reach: Reach
    value: float

    @classmethod
    def everywhere(cls) -> "Decay":
        """No decay at all."""
        return cls(Reach.LONG, 0.0)

    def at(self, r: Floats) -> Floats:
        """g(r) for distances r in sites; 1 at r = 0, and at r = 1 for a power."""
        r = np.asarray(r, float)
        if self.reach is Reach.LONG:
            return np.ones_like(r)
        if self.reach is Reach.POWER:
            return np.maximum(r, 1.0) ** -self.value
        return np.exp(-r / self.value) if self.value > 0 else (r == 0).astype(float)


def decay(solution: Solution, point: tuple[int, ...], channel: str) -> Decay:
    """Fall-off of a channel at one point of a solution. Raises InputError for a channel that is not there."""
    species = solution.mixture.species
    known = CHANNELS if species == 2 else CHANNELS[:1]
    if channel not in known:
        raise InputError(f"channel is {channel!r}; for {species} species it must be one of: {', '.join(known)}")
    ending = "" if channel.isdigit() else f"_{channel}"
    at = point + ((int(channel) - 1,) if channel.isdigit() else ())
    exponent = float(np.asarray(solution.outputs[f"exponent{ending}"])[at])
    length = float(np.asarray(solution.outputs[f"coherence_length{ending}"])[at])
    if exponent == 0.0:
        return Decay(Reach.LONG, 0.0)
    if np.isfinite(exponent):
        return Decay(Reach.POWER, exponent)
    return Decay(Reach.EXPONENTIAL, length)


def line_shape(decay: Decay, cloud: Any, refine: int = 4) -> tuple[Floats, Floats]:
    """P(q) along x for a cloud: momenta q (-π to π, in order) and values; Σ_q P = 1 on the unrefined grid.

    cloud: amplitude of the order on every site, (L_x, ..), not negative; a box of ones for a uniform sample. refine:
    momenta per 2π/L. The other components of q are 0. Raises InputError for an empty or negative cloud.
    """
    amplitude = np.asarray(cloud, float)
    if amplitude.ndim not in (1, 2, 3) or amplitude.size == 0 or not np.all(np.isfinite(amplitude)):
        raise InputError("cloud must be an array of finite numbers with one to three axes")
    if np.any(amplitude < 0) or not np.any(amplitude > 0):
        raise InputError("cloud must not be negative anywhere, nor empty")
    padded = tuple(2 * length for length in amplitude.shape)
    axes = tuple(range(amplitude.ndim))
    overlap = np.fft.ifftn(np.abs(np.fft.fftn(amplitude, padded, axes)) ** 2).real
    steps = [np.fft.fftfreq(length) * length for length in padded]
    distance = np.sqrt(sum(s**2 for s in np.meshgrid(*steps, indexing="ij")))
    weighted = overlap / overlap.flat[0] * decay.at(distance)
    along = weighted.sum(axis=axes[1:]) if amplitude.ndim > 1 else weighted
    length = amplitude.shape[0]
    q = 2.0 * np.pi * (np.arange(refine * length) / (refine * length) - 0.5)
    return q, np.cos(np.outer(q, steps[0])) @ along / amplitude.size


def width(q: Floats, values: Floats) -> float:
    """Full width at half maximum of a line with its top inside, by linear interpolation; nan if it does not fall."""
    top = int(np.argmax(values))
    half = 0.5 * values[top]
    out = 0.0
    for side in (values[top:], values[top::-1]):
        below = np.flatnonzero(side < half)
        if not below.size:
            return float("nan")
        i = int(below[0])
        out += (i - 1 + (side[i - 1] - half) / (side[i - 1] - side[i])) * float(q[1] - q[0])
    return out


def envelope(k: Floats, depth: float, zones: int = 8) -> Floats:
    """Wannier envelope |w(k)|² per direction, (..,), for k in 1/lattice constant, any zone.

    depth: lattice depth in recoil energies, harmonic approximation of the wells (a_ho = d/(π depth^1/4)). Normalised so
    that the sum over all copies k + 2π m is 1. Raises InputError for a depth that is not positive.
    """
    if not (np.isfinite(depth) and depth > 0):
        raise InputError(f"depth is {depth}; it must be greater than 0, in recoil energies")
    size = 1.0 / (np.pi * depth**0.25)

    def gauss(x: Floats) -> Floats:
        return np.exp(-((x * size) ** 2))

    k = np.asarray(k, float)
    copies = 2.0 * np.pi * np.arange(-zones, zones + 1)
    first = np.mod(k + np.pi, 2.0 * np.pi) - np.pi
    return gauss(k) / gauss(first[..., None] + copies).sum(-1)


def blurred(values: Floats, axis: int, spread: float) -> Floats:
    """Periodic line or map (a full turn along `axis`) blurred by a Gaussian of rms `spread` in 1/lattice constant.

    For the pair channel in a picture after a time of flight too short for the far field, spread includes twice the size
    of the cloud; the channels at k' = k do not suffer from it.
    """
    if not (np.isfinite(spread) and spread >= 0):
        raise InputError(f"spread is {spread}; it must be at least 0, in 1/lattice constant")
    length = values.shape[axis]
    order = np.fft.fftfreq(length) * length
    shape = [1] * values.ndim
    shape[axis] = length
    filtered = np.fft.fft(values, axis=axis) * np.exp(-0.5 * (spread * order.reshape(shape)) ** 2)
    return np.fft.ifft(filtered, axis=axis).real
