"""The chain's Hamiltonian, site by site: on-site energies, hopping, and <H> and <(H - E)^2> of a given state.

In:  a `LatticeModel` on an open chain, a `TensorChain`.
Out: numbers, in the model's unit of energy.
H is read along the chain as an automaton: no term begun, one hopping term half done, or done.
"""

from itertools import product

import numpy as np

from gutz.errors import InputError
from gutz.exact.lattice import Floats, LatticeModel
from gutz.exact.mps_tensors import (
    GrownOperator,
    LocalSpace,
    SiteOperator,
    TensorChain,
    grow_left,
    merge,
    overlap,
)

Transitions = dict[tuple[str, str], SiteOperator]


def bond_hopping(model: LatticeModel) -> Floats:
    """Hopping on the bonds (i, i + 1) in order, shape (species, sites - 1); InputError if not a chain."""
    if not model.cluster.is_open_chain or model.cluster.sites < 2:
        raise InputError(
            "cluster: matrix-product states need an open chain of at least 2 sites, with bonds (i, i + 1)."
        )
    order = np.argsort([i for i, _ in model.cluster.bonds])
    return model.hopping[:, order]


def onsite_energies(model: LatticeModel, space: LocalSpace, site: int) -> Floats:
    """U/2 n(n-1) + U12 n1 n2 - mu n of every local state, shape (local states,)."""
    n = np.array(space.physical, dtype=float)
    energy = n * (n - 1) @ model.interaction / 2 - n @ model.potential[:, site]
    return energy + (model.U12 * n[:, 0] * n[:, 1] if model.species == 2 else 0.0)


def _transitions(model: LatticeModel, space: LocalSpace, site: int, shift: float) -> Transitions:
    """H - shift * sites as (state before the site, state after) -> site operator."""
    steps: Transitions = {
        ("start", "start"): space.identity,
        ("done", "done"): space.identity,
        ("start", "done"): space.diagonal(onsite_energies(model, space, site) - shift),
    }
    for a in range(model.species):
        lower = space.lower(a)
        if site + 1 < model.cluster.sites:
            steps["start", f"b{a}"] = lower
            steps["start", f"b+{a}"] = lower.adjoint
        if site > 0:
            hop = space.diagonal(np.full(len(space.physical), -bond_hopping(model)[a, site - 1]))
            steps[f"b{a}", "done"] = hop @ lower.adjoint
            steps[f"b+{a}", "done"] = hop @ lower
    return steps


def _plus(x: GrownOperator, y: GrownOperator) -> GrownOperator:
    blocks = {q: block.sum(axis=1, keepdims=True) for q, block in merge([x, y]).blocks.items()}
    return GrownOperator(x.shift, 1, blocks)


def energy(model: LatticeModel, state: TensorChain) -> float:
    """<H> including - sum mu n."""
    grown = {"start": state.identities[0]}
    for i, tensor in enumerate(state.tensors):
        following: dict[str, GrownOperator] = {}
        for (a, b), operator in _transitions(model, state.space, i, 0.0).items():
            if a in grown:
                term = grow_left(grown[a], operator, tensor)
                following[b] = _plus(following[b], term) if b in following else term
        grown = following
    return float(overlap(grown["done"], state.densities[-1])[0, 0])


def energy_variance(model: LatticeModel, state: TensorChain, mean: float) -> float:
    """<(H - mean)^2>, with H^2 formed exactly (two automata side by side)."""
    grown = {("start", "start"): state.identities[0]}
    for i, tensor in enumerate(state.tensors):
        steps = _transitions(model, state.space, i, mean / len(state.tensors))
        following: dict[tuple[str, str], GrownOperator] = {}
        for ((a, c), bra), ((b, d), ket) in product(steps.items(), repeat=2):
            if (a, b) in grown:
                term = grow_left(grown[a, b], bra @ ket, tensor)
                following[c, d] = _plus(following[c, d], term) if (c, d) in following else term
        grown = following
    return float(overlap(grown["done", "done"], state.densities[-1])[0, 0])
