"""`gutz noise`: what it prints, writes and refuses."""

import json
import re

import numpy as np
import pytest

from gutz import cli
from gutz.scan.export import read_netcdf

CHAIN = """\
[mixture]
species = 1
unit = "U"
U = 1.0
T = 0.0
n_max = 6
dim = 1

[axes.mu]
parameter = "mixture.mu"
start = 0.1
stop = 0.9
points = 4

[axes.t]
parameter = "mixture.t"
start = 0.01
stop = 0.5
points = 3

[output]
title = "A chain"
"""


@pytest.fixture(autouse=True)
def elsewhere(monkeypatch, tmp_path, tmp_path_factory):
    monkeypatch.setenv("JAX_COMPILATION_CACHE_DIR", str(tmp_path_factory.mktemp("compiled")))
    monkeypatch.chdir(tmp_path)


@pytest.fixture
def file(tmp_path):
    path = tmp_path / "chain.toml"
    path.write_text(CHAIN)
    return path


def gutz(capfd, *arguments):
    with pytest.raises(SystemExit) as stop:
        cli.main([str(a) for a in arguments])
    out, err = capfd.readouterr()
    return stop.value.code, out, err


def test_from_file_to_figure(capfd, file, tmp_path):
    point = ("--at", "mu=0.4", "--at", "t=0.01", "--size", "12", "--out", "noise")
    code, out, err = gutz(capfd, "noise", file, *point)
    assert code == 0
    assert "bunching" in out and "validity: good" in out and "Mott insulator" in out
    files = {path.name for path in (tmp_path / "noise").iterdir()}
    assert files == {"noise.nc", "noise.png", "noise.pdf"}
    dataset = read_netcdf(tmp_path / "noise" / "noise.nc")
    assert dataset["noise"].shape == (1, 1, 12, 12)
    assert float(dataset["momentum_distribution"].sum()) == pytest.approx(12.0)
    assert float(dataset["mu"]) == 0.4
    code, _, err = gutz(capfd, "noise", file, *point)
    assert code == 4
    assert "--force" in err
    assert gutz(capfd, "noise", file, *point, "--force", "--log")[0] == 0


def test_json_is_json_and_nothing_else(capfd, file):
    code, out, err = gutz(capfd, "noise", file, "--at", "mu=0.4", "--at", "t=0.1", "--size", "16", "--json")
    assert err == ""
    record = json.loads(out)
    names = {feature["name"] for feature in record["features"]}
    assert {"condensate peak of n(k)", "negative lines", "pairing of one species"} <= names
    # A superfluid close to the transition in one dimension: converged, but no map to rely on.
    assert record["trusted"]
    assert (record["validity"], code) == ("qualitative", 1)
    assert all(np.isfinite(feature["height"]) for feature in record["features"])


@pytest.mark.parametrize(
    ("arguments", "code", "words"),
    [
        (("--at", "mu=0.4", "--at", "t=0.01", "--size", "large"), 2, "--size large: must be a number of sites"),
        (("--at", "mu=0.4", "--at", "t=0.01", "--size", "8x8"), 2, "size has 2 entries; it needs 1"),
        (("--at", "mu=0.4", "--at", "t=0.01", "--size", "99999999"), 5, "99,999,999 sites"),
        (("--at", "mu=0.4"), 2, "t"),
    ],
)
def test_mistakes_are_one_sentence(capfd, file, arguments, code, words):
    found, out, err = gutz(capfd, "noise", file, *arguments)
    assert (found, out) == (code, "")
    assert words in err
    assert "Traceback" not in err
    assert len(re.findall(r"^gutz: ", err, re.M)) == 1
