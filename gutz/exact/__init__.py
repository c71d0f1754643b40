"""Quasi-exact solvers that make the references other rooms are judged by.

In:  a cluster of sites and the couplings of H (`LatticeModel`).
Out: energies, correlators and noise maps: `ed` (any small cluster, any T), `mps` (long open chains),
     `chains` (integrable chains: Bethe ansatz, hard-core bosons as free fermions).
Plain numpy and scipy; nothing here is differentiable or batched.
"""

from gutz.exact.lattice import Cluster, LatticeModel, box, chain, ring

__all__ = ["Cluster", "LatticeModel", "box", "chain", "ring"]
