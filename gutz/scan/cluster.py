"""Sends pieces of a scan to a running Dask cluster (extra `cluster`).

In:  the address of its scheduler.
Out: `Cluster`, a crew (`gutz.scan.crew`), or one sentence on why that cluster cannot be used.

Its workers must run one thread each (jax can lock up when two threads run batched eigenproblems) and the same gutz, jax
and numpy as this process, so that every point comes out the same wherever it is solved. Dask repeats what a dead worker
was at elsewhere; its scheduler trusts whoever reaches it, so it belongs behind a firewall.
"""

import time
import warnings
from collections.abc import Callable
from concurrent.futures import CancelledError, Future
from importlib.metadata import version
from types import TracebackType
from typing import Any

from gutz import __version__, cache
from gutz.errors import InputError, ResourceError
from gutz.scan.crew import LethalError

CONNECT_SECONDS = 10.0
"""How long a scheduler may take to answer, and the first worker to appear."""
LOST_SECONDS = 60.0
"""A cluster without workers for so long is given up."""
PER_WORKER = 2
"""Pieces handed over per worker, so that none waits for this process."""
RETRIES = 2
"""How often Dask repeats a piece that fails."""
_ATTEMPTS = 3


class Cluster:
    """A connection to a scheduler. Use it in a `with` statement.

    Raises InputError if Dask is not installed, nothing answers, no worker is there, or the workers do not fit.
    """

    def __init__(self, address: str) -> None:
        self._address = address
        self._dask = _dask()
        self._client = self._connected()
        try:
            self._versions = _versions()
            self.in_flight = PER_WORKER * self._checked()
        except BaseException:
            self._client.close()
            raise
        self._executor = self._client.get_executor(pure=False, retries=RETRIES)
        self._seen = time.monotonic()

    def submit(self, function: Callable[..., Any], /, *args: Any) -> Future[Any]:
        """Send a call to the cluster."""
        ours: Future[Any] = Future()
        theirs = self._executor.submit(_errand, self._versions, function, *args)
        theirs.add_done_callback(lambda done: self._pass_on(done, ours))
        return ours

    def renew(self) -> None:
        """Nothing to start anew: Dask sees to its workers itself."""

    def check(self) -> None:
        """Follow workers that come and go. Raises ResourceError if none is left, or the scheduler has gone."""
        count = len(self._workers()) if self._client.status == "running" else 0
        if count:
            self._seen = time.monotonic()
            self.in_flight = PER_WORKER * count
        elif time.monotonic() - self._seen > LOST_SECONDS:
            raise ResourceError(
                f"{self._address} has had no workers for {LOST_SECONDS:g} s; what is done is kept: "
                "continue with --resume"
            )

    def __enter__(self) -> "Cluster":
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._executor.shutdown(wait=False)
        self._client.close()

    def _connected(self) -> Any:
        for _ in range(_ATTEMPTS):
            try:
                with warnings.catch_warnings():
                    # Dask compares more versions than matter here; those that do are checked below.
                    warnings.simplefilter("ignore")
                    return self._dask.Client(self._address, timeout=CONNECT_SECONDS, set_as_default=False)
            except AssertionError:
                continue  # on a busy machine its event loop may not start within the ten seconds Dask gives it
            except (OSError, ValueError, TypeError):
                raise InputError(
                    f"--scheduler {self._address}: no Dask scheduler answers there; "
                    'start one with "dask scheduler" and give the address it prints, such as tcp://10.0.0.1:8786'
                ) from None
        raise ResourceError("the Dask client does not start; this machine is too busy, try again later")

    def _workers(self) -> dict[str, Any]:
        try:
            return dict(self._client.scheduler_info(n_workers=-1)["workers"])
        except (OSError, RuntimeError):
            return {}

    def _checked(self) -> int:
        """Number of workers, all of them fit."""
        start = f'"dask worker {self._address} --nthreads 1"'
        try:
            self._client.wait_for_workers(1, timeout=CONNECT_SECONDS)
        except TimeoutError:
            raise InputError(f"--scheduler {self._address}: has no workers; start some with {start}") from None
        workers = self._workers()
        threaded = [name for name, worker in workers.items() if worker["nthreads"] != 1]
        if threaded:
            raise InputError(
                f"--scheduler {self._address}: {len(threaded)} of {len(workers)} workers run several threads, "
                f"with which jax can lock up; start them with {start}"
            )
        try:
            found = self._client.run(_versions)
        except Exception as error:  # whatever keeps a worker from loading our code
            raise InputError(
                f"--scheduler {self._address}: its workers cannot load gutz ({type(error).__name__}: {error}); "
                "install the same gutz there"
            ) from None
        for name, theirs in found.items():
            _compare(f"--scheduler {self._address}: the worker {name}", theirs, self._versions)
        return len(workers)

    def _pass_on(self, theirs: Future[Any], ours: Future[Any]) -> None:
        if theirs.cancelled():
            ours.set_exception(CancelledError())
            return
        error = theirs.exception()
        if error is None:
            ours.set_result(theirs.result())
        elif isinstance(error, self._dask.KilledWorker):
            ours.set_exception(LethalError())
        elif isinstance(error, self._dask.CancelledError):
            ours.set_exception(CancelledError())
        else:
            ours.set_exception(error)


def _dask() -> Any:
    try:
        import distributed
    except ImportError:
        raise InputError("--scheduler needs a package that is not installed: pip install 'dask[distributed]'") from None
    return distributed


def _versions() -> dict[str, str]:
    """What has to agree between this process and a worker; run on both."""
    return {"gutz": __version__, **{name: version(name) for name in ("jax", "numpy")}}


def _compare(who: str, theirs: dict[str, str], ours: dict[str, str]) -> None:
    """Raise InputError if versions differ."""
    differ = [f"{name} {theirs.get(name)} (here {ours[name]})" for name in ours if theirs.get(name) != ours[name]]
    if differ:
        raise InputError(f"{who} has {', '.join(differ)}; install the same versions there")


def _errand(versions: dict[str, str], function: Callable[..., Any], *args: Any) -> Any:
    """On a worker, which may have joined after the first check: compare, keep compiled code, compute."""
    _compare("a worker", _versions(), versions)
    cache.enable()
    return function(*args)
