"""Scans under faults: workers that die or hang, two writers, full and read-only disks, kills at random moments."""

import os
import random
import re
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path

import numpy as np
import pytest
from test_crew import alive
from test_store import computed, same_bytes

from gutz.errors import OutputError, ResourceError
from gutz.scan import open_run, schema

HERE = Path(__file__).parent

DRIVER = """
import sys
sys.path.insert(0, {here!r})
import standin
from gutz import errors
from gutz.scan import chunk, guard, runner
{extra}
if __name__ == "__main__":
    chunk.solve, runner.compute_chunk = standin.solve, standin.compute_chunk
    guard.DISK_MARGIN = -10**12
    try:
        sys.exit(runner.run(sys.argv[1], sys.argv[2], resume=True, workers=int(sys.argv[3])).exit_code)
    except errors.GutzError as error:
        print(error, file=sys.stderr)
        sys.exit(error.exit_code)
"""


def start(path, out, workers=0, seconds="0.15", extra="", **options):
    """A scan with the stand-in solver, in a process group of its own."""
    script = path.with_name("driver.py")
    script.write_text(DRIVER.format(here=str(HERE), extra=extra))
    environment = {**os.environ, "STANDIN_SECONDS": seconds, "PYTHONPATH": os.pathsep.join(sys.path)}
    return subprocess.Popen(
        [sys.executable, str(script), str(path), str(out), str(workers)],
        env=environment, stderr=subprocess.PIPE, text=True, start_new_session=True, **options,
    )  # fmt: skip


def wait_until(condition, seconds=60.0):
    deadline = time.monotonic() + seconds
    while not condition() and time.monotonic() < deadline:
        time.sleep(0.01)
    assert condition()


def children(pid):
    """Processes whose parent is this one."""
    found = []
    for status in Path("/proc").glob("[0-9]*/stat"):
        try:
            fields = status.read_text().rpartition(")")[2].split()
        except OSError:
            continue
        if int(fields[1]) == pid:
            found.append(int(status.parent.name))
    return found


def test_two_workers_one_of_them_killed_give_the_same_bytes(quick_workers, mixture_file, tmp_path, monkeypatch):
    """S3, S9: worker processes, one killed at the first saved chunk, against a run in place."""
    plain = quick_workers.run(mixture_file, tmp_path / "plain")
    assert plain.workers == 0 and plain.peak_bytes > 50e6
    monkeypatch.setenv("STANDIN_SECONDS", "0.2")

    def kill_one(done, total):
        if done == 1:
            victims = [pid for pid in children(os.getpid()) if "spawn_main" in Path(f"/proc/{pid}/cmdline").read_text()]
            os.kill(victims[0], signal.SIGKILL)

    outcome = quick_workers.run(mixture_file, tmp_path / "pool", workers=2, progress=kill_one)
    assert outcome.workers == 2 and not outcome.failed and outcome.computed == outcome.chunks
    assert outcome.peak_bytes > plain.peak_bytes
    assert same_bytes(tmp_path / "plain", tmp_path / "pool")


@pytest.mark.slow
@pytest.mark.parametrize("fault, reason", [("CRASH", "ends the process"), ("HANG", "took longer than 30 s")])
def test_a_bad_chunk_is_named_and_stays_not_computed(quick_workers, mixture_file, tmp_path, monkeypatch, fault, reason):
    """S4, S5: exit code 1, the rest is there, and --resume tries the chunk again."""
    monkeypatch.setenv(f"STANDIN_{fault}", "(1, 0)")
    outcome = quick_workers.run(mixture_file, tmp_path / "out", workers=2, limit=30.0)
    assert [index for index, _ in outcome.failed] == [(1, 0)] and reason in outcome.failed[0][1]
    assert outcome.exit_code == 1 and not outcome.stopped
    assert outcome.computed == outcome.chunks - 1
    run = open_run(tmp_path / "out")
    gone = run.status.values == schema.NOT_COMPUTED
    assert gone.sum() == 240 and np.isnan(run.energy.values[gone]).all() and np.isfinite(run.energy.values[~gone]).all()
    monkeypatch.delenv(f"STANDIN_{fault}")
    assert quick_workers.run(mixture_file, tmp_path / "out", resume=True, workers=2).computed == 1
    quick_workers.run(mixture_file, tmp_path / "plain")
    assert same_bytes(tmp_path / "plain", tmp_path / "out")


def test_a_second_run_is_refused_and_told_who_is_first(quick, mixture_file, tmp_path):
    """S7, K8: process number and time in the message; after kill -9 of the first, the folder is free at once."""
    out = tmp_path / "out"
    first = start(mixture_file, out, seconds="0.3")
    wait_until(lambda: computed(out) >= 1)
    begin = time.monotonic()
    with pytest.raises(OutputError, match=rf"in use by another run \(process {first.pid}, since 20\d\d-") as caught:
        quick.run(mixture_file, out, resume=True)
    assert time.monotonic() - begin < 1 and caught.value.exit_code == 4
    first.kill()
    first.communicate()
    outcome = quick.run(mixture_file, out, resume=True)
    assert 0 < outcome.computed < outcome.chunks
    quick.run(mixture_file, tmp_path / "whole")
    assert same_bytes(out, tmp_path / "whole")


@pytest.mark.slow
def test_writers_that_start_together_lose_nothing(quick, mixture_file, tmp_path):
    """K8: 3 rounds (200 asked) of three runs on one folder: one works, the others are refused with code 4."""
    quick.run(mixture_file, tmp_path / "whole")
    for round_ in range(3):
        out = tmp_path / str(round_)
        runs = [start(mixture_file, out, seconds="0.1") for _ in range(3)]
        errors = [run.communicate(timeout=60)[1] for run in runs]
        codes = sorted(run.returncode for run in runs)
        # One that loads so slowly that the first is through only finds nothing left to do.
        assert codes[0] == 1 and set(codes) <= {1, 4}, errors
        assert all("in use" in words for run, words in zip(runs, errors, strict=True) if run.returncode == 4)
        assert same_bytes(out, tmp_path / "whole")


@pytest.mark.slow
@pytest.mark.parametrize("workers", [0, 2])
def test_killed_at_random_moments_equals_undisturbed(quick, mixture_file, tmp_path, workers):
    """S1, K3: SIGKILL to the whole group at random moments: 50, or as many as fit into the time."""
    rng, kills, torn = random.Random(workers), 0, 0
    wanted, until = (10, time.monotonic() + 40) if workers else (40, time.monotonic() + 60)
    quick.run(mixture_file, tmp_path / "whole")
    out, number = tmp_path / "0", 0
    while kills < wanted and time.monotonic() < until:
        before = computed(out)
        process = start(mixture_file, out, workers, seconds="0.02")
        # Either around the start, or once chunks are coming in.
        if rng.random() < 0.7:
            wait_until(lambda b=before, p=process, o=out: computed(o) > b or p.poll() is not None)
            time.sleep(rng.random() * 0.15)
        else:
            time.sleep(rng.random() * 3.0)
        if process.poll() is None:
            os.killpg(process.pid, signal.SIGKILL)
            kills += 1
        process.communicate()
        assert computed(out) >= before
        torn += len([*out.rglob("*.partial")])
        if process.returncode in (0, 1):
            assert same_bytes(out, tmp_path / "whole")
            number += 1
            out = tmp_path / str(number)
    assert kills >= 3
    quick.run(mixture_file, out, resume=True)
    assert same_bytes(out, tmp_path / "whole")
    assert not [*out.rglob("*.partial")]
    print(f"{kills} kills, {torn} half-written pieces swept, {number} runs finished in between")


@pytest.mark.slow
def test_a_killed_parent_leaves_no_worker(mixture_file, tmp_path):
    """S2 with the whole program: SIGKILL to the parent alone."""
    out = tmp_path / "out"
    process = start(mixture_file, out, 2, seconds="0.5")
    wait_until(lambda: computed(out) >= 1)
    workers = children(process.pid)
    assert len(workers) >= 2
    process.kill()
    process.communicate()
    wait_until(lambda: not any(map(alive, workers)), 5.0)
    for left in out.glob(".lock*"):
        left.unlink()


@pytest.mark.slow
@pytest.mark.parametrize("number, code", [(signal.SIGINT, 130), (signal.SIGTERM, 143)])
def test_a_signal_to_the_whole_group_stops_cleanly(quick, mixture_file, tmp_path, number, code):
    """S6 with workers, as a terminal or a batch system sends it: chunks at work are saved, nobody stays."""
    out = tmp_path / "out"
    process = start(mixture_file, out, 2, seconds="0.4")
    wait_until(lambda: computed(out) >= 1)
    workers = children(process.pid)
    os.killpg(process.pid, number)
    _, errors = process.communicate(timeout=30)
    assert process.returncode == code, errors
    assert "Traceback" not in errors
    wait_until(lambda: not any(map(alive, workers)))  # they notice within a second that their parent has gone
    done = computed(out)
    outcome = quick.run(mixture_file, out, resume=True)
    assert outcome.computed == outcome.chunks - done


FILE_LIMIT = """
import resource
count = [0]
real = runner.store.Store.write
def limited(self, index, values):
    count[0] += 1
    if count[0] == {chunk}:
        resource.setrlimit(resource.RLIMIT_FSIZE, ({size}, {size}))
    real(self, index, values)
runner.store.Store.write = limited
"""


@pytest.mark.slow
@pytest.mark.parametrize("chunk, size", [(1, 0), (3, 100)])
def test_a_disk_that_refuses_bytes_keeps_what_is_done(quick, mixture_file, tmp_path, chunk, size):
    """K4: the system refuses writes beyond some size from the n-th chunk on: code 5, then the run continues."""
    out = tmp_path / "out"
    process = start(mixture_file, out, seconds="0", extra=FILE_LIMIT.format(chunk=chunk, size=size))
    errors = process.communicate(timeout=60)[1]
    assert process.returncode == 5, errors
    assert "the disk is full; what is done is kept: make room and continue with --resume" in errors
    assert not [*out.glob(".lock*")]
    open_run(out)
    outcome = quick.run(mixture_file, out, resume=True)
    assert outcome.computed == outcome.chunks - chunk + 1
    quick.run(mixture_file, tmp_path / "whole")
    assert same_bytes(out, tmp_path / "whole")


@pytest.fixture
def small_disk(tmp_path):
    """A file system of its own, where the machine lets us make one."""
    place = tmp_path / "disk"
    place.mkdir()
    made = subprocess.run(["mount", "-t", "tmpfs", "-o", "size=2m", "none", str(place)], capture_output=True)
    if made.returncode:
        pytest.skip("no file system can be mounted here")
    yield place
    subprocess.run(["umount", str(place)], check=True)


@pytest.mark.parametrize("room", [2**15, 2**17, 2**19])
def test_a_full_disk_is_one_sentence_and_the_run_goes_on(quick, mixture_file, small_disk, tmp_path, monkeypatch, room):
    """K4: a file system of 2 MB that really fills up: while descriptions are written, in the first chunk, later."""
    monkeypatch.setattr(quick.guard, "DISK_MARGIN", -(10**12))
    out, ballast = small_disk / "out", small_disk / "ballast"
    ballast.write_bytes(b"x" * (2**21 - room))
    with pytest.raises(ResourceError, match="the disk is full; what is done is kept: make room and continue"):
        quick.run(mixture_file, out)
    done = computed(out)
    assert (done > 0) == (room == 2**19)
    ballast.unlink()
    outcome = quick.run(mixture_file, out, resume=True)
    assert outcome.computed == outcome.chunks - done
    quick.run(mixture_file, tmp_path / "whole")
    assert same_bytes(out, tmp_path / "whole")


def test_a_read_only_folder_is_one_sentence(quick, mixture_file, small_disk):
    """K6."""
    subprocess.run(["mount", "-o", "remount,ro", str(small_disk)], check=True)
    with pytest.raises(OutputError, match=r"the folder cannot be (made|written)") as caught:
        quick.run(mixture_file, small_disk / "out")
    assert len(str(caught.value).splitlines()) == 1
    with pytest.raises(OutputError, match="the folder cannot be written to"):
        quick.run(mixture_file, small_disk)


def test_signals_in_another_thread_are_left_alone(quick, mixture_file, tmp_path):
    """A notebook may run a scan in a thread, where Python allows no signal handlers."""
    found = []
    thread = threading.Thread(target=lambda: found.append(quick.run(mixture_file, tmp_path / "out")))
    thread.start()
    thread.join()
    assert found[0].computed == found[0].chunks


def test_fifty_changed_settings_are_fifty_refusals(quick, mixture_file, tmp_path):
    """S8: every refusal names the setting and both values; the run is untouched."""
    quick.run(mixture_file, tmp_path / "out")
    before = {path: path.read_bytes() for path in (tmp_path / "out").rglob("*") if path.is_file()}
    rng = random.Random(8)
    keys = ["mixture.U", "mixture.U12", "mixture.T", "axes.mu.start", "axes.mu.stop", "axes.hop.stop", "mixture.n_max"]
    for _ in range(50):
        key = rng.choice(keys)
        value = rng.randint(2, 9) if key.endswith("n_max") else round(rng.uniform(0.2, 0.9) + ("stop" in key), 6)
        with pytest.raises(OutputError) as caught:
            quick.run(mixture_file, tmp_path / "out", resume=True, overrides=[f"{key}={value}"])
        assert re.search(rf"other settings \({re.escape(key)}.*: .* -> .*{value}", str(caught.value))
    assert before == {path: path.read_bytes() for path in (tmp_path / "out").rglob("*") if path.is_file()}
