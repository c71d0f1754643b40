"""Predicted amplitude and signal-to-noise ratio against synthetic shots and the estimator: the whole chain at once.

Nothing of the prediction enters the sampling but the geometry: pairs are drawn as atoms, fields as Gaussian amplitudes
on sites whose transform is the picture.
"""

from dataclasses import replace
from typing import NamedTuple

import numpy as np
import pytest
from specimens import box

from gutz.imaging import shots as synthetic
from gutz.imaging.camera import Camera
from gutz.imaging.covariance import counts, lags_needed, photon_variance, signal
from gutz.imaging.estimator import Estimate, estimate
from gutz.imaging.expectation import correlation, geometry, order_peak
from gutz.imaging.sample import Sample


class Case(NamedTuple):
    camera: Camera
    sample: Sample
    channel: str
    sampling: str
    side: int
    shots: int


CASES = {
    "pairs, absorption": Case(
        Camera(tof=4e-3, resolution=3e-6, flight="lens"), box(16), "pair", "pairs", 64, 1500
    ),
    "pairs, photon noise, fluctuating number": Case(
        Camera(tof=4e-3, resolution=3e-6, flight="lens", efficiency=0.9, photons=20000, fluctuation=0.1),
        box(16), "pair", "pairs", 64, 2500,
    ),
    "pairs, short flight": Case(Camera(tof=6e-3), box(12), "pair", "pairs", 96, 2500),
    "counterflow, counting": Case(
        Camera(tof=4e-3, resolution=2e-6, detection="counting"), box(16), "antipair", "pairs", 64, 2500
    ),
    "pairs, bunching": Case(
        Camera(tof=5e-3, resolution=4e-6, flight="lens"), box(16, n=1.0), "pair", "fields", 80, 1000
    ),
    "counterflow, bunching, partial order": Case(
        Camera(tof=5e-3, resolution=4e-6), box(16, n=1.0, height=0.6), "antipair", "fields", 80, 1000
    ),
    "counterflow, bunching, counting": Case(
        Camera(tof=5e-3, resolution=3e-6, detection="counting"), box(14, n=1.0), "antipair", "fields", 80, 1500
    ),
}  # fmt: skip


def measured(case: Case) -> tuple[Estimate, Camera, int]:
    stack = synthetic.shots(
        case.camera, case.sample, case.channel, case.shots, case.side, seed=11, sampling=case.sampling
    )
    camera = case.camera.with_(pixel=stack.pixel, picture=case.side * stack.pixel)
    peak = order_peak(camera, case.sample, case.channel)
    half = min(lags_needed(camera, peak), 12)
    lags = np.arange(-half, half + 1)
    middle = counts(camera, case.sample, geometry(camera, case.sample), 0.0, 0.0)
    white = tuple(float(v) for v in photon_variance(camera, middle))
    found = estimate(
        stack.first, stack.second, case.channel, half=half, centre=stack.centre, white=white,  # type: ignore[arg-type]
        template=np.asarray(correlation(camera, peak, lags)),
    )  # fmt: skip
    return found, camera, half


def sampled(case: Case) -> Sample:
    """The sample as the sampling holds it: tied pairs of independent atoms do not bunch."""
    if case.sampling == "fields":
        return case.sample
    quiet = {a: replace(case.sample.regions[a], total=0.0 * case.sample.regions[a].total) for a in ("1", "2")}
    return replace(case.sample, regions={**case.sample.regions, **quiet})


@pytest.mark.slow
@pytest.mark.parametrize("name", CASES)
def test_signal_to_noise_of_synthetic_shots(name: str) -> None:
    """SNR of a shot within 10 % of the prediction, for the better measure; amplitude within its own error."""
    case = CASES[name]
    found, camera, half = measured(case)
    predicted = signal(camera, sampled(case), case.channel, half)
    by_pixel = found.peak / found.peak_error / np.sqrt(case.shots)
    by_template = found.template / found.template_error / np.sqrt(case.shots)
    template = float(predicted.snr_template) > float(predicted.snr_pixel)
    snr, expected = (by_template, float(predicted.snr_template)) if template else (by_pixel, float(predicted.snr_pixel))
    assert expected > 0.3
    assert snr == pytest.approx(expected, rel=0.1)
    assert found.template == pytest.approx(1.0, abs=3.5 * found.template_error)
