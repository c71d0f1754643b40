"""Working through a scan: order does not matter, one run at a time, refusals leave everything as it was."""

import random
from concurrent.futures import Future, ThreadPoolExecutor

import numpy as np
import pytest
from filelock import FileLock
from test_store import same_bytes

from gutz.errors import InputError, OutputError, ResourceError
from gutz.scan import chunk, guard, open_run
from gutz.status import UNTRUSTED, Status


class Shuffled:
    """An executor that finishes work in another order than it was given."""

    def __init__(self, hold):
        self.waiting, self.hold, self.rng = [], hold, random.Random(1)

    def submit(self, function, /, *args):
        future = Future()
        self.waiting.append((future, function, args))
        if len(self.waiting) == self.hold:
            self.rng.shuffle(self.waiting)
            for waiting, call, given in self.waiting:
                waiting.set_result(call(*given))
            self.waiting = []
        return future


def test_order_and_executor_do_not_change_a_byte(quick, mixture_file, tmp_path):
    """S9 in small: in place, two threads, and results in shuffled order."""
    quick.run(mixture_file, tmp_path / "plain")
    with ThreadPoolExecutor(2) as pool:
        quick.run(mixture_file, tmp_path / "pool", executor=pool, in_flight=3)
    chunks = quick.run(mixture_file, tmp_path / "again").chunks
    quick.run(mixture_file, tmp_path / "shuffled", executor=Shuffled(chunks), in_flight=chunks)
    for name in ("pool", "again", "shuffled"):
        assert same_bytes(tmp_path / "plain", tmp_path / name)


def test_outcome_counts_what_was_stored(quick, mixture_file, tmp_path):
    told = []
    outcome = quick.run(mixture_file, tmp_path / "out", progress=lambda done, total: told.append((done, total)))
    status = open_run(tmp_path / "out").status.values
    assert outcome.points == status.size == 1200
    assert outcome.untrusted == np.count_nonzero(status & int(UNTRUSTED)) > 0
    assert outcome.remarks == {Status.NOT_CONVERGED: outcome.untrusted}
    assert outcome.exit_code == 1
    assert told == [(i + 1, outcome.chunks) for i in range(outcome.chunks)]


def test_parts_beyond_collapse_are_solved_as_such(quick, mixture_file, tmp_path):
    text = mixture_file.read_text().replace('"mixture.mu"', '"mixture.U12"').replace("[axes.mu]", "[axes.U12]")
    mixture_file.write_text(text.replace("start = 0.1", "start = -3.0").replace("T = 0.1", "T = 0.1\nmu = 0.4"))
    outcome = quick.run(mixture_file, tmp_path / "out", overrides=["mixture.U12=0"])
    run = open_run(tmp_path / "out")
    assert np.array_equal(run.phase == 12, np.broadcast_to((run.U12 < -1).values[:, None], (40, 30)))
    assert outcome.remarks[Status.COLLAPSE] == int((run.phase == 12).sum()) > 0


def test_lattice_runs_keep_their_parameters_and_cautions(quick, lattice_file, tmp_path):
    quick.run(lattice_file, tmp_path / "out")
    run = open_run(tmp_path / "out")
    assert run.attrs["energy_unit"] == "E_R"
    assert run.attrs["energy_unit_means"].startswith("E_R = h x 2027.")  # 87Rb at 1064 nm, literature list
    assert run.depth.attrs["units"] == "E_R"
    assert "T" in run.coords and "T" not in run.data_vars
    assert run.cautions.dtype == np.int32
    assert (run.t.diff("depth") < 0).all()


def test_an_existing_run_is_not_overwritten(quick, mixture_file, tmp_path):
    quick.run(mixture_file, tmp_path / "out")
    with pytest.raises(
        OutputError, match="out holds a run already; continue it with --resume or replace it with --force"
    ):
        quick.run(mixture_file, tmp_path / "out")
    assert quick.run(mixture_file, tmp_path / "out", force=True).computed > 1
    assert quick.run(mixture_file, tmp_path / "out", resume=True).computed == 0


def test_other_settings_are_refused_with_the_difference(quick, mixture_file, tmp_path):
    quick.run(mixture_file, tmp_path / "out")
    with pytest.raises(OutputError, match=r"other settings \(mixture.U12: 0.5 -> 0.6\); choose another --out"):
        quick.run(mixture_file, tmp_path / "out", resume=True, overrides=["mixture.U12=0.6"])


def test_a_folder_in_use_is_refused(quick, mixture_file, tmp_path):
    """S7: by a lock of the operating system, held here by a second handle."""
    (tmp_path / "out").mkdir()
    with FileLock(tmp_path / "out" / ".lock"), pytest.raises(OutputError, match="in use by another run"):
        quick.run(mixture_file, tmp_path / "out")
    (tmp_path / "out" / ".lock").unlink(missing_ok=True)


def test_strays_of_a_killed_run_are_removed(quick, mixture_file, tmp_path):
    quick.run(mixture_file, tmp_path / "out")
    stray = tmp_path / "out/data.zarr/energy/c/0/0.123.partial"
    stray.write_text("half")
    half = tmp_path / "out/data.zarr.partial"
    half.mkdir()
    quick.run(mixture_file, tmp_path / "out", resume=True)
    assert not stray.exists() and not half.exists()


def test_a_run_without_room_is_refused_before_it_starts(quick, mixture_file, tmp_path, monkeypatch):
    monkeypatch.setattr(guard.shutil, "disk_usage", lambda path: type("Usage", (), {"free": 1000})())
    with pytest.raises(ResourceError, match="needs up to .* MB of disk"):
        quick.run(mixture_file, tmp_path / "out")


def test_a_full_disk_keeps_what_is_done(quick, mixture_file, tmp_path, monkeypatch):
    """K4: the third chunk meets a full disk; the first two stay and the run can be continued."""
    real, count = quick.store.Store.write, [0]

    def limited(self, index, values):
        count[0] += 1
        if count[0] == 3:
            raise OSError(28, "No space left on device")
        real(self, index, values)

    monkeypatch.setattr(quick.store.Store, "write", limited)
    with pytest.raises(ResourceError, match="the disk is full; what is done is kept"):
        quick.run(mixture_file, tmp_path / "out")
    outcome = quick.run(mixture_file, tmp_path / "out", resume=True)
    assert outcome.computed == outcome.chunks - 2


def test_a_scan_needs_axes(quick, mixture_file, tmp_path):
    mixture_file.write_text(
        mixture_file.read_text().partition("[axes")[0].replace("T = 0.1", "T = 0.1\nt = 0.1\nmu = 0.4")
    )
    with pytest.raises(InputError, match=r"has no \[axes.NAME\] section"):
        quick.run(mixture_file, tmp_path / "out")
    assert not (tmp_path / "out").exists()


def test_a_crash_of_the_solver_loses_no_finished_chunk(quick, mixture_file, tmp_path, monkeypatch):
    real, count = chunk.solve, [0]

    def crashing(mixture, ansatz):
        count[0] += 1
        if count[0] == 3:
            raise ZeroDivisionError
        return real(mixture, ansatz)

    monkeypatch.setattr(chunk, "solve", crashing)
    with pytest.raises(ZeroDivisionError):
        quick.run(mixture_file, tmp_path / "out")
    assert open_run(tmp_path / "out").status.values.max() >= 0
    assert quick.run(mixture_file, tmp_path / "out", resume=True).computed > 0
