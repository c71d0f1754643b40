"""A real Dask scheduler and workers on the loopback interface, started here: same bytes, deaths, and refusals."""

import contextlib
import json
import os
import signal
import socket
import subprocess
import sys
import time
import warnings
from pathlib import Path

import pytest
from test_store import same_bytes

from gutz.errors import InputError, ResourceError
from gutz.scan import cluster

pytestmark = [
    pytest.mark.slow,
    # Dask's own: sockets of workers that were killed are closed when Python gets to it.
    pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning"),
    pytest.mark.filterwarnings("ignore::ResourceWarning"),
]


class Dask:
    """A scheduler and its workers as processes of their own."""

    def __init__(self, folder):
        self._folder, self._processes = folder, []
        self._file = folder / "scheduler.json"
        self.scheduler = self._start("scheduler", "--host", "127.0.0.1", "--port", "0", "--no-dashboard",
                                     "--scheduler-file", str(self._file))  # fmt: skip
        deadline = time.monotonic() + 60
        while not self._file.exists() and time.monotonic() < deadline:
            time.sleep(0.1)
        self.address = json.loads(self._file.read_text())["address"]

    def worker(self, threads=1, **environment):
        return self._start(
            "worker", self.address, "--nthreads", str(threads), "--no-nanny", "--no-dashboard",
            "--local-directory", str(self._folder), "--death-timeout", "60", **environment,
        )  # fmt: skip

    def _start(self, *words, **environment):
        paths = os.pathsep.join([str(Path(__file__).parent), *sys.path])
        log = (self._folder / f"{len(self._processes)}.log").open("w")
        process = subprocess.Popen(
            [sys.executable, "-m", "dask", *words], stdout=log, stderr=log,
            env={**os.environ, "PYTHONPATH": paths, **environment},
        )  # fmt: skip
        log.close()
        self._processes.append(process)
        return process

    def close(self):
        for process in reversed(self._processes):
            with contextlib.suppress(ProcessLookupError):
                process.send_signal(signal.SIGKILL)
            process.wait()


@pytest.fixture
def dask(tmp_path, monkeypatch):
    (tmp_path / "dask").mkdir()
    started = Dask(tmp_path / "dask")
    monkeypatch.setattr(cluster, "CONNECT_SECONDS", 30.0)
    yield started
    started.close()


def test_two_workers_one_killed_mid_scan_give_the_same_bytes(dask, quick_workers, mixture_file, tmp_path):
    workers = [dask.worker(STANDIN_SECONDS="0.5") for _ in range(2)]
    quick_workers.run(mixture_file, tmp_path / "plain")
    seen = []

    def kill_one(done, total):
        seen.append(done)
        if done == 1:
            workers[0].kill()

    outcome = quick_workers.run(mixture_file, tmp_path / "out", scheduler=dask.address, progress=kill_one)
    assert workers[0].poll() is not None and workers[1].poll() is None
    assert not outcome.failed and seen == list(range(1, outcome.chunks + 1))
    assert outcome.workers in (1, 2)
    assert same_bytes(tmp_path / "plain", tmp_path / "out")


def test_a_cluster_that_goes_away_keeps_what_is_done(dask, quick_workers, mixture_file, tmp_path, monkeypatch):
    monkeypatch.setattr(cluster, "LOST_SECONDS", 3.0)
    worker = dask.worker(STANDIN_SECONDS="0.5")
    with pytest.raises(ResourceError, match="has had no workers for 3 s; what is done is kept: continue with --resume"):
        quick_workers.run(
            mixture_file, tmp_path / "out", scheduler=dask.address,
            progress=lambda done, total: worker.kill() if done == 2 else None,
        )  # fmt: skip
    outcome = quick_workers.run(mixture_file, tmp_path / "out", resume=True)
    assert 0 < outcome.computed < outcome.chunks
    quick_workers.run(mixture_file, tmp_path / "plain")
    assert same_bytes(tmp_path / "plain", tmp_path / "out")


def test_clusters_that_do_not_fit_are_refused_in_one_sentence(dask, quick_workers, mixture_file, tmp_path, monkeypatch):
    def refused(words):
        with pytest.raises(InputError, match=words) as caught:
            quick_workers.run(mixture_file, tmp_path / "out", scheduler=dask.address, force=True)
        assert len(str(caught.value).splitlines()) == 1

    monkeypatch.setattr(cluster, "CONNECT_SECONDS", 2.0)
    refused('has no workers; start some with "dask worker tcp://127.0.0.1:')
    monkeypatch.setattr(cluster, "CONNECT_SECONDS", 30.0)
    one = dask.worker()
    with monkeypatch.context() as patch:
        patch.setattr(cluster, "__version__", "0.0.9")
        refused(r"the worker tcp://.* has gutz .* \(here 0.0.9\); install the same versions there")
    one.kill()
    one.wait()
    time.sleep(1.0)
    dask.worker(threads=2)
    refused("1 of 1 workers run several threads, with which jax can lock up")


def test_an_address_where_nobody_answers_is_one_sentence(quick_workers, mixture_file, tmp_path, monkeypatch):
    monkeypatch.setattr(cluster, "CONNECT_SECONDS", 1.0)
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        port = free.getsockname()[1]
    for address in (f"tcp://127.0.0.1:{port}", "nonsense", "http://x:y", ""):
        with warnings.catch_warnings(), pytest.raises(InputError, match="no Dask scheduler answers there"):
            quick_workers.run(mixture_file, tmp_path / "out", scheduler=address)


def test_without_dask_the_package_is_named(monkeypatch):
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(InputError, match=r"pip install 'dask\[distributed\]'"):
        cluster.Cluster("tcp://127.0.0.1:1")
