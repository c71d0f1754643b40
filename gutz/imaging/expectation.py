"""The correlation A(d) that a picture should show: amplitude and widths of each peak.

In:  a `Camera` and a `Sample`.
Out: `Peak`s; A on a grid of lags. Pure jax functions of the numbers in both.

Pictures of two species are scaled to equal momentum first (lengths are those of species 1). With ℓ = 2πħt/(m d),

    A(d) = ζℓ ℓ² Σ_j|M_j|²/(N_1 N_2) K(d_x; s_x) K(d_y; s_y)

M = <b_1 b_2>, <b_1† b_2> or n_a. K is a pixel against a pixel, smeared by a Gaussian of rms s. Derived for
independent sites whose order is coherent across the sample; the Gaussian shape of a peak overestimates its height by
about 8 % for a uniform disk.
"""

from typing import Any, NamedTuple

import jax.numpy as jnp
import numpy as np
from jax.scipy.special import erf

from gutz.errors import InputError
from gutz.imaging.camera import Camera, reciprocal_length
from gutz.imaging.sample import CHANNELS, Sample

Array = Any

_COPIES = 12
"""Reciprocal lattice vectors summed to each side."""


class Peak(NamedTuple):
    """One peak of the correlation. volume: ∫A d²d in m²; x, y: rms width in the picture in m, point spread included.

    order_x, order_y: width of the order itself (inverse size), blur_x, blur_y: what a short flight adds.
    """

    volume: Array
    x: Array
    y: Array
    order_x: Array
    order_y: Array
    blur_x: Array
    blur_y: Array


class Geometry(NamedTuple):
    """Lengths in the picture, m. ell: one reciprocal lattice vector; wx, wy, wz: rms of the cloud per species, (2,).

    line: ζℓ, overlap along the light times ell; 1 for planes. copies: Σ_G of the overlap of the cloud with itself.
    scale: lengths of species 2 are multiplied by m_2/m_1.
    """

    ell: Array
    wx: Array
    wy: Array
    wz: Array
    line: Array
    copies: Array
    scale: Array


def across(camera: Camera) -> tuple[int, int]:
    """Lattice axes along x and y of the picture."""
    first, second = (axis for axis in range(3) if axis != camera.light)
    return first, second


def geometry(camera: Camera, sample: Sample) -> Geometry:
    """Lengths of the expansion, scaled to species 1."""
    ell = reciprocal_length(sample.mass[0], sample.spacing, camera.tof)
    # Gaussian Wannier functions: rms ħt/(√2 m a_ho), a_ho = d/(π s^¼); the same momentum for both species.
    width = ell * sample.depth**0.25 / (2.0 * np.sqrt(2.0))
    x, y = across(camera)
    wz = width[:, camera.light]
    j = jnp.arange(-_COPIES, _COPIES + 1) * ell
    joint = wz[0] ** 2 + wz[1] ** 2
    line = ell * jnp.exp(-(j**2) / (2.0 * joint)).sum() / jnp.sqrt(2.0 * np.pi * joint)
    copies = jnp.asarray(1.0)
    for w in (width[:, x], width[:, y]):
        copies = copies * jnp.exp(-(j**2) / (w[0] ** 2 + w[1] ** 2)).sum()
    return Geometry(
        ell, width[:, x], width[:, y], wz, jnp.asarray(1.0) if sample.planes else line, copies,
        sample.mass[1] / sample.mass[0],
    )  # fmt: skip


def check_far_field(camera: Camera, sample: Sample) -> None:
    """Refuse a flight so short that the picture shows the trap and no momenta. Raises InputError."""
    made = geometry(camera, sample)
    if camera.flight == "lens":
        return
    axes = across(camera)
    for axis, w in zip(axes, (made.wx, made.wy), strict=True):
        inside = max(float(sample.regions[str(a + 1)].size[axis]) for a in (0, 1)) * float(sample.spacing)
        if float(w.min()) < inside:
            needed = float(camera.tof) * inside / float(w.min())
            raise InputError(
                f"tof is {float(camera.tof) * 1e3:.3g} ms, too short for any far field: the cloud has grown to "
                f"{float(w.min()) * 1e6:.3g} um rms from {inside * 1e6:.3g} um in the trap; it must be at least "
                f'{needed * 1e3:.3g} ms, or flight "lens"'
            )


def order_peak(camera: Camera, sample: Sample, channel: str) -> Peak:
    """The peak of C_12 in a channel, "pair" (at k' = -k) or "antipair" (at k' = k)."""
    if channel not in CHANNELS:
        raise InputError(f'channel is "{channel}"; it must be "pair" or "antipair"')
    made = geometry(camera, sample)
    region = sample.regions[channel]
    sign = 1.0 if channel == "pair" else -1.0
    # Near field: the phase (m_1 ± m_2) r²/2ħt of the order tilts its momentum by as much as r.
    lever = (1.0 + sign * made.scale) if camera.flight == "free" else 0.0 * made.scale
    point = camera.resolution**2 * (1.0 + made.scale**2)
    shake = (1.0 + sign * made.scale) ** 2 * camera.jitter**2
    widths = []
    for axis in across(camera):
        own = made.ell / (2.0 * np.sqrt(2.0) * np.pi * region.size[axis])
        blur = jnp.abs(lever) * region.size2[axis] * sample.spacing
        widths.append((jnp.sqrt(own**2 + blur**2 + point + shake), own, blur))
    volume = made.line * made.ell**2 * region.total / (sample.atoms[0] * sample.atoms[1])
    (x, own_x, blur_x), (y, own_y, blur_y) = widths
    return Peak(volume, x, y, own_x, own_y, blur_x, blur_y)


def bunching_peak(camera: Camera, sample: Sample, species: int) -> Peak:
    """The peak of C_aa at k' = k + G, there with and without order; species 0 or 1."""
    made = geometry(camera, sample)
    region = sample.regions[str(species + 1)]
    size = camera.resolution * (made.scale if species else 1.0)
    widths = []
    for axis in across(camera):
        own = made.ell / (2.0 * np.sqrt(2.0) * np.pi * region.size[axis])
        widths.append((jnp.sqrt(own**2 + 2.0 * size**2), own))
    volume = made.line * made.ell**2 * region.total / sample.atoms[species] ** 2
    (x, own_x), (y, own_y) = widths
    none = jnp.zeros(())
    return Peak(volume, x, y, own_x, own_y, none, none)


def pixel_shape(distance: Array, pixel: Array, rms: Array) -> Array:
    """K: two pixels a distance apart, smeared by a Gaussian of this rms; integral 1, in 1/m."""
    s = jnp.sqrt(rms**2 + (1e-4 * pixel) ** 2)

    def integral(u: Array) -> Array:
        return 0.5 * u * erf(u / (np.sqrt(2.0) * s)) + s / np.sqrt(2.0 * np.pi) * jnp.exp(-(u**2) / (2.0 * s**2))

    whole = integral(distance + pixel) - 2.0 * integral(distance) + integral(distance - pixel)
    return whole / pixel**2


def height(camera: Camera, peak: Peak) -> Array:
    """A at the centre of a peak."""
    zero = jnp.zeros(())
    return peak.volume * pixel_shape(zero, camera.pixel, peak.x) * pixel_shape(zero, camera.pixel, peak.y)


def correlation(camera: Camera, peak: Peak, lags: Array) -> Array:
    """A(d) on a square of lags, in pixels from the centre of the peak: (lag along y, lag along x)."""
    d = jnp.asarray(lags) * camera.pixel
    return peak.volume * jnp.outer(pixel_shape(d, camera.pixel, peak.y), pixel_shape(d, camera.pixel, peak.x))


def order_ratio(camera: Camera, sample: Sample, channel: str) -> Array:
    """A_12 over the mean bunching A_aa(k' = k + G): free of calibration, 0 without order."""
    bunching = [height(camera, bunching_peak(camera, sample, a)) for a in (0, 1)]
    return height(camera, order_peak(camera, sample, channel)) / jnp.sqrt(bunching[0] * bunching[1])
