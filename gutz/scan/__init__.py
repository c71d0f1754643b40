"""Scans: a TOML file in, a store of solved points out.

    run(path, out)      compute every point and save it          (loads the numerics)
    open_run(folder)    read a run back as an xarray dataset     (loads xarray and zarr)

Both are loaded when first asked for, so that a file can be checked without the numerics behind them.
"""

from importlib import import_module
from typing import Any

__all__ = ["open_run", "run"]

_HOMES = {"open_run": "gutz.scan.store", "run": "gutz.scan.runner"}


def __getattr__(name: str) -> Any:
    """Load a public function from the module it lives in (PEP 562)."""
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(_HOMES[name]), name)
