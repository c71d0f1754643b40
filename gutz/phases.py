"""Labels of phases, and the thresholds behind them, in one place.

In:  order parameters, number variances and fillings of solved points (numpy arrays).
Out: integer labels (`Phase`), with words for people. Labels follow from the numbers, never the other way round.
No heavy imports, so that figures and the command line can name phases without the solver.
"""

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

ORDER_THRESHOLD = 1e-5
"""A field average above this counts as order; converged normal states come out as exactly zero."""

EMPTY_THRESHOLD = 1e-6
"""Total filling below this is called vacuum."""

MOTT_VARIANCE = 0.15
"""Variance of the total number on a site below which a state without order is called a Mott insulator: the
value in the atomic limit at k_B T = 0.2 U, where the insulator has melted (Gerbier, PRL 99, 120405 (2007))."""

MOTT_MISMATCH = 0.1
"""How far the total filling may be from a whole number (1 or more) in a Mott insulator."""


def label(
    order_parameter: NDArray[np.float64], filling: NDArray[np.float64], number_variance: NDArray[np.float64]
) -> NDArray[np.int8]:
    """Label points of the product ansatz.

    order_parameter, filling: shape (..., species); number_variance: shape (..., species, species).
    Points with nan are UNDECIDED.
    """
    ordered = np.abs(order_parameter) > ORDER_THRESHOLD
    total_variance = number_variance.sum((-1, -2))
    total_filling = filling.sum(-1)
    whole = np.maximum(np.round(total_filling), 1.0)
    mott = (total_variance < MOTT_VARIANCE) & (np.abs(total_filling - whole) < MOTT_MISMATCH)
    code = np.where(mott, Phase.MOTT, Phase.NORMAL)
    code = np.where(total_filling < EMPTY_THRESHOLD, Phase.VACUUM, code)
    code = np.where(ordered.all(-1), Phase.SUPERFLUID, code)
    if order_parameter.shape[-1] == 2:
        code = np.where(ordered[..., 0] & ~ordered[..., 1], Phase.SUPERFLUID_1, code)
        code = np.where(~ordered[..., 0] & ordered[..., 1], Phase.SUPERFLUID_2, code)
    code = np.where(np.isfinite(total_filling) & np.isfinite(total_variance), code, Phase.UNDECIDED)
    return code.astype(np.int8)
