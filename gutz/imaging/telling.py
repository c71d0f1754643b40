"""Which peak tells the candidate phases apart at a point.

In:  the solution of one point, its product companion (what the gas is without pair order), a camera, a layout.
Out: `Candidate`s with what each would show in both channels; `Verdict`s, shots to tell two of them apart.

Peaks of a superfluid are those of the noise map (`gutz.noise`): fluctuations around the condensate give C_12 at
k' = -k and, weakly and with an uncertain sign, at k' = k. They are no order, and Bragg peaks stand beside them.
"""

from typing import NamedTuple

import numpy as np

from gutz.imaging import sample as samples
from gutz.imaging.camera import Camera
from gutz.imaging.covariance import shots_for
from gutz.imaging.detect import Layout, measure
from gutz.imaging.sample import CHANNELS, Sample
from gutz.noise import features, maps, order_of
from gutz.phases import ORDER_THRESHOLD, WORDS, Phase
from gutz.solution import Solution

SIZE = 12
"""Sites along each direction of the noise maps; heights of peaks do not depend on it by more than a few per cent."""

_FEATURES = {"pair": "pairing between species", "antipair": "counterflow peak"}


class Candidate(NamedTuple):
    """One phase and what it would show. condensate: share of the atoms, seen as Bragg peaks; amplitude, noise (of one
    shot) and ratio (A_12 over bunching) by channel."""

    phase: str
    condensate: float
    amplitude: dict[str, float]
    noise: dict[str, float]
    ratio: dict[str, float]


class Verdict(NamedTuple):
    """Shots to tell two candidates apart in a channel; inf where both show the same."""

    phases: tuple[str, str]
    channel: str
    shots: float


def candidates(found: list[Solution], camera: Camera, layout: Layout, significance: float) -> list[Candidate]:
    """What each of some solutions of one point (batch of one) would show; equal phases once."""
    made: dict[str, Candidate] = {}
    for solution in found:
        phase = WORDS[Phase(int(np.ravel(solution.phase)[0]))]
        if phase in made:
            continue
        sample = _sample(solution, layout)
        table = measure(camera, [sample], significance)
        columns = {
            name: dict(zip(CHANNELS, (float(v) for v in table[name][0]), strict=True))
            for name in ("amplitude", "noise", "order_ratio")
        }
        share = float(table["condensate"][0].mean())
        made[phase] = Candidate(phase, share, columns["amplitude"], columns["noise"], columns["order_ratio"])
    return list(made.values())


def verdicts(listed: list[Candidate], camera: Camera, significance: float) -> list[Verdict]:
    """Shots to tell every two candidates apart, the better channel first."""
    out = []
    for i, one in enumerate(listed):
        for other in listed[i + 1 :]:
            for channel in CHANNELS:
                apart = abs(one.amplitude[channel] - other.amplitude[channel])
                noise = max(one.noise[channel], other.noise[channel])
                needed = float(shots_for(camera, apart / noise, significance)) if apart > 0 else np.inf
                out.append(Verdict((one.phase, other.phase), channel, max(1.0, needed)))
    return sorted(out, key=lambda verdict: verdict.shots)


def _sample(solution: Solution, layout: Layout) -> Sample:
    """A uniform sample; of a condensate with the heights of its noise map in place of local order."""
    lead = (0,) * len(solution.shape)
    point = {name: np.asarray(value)[lead] for name, value in solution.outputs.items()}
    correlated = None
    if np.any(np.abs(point["order_parameter"]) > ORDER_THRESHOLD):
        made = maps(solution, SIZE)[0]
        listed = [] if made is None else features(made[0], order_of(solution, lead))
        heights = {f.name: f.height for f in listed if f.species == (1, 2)}
        correlated = {c: np.sqrt(max(heights.get(name, 0.0), 0.0)) for c, name in _FEATURES.items()}
    return samples.uniform(point, layout.sites, layout.mass, layout.spacing, layout.depth, layout.planes, correlated)
