"""The outputs of a solution: one table of names, dimensions, units and words, used by every reader and writer.

In:  nothing (no heavy imports: the command line and the checks read it too).
Out: `VARIABLES`, in the order a person would read them. Attribute names of `Solution` are the keys.
"""

from typing import NamedTuple

ENERGY = "energy"
"""Unit mark: replaced by the run's energy unit when a dataset is written."""


class Variable(NamedTuple):
    """One output. dims: trailing dimensions after the batch; units: `ENERGY`-based or literal; dtype: numpy name."""

    dims: tuple[str, ...]
    units: str
    long_name: str
    description: str
    dtype: str = "float64"


_S, _SS = ("species",), ("species", "species_")

VARIABLES: dict[str, Variable] = {
    "phase": Variable((), "1", "Phase", "label that follows from the order parameters, see gutz.phases", "int8"),
    "status": Variable((), "1", "Status", "remarks on the point, bits of gutz.status.Status; 0 = none", "int32"),
    "mu": Variable(_S, ENERGY, "Chemical potential", "given, or solved for from the filling"),
    "T": Variable((), ENERGY, "Temperature", "given, or solved for from the entropy per particle"),
    "filling": Variable(_S, "1", "Filling", "atoms per site, n_a = -dF/dmu_a"),
    "free_energy": Variable((), ENERGY, "Free energy per site", "variational grand potential"),
    "energy": Variable((), ENERGY, "Energy per site", "F + T S + sum_a mu_a n_a"),
    "entropy": Variable((), "k_B", "Entropy per site", "S = -dF/dT"),
    "entropy_per_particle": Variable((), "k_B", "Entropy per particle", "S divided by the total filling"),
    "heat_capacity": Variable((), "k_B", "Heat capacity per site", "T dS/dT at fixed mu"),
    "order_parameter": Variable(_S, "1", "Order parameter", "phi_a = <b_a>, real and positive by choice of phase"),
    "condensate": Variable(_S, "1", "Condensate density", "|phi_a|^2, atoms per site"),
    "pair_order": Variable((), "1", "Pair order", "local <b_1 b_2>: phi_1 phi_2 plus a correlated part"),
    "antipair_order": Variable((), "1", "Anti-pair order", "local <b_1† b_2>: phi_1 phi_2 plus a correlated part"),
    "number_variance": Variable(_SS, "1", "On-site number covariance", "<n_a n_b> - <n_a><n_b> on one site"),
    "compressibility": Variable(_SS, "1 / " + ENERGY, "Compressibility", "dn_a/dmu_b at fixed T"),
    "coherence": Variable((*_S, "direction"), "1", "Nearest-neighbour coherence", "<b_a† b_a> on a bond"),
    "stiffness": Variable((*_SS, "direction"), ENERGY, "Superfluid stiffness", "d2F/dtheta_a dtheta_b per site"),
    "staggering": Variable(_S, "1", "Sublattice density difference", "half the filling of A minus B sites"),
    "order_range": Variable((), "1", "Range of superfluid order", "what the order means in this dimension", "int8"),
    "exponent": Variable(_S, "1", "Decay exponent", "<b_a†(r) b_a(0)> ~ r^-exponent; 0: long-range, inf: no power law"),
    "exponent_pair": Variable((), "1", "Decay exponent of pairs", "the same of b_1 b_2; 1/(2K) in one dimension"),
    "exponent_antipair": Variable((), "1", "Decay exponent of anti-pairs", "the same of b_1† b_2"),
    "coherence_length": Variable(_S, "site", "Coherence length", "of exponential decay; inf: none, 0: no order"),
    "coherence_length_pair": Variable((), "site", "Coherence length of pairs", "the same of b_1 b_2"),
    "coherence_length_antipair": Variable((), "site", "Coherence length of anti-pairs", "the same of b_1† b_2"),
    "dressing": Variable((), "1", "Size of the second-order term", "relative to the first-order one"),
    "n_max": Variable((), "1", "Occupation cutoff", "largest number of atoms of one species kept on a site", "int16"),
    "cutoff_weight": Variable((), "1", "Weight at the cutoff", "probability of the highest occupation kept"),
    "residual": Variable((), "1", "Residual", "largest mismatch of the self-consistency conditions"),
}  # fmt: skip

ABSENT = {"product": ("dressing",), "dressed": ("residual",)}
"""Outputs that an ansatz does not have."""
