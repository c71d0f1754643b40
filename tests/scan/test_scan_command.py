"""The options of `gutz scan`: estimates without computing, words on rate and time left, refusals."""

import json
import os
import subprocess
import sys

import pytest

from gutz import cli, console
from gutz.scan import document, estimate, plan, spec


def said(capfd, *arguments):
    code = cli._run([str(part) for part in arguments])
    return code, *capfd.readouterr()


def test_an_estimate_computes_nothing_and_loads_no_numerics(mixture_file, tmp_path):
    code = (
        "import sys\n"
        "from gutz import cli\n"
        f"code = cli._run(['scan', {str(mixture_file)!r}, '--estimate', '--json'])\n"
        "assert not {'jax', 'xarray', 'zarr', 'distributed'} & sys.modules.keys()\n"
        "sys.exit(code)"
    )
    done = subprocess.run(
        [sys.executable, "-c", code],
        capture_output=True,
        text=True,
        cwd=tmp_path,
        env={**os.environ, "PYTHONPATH": os.pathsep.join(sys.path)},
    )
    assert done.returncode == 0, done.stderr
    found = json.loads(done.stdout)
    assert found["points"] == 1200 and found["chunks"] == 5 and found["workers"] == 0
    assert [path.name for path in tmp_path.iterdir()] == ["mixture.toml"]


def test_worker_processes_are_started_where_they_pay(mixture_file, monkeypatch):
    def full(*overrides):
        return plan.plan(spec.check(document.read(mixture_file, overrides)))

    monkeypatch.setattr(estimate, "usable_cores", lambda: [0, 1, 2])
    assert estimate.automatic_workers(full()) == 0
    assert estimate.automatic_workers(full("axes.mu.points=4000", "axes.hop.points=40")) == 3
    monkeypatch.setattr(estimate, "usable_cores", lambda: [5])
    assert estimate.automatic_workers(full("axes.mu.points=4000", "axes.hop.points=40")) == 0
    assert estimate.time_limit(full()) > 3600
    assert estimate.seconds_per_point(full("ansatz.kind=dressed")) > 3 * estimate.seconds_per_point(full())


@pytest.mark.parametrize(
    "options, words",
    [
        (["--workers", "-1"], "'--workers': -1 is not in the range"),
        (["--workers", "two"], "'two' is not a valid integer"),
        (["--nodes", "9"], "--nodes goes with --adaptive"),
        (["--adaptive", "--nodes", "1"], "1 is not in the range"),
        (["--adaptive", "--netcdf"], "--netcdf does not go with --adaptive"),
        (["--chunk-limit", "0"], "0.0 is not in the range"),
        (["--scheduler"], "requires an argument"),
    ],
)
def test_wrong_options_are_refused(capfd, mixture_file, options, words):
    code, out, err = said(capfd, "scan", mixture_file, *options)
    assert (code, out) == (2, "") and words in err and len(err.splitlines()) <= 3


def test_the_log_tells_rate_and_time_left(capfd, monkeypatch):
    """A chunk of 100 points every 10 s: 10 points per s; the first report only starts the clock."""
    now = [0.0]
    monkeypatch.setattr(console.time, "monotonic", lambda: now[0])
    with console.progress("mine", False, 1000) as progress:
        for done in range(1, 11):
            now[0] += 10.0
            progress(done, 10)
    lines = capfd.readouterr().err.splitlines()
    assert lines[0] == "mine: 3 of 10 chunks done, 10 points per s, 70 s left"
    assert lines[1] == "mine: 6 of 10 chunks done, 10 points per s, 40 s left"
    with console.progress("mine", False, what="points needed so far") as progress:
        for done in range(1, 11):
            now[0] += 10.0
            progress(done, 10 + done)
    assert capfd.readouterr().err.splitlines()[0] == "mine: 3 of 13 points needed so far done, 0.1 per s"


@pytest.mark.slow
def test_a_refined_scan_from_file_to_figure(capfd, mixture_file, tmp_path, monkeypatch):
    from test_adaptive import labelled

    from gutz.scan import chunk, export

    monkeypatch.setattr(chunk, "solve", labelled)
    monkeypatch.setenv("JAX_COMPILATION_CACHE_DIR", str(tmp_path / "compiled"))
    monkeypatch.chdir(tmp_path)
    given = ("--adaptive", "--nodes", "5", "--out", "run", "--set", 'output.figures=["phase"]')
    code, out, _ = said(capfd, "scan", mixture_file, *given, "--quiet", "--json")
    found = json.loads(out)
    assert code == 0 and found["untrusted"] == 0 and found["solves"] < found["points"] == 1200
    assert found["files"] == ["adaptive.nc", "phase.png", "phase.pdf"]
    assert int(export.read_netcdf(tmp_path / "run" / "adaptive.nc").solved.sum()) == found["solves"]
    code, out, _ = said(capfd, "scan", mixture_file, *given, "--resume")
    assert code == 0 and ", 0 of them in these" in out
    assert said(capfd, "scan", mixture_file, *given)[0] == 4
