"""`gutz cloud` and the [trap] section: results, files, figures, and words for mistakes."""

import json
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from click.testing import CliRunner

from gutz import cli
from gutz.scan import clouds, document, spec
from gutz.scan.plan import plan

SCANS = Path(__file__).parents[2] / "scans"

FILE = """\
[mixture]
species = 1
unit = "U"
t = 0.03
U = 1.0
T = 0.08
n_max = 4

[trap]
N = 800
curvature = 0.01
wanted = "superfluid"

[axes.T]
parameter = "mixture.T"
start = 0.04
stop = 0.08
points = 2
"""


@pytest.fixture(autouse=True)
def elsewhere(monkeypatch, tmp_path):
    monkeypatch.setenv("JAX_COMPILATION_CACHE_DIR", str(tmp_path / "cache"))
    monkeypatch.chdir(tmp_path)


@pytest.fixture
def file(tmp_path):
    path = tmp_path / "cloud.toml"
    path.write_text(FILE)
    return path


def run(*arguments):
    return CliRunner().invoke(cli.cli, [*map(str, arguments)], standalone_mode=False)


def test_a_curve_with_numbers_and_figures(file, tmp_path):
    result = run("cloud", file, "--out", "made", "--json", "--quiet")
    assert result.exception is None and result.return_value == 0
    found = json.loads(result.stdout)
    assert [c["atoms"][0] for c in found["clouds"]] == pytest.approx([800, 800], rel=1e-4)
    assert found["phonon_entropy"].startswith("included")
    colder, warmer = found["clouds"]
    assert colder["entropy_per_particle"] < warmer["entropy_per_particle"]
    # The entropy at which the superfluid goes does not depend on how warm the cloud is now.
    assert colder["margin"]["critical_entropy"] == pytest.approx(warmer["margin"]["critical_entropy"], rel=0.05)
    for name in ("clouds.nc", "profiles.nc", "cloud.png", "cloud.pdf", "loading.png", "loading.pdf"):
        assert (tmp_path / "made" / name).stat().st_size > 1000
    with xr.open_dataset(tmp_path / "made" / "clouds.nc", engine="h5netcdf") as table:
        np.testing.assert_allclose(table["fraction"].sum("phase"), 1.0, atol=1e-4)
    again = run("cloud", file, "--out", "made", "--quiet")
    assert "holds clouds already" in str(again.exception)


def test_one_cloud_is_told_shell_by_shell(file):
    result = run("cloud", file, "--at", "T=0.04", "--quiet", "--set", "trap.wanted=normal")
    assert result.exception is None
    assert "superfluid" in result.stdout and "Entropy per particle" in result.stdout


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ("trap.N=0", "trap.N (from --set): 0 is not allowed; it must be a finite number, greater than 0"),
        ("trap.curvature=-1", "must be a finite number, greater than 0"),
        ("mixture.mu=0.2", "must be left out, because [trap] gives atom numbers"),
        ("trap.frequency=60 Hz", "trap.frequency (from --set): must be left out without [lattice]"),
        ("trap.box=20", "holds nothing: give either curvature or box, and not both"),
        ("trap.wanted=superfluit", 'must be "normal"'),
        ("trap.gravity=z", "must be left out but for two species"),
        ("trap.curvatur=1", 'did you mean "curvature"?'),
        ("mixture.entropy=0.5", "must be left out where mixture.T is given"),
    ],
)
def test_mistakes_are_said_in_a_sentence(file, change, words):
    result = run("cloud", file, "--set", change)
    assert words in str(result.exception)


def test_other_commands_point_the_way(file):
    for command in ("solve", "scan"):
        assert "use: gutz cloud" in str(run(command, file).exception)
    assert run("check", file).exception is None


def test_sites_need_one_cloud(file):
    assert "--sites solves one cloud at a time" in str(run("cloud", file, "--sites").exception)


def read(*overrides, name="rubidium-cloud.toml"):
    return plan(spec.check(document.read(SCANS / name, overrides)))


def test_laboratory_units_become_sites_and_recoils():
    """m omega² d²/2 in recoil energies, and g/omega² in sites, computed by hand from CODATA values."""
    omega, d = 2 * np.pi * 16.0, 532e-9
    mass, h = 86.909180520 * 1.66053906660e-27, 6.62607015e-34
    recoil = h**2 / (2 * mass * 1064e-9**2)
    first = next(clouds.points(read("axes.depth.points=2")))
    np.testing.assert_allclose(first.point.trap.curvature, 0.5 * mass * omega**2 * d**2 / recoil, rtol=1e-6)
    assert first.point.trap.ratio is not None
    apart = next(
        clouds.points(
            read(
                "axes.depth.points=2",
                "trap.gravity=z",
                'trap.frequency=[["90 Hz","90 Hz","90 Hz"],["80 Hz","80 Hz","80 Hz"]]',
            )
        )
    )
    sag = 9.80665 / (2 * np.pi * 90) ** 2 - 9.80665 / (2 * np.pi * 80) ** 2
    np.testing.assert_allclose(apart.point.trap.centre[1], [0, 0, sag / d], rtol=1e-9)
    assert apart.point.trap.ratio is None


def test_axes_over_the_trap():
    file = read(
        "axes.n.parameter=trap.N.2", "axes.n.values=[1e4, 2e4]", "axes.f.parameter=trap.frequency.z",
        "axes.f.values=[30.0, 50.0]", "axes.f.unit=Hz", "axes.depth.points=2",
    )  # fmt: skip
    asked = list(clouds.points(file))
    assert len(asked) == 8
    assert {tuple(p.point.atoms) for p in asked} == {(50000.0, 10000.0), (50000.0, 20000.0)}
    ratios = {round(float(p.point.trap.curvature[0, 2] / p.point.trap.curvature[0, 0]), 4) for p in asked}
    assert ratios == {round((30 / 16) ** 2, 4), round((50 / 16) ** 2, 4)}
