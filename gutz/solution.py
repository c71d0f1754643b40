"""The answer: every output of every point, with a status for each.

In:  arrays from the solver, keyed by the names in `gutz.variables.VARIABLES`.
Out: `Solution`, a frozen JAX pytree; `to_dataset` labels it for xarray.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import jax
import numpy as np

from gutz.model import Mixture
from gutz.status import UNTRUSTED, describe
from gutz.variables import VARIABLES

Array = Any


@jax.tree_util.register_dataclass
@dataclass(frozen=True, eq=False)
class Solution:
    """Outputs of all points; each name in `VARIABLES` is an attribute of the batch's shape plus its own axes.

    mixture: the parameters as given. outputs: arrays by name. fields: converged fields, shape
    (..., sublattice, species). ansatz: "product" or "dressed".
    """

    mixture: Mixture
    outputs: dict[str, Array]
    fields: Array
    ansatz: str = field(metadata={"static": True})

    def __getattr__(self, name: str) -> Array:
        outputs = self.__dict__.get("outputs", {})
        if name in outputs:
            return outputs[name]
        if name in VARIABLES:
            raise AttributeError(f"{name} is not an output of the {self.__dict__.get('ansatz')} ansatz")
        raise AttributeError(name)

    @property
    def shape(self) -> tuple[int, ...]:
        """The batch shape."""
        return self.mixture.shape

    @property
    def trusted(self) -> Array:
        """True where no status bit warns against using the numbers."""
        return (np.asarray(self.outputs["status"]) & int(UNTRUSTED)) == 0

    def remarks(self) -> list[str]:
        """One sentence for every status that occurs, with the number of points."""
        codes = np.asarray(self.outputs["status"]).ravel()
        sentences: dict[str, int] = {}
        for code, count in zip(*np.unique(codes, return_counts=True), strict=True):
            for sentence in describe(int(code)):
                sentences[sentence] = sentences.get(sentence, 0) + int(count)
        return [f"{count} of {codes.size} points: {sentence}" for sentence, count in sentences.items()]

    def to_dataset(
        self,
        dims: Sequence[str] | None = None,
        coords: Mapping[str, Any] | None = None,
        energy_unit: str = "1",
    ) -> Any:
        """Return an xarray.Dataset. dims: names of the batch axes (default axis_0, axis_1, ...).

        coords: coordinates of the batch axes. energy_unit: the unit the mixture's energies are in.
        """
        # xarray takes longer to import than a point takes to solve; only who asks for a dataset pays for it.
        from gutz.dataset import to_dataset

        return to_dataset(self.outputs, dims, coords, energy_unit).assign_attrs(ansatz=self.ansatz)
