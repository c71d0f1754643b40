"""Traced boundaries: exact curves, closed forms of mean field, first order against an independent loop, files."""

import sys
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from test_cli import compiled, gutz, own_cache  # noqa: F401  (fixtures)

import gutz as package
from gutz import boundary
from gutz.boundary import Kind, Side, Solved
from gutz.errors import InputError
from gutz.phases import Phase
from gutz.scan import export

sys.path.insert(0, str(Path(__file__).parent / "bench"))
import plain_loop  # noqa: E402  (the plain numpy loop the benchmarks compare with)

UNIT = Side(0.0, 1.0)


def drawn(label, order=None):
    """A solver of invented phases: label(x, y) and, if given, order(x, y)."""

    def solve(x, y):
        phase = np.asarray(label(x, y)).astype(int)
        values = phase.astype(float) if order is None else order(x, y)
        return Solved(phase, np.asarray(values, float)[:, None], np.zeros(x.shape, bool))

    return solve


def test_circle_is_one_closed_curve_within_its_tolerances():
    found = boundary.trace(drawn(lambda x, y: (x - 0.5) ** 2 + (y - 0.45) ** 2 < 0.09), UNIT, UNIT)
    (curve,) = found.curves
    assert curve.closed and set(curve.kind) == {Kind.FIRST_ORDER}
    r = np.hypot(curve.x - 0.5, curve.y - 0.45)
    assert np.abs(r - 0.3).max() < boundary.LOCATION
    # The straight pieces stay within the straightness asked for: sagitta r - sqrt(r² - (c/2)²).
    chord = np.hypot(np.diff(curve.x), np.diff(curve.y))
    assert (0.3 - np.sqrt(0.09 - chord**2 / 4)).max() < boundary.STRAIGHTNESS
    # A square grid that resolves one part in a million has 1e12 points; even one as fine as the straightness has 1e6.
    assert found.solves * 50 < 1e6


def test_narrow_wedge_is_followed_to_its_point():
    found = boundary.trace(drawn(lambda x, y: np.abs(y - 0.53) < 0.3 * x**2), UNIT, UNIT)
    nearest = min(curve.x.min() for curve in found.curves)
    assert nearest < 0.1
    for curve in found.curves:
        # Distance from the edge of the wedge along y, where it is at most 0.31 times as steep as long.
        assert np.abs(np.abs(curve.y - 0.53) - 0.3 * curve.x**2).max() < 2 * boundary.LOCATION


def test_three_phases_meet():
    found = boundary.trace(drawn(lambda x, y: np.where(y > 0.4 + 0.2 * x, 0, np.where(x > 0.52, 1, 2))), UNIT, UNIT)
    assert sorted(curve.phases for curve in found.curves) == [(0, 1), (0, 2), (1, 2)]
    meeting = np.array([0.52, 0.504])
    for curve in found.curves:
        ends = np.array([[curve.x[i], curve.y[i]] for i in (0, -1)])
        assert np.linalg.norm(ends - meeting, axis=-1).min() < 0.02
        toward = curve.across[len(curve.x) // 2]
        x, y = curve.x[len(curve.x) // 2] + 1e-3 * toward[0], curve.y[len(curve.x) // 2] + 1e-3 * toward[1]
        assert (0 if y > 0.4 + 0.2 * x else 1 if x > 0.52 else 2) == curve.phases[1]


@pytest.mark.parametrize(
    ("order", "kind"),
    [
        (lambda x, y: np.sqrt(np.maximum(x + y - 1.1, 0)), Kind.ONSET),
        (lambda x, y: np.where(x + y > 1.1, 0.3 + x + y, 0.0), Kind.FIRST_ORDER),
        (lambda x, y: np.zeros_like(x), Kind.CROSSOVER),
        (lambda x, y: 0.3 + 0.1 * x, Kind.DIMENSION),
    ],
)
def test_kind_follows_from_how_the_order_changes(order, kind):
    found = boundary.trace(drawn(lambda x, y: x + y > 1.1, order), UNIT, UNIT)
    assert {int(k) for curve in found.curves for k in curve.kind} == {kind}


def test_logarithmic_side_and_nothing_to_find():
    found = boundary.trace(drawn(lambda x, y: x > 0.03), Side(1e-3, 1.0, True), UNIT, nodes=5)
    np.testing.assert_allclose(found.curves[0].x, 0.03, rtol=1e-5)
    assert boundary.trace(drawn(lambda x, y: x < 5), UNIT, UNIT).curves == ()


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"nodes": 1}, "nodes is 1; it must be at least 2"),
        ({"location": 0.0}, "location is 0; it must lie between 0 and 0.1"),
        ({"straightness": 0.5}, "straightness is 0.5"),
        ({"x": Side(1.0, 1.0)}, "x runs from 1 to 1"),
        ({"y": Side(-1.0, 1.0, True)}, "y runs from -1 to 1"),
    ],
)
def test_mistakes_are_named(changes, words):
    with pytest.raises(InputError, match=words):
        boundary.trace(drawn(lambda x, y: x > 0.5), **({"x": UNIT, "y": UNIT} | changes))


def solver(**fixed):
    def solve(x, y):
        sol = package.solve(package.Mixture(t=x, U=1.0, n_max=3, **fixed, **{fixed_y(fixed): y}))
        return Solved(np.asarray(sol.phase).astype(int), np.asarray(sol.order_parameter), np.zeros(x.shape, bool))

    return solve


def fixed_y(fixed):
    return "T" if "mu" in fixed else "mu"


def test_mott_lobe_lies_on_its_closed_form():
    """Fisher et al., PRB 40, 546 (1989): z t/U = (n - mu/U)(mu/U - n + 1)/(1 + mu/U)."""
    t, mu = Side(0.002, 0.04), Side(0.05, 0.95)
    found = boundary.trace(solver(species=1, dim=3), t, mu, nodes=9)
    assert {curve.phases for curve in found.curves} == {(Phase.MOTT, Phase.SUPERFLUID)}
    for curve in found.curves:
        exact = (1 - curve.y) * curve.y / (1 + curve.y) / 6
        slope = (1 - 2 * curve.y - curve.y**2) / (1 + curve.y) ** 2 / 6 * (mu.high - mu.low) / (t.high - t.low)
        away = np.abs(curve.x - exact) / (t.high - t.low) / np.hypot(1.0, slope)
        assert away.max() < boundary.LOCATION
        assert set(curve.kind) == {Kind.ONSET}


def test_first_order_line_is_where_two_free_energies_agree():
    """U12 = U/2, one atom per site: superfluid and normal minima of an independent numpy loop at the traced points."""
    found = boundary.trace(solver(U12=0.5, mu=0.25, dim=3), Side(0.02, 0.034), Side(0.004, 0.03), nodes=5)
    curve = max((c for c in found.curves if Phase.SUPERFLUID in c.phases), key=lambda c: len(c.x))
    first = curve.kind == Kind.FIRST_ORDER
    assert first.sum() > 5
    t, T = curve.x[first], curve.y[first]
    energy = plain_loop.site_energies(np.ones((t.size, 2)), np.full(t.size, 0.5), np.full((t.size, 2), 0.25), 3)
    normal = -T * np.log(np.exp(-energy / T[:, None]).sum(-1))
    for k in range(t.size):
        zt = np.full((1, 2), 6 * t[k])
        _, ordered, _ = plain_loop.loop(energy[k : k + 1], zt, T[k], 3)
        # Slopes of F differ by about z phi²: one part in a million of the range of t moves F by 1e-8.
        assert abs(ordered[0] - normal[k]) < 5e-8


FILE = """
[mixture]
U = 1.0
species = 1
dim = 3
n_max = 6

[axes.t]
parameter = "mixture.t"
start = 0.002
stop = 0.04
points = 6

[axes.mu]
parameter = "mixture.mu"
start = 0.05
stop = 0.95
points = 5

[axes.T]
parameter = "mixture.T"
values = [0.0, 0.02]
"""


@pytest.fixture
def file(tmp_path):
    path = tmp_path / "lobe.toml"
    path.write_text(FILE)
    return path


def test_command_writes_curves_and_figure_and_draws_over_a_run(capfd, file):
    options = ("--nodes", 5, "--straightness", 0.01, "--out", "there", "--json")
    code, out, err = gutz(capfd, "boundary", file, "--at", "T=0", *options)
    assert code == 0 and '"phases": [' in out and err == ""
    data = export.read_netcdf(file.parent / "there" / "boundary.nc")
    assert isinstance(data, xr.Dataset) and set(data.dims) >= {"point", "solved"}
    exact = (1 - data["mu"]) * data["mu"] / (1 + data["mu"]) / 6
    assert float(np.abs(data["t"] - exact).max()) < 1e-6
    assert (file.parent / "there" / "boundary.png").stat().st_size > 10_000
    code, _, err = gutz(capfd, "boundary", file, "--at", "T=0", *options)
    assert code == 4 and "holds boundary.nc already" in err

    plain = file.parent / "plain.toml"
    plain.write_text(FILE.split("[axes.T]")[0])
    assert gutz(capfd, "scan", plain, "--quiet")[0] == 0
    before = (file.parent / "plain" / "phase.png").read_bytes()
    assert gutz(capfd, "boundary", plain, *options[:4])[0] == 0
    assert (file.parent / "plain" / "phase.png").read_bytes() != before


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ((), "the axis T needs a value: add --at T=0"),
        (("--axes", "t", "t", "--at", "T=0"), '"t" is given for both directions'),
        (("--axes", "t", "x", "--at", "T=0"), '"x" is not an axis of this file; its axes are t, mu, T'),
        (("--at", "T=0", "--at", "mu=0.3"), "two axes are needed"),
        (("--axes", "t", "mu", "--at", "T=0", "--at", "t=0.01"), "boundaries are traced along this axis"),
        (("--at", "T=0", "--nodes", "1"), "nodes is 1; it must be at least 2"),
    ],
)
def test_mistakes_cost_one_sentence(capfd, file, arguments, words):
    code, out, err = gutz(capfd, "boundary", file, *arguments)
    assert code == 2 and out == "" and words in err and err.count("\n") <= 2
    assert not (file.parent / "lobe").exists()
