"""Figures of scans: phase diagrams, maps of any variable, lines.

In:  a dataset as `gutz.scan.open_run` returns it.
Out: matplotlib `Figure` objects (never pyplot), saved as PNG and PDF by `save`.

The first axis of a scan runs along x, the second along y, a third makes small panels; further axes are held at
their middle values, which the caption says. Points not to be trusted are hatched, never hidden.
"""

import math
import warnings
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import matplotlib
import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import BoundaryNorm, ListedColormap
from matplotlib.figure import Figure
from matplotlib.patches import Patch
from numpy.typing import NDArray

from gutz import labels, style
from gutz.errors import InputError
from gutz.phases import WORDS, Phase
from gutz.status import UNTRUSTED

MOST_PANELS = 4
"""Panels side by side along a third axis."""

_KINDS = [*Phase]
_PANEL_WIDTH, _PANEL_HEIGHT = 3.5, 2.9


def draw(dataset: xr.Dataset, name: str) -> Figure:
    """Draw one variable of a scan: a phase diagram, a map or lines, whichever fits its axes.

    Raises InputError if the dataset has no such variable or no axes.
    """
    axes = [str(axis) for axis in dataset.attrs.get("axes", ())]
    if name not in dataset:
        raise InputError(f'"{name}" is not in this run; it has {", ".join(map(str, dataset.data_vars))}')
    if not axes:
        raise InputError("this run has no axes to draw along")
    with matplotlib.rc_context(style.RC):
        if len(axes) == 1:
            return _lines(dataset, axes[0], name)
        return _maps(dataset, axes, name)


def parameters(
    x: NDArray[np.float64], words: tuple[str, str], columns: Mapping[str, NDArray[np.float64]], unit: str, title: str
) -> Figure:
    """Draw Hubbard parameters against one axis, on a logarithmic scale, each line named at its right end.

    x: axis values, shape (n,); words: name and unit of the axis; columns: energies in `unit`, shape (n,) each.
    """
    with matplotlib.rc_context(style.RC):
        figure = _new_figure(1, 1, width=6.4)
        panel = figure.subplots()
        _frame(panel, x, None)
        panel.set_yscale("log")
        ends: list[tuple[float, str, str]] = []
        for number, (name, values) in enumerate(columns.items()):
            colour = style.LINE_COLOURS[number % 4]
            size = np.abs(values)
            panel.plot(x, size, color=colour, ls=style.LINE_STYLES[number // 4 % 4], lw=1.8)
            ends.append((float(size[np.argmax(x)]), f"|{name}|" if np.any(values < 0) else name, colour))
        panel.set_xlabel(style.quantity(*words), parse_math=False)
        panel.set_ylabel(style.quantity("Energy", unit), parse_math=False)
        panel.set_title(style.clean(title, 80), loc="left", parse_math=False)
        _settle(figure)
        _name_ends(panel, ends)
        return figure


def save(figure: Figure, path: Path) -> list[Path]:
    """Save as PNG and PDF beside each other, whole or not at all; returns both paths. No dates inside."""
    made = []
    with matplotlib.rc_context(style.RC), warnings.catch_warnings():
        # Titles may use scripts the font lacks; boxes in their place are better than no figure.
        warnings.filterwarnings("ignore", message="Glyph .* missing", category=UserWarning)
        for ending, metadata in ((".png", {"Software": None}), (".pdf", {"CreationDate": None, "Creator": "gutz"})):
            final = path.with_name(path.name + ending)
            temporary = path.with_name(path.name + ending + ".partial")
            figure.savefig(temporary, format=ending[1:], dpi=style.DPI, metadata=metadata)
            temporary.replace(final)
            made.append(final)
    return made


def _maps(dataset: xr.Dataset, axes: list[str], name: str) -> Figure:
    """Panels: one row per component of the variable, one column per value of a third axis."""
    dataset, held = _held(dataset, axes[3:])
    columns = _slices(dataset, axes[2]) if len(axes) > 2 else [(dataset, "")]
    rows = _components(dataset, name)
    figure = _new_figure(len(columns), len(rows))
    grid = figure.subplots(len(rows), len(columns), sharex=True, sharey=True, squeeze=False)
    numbers = [dataset[name].isel(selection).values for selection, _ in rows]
    drawn: list[Any] = []
    for i, (selection, component) in enumerate(rows):
        for j, (part, where) in enumerate(columns):
            panel = grid[i, j]
            values = part[name].isel(selection).transpose(axes[1], axes[0])
            x, y = part[axes[0]].values, part[axes[1]].values
            _frame(panel, x, y)
            if name == "phase":
                _fill_phases(panel, x, y, values.values)
            else:
                drawn.append(_fill_numbers(panel, x, y, values.values, numbers[i]))
            _hatch(panel, x, y, part, axes)
            heading = ", ".join(words for words in (component, where) if words)
            panel.set_title(heading, loc="left", parse_math=False)
            if i == len(rows) - 1:
                panel.set_xlabel(_axis_words(dataset, axes[0]), parse_math=False)
            if j == 0:
                panel.set_ylabel(_axis_words(dataset, axes[1]), parse_math=False)
        if name != "phase":
            bar = figure.colorbar(drawn[-1], ax=list(grid[i]), pad=0.02, aspect=25)
            bar.outline.set_visible(False)  # type: ignore[operator]
            bar.set_label(_axis_words(dataset, name), parse_math=False)
    _caption(figure, dataset, held)
    if name == "phase":
        _name_regions(figure, grid, columns, axes, name)
    return figure


def _lines(dataset: xr.Dataset, axis: str, name: str) -> Figure:
    """One panel of lines over a strip that shows the phases; `phase` itself shows the condensates."""
    figure = _new_figure(1, 1, width=6.4)
    strip, panel = figure.subplots(2, 1, sharex=True, height_ratios=(1, 9))
    x = dataset[axis].values
    shown = "condensate" if name == "phase" else name
    _frame(panel, x, None)
    ends = []
    for number, (selection, component) in enumerate(_components(dataset, shown)):
        y = dataset[shown].isel(selection).values
        line = {"color": style.LINE_COLOURS[number % 4], "ls": style.LINE_STYLES[number % 4], "lw": 1.8}
        panel.plot(x, y, label=component or None, **line)
        bad = (dataset["status"].values & int(UNTRUSTED)) != 0
        panel.plot(x[bad], y[bad], "x", color=line["color"], ms=4)
        ends.append(component)
    if any(ends):
        panel.legend(frameon=False, loc="best")
    panel.set_xlabel(_axis_words(dataset, axis), parse_math=False)
    panel.set_ylabel(_axis_words(dataset, shown), parse_math=False)
    codes = dataset["phase"].values[None, :]
    _fill_phases(strip, x, np.array([0.0, 1.0]), np.repeat(codes, 2, axis=0))
    strip.set_ylim(0, 1)
    strip.set_axis_off()
    _caption(figure, dataset, "")
    _settle(figure)
    across, _ = labels.pixel_grid(strip)
    height = max(1, int(strip.get_window_extent().height))
    pixels = np.repeat(codes[:, _cells(x, across)], height, axis=0)
    small = labels.place(strip, pixels, {int(p): WORDS[p] for p in Phase}, _colours())
    _legend(figure, small)
    return figure


def _name_ends(panel: Axes, ends: list[tuple[float, str, str]]) -> None:
    """Write names beside the right ends of lines, from the lowest up, pushed apart where lines meet."""
    height = panel.get_window_extent().height / (panel.figure.dpi / 72)
    needed = 1.25 * style.TEXT_SIZE / height
    last = -needed
    for value, name, colour in sorted(end for end in ends if end[0] > 0):
        _, place = panel.transAxes.inverted().transform(panel.transData.transform((panel.get_xlim()[1], value)))
        last = max(float(place), last + needed)
        panel.text(1.015, last, name, color=colour, va="center", transform=panel.transAxes, parse_math=False)


def _new_figure(columns: int, rows: int, width: float | None = None) -> Figure:
    wide = width if width is not None else 1.6 + _PANEL_WIDTH * columns * (1.35 if columns == 1 else 0.85)
    figure = Figure(figsize=(wide, 1.3 + _PANEL_HEIGHT * rows * (1.1 if rows == 1 else 0.9)), dpi=style.DPI)
    FigureCanvasAgg(figure)
    figure.set_layout_engine("constrained", h_pad=0.06, w_pad=0.06)
    return figure


def _settle(figure: Figure) -> None:
    """Fix the layout, so that pixels of the panels are known."""
    figure.draw_without_rendering()


def _held(dataset: xr.Dataset, axes: Sequence[str]) -> tuple[xr.Dataset, str]:
    """Hold axes at their middle values, and say so."""
    middles = {axis: dataset.sizes[axis] // 2 for axis in axes}
    words = ", ".join(_at(dataset, axis, float(dataset[axis].values[i])) for axis, i in middles.items())
    return dataset.isel(middles), words


def _slices(dataset: xr.Dataset, axis: str) -> list[tuple[xr.Dataset, str]]:
    """A few values of an axis, evenly chosen, with words for each."""
    size = dataset.sizes[axis]
    chosen = np.unique(np.linspace(0, size - 1, min(size, MOST_PANELS)).round().astype(int))
    return [(dataset.isel({axis: int(i)}), _at(dataset, axis, float(dataset[axis].values[i]))) for i in chosen]


def _at(dataset: xr.Dataset, axis: str, value: float) -> str:
    unit = dataset[axis].attrs.get("units", "1")
    return style.clean(f"{axis} = {value:.4g}" + (f" {unit}" if unit != "1" else ""), 40)


def _components(dataset: xr.Dataset, name: str) -> list[tuple[dict[str, int], str]]:
    """The components of a variable worth a panel: per species or pair of species, along x; equal ones once."""
    array = dataset[name]
    along = {"direction": 0} if "direction" in array.dims else {}
    count = array.sizes.get("species", 1)
    if "species" not in array.dims or count == 1:
        fixed = {dim: 0 for dim in ("species", "species_") if dim in array.dims}
        return [({**along, **fixed}, "")]
    if "species_" in array.dims:
        pairs = [(0, 0), (1, 1), (0, 1)]
        found = [({**along, "species": a, "species_": b}, f"species {a + 1} and {b + 1}" if a != b else f"species {a + 1}") for a, b in pairs]
    else:
        found = [({**along, "species": a}, f"species {a + 1}") for a in range(count)]
    first, second = (array.isel(found[k][0]).values for k in (0, 1))
    if np.allclose(first, second, rtol=1e-9, atol=0.0, equal_nan=True):
        return [(found[0][0], "each species"), *found[2:]]
    return found


def _axis_words(dataset: xr.Dataset, name: str) -> str:
    attributes = dataset[name].attrs
    return style.quantity(str(attributes.get("long_name", name)), str(attributes.get("units", "1")))


def _frame(panel: Axes, x: NDArray[np.float64], y: NDArray[np.float64] | None) -> None:
    """Limits at the edges of the outer cells, logarithmic where the values are."""
    if _is_log(x):
        panel.set_xscale("log")
    panel.set_xlim(*sorted(_edges(x)[[0, -1]]))
    if y is not None:
        if _is_log(y):
            panel.set_yscale("log")
        panel.set_ylim(*sorted(_edges(y)[[0, -1]]))


def _is_log(values: NDArray[np.float64]) -> bool:
    """True for values in a geometric row over more than half a decade."""
    if values.size < 3 or np.any(values <= 0) or not 0.3 > min(values[0], values[-1]) / max(values[0], values[-1]):
        return False
    return bool(np.allclose(np.diff(np.log(values)), np.log(values[1] / values[0]), rtol=1e-6))


def _edges(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Borders of the cells around values: halfway between neighbours."""
    row = np.log(values) if _is_log(values) else values
    inner = (row[1:] + row[:-1]) / 2
    edges = np.concatenate([[2 * row[0] - inner[0]], inner, [2 * row[-1] - inner[-1]]])
    return np.exp(edges) if _is_log(values) else edges


def _cells(values: NDArray[np.float64], at: NDArray[np.float64]) -> NDArray[np.intp]:
    """Which cell each coordinate lies in."""
    edges = _edges(values)
    if edges[0] > edges[-1]:
        return values.size - 1 - _cells(values[::-1], at)
    return np.clip(np.searchsorted(edges, at) - 1, 0, values.size - 1)


def _fill_phases(panel: Axes, x: NDArray[np.float64], y: NDArray[np.float64], codes: NDArray[np.integer]) -> None:
    colours = ListedColormap([style.PHASE_COLOURS[phase] for phase in _KINDS])
    norm = BoundaryNorm(np.arange(len(_KINDS) + 1) - 0.5 + int(_KINDS[0]), len(_KINDS))
    panel.pcolormesh(_edges(x), _edges(y), codes, cmap=colours, norm=norm, rasterized=True)


def _fill_numbers(
    panel: Axes, x: NDArray[np.float64], y: NDArray[np.float64], values: NDArray[np.float64], everywhere: NDArray[np.float64]
) -> Any:
    """A map of numbers; panels of one row share their scale."""
    finite = everywhere[np.isfinite(everywhere)]
    low, high = (float(finite.min()), float(finite.max())) if finite.size else (0.0, 1.0)
    if low < -1e-12 * max(1.0, abs(high)) and high > 0:
        top = max(-low, high)
        scale = {"cmap": style.BALANCE, "vmin": -top, "vmax": top}
    else:
        scale = {"cmap": style.RAMP, "vmin": low, "vmax": high if high > low else low + 1.0}
    panel.set_facecolor("#efece6")
    return panel.pcolormesh(_edges(x), _edges(y), np.ma.masked_invalid(values), rasterized=True, **scale)


def _hatch(panel: Axes, x: NDArray[np.float64], y: NDArray[np.float64], part: xr.Dataset, axes: list[str]) -> None:
    """Hatch points not to be trusted; collapse names itself."""
    status = part["status"].transpose(axes[1], axes[0]).values
    collapsed = part["phase"].transpose(axes[1], axes[0]).values == int(Phase.COLLAPSE)
    bad = (status != -1) & ((status & int(UNTRUSTED)) != 0) & ~collapsed
    if bad.any():
        # Twice each cell's value at its two edges makes the contour follow the cells instead of their centres.
        rows, columns = np.repeat(np.repeat(bad, 2, axis=0), 2, axis=1).shape
        edges_x, edges_y = (np.repeat(_edges(v), 2)[1:-1] for v in (x, y))
        shift_x, shift_y = (np.tile([1e-9, -1e-9], n // 2) * np.ptp(e) for n, e in ((columns, edges_x), (rows, edges_y)))
        panel.contourf(
            edges_x + shift_x, edges_y + shift_y, np.repeat(np.repeat(bad, 2, axis=0), 2, axis=1).astype(float),
            levels=[0.5, 1.5], colors="none", hatches=[style.HATCH],
        )  # fmt: skip


def _name_regions(
    figure: Figure, grid: NDArray[Any], columns: list[tuple[xr.Dataset, str]], axes: list[str], name: str
) -> None:
    """Write the phases' names into their regions; those too small for words go into a legend."""
    _settle(figure)
    small: set[int] = set()
    for j, (part, _) in enumerate(columns):
        panel = grid[0, j]
        across, up = labels.pixel_grid(panel)
        codes = part[name].transpose(axes[1], axes[0]).values
        pixels = codes[np.ix_(_cells(part[axes[1]].values, up), _cells(part[axes[0]].values, across))]
        small |= set(labels.place(panel, pixels, {int(p): WORDS[p] for p in Phase}, _colours()))
    _legend(figure, sorted(small))


def _colours() -> dict[int, str]:
    return {int(phase): colour for phase, colour in style.PHASE_COLOURS.items()}


def _legend(figure: Figure, codes: Sequence[int]) -> None:
    """A legend under the panels for regions without room for their name."""
    if codes:
        patches = [Patch(facecolor=style.PHASE_COLOURS[Phase(c)], edgecolor=style.INK, lw=0.5, label=WORDS[Phase(c)]) for c in codes]
        figure.legend(handles=patches, loc="outside lower left", ncols=3, frameon=False, fontsize=style.SMALL_SIZE + 0.5)


def _caption(figure: Figure, dataset: xr.Dataset, held: str) -> None:
    """Title, and under it in small print what the picture rests on."""
    attributes = dataset.attrs
    facts = [f"{attributes.get('ansatz', 'product')} ansatz", f"{attributes.get('dim', 3)}D"]
    if held:
        facts.append(held)
    status = dataset["status"].values
    if np.any((status != -1) & ((status & int(UNTRUSTED)) != 0)):
        facts.append("hatched or crossed: not to be trusted")
    if np.any(status == -1):
        facts.append(f"{int(np.count_nonzero(status == -1))} points not computed yet")
    wide = max(40, math.floor(figure.get_figwidth() * 13))
    title = style.clean(str(attributes.get("title", "")), wide)
    small = style.clean(", ".join(facts), math.floor(wide * 1.5))
    figure.suptitle(title + "\n" + small if title else small, x=0.02, ha="left", size=style.TITLE_SIZE, parse_math=False)
