"""The store: what is written is read, damage is found, foreign data is refused, stopping loses nothing."""

import getpass
import json
import os
import random
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from gutz.errors import DataError, OutputError
from gutz.scan import document, open_run, plan, schema, spec, store
from gutz.variables import VARIABLES

HERE = Path(__file__).parent


@pytest.fixture
def finished(quick, mixture_file, tmp_path):
    outcome = quick.run(mixture_file, tmp_path / "out")
    assert outcome.computed == outcome.chunks > 3
    return tmp_path / "out"


def pieces(folder):
    return sorted(path for path in (folder / "data.zarr").rglob("*") if path.is_file() and path.name != "zarr.json")


def same_bytes(a, b):
    left, right = pieces(a), pieces(b)
    assert [p.relative_to(a) for p in left] == [p.relative_to(b) for p in right]
    return all(x.read_bytes() == y.read_bytes() for x, y in zip(left, right, strict=True))


def test_a_run_reads_back_complete(finished):
    run = open_run(finished)
    assert run.sizes == {"mu": 40, "hop": 30, "species": 2, "species_": 2, "direction": 3}
    expected = {name for name in VARIABLES if name not in ("mu", "dressing")} | {"t", "U", "U12"}
    assert set(run.data_vars) == expected
    for name, variable in VARIABLES.items():
        if name in run:
            assert run[name].dtype == (variable.dtype if name != "mu" else "float64")
            assert {"units", "long_name"} <= run[name].attrs.keys()
    assert run.T.attrs["units"] == "U"
    assert run.compressibility.attrs["units"] == "1 / U"
    assert run.phase.attrs["flag_meanings"].split()[3] == "Mott_insulator"
    assert run.status.min() == 0
    assert np.isnan(run.compressibility).all()


def test_the_numbers_are_those_of_the_solver(finished):
    """Every chunk lands where its parameters are: recomputed here point by point from the coordinates."""
    run = open_run(finished)
    number = 1 + [*VARIABLES].index("energy")
    seed = 6 * run.hop * 2 + 2 * run.mu + 0.1
    assert np.allclose(run.energy, np.sin(number * seed).transpose("mu", "hop"), atol=1e-12)
    assert np.array_equal(run.t.isel(species=0, direction=0), np.broadcast_to(run.hop, (40, 30)))


def test_any_xarray_opens_it(finished):
    plain = xr.open_zarr(finished / "data.zarr", chunks=None)
    assert plain.phase.dtype == np.int8
    assert plain.attrs["axes"] == ["mu", "hop"]


def test_provenance_says_what_and_not_who(finished, mixture_file):
    """X10: no user, host or path; the file's text and hash are there."""
    attributes = open_run(finished).attrs
    assert attributes["config_toml"] == mixture_file.read_text()
    assert len(attributes["config_sha256"]) == 64
    assert attributes["source"].startswith("gutz ")
    everything = json.dumps(attributes)
    for secret in (str(finished.parent), str(Path.home()), os.uname().nodename, getpass.getuser()):
        assert secret not in everything


def test_only_some_variables_can_be_read(finished):
    assert set(open_run(finished, ["phase"]).data_vars) == {"phase", "status"}


def test_writing_twice_gives_the_same_bytes(quick, mixture_file, tmp_path):
    """K12: data files; descriptions differ in their date only."""
    for name in ("a", "b"):
        quick.run(mixture_file, tmp_path / name)
    assert same_bytes(tmp_path / "a", tmp_path / "b")


def test_every_flipped_bit_is_found(finished, tmp_path):
    """K5: 30 single-bit flips, in data and in descriptions: refused, or the numbers are untouched."""
    good = open_run(finished)
    files = [p for p in (finished / "data.zarr").rglob("*") if p.is_file()]
    rng = random.Random(3)
    refused = 0
    for _ in range(30):
        path = rng.choice(files)
        whole = path.read_bytes()
        broken = bytearray(whole)
        broken[rng.randrange(len(broken))] ^= 1 << rng.randrange(8)
        path.write_bytes(broken)
        try:
            assert open_run(finished).identical(good)
        except DataError as error:
            refused += 1
            assert "\n" not in str(error)
        path.write_bytes(whole)
    # A flip in the gathered descriptions of the root, which this reader does not use, is harmless.
    assert refused >= 27


def test_every_truncation_is_found(finished):
    """K5: cut chunks and descriptions at 20 positions."""
    files = [p for p in (finished / "data.zarr").rglob("*") if p.is_file() and p.stat().st_size > 1]
    rng = random.Random(4)
    for _ in range(20):
        path = rng.choice(files)
        whole = path.read_bytes()
        path.write_bytes(whole[: rng.randrange(len(whole))])
        with pytest.raises(DataError):
            open_run(finished)
        path.write_bytes(whole)


def test_a_missing_piece_is_found_and_computed_again(finished, quick, mixture_file):
    before = {p: p.read_bytes() for p in pieces(finished)}
    (finished / "data.zarr/energy/c/1/0").unlink()
    with pytest.raises(DataError, match="a piece of energy is missing; --resume computes it again"):
        open_run(finished)
    outcome = quick.run(mixture_file, finished, resume=True)
    assert outcome.computed == 1
    assert {p: p.read_bytes() for p in pieces(finished)} == before


def test_damaged_chunks_are_computed_again(finished, quick, mixture_file):
    before = {p: p.read_bytes() for p in pieces(finished)}
    for name in ("energy/c/0/0", "status/c/2/0"):
        path = finished / "data.zarr" / name
        path.write_bytes(path.read_bytes()[:-3])
    assert quick.run(mixture_file, finished, resume=True).computed == 2
    assert {p: p.read_bytes() for p in pieces(finished)} == before


def test_what_is_not_ours_is_left_alone(tmp_path, quick, mixture_file):
    foreign = tmp_path / "out" / "data.zarr"
    foreign.mkdir(parents=True)
    (foreign / "precious").write_text("data")
    with pytest.raises(DataError, match="not written by gutz"):
        quick.run(mixture_file, tmp_path / "out", force=True)
    with pytest.raises(OutputError, match="holds a run already"):
        quick.run(mixture_file, tmp_path / "out")
    assert (foreign / "precious").read_text() == "data"


@pytest.mark.parametrize("what", ["nothing", "empty store", "other store", "newer"])
def test_runs_that_cannot_be_read_are_explained(tmp_path, finished, what):
    target = tmp_path / "x"
    if what == "empty store":
        (target / "data.zarr").mkdir(parents=True)
    elif what == "other store":
        xr.Dataset({"a": ("x", [1.0])}).to_zarr(target / "data.zarr", zarr_format=3, consolidated=False)
    elif what == "newer":
        shutil.copytree(finished, target)
        description = json.loads((target / "data.zarr/zarr.json").read_text())
        description["attributes"]["schema_version"] = schema.VERSION + 1
        (target / "data.zarr/zarr.json").write_text(json.dumps(description))
    with pytest.raises(DataError) as caught:
        open_run(target)
    words = {
        "nothing": "does not exist",
        "empty store": "does not exist",
        "other store": "not written by gutz",
        "newer": "newer gutz",
    }
    assert words[what] in str(caught.value)


def test_status_is_written_last(finished, quick, mixture_file, tmp_path, monkeypatch):
    """A chunk exists when its status does: the order of writes is traced."""
    order = []
    real = store.zarr.Array.__setitem__

    def traced(array, region, values):
        order.append(array.basename)
        real(array, region, values)

    monkeypatch.setattr(store.zarr.Array, "__setitem__", traced)
    quick.run(mixture_file, tmp_path / "traced")
    names = [*schema.layout(plan.plan(spec.check(document.read(mixture_file))))]
    assert names[-1] == "status"
    chunks = [order[i : i + len(names)] for i in range(0, len(order), len(names))]
    assert all(chunk == names for chunk in chunks[-3:])


DRIVER = """
import sys
sys.path.insert(0, {here!r})
import standin
from gutz.scan import chunk, runner
chunk.solve = standin.solve
outcome = runner.run(sys.argv[1], sys.argv[2], resume=True)
sys.exit(outcome.exit_code)
"""


def start(path, out, seconds="0.15"):
    environment = {**os.environ, "STANDIN_SECONDS": seconds, "PYTHONPATH": os.pathsep.join(sys.path)}
    with path.with_suffix(".errors").open("w") as errors:
        return subprocess.Popen(
            [sys.executable, "-c", DRIVER.format(here=str(HERE)), str(path), str(out)],
            env=environment,
            stderr=errors,
        )


def computed(out):
    return len([*out.glob("data.zarr/status/c/*/*")])


@pytest.mark.slow
def test_killed_and_resumed_equals_undisturbed(quick, mixture_file, tmp_path):
    """S1, K3: SIGKILL at 3 moments (10 in tier A, 200 in B), then resume to the end: the same bytes."""
    out, rng = tmp_path / "killed", random.Random(11)
    for _ in range(3):
        before = computed(out)
        process = start(mixture_file, out)
        deadline = time.monotonic() + 60
        while computed(out) <= before and process.poll() is None and time.monotonic() < deadline:
            time.sleep(0.01)
        time.sleep(rng.random() * 0.2)
        process.kill()
        process.wait()
        assert computed(out) > before
    outcome = quick.run(mixture_file, out, resume=True)
    assert 0 < outcome.computed < outcome.chunks
    quick.run(mixture_file, tmp_path / "whole")
    assert same_bytes(out, tmp_path / "whole")
    assert not [*out.rglob("*.partial")]


@pytest.mark.slow
@pytest.mark.parametrize("number, code", [("SIGINT", 130), ("SIGTERM", 143)])
def test_a_signal_stops_after_the_chunk_and_saves_it(quick, mixture_file, tmp_path, number, code):
    """S6: once each (20 in tier A): exit code, at least one chunk saved, nothing torn, resume continues."""
    out = tmp_path / "stopped"
    process = start(mixture_file, out, "0.3")
    deadline = time.monotonic() + 60
    while computed(out) < 1 and process.poll() is None and time.monotonic() < deadline:
        time.sleep(0.01)
    process.send_signal(getattr(signal, number))
    asked = time.monotonic()
    assert process.wait(timeout=30) == code, mixture_file.with_suffix(".errors").read_text()
    assert time.monotonic() - asked < 5
    assert not [*out.rglob("*.partial")]
    done = computed(out)
    outcome = quick.run(mixture_file, out, resume=True)
    assert outcome.computed == outcome.chunks - done
