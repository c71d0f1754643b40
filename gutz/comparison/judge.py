"""Mean field judged at the stored chains, and between them.

In:  stored entries of one number of species; an ansatz; points of any mixture in one dimension.
Out: `Judgement`: errors, verdicts and values at the entries; `Estimate`: the same, interpolated, at other points.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gutz.comparison import predictions, verdicts
from gutz.comparison.observables import OBSERVABLES, measured, predicted
from gutz.comparison.places import Places
from gutz.comparison.references import References

Floats = NDArray[np.float64]

NAMES = tuple(OBSERVABLES)
_PHASE = NAMES.index("phase")


@dataclass(frozen=True, eq=False)
class Judgement:
    """One ansatz at every entry. errors, reference, predicted: (entries, observables), nan where not judged; the two
    values are means over the species. number, verdict: overall (entries,). flags: bits, coherent_sites: see there, both
    (entries,)."""

    ansatz: str
    errors: Floats
    reference: Floats
    predicted: Floats
    number: Floats
    verdict: NDArray[np.int8]
    flags: NDArray[np.int32]
    coherent_sites: Floats


@dataclass(frozen=True, eq=False)
class Estimate:
    """Interpolated errors at points. errors, lowest, highest: (points, observables), over the references nearby.

    nearest: index of the nearest entry, distance: how far it is (points,); nan errors where none is nearby.
    """

    errors: Floats
    lowest: Floats
    highest: Floats
    number: Floats
    verdict: NDArray[np.int8]
    nearest: NDArray[np.intp]
    distance: Floats


def judge(references: References, ansatz: str, kept: Path | None = predictions.STORED) -> Judgement:
    """Set mean field beside every entry. kept: the file of predictions to use where it fits, None to solve all."""
    found = _predictions(references, ansatz, kept)
    shape = (len(references.entries), len(NAMES))
    errors, reference, said = np.full(shape, np.nan), np.full(shape, np.nan), np.full(shape, np.nan)
    for number, (entry, dataset) in enumerate(zip(references.entries, references.datasets, strict=True)):
        truth = measured(entry, dataset)
        mine = predicted(found[number], entry.T)
        for column, name in enumerate(NAMES):
            if name in truth.values:
                reference[number, column] = _mean(truth.values[name])
            if name in mine:
                said[number, column] = _mean(mine[name])
            if name in truth.values and name in mine and name != "phase":
                errors[number, column] = _error(truth.values[name], truth.errors[name], truth.scales[name], mine[name])
        # At T > 0 no chain has order, and the labels say so with their range: nothing to judge.
        if np.isfinite(reference[number, _PHASE]) and entry.T == 0:
            right = verdicts.same_phase(said[number, _PHASE], reference[number, _PHASE])
            errors[number, _PHASE] = 0.0 if right else 1.0
    number_, code = verdicts.overall(errors, _PHASE)
    coherent = np.array([coherent_sites(each, entry.T) for each, entry in zip(found, references.entries, strict=True)])
    return Judgement(ansatz, errors, reference, said, number_, code, flags(found, references.places), coherent)


def interpolate(points: Places, references: References, judgement: Judgement) -> Estimate:
    """Errors between the entries: means weighted by 1/d^2 over those nearby, each error counted as at most 1."""
    far, weights = references.weights(points)
    far = np.where(np.isnan(far), np.inf, far)
    errors = np.minimum(judgement.errors, 1.0)
    shape = (points.size, len(NAMES))
    mean, lowest, highest = np.full(shape, np.nan), np.full(shape, np.nan), np.full(shape, np.nan)
    for column in range(len(NAMES)):
        judged = np.isfinite(errors[:, column])
        share = np.nan_to_num(weights[:, judged])
        total = share.sum(-1)
        some = total > 0
        if judged.any() and some.any():
            values = errors[judged, column]
            mean[some, column] = (share[some] @ values) / total[some]
            spread = np.where(share[some] > 0, values, np.nan)
            lowest[some, column], highest[some, column] = np.nanmin(spread, -1), np.nanmax(spread, -1)
    number, code = verdicts.overall(mean, _PHASE)
    nearest = far.argmin(-1)
    return Estimate(mean, lowest, highest, number, code, nearest, far[np.arange(points.size), nearest])


def flags(found: Sequence[Mapping[str, Any]], places: Places) -> NDArray[np.int32]:
    """Doubts that need no reference, for outputs of points (each without point axis)."""

    def each(name: str) -> NDArray[Any]:
        return np.array([np.nansum(one[name]) for one in found])

    lockable = places.commensurate & (places.T == 0)
    return verdicts.flags(each("phase"), each("condensate"), np.maximum(each("status"), 0).astype(int), lockable)


def coherent_sites(found: Mapping[str, Any], T: float) -> float:
    """Sites over which coherence falls to 1/e by mean field's own response; 0 where it has none.

    e^(1/exponent) at T = 0, the coherence length above; the shorter one of two species.
    """
    lengths = np.asarray(found["coherence_length"] if T > 0 else found["exponent"], dtype=float)
    lengths = lengths[~np.isnan(lengths)]
    if not lengths.size:
        return float("nan")
    if T > 0:
        return float(lengths.min())
    slowest = float(lengths.max())
    return float(np.exp(min(1 / slowest, 300.0))) if 0 < slowest < np.inf else 0.0


def _predictions(references: References, ansatz: str, kept: Path | None) -> list[dict[str, Any]]:
    """Outputs at every entry: kept ones where they fit, the others solved in one batch."""
    held = {} if kept is None else predictions.stored(kept, ansatz)
    identities = [str(dataset.attrs["identity"]) for dataset in references.datasets]
    missing = np.array([number for number, identity in enumerate(identities) if identity not in held], dtype=int)
    fresh: dict[int, dict[str, Any]] = {}
    if missing.size:
        solved = predictions.solve_places(references.places[missing], ansatz, references.noise[missing])
        fresh = {
            int(number): {name: values[row] for name, values in solved.items()} for row, number in enumerate(missing)
        }
    return [fresh[number] if number in fresh else held[identity] for number, identity in enumerate(identities)]


def _error(true: Floats, unsure: Floats, scale: Floats, said: Floats) -> float:
    """Mean over the species of |said - true| / scale; nan where the reference's own error is too large to judge."""
    if np.any(unsure > verdicts.UNSURE * scale) or not np.all(np.isfinite(true)):
        return float("nan")
    return float(np.mean(np.abs(said - true) / scale))


def _mean(values: Floats) -> float:
    return float(np.mean(values))
