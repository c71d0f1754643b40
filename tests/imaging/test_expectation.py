"""Expected correlations and their noise against closed forms, limits and published amplitudes."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy import integrate
from specimens import RUBIDIUM, box, sphere

from gutz.errors import InputError
from gutz.imaging.camera import Camera, reciprocal_length, resonant_cross_section
from gutz.imaging.covariance import lags_needed, moments, photon_variance, shots_for, signal
from gutz.imaging.expectation import (
    bunching_peak,
    check_far_field,
    geometry,
    height,
    order_peak,
    order_ratio,
    pixel_shape,
)
from gutz.imaging.sample import uniform

CAMERA = Camera(tof=20e-3)


def test_reciprocal_length_by_hand() -> None:
    # h t/(m d) with h = 6.62607015e-34 J s: 87Rb, 425 nm, 20 ms.
    expected = 6.62607015e-34 * 20e-3 / (RUBIDIUM * 425e-9)
    assert reciprocal_length(RUBIDIUM, 425e-9, 20e-3) == pytest.approx(expected, rel=1e-9)


def test_resonant_cross_section_of_rubidium() -> None:
    # 2.907e-13 m², D. Steck, Rubidium 87 D Line Data (cycling transition), from memory.
    assert resonant_cross_section(780.241e-9) == pytest.approx(2.907e-13, rel=2e-3)


@pytest.mark.parametrize("rms", [0.0, 0.4, 1.0, 3.0])
def test_pixel_shape_is_the_convolution_of_two_pixels_and_a_gaussian(rms: float) -> None:
    # The triangle of two unit pixels smeared by a Gaussian, integrated numerically by scipy.
    d = 0.7
    if rms == 0:
        expected = 1 - d
    else:

        def smeared(u: float) -> float:
            return (1 - abs(u)) * np.exp(-((d - u) ** 2) / (2 * rms**2)) / np.sqrt(2 * np.pi * rms**2)

        expected = integrate.quad(smeared, -1, 0)[0] + integrate.quad(smeared, 0, 1)[0]
    assert float(pixel_shape(jnp.asarray(d), 1.0, rms)) == pytest.approx(expected, rel=1e-4)


def test_pixel_shape_has_unit_area() -> None:
    d = np.linspace(-30, 30, 6001)
    assert float(pixel_shape(d, 1.0, 2.5).sum() * 0.01) == pytest.approx(1.0, rel=1e-6)


def test_pure_mott_bunching_of_the_literature() -> None:
    """Fölling et al., Nature 434, 481 (2005): A = (ℓ/σ)²/(4π N) for resolution far above the peak; 1e-4 to 1e-3."""
    for atoms, tof, sigma in ((6e5, 22e-3, 5.6e-6), (1e5, 20e-3, 5e-6)):
        camera = Camera(tof=tof, resolution=sigma, pixel=0.3e-6)
        sample = sphere((6 * atoms / np.pi) ** (1 / 3), n=1.0)
        ell = reciprocal_length(RUBIDIUM, 425e-9, tof)
        closed = (ell / sigma) ** 2 / (4 * np.pi * atoms)
        found = float(height(camera, bunching_peak(camera, sample, 0)))
        # The peak's own width is left out of the closed form; it widens 2σ² by r².
        r = ell / (2 * np.sqrt(2) * np.pi * float(sample.regions["1"].size[0]))
        assert found == pytest.approx(closed * 2 * sigma**2 / (2 * sigma**2 + r**2), rel=1e-3)
        assert 1e-4 < found < 2e-3


def test_own_verified_numbers_of_a_sphere() -> None:
    """Own computation (independent trial of the same formulas): D = 50, half filling, 20 ms, σ = a = 3 um."""
    sample = sphere(50)
    for channel, amplitude, snr in (("antipair", 4.7e-3, 3.8), ("pair", 1.0e-3, 1.04)):
        peak = order_peak(CAMERA, sample, channel)
        found = signal(CAMERA, sample, channel, lags_needed(CAMERA, peak))
        assert float(found.amplitude) == pytest.approx(amplitude, rel=0.02)
        assert float(found.snr) == pytest.approx(snr, rel=0.03)


def test_poisson_limit_of_the_noise() -> None:
    """Var A = w²/(s_K² η² N_1 N_2), s_K² = 2σ² + a²/6, for a dilute cloud without bunching."""
    camera = Camera(tof=20e-3, resolution=6e-6, efficiency=0.4)
    sample = box(30, n=1e-3, height=1e-9)
    found = signal(camera, sample, "antipair", 16)
    made = geometry(camera, sample)
    kernel = 2 * 6e-6**2 + 3e-6**2 / 6
    closed = float(made.wx[0]) / np.sqrt(kernel) / (0.4 * float(sample.atoms[0]))
    assert float(found.noise) == pytest.approx(closed, rel=0.01)


def test_counting_limit_of_the_noise() -> None:
    """Single atoms, no bunching: Var A = 1/Σ μ_1 μ_2, as for independent Poisson counts."""
    camera = Camera(tof=20e-3, detection="counting", efficiency=0.4)
    sample = box(30, n=1e-3, height=1e-9)
    made = geometry(camera, sample)
    counted = 0.4 * float(sample.atoms[0])
    closed = 1 / np.sqrt(counted**2 * (3e-6) ** 2 / (4 * np.pi * float(made.wx[0]) ** 2))
    assert float(signal(camera, sample, "antipair", 16).noise) == pytest.approx(closed, rel=0.01)


def test_sums_over_pixels_against_a_sum_over_pixels() -> None:
    camera = Camera(tof=6e-3, photons=500, pixel=4e-6)
    sample = box(24)
    made = geometry(camera, sample)
    x = (np.arange(400) - 199.5) * 4e-6
    grid = np.exp(-(x**2) / (2 * float(made.wx[0]) ** 2))
    mean = float(sample.atoms[0]) * (4e-6) ** 2 / (2 * np.pi * float(made.wx[0]) ** 2) * np.outer(grid, grid)
    v = np.asarray(photon_variance(camera, jnp.asarray(mean)))
    weight = (mean / (mean + v)) ** 2
    found = moments(camera, sample, made)
    assert float(found.s0) == pytest.approx((weight * mean**2).sum(), rel=1e-3)
    assert float(found.s22) == pytest.approx((weight**2 * mean**4).sum(), rel=1e-3)
    assert float(found.white) == pytest.approx((weight**2 * v**2).sum(), rel=1e-3)


def test_amplitude_does_not_depend_on_efficiency_and_signal_is_proportional() -> None:
    found = [signal(Camera(tof=20e-3, efficiency=eta), box(30, n=0.01), "antipair", 16) for eta in (0.25, 0.5)]
    assert float(found[0].amplitude) == pytest.approx(float(found[1].amplitude), rel=1e-12)
    assert float(found[1].snr / found[0].snr) == pytest.approx(2.0, rel=0.02)


def test_pair_peak_is_blurred_by_twice_the_cloud_and_counterflow_is_not() -> None:
    sample = box(40)
    pair, other = (order_peak(CAMERA, sample, channel) for channel in ("pair", "antipair"))
    radius = 40 / np.sqrt(12) * 425e-9
    assert float(pair.blur_x) == pytest.approx(2 * radius, rel=1e-9)
    assert float(other.blur_x) == 0.0
    assert float(pair.volume) == pytest.approx(float(other.volume), rel=1e-12)
    lens = order_peak(Camera(tof=20e-3, flight="lens"), sample, "pair")
    assert float(lens.x) == pytest.approx(float(other.x), rel=1e-12)


def test_order_ratio_is_order_over_filling_squared_and_free_of_the_camera() -> None:
    sample = box(40, height=0.3)
    for camera in (CAMERA, Camera(tof=12e-3, efficiency=0.3, resolution=8e-6)):
        assert float(order_ratio(camera, sample, "antipair")) == pytest.approx(0.3, rel=1e-9)


def test_planes_give_the_volume_of_one_plane_shared_out() -> None:
    """A stack of n equal planes: (Σ N_i²/N²) ℓ² Σ_plane |M|²/(N_1i N_2i) = ℓ² R/(sites of all planes)."""
    sample = box(40, planes=5, height=0.5)
    ell = float(geometry(CAMERA, sample).ell)
    one = ell**2 * 0.5 / 40**2
    assert float(order_peak(CAMERA, sample, "antipair").volume) == pytest.approx(one / 5, rel=1e-9)


def test_shots_go_with_the_fourth_power_of_the_order_and_the_square_of_the_technical_factor() -> None:
    camera = Camera(tof=20e-3, technical=3.0)
    strong, weak = (signal(camera, box(30, n=0.05, height=h), "antipair", 16).snr for h in (1e-2, 0.25e-2))
    assert float(shots_for(camera, weak, 5.0) / shots_for(camera, strong, 5.0)) == pytest.approx(16, rel=0.02)
    assert float(shots_for(camera, strong, 5.0) / shots_for(CAMERA, strong, 5.0)) == pytest.approx(9.0)


def test_gradient_through_the_whole_chain() -> None:
    """d log(shots)/d(order) of a uniform sample, by jax and by differences."""

    def log_shots(order: jax.Array) -> jax.Array:
        outputs = {"filling": jnp.full(2, 0.5), "order_parameter": jnp.zeros(2), "condensate": jnp.zeros(2)}
        sample = uniform(outputs, (30.0,) * 3, RUBIDIUM, 425e-9, 20.0, 0, {"pair": order, "antipair": order})
        return jnp.log(shots_for(CAMERA, signal(CAMERA, sample, "antipair", 16).snr, 5.0))

    slope = float(jax.grad(log_shots)(jnp.asarray(0.3)))
    change = float(log_shots(jnp.asarray(0.301)) - log_shots(jnp.asarray(0.299))) / 0.002
    assert slope == pytest.approx(change, rel=1e-4)
    assert slope == pytest.approx(-4 / 0.3, rel=0.1)


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        ({"efficiency": 0.0}, "efficiency is 0; it must be greater than 0 and at most 1"),
        ({"efficiency": 1.2}, "efficiency is 1.2"),
        ({"tof": -1.0}, "tof is -1"),
        ({"technical": 0.5}, "technical is 0.5; it must be at least 1"),
        ({"pixel": 3e-6, "picture": 10e-6}, "the picture must be at least 8 pixels wide"),
        ({"detection": "film"}, "detection is 'film'"),
        ({"resolution": float("nan")}, "resolution is nan"),
    ],
)
def test_cameras_without_sense(settings: dict[str, object], words: str) -> None:
    with pytest.raises(InputError, match=words):
        Camera(**{"tof": 20e-3, **settings})  # type: ignore[arg-type]


def test_flight_too_short_for_any_far_field() -> None:
    with pytest.raises(InputError, match="tof is 0.5 ms, too short for any far field"):
        check_far_field(Camera(tof=0.5e-3), box(60))
    check_far_field(Camera(tof=0.5e-3, flight="lens"), box(60))
