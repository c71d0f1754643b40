"""Noise of the correlation in one shot, and the number of shots.

In:  a `Camera` and a `Sample`.
Out: `Signal`: amplitude, signal-to-noise ratio of a shot, shots needed. Pure jax functions.

Pixels of one picture are taken as Gaussian with

    Cov_a(p, p+q) = μ_a(p) K_n[q] + μ_a(p) μ_a(p+q) A_aa[q] + v_a δ_q

(atoms, bunching, photons), from which the covariance of A at two lags follows by Wick's theorem. Every term factorises
into x and y, so that nothing larger than lags x lags of one axis is ever formed. Two measures of a peak are compared:
its highest pixel, and a template of its shape with the mean removed, which background does not touch. A matched filter
is not offered: with the point spread wider than the peak it would deconvolve, and promise too much.
"""

from collections.abc import Iterator
from typing import Any, NamedTuple

import jax.numpy as jnp
import numpy as np

from gutz.imaging.camera import Camera
from gutz.imaging.expectation import Geometry, Peak, bunching_peak, geometry, height, order_peak, pixel_shape
from gutz.imaging.sample import Sample

Array = Any

REACH = 6.0
"""Lags considered on each side, in rms widths of the peak."""

FEWEST_LAGS, MOST_LAGS = 4, 150
_NODES = 48
_EDGE = 5.0


class Signal(NamedTuple):
    """What one shot gives. amplitude: A at the centre. noise: its standard deviation. snr_pixel, snr_template: signal
    over noise of the two measures; snr: the better one."""

    amplitude: Array
    noise: Array
    snr_pixel: Array
    snr_template: Array
    snr: Array


class Moments(NamedTuple):
    """Sums over the pixels: S_ij = Σ W² μ_1^i μ_2^j, the mean S0 = Σ W μ_1 μ_2, and the photon terms."""

    s0: Array
    s11: Array
    s12: Array
    s21: Array
    s22: Array
    mixed: Array
    white: Array


def lags_needed(camera: Camera, *peaks: Peak) -> int:
    """Lags to each side that hold the peaks; numbers only."""
    widest = max(float(max(p.x, p.y)) for p in peaks)
    return int(np.clip(np.ceil(REACH * widest / float(camera.pixel)), FEWEST_LAGS, MOST_LAGS))


def counts(camera: Camera, sample: Sample, made: Geometry, x: Array, y: Array) -> Array:
    """Mean detected atoms per pixel, (2, ...), at places in the picture."""
    shape = [
        jnp.exp(-(x**2) / (2.0 * made.wx[a] ** 2) - y**2 / (2.0 * made.wy[a] ** 2)) / (made.wx[a] * made.wy[a])
        for a in (0, 1)
    ]
    per = camera.efficiency * sample.atoms * camera.pixel**2 / (2.0 * np.pi)
    return jnp.stack([per[a] * shape[a] for a in (0, 1)])


def photon_variance(camera: Camera, mean: Array) -> Array:
    """Variance of a pixel from photons, in atoms², (a²/σ_0)² (1 + e^OD)/n; 0 for counting."""
    if camera.detection == "counting":
        return jnp.zeros_like(mean)
    per = camera.pixel**2 / camera.cross_section
    return per**2 * (1.0 + jnp.exp(mean / per)) / camera.photons


def moments(camera: Camera, sample: Sample, made: Geometry) -> Moments:
    """Sums over the pixels of the picture, by quadrature over a quarter of it; pixels weighted with W."""
    nodes, weights = np.polynomial.legendre.leggauss(_NODES)
    half = 0.5 * camera.picture
    x_edge = jnp.minimum(_EDGE * made.wx.max(), half)
    y_edge = jnp.minimum(_EDGE * made.wy.max(), half)
    x, y = x_edge * 0.5 * (nodes + 1.0), y_edge * 0.5 * (nodes + 1.0)
    cell = jnp.asarray(np.outer(weights, weights)) * x_edge * y_edge / camera.pixel**2
    mean = counts(camera, sample, made, x[:, None], y[None, :])
    v = photon_variance(camera, mean)
    weight = mean[0] * mean[1] / ((mean[0] + v[0]) * (mean[1] + v[1]))

    def over(values: Array) -> Array:
        return (cell * values).sum()

    w2 = weight**2
    return Moments(
        s0=over(weight * mean[0] * mean[1]),
        s11=over(w2 * mean[0] * mean[1]),
        s12=over(w2 * mean[0] * mean[1] ** 2),
        s21=over(w2 * mean[0] ** 2 * mean[1]),
        s22=over(w2 * mean[0] ** 2 * mean[1] ** 2),
        mixed=over(w2 * (mean[0] * v[1] + mean[1] * v[0])),
        white=over(w2 * v[0] * v[1]),
    )


class _Term(NamedTuple):
    """A part of the covariance, weight x X(d, d') Y(d, d'); crossed: a function of d + d' and not of d - d'."""

    weight: Array
    x: Array
    y: Array
    crossed: bool


def _terms(camera: Camera, sample: Sample, cross: Peak, half: int) -> Iterator[_Term]:
    """All parts, each with its rows over D = -2 half .. 2 half."""
    made = geometry(camera, sample)
    s = moments(camera, sample, made)
    far = 2 * half
    q = jnp.arange(-far, far + 1) * camera.pixel
    delta = jnp.zeros(2 * far + 1).at[far].set(1.0)
    smear = np.sqrt(2.0) * camera.resolution

    def rows(peak: Peak) -> tuple[Array, Array]:
        return pixel_shape(q, camera.pixel, peak.x), pixel_shape(q, camera.pixel, peak.y)

    def joined(f: tuple[Array, Array], g: tuple[Array, Array]) -> tuple[Array, Array]:
        return jnp.convolve(f[0], g[0], mode="same"), jnp.convolve(f[1], g[1], mode="same")

    own = []
    for scale in (1.0, made.scale):
        row = camera.pixel * pixel_shape(q, camera.pixel, smear * scale) if camera.detection == "absorption" else delta
        own.append((row, row))
    bunch = [bunching_peak(camera, sample, a) for a in (0, 1)]
    b = [rows(peak) for peak in bunch]
    v = [peak.volume for peak in bunch]
    yield _Term(s.s11, *joined(own[0], own[1]), False)
    yield _Term(s.s12 * v[1], *joined(own[0], b[1]), False)
    yield _Term(s.s21 * v[0], *joined(b[0], own[1]), False)
    yield _Term(made.copies * s.s22 * v[0] * v[1], *joined(b[0], b[1]), False)
    yield _Term(s.mixed, own[0][0], own[0][1], False)
    yield _Term(s.white, delta, delta, False)
    c = rows(cross)
    yield _Term(made.copies * s.s22 * cross.volume**2, *joined(c, c), True)


def signal(camera: Camera, sample: Sample, channel: str, half: int) -> Signal:
    """Amplitude and noise of one shot in a channel. half: lags to each side, `lags_needed`."""
    return signal_of(camera, sample, order_peak(camera, sample, channel), half)


def signal_of(camera: Camera, sample: Sample, cross: Peak, half: int) -> Signal:
    """As `signal`, for a given peak of the correlation between the species."""
    made = geometry(camera, sample)
    s0 = moments(camera, sample, made).s0
    d = np.arange(-half, half + 1)
    difference, total = d[:, None] - d[None, :] + 2 * half, d[:, None] + d[None, :] + 2 * half
    lag = d * camera.pixel
    kx, ky = pixel_shape(lag, camera.pixel, cross.x), pixel_shape(lag, camera.pixel, cross.y)
    one = jnp.ones_like(kx)
    mean = kx.mean() * ky.mean()
    at_peak = template = jnp.zeros(())
    for term in _terms(camera, sample, cross, half):
        index = total if term.crossed else difference
        X, Y = term.x[index], term.y[index]
        at_peak = at_peak + term.weight * term.x[2 * half] * term.y[2 * half]
        whole = (kx @ X @ kx) * (ky @ Y @ ky) - 2.0 * mean * (kx @ X @ one) * (ky @ Y @ one)
        template = template + term.weight * (whole + mean**2 * (one @ X @ one) * (one @ Y @ one))
    spread = 1.0 + camera.fluctuation**2
    amplitude = height(camera, cross)
    noise = jnp.sqrt(spread * at_peak) / s0
    gain = cross.volume * ((kx @ kx) * (ky @ ky) - mean * kx.sum() * ky.sum())
    by_pixel = amplitude / noise
    by_template = gain * s0 / jnp.sqrt(spread * template)
    return Signal(amplitude, noise, by_pixel, by_template, jnp.maximum(by_pixel, by_template))


def shots_for(camera: Camera, snr: Array, significance: float) -> Array:
    """Shots for a peak of so many standard deviations; inf without signal."""
    return (significance * camera.technical / snr) ** 2
