"""Better settings by gradient: fewer shots within bounds, what limits them, what each setting is worth.

In:  knobs with bounds, a function that makes samples at settings of the gas, a camera.
Out: `Improved`: settings, bounds that hold them, sensitivities; `Spread`: what calibration errors do.

The derivative of log(shots) goes through the whole chain: jax through camera, expectation and noise; the gas itself
enters through samples at neighbouring settings, as for the derivatives of the dressed ansatz (`gutz.sensitivity`),
solved in one batch a step. optax's Adam moves the knobs in units of their bounds, and they are clipped to these.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
import optax
from numpy.typing import NDArray

from gutz.errors import InputError
from gutz.imaging.camera import Camera
from gutz.imaging.covariance import shots_for, signal
from gutz.imaging.detect import numbers, window
from gutz.imaging.expectation import check_far_field
from gutz.imaging.sample import Sample

Floats = NDArray[np.float64]
Samples = Callable[[Floats], list[Sample]]
"""Settings of the gas (point, knob of the gas) in the knobs' units -> a sample each."""

STEPS = 24
RATE = 0.12
"""Most steps, and how far the first ones go, in units of the bounds."""

_STEP = 2e-3
"""Distance of neighbouring settings, in units of the bounds."""
_STILL = 2e-3
_EDGE = 1e-6


@dataclass(frozen=True)
class Knob:
    """A setting that may be moved. low, high: bounds; start; unit: all in this unit, `si` of it in SI.

    camera: the field of `Camera` that it sets, or "" for a setting of the gas.
    Raises InputError for bounds that hold nothing, or a start outside them.
    """

    name: str
    low: float
    high: float
    start: float
    unit: str = "1"
    si: float = 1.0
    camera: str = ""

    def __post_init__(self) -> None:
        if not (np.isfinite(self.low) and np.isfinite(self.high) and self.low < self.high):
            raise InputError(f"{self.name}: the bounds {self.low:g} to {self.high:g} hold nothing; give low:high")
        if not self.low <= self.start <= self.high:
            raise InputError(
                f"{self.name}: starts at {self.start:g}, outside its bounds {self.low:g} to {self.high:g}; widen them"
            )


class Sensitivity(NamedTuple):
    """per_cent: by how many per cent the shots change for 1 % more of a setting."""

    name: str
    value: float
    unit: str
    per_cent: float


@dataclass(frozen=True)
class Improved:
    """values: of the knobs, in their units; bounds: "low", "high" or "" for each, where one holds it back.

    before, after: shots. sensitivities: at the new settings, of the knobs and of the camera. steps: taken.
    """

    knobs: tuple[Knob, ...]
    values: Floats
    bounds: tuple[str, ...]
    before: float
    after: float
    sensitivities: tuple[Sensitivity, ...]
    steps: int


@dataclass(frozen=True)
class Spread:
    """What errors of calibration do. ordered: probability that the channel's order is there; shots: 16, 50 and 84 %
    points of the shots among all draws (inf where the order is lost)."""

    ordered: float
    shots: tuple[float, float, float]
    draws: int


def improve(
    knobs: Sequence[Knob], samples: Samples, camera: Camera, channel: str, significance: float, steps: int = STEPS
) -> Improved:
    """Move the knobs to need fewer shots in a channel. samples: see `Samples`, called with the knobs of the gas only.

    Raises InputError where there are no knobs, or no order to begin with.
    """
    if not knobs:
        raise InputError("no knobs to turn; name at least one")
    low, span = np.array([k.low for k in knobs]), np.array([k.high - k.low for k in knobs])
    u = (np.array([k.start for k in knobs]) - low) / span
    optimiser = optax.adam(optax.cosine_decay_schedule(RATE, steps, 0.1))
    state = optimiser.init(jnp.asarray(u))
    best_u, best, before, taken = u, np.inf, np.inf, 0
    gradient = _Gradient(tuple(knobs), samples, camera, channel, significance)
    for step in range(steps + 1):
        value, slope = gradient(low + span * u)
        if step == 0:
            before = value
            if not np.isfinite(value):
                raise InputError("there is no order in this channel at the start; move a knob or lower the temperature")
        if value < best:
            best, best_u, taken = value, u, step
        if step == steps:
            break
        if not np.isfinite(value):
            # Fallen off the order: back to the best point, more carefully from there.
            u = 0.5 * (u + best_u)
            continue
        move, state = optimiser.update(jnp.asarray(slope * span), state)
        moved = np.clip(u + np.asarray(move), 0.0, 1.0)
        if np.abs(moved - u).max() < _STILL * RATE:
            break
        u = moved
    at_best = low + span * best_u
    final, slope = gradient(at_best)
    bounds = tuple(
        "low" if v < _EDGE and g > 0 else "high" if v > 1 - _EDGE and g < 0 else ""
        for v, g in zip(best_u, slope, strict=True)
    )
    return Improved(
        tuple(knobs), at_best, bounds, float(np.exp(before)), float(np.exp(final)),
        gradient.sensitivities(at_best, slope), taken,
    )  # fmt: skip


class _Gradient:
    """log(shots) and its derivative at settings of all knobs, each in its unit."""

    def __init__(
        self, knobs: tuple[Knob, ...], samples: Samples, camera: Camera, channel: str, significance: float
    ) -> None:
        self.knobs, self.samples, self.camera = knobs, samples, camera
        self.channel, self.significance = channel, significance
        self.gas = [i for i, knob in enumerate(knobs) if not knob.camera]
        self.last: Any = None

    def camera_at(self, x: Floats) -> Camera:
        """The camera with its knobs set."""
        changes = {k.camera: float(v) * k.si for k, v in zip(self.knobs, x, strict=True) if k.camera}
        return self.camera.with_(**changes)

    def __call__(self, x: Floats) -> tuple[float, Floats]:
        camera = self.camera_at(x)
        steps = np.array([_STEP * (self.knobs[i].high - self.knobs[i].low) for i in self.gas])
        points = np.repeat(x[None, self.gas], 1 + 2 * len(self.gas), 0)
        for j, step in enumerate(steps):
            points[1 + 2 * j, j] += step
            points[2 + 2 * j, j] -= step
        middle, *around = self.samples(points)
        check_far_field(camera, middle)
        if float(middle.regions[self.channel].total) <= 0:
            return np.inf, np.zeros(len(x))
        half = window(camera, middle, self.channel)
        value, (of_camera, of_sample) = log_shots(
            numbers(camera), middle, self.channel, half, jnp.asarray(self.significance)
        )
        self.last = of_camera
        slope = np.zeros(len(x))
        for j, i in enumerate(self.gas):
            change = jax.tree.map(lambda a, b, h=steps[j]: (a - b) / (2.0 * h), around[2 * j], around[2 * j + 1])
            parts = jax.tree.map(lambda g, c: float(jnp.vdot(g, c)), of_sample, change)
            slope[i] = sum(jax.tree.leaves(parts))
        for i, knob in enumerate(self.knobs):
            if knob.camera:
                slope[i] = float(getattr(of_camera, knob.camera)) * knob.si
        return float(value), slope

    def sensitivities(self, x: Floats, slope: Floats) -> tuple[Sensitivity, ...]:
        """Change of the shots for 1 % of each knob and of the camera's other numbers."""
        found = [
            Sensitivity(k.name, float(v), k.unit, float(v * g)) for k, v, g in zip(self.knobs, x, slope, strict=True)
        ]
        named = {knob.camera for knob in self.knobs}
        camera = self.camera_at(x)
        for name, (unit, si) in _SHOWN.items():
            value = float(getattr(camera, name))
            if name not in named and np.isfinite(value) and value > 0:
                found.append(Sensitivity(name, value / si, unit, value * float(getattr(self.last, name))))
        return tuple(found)


_SHOWN = {
    "tof": ("ms", 1e-3), "efficiency": ("1", 1.0), "resolution": ("um", 1e-6), "pixel": ("um", 1e-6),
    "photons": ("1", 1.0),
}  # fmt: skip


@partial(jax.jit, static_argnums=(2, 3))
def log_shots(
    camera: Camera, sample: Sample, channel: str, half: int, significance: Any
) -> tuple[Any, tuple[Camera, Sample]]:
    """log of the shots, and its derivatives in every number of the camera and of the sample."""

    def whole(camera: Camera, sample: Sample) -> Any:
        return jnp.log(shots_for(camera, signal(camera, sample, channel, half).snr, significance))

    return jax.value_and_grad(whole, argnums=(0, 1))(camera, sample)


def spread(
    samples: Samples, centre: Floats, errors: Floats, camera: Camera, channel: str, significance: float,
    draws: int = 48, seed: int = 0,
) -> Spread:  # fmt: skip
    """What relative errors (1 sigma) of the gas's settings do to order and shots, by drawing settings.

    centre, errors: (knob of the gas,). Raises InputError for negative errors.
    """
    if np.any(~(np.asarray(errors) >= 0)):
        raise InputError(f"a calibration error is {np.min(errors):g}; it must be at least 0, relative")
    rng = np.random.default_rng(seed)
    points = centre * (1.0 + errors * rng.standard_normal((draws, len(centre))))
    made = samples(np.maximum(points, 1e-3 * np.abs(centre)))
    half = max(window(camera, one, channel) for one in made)
    shots = np.array(
        [
            np.exp(float(log_shots(numbers(camera), one, channel, half, jnp.asarray(significance))[0]))
            if float(one.regions[channel].total) > 0 else np.inf
            for one in made
        ]
    )  # fmt: skip
    there = np.isfinite(shots)
    low, middle, high = np.quantile(shots, [0.16, 0.5, 0.84], method="nearest")
    return Spread(float(there.mean()), (float(low), float(middle), float(high)), draws)
