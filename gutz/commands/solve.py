"""`gutz solve`: one point of a file, with everything known about it.

In:  a scan file, and a value for each of its axes.
Out: a table for people, or JSON.
"""

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from gutz import console
from gutz.commands.points import load, values
from gutz.phases import words
from gutz.scan import schema
from gutz.scan.chunk import compute_chunk
from gutz.scan.plan import Plan, check_physics
from gutz.scan.plan import at as choose
from gutz.status import UNTRUSTED, describe


def run(file: Path, overrides: Sequence[str], at: Sequence[str], as_json: bool, quiet: bool, debug: bool) -> int:
    """Solve the point and print it; exit code 1 if its numbers are not to be trusted."""
    _, full = load(file, overrides)
    point = choose(full, values(at))
    check_physics(point)
    found = {
        name: np.asarray(v)[(0,) * len(point.axes)] for name, v in compute_chunk(point, (0,) * len(point.axes)).items()
    }
    status = int(found["status"])
    if as_json:
        console.write_json(_record(point, found))
    else:
        _print(point, found)
    return 1 if status & UNTRUSTED else 0


def _record(point: Plan, found: dict[str, Any]) -> dict[str, Any]:
    """The point as plain data."""
    status = int(found["status"])
    return {
        "point": {axis.name: {"value": axis.values[0], "units": axis.unit} for axis in point.axes},
        "phase": words(int(found["phase"]), int(found["order_range"])),
        "trusted": not status & UNTRUSTED,
        "remarks": describe(status),
        "variables": {
            name: {"value": found[name].tolist(), "units": field.attributes["units"]}
            for name, field in schema.layout(point).items()
        },
    }


def _print(point: Plan, found: dict[str, Any]) -> None:
    """Print the point as a table: one row per quantity, entries in reading order."""
    where = ", ".join(
        f"{axis.name} = {console.number(float(axis.values[0]))} {_unit(axis.unit)}".strip() for axis in point.axes
    )
    rows = []
    for name, field in schema.layout(point).items():
        if name in ("phase", "order_range", "status", "cautions"):
            continue
        value = found[name]
        if field.dims[-1:] == ("direction",) and np.array_equal(
            value, np.broadcast_to(value[..., :1], value.shape), True
        ):
            value = value[..., 0]  # alike along x, y and z: said once
        entries = "  ".join(console.number(float(entry)) for entry in np.ravel(value))
        rows.append((field.attributes["long_name"], name, entries, _unit(field.attributes["units"])))
    rows.insert(0, ("Phase", "phase", words(int(found["phase"]), int(found["order_range"])), ""))
    console.table((where or "the point", "name", "value", "unit"), rows)
    for sentence in describe(int(found["status"])):
        console.note(f"note: {sentence}", quiet=False)


def _unit(unit: str) -> str:
    return "" if unit == "1" else unit
