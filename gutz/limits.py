"""What values make physical sense: the one place where parameters of a mixture are checked.

In:  numpy arrays (or numbers) by name.
Out: nothing, or one `InputError` sentence naming the field, the value and what is allowed.
Free of jax, so that a file can be checked without loading the numerics.
"""

import math
from typing import Any

import numpy as np

from gutz.errors import InputError

N_MAX_LIMIT = {1: 40, 2: 12}
"""Largest cutoff per number of species; beyond it one site alone is a large eigenproblem."""


def check_real(field: str, value: Any) -> np.ndarray:
    """Return `value` as a float64 array; refuse what is not real and finite."""
    try:
        array = np.asarray(value)
        if array.dtype.kind not in "iuf":
            raise TypeError
        array = array.astype(np.float64)
    except (TypeError, ValueError):
        raise InputError(f"{field} is {_short(value)}; it must be a real number or an array of them") from None
    bad = array[~np.isfinite(array)]
    if bad.size:
        raise InputError(f"{field} contains {bad.flat[0]}; every value must be a finite number")
    return array


def check_at_least(field: str, array: np.ndarray, lowest: float, strict: bool = False) -> None:
    """Refuse an array with an element below `lowest` (or equal to it, if `strict`)."""
    bad = array[array <= lowest] if strict else array[array < lowest]
    if bad.size:
        relation = "greater than" if strict else "at least"
        raise InputError(f"{field} is {bad.flat[0]:g}; it must be {relation} {lowest:g}")


def check_n_max(n_max: Any, species: int) -> None:
    """Refuse a cutoff that is not a whole number from 1 to `N_MAX_LIMIT[species]`."""
    whole = isinstance(n_max, (int, np.integer)) and not isinstance(n_max, bool)
    if not whole or not 1 <= n_max <= N_MAX_LIMIT[species]:
        raise InputError(
            f"n_max is {_short(n_max)}; it must be a whole number from 1 to {N_MAX_LIMIT[species]} "
            f"for {species} species, or None for an automatic cutoff"
        )


def check_dimension(dim: Any) -> None:
    """Refuse anything but 1, 2 or 3 dimensions."""
    if isinstance(dim, bool) or dim not in (1, 2, 3):
        raise InputError(f"dim is {_short(dim)}; it must be 1, 2 or 3")


def check_species(species: Any) -> None:
    """Refuse anything but one or two species."""
    if isinstance(species, bool) or species not in (1, 2):
        raise InputError(f"species is {_short(species)}; it must be 1 or 2")


def collapses(U: np.ndarray, U12: np.ndarray, n_max: int | None) -> np.ndarray:
    """True where the mixture collapses, U12 < -sqrt(U1 U2); hard cores (n_max = 1) never do.

    U: on-site repulsion of each species, shape (..., 2); U12: shape (...).
    """
    if n_max == 1:
        return np.zeros(np.broadcast_shapes(U.shape[:-1], np.shape(U12)), bool)
    return np.asarray(U12 < -np.sqrt(U[..., 0] * U[..., 1]))


def check_not_all_collapsed(U: np.ndarray, U12: np.ndarray, n_max: int | None) -> None:
    """Refuse a mixture none of whose points is stable against collapse."""
    gone = collapses(U, U12, n_max)
    if gone.size and np.all(gone):
        limit = -math.sqrt(float(np.max(U[..., 0] * U[..., 1])))
        raise InputError(
            f"U12 is {float(np.max(U12)):g}; it must be at least -sqrt(U1 U2) = {limit:g}, "
            "below which the mixture collapses"
        )


def _short(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= 40 else text[:37] + "..."
