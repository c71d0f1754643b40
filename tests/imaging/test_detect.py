"""Limits along a temperature, datasets of solutions, order in planes, better settings, bad input of the command."""

import json
from pathlib import Path

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from click.testing import CliRunner
from specimens import RUBIDIUM, box

import gutz
from gutz import cli
from gutz.errors import InputError
from gutz.imaging.camera import Camera
from gutz.imaging.design import Knob, improve, spread
from gutz.imaging.detect import Layout, in_planes, limit
from gutz.imaging.sample import Sample
from gutz.solution import Solution

CAMERA = Camera(tof=20e-3)
LAYOUT = Layout(RUBIDIUM, 425e-9, 20.0, (30.0, 30.0, 30.0))


def solution(order: np.ndarray, dim: int = 3) -> Solution:
    """Made by hand: counterflow order falling with temperature, half an atom of each species per site."""
    size = order.size
    T = np.arange(1.0, size + 1)
    mixture = gutz.Mixture(t=0.01, U=1.0, U12=0.5, mu=0.25, T=T, dim=dim)
    outputs = {
        "filling": np.full((size, 2), 0.5), "order_parameter": np.zeros((size, 2)), "condensate": np.zeros((size, 2)),
        "pair_order": np.zeros(size), "antipair_order": order, "T": T, "entropy_per_particle": 0.1 * T,
        "phase": np.full(size, 7, np.int8), "status": np.zeros(size, np.int32), "exponent_pair": np.full(size, np.inf),
        "exponent_antipair": np.zeros(size),
    }  # fmt: skip
    return Solution(mixture, outputs, np.zeros((size, 1, 2)), "dressed")


def test_shots_of_a_solution() -> None:
    found = gutz.shots_needed(solution(np.array([0.5, 0.25, 0.0])), CAMERA, LAYOUT)
    shots = found["shots"].sel(channel="antipair").values
    assert found["shots"].dims == ("axis_0", "channel")
    assert np.isinf(shots[2]) and np.isinf(found["shots"].sel(channel="pair").values).all()
    # Order to the fourth power: more, since the bunching noise of the peak itself falls.
    assert 10 < shots[1] / shots[0] < 17
    assert found["order_ratio"].sel(channel="antipair").values[:2] == pytest.approx([1.0, 0.25], rel=1e-6)
    assert found["shots"].attrs["long_name"]


def test_one_species_tubes_and_significance_are_refused() -> None:
    tube = solution(np.array([0.5]), dim=1)
    with pytest.raises(InputError, match="dim is 1"):
        gutz.shots_needed(tube, CAMERA, LAYOUT)
    with pytest.raises(InputError, match="significance is -1"):
        gutz.shots_needed(tube, CAMERA, LAYOUT, significance=-1)
    with pytest.raises(InputError, match="planes is 0"):
        gutz.shots_needed(solution(np.array([0.5]), dim=2), CAMERA, LAYOUT)


def test_limit_near_a_mean_field_transition() -> None:
    """M² = 1 - T/T_c near T_c: T_det = T_c (1 - A_min/A_0), T_c = 2."""
    T = np.linspace(0.1, 3.0, 59)
    order = np.clip(1 - T / 2.0, 0, None)
    with np.errstate(divide="ignore"):
        shots = 10.0 / order**2
    found = limit(T, 0.3 * T, shots, 1000.0, critical=1.2)
    assert found.T == pytest.approx(2.0 * (1 - 0.1), rel=2e-3)
    assert found.order_T == pytest.approx(2.0, rel=0.02)
    assert found.entropy == pytest.approx(0.3 * found.T, rel=1e-3)
    assert found.best == pytest.approx(found.T * 1.2 / found.order_T)
    assert found.T < found.order_T
    assert np.isnan(limit(T, T, shots, 5.0).T)
    with pytest.raises(InputError, match="shots is -5"):
        limit(T, T, shots, -5.0)


def test_order_in_planes_decays_within_what_the_picture_sees() -> None:
    sample = box(40, planes=3)
    full = float(in_planes(CAMERA, sample, "antipair", 0.0).regions["antipair"].total)
    some = float(in_planes(CAMERA, sample, "antipair", 0.25).regions["antipair"].total)
    none = float(in_planes(CAMERA, sample, "antipair", np.inf).regions["antipair"].total)
    assert full == pytest.approx(float(sample.regions["antipair"].total))
    # A resolution of a few sites loses less than the whole plane's 40^-0.25.
    assert 40**-0.25 * 0.8 < some / full < 1
    assert none < 0.1 * full


def gas(points: np.ndarray) -> list[Sample]:
    """Order that is best at 3 and falls off to both sides; settings of one knob."""
    return [box(30, height=float(np.exp(-0.5 * (x[0] - 3.0) ** 2)) if x[0] < 6 else 0.0) for x in points]


def test_better_settings_find_the_optimum_and_name_the_bound() -> None:
    knobs = [
        Knob("depth", 1.0, 5.0, 1.5),
        Knob("efficiency", 0.2, 0.9, 0.3, camera="efficiency"),
    ]
    found = improve(knobs, gas, CAMERA, "antipair", 5.0)
    assert found.values[0] == pytest.approx(3.0, abs=0.15)
    assert found.values[1] == pytest.approx(0.9)
    assert found.bounds == ("", "high")
    assert found.after < 0.1 * found.before
    by_name = {one.name: one.per_cent for one in found.sensitivities}
    # More atoms detected: shots fall as η^-2 without bunching noise, less with it.
    assert -2.0 < by_name["efficiency"] < -0.5
    assert by_name["resolution"] > 0


def test_calibration_errors_widen_the_shots() -> None:
    exact = spread(gas, np.array([3.0]), np.array([0.0]), CAMERA, "antipair", 5.0, draws=4)
    rough = spread(gas, np.array([5.5]), np.array([0.1]), CAMERA, "antipair", 5.0, draws=40)
    assert exact.ordered == 1.0 and exact.shots[0] == exact.shots[2]
    assert 0.6 < rough.ordered < 0.95  # 1 sigma is 0.55, the edge 0.5 away
    assert rough.shots[0] < rough.shots[1] < rough.shots[2]
    with pytest.raises(InputError, match="calibration error is -1"):
        spread(gas, np.array([3.0]), np.array([-1.0]), CAMERA, "antipair", 5.0)


@pytest.mark.parametrize(
    ("knob", "words"),
    [
        ({"low": 3.0, "high": 2.0, "start": 2.5}, "hold nothing"),
        ({"low": 1.0, "high": 2.0, "start": 2.5}, "outside its bounds"),
        ({"low": 1.0, "high": float("inf"), "start": 2.5}, "hold nothing"),
    ],
)
def test_knobs_without_sense(knob: dict[str, float], words: str) -> None:
    with pytest.raises(InputError, match=words):
        Knob("depth", **knob)


def test_nothing_to_improve() -> None:
    with pytest.raises(InputError, match="no knobs to turn"):
        improve([], gas, CAMERA, "antipair", 5.0)
    with pytest.raises(InputError, match="no order in this channel"):
        improve([Knob("depth", 5.0, 9.0, 8.0)], gas, CAMERA, "antipair", 5.0)


FILE = """
[mixture]
t = 0.02
U = 1.0
U12 = 0.5
mu = 0.25
n_max = 4
[ansatz]
kind = "dressed"
[imaging]
tof = "20 ms"
mass = "86.9 u"
spacing = "532 nm"
lattice_depth = 15
{more}
[axes.T]
parameter = "mixture.T"
values = [0.002, 0.004]
"""


def command(tmp_path: Path, more: str, *options: str) -> tuple[int, str]:
    file = tmp_path / "run.toml"
    file.write_text(FILE.format(more=more))
    result = CliRunner().invoke(cli.cli, ["detect", str(file), *options], standalone_mode=False)
    if result.exception is not None:
        return getattr(result.exception, "exit_code", 70), str(result.exception)
    return int(result.return_value or 0), result.output


@pytest.mark.parametrize(
    ("more", "words"),
    [
        ("efficiency = 1.5", "imaging.efficiency (near line 15): 1.5 is not allowed; it must be greater than 0"),
        ("efficiency = 0", "imaging.efficiency"),
        ('pixel = "200 um"\npicture = "1 mm"', "200 um is too large for a picture of 1000 um"),
        ("shots = -4", "imaging.shots (near line 15): -4 is not allowed; it must be a finite number, at least 1"),
        ('flight = "fast"', 'must be "free" or "lens"'),
        ("efficency = 0.5", 'unknown key; did you mean "efficiency"?'),
        ('detection = "counting"\nphotons = 100', "imaging.photons"),
        ("planes = 4", "imaging.planes"),
        ('resolution = "3 ms"', "imaging.resolution"),
    ],
)
def test_mistakes_in_the_file_are_named(tmp_path: Path, more: str, words: str) -> None:
    code, said = command(tmp_path, more)
    assert code == 2
    assert words in said


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (("--improve", "tof"), "--improve tof: has no bounds; write tof=low:high in ms"),
        (("--improve", "warp=1:2"), "--improve warp: is not a knob"),
        (("--improve", "tof=5-25"), "must be two numbers"),
        (("--improve", "tof=25:30"), "starts at 20, outside its bounds"),
        (("--at", "depth=3"), "--at depth: is not an axis"),
    ],
)
def test_mistakes_in_options_are_named(tmp_path: Path, options: tuple[str, ...], words: str) -> None:
    code, said = command(tmp_path, "", *options, *(("--at", "T=0.002") if options[0] == "--improve" else ()))
    assert code == 2
    assert words in said


@pytest.mark.slow
def test_the_command_end_to_end(tmp_path: Path) -> None:
    """Numbers, figure and pictures; the order falls with temperature and ends at 0.0049."""
    out, shots = tmp_path / "out", tmp_path / "shots.nc"
    code, said = command(
        tmp_path, "", "--json", "--out", str(out), "--shots-out", str(shots), "--pictures", "3", "--side", "32"
    )
    record = json.loads(said[said.index("{") :])
    assert code in (0, 1)
    assert (out / "detect.png").exists() and (out / "detect.nc").exists() and shots.exists()
    amplitude = np.array(record["amplitude"]["values"])[:, 1]
    assert 1e-5 < amplitude[1] < amplitude[0] < 1e-2


@pytest.mark.slow
def test_gradient_through_the_dressed_solution() -> None:
    """d log(shots)/dT through gutz.solve, against a difference of solutions."""
    from gutz.imaging.covariance import shots_for, signal
    from gutz.imaging.sample import uniform

    def log_shots(T: jax.Array) -> jax.Array:
        found = gutz.solve(gutz.Mixture(t=0.02, U=1.0, U12=0.5, mu=0.25, T=T, dim=3, n_max=4), ansatz="dressed")
        sample = uniform(found.outputs, (30.0,) * 3, RUBIDIUM, 532e-9, 15.0)
        return jnp.log(shots_for(CAMERA, signal(CAMERA, sample, "antipair", 16).snr, 5.0))

    slope = float(jax.grad(log_shots)(jnp.asarray(0.003)))
    change = float(log_shots(jnp.asarray(0.00301)) - log_shots(jnp.asarray(0.00299))) / 2e-5
    assert slope == pytest.approx(change, rel=1e-2)
    assert slope > 0
