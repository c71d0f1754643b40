"""Labels of phases, and the thresholds behind them, in one place.

In:  order parameters, number variances and fillings of solved points (numpy arrays).
Out: integer labels (`Phase`), with words for people. Labels follow from the numbers, never the other way round.
No heavy imports, so that figures and the command line can name phases without the solver.
"""

from collections.abc import Mapping
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray


class Phase(IntEnum):
    """Phase labels; the integer values are stored in datasets and never change meaning."""

    UNDECIDED = -1
    VACUUM = 0
    NORMAL = 1
    MOTT = 2
    SUPERFLUID = 3
    SUPERFLUID_1 = 4
    SUPERFLUID_2 = 5
    PAIRED = 6
    COUNTERFLOW = 7
    DENSITY_WAVE = 8
    NEEL = 9
    SUPERSOLID = 10
    SEPARATED = 11
    COLLAPSE = 12


WORDS: dict[Phase, str] = {
    Phase.UNDECIDED: "undecided",
    Phase.VACUUM: "vacuum",
    Phase.NORMAL: "normal",
    Phase.MOTT: "Mott insulator",
    Phase.SUPERFLUID: "superfluid",
    Phase.SUPERFLUID_1: "superfluid of species 1 only",
    Phase.SUPERFLUID_2: "superfluid of species 2 only",
    Phase.PAIRED: "paired superfluid",
    Phase.COUNTERFLOW: "counterflow superfluid",
    Phase.DENSITY_WAVE: "density wave",
    Phase.NEEL: "z-Néel antiferromagnet",
    Phase.SUPERSOLID: "supersolid",
    Phase.SEPARATED: "phase separated",
    Phase.COLLAPSE: "collapse",
}


class Range(IntEnum):
    """How far superfluid order reaches; the integer values are stored in datasets and never change meaning."""

    NONE = 0
    LONG = 1
    QUASI = 2
    SHORT = 3


RANGE_WORDS: dict[Range, str] = {
    Range.NONE: "",
    Range.LONG: "",
    Range.QUASI: "quasi-long-range ",
    Range.SHORT: "short-range ",
}
"""Put before the word of a phase: power-law and exponential decay are said, true long-range order is not."""


def words(phase: int, reach: int = Range.NONE) -> str:
    """The phase in words, with the range of its order where that is not long."""
    known = RANGE_WORDS.get(Range(reach), "") if reach in RANGE_WORDS else ""
    return known + WORDS[Phase(phase)]


ORDER_THRESHOLD = 1e-5
"""A field average above this counts as order; converged normal states come out as exactly zero."""

EMPTY_THRESHOLD = 1e-6
"""Total filling below this is called vacuum."""

MOTT_VARIANCE = 0.15
"""Variance of the total number on a site below which a state without order is called a Mott insulator: the
value in the atomic limit at k_B T = 0.2 U, where the insulator has melted (Gerbier, PRL 99, 120405 (2007))."""

MOTT_MISMATCH = 0.1
"""How far the total filling may be from a whole number (1 or more) in a Mott insulator."""


PAIR_THRESHOLD = 1e-3
"""Local <b_1 b_2> or <b_1† b_2> above which a state without single-particle order is paired or counterflow."""

STAGGER_THRESHOLD = 1e-4
"""Sublattice density difference above which there is a density wave."""


def label(outputs: Mapping[str, NDArray[np.float64]]) -> NDArray[np.int8]:
    """Label points from the outputs of `gutz.variables`, arrays of any batch shape; points with nan are UNDECIDED."""
    order_parameter, filling = outputs["order_parameter"], outputs["filling"]
    number_variance = outputs["number_variance"]
    ordered = np.abs(order_parameter) > ORDER_THRESHOLD
    total_variance = number_variance.sum((-1, -2))
    total_filling = filling.sum(-1)
    whole = np.maximum(np.round(total_filling), 1.0)
    mott = (total_variance < MOTT_VARIANCE) & (np.abs(total_filling - whole) < MOTT_MISMATCH)
    code = np.where(mott, Phase.MOTT, Phase.NORMAL)
    code = np.where(total_filling < EMPTY_THRESHOLD, Phase.VACUUM, code)
    staggered = np.abs(outputs["staggering"]) > STAGGER_THRESHOLD
    code = np.where(staggered.any(-1), Phase.DENSITY_WAVE, code)
    if order_parameter.shape[-1] == 2:
        opposite = staggered.all(-1) & (outputs["staggering"].prod(-1) < 0)
        code = np.where(opposite, Phase.NEEL, code)
        code = np.where(outputs["pair_order"] > PAIR_THRESHOLD, Phase.PAIRED, code)
        code = np.where(outputs["antipair_order"] > PAIR_THRESHOLD, Phase.COUNTERFLOW, code)
    code = np.where(ordered.all(-1), Phase.SUPERFLUID, code)
    if order_parameter.shape[-1] == 2:
        code = np.where(ordered[..., 0] & ~ordered[..., 1], Phase.SUPERFLUID_1, code)
        code = np.where(~ordered[..., 0] & ordered[..., 1], Phase.SUPERFLUID_2, code)
    moving = np.isin(code, (Phase.PAIRED, Phase.COUNTERFLOW)) | ordered.any(-1)
    code = np.where(moving & staggered.any(-1), Phase.SUPERSOLID, code)
    code = np.where(np.isfinite(total_filling) & np.isfinite(total_variance), code, Phase.UNDECIDED)
    return code.astype(np.int8)
