"""The command line: exit codes and streams (F7), start-up (F8), environments (F10), help (F4), bounds (X8)."""

import json
import os
import re
import subprocess
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner

from gutz import cache, cli
from gutz.errors import DataError, OutputError, ResourceError

SCANS = Path(__file__).parents[1] / "scans"

SMALL = """\
[mixture]
species = 1
unit = "U"
U = 1.0
T = 0.05
n_max = 3

[axes.mu]
parameter = "mixture.mu"
start = 0.1
stop = 0.9
points = 4

[axes.t]
parameter = "mixture.t"
start = 0.01
stop = 0.05
points = 3
"""


@pytest.fixture(scope="session")
def compiled(tmp_path_factory):
    """One cache of compiled code for the session: jax reads its place once, when it is loaded."""
    return tmp_path_factory.mktemp("compiled")


@pytest.fixture(autouse=True)
def own_cache(monkeypatch, tmp_path, compiled):
    """No test touches the user's cache or the folder it was started in."""
    monkeypatch.setenv("JAX_COMPILATION_CACHE_DIR", str(compiled))
    monkeypatch.chdir(tmp_path)


@pytest.fixture
def file(tmp_path):
    path = tmp_path / "small.toml"
    path.write_text(SMALL)
    return path


def gutz(capfd, *arguments):
    """Run in this process; returns exit code, stdout, stderr."""
    with pytest.raises(SystemExit) as stop:
        cli.main([str(a) for a in arguments])
    out, err = capfd.readouterr()
    return stop.value.code, out, err


def python(code, **environment):
    return subprocess.run(
        [sys.executable, "-W", "error", "-c", code],
        capture_output=True, text=True, timeout=120,
        env={**os.environ, "PYTHONPATH": os.pathsep.join(sys.path), **environment},
    )  # fmt: skip


# F7: arguments, exit code, words on stderr. "FILE" is a good file.
MISTAKES = [
    (["nonsense"], 2, "No such command 'nonsense'"),
    (["--bogus"], 2, "No such option"),
    (["scan"], 2, "Missing argument 'FILE'"),
    (["scan", "nothing.toml"], 2, "nothing.toml: cannot be read (no such file or directory)"),
    (["scan", "."], 2, "is a folder"),
    (["check", "FILE", "--set", "mixture.T"], 2, "must look like section.key=value"),
    (["check", "FILE", "--set", "mixture.T=-1"], 2, "mixture.T (from --set): -1 is not allowed"),
    (["check", "FILE", "--set", "mixture.U=nan"], 2, "nan is not allowed"),
    (["check", "FILE", "--set", "axes.mu.points=1"], 2, "1 is not allowed"),
    (["check", "FILE", "--set", "axes.mu.points=0"], 2, "0 is not allowed"),
    (["check", "FILE", "--set", "axes.mu.points=-5"], 2, "-5 is not allowed"),
    (["check", "FILE", "--set", "axes.mu.points=1e9"], 2, "must be a whole number"),
    (["check", "FILE", "--set", "axes.mu.points=1000000000"], 2, "from 2 to 10,000,000"),
    (
        ["check", "FILE", "--set", "axes.mu.points=10000000", "--set", "axes.t.points=100"],
        2,
        "1,000,000,000 points; at most 100,000,000",
    ),
    (["check", "FILE", "--set", "mixture.n_max=41"], 2, "must be a whole number from 1 to 40"),
    (["check", "FILE", "--set", "mixture.species=2", "--set", "mixture.n_max=30"], 2, "n_max is 30"),
    (["check", "FILE", "--set", "mixture.species=2", "--set", "mixture.U12=-3"], 2, "collapses"),
    (["solve", "FILE"], 2, "the axes mu, t need a value each to choose one point: add --at mu=0.1 --at t=0.01"),
    (["solve", "FILE", "--at", "mu=0.4"], 2, "the axes t need a value"),
    (["solve", "FILE", "--at", "mu"], 2, "must be an axis and a number"),
    (["solve", "FILE", "--at", "mu=nan"], 2, "must be an axis and a number"),
    (["solve", "FILE", "--at", "mu=1", "--at", "mu=2"], 2, "is given twice"),
    (["solve", "FILE", "--at", "x=1", "--at", "mu=2", "--at", "t=1"], 2, "is not an axis of this file"),
    (["lattice", "FILE"], 2, "has no [lattice] section"),
    (["lattice", "RUBIDIUM", "--unit", "furlong"], 2, "must be one of Hz, kHz"),
    (["lattice", "RUBIDIUM", "--at", "x=1"], 2, "is not an axis of this file"),
    (["scan", "FILE", "--out", "a\u202eb"], 2, "invisible character U+202E"),
    (["scan", "FILE", "--out", "x" * 300], 2, "at most 255 bytes"),
    (["scan", "FILE", "--out", "small.toml"], 4, "small.toml: is a file"),
    (["scan", "FILE", "--out", "small.toml/below"], 4, "cannot be made"),
]


@pytest.mark.parametrize(
    "arguments, code, words", MISTAKES, ids=lambda v: " ".join(v)[:40] if isinstance(v, list) else None
)
def test_mistakes_have_a_code_words_and_an_empty_stdout(capfd, file, arguments, code, words):
    given = [{"FILE": file, "RUBIDIUM": SCANS / "rubidium-cubic.toml"}.get(a, a) for a in arguments]
    found, out, err = gutz(capfd, *given)
    assert (found, out) == (code, "")
    assert words in err
    assert len(err.splitlines()) <= 4
    assert "Traceback" not in err and "pydantic" not in err


@pytest.mark.parametrize(
    "error, code", [(DataError, 3), (OutputError, 4), (ResourceError, 5), (KeyboardInterrupt, 130)]
)
def test_every_kind_of_error_has_its_code(capfd, file, monkeypatch, error, code):
    from gutz.commands import check

    def fail(**options):
        raise error("it broke")

    monkeypatch.setattr(check, "run", fail)
    found, out, err = gutz(capfd, "check", file)
    assert (found, out) == (code, "")
    assert err.strip().startswith("gutz: ") and len(err.strip().splitlines()) == 1


def test_a_bug_is_one_sentence_and_a_file(capfd, file, monkeypatch, tmp_path):
    from gutz.commands import check

    monkeypatch.setenv("TMPDIR", str(tmp_path))
    monkeypatch.setattr(cli.tempfile, "tempdir", None)
    monkeypatch.setattr(check, "run", lambda **options: 1 / 0)
    found, out, err = gutz(capfd, "check", file)
    assert (found, out, len(err.splitlines())) == (70, "", 1)
    place = re.search(r"internal error \(ZeroDivisionError\); please report it with the file (\S+)", err)
    assert "ZeroDivisionError: division by zero" in Path(place[1]).read_text()
    found, out, err = gutz(capfd, "check", file, "--debug")
    assert found == 70 and "Traceback" in err


@pytest.mark.parametrize("name", sorted(path.name for path in SCANS.glob("*.toml")))
def test_the_scan_files_are_right(capfd, name):
    found, out, _ = gutz(capfd, "check", SCANS / name, "--json")
    assert found == 0
    record = json.loads(out)
    assert record["file"] == name
    # One cloud is made of thousands of points, and a detection curve of a few.
    text = (SCANS / name).read_text(encoding="utf-8")
    fewest = 1 if "[trap]" in text or "[imaging]" in text else 100
    assert record["points"] >= fewest and record["disk_bytes"] > record["points"] and len(record["sha256"]) == 64


@pytest.mark.parametrize("command", ["", "check", "lattice", "scan", "solve", "noise"])
def test_help_starts_with_an_example_that_is_real(command):
    """F4: the example names an existing file, command and options; it is parsed, not run."""
    result = CliRunner().invoke(cli.cli, [*command.split(), "--help"])
    assert result.exit_code == 0
    lines = [line.strip() for line in result.output.splitlines() if line.strip()]
    assert lines[1].startswith("Example: gutz ")
    words = lines[1].removeprefix("Example: gutz ").split()
    assert (SCANS.parent / words[1]).is_file()
    cli.cli.commands[words[0]].make_context(words[0], words[1:])


def test_help_loads_nothing_heavy():
    """F8: neither help nor version touches the numerics."""
    heavy = ("jax", "numpy", "scipy", "xarray", "matplotlib", "pydantic", "zarr", "rich")
    code = (
        "import sys, gutz.cli\n"
        "for words in (['--help'], ['scan', '--help'], ['--version']):\n"
        "    try: gutz.cli.main(words)\n"
        "    except SystemExit as stop: assert stop.code == 0\n"
        f"print(','.join(name for name in {heavy!r} if name in sys.modules), file=sys.stderr)"
    )
    result = python(code)
    assert result.returncode == 0
    assert result.stderr.strip() == ""
    assert re.search(r"^gutz \d+\.\d+\.\d+$", result.stdout, re.MULTILINE)


def test_check_does_not_load_the_solver():
    code = (
        "import sys, gutz.cli\n"
        f"try: gutz.cli.main(['check', {str(SCANS / 'rubidium-cubic.toml')!r}])\n"
        "except SystemExit as stop: assert stop.code == 0\n"
        "print([n for n in ('jax', 'xarray', 'matplotlib', 'zarr') if n in sys.modules], file=sys.stderr)"
    )
    result = python(code)
    assert result.stderr.splitlines()[-1] == "[]"
    assert "rubidium-cubic.toml is fine" in result.stdout


@pytest.mark.parametrize(
    "environment",
    [{"HOME": ""}, {"TERM": "dumb"}, {"LANG": "C", "LC_ALL": "C"}, {"NO_COLOR": "1"}, {"COLUMNS": "20"}],
    ids=lambda e: next(iter(e)),
)
def test_odd_environments(environment):
    """F10: the command line works, or says why in one sentence."""
    result = python(f"import gutz.cli; gutz.cli.main(['check', {str(SCANS / 'mott-lobes.toml')!r}])", **environment)
    assert result.returncode == 0, result.stderr
    assert "4,500" in result.stdout
    assert "\x1b" not in result.stdout


def test_32_bit_jax_is_refused_in_one_sentence(file):
    result = python(
        f"import gutz.cli; gutz.cli.main(['solve', {str(file)!r}, '--at', 'mu=0.4', '--at', 't=0.01'])",
        JAX_ENABLE_X64="",
    )
    assert result.returncode == 2
    assert result.stderr == "gutz: JAX_ENABLE_X64 is ''; gutz needs 64-bit numbers: set it to 1 or unset it\n"


def test_a_closed_pipe_is_no_error():
    code = f"{sys.executable} -m gutz.cli check {SCANS / 'mott-lobes.toml'} | true; exit ${{PIPESTATUS[0]}}"
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join(sys.path)}
    result = subprocess.run(["bash", "-c", code], capture_output=True, text=True, timeout=60, env=environment)
    assert result.returncode == 0
    assert "Traceback" not in result.stderr


def test_lattice_prints_what_optics_computes(capfd, tmp_path):
    path = SCANS / "rubidium-cubic.toml"
    found, out, _ = gutz(
        capfd,
        "lattice",
        path,
        "--json",
        "--unit",
        "E_R",
        "--set",
        "axes.depth.values=[10.0, 15.0]",
        "--set",
        "axes.depth.start=1",
    )
    assert found == 2
    found, out, _ = gutz(
        capfd,
        "lattice",
        path,
        "--json",
        "--unit",
        "E_R",
        "--set",
        "axes.depth.start=10",
        "--set",
        "axes.depth.stop=15",
        "--set",
        "axes.depth.points=2",
    )
    assert found == 0
    record = json.loads(out)
    # 4t/E_R at s = 10 and 15: Bloch, Dalibard, Zwerger, Rev. Mod. Phys. 80, 885 (2008) (from memory).
    assert [4 * t for t in record["columns"]["t1"]] == pytest.approx([0.076730, 0.026075], abs=2e-6)
    assert record["axis"]["values"] == [10.0, 15.0]
    found, out, err = gutz(capfd, "lattice", path, "--out", tmp_path / "figure")
    assert found == 0
    assert out.splitlines()[0].split()[:2] == ["depth", "(E_R)"]
    assert sorted(p.name for p in (tmp_path / "figure").iterdir()) == ["lattice.pdf", "lattice.png"]
    assert gutz(capfd, "lattice", path, "--out", tmp_path / "figure")[0] == 4
    assert gutz(capfd, "lattice", path, "--out", tmp_path / "figure", "--force")[0] == 0


@pytest.mark.slow
def test_a_scan_from_file_to_figure(capfd, file, tmp_path):
    """The whole way with the real solver: exit code, files, JSON; then one of its points again with solve."""
    from gutz.scan import open_run

    found, out, err = gutz(capfd, "scan", file, "--out", "run", "--json", "--netcdf", "--quiet")
    record = json.loads(out)
    assert found == (1 if record["untrusted"] else 0)
    assert err == ""
    assert record["points"] == 12
    for name in record["files"]:
        assert (tmp_path / "run" / name).exists()
    assert {"data.zarr", "data.nc", "phase.png", "phase.pdf"} <= set(record["files"])
    run = open_run(tmp_path / "run")
    found, out, _ = gutz(capfd, "solve", file, "--at", "mu=0.1", "--at", "t=0.05", "--json")
    point = json.loads(out)
    assert point["variables"]["free_energy"]["value"] == pytest.approx(run.free_energy.values[0, 2], rel=1e-10)
    assert point["phase"] == "superfluid"
    found, out, _ = gutz(capfd, "solve", file, "--at", "mu=0.1", "--at", "t=0.05")
    assert out.splitlines()[0].startswith("mu = 0.1 U, t = 0.05 U")
    assert "superfluid" in out
    assert gutz(capfd, "scan", file, "--out", "run")[0] == 4
    found, out, err = gutz(capfd, "scan", file, "--out", "run", "--resume")
    assert "0 of 1 chunks computed" in out
    assert gutz(capfd, "scan", file, "--out", "run", "--resume", "--set", "mixture.T=0.06")[0] == 4


@pytest.mark.slow
def test_the_lobes_of_mean_field_theory_come_out(capfd, tmp_path):
    """z t/U = (n - mu/U)(mu/U - n + 1)/(1 + mu/U), Fisher et al., Phys. Rev. B 40, 546 (1989): every point of a grid
    lies on the right side, through the file, the store and the reader."""
    from gutz.phases import Phase
    from gutz.scan import open_run

    arguments = [
        "--set",
        "axes.t.points=9",
        "--set",
        "axes.mu.points=7",
        "--set",
        "axes.mu.stop=0.98",
        "--out",
        "lobes",
    ]
    found, _, err = gutz(capfd, "scan", SCANS / "mott-lobes.toml", "--quiet", *arguments)
    assert (found, err) == (0, "")
    run = open_run(tmp_path / "lobes")
    border = (1 - run.mu) * run.mu / (1 + run.mu) / 6
    insulator = run.t < border
    assert 0 < insulator.sum() < insulator.size
    assert (run.phase == int(Phase.MOTT)).equals(insulator.transpose("t", "mu"))


# X11: the cache of compiled code.
def test_the_cache_folder_is_private(tmp_path):
    assert cache._prepare(tmp_path / "a" / "b") == ""
    assert (tmp_path / "a" / "b").stat().st_mode & 0o777 == 0o700
    assert cache._prepare(tmp_path / "a" / "b") == ""


def test_unsafe_cache_folders_are_refused(tmp_path, monkeypatch):
    open_to_all, link, file = tmp_path / "open", tmp_path / "link", tmp_path / "file"
    open_to_all.mkdir()
    open_to_all.chmod(0o777)
    link.symlink_to(tmp_path)
    file.write_text("")
    assert "written by other users" in cache._prepare(open_to_all)
    assert "is a link" in cache._prepare(link)
    assert "cannot be made" in cache._prepare(file)
    mine = tmp_path / "mine"
    assert cache._prepare(mine) == ""
    monkeypatch.setattr(cache.os, "getuid", lambda: mine.stat().st_uid + 1)
    assert "another user" in cache._prepare(mine)


def test_without_a_cache_the_run_goes_on(monkeypatch, tmp_path):
    monkeypatch.delenv("JAX_COMPILATION_CACHE_DIR")
    monkeypatch.setattr(cache, "user_cache_path", lambda name: tmp_path / name)
    (tmp_path / "gutz").mkdir()
    (tmp_path / "gutz" / "compiled").symlink_to(tmp_path)
    assert "compiled code is not kept" in cache.enable()
    assert "JAX_COMPILATION_CACHE_DIR" not in os.environ
    (tmp_path / "gutz" / "compiled").unlink()
    assert cache.enable() == ""
    assert os.environ.pop("JAX_COMPILATION_CACHE_DIR") == str(tmp_path / "gutz" / "compiled")
    os.environ.pop("JAX_PERSISTENT_CACHE_MIN_COMPILE_TIME_SECS")
    os.environ.pop("JAX_COMPILATION_CACHE_MAX_SIZE")
