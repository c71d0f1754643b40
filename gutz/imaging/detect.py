"""Will it be seen, and how cold must it be: signal and shots of solutions and clouds, and limits along a temperature.

In:  a `Solution` or clouds, a `Layout` (atoms and lattice in SI), a `Camera`.
Out: datasets with a row per point and channel; `Limit`: the highest temperature at which a peak is still seen.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gutz.errors import InputError
from gutz.imaging import sample as samples
from gutz.imaging.camera import Camera
from gutz.imaging.covariance import Signal, lags_needed, shots_for, signal
from gutz.imaging.expectation import bunching_peak, check_far_field, geometry, height, order_peak, order_ratio
from gutz.imaging.sample import CHANNELS, Sample, scaled
from gutz.solution import Solution
from gutz.trap.cloud import Cloud

Floats = NDArray[np.float64]

_HALVES = (8, 16, 32, 64, 150)
"""Lags to each side that are compiled for."""


@dataclass(frozen=True)
class Layout:
    """What the lattice is made of. mass: kg, per species (2,). spacing: m. depth: recoil energies, (2, 3).

    sites: along x, y, z, of a uniform sample; planes: number of independent planes, 0 for order in three directions.
    """

    mass: Any
    spacing: float
    depth: Any
    sites: tuple[float, float, float] = (40.0, 40.0, 40.0)
    planes: int = 0


def shots_needed(
    what: Solution | Sequence[Cloud], camera: Camera, layout: Layout, significance: float = 5.0
) -> xr.Dataset:
    """Shots for a peak of `significance` standard deviations, at every point of a solution or for every cloud.

    Returns a dataset with the dims of the batch ("axis_0", ..; "cloud" for clouds) and `channel` ("pair", "antipair"):
    amplitude, noise, snr (of one shot), shots (inf without order), order_ratio (A_12 over bunching), peak_height
    (Σ|M|²/Σ n²); per point condensate (share of the atoms, (species)), entropy_per_particle, T, status, phase for
    solutions. Raises InputError for one species, one dimension, or settings that leave no far field.
    """
    if not (np.isfinite(significance) and significance > 0):
        raise InputError(f"significance is {significance:g}; it must be greater than 0")
    if isinstance(what, Solution):
        made = of_solution(what, layout, camera)
        outputs = {name: np.asarray(what.outputs[name]) for name in ("T", "entropy_per_particle", "phase", "status")}
        dims = tuple(f"axis_{i}" for i in range(len(what.shape)))
        shape = what.shape
    else:
        clouds = list(what)
        if not clouds:
            raise InputError("there are no clouds; give at least one")
        made = [samples.of_cloud(cloud, layout.mass, layout.spacing, layout.depth, layout.planes) for cloud in clouds]
        outputs = {
            "T": np.array([cloud.T for cloud in clouds]),
            "entropy_per_particle": np.array([cloud.entropy_per_particle for cloud in clouds]),
            "status": np.array([int(cloud.status) for cloud in clouds], np.int32),
        }
        dims, shape = ("cloud",), (len(clouds),)
    table = measure(camera, made, significance)
    data: dict[str, Any] = {}
    for name, values in table.items():
        extra = ("channel",) if name != "condensate" else ("species",)
        data[name] = ((*dims, *extra), values.reshape((*shape, *values.shape[1:])), dict(_WORDS[name]))
    for name, values in outputs.items():
        data[name] = (dims, values, dict(_WORDS[name]))
    coords = {"channel": list(CHANNELS), "species": [1, 2]}
    return xr.Dataset(data, coords=coords, attrs={"significance": significance})


_WORDS: dict[str, dict[str, str]] = {
    "amplitude": {"units": "1", "long_name": "Correlation at the peak"},
    "noise": {"units": "1", "long_name": "Its standard deviation in one shot"},
    "snr": {"units": "1", "long_name": "Signal over noise of one shot"},
    "shots": {"units": "1", "long_name": "Shots needed"},
    "order_ratio": {"units": "1", "long_name": "Peak over the bunching of one species"},
    "peak_height": {"units": "1", "long_name": "Order squared over filling squared"},
    "condensate": {"units": "1", "long_name": "Condensed share of the atoms"},
    "entropy_per_particle": {"units": "k_B", "long_name": "Entropy per particle"},
    "T": {"units": "1", "long_name": "Temperature"},
    "phase": {"units": "1", "long_name": "Phase"},
    "status": {"units": "1", "long_name": "Status"},
}


def words(name: str) -> str:
    """What a column of `measure` holds, for labels."""
    return _WORDS[name]["long_name"]


def of_solution(solution: Solution, layout: Layout | Sequence[Layout], camera: Camera | None = None) -> list[Sample]:
    """A uniform sample of every point of a solution, in flat order. layout: one for all, or one each.

    camera: needed to follow the decay of order in planes at T > 0, which it resolves in part (see `in_planes`).
    """
    if solution.mixture.species != 2:
        raise InputError("detection of pairs and anti-pairs needs two species; the solution has one")
    dim = solution.mixture.dim
    if dim == 1:
        raise InputError("dim is 1; detection needs order across two directions of the picture: 2 or 3")
    lead, size = len(solution.shape), int(np.prod(solution.shape, dtype=int))
    layouts = [layout] * size if isinstance(layout, Layout) else list(layout)
    for planes in {one.planes for one in layouts}:
        if (dim == 2) != (planes > 0):
            raise InputError(f"planes is {planes}; it must be at least 1 for dim = 2, and 0 for dim = 3")
    flat = {name: np.asarray(value).reshape((-1, *np.shape(value)[lead:])) for name, value in solution.outputs.items()}
    made = []
    for i, here in enumerate(layouts):
        point = {name: value[i] for name, value in flat.items()}
        if not np.all(np.isfinite(point["filling"])):
            point |= {name: np.zeros_like(point[name]) for name in _ORDER}
            point["filling"] = np.full(2, 1e-9)
        one = samples.uniform(point, here.sites, here.mass, here.spacing, here.depth, here.planes)
        if dim == 2 and camera is not None:
            for channel in CHANNELS:
                one = in_planes(camera, one, channel, float(point[f"exponent_{channel}"]))
        made.append(one)
    return made


_ORDER = ("order_parameter", "pair_order", "antipair_order", "condensate")


def in_planes(camera: Camera, sample: Sample, channel: str, exponent: float) -> Sample:
    """The sample with algebraic order r^-exponent in its planes: the peak's height as the picture resolves it.

    Only what decays within the distance that the resolution sees is lost; exponent inf: no order beyond a site.
    """
    peak, ell = order_peak(camera, sample, channel), float(geometry(camera, sample).ell)
    sides = [max(2, round(float(s) * np.sqrt(12.0))) for s in np.asarray(sample.regions[channel].size)[:2]]
    x, y = (np.arange(-n + 1, n, dtype=float) for n in sides)
    overlap = np.outer(1.0 - np.abs(y) / sides[1], 1.0 - np.abs(x) / sides[0])
    r = np.hypot(y[:, None], x[None, :])
    for rms, own, row, axis in ((peak.x, peak.order_x, x, 1), (peak.y, peak.order_y, y, 0)):
        smear = 2.0 * np.pi * np.sqrt(max(float(rms) ** 2 - float(own) ** 2, 0.0)) / ell
        window = np.exp(-0.5 * (smear * row) ** 2)
        overlap = overlap * (window[None, :] if axis == 1 else window[:, None])
    decay = np.where(r == 0, 1.0, np.maximum(r, 1.0) ** -exponent) if np.isfinite(exponent) else r == 0
    return scaled(sample, channel, float((overlap * decay).sum() / overlap.sum()))


@partial(jax.jit, static_argnums=(2, 3))
def _signals(camera: Camera, stacked: Sample, channel: str, half: int) -> tuple[Signal, Any]:
    """Signals of a batch of samples."""
    return jax.vmap(lambda one: (signal(camera, one, channel, half), order_ratio(camera, one, channel)))(stacked)


def stack(parts: Sequence[Sample]) -> Sample:
    """Samples as one pytree with a leading axis."""
    return jax.tree.map(lambda *values: jnp.stack(values), *parts)


def window(camera: Camera, sample: Sample, channel: str) -> int:
    """Lags to each side, out of a few sizes."""
    peaks = [order_peak(camera, sample, channel), *(bunching_peak(camera, sample, a) for a in (0, 1))]
    needed = lags_needed(camera, *peaks)
    return next(half for half in _HALVES if half >= needed)


def numbers(camera: Camera) -> Camera:
    """The camera with its numbers as arrays, so that one compilation serves all."""
    return camera.with_(**{name: jnp.asarray(getattr(camera, name), jnp.float64) for name in _NUMBERS})


_NUMBERS = (
    "tof", "efficiency", "resolution", "pixel", "picture", "photons", "cross_section", "fluctuation", "jitter",
    "technical",
)  # fmt: skip


def measure(camera: Camera, made: Sequence[Sample], significance: float) -> dict[str, Floats]:
    """Amplitude, noise, shots, .. of every sample: arrays (sample, channel), condensate (sample, species)."""
    for one in made:
        check_far_field(camera, one)
    stacked = stack(made)
    found: dict[str, list[Floats]] = {}
    for channel in CHANNELS:
        strong = max(made, key=lambda one: float(one.regions[channel].total))
        got, ratio = _signals(numbers(camera), stacked, channel, window(camera, strong, channel))
        snr = np.asarray(got.snr)
        ordered = np.asarray(stacked.regions[channel].total) > 0
        with np.errstate(divide="ignore"):
            needed = np.where(ordered, shots_for(camera, np.where(ordered, snr, 0.0), significance), np.inf)
        columns = {
            "amplitude": got.amplitude, "noise": got.noise, "snr": np.where(ordered, snr, 0.0),
            "shots": np.maximum(needed, 1.0), "order_ratio": ratio,
            "peak_height": jnp.asarray([one.peak(channel) for one in made]),
        }  # fmt: skip
        for name, column in columns.items():
            found.setdefault(name, []).append(np.asarray(column))
    table = {name: np.stack(columns, -1) for name, columns in found.items()}
    table["condensate"] = np.asarray(stacked.condensate)
    return table


@dataclass(frozen=True)
class Limit:
    """How cold it must be. Temperatures in the unit of the curve, entropies per particle in k_B; nan: nowhere.

    T: highest temperature up to which every colder point needs no more than the shots allowed. order_T: where the order
    of this curve ends (mean field). entropy, order_entropy: there. best: T scaled by `factor`, the ratio of the best
    estimate of the critical temperature to that of the curve (1 where there is none).
    """

    T: float
    entropy: float
    order_T: float
    order_entropy: float
    factor: float

    @property
    def best(self) -> float:
        """The temperature to plan with."""
        return self.T * self.factor


def limit(T: Floats, entropy: Floats, shots: Floats, allowed: float, critical: float | None = None) -> Limit:
    """Read a limit off a curve of shots against rising temperature.

    shots: inf where there is no order. critical: the best estimate of the critical temperature, if there is one.
    Shots grow as the fourth power of the falling order, so 1/√shots is what is interpolated.
    """
    if not (np.isfinite(allowed) and allowed >= 1):
        raise InputError(f"shots is {allowed:g}; it must be at least 1")
    if np.any(np.diff(T) <= 0):
        raise InputError("T must rise along the curve")
    snr = np.where(np.isfinite(shots), 1.0 / np.sqrt(np.maximum(shots, 1e-300)), 0.0)
    seen = _crossing(T, snr, 1.0 / np.sqrt(allowed))
    # Order goes as sqrt(T_c - T), and snr with its square: straight to zero.
    end = _end(T, snr)
    factor = critical / end if critical and np.isfinite(end) and critical > 0 else 1.0

    def at(x: float) -> float:
        return float(np.interp(x, T, entropy)) if np.isfinite(x) else float("nan")

    return Limit(seen, at(seen), end, at(end), float(factor))


def _crossing(T: Floats, snr: Floats, wanted: float) -> float:
    """Where a curve first falls below a level; nan if it starts below, its end if it never does."""
    below = np.flatnonzero(snr < wanted)
    if not below.size:
        return float(T[-1])
    i = int(below[0])
    if i == 0:
        return float("nan")
    share = (snr[i - 1] - wanted) / (snr[i - 1] - snr[i])
    return float(T[i - 1] + share * (T[i] - T[i - 1]))


def _end(T: Floats, snr: Floats) -> float:
    """Where the order ends: the line through the last two ordered points, within the cell that follows."""
    ordered = np.flatnonzero(snr > 0)
    if not ordered.size or ordered[-1] == T.size - 1:
        return float("nan")
    last = int(ordered[-1])
    if last == 0 or snr[last] >= snr[last - 1]:
        return float(0.5 * (T[last] + T[last + 1]))
    slope = (snr[last] - snr[last - 1]) / (T[last] - T[last - 1])
    return float(np.clip(T[last] - snr[last] / slope, T[last], T[last + 1]))


def peaks(camera: Camera, sample: Sample, channel: str) -> Mapping[str, float]:
    """Widths and heights of a channel's peak and of the bunching, for people: lengths in m."""
    peak, made = order_peak(camera, sample, channel), geometry(camera, sample)
    return {
        "reciprocal_length": float(made.ell),
        "cloud_rms": float(made.wx[0]),
        "peak_rms_x": float(peak.x),
        "peak_rms_y": float(peak.y),
        "order_rms_x": float(peak.order_x),
        "blur_rms_x": float(peak.blur_x),
        "bunching": float(height(camera, bunching_peak(camera, sample, 0))),
    }
