"""The estimator: stacks of pictures in, the correlation map with errors and significance out.

In:  one or two arrays of pictures (shot, y, x), from a laboratory or from `gutz.imaging.shots`.
Out: `Estimate`: A(d) on a square of lags, bootstrap errors, the two measures of a peak.

    X(d) = Σ_p W [m_1(p) - μ_1(p)] [m_2(p̄) - μ_2(p̄)],   A(d) = <X> N/(N-1) / Σ_p W μ_1(p) μ_2(p̄)

p̄ = p + d ("antipair": momenta k and k + d) or 2c - p + d ("pair": k and -k + d, c the centre). Every picture is first
scaled to the mean number of its species, so that fluctuating numbers do not show. W = Π_a μ_a/(μ_a + v_a) keeps pixels
without atoms from adding noise.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from scipy import fft

from gutz.errors import InputError
from gutz.imaging.sample import CHANNELS

Floats = NDArray[np.float64]

RESAMPLES = 2000
"""Bootstrap samples of the shots."""

FEWEST_SHOTS = 3


@dataclass(frozen=True, eq=False)
class Estimate:
    """What a stack shows. Lags in pixels along y and x from the reciprocal vector looked at.

    correlation, error: A(d) and its bootstrap standard error, (lag y, lag x). peak: A at the middle above its
    surroundings, with peak_error; template: amplitude of the template in A, with template_error, nan without template.
    significance: the larger of the two in standard errors. shots: pictures used. per_shot: of the better measure, over
    the square root of the shots.
    """

    lags: NDArray[np.int64]
    correlation: Floats
    error: Floats
    peak: float
    peak_error: float
    template: float
    template_error: float
    shots: int

    @property
    def significance(self) -> float:
        """Standard errors by which the peak stands out; the better measure."""
        return float(np.nanmax([self.peak / self.peak_error, self.template / self.template_error]))

    def to_dataset(self) -> xr.Dataset:
        """Labelled, with the numbers as attributes."""
        words = {"units": "1", "long_name": "Correlation of the pictures"}
        lag = {"units": "pixel", "long_name": "Lag"}
        return xr.Dataset(
            {
                "correlation": (("lag_y", "lag_x"), self.correlation, words),
                "error": (("lag_y", "lag_x"), self.error, {"units": "1", "long_name": "Bootstrap standard error"}),
            },
            coords={"lag_y": ("lag_y", self.lags, lag), "lag_x": ("lag_x", self.lags, lag)},
            attrs={
                "peak": self.peak, "peak_error": self.peak_error, "template": self.template,
                "template_error": self.template_error, "significance": self.significance, "shots": self.shots,
            },
        )  # fmt: skip


def estimate(
    first: Any,
    second: Any = None,
    channel: str = "antipair",
    *,
    half: int = 12,
    centre: tuple[float, float] | None = None,
    offset: tuple[int, int] = (0, 0),
    template: Any = None,
    white: tuple[float, float] = (0.0, 0.0),
    normalise: bool = True,
    recentre: bool = False,
    seed: int = 0,
) -> Estimate:
    """Correlate two stacks of pictures (one with itself where `second` is left out).

    first, second: counts, (shot, y, x); any scale, since only ratios enter. channel: "pair" (k' = -k) or "antipair"
    (k' = k). half: lags to each side. centre: of the momenta in pixels (x, y), half pixels allowed; default the centre
    of mass of the mean picture to the nearest half. offset: lag (x, y) of the middle, to look at a reciprocal vector.
    template: shape expected, (2 half + 1, 2 half + 1). white: variance of a pixel without atoms, per species.
    recentre: find the centre of every picture by itself, for pairs in a shaking picture.
    Raises InputError for stacks that do not fit, are too few, or hold nothing.
    """
    one = _stack("first", first)
    two = one if second is None else _stack("second", second)
    if channel not in CHANNELS:
        raise InputError(f'channel is "{channel}"; it must be "pair" or "antipair"')
    if one.shape != two.shape:
        raise InputError(f"second has the shape {two.shape}; it must be that of first, {one.shape}")
    count, *sides = one.shape
    reach = half + max(abs(o) for o in offset)
    if half < 1 or 2 * reach >= min(sides):
        raise InputError(f"half is {half}; it must be at least 1, and the lags must fit into {min(sides)} pixels")
    if template is not None and np.shape(template) != (2 * half + 1, 2 * half + 1):
        raise InputError(f"template has the shape {np.shape(template)}; it must be {(2 * half + 1,) * 2}")
    middles = _centres(one, two, centre, recentre) if channel == "pair" else None
    values, bottom = _products(one, two, middles, half, offset, white, normalise)
    return _measured(values, bottom, count, half, template, seed)


def _stack(name: str, given: Any) -> Floats:
    stack = np.asarray(given)
    if stack.ndim != 3 or not np.issubdtype(stack.dtype, np.number) or np.iscomplexobj(stack):
        raise InputError(f"{name} has the shape {stack.shape}; it must hold real numbers as (shot, y, x)")
    if len(stack) < FEWEST_SHOTS:
        raise InputError(f"{name} holds {len(stack)} shots; at least {FEWEST_SHOTS} are needed")
    if not np.all(np.isfinite(stack)):
        bad = int(np.count_nonzero(~np.isfinite(stack)))
        raise InputError(f"{name} holds {bad} pixels that are not finite; mask them with 0 in every shot")
    if np.any(stack.sum((1, 2)) <= 0):
        empty = int(np.flatnonzero(stack.sum((1, 2)) <= 0)[0])
        raise InputError(f"{name} has no atoms in shot {empty}; leave such shots out")
    return stack


def _centres(one: Floats, two: Floats, centre: tuple[float, float] | None, recentre: bool) -> NDArray[np.int64]:
    """Twice the centre of every shot, (shot, 2) as (x, y), whole numbers."""
    _, ny, nx = one.shape
    if centre is not None and not recentre:
        return np.tile(np.round(2.0 * np.asarray(centre, float)).astype(np.int64), (len(one), 1))
    both = one.astype(float) + two
    total = both.sum((1, 2))
    x, y = both.sum(1) @ np.arange(nx) / total, both.sum(2) @ np.arange(ny) / total
    if not recentre:
        x, y = np.full(len(one), x.mean()), np.full(len(one), y.mean())
    return np.round(2.0 * np.stack([x, y], -1)).astype(np.int64)


def _products(
    one: Floats, two: Floats, middles: NDArray[np.int64] | None, half: int, offset: tuple[int, int],
    white: tuple[float, float], normalise: bool,
) -> tuple[Floats, Floats]:  # fmt: skip
    """X of every shot, (shot, lag, lag), and Σ W μ_1 μ_2, (lag, lag)."""
    means, factors = [], []
    for stack in (one, two):
        number = stack.sum((1, 2), dtype=float)
        factor = number.mean() / number if normalise else np.ones(len(stack))
        factors.append(factor)
        means.append(np.einsum("s,syx->yx", factor, stack.astype(np.float64, copy=False)) / len(stack))
    weights = [np.where(m > 0, m / np.maximum(m + v, 1e-300), 0.0) for m, v in zip(means, white, strict=True)]
    # Inversion needs a whole convolution; lags only room for themselves.
    room = 2 * half + 2 * max(abs(o) for o in offset) + 1
    shape = tuple(fft.next_fast_len(n + (room if middles is None else n), real=True) for n in means[0].shape)
    lags = np.arange(-half, half + 1)
    rows = np.ix_(np.mod(lags + offset[1], shape[0]), np.mod(lags + offset[0], shape[1]))

    def correlate(a: Floats, b: Floats, middle: NDArray[np.int64] | None) -> Floats:
        """Σ_p a(p) b(p + d), or Σ_p a(p) b(2c - p + d)."""
        fa, fb = fft.rfft2(a, s=shape), fft.rfft2(b, s=shape)
        if middle is None:
            return np.asarray(fft.irfft2(np.conj(fa) * fb, s=shape)[rows])
        whole = fft.irfft2(fa * fb, s=shape)
        y, x = np.mod(middle[1] + offset[1] + lags, shape[0]), np.mod(middle[0] + offset[0] + lags, shape[1])
        return np.asarray(whole[np.ix_(y, x)])

    middle = None if middles is None else np.round(middles.mean(0)).astype(np.int64)
    bottom = correlate(weights[0] * means[0], weights[1] * means[1], middle)
    values = np.empty((len(one), lags.size, lags.size))
    for s in range(len(one)):
        a = weights[0] * (factors[0][s] * one[s] - means[0])
        b = weights[1] * (factors[1][s] * two[s] - means[1])
        values[s] = correlate(a, b, None if middles is None else middles[s])
    return values, bottom


def _measured(values: Floats, bottom: Floats, count: int, half: int, template: Any, seed: int) -> Estimate:
    """Means, bootstrap over shots, and the two measures of a peak."""
    scaled = values * (count / (count - 1.0)) / bottom
    correlation = scaled.mean(0)
    rng = np.random.default_rng(seed)
    error = np.zeros_like(correlation)
    ring = _ring(half)
    measures = [scaled[:, half, half] - scaled[:, ring].mean(1)]
    if template is not None:
        shape = np.asarray(template, float)
        shape = shape - shape.mean()
        if not np.any(shape != 0) or not np.all(np.isfinite(shape)):
            raise InputError("template is flat or not finite; it must have a peak")
        measures.append(np.einsum("syx,yx->s", scaled, shape) / (shape**2).sum())
    table = np.stack(measures)
    picked = rng.multinomial(count, np.full(count, 1.0 / count), size=RESAMPLES) / count
    spread = (picked @ table.T).std(0, ddof=1)
    error = (picked @ scaled.reshape(count, -1)).std(0, ddof=1).reshape(correlation.shape)
    lags = np.arange(-half, half + 1)
    means = table.mean(1)
    fitted = (float(means[1]), float(spread[1])) if template is not None else (np.nan, np.nan)
    return Estimate(lags, correlation, error, float(means[0]), float(spread[0]), *fitted, count)


def _ring(half: int) -> NDArray[np.bool_]:
    """The lags at the edge of the square, which stand for the surroundings of a peak."""
    lags = np.arange(-half, half + 1)
    return np.maximum(np.abs(lags)[:, None], np.abs(lags)[None, :]) == half
