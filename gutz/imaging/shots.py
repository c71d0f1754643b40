"""Synthetic shots: stacks of pictures that hold the predicted correlations, by two honest samplings.

In:  a `Camera`, a `Sample`, a channel, a seed.
Out: two stacks of counts, (shot, y, x), the same for equal seeds.

"pairs": atoms fall independently, but for Σ|M|² pairs whose momenta are tied. Fast; no bunching of one species.
"fields": every site holds complex Gaussian amplitudes of variance n and cross-correlation M; intensities summed
along the light, then atoms drawn (Poisson). Bunching of each species comes out by itself. Needs |M|² <= n_1 n_2.
Amplitudes of the two agree with `expectation` where the cloud covers a zone (rms above half of ell).
"""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from scipy import fft

from gutz.errors import InputError, ResourceError
from gutz.imaging.camera import Camera
from gutz.imaging.expectation import across, geometry, order_peak
from gutz.imaging.sample import CHANNELS, Sample

Floats = NDArray[np.float64]
Counts = NDArray[np.float32]

MOST_BYTES = 2_000_000_000
"""Largest stack made at once (both species, 4 bytes a pixel)."""

SAMPLINGS = ("pairs", "fields")
_FINEST = 4


class Stack(NamedTuple):
    """Pictures of the two species, (shot, y, x) detected atoms per pixel; pixel: m; centre: of the momenta, in pixels
    (x, y). Species 2 is scaled to the momenta of species 1."""

    first: Counts
    second: Counts
    pixel: float
    centre: tuple[float, float]


@dataclass(frozen=True)
class Screen:
    """Raster of a picture. side: pixels; fine: parts of a pixel along each side; pixel: m."""

    side: int
    fine: int
    pixel: float

    @property
    def points(self) -> int:
        """Fine points along a side."""
        return self.side * self.fine


def shots(
    camera: Camera, sample: Sample, channel: str, count: int, side: int = 256, seed: int = 0, sampling: str = "pairs"
) -> Stack:
    """Make `count` pictures of side x side pixels. Same seed, same pictures.

    Raises InputError for arguments without sense or a correlation the sampling cannot hold, ResourceError for stacks
    above `MOST_BYTES`.
    """
    _check(camera, sample, channel, count, side, sampling)
    rng = np.random.default_rng(seed)
    pair = channel == "pair"
    screen = _screen(camera, sample, side, sampling)
    stack = np.empty((2, count, side, side), np.float32)
    camera = camera.with_(pixel=screen.pixel)
    photons = _photon_noise(camera, sample, screen)
    scale = float(geometry(camera, sample).scale)
    resolution = (float(camera.resolution), float(camera.resolution) * scale)
    source = _pairs if sampling == "pairs" else _fields
    for i, pictures in enumerate(source(camera, sample, pair, screen, count, rng)):
        for a in (0, 1):
            picture = _recorded(camera, pictures[a], screen, resolution[a])
            if photons is not None:
                picture = picture + photons[a] * rng.standard_normal((side, side))
            stack[a, i] = picture
    middle = (side - 1) / 2.0
    return Stack(stack[0], stack[1], screen.pixel, (middle, middle))


def _check(camera: Camera, sample: Sample, channel: str, count: int, side: int, sampling: str) -> None:
    if channel not in CHANNELS:
        raise InputError(f'channel is "{channel}"; it must be "pair" or "antipair"')
    if sampling not in SAMPLINGS:
        raise InputError(f'sampling is "{sampling}"; it must be "pairs" or "fields"')
    if count < 1:
        raise InputError(f"shots is {count}; it must be at least 1")
    if not 8 <= side <= 4096:
        raise InputError(f"side is {side} pixels; it must be from 8 to 4096")
    if 8 * count * side * side > MOST_BYTES:
        raise ResourceError(
            f"{count} shots of 2 x {side} x {side} pixels take {8 * count * side * side / 1e9:.3g} GB; at most "
            f"{MOST_BYTES / 1e9:g} GB are made at once: fewer shots, or several seeds"
        )
    tied = float(sample.regions[channel].total)
    if sampling == "pairs" and tied > 0.999 * float(np.min(sample.atoms)):
        raise InputError(
            f'sampling is "pairs", which holds at most one tied pair per atom; the order asks for {tied:.3g} pairs '
            f'among {float(np.min(sample.atoms)):.3g} atoms: use "fields"'
        )
    height = float(sample.peak(channel))
    if sampling == "fields" and height > 1.0 + 1e-9:
        raise InputError(
            f'sampling is "fields", which holds |M|² up to n_1 n_2; the order asks for {height:.3g} of it: use "pairs"'
        )


def _screen(camera: Camera, sample: Sample, side: int, sampling: str) -> Screen:
    """Parts of a pixel: fine enough for the point spread (pairs) and for the peak itself (fields)."""
    pixel, spread = float(camera.pixel), float(camera.resolution)
    smeared = camera.detection == "absorption" and spread > 0
    fine = int(np.clip(np.ceil(pixel / (spread * np.sqrt(3.0))), 1, _FINEST)) if smeared else 1
    if smeared:
        fine = max(fine, 2)
    if sampling == "pairs":
        return Screen(side, fine, pixel)
    ell = float(geometry(camera, sample).ell)
    fine = max(fine, 2)
    # A whole number of fine points per reciprocal vector: the transform then is the picture.
    points = max(1, round(ell * fine / pixel))
    return Screen(side, fine, fine * ell / points)


def _recorded(camera: Camera, fine: Floats, screen: Screen, resolution: float) -> Floats:
    """Atoms on the fine raster to counts per pixel: the point spread in absorption, then the sum over a pixel."""
    if screen.fine == 1:
        return fine
    if camera.detection == "absorption":
        fine = _smeared(fine, screen, resolution)
    side, parts = screen.side, screen.fine
    return np.asarray(fine.reshape(side, parts, side, parts).sum((1, 3)))


def _smeared(fine: Floats, screen: Screen, rms: float) -> Floats:
    """Convolved with a Gaussian; the width of a fine point counts as part of it."""
    step = screen.pixel / screen.fine
    narrow = np.sqrt(max(rms**2 - step**2 / 12.0, 0.0)) / step
    n = fine.shape[0]
    x, y = (np.exp(-2.0 * (np.pi * narrow * f) ** 2) for f in (fft.rfftfreq(n), fft.fftfreq(n)))
    spectrum = fft.rfft2(fine, workers=2)
    spectrum *= x[None, :]
    spectrum *= y[:, None]
    return np.asarray(fft.irfft2(spectrum, s=fine.shape, workers=2))


def _photon_noise(camera: Camera, sample: Sample, screen: Screen) -> Floats | None:
    """Standard deviation of every pixel from photons, (2, y, x); None without."""
    if camera.detection == "counting" or not np.isfinite(float(camera.photons)):
        return None
    made = geometry(camera, sample)
    x = (np.arange(screen.side) - (screen.side - 1) / 2.0) * screen.pixel
    mean = np.stack(
        [
            float(camera.efficiency * sample.atoms[a]) * screen.pixel**2 / (2 * np.pi * float(made.wx[a] * made.wy[a]))
            * np.exp(-(x[None, :] ** 2) / (2 * float(made.wx[a]) ** 2) - x[:, None] ** 2 / (2 * float(made.wy[a]) ** 2))
            for a in (0, 1)
        ]
    )  # fmt: skip
    per = screen.pixel**2 / float(camera.cross_section)
    return np.asarray(np.sqrt(per**2 * (1.0 + np.exp(mean / per)) / float(camera.photons)))


def _placed(
    camera: Camera, where: Floats, screen: Screen, shift: Floats, rng: np.random.Generator, resolution: float
) -> Floats:
    """Detected atoms at places (atom, 2) in m onto the fine raster; counting misplaces them first."""
    seen = where[rng.random(len(where)) < float(camera.efficiency)] + shift
    if camera.detection == "counting":
        seen = seen + resolution * rng.standard_normal(seen.shape)
    n, step = screen.points, screen.pixel / screen.fine
    index = np.floor(seen / step + n / 2.0).astype(np.int64)
    inside = ((index >= 0) & (index < n)).all(-1)
    flat = index[inside, 1] * n + index[inside, 0]
    return np.bincount(flat, minlength=n * n).reshape(n, n).astype(float)


def _number(camera: Camera, rng: np.random.Generator) -> float:
    """Factor on the atom number of one shot, the same for both species."""
    eps = float(camera.fluctuation)
    return max(0.0, 1.0 + eps * rng.standard_normal()) if eps > 0 else 1.0


def _pairs(
    camera: Camera, sample: Sample, pair: bool, screen: Screen, count: int, rng: np.random.Generator
) -> Iterator[tuple[Floats, Floats]]:
    """Atoms one by one: tied pairs, and the rest independent."""
    made = geometry(camera, sample)
    peak = order_peak(camera, sample, "pair" if pair else "antipair")
    ell = float(made.ell)
    width = [np.array([float(made.wx[a]), float(made.wy[a])]) for a in (0, 1)]
    atoms = np.asarray(sample.atoms)
    tied = float(sample.regions["pair" if pair else "antipair"].total) * float(made.line)
    own = [(peak.order_x, peak.blur_x), (peak.order_y, peak.blur_y)]
    spread = np.array([np.hypot(float(order), float(blur)) for order, blur in own])
    points = [float(camera.resolution), float(camera.resolution * made.scale)]
    for _ in range(count):
        factor = _number(camera, rng)
        number = rng.poisson(factor * tied)
        first = rng.standard_normal((number, 2)) * width[0]
        second = _partners(first, pair, ell, width[1], rng) + rng.standard_normal((number, 2)) * spread
        alone = [rng.standard_normal((rng.poisson(factor * max(atoms[a] - tied, 0.0)), 2)) * width[a] for a in (0, 1)]
        shift = float(camera.jitter) * rng.standard_normal(2)
        yield (
            _placed(camera, np.concatenate([first, alone[0]]), screen, shift, rng, points[0]),
            _placed(camera, np.concatenate([second, alone[1]]), screen, shift * float(made.scale), rng, points[1]),
        )


def _partners(first: Floats, pair: bool, ell: float, width: Floats, rng: np.random.Generator) -> Floats:
    """Places of the partners: -k or k, or a copy a reciprocal vector away, as the cloud weighs them."""
    base = -first if pair else first
    out = np.empty_like(base)
    for axis in (0, 1):
        reach = int(np.ceil(4.5 * width[axis] / ell))
        nearest = base[:, axis] - ell * np.round(base[:, axis] / ell)
        copies = nearest[:, None] + ell * np.arange(-reach, reach + 1)
        weight = np.exp(-(copies**2) / (2.0 * width[axis] ** 2))
        total = np.cumsum(weight, -1)
        chosen = (rng.random(len(base))[:, None] * total[:, -1:] > total).sum(-1)
        out[:, axis] = copies[np.arange(len(base)), np.minimum(chosen, 2 * reach)]
    return out


def _fields(
    camera: Camera, sample: Sample, pair: bool, screen: Screen, count: int, rng: np.random.Generator
) -> Iterator[tuple[Floats, Floats]]:
    """Gaussian amplitudes on a box of sites, plane by plane along the light."""
    made = geometry(camera, sample)
    name = "pair" if pair else "antipair"
    ax, ay = across(camera)
    sizes = [max(2, round(float(sample.regions["1"].size[axis]) * np.sqrt(12.0))) for axis in (ax, ay)]
    total = float(sample.atoms[0]) ** 2 / float(sample.regions["1"].total)  # sites, of a uniform box
    layers = max(1, round(total / (sizes[0] * sizes[1])))
    filling = np.asarray(sample.atoms) / (layers * sizes[0] * sizes[1])
    corr = np.sqrt(min(1.0, float(sample.peak(name))))
    points = round(float(made.ell) * screen.fine / screen.pixel)
    if points < max(sizes):
        raise InputError(f"the picture resolves {points} points per reciprocal vector; it needs {max(sizes)}")
    phase = _near_field(camera, sample, made, sizes)
    n = screen.points
    step = screen.pixel / screen.fine
    place: Floats = (np.arange(n, dtype=np.float64) - (n - 1) / 2.0) * step
    index = np.round(place / step - 0.5).astype(int) if n % 2 == 0 else np.round(place / step).astype(int)
    offset = 0.5 if n % 2 == 0 else 0.0
    ramps = [np.exp(-2j * np.pi * offset * np.arange(size) / points) for size in sizes]
    ramp = ramps[1][:, None] * ramps[0][None, :]
    envelope = [_envelope(place, float(made.wx[a]), float(made.wy[a]), step) for a in (0, 1)]
    resolution = (float(camera.resolution), float(camera.resolution * made.scale))
    for _ in range(count):
        factor = _number(camera, rng)
        amplitudes = _amplitudes(rng, (layers, sizes[1], sizes[0]), corr, pair)
        pictures = []
        for a in (0, 1):
            b = np.sqrt(filling[a]) * amplitudes[a] * (phase[a] * ramp)
            intensity = (np.abs(fft.fft2(b, s=(points, points), workers=2)) ** 2).sum(0)
            tiled = intensity[np.mod(index, points)[:, None], np.mod(index, points)[None, :]]
            rate = float(camera.efficiency) * factor * tiled * envelope[a]
            if camera.detection == "counting" and float(camera.resolution) > 0:
                rate = np.maximum(_smeared(rate, screen, resolution[a]), 0.0)
            pictures.append(rng.poisson(rate).astype(float))
        yield pictures[0], pictures[1]


def _amplitudes(rng: np.random.Generator, shape: tuple[int, ...], corr: float, pair: bool) -> tuple[Any, Any]:
    """Complex Gaussian amplitudes of variance 1; <a b> = corr for pairs, <a* b> = corr for anti-pairs."""

    def draw() -> Any:
        both = rng.standard_normal((2, *shape))
        return (both[0] + 1j * both[1]) / np.sqrt(2.0)

    first, other = draw(), draw()
    tied = np.conj(first) if pair else first
    return first, corr * tied + np.sqrt(1.0 - corr**2) * other


def _near_field(camera: Camera, sample: Sample, made: Any, sizes: list[int]) -> list[Any]:
    """exp(i m r²/2ħt) at every site: what is left of the trap after a short flight; (y, x) per species."""
    found = []
    for a in (0, 1):
        if camera.flight == "lens":
            found.append(np.ones((sizes[1], sizes[0])))
            continue
        # m d²/(2ħt) = π d/ell of that species
        own = float(made.ell) / (float(made.scale) if a else 1.0)
        factor = np.pi * float(sample.spacing) / own
        x, y = (np.arange(size) - (size - 1) / 2.0 for size in sizes)
        found.append(np.exp(1j * factor * (x[None, :] ** 2 + y[:, None] ** 2)))
    return found


def _envelope(place: Any, wx: float, wy: float, step: float) -> Floats:
    """Share of the cloud on a fine point divided by the mean of |b(k)|², so that atoms come out right."""
    gx, gy = np.exp(-(place**2) / (2.0 * wx**2)), np.exp(-(place**2) / (2.0 * wy**2))
    return np.outer(gy, gx) * step**2 / (2.0 * np.pi * wx * wy)


def to_dataset(stack: Stack, camera: Camera, channel: str, seed: int, sampling: str) -> xr.Dataset:
    """Both stacks, labelled, with the settings they were made with."""
    side = stack.first.shape[-1]
    place = (np.arange(side) - stack.centre[0]) * stack.pixel
    attrs: dict[str, Any] = {"channel": channel, "seed": seed, "sampling": sampling, "pixel": stack.pixel}
    attrs |= {
        name: float(getattr(camera, name))
        for name in (
            "tof", "efficiency", "resolution", "photons", "cross_section", "fluctuation", "jitter", "technical",
        )
    }  # fmt: skip
    attrs |= {"detection": camera.detection, "flight": camera.flight}
    pictures = np.stack([stack.first, stack.second])
    words = {"units": "1", "long_name": "Detected atoms per pixel"}
    coords: dict[str, Any] = {
        "species": np.arange(1, 3),
        "shot": np.arange(pictures.shape[1]),
        "y": ("y", place, {"units": "m", "long_name": "Position in the picture"}),
        "x": ("x", place, {"units": "m", "long_name": "Position in the picture"}),
    }
    return xr.Dataset({"counts": (("species", "shot", "y", "x"), pictures, words)}, coords=coords, attrs=attrs)
