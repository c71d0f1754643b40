"""Compiling: fully optimised where many points pay for it, quickly where somebody waits for a few.

In:  functions of arrays, and the names of their fixed arguments.
Out: the same functions, compiled on first use for each shape.

Compiling the stages of one point takes longer than everything else about it. Leaving out the optimiser makes that
five times shorter and the stage half as fast (measured), so batches of a few points do without.
"""

import functools
from collections.abc import Callable, Sequence
from typing import Any

import jax
import numpy as np

FEW = 16
"""Longest leading axis for which compiling quickly pays."""

_QUICKLY = {"xla_backend_optimization_level": 0, "xla_cpu_use_fusion_emitters": False}


def compiled(*, static: Sequence[str] = ()) -> Callable[[Callable[..., Any]], Callable[..., Any]]:
    """Compile a function once per shape; `static` names arguments that are fixed when compiling."""

    def decorate(function: Callable[..., Any]) -> Callable[..., Any]:
        names = tuple(static)
        full = jax.jit(function, static_argnames=names)
        quick = jax.jit(function, static_argnames=names, compiler_options=_QUICKLY)

        @functools.wraps(function)
        def call(*args: Any, **kwargs: Any) -> Any:
            leaves = jax.tree.leaves((args, {k: v for k, v in kwargs.items() if k not in names}))
            few = all(np.ndim(v) == 0 or v.shape[0] <= FEW for v in leaves)
            # Inside somebody else's compilation the options are theirs to give.
            inside = any(isinstance(v, jax.core.Tracer) for v in leaves)
            return (quick if few and not inside and _options_known() else full)(*args, **kwargs)

        return call

    return decorate


@functools.cache
def _options_known() -> bool:
    """The options are internal to the compiler and may go with a later version: then everything is optimised."""
    try:
        jax.jit(lambda x: x, compiler_options=_QUICKLY)(0.0)
    except jax.errors.JaxRuntimeError:
        return False
    return True
