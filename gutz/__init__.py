"""`gutz`: where the superfluids of two-species lattice bosons are, how much heat they bear, what they look like.

The public names load on first use, so that importing the package (and the command line) stays fast. Importing it
switches jax to 64-bit numbers: thermal free energies at low temperature lose all digits otherwise.
"""

import os
import sys
from importlib import import_module
from typing import Any

if "jax" in sys.modules:
    import_module("gutz.precision")
else:
    os.environ.setdefault("JAX_ENABLE_X64", "1")

__version__ = "0.1.0"

_HOME = {
    "compare": "gutz.comparison.compare",
    "critical_temperature": "gutz.temperature",
    "exchange_couplings": "gutz.exchange",
    "Mixture": "gutz.model",
    "noise_map": "gutz.noise",
    "Phase": "gutz.phases",
    "shots_needed": "gutz.imaging.detect",
    "Solution": "gutz.solution",
    "solve": "gutz.solver",
    "Status": "gutz.status",
}

__all__ = [
    "compare",
    "critical_temperature",
    "exchange_couplings",
    "Mixture",
    "noise_map",
    "Phase",
    "shots_needed",
    "Solution",
    "solve",
    "Status",
]


def __getattr__(name: str) -> Any:
    if name in _HOME:
        import_module("gutz.precision")
        return getattr(import_module(_HOME[name]), name)
    raise AttributeError(f"module 'gutz' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted([*__all__, "__version__"])
