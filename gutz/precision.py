"""64-bit floating point for everything numerical, switched on here, once, on import.

In:  the environment variable JAX_ENABLE_X64, which may already say so.
Out: jax configured for float64, or one sentence where the caller forced 32 bits.
Thermal free energies at low temperature lose all digits in float32, so there is no 32-bit mode.
"""

import os

from gutz.errors import InputError

_forced = os.environ.get("JAX_ENABLE_X64")
if _forced is not None and _forced.strip().lower() not in ("1", "true", "t", "yes", "y", "on"):
    raise InputError(f"JAX_ENABLE_X64 is {_forced!r}; gutz needs 64-bit numbers: set it to 1 or unset it")

import jax  # noqa: E402  (the environment must be read first: an empty JAX_ENABLE_X64 makes this import fail)

jax.config.update("jax_enable_x64", True)


def check_double() -> None:
    """Refuse to compute where the caller has switched 64-bit numbers off since the import."""
    if jax.numpy.zeros(()).dtype != jax.numpy.float64:
        raise InputError("jax_enable_x64 is False; gutz needs 64-bit numbers: leave it on while gutz computes")
