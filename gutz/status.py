"""What can be said about one solved point, as bits of one integer, each with words a person can use.

In:  nothing (numpy-free, jax-free: the command line reads it too).
Out: `Status`, its sentences, and which bits mean that the numbers must not be trusted.

How codes combine: they are bits, so a point keeps every remark; 0 means nothing to say. In stored data -1
means "not computed yet".
"""

from enum import IntFlag


class Status(IntFlag):
    """Remarks on a point. Bits in `UNTRUSTED` mean: do not use this point's numbers."""

    OK = 0
    NOT_CONVERGED = 1
    CUTOFF = 2
    COLLAPSE = 4
    DEMIXING = 8
    FILLING_GAP = 16
    PLATEAU = 32
    DEGENERATE = 64
    ENTROPY_UNREACHABLE = 128
    NOT_FINITE = 256
    FALLBACK = 512
    DRESSING_LARGE = 1024
    FILLING_UNREACHABLE = 2048
    NEGATIVE_ENTROPY = 4096


SENTENCES: dict[Status, str] = {
    Status.NOT_CONVERGED: "the minimisation did not reach its tolerance; try a neighbouring point or another T",
    Status.CUTOFF: "more than 1e-6 of the weight sits at the highest occupation kept; raise n_max",
    Status.COLLAPSE: "U12 is below -sqrt(U1 U2), where the mixture collapses; nothing was computed",
    Status.DEMIXING: "U12 is above sqrt(U1 U2), where a superfluid mixture separates; the uniform state shown "
    "may not be the true one",
    Status.FILLING_GAP: "no uniform state has the filling (or entropy) asked for: it lies inside a jump "
    "between two phases; a state at the jump is shown",
    Status.PLATEAU: "the filling does not change along some direction of mu (a plateau); mu is its middle",
    Status.DEGENERATE: "the ground state of a site is degenerate at T = 0; responses to small changes are not "
    "defined, use a small T > 0",
    Status.ENTROPY_UNREACHABLE: "no temperature gives the entropy asked for; the nearest state is shown",
    Status.NOT_FINITE: "the numbers left the range of floating point; check the sizes of the parameters",
    Status.FALLBACK: "the second-order (dressed) result does not exist here; the product result is shown",
    Status.DRESSING_LARGE: "the second-order term is not small against the first-order one; treat as qualitative",
    Status.FILLING_UNREACHABLE: "no chemical potential within the cutoff gives the filling asked for",
    Status.NEGATIVE_ENTROPY: "the truncated (dressed) expansion gives a slightly negative entropy; read it as zero",
}

UNTRUSTED = (
    Status.NOT_CONVERGED
    | Status.CUTOFF
    | Status.COLLAPSE
    | Status.FILLING_GAP
    | Status.ENTROPY_UNREACHABLE
    | Status.NOT_FINITE
    | Status.FILLING_UNREACHABLE
)
"""Bits that make a point untrustworthy; a run containing any ends with exit code 1."""


def describe(code: int) -> list[str]:
    """Return one sentence per bit set in `code`, in bit order; empty for a point without remarks."""
    if code < 0:
        return ["not computed yet"]
    return [text for bit, text in SENTENCES.items() if code & bit]
