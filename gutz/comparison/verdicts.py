"""How wrong mean field is: verdicts, their thresholds, and what needs no reference to be doubted.

In:  errors by observable; outputs of mean field.
Out: `Verdict` codes and overall numbers; `Flag` bits with sentences that carry the number behind them.
No heavy imports: figures and the command line name verdicts without the solver.
"""

from enum import IntEnum, IntFlag

import numpy as np
from numpy.typing import ArrayLike, NDArray

from gutz.phases import Phase
from gutz.status import UNTRUSTED, Status

Floats = NDArray[np.float64]


class Verdict(IntEnum):
    """What to make of a number of mean field; the integer values are stored and never change meaning."""

    NOT_JUDGED = -1
    QUANTITATIVE = 0
    QUALITATIVE = 1
    WRONG = 2


WORDS = {
    Verdict.NOT_JUDGED: "not judged",
    Verdict.QUANTITATIVE: "quantitative",
    Verdict.QUALITATIVE: "qualitative",
    Verdict.WRONG: "wrong",
}

QUANTITATIVE = 0.10
"""Largest relative error that is called quantitative."""

QUALITATIVE = 0.50
"""Largest relative error that is called qualitative; above it, wrong."""

UNSURE = 0.10
"""Relative error of the reference itself above which it judges nothing."""


class Flag(IntFlag):
    """Doubts that need no reference, from one dimension alone."""

    LONG_RANGE_CLAIMED = 1
    DEPLETION_DIVERGES = 2
    DRESSING_LARGE = 4
    LOCKING_MISSED = 8
    FALLBACK = 16
    UNTRUSTED = 32


SENTENCES = {
    Flag.LONG_RANGE_CLAIMED: "the order parameter claims long-range order; in one dimension there is none, at best an "
    "algebraic decay",
    Flag.DEPLETION_DIVERGES: "the condensate's depletion grows without bound with the length of the chain; its density "
    "means something only over distances on which mean field's own response keeps coherence",
    Flag.DRESSING_LARGE: "the second-order term is not small against the first-order one",
    Flag.LOCKING_MISSED: "the bare order parameter says superfluid, but its own Luttinger parameter is below 2, where "
    "whole-number filling locks; the label follows that rule",
    Flag.FALLBACK: "the dressed result does not exist here; the product result stands in",
    Flag.UNTRUSTED: "the solver itself does not trust this point, see its status",
}


def verdict(errors: ArrayLike) -> NDArray[np.int8]:
    """Verdict codes of relative errors (nan: not judged), any shape."""
    e = np.asarray(errors, dtype=float)
    code = np.where(e <= QUANTITATIVE, Verdict.QUANTITATIVE, Verdict.WRONG)
    code = np.where((e > QUANTITATIVE) & (e <= QUALITATIVE), Verdict.QUALITATIVE, code)
    return np.where(np.isnan(e), Verdict.NOT_JUDGED, code).astype(np.int8)


def overall(errors: Floats, phase: int) -> tuple[Floats, NDArray[np.int8]]:
    """One number and one verdict per point from errors (points, observables); `phase`: which column is the phase.

    The number is the mean of the errors judged, each counted as at most 1 (the phase: 0 right, 1 wrong). Wrong: the
    phase is wrong (error above 1/2), or half of the observables or more are. Quantitative: all of them are. Otherwise
    qualitative.
    """
    capped = np.minimum(errors, 1.0)
    judged = np.isfinite(capped)
    count = judged.sum(-1)
    number = np.where(count > 0, np.where(judged, capped, 0.0).sum(-1) / np.maximum(count, 1), np.nan)
    codes = verdict(errors)
    wrong = (codes == Verdict.WRONG).sum(-1)
    bad = (wrong >= 0.5 * count) | (errors[:, phase] > QUALITATIVE)
    good = (codes == Verdict.QUANTITATIVE).sum(-1) == count
    code = np.where(bad, Verdict.WRONG, np.where(good, Verdict.QUANTITATIVE, Verdict.QUALITATIVE))
    return number, np.where(count > 0, code, Verdict.NOT_JUDGED).astype(np.int8)


_ORDERED = (
    Phase.SUPERFLUID,
    Phase.SUPERFLUID_1,
    Phase.SUPERFLUID_2,
    Phase.PAIRED,
    Phase.COUNTERFLOW,
    Phase.SUPERSOLID,
)


_STILL = (Phase.NORMAL, Phase.MOTT)


def same_phase(said: ArrayLike, true: ArrayLike) -> NDArray[np.bool_]:
    """Whether two labels of ground states of chains mean the same; without order, normal and Mott do."""
    a, b = np.asarray(said), np.asarray(true)
    return (a == b) | (np.isin(a, _STILL) & np.isin(b, _STILL))


def flags(
    phase: ArrayLike,
    condensate: ArrayLike,
    status: ArrayLike,
    lockable: ArrayLike,
) -> NDArray[np.int32]:
    """Flag bits per point. condensate: |phi|^2 summed over species; lockable: whole total filling at T = 0."""
    label, total, bits = np.asarray(phase), np.asarray(condensate), np.asarray(status)
    locked = np.isin(label, (*_STILL, Phase.COUNTERFLOW))
    code = np.where(np.isin(label, _ORDERED) | (total > 0), int(Flag.LONG_RANGE_CLAIMED), 0)
    code = code | np.where(total > 0, int(Flag.DEPLETION_DIVERGES), 0)
    for flag, cause in (
        (Flag.DRESSING_LARGE, Status.DRESSING_LARGE),
        (Flag.FALLBACK, Status.FALLBACK),
        (Flag.UNTRUSTED, UNTRUSTED),
    ):
        code = code | np.where((bits & int(cause)) > 0, int(flag), 0)
    code = code | np.where((total > 0) & np.asarray(lockable) & locked, int(Flag.LOCKING_MISSED), 0)
    return code.astype(np.int32)
