"""Figure of a ladder of dimensions: orders against the number of directions that hop, product beside dressed.

In:  a `gutz.ladder.Ladder`, a title.
Out: a matplotlib `Figure`.
"""

from collections.abc import Callable, Mapping, Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from gutz import style
from gutz.ladder import Ladder
from gutz.phases import Phase, words
from gutz.plots.canvas import new_figure, settle, styled
from gutz.solution import Solution

Values = Callable[[Solution], np.ndarray]

_PLACES = ((1, "tubes"), (2, "planes"), (3, "cube"))


def draw(ladder: Ladder, title: str, where: str) -> Figure:
    """Condensates and pair orders from tubes to planes to the cube; the band between the ansaetze is their error."""
    with styled():
        figure = new_figure(1, 2, width=6.4)
        strips, atoms, pairs = figure.subplots(3, 1, sharex=True, height_ratios=(1.1, 4, 4))
        unnamed = _strips(strips, ladder)
        heading = "\n".join(line for line in (style.clean(where, 90), *unnamed[:6]) if line)
        strips.set_title(heading, loc="left", size=style.SMALL_SIZE + 0.5, parse_math=False)
        species = ladder.product.filling.shape[-1]
        _lines(atoms, ladder, {f"species {a + 1}": _condensate(a) for a in range(species)}, style.LINE_COLOURS)
        atoms.set_ylabel("Condensate\n(atoms per site)")
        if species == 2:
            orders = {"pairs": _correlated("pair"), "anti-pairs": _correlated("antipair")}
            _lines(pairs, ladder, orders, style.LINE_COLOURS[2:])
            pairs.set_ylabel("Correlated pair and\nanti-pair order")
        else:
            _lines(pairs, ladder, {"variance": _variance}, style.LINE_COLOURS[1:])
            pairs.set_ylabel("On-site number\nvariance")
        for panel in (atoms, pairs):
            panel.set_ylim(0.0, max(0.05, 1.15 * panel.dataLim.y1))
        pairs.set_xticks([d for d, _ in _PLACES], [f"{d}\n{name}" for d, name in _PLACES])
        pairs.set_xlabel("Dimension: directions with hopping, partly counted")
        figure.suptitle(style.clean(title, 70), x=0.02, ha="left", size=style.TITLE_SIZE, parse_math=False)
        small = "solid: dressed; dashed: product (z to infinity at the same z t); between them: own error estimate"
        figure.supxlabel(small, x=0.02, ha="left", size=style.SMALL_SIZE, color=style.PALE_INK, parse_math=False)
        settle(figure)
        return figure


def _condensate(a: int) -> Values:
    return lambda solution: np.asarray(solution.condensate)[:, a]


def _variance(solution: Solution) -> np.ndarray:
    return np.asarray(solution.number_variance)[:, 0, 0]


def _correlated(name: str) -> Values:
    """What is beyond the product of the two condensates' amplitudes."""

    def of(solution: Solution) -> np.ndarray:
        phi = np.asarray(solution.order_parameter)
        return np.abs(np.asarray(getattr(solution, f"{name}_order")) - phi[:, 0] * phi[:, 1])

    return of


def _lines(panel: Axes, ladder: Ladder, values: Mapping[str, Values], colours: Sequence[str]) -> None:
    """Lines named at their right ends; equal ones share a name."""
    drawn: list[tuple[str, np.ndarray, str]] = []
    for (name, of), colour in zip(values.items(), colours, strict=False):
        product, dressed = of(ladder.product), of(ladder.dressed)
        same = next((k for k, (_, y, _) in enumerate(drawn) if np.allclose(y, dressed, atol=1e-3)), None)
        if same is not None:
            drawn[same] = (f"{drawn[same][0]},\n{name}", *drawn[same][1:])
            continue
        panel.fill_between(ladder.dimension, product, dressed, color=colour, alpha=0.18, lw=0)
        panel.plot(ladder.dimension, product, color=colour, ls="--", lw=1.2)
        panel.plot(ladder.dimension, dressed, color=colour, lw=1.8, marker=".", ms=4)
        drawn.append((name, dressed, colour))
    for name, y, colour in drawn:
        panel.annotate(name, (3.0, float(y[-1])), (5, 0), textcoords="offset points", color=colour, va="center")


def _strips(panel: Axes, ladder: Ladder) -> list[str]:
    """Phases of both ansaetze, named once per run of equal ones; returns words on those too short for their names."""
    unnamed: list[str] = []
    edges = np.concatenate([[1.0], 0.5 * (ladder.dimension[1:] + ladder.dimension[:-1]), [3.0]])
    for row, ansatz in enumerate(("product", "dressed")):
        s = getattr(ladder, ansatz)
        codes = list(zip(np.asarray(s.phase).tolist(), np.asarray(s.order_range).tolist(), strict=True))
        begin = 0
        for end in range(1, len(codes) + 1):
            if end < len(codes) and codes[end] == codes[begin]:
                continue
            phase, reach = codes[begin]
            colour = style.PHASE_COLOURS[Phase(phase)]
            left, right = edges[begin], edges[end]
            panel.barh(row, right - left, left=left, height=0.86, color=colour, lw=0)
            text = words(phase, reach).replace("range ", "range\n")
            if (right - left) * 36 > max(map(len, text.split("\n"))):
                ink, size = style.ink_on(colour), style.SMALL_SIZE - text.count("\n")
                panel.text(0.5 * (left + right), row, text, ha="center", va="center", size=size, color=ink)
            else:
                unnamed.append(f"{ansatz} {left:.1f} to {right:.1f}: {words(phase, reach)}")
            begin = end
    panel.set_yticks([0, 1], ["product", "dressed"])
    panel.set_xlim(0.98, 3.0)
    for side in panel.spines.values():
        side.set_visible(False)
    panel.tick_params(length=0)
    return unnamed
