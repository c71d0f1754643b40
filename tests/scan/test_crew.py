"""Handing out pieces: nothing lost, nothing endless, whoever dies; all with real processes and light errands."""

import os
import signal
import subprocess
import sys
import threading
import time
from collections import Counter
from functools import partial
from pathlib import Path

import errands
import pytest

from gutz.errors import ResourceError
from gutz.scan.crew import Failed, Here, Others, results
from gutz.scan.workers import Workers, usable_cores

PIECES = [(i,) for i in range(12)]


def collected(crew, function, pieces=PIECES, stopped=lambda: False, limit=60.0):
    found = [*results(crew, function, pieces, stopped=stopped, limit=limit)]
    assert max(Counter(piece for piece, _ in found).values()) == 1
    return dict(found)


def alive(pid):
    try:
        return "zombie" not in Path(f"/proc/{pid}/status").read_text()
    except FileNotFoundError:
        return False


@pytest.mark.parametrize("count", [1, 2, 5])
def test_every_piece_comes_once_however_many_workers(count):
    with Workers(count) as crew:
        assert collected(crew, errands.double) == {piece: 2 * piece[0] for piece in PIECES}
        pids = crew.pids()
        assert 0 < len(pids) <= count
        assert crew.peak_bytes() > 5e6 * len(pids)
    assert not any(map(alive, pids))


def test_in_place_hands_each_piece_out_before_the_next_begins():
    order = []
    for piece, value in results(Here(), lambda p: order.append(p) or p, PIECES, stopped=lambda: False, limit=1.0):
        assert order[-1] == piece == value


def test_workers_have_one_thread_one_core_and_no_ctrl_c():
    with Workers(2) as crew:
        found = collected(crew, errands.where, PIECES[:4])
    own = {pid: cores for pid, cores, _, _ in found.values()}
    assert len(own) == 2
    assert all(len(cores) == 1 for cores in own.values())
    assert {cores[0] for cores in own.values()} == set(usable_cores()[:2])
    assert {threads for _, _, threads, _ in found.values()} == {"1"}
    assert all({signal.SIGINT, signal.SIGTERM} <= held for _, _, _, held in found.values())


def test_no_process_is_forked(monkeypatch):
    """S11: children of a process that has used jax hang when forked."""
    monkeypatch.setattr(os, "fork", lambda: 1 / 0)
    with Workers(2) as crew:
        collected(crew, errands.double)


@pytest.mark.parametrize("moment", range(4))
def test_a_killed_worker_costs_nothing_but_time(moment):
    """S3: 4 kills here, 20 asked: one worker killed at some moment; every result arrives, once."""
    with Workers(2) as crew:
        timer = threading.Timer(0.3 + 0.2 * moment, lambda: [os.kill(pid, signal.SIGKILL) for pid in crew.pids()[:1]])
        timer.start()
        assert collected(crew, errands.slowly) == {piece: 2 * piece[0] for piece in PIECES}
        timer.join()


def test_a_piece_that_crashes_its_worker_is_named_and_the_rest_done():
    """S4."""
    with Workers(2) as crew:
        found = collected(crew, errands.crash_at_two)
    assert found.pop((2,)) == Failed("ends the process that computes it")
    assert found == {piece: 2 * piece[0] for piece in PIECES if piece != (2,)}


def test_a_piece_that_never_returns_is_named_and_the_rest_done():
    """S5."""
    with Workers(2) as crew:
        found = collected(crew, errands.never_at_two, limit=3.0)
    assert found.pop((2,)) == Failed("took longer than 3 s")
    assert found == {piece: 2 * piece[0] for piece in PIECES if piece != (2,)}


def test_when_every_process_dies_the_run_gives_up():
    with Workers(2) as crew, pytest.raises(ResourceError, match="3 pieces in a row ended the process"):
        collected(crew, errands.crash_always)


def test_a_mistake_in_the_function_is_raised():
    with pytest.raises(ZeroDivisionError), Workers(2) as crew:
        collected(crew, errands.wrong)


def test_somebody_elses_broken_executor_is_one_sentence():
    from concurrent.futures import ProcessPoolExecutor
    from multiprocessing import get_context

    with (
        ProcessPoolExecutor(1, mp_context=get_context("spawn")) as pool,
        pytest.raises(ResourceError, match="have died; what is done is kept: continue with --resume"),
    ):
        collected(Others(pool, 1), errands.crash_always)


def test_once_stopped_only_what_is_at_work_is_finished():
    done = []
    with Workers(2) as crew:
        for piece, _ in results(crew, errands.slowly, PIECES, stopped=lambda: len(done) >= 3, limit=60.0):
            done.append(piece)
    assert 3 <= len(done) <= 5


ORPHANS = """
import errands
from functools import partial
from gutz.scan.crew import results
from gutz.scan.workers import Workers
if __name__ == "__main__":
    with Workers(2) as crew:
        list(results(crew, partial(errands.long_with_note, {folder!r}), [(0,), (1,)], stopped=lambda: False, limit=1e9))
"""


@pytest.mark.parametrize("wait", [0.0, 0.3])
def test_workers_do_not_outlive_a_killed_parent(tmp_path, wait):
    """S2: twice here, 20 asked: SIGKILL to the parent alone; no worker is alive 5 s later."""
    notes, script = tmp_path / "notes", tmp_path / "parent.py"
    notes.mkdir()
    script.write_text(ORPHANS.format(folder=str(notes)))
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join(sys.path)}
    parent = subprocess.Popen([sys.executable, str(script)], env=environment, stderr=subprocess.DEVNULL)
    deadline = time.monotonic() + 60
    while len([*notes.iterdir()]) < 2 and time.monotonic() < deadline:
        time.sleep(0.05)
    workers = [int(path.name) for path in notes.iterdir()]
    time.sleep(wait)
    assert len(workers) == 2 and all(map(alive, workers))
    parent.kill()
    parent.wait()
    deadline = time.monotonic() + 5
    while any(map(alive, workers)) and time.monotonic() < deadline:
        time.sleep(0.05)
    assert not any(map(alive, workers))


def test_an_interrupt_ends_the_workers_too():
    """The second Ctrl-C: the error passes, no process stays."""
    with pytest.raises(KeyboardInterrupt), Workers(2) as crew:
        waiting = results(crew, partial(errands.slowly), PIECES, stopped=lambda: False, limit=60.0)
        next(waiting)
        pids = crew.pids()
        raise KeyboardInterrupt
    time.sleep(0.1)
    assert pids and not any(map(alive, pids))
