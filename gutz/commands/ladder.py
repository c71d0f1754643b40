"""`gutz ladder`: one point from tubes to planes to the cube, product beside dressed.

In:  a scan file, and a value for each of its axes.
Out: a table or JSON; with --out a figure.
"""

from collections.abc import Sequence
from pathlib import Path

import numpy as np

from gutz import console, ladder, plots
from gutz.commands.points import load, values
from gutz.phases import words
from gutz.plots import ladder as figure
from gutz.scan import paths
from gutz.scan.chunk import mixture_of
from gutz.scan.plan import at as choose
from gutz.scan.plan import check_physics
from gutz.status import UNTRUSTED, describe

NAME = "ladder"


def run(
    file: Path,
    overrides: Sequence[str],
    at: Sequence[str],
    steps: int,
    out: str | None,
    as_json: bool,
    quiet: bool,
    force: bool,
    debug: bool,
) -> int:
    """Climb and print; exit code 1 if a rung's dressed numbers are not to be trusted."""
    document, full = load(file, overrides)
    chosen = values(at)
    point = choose(full, chosen)
    check_physics(point)
    picked = [axis.values for axis in point.axes]
    climbed = ladder.climb(mixture_of(point.settings(picked, point.lattice(picked))), steps)
    if as_json:
        console.write_json({"point": chosen, "rungs": ladder.to_records(climbed, words)})
    else:
        _print(climbed, chosen)
    if out is not None:
        folder = paths.results_folder(out, f"{NAME}.png", force)
        paths.make_folder(folder)
        where = ", ".join(f"{name} = {value:g}" for name, value in chosen.items())
        title = full.spec.output.title or document.name.removesuffix(".toml")
        made = plots.save(figure.draw(climbed, title, where), paths.inside(folder, NAME))
        console.note(f"in {folder}: {', '.join(path.name for path in made)}", quiet or as_json)
    return 1 if np.any(np.asarray(climbed.dressed.status) & int(UNTRUSTED)) else 0


def _print(climbed: ladder.Ladder, chosen: dict[str, float]) -> None:
    names = {row: {1: "tubes", 2: "planes", 3: "cube"}[d] for d, row in ladder.whole(climbed).items()}
    rows = []
    for i, record in enumerate(ladder.to_records(climbed, words)):
        dressed, apart = record["dressed"], record["difference"]
        rows.append(
            (
                f"{record['dimension']:.2f} {names.get(i, '')}",
                record["product"]["phase"],
                dressed["phase"],
                "  ".join(f"{value:.3f}" for value in dressed["order_parameter"]),
                f"{apart['order_parameter']:.3f}",
                f"{dressed['pair_order']:.3f}",
                f"{dressed['antipair_order']:.3f}",
                f"{dressed['free_energy']:.5f}",
                f"{apart['free_energy']:.5f}",
            )
        )
    if chosen:
        console.say("at " + ", ".join(f"{name} = {value:g}" for name, value in chosen.items()))
    console.table(("dimension", "product", "dressed", "<b_a>", "±", "pair", "anti-pair", "F", "±"), rows)
    console.say("± is the difference between dressed and product: the method's own estimate of its error.")
    console.say("The product result is also the limit z -> infinity at the same z t.")
    for code in sorted({int(code) for code in np.asarray(climbed.dressed.status)}):
        for sentence in describe(code):
            console.note(f"note: on some rung, {sentence}", quiet=False)
