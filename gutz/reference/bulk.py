"""What open chains say of the infinite one: values per site with their errors, decay laws, the phase.

In:  an `Entry` and its raw measurements (`measure`).
Out: the same dataset with bulk values `x`, errors `x_error`, exponents, and a phase label added.

Sums over a chain of length L go as S = x L + b + c/L: x is the bulk value, b what the ends do. Three lengths give
all three; the error is the distance to the x of the two longest (b L only), or with two lengths the distance to
S/L, plus the change that half the bond dimension makes on the shortest chain.
"""

from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from gutz.phases import Phase
from gutz.reference import decay
from gutz.reference.plan import Entry

Floats = NDArray[np.float64]

_LOCKING_DIMENSION = 2.0
"""Scaling dimension, sum_ab K_ab, below which the lattice locks a whole total filling; K itself for one species
(Giamarchi, Quantum Physics in One Dimension, 2003)."""

_GAPLESS = 0.25
"""Luttinger parameter of a channel above which it has no gap; with one, fluctuations do not grow and it tends to 0."""

_STAGGERED = 0.01
"""Staggered density correlation at the largest stored distance above which there is a density wave."""

_SUMS = {
    "energy": ("total_energy", "energy per site without mu", "t-unit"),
    "filling": ("atoms", "atoms per site", "1"),
    "number_variance": ("sum_covariance", "on-site number covariance", "1"),
    "one_body": ("sum_one_body", "<b+_i b_i+r>", "1"),
    "pair": ("sum_pair", "<P+_i P_i+r>, P = b_1 b_2", "1"),
    "antipair": ("sum_antipair", "<A+_i A_i+r>, A = b+_2 b_1", "1"),
    "density": ("sum_density", "<n_ai n_b,i+r> - <n_ai><n_b,i+r>", "1"),
    "entropy": ("total_entropy", "entropy per site", "k_B"),
    "free_energy": ("grand_potential", "grand potential per site", "t-unit"),
}


def extrapolate(entry: Entry, raw: xr.Dataset) -> xr.Dataset:
    """Raw measurements with bulk values, errors, decay laws and `phase` (integer of `gutz.phases.Phase`) added."""
    if entry.method == "Bethe ansatz":
        return _exact(entry, raw)
    made: dict[str, Any] = {}
    for name, (source, words, units) in _SUMS.items():
        if source in raw:
            value, error = _limit(entry, raw, source)
            dims = raw[source].dims[1:]
            made[name] = (dims, value, {"long_name": words, "units": units})
            made[f"{name}_error"] = (dims, error, {"long_name": f"error of {words}", "units": units})
    whole = raw.assign(made)
    whole = whole.assign(_laws(whole, entry))
    return whole.assign(phase=((), np.int8(_phase(whole, entry)), {"long_name": "phase", "units": "1"}))


def _limit(entry: Entry, raw: xr.Dataset, source: str) -> tuple[Floats, Floats]:
    """Bulk value and error of one summed quantity, of the shape it has on one chain."""
    full = _settled(entry, raw)
    lengths = raw["length"].values[full].astype(float)
    sums = raw[source].values[full]
    slope = (sums[-1] - sums[-2]) / (lengths[-1] - lengths[-2])
    if len(lengths) == 2:
        value, error = slope, np.abs(slope - sums[-1] / lengths[-1])
    else:
        columns = np.stack([lengths, np.ones_like(lengths), 1 / lengths], axis=1)[-3:]
        value = np.linalg.solve(columns, sums[-3:].reshape(3, -1))[0].reshape(sums.shape[1:])
        error = np.abs(value - slope)
    half = np.flatnonzero(raw["bond"].values != entry.bond)
    if half.size:
        error = error + np.abs(raw[source].values[half[0]] - sums[0]) / lengths[0]
    return np.asarray(value), np.asarray(error)


def _settled(entry: Entry, raw: xr.Dataset) -> NDArray[np.intp]:
    """Runs with all states kept whose sweeps settled; all of them where fewer than two did."""
    full = raw["bond"].values == entry.bond
    settled = np.flatnonzero(full & (raw["converged"].values > 0))
    return settled if settled.size > 1 else np.flatnonzero(full)


def _laws(whole: xr.Dataset, entry: Entry) -> dict[str, Any]:
    """How correlators fall off on the longest chain, and Luttinger parameters from number fluctuations.

    An exponent is the mean of what the correlator and the fluctuations say; half their difference is its error.
    """
    made: dict[str, Any] = {}
    sites = int(whole["length"].values[-1])
    K = np.full((entry.species,) * 2, np.nan)
    if entry.T == 0 and whole["converged"].values[-1] > 0:
        every = whole["fluctuation"].values
        fluctuation = every.reshape(-1, every.shape[-1])
        K = np.array([decay.luttinger(row, sites, entry.filling[0]) for row in fluctuation]).reshape(K.shape)
        words = "Luttinger parameters from number fluctuations: 1 for hard-core, infinite for free bosons"
        made["luttinger"] = (("species", "species_"), K, {"long_name": words, "units": "1"})
    expected = _expected_exponents(K)
    for name in ("one_body", "pair", "antipair"):
        if f"middle_{name}" not in whole:
            continue
        values = whole[f"middle_{name}"]
        laws = [decay.law(row, sites, 0.0 if entry.T > 0 else 0.5) for row in np.atleast_2d(values.values)]
        fitted = np.array([law.exponent for law in laws])
        said = np.broadcast_to(expected[name], fitted.shape)
        algebraic = np.where(np.isnan(said), [law.algebraic for law in laws], np.isfinite(said))
        for key, numbers, words, units in (
            ("exponent", (fitted + said) / 2, "exponent of the algebraic law", "1"),
            ("exponent_error", np.abs(fitted - said) / 2, "error of the exponent", "1"),
            ("decay_length", np.array([law.decay_length for law in laws]), "length of an exponential law", "sites"),
            ("algebraic", algebraic.astype(float), "1 where there is a power law", "1"),
        ):
            dims = values.dims[:-1]
            made[f"{name}_{key}"] = (dims, numbers if dims else numbers[0], {"long_name": words, "units": units})
    return made


def _expected_exponents(K: Floats) -> dict[str, Floats]:
    """Exponents that follow from Luttinger parameters; infinite where a gap makes an exponential, nan if unknown."""
    if len(K) == 1:
        # The fluctuations of one species do not tell a small gap from none: the correlator decides.
        return {"one_body": 1 / (2 * K[0]) if K[0, 0] > _GAPLESS else np.array([np.nan])}
    pair, antipair = K.sum() / 4, (K[0, 0] + K[1, 1] - 2 * K[0, 1]) / 4
    if np.isnan(pair):
        return dict.fromkeys(("one_body", "pair", "antipair"), np.array([np.nan]))
    if min(pair, antipair) > _GAPLESS and np.linalg.eigvalsh(K).min() > 0:
        inverse = np.linalg.inv(K)
        across = inverse[0, 1]
        return {
            "one_body": np.diag(inverse) / 2,
            "pair": np.array([inverse.trace() / 2 + across]),
            "antipair": np.array([inverse.trace() / 2 - across]),
        }
    return {
        "one_body": np.array([np.inf]),
        "pair": np.array([1 / (2 * pair) if pair > _GAPLESS else np.inf]),
        "antipair": np.array([1 / (2 * antipair) if antipair > _GAPLESS else np.inf]),
    }


def _phase(whole: xr.Dataset, entry: Entry) -> Phase:
    """The label that follows from the numbers; one dimension at T > 0 has no order at all."""
    if entry.T > 0:
        return Phase.NORMAL
    total = sum(entry.filling)
    commensurate = abs(total - round(total)) < 1e-9
    moving = whole["one_body_algebraic"].values > 0
    K = whole["luttinger"].values.sum() if "luttinger" in whole else np.nan
    # At a whole total filling the lattice holds the total density where its operator's dimension is below 2.
    held = commensurate and K < _LOCKING_DIMENSION
    if entry.species == 1:
        if commensurate and entry.n_max > 1 and (held or not moving[0]):
            return Phase.MOTT
        return Phase.SUPERFLUID if moving[0] else Phase.UNDECIDED
    if moving.all():
        return Phase.COUNTERFLOW if held else Phase.SUPERFLUID
    staggered = whole["density"].values[..., -1] * (-1.0) ** (whole.sizes["distance"] - 1)
    pair, antipair = (bool(whole[f"{name}_algebraic"] > 0) for name in ("pair", "antipair"))
    if not pair and not antipair:
        if staggered[0, 0] > _STAGGERED:
            return Phase.NEEL if staggered[0, 1] < 0 else Phase.DENSITY_WAVE
        return Phase.MOTT if commensurate else Phase.UNDECIDED
    return Phase.PAIRED if pair else Phase.COUNTERFLOW


def _exact(entry: Entry, raw: xr.Dataset) -> xr.Dataset:
    """Bulk values of the infinite hard-core mixture at half filling from its exact energy and double occupancy."""
    energy, double = float(raw["exact_energy"]), float(raw["exact_double"])
    shared = double - 0.25
    # Every bond carries - 2 t (G_1 + G_2), and both species are alike.
    coherence = (entry.U12 * double - energy) / (4 * entry.t[0])
    one_body = np.array([[0.5, coherence]] * 2)
    values = {
        "energy": ((), energy),
        "filling": (("species",), np.array(entry.filling)),
        "number_variance": (("species", "species_"), np.array([[0.25, shared], [shared, 0.25]])),
        "one_body": (("species", "distance"), one_body),
    }
    made: dict[str, Any] = {}
    for name, (dims, value) in values.items():
        _, words, units = _SUMS[name]
        made[name] = (dims, value, {"long_name": words, "units": units})
        made[f"{name}_error"] = (dims, np.zeros_like(value), {"long_name": f"error of {words}", "units": units})
    label = Phase.COUNTERFLOW if entry.U12 > 0 else Phase.PAIRED if entry.U12 < 0 else Phase.SUPERFLUID
    made["phase"] = ((), np.int8(label), {"long_name": "phase", "units": "1"})
    return raw.assign(made).assign_coords(species=[1, 2], species_=[1, 2], distance=[0, 1])
