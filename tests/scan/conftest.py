"""Files and a quick solver for tests of scans; and a check that no test leaves anything behind."""

import multiprocessing
import sys
import threading
from pathlib import Path

import pytest
import standin

MIXTURE = """\
[mixture]
unit = "U"
t = 0.02
U = 1.0
U12 = 0.5
T = 0.1

[axes.mu]
parameter = "mixture.mu"
start = 0.1
stop = 1.3
points = 40

[axes.hop]
parameter = "mixture.t"
start = 0.0
stop = 0.05
points = 30
""".replace("t = 0.02\n", "")

LATTICE = """\
[lattice]
atoms = ["87Rb", "87Rb"]
wavelength = "1064 nm"
depth = 12
a11 = "100.4 a0"
a22 = "95.44 a0"
a12 = "90 a0"

[mixture]
filling = 0.5

[axes.depth]
parameter = "lattice.depth"
start = 8
stop = 16
points = 5

[axes.T]
parameter = "mixture.T"
unit = "nK"
start = 1
stop = 20
points = 4
"""


@pytest.fixture
def quick(monkeypatch):
    """Scans with the stand-in solver."""
    from gutz.scan import chunk, runner

    monkeypatch.setattr(chunk, "solve", standin.solve)
    return runner


@pytest.fixture
def quick_workers(quick, monkeypatch):
    """The same, in worker processes too."""
    monkeypatch.setattr(quick, "compute_chunk", standin.compute_chunk)
    return quick


@pytest.fixture
def mixture_file(tmp_path):
    path = tmp_path / "mixture.toml"
    path.write_text(MIXTURE)
    return path


@pytest.fixture
def lattice_file(tmp_path):
    path = tmp_path / "lattice.toml"
    path.write_text(LATTICE)
    return path


@pytest.fixture(autouse=True)
def nothing_left_behind(tmp_path):
    """X13: no half-written file, no lock, no process, no signal handler, no change of precision."""
    import signal

    handlers = [signal.getsignal(number) for number in (signal.SIGINT, signal.SIGTERM)]
    yield
    strays = [
        path for path in Path(tmp_path).rglob("*") if path.name.endswith(".partial") or path.name.startswith(".lock")
    ]
    assert not strays
    assert not multiprocessing.active_children()
    assert [signal.getsignal(number) for number in (signal.SIGINT, signal.SIGTERM)] == handlers
    assert threading.current_thread() is threading.main_thread()
    jax = sys.modules.get("jax")
    assert jax is None or jax.config.jax_enable_x64
