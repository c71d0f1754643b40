"""The uniform gas at many chemical potentials and one temperature: what a cloud is made of.

In:  one set of Hubbard parameters; chemical potentials, a temperature.
Out: `States`, arrays over the points, with the response of (n_1, n_2, S) to (mu_1, mu_2, T).
"""

from collections.abc import Iterator
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from gutz.errors import InputError
from gutz.model import Mixture
from gutz.order import by_dimension
from gutz.solver import CUTOFF_LADDER
from gutz.targets import BATCH_SIZES, Evaluator

FloatArray = NDArray[np.float64]

KEPT = (
    "filling", "entropy", "free_energy", "order_parameter", "pair_order", "antipair_order", "number_variance",
    "staggering", "cutoff_weight", "compressibility",
)  # fmt: skip
"""Outputs of the solver that a cloud keeps at every node."""

_STIFF = 1e9
"""Largest response kept."""

_FEW = 5 * BATCH_SIZES[0]
"""Up to here several of the smallest batches take less time than one of the next size."""


class States(NamedTuple):
    """Local states. outputs: arrays by name (`KEPT`, phase), first axis the point; response: (point, y, y)."""

    outputs: dict[str, FloatArray]
    response: FloatArray
    status: NDArray[np.int32]

    def take(self, index: Any) -> "States":
        """Chosen points, in the order asked for."""
        return States({k: v[index] for k, v in self.outputs.items()}, self.response[index], self.status[index])

    def of(self, name: str) -> FloatArray:
        """One output at every point."""
        return self.outputs[name]


def joined(first: States, second: States) -> States:
    """Points of both, one after the other."""
    outputs = {k: np.concatenate([v, second.outputs[k]]) for k, v in first.outputs.items()}
    return States(
        outputs, np.concatenate([first.response, second.response]), np.concatenate([first.status, second.status])
    )


class LocalGas:
    """The uniform gas with the Hubbard parameters of `mixture` (one point; its mu, T and entropy are not used).

    n_max: the cutoff in use. It is the mixture's own, or starts low and is raised with `raise_cutoff`.
    """

    def __init__(self, mixture: Mixture, ansatz: str = "product") -> None:
        if mixture.flat().shape != (1,):
            raise InputError(f"the mixture of a cloud has the batch shape {mixture.shape}; it must be one point")
        if mixture.sublattices != 1:
            raise InputError("offset is not 0; a cloud in a superlattice is not offered")
        self.mixture = mixture.flat()
        self.ansatz = ansatz
        self.fixed = mixture.n_max is not None
        self.n_max = mixture.n_max or CUTOFF_LADDER[mixture.species][0]
        self.solved = 0

    @property
    def species(self) -> int:
        """Number of species."""
        return self.mixture.species

    @property
    def scale(self) -> float:
        """The largest energy of a site: U or z t; for hard cores the hopping and the interspecies interaction."""
        U = 0.0 if self.n_max == 1 else float(np.max(self.mixture.U))
        return max(U, float(np.max(self.mixture.z_t)), float(np.max(np.abs(self.mixture.U12))), 1e-300)

    @property
    def z_t(self) -> FloatArray:
        """Hopping over all neighbours, (species,)."""
        return np.asarray(self.mixture.z_t)[0]

    def raise_cutoff(self) -> bool:
        """Go to the next cutoff of the ladder; False where it is fixed or at the end."""
        higher = [n for n in CUTOFF_LADDER[self.species] if n > self.n_max]
        if self.fixed or not higher:
            return False
        self.n_max = higher[0]
        return True

    def _pieces(self, count: int) -> Iterator[tuple[NDArray[np.intp], int]]:
        """Cut points into whole batches, the last padded; the dressed ansatz pays per point and is not padded."""
        begin = 0
        while begin < count:
            few = count - begin <= _FEW
            size = BATCH_SIZES[0] if few else BATCH_SIZES[1]
            piece = np.arange(begin, min(begin + size, count))
            yield piece, size if self.ansatz == "product" else piece.size
            begin += size

    def __call__(self, mu: FloatArray, T: float) -> States:
        """Solve at mu (point, species) and temperature T."""
        count = len(mu)
        self.solved += count
        evaluate = Evaluator(self.mixture.replace(mu=None, T=None, entropy=None), self.n_max, self.ansatz)
        parts: list[States] = []
        for piece, size in self._pieces(count):
            index = np.concatenate([piece, np.full(size - piece.size, piece[-1])])
            batch = evaluate(np.zeros(size, np.intp), mu[index], np.full(size, T))
            outputs = {name: np.asarray(batch.outputs[name])[: piece.size] for name in KEPT}
            seen = {name: np.asarray(v)[: piece.size] for name, v in batch.outputs.items()}
            hopping = np.broadcast_to(self.mixture.t, (piece.size, *self.mixture.t.shape[1:]))
            outputs["phase"] = by_dimension(seen, hopping)["phase"]
            # At T = 0 a degenerate site responds without bound, or not definedly: the climb then goes by its steps.
            response = np.nan_to_num(np.asarray(batch.response)[: piece.size], posinf=_STIFF, neginf=-_STIFF)
            parts.append(States(outputs, np.clip(response, -_STIFF, _STIFF), np.asarray(batch.status)[: piece.size]))
        whole = parts[0]
        for part in parts[1:]:
            whole = joined(whole, part)
        return whole
