"""Phase boundaries of a scan file: curves in the plane of two of its axes.

In:  a `Plan`, the names of two axes, values for the others.
Out: an xarray Dataset: points of all curves with their phases and kinds, and every point that was solved.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np
import xarray as xr
from scipy.spatial import cKDTree

from gutz import boundary
from gutz.boundary import Boundaries, Kind, Side, Solved
from gutz.errors import InputError
from gutz.phases import WORDS, Phase
from gutz.scan.chunk import mixture_of
from gutz.scan.document import Document
from gutz.scan.plan import Axis, Plan
from gutz.scan.store import provenance
from gutz.solver import TOLERANCES, solve
from gutz.status import UNTRUSTED

PIXELS = 320
"""Side of the picture that `raster` fills from the points solved."""


def trace(
    full: Plan,
    document: Document,
    names: tuple[str, str],
    held: Mapping[str, float],
    *,
    nodes: int = boundary.NODES,
    location: float = boundary.LOCATION,
    straightness: float = boundary.STRAIGHTNESS,
) -> xr.Dataset:
    """Trace all boundaries over the ranges of two axes.

    names: axes along x and y. held: a value for each further axis. Raises InputError for unknown axes, an axis twice,
    or one without a value.
    """
    axes = _chosen(full, names, held)
    solved: list[tuple[np.ndarray, ...]] = []

    def solve_at(x: np.ndarray, y: np.ndarray) -> Solved:
        values = {names[0]: x, names[1]: y}
        columns = [values.get(axis.name, np.full(x.shape, held.get(axis.name, np.nan))) for axis in full.axes]
        found = solve(mixture_of(full.settings_at(columns)), ansatz=full.spec.ansatz.kind)
        phase, status = np.asarray(found.phase).astype(np.intp), np.asarray(found.status)
        bad = (status & int(UNTRUSTED)) != 0
        order = np.concatenate(
            [found.order_parameter, np.abs(found.staggering), found.pair_order[:, None], found.antipair_order[:, None]],
            axis=-1,
        )
        solved.append((x, y, phase, np.asarray(found.order_range), status))
        return Solved(phase, np.where(np.isfinite(order), order, 0.0), bad)

    sides = [_side(axis) for axis in axes]
    found = boundary.trace(solve_at, *sides, nodes=nodes, location=location, straightness=straightness)
    return _dataset(full, document, axes, held, found, [np.concatenate(part) for part in zip(*solved, strict=True)])


def _chosen(full: Plan, names: tuple[str, str], held: Mapping[str, float]) -> list[Axis]:
    known = {axis.name: axis for axis in full.axes}
    for name in (*names, *held):
        if name not in known:
            raise InputError(f'"{name}" is not an axis of this file; its axes are {", ".join(known) or "none"}')
    if names[0] == names[1]:
        raise InputError(f'"{names[0]}" is given for both directions; name two different axes')
    for name in known:
        if name not in names and name not in held:
            raise InputError(f"the axis {name} needs a value: add --at {name}={known[name].values[0]:g}")
        if name in names and name in held:
            raise InputError(f"--at {name}: boundaries are traced along this axis; leave it out")
    return [known[name] for name in names]


def _side(axis: Axis) -> Side:
    low, high = float(axis.values.min()), float(axis.values.max())
    ratios = axis.values[1:] / np.where(axis.values[:-1] == 0, np.nan, axis.values[:-1])
    logarithmic = low > 0 and axis.values.size > 2 and bool(np.ptp(ratios) < 1e-6 * abs(ratios.mean()))
    return Side(low, high, logarithmic)


def _dataset(
    full: Plan,
    document: Document,
    axes: list[Axis],
    held: Mapping[str, float],
    found: Boundaries,
    solved: list[np.ndarray],
) -> xr.Dataset:
    curves = found.curves
    counts = [curve.x.size for curve in curves]

    def joined(values: list[np.ndarray], dtype: str) -> np.ndarray:
        return np.concatenate([*values, np.zeros(0)]).astype(dtype)

    words = {
        "flag_values": [int(p) for p in Phase],
        "flag_meanings": " ".join(WORDS[p].replace(" ", "_") for p in Phase),
    }
    kinds = {"flag_values": [int(k) for k in Kind], "flag_meanings": " ".join(k.name.lower() for k in Kind)}
    data: dict[str, Any] = {}
    for i, axis in enumerate(axes):
        about: dict[str, Any] = {"units": axis.unit, "long_name": axis.words}
        data[axis.name] = ("point", joined([(curve.x, curve.y)[i] for curve in curves], "float64"), about)
        data[f"solved_{axis.name}"] = ("solved", solved[i], about)
    number = np.repeat(np.arange(len(curves)), counts)
    data["curve"] = ("point", number.astype("int32"), {"units": "1", "long_name": "Number of the curve"})
    for i, side in enumerate(("phase_1", "phase_2")):
        values = np.repeat([curve.phases[i] for curve in curves], counts) if curves else np.zeros(0)
        data[side] = ("point", values.astype("int8"), {"units": "1", "long_name": "Phase beside the curve", **words})
    about = {"units": "1", "long_name": "Kind of transition", **kinds}
    data["kind"] = ("point", joined([curve.kind for curve in curves], "int8"), about)
    about = {"units": "1", "long_name": "Change of the largest order parameter across the bracket"}
    data["jump"] = ("point", joined([curve.jump for curve in curves], "float64"), about)
    about = {"units": "1", "long_name": "Unit vector to the side of phase_2, both axes running from 0 to 1"}
    data["across"] = (
        ("point", "plane"),
        np.concatenate([*(curve.across for curve in curves), np.zeros((0, 2))]),
        about,
    )
    data["solved_phase"] = ("solved", solved[2].astype("int8"), {"units": "1", "long_name": "Phase", **words})
    data["solved_range"] = ("solved", solved[3].astype("int8"), {"units": "1", "long_name": "Range of order"})
    data["solved_status"] = ("solved", solved[4].astype("int32"), {"units": "1", "long_name": "Status"})
    return xr.Dataset(data).assign_attrs(
        provenance(full, document, TOLERANCES)
        | {
            "boundary_axes": [axis.name for axis in axes],
            "held": {name: float(value) for name, value in held.items()},
            "location": found.location,
            "straightness": found.straightness,
            "logarithmic": [int(_side(axis).logarithmic) for axis in axes],
            "solves": found.solves,
            "untrusted_solves": found.untrusted,
        }
    )


def raster(found: xr.Dataset) -> xr.Dataset:
    """Fill a picture: every pixel takes the label of the nearest point solved or, beside a curve, of its side."""
    names = list(found.attrs["boundary_axes"])
    columns = [found[f"solved_{name}"].values for name in names]
    low, high = np.array([c.min() for c in columns]), np.array([c.max() for c in columns])
    logarithmic = np.array(found.attrs["logarithmic"], bool)

    def to_unit(values: list[np.ndarray]) -> np.ndarray:
        parts = [
            np.log(v / a) / np.log(b / a) if log else (v - a) / (b - a)
            for v, a, b, log in zip(values, low, high, logarithmic, strict=True)
        ]
        return np.stack(parts, -1)

    at = [to_unit(columns)]
    labels = [np.stack([found[f"solved_{name}"].values for name in ("phase", "range", "status")], -1)]
    for number in np.unique(found["curve"].values):
        part = found.isel(point=np.flatnonzero(found["curve"].values == number))
        for side, along in _beside(to_unit([part[name].values for name in names]), part["across"].values):
            phase = int(part["phase_1" if side < 0 else "phase_2"].values[0])
            near = cKDTree(at[0][labels[0][:, 0] == phase]).query(along)[1]
            at.append(along)
            labels.append(labels[0][labels[0][:, 0] == phase][near])
    u = (np.arange(PIXELS) + 0.5) / PIXELS
    grid = np.stack(np.meshgrid(u, u, indexing="ij"), -1).reshape(-1, 2)
    picked = np.concatenate(labels)[cKDTree(np.concatenate(at)).query(grid)[1]].reshape(PIXELS, PIXELS, 3)
    data = {
        name: (tuple(names), picked[..., i], found[source].attrs)
        for i, (name, source) in enumerate(
            (("phase", "solved_phase"), ("order_range", "solved_range"), ("status", "solved_status"))
        )
    }
    coords = {}
    for i, name in enumerate(names):
        values = low[i] * (high[i] / low[i]) ** u if logarithmic[i] else low[i] + (high[i] - low[i]) * u
        coords[name] = (name, values, found[name].attrs)
    return xr.Dataset(data, coords=coords).assign_attrs(found.attrs | {"axes": names})


def _beside(at: np.ndarray, across: np.ndarray) -> list[tuple[int, np.ndarray]]:
    """Points half a pixel to either side of a curve, half a pixel apart."""
    step = 0.5 / PIXELS
    sides: list[tuple[int, np.ndarray]] = []
    for start, end, toward in zip(at[:-1], at[1:], across[:-1], strict=True):
        along = end - start
        length = float(np.linalg.norm(along))
        if length == 0:
            continue
        normal = np.array([-along[1], along[0]]) / length
        normal = normal * (1.0 if normal @ toward >= 0 else -1.0)
        line = start + along * np.linspace(0.0, 1.0, max(2, round(length / step)))[:, None]
        sides += [(sign, line + sign * step * normal) for sign in (-1, 1)]
    return sides
