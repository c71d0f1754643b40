"""Figures of scans: phase diagrams, maps of any variable, lines.

In:  a dataset as `gutz.scan.open_run` returns it.
Out: matplotlib `Figure` objects (never pyplot).

The first axis of a scan runs along x, the second along y, a third makes small panels; further axes are held
at their middle values, which the caption says. Points not to be trusted are hatched, never hidden.
"""

import math
from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.colors import BoundaryNorm, ListedColormap
from matplotlib.figure import Figure
from matplotlib.patches import Patch
from matplotlib.text import Text
from numpy.typing import NDArray

from gutz import labels, style
from gutz.boundary import Kind
from gutz.errors import InputError
from gutz.phases import Phase, Range, words
from gutz.plots.canvas import new_figure, settle, styled
from gutz.status import UNTRUSTED

MOST_PANELS = 4
"""Panels side by side along a third axis."""

_KINDS = [*Phase]
_REACH = 100
"""A region is named by phase + _REACH x range: the same phase may reach differently far in one picture."""
_REACHES = (0, Range.QUASI, Range.SHORT)
_WORDS = {int(phase) + _REACH * reach: words(phase, reach) for phase in Phase for reach in _REACHES}
_COLOURS = {int(phase) + _REACH * reach: style.PHASE_COLOURS[phase] for phase in Phase for reach in _REACHES}
_LEGEND_COLUMNS = 3
_LINES: dict[Kind, tuple[dict[str, Any], str]] = {
    Kind.ONSET: ({"lw": 1.2, "ls": "-"}, "line: onset"),
    Kind.FIRST_ORDER: ({"lw": 2.4, "ls": "-"}, "thick line: first order"),
    Kind.CROSSOVER: ({"lw": 1.2, "ls": ":"}, "dotted: crossover"),
    Kind.DIMENSION: ({"lw": 1.2, "ls": "--"}, "dashed: order lost to fluctuations"),
}
_NO_LABEL = -99


def draw(dataset: xr.Dataset, name: str, lines: xr.Dataset | None = None) -> Figure:
    """Draw one variable of a scan: a phase diagram, a map or lines, whichever fits its axes.

    lines: boundaries as `gutz.scan.edges.trace` returns them, drawn on top of a map of the same two axes.
    Raises InputError if the dataset has no such variable or no axes.
    """
    axes = [str(axis) for axis in dataset.attrs.get("axes", ())]
    if name not in dataset:
        raise InputError(f'"{name}" is not in this run; it has {", ".join(map(str, dataset.data_vars))}')
    if not axes:
        raise InputError("this run has no axes to draw along")
    with styled():
        if len(axes) == 1:
            return _lines(dataset, axes[0], name)
        return _maps(dataset, axes, name, lines)


def parameters(
    x: NDArray[np.float64],
    words: tuple[str, str],
    columns: Mapping[str, NDArray[np.float64]],
    unit: str,
    title: str,
) -> Figure:
    """Draw Hubbard parameters against one axis, on a logarithmic scale, each line named at its right end.

    x: axis values, shape (n,); words: name and unit of the axis; columns: energies in `unit`, (n,) each.
    """
    with styled():
        figure = new_figure(1, 1, width=6.4)
        panel = figure.subplots()
        _frame(panel, x, None)
        panel.set_yscale("log")
        ends: list[tuple[float, str, str]] = []
        for name, values in _merged(columns).items():
            kind = "t" if name[0] == "t" else name[:3] if name[:3] in ("U12", "gap") else "U"
            colour = style.LINE_COLOURS[("t", "U", "U12", "gap").index(kind)]
            size = np.abs(values)
            panel.plot(x, size, color=colour, ls="--" if name[:2] in ("t2", "U2") else "-", lw=1.8)
            ends.append((float(size[np.argmax(x)]), f"|{name}|" if np.any(values < 0) else name, colour))
        panel.set_xlabel(style.quantity(*words), parse_math=False)
        panel.set_ylabel(style.quantity("Energy", unit), parse_math=False)
        panel.set_title(style.clean(title, 80), loc="left", parse_math=False)
        settle(figure)
        _name_ends(panel, ends)
        return figure


def _maps(dataset: xr.Dataset, axes: list[str], name: str, lines: xr.Dataset | None) -> Figure:
    """Panels: one row per component of the variable, one column per value of a third axis."""
    dataset, held = _held(dataset, axes[3:])
    columns = _slices(dataset, axes[2]) if len(axes) > 2 else [(dataset, "")]
    rows = _components(dataset, name)
    figure = new_figure(len(columns), len(rows))
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
            if lines is not None and len(axes) == 2:
                _overlay(panel, lines, axes)
            heading = ", ".join(words for words in (component, where) if words)
            panel.set_title(heading, loc="left", parse_math=False)
            if i == len(rows) - 1:
                panel.set_xlabel(_axis_words(dataset, axes[0]), parse_math=False)
            if j == 0:
                panel.set_ylabel(_axis_words(dataset, axes[1]), parse_math=False)
        if name != "phase":
            bar = figure.colorbar(drawn[-1], ax=list(grid[i]), pad=0.02, aspect=25)
            bar.outline.set_visible(False)
            bar.set_label(_axis_words(dataset, name), parse_math=False)
    caption = _caption(figure, dataset, held if lines is None else _line_words(lines))
    if name == "phase":
        _name_regions(figure, grid, columns, axes, caption)
    return figure


def _lines(dataset: xr.Dataset, axis: str, name: str) -> Figure:
    """One panel of lines over a strip that shows the phases; `phase` itself shows the condensates."""
    figure = new_figure(1, 1, width=6.4)
    strip, panel = figure.subplots(2, 1, sharex=True, height_ratios=(1, 9))
    x = dataset[axis].values
    shown = "condensate" if name == "phase" else name
    _frame(panel, x, None)
    ends = []
    for number, (selection, component) in enumerate(_components(dataset, shown)):
        y = dataset[shown].isel(selection).values
        line = {"color": style.LINE_COLOURS[number % 4], "ls": style.LINE_STYLES[number % 4], "lw": 1.8}
        panel.plot(x, y, label=component or None, **line)
        bad = _untrusted(dataset)
        panel.plot(x[bad], y[bad], "x", color=line["color"], ms=4)
        ends.append(component)
    if any(ends):
        panel.legend(frameon=False, loc="best")
    panel.set_xlabel(_axis_words(dataset, axis), parse_math=False)
    panel.set_ylabel(_axis_words(dataset, shown), parse_math=False)
    _fill_phases(strip, x, np.array([0.0, 1.0]), np.repeat(dataset["phase"].values[None, :], 2, axis=0))
    codes = _regions(dataset).values[None, :]
    strip.set_ylim(0, 1)
    strip.set_axis_off()
    caption = _caption(figure, dataset, "")

    def attempt() -> list[int]:
        across, _ = labels.pixel_grid(strip)
        height = max(1, int(strip.get_window_extent().height))
        return labels.place(strip, np.repeat(codes[:, _cells(x, across)], height, axis=0), _WORDS, _COLOURS)

    _name_with_legend(figure, [strip], caption, attempt)
    return figure


def _name_ends(panel: Axes, ends: list[tuple[float, str, str]]) -> None:
    """Write names beside the right ends of lines, from the lowest up, spread where lines meet."""
    ends = sorted(end for end in ends if end[0] > 0)
    needed = 1.3 * style.TEXT_SIZE / (panel.get_window_extent().height / (panel.figure.dpi / 72))
    edge = panel.get_xlim()[1]
    true = [float(panel.transAxes.inverted().transform(panel.transData.transform((edge, e[0])))[1]) for e in ends]
    up, down = true.copy(), true.copy()
    for i in range(1, len(true)):
        up[i] = max(up[i], up[i - 1] + needed)
        down[-1 - i] = min(down[-1 - i], down[-i] - needed)
    # Both rows keep the distance needed, so their mean does too, and it stays around the true places.
    for (_, name, colour), a, b in zip(ends, up, down, strict=True):
        panel.text(1.015, (a + b) / 2, name, color=colour, va="center", transform=panel.transAxes, parse_math=False)


def _merged(columns: Mapping[str, NDArray[np.float64]]) -> dict[str, NDArray[np.float64]]:
    """Columns that are equal share one line and both names."""
    merged: dict[str, NDArray[np.float64]] = {}
    for name, values in columns.items():
        same = next((other for other, v in merged.items() if np.allclose(v, values, rtol=1e-9, atol=0.0)), None)
        if same is None:
            merged[name] = values
        else:
            merged[f"{same}, {name}"] = merged.pop(same)
    return merged


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
    """The components of a variable worth a panel: per species or pair of them, along x; equal ones once."""
    array = dataset[name]
    along = {"direction": 0} if "direction" in array.dims else {}
    count = array.sizes.get("species", 1)
    if "species" not in array.dims or count == 1:
        fixed: dict[str, int] = {dim: 0 for dim in ("species", "species_") if dim in array.dims}
        return [({**along, **fixed}, "")]
    if "species_" in array.dims:
        pairs = [(0, 0), (1, 1), (0, 1)]
        found = [
            (
                {**along, "species": a, "species_": b},
                f"species {a + 1} and {b + 1}" if a != b else f"species {a + 1}",
            )
            for a, b in pairs
        ]
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
    if values.size < 3 or np.any(values <= 0) or not min(values[0], values[-1]) / max(values[0], values[-1]) < 0.3:
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


def _overlay(panel: Axes, lines: xr.Dataset, axes: Sequence[str]) -> None:
    """Draw boundaries piece by piece, each in the line of its kind."""
    number, kind = lines["curve"].values, lines["kind"].values
    x, y = lines[axes[0]].values, lines[axes[1]].values
    for k in np.unique(number):
        part = np.flatnonzero(number == k)
        if part.size == 1:
            panel.plot(x[part], y[part], ".", color=style.INK, ms=3)
        starts = np.flatnonzero(np.diff(kind[part])) + 1
        for run in np.split(np.arange(part.size), starts):
            # Runs of one kind meet halfway, where the kind changes.
            wide = part[max(run[0] - 1, 0) : run[-1] + 1]
            look = _LINES[Kind(int(kind[part[run[0]]]))][0]
            panel.plot(x[wide], y[wide], color=style.INK, solid_capstyle="round", **look)


def _line_words(lines: xr.Dataset) -> str:
    kinds = sorted({int(k) for k in lines["kind"].values})
    held = ", ".join(f"{name} = {value:.4g}" for name, value in dict(lines.attrs.get("held", {})).items())
    return ", ".join([held] * bool(held) + [_LINES[Kind(k)][1] for k in kinds])


def _regions(part: xr.Dataset) -> xr.DataArray:
    """Codes of `_WORDS`."""
    phase = part["phase"].astype(int)
    if "order_range" not in part:
        return phase
    reach = part["order_range"]
    return phase + _REACH * reach.where(reach.isin(_REACHES), 0).astype(int)


def _fill_phases(panel: Axes, x: NDArray[np.float64], y: NDArray[np.float64], codes: NDArray[np.integer]) -> None:
    colours = ListedColormap([style.PHASE_COLOURS[phase] for phase in _KINDS])
    norm = BoundaryNorm(np.arange(len(_KINDS) + 1) - 0.5 + int(_KINDS[0]), len(_KINDS))
    panel.pcolormesh(_edges(x), _edges(y), codes, cmap=colours, norm=norm, rasterized=True)


def _fill_numbers(
    panel: Axes,
    x: NDArray[np.float64],
    y: NDArray[np.float64],
    values: NDArray[np.float64],
    everywhere: NDArray[np.float64],
) -> Any:
    """A map of numbers; panels of one row share their scale."""
    finite = everywhere[np.isfinite(everywhere)]
    low, high = (float(finite.min()), float(finite.max())) if finite.size else (0.0, 1.0)
    if low < -1e-12 * max(1.0, abs(high)) and high > 0:
        top = max(-low, high)
        scale: dict[str, Any] = {"cmap": style.BALANCE, "vmin": -top, "vmax": top}
    else:
        scale = {"cmap": style.RAMP, "vmin": low, "vmax": high if high > low else low + 1.0}
    panel.set_facecolor("#efece6")
    return panel.pcolormesh(_edges(x), _edges(y), np.ma.masked_invalid(values), rasterized=True, **scale)


def _hatch(panel: Axes, x: NDArray[np.float64], y: NDArray[np.float64], part: xr.Dataset, axes: list[str]) -> None:
    """Hatch points not to be trusted."""
    bad = _untrusted(part.transpose(axes[1], axes[0], ...))
    if bad.any():
        # Each cell's value at both its edges makes the contour follow the cells and not their centres.
        doubled = np.repeat(np.repeat(bad, 2, axis=0), 2, axis=1).astype(float)
        rows, columns = doubled.shape
        edges_x, edges_y = (np.repeat(_edges(v), 2)[1:-1] for v in (x, y))
        shift_x, shift_y = (
            np.tile([1e-9, -1e-9], n // 2) * np.ptp(e) for n, e in ((columns, edges_x), (rows, edges_y))
        )
        panel.contourf(
            edges_x + shift_x, edges_y + shift_y, doubled,
            levels=[0.5, 1.5], colors="none", hatches=[style.HATCH],
        )  # fmt: skip


def _untrusted(part: xr.Dataset) -> NDArray[np.bool_]:
    """Points to be marked: computed, not to be trusted, and not collapsed (a region that names itself)."""
    status, phase = part["status"].values, part["phase"].values
    return np.asarray((status != -1) & ((status & int(UNTRUSTED)) != 0) & (phase != int(Phase.COLLAPSE)))


def _name_regions(
    figure: Figure, grid: NDArray[Any], columns: list[tuple[xr.Dataset, str]], axes: list[str], caption: Text
) -> None:
    """Write the phases' names into their regions; those too small for words go into a legend."""

    def attempt() -> list[int]:
        small: set[int] = set()
        for j, (part, _) in enumerate(columns):
            panel = grid[0, j]
            across, up = labels.pixel_grid(panel)
            codes = _regions(part).transpose(axes[1], axes[0]).values
            pixels = codes[np.ix_(_cells(part[axes[1]].values, up), _cells(part[axes[0]].values, across))]
            bad = _untrusted(part.transpose(axes[1], axes[0], ...))
            hatched = bad[np.ix_(_cells(part[axes[1]].values, up), _cells(part[axes[0]].values, across))]
            # Names keep clear of hatching; a phase that is hatched all over gets its name on top of it.
            clear = np.where(hatched, _NO_LABEL, pixels)
            left = {
                *labels.place(panel, clear, _WORDS, _COLOURS),
                *(set(np.unique(pixels)) - set(np.unique(clear))),
            }
            covered = np.where(np.isin(pixels, [*left]), pixels, _NO_LABEL)
            small |= set(labels.place(panel, covered, _WORDS, _COLOURS))
        return sorted(small)

    _name_with_legend(figure, [*grid[0]], caption, attempt)


def _name_with_legend(figure: Figure, panels: Sequence[Axes], caption: Text, attempt: Callable[[], list[int]]) -> None:
    """Place names; where some need a legend, make room for it above the caption and place again."""
    words, rows = caption.get_text(), 0
    while True:
        settle(figure)
        small = attempt()
        needed = -(-len(small) // _LEGEND_COLUMNS)
        if needed <= rows:
            break
        for text in [text for panel in panels for text in panel.texts]:
            text.remove()
        rows = needed
        caption.set_text("\n" * 2 * rows + words)
    if small:
        patches = [Patch(facecolor=_COLOURS[code], edgecolor=style.INK, lw=0.5, label=_WORDS[code]) for code in small]
        top = figure.transFigure.inverted().transform((0, caption.get_window_extent().y1))[1]
        legend = figure.legend(
            handles=patches, loc="upper left", bbox_to_anchor=(0.02, float(top)), ncols=_LEGEND_COLUMNS,
            frameon=False, fontsize=style.SMALL_SIZE + 0.5, borderaxespad=0.0, borderpad=0.0,
        )  # fmt: skip
        legend.set_in_layout(False)


def _caption(figure: Figure, dataset: xr.Dataset, held: str) -> Text:
    """Title above, and below in small print what the picture rests on; returns the latter."""
    attributes = dataset.attrs
    facts = [f"{attributes.get('ansatz', 'product')} ansatz", f"{attributes.get('dim', 3)}D"]
    if held:
        facts.append(held)
    status = dataset["status"].values
    if np.any(_untrusted(dataset)):
        facts.append("hatched or crossed: not to be trusted")
    if np.any(status == -1):
        facts.append(f"{int(np.count_nonzero(status == -1))} points not computed yet")
    wide = max(40, math.floor(figure.get_figwidth() * 12))
    title = style.clean(str(attributes.get("title", "")), wide)
    if title:
        figure.suptitle(title, x=0.02, ha="left", size=style.TITLE_SIZE, parse_math=False)
    small = style.clean(", ".join(facts), math.floor(wide * 1.5))
    return figure.supxlabel(small, x=0.02, ha="left", size=style.SMALL_SIZE, color=style.PALE_INK, parse_math=False)
